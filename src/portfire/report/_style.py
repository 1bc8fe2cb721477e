"""How figures look, and how they become SVG."""

from __future__ import annotations

import re
import unicodedata
import warnings
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from html import escape
from io import StringIO
from typing import Any

import matplotlib as mpl
import numpy as np
from matplotlib.axes import Axes
from matplotlib.colors import Colormap, ListedColormap, Normalize
from matplotlib.figure import Figure

WIDTH = 8.7  # inches; the page shows it at 835 px

# Chosen by search: any two differ by 32 or more in CIELAB, for usual sight and each of the three
# dichromacies (Machado et al. 2009), at a contrast of 3 : 1 or more on white.
COLOURS = ("#032497", "#e26b7a", "#549c06", "#73080c", "#b378ec", "#92437c")
MARKERS = ("o", "s", "^", "D", "v", "P", "X")
LINES: tuple[Any, ...] = (
    "-", (0, (5, 2)), (0, (1, 1.4)), (0, (6, 2, 1.2, 2)), (0, (3, 1, 1, 1, 1, 1)),
)  # fmt: skip
INK, SOFT, FAINT = "#1c1c1c", "#595959", "#d9d9d9"

_RC: dict[Any, Any] = {
    "svg.fonttype": "none",
    "text.parse_math": False,
    "axes.formatter.use_mathtext": False,
    "font.family": "DejaVu Sans",
    "font.size": 10,
    "axes.titlesize": 10.5,
    "axes.titlelocation": "left",
    "axes.labelsize": 10,
    "xtick.labelsize": 9.5,
    "ytick.labelsize": 9.5,
    "legend.fontsize": 9.5,
    "legend.frameon": False,
    "axes.spines.top": False,
    "axes.spines.right": False,
    "axes.edgecolor": SOFT,
    "axes.labelcolor": INK,
    "text.color": INK,
    "xtick.color": SOFT,
    "ytick.color": SOFT,
    "xtick.labelcolor": INK,
    "ytick.labelcolor": INK,
    "axes.axisbelow": True,
    "lines.linewidth": 1.5,
    "lines.markersize": 5,
    "path.simplify": True,
}


@dataclass(frozen=True)
class Drawn:
    """A figure on the page: its SVG, its text alternative and its caption."""

    key: str
    title: str
    svg: str
    alt: str
    caption: str


@dataclass(frozen=True)
class Absent:
    """A figure that could not be drawn, and why."""

    key: str
    title: str
    reason: str


@dataclass(frozen=True)
class Look:
    """How a member of a group is told from the others: by colour, and by marker or line."""

    colour: str
    marker: str
    line: Any


def assign_looks(members: Sequence[str]) -> dict[str, Look]:
    """Give each member its own pair of colour and marker (unique up to 42 members)."""
    return {
        member: Look(COLOURS[k % len(COLOURS)], MARKERS[k % len(MARKERS)], LINES[k % len(LINES)])
        for k, member in enumerate(members)
    }


def clean(text: object) -> str:
    """Return text without characters that a page or an SVG may not carry or that reorder other text."""
    kept = []
    for char in str(text):
        kind = unicodedata.category(char)
        if kind in ("Cc", "Cs") or char in "\ufffe\uffff":
            kept.append(" " if char in "\t\n\r" else "\ufffd")
        elif kind != "Cf":
            kept.append(char)
    return "".join(kept)


def shorten(text: object, width: int = 22) -> str:
    """Return text that fits a figure: its middle is left out where it is long."""
    text = clean(text)
    if len(text) <= width:
        return text
    return text[: width - 8] + "…" + text[-7:]


@contextmanager
def figure_style() -> Iterator[None]:
    """Set what all figures share, and set it back."""
    with mpl.rc_context(_RC), warnings.catch_warnings():
        # The SVG keeps text as text: a viewer finds a font for letters that ours does not have.
        warnings.filterwarnings("ignore", message="Glyph .* missing from")
        yield


def count_columns(labels: Sequence[str]) -> int:
    """Return how many columns a legend across the figure has room for."""
    longest = max(len(shorten(label)) for label in labels)
    return max(1, min(len(labels), 5, 84 // (longest + 7)))


def make_figure(height: float, width: float = WIDTH) -> Figure:
    """Return an empty figure, sizes in inches, whose parts make room for one another."""
    return Figure(figsize=(width, height), layout="constrained")


def interval_colours() -> Colormap:
    """Return colours for produced intervals: perceptually uniform, without the end too pale for lines."""
    return ListedColormap(mpl.colormaps["plasma"](np.linspace(0.0, 0.74, 256)), name="produced")


def scale_colours(values: np.ndarray) -> Normalize:
    """Return limits that leave out the outer 2 % of the finite values at each end."""
    low, high = np.nanpercentile(values, [2, 98])
    if not high > low:
        low, high = low - 0.05, high + 0.05
    return Normalize(float(low), float(high))


def spread_evenly(n: int, half_width: float) -> np.ndarray:
    """Return n offsets within ±half_width that look random and are always the same."""
    return (np.modf((np.arange(n) + 0.5) * 0.6180339887498949)[0] - 0.5) * 2 * half_width


def add_zero_line(axes: Axes, *, vertical: bool) -> None:
    """Draw the line at zero."""
    draw = axes.axvline if vertical else axes.axhline
    draw(0, color=SOFT, linewidth=0.8, zorder=0.5)


def write_svg(figure: Figure, key: str, title: str, alt: str) -> str:
    """Return a figure as SVG with a title and a description, and ids that no other figure has.

    The same figure gives the same text each time; it holds no date and refers to nothing outside.
    """
    buffer = StringIO()
    with mpl.rc_context({"svg.hashsalt": key}):
        none = dict.fromkeys(("Date", "Creator", "Format", "Type"))
        figure.savefig(buffer, format="svg", metadata=none)
    svg = buffer.getvalue()
    svg = svg[svg.index("<svg") :]
    svg = re.sub(r'\bid="', f'id="{key}-', svg)
    svg = re.sub(r'(href="#|url\(#)', rf"\g<1>{key}-", svg)
    svg = svg.replace("'DejaVu Sans'", "'DejaVu Sans', Verdana, sans-serif")
    named = f'role="img" aria-labelledby="{key}-title {key}-desc" '
    words = (
        f'<title id="{key}-title">{escape(clean(title))}</title>\n'
        f'<desc id="{key}-desc">{escape(clean(alt))}</desc>\n'
    )
    head, rest = svg.split(">", 1)
    return head.replace("<svg ", f"<svg {named}", 1) + ">\n" + words + rest.lstrip("\n")
