"""Sessions with known truth, drawn from a scenario or a fit."""

from portfire.simulate._draw import Drawn
from portfire.simulate._scenario import Scenario, demo_scenario
from portfire.simulate._session import draw_session, simulate_session, write_demo_session
from portfire.simulate._truth import true_parameters

__all__ = [
    "Drawn",
    "Scenario",
    "demo_scenario",
    "draw_session",
    "simulate_session",
    "true_parameters",
    "write_demo_session",
]
