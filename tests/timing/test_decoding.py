"""Decode: the statistic, what may enter it, its null, and its false alarms."""

import numpy as np
import pytest

from portfire.comparison import fold_of, training_rows
from portfire.errors import PortfireError
from portfire.timing import decode, describe_limits, find_running, round_cutoff
from portfire.timing._decoding import choose_shifts

N_FOLDS = 5


def draw(n=200, corr=0.0, n_conditions=3, n_features=4, seed=0, drift=0.0):
    rng = np.random.default_rng(seed)
    condition = rng.integers(n_conditions, size=n)
    z = rng.normal(size=n)
    x = rng.normal(size=(n, n_features))
    if drift:
        keep = np.exp(-1 / 50)
        slow = np.zeros((n, n_features + 1))
        slow[0] = rng.normal(size=n_features + 1)
        for t in range(1, n):
            slow[t] = keep * slow[t - 1] + np.sqrt(1 - keep**2) * rng.normal(size=n_features + 1)
        z = np.sqrt(1 - drift) * z + np.sqrt(drift) * slow[:, 0]
        x = np.sqrt(1 - drift) * x + np.sqrt(drift) * slow[:, 1:]
    x[:, 0] = corr * z + np.sqrt(1 - corr**2) * x[:, 0]
    x += rng.normal(size=(n_conditions, n_features))[condition]
    return x, 0.5 * np.exp(0.1 * condition + 0.15 * z), condition


def run(x, produced, condition, cutoff_s=0.1, **options):
    n = len(produced)
    settings = {"index": np.arange(n), "n_session": n, "n_folds": N_FOLDS, "bin_s": 0.02, **options}
    return decode({"state": x}, produced, condition, cutoff_s=cutoff_s, **settings)[0]


def test_statistic_is_the_one_of_the_interface():
    """Recomputed trial by trial, in plain loops, from what the rows hold."""
    x, produced, condition = draw(corr=0.6)
    cutoff = 0.44
    row = run(x, produced, condition, cutoff)
    running = produced >= cutoff
    assert 0.1 < 1 - running.mean() < 0.4
    fold = fold_of(np.arange(200), 200, N_FOLDS)
    residual = total = 0.0
    for k, i in enumerate(row.row):
        train = [
            t for t in training_rows(np.arange(200), 200, N_FOLDS, {int(fold[i])})
            if running[t] and condition[t] == condition[i]
        ]  # fmt: skip
        m, s = np.log(produced[train]).mean(), np.log(produced[train]).std()
        assert row.baseline_s[k] == pytest.approx(np.exp(m))
        z = (np.log(produced[i]) - m) / s
        total += z**2
        residual += (z - (np.log(row.predicted_s[k]) - m) / s) ** 2
    assert row.r2 == pytest.approx(1 - residual / total)
    assert row.n_trials == row.running == running.sum()
    assert row.row.tolist() == np.flatnonzero(running).tolist()
    assert row.fold.tolist() == fold[running].tolist()


