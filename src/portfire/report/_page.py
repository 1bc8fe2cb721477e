"""The page: words, figures and tables in one HTML file."""

from __future__ import annotations

from collections.abc import Mapping
from importlib.resources import files
from pathlib import Path
from typing import Any

from jinja2 import Environment, StrictUndefined

from portfire.report import _tables, _words
from portfire.report._accounts import describe_levels
from portfire.report._decode_words import state_decode
from portfire.report._folder import RunFolder
from portfire.report._persistence import state_persistence
from portfire.report._rates import state_rates
from portfire.report._style import Absent, Drawn, clean
from portfire.report._tables_tests import list_checks, list_rivals, list_tests, list_unseen, state_yardsticks


def write_page(run: RunFolder, figures: Mapping[str, Drawn | Absent]) -> str:
    """Return the page as HTML; all text from data is escaped."""
    here = files("portfire.report")
    environment = Environment(
        autoescape=True, undefined=StrictUndefined, finalize=_finalize, trim_blocks=True, lstrip_blocks=True
    )
    template = environment.from_string(here.joinpath("page.html").read_text(encoding="utf-8"))
    session = run.part("session")
    return template.render(
        style=here.joinpath("page.css").read_text(encoding="utf-8"),
        title=_title(run),
        facts=_list_facts(run),
        verdicts=[_card(c, run, session.get("trials_used")) for c in run.rows("contrasts")],
        untested=_words.explain_untested(run),
        decode_sentences=state_decode(run),
        rates_sentences=state_rates(run),
        levels=describe_levels(run),
        by_time=_words.state_time(run),
        yardsticks=state_yardsticks(run),
        by_fold=_words.state_by_fold(run),
        figures={key: _as_dict(figure) for key, figure in figures.items()},
        tables={
            "contrasts": _tables.list_contrasts(run),
            "dims": _tables.list_dims(run),
            "tests": list_tests(run),
            "rivals": list_rivals(run),
            "checks": list_checks(run),
            "unseen": list_unseen(run),
            "accounts": _tables.list_accounts(run),
            "sizes": _tables.list_sizes(run),
            "behaviour": _tables.list_behaviour(run),
            "relations": _tables.list_relations(run),
            "decode": _tables.list_decode(run),
            "left_out": _tables.list_left_out(run),
            "settings": _tables.list_settings(run),
        },
        weber=_state_weber(run),
        warnings=[str(w) for w in run.result.get("warnings") or []],
        not_run=_list_not_run(run),
        version=run.result.get("portfire"),
    )


def _finalize(value: Any) -> Any:
    if hasattr(value, "__html__"):  # our own style, SVG or markup, already safe
        return value
    return "not given" if value is None else clean(value)


def _title(run: RunFolder) -> str:
    return run.path.resolve().name or "run"


def _name_session(run: RunFolder) -> str | None:
    path = run.part("settings").get("session")
    return Path(path).name if isinstance(path, str) else None


def _as_dict(figure: Drawn | Absent) -> dict[str, Any]:
    if isinstance(figure, Drawn):
        return {"title": figure.title, "svg": figure.svg, "caption": figure.caption, "absent": None}
    return {"title": figure.title, "svg": None, "caption": None, "absent": figure.reason}


def _list_facts(run: RunFolder) -> list[tuple[str, str]]:
    session, chosen = run.part("session"), run.part("chosen")
    facts = [
        ("session", _name_session(run)),
        ("trials used", _count_used(session, "trials")),
        ("units used", _count_used(session, "units")),
        ("conditions", session.get("conditions")),
        ("model", chosen.get("model")),
        ("latent dimensions", chosen.get("latent_dim")),
        ("seed", run.result.get("seed")),
        ("sessions", len(run.rows("sessions")) or None),
    ]
    facts = [(name, value) for name, value in facts if value is not None]
    return [(name, _tables.write_plain(value)) for name, value in facts]


def _list_not_run(run: RunFolder) -> list[str]:
    """Return what was not run, without the sources, whose absence stands among the verdicts."""
    absent = tuple(f"The source {source} is not contrasted" for source in _words.SUBJECTS)
    return [text for text in map(str, run.result.get("not_run") or []) if not text.startswith(absent)]


def _count_used(session: Mapping[str, Any], kind: str) -> str | None:
    used, left_out = session.get(f"{kind}_used"), session.get(f"{kind}_left_out")
    return f"{used}, {len(left_out)} left out" if used is not None and left_out else used


def _card(contrast: Mapping[str, Any], run: RunFolder, n_used: int | None) -> dict[str, Any]:
    return {
        "source": _words.name_source(contrast),
        "verdict": contrast.get("verdict"),
        "sentence": _words.state_verdict(contrast, run.min_gain),
        "notes": [
            note
            for note in (
                _words.state_reason(contrast),
                _words.state_open(contrast, n_used),
                _words.state_evidence(contrast, run.min_gain),
                state_persistence(contrast),
                f"But {contrast['rival']} describes these data better." if contrast.get("rival") else None,
                contrast.get("mimic"),
                _words.state_dims(contrast, run.part("chosen").get("latent_dim")),
            )
            if note
        ],
    }


def _state_weber(run: RunFolder) -> str:
    behaviour = run.part("behaviour")
    fraction = behaviour.get("weber_fraction")
    if fraction is None:
        return "The Weber fraction is not given: it needs conditions that differ in mean produced interval."
    bounds = behaviour.get("weber_ci95")
    interval = f" (95 % CI {_words.write_interval(bounds, 3)})" if bounds else ""
    return (
        f"Weber fraction {_words.write_number(fraction, 3)}{interval}: the slope of the within-condition SD "
        "on the mean produced interval."
    )
