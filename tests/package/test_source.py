"""Nothing in the source runs code that came with data."""

from __future__ import annotations

import ast
from collections.abc import Iterator
from pathlib import Path

import pytest

import portfire

SOURCE = Path(portfire.__file__).parent
UNSAFE_MODULES = {"pickle", "cPickle", "_pickle", "cloudpickle", "dill", "joblib", "marshal", "shelve"}
UNSAFE_CALLS = {"eval", "exec", "read_pickle", "to_pickle"}


def unsafe_lines(source: str) -> Iterator[str]:
    for node in ast.walk(ast.parse(source)):
        if isinstance(node, ast.Import):
            names = [alias.name for alias in node.names]
        elif isinstance(node, ast.ImportFrom):
            names = [node.module or ""]
        else:
            names = []
        for name in names:
            if name.split(".")[0] in UNSAFE_MODULES:
                yield f"line {node.lineno}: import of {name}"
        if isinstance(node, ast.Call):
            called = node.func.attr if isinstance(node.func, ast.Attribute) else getattr(node.func, "id", "")
            builtin = isinstance(node.func, ast.Name)
            if called in UNSAFE_CALLS and (builtin or called.endswith("pickle")):
                yield f"line {node.lineno}: {called}()"
            for keyword in node.keywords:
                allowed = isinstance(keyword.value, ast.Constant) and keyword.value.value is False
                if keyword.arg == "allow_pickle" and not allowed:
                    yield f"line {node.lineno}: allow_pickle"


@pytest.mark.parametrize("path", sorted(SOURCE.rglob("*.py")), ids=lambda p: str(p.relative_to(SOURCE)))
def test_nothing_is_unpickled_or_evaluated(path: Path) -> None:
    assert list(unsafe_lines(path.read_text(encoding="utf-8"))) == []


@pytest.mark.parametrize(
    "line",
    [
        "import pickle",
        "from pickle import load",
        "import joblib as j",
        "np.load(path, allow_pickle=True)",
        "np.load(path, allow_pickle=flag)",
        "eval(text)",
        "pd.read_pickle(path)",
    ],
)
def test_the_check_sees_what_is_unsafe(line: str) -> None:
    assert len(list(unsafe_lines(line))) == 1


@pytest.mark.parametrize("line", ["np.load(path, allow_pickle=False)", "frame.eval('a + b')", "load(path)"])
def test_the_check_passes_what_is_safe(line: str) -> None:
    assert list(unsafe_lines(line)) == []
