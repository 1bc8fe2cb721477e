"""What runs in worker processes beside the fits: persistence of pushes and tests of routes."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np

from portfire.accounts import SOURCES, Account, make_design
from portfire.comparison import (
    Bootstrap,
    Course,
    DrawnP,
    bootstrap_score,
    check_predictions,
    cut_windows,
    deal_units,
    find_course,
    fold_of,
    leave_out,
    list_rivals,
    profile_persistence,
    randomise_source,
    robust_p,
    say_failed,
    score_rival,
    summarise_activity,
    summarise_profile,
    unseen_units,
)
from portfire.errors import PortfireError
from portfire.estimation import (
    Efficient,
    Fit,
    count_route,
    draw_trials,
    fit,
    fit_hazard,
    make_efficient,
    push_directions,
    with_hazard,
)
from portfire.job._atomic import finite
from portfire.job._shared import read_trials
from portfire.job._store import Store
from portfire.job._work import _let_go, read_fit
from portfire.session import Trials

REMOVED = {"initial_unique": "sustained", "sustained_unique": "initial", "total": "none"}
_RANDOM_DRAWS, _STOP_AT, _CHECK_DRAWS = 999, 20, 99
_UNIT_GROUPS = 4
# Signs are turned by blocks of so many trials, fewer where there would be less than so many blocks.
_BLOCK, _LEAST_BLOCKS = 25, 24


def _read_routes(store: Path, ladder: str, source: str) -> dict[str, Fit]:
    """Fits to all trials by the source's route, the other sources by both."""
    accounts = Store(store).read_meta(ladder)["accounts"]
    full = Account.parse(next(iter(accounts)))
    present = tuple(s for s in ("interval", "context", "trial") if full.route(s) == "both")
    full = full.restrict(present)
    return {
        route: read_fit(store, accounts[str(full.replace(source, route))]["key"])
        for route in ("none", "initial", "sustained", "both")
    }


def profile_push(
    store: Path, data: Path, kwargs: dict[str, Any], deps: tuple[str, ...], key: str
) -> dict[str, float]:
    """Profile the persistence of a source's push, and where asked estimate its time course."""
    _let_go(int(kwargs["latent_dim"]))
    trials, source = read_trials(data), str(kwargs["source"])
    ends = _read_routes(store, deps[0], source)

    def refit(account: Account, start: Fit) -> Fit:
        return fit(
            trials,
            start.setup.model,
            account,
            seed=int(kwargs["seed"]),
            start=start,
            drift=bool(kwargs["drift"]),
            tolerance=float(kwargs["tolerance"]),
            max_iterations=int(kwargs["max_iterations"]),
        )

    profile = profile_persistence(source, ends, refit)
    found = summarise_profile(profile)
    content: dict[str, Any] = {
        "source": source,
        "grid_s": list(profile.persistence_s),
        "values": profile.values.tolist(),
        "both": profile.both,
        "n_extra": profile.n_extra,
        "estimate_s": found.estimate_s,
        "ci95_s": list(found.ci95_s),
        "two_pushes": found.two_pushes,
        "behind_both": found.behind_both,
        "course": None,
    }
    if kwargs["course"] and source != "trial":
        assert profile.best is not None
        around = ends["both"] if found.two_pushes else profile.best
        try:
            content["course"] = _describe_course(find_course(around, trials, source, int(kwargs["seed"])))
        except PortfireError as error:
            content["course"] = {"absent": str(error)}
    Store(store).write(key, finite(content), {})
    return {"nats": float(np.max(profile.values))}


