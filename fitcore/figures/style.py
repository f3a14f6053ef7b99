"""The look of all figures, and how a figure is written.

Colours are the Okabe-Ito set (M. Okabe, K. Ito, "Color Universal Design", 2008), which colour-blind readers
tell apart; nothing is said by colour alone.
"""

from __future__ import annotations

import csv
import io
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from functools import lru_cache
from pathlib import Path
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from matplotlib.figure import Figure

NAVY = "#12284c"
VERMILLION = "#d55e00"
PURPLE = "#cc79a7"
SKY_BLUE = "#56b4e9"
GREY = "#7d7d7d"
GREEN = "#009e73"
ORANGE = "#e69f00"
BROWN = "#8c5a2b"

INK = "#1d1d1f"
FAINT_INK = "#6b6f76"
RULE = "#d9dce1"
PAPER = "#ffffff"

DOTS_PER_INCH = 200

SETTINGS: Any = {
    "font.family": "DejaVu Sans",
    "font.size": 9.0,
    "mathtext.fontset": "dejavusans",
    "text.color": INK,
    "axes.edgecolor": FAINT_INK,
    "axes.labelcolor": INK,
    "axes.linewidth": 0.8,
    "axes.spines.top": False,
    "axes.spines.right": False,
    "xtick.color": FAINT_INK,
    "ytick.color": FAINT_INK,
    "xtick.labelcolor": INK,
    "ytick.labelcolor": INK,
    "figure.facecolor": PAPER,
    "pdf.fonttype": 3,  # text stays text; embedding whole TrueType fonts takes five times as long
    "svg.hashsalt": "weakmix",
}


@dataclass(frozen=True)
class Family:
    """Entries that belong together: one colour, one lane.

    Attributes
    ----------
    label : str
        Words for a reader.
    colour : str
        Colour of the family in every figure.
    groups : frozenset of str
        An entry with one of these groups belongs here.
    """

    label: str
    colour: str
    groups: frozenset[str]


THEORY = Family("theory inputs", GREEN, frozenset())
OTHER = Family("other measurements", BROWN, frozenset())

#: In order: the first family that has one of an entry's groups takes it.
FAMILIES = (
    Family("kaon epsilon", GREY, frozenset({"kaon-epsilon"})),
    Family("CP asymmetries", PURPLE, frozenset({"cp-asymmetry", "cp-phase"})),
    Family("oscillation frequencies", SKY_BLUE, frozenset({"oscillation"})),
    Family("tree-level magnitudes and phase", VERMILLION, frozenset({"tree", "magnitude", "tree-phase"})),
    Family("rare decays", ORANGE, frozenset({"rare", "rare-decay"})),
)


def family_of(groups: Sequence[str], kind: str = "experiment") -> Family:
    """Return the family of an entry with these groups and this kind."""
    if kind == "theory":
        return THEORY
    return next((family for family in FAMILIES if family.groups.intersection(groups)), OTHER)


def tint(colour: str, strength: float) -> tuple[float, float, float]:
    """Mix a colour into white; `strength` 0 is white, 1 the colour."""
    from matplotlib.colors import to_rgb

    red, green, blue = (1 - strength * (1 - part) for part in to_rgb(colour))
    return red, green, blue


@dataclass(frozen=True)
class Drawing:
    """A figure with the data that it shows.

    Attributes
    ----------
    figure : matplotlib Figure
        Ready to be written.
    columns : tuple of str
        Heads of the data.
    rows : tuple of tuples
        The data, one tuple per row.
    """

    figure: Figure
    columns: tuple[str, ...]
    rows: tuple[tuple[Any, ...], ...]

    def csv_text(self) -> str:
        """Write the data as CSV."""
        stream = io.StringIO()
        writer = csv.writer(stream, lineterminator="\n")
        writer.writerow(self.columns)
        writer.writerows(["" if item is None else item for item in row] for row in self.rows)
        return stream.getvalue()


@contextmanager
def in_style() -> Iterator[None]:
    """Draw in the house style inside the block; nothing outside is touched."""
    import matplotlib as mpl

    with mpl.rc_context(SETTINGS):
        yield


def new_figure(width: float, height: float) -> Figure:
    """Make a figure of a size in inches that needs no display."""
    from matplotlib.backends.backend_agg import FigureCanvasAgg
    from matplotlib.figure import Figure

    figure = Figure(figsize=(width, height), dpi=DOTS_PER_INCH)
    FigureCanvasAgg(figure)
    return figure


def save(drawing: Drawing, folder: Path, name: str) -> tuple[Path, ...]:
    """Write a drawing as NAME.pdf, NAME.png and NAME.csv.

    Parameters
    ----------
    drawing : Drawing
        What to write.
    folder : Path
        An existing folder.
    name : str
        File name without ending.

    Returns
    -------
    tuple of Path
        The files written.
    """
    paths = tuple(folder / f"{name}.{ending}" for ending in ("pdf", "png", "csv"))
    with in_style():
        # no date inside: the same result gives the same bytes
        drawing.figure.savefig(paths[0], format="pdf", metadata={"CreationDate": None})
        drawing.figure.savefig(paths[1], format="png", metadata={"Software": None})
    paths[2].write_text(drawing.csv_text(), encoding="utf-8")
    return paths


@lru_cache(maxsize=512)
def symbol(latex: str, name: str) -> str:
    """Return latex as matplotlib text, or the plain name where there is none or it cannot be set."""
    if not latex:
        return name
    from matplotlib.mathtext import MathTextParser

    text = f"${latex}$"
    try:
        MathTextParser("path").parse(text)
    except ValueError:
        return name
    return text


def footer(figure: Figure, text: str, *, left: float, baseline: float) -> None:
    """Write the line that says what a figure was made from; positions are fractions of the figure."""
    figure.text(left, baseline, text, fontsize=6.5, color=FAINT_INK, ha="left", va="bottom")
