"""What lies in the inbox: sets, waiting, links, names, quarantine and retry."""

import os
import time
from pathlib import Path

import pytest

from flows.arrivals.inbox import look
from flows.arrivals.privacy import shown_name, without_words
from flows.arrivals.quarantine import retry
from flows.settings import InboxSettings

HEADER = "{0} 2 250 4\n{0}.dat 16 200 16 0 0 0 0 II\n{0}b.dat 16 200 16 0 0 0 0 V1\n"


@pytest.fixture
def inbox(tmp_path) -> Path:
    """An empty inbox."""
    folder = tmp_path / "inbox"
    folder.mkdir()
    return folder


def seen(inbox, now_s=None, **settings):
    """Candidates as {name: (other files, problem code)}."""
    candidates = look(inbox, InboxSettings(**settings), time.time() if now_s is None else now_s)
    return {
        each.name: (
            sorted(path.name for path in (*each.files[1:], *each.companions)),
            each.problem.code if each.problem else None,
        )
        for each in candidates
    }


def test_a_header_gathers_its_files_and_companions(inbox):
    """A WFDB header, its signal files and annotations are one delivery; another file stands alone."""
    (inbox / "a.hea").write_text(HEADER.format("a"))
    for name in ("a.dat", "ab.dat", "a.atr"):
        (inbox / name).write_bytes(bytes([1, 2, 3, 4] * 4))
    (inbox / "other.edf").write_bytes(b"x")
    assert seen(inbox) == {"a.hea": (["a.atr", "a.dat", "ab.dat"], None), "other.edf": ([], None)}


def test_missing_parts_are_waited_for_and_then_refused(inbox):
    """A set without a part, and a signal file without a header, wait; after the waiting time they are refused."""
    (inbox / "a.hea").write_text(HEADER.format("a"))
    (inbox / "a.dat").write_bytes(bytes(8))
    (inbox / "z.dat").write_bytes(b"\1\2\3")
    assert seen(inbox) == {
        "a.hea": (["a.dat"], "waiting_for_missing_part"),
        "z.dat": ([], "waiting_for_missing_part"),
    }
    assert {code for _, code in seen(inbox, time.time() + 25 * 3600).values()} == {"part_missing"}


def test_header_that_points_outside_claims_nothing(inbox):
    """A header that names a file elsewhere is refused alone and touches no other file."""
    (inbox / "a.hea").write_text("a 1 250 4\n../b.dat 16 200 16 0 0 0 0 II\n")
    (inbox / "b.edf").write_bytes(b"x")
    assert seen(inbox) == {"a.hea": ([], "file_name_points_outside"), "b.edf": ([], None)}


def test_quiet_time_and_done_marker(inbox):
    """A file that changed just now waits when a quiet time is set, and one without its marker when markers are used."""
    (inbox / "a.edf").write_bytes(b"x")
    assert seen(inbox, quiet_s=60.0) == {"a.edf": ([], "still_being_written")}
    assert seen(inbox, time.time() + 61, quiet_s=60.0) == {"a.edf": ([], None)}
    assert seen(inbox, done_marker=".done") == {"a.edf": ([], "still_being_written")}
    (inbox / "a.edf.done").touch()
    assert seen(inbox, done_marker=".done") == {"a.edf": (["a.edf.done"], None)}


def test_links_pipes_and_hidden_files(inbox, tmp_path):
    """Links and pipes are refused without being followed or opened; hidden files are not deliveries."""
    outside = tmp_path / "outside"
    outside.mkdir()
    (outside / "secret.edf").write_bytes(b"x")
    (inbox / "link.edf").symlink_to(outside / "secret.edf")
    (inbox / "folder").symlink_to(outside)
    os.mkfifo(inbox / "pipe.edf")
    (inbox / ".partial.edf").write_bytes(b"x")
    assert seen(inbox) == dict.fromkeys(["folder", "link.edf", "pipe.edf"], ([], "not_a_plain_file"))


