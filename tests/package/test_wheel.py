"""The wheel, installed outside the checkout, carries all that it needs, and runs the demo."""

from __future__ import annotations

import json
import os
import re
import subprocess
import sys
import sysconfig
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import pandas as pd
import pytest
import xarray as xr

from .._thorough import OF_THOROUGH_RUNS

# What the demo session is made with.
TRUTH = {"interval": "sustained", "context": "initial", "trial": "initial"}


def environment(**extra: str) -> dict[str, str]:
    """This process's environment less what could lead an import back to the checkout."""
    return {name: value for name, value in os.environ.items() if not name.startswith("PYTHON")} | extra


def run(*command: object, **kwargs: Any) -> subprocess.CompletedProcess[str]:
    words = [str(word) for word in command]
    done = subprocess.run(words, capture_output=True, text=True, stdin=subprocess.DEVNULL, **kwargs)
    said = f"{done.stdout}{done.stderr}"
    assert done.returncode == 0, f"{' '.join(words)} ended with {done.returncode}:\n{said}"
    return done


@dataclass(frozen=True)
class Installed:
    python: Path
    command: Path
    packages: Path


@pytest.fixture(scope="module")
def installed(checkout: Path, tmp_path_factory: pytest.TempPathFactory) -> Installed:
    """A new environment with the wheel in it; what the wheel needs is borrowed from this one."""
    folder = tmp_path_factory.mktemp("wheel")
    pip = (sys.executable, "-m", "pip", "--disable-pip-version-check")
    run(*pip, "wheel", "--no-deps", "--no-build-isolation", "--wheel-dir", folder, checkout)
    (wheel,) = folder.glob("portfire-*.whl")
    run(sys.executable, "-m", "venv", "--without-pip", folder / "venv")
    python = folder / "venv" / "bin" / "python"
    run(*pip, "--python", python, "install", "--no-deps", "--no-index", wheel)
    asked = run(python, "-c", "import sysconfig; print(sysconfig.get_path('purelib'))")
    packages = Path(asked.stdout.strip())
    # A folder that a .pth file adds has its own .pth files left unread: an editable install stays unseen.
    borrowed = {sysconfig.get_path("purelib"), sysconfig.get_path("platlib")}
    (packages / "borrowed.pth").write_text("\n".join(sorted(borrowed)) + "\n")
    return Installed(python, python.with_name("portfire"), packages)


@dataclass(frozen=True)
class Demo:
    folder: Path
    result: dict[str, Any]


@pytest.fixture(scope="module")
def demo(installed: Installed, tmp_path_factory: pytest.TempPathFactory) -> Demo:
    folder = tmp_path_factory.mktemp("demo")
    out = folder / "out"
    cold = environment(XDG_CACHE_HOME=str(folder / "cache"))
    run(installed.command, "demo", "--out", out, cwd=folder, env=cold, timeout=900)
    return Demo(out, json.loads((out / "result.json").read_text(encoding="utf-8"), parse_constant=refuse))


def refuse(constant: str) -> float:
    raise ValueError(f"result.json holds {constant}, which is not JSON")


def test_the_installed_package_is_the_wheels(installed: Installed, tmp_path: Path) -> None:
    done = run(
        installed.python,
        "-c",
        "import portfire; print(portfire.__file__)",
        cwd=tmp_path,
        env=environment(),
    )
    assert Path(done.stdout.strip()).is_relative_to(installed.packages)


def test_the_wheel_carries_every_model_file(checkout: Path, installed: Installed, tmp_path: Path) -> None:
    program = "from portfire.dynamics._models import *; print(*map(find_model, shipped_models()), sep='\\n')"
    done = run(installed.python, "-c", program, cwd=tmp_path, env=environment())
    found = {Path(line).name: Path(line).read_bytes() for line in done.stdout.splitlines()}
    assert found == {path.name: path.read_bytes() for path in (checkout / "models").glob("*.toml")}


