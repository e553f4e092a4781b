"""The same pages in a second browser engine, over WebDriver BiDi (W3C), which Firefox speaks by itself."""

from __future__ import annotations

import json
import shutil
import subprocess
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest

PROGRAM = shutil.which("firefox-esr") or shutil.which("firefox")
# Source: WebDriver BiDi, https://www.w3.org/TR/webdriver-bidi/
SCROLL_THROUGH = """(async () => {
  for (let top = 0; top < document.documentElement.scrollHeight; top += 700) {
    scrollTo(0, top);
    await new Promise((done) => setTimeout(done, 60));
  }
  const plots = [...document.querySelectorAll(".plot")];
  for (let turn = 0; turn < 100 && plots.some((plot) => !plot.querySelector("svg")); turn += 1)
    await new Promise((done) => setTimeout(done, 100));
  const { scrollWidth } = document.documentElement;
  return JSON.stringify({ plots: plots.length, drawn: plots.filter((plot) => plot.querySelector("svg")).length, scrollWidth });
})()"""


class Firefox:
    """One window; `complaints` holds all that was logged."""

    def __init__(self, address: str) -> None:
        client = pytest.importorskip("websockets.sync.client", reason="websockets is not installed (extra: test)")
        self._socket = client.connect(f"{address}/session", max_size=None)
        self._number = 0
        self.complaints: list[str] = []
        self.call("session.new", capabilities={})
        self.call("session.subscribe", events=["log.entryAdded"])
        self._window = self.call("browsingContext.getTree")["contexts"][0]["context"]

    def call(self, method: str, **params: Any) -> dict[str, Any]:
        self._number += 1
        self._socket.send(json.dumps({"id": self._number, "method": method, "params": params}))
        while True:
            message = json.loads(self._socket.recv(timeout=120))
            if message.get("method") == "log.entryAdded":
                self.complaints.append(str(message["params"].get("text")))
            elif message.get("id") == self._number:
                assert message["type"] == "success", message
                return message["result"]

    def look_at(self, page: Path, width: int) -> dict[str, int]:
        """Scroll a page through; returns its charts, those that were drawn, and its width."""
        self.call("browsingContext.setViewport", context=self._window, viewport={"width": width, "height": 900})
        self.call("browsingContext.navigate", context=self._window, url=page.as_uri(), wait="complete")
        asked = {"expression": SCROLL_THROUGH, "target": {"context": self._window}, "awaitPromise": True}
        return json.loads(self.call("script.evaluate", **asked)["result"]["value"])


@pytest.fixture(scope="module")
def firefox(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Firefox]:
    if PROGRAM is None:
        pytest.skip("neither firefox-esr nor firefox is installed")
    profile = tmp_path_factory.mktemp("profile")
    asked = [PROGRAM, "--headless", "--no-remote", "--profile", str(profile), "--remote-debugging-port", "0"]
    with subprocess.Popen(asked, stderr=subprocess.PIPE, stdout=subprocess.DEVNULL, text=True) as started:
        try:
            spoken = next((line for line in started.stderr or () if "WebDriver BiDi listening on" in line), "")
            if not spoken:
                pytest.skip("this Firefox does not start or does not speak WebDriver BiDi")
            yield Firefox(spoken.split()[-1])
        finally:
            started.terminate()


@pytest.mark.parametrize("width", [1280, 390])
def test_pages_load_quietly_in_firefox(firefox: Firefox, site: Path, pages: list[str], width: int) -> None:
    """Every chart is drawn, nothing is logged, and no page is wider than its window."""
    for address in pages:
        found = firefox.look_at(site / address, width)
        assert found["drawn"] == found["plots"], address
        assert found["scrollWidth"] <= width, address
    assert firefox.complaints == []
