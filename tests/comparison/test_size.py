"""Choice of the smallest size whose paired deficit is no deficit worth having."""

import numpy as np
import pytest

from portfire.comparison import choose_smallest
from portfire.errors import PortfireError

RNG = np.random.default_rng(0)
BASE = -100 + 10 * RNG.standard_normal(400)


def behind(mean, sd, seed=1):
    """Scores that lose ``mean`` to BASE exactly, with an SD of ``sd`` over trials."""
    noise = np.random.default_rng(seed).standard_normal(400)
    noise = (noise - noise.mean()) / noise.std(ddof=1)
    return BASE - mean - sd * noise


def test_the_best_is_taken_where_the_smaller_loses():
    choice = choose_smallest([behind(0.5, 0.3), BASE, behind(0.01, 0.3)], 0.05)
    assert (choice.chosen, choice.best) == (1, 1)
    assert choice.deficits[0].nats_per_trial == pytest.approx(0.5)
    assert choice.deficits[0].se == pytest.approx(0.3 / 20)
    assert choice.deficits[1] == (0.0, 0.0)


def test_the_smallest_without_a_real_deficit_is_taken():
    assert choose_smallest([behind(0.5, 0.3), behind(0.02, 0.6), BASE], 0.05).chosen == 1
    assert choose_smallest([behind(0.02, 0.6), behind(0.01, 0.6, 2), BASE], 0.05).chosen == 0


def test_a_deficit_must_be_small_by_both_measures():
    # Below min_gain, but beyond doubt; and within its error, but above min_gain.
    assert choose_smallest([behind(0.02, 0.1), BASE], 0.05).chosen == 1
    assert choose_smallest([behind(0.2, 8.0), BASE], 0.05).chosen == 1


def test_the_error_is_that_of_the_pairs():
    """Trials differ by tens of nats, the candidates by hundredths: pairs tell, means alone would not."""
    assert np.std(BASE) / 20 > 0.4
    assert choose_smallest([behind(0.04, 0.01), BASE], 0.05).chosen == 1


def test_a_tie_goes_to_the_smaller():
    assert choose_smallest([BASE, BASE.copy()], 0.05).chosen == 0
    assert choose_smallest([BASE], 0.05).chosen == 0


def test_unequal_data_are_refused():
    for scores in ([], [BASE, BASE[:-1]], [BASE[:1], BASE[:1]]):
        with pytest.raises(PortfireError, match="same two or more trials"):
            choose_smallest(scores, 0.05)
