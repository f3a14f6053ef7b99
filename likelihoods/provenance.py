"""Where a value is from: comparison of an inputs file with an installed database of the Particle Data Group.

The database is that of the optional package ``pdg``. Some habits of it that any reader has to know:

- one identifier may carry several values (an average produced by a working group beside the database's own, a
  fit beside an average, with and without an assumption); the first one is the recommended one;
- the displayed text and the displayed power of ten do not always belong together, so only numbers are read;
- a mass difference comes as a frequency, with the unit "hbar s**-1";
- values have all digits of the averaging program, so that agreement is to the digits quoted in the file.
"""

from __future__ import annotations

import math
from collections.abc import Iterable
from dataclasses import dataclass
from decimal import Decimal
from typing import TYPE_CHECKING, Any

from likelihoods import units
from observables.errors import InputError

if TYPE_CHECKING:
    from likelihoods.entries import Entry

__all__ = ["PdgComparison", "compare_with_pdg", "pdg_value"]

#: Unit texts of the database that are written differently here.
_UNIT_TEXTS = {
    "": "1",
    "degrees": "deg",
    "hbar s**-1": "1/s",
    "s**-1": "1/s",
}

#: Identifiers under which the database lists another quantity than the one measured here, with the factor
#: between them: it lists beta_s, inputs files use phi_s = -2 beta_s.
_FACTORS = {
    ("S086PHS", "phase_phi_s"): -2.0,
    ("S086PJS", "phase_phi_s"): -2.0,
}


@dataclass(frozen=True)
class PdgComparison:
    """One entry beside the database; all numbers in the unit of the inputs file.

    Attributes
    ----------
    id, pdg, unit : str
        Entry, database identifier and the unit in which the entry was written.
    value, plus, minus : float
        The entry as written, before any scale factor.
    database_value, database_plus, database_minus : float
        The recommended value of the database, all digits; nan where the database has no such number.
    equal : bool
        Whether value and errors agree to the digits quoted in the file.
    edition, comment : str
        Edition of the database, and its remark on the value ("Assuming CPT"), or why there is none.
    """

    id: str
    pdg: str
    unit: str
    value: float
    plus: float
    minus: float
    database_value: float
    database_plus: float
    database_minus: float
    equal: bool
    edition: str
    comment: str


def compare_with_pdg(inputs: Iterable[Entry] | Any) -> list[PdgComparison]:
    """Compare each entry that carries a PDG identifier with the installed PDG database.

    Parameters
    ----------
    inputs : Inputs or iterable of Entry
        What to compare; entries without an identifier are skipped.

    Returns
    -------
    list of PdgComparison
        One row per entry with an identifier, in the order of the entries. An identifier that the database
        does not know gives a row with nan and ``equal=False``: a typing error there must not pass unseen.

    Raises
    ------
    InputError
        When the optional package ``pdg`` is not installed.
    """
    entries = getattr(inputs, "entries", inputs)
    chosen = [entry for entry in entries if entry.pdg]
    if not chosen:
        return []
    with _Database() as api:
        return [_compare(entry, api) for entry in chosen]


def pdg_value(identifier: str) -> tuple[float, float, float, str]:
    """Give the recommended value of the installed PDG database.

    Parameters
    ----------
    identifier : str
        PDG identifier, for example "S042D".

    Returns
    -------
    value, plus, minus : float
        Value and errors (nan where the database has none), with all digits.
    unit : str
        The unit in the spelling of this package ("1/s" for "hbar s**-1").

    Raises
    ------
    InputError
        When the package ``pdg`` is not installed or the identifier is unknown.
    """
    with _Database() as api:
        found = _recommended(api, identifier)
    if found is None:
        raise InputError(f'PDG identifier "{identifier}": no value in the installed database')
    return (*_numbers(found), _unit(found.units))


def _compare(entry: Entry, api: Any) -> PdgComparison:
    declared = entry.declared
    if declared.error is None:
        plus = minus = math.hypot(*declared.errors.values())
    else:
        plus, minus = declared.error
    nothing = (math.nan, math.nan, math.nan)
    found = _recommended(api, str(entry.pdg))
    numbers, comment = nothing, "no such identifier, or no value, in the installed database"
    if found is not None:
        comment = (found.comment or "").strip("() ")
        if found.is_limit:
            comment = "a limit in the installed database"
        else:
            try:
                factor = units.factor(_unit(found.units), declared.unit)
            except units.UnitError as error:
                comment = str(error)
            else:
                factor *= _FACTORS.get((str(entry.pdg), entry.quantity), 1.0)
                value, up, down = _numbers(found)
                up, down = (up, down) if factor > 0 else (down, up)
                numbers = (factor * value, abs(factor) * up, abs(factor) * down)
    return PdgComparison(
        id=entry.id,
        pdg=str(entry.pdg),
        unit=declared.unit,
        value=declared.value,
        plus=plus,
        minus=minus,
        database_value=numbers[0],
        database_plus=numbers[1],
        database_minus=numbers[2],
        equal=_equal((declared.value, plus, minus), numbers),
        edition=str(api.edition),
        comment=comment,
    )


def _equal(quoted: tuple[float, float, float], full: tuple[float, float, float]) -> bool:
    """Whether the full numbers round to the quoted ones.

    Value and errors of one entry are quoted to the same decimal; a file quotes one error where the
    database's two differ by less than their rounding, so a symmetric one is compared with the mean of them.
    """
    if not all(map(math.isfinite, full)):
        return False
    value, plus, minus = full
    if quoted[1] == quoted[2]:
        plus = minus = 0.5 * (plus + minus)
    step = 10.0 ** min(map(_last_decimal, quoted))
    return all(
        abs(a - b) <= 0.5 * step * (1 + 1e-6) for a, b in zip(quoted, (value, plus, minus), strict=True)
    )


def _last_decimal(number: float) -> int:
    """Power of ten of the last digit quoted: -3 for 0.011, -14 for 1.2e-13."""
    exponent = Decimal(f"{number:.12g}").normalize().as_tuple().exponent
    return int(exponent)


def _numbers(found: Any) -> tuple[float, float, float]:
    return tuple(  # type: ignore[return-value]
        math.nan if number is None else float(number)
        for number in (found.value, found.error_positive, found.error_negative)
    )


def _unit(text: str | None) -> str:
    return _UNIT_TEXTS.get(text or "", text or "")


def _recommended(api: Any, identifier: str) -> Any:
    """The first value that the database lists: its order is the order of recommendation."""
    from pdg.errors import PdgInvalidPdgIdError, PdgNoDataError

    try:
        values = api.get(identifier).summary_values()
    except (
        PdgInvalidPdgIdError,
        PdgNoDataError,
        AttributeError,
    ):  # unknown; or an identifier that stands for no number (a particle)
        return None
    return values[0] if values else None


class _Database:
    """The database, with its connections closed afterwards."""

    def __enter__(self) -> Any:
        try:
            import pdg
        except ImportError as error:
            raise InputError(
                "comparing with the PDG database needs the optional package `pdg`; install it with "
                '`pip install "weakmix[pdg]"`'
            ) from error
        self._api = pdg.connect()
        return self._api

    def __exit__(self, *_: object) -> None:
        self._api.engine.dispose()
