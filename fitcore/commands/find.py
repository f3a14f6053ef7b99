"""`weakmix find`: search the catalogue."""

from __future__ import annotations

import re
from typing import TYPE_CHECKING

import click

from fitcore.commands.errors import EXIT_UNUSABLE_INPUT
from fitcore.commands.options import module_option, reading_options
from fitcore.commands.output import Output

if TYPE_CHECKING:
    from collections.abc import Iterable

    from observables.catalogue import Node

KINDS = ("quantity", "parameter", "constant")

#: Score of a match: the whole text, its start, inside it; for name, latex, title.
WEIGHTS = ((100, 70, 50), (95, 65, 45), (90, 40, 30))

#: What people type -> what names, titles or latex say. Common practice, no source.
SYNONYMS = {
    "dmd": ("deltamd", "mixingfrequencybd"),
    "dms": ("deltams", "mixingfrequencybs"),
    "dm": ("deltam",),
    "dg": ("deltagamma", "widthdifference"),
    "eps": ("epsilon",),
    "epsk": ("epsilonk",),
    "sin": ("sine",),
    "cos": ("cosine",),
    "br": ("branching",),
    "bf": ("branching",),
    "ckm": ("mixingmatrix", "magnitudev"),
    "cabibbo": ("wolfensteinlambda", "sinetheta12"),
    "j": ("jarlskog",),
    "phi1": ("anglebeta",),
    "phi2": ("anglealpha",),
    "phi3": ("anglegamma",),
    "phis": ("phasephis",),
    "asl": ("semileptonicasymmetry",),
    "b0": ("bd",),
    "b+": ("bu",),
    "bbar": ("bag",),
}


#: What stands between the two sides of a decay.
ARROW = re.compile(r"\s*(?:->|-->|\u2192|\\to\b)\s*")


class SearchCommand(click.Command):
    """A command whose words may be the arrow of a decay, which would be taken for an option."""

    def parse_args(self, ctx: click.Context, args: list[str]) -> list[str]:
        arrow = "\N{RIGHTWARDS ARROW}"
        return super().parse_args(ctx, [arrow if word in ("->", "-->") else word for word in args])


@click.command("find", cls=SearchCommand)
@click.argument("words", nargs=-1, required=True)
@click.option("--kind", type=click.Choice(KINDS), help="Show only this kind.")
@click.option(
    "--limit", type=click.IntRange(min=1), default=30, show_default=True, help="Show at most this many."
)
@module_option
@reading_options
@click.pass_context
def command(
    ctx: click.Context,
    words: tuple[str, ...],
    kind: str | None,
    limit: int,
    modules: tuple[str, ...],
    output: Output,
) -> None:
    """Search names, titles, symbols and latex of the catalogue; the best match first.

    \b
      weakmix find dmd
      weakmix find eps
      weakmix find "Delta m"
      weakmix find V_cb
      weakmix find sin2b
      weakmix find "B -> tau nu"
    """
    from fitcore.commands import tables
    from fitcore.commands.modules import load_modules
    from observables import catalogue

    load_modules(modules)
    pool = [catalogue[name] for name in catalogue.names(kind)]
    found = search(pool, words)
    output.headline("catalogue", f"{len(found)} of {len(pool)} match {' '.join(words)!r}")
    output.write_json(
        {
            "found": [
                {"name": n.name, "kind": n.kind, "unit": n.unit, "title": n.title, "latex": n.latex}
                for n in found
            ]
        }
    )
    if not found:
        close = catalogue.close_matches("_".join(words))
        hint = f"; names that look like it: {', '.join(close)}" if close else ""
        click.echo(f"weakmix: nothing in the catalogue matches {' '.join(words)!r}{hint}", err=True)
        ctx.exit(EXIT_UNUSABLE_INPUT)
    output.show(tables.names("", [(node.name, node.kind, node.unit, node.title) for node in found[:limit]]))
    if len(found) > limit:
        output.show(f"... and {len(found) - limit} more: add a word, or --limit {len(found)}")


def search(nodes: Iterable[Node], words: Iterable[str]) -> list[Node]:
    """Rank catalogue nodes by how well they match words; all words must match somewhere.

    Parameters
    ----------
    nodes : iterable of Node
        With `name`, `title`, `latex` and `kind`.
    words : iterable of str
        Compared without case, spaces, underscores and latex commands.

    Returns
    -------
    list of Node
        Those that match, best first; equals keep the order quantity, parameter, constant, name.
    """
    typed = " ".join(words)
    decay = [side.split() for side in ARROW.split(typed)] if len(ARROW.split(typed)) == 2 else None
    wanted = [re.sub(r"\|([^|]+)\|", r"magnitude\1", word) for word in ARROW.sub(" ", typed).split()]
    wanted = [word for word in wanted if squeeze(word)]
    scored = []
    for node in nodes:
        texts = [_Text(node.name), _Text(node.latex), _Text(node.title)]
        single = [_score(squeeze(word), texts) for word in wanted]
        score = sum(single) / len(single) if single and all(single) else 0.0
        if len(wanted) > 1:
            together = _score(squeeze(" ".join(wanted)), texts)
            score = max(score, 100.0 + together if together else 0.0)  # words in a row beat scattered ones
        if score and decay is not None:
            score += _decay_score(decay, node.title)
        if score:
            scored.append((-score, KINDS.index(node.kind), len(node.name), node.name, node))
    return [entry[-1] for entry in sorted(scored, key=lambda entry: entry[:-1])]


def _decay_score(decay: list[list[str]], title: str) -> float:
    """Score a title such as `Branching fraction of B+ -> tau nu` for having the right side of its arrow right."""
    parts = ARROW.split(title)
    if len(parts) < 2 or not decay[0] or not parts[0].split():
        return 0.0
    parent, meant = (
        re.sub(r"[+\-0*]+$", "", side.split()[-1].replace("_", "")) for side in (parts[0], decay[0][-1])
    )
    after = {squeeze(word) for word in parts[1].split()}
    if not {squeeze(word) for word in decay[1]} <= after:
        return 0.0
    return 200.0 if parent == meant else 100.0 if parent.startswith(meant) else 0.0


class _Text:
    """A text to search in: run together, and as separate words."""

    def __init__(self, text: str) -> None:
        self.whole = squeeze(text)
        self.words = {squeeze(word) for word in re.findall(r"[A-Za-z0-9']+", text)}


def _score(word: str, texts: list[_Text]) -> float:
    best = 0.0
    for variant, weight in _variants(word):
        for text, (exact, start, inside) in zip(texts, WEIGHTS, strict=True):
            if not variant or not text.whole:
                continue
            if text.whole == variant:
                score = exact
            elif len(variant) == 1:  # one letter counts only where it stands alone
                score = inside if variant in text.words else 0
            elif text.whole.startswith(variant):
                score = start
            else:
                score = inside if variant in text.whole else 0
            best = max(best, score * weight)
    return best


def _variants(word: str) -> list[tuple[str, float]]:
    variants = [(word, 1.0)] + [(other, 0.98) for other in SYNONYMS.get(word, ())]
    for short, full in (("sin", "sine"), ("cos", "cosine")):
        if word.startswith(short) and not word.startswith(full):
            rest = word[len(short) :]
            variants.append((full + rest, 0.95))
    return variants


def squeeze(text: str) -> str:
    """Reduce text to lower-case letters and digits; latex loses its commands' marks and its fonts."""
    text = re.sub(
        r"\\(mathrm|mathcal|text|bar|overline|hat|widehat|tilde|left|right|operatorname)\b", "", text
    )
    return re.sub(r"[^a-z0-9+']", "", text.lower())
