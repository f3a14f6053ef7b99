"""What the shell offers when a user presses the tab key."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    import click
    from click.shell_completion import CompletionItem


def complete_inputs(
    _ctx: click.Context, _parameter: click.Parameter, incomplete: str
) -> list[CompletionItem]:
    """Offer the bundled inputs, and files."""
    from click.shell_completion import CompletionItem

    from likelihoods.bundled import bundled_names

    names = [CompletionItem(name) for name in sorted(bundled_names()) if name.startswith(incomplete)]
    return [*names, CompletionItem(incomplete, type="file")]


def complete_names(_ctx: click.Context, _parameter: click.Parameter, incomplete: str) -> list[CompletionItem]:
    """Offer the names of the catalogue."""
    from click.shell_completion import CompletionItem

    from observables import catalogue

    return [
        CompletionItem(name, help=catalogue[name].title)
        for name in catalogue.names()
        if name.startswith(incomplete)
    ]


def complete_entries(
    context: click.Context, _parameter: click.Parameter, incomplete: str
) -> list[CompletionItem]:
    """Offer the ids, groups and kinds of the inputs that stand on the command line already."""
    from click.shell_completion import CompletionItem

    from likelihoods import load_inputs
    from observables.errors import WeakmixError

    # the parser stops at an option that still waits for its value, and leaves the arguments as they are
    source = context.params.get("inputs") or next(iter(context.args), None)
    if not source:
        return []
    place = Path(source)
    try:
        entries = load_inputs(place / "inputs.toml" if (place / "run.json").is_file() else source).entries
    except WeakmixError:
        return []
    items = {name: "group" for entry in entries for name in sorted(entry.names)}
    items |= {entry.kind: "kind" for entry in entries}
    items |= {entry.id: entry.quantity for entry in entries}
    return [CompletionItem(name, help=what) for name, what in items.items() if name.startswith(incomplete)]
