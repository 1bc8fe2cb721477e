import re
from io import StringIO

import pytest

from portfire.job._progress import Progress, format_seconds


class Terminal(StringIO):
    def isatty(self):
        return True


class ClosedPipe(StringIO):
    def write(self, text):
        raise BrokenPipeError


def finish_some(progress):
    progress.plan("choose size", 4)
    for key in "abcd":
        progress.expect("choose size", key)
    progress.finish("choose size", "a", "fit a", reused=True)
    for key in "bc":
        progress.finish("choose size", key, f"fit {key}", seconds=10.0, numbers={"loglik": -12.25})


def test_plain_lines_come_seldom_where_there_is_no_terminal(tmp_path):
    stream = StringIO()
    with Progress(tmp_path / "log.txt", stream=stream) as progress:
        finish_some(progress)
    assert stream.getvalue() == "choose size: 0/4 fits\n"


def test_the_log_has_every_fit_with_its_time(tmp_path):
    with Progress(tmp_path / "log.txt", quiet=True, stream=StringIO()) as progress:
        finish_some(progress)
        progress.warn("a unit fires in bursts")
    lines = (tmp_path / "log.txt").read_text().splitlines()
    assert all(re.match(r"\d{4}-\d\d-\d\d \d\d:\d\d:\d\d\.\d{3}  ", line) for line in lines)
    assert [line.split("  ", 1)[1] for line in lines] == [
        "choose size: fit a was there",
        "choose size: fit b done in 10.0 s, loglik -12.25",
        "choose size: fit c done in 10.0 s, loglik -12.25",
        "warning: a unit fires in bursts",
    ]


def test_quiet_still_warns():
    stream = StringIO()
    with Progress(quiet=True, stream=stream) as progress:
        finish_some(progress)
        progress.say("all is well")
        progress.warn("a unit fires in bursts")
    assert stream.getvalue() == "warning: a unit fires in bursts\n"


def test_time_left_counts_what_is_known_and_who_works():
    progress = Progress(quiet=True, n_workers=2)
    assert progress.seconds_left() is None
    finish_some(progress)
    assert progress.seconds_left() == pytest.approx(10 / 2)
    progress.plan("contrasts", 6)
    assert progress.seconds_left() == pytest.approx((10 + 6 * 10) / 2)
    progress.finish("contrasts", "x", "fit x", seconds=1.0)
    assert progress.seconds_left() == pytest.approx((10 + 5 * 1) / 2)


def test_bars_on_a_terminal_show_stage_and_fits_and_keep_brackets(tmp_path):
    stream = Terminal()
    with Progress(stream=stream) as progress:
        finish_some(progress)
        progress.warn("unit [red]7[/red]")
    text = stream.getvalue()
    assert "choose size" in text
    assert "3/4" in text
    assert "10 s left" in text
    assert "unit [red]7[/red]" in text


def test_a_reader_that_has_gone_does_not_end_the_job(tmp_path):
    with Progress(tmp_path / "log.txt", stream=ClosedPipe()) as progress:
        finish_some(progress)
        progress.say("still working")
    assert "still working" in (tmp_path / "log.txt").read_text()


@pytest.mark.parametrize(
    ("seconds", "text"), [(0.2, "0 s"), (59.6, "1 min 0 s"), (125, "2 min 5 s"), (4800, "1 h 20 min")]
)
def test_durations_read_as_a_person_would_say_them(seconds, text):
    assert format_seconds(seconds) == text
