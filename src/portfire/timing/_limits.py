"""What a decode could not compute, or cannot find, with the trials that it had."""

from __future__ import annotations

from collections.abc import Sequence

from ._decoded import LATE_S, Decoding

_SUBJECT = {
    "all": "Decode",
    "late": f"Decode of late responses ({LATE_S:g} s or more after the cutoff)",
}


def describe_limits(decodings: Sequence[Decoding], level: float) -> tuple[str, ...]:
    """Say at which cutoffs p cannot be small, and where trials were not scored.

    Parameters
    ----------
    decodings : sequence of Decoding
        Of any cutoffs, feature sets and variants.
    level : float
        Level that p is meant for.

    Returns
    -------
    tuple of str
        A sentence for each variant that has such a cutoff, over all of them and all feature sets.
    """
    sentences = []
    for variant, subject in _SUBJECT.items():
        # Which trials are scored and which shifts there are hangs on the cutoff and hardly on the features:
        # of each cutoff the feature set with the fewest stands for all.
        fewest: dict[float, Decoding] = {}
        unscored: dict[float, int] = {}
        for found in decodings:
            if found.variant != variant:
                continue
            before = fewest.get(found.cutoff_s)
            if before is None or found.null_draws < before.null_draws:
                fewest[found.cutoff_s] = found
            lost = found.n_used - found.n_trials
            unscored[found.cutoff_s] = max(lost, unscored.get(found.cutoff_s, 0))
        short = [
            f"{cutoff:g} s ({found.null_draws} {'shift' if found.null_draws == 1 else 'shifts'} of "
            f"{found.n_used} trials)"
            for cutoff, found in sorted(fewest.items())
            if 1.0 / (1.0 + found.null_draws) > level
        ]
        left = [
            f"{cutoff:g} s ({lost} of {fewest[cutoff].n_used})"
            for cutoff, lost in sorted(unscored.items())
            if lost
        ]
        parts = []
        if short:
            parts.append(f"too few distinct shifts for p to reach {level:g} at the {_list(short)}")
        if left:
            parts.append(
                "trials not scored, since fewer than three training trials of their condition were still "
                f"running or their intervals did not vary, at the {_list(left)}"
            )
        if parts:
            sentences.append(f"{subject}: {'; '.join(parts)}.")
    return tuple(sentences)


def _list(parts: Sequence[str]) -> str:
    if len(parts) == 1:
        return f"cutoff {parts[0]}"
    return f"cutoffs {', '.join(parts[:-1])} and {parts[-1]}"
