"""`weakmix recipe`: how a quantity is made."""

from __future__ import annotations

import inspect
from collections.abc import Mapping
from typing import TYPE_CHECKING, Any

import click

from fitcore.commands.completion import complete_names
from fitcore.commands.options import hypothesis_option, module_option, reading_options
from fitcore.commands.output import Output

if TYPE_CHECKING:
    from rich.tree import Tree


@click.command("recipe")
@click.argument("name", shell_complete=complete_names)
@hypothesis_option
@module_option
@reading_options
def command(name: str, hypothesis: tuple[str, ...], modules: tuple[str, ...], output: Output) -> None:
    """Print how NAME is made: formula, ingredients, parameters, sources.

    \b
      weakmix recipe mixing_frequency_Bd
      weakmix recipe my_ratio --module my_quantities.py
    """
    from rich.padding import Padding

    from fitcore.commands import tables
    from fitcore.commands.modules import check_hypotheses, load_modules
    from fitcore.rounding import number, with_error
    from observables import catalogue
    from observables.graph import find_parameters

    load_modules(modules)
    check_hypotheses(hypothesis)
    overlay = catalogue.get_hypothesis("+".join(hypothesis) or "standard")
    node: Any = overlay.parameters[name] if name in overlay.parameters else catalogue[name]
    leaves = find_parameters(catalogue, (name,), overlay)
    parameters: list[Any] = [leaf for leaf in leaves.values() if leaf.kind == "parameter"]
    constants: list[Any] = [leaf for leaf in leaves.values() if leaf.kind == "constant"]
    sources = dict.fromkeys(_sources(node, overlay))

    output.headline("recipe", name, f"hypothesis {overlay.name}")
    facts = tables.table("", "", "")
    facts.show_header = False
    for label, text in (
        ("title", node.title),
        ("kind", _kind(node)),
        ("unit", "dimensionless" if node.unit == "1" else node.unit),
        ("symbol", node.latex),
        ("period", f"{number(node.period)} {node.unit}" if node.period else ""),
        (
            "recalled",
            "formula quoted from memory: compare with the source" if getattr(node, "recalled", False) else "",
        ),
    ):
        if text:
            facts.add_row(label, text)
    output.show(facts)
    for title, text in formulas(node, overlay):
        output.show(f"[bold]{title}[/bold]")
        output.show_as_is(text + "\n")
    if node.kind == "quantity":
        output.show("[bold]Ingredients[/bold]", tree(name, overlay), "")
    if parameters:
        made = tables.table(
            "Parameters",
            ("name", "name"),
            ("start", "right"),
            ("lower", "right"),
            ("upper", "right"),
            "unit",
            "",
        )
        for leaf in parameters:
            remark = "held fixed unless the inputs measure or free it" if leaf.fixed else ""
            made.add_row(
                leaf.name,
                number(leaf.start),
                number(leaf.lower),
                number(leaf.upper),
                tables.shown_unit(leaf.unit),
                remark,
            )
        output.show(made)
    if constants:
        made = tables.table("Constants", ("name", "name"), ("value", "whole"), "unit", "source")
        for leaf in constants:
            made.add_row(
                leaf.name,
                with_error(leaf.value, leaf.error) if leaf.error else number(leaf.value, 10),
                tables.shown_unit(leaf.unit),
                leaf.source,
            )
        output.show(made)
    output.show("[bold]Sources[/bold]", *(Padding(_literal(source), (0, 0, 0, 2)) for source in sources))
    output.write_json(
        {
            "name": name,
            "kind": node.kind,
            "unit": node.unit,
            "title": node.title,
            "latex": node.latex,
            "hypothesis": overlay.name,
            "formulas": [{"of": title, "text": text} for title, text in formulas(node, overlay)],
            "ingredients": list(ingredients(name, overlay)),
            "parameters": {
                p.name: {
                    "start": p.start,
                    "lower": p.lower,
                    "upper": p.upper,
                    "fixed": p.fixed,
                    "unit": p.unit,
                }
                for p in parameters
            },
            "constants": {c.name: {"value": c.value, "error": c.error, "unit": c.unit} for c in constants},
            "sources": list(sources),
        }
    )


