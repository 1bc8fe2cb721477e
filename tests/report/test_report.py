"""The page and its figures, on invented run folders."""

from __future__ import annotations

import json
import re
import shutil
import time
from collections.abc import Callable
from html.parser import HTMLParser
from pathlib import Path
from xml.etree import ElementTree

import numpy as np
import pandas as pd
import pytest

from portfire.errors import InputError
from portfire.report import draw_report

FIGURES = (
    "contrasts",
    "persistence",
    "scores",
    "behaviour",
    "paths",
    "pushes",
    "decode",
    "predicted",
    "rates-units",
    "rates-overall",
)
Write = Callable[..., Path]


class Page(HTMLParser):
    """Elements, text and references of a page."""

    def __init__(self, html: str) -> None:
        super().__init__()
        self.tags: list[str] = []
        self.ids: list[str] = []
        self.links: list[str] = []
        self.handlers: list[str] = []
        self.text: list[str] = []
        self.feed(html)
        self.words = re.sub(r"\s+", " ", " ".join(self.text))

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.tags.append(tag)
        for name, value in attrs:
            if name == "id":
                self.ids.append(str(value))
            if name in ("href", "src", "xlink:href", "action", "data"):
                self.links.append(str(value))
            if name.startswith("on"):
                self.handlers.append(name)

    def handle_data(self, data: str) -> None:
        self.text.append(data)


@pytest.fixture(scope="module")
def drawn(invent_small: Write) -> Path:
    """A small run folder whose report is drawn; tests leave it as it is."""
    out = invent_small("drawn")
    draw_report(out)
    return out


@pytest.fixture(scope="module")
def page(drawn: Path) -> Page:
    return Page((drawn / "report.html").read_text(encoding="utf-8"))


def read_page(out: Path) -> Page:
    return Page(draw_report(out).read_text(encoding="utf-8"))


def read_alt(out: Path, key: str) -> str:
    root = ElementTree.parse(out / "figures" / f"{key}.svg").getroot()
    found = root.find("{http://www.w3.org/2000/svg}desc")
    assert found is not None
    return str(found.text)


def test_whole_page_is_drawn_within_ten_seconds(invent: Write) -> None:
    out = invent(n_per_condition=67)  # 603 trials
    begin = time.process_time()
    page = read_page(out)
    assert time.process_time() - begin < 10
    assert sorted(path.stem for path in (out / "figures").iterdir()) == sorted(FIGURES)
    assert page.tags.count("svg") == len(FIGURES)
    assert "150 of 603 trials" in page.words


def test_page_asks_for_nothing_from_outside_and_runs_no_script(drawn: Path, page: Page) -> None:
    assert not {"script", "link", "img", "iframe", "object", "embed", "base"} & set(page.tags)
    assert page.handlers == []
    assert page.links
    assert all(link.startswith(("#", "data:image/png;base64,")) for link in page.links)
    html = (drawn / "report.html").read_text(encoding="utf-8")
    assert not re.search(r"url\((?!#)", html)
    assert "@import" not in html
    assert "default-src 'none'" in html


def test_ids_are_unique_and_every_inner_link_leads_somewhere(page: Page) -> None:
    assert len(page.ids) == len(set(page.ids))
    assert {link[1:] for link in page.links if link.startswith("#")} <= set(page.ids)


def test_verdicts_come_first_and_in_words(page: Page) -> None:
    words = page.words
    first = words.index(
        "The sample interval pushes the latent state by an input that acts until the response"
    )
    assert first < words.index("These data cannot tell how the context pushes the latent state.")
    assert first < words.index("gain on held-out trials")
    assert "A sustained push gains 0.06 nats a trial and stays open. The sustained route is open;" in words
    assert "roughly 1,400 trials would close this (this session has 48)." in words
    assert "1367" not in words
    assert first < words.index("Trial time predicts the rate of 3 units")
    assert "A slow mode (time constant 1.9 s)" in words
    assert "0.93 nats without the sustained route (95 % CI 0.68 to 1.18; p = 0.001)" in words
    assert "With 4 latent dimensions the verdict is the same, with 2 it is undetermined." in words
    assert "sets the interval" not in words
    assert "licensed practice, ethics review and local rules" in words


