import pytest

from portfire.accounts import SOURCES
from portfire.errors import InputError
from portfire.job import check_job, finite, read_job

WHOLE = """
session = "session/"
out = "fits/myjob"
seed = 7

[columns]
set_s = "cue2_time"

[window]
bin_s = 0.01
before_set_s = 0.3
min_rate_hz = 1

[model]
file = ["linear", "models/mine.toml"]

[compare]
sources = ["context"]
folds = 4
latent_dims = [4, 2]
min_gain = 0

[decode]
cutoffs_s = [0.2, 0.0]
draws = 50

[tests]
level = 0.01
"""


@pytest.fixture
def folder(tmp_path):
    (tmp_path / "session").mkdir()
    (tmp_path / "models").mkdir()
    (tmp_path / "models" / "mine.toml").write_text("")
    return tmp_path


def write(folder, text):
    path = folder / "job.toml"
    path.write_text(text)
    return path


def test_a_bare_session_gets_the_defaults_of_the_interface(folder, monkeypatch):
    monkeypatch.chdir(folder)
    job = read_job("session")
    assert job.sessions == (folder / "session",)
    assert job.out == folder / "fits" / "session"
    assert job.source is None
    settings = job.to_dict()
    assert settings["model"]["file"] == ["linear"]
    # Without a job file, paths start at the out folder.
    assert (settings["session"], settings["out"]) == ("../../session", ".")
    assert {name: settings[name] for name in ("seed", "columns", "window", "compare", "decode", "tests")} == {
        "seed": 0,
        "columns": {},
        "window": {"bin_s": 0.02, "before_set_s": 0.0, "min_rate_hz": 0.5},
        "compare": {
            "sources": ["interval", "context", "trial"],
            "folds": 5,
            "latent_dims": None,
            "min_gain": 0.05,
        },
        "decode": {"cutoffs_s": [0.1, 0.2, 0.3], "draws": 1000},
        "tests": {
            "level": 0.05,
            "thorough": False,
            "bootstrap": 0,
            "assignment": "free",
            "unseen_conditions": False,
        },
    }
    assert finite(settings) == settings


def test_every_key_is_read_and_paths_start_at_the_job_file(folder):
    job = read_job(write(folder, WHOLE))
    assert job.sessions == (folder / "session",)
    assert job.out == folder / "fits" / "myjob"
    assert dict(job.columns) == {"set_s": "cue2_time"}
    assert job.model.names == ("linear", "mine")
    assert job.compare.latent_dims == (2, 4)
    assert job.decode.cutoffs_s == (0.0, 0.2)
    assert (job.seed, job.compare.sources, job.compare.folds, job.decode.draws) == (7, ("context",), 4, 50)
    assert (job.window.bin_s, job.window.before_set_s, job.tests.level) == (0.01, 0.3, 0.01)
    assert isinstance(job.window.min_rate_hz, float)
    assert isinstance(job.compare.min_gain, float)
    settings = job.to_dict()
    assert (settings["session"], settings["out"]) == ("session", "fits/myjob")
    assert settings["model"]["file"] == ["linear", "models/mine.toml"]


def test_out_on_the_command_line_starts_here(folder, monkeypatch, tmp_path_factory):
    here = tmp_path_factory.mktemp("here")
    monkeypatch.chdir(here)
    assert read_job(write(folder, WHOLE), out="there").out == here / "there"


def test_several_sessions(folder):
    (folder / "second.nwb").touch()
    job = read_job(write(folder, 'session = ["session", "second.nwb"]'))
    assert job.sessions == (folder / "session", folder / "second.nwb")
    assert job.out == folder / "fits" / "job"
    assert job.to_dict()["session"] == ["session", "second.nwb"]


def test_a_trailing_slash_does_not_change_the_name(folder, monkeypatch):
    monkeypatch.chdir(folder / "session")
    assert read_job(".").out.name == "session"
    assert read_job(f"{folder}/session/").out.name == "session"


