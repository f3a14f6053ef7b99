"""What the shell offers when a user presses the tab key."""

from __future__ import annotations

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
