"""What the study commands share: compute inside a run folder, write result, inputs and figures."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from pathlib import Path
from typing import TYPE_CHECKING, Any, TypeVar

from fitcore.commands.options import ProblemRequest, Work
from fitcore.commands.output import Output

if TYPE_CHECKING:
    from fitcore.figures.style import Drawing
    from fitcore.problem import Problem

Result = TypeVar("Result")


def compute_and_store(
    name: str,
    problem: Problem,
    request: ProblemRequest,
    output: Output,
    work: Work,
    *,
    options: Mapping[str, Any],
    compute: Callable[[], Result],
    to_dict: Callable[[Result], dict[str, Any]],
    drawings: Callable[[Result], Mapping[str, Drawing]] | None,
    files: Mapping[str, str] | None = None,
) -> tuple[Result, Path | None]:
    """Compute, and write the run folder unless only JSON on stdout is wanted.

    Parameters
    ----------
    name : str
        Of the command.
    options : mapping
        The command's own options, as plain data.
    compute, to_dict : callable
    drawings : callable or None
        Result -> file name -> drawing; None draws nothing.
    files : mapping, optional
        Further text files for the folder.

    Returns
    -------
    result
    place : Path or None
        The run folder.
    """
    if output.json_on_stdout and output.out is None:
        return compute(), None
    from fitcore.commands import run_folder

    every = {**request.describe(), **options, "figures": drawings is not None}
    with run_folder.writing(name, problem.inputs.name, out=output.out, options=every, seed=work.seed) as run:
        result = compute()
        run.write_json("result.json", to_dict(result))
        run.write_inputs(problem.inputs.name, problem.inputs.resolved_toml())
        for file, text in (files or {}).items():
            run.write_text(file, text)
        run.log("computed")
        for file, drawing in (drawings(result) if drawings is not None else {}).items():
            run.write_figure(file, drawing)
    return result, run.place


def footer(problem: Problem) -> str:
    """What a figure was made from: set, revision, short hash, hypothesis, treatment of theory errors."""
    inputs = problem.inputs
    revision = f" revision {inputs.revision}" if inputs.revision else ""
    parts = [f"{inputs.name}{revision}", inputs.sha256[:8]]
    if problem.hypothesis != "standard":
        parts.append(f"hypothesis {problem.hypothesis}")
    return " - ".join([*parts, f"theory errors {problem.theory_errors}"])


def check_quantities(problem: Problem, names: tuple[str, ...]) -> None:
    """Refuse names that are unknown, complex, given twice or not determined by the inputs.

    Raises
    ------
    UnknownNameError, InputError
    """
    from fitcore.commands.errors import input_error

    for name in names:
        problem.unit_of(name)
        if problem.is_complex(name):
            raise input_error(f"{name}: is complex; give a real quantity, for instance its magnitude")
        if names.count(name) > 1:
            raise input_error(f"{name}: is given twice")
        problem.values(problem.start, (name,))
