"""Drawing the report of a finished run."""

from __future__ import annotations

from pathlib import Path

from portfire.job._atomic import replacing
from portfire.report._accounts import draw_contrasts, draw_scores
from portfire.report._behaviour import draw_behaviour
from portfire.report._decode import draw_decode
from portfire.report._folder import read_run_folder
from portfire.report._page import write_page
from portfire.report._paths import draw_paths
from portfire.report._persistence import draw_persistence
from portfire.report._predicted import draw_predicted
from portfire.report._pushes import draw_pushes
from portfire.report._rates import draw_rates_overall
from portfire.report._rates_units import draw_rates_units
from portfire.report._style import Drawn, figure_style

_FIGURES = (
    draw_contrasts,
    draw_persistence,
    draw_scores,
    draw_behaviour,
    draw_paths,
    draw_pushes,
    draw_decode,
    draw_predicted,
    draw_rates_units,
    draw_rates_overall,
)


def draw_report(out_dir: Path) -> Path:
    """Draw the figures and the page of a finished run, from the files of its out folder only.

    Parameters
    ----------
    out_dir : Path
        The out folder: `result.json`, and where present `scores.parquet`, `decode.parquet`, `latents.nc`,
        `trials.parquet` and `rates.nc`. What is absent is said on the page, with the reason.

    Returns
    -------
    Path
        `out_dir / "report.html"`: one file that opens offline. `figures/*.svg` hold the same figures. Each
        file is written whole or not at all; a figure that no longer applies is removed.

    Raises
    ------
    InputError
        Where the folder is not that of a finished run, or one of its files cannot be read.
    """
    out_dir = Path(out_dir)
    run = read_run_folder(out_dir)
    with figure_style():
        figures = {figure.key: figure for figure in (draw(run) for draw in _FIGURES)}
    page = write_page(run, figures)
    folder = out_dir / "figures"
    folder.mkdir(exist_ok=True)
    for key, figure in figures.items():
        path = folder / f"{key}.svg"
        if isinstance(figure, Drawn):
            write_whole(path, '<?xml version="1.0" encoding="utf-8"?>\n' + figure.svg)
        else:
            path.unlink(missing_ok=True)
    report = out_dir / "report.html"
    write_whole(report, page)
    return report


def write_whole(path: Path, text: str) -> None:
    """Write a text file so that a reader sees the old one or the new one, never a part."""
    with replacing(path) as draft:
        draft.write_text(text, encoding="utf-8", newline="\n")
