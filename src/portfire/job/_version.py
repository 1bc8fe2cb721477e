"""Which code computed a result."""

from __future__ import annotations

import hashlib
from functools import cache
from importlib.metadata import version
from pathlib import Path

_LAYERS = ("session", "accounts", "dynamics", "inference", "estimation", "comparison", "timing")
_LIBRARIES = ("jax", "numpy", "scipy")


@cache
def code_version() -> str:
    """Return the version of the package, and a hash of its computing code and its libraries.

    Returns
    -------
    str
        ``"0.1.0+1f2e3d4c"``. Results that were stored by other code have another key, and are
        computed anew.
    """
    from portfire import __file__ as home
    from portfire import __version__

    digest = hashlib.sha256()
    package = Path(home).parent
    for layer in _LAYERS:
        for path in sorted((package / layer).rglob("*.py")):
            name = path.relative_to(package).as_posix()
            digest.update(name.encode() + b"\0" + path.read_bytes() + b"\0")
    for library, found in library_versions().items():
        digest.update(f"{library}=={found}\0".encode())
    return f"{__version__}+{digest.hexdigest()[:8]}"


def library_versions() -> dict[str, str]:
    """Return the installed version of every library that results depend on."""
    return {library: version(library) for library in _LIBRARIES}
