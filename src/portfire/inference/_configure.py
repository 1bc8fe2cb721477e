"""How the compiler is set up: double precision, and compiled code kept between runs."""

from __future__ import annotations

import os
from pathlib import Path

import jax


def cache_folder() -> Path:
    """Where compiled code is kept: PORTFIRE_CACHE, else the user's cache folder."""
    given = os.environ.get("PORTFIRE_CACHE")
    if given:
        return Path(given)
    return Path(os.environ.get("XDG_CACHE_HOME") or Path.home() / ".cache") / "portfire"


def configure() -> None:
    """Turn on float64 and the persistent compilation cache for this process."""
    jax.config.update("jax_enable_x64", True)
    if jax.config.values["jax_compilation_cache_dir"] is None:
        jax.config.update("jax_compilation_cache_dir", str(cache_folder() / "compiled"))
        jax.config.update("jax_persistent_cache_min_compile_time_secs", 0.0)
        jax.config.update("jax_persistent_cache_min_entry_size_bytes", 0)
