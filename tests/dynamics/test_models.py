"""Model files are found by path and by shipped name."""

from __future__ import annotations

import tomllib
from pathlib import Path

import pytest

from portfire.dynamics._models import find_model, shipped_models
from portfire.errors import InputError


def test_a_shipped_name_finds_its_file() -> None:
    path = find_model("linear")
    assert tomllib.loads(path.read_text(encoding="utf-8"))["model"]["dynamics"] == "linear"


def test_every_shipped_model_is_found_and_parses() -> None:
    assert "linear" in shipped_models()
    for name in shipped_models():
        assert "model" in tomllib.loads(find_model(name).read_text(encoding="utf-8"))


def test_a_relative_path_starts_from_the_base(tmp_path: Path) -> None:
    (tmp_path / "mine.toml").write_text("[model]\n")
    assert find_model("mine.toml", base=tmp_path) == tmp_path / "mine.toml"
    assert find_model(Path("mine.toml"), base=tmp_path) == tmp_path / "mine.toml"
    assert find_model(tmp_path / "mine.toml", base="/nowhere") == tmp_path / "mine.toml"


def test_a_folder_of_the_same_name_does_not_hide_a_shipped_model(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    (tmp_path / "linear").mkdir()
    monkeypatch.chdir(tmp_path)
    assert find_model("linear").is_file()


@pytest.mark.parametrize(
    ("name", "message"),
    [
        ("liner", 'no shipped model "liner"; did you mean the shipped model "linear"'),
        ("qqq", 'no shipped model "qqq"; give the path of a .toml file'),
        ("models/linear.toml", r'models/linear\.toml does not exist; did you mean .* "linear"'),
        ("folder.toml", r"folder\.toml is a folder, not a model file"),
    ],
)
def test_a_model_that_is_not_there_is_named(tmp_path: Path, name: str, message: str) -> None:
    (tmp_path / "folder.toml").mkdir()
    with pytest.raises(InputError, match=message):
        find_model(name, base=tmp_path)
