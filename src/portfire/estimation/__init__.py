"""Fits: starting values, the objective, its ascent, and what a fit can then say."""

from portfire.estimation._fit import Fit, Hazard, fit, fit_from_parts, load_fit, with_hazard
from portfire.estimation._forward import draw_ends, draw_paths, predict_rates
from portfire.estimation._freedom import free_parameters
from portfire.estimation._hazard import fit_hazard
from portfire.estimation._infer import causal_mask, causal_states, infer_trials
from portfire.estimation._kind import Forward, Found, Inferred, Kind
from portfire.estimation._kinds import KINDS, count_route, kind_of
from portfire.estimation._score import sample_loglik, score_trials

__all__ = [
    "KINDS",
    "Fit",
    "Forward",
    "Found",
    "Hazard",
    "Inferred",
    "Kind",
    "causal_mask",
    "causal_states",
    "count_route",
    "draw_ends",
    "draw_paths",
    "fit",
    "fit_from_parts",
    "fit_hazard",
    "free_parameters",
    "infer_trials",
    "kind_of",
    "load_fit",
    "predict_rates",
    "sample_loglik",
    "score_trials",
    "with_hazard",
]
