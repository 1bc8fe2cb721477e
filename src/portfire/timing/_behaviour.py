"""What the subject did: produced intervals by condition, and how their spread grows."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import pandas as pd

from portfire.session import Trials, fit_weber_fraction, tabulate_conditions


@dataclass(frozen=True, eq=False)
class Behaviour:
    """Produced intervals by condition.

    Parameters
    ----------
    conditions : DataFrame
        One row a condition: `context`, `sample_s` (s), `n`, `mean_s`, `sd_s`, `cv`, and where targets are
        given `target_s` and `bias_s`, the mean of produced minus target (s).
    weber_fraction : float or None
        Slope of within-condition standard deviation on mean.
    weber_ci95 : tuple of float or None
        Its bootstrap interval.
    """

    conditions: pd.DataFrame
    weber_fraction: float | None
    weber_ci95: tuple[float, float] | None

    def to_dict(self) -> dict[str, Any]:
        """Return plain values for JSON, None where a number does not exist."""
        rows = [
            {str(name): _plain(value) for name, value in row.items()}
            for row in self.conditions.to_dict("records")
        ]
        interval = None if self.weber_ci95 is None else list(self.weber_ci95)
        return {"conditions": rows, "weber_fraction": self.weber_fraction, "weber_ci95": interval}


def _plain(value: Any) -> Any:
    return None if value is None or value != value else value


def summarise_behaviour(trials: Trials, draws: int = 1000, seed: int = 0) -> Behaviour:
    """Summarise produced intervals by condition.

    Parameters
    ----------
    trials : Trials
        Binned trials; those without a response do not count.
    draws : int, default 1000
        Bootstrap draws for the interval of the Weber fraction.
    seed : int, default 0
        Seed of the bootstrap.

    Returns
    -------
    Behaviour
        Per condition n, mean, standard deviation (n − 1), coefficient of variation, and bias against the
        target where given; and the Weber fraction, the slope of an ordinary least-squares line of
        within-condition standard deviation on mean over the conditions with two responses or more, with a
        percentile interval from drawing trials anew within conditions. It is None where fewer than two such
        conditions are there.
    """
    weber_fraction, interval = fit_weber_fraction(trials, draws, seed)
    return Behaviour(tabulate_conditions(trials), weber_fraction, interval)
