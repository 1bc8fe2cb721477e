"""Posterior paths and marginal likelihoods, one engine for all dynamics (float64 on the CPU)."""

from portfire.inference import _configure
from portfire.inference._chain import Factor, factorise, invert_band, substitute_backward, substitute_forward
from portfire.inference._chunk import Chunk, Packed, pack
from portfire.inference._importance import Sampled, correction_size, draw_deviations, importance, lane_keys
from portfire.inference._particles import Filtered, filter_particles, particle_posterior, refine
from portfire.inference._scores import bound_scores
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
from portfire.inference._variational import (
    Bound,
    Guess,
    bound_gradient,
    fit_bound,
    guess_of_posterior,
    start_guess,
    turn_guess,
)

_configure.configure()

__all__ = [
    "Bound",
    "Chunk",
    "Factor",
    "Filtered",
    "Guess",
    "Moments",
    "Packed",
    "Path",
    "Posterior",
    "Sampled",
    "bound_gradient",
    "correction_size",
    "draw_deviations",
    "factorise",
    "filter_particles",
    "fit_bound",
    "guess_of_posterior",
    "importance",
    "invert_band",
    "lane_keys",
    "laplace",
    "laplace_gradient",
    "bound_scores",
    "newton_sweep",
    "pack",
    "particle_posterior",
    "posterior_moments",
    "refine",
    "start_guess",
    "start_path",
    "substitute_backward",
    "substitute_forward",
    "turn_guess",
]
