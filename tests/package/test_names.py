"""The public names: all there, and loaded only when asked for."""

from __future__ import annotations

import subprocess
import sys

import pytest

import portfire


def test_every_public_name_resolves() -> None:
    missing = [name for name in portfire.__all__ if not hasattr(portfire, name)]
    assert not missing


def test_dir_lists_the_public_names() -> None:
    assert set(portfire.__all__) <= set(dir(portfire))


def test_an_unknown_name_is_an_attribute_error() -> None:
    with pytest.raises(AttributeError, match="'read_sesion'"):
        portfire.read_sesion  # noqa: B018


def test_importing_the_package_loads_no_other() -> None:
    program = "import sys; before = set(sys.modules); import portfire; print(*(set(sys.modules) - before))"
    done = subprocess.run([sys.executable, "-c", program], capture_output=True, text=True, check=True)
    loaded = {name.split(".")[0] for name in done.stdout.split()}
    assert loaded - sys.stdlib_module_names - {"portfire"} == set()