@pytest.mark.parametrize(
    ("verdict", "sentence"),
    [
        ("initial", "pushes the latent state once, at the set cue (an initial push)."),
        ("sustained", "by an input that acts until the response (a sustained push)."),
        ("both", "by both routes: once at the set cue, and by an input that acts until the response."),
        ("neither", "by both routes together the gain is below 0.05 nats a trial."),
        ("undetermined", "These data cannot tell how the context pushes the latent state."),
    ],
)
def test_every_verdict_has_its_sentence(
    result_only: Callable[[], Path], amend: Callable[..., None], verdict: str, sentence: str
) -> None:
    out = result_only()
    words = "Between contexts, an invented sentence."
    amend(out, contrasts=[{"source": "context", "verdict": verdict, "words": words, "open": ["initial"]}])
    page = read_page(out)
    assert sentence in page.words
    assert words in page.words  # the verdict's own numbers are not there to replace them
    assert ("The initial route is open; no number of trials" in page.words) == (verdict == "undetermined")


def test_text_alternatives_carry_the_numbers(drawn: Path, page: Page) -> None:
    alts = {key: read_alt(drawn, key) for key in FIGURES}
    assert "sustained, unique 0.93 (0.68 to 1.18)" in alts["contrasts"]
    assert "verdict undetermined" in alts["contrasts"]
    assert "10 accounts scored on 48 held-out trials" in alts["scores"]
    assert "high: " in alts["behaviour"]
    assert "at a sample interval of 0.5 s" in alts["behaviour"]
    assert "48 of 48 single trials" in alts["paths"]
    assert re.search(r"initial push, latent 1 r = −0\.\d\d and latent 2 r =", alts["pushes"])
    assert "state 0.05 at 0.1 s and 0.18 at 0.2 s" in alts["decode"]
    assert "As tested, over the middle 60 % of the trials: initial 0.00 at 0.1 s" in alts["decode"]
    assert (
        "state 0.04 at 0.1 s and 0.17 at 0.2 s; counts 0.02 at 0.1 s and 0.10 at 0.2 s. Null bands lie"
        in alts["decode"]
    )
    assert "Trials still running: 48 at 0.1 s, 39 at 0.2 s" in alts["decode"]
    assert "48 trials from the state at the cutoff, with spikes up to 0.1 s" in alts["predicted"]
    assert "Within conditions R² is 0.05 (95 % interval 0.00 to 0.10)" in alts["predicted"]
    assert "Largest misfit, times counting noise: unit u3" in alts["rates-units"]
    assert re.search(r"account for \d\d\.\d\s% of the variance", alts["rates-overall"])
    assert all(re.sub(r"\s+", " ", alt) in page.words for alt in alts.values())


HOSTILE = (
    "<script>alert(1)</script>",
    '"><b onload=x>',
    "$x_2^{",
    "_hidden",
    "\u202eright\x07\x1b to left",
    "長い名前",
)


def test_hostile_names_are_text_and_nothing_else(small: Write, amend: Callable[..., None]) -> None:
    names = (*HOSTILE, "w" * 400)
    out = small(contexts=names, n_per_condition=6, n_units=7, unit_names=names)
    left_out = {name: f"{name} is left out" for name in names}
    session = {"units_left_out": left_out, "trials_left_out": left_out, "trials_used": 84}
    amend(out, session=session, warnings=list(names), not_run=list(names), versions=dict.fromkeys(names, "1"))
    page = read_page(out)
    assert not {"script", "b"} & set(page.tags)
    assert page.handlers == []
    for name in (HOSTILE[0], HOSTILE[1], HOSTILE[2], HOSTILE[3], HOSTILE[5], "w" * 400):
        assert name in page.words
    assert not re.search("[\u202e\x07\x1b]", page.words)
    for key in FIGURES:
        text = " ".join(ElementTree.parse(out / "figures" / f"{key}.svg").getroot().itertext())
        assert "w" * 40 not in text
    drawn = " ".join(ElementTree.parse(out / "figures" / "pushes.svg").getroot().itertext())
    assert "$x_2^{" in drawn
    assert "_hidden" in drawn


def test_tests_rivals_checks_and_yardsticks_are_on_the_page(page: Page) -> None:
    for words in (
        "Tests that lean less on the model",
        "Rivals of additive pushes",
        "a change of speed",
        "Predictive checks",
        "reaches 0.123",
        "reach 0.187",
        "Conditions predicted from the others",
        "The push of the interval lasts as it was invented.",
        "Two pushes: one alone stays 9.1 nats behind",
    ):
        assert words in page.words, words


def test_settings_sizes_and_left_out_are_tables(page: Page) -> None:
    words = page.words
    assert "48, 2 left out" in words
    assert "linear yes 1 2.345 0.210 linear chosen yes 2 0.000 0.000" in words
    assert "without fold 1, 2, 4 or 5 it is the same; without fold 3 it is linear with 1 latent" in words
    assert "a lapse: 3.4 s, over 3 times 0.7 s" in words
    assert "compare.min_gain 0.05" in words
    assert "by_fold" not in words
    assert '{"' not in words