def _literal(text: str) -> Any:
    from rich.text import Text

    return Text(text)


def _kind(node: Any) -> str:
    if node.kind != "quantity":
        return str(node.kind)
    parts = ["quantity", "complex" if node.is_complex else "real"]
    parts.append(
        {"even": "CP even", "odd": "CP odd", "conjugate": "CP conjugates it"}.get(
            node.cp, f"CP partner {node.cp}"
        )
    )
    if not node.physical:
        parts.append("depends on the phase convention")
    return ", ".join(parts)


def formulas(node: Any, overlay: Any) -> list[tuple[str, str]]:
    """Return (title, text) of the formula of a quantity, and of each layer that a hypothesis puts on it.

    The text is the function's docstring and then its source, without the decorator.
    """
    if node.kind != "quantity":
        return []
    layers = [
        (f"Replaced by {layer.owner}{_renamed(layer.ingredients)}", _code(layer.function))
        for layer in overlay.layers.get(node.name, ())
    ]
    return [("Formula" + _renamed(node.ingredients), _code(node.function)), *layers]


def _renamed(sources: Mapping[str, str]) -> str:
    """Say which ingredients a formula knows under another name."""
    renamed = [f"{argument} = {source}" for argument, source in sources.items() if argument != source]
    return f", with {', '.join(renamed)}" if renamed else ""


def _code(function: Any) -> str:
    inner = inspect.unwrap(function)
    try:
        source = inspect.getsource(inner)
    except (OSError, TypeError):
        return inspect.getdoc(inner) or f"{inner!r} (no source at hand)"
    lines = inspect.cleandoc("\n" + source).splitlines()
    start = next((i for i, line in enumerate(lines) if line.lstrip().startswith("def ")), 0)
    return "\n".join(f"  {line}" for line in lines[start:])


def ingredients(name: str, overlay: Any) -> tuple[str, ...]:
    """Return the direct ingredients of a quantity under a hypothesis."""
    from observables import catalogue

    if name in overlay.parameters:
        return ()
    direct: dict[str, None] = dict.fromkeys(catalogue.ingredients(name))
    for layer in overlay.layers.get(name, ()):
        above = [source for argument, source in layer.ingredients.items() if argument != "standard"]
        direct = dict.fromkeys([*(direct if layer.takes_standard else ()), *above])
    return tuple(direct)


def tree(name: str, overlay: Any) -> Tree:
    """Draw the ingredients of a quantity down to its parameters and constants; each is opened once."""
    from rich.text import Text
    from rich.tree import Tree

    from observables import catalogue

    opened: set[str] = set()

    def label(part: str) -> Text:
        node: Any = overlay.parameters[part] if part in overlay.parameters else catalogue[part]
        style = {"quantity": "", "parameter": "green", "constant": "dim"}[node.kind]
        text = Text(part, style=style)
        extra = "" if node.kind == "quantity" else f" ({node.kind})"
        text.append(extra + (f"  {node.title}" if node.title else ""), style="dim")
        return text

    def grow(branch: Tree, part: str) -> None:
        opened.add(part)
        for piece in ingredients(part, overlay):
            text = label(piece)
            if piece in opened and ingredients(piece, overlay):
                text.append("  (see above)", style="dim italic")
                branch.add(text)
            else:
                grow(branch.add(text), piece)

    root = Tree(label(name))
    grow(root, name)
    return root


def _sources(node: Any, overlay: Any) -> list[str]:
    """Return the sources of everything from a node down to its leaves, its own first."""
    from observables import catalogue

    found: list[str] = []
    seen: set[str] = set()
    waiting = [node.name]
    while waiting:
        name = waiting.pop(0)
        if name in seen:
            continue
        seen.add(name)
        one: Any = overlay.parameters[name] if name in overlay.parameters else catalogue[name]
        if one.source and (one.kind != "constant" or one is node):
            found.append(one.source)
        if overlay.layers.get(name):
            found.append(overlay.source)
        waiting.extend(ingredients(name, overlay))
    return found
