"""Kinds of dynamics, readouts and model files."""

from portfire.dynamics._kinds import SHAPES, parameter_shapes
from portfire.dynamics._linear import (
    Params,
    PathPrior,
    accumulated_noise,
    initial_covariance,
    path_inputs,
    path_prior,
)
from portfire.dynamics._models import find_model, shipped_models
from portfire.dynamics._readouts import READOUTS, Curvature, Readout, own_gradient
from portfire.dynamics._settings import SETTINGS, LinearSettings
from portfire.dynamics._setup import Setup, make_setup, n_drift_functions
from portfire.dynamics._spec import ModelFile, SimulateSettings, model_from_dict, model_to_dict, read_model
from portfire.dynamics._spread import decay_of, spread_kernels

__all__ = [
    "READOUTS",
    "SETTINGS",
    "SHAPES",
    "Curvature",
    "LinearSettings",
    "ModelFile",
    "Params",
    "PathPrior",
    "Readout",
    "Setup",
    "SimulateSettings",
    "accumulated_noise",
    "decay_of",
    "find_model",
    "initial_covariance",
    "make_setup",
    "model_from_dict",
    "model_to_dict",
    "n_drift_functions",
    "own_gradient",
    "parameter_shapes",
    "path_inputs",
    "path_prior",
    "read_model",
    "spread_kernels",
    "shipped_models",
]
