"""The nodes of a catalogue: quantities, parameters and constants, and how a declaration describes itself."""

from __future__ import annotations

import inspect
import math
import typing
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field, replace
from types import FrameType
from typing import Annotated, Any, TypeAlias

from observables.errors import CatalogueError

__all__ = ["Complex", "Constant", "Node", "Parameter", "Quantity", "Real"]

#: Modules whose frames are not where a declaration stands.
_DECLARING = ("observables.nodes", "observables.catalogue", "observables.hypothesis")

#: Return annotations of quantity functions: what the values are.
Real: TypeAlias = Annotated[Any, "real"]
Complex: TypeAlias = Annotated[Any, "complex"]


@dataclass(frozen=True, kw_only=True)
class Node:
    """What all entries of a catalogue have.

    Attributes
    ----------
    name, unit, title, latex, source : str
        ``unit`` is ``"1"`` for dimensionless; ``source`` names the published origin.
    period : float or None
        For angles: values that differ by it are the same.
    """

    name: str
    unit: str
    title: str = ""
    latex: str = ""
    source: str = ""
    period: float | None = None
    origin: str = field(default="", compare=False, repr=False)
    owner: str = field(default="", compare=False, repr=False)

    @property
    def kind(self) -> str:
        """``"quantity"``, ``"parameter"`` or ``"constant"``."""
        return type(self).__name__.lower()

    @property
    def is_complex(self) -> bool:
        """Whether the values are complex numbers."""
        return False


@dataclass(frozen=True, kw_only=True)
class Parameter(Node):
    """A leaf that a fit may vary.

    Attributes
    ----------
    start, lower, upper, scale : float
        Start value, physical bounds, and a sensible step.
    cp_odd : bool
        Whether the CP operation flips its sign (weak phases, eta-bar).
    fixed : bool
        Held at ``start`` unless an inputs file measures or frees it.
    """

    start: float
    lower: float = -math.inf
    upper: float = math.inf
    scale: float = 1.0
    cp_odd: bool = False
    fixed: bool = False


@dataclass(frozen=True, kw_only=True)
class Constant(Node):
    """A leaf that a fit does not vary, unless an inputs file measures it.

    Attributes
    ----------
    value, error : float
    pdg : str or None
        Identifier in the PDG database.
    """

    value: float
    error: float = 0.0
    pdg: str | None = None


@dataclass(frozen=True, kw_only=True)
class Quantity(Node):
    """A node computed from its ingredients.

    Attributes
    ----------
    function : callable
        Pure, elementwise over the batch axes.
    ingredients : mapping
        Argument name -> name of the node it takes.
    cp : str
        ``"even"``, ``"odd"``, ``"conjugate"`` or the name of the CP partner.
    physical : bool
        False for what depends on the phase convention of the matrix.
    recalled : bool
        The formula is quoted from memory; shown until someone re-reads the source.
    """

    function: Callable[..., Any] = field(compare=False)
    ingredients: Mapping[str, str]
    complex_valued: bool
    cp: str = "even"
    physical: bool = True
    recalled: bool = False

    @property
    def is_complex(self) -> bool:
        return self.complex_valued


def make_parameter(name: str, *, origin: str, owner: str, **settings: Any) -> Parameter:
    """Build a checked `Parameter`; shared by catalogues and hypotheses."""
    node = Parameter(name=name, origin=origin, owner=owner, **settings)
    if not node.lower < node.upper:
        raise CatalogueError(f"{origin}: parameter {name!r} has reversed bounds {node.lower}, {node.upper}")
    if not node.lower <= node.start <= node.upper:
        raise CatalogueError(f"{origin}: parameter {name!r} starts at {node.start}, outside its bounds")
    if not node.scale > 0:
        raise CatalogueError(f"{origin}: parameter {name!r} needs a positive scale")
    return replace(node, start=float(node.start), scale=float(node.scale))


def _frame_of_caller() -> FrameType | None:
    frame = inspect.currentframe()
    while frame is not None and frame.f_globals.get("__name__") in _DECLARING:
        frame = frame.f_back
    return frame


def caller_origin() -> str:
    frame = _frame_of_caller()
    return f"{frame.f_code.co_filename}:{frame.f_lineno}" if frame is not None else "?"


def caller_owner() -> str:
    """Who may declare a leaf anew: the same line, or any (edited) cell of an interactive session."""
    frame = _frame_of_caller()
    interactive = frame is not None and frame.f_globals.get("__name__") == "__main__"
    return "__main__" if interactive else caller_origin()


def declared_complex(function: Callable[..., Any], label: str, origin: str) -> bool:
    annotation = function.__annotations__.get("return")
    if isinstance(annotation, str):
        annotation = {"Real": Real, "Complex": Complex}.get(annotation.rsplit(".", 1)[-1])
    marks = typing.get_args(annotation)[1:] if typing.get_origin(annotation) is Annotated else ()
    if marks not in (("real",), ("complex",)):
        raise CatalogueError(f"{origin}: {label!r} must say '-> Real' or '-> Complex'")
    return bool(marks == ("complex",))
