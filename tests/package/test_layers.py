"""Imports run downwards only, and only to what the package declares."""

from __future__ import annotations

import ast
import re
import sys
import tomllib
from collections.abc import Iterator
from importlib import metadata
from pathlib import Path

import pytest
from packaging.requirements import Requirement

import portfire

# From the bottom up; a layer may import those to its left.
LAYERS = (
    "errors",
    "session",
    "accounts",
    "dynamics",
    "inference",
    "estimation",
    "comparison",
    "timing",
    "simulate",
    "job",
    "report",
    "cli",
)
DISTRIBUTION_OF = {"sklearn": "scikit-learn"}
SOURCE = Path(portfire.__file__).parent


def modules() -> list[Path]:
    return sorted(SOURCE.rglob("*.py"))


def layer_of(path: Path) -> str:
    return path.relative_to(SOURCE).parts[0].removesuffix(".py")


def imported_names(tree: ast.AST, package: tuple[str, ...]) -> Iterator[tuple[str, int]]:
    """Yield every imported name, absolute and with dots, and its line; `package` resolves relative ones."""
    for node in ast.walk(tree):
        if isinstance(node, ast.Import):
            for alias in node.names:
                yield alias.name, node.lineno
        elif isinstance(node, ast.ImportFrom):
            above = package[: len(package) - node.level + 1] if node.level else ()
            base = ".".join((*above, *filter(None, [node.module])))
            for alias in node.names:
                yield f"{base}.{alias.name}", node.lineno


def imports_of(path: Path) -> list[tuple[str, int]]:
    package = ("portfire", *path.relative_to(SOURCE).parent.parts)
    return list(imported_names(ast.parse(path.read_text(encoding="utf-8")), package))


def target_layer(name: str) -> str | None:
    """The layer that an imported name belongs to; None for `__version__`, its like, and other packages."""
    first, *rest = name.split(".")
    if first != "portfire" or not rest or rest[0].startswith("__"):
        return None
    return portfire._HOME_OF.get(rest[0], rest[0])


def upward_imports(path: Path) -> list[str]:
    own = layer_of(path)
    found = []
    for name, line in imports_of(path):
        target = target_layer(name)
        if target is not None and target not in LAYERS[: LAYERS.index(own) + 1]:
            found.append(f"{path.relative_to(SOURCE)}:{line} imports {name}")
    return found


def test_every_module_belongs_to_a_layer() -> None:
    outside = {"__init__", "__main__"}
    unknown = {layer_of(path) for path in modules()} - set(LAYERS) - outside
    assert not unknown, f"no layer: {sorted(unknown)}"


def test_imports_run_downwards() -> None:
    upward = [line for path in modules() if layer_of(path) in LAYERS for line in upward_imports(path)]
    assert not upward, "\n".join(upward)


@pytest.mark.parametrize(
    ("statement", "package", "layer"),
    [
        ("from portfire.job import run", ("portfire", "session"), "job"),
        ("from portfire import run", ("portfire", "session"), "report"),
        ("from portfire import cli", ("portfire", "session"), "cli"),
        ("import portfire.report._page", ("portfire", "session"), "report"),
        ("from ..cli import main", ("portfire", "session"), "cli"),
        ("from ._tables import read", ("portfire", "session"), "session"),
        ("from portfire import __version__", ("portfire", "job"), None),
        ("import numpy.linalg", ("portfire", "job"), None),
    ],
)
def test_the_check_sees_every_way_to_import(
    statement: str, package: tuple[str, ...], layer: str | None
) -> None:
    ((name, _),) = imported_names(ast.parse(statement), package)
    assert target_layer(name) == layer


def test_every_imported_package_is_declared(checkout: Path) -> None:
    project = tomllib.loads((checkout / "pyproject.toml").read_text(encoding="utf-8"))["project"]
    requirements = [*project["dependencies"], *project["optional-dependencies"]["nwb"]]
    declared = {re.split(r"[^\w.-]", text, maxsplit=1)[0].lower() for text in requirements}
    missing = {}
    for path in modules():
        for name, line in imports_of(path):
            top = name.split(".")[0]
            if top == "portfire" or top in sys.stdlib_module_names:
                continue
            package = DISTRIBUTION_OF.get(top, top)
            if package not in declared:
                missing[package] = f"{path.relative_to(SOURCE)}:{line}"
    assert not missing, f"imported but not in pyproject.toml: {missing}"


def test_what_xarray_reads_and_writes_latents_with_comes_along(checkout: Path) -> None:
    """The backend of h5netcdf is imported by name at run time, so that no import in the source shows it."""
    project = tomllib.loads((checkout / "pyproject.toml").read_text(encoding="utf-8"))["project"]
    left, brought = [re.split(r"[^\w.-]", text, maxsplit=1)[0] for text in project["dependencies"]], set()
    while left:
        name = left.pop().lower()
        if name in brought:
            continue
        brought.add(name)
        for text in metadata.requires(name) or []:
            requirement = Requirement(text)
            if requirement.marker is None or requirement.marker.evaluate({"extra": ""}):
                left.append(requirement.name)
    assert {"h5netcdf", "h5py"} <= brought