def test_the_wheel_carries_every_source_file(checkout: Path, installed: Installed) -> None:
    def files(top: Path) -> set[Path]:
        return {
            path.relative_to(top)
            for path in top.rglob("*")
            if path.is_file() and "__pycache__" not in path.parts and "_models" not in path.parts
        }

    assert files(installed.packages / "portfire") == files(checkout / "src" / "portfire")


@pytest.mark.slow_demo
def test_the_demo_leaves_what_a_run_leaves(demo: Demo) -> None:
    names = {path.name for path in demo.folder.iterdir()}
    expected = {"result.json", "report.html", "figures", "log.txt", "fits", "latents.nc", "rates.nc"}
    tables = {"scores.parquet", "decode.parquet", "trials.parquet"}
    assert expected | tables <= names
    figures = list((demo.folder / "figures").glob("*.svg"))
    assert figures
    for figure in figures:
        assert "<svg" in figure.read_text(encoding="utf-8")
    fits = [path for path in (demo.folder / "fits").iterdir() if not path.name.startswith(".")]
    assert fits
    for fit in fits:
        assert {"fit.json", "arrays.npz"} <= {path.name for path in fit.iterdir()}


@pytest.mark.slow_demo
def test_the_demo_finds_its_truth_or_says_that_it_cannot(demo: Demo) -> None:
    verdicts = {row["source"]: row["verdict"] for row in demo.result["contrasts"]}
    assert verdicts.keys() == TRUTH.keys()
    wrong = {s: v for s, v in verdicts.items() if v not in (TRUTH[s], "undetermined")}
    assert not wrong


@pytest.mark.slow_demo
def test_the_demo_page_needs_nothing_from_outside(demo: Demo) -> None:
    page = (demo.folder / "report.html").read_text(encoding="utf-8")
    for reference in ('src="http', "src='http", 'src="//', "<link", "@import", "url(http"):
        assert reference not in page


@pytest.mark.slow_demo
def test_every_key_and_column_is_explained(demo: Demo, checkout: Path) -> None:
    text = (checkout / "docs" / "result.md").read_text(encoding="utf-8")
    names = names_of(demo.folder, demo.result)
    unexplained = sorted(name for name in names if f"`{name}`" not in text)
    assert not unexplained, f"not in docs/result.md: {unexplained}"


@pytest.mark.slow_demo
def test_every_name_that_is_explained_is_there(demo: Demo, checkout: Path) -> None:
    text = (checkout / "docs" / "result.md").read_text(encoding="utf-8")
    left = names_of(demo.folder, demo.result)
    missing = sorted(explained_names(text) - left - OF_OTHER_RUNS - OF_THOROUGH_RUNS)
    assert not missing, f"in docs/result.md, but not in what the demo left: {missing}"


def names_of(folder: Path, result: dict[str, Any]) -> set[str]:
    """Every key, column, variable and dimension that a run left."""
    names = set(keys_of(result))
    for table in folder.glob("*.parquet"):
        names |= {str(column) for column in pd.read_parquet(table).columns}
    for cube in folder.glob("*.nc"):
        with xr.open_dataset(cube, engine="h5netcdf") as dataset:
            names |= {str(name) for name in (*dataset.variables, *dataset.dims)}
    return names


def explained_names(text: str) -> set[str]:
    """Names in the first column of every table."""
    rows = [line.split("|")[1] for line in text.splitlines() if line.startswith("| `")]
    return {name for row in rows for name in re.findall("`([^`]+)`", row)}


# The demo has one session, and every verdict may be a sure one.
OF_OTHER_RUNS = {
    *("open", "sessions", "absent", "bootstrap", "statistic", "p_at_bound"),
    *("refits", "refits_mean_score", "refits_mean_lr", "less_full", "less_full_se", "by_condition"),
}
# Keys below these are labels of the data or of other software, or are explained where the job file is.
OPEN_KEYS = {"units_left_out", "trials_left_out", "settings", "versions", "at_dims", "ends_nats"}


def keys_of(value: Any) -> list[str]:
    if isinstance(value, list):
        return [key for entry in value for key in keys_of(entry)]
    if not isinstance(value, dict):
        return []
    below = [key for name, entry in value.items() if name not in OPEN_KEYS for key in keys_of(entry)]
    return [*value, *below]
