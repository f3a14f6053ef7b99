"""A problem: an inputs file and a hypothesis, compiled into functions of batches of parameter points.

>>> from fitcore import Problem
>>> problem = Problem.load("tidewater")
>>> problem.parameter_names[:4]
('wolfenstein_lambda', 'wolfenstein_A', 'wolfenstein_rhobar', 'wolfenstein_etabar')
>>> problem.fit().valid
True
"""

from __future__ import annotations

import hashlib
import math
import sys
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

import observables
from fitcore.evaluation import ChiSquare
from fitcore.free_parameters import FreeParameter, range_name, sort_leaves
from fitcore.influence import influential
from fitcore.minimise.derivatives import call_with_derivatives, seed, tangents_of
from fitcore.minimise.normal_matrix import Linearisation
from fitcore.priors import log_prior
from fitcore.questions import Questions
from likelihoods import Declared, Entry, Inputs, ParameterSetting, Terms, load_inputs, units
from likelihoods.ranges import apply_scheme
from observables import Catalogue, Hypothesis
from observables import catalogue as public_catalogue
from observables.errors import InputError, UnknownNameError
from observables.graph import Caller, Graph, compile_graph, find_parameters
from observables.nodes import Parameter

if TYPE_CHECKING:
    from fitcore.scaleout import ProblemSpec

__all__ = ["FreeParameter", "Problem"]


