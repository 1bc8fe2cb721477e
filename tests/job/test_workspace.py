import signal
from io import StringIO
from pathlib import Path

import pytest

from portfire.errors import InputError, PortfireError
from portfire.job import check_out, code_version, open_workspace
from portfire.job._stop import Stop, Stopped, stop_on_signals


def test_one_run_at_a_time_works_in_a_folder(tmp_path):
    again = open_workspace(tmp_path / "out", workers=1, quiet=True)
    first = open_workspace(tmp_path / "out", workers=1, quiet=True)
    with first, pytest.raises(PortfireError, match=r"out: another run is working in this folder"):
        again.__enter__()
    with open_workspace(tmp_path / "out", workers=1, quiet=True):
        pass


def test_what_killed_runs_left_is_cleared_and_logged(tmp_path):
    left = tmp_path / "out" / "fits" / ".unfinished-k-1"
    left.mkdir(parents=True)
    with open_workspace(tmp_path / "out", workers=1, quiet=True):
        assert not left.exists()
    assert "removed .unfinished-k-1" in (tmp_path / "out" / "log.txt").read_text()


def test_an_unexpected_error_goes_to_the_log_whole(tmp_path):
    with pytest.raises(ZeroDivisionError), open_workspace(tmp_path / "out", workers=1, quiet=True):
        _ = 1 / 0
    log = (tmp_path / "out" / "log.txt").read_text()
    assert "Traceback" in log
    assert "ZeroDivisionError" in log


def test_places_where_results_cannot_go_are_named(tmp_path):
    (tmp_path / "file").touch()
    with pytest.raises(InputError, match=r"/file: is a file, but a folder"):
        check_out(tmp_path / "file")
    with pytest.raises(InputError, match=r"/file: is a file, but a folder"):
        check_out(tmp_path / "file" / "sub" / "out")
    with pytest.raises(InputError, match="workers must be 1 or more, but is 0"):
        open_workspace(tmp_path / "out", workers=0).__enter__()


@pytest.mark.skipif(not Path("/proc/self").exists(), reason="needs a folder that nobody may write to")
def test_a_folder_that_cannot_be_written_to_is_named():
    with pytest.raises(InputError, match=r"^/proc/portfire: results cannot be written here \("):
        check_out(Path("/proc/portfire"))


def raise_and_go_on(number, stop):
    signal.raise_signal(number)
    assert stop.asked


@pytest.mark.parametrize("number", [signal.SIGINT, signal.SIGTERM])
def test_a_signal_stops_at_once_but_only_asks_where_it_is_looked_for(number):
    handler = signal.getsignal(number)
    stop = Stop()
    with stop_on_signals(stop):
        with pytest.raises(Stopped, match="resumes"), stop.polled():
            raise_and_go_on(number, stop)
        with pytest.raises(Stopped, match="resumes"):
            signal.raise_signal(number)
        with stop.ending():
            signal.raise_signal(number)
    assert signal.getsignal(number) is handler


def test_the_version_of_the_code_names_release_and_content():
    release, _, digest = code_version().partition("+")
    assert release.count(".") == 2
    assert len(digest) == 8


def test_nothing_is_said_on_standard_output(tmp_path, capsys, monkeypatch):
    monkeypatch.setattr("sys.stderr", StringIO())
    with open_workspace(tmp_path / "out", workers=1) as workspace:
        workspace.progress.say("working")
    assert capsys.readouterr().out == ""
