"""Verdicts: every cell of the rule, its edges, and its words."""

import math

import pytest

from portfire.comparison import (
    Evidence,
    Gain,
    describe_mimic,
    judge,
    overrule,
    rate_route,
    reconcile,
    trials_to_close,
)
from portfire.errors import PortfireError


def evidence(mean, half, p):
    return Evidence(Gain(mean, half / 1.96, (mean - half, mean + half)), p)


NEEDED = evidence(1.2, 0.3, 0.001)
NOT_NEEDED = evidence(-0.01, 0.03, 0.4)
OPEN = evidence(0.1, 0.2, 0.3)
TOTAL = evidence(2.8, 0.6, 0.001)
EMPTY = evidence(0.0, 0.03, 0.5)


def decide(initial, sustained, total=TOTAL, source="context"):
    return judge(source, initial, sustained, total, n_trials=500)


@pytest.mark.parametrize(
    ("initial", "sustained", "total", "label", "undecided"),
    [
        (NEEDED, NOT_NEEDED, TOTAL, "initial", ()),
        (NOT_NEEDED, NEEDED, TOTAL, "sustained", ()),
        (NEEDED, NEEDED, TOTAL, "both", ()),
        (NOT_NEEDED, NOT_NEEDED, EMPTY, "neither", ()),
        (OPEN, OPEN, EMPTY, "neither", ()),
        (NOT_NEEDED, NOT_NEEDED, TOTAL, "undetermined", ("initial", "sustained")),
        (NEEDED, OPEN, TOTAL, "undetermined", ("sustained",)),
        (OPEN, NEEDED, TOTAL, "undetermined", ("initial",)),
        (OPEN, NOT_NEEDED, TOTAL, "undetermined", ("initial",)),
        (OPEN, OPEN, TOTAL, "undetermined", ("initial", "sustained")),
        (NEEDED, NOT_NEEDED, EMPTY, "undetermined", ("initial",)),
    ],
)
def test_every_cell_of_the_rule(initial, sustained, total, label, undecided):
    verdict = decide(initial, sustained, total)
    assert (verdict.label, verdict.open) == (label, undecided)
    assert (verdict.label == "undetermined") == bool(verdict.open)


def test_route_is_needed_only_with_both_kinds_of_evidence():
    assert rate_route(evidence(1.0, 0.1, 0.05), 0.05, 0.05) == "needed"
    assert rate_route(evidence(1.0, 0.1, 0.051), 0.05, 0.05) == "open"
    # Significant but not above the smallest gain worth having.
    assert rate_route(evidence(0.05, 0.1, 1e-9), 0.05, 0.05) == "open"
    # Significant and worthless: a large recording proves tiny effects.
    assert rate_route(evidence(0.01, 0.005, 1e-9), 0.05, 0.05) == "not needed"


def test_large_p_is_no_evidence_of_absence():
    assert rate_route(evidence(0.0, 0.3, 1.0), 0.05, 0.05) == "open"


def test_upper_end_must_be_below_the_smallest_gain():
    assert rate_route(Evidence(Gain(0.0, 0.02, (-0.05, 0.05)), 0.5), 0.05, 0.05) == "open"


def test_trials_to_close_scales_the_standard_error():
    # Distance 0.1 to min_gain, half width 0.2: four times the trials.
    assert trials_to_close(Gain(0.15, 0.1, (-0.05, 0.35)), 500, 0.05) == pytest.approx(2000, abs=1)
    assert trials_to_close(Gain(-0.05, 0.1, (-0.25, 0.15)), 500, 0.05) == pytest.approx(2000, abs=1)
    assert trials_to_close(Gain(1.0, 0.1, (0.8, 1.2)), 500, 0.05) is None
    assert trials_to_close(Gain(0.05, 0.1, (-0.15, 0.25)), 500, 0.05) is None
    assert trials_to_close(Gain(0.0501, 0.1, (-0.15, 0.25)), 500, 0.05) is None
    assert trials_to_close(Gain(0.15, 0.05, (0.05, 0.25)), 500, 0.05) == 501


