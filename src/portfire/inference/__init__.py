"""Posterior paths and marginal likelihoods, one engine for all dynamics (float64 on the CPU)."""

from portfire.inference import _configure
from portfire.inference._chain import Factor, factorise, invert_band, substitute_backward, substitute_forward
from portfire.inference._chunk import Chunk, Packed, pack
from portfire.inference._smoother import (
    Path,
    Posterior,
    find_mode,
    laplace,
    laplace_gradient,
    newton_sweep,
    start_path,
)

_configure.configure()

__all__ = [
    "Chunk",
    "Factor",
    "Packed",
    "Path",
    "Posterior",
    "factorise",
    "find_mode",
    "invert_band",
    "laplace",
    "laplace_gradient",
    "newton_sweep",
    "pack",
    "start_path",
    "substitute_backward",
    "substitute_forward",
]
