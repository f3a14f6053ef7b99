"""Figures by what they hold: rows, positions, texts, files; the look is judged by eye."""

from __future__ import annotations

import csv
import io
import math
import subprocess
import sys
from dataclasses import replace
from pathlib import Path
from typing import Any

import pytest
from hypothesis import given
from hypothesis import strategies as st
from matplotlib.figure import Figure
from matplotlib.text import Text

from fitcore.figures import correlation, dumbbell, style
from fitcore.result import FitResult, MeasurementRow


def row(name: str, measured: float, error: float, fitted: float, *groups: str, **more: Any) -> MeasurementRow:
    settings: dict[str, Any] = {"unit": "1", "kind": "experiment", "fitted_error": 0.4 * error} | more
    return MeasurementRow(
        name,
        f"quantity_{name}",
        measured,
        error,
        error,
        fitted,
        (measured - fitted) / error,
        groups=groups,
        **settings,
    )


ROWS = (
    row("weak", 1.0, 0.1, 1.01, "tree"),
    row("strong", 2.0, 0.1, 2.31, "tree"),
    row("wave", 0.5, 0.01, 0.49, "oscillation", "loop"),
    row("input", 0.25, 0.005, 0.23, "lattice", "loop", kind="theory", unit="GeV"),
    row("strange", 7.0, 1.0, 7.2, "unheard-of", fitted_error=None),
)


@pytest.fixture
def result() -> FitResult:
    names = ("first", "second", "third")
    matrix = ((1.0, 0.5, -0.75), (0.5, 1.0, math.nan), (-0.75, math.nan, 1.0))
    return FitResult(
        valid=True,
        chi2=20.0,
        degrees_of_freedom=3,
        p_value=0.1,
        measurements=ROWS,
        correlation_names=names,
        correlation_matrix=matrix,
    )


def texts(figure: Figure) -> list[str]:
    return [item.get_text() for item in figure.findobj(Text)]


def test_lanes_and_rows_are_sorted_by_pull_with_theory_last() -> None:
    lanes = dumbbell.arrange(ROWS)
    assert [family.label for family, _ in lanes] == [
        "tree-level magnitudes and phase",
        "oscillation frequencies",
        "other measurements",
        "theory inputs",
    ]
    assert [member.id for member in lanes[0][1]] == ["strong", "weak"]


def test_dumbbell_data_is_what_is_drawn(result: FitResult) -> None:
    drawing = dumbbell.draw(result, footer="invented revision 1 - 01234567")
    table = list(csv.DictReader(io.StringIO(drawing.csv_text())))
    assert [line["id"] for line in table] == ["strong", "weak", "wave", "strange", "input"]
    assert float(table[0]["pull"]) == pytest.approx(-3.1)
    assert table[3]["fitted_error"] == ""
    shown = texts(drawing.figure)
    for words in ("strong", "quantity_strong", "\N{MINUS SIGN}3.10", "invented revision 1 - 01234567"):
        assert words in shown
    assert any("20.00 for 3 degrees of freedom, p = 0.1" in item for item in shown)
    assert not any("NOT CONVERGED" in item for item in shown)


def test_dumbbell_of_a_bad_fit_says_so(result: FitResult) -> None:
    assert any("NOT CONVERGED" in item for item in texts(dumbbell.draw(replace(result, valid=False)).figure))


def test_rail_shows_one_error_with_one_length() -> None:
    rail = dumbbell.Rail(middle=4.0, half=1.5, reach=3.0)
    for member in ROWS:
        centre, per_unit = rail.scale(member)
        assert member.error_plus * per_unit == pytest.approx(0.5)
        assert centre == pytest.approx((member.measured + member.fitted) / 2)
    uneven = replace(ROWS[0], error_plus=0.2, error_minus=0.1, fitted=1.3)
    assert rail.scale(uneven)[1] * 0.2 == pytest.approx(0.5)  # the side that faces the fit


@given(middle=st.floats(-1e3, 1e3), width=st.floats(1e-6, 1e3))
def test_every_scale_has_two_to_five_round_ticks_inside(middle: float, width: float) -> None:
    low, high = middle - width / 2, middle + width / 2
    found = dumbbell.ticks(low, high)
    assert 2 <= len(found) <= 5
    assert all(low < tick < high for tick in found)


def test_everything_lies_on_the_page(result: FitResult) -> None:
    long = replace(ROWS[1], id="a-rather-long-identifier-of-some-average", quantity="q")
    wild = replace(ROWS[1], id="wild", fitted=4.0, pull=-20.0)
    for drawing in (
        dumbbell.draw(replace(result, measurements=(*ROWS, long, wild)), footer="f"),
        correlation.draw(result, footer="f"),
    ):
        drawing.figure.draw_without_rendering()
        page = drawing.figure.bbox
        for item in drawing.figure.findobj(Text):
            if item.get_text() and item.get_visible():
                box = item.get_window_extent()
                assert page.x0 - 1 <= box.x0
                assert box.x1 <= page.x1 + 1, item.get_text()
                assert page.y0 - 1 <= box.y0
                assert box.y1 <= page.y1 + 1