def test_late_rows_are_shown_only_where_they_leave_trials_out(
    result_only: Callable[[], Path], amend: Callable[..., None]
) -> None:
    out = result_only()
    rows = json.loads((out / "result.json").read_text(encoding="utf-8"))["decode"]
    assert "Trials that respond 0.15 s or more after the cutoff" in read_page(out).words
    amend(out, decode=[row | {"n_used": row["running"]} for row in rows])
    words = read_page(out).words
    assert "Trials that respond 0.15 s" not in words
    assert "so the variant for late responses is the same and is not drawn again." in words


def test_result_of_several_sessions_names_them(
    result_only: Callable[[], Path], amend: Callable[..., None]
) -> None:
    out = result_only()
    contrasts = json.loads((out / "result.json").read_text(encoding="utf-8"))["contrasts"]
    gone = dict.fromkeys(("session", "behaviour", "chosen"))
    named = [{"session": name} | c for name in ("monday", "friday") for c in contrasts]
    amend(out, contrasts=named, sessions=[{"session": "monday"}, {"session": "friday"}], decode=[], **gone)
    page = read_page(out)
    assert "sessions 2" in page.words
    assert "monday: interval sustained" in page.words
    assert "friday: trial: total (both routes) 7.60" in read_alt(out, "contrasts")


def test_session_without_contexts(small: Write, amend: Callable[..., None]) -> None:
    out = small(contexts=(), sources=("interval", "trial"))
    amend(out, not_run=["The source context is not contrasted: the session has one context.", "No decode."])
    page = read_page(out)
    assert "is not contrasted" not in page.words
    assert "What was not run No decode." in page.words
    assert "The context was not tested: the session has no context column." in page.words
    assert page.tags.count("svg") == len(FIGURES)
    assert "The session has no contexts." in page.words


def test_session_with_one_sample_interval_and_with_none(small: Write) -> None:
    page = read_page(small("one", samples=(0.6,), sources=("context", "trial")))
    assert "The sample interval was not tested: the session has one sample interval." in page.words
    page = read_page(small("bare", samples=(), contexts=(), sources=("trial",), target=False))
    assert "The sample interval was not tested: the session has no sample_s column." in page.words
    assert "The session has no sample intervals and no contexts." in page.words
    assert page.tags.count("svg") == len(FIGURES)


def test_job_without_sources_has_no_contrasts(small: Write) -> None:
    out = small(sources=())
    page = read_page(out)
    assert "What held-out trials lose without a route is not drawn: the job lists no sources." in page.words
    assert "Held-out scores by account is not drawn: one account only was scored" in page.words
    assert not (out / "figures" / "contrasts.svg").exists()
    assert page.words.count("was not tested: the job does not list this source.") == 3


def test_session_without_responses(small: Write) -> None:
    page = read_page(small(responses=False))
    assert (
        "Produced interval against sample interval is not drawn: no used trial has a response" in page.words
    )
    assert "R² within condition against the cutoff is not drawn: no used trial has a response." in page.words
    assert "grey, since no trial has a response" in page.words
    assert "No relation to the produced interval is drawn" in page.words


def test_two_models_are_told_apart(small: Write) -> None:
    out = small(models=("linear", "low_rank"))
    page = read_page(out)
    assert "20 accounts scored" in read_alt(out, "scores")
    assert "low_rank" in page.words


def test_result_alone_is_enough_and_old_figures_go(drawn: Path, tmp_path: Path) -> None:
    out = tmp_path / "copy"
    shutil.copytree(drawn, out)
    for name in ("trials.parquet", "scores.parquet", "decode.parquet", "latents.nc", "rates.nc"):
        (out / name).unlink()
    page = read_page(out)
    assert sorted(path.stem for path in (out / "figures").iterdir()) == ["contrasts", "decode", "persistence"]
    assert "is not drawn: the run folder holds no such predictions (decode.parquet)" in page.words
    assert "the run folder holds no latents.nc and no trials.parquet" in page.words
    assert "the run folder holds no rates.nc" in page.words


def test_untested_decode_rows_and_nulls_in_the_result(
    result_only: Callable[[], Path], amend: Callable[..., None]
) -> None:
    out = result_only()
    row = {
        "cutoff_s": 0.1,
        "features": "state",
        "n_trials": 3,
        "r2_within_condition": None,
        "ci95": None,
        "p": None,
    }
    amend(out, decode=[row, row | {"r2_within_condition": 0.01}], chosen=None, settings=None, behaviour={})
    page = read_page(out)
    assert "R² 0.01 at 0.1 s" in page.words
    assert "not given" in page.words


