"""Tell somebody how a run ended: a command that gets the outcome as JSON on its standard input, or a webhook.

Nothing is sent unless programme.toml names a command or an address. A message that cannot be delivered never fails the
run that it is about.
"""

from __future__ import annotations

import json
import shlex
import subprocess
import urllib.error
import urllib.request
from collections.abc import Mapping
from typing import Any

from flows.settings import NotifySettings

TIMEOUT_S = 30.0


def notify(settings: NotifySettings, message: Mapping[str, Any]) -> str | None:
    """Deliver one message as the settings say; returns in one sentence why it could not be delivered, or None."""
    if settings.only_trouble and message["outcome"] in ("published", "unchanged"):
        return None
    text = json.dumps(dict(message)).encode()
    failures = [_by_command(settings.command, text), _by_webhook(settings.webhook, text)]
    return "; ".join(failure for failure in failures if failure) or None


def _by_command(command: str, text: bytes) -> str | None:
    if not command:
        return None
    try:
        done = subprocess.run(shlex.split(command), input=text, capture_output=True, timeout=TIMEOUT_S, check=False)
    except (OSError, ValueError, subprocess.TimeoutExpired) as problem:
        return f"[notify] command could not run: {problem}"
    return f"[notify] command ended with exit code {done.returncode}" if done.returncode else None


def _by_webhook(address: str, text: bytes) -> str | None:
    if not address:
        return None
    request = urllib.request.Request(address, data=text, headers={"Content-Type": "application/json"})
    try:
        with urllib.request.urlopen(request, timeout=TIMEOUT_S):
            return None
    except (urllib.error.URLError, OSError, ValueError) as problem:
        return f"[notify] webhook did not take the message: {problem}"
