"""`weakmix compute`: quantities at a point, or at the best fit of a run."""

from __future__ import annotations

import math
import re
from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from fitcore.commands.completion import complete_names
from fitcore.commands.errors import EXIT_FELL_SHORT, input_error
from fitcore.commands.options import hypothesis_option, module_option, output_options
from fitcore.commands.output import Output

if TYPE_CHECKING:
    import numpy as np

    from fitcore.result import FitResult
    from observables.hypothesis import Hypothesis

ASSIGNMENT = re.compile(
    r"\s*(?P<name>[A-Za-z_]\w*)\s*=\s*(?P<number>[-+]?(?:\d+\.?\d*|\.\d+)(?:[eE][-+]?\d+)?)\s*(?P<unit>\S.*?)?\s*"
)
WHAT_FROM_TAKES = "--from takes a run folder of `weakmix fit`, or inputs"
#: Step of the numerical propagation, in standard deviations: small against curvature, large against rounding.
PROPAGATION_STEP = 1e-3


@dataclass(frozen=True)
class Point:
    """Values of parameters, where each is from, and their covariance where a fit gave one."""

    values: dict[str, float] = field(default_factory=dict)
    origins: dict[str, str] = field(default_factory=dict)
    fitted: tuple[str, ...] = ()
    covariance: tuple[tuple[float, ...], ...] = ()
    name: str = ""
    hypothesis: str = "standard"