def score_rivals(
    store: Path, data: Path, kwargs: dict[str, Any], deps: tuple[str, ...], key: str
) -> dict[str, float]:
    """Fit the rivals of a source's pushes in their place and beside them."""
    _let_go(int(kwargs["latent_dim"]))
    trials, source = read_trials(data), str(kwargs["source"])
    fits = _read_routes(store, deps[0], source)
    setup, full = fits["both"].setup, fits["both"].account
    own = count_route(full, source, 0.0, setup)
    n_params = {"none": 0, "initial": own, "sustained": own, "both": 2 * own}
    rows: list[dict[str, Any]] = []
    for rival in list_rivals(setup):
        if rival.source != source:
            continue
        try:
            found = score_rival(rival, fits, trials, n_params, float(kwargs["tolerance"]))
        except PortfireError as error:
            rows.append({"rival": rival.name, "source": source, "absent": str(error)})
            continue
        routes = {"neither": "none"} | {route: route for route in ("initial", "sustained", "both")}
        rows.append(
            {
                "rival": rival.name,
                "source": source,
                "parameters": rival.n_extra + n_params[rival.instead],
                "ahead_nats": {label: found.margin(label) for label in routes},
                "beats": [label for label in routes if found.beats(label)],
                "beside_nats": found.beside_nats,
                "p": found.p,
            }
        )
    Store(store).write(key, finite({"rivals": rows}), {})
    return {"rivals": len(rows)}


def check_fit(
    store: Path, data: Path, kwargs: dict[str, Any], deps: tuple[str, ...], key: str
) -> dict[str, float]:
    """Predictive checks of the full account, on sessions whose trials end by first passage."""
    trials = read_trials(data)
    accounts = Store(store).read_meta(deps[0])["accounts"]
    fitted = read_fit(store, next(iter(accounts.values()))["key"])
    hazard = fit_hazard(fitted, trials)
    fitted = fitted if hazard is None else with_hazard(fitted, hazard)
    rng = np.random.default_rng([int(kwargs["seed"]), 53])
    try:
        windows = cut_windows(trials)
        recorded = summarise_activity(trials, windows)
        drawn = [
            summarise_activity(draw_trials(fitted, trials, rng, hazard is not None), windows)
            for _ in range(_CHECK_DRAWS)
        ]
        checks = check_predictions(recorded, drawn, float(kwargs["level"]))
    except PortfireError as error:
        Store(store).write(key, {"checks": [], "failed": None, "absent": str(error)}, {})
        return {"checks": 0}
    rows = [{"check": c.name, **{k: v for k, v in vars(c).items() if k != "name"}} for c in checks]
    content = {"checks": rows, "failed": say_failed(checks), "absent": None}
    Store(store).write(key, finite(content), {})
    return {"checks": len(rows)}


def score_unseen_units(
    store: Path, data: Path, kwargs: dict[str, Any], deps: tuple[str, ...], key: str
) -> dict[str, float]:
    """Groups of units predicted from the others, on the trials that a fold holds out."""
    trials = read_trials(data)
    fitted = read_fit(store, deps[0])
    fold = fold_of(trials.index, trials.n_session, int(kwargs["folds"]))
    rows = np.flatnonzero(np.isin(fold, kwargs["held_out"]))
    groups = deal_units(len(trials.unit), _UNIT_GROUPS, int(kwargs["seed"]))
    loglik = unseen_units(fitted, trials[rows], groups)
    Store(store).write(key, {"groups": [g.tolist() for g in groups]}, {"rows": rows, "loglik": loglik})
    return {"trials": len(rows)}


def score_unseen_condition(
    store: Path, data: Path, kwargs: dict[str, Any], deps: tuple[str, ...], key: str
) -> dict[str, float]:
    """Accounts fitted to all conditions but one, and their scores of that one."""
    _let_go(int(kwargs["latent_dim"]))
    trials, seed = read_trials(data), int(kwargs["seed"])
    stored = Store(store).read_meta(deps[0])["accounts"]
    present = read_fit(store, next(iter(stored.values()))["key"]).setup.sources
    every = [Account.parse(name).restrict(present) for name in stored]
    accounts = [account for account in every if _concerns(account, every[0], kwargs["sources"])]

    def refit(account: Account, train: Trials) -> Fit:
        start = read_fit(store, stored[str(account)]["key"])
        drift, tolerance = bool(kwargs["drift"]), float(kwargs["tolerance"])
        return fit(
            train, start.setup.model, account, seed=seed, start=start, drift=drift, tolerance=tolerance
        )

    found = leave_out(trials, int(kwargs["condition"]), accounts, refit)
    arrays = {f"loglik_{k}": values for k, values in enumerate(found.loglik.values())}
    Store(store).write(key, {"accounts": list(found.loglik)}, {"rows": found.rows, **arrays})
    return {"accounts": len(accounts)}


