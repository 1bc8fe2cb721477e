"""Fits: starting values, the objective, its ascent, and what a fit can then say."""

from portfire.estimation._directions import Covariances, Directions, Linear, push_directions, symmetric_basis
from portfire.estimation._draws import draw_trials
from portfire.estimation._efficient import Efficient, make_efficient, score_each
from portfire.estimation._fit import Fit, Hazard, fit, fit_from_parts, load_fit, with_hazard
from portfire.estimation._forward import draw_ends, draw_paths, predict_rates
from portfire.estimation._freedom import free_parameters
from portfire.estimation._grouped import Bend, GroupedFit, GroupedObjective, fit_grouped, split_groups
from portfire.estimation._hazard import fit_hazard
from portfire.estimation._infer import causal_mask, causal_states, infer_trials
from portfire.estimation._kind import Forward, Found, Inferred, Kind
from portfire.estimation._kinds import KINDS, count_route, kind_of
from portfire.estimation._objective import Objective
from portfire.estimation._score import sample_loglik, score_trials

__all__ = [
    "Bend",
    "GroupedFit",
    "GroupedObjective",
    "fit_grouped",
    "split_groups",
    "Covariances",
    "Directions",
    "Efficient",
    "Linear",
    "Objective",
    "draw_trials",
    "make_efficient",
    "push_directions",
    "score_each",
    "symmetric_basis",
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
