"""p values from sessions drawn under the restricted account."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from ..errors import PortfireError
from ..estimation import Efficient, Fit, Objective, draw_trials
from ..inference import pack
from ..session import Trials
from ._cone import score_statistic
from ._verdict import PROFILE_DROP

_CHECK_SHARE = 0.05
# Share of P00 below which a covariance has a direction with next to nothing in it.
_SINGULAR = 1e-2


@dataclass(frozen=True)
class DrawnP:
    """A p value from draws.

    Parameters
    ----------
    p : float
    se : float
        Its Monte-Carlo standard error.
    n_draws, n_above : int
        Draws, and those at least as large as what was observed.
    """

    p: float
    se: float
    n_draws: int
    n_above: int


def sequential_p(observed: float, draw: Callable[[int], float], max_draws: int, stop_at: int = 20) -> DrawnP:
    """Draw until enough draws are as large as what was observed, or until none are left.

    A large p needs few draws. With ``stop_at`` exceedances after n draws p is ``stop_at`` / n, otherwise
    (1 + exceedances) / (1 + draws); either way P(p ≤ α) ≤ α (Besag and Clifford 1991, Biometrika 78:301).

    Parameters
    ----------
    observed : float
    draw : callable
        ``draw(k)`` gives the k-th draw of the statistic.
    max_draws : int
    stop_at : int, default 20

    Raises
    ------
    PortfireError
        If there is nothing to draw.
    """
    if max_draws < 1 or stop_at < 1:
        raise PortfireError(f"a p value needs draws; got {max_draws} at most, ending at {stop_at} above")
    n_above = 0
    for k in range(max_draws):
        # Equal up to rounding counts as equal, so that p errs high.
        n_above += draw(k) >= observed * (1 - 1e-12)
        if n_above == stop_at:
            p = stop_at / (k + 1)
            return DrawnP(p, float(p * np.sqrt((1 - p) / stop_at)), k + 1, n_above)
    p = (1 + n_above) / (1 + max_draws)
    return DrawnP(p, float(np.sqrt(p * (1 - p) / max_draws)), max_draws, n_above)


@dataclass(frozen=True)
class Bootstrap:
    """A bootstrap p of one entry of a contrast.

    Parameters
    ----------
    drawn : DrawnP
        The larger of those at the estimate and at the bound, where there is one.
    statistic : float
        Score statistic of the recorded session.
    at_bound : DrawnP or None
        From draws with singular covariances of the trial source at their upper bound.
    checks : array, shape (draw, 2)
        Score statistic and likelihood ratio of the draws that were refitted.
    """

    drawn: DrawnP
    statistic: float
    at_bound: DrawnP | None
    checks: NDArray[np.float64]


def bootstrap_score(
    efficient: Efficient,
    trials: Trials,
    seed: int,
    max_draws: int = 199,
    stop_at: int = 20,
    own_ends: bool = False,
    refit: Callable[[Trials], float] | None = None,
) -> Bootstrap:
    """Bootstrap the score statistic of the directions beyond a restricted fit.

    Sessions are drawn from the restricted fit; each costs one evaluation of the score, since the efficient
    score allows to first order for the refit of what the account estimates.

    Parameters
    ----------
    efficient : Efficient
        Of the restricted fit to ``trials``.
    trials : Trials
    seed : int
    max_draws, stop_at : int
        As in `sequential_p`.
    own_ends : bool, default False
        Let drawn trials end by first passage of the fit's hazard.
    refit : callable, optional
        ``refit(drawn)`` gives the likelihood ratio of full refits to a drawn session; it is asked of 5 % of
        the draws, as a check on the score.
    """
    observed = score_statistic(efficient.score(trials), efficient.information, efficient.directions.cones)
    checks: list[tuple[float, float]] = []

    def draws_of(source: Fit, stream: int) -> Callable[[int], float]:
        def draw(k: int) -> float:
            drawn = draw_trials(source, trials, np.random.default_rng([seed, stream, k]), own_ends)
            stat = score_statistic(efficient.score(drawn), efficient.information, efficient.directions.cones)
            if refit is not None and stream == 0 and k % round(1 / _CHECK_SHARE) == 0:
                checks.append((stat, refit(drawn)))
            return stat

        return draw

    here = sequential_p(observed, draws_of(efficient.fitted, 0), max_draws, stop_at)
    bound = bound_covariances(efficient.fitted, trials)
    there = None if bound is None else sequential_p(observed, draws_of(bound, 1), max_draws, stop_at)
    larger = here if there is None or here.p >= there.p else there
    return Bootstrap(larger, observed, there, np.array(checks).reshape(-1, 2))


def bound_covariances(fitted: Fit, trials: Trials, drop: float = PROFILE_DROP) -> Fit | None:
    """The fit with the singular part of its trial-to-trial covariances at an upper bound.

    At a boundary the bootstrap is not consistent (Andrews 2000, Econometrica 68:399, from memory): draws
    with a covariance of zero and with one as large as the data allow bracket what it may be.

    Parameters
    ----------
    fitted : Fit
        To ``trials``.
    drop : float, default 1.92
        Nats that the objective may lose by the covariance that is added, all else held.

    Returns
    -------
    Fit or None
        None where no free covariance is singular.
    """
    setup, params = fitted.setup, dict(fitted.params)
    d, noise = setup.latent_dim, float(params["noise"])
    scale = {
        "initial_factor": _accumulate(params["transition"], noise, setup.initial_bins),
        "sustained_factor": setup.n_reference * noise * np.eye(d),
    }
    objective = Objective(pack(trials, setup), setup)
    base = objective(params)[0]
    found = False
    for name, h in (("initial_factor", 0.0), ("sustained_factor", float("inf"))):
        if not fitted.account.allows("trial", h):
            continue
        cov = params[name] @ params[name].T
        root = np.linalg.cholesky(scale[name])
        inner = np.linalg.solve(root, np.linalg.solve(root, cov).T)
        values, vectors = np.linalg.eigh(inner)
        empty = root @ vectors[:, values < _SINGULAR]
        if not empty.shape[1]:
            continue
        found = True
        low, high = 0.0, 4.0
        for _ in range(12):
            middle = 0.5 * (low + high)
            trial = {**params, name: np.linalg.cholesky(cov + middle * empty @ empty.T + 1e-9 * scale[name])}
            if base - objective(trial)[0] < drop:
                low = middle
            else:
                high = middle
        params[name] = np.linalg.cholesky(cov + low * empty @ empty.T + 1e-9 * scale[name])
    objective.close()
    return replace(fitted, params=params) if found else None


def _accumulate(transition: NDArray[np.float64], noise: float, n_bins: int) -> NDArray[np.float64]:
    """Covariance that the dynamics accumulate from nothing, shape (D, D)."""
    cov = np.zeros_like(transition)
    for _ in range(n_bins):
        cov = transition @ cov @ transition.T + noise * np.eye(len(cov))
    return cov
