"""Golden texts of the tables, and what they must never hide."""

from __future__ import annotations

import io
from dataclasses import replace
from typing import Any

import pytest
from rich.console import Console

from fitcore.commands import tables
from fitcore.commands.output import Output
from fitcore.result import Estimate, FitResult, MeasurementRow


def text(*parts: Any) -> str:
    console = Console(file=io.StringIO(), width=110, color_system=None, legacy_windows=False)
    for part in parts:
        console.print(part)
    lines = console.file.getvalue().splitlines()  # type: ignore[attr-defined]
    return "\n".join(line.rstrip() for line in lines if line.strip())


PARAMETERS = """\
Parameters
name                value                   68.27 %             95.0 %              unit  method
─────────────────────────────────────────────────────────────────────────────────────────────────
wolfenstein_lambda  0.22519 +- 0.00068      [0.22451, 0.22587]  [0.22386, 0.22652]        profile
wolfenstein_A       0.833 +- 0.011          [0.823, 0.844]      [0.813, 0.854]            profile
wolfenstein_rhobar  0.2 (open on one side)  [0.10, inf]         [-inf, inf]               profile
wolfenstein_etabar  0.3 (unconstrained)     -                   -                         -"""

DERIVED = """\
Derived
name      value                 68.27 %             95.0 %              unit  method
────────────────────────────────────────────────────────────────────────────────────
jarlskog  (3.203 +- 0.070)e-05  [3.133, 3.273]e-05  [3.066, 3.340]e-05        linear"""

MEASUREMENTS = """\
Measured against fitted
id          measured            fitted       unit   pull
────────────────────────────────────────────────────────
element-ud  0.97367 +- 0.00032  0.97432            -2.03
gamma       66.4 +2.7 -2.8      65.6 +- 1.6  deg   +0.28
bag-K       0.7533 +- 0.0091    0.7545             -0.13
pull = (measured - fitted) / measured error"""

OTHER_MINIMA = """\
Other minima
chi-square  above the best  wolfenstein_lambda  wolfenstein_A  wolfenstein_rhobar  wolfenstein_etabar
─────────────────────────────────────────────────────────────────────────────────────────────────────
      5.50           +2.29             0.22520          0.830              0.2000             -0.3000"""


def test_golden_parameters(result: FitResult) -> None:
    assert text(tables.estimates("Parameters", result.parameters)) == PARAMETERS


def test_golden_derived(result: FitResult) -> None:
    assert text(tables.estimates("Derived", result.derived)) == DERIVED


def test_golden_measurements_sorted_by_pull(result: FitResult) -> None:
    assert text(tables.measurements(result.measurements)) == MEASUREMENTS


def test_golden_other_minima(result: FitResult) -> None:
    found = tables.other_minima(result)
    assert text(found) == OTHER_MINIMA
    assert tables.other_minima(replace(result, other_minima=())) is None


def test_verdict_comes_with_reasons(result: FitResult) -> None:
    good = text(*tables.verdict(result))
    assert good == "Converged. chi-square 3.21 for 2 degrees of freedom, p-value 0.20"
    bad = replace(
        result, valid=False, message="minimisers disagree", flags=("minimisers-disagree",), p_value=None
    )
    shown = text(*tables.verdict(bad))
    assert shown.startswith("NOT CONVERGED: minimisers disagree. chi-square 3.21")
    assert "no p-value" in shown
    assert "flag: minimisers-disagree" in shown
    assert text(*tables.verdict(FitResult())).startswith("NOT CONVERGED: no reason recorded")


def test_notices_name_everything_special_about_the_inputs() -> None:
    notices = [
        ("recalled", "charm-mass", "value quoted from memory"),
        ("recalled", "kappa", "value quoted from memory"),
        ("inflated", "element-us", "error scaled by 2.5: disagreement"),
        ("replaced", "frequency-Bd", "of averages-2026"),
        ("changed", "gamma", "error = 2 (was 2.75)"),
    ]
    shown = text(tables.notices(notices, {"penguin_shift_2beta": 0.0}, {"penguin_shift_2beta": "deg"}))
    assert shown.splitlines() == [
        "  replaced   frequency-Bd: of averages-2026",
        "  changed    gamma: error = 2 (was 2.75)",
        "  inflated   element-us: error scaled by 2.5: disagreement",
        "  recalled   charm-mass, kappa (quoted from memory: compare with the source before relying on them)",
        "  held fixed penguin_shift_2beta = 0 deg",
    ]
    assert tables.notices([], {}).row_count == 0


