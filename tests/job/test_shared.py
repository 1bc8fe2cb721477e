from dataclasses import fields

import numpy as np
import pandas as pd
import pytest

from portfire.errors import PortfireError
from portfire.job import read_trials, write_trials
from portfire.session import Session


def make_trials(seed=0, with_context=True):
    rng = np.random.default_rng(seed)
    table = pd.DataFrame({"set_s": 10.0 + 3.0 * np.arange(12)})
    table["response_s"] = table["set_s"] + rng.uniform(0.6, 1.0, 12)
    if with_context:
        table["context"] = ["low", "high"] * 6
        table["sample_s"] = np.tile([0.5, 0.5, 0.7, 0.7], 3)
    spikes = {f"u{i}": np.sort(rng.uniform(9, 47, 400)) for i in range(3)}
    return Session.from_arrays(spikes, table).bin(before_set_s=0.1)


@pytest.mark.parametrize("with_context", [True, False])
def test_trials_come_back_as_they_were(tmp_path, with_context):
    trials = make_trials(with_context=with_context)[2:9]
    found = read_trials(write_trials(tmp_path, trials))
    for field in fields(trials):
        before, after = getattr(trials, field.name), getattr(found, field.name)
        if isinstance(before, np.ndarray):
            np.testing.assert_array_equal(after, before)
            assert after.dtype == before.dtype
            assert not after.flags.writeable
        else:
            assert after == before
            assert type(after) is type(before)


def test_the_same_trials_are_written_once_and_others_elsewhere(tmp_path):
    path = write_trials(tmp_path, make_trials())
    written = (path / "arrays.npz").stat().st_mtime_ns
    assert write_trials(tmp_path, make_trials()) == path
    assert (path / "arrays.npz").stat().st_mtime_ns == written
    assert write_trials(tmp_path, make_trials(seed=1)) != path
    assert write_trials(tmp_path, make_trials()[:5]) != path


def test_damaged_trials_are_not_read(tmp_path):
    path = write_trials(tmp_path, make_trials())
    content = (path / "arrays.npz").read_bytes()
    (path / "arrays.npz").write_bytes(content[:-100] + bytes(100))
    with pytest.raises(PortfireError, match=r"arrays\.npz: does not match its checksum"):
        read_trials(path)