WRONG = [
    ('sesion = "session"', "names no session"),
    ('sessions = "session"', "instead of 'sessions'"),
    ('sesion = "session"', "instead of 'sesion'"),
    ('session = "nowhere"', r"session .*nowhere: does not exist"),
    ('session = "job.toml"', r"job\.toml: is neither a session folder"),
    ('session = ["session", "session"]', r"list of different paths, but is \['session', 'session'\]"),
    ("session = 3", "session must be the path of a session.* but is 3"),
    ("session = []", r"but is \[\]"),
    ('session = "session"\nout = 1', "out must be the path of a folder, but is 1"),
    ('session = "session"\nsead = 1', "unknown key 'sead'; did you mean seed"),
    ('session = "session"\nseed = -1', "seed must be an integer .* but is -1"),
    ('session = "session"\nseed = true', "seed must be an integer .* but is True"),
    ('session = "session"\nseed = 1.0', "but is 1.0"),
    ('session = "session"\nfolds = 5', r"unknown key 'folds'; it belongs as \[compare\] folds"),
    ('session = "session"\nwindow = 0.02', r"window must be a table, \[window\], but is 0.02"),
    ('session = "session"\n[windows]\nbin_s = 0.02', r"unknown table \[windows\]; did you mean \[window\]"),
    ('session = "session"\n[zzz]\na = 1', r"unknown table \[zzz\]; known are \[columns\]"),
    ('session = "session"\n[plan]\ntrials = 1', r"unknown table \[plan\]"),
    ('session = "session"\n[window]\nbins = 0.02', r"unknown key 'bins' in \[window\]; did you mean bin_s"),
    ('session = "session"\n[window]\nlevel = 0.02', r"'level' in \[window\]; it belongs as \[tests\] level"),
    ('session = "session"\n[window]\nbin_s = 0', r"\[window\] bin_s must be .* but is 0"),
    ('session = "session"\n[window]\nbin_s = -0.02', "but is -0.02"),
    ('session = "session"\n[window]\nbin_s = 20', "a number of seconds from 0.001 to 0.5, but is 20"),
    ('session = "session"\n[window]\nbin_s = nan', "but is nan"),
    ('session = "session"\n[window]\nbin_s = "0.02"', "but is '0.02'"),
    ('session = "session"\n[window]\nbefore_set_s = -0.1', r"before_set_s must be .* but is -0.1"),
    ('session = "session"\n[window]\nmin_rate_hz = -1', r"min_rate_hz must be .* but is -1"),
    ('session = "session"\n[window]\nmin_rate_hz = inf', "but is inf"),
    ('session = "session"\n[model]\nfile = "linaer"', r'\[model\] file: .*"linaer".*"linear"'),
    (
        'session = "session"\n[model]\nfile = "no/such.toml"',
        r"\[model\] file: .*no/such\.toml does not",
    ),
    ('session = "session"\n[model]\nfile = []', r"\[model\] file must be .* but is \[\]"),
    ('session = "session"\n[model]\nfile = ["linear", "linear"]', r"but is \['linear', 'linear'\]"),
    ('session = "session"\n[model]\nfile = ["models/mine.toml", "mine.toml"]', "two models called 'mine'"),
    ('session = "session"\n[compare]\nsources = ["intervall"]', "did you mean 'interval' for 'intervall'"),
    ('session = "session"\n[compare]\nsources = "context"', "but is 'context'"),
    ('session = "session"\n[compare]\nsources = ["trial", "trial"]', r"but is \['trial', 'trial'\]"),
    ('session = "session"\n[compare]\nsources = [["trial"]]', r"but is \[\['trial'\]\]"),
    ('session = "session"\n[compare]\nfolds = 1', "folds must be an integer, 2 or more, but is 1"),
    ('session = "session"\n[compare]\nlatent_dims = []', r"latent_dims must be .* but is \[\]"),
    ('session = "session"\n[compare]\nlatent_dims = 3', "latent_dims must be a list .* but is 3"),
    ('session = "session"\n[compare]\nlatent_dims = [0, 2]', r"but is \[0, 2\]"),
    ('session = "session"\n[compare]\nlatent_dims = [2, 2.5]', r"but is \[2, 2.5\]"),
    ('session = "session"\n[compare]\nmin_gain = -0.1', "min_gain must be .* but is -0.1"),
    ('session = "session"\n[decode]\ncutoffs_s = [-0.1]', r"cutoffs_s must be .* but is \[-0.1\]"),
    ('session = "session"\n[decode]\ncutoffs_s = [0.0, 0.1]', "cutoffs_s has 0, before which .* run-up"),
    ('session = "session"\n[decode]\ncutoffs_s = [0.009]', "cutoffs_s has 0.009, before which"),
    (
        'session = "session"\n[decode]\ncutoffs_s = [0.1, 0.101]',
        "0.1 and 0.101, which are the same in",
    ),
    ('session = "session"\n[decode]\ndraws = 0', "draws must be .* but is 0"),
    ('session = "session"\n[tests]\nlevel = 0.0', "level must be a number between 0 and 1, but is 0.0"),
    ('session = "session"\n[tests]\nlevel = 1', "but is 1"),
    ('session = "session"\n[columns]\nset = "cue"', r"unknown key 'set' in \[columns\]; did you mean set_s"),
    (
        'session = "session"\n[columns]\nset_s = 2',
        r"\[columns\] set_s must be .* but is 2",
    ),
    ('session = "session"\n[columns]\nset_s = " "', "but is ' '"),
    ('session = "session"\nout = "session"', "cannot go into the session itself"),
    ("session = session", r"is not valid TOML: .*line 1"),
]