@click.command("compute")
@click.argument("quantities", nargs=-1, required=True, metavar="QUANTITY...", shell_complete=complete_names)
@click.option(
    "--from",
    "source",
    metavar="RUN-OR-INPUTS",
    help="Take the best fit of a run folder, or fit these inputs.",
)
@click.option(
    "--start-values", is_flag=True, help="Take catalogue start values for parameters not given otherwise."
)
@click.option(
    "--at",
    "assignments",
    multiple=True,
    metavar="NAME=VALUE[UNIT]",
    help="Set a parameter or constant; repeatable.",
)
@hypothesis_option
@module_option
@output_options
@click.pass_context
def command(
    ctx: click.Context,
    quantities: tuple[str, ...],
    source: str | None,
    start_values: bool,
    assignments: tuple[str, ...],
    hypothesis: tuple[str, ...],
    modules: tuple[str, ...],
    output: Output,
) -> None:
    """Compute each QUANTITY from the parameters.

    Parameters come from --at, else from --from, else (with --start-values) from the catalogue; one without a
    value from anywhere is an error. --from RUN takes the best fit and propagates its covariance linearly to
    68.27 % intervals, with the modules that the run had; --from INPUTS fits the inputs first, with the given
    hypothesis. A fitted parameter that --at moves leaves no intervals: they would belong to another point.

    A run folder is written only with --out.

    \b
      weakmix compute jarlskog angle_gamma --start-values --at wolfenstein_etabar=-0.35
      weakmix compute mixing_frequency_Bs --from weakmix-runs/fit-averages-2026-20260101-120000
      weakmix compute asymmetry_CP_even_DK --start-values --at strong_phase_DK=128.5deg
    """
    from fitcore.commands import tables
    from fitcore.commands.modules import check_hypotheses, load_modules, modules_of_run
    from fitcore.commands.options import refuse_chain
    from fitcore.rounding import number
    from observables import catalogue

    if source is not None:
        refuse_chain(source)
        modules = (*modules, *modules_of_run(Path(source), modules))
    load_modules(modules)
    check_hypotheses(hypothesis)
    names = tuple(dict.fromkeys(quantities))
    point = Point() if source is None else point_from(source, hypothesis)
    chosen = "+".join(hypothesis) or point.hypothesis
    check_hypotheses(chosen.split("+"))
    overlay = catalogue.get_hypothesis(chosen)
    nodes = known_nodes(names, overlay)
    given = read_assignments(assignments, overlay)
    leaves, values, origins = gather(names, overlay, given, point, start_values)

    computed = catalogue.compute(names, values, overlay)
    errors = {}
    moved = [name for name in given if name in point.fitted]
    if point.covariance and not moved:
        errors = propagate(names, values, overlay, point, {n: node.period for n, node in nodes.items()})

    output.headline("values", f"hypothesis {overlay.name}", point.name)
    made = tables.table("Parameters used", ("name", "name"), ("value", "whole"), "unit", "from")
    for name, origin in origins.items():
        made.add_row(name, number(float(values[name])), tables.shown_unit(leaves[name].unit), origin)
    if origins:
        output.show(made)
    rows = tables.table("Values", ("quantity", "name"), ("value", "whole"), "unit", "title")
    for name in names:
        rows.add_row(
            name,
            shown_value(computed[name], errors.get(name)),
            tables.shown_unit(nodes[name].unit),
            nodes[name].title,
        )
    output.show(rows)
    if errors:
        output.show("+- is the 68.27 % interval, propagated linearly from the covariance matrix of the fit.")
    elif point.fitted and not moved:
        output.show(
            "No intervals: the fit has no covariance matrix for the parameters used (flat ranges, or one at a bound or "
            "unconstrained); `weakmix fit INPUTS --derived NAME` gives profile intervals."
        )
    for name in moved:
        output.show(f"No intervals: --at moved {name} away from its best fit.")
    unused = [name for name in given if name not in leaves]
    for name in unused:
        output.show(f"Not used: nothing asked for rests on {name}.")
    outside = [
        f"{name} lies outside its physical bounds [{number(leaf.lower)}, {number(leaf.upper)}]"
        for name, leaf in leaves.items()
        if leaf.kind == "parameter" and name in values and not leaf.lower <= values[name] <= leaf.upper
    ]
    output.show(*(f"Caution: {text}." for text in outside))

    content: dict[str, Any] = {
        "values": {name: computed[name] for name in names},
        "units": {name: nodes[name].unit for name in names},
        "hypothesis": overlay.name,
        "parameters": {name: {"value": values[name], "from": origin} for name, origin in origins.items()},
    }
    if errors:
        content["errors"] = errors
        content["intervals_68"] = {
            name: [computed[name] - error, computed[name] + error] for name, error in errors.items()
        }
    output.write_json(content)
    if output.out is not None:
        options = {
            "quantities": list(names),
            "from": source,
            "at": list(assignments),
            "start_values": start_values,
            "hypothesis": list(hypothesis),
            "modules": list(modules),
        }
        write_run(output, content, options)
    undefined = [name for name in names if not math.isfinite(abs(computed[name]))]
    if undefined:
        click.echo(f"weakmix: no value at this point: {', '.join(undefined)}", err=True)
        ctx.exit(EXIT_FELL_SHORT)


def write_run(output: Output, content: dict[str, Any], options: dict[str, Any]) -> None:
    """Write a run folder with the values."""
    from fitcore.commands import run_folder

    with run_folder.writing("compute", "values", out=output.out, options=options) as run:
        run.write_json("result.json", content)
    output.show(f"Written to {run.place}")


def known_nodes(names: tuple[str, ...], overlay: Hypothesis) -> dict[str, Any]:
    """Look up all names; the unknown ones are reported together, each with the closest known ones."""
    from observables import catalogue

    unknown = [name for name in names if name not in catalogue and name not in overlay.parameters]
    if unknown:
        raise input_error(
            "\n".join(_unknown(name, "quantity", catalogue.close_matches(name)) for name in unknown)
        )
    return {
        name: overlay.parameters[name] if name in overlay.parameters else catalogue[name] for name in names
    }


def _unknown(name: str, what: str, close: tuple[str, ...]) -> str:
    hint = f"; did you mean {', '.join(close)}?" if close else "; see `weakmix find`"
    return f"unknown {what} {name!r}{hint}"


