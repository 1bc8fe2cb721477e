import json
import os
import signal
import subprocess
import sys
import types
from pathlib import Path

import pytest

import portfire as package
from portfire import job, report
from portfire.accounts import Account
from portfire.errors import PortfireError
from portfire.job import Result, write_json_atomic
from portfire.job._stop import Stopped

SOURCE = str(Path(package.__file__).parents[1])
RAW = {
    "accounts": [],
    "contrasts": [
        {"source": "context", "verdict": "sustained", "words": "context pushes until the response"}
    ],
    "decode": [],
}


def run_process(*words, **options):
    return subprocess.run(
        [sys.executable, "-m", "portfire", *map(str, words)],
        env={**os.environ, "PYTHONPATH": SOURCE, **options.pop("env", {})},
        capture_output=True,
        text=True,
        **options,
    )


def expect_one_line(said, message, status):
    """Assert the shape of every error: its status, nothing on standard output, one plain line."""
    found, out, err = said
    assert found == status
    assert out == ""
    assert err.startswith("portfire: ")
    assert err.count("\n") == 1
    assert "Traceback" not in err
    assert message in err


WRONG = [
    ((), "a command is needed: demo, inspect, fit, run, simulate, report"),
    (("rnu",), "'rnu'. Did you mean 'run'"),
    (("plan",), "No such command 'plan'"),
    (("--versoin",), "'--versoin'. Did you mean '--version'"),
    (("run",), "Missing argument 'SESSION_OR_JOB' (try: portfire run --help)"),
    (("run", "{session}", "--worker", "2"), "Did you mean '--workers'"),
    (("run", "{session}", "--workers", "0"), "0 is not in the range"),
    (("run", "{session}", "--workers", "two"), "'two' is not a valid integer"),
    (("run", "{session}", "--scheduler", "tcp://a"), "No such option '--scheduler'"),
    (("run", "{session}", "extra"), "unexpected extra argument (extra)"),
    (("run", "{tmp}/mondy"), "mondy: there is no such file or folder; did you mean {tmp}/monday?"),
    (("run", "{session}", "--out", "{session}"), "cannot go into the session itself"),
    (("run", "{session}", "--out", "{session}/trials.csv/x"), "trials.csv: is a file, but a folder"),
    (("run", "{tmp}/job.toml"), "{tmp}/job.toml: unknown key 'bins' in [window]; did you mean bin_s"),
    (("inspect", "{tmp}/nowhere"), "nowhere"),
    (("inspect", "{tmp}/two.toml"), "names 2 sessions, but this command takes one"),
    (("fit", "{session}", "--out", "{tmp}/f"), "Missing option '--account'"),
    (("fit", "{session}", "--account", "contxt=both", "--out", "{tmp}/f"), "did you mean 'context'"),
    (("fit", "{session}", "--account", "context=bth", "--out", "{tmp}/f"), "did you mean 'both'"),
    (("fit", "{session}", "--account", "context=both", "--model", "linaer", "--out", "{tmp}/f"), '"linear"'),
    (("fit", "{session}", "--account", "context=both", "--out", "{session}"), "into the session itself"),
    (("simulate", "linear"), "Missing option '--out'"),
    (("simulate", "linaer", "--out", "{tmp}/s"), "linaer: there is no such model or fit"),
    (("simulate", "{session}", "--out", "{tmp}/s"), "there is no fit.json here"),
    (("simulate", "linear", "--out", "{tmp}/s", "--trials", "0"), "0 is not in the range"),
    (("simulate", "linear", "--out", "{session}/spikes.csv"), "spikes.csv: is a file, but a folder"),
    (("report", "{tmp}/nowhere"), "nowhere: does not exist"),
    (("report", "{session}"), "holds no result.json"),
    (("demo", "--out", "{session}/spikes.csv"), "spikes.csv: is a file, but a folder"),
    (("demo", "--out", "{session}"), "holds 'spikes.csv' and is no earlier demo"),
    (("demo", "--seed", "-1"), "-1 is not in the range"),
]