def test_undetermined_names_how_many_trials_would_close_it():
    verdict = decide(NEEDED, evidence(0.15, 0.2, 0.3))
    assert verdict.trials_to_close == pytest.approx(2000, abs=1)
    assert f"about {verdict.trials_to_close} trials" in verdict.words
    # Two open routes: the slower one counts.
    slower = decide(evidence(0.15, 0.3, 0.3), evidence(0.15, 0.2, 0.3))
    assert slower.trials_to_close == pytest.approx(4500, abs=1)
    # Open by its p value alone: the interval is already off min_gain, and the estimate does not apply.
    assert decide(NEEDED, evidence(1.0, 0.1, 0.2)).trials_to_close is None


def test_words_are_one_sentence_without_claims_on_timing():
    for source in ("interval", "context", "trial"):
        for initial in (NEEDED, NOT_NEEDED, OPEN):
            for sustained in (NEEDED, NOT_NEEDED, OPEN):
                for total in (TOTAL, EMPTY):
                    words = decide(initial, sustained, total, source).words
                    assert words.endswith(".")
                    assert ". " not in words
                    assert "\n" not in words
                    assert "sets the interval" not in words


def test_total_that_straddles_the_smallest_gain_is_not_called_redundancy():
    straddling = decide(NOT_NEEDED, NOT_NEEDED, evidence(0.1, 0.2, 0.3))
    assert straddling.trials_to_close == pytest.approx(8000, abs=1)
    assert "stand in for the other" not in straddling.words
    assert "stand in for the other" in decide(NOT_NEEDED, NOT_NEEDED).words


def test_words_carry_the_figures():
    words = decide(NOT_NEEDED, NEEDED).words
    assert "Between contexts" in words
    assert "1.20 nats a trial (95 % interval 0.90 to 1.50, p = 0.001)" in words
    assert "initial route adds at most 0.02, less than 0.05" in words
    assert "p < 0.001" in decide(NOT_NEEDED, evidence(1.2, 0.3, 1e-7)).words


def test_verdict_that_holds_with_one_dimension_more_stands():
    verdict = decide(NOT_NEEDED, NEEDED)
    assert reconcile(verdict, {4: verdict}, 3) == verdict


def test_verdict_that_changes_with_one_dimension_more_is_undetermined():
    verdict = decide(NOT_NEEDED, NEEDED)
    changed = reconcile(verdict, {4: decide(NEEDED, NOT_NEEDED)}, 3)
    assert (changed.label, changed.open) == ("undetermined", ("initial", "sustained"))
    assert "with 3 latent dimensions the verdict is sustained, with 4 it is initial" in changed.words
    wider = reconcile(verdict, {4: decide(NEEDED, NEEDED)}, 3)
    assert (wider.label, wider.open) == ("undetermined", ("initial",))
    faded = reconcile(verdict, {4: decide(NOT_NEEDED, OPEN)}, 3)
    assert (faded.label, faded.open) == ("undetermined", ("sustained",))


TIED = decide(NOT_NEEDED, NOT_NEEDED)
SUSTAINED_AHEAD = {3: 5.0, 4: 2.0}
INITIAL_AHEAD = {3: -5.0, 4: -2.0}


@pytest.mark.parametrize(
    "above",
    [TIED, decide(OPEN, OPEN), decide(NOT_NEEDED, OPEN), decide(OPEN, NEEDED)],
)
def test_persistence_holds_a_verdict_that_fades(above):
    verdict = decide(NOT_NEEDED, NEEDED)
    assert above.label == "undetermined"
    assert reconcile(verdict, {4: above}, 3, SUSTAINED_AHEAD) == verdict


