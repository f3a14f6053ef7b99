"""Tables of calibrations, built from results; nothing here computes but the errors of interval ends."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

from fitcore.commands.output import Output

if TYPE_CHECKING:
    from fitcore.studies.calibration_result import CalibrationResult

CAUTION = (
    "Pseudo-experiments are thrown around the fitted point, auxiliary theory inputs included, with all other "
    "parameters at their profiled values: exact where the test does not depend on those, an approximation otherwise."
)


def show(output: Output, result: CalibrationResult) -> None:
    """Print a calibration for a person, the goodness of fit first."""
    from rich.text import Text

    from fitcore.rounding import like_error

    found = result.goodness
    if found is not None:
        line = Text("p-value ", style="bold")
        line.append(p_value(found.value, found.error), style="bold")
        line.append(f" calibrated with {found.toys:,} pseudo-experiments", style="default")
        line.append(
            f" ({like_error(result.asymptotic, found.error)} asymptotically)"
            if result.asymptotic is not None
            else " (no asymptotic value)"
        )
        output.show(line)
        output.show(f"chi-square {result.chi2:.2f} for {result.degrees_of_freedom} degrees of freedom")
    for flag in result.flags:
        output.show(Text(f"  flag: {flag}", style="yellow"))
    if result.message:
        output.show(result.message)
    if result.points:
        output.show(_points_table(result))
    for region in result.regions:
        output.show(_region_table(region))
        if region.message:
            output.show(region.message)
    if result.coverage:
        output.show(_coverage_table(result))
    output.show(CAUTION)


def p_value(value: float, error: float) -> str:
    from fitcore.rounding import with_error

    return with_error(value, error)


def _points_table(result: CalibrationResult) -> Any:
    from fitcore.commands import tables
    from fitcore.rounding import like_error, number

    made = tables.table(
        "Points tested", ("point", "whole"), ("Delta chi2", "right"), "calibrated p", "asymptotic p"
    )
    for point in result.points:
        where = ", ".join(
            f"{name} = {number(value)} {tables.shown_unit(point.units[name])}".rstrip()
            for name, value in point.values.items()
        )
        found = point.calibrated
        made.add_row(
            where,
            f"{point.delta_chi2:.3f}" if found else "-",
            p_value(found.value, found.error) if found else point.message,
            like_error(point.asymptotic, found.error) if found else "-",
        )
    return made


def _region_table(region: Any) -> Any:
    import numpy as np

    from fitcore.commands import tables
    from fitcore.rounding import interval, with_error

    single = len(region.names) == 1
    if single:
        title = f"Interval of {region.names[0]} {tables.shown_unit(region.units[0])}".rstrip()
    else:
        title = f"Region of {region.names[0]} and {region.names[1]}"
    made = tables.table(
        title,
        "cl",
        "calibrated",
        *(("ends +-",) if single else ()),
        "asymptotic",
        "threshold needed",
        "assumed",
        caption="ends +-: from the number of pseudo-experiments, 68.27 %" if single else "",
    )
    for c, level in enumerate(region.cl):
        shown = []
        for parts in (region.calibrated[c], region.asymptotic[c]):
            if single:
                shown.append(" and ".join(interval(low, high) for low, high, *_ in parts) or "empty")
            else:
                shown.append(f"{len(parts)} outline{'' if len(parts) == 1 else 's'}")
        if single:
            shown.insert(1, _ends_errors(region, c))
        known = np.isfinite(region.needed[c])
        needed = region.needed[c][known]
        span = "-"
        if needed.size:
            errors = 0.5 * (region.needed_high[c] - region.needed_low[c])[known]
            lowest, highest = int(np.argmin(needed)), int(np.argmax(needed))
            ends = dict.fromkeys(
                with_error(float(needed[k]), float(errors[k]))
                if np.isfinite(errors[k])
                else f"{needed[k]:.2f}"
                for k in (lowest, highest)
            )
            span = " to ".join(ends)
        made.add_row(f"{100 * level:.4g} %", *shown, span, f"{region.assumed[c]:.2f}")
    return made


def _ends_errors(region: Any, c: int) -> str:
    """Write the statistical uncertainties of interval ends: that of the threshold over the slope there."""
    import numpy as np

    from fitcore.rounding import significant

    nodes, fine, delta = region.grids[0], region.fine_grids[0], region.delta_chi2
    half = 0.5 * (region.needed_high[c] - region.needed_low[c])
    known, real = np.isfinite(half), np.isfinite(delta)
    if not known.any() or real.sum() < 2:
        return "-"
    slope = np.abs(np.gradient(delta[real], fine[real]))
    texts = []
    for end in (end for low, high, *_ in region.calibrated[c] for end in (low, high)):
        error = np.interp(end, nodes[known], half[known]) / max(np.interp(end, fine[real], slope), 1e-300)
        cut = not fine[0] < end < fine[-1]
        texts.append("-" if cut else significant(float(error), 1))
    return ", ".join(texts) or "-"


def _coverage_table(result: CalibrationResult) -> Any:
    from fitcore.commands import tables

    made = tables.table(
        "Coverage of the Delta chi-square intervals",
        ("name", "whole"),
        "cl",
        ("coverage", "whole"),
        ("pull mean", "whole"),
        ("pull width", "whole"),
        caption="pull = (fitted - true) / error from the curvature of each pseudo-experiment",
    )
    for row in result.coverage:
        low, high = row.interval
        made.add_row(
            row.name,
            f"{100 * row.cl:.4g} %",
            f"{100 * row.coverage:.1f} +{100 * (high - row.coverage):.1f} -{100 * (row.coverage - low):.1f} %",
            f"{row.pull_mean:+.3f} +- {row.pull_mean_error:.3f}" if row.pulls > 1 else "-",
            f"{row.pull_width:.3f} +- {row.pull_width_error:.3f}" if row.pulls > 1 else "-",
        )
    return made