@pytest.mark.parametrize(("words", "message"), WRONG)
def test_what_is_wrong_takes_one_line_and_status_2(portfire, session, tmp_path, words, message):
    (tmp_path / "job.toml").write_text('session = "monday"\n[window]\nbins = 0.02\n')
    (tmp_path / "other").mkdir()
    (tmp_path / "two.toml").write_text('session = ["monday", "other"]\n')
    places = {"session": session, "tmp": tmp_path}
    said = portfire(*(word.format(**places) for word in words))
    expect_one_line(said, message.format(**places), 2)


def test_help_lists_what_there_is(portfire):
    status, out, err = portfire("--help")
    assert (status, err) == (0, "")
    listed = [line.split()[0] for line in out.split("Commands:")[1].splitlines() if line.strip()]
    assert listed == ["demo", "inspect", "fit", "run", "simulate", "report"]
    for command in listed:
        status, out, err = portfire(command, "--help")
        assert (status, err) == (0, "")
        assert out.startswith(f"Usage: portfire {command} ")


def test_version(portfire):
    assert portfire("--version") == (0, f"portfire {package.__version__}\n", "")


def test_inspect_prints_text_or_json(portfire, session, tmp_path):
    status, out, _ = portfire("inspect", session)
    assert status == 0
    assert "40" in out
    status, out, _ = portfire("inspect", session, "--json")
    found = json.loads(out, parse_constant=lambda word: pytest.fail(f"{word} is no JSON"))
    assert status == 0
    assert found["session"]["digest"].startswith("sha256:")
    (tmp_path / "job.toml").write_text('session = "monday"\n[window]\nmin_rate_hz = 1e6\n')
    expect_one_line(portfire("inspect", tmp_path / "job.toml"), "1e+06 spikes/s", 2)


@pytest.fixture
def quick_job(monkeypatch):
    """Put a job without computation in place of the real one; return what it was asked."""
    asked = []

    def run(wanted, workers=None, quiet=False):
        asked.append((wanted, workers, quiet))
        return Result(wanted.out, RAW)

    monkeypatch.setattr(job, "run", run)
    monkeypatch.setattr(report, "draw_report", lambda folder: asked.append(folder))
    return asked


def test_run_does_the_job_and_draws_the_report(portfire, session, tmp_path, quick_job):
    status, out, err = portfire("run", session, "--out", tmp_path / "o", "--workers", 3, "--quiet")
    (wanted, workers, quiet), drawn = quick_job
    assert (status, err) == (0, "")
    assert wanted.sessions == (session,)
    assert (workers, quiet) == (3, True)
    assert wanted.out == drawn == tmp_path / "o"
    assert out.splitlines() == [
        "context: context pushes until the response",
        f"results: {tmp_path}/o/result.json",
        f"report: {tmp_path}/o/report.html",
    ]


def test_every_session_of_a_job_gets_its_report(portfire, session, tmp_path, quick_job, monkeypatch):
    rows = [{"session": name, "folder": name} for name in ("monday", "other")]
    monkeypatch.setattr(job, "run", lambda wanted, **_: Result(wanted.out, {**RAW, "sessions": rows}))
    assert portfire("run", session, "--out", tmp_path / "o")[0] == 0
    assert quick_job == [tmp_path / "o" / "monday", tmp_path / "o" / "other", tmp_path / "o"]


def test_demo_makes_its_session_and_a_job_file_to_copy(portfire, tmp_path, quick_job, monkeypatch):
    simulate = types.ModuleType("portfire.simulate")
    simulate.write_demo_session = lambda out, seed: Path(out).mkdir()
    monkeypatch.setitem(sys.modules, "portfire.simulate", simulate)
    status, out, err = portfire("demo", "--out", tmp_path / "demo", "--seed", 4)
    assert (status, err) == (0, "")
    wanted = quick_job[0][0]
    assert (wanted.sessions, wanted.out) == ((tmp_path / "demo" / "session",), tmp_path / "demo")
    assert wanted.seed == 4
    assert (tmp_path / "demo" / "job.toml").is_file()
    assert "report.html" in out