class Problem(Questions):
    """A chi-square over free parameters, evaluated on batches.

    Points are arrays ``theta`` of shape (B, n), or (n,) for one point, or a dict of name -> value or (B,) array;
    for one point the leading axis of every result is dropped.

    Parameters
    ----------
    inputs : Inputs
    hypothesis : str, Hypothesis or sequence of them
    theory_errors : str
        ``"as-given"``, ``"gaussian"`` or ``"flat"``.
    catalogue : Catalogue, optional

    Raises
    ------
    InputError
        No entries are left, or the scheme of theory errors does not fit them.
    UnknownNameError
        An unknown hypothesis or quantity.
    """

    def __init__(
        self,
        inputs: Inputs,
        hypothesis: str | Hypothesis | Sequence[str | Hypothesis] = "standard",
        *,
        theory_errors: str = "as-given",
        catalogue: Catalogue | None = None,
    ) -> None:
        self.inputs = inputs
        self.theory_errors = theory_errors
        self._catalogue = public_catalogue if catalogue is None else catalogue
        self._hypothesis = self._catalogue.get_hypothesis(hypothesis)
        self.hypothesis = self._hypothesis.name
        if not inputs.entries:
            raise InputError(f"{inputs.name}: no entries are left to fit; see --only and --without")

        scheme = apply_scheme(inputs.entries, theory_errors, self._is_leaf)
        self.entries = scheme.entries
        if not self.entries:
            raise InputError(f"{inputs.name}: every entry became a flat range, nothing is left to fit")
        self.ranges = scheme.halfwidths
        # Quantities are targets even when their entry is flat: their parameters stay in the problem.
        targets = tuple(dict.fromkeys(entry.quantity for entry in inputs.entries))
        self._leaves = find_parameters(self._catalogue, targets, self._hypothesis)
        measured = {entry.quantity for entry in inputs.entries}
        self.parameters, self.fixed = sort_leaves(
            self._leaves, self.entries, measured, inputs.parameters, scheme.bounds, self.ranges
        )
        self.n_entries = len(self.entries)
        self.terms = _terms(inputs, self.entries)
        self._used = tuple(dict.fromkeys(entry.quantity for entry in self.entries))
        #: Parameters that cancel in everything measured: no unknowns, and never used as if they were known.
        self.idle: dict[str, float] = {}
        self._compile()
        self._check_functions()
        self._leave_out_idle(measured)
        self._graphs: dict[tuple[str, ...], Graph] = {}

    @classmethod
    def load(
        cls,
        source: str | Path,
        hypothesis: str | Hypothesis | Sequence[str | Hypothesis] = "standard",
        *,
        only: Iterable[str] = (),
        without: Iterable[str] = (),
        settings: Iterable[str] = (),
        theory_errors: str = "as-given",
    ) -> Problem:
        """Read an inputs file or bundled set and compile it.

        Parameters
        ----------
        source : str or Path
            Name of a bundled set, or path of a TOML file.
        hypothesis : str, Hypothesis or sequence of them
        only, without : iterable of str
            Ids or groups to keep, to leave out.
        settings : iterable of str
            ``"ID.error=0.01"`` and the like.
        theory_errors : str

        Raises
        ------
        InputError, UnknownNameError
        """
        inputs = load_inputs(source, only=only, without=without, settings=settings)
        return cls(inputs, hypothesis, theory_errors=theory_errors)

    def __repr__(self) -> str:
        return (
            f"<Problem {self.inputs.name!r}: {self.n_entries} entries, {self.n_parameters} free parameters, "
            f"hypothesis {self.hypothesis!r}, theory errors {self.theory_errors}>"
        )

    # -- set-up -------------------------------------------------------------------------------------------------

    def _compile(self) -> None:
        self.parameter_names = tuple(p.name for p in self.parameters)
        self.n_parameters = len(self.parameters)
        inputs_of_graph = tuple(p.name for p in self.parameters if not p.is_shift)
        self._graph = compile_graph(
            self._catalogue, self._used, inputs_of_graph, self.fixed | self.idle, self._hypothesis
        )
        position = {name: i for i, name in enumerate(self.parameter_names)}
        self._chi_square = ChiSquare(
            self._graph,
            self.terms,
            [self._used.index(entry.quantity) for entry in self.entries],
            [position.get(range_name(e.id)) if e.id in self.ranges else None for e in self.entries],
            self.n_parameters,
        )

    def _check_functions(self) -> None:
        """Meet a user's faulty formula here, by its name, and not inside a minimiser."""
        start = self.start[: len(self._graph.inputs), None]
        self._graph.verify(list(np.repeat(start, 2, axis=1)))

    def _leave_out_idle(self, measured: set[str]) -> None:
        leaves = [p for p in self.parameters if not p.is_shift]
        felt = influential(self._graph, leaves)
        idle = [p for i, p in enumerate(leaves) if i not in felt and p.name not in measured]
        if idle:
            self.idle = {p.name: p.start for p in idle}
            self.parameters = tuple(p for p in self.parameters if p.name not in self.idle)
            self._compile()

    def _is_leaf(self, name: str) -> bool:
        if name in self._hypothesis.parameters:
            return True
        return self._catalogue[name].kind != "quantity"

    # -- evaluation ---------------------------------------------------------------------------------------------

    def theta(self, point: Any) -> tuple[np.ndarray, bool]:
        """Points as an array of shape (n, B), and whether a single point was given.

        Raises
        ------
        InputError
            A wrong shape, or a parameter without value.
        UnknownNameError
            A name that is not a free parameter.
        """
        if isinstance(point, Mapping):
            for name in point:
                if name not in self.parameter_names:
                    close = self._catalogue.close_matches(name, self.parameter_names)
                    raise UnknownNameError(name, "free parameter", close)
            missing = [name for name in self.parameter_names if name not in point]
            if missing:
                raise InputError(f"no value for the parameters {', '.join(missing)}")
            columns = [np.asarray(point[name], dtype=float) for name in self.parameter_names]
            single = all(column.ndim == 0 for column in columns)
            return np.array(np.broadcast_arrays(*map(np.atleast_1d, columns))), single
        array = np.asarray(point, dtype=float)
        if array.ndim not in (1, 2) or array.shape[-1] != self.n_parameters:
            raise InputError(
                f"a point has {self.n_parameters} parameters; the array given has shape {array.shape}"
            )
        return np.ascontiguousarray(np.atleast_2d(array).T), array.ndim == 1

    def _data(self, data: Any, batch: int) -> np.ndarray | None:
        if data is None:
            return None
        array = np.atleast_2d(np.asarray(data, dtype=float))
        if array.shape not in ((batch, self.n_entries), (1, self.n_entries)):
            raise InputError(f"data must have the shape ({batch}, {self.n_entries}), not {array.shape}")
        return np.ascontiguousarray(np.broadcast_to(array, (batch, self.n_entries)).T)

    def chi2(self, theta: Any, data: Any = None) -> Any:
        """-2 ln L up to a constant.

        Parameters
        ----------
        theta : array (B, n) or (n,), or dict
        data : array (B, m), optional
            Measured values in place of the entries' own, row by row.

        Returns
        -------
        ndarray, shape (B,)
            +inf where a formula has no value.
        """
        points, single = self.theta(theta)
        result = self._chi_square.chi2(points, self._data(data, points.shape[1]))
        return float(result[0]) if single else result

    def residuals(self, theta: Any, data: Any = None) -> np.ndarray:
        """Whitened residuals, shape (B, m); the sum of their squares is `chi2`."""
        points, single = self.theta(theta)
        result = self._chi_square.residuals(points, self._data(data, points.shape[1])).T
        return result[0] if single else result

    def jacobian(self, theta: Any, data: Any = None) -> np.ndarray:
        """Exact derivatives of the whitened residuals, shape (B, m, n). For people; solvers use `linearise`."""
        points, single = self.theta(theta)
        result = np.moveaxis(self._chi_square.jacobian(points, self._data(data, points.shape[1])), -1, 0)
        return result[0] if single else result

    def linearise(self, theta: Any, data: Any = None) -> Linearisation:
        """chi-square (B,), its gradient (B, n) and the sparse normal matrix J^T J."""
        points, _ = self.theta(theta)
        return self._chi_square.linearise(points, self._data(data, points.shape[1]))

    def predictions(self, theta: Any) -> np.ndarray:
        """Predicted value of every entry, shape (B, m)."""
        points, single = self.theta(theta)
        with np.errstate(all="ignore"):
            result = self._chi_square.predictions(points).T
        return result[0] if single else result

    def values(self, theta: Any, names: str | Iterable[str]) -> dict[str, Any]:
        """Any quantities or parameters at given points, real or complex, each of shape (B,); by name.

        Raises
        ------
        UnknownNameError
            No such quantity.
        InputError
            It rests on parameters that this problem does not have.
        """
        wanted = _names(names)
        points, single = self.theta(theta)
        shaped = {}
        for name, result in self._evaluate(wanted, list(points)).items():
            array = np.array(np.broadcast_to(result, points.shape[1:]))
            shaped[name] = array[0] if single else array
        return shaped

    def linearise_quantities(self, theta: Any, names: str | Iterable[str]) -> tuple[np.ndarray, np.ndarray]:
        """Real quantities and their exact gradients: shapes (B, q) and (B, q, n)."""
        wanted = _names(names)
        points, single = self.theta(theta)
        batch = points.shape[1]
        everything = tuple(range(self.n_parameters))
        values = np.empty((len(wanted), batch))
        gradient = np.zeros((len(wanted), self.n_parameters, batch))
        with np.errstate(all="ignore"):
            results = self._evaluate(wanted, seed(points), call_with_derivatives)
        for row, name in enumerate(wanted):
            if self.is_complex(name):
                raise InputError(f"{name!r} is complex; take its real part, magnitude or phase")
            values[row] = getattr(results[name], "value", results[name])
            gradient[row] = tangents_of(results[name], everything, batch)
        value_rows, gradient_rows = values.T, np.moveaxis(gradient, -1, 0)
        return (value_rows[0], gradient_rows[0]) if single else (value_rows, gradient_rows)

    def _evaluate(
        self, names: tuple[str, ...], leaves: list[Any], call: Caller | None = None
    ) -> dict[str, Any]:
        """Name -> value; the ranges among the names are parameters that the graph knows nothing of."""
        ranges = {p.name: leaf for p, leaf in zip(self.parameters, leaves, strict=True) if p.is_shift}
        computed = tuple(name for name in names if name not in ranges)
        graph = self._graph_for(computed)
        found = dict(zip(computed, graph.evaluate(leaves[: len(graph.inputs)], call), strict=True)) | ranges
        return {name: found[name] for name in names}

    def _graph_for(self, names: tuple[str, ...]) -> Graph:
        if names not in self._graphs:
            known = self._graph.inputs
            needed = find_parameters(self._catalogue, names, self._hypothesis)
            held = {n: leaf.start for n, leaf in needed.items() if isinstance(leaf, Parameter) and leaf.fixed}
            held |= self.fixed
            absent = tuple(
                n
                for n, leaf in needed.items()
                if leaf.kind == "parameter" and n not in known and n not in held
            )
            if absent:
                # What has no value here may still cancel in what is asked for.
                leaves = [p for p in self.parameters if not p.is_shift] + [needed[n] for n in absent]
                graph = compile_graph(self._catalogue, names, (*known, *absent), held, self._hypothesis)
                felt = influential(graph, leaves)
                missing = [n for i, n in enumerate(absent, len(known)) if i in felt]
                if missing:
                    raise InputError(
                        f"{', '.join(names)}: nothing in {self.inputs.name} determines {', '.join(missing)}; "
                        "add a measurement of it, or give it a value with [parameters.NAME] fixed = true"
                    )
                held |= {
                    n: leaf.start for n, leaf in needed.items() if isinstance(leaf, Parameter) and n in absent
                }
            self._graphs[names] = compile_graph(self._catalogue, names, known, held, self._hypothesis)
        return self._graphs[names]

    def pseudo_data(
        self, theta: Any, size: int, *, rng: np.random.Generator | int | None = None
    ) -> np.ndarray:
        """Measured values of all entries thrown around the predictions at one point, shape (size, m)."""
        return np.asarray(self.terms.pseudo_data(self.predictions(theta), size, rng=rng))

    def log_prior(self, theta: Any) -> Any:
        """Log prior density, shape (B,); flat inside the bounds unless the inputs file says otherwise."""
        points, single = self.theta(theta)
        result = log_prior(self.parameters, points)
        return float(result[0]) if single else result

    def log_posterior(self, theta: Any) -> Any:
        """-chi2 / 2 plus the log prior, shape (B,); -inf outside the priors and at impossible points."""
        points, single = self.theta(theta)
        prior = log_prior(self.parameters, points)
        inside = np.isfinite(prior)
        result = np.full(points.shape[1], -np.inf)
        if inside.any():
            chosen = points if inside.all() else np.ascontiguousarray(points[:, inside])
            result[inside] = prior[inside] - 0.5 * self._chi_square.chi2(chosen)
        return float(result[0]) if single else result

    # -- descriptions -------------------------------------------------------------------------------------------

    def _node(self, name: str) -> Any:
        for parameter in self.parameters:
            if parameter.name == name:
                return parameter
        if name in self._hypothesis.parameters:
            return self._hypothesis.parameters[name]
        return self._catalogue[name]

    def unit_of(self, name: str) -> str:
        """Unit of a quantity or parameter."""
        return str(self._node(name).unit)

    def title_of(self, name: str) -> str:
        """What a quantity or parameter is, in words."""
        return str(self._node(name).title)

    def latex_of(self, name: str) -> str:
        """Symbol of a quantity or parameter, without dollar signs; empty if it has none."""
        return str(self._node(name).latex)

    def period_of(self, name: str) -> float | None:
        """Period of an angle, else None."""
        period = self._node(name).period
        return None if period is None else float(period)

    def is_complex(self, name: str) -> bool:
        """Whether a quantity has complex values."""
        return bool(getattr(self._node(name), "is_complex", False))

    def determines(self, name: str) -> bool:
        """Whether every parameter that a quantity rests on has a value in this problem."""
        if name in self.parameter_names:
            return True
        try:
            self._graph_for((name,))
        except (InputError, UnknownNameError):
            return False
        return True

    @property
    def start(self) -> np.ndarray:
        """Start values of the free parameters, shape (n,)."""
        return np.array([p.start for p in self.parameters])

    @property
    def fingerprint(self) -> str:
        """Hash of all that decides the numbers: inputs, hypothesis, theory errors, parameters and formulas' names."""
        parts = [
            self.inputs.resolved_toml(),
            self.hypothesis,
            self.theory_errors,
            repr([(p.name, p.unit, p.lower, p.upper, p.prior) for p in self.parameters]),
            repr(sorted(self.fixed.items())),
            repr([(n, leaf.__dict__.get("value")) for n, leaf in self._leaves.items()]),
        ]
        return hashlib.sha256("\0".join(parts).encode()).hexdigest()

    @property
    def spec(self) -> ProblemSpec:
        """What another process needs to build this problem again.

        Raises
        ------
        InputError
            It rests on a private catalogue, or on quantities declared in a notebook cell or at a prompt.
        """
        from fitcore.scaleout import ProblemSpec

        if self._catalogue is not public_catalogue:
            raise InputError("a problem with a catalogue of its own cannot be sent to other processes")
        return ProblemSpec(
            name=self.inputs.name,
            inputs_toml=self.inputs.resolved_toml(),
            hypothesis=self.hypothesis,
            theory_errors=self.theory_errors,
            fingerprint=self.fingerprint,
            modules=_user_modules(self._catalogue, self._hypothesis),
        )

    # -- other problems -----------------------------------------------------------------------------------------

    def with_inputs(self, inputs: Inputs) -> Problem:
        """The same hypothesis and treatment of theory errors with other inputs."""
        return Problem(inputs, self._hypothesis, theory_errors=self.theory_errors, catalogue=self._catalogue)

    def with_entries(self, entries: Sequence[Entry]) -> Problem:
        """The same problem with changed numbers (values, errors) in its entries; correlations stay."""
        changed = {entry.id: _restated(entry) for entry in entries}
        # members of an inflate_group that stay keep today's factor: it would be another one without those that change
        changed = {e.id: _restated(e) for e in self.inputs.entries if e.inflate_group is not None} | changed
        return self.with_inputs(
            replace(self.inputs, entries=tuple(changed.get(e.id, e) for e in self.inputs.entries))
        )

    @staticmethod
    def unit_factor(unit: str, target: str) -> float:
        """Factor from one unit to another; ValueError with the reason when there is none."""
        return units.factor(unit, target)

    def only(self, *names: str) -> Problem:
        """The problem with just these ids or groups."""
        return self.with_inputs(self.inputs.select(only=names))

    def without(self, *names: str, keep_free: bool = False) -> Problem:
        """The problem without these ids or groups.

        Parameters
        ----------
        *names : str
        keep_free : bool
            Parameters that vary here vary there too. Otherwise those that the catalogue holds unless measured
            (lifetimes, radiative corrections) are held at their start once their entry is gone, which is information.
        """
        inputs = self.inputs.select(without=names)
        if keep_free:
            free = {p.name for p in self.parameters if not p.is_shift}
            settings = dict(inputs.parameters)
            for name in free:
                settings[name] = replace(settings.get(name, ParameterSetting()), fixed=False)
            inputs = replace(inputs, parameters=settings)
        return self.with_inputs(inputs)