@pytest.mark.parametrize(
    "above",
    [
        decide(NEEDED, NEEDED),
        decide(NEEDED, NOT_NEEDED),
        decide(NOT_NEEDED, NOT_NEEDED, EMPTY),
        # Open, but with the other route needed: that is a second push or the other end.
        decide(NEEDED, OPEN),
    ],
)
def test_persistence_does_not_hold_a_verdict_that_is_contradicted(above):
    changed = reconcile(decide(NOT_NEEDED, NEEDED), {4: above}, 3, SUSTAINED_AHEAD)
    assert changed.label == "undetermined"
    assert f"with 4 it is {above.label}" in changed.words


@pytest.mark.parametrize(
    "ends",
    [{}, {3: 5.0}, {4: 5.0}, {3: 5.0, 4: 1.9}, {3: 1.9, 4: 5.0}, {3: 5.0, 4: -5.0}, INITIAL_AHEAD],
)
def test_other_end_must_be_excluded_at_both_sizes(ends):
    assert reconcile(decide(NOT_NEEDED, NEEDED), {4: TIED}, 3, ends).label == "undetermined"


def test_the_sign_of_the_ends_is_that_of_the_verdict():
    verdict = decide(NEEDED, NOT_NEEDED)
    assert reconcile(verdict, {4: TIED}, 3, INITIAL_AHEAD) == verdict
    assert reconcile(verdict, {4: TIED}, 3, SUSTAINED_AHEAD).label == "undetermined"
    # The ends say nothing on two pushes, or on none.
    assert reconcile(decide(NEEDED, NEEDED), {4: TIED}, 3, SUSTAINED_AHEAD).label == "undetermined"


def test_fewer_dimensions_do_not_overrule():
    verdict = decide(NEEDED, NOT_NEEDED)
    assert reconcile(verdict, {2: decide(NOT_NEEDED, NEEDED), 4: verdict}, 3) == verdict


def test_unchecked_verdict_says_so():
    verdict = reconcile(decide(NEEDED, NOT_NEEDED), {}, 5)
    assert verdict.label == "initial"
    assert verdict.words.endswith("; this was not checked with 6 latent dimensions.")


def test_undetermined_stays_undetermined():
    verdict = decide(OPEN, NEEDED)
    assert reconcile(verdict, {4: decide(NOT_NEEDED, NEEDED)}, 3) == verdict


def test_verdicts_on_different_sources_are_not_mixed():
    with pytest.raises(PortfireError, match="context cannot be set beside one on trial"):
        reconcile(decide(NEEDED, NOT_NEEDED), {4: decide(NEEDED, NOT_NEEDED, source="trial")}, 3)


def test_overruled_verdict_gives_its_reason():
    verdict = overrule(decide(NEEDED, NOT_NEEDED), "context is confounded with slow drift (R² = 0.80)")
    assert (verdict.label, verdict.open) == ("undetermined", ("initial", "sustained"))
    assert "confounded with slow drift (R² = 0.80)." in verdict.words


def test_mimic_is_named_only_where_the_mode_outlasts_the_trial():
    assert describe_mimic("context", 0.5, 0.8) is None
    assert describe_mimic("context", 0.8, 0.8) is None
    assert "2.5 s, longer than a trial (0.8 s)" in describe_mimic("context", 2.5, 0.8)
    assert "does not decay within a trial" in describe_mimic("trial", math.inf, 0.8)
    with pytest.raises(PortfireError, match="got nan s"):
        describe_mimic("trial", math.nan, 0.8)


def test_bad_values_are_named():
    with pytest.raises(PortfireError, match=r"got 1\.5"):
        evidence(0.0, 0.1, 1.5)
    with pytest.raises(PortfireError, match="'contxt'"):
        decide(NEEDED, NEEDED, source="contxt")


def test_row_is_what_the_result_holds():
    assert evidence(1.0, 0.5, 0.01).to_row() == {"nats_per_trial": 1.0, "ci95": [0.5, 1.5], "p": 0.01}
