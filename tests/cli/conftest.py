import numpy as np
import pandas as pd
import pytest

from portfire.cli import main


@pytest.fixture
def session(tmp_path):
    """Write a small session without structure; return its folder."""
    rng = np.random.default_rng(0)
    folder = tmp_path / "monday"
    folder.mkdir()
    table = pd.DataFrame({"set_s": 10.0 + 3.0 * np.arange(40)})
    table["response_s"] = (table["set_s"] + rng.uniform(0.6, 1.0, 40)).round(4)
    table["context"] = np.where(rng.uniform(size=40) < 0.5, "low", "high")
    table.to_csv(folder / "trials.csv", index=False)
    spikes = pd.DataFrame({"unit": np.repeat(["u1", "u2", "u3"], 1500), "time_s": rng.uniform(5, 135, 4500)})
    spikes.to_csv(folder / "spikes.csv", index=False)
    return folder


@pytest.fixture
def portfire(capsys):
    """Return a runner of the command: exit status, standard output, standard error."""

    def run(*words):
        status = main([str(word) for word in words])
        said = capsys.readouterr()
        return status, said.out, said.err

    return run