def test_counts_that_predict_where_the_state_does_not_are_said(
    result_only: Callable[[], Path], amend: Callable[..., None]
) -> None:
    out = result_only()
    row = {"cutoff_s": 0.1, "features": "state", "n_trials": 90, "r2_within_condition": 0.01, "p": 0.4}
    found = row | {"features": "counts", "r2_within_condition": 0.23, "p": 0.02}
    amend(out, decode=[row, found])
    assert (
        "The yardstick, one raw count a unit over the same window, does predict it, with spikes up to 0.1 s"
        in (read_page(out).words)
    )
    amend(out, decode=[row, found | {"p": 0.2}])
    assert "does predict it" not in read_page(out).words


def test_useless_predictions_do_not_flatten_the_others(
    result_only: Callable[[], Path], amend: Callable[..., None]
) -> None:
    out = result_only()
    row = {"cutoff_s": 0.1, "features": "state", "n_trials": 90, "r2_within_condition": 0.1, "p": 0.4}
    amend(out, decode=[row, row | {"cutoff_s": 0.2, "r2_within_condition": -5.25, "ci95": [-18.0, -1.0]}])
    page = read_page(out)
    assert "Marks that lie below −1 stand at the lower edge with their value" in page.words
    figure = (out / "figures" / "decode.svg").read_text(encoding="utf-8")
    assert "−5.2" in figure
    assert "−18" not in figure


def test_same_folder_gives_the_same_page(drawn: Path) -> None:
    report, figure = drawn / "report.html", drawn / "figures" / "pushes.svg"
    before = report.read_bytes(), figure.read_bytes()
    draw_report(drawn)
    assert (report.read_bytes(), figure.read_bytes()) == before


def test_failure_leaves_the_old_page(drawn: Path, tmp_path: Path) -> None:
    out = tmp_path / "copy"
    shutil.copytree(drawn, out)
    first = (out / "report.html").read_bytes()
    (out / "rates.nc").write_bytes(b"no netCDF")
    with pytest.raises(InputError, match=r"rates\.nc: cannot be read as netCDF"):
        draw_report(out)
    assert (out / "report.html").read_bytes() == first
    assert sorted(p.name for p in out.iterdir() if p.name.startswith(".")) == []


def test_numbers_are_written_plainly(drawn: Path) -> None:
    for key in FIGURES:
        text = " ".join(ElementTree.parse(drawn / "figures" / f"{key}.svg").getroot().itertext())
        assert not re.search(r"mathdefault|\\times|\$", text), key


def test_units_stand_on_every_axis(drawn: Path) -> None:
    wanted = {
        "contrasts": ["gain on held-out trials (nats a trial"],
        "scores": ["(nats a trial"],
        "behaviour": ["sample interval (s)", "produced interval (s)"],
        "paths": ["time from the set cue (s)", "(log rate)", "produced interval (s)"],
        "pushes": ["initial push (log rate)", "(log rate in a trial)", "(SD within condition)"],
        "decode": ["cutoff (s after the set cue)", "(no unit)"],
        "predicted": ["predicted interval (s)", "produced interval (s)", "the condition's mean (%)"],
        "rates-units": ["time from the set cue (s)", "(spikes/s)"],
        "rates-overall": ["model rate (spikes/s", "recorded rate (spikes/s", "(times counting noise)"],
    }
    for key, labels in wanted.items():
        text = " ".join(ElementTree.parse(drawn / "figures" / f"{key}.svg").getroot().itertext())
        assert all(label in text for label in labels), key


def test_folder_that_is_no_run(tmp_path: Path) -> None:
    with pytest.raises(InputError, match="no such folder"):
        draw_report(tmp_path / "absent")
    with pytest.raises(InputError, match=r"result\.json: no such file"):
        draw_report(tmp_path)
    result = tmp_path / "result.json"
    result.write_text('{"a": 1,}', encoding="utf-8")
    with pytest.raises(InputError, match=r"not JSON at line 1, column \d+"):
        draw_report(tmp_path)
    result.write_text(json.dumps({"accounts": []}), encoding="utf-8")
    with pytest.raises(InputError, match="no key 'portfire'"):
        draw_report(tmp_path)
    result.write_text(json.dumps({"portfire": "0.1.0", "contrasts": {"context": 1}}), encoding="utf-8")
    with pytest.raises(InputError, match="'contrasts' should be a list of objects"):
        draw_report(tmp_path)


def test_table_without_its_columns_is_named(result_only: Callable[[], Path]) -> None:
    out = result_only()
    pd.DataFrame({"trial": ["1"], "loglik": np.zeros(1)}).to_parquet(out / "scores.parquet")
    with pytest.raises(InputError, match=r"scores\.parquet: no column 'account'"):
        draw_report(out)
