"""`weakmix show`: what an inputs file holds."""

from __future__ import annotations

from typing import Any

import click

from fitcore.commands.options import ProblemRequest, problem_options, reading_options
from fitcore.commands.output import Output


@click.command("show")
@problem_options
@click.option("--sources", is_flag=True, help="Print each entry's source and note below the table.")
@reading_options
def command(request: ProblemRequest, sources: bool, output: Output) -> None:
    """List the entries of INPUTS with ids, values, groups and marks.

    The ids, groups and kinds are what --only and --without take, the ids what --set takes.

    \b
      weakmix show averages-2026
      weakmix show averages-2026 --only oscillation --sources
    """
    from fitcore.commands import tables
    from fitcore.commands.fit import announce
    from fitcore.rounding import number, with_error

    problem = request.load()
    inputs = problem.inputs
    announce(output, "inputs", problem)
    output.show(f"{inputs.title}\n")
    made = tables.table(
        "",
        ("id", "name"),
        ("quantity", "spare"),
        ("value", "whole"),
        ("unit", "whole"),
        "groups",
        ("marks", "whole"),
        caption="T theory, R recalled, I inflated, F flat range, C in a correlated block, O overlaps others",
    )
    for entry in problem.entries:
        value = with_error(entry.value, entry.plus, entry.minus)
        if entry.flat_halfwidth:
            value += f" (flat {number(entry.flat_halfwidth, 2)})"
        made.add_row(
            entry.id,
            entry.quantity,
            value,
            tables.shown_unit(entry.unit),
            " ".join(entry.groups),
            marks(entry),
        )
    output.show(made)
    if sources:
        listed = tables.table("Sources", ("id", "name"), "source")
        for entry in problem.entries:
            listed.add_row(entry.id, entry.source + (f" [{entry.pdg}]" if entry.pdg else ""))
            if entry.note:
                listed.add_row("", f"note: {entry.note}")
        output.show(listed)
    free = ", ".join(f"{p.name}{'' if p.unit == '1' else f' [{p.unit}]'}" for p in problem.parameters)
    output.show(f"Free parameters ({problem.n_parameters}): {free}")
    groups = sorted({group for entry in problem.entries for group in entry.groups})
    kinds = sorted({entry.kind for entry in problem.entries})
    output.show(f"Groups: {', '.join(groups) if groups else 'none'}; kinds: {', '.join(kinds)}")
    output.write_json(
        {
            "title": inputs.title,
            "inputs": {"name": inputs.name, "revision": inputs.revision, "sha256": inputs.sha256},
            "entries": [as_data(entry) for entry in problem.entries],
            "notices": [{"kind": n.kind, "id": n.id, "text": n.text} for n in inputs.notices],
            "parameters": list(problem.parameter_names),
            "fixed": dict(problem.fixed),
        }
    )


def marks(entry: Any) -> str:
    """Return the letters that set an entry apart."""
    found = {
        "T": entry.kind == "theory",
        "R": entry.recalled,
        "I": entry.inflate != 1.0,
        "F": entry.flat_halfwidth > 0,
        "C": entry.block is not None,
        "O": bool(entry.overlaps),
    }
    return "".join(letter for letter, true in found.items() if true)


def as_data(entry: Any) -> dict[str, Any]:
    """Return an entry as plain data."""
    keys = (
        *("id", "quantity", "value", "plus", "minus", "unit", "kind", "groups", "overlaps", "errors"),
        *(
            "flat_halfwidth",
            "inflate",
            "recalled",
            "source",
            "pdg",
            "note",
            "part_of",
            "block",
            "file",
            "line",
        ),
    )
    return {key: getattr(entry, key) for key in keys}
