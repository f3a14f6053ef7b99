"""`weakmix rerun`: compute a run folder again and compare the numbers."""

from __future__ import annotations

import hashlib
import json
import math
import tempfile
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import click

from fitcore.commands.errors import EXIT_FELL_SHORT, input_error
from fitcore.commands.options import reading_options
from fitcore.commands.output import Output

#: Commands whose run folder holds all that they need to run again.
REPEATABLE = ("fit", "demo", "profile", "calibrate", "indirect", "budget", "outlook")
#: Two numbers are the same within this fraction of themselves ...
RELATIVE = 1e-9
#: ... or of the uncertainty stored beside them; absolute for what is measured in uncertainties already.
OF_SIGMA = 1e-6
#: Branches of a result that describe the run, not its outcome.
NOT_COMPARED = frozenset(
    {"provenance", "inputs", "notices", "n_calls", "format_version", "message", "seconds"}
)
#: Numbers counted in standard deviations, or bounded by one.
IN_SIGMAS = ("chi2", "chi2_share", "pull", "p_value", "correlation", "covariance", "tension", "minimum")
MOST_ROWS = 30


@dataclass(frozen=True)
class Difference:
    """A number that came out differently; `ratio` is its distance in tolerances."""

    where: str
    stored: Any
    recomputed: Any
    ratio: float


@click.command("rerun")
@click.argument("folder", metavar="DIR", type=click.Path(path_type=Path))
@reading_options
@click.pass_context
def command(ctx: click.Context, folder: Path, output: Output) -> None:
    """Compute the run folder DIR again from its exact inputs and options, and compare the numbers.

    Two numbers are the same if they agree to 1e-9 of themselves, or to 1e-6 of their uncertainty. Nothing in
    DIR is changed. Exit codes: 0 the same; 1 different; 2 DIR cannot be used, or was edited.

    \b
      weakmix fit averages-2026 --out mine && weakmix rerun mine
    """
    from fitcore.commands import run_folder, tables

    record = read_run(folder)
    output.headline("rerun", str(folder), f"{record['command']} of {record.get('created', 'unknown date')}")
    stored = read_result(folder)
    recomputed = recompute(folder, record)
    differences, compared = compare(stored, recomputed)
    versions = {
        name: (before, now)
        for name, now in run_folder.library_versions().items()
        if (before := record.get("versions", {}).get(name)) != now
    }

    if edited := digest(folder / "result.json") != record["files"].get("result.json"):
        output.show(f"{folder / 'result.json'} was changed after the run.")
    for name, (before, now) in versions.items():
        output.show(f"{name} was {before}, is now {now}.")
    if differences:
        made = tables.table(
            "Differences",
            *("number", ("stored", "right"), ("recomputed", "right"), ("tolerances apart", "right")),
        )
        for one in sorted(differences, key=lambda one: -one.ratio)[:MOST_ROWS]:
            made.add_row(one.where, _shown(one.stored), _shown(one.recomputed), f"{one.ratio:.3g}")
        output.show(made)
        if len(differences) > MOST_ROWS:
            output.show(f"... and {len(differences) - MOST_ROWS} more; --json lists all of them.")
    verdict = (
        f"{len(differences)} of {compared} numbers differ" if differences else f"All {compared} numbers agree"
    )
    output.show(f"{verdict} (to {RELATIVE:g} of themselves, or {OF_SIGMA:g} of their uncertainty).")
    output.write_json(
        {
            "same": not differences,
            "compared": compared,
            "tolerance": {"relative": RELATIVE, "of_uncertainty": OF_SIGMA},
            "result_edited": edited,
            "versions_changed": {name: list(pair) for name, pair in versions.items()},
            "differences": [vars(one) for one in differences],
        }
    )
    if differences:
        click.echo(f"weakmix: {verdict}: the result of {folder} was not reproduced", err=True)
        ctx.exit(EXIT_FELL_SHORT)


