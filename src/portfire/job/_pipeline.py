"""The whole job on one session: size, accounts, contrasts, decode, and what is written of them."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

import numpy as np

from portfire.accounts import Account
from portfire.dynamics import READOUTS, ModelFile, read_model
from portfire.errors import InputError
from portfire.job._assemble import write_outputs
from portfire.job._evidence import collect_contrasts
from portfire.job._file import Job, check_job, session_name
from portfire.job._findings import Findings
from portfire.job._shared import write_trials
from portfire.job._stages import ALL, Sizes, Stages, shifted
from portfire.job._tested import run_tests
from portfire.job._workspace import Workspace
from portfire.session import Trials, read_session
from portfire.timing import Decoding, decode, describe_limits, round_cutoff

N_PARTS = 4


def run_job(job: Job, workspace: Workspace) -> None:
    """Do a job and write its results into the workspace's folder.

    A list of sessions is done one by one, each in a folder of its own name, with a common
    ``result.json`` that names them.
    """
    if len(job.sessions) == 1:
        _run_session(job, workspace)
        return
    from portfire.job._several import run_several

    run_several(job, workspace, _run_session)


def _run_session(job: Job, workspace: Workspace) -> None:
    session = read_session(job.sessions[0], columns=dict(job.columns) or None)
    trials = session.bin(job.window.bin_s, job.window.before_set_s, job.window.min_rate_hz)
    job = check_job(job, len(trials.unit), len(trials))
    models = [
        replace(read_model(path), name=name)
        for path, name in zip(job.model.files, job.model.names, strict=True)
    ]
    _refuse_mixed_readouts(job, models)
    progress = workspace.progress
    progress.say(
        f"{session_name(job.sessions[0])}: {len(trials)} trials, {len(trials.unit)} units, "
        f"{len(trials.conditions)} conditions"
    )
    stages = Stages(job, workspace, trials, write_trials(workspace.data, trials), models)
    sizes = stages.choose_sizes()
    best = sizes.chosen[ALL]
    progress.say(f"chosen: {models[best.model].name} with {best.latent_dim} latent dimensions")
    present, absent = _present_sources(trials, job.compare.sources)
    job = replace(job, compare=replace(job.compare, sources=present))
    stages = replace(stages, job=job)
    ladders = _run_ladders(stages, sizes)
    tested = run_tests(stages, sizes, ladders)
    decodings = _run_decode(stages, sizes)
    describe, causal = _run_descriptions(stages, sizes)
    not_run = [
        f"The source {source} is not contrasted: the session has {_explain_absent(trials, source)}."
        for source in absent
    ]
    if not present:
        not_run.append(f"No contrasts: the job names no source{' that this session has' if absent else ''}.")
    if not decodings:
        why = "no trial has a response" if job.decode.cutoffs_s else "the job names no cutoff"
        not_run.append(f"No decode: {why}.")
    warnings = describe_limits(decodings, job.tests.level)
    not_run += tested.not_run
    findings = Findings(
        job, trials, sizes, ladders, decodings, describe, causal, warnings, tuple(not_run), tested
    )
    contrasts = collect_contrasts(findings, workspace.store)
    write_outputs(findings, contrasts, models, workspace)
    for row in contrasts.rows:
        progress.say(f"{row['source']}: {row['verdict']}")


def _refuse_mixed_readouts(job: Job, models: Sequence[ModelFile]) -> None:
    """Models are compared by the likelihood of the same data: counts, or square roots of counts."""
    readouts = {model.readout: model.name for model in models}
    if len({READOUTS[readout].of_counts for readout in readouts}) > 1:
        named = " and ".join(f"{name!r} has {readout}" for readout, name in sorted(readouts.items()))
        raise InputError(
            f"{job.source or job.sessions[0]}: [model] file: the likelihoods of different readouts cannot be "
            f"compared, but {named}; give models whose readouts are all of counts, or all of square roots"
        )


def _present_sources(trials: Trials, wanted: Sequence[str]) -> tuple[tuple[str, ...], tuple[str, ...]]:
    """Sources that the session has, and wanted ones that it lacks."""
    intervals = {interval for _, interval in trials.conditions if interval is not None}
    has = {"interval": len(intervals) > 1, "context": len(trials.contexts) > 1, "trial": True}
    present = tuple(source for source in Account.__dataclass_fields__ if source in wanted and has[source])
    return present, tuple(source for source in wanted if not has[source])


def _explain_absent(trials: Trials, source: str) -> str:
    """What a session has instead of several values of a source."""
    if source == "context":
        return "no context column" if trials.context is None else "one context"
    return "no sample_s column" if trials.sample_s is None else "one sample interval"


def _run_ladders(stages: Stages, sizes: Sizes) -> dict[tuple[int, int, str], str]:
    # Held out at the chosen size; one dimension fewer and more on all trials only, source by source.
    sources = stages.job.compare.sources
    wanted = {(0, where, ""): sizes.chosen[where] for where in (ALL, *stages.folds)}
    for shift in (1, -1):
        moved = shifted(sizes.chosen[ALL], shift, len(stages.trials.unit))
        if moved is not None:
            wanted.update({(shift, ALL, source): moved for source in sources})
    fits = stages.full_fits([(size, where) for (_, where, _), size in wanted.items()], sizes)
    tasks = {
        (shift, where, source): stages.ladder_task(
            size, where, fits[size, where], [source] if source else sources, shift != 0
        )
        for (shift, where, source), size in wanted.items()
    }
    stages.run(sorted(tasks.values(), key=lambda task: -task.kwargs["latent_dim"]))
    return {which: task.key for which, task in tasks.items()}


def _run_decode(stages: Stages, sizes: Sizes) -> tuple[Decoding, ...]:
    job, trials = stages.job, stages.trials
    cutoffs = [c for c in job.decode.cutoffs_s if c > 0 or trials.n_before]
    if not cutoffs or not np.isfinite(trials.produced_s).any():
        return ()
    best = sizes.chosen[ALL]
    fits = stages.full_fits([(best, fold) for fold in stages.folds], sizes)
    tasks = [
        stages.task(
            "infer_features",
            f"states without fold {fold + 1}",
            "states",
            [fits[best, fold]],
            cutoffs_s=cutoffs,
        )
        for fold in stages.folds
    ]
    stages.run(tasks)
    read = [stages.workspace.store.read(task.key)[1] for task in tasks]
    found: list[Decoding] = []
    for position, cutoff in enumerate(cutoffs):
        stages.workspace.stop.check()
        by_name = {
            name: np.stack([arrays[f"{name}_{position}"] for arrays in read])
            for name in ("initial", "sustained", "state")
        }
        last = trials.n_before + round_cutoff(cutoff, trials.bin_s)[0]
        features = {"initial": by_name["initial"]}
        if cutoff > 0:
            features["sustained"] = by_name["sustained"]
            features["initial+sustained"] = np.concatenate([by_name["initial"], by_name["sustained"]], axis=2)
        features["state"] = by_name["state"]
        features["counts"] = trials.counts[:, :last].sum(axis=1).astype(float)[None]
        for variant in ("all", "late"):
            found += decode(
                features,
                trials.produced_s,
                trials.condition,
                trials.index,
                trials.n_session,
                job.compare.folds,
                cutoff,
                trials.bin_s,
                variant=variant,
                draws=job.decode.draws,
                seed=job.seed,
            )
    return tuple(found)


def _run_descriptions(stages: Stages, sizes: Sizes) -> tuple[str, tuple[str, ...]]:
    best = sizes.chosen[ALL]
    key = stages.full_fits([(best, ALL)], sizes)[best, ALL]
    describe = stages.task("describe_fit", "states and rates", "states", [key], seed=stages.job.seed)
    causal = [
        stages.task(
            "infer_causal", f"causal states, part {part + 1}", "states", [key], part=part, n_parts=N_PARTS
        )
        for part in range(N_PARTS)
    ]
    stages.run([describe, *causal])
    return describe.key, tuple(task.key for task in causal)