def _concerns(account: Account, full: Account, sources: Sequence[str]) -> bool:
    """Whether an account differs from the full one in one of these sources, or not at all."""
    return all(account.route(s) == full.route(s) or s in sources for s in SOURCES)


def _describe_course(course: Course) -> dict[str, Any]:
    low, high = course.band()
    return {
        "levels": list(course.levels),
        "edges_s": course.edges_s.tolist(),
        "at_cue": course.at_cue.tolist(),
        "at_cue_se": course.at_cue_se.tolist(),
        "rate": course.rate.tolist(),
        "rate_low": low.tolist(),
        "rate_high": high.tolist(),
        "share_on_axis": course.share,
    }


def test_routes(
    store: Path, data: Path, kwargs: dict[str, Any], deps: tuple[str, ...], key: str
) -> dict[str, float]:
    """Tests of a source's routes that lean on the model less than the likelihood ratio does."""
    _let_go(int(kwargs["latent_dim"]))
    trials, source, seed = read_trials(data), str(kwargs["source"]), int(kwargs["seed"])
    by_route = _read_routes(store, deps[0], source)
    full = by_route["both"].account
    block = np.asarray(trials.index) // max(1, min(_BLOCK, trials.n_session // _LEAST_BLOCKS))
    rows = make_design(trials).rows
    out: dict[str, Any] = {}
    for place, (entry, route) in enumerate(REMOVED.items()):
        fitted = by_route[route]
        directions = push_directions(full, fitted.account, fitted.params, fitted.setup, rows)
        efficient = make_efficient(fitted, trials, directions, np.random.default_rng([seed, 31, place]))
        tests: dict[str, Any] = {"blocks": _row(robust_p(efficient, trials, block, _RANDOM_DRAWS, seed))}
        if kwargs["bootstrap"]:
            tests["bootstrap"] = _bootstrap(efficient, fitted, by_route["both"], trials, kwargs)
        if entry == "total" and source != "trial":
            dealt = randomise_source(
                fitted, trials, source, str(kwargs["assignment"]), False, _RANDOM_DRAWS, seed
            )
            tests["labels"] = {**_row(dealt), "assignment": kwargs["assignment"]}
            if source == "context" and trials.responded.any():
                tests["labels_matched"] = _match(fitted, trials, seed)
        out[entry] = tests
    Store(store).write(key, finite(out), {})
    return {"entries": len(out)}


def _match(fitted: Fit, trials: Trials, seed: int) -> dict[str, Any]:
    try:
        return _row(randomise_source(fitted, trials, "context", "free", True, _RANDOM_DRAWS, seed))
    except PortfireError as error:
        return {"p": None, "absent": str(error)}


def _row(found: DrawnP) -> dict[str, Any]:
    return {"p": found.p, "se": found.se, "draws": found.n_draws}


def _bootstrap(
    efficient: Efficient, fitted: Fit, full: Fit, trials: Trials, kwargs: dict[str, Any]
) -> dict[str, Any]:
    hazard = fit_hazard(fitted, trials)
    seed = int(kwargs["seed"])

    def refit(drawn: Trials) -> float:
        again = fit(drawn, fitted.setup.model, fitted.account, seed=seed, start=fitted, tolerance=0.1)
        larger = fit(drawn, fitted.setup.model, full.account, seed=seed, start=again, tolerance=0.1)
        return 2 * (larger.value - again.value)

    if hazard is not None:
        efficient = replace(efficient, fitted=with_hazard(fitted, hazard))
    found: Bootstrap = bootstrap_score(
        efficient, trials, seed, int(kwargs["bootstrap"]), _STOP_AT, hazard is not None, refit
    )
    checks = found.checks
    return {
        **_row(found.drawn),
        "statistic": found.statistic,
        "p_at_bound": None if found.at_bound is None else found.at_bound.p,
        "refits": len(checks),
        "refits_mean_score": float(checks[:, 0].mean()) if len(checks) else None,
        "refits_mean_lr": float(checks[:, 1].mean()) if len(checks) else None,
    }