def test_auxiliary_inputs_give_way_to_measurements_of_the_matrix(result: FitResult) -> None:
    own = [row(f"own-{k}", 1.0, 0.1, 1.001, "tree") for k in range(30)]
    theory = [row(f"theory-{k}", 1.0, 0.1, 1.2 + 0.01 * k, "lattice", kind="theory") for k in range(20)]
    lifetimes = [row(f"lifetime-{k}", 1.0, 0.1, 1.3 + 0.01 * k, "lifetime") for k in range(5)]
    chosen = dumbbell.selection((*theory, *lifetimes, *own))
    assert len(chosen) == dumbbell.MOST
    assert {one.id for one in own} <= {one.id for one in chosen}
    assert [one.id for one in chosen[30:32]] == ["theory-19", "theory-18"] or chosen[30].id == "lifetime-4"
    many = [row(f"own-{k}", 1.0, 0.1, 1.001, "tree") for k in range(50)]
    assert dumbbell.selection((*theory, *many))[:50] == tuple(many)
    drawing = dumbbell.draw(replace(result, measurements=(*theory, *lifetimes, *own)))
    assert "all 30 measurements; 10 of 25 auxiliary inputs, by pull" in texts(drawing.figure)
    assert len(drawing.rows) == 55  # the data hold every row


def test_scales_show_units_and_powers(result: FitResult) -> None:
    assert dumbbell.tick_texts([6e-5, 8e-5, 1e-4]) == (["0.6", "0.8", "1.0"], -4)
    assert dumbbell.tick_texts([0.05, 0.1]) == (["0.05", "0.10"], 0)
    assert dumbbell.scale_unit("1/ps", 0) == "1/ps"
    assert dumbbell.scale_unit("1", -5) == r"$\times 10^{-5}$"
    shown = texts(dumbbell.draw(result).figure)
    assert "GeV" in shown
    assert "(bold: 2 or more)" in shown
    tiny = replace(result, measurements=(row("tiny", 1e-4, 1e-5, 1.1e-4, "tree"),))
    assert r"$\times 10^{-4}$" in texts(dumbbell.draw(tiny).figure)


def test_data_hide_binary_noise_and_nothing_else() -> None:
    drawing = style.Drawing(Figure(), ("a", "b", "c"), ((5.39 * 0.01, 1 / 3, None),))
    assert drawing.csv_text().splitlines()[1] == f"0.0539,{1 / 3!r},"


def test_correlations_of_ranges_are_left_out(result: FitResult) -> None:
    from fitcore.result import Estimate

    bounds = (0.1, 0.3)
    names = (*result.correlation_names, "flat", "loose")
    matrix = tuple((*row, math.nan, math.nan) for row in result.correlation_matrix) + ((math.nan,) * 5,) * 2
    more = replace(
        result,
        correlation_names=names,
        correlation_matrix=matrix,
        parameters={"flat": Estimate(0.2, None, bounds, bounds, "range"), "loose": Estimate(0.1)},
    )
    assert correlation.defined(more) == [0, 1, 2]
    shown = texts(correlation.draw(more).figure)
    assert "flat" not in shown
    assert any("2 without correlations" in item for item in shown)
    nothing = replace(more, correlation_matrix=((None,) * 5,) * 5)  # type: ignore[arg-type]
    assert correlation.defined(nothing) == []


def test_correlation_bars_have_sign_and_length(result: FitResult) -> None:
    from matplotlib.colors import to_hex
    from matplotlib.patches import PathPatch, Rectangle

    drawing = correlation.draw(result, latex={"first": r"\bar\rho"})
    bars = [
        p
        for p in drawing.figure.axes[0].patches
        if isinstance(p, Rectangle) and p.get_height() == pytest.approx(0.15)
    ]
    edge = correlation.CELL - correlation.GAP
    assert sorted(bar.get_width() for bar in bars) == pytest.approx([0.5 * edge, 0.75 * edge])
    filled = {to_hex(bar.get_facecolor()): bar.get_x() for bar in bars}
    assert filled[style.NAVY] == pytest.approx(correlation.GAP / 2)  # from the left edge of the first cell
    assert set(filled) == {style.NAVY, style.PAPER}
    shown = texts(drawing.figure)
    assert {"50", "\N{MINUS SIGN}75", "first"} <= set(shown)
    assert len([patch for patch in drawing.figure.axes[0].patches if isinstance(patch, PathPatch)]) == 2
    assert len(drawing.rows) == 2  # the undefined one is left out


