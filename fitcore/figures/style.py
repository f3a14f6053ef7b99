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
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure
    from matplotlib.path import Path as Path2D

NAVY = "#12284c"
VERMILLION = "#d55e00"
PURPLE = "#cc79a7"
SKY_BLUE = "#56b4e9"
GREY = "#7d7d7d"
GREEN = "#009e73"
ORANGE = "#e69f00"
BLUE = "#0072b2"
BROWN = "#8c5a2b"

INK = "#1d1d1f"
FAINT_INK = "#6b6f76"
RULE = "#d9dce1"
PAPER = "#ffffff"

DOTS_PER_INCH = 150
#: Height of the middle of small letters above the baseline, in units of the font size.
X_HEIGHT_MIDDLE = 0.3

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

TREE = Family("tree-level magnitudes and phase", VERMILLION, frozenset({"magnitude", "tree-phase"}))

#: Which family words of the published sets belong to which lane; an entry has one of these words.
FAMILIES = (
    Family("kaon epsilon", GREY, frozenset({"kaon-epsilon"})),
    Family("CP asymmetries", PURPLE, frozenset({"cp-asymmetry", "cp-phase"})),
    Family("oscillation frequencies", SKY_BLUE, frozenset({"oscillation"})),
    TREE,
    Family("rare decays", ORANGE, frozenset({"rare", "rare-decay"})),
    Family("lifetimes and form-factor shapes", BLUE, frozenset({"lifetime", "form-factor-shape"})),
)
#: Words for theory inputs, in case an entry does not say so by its kind.
THEORY_WORDS = frozenset({"lattice", "perturbative", "radiative"})


def family_of(groups: Sequence[str], kind: str = "experiment") -> Family:
    """Return the family of an entry with these groups and this kind.

    The family word decides; "tree", which many families share, counts only where there is none.
    """
    if kind == "theory":
        return THEORY
    for family in FAMILIES:
        if family.groups.intersection(groups):
            return family
    if THEORY_WORDS.intersection(groups):
        return THEORY
    return TREE if "tree" in groups else OTHER


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
        writer.writerows([_written(item) for item in row] for row in self.rows)
        return stream.getvalue()


def _written(item: Any) -> Any:
    """Write a number in full, but without the binary noise of unit conversions (0.0539, not 0.05389...97)."""
    if item is None:
        return ""
    if isinstance(item, float):
        short = f"{item:.15g}"
        return short if len(short) < len(repr(float(item))) - 2 else repr(float(item))
    return item


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
        drawing.figure.savefig(
            paths[1], format="png", metadata={"Software": None}, pil_kwargs={"compress_level": 4}
        )
    paths[2].write_text(drawing.csv_text(), encoding="utf-8")
    return paths


@lru_cache(maxsize=512)
def symbol_path(latex: str) -> tuple[Path2D, float, float] | None:
    """Set a symbol as an outline; None if there is nothing to set or it cannot be set.

    An outline is set once and drawn often: setting is the slow part, and text would be set anew for each file.

    Returns
    -------
    outline : matplotlib Path
        In points at font size 1, baseline at zero.
    left, width : float
        Where it starts and how wide it is.
    """
    if not latex:
        return None
    from matplotlib.textpath import TextPath
    from matplotlib.transforms import Affine2D

    try:
        path = TextPath((0, 0), f"${latex}$", size=10)
    except ValueError:
        return None
    if not len(path.vertices):
        return None
    outline: Path2D = Affine2D().scale(0.1).transform_path(path)
    box = outline.get_extents()
    return outline, float(box.x0), float(box.width)


def draw_symbol(
    axes: Axes, x: float, y: float, latex: str, name: str, *, size: float, room: float, align: float = 0.0
) -> None:
    """Draw a symbol, or the plain name where there is none, on axes whose unit is the inch, downwards.

    Parameters
    ----------
    axes : Axes
        Where to draw.
    x, y : float
        Anchor in inches, at the middle of small letters.
    latex, name : str
        The symbol, and what stands in for it; nothing is drawn if both are empty.
    size : float
        Font size in points.
    room : float
        Width in inches that it may fill; longer symbols are drawn smaller.
    align : float
        0 starts at the anchor, 0.5 is centred on it, 1 ends there.
    """
    from matplotlib.patches import PathPatch
    from matplotlib.transforms import Affine2D

    found = symbol_path(latex)
    if found is None:
        if name:
            side = {0.0: "left", 0.5: "center", 1.0: "right"}[align]
            fitting = min(0.85 * size, 72 * room / (0.62 * len(name)))
            axes.text(x, y, name, fontsize=fitting, va="center", ha=side)
        return
    outline, left, width = found
    scale = min(size / 72, room / width)
    placed = (
        Affine2D().translate(-left - align * width, -X_HEIGHT_MIDDLE).scale(scale, -scale).translate(x, y)
    )
    # not add_patch: it would work out the extent of every curve for axis limits that are set anyway
    axes.add_artist(PathPatch(placed.transform_path(outline), color=INK, lw=0, zorder=4))


def sign(pull: float) -> str:
    """Write a pull with its sign and a true minus; what rounds to zero has none."""
    text = f"{pull:+.2f}"
    return "0.00" if text in ("-0.00", "+0.00") else text.replace("-", "\N{MINUS SIGN}")


def footer(figure: Figure, text: str, *, left: float, baseline: float) -> None:
    """Write the line that says what a figure was made from; positions are fractions of the figure."""
    figure.text(left, baseline, text, fontsize=6.5, color=FAINT_INK, ha="left", va="bottom")


def own_scales(figure: Figure, *, right: float, baseline: float) -> None:
    """Say at the right end of the footer what the small numbers under the rows are."""
    text = "small numbers are each row's own scale"
    figure.text(1 - right, baseline, text, fontsize=6.5, color=FAINT_INK, ha="right", va="bottom")