@pytest.mark.parametrize(("text", "message"), WRONG)
def test_what_is_wrong_in_a_job_file_is_named(folder, text, message):
    (folder / "mine.toml").write_text("")
    path = write(folder, text)
    with pytest.raises(InputError, match=message) as caught:
        read_job(path)
    assert "\n" not in str(caught.value)
    if "session itself" not in message:
        assert str(path) in str(caught.value)


def test_a_cutoff_at_the_set_cue_is_allowed_with_a_run_up(folder):
    text = 'session = "session"\n[window]\nbefore_set_s = 0.2\n[decode]\ncutoffs_s = [0]'
    assert read_job(write(folder, text)).decode.cutoffs_s == (0.0,)


def test_contrasts_and_decode_may_be_skipped(folder):
    job = read_job(write(folder, 'session = "session"\n[compare]\nsources = []\n[decode]\ncutoffs_s = []'))
    assert (job.compare.sources, job.decode.cutoffs_s) == ((), ())
    assert read_job(write(folder, 'session = "session"')).compare.sources == SOURCES


def test_paths_that_are_no_job_are_named(folder):
    with pytest.raises(InputError, match=r"sesion: there is no such .* did you mean .*/session\?"):
        read_job(folder / "sesion")
    (folder / "data.csv").touch()
    with pytest.raises(InputError, match=r"data\.csv: is neither a session folder, nor"):
        read_job(folder / "data.csv")
    (folder / "bad.toml").write_bytes(b"seed = \xff")
    with pytest.raises(InputError, match=r"bad\.toml: is not UTF-8 text \(byte 7\)"):
        read_job(folder / "bad.toml")
    (folder / "dir.toml").mkdir()
    with pytest.raises(InputError, match=r"dir\.toml: is a folder"):
        read_job(folder / "dir.toml")


def test_a_job_is_checked_against_the_size_of_its_session(folder):
    job = read_job(write(folder, 'session = "session"\n[compare]\nlatent_dims = [2, 5]'))
    check_job(job, n_units=5, n_trials=20)
    with pytest.raises(InputError, match=r"latent_dims goes up to 5, but the session has 4 usable units"):
        check_job(job, n_units=4, n_trials=20)
    with pytest.raises(InputError, match=r"folds is 5, which needs 20 trials, but the session has 19"):
        check_job(job, n_units=5, n_trials=19)
    two = read_job(write(folder, 'session = "session"\n[compare]\nfolds = 2'))
    check_job(two, n_units=5, n_trials=60)
    with pytest.raises(InputError, match=r"folds is 2, which leaves 0 of the session's 24 usable trials"):
        check_job(two, n_units=5, n_trials=24)


@pytest.mark.parametrize(("n_units", "dims"), [(1, (1,)), (3, (1, 2, 3)), (4, (2, 3, 4)), (60, (2, 3, 4, 5))])
def test_the_default_sizes_suit_the_units(folder, n_units, dims):
    job = read_job(write(folder, 'session = "session"'))
    assert check_job(job, n_units, 20).compare.latent_dims == dims