def test_demo_leaves_the_job_of_somebody_else_alone(portfire, tmp_path):
    (tmp_path / "job.toml").write_text('session = "monday"\n')
    expect_one_line(portfire("demo", "--out", tmp_path), "holds 'job.toml' and is no earlier demo", 2)
    assert (tmp_path / "job.toml").read_text() == 'session = "monday"\n'


def test_simulate_passes_on_what_was_asked(portfire, tmp_path, monkeypatch):
    asked = []
    simulate = types.ModuleType("portfire.simulate")
    simulate.simulate_session = lambda *words, **named: asked.append((words, named))
    monkeypatch.setitem(sys.modules, "portfire.simulate", simulate)
    words = (
        "linear",
        "--out",
        tmp_path / "s",
        "--trials",
        20,
        "--units",
        5,
        "--account",
        "trial=both",
        "--seed",
        3,
    )
    assert portfire("simulate", *words) == (0, f"session: {tmp_path}/s\n", "")
    named = {"n_trials": 20, "n_units": 5, "account": Account.parse("trial=both"), "seed": 3}
    assert asked == [(("linear", tmp_path / "s"), named)]


def test_report_is_drawn_again(portfire, tmp_path, monkeypatch):
    drawn = []
    monkeypatch.setattr(report, "draw_report", drawn.append)
    write_json_atomic(tmp_path / "result.json", RAW)
    assert portfire("report", tmp_path) == (0, f"report: {tmp_path}/report.html\n", "")
    assert drawn == [tmp_path]


def fail_with(error):
    def run(*_, **__):
        raise error

    return run


@pytest.mark.parametrize(
    ("error", "message"),
    [
        (PortfireError("fold 2 failed: no step helps"), "fold 2 failed: no step helps"),
        (OSError(28, "No space left on device", "/data/x"), "/data/x: No space left on device"),
        (MemoryError(), "not enough memory"),
        (Stopped(), "Stopped; the same command resumes"),
        (
            ZeroDivisionError("of\nzero"),
            "An unexpected error, ZeroDivisionError: of zero (test_commands.py, line",
        ),
    ],
)
def test_a_job_that_fails_takes_one_line_and_status_1(portfire, session, monkeypatch, error, message):
    monkeypatch.setattr(job, "run", fail_with(error))
    expect_one_line(portfire("run", session), message, 1)


@pytest.mark.parametrize("number", [signal.SIGINT, signal.SIGTERM])
def test_a_signal_outside_the_fits_ends_the_command_as_well(portfire, tmp_path, monkeypatch, number):
    monkeypatch.setattr(report, "draw_report", lambda folder: signal.raise_signal(number))
    write_json_atomic(tmp_path / "result.json", RAW)
    expect_one_line(portfire("report", tmp_path), "Stopped", 1)


def test_the_whole_traceback_is_shown_on_request(portfire, session, monkeypatch):
    monkeypatch.setattr(job, "run", fail_with(ZeroDivisionError()))
    monkeypatch.setenv("PORTFIRE_TRACEBACK", "1")
    with pytest.raises(ZeroDivisionError):
        portfire("run", session)


def test_a_reader_that_leaves_early_is_no_error(session):
    command = f"'{sys.executable}' -m portfire inspect '{session}' | true; echo ${{PIPESTATUS[0]}}"
    done = subprocess.run(
        ["bash", "-c", command], env={**os.environ, "PYTHONPATH": SOURCE}, capture_output=True, text=True
    )
    assert (done.stdout, done.stderr) == ("0\n", "")


def test_the_module_is_the_command(tmp_path):
    done = run_process("run", "nowhere", cwd=tmp_path)
    expect_one_line(
        (done.returncode, done.stdout, done.stderr), "nowhere: there is no such file or folder", 2
    )