def _shown(value: Any) -> str:
    return f"{value:.12g}" if isinstance(value, float) else str(value)


def digest(path: Path) -> str | None:
    """Return the sha256 of a file, None if it cannot be read."""
    try:
        return hashlib.sha256(path.read_bytes()).hexdigest()
    except OSError:
        return None


def read_run(folder: Path) -> dict[str, Any]:
    """Read the record of a run folder and check that what the run needs is still what it was.

    Raises
    ------
    InputError
        Not a run folder, one of a command that cannot be repeated, or with missing or edited inputs.
    """
    from fitcore.commands.run_folder import FORMAT_VERSION, read_record

    record = read_record(folder)
    if record is None:
        message = f"{folder}: is not a weakmix run folder (no readable run.json); give the folder of a run"
        raise input_error(message)
    if record.get("format_version", 0) > FORMAT_VERSION:
        message = f"{folder}: was written by a newer weakmix; install one at least as new"
        raise input_error(message)
    if record.get("command") not in REPEATABLE:
        message = (
            f"{folder}: is a run of {record.get('command')!r}; only {', '.join(REPEATABLE)} can be run again"
        )
        raise input_error(message)
    files = record.get("files")
    if not isinstance(files, dict) or not isinstance(record.get("command_line"), list):
        message = f"{folder / 'run.json'}: is incomplete (no files, or no command line)"
        raise input_error(message)
    needed = dict.fromkeys(
        ["inputs.toml", "result.json", *(n for n in files if n.endswith((".py", ".toml")))]
    )
    faults = []
    for name in needed:
        found = digest(folder / name)
        if found is None:
            faults.append(
                f"{folder / name}: is missing or cannot be read; the run cannot be repeated without it"
            )
        elif found != files.get(name) and name != "result.json":
            faults.append(
                f"{folder / name}: was changed after the run (sha256 {found[:12]}, recorded "
                f"{str(files.get(name))[:12]}); put the original back, or run the command anew with this file"
            )
    if faults:
        raise input_error("\n".join(faults))
    return record


def read_result(folder: Path) -> dict[str, Any]:
    """Read the stored result."""
    path = folder / "result.json"
    try:
        content = json.loads(path.read_text(encoding="utf-8"))
    except (OSError, ValueError) as error:
        message = f"{path}: is not readable JSON ({error}); nothing can be compared"
        raise input_error(message) from error
    if not isinstance(content, dict):
        message = f"{path}: does not hold a result; nothing can be compared"
        raise input_error(message)
    return content


def recompute(folder: Path, record: Mapping[str, Any]) -> dict[str, Any]:
    """Run the recorded command on the recorded inputs and return its result.

    The recorded arguments are read by the command itself; what the exact inputs contain already (selections,
    changed errors) is not applied again, and modules are taken from the folder.
    """
    from fitcore.commands.main import cli

    name = str(record["command"])
    arguments = [str(word) for word in record["command_line"]]
    if name not in arguments:
        message = f"{folder / 'run.json'}: its command line does not name the command {name!r}"
        raise input_error(message)
    inner = cli.get_command(click.Context(cli), name)
    if inner is None:
        message = f"{folder}: this weakmix has no command {name!r}"
        raise input_error(message)
    try:
        context = inner.make_context(name, arguments[arguments.index(name) + 1 :])
    except click.ClickException as error:
        message = f"{folder / 'run.json'}: its options are not understood: {error.format_message()}"
        raise input_error(message) from error
    with tempfile.TemporaryDirectory(prefix="weakmix-rerun-") as scratch:
        place = Path(scratch) / "run"
        fixed: dict[str, Any] = {
            "inputs": str(folder / "inputs.toml"),
            "only": (),
            "without": (),
            "settings": (),
            "json": None,
            "quiet": True,
            "out": place,
            "no_figures": True,
            "cluster": None,
            "future": folder / "future.toml",
            "modules": tuple(str(folder / Path(path).name) for path in context.params.get("modules", ())),
        }
        context.params.update({key: value for key, value in fixed.items() if key in context.params})
        try:
            with context:
                inner.invoke(context)
        except click.exceptions.Exit:
            pass  # a fit that did not converge is stored all the same, and compared
        return read_result(place)