@pytest.mark.parametrize("width", [80, 100, 120])
def test_no_number_is_broken_at_common_widths(width: int) -> None:
    names = ("wolfenstein_etabar", "long_distance_factor_epsilon_K")
    rows = {
        name: Estimate(0.3541, 0.00705, (0.34711, 0.36121), (0.34062, 0.36815), "profile", "GeV")
        for name in names
    }
    measured = [
        MeasurementRow(
            *("short-distance-factor-top-top", "bag_K", 0.55012, 0.02321, 0.02110, 0.55214, -0.09, "1/ps"),
            *("theory", ("lattice",), 0.02131),
        )
    ]
    output = Output()
    console = Console(file=io.StringIO(), width=width, color_system=None, legacy_windows=False)
    output.__dict__["console"] = console
    output.show(tables.estimates("Parameters", rows), tables.measurements(measured))
    shown = console.file.getvalue()  # type: ignore[attr-defined]
    assert max(len(line) for line in shown.splitlines()) <= width
    for whole in ("0.3541 +0.0071 -0.0070", "[0.3406, 0.3682]", "profile", "GeV", "1/ps", "-0.09"):
        assert any(whole in line for line in shown.splitlines()), whole
    assert "0.550 +0.023 -0.021" in shown
    assert ("68.27 %" in shown) == (width == 120)


def test_names_fold_at_their_separators_and_nothing_else_does(result: FitResult) -> None:
    assert tables.fold("long_distance_factor_epsilon_K", 20) == "long_distance_\nfactor_epsilon_K"
    assert tables.fold("bag_K", 20) == "bag_K"
    assert tables.fold("mixing-matrix-element-Bs", 14) == "mixing-matrix-\nelement-Bs"
    assert tables.fold("averyveryverylongword", 5) == "averyveryverylongword"
    output = Output()
    output.__dict__["console"] = Console(file=io.StringIO(), width=80, color_system=None)
    output.show(tables.other_minima(result))
    lines = output.console.file.getvalue().splitlines()  # type: ignore[attr-defined]
    assert "wolfenstein_" in "".join(lines)
    assert any(line.split() == ["5.50", "+2.29", "0.22520", "0.830", "0.2000", "-0.3000"] for line in lines)


@pytest.mark.parametrize("width", [60, 80, 100, 140])
def test_headline_breaks_between_details(width: int) -> None:
    output = Output()
    output.__dict__["console"] = Console(file=io.StringIO(), width=width, color_system=None)
    details = ("averages-2026 revision 1", "23 entries, 14 parameters", "hypothesis standard")
    output.headline("fit", *details)
    lines = output.console.file.getvalue().splitlines()  # type: ignore[attr-defined]
    assert max(map(len, lines)) <= width
    assert "quark mixing fit" in lines[0]
    for detail in details:
        assert any(detail in line for line in lines)


def test_flat_ranges_are_ranges(result: FitResult) -> None:
    bounds = (0.7442, 0.7624)
    flat = replace(
        result,
        parameters={**result.parameters, "bag_K": Estimate(0.75, None, bounds, bounds, "range")},
        p_value=None,
    )
    line = text(tables.estimates("Parameters", flat.parameters)).splitlines()[-1]
    assert line.split() == ["bag_K", "range", "[0.7442,", "0.7624]", "-", "-", "range"]
    assert "every error is Gaussian as written" in tables.caution(result)
    assert "flat theory errors are ranges" in tables.caution(flat)
    assert "Under flat ranges neither a p-value nor a covariance matrix" in tables.caution(flat)
    assert FitResult.from_json(flat.to_json()).parameters["bag_K"] == flat.parameters["bag_K"]


def test_one_power_of_ten_in_a_row() -> None:
    rows = (
        MeasurementRow(
            *("tau-nu", "branching_Bu_tau_nu", 1.49e-4, 0.14e-4, 0.14e-4, 9.71e-5, 3.7, "1", "experiment"),
            fitted_error=0.42e-5,
        ),
    )
    assert "(1.49 +- 0.14)e-04  (0.971 +- 0.042)e-04" in text(tables.measurements(rows))
    near = {"x": Estimate(9.9e-4, 2e-5, (9.7e-4, 1.01e-3), (9.5e-4, 1.03e-3))}
    assert "(9.90 +- 0.20)e-04  [9.70, 10.10]e-04  [9.50, 10.30]e-04" in text(tables.estimates("", near))


def test_p_values_keep_their_zeros() -> None:
    assert tables.p_value(0.1) == "p-value 0.10"
    assert tables.p_value(3e-7) == "p-value 3.0e-07"
