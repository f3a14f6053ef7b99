"""`weakmix demo`: fit invented measurements and compare with the truth they were made from."""

from __future__ import annotations

import json
import math
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from fitcore.commands.errors import input_error
from fitcore.commands.options import ProblemRequest, Work, output_options, seed_options
from fitcore.commands.output import Output

if TYPE_CHECKING:
    from rich.table import Table

    from fitcore.problem import Problem
    from fitcore.result import Estimate, FitResult

INPUTS = "tidewater"


@click.command("demo")
@click.option("--no-figures", is_flag=True, help="Draw nothing (saves about a second).")
@output_options
@seed_options
@click.pass_context
def command(ctx: click.Context, no_figures: bool, output: Output, work: Work) -> None:
    """Fit the invented Tidewater inputs and say where their truth lies.

    Curlew, Dunlin and Plover, three detectors that do not exist, measured a quark-mixing matrix that is not
    nature's. Since its parameters are known, each interval can be held against the truth: about 68 of
    100 must hold it, not all.
    """
    from fitcore.commands.fit import announce, fit_and_store, leave_if_not_valid, print_fit

    request = ProblemRequest(INPUTS)
    problem = request.load()
    announce(output, "demo", problem, notices=False)
    truth = read_truth(problem)
    asked = tuple(name for name in truth if name not in problem.parameter_names and name not in problem.fixed)
    result, place = fit_and_store(
        problem, request, output, work, command="demo", derived=asked, figures=not no_figures
    )
    print_fit(output, problem, result, place)
    rows = against_truth(result, truth)
    output.show("", truth_table(rows))
    held = sum(row["in_68"] for row in rows.values())
    held_95 = sum(row["in_95"] for row in rows.values())
    output.show(
        f"{held} of {len(rows)} intervals at 68.27 % hold the truth, {held_95} of those at 95.0 %. They share "
        f"measurements and so rise and fall together: {0.6827 * len(rows):.0f} of {len(rows)} is the average over "
        "many such scenarios, not a promise for this one."
    )
    output.write_json({**result.to_dict(), "truth": rows})
    leave_if_not_valid(ctx, result)


def read_truth(problem: Problem) -> dict[str, float]:
    """Read the truth that lies beside the scenario's inputs: `{name: value}` in the catalogue's units."""
    path = Path(problem.inputs.path).with_name(f"{INPUTS}_truth.json")
    try:
        content = json.loads(path.read_text(encoding="utf-8"))
        return {str(name): float(value) for name, value in content.items()}
    except (OSError, ValueError, TypeError, AttributeError) as error:
        message = f"{path}: the truth of the scenario cannot be read ({error}); install weakmix again"
        raise input_error(message) from error


def against_truth(result: FitResult, truth: dict[str, float]) -> dict[str, dict[str, Any]]:
    """Compare each known estimate of a fit with its true value.

    Returns
    -------
    dict
        Name -> truth, distance in errors of that side, whether the two intervals hold it.
    """
    estimates: dict[str, Estimate] = {**result.parameters, **result.derived}
    rows = {}
    for name, value in truth.items():
        one = estimates.get(name)
        if one is None or one.interval_68 is None or one.interval_95 is None:
            continue
        low, high = one.interval_68
        side = (one.value - low) if value < one.value else (high - one.value)
        rows[name] = {
            "truth": value,
            "value": one.value,
            "interval_68": [low, high],
            "distance": (value - one.value) / side if side and math.isfinite(side) else None,
            "in_68": bool(low <= value <= high),
            "in_95": bool(one.interval_95[0] <= value <= one.interval_95[1]),
            "unit": one.unit,
        }
    return rows


def truth_table(rows: dict[str, dict[str, Any]]) -> Table:
    """Tabulate truth against intervals."""
    from fitcore.commands import tables
    from fitcore.rounding import interval, like_error, shared_power

    made = tables.table(
        "Where the truth lies",
        ("name", "name"),
        ("truth", "right"),
        ("68.27 % interval", "whole"),
        ("unit", "whole"),
        ("away", "right"),
        "68.27 %",
        "95.0 %",
        caption="away = (truth - fitted) / error on that side",
    )
    for name, row in rows.items():
        low, high = row["interval_68"]
        half = (high - low) / 2
        power = shared_power(row["value"], low, high)
        made.add_row(
            name,
            like_error(row["truth"], half, power),
            interval(low, high, power=power),
            tables.shown_unit(row["unit"]),
            "-" if row["distance"] is None else f"{row['distance']:+.2f}",
            "holds it" if row["in_68"] else "misses",
            "holds it" if row["in_95"] else "misses",
        )
    return made
