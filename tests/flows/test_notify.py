import http.server
import json
import sys
import threading

import pytest

from flows.notify import notify
from flows.settings import NotifySettings

OUTCOME = {"outcome": "published_with_refusals", "quarantined": 2}


@pytest.fixture
def listener():
    """An address on loopback and the bodies that arrive there."""
    received = []

    class Handler(http.server.BaseHTTPRequestHandler):
        def do_POST(self):
            received.append(self.rfile.read(int(self.headers["Content-Length"])))
            self.send_response(204 if self.path == "/ok" else 500)
            self.end_headers()

        def log_message(self, *args):
            pass

    with http.server.ThreadingHTTPServer(("127.0.0.1", 0), Handler) as server:
        thread = threading.Thread(target=server.serve_forever)
        thread.start()
        yield f"http://127.0.0.1:{server.server_address[1]}", received
        server.shutdown()
        thread.join()


def test_nothing_is_told_unless_asked():
    """Without a command and without an address nobody is told."""
    assert notify(NotifySettings(), OUTCOME) is None


def test_a_command_gets_the_outcome(tmp_path):
    """The command reads the outcome as JSON on its standard input."""
    script = "import sys, pathlib; pathlib.Path(sys.argv[1]).write_text(sys.stdin.read())"
    command = f"{sys.executable} -c '{script}' {tmp_path / 'told.json'}"
    assert notify(NotifySettings(command=command), OUTCOME) is None
    assert json.loads((tmp_path / "told.json").read_text()) == OUTCOME


def test_a_webhook_gets_the_outcome(listener):
    """The address gets the outcome as JSON."""
    address, received = listener
    assert notify(NotifySettings(webhook=f"{address}/ok"), OUTCOME) is None
    assert json.loads(received[0]) == OUTCOME


@pytest.mark.parametrize(
    "wishes",
    [
        NotifySettings(command="/nowhere/tell-nobody"),
        NotifySettings(command="'unbalanced"),
        NotifySettings(command=f"{sys.executable} -c 'raise SystemExit(3)'"),
        NotifySettings(webhook="http://127.0.0.1:9/none"),
    ],
)
def test_a_message_that_fails_is_said_and_no_more(wishes):
    """A command or an address that does not work gives a sentence, not an error."""
    assert "[notify]" in notify(wishes, OUTCOME)


def test_refusing_address_is_said(listener):
    """An address that answers with an error gives a sentence."""
    assert "[notify] webhook" in notify(NotifySettings(webhook=f"{listener[0]}/broken"), OUTCOME)


def test_good_news_can_be_left_out(listener):
    """With only_trouble a run that published everything is not told, one with refusals is."""
    wishes = NotifySettings(webhook=f"{listener[0]}/ok", only_trouble=True)
    notify(wishes, {"outcome": "published"})
    notify(wishes, {"outcome": "unchanged"})
    assert listener[1] == []
    notify(wishes, OUTCOME)
    assert len(listener[1]) == 1