def read_assignments(assignments: tuple[str, ...], overlay: Hypothesis) -> dict[str, float]:
    """Read `name=value[unit]` settings into numbers in the catalogue's units.

    Raises
    ------
    InputError
        All mistakes together: form, unknown name, a quantity, a missing or unfitting unit, a repeated name.
    """
    from likelihoods import units
    from observables import catalogue

    values: dict[str, float] = {}
    mistakes = []
    for text in assignments:
        match = ASSIGNMENT.fullmatch(text)
        if match is None:
            mistakes.append(
                f"--at {text}: is not of the form name=value or name=value[unit], such as V=1.5GeV"
            )
            continue
        name, value, unit = match["name"], float(match["number"]), match["unit"]
        node: Any = overlay.parameters.get(name)
        if node is None and name in catalogue:
            node = catalogue[name]
        if node is None:
            pool = [*catalogue.names("parameter"), *overlay.parameters, *catalogue.names("constant")]
            mistakes.append(
                f"--at {text}: {_unknown(name, 'parameter', catalogue.close_matches(name, pool))}"
            )
        elif node.kind == "quantity":
            mistakes.append(
                f"--at {text}: {name} is a quantity, computed from others; set its parameters "
                f"({', '.join(catalogue.parameters_of(name)) or 'it has none'})"
            )
        elif name in values:
            mistakes.append(f"--at {text}: {name} is given twice; keep one")
        elif not math.isfinite(value):
            mistakes.append(f"--at {text}: the value is not finite")
        elif unit is None and node.unit != "1":
            mistakes.append(
                f"--at {text}: the unit is missing; write --at {name}={match['number']}{node.unit}"
            )
        else:
            try:
                values[name] = value * units.factor((unit or "1").strip("[] "), node.unit)
            except units.UnitError as error:
                mistakes.append(f"--at {text}: {error}; the catalogue's unit of {name} is {node.unit}")
    if mistakes:
        raise input_error("\n".join(mistakes))
    return values


def gather(
    names: tuple[str, ...], overlay: Hypothesis, given: Mapping[str, float], point: Point, start_values: bool
) -> tuple[dict[str, Any], dict[str, Any], dict[str, str]]:
    """Find a value for every leaf that the names rest on.

    Returns
    -------
    leaves, values, origins : dict
        All leaves; the values of those that do not keep their catalogue value; where each value is from.

    Raises
    ------
    InputError
        Listing the parameters without a value.
    """
    from observables import catalogue
    from observables.graph import find_parameters

    leaves: dict[str, Any] = dict(find_parameters(catalogue, names, overlay))
    values: dict[str, Any] = {}
    origins: dict[str, str] = {}
    missing = []
    for name, leaf in leaves.items():
        if name in given:
            values[name], origins[name] = given[name], "--at"
        elif name in point.values:
            values[name], origins[name] = point.values[name], point.origins[name]
        elif leaf.kind == "constant":
            continue
        elif leaf.fixed:
            values[name], origins[name] = leaf.start, "held fixed"
        elif start_values:
            values[name], origins[name] = leaf.start, "start value"
        else:
            missing.append(
                f"  {name}  (start value {leaf.start:g}{'' if leaf.unit == '1' else ' ' + leaf.unit})"
            )
    if missing:
        remedy = "give --at NAME=VALUE for each, --from RUN-OR-INPUTS, or --start-values for the start values"
        raise input_error("\n".join(["parameters without a value:", *missing, remedy]))
    return leaves, values, origins


def point_from(source: str, hypothesis: tuple[str, ...]) -> Point:
    """Take the best fit of a run folder, or fit inputs.

    Raises
    ------
    InputError
        If the folder holds no fit.
    ConvergenceError
        If inputs were given and their fit is not valid.
    """
    folder = Path(source)
    if folder.is_dir():
        return point_of_fit(read_fit(folder), str(folder))
    from fitcore.problem import Problem
    from observables.errors import ConvergenceError

    result = Problem.load(source, hypothesis="+".join(hypothesis) or "standard").fit()
    if not result.valid:
        message = (
            f"the fit of {source}: {result.message or 'no reason recorded'}; look at it with `weakmix fit`"
        )
        raise ConvergenceError(message, result)
    return point_of_fit(result, f"best fit of {result.inputs_name}")


