"""Posterior paths and marginal likelihoods, one engine for all dynamics (float64 on the CPU)."""

from portfire.inference import _configure
from portfire.inference._chain import Factor, factorise, invert_band, substitute_backward, substitute_forward
from portfire.inference._chunk import Chunk, Packed, pack
from portfire.inference._importance import Sampled, correction_size, draw_deviations, importance, lane_keys
from portfire.inference._particles import Filtered, filter_particles, particle_posterior, refine
from portfire.inference._scores import laplace_scores
from portfire.inference._smoother import (
    Moments,
    Path,
    Posterior,
    laplace,
    laplace_gradient,
    newton_sweep,
    posterior_moments,
    start_path,
)

_configure.configure()

__all__ = [
    "Chunk",
    "Factor",
    "Filtered",
    "Moments",
    "Packed",
    "Path",
    "Posterior",
    "Sampled",
    "correction_size",
    "draw_deviations",
    "factorise",
    "filter_particles",
    "importance",
    "invert_band",
    "lane_keys",
    "laplace",
    "laplace_gradient",
    "laplace_scores",
    "newton_sweep",
    "pack",
    "particle_posterior",
    "posterior_moments",
    "refine",
    "start_path",
    "substitute_backward",
    "substitute_forward",
]
