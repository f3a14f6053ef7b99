"""Symbols as text, for axis labels and titles."""

from __future__ import annotations

import re
from functools import lru_cache

__all__ = ["glyphs", "symbol_text"]


@lru_cache(maxsize=512)
def symbol_text(latex: str, name: str) -> str:
    """Return latex as matplotlib text, or the plain name where there is none or it cannot be set."""
    if not latex:
        return name
    from matplotlib.mathtext import MathTextParser

    text = f"${latex}$"
    try:
        MathTextParser("path").parse(text)
    except ValueError:
        return name
    return text


def glyphs(text: str) -> int:
    """Count, roughly, the letters that a symbol sets: a command is one, braces and scripts are none."""
    return len(re.sub(r"[{}_^$\\ ,]", "", re.sub(r"\\[A-Za-z]+", "x", text)))
