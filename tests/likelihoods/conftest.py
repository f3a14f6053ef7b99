"""A small invented catalogue and files that are quick to write."""

from __future__ import annotations

import difflib
import textwrap
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

import pytest

from likelihoods import Inputs, load_inputs


@dataclass(frozen=True)
class Node:
    name: str
    unit: str
    kind: str = "quantity"
    is_complex: bool = False
    period: float | None = None


class SmallCatalogue:
    """The part of a catalogue that reading inputs needs, over invented quantities."""

    def __init__(self, *nodes: Node) -> None:
        self._nodes = {node.name: node for node in nodes}

    def __getitem__(self, name: str) -> Node:
        return self._nodes[name]

    def __contains__(self, name: object) -> bool:
        return name in self._nodes

    def close_matches(self, name: str) -> tuple[str, ...]:
        return tuple(difflib.get_close_matches(name, self._nodes, n=3, cutoff=0.3))


@pytest.fixture(scope="session")
def catalogue() -> SmallCatalogue:
    return SmallCatalogue(
        Node("tide_frequency", "1/ps"),
        Node("tide_height", "1"),
        Node("tide_depth", "1"),
        Node("tide_angle", "deg", period=360.0),
        Node("tide_amplitude", "1", is_complex=True),
        Node("tide_mass", "GeV", kind="parameter"),
        Node("tide_lifetime", "s", kind="parameter"),
        Node("tide_phase", "deg", kind="parameter", period=360.0),
        Node("tide_constant", "GeV", kind="constant"),
    )


Load = Callable[..., Inputs]


@pytest.fixture
def write(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Callable[[str, str], Path]:
    """Write files into an empty working directory; paths in messages are then relative."""
    monkeypatch.chdir(tmp_path)

    def write_file(name: str, text: str) -> Path:
        path = tmp_path / name
        path.write_text(textwrap.dedent(text).lstrip("\n"), encoding="utf-8")
        return path

    return write_file


@pytest.fixture
def load(write: Callable[[str, str], Path], catalogue: SmallCatalogue) -> Load:
    """Load a text with the small catalogue."""

    def load_text(text: str, **options: object) -> Inputs:
        write("my.toml", text)
        return load_inputs("my.toml", catalogue=catalogue, **options)  # type: ignore[arg-type]

    return load_text
