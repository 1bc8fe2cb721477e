"""How long a push lasts: a profile of the likelihood over the persistence h of one source's push."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray
from scipy.interpolate import Akima1DInterpolator
from scipy.stats import chi2

from ..accounts import Account, push_kernel
from ..dynamics import Setup, decay_of
from ..errors import PortfireError
from ..estimation import Fit, count_route
from ._verdict import PROFILE_DROP

PERSISTENCE_GRID_S = (0.0, 0.05, 0.1, 0.2, 0.4, 0.8, 1.6, float("inf"))
# Nats by which one push must stay behind both before it is said that there are two.
TWO_PUSHES = 2.0
_N_FINE = 4001

# Fits an account from the parameters of a fit of the same size.
Refit = Callable[[Account, Fit], Fit]


@dataclass(frozen=True)
class Profile:
    """Log-likelihood of one push of a source by its persistence.

    Parameters
    ----------
    source : str
    persistence_s : tuple of float
        Ascending, from 0 (initial) to infinity (sustained).
    values : array, shape (persistence,)
        Objective at its maximum (nats).
    both : float
        Objective with an initial and a sustained push (nats).
    n_extra : int
        Parameters by which both have more than one push.
    bin_s, n_reference : float, int
        Bin width (s), and bins over which a kernel sums to one.
    best : Fit or None
        The highest of the fits with one push.
    """

    source: str
    persistence_s: tuple[float, ...]
    values: NDArray[np.float64]
    both: float
    n_extra: int
    bin_s: float
    n_reference: int
    best: Fit | None = None

    @property
    def behind_both(self) -> float:
        """Nats by which the best single push stays behind both."""
        return float(self.both - np.max(self.values))


@dataclass(frozen=True)
class Persistence:
    """The persistence of a source's push with its profile-likelihood interval.

    Parameters
    ----------
    estimate_s : float
        Infinite where the push lasts to the response.
    ci95_s : tuple of float
        Where the profile is less than 1.92 nats below its maximum.
    two_pushes : bool
        Whether one push describes the data worse than both do: then there is no one persistence.
    behind_both : float
        Nats by which the best single push stays behind both.
    """

    estimate_s: float
    ci95_s: tuple[float, float]
    two_pushes: bool
    behind_both: float


def mean_delay(persistence_s: float, bin_s: float, n_reference: int) -> float:
    """Mean time after the set cue at which a push of this persistence enters the state (s).

    Over the reference number of bins; zero for an initial push, half of the trial for a sustained one.
    Bounded and smooth at both ends, it is the axis on which a profile is close to a parabola.
    """
    kernel = push_kernel(persistence_s, bin_s, n_reference, n_reference)
    return float(kernel @ np.arange(n_reference)) * bin_s


def find_persistence(delay_s: float, bin_s: float, n_reference: int) -> float:
    """The persistence (s) that has this mean delay; the inverse of `mean_delay`."""
    top = mean_delay(np.inf, bin_s, n_reference)
    if delay_s <= 0:
        return 0.0
    # Beyond a hundred trials' length nothing tells a persistence from an infinite one.
    low, high = 0.0, 100 * bin_s * n_reference
    if delay_s >= mean_delay(high, bin_s, n_reference) or delay_s >= top:
        return float("inf")
    for _ in range(60):
        middle = 0.5 * (low + high)
        if mean_delay(middle, bin_s, n_reference) < delay_s:
            low = middle
        else:
            high = middle
    return 0.5 * (low + high)


def summarise_profile(profile: Profile, drop: float = PROFILE_DROP) -> Persistence:
    """Maximum of a profile and the interval that it leaves in, interpolated between its points.

    Parameters
    ----------
    profile : Profile
    drop : float, default 1.92
        Nats below the maximum at which the interval ends: half of the 95 % quantile of χ²₁.

    Raises
    ------
    PortfireError
        If there are fewer than three persistences, or they do not run from 0 to infinity.
    """
    grid = np.asarray(profile.persistence_s)
    if len(grid) < 3 or grid[0] != 0 or not np.isinf(grid[-1]) or np.any(np.diff(grid) <= 0):
        raise PortfireError(f"a profile needs ascending persistences from 0 to infinity; got {grid.tolist()}")
    bin_s, n_reference = profile.bin_s, profile.n_reference
    place = np.array([mean_delay(h, bin_s, n_reference) for h in grid])
    # Persistences far beyond the trial share a place, and their values differ by the search alone.
    keep = np.concatenate([[True], np.diff(place) > 1e-9 * place[-1]])
    curve = Akima1DInterpolator(place[keep], np.asarray(profile.values)[keep], method="makima")
    fine = np.unique(np.concatenate([np.linspace(0.0, place[-1], _N_FINE), place[keep]]))
    height = curve(fine)
    best = int(np.argmax(height))
    inside = height >= height[best] - drop
    ends = []
    for side in (slice(best, None, -1), slice(best, None)):
        run = np.flatnonzero(~inside[side])
        points = fine[side]
        ends.append(float(points[run[0] - 1] if len(run) else points[-1]))
    # An interval is what is not excluded, so separate pieces are joined.
    low, high = min(ends[0], float(fine[inside][0])), max(ends[1], float(fine[inside][-1]))
    allowed = max(TWO_PUSHES, 0.5 * float(chi2.ppf(0.95, max(profile.n_extra, 1))))
    return Persistence(
        estimate_s=find_persistence(float(fine[best]), bin_s, n_reference),
        ci95_s=(find_persistence(low, bin_s, n_reference), find_persistence(high, bin_s, n_reference)),
        two_pushes=profile.behind_both > allowed,
        behind_both=profile.behind_both,
    )


def _decays(setup: Setup, source: str, persistence_s: float) -> NDArray[np.float64]:
    """Decay of every push column and of the trial source, with the lasting push of one source set."""
    own = decay_of(persistence_s, setup.bin_s)
    column = [
        own if c.source == source and c.persistence_s > 0 else decay_of(c.persistence_s, setup.bin_s)
        for c in setup.columns
    ]
    return np.array([*column, own if source == "trial" else 1.0])


def _lasting_from_prompt(fitted: Fit, source: str) -> dict[str, NDArray[np.float64]]:
    """Parameters in which the source's initial push stands where its lasting push is read."""
    params = dict(fitted.params)
    if source == "trial":
        params["sustained_factor"] = params["initial_factor"]
        return params
    push = params["push"].copy()
    columns = fitted.setup.columns
    for k, column in enumerate(columns):
        if column.source == source and column.persistence_s == 0:
            twin = next(j for j, c in enumerate(columns) if c[:2] == column[:2] and c.persistence_s > 0)
            push[:, twin] = push[:, k]
    params["push"] = push
    return params


