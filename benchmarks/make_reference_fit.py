"""Makes fits/reference: one small fit of a simulated session, and the numbers that it gave when it was made.

Run as ``python benchmarks/make_reference_fit.py`` where numbers change on purpose; tests/estimation reads
what it leaves.
"""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import numpy as np

from portfire.accounts import Account
from portfire.estimation import Fit, fit, fit_hazard, with_hazard
from portfire.estimation._objective import Objective
from portfire.inference import pack
from portfire.session import Trials
from portfire.simulate import Scenario, draw_session

FOLDER = Path(__file__).resolve().parents[1] / "fits" / "reference"
ACCOUNT = Account.parse("interval=sustained,context=initial,trial=both")
SCENARIO = Scenario(
    account=Account.parse("interval=sustained,context=initial,trial=initial"),
    n_trials=60,
    n_units=12,
    latent_dim=2,
    sample_s=(0.4, 0.6),
    contexts=("low", "high"),
    extra_s=(0.0, 0.2),
)
SEED, UNTIL_S = 20, 0.2


def reference_trials() -> Trials:
    """The trials of the reference session."""
    session, _ = draw_session(SCENARIO, SEED)
    return session.bin(bin_s=0.02)


def measure(fitted: Fit, trials: Trials) -> dict[str, Any]:
    """Numbers that a fit gives on trials: objective, scores, and what it infers up to a cutoff."""
    value, gradient = Objective(pack(trials, fitted.setup), fitted.setup)(fitted.params)
    scores = fitted.score(trials)
    causal = fitted.infer(trials, until_s=UNTIL_S)
    return {
        "digest": trials.digest,
        "objective": value,
        "gradient_norm": {name: float(np.linalg.norm(part)) for name, part in gradient.items()},
        "loglik": scores["loglik"].tolist(),
        "initial": causal["initial"].values[:, 0].tolist(),
        "sustained": causal["sustained"].values[:, 0].tolist(),
    }


def main() -> None:
    """Write the fit and its numbers."""
    trials = reference_trials()
    fitted = fit(trials, "linear", ACCOUNT, latent_dim=2, seed=SEED)
    hazard = fit_hazard(fitted, trials)
    assert hazard is not None
    fitted = with_hazard(fitted, hazard)
    fitted.save(FOLDER)
    text = json.dumps(measure(fitted, trials), indent=1, allow_nan=False)
    (FOLDER / "expected.json").write_text(text + "\n", encoding="utf-8")
    print(f"{FOLDER}: {fitted.status}, objective {fitted.value:.4f} nats on {len(trials)} trials")


if __name__ == "__main__":
    main()
