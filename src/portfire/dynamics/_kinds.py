"""Names and shapes of parameters, by kind of dynamics."""

from __future__ import annotations

from collections.abc import Callable

from portfire.dynamics import _linear
from portfire.dynamics._setup import Setup

SHAPES: dict[str, Callable[[Setup], dict[str, tuple[int, ...]]]] = {"linear": _linear.parameter_shapes}


def parameter_shapes(setup: Setup) -> dict[str, tuple[int, ...]]:
    """Names and shapes of the parameters of a model, by its kind of dynamics and its readout."""
    return SHAPES[setup.model.dynamics](setup)