def read_fit(folder: Path) -> FitResult:
    """Read the fit that a run folder holds.

    Raises
    ------
    InputError
        If there is none, or it is not readable.
    """
    from fitcore.result import FitResult

    path = folder / "result.json"
    try:
        text = path.read_text(encoding="utf-8")
    except OSError as error:
        message = f"{path}: cannot be read ({error.strerror}); {WHAT_FROM_TAKES}"
        raise input_error(message) from error
    from observables.errors import StoreError

    try:
        return FitResult.from_json(text)
    except StoreError as error:
        message = f"{path}: {error}; {WHAT_FROM_TAKES}"
        raise input_error(message) from error


def point_of_fit(result: FitResult, name: str) -> Point:
    """Make the point of a best fit."""
    fitted = {key: float(one.value) for key, one in result.parameters.items()}
    fixed = {key: float(value) for key, value in result.fixed.items()}
    return Point(
        values={**fixed, **fitted},
        origins={**dict.fromkeys(fixed, "held fixed"), **dict.fromkeys(fitted, "best fit")},
        fitted=tuple(result.parameter_names),
        covariance=result.covariance_matrix,
        name=name if result.valid else f"{name} (NOT CONVERGED)",
        hypothesis=result.hypothesis,
    )


def propagate(
    names: tuple[str, ...],
    values: Mapping[str, Any],
    overlay: Hypothesis,
    point: Point,
    periods: Mapping[str, float | None],
) -> dict[str, float]:
    """Propagate the covariance of a fit linearly to real quantities.

    Central differences along the principal axes of the covariance matrix, all points in one batch.

    Returns
    -------
    dict
        Name -> standard deviation; complex quantities and undefined ones are left out.
    """
    import numpy as np

    from observables import catalogue

    inside = [i for i, name in enumerate(point.fitted) if name in values]
    covariance = np.array(point.covariance)[np.ix_(inside, inside)]
    if not inside or not np.all(np.isfinite(covariance)):
        return {}
    variances, axes = np.linalg.eigh(_scaled(covariance))
    scale = np.sqrt(np.diag(covariance))
    shifts = PROPAGATION_STEP * scale[:, None] * axes * np.sqrt(np.clip(variances, 0.0, None))
    batch: dict[str, Any] = dict(values)
    for row, index in enumerate(inside):
        name = point.fitted[index]
        batch[name] = values[name] + np.concatenate([shifts[row], -shifts[row]])
    computed = catalogue.compute(names, batch, overlay)
    errors = {}
    for name in names:
        both = np.asarray(computed[name])
        if np.iscomplexobj(both):
            continue
        up, down = np.split(np.broadcast_to(both, (2 * len(inside),)), 2)
        difference = up - down
        period = periods[name]
        if period:
            difference = difference - period * np.round(difference / period)
        error = float(np.sqrt(np.sum((difference / (2 * PROPAGATION_STEP)) ** 2)))
        if math.isfinite(error):
            errors[name] = error
    return errors


def _scaled(covariance: np.ndarray) -> np.ndarray:
    """Correlation matrix: parameters differ by ten powers of ten, which would spoil the axes."""
    import numpy as np

    scale = np.sqrt(np.diag(covariance))
    scale = np.where(scale > 0, scale, 1.0)
    correlation: np.ndarray = covariance / np.outer(scale, scale)
    return correlation


def shown_value(value: Any, error: float | None) -> str:
    """Write a computed value, real or complex, with its error if it has one."""
    from fitcore.rounding import number, with_error

    if isinstance(value, complex) or getattr(getattr(value, "dtype", None), "kind", "") == "c":
        return f"{value.real:.6g} {'-' if value.imag < 0 else '+'} {abs(value.imag):.6g} i"
    if not math.isfinite(value):
        return "undefined here"
    return with_error(float(value), error) if error else number(float(value), 7)