def test_a_link_goes_to_quarantine_and_its_target_stays(programme, tmp_path):
    """A link that leads out of the folder is moved as a link; what it points to is not touched."""
    target = tmp_path / "elsewhere.edf"
    target.write_bytes(b"x")
    (programme.inbox / "1.edf").symlink_to(target)
    programme.run()
    assert programme.deliveries() == {"1.edf": ("quarantined", "not_a_plain_file")}
    assert (programme.quarantine / "1.edf").is_symlink()
    assert target.read_bytes() == b"x"
    assert list(programme.inbox.iterdir()) == []


def test_quarantine_keeps_the_file_whole_with_its_reason(programme):
    """A refused file lies in quarantine byte for byte, with code, sentence and the command to try again."""
    programme.deliver("7.edf", b"rubbish")
    assert programme.run().quarantined == 1
    assert (programme.quarantine / "7.edf").read_bytes() == b"rubbish"
    reason = (programme.quarantine / "7.edf.reason.txt").read_text()
    assert reason.startswith("unknown_format\n")
    assert "burdenline retry DIR 7.edf" in reason
    assert programme.run().changed is False


def test_retry_after_a_fix_of_the_settings(programme, make_edf):
    """A file refused for its missing scale is taken after the scale is set and the file retried."""
    programme.deliver("SRL-1001.edf", make_edf(physical=("1", "1")))
    programme.run()
    assert programme.deliveries() == {"SRL-1001.edf": ("quarantined", "amplitude_scale_missing")}
    (programme.folder / "programme.toml").write_text("[site]\nmv_per_count = 0.005\n")
    retry(programme.folder, "SRL-1001.edf")
    assert list(programme.quarantine.iterdir()) == []
    assert programme.run().accepted == 1
    assert programme.deliveries() == {"SRL-1001.edf": ("accepted", None)}


def test_retry_never_covers_a_newer_file(programme):
    """A file that was delivered again under the name of a refused one stays as it is."""
    programme.deliver("7.edf", b"first")
    programme.run()
    programme.deliver("7.edf", b"second")
    with pytest.raises(FileExistsError):
        retry(programme.folder, "7.edf")
    assert (programme.inbox / "7.edf").read_bytes() == b"second"
    assert (programme.quarantine / "7.edf").read_bytes() == b"first"


@pytest.mark.parametrize("name", ["nothing.edf", "../inbox/a.edf", "a.edf.reason.txt"])
def test_retry_of_what_is_not_there(programme, name):
    """Retry takes names of the quarantine folder only."""
    programme.deliver("a.edf", b"x")
    with pytest.raises(FileNotFoundError):
        retry(programme.folder, name)


def test_two_refused_files_of_one_name(programme):
    """A second refused file of the same name does not replace the first."""
    for content in (b"first", b"second"):
        programme.deliver("7.edf", content)
        programme.run()
    contents = {path.read_bytes() for path in programme.quarantine.iterdir() if path.suffix != ".txt"}
    assert contents == {b"first", b"second"}


def test_a_set_with_a_telling_name_is_quarantined_as_one_archive(programme):
    """A refused set whose names might name a person becomes one archive, and nothing of it stays behind."""
    programme.deliver("doe.hea", b"doe 1 250 4\ndoe.dat 16 0 16 0 0 0 0 II\n")
    programme.deliver("doe.dat", bytes(8))
    programme.run()
    names = sorted(path.name for path in programme.quarantine.iterdir())
    assert len(names) == 2
    assert all("doe" not in name for name in names)
    assert names[0].endswith(".zip")
    assert list(programme.inbox.iterdir()) == []


def test_accepted_files_are_removed_when_the_settings_say_so(make_programme, make_edf):
    """With accepted_files = remove the inbox is empty after the run, and nothing is lost."""
    programme = make_programme("p", toml='[inbox]\naccepted_files = "remove"\n')
    programme.deliver("sub/SRL-1001.edf", make_edf())
    programme.run()
    assert list(programme.inbox.iterdir()) == []
    before = programme.state()
    assert programme.run().changed is False
    assert programme.state() == before