def test_prediction_is_ridge_with_its_penalty_left_out_by_one():
    """One fold again with explicit refits: free condition means, one trial left out at a time."""
    x, produced, condition = draw(n=60, corr=0.5, n_conditions=2, n_features=3, seed=3)
    row = run(x, produced, condition)
    train = training_rows(np.arange(60), 60, N_FOLDS, {0})
    held = np.flatnonzero(fold_of(np.arange(60), 60, N_FOLDS) == 0)
    y = np.log(produced)
    z, f, mean, sd = np.empty(60), np.empty_like(x), np.empty(60), np.empty(60)
    for c in range(2):
        inside = train[condition[train] == c]
        here = condition == c
        mean[here], sd[here] = y[inside].mean(), y[inside].std()
        f[here] = x[here] - x[inside].mean(0)
    z = (y - mean) / sd
    f /= np.sqrt((f[train] ** 2).mean(0))
    dummies = np.eye(2)[condition]
    best, best_loss = np.zeros(3), None
    for penalty in [np.inf, *(np.logspace(-3, 3, 13) * len(train))]:
        loss = 0.0
        for i in train:
            rest = train[train != i]
            design = np.hstack([dummies, f])
            ridge = np.diag([0, 0] + [penalty if np.isfinite(penalty) else 1e12] * 3)
            beta = np.linalg.solve(design[rest].T @ design[rest] + ridge, design[rest].T @ z[rest])
            loss += (z[i] - design[i] @ beta) ** 2
        if best_loss is None or loss < best_loss:
            best_loss = loss
            if np.isfinite(penalty):
                best = np.linalg.solve(f[train].T @ f[train] + penalty * np.eye(3), f[train].T @ z[train])
    expected = np.exp(mean[held] + sd[held] * (f[held] @ best))
    assert np.abs(best).max() > 0.1
    assert row.predicted_s[row.fold == 0] == pytest.approx(expected, rel=1e-9)


def test_features_of_a_fold_come_from_its_own_fit():
    """Each fold's features are the true ones turned by its own map; a mix of folds would not predict."""
    x, produced, condition = draw(corr=0.8)
    rng = np.random.default_rng(5)
    turned = np.stack([x @ np.linalg.qr(rng.normal(size=(4, 4)))[0] for _ in range(N_FOLDS)])
    assert run(turned, produced, condition).r2 == pytest.approx(run(x, produced, condition).r2, abs=0.02)


def test_held_out_response_does_not_touch_its_own_prediction():
    x, produced, condition = draw(corr=0.5)
    before = run(x, produced, condition)
    changed = produced.copy()
    changed[7] *= 1.5
    after = run(x, changed, condition)
    assert after.predicted_s[after.fold == 0] == pytest.approx(
        before.predicted_s[before.fold == 0], rel=1e-12
    )
    assert after.predicted_s[after.fold == 1] != pytest.approx(before.predicted_s[before.fold == 1], rel=1e-9)


def test_differences_between_conditions_predict_nothing():
    """The feature is the condition; condition means of the interval differ by many SDs."""
    rng = np.random.default_rng(6)
    condition = np.arange(200) % 4
    produced = 0.4 * np.exp(0.5 * condition + 0.1 * rng.normal(size=200))
    row = run(condition[:, None] + 0.01 * rng.normal(size=(200, 1)), produced, condition, 0.02)
    assert row.r2 < 0.03


def test_survivors_baseline_gives_noise_no_r2():
    """At a cutoff that a fifth of the trials do not reach, pure noise has an R² of about zero."""
    r2 = []
    for seed in range(40):
        x, produced, condition = draw(seed=seed)
        r2.append(run(x, produced, condition, float(np.quantile(produced, 0.2)), draws=1).r2)
    assert abs(np.mean(r2)) < 0.02


def test_signal_is_found_and_interval_holds_it():
    x, produced, condition = draw(n=400, corr=0.6)
    row = run(x, produced, condition)
    assert row.p == pytest.approx(1 / 161)
    assert row.null_draws == 160
    assert row.ci95[0] < 0.36 < row.ci95[1]
    assert row.null95[1] < row.r2_window
    assert describe_limits([row], 0.05) == ()


def test_false_alarms_and_power():
    """200 sessions each: alarms within binomial bounds (two-sided 0.1 %) around 5 %."""
    alarms = {"independent": 0, "drift": 0, "ended": 0, "drift, ended": 0}
    for seed in range(200):
        x, produced, condition = draw(seed=seed)
        alarms["independent"] += run(x, produced, condition).p <= 0.05
        alarms["ended"] += run(x, produced, condition, float(np.quantile(produced, 0.2))).p <= 0.05
        x, produced, condition = draw(seed=seed, drift=0.5)
        alarms["drift"] += run(x, produced, condition).p <= 0.05
        alarms["drift, ended"] += run(x, produced, condition, float(np.quantile(produced, 0.2))).p <= 0.05
    # scipy.stats.binom.ppf([0.0005, 0.9995], 200, 0.05) = 2, 22
    assert all(2 <= count <= 22 for count in alarms.values()), alarms
    found = 0
    for seed in range(60):
        x, produced, condition = draw(seed=seed, corr=0.3)
        found += run(x, produced, condition).p <= 0.05
    assert found >= 24