def _names(names: str | Iterable[str]) -> tuple[str, ...]:
    """One name alone is meant as a name, not as its letters."""
    return (names,) if isinstance(names, str) else tuple(names)


def _user_modules(catalogue: Catalogue, hypothesis: Hypothesis) -> tuple[tuple[str, str], ...]:
    """Names and paths of modules outside the package that declare quantities or replacements."""
    own = Path(observables.__file__).parent
    files = [Path(catalogue[name].origin.rpartition(":")[0]) for name in catalogue.names()]
    files += [Path(node.origin.rpartition(":")[0]) for node in hypothesis.parameters.values()]
    files += [
        Path(layer.function.__code__.co_filename) for layers in hypothesis.layers.values() for layer in layers
    ]
    outside = [file for file in dict.fromkeys(files) if own not in file.parents]
    if hidden := [str(file) for file in outside if not file.is_file()]:
        raise InputError(
            f"quantities declared in {', '.join(hidden)}, a notebook cell or prompt, do not exist in other processes; "
            "put them into a module and import it, or use one process"
        )
    loaded = {name: getattr(module, "__file__", None) for name, module in list(sys.modules.items())}
    names = {Path(file): name for name, file in loaded.items() if file and name != "__main__"}
    return tuple((names.get(file, file.stem), str(file.resolve())) for file in outside)


def _restated(entry: Entry) -> Entry:
    """The entry with its present numbers as the declared ones, so that the resolved file says what is fitted."""
    error = None if entry.errors else (entry.plus, entry.minus)
    declared = Declared(entry.value, error, dict(entry.errors), entry.flat_halfwidth, entry.unit)
    return replace(entry, declared=declared, inflate=1.0, inflate_group=None)


def _terms(inputs: Inputs, entries: Sequence[Entry]) -> Terms:
    """Compile the entries that a scheme of theory errors left, with the correlations between them.

    Where the scheme widened an error by an independent part, its correlations shrink accordingly.
    """
    if tuple(entries) == inputs.entries:
        return inputs.terms
    place = {entry.id: i for i, entry in enumerate(inputs.entries)}
    kept = [place[entry.id] for entry in entries]
    before = [inputs.entries[i] for i in kept]
    shrink = np.array(
        [
            math.sqrt(old.plus * old.minus / (new.plus * new.minus))
            for old, new in zip(before, entries, strict=True)
        ]
    )
    matrix = inputs.correlation_matrix()[np.ix_(kept, kept)] * np.outer(shrink, shrink)
    np.fill_diagonal(matrix, 1.0)
    return Terms.from_entries(entries, matrix)
