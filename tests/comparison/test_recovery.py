"""Recovery: on sessions of known truth the verdict is right or undetermined, never wrong.

Four sessions hold every route of every source once; a benchmark does the same on many more.
"""

from __future__ import annotations

import pytest

from ..estimation._world import SOURCES, draw_world
from ._light import Light, contrast_small

TRUTHS = (
    "interval=sustained,context=initial,trial=both",
    "interval=both,context=none,trial=sustained",
    "interval=none,context=both,trial=initial",
    "interval=initial,context=sustained,trial=none",
)
LABEL = {"none": "neither", "initial": "initial", "sustained": "sustained", "both": "both"}


@pytest.fixture(scope="module")
def recovered() -> dict[str, Light]:
    return {text: contrast_small(draw_world(text, seed, 176)[0]) for seed, text in enumerate(TRUTHS)}


def test_no_verdict_is_wrong(recovered):
    n_right = 0
    for text, light in recovered.items():
        for part in text.split(","):
            source, route = part.split("=")
            verdict = light.contrasts[source].verdict
            assert verdict.label in (LABEL[route], "undetermined"), (text, source, verdict)
            n_right += verdict.label == LABEL[route]
    # Never wrong is easy for one who never answers.
    assert n_right >= 8


def test_pushes_that_are_there_are_seen(recovered):
    """A source that pushes has a total that is beyond doubt; one that does not has none."""
    for text, light in recovered.items():
        for part in text.split(","):
            source, route = part.split("=")
            total = light.contrasts[source].entries["total"]
            if route == "none":
                assert total.evidence.gain.ci95[0] < 0.05, (text, source)
                assert total.p_raw > 1e-3, (text, source)
            else:
                assert total.evidence.gain.ci95[0] > 0.05, (text, source)
                assert total.evidence.p < 1e-6, (text, source)


def test_nested_accounts_agree(recovered):
    for light in recovered.values():
        assert light.ladder.agreed
        fits = list(light.ladder.fits.values())
        assert len(fits) == 1 + 3 * len(SOURCES)
        for larger in fits:
            for smaller in fits:
                if larger.account.contains(smaller.account):
                    assert smaller.value <= larger.value + 0.1 + 1e-9, (larger.account, smaller.account)


def test_the_wrong_end_loses_where_one_route_is_true(recovered):
    for text, light in recovered.items():
        for part in text.split(","):
            source, route = part.split("=")
            if route in ("initial", "sustained"):
                contrast = light.contrasts[source]
                assert (contrast.end_difference > 0) == (route == "sustained"), (text, source)