def test_observed_statistic_of_p_is_that_of_the_window():
    """The window alone, decoded as a session of its own positions, gives the same statistic."""
    x, produced, condition = draw(corr=0.5)
    window = slice(40, 160)
    alone = decode(
        {"state": x[window]},
        produced[window],
        condition[window],
        index=np.arange(200)[window],
        n_session=200,
        n_folds=N_FOLDS,
        cutoff_s=0.1,
        bin_s=0.02,
        draws=1,
    )[0]
    assert run(x, produced, condition).r2_window == pytest.approx(alone.r2, rel=1e-9)


def test_shifts_are_all_or_evenly_chosen():
    assert choose_shifts(10, 1000).tolist() == [-2, -1, 1, 2]
    assert len(choose_shifts(600, 1000)) == 240
    few = choose_shifts(600, 40)
    assert len(few) == len(set(few)) == 40
    assert (few[0], few[-1]) == (-120, 120)
    assert 0 not in few
    assert np.diff(few[few < 0]).max() <= 7
    assert np.diff(few[few > 0]).max() <= 7
    assert choose_shifts(4, 10).size == 0


def test_too_few_shifts_are_said():
    x, produced, condition = draw(n=40, corr=0.9, n_conditions=1)
    row = run(x, produced, condition)
    assert row.null_draws == 16
    assert row.p >= 1 / 17
    assert describe_limits([row], 0.06) == ()
    assert describe_limits([row], 0.05) == (
        "Decode: too few distinct shifts for p to reach 0.05 at the cutoff 0.1 s (16 shifts of 40 trials).",
    )


def test_sparse_conditions_are_dropped_and_counted():
    x, produced, condition = draw(n=100)
    condition[[10, 40, 80]] = 7
    row = run(x, produced, condition)
    assert row.n_trials == 97
    assert row.n_used == 100
    assert not set(row.row) & {10, 40, 80}
    (said,) = describe_limits([row], 0.05)
    assert "not scored" in said
    assert said.endswith("at the cutoff 0.1 s (3 of 100).")


def test_cutoff_is_rounded_to_whole_bins():
    assert round_cutoff(0.3, 0.02) == (15, 0.3)
    assert round_cutoff(0.31, 0.02) == (16, 0.32)
    assert round_cutoff(0.0, 0.02) == (0, 0.0)
    produced = np.array([0.31, 0.32, 0.33, np.nan])
    assert find_running(produced, 0.313, 0.02).tolist() == [False, True, True, False]
    x, produced, condition = draw()
    assert run(x, produced, condition, 0.313).cutoff_s == 0.32


def test_late_variant_uses_late_responses_only():
    x, produced, condition = draw()
    row = run(x, produced, condition, 0.4, variant="late")
    assert row.n_used == (produced >= 0.55).sum()
    assert row.running == (produced >= 0.4).sum()
    assert row.produced_s.min() >= 0.55
    assert row.to_row()["variant"] == "late"


def test_late_responses_have_one_warning_that_names_the_cutoffs():
    x, produced, condition = draw(n=100, n_conditions=1)
    rows = [
        row
        for cutoff in (0.1, 0.4, 0.45)
        for variant in ("all", "late")
        for row in decode(
            {"state": x, "counts": x[:, :1]},
            produced,
            condition,
            index=np.arange(100),
            n_session=100,
            n_folds=N_FOLDS,
            cutoff_s=cutoff,
            bin_s=0.02,
            variant=variant,
        )
    ]
    used = {row.cutoff_s: row.n_used for row in rows if row.variant == "late"}
    assert describe_limits(rows, 0.05) == (
        "Decode of late responses (0.15 s or more after the cutoff): too few distinct shifts for p to reach "
        f"0.05 at the cutoffs 0.4 s ({2 * (used[0.4] // 5)} shifts of {used[0.4]} trials) and 0.46 s "
        f"({2 * (used[0.46] // 5)} shifts of {used[0.46]} trials).",
    )