def _prompt_from_lasting(fitted: Fit, source: str) -> dict[str, NDArray[np.float64]]:
    params = dict(fitted.params)
    if source == "trial":
        params["initial_factor"] = params["sustained_factor"]
        return params
    push = params["push"].copy()
    columns = fitted.setup.columns
    for k, column in enumerate(columns):
        if column.source == source and column.persistence_s > 0:
            twin = next(j for j, c in enumerate(columns) if c[:2] == column[:2] and c.persistence_s == 0)
            push[:, twin] = push[:, k]
    params["push"] = push
    return params


def profile_persistence(
    source: str,
    ends: Mapping[str, Fit],
    refit: Refit,
    grid_s: tuple[float, ...] = PERSISTENCE_GRID_S,
) -> Profile:
    """Profile the likelihood over the persistence of one source's push, warm-started both ways.

    The other sources push as in ``ends``. Every fit starts from its neighbour's, once from the initial
    end upwards and once from the sustained end downwards, and the higher of the two counts.

    Parameters
    ----------
    source : {"interval", "context", "trial"}
    ends : mapping of str to Fit
        Fits to the same trials with the source by the routes ``initial``, ``sustained`` and ``both``.
    refit : callable
        ``refit(account, start)`` fits an account from another fit's parameters.
    grid_s : tuple of float
        Ascending, from 0 to infinity (s).
    """
    first, last = ends["initial"], ends["sustained"]
    setup = first.setup
    lasting = last.account
    tops: list[Fit] = [first, *[first] * (len(grid_s) - 2), last]
    values = np.full(len(grid_s), -np.inf)
    values[0], values[-1] = first.value, last.value

    def keep(k: int, found: Fit) -> Fit:
        if found.value > values[k]:
            values[k], tops[k] = found.value, found
        return found

    start = replace(first, params=_lasting_from_prompt(first, source))
    for k, h in enumerate(grid_s[1:], start=1):
        decay = _decays(setup, source, h)
        start = keep(k, refit(lasting, replace(start, params={**start.params, "decay": decay})))
    start = last
    for k in range(len(grid_s) - 2, 0, -1):
        decay = _decays(setup, source, grid_s[k])
        start = keep(k, refit(lasting, replace(start, params={**start.params, "decay": decay})))
    plain = {name: value for name, value in _prompt_from_lasting(start, source).items() if name != "decay"}
    keep(0, refit(first.account, replace(start, params=plain)))
    both = max(ends["both"].value, float(values[0]), float(values[-1]))
    n_extra = count_route(ends["both"].account, source, 0.0, setup)
    best = tops[int(np.argmax(values))]
    return Profile(source, tuple(grid_s), values, both, n_extra, setup.bin_s, setup.n_reference, best)
