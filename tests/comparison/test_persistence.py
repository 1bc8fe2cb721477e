"""How long a push lasts: the profile's shape on known curves, and on sessions of known truth."""

from __future__ import annotations

from dataclasses import replace

import jax.numpy as jnp
import numpy as np
import pytest

from portfire.accounts import Account
from portfire.comparison import (
    PERSISTENCE_GRID_S,
    Profile,
    find_persistence,
    mean_delay,
    profile_persistence,
    summarise_profile,
)
from portfire.dynamics import decay_of, spread_kernels
from portfire.errors import PortfireError
from portfire.inference import laplace, start_path

from ..estimation._world import BIN_S as BIN
from ..estimation._world import SOURCES, blank_trials, draw_counts, fit_small, make_truth
from ..inference._cases import rich_case

BIN_S, N_REFERENCE = 0.02, 40
FULL = Account.full(SOURCES)


def profile(loss, both=0.0, n_extra=2):
    """A profile whose values are given by a function of the mean delay."""
    place = np.array([mean_delay(h, BIN_S, N_REFERENCE) for h in PERSISTENCE_GRID_S])
    return Profile("context", PERSISTENCE_GRID_S, -loss(place), both, n_extra, BIN_S, N_REFERENCE)


@pytest.mark.parametrize("truth_s", [0.07, 0.2, 0.5])
def test_a_parabola_gives_the_interval_of_a_normal_law(truth_s):
    """For ℓ = -(m - m₀)²/2s² the interval that 1.92 nats leave in is m₀ ± 1.96 s, up to interpolation."""
    m, s = mean_delay(truth_s, BIN_S, N_REFERENCE), 0.03
    found = summarise_profile(profile(lambda place: 0.5 * ((place - m) / s) ** 2))
    low, high = (mean_delay(h, BIN_S, N_REFERENCE) for h in found.ci95_s)
    assert mean_delay(found.estimate_s, BIN_S, N_REFERENCE) == pytest.approx(m, abs=0.2 * s)
    assert low == pytest.approx(max(0.0, m - 1.96 * s), abs=0.2 * s)
    top = mean_delay(np.inf, BIN_S, N_REFERENCE)
    assert high == pytest.approx(min(top, m + 1.96 * s), abs=0.2 * s)


def test_a_maximum_at_an_end_is_initial_or_sustained():
    first = summarise_profile(profile(lambda place: 100 * place))
    assert first.estimate_s == 0.0
    assert first.ci95_s[0] == 0.0
    assert mean_delay(first.ci95_s[1], BIN_S, N_REFERENCE) == pytest.approx(0.0192, rel=0.05)
    last = summarise_profile(profile(lambda place: 100 * (0.39 - place)))
    assert np.isinf(last.estimate_s)
    assert np.isinf(last.ci95_s[1])
    assert 0.8 < last.ci95_s[0] < 10


def test_a_flat_profile_leaves_everything_in():
    flat = summarise_profile(profile(lambda place: 0.1 * np.sin(20 * place)))
    assert flat.ci95_s == (0.0, np.inf)


def test_two_pushes_are_said_where_one_stays_behind():
    """The threshold is 2 nats, or what 5 % of sessions with one push would exceed by chance."""
    assert not summarise_profile(profile(lambda place: 0 * place, both=2.9)).two_pushes
    assert summarise_profile(profile(lambda place: 0 * place, both=3.1)).two_pushes
    assert not summarise_profile(profile(lambda place: 0 * place, both=1.97, n_extra=1)).two_pushes
    assert summarise_profile(profile(lambda place: 0 * place, both=2.03, n_extra=1)).two_pushes


def test_a_profile_must_run_from_end_to_end():
    with pytest.raises(PortfireError, match=r"0\.1"):
        summarise_profile(replace(profile(lambda place: place), persistence_s=(0.1, 0.2, *(np.inf,) * 6)))


def test_mean_delay_and_persistence_are_inverse():
    for h in (0.03, 0.2, 1.6, 4.0):
        assert find_persistence(mean_delay(h, BIN_S, N_REFERENCE), BIN_S, N_REFERENCE) == pytest.approx(h)
    assert mean_delay(0.0, BIN_S, N_REFERENCE) == 0.0
    assert mean_delay(np.inf, BIN_S, N_REFERENCE) == pytest.approx(BIN_S * (N_REFERENCE - 1) / 2)


def test_kernels_that_parameters_choose_meet_those_of_the_setup_at_both_ends():
    case = rich_case("poisson", 0, seed=3)
    setup = case.setup
    decay = np.array([*(decay_of(c.persistence_s, setup.bin_s) for c in setup.columns), 1.0])
    fixed = np.concatenate([setup.kernels(9), setup.border_kernel(9)[None]])
    np.testing.assert_allclose(spread_kernels({"decay": decay}, setup, 9), fixed, atol=1e-15)
    plain = laplace(case.params, setup, case.chunk, start_path(setup, case.chunk))
    chosen = {**case.params, "decay": jnp.asarray(decay)}
    again = laplace(chosen, setup, case.chunk, start_path(setup, case.chunk))
    np.testing.assert_allclose(np.asarray(again.value), np.asarray(plain.value), rtol=1e-12)


TRUTHS = {
    "context=initial": ("interval=sustained,context=initial,trial=initial", "context", 0.0),
    "interval=sustained": ("interval=sustained,context=initial,trial=initial", "interval", np.inf),
    "trial=sustained": ("interval=none,context=sustained,trial=sustained", "trial", np.inf),
    "context lasts 0.15 s": ("interval=none,context=sustained,trial=initial", "context", 0.15),
    "trial lasts 0.15 s": ("interval=none,context=sustained,trial=sustained", "trial", 0.15),
    "two pushes": ("interval=none,context=both,trial=sustained", "context", None),
}


@pytest.mark.parametrize("name", TRUTHS)
def test_the_true_persistence_is_found(name):
    account, source, truth_s = TRUTHS[name]
    blank = blank_trials(120, 3)
    truth = make_truth(blank, account, 3)
    if truth_s is not None and 0 < truth_s < np.inf:
        columns = truth.setup.columns
        decay = [
            decay_of(truth_s if c.source == source and h > 0 else h, BIN) for c in columns for h in c[2:]
        ]
        last = decay_of(truth_s, BIN) if source == "trial" else 1.0
        truth = replace(truth, params={**truth.params, "decay": np.array([*decay, last])})
    trials = draw_counts(truth, blank, 3)[0]

    def refit(wanted, start):
        return fit_small(trials, str(wanted), start=start, tolerance=0.1)

    ends = {"both": fit_small(trials, tolerance=0.1)}
    for route in ("initial", "sustained"):
        ends[route] = refit(FULL.replace(source, route), ends["both"])
    found = summarise_profile(profile_persistence(source, ends, refit))
    if truth_s is None:
        assert found.two_pushes
        return
    assert not found.two_pushes
    assert found.ci95_s[0] <= truth_s <= found.ci95_s[1]
    if truth_s in (0.0, np.inf):
        assert found.estimate_s == truth_s
    # The other end is out of question on these sessions.
    assert not (found.ci95_s[0] == 0.0 and np.isinf(found.ci95_s[1]))
