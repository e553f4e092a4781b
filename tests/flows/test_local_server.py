"""The Prefect server that a schedule brings along."""

import pytest

from flows.local_server import ServerError, local_server


def test_a_server_that_cannot_start_is_one_sentence(tmp_path, monkeypatch):
    """Where Prefect finds no place for its database the sentence names the log and the variable to set."""
    (tmp_path / "no-folder").write_text("")
    monkeypatch.setenv("PREFECT_HOME", str(tmp_path / "no-folder" / "prefect"))
    log = tmp_path / "logs" / "prefect-server.log"
    with pytest.raises(ServerError, match=r"did not start; its own words are in .*PREFECT_HOME"), local_server(log):
        pass
    assert log.stat().st_size
