"""A small object store on loopback for tests and benchmarks: the wire of S3, data in memory, faults on demand."""

from __future__ import annotations

import itertools
import logging
import threading
import urllib.request
from collections.abc import Callable, Iterable, Iterator
from contextlib import contextmanager
from typing import Any

BUCKET = "coast"
_REFUSED = b"<?xml version='1.0'?><Error><Code>%s</Code><Message>refused on purpose</Message></Error>"
_READS = ("GET", "HEAD")


class S3Server:
    """A moto server in a thread of this process, between it and the client a gate that can refuse requests."""

    def __init__(self) -> None:
        from moto.server import DomainDispatcherApplication, create_backend_app
        from werkzeug.serving import make_server

        logging.getLogger("werkzeug").setLevel(logging.ERROR)
        self._app: Any = DomainDispatcherApplication(create_backend_app)
        self._refusal: Callable[[str], bytes] = lambda method: b""
        self._server = make_server("127.0.0.1", 0, self._gate, threaded=True)
        self.requests = 0
        threading.Thread(target=self._server.serve_forever, daemon=True).start()
        self.environment = {
            "AWS_ENDPOINT_URL": f"http://127.0.0.1:{self._server.port}",
            "AWS_ACCESS_KEY_ID": "test",
            "AWS_SECRET_ACCESS_KEY": "test",
            "AWS_REGION": "us-east-1",
        }
        made = urllib.request.Request(f"{self.environment['AWS_ENDPOINT_URL']}/{BUCKET}", method="PUT")
        urllib.request.urlopen(made).close()

    def _gate(self, environ: dict[str, Any], start_response: Callable[..., Any]) -> Iterable[bytes]:
        self.requests += 1
        code = self._refusal(environ["REQUEST_METHOD"])
        if not code:
            return self._app(environ, start_response)
        start_response("403 Forbidden" if code == b"AccessDenied" else "503 Slow Down", [])
        return [_REFUSED % code]

    @contextmanager
    def read_only(self) -> Iterator[None]:
        """Refuse every write."""
        with self._refusing_by(lambda method: b"" if method in _READS else b"AccessDenied"):
            yield

    @contextmanager
    def refusing(self, every: int, code: bytes = b"SlowDown") -> Iterator[None]:
        """Refuse every n-th request."""
        number = itertools.count(1)
        with self._refusing_by(lambda method: b"" if next(number) % every else code):
            yield

    @contextmanager
    def _refusing_by(self, refusal: Callable[[str], bytes]) -> Iterator[None]:
        before, self._refusal = self._refusal, refusal
        try:
            yield
        finally:
            self._refusal = before

    def stop(self) -> None:
        """End the server."""
        self._server.shutdown()