def compare(stored: Any, recomputed: Any) -> tuple[list[Difference], int]:
    """Compare all numbers of two results.

    Returns
    -------
    differences : list of Difference
        Also numbers that only one of the two has.
    compared : int
        How many there are.
    """
    errors = _errors(stored)
    before, after = (dict(_leaves(_by_name(result, errors))) for result in (stored, recomputed))
    differences = []
    for where in dict.fromkeys([*before, *after]):
        old, sigma = before.get(where, ("absent", 0.0))
        new, _ = after.get(where, ("absent", 0.0))
        if _number(old) and _number(new):
            tolerance = max(RELATIVE * abs(old), OF_SIGMA * sigma)
            distance = abs(old - new)
            if distance > tolerance:
                differences.append(
                    Difference(where, old, new, distance / tolerance if tolerance else math.inf)
                )
        elif old is not new and old != new:
            differences.append(Difference(where, old, new, math.inf))
    return differences, len(before)


def _number(value: Any) -> bool:
    return isinstance(value, (int, float)) and not isinstance(value, bool)


def _errors(result: Any) -> dict[str, float]:
    """Return the errors that a result's covariance matrix holds, by name."""
    table = result.get("covariance") if isinstance(result, dict) else None
    if not isinstance(table, dict) or not table.get("matrix"):
        return {}
    diagonal = {
        name: row[i] for i, (name, row) in enumerate(zip(table["names"], table["matrix"], strict=True))
    }
    return {name: math.sqrt(x) for name, x in diagonal.items() if _number(x) and x > 0}


def _by_name(result: Any, errors: Mapping[str, float]) -> Any:
    """Label matrices by names, so that their order does not matter, and divide covariances by known errors."""
    if not isinstance(result, dict):
        return result
    labelled = dict(result)
    for key in ("correlation", "covariance"):
        table = result.get(key)
        if not isinstance(table, dict) or not table.get("matrix"):
            continue
        scale = errors if key == "covariance" else {}
        entries: dict[str, Any] = {}
        for i, (one, row) in enumerate(zip(table["names"], table["matrix"], strict=True)):
            for other, x in zip(table["names"][: i + 1], row, strict=False):
                label = "][".join(sorted((one, other)))
                entries[f"[{label}]"] = x / (scale.get(one, 1.0) * scale.get(other, 1.0)) if _number(x) else x
        labelled[key] = entries
    return labelled


def _leaves(value: Any, where: str = "", sigma: float = 0.0) -> Iterator[tuple[str, tuple[Any, float]]]:
    """Walk through numbers, truth values and absent values, with the uncertainty that goes with each."""
    if isinstance(value, dict):
        sigma = _uncertainty(value) or sigma
        for key, item in value.items():
            if key not in NOT_COMPARED:
                inside = 1.0 if key in IN_SIGMAS or key.startswith("chi2") else sigma
                separator = "." if where and not key.startswith("[") else ""
                yield from _leaves(item, f"{where}{separator}{key}", inside)
    elif isinstance(value, list):
        for index, item in enumerate(value):
            label = item.get("id", index) if isinstance(item, dict) else index
            yield from _leaves(item, f"{where}[{label}]", sigma)
    elif value is None or isinstance(value, (int, float)):
        yield where, (value, sigma)


def _uncertainty(entry: Mapping[str, Any]) -> float:
    """Return the uncertainty that is stored beside a value, 0 if there is none."""
    for key in ("fitted_error", "error"):
        found = entry.get(key)
        if _number(found) and found:
            return float(abs(found))
    ends = entry.get("interval_68")
    if isinstance(ends, list) and len(ends) == 2 and all(_number(end) for end in ends):
        return float(abs(ends[1] - ends[0])) / 2
    return 0.0