def test_trials_without_response_are_left_aside():
    x, produced, condition = draw()
    produced[[3, 50]] = np.nan
    x[3] = np.nan
    row = run(x, produced, condition)
    assert row.running == 198
    assert np.isfinite(row.predicted_s).all()


def test_nobody_left_gives_an_empty_row():
    x, produced, condition = draw(n=40)
    row = run(x, produced, condition, 9.0)
    assert (row.running, row.n_trials, row.r2, row.ci95, row.p, row.null95) == (0, 0, None, None, None, None)
    assert "at the cutoff 9 s (0 shifts of 0 trials)" in describe_limits([row], 0.05)[0]
    assert row.to_table([""] * 40).empty


def test_silent_units_do_no_harm():
    x, produced, condition = draw(corr=0.5)
    padded = np.hstack([x, np.zeros((200, 2)), np.full((200, 1), 3.0)])
    assert run(padded, produced, condition).r2 == pytest.approx(run(x, produced, condition).r2, abs=1e-9)


def test_more_features_than_trials():
    _, produced, condition = draw(n=60)
    row = run(np.random.default_rng(0).poisson(1.0, (60, 90)), produced, condition)
    assert -0.5 < row.r2 < 0.5


def test_same_seed_same_result_and_inputs_unchanged():
    x, produced, condition = draw(corr=0.3)
    copies = x.copy(), produced.copy(), condition.copy()
    first, second = run(x, produced, condition), run(x, produced, condition)
    assert first.to_row() == second.to_row()
    for now, then in zip((x, produced, condition), copies, strict=True):
        assert np.array_equal(now, then)


def test_rows_of_the_result():
    x, produced, condition = draw(corr=0.4)
    row = run(x, produced, condition)
    assert {"cutoff_s", "features", "n_trials", "r2_within_condition", "ci95", "p", "null95"} <= set(
        row.to_row()
    )
    table = row.to_table([f"t{i}" for i in range(200)])
    assert table.columns[:8].tolist() == [
        "trial", "condition", "fold", "cutoff_s", "features", "produced_s", "baseline_s", "predicted_s",
    ]  # fmt: skip
    assert table["trial"].tolist() == [f"t{i}" for i in row.row]
    z = np.log(table.produced_s / table.baseline_s) / table.log_sd
    z_hat = np.log(table.predicted_s / table.baseline_s) / table.log_sd
    assert 1 - ((z - z_hat) ** 2).sum() / (z**2).sum() == pytest.approx(row.r2)


def test_bad_input_is_named():
    x, produced, condition = draw()
    bad = x.copy()
    bad[17, 2] = np.nan
    with pytest.raises(PortfireError, match="feature 2 of 'state' is nan on row 17"):
        run(bad, produced, condition)
    with pytest.raises(PortfireError, match=r"shape \(199, 4\); they must be \(200 trials"):
        run(x[:199], produced, condition)
    with pytest.raises(PortfireError, match=r"shape \(3, 200, 4\)"):
        run(np.stack([x] * 3), produced, condition)
    with pytest.raises(PortfireError, match="position 0 follows position 199"):
        run(x, produced, condition, index=np.roll(np.arange(200), 1))
    with pytest.raises(PortfireError, match="'early'"):
        run(x, produced, condition, variant="early")
    produced[4] = -0.1
    with pytest.raises(PortfireError, match=r"-0\.1 s"):
        run(x, produced, condition)