def test_done_markers_go_with_their_file(make_programme, make_edf):
    """A marker leaves the inbox with the delivery it stands for."""
    programme = make_programme("p", toml='[inbox]\naccepted_files = "remove"\ndone_marker = ".ok"\n')
    programme.deliver("SRL-1001.edf", make_edf())
    programme.run()
    assert programme.deliveries() == {"SRL-1001.edf": ("waiting", "still_being_written")}
    programme.deliver("SRL-1001.ok", b"")
    assert programme.run().accepted == 1
    assert list(programme.inbox.iterdir()) == []


def test_a_waiting_file_that_goes_away_is_forgotten(programme, make_edf):
    """A delivery that waited leaves no row when its file is taken out of the inbox."""
    path = programme.deliver("SRL-9.edf", make_edf(recording="Startdate 01-MAR-2026 X X SRL-9"))
    programme.run()
    path.unlink()
    assert programme.run().waiting == 0
    assert programme.deliveries() == {}


def test_an_open_record_count_waits_until_two_runs_find_it_unchanged(programme, make_edf):
    """A file that says it is still recorded waits while it grows and is taken with a finding when it stopped."""
    programme.deliver("SRL-1001.edf", make_edf(n_records="-1")[: 256 * 2 + 500 * 20])
    programme.run()
    programme.deliver("SRL-1001.edf", make_edf(n_records="-1")[: 256 * 2 + 500 * 40], minute=1)
    programme.run()
    assert programme.deliveries() == {"SRL-1001.edf": ("waiting", "still_being_written")}
    programme.deliver("SRL-1001.edf", make_edf(), minute=2)
    assert programme.run().accepted == 1
    (row,) = programme.rows("deliveries")
    assert row["findings"] is None


@pytest.mark.parametrize(
    ("name", "shown"),
    [
        ("SRL-1001_20260301.edf", "SRL-1001_20260301.edf"),
        ("SRL1001.EDF", "SRL1001.EDF"),
        ("2026/03/01T083000.edf", "2026/03/01T083000.edf"),
        ("Jane Doe.edf", "delivery-01234567.edf"),
        ("SRL-1001_doe.edf", "SRL-1001-01234567.edf"),
        ("doe/1.edf", "delivery-01234567.edf"),
        ("1.Doe", "delivery-01234567"),
        ("müller.csv.gz", "delivery-01234567.csv.gz"),
    ],
)
def test_file_names_are_shown_only_when_made_of_codes(name, shown):
    """A name of register codes and numbers is shown, any other is masked."""
    assert shown_name(name, "0123456789abcdef", {"SRL-1001", "P-0001"}) == shown


def test_words_of_the_person_are_masked_in_marks():
    """Words of the patient field are dropped from diary text, in any case."""
    assert without_words("JANE felt faint", {"Jane_Doe", "X"}) == "— felt faint"


@pytest.mark.parametrize("mtime_s", [-5, 10**12])
def test_impossible_file_times_do_no_harm(programme, make_edf, mtime_s):
    """A modification time before 1970 or far ahead is held at the ends of the calendar."""
    os.utime(programme.deliver("SRL-1001.edf", make_edf()), (mtime_s, mtime_s))
    assert programme.run().accepted == 1


def test_a_file_that_cannot_be_read_waits(programme, make_edf, monkeypatch):
    """A read error leaves the delivery in the inbox with a clear word; the others are taken."""
    from flows.arrivals import staging

    real = staging._copied

    def broken(path, *args):
        if path.name == "1.edf":
            raise staging.Waits("not_readable", "the file could not be read to its end.")
        return real(path, *args)

    monkeypatch.setattr(staging, "_copied", broken)
    programme.deliver("1.edf", make_edf())
    programme.deliver("SRL-1001.edf", make_edf(), minute=1)
    programme.run()
    assert programme.deliveries() == {"1.edf": ("waiting", "not_readable"), "SRL-1001.edf": ("accepted", None)}