def test_large_matrices_show_the_most_correlated() -> None:
    size = 50
    matrix = [[1.0 if i == j else 0.0 for j in range(size)] for i in range(size)]
    matrix[40][3] = matrix[3][40] = 0.9
    fixed = tuple(tuple(line) for line in matrix)
    assert {3, 40} <= set(correlation.chosen(fixed))
    assert len(correlation.chosen(fixed)) == correlation.MOST
    names = tuple(f"p{i}" for i in range(size))
    drawing = correlation.draw(FitResult(correlation_names=names, correlation_matrix=fixed))
    assert any("the 32 most correlated of 50 parameters" in item for item in texts(drawing.figure))
    assert len(drawing.rows) == size * (size - 1) // 2


def test_files_are_complete_and_reproducible(result: FitResult, tmp_path: Path) -> None:
    for folder in ("a", "b"):
        (tmp_path / folder).mkdir()
        style.save(dumbbell.draw(result), tmp_path / folder, "figure")
    for ending in ("pdf", "png", "csv"):
        first = (tmp_path / "a" / f"figure.{ending}").read_bytes()
        assert first == (tmp_path / "b" / f"figure.{ending}").read_bytes()
        assert len(first) > 100


def test_latex_that_cannot_be_set_falls_back_to_the_name() -> None:
    assert style.symbol_path(r"\Delta m_d") is not None
    for latex in (r"\nosuchcommand{x", r"\frac{1", "", " "):
        assert style.symbol_path(latex) is None
    with style.in_style():
        axes = style.new_figure(2, 1).add_axes((0, 0, 1, 1))
        style.draw_symbol(axes, 0.5, 0.5, r"\nosuchcommand{x", "its_name", size=9, room=1)
        assert [item.get_text() for item in axes.texts] == ["its_name"]


@pytest.mark.parametrize("align", [0.0, 0.5, 1.0])
def test_symbols_are_anchored_and_fit_their_room(align: float) -> None:
    axes = style.new_figure(2, 1).add_axes((0, 0, 1, 1))
    style.draw_symbol(axes, 3.0, 0.5, r"B(K^+ \to \pi^0 e \nu)", "", size=20, room=0.5, align=align)
    box = axes.patches[0].get_path().get_extents()
    assert box.width == pytest.approx(0.5)
    assert box.x0 + align * box.width == pytest.approx(3.0)
    style.draw_symbol(axes, 0.0, 0.0, "x", "", size=72, room=5.0)
    letter = axes.patches[1].get_path().get_extents()
    assert (letter.y0 + letter.y1) / 2 == pytest.approx(
        0.0, abs=0.03
    )  # small letters are centred on the anchor


def test_every_symbol_of_the_catalogue_can_be_set() -> None:
    from observables import catalogue

    nodes = [catalogue[name] for name in catalogue.names()]
    assert [node.name for node in nodes if node.latex and style.symbol_path(node.latex) is None] == []


def test_families() -> None:
    assert style.family_of(("tree", "kaon")).label == "tree-level magnitudes and phase"
    assert style.family_of(("lifetime", "tree", "kaon")).label == "lifetimes and form-factor shapes"
    assert style.family_of(("form-factor-shape", "tree")).label == "lifetimes and form-factor shapes"
    assert style.family_of(("magnitude", "tree", "beauty")) is style.TREE
    assert style.family_of(("radiative", "tree")) is style.THEORY
    assert style.family_of(("cp-asymmetry", "loop")).colour == style.PURPLE
    assert style.family_of(("tree",), "theory") is style.THEORY
    assert style.family_of(()) is style.OTHER
    colours = [family.colour for family in (*style.FAMILIES, style.THEORY, style.OTHER)]
    assert len(set(colours)) == len(colours)


def test_drawing_needs_neither_pyplot_nor_a_display() -> None:
    code = (
        "import sys\n"
        "from fitcore.figures import correlation, dumbbell, style\n"
        "assert 'matplotlib' not in sys.modules\n"
        "from fitcore.result import FitResult, MeasurementRow\n"
        "row = MeasurementRow('a', 'b', 1., .1, .1, 1.1, -1., '1', 'theory')\n"
        "dumbbell.draw(FitResult(measurements=(row,)))\n"
        "assert 'matplotlib' in sys.modules and 'matplotlib.pyplot' not in sys.modules\n"
    )
    done = subprocess.run(
        [sys.executable, "-c", code],
        cwd=Path(__file__).parents[3],
        capture_output=True,
        text=True,
        check=False,
    )
    assert done.returncode == 0, done.stderr
