"""Every mistake in an inputs file: the whole message, with its file and line."""

from __future__ import annotations

import os
import re
from pathlib import Path

import pytest

from likelihoods import load_inputs
from observables.errors import InputError

GOOD = """\
[[measurement]]
id = "one"
quantity = "tide_frequency"
value = 0.5
error = 0.1
unit = "1/ps"
source = "invented"
"""

BLOCK = """\
[[correlated]]
id = "pair"
quantities = ["tide_height", "tide_depth"]
values = [1.0, 2.0]
errors = [0.1, 0.2]
units = ["1", "1"]
correlation = [[1.0, 0.5], [0.5, 1.0]]
source = "invented"
"""


def changed(text: str, old: str, new: str) -> str:
    assert text.count(old) == 1
    return text.replace(old, new)


def problems_of(load, text: str) -> tuple[str, ...]:
    with pytest.raises(InputError) as caught:
        load(text)
    return caught.value.problems


ONE = '[measurement 1 "one"] '
PAIR = '[correlated 1 "pair"] '

SINGLE = [
    ("unknown-key", "error = 0.1", "eror = 0.1", [
        f"my.toml:1: {ONE}error is missing; write error = NUMBER, error = [PLUS, MINUS] or "
        "errors = { NAME = NUMBER }",
        f'my.toml:5: {ONE}unknown key "eror"; did you mean "error"?',
    ]),
    ("unknown-quantity", '"tide_frequency"', '"tide_hight"', [
        f'my.toml:3: {ONE}unknown quantity "tide_hight"; closest: tide_height, tide_lifetime, tide_phase',
    ]),
    ("complex-quantity", '"tide_frequency"', '"tide_amplitude"', [
        f'my.toml:3: {ONE}quantity "tide_amplitude" is complex and cannot be measured; use a real quantity such as '
        "tide_angle, tide_lifetime",
    ]),
    ("missing-quantity", 'quantity = "tide_frequency"\n', "", [
        f'my.toml:1: {ONE}quantity is missing; write quantity = "NAME" (`weakmix find` searches them)',
    ]),
    ("wrong-unit", '"1/ps"', '"GeV"', [
        f'my.toml:6: {ONE}unit "GeV" cannot be converted to "1/ps": one is an energy, the other a rate; divide the '
        'energy by hbar = 6.582119569e-13 GeV ps and write the unit "1/ps" ("hbar/ps" means the same); '
        'tide_frequency is in "1/ps"',
    ]),
    ("unknown-unit", '"1/ps"', '"furlong"', [
        f'my.toml:6: {ONE}unit "furlong" is not known; tide_frequency is in "1/ps"',
    ]),
    ("missing-unit", 'unit = "1/ps"\n', "", [
        f'my.toml:1: {ONE}unit is missing; write unit = "1/ps" (or another that fits tide_frequency)',
    ]),
    ("empty-unit", '"1/ps"', '""', [
        f'my.toml:6: {ONE}unit is empty; write "1/ps"; tide_frequency is in "1/ps"',
    ]),
    ("negative-error", "error = 0.1", "error = -0.1", [
        f"my.toml:5: {ONE}error must be positive, not -0.1; write errors without sign, [plus, minus] where they differ",
    ]),
    ("zero-error", "error = 0.1", "error = 0", [
        f"my.toml:5: {ONE}error must be positive, not 0; write an error that is not zero, or leave the entry out",
    ]),
    ("nan-error", "error = 0.1", "error = nan", [f"my.toml:5: {ONE}error must be finite, not nan"]),
    ("infinite-error", "error = 0.1", "error = inf", [f"my.toml:5: {ONE}error must be finite, not inf"]),
    ("negative-minus", "error = 0.1", "error = [0.1, -0.2]", [
        f"my.toml:5: {ONE}error must be positive, not -0.2; write errors without sign, [plus, minus] where they differ",
    ]),
    ("three-errors", "error = 0.1", "error = [0.1, 0.2, 0.3]", [
        f"my.toml:5: {ONE}error must be a number or [plus, minus], not a list of 3",
    ]),
    ("error-text", "error = 0.1", 'error = "0.1"', [
        f'my.toml:5: {ONE}error must be a number, not the text "0.1"',
    ]),
    ("value-true", "value = 0.5", "value = true", [f"my.toml:4: {ONE}value must be a number, not true"]),
    ("value-text", "value = 0.5", 'value = "0.5"', [
        f'my.toml:4: {ONE}value must be a number, not the text "0.5"',
    ]),
    ("value-nan", "value = 0.5", "value = nan", [f"my.toml:4: {ONE}value must be finite, not nan"]),
    ("value-huge", "value = 0.5", f"value = 1{'0' * 400}", [
        f"my.toml:4: {ONE}value is too large for a number",
    ]),
    ("value-date", "value = 0.5", "value = 2026-01-01", [
        f"my.toml:4: {ONE}value must be a number, not a date",
    ]),
    ("value-missing", "value = 0.5\n", "", [f"my.toml:1: {ONE}value is missing; write value = NUMBER"]),
    ("both-errors", "error = 0.1", "error = 0.1\nerrors = { tagging = 0.1 }", [
        f"my.toml:6: {ONE}both error and errors are given; write error = NUMBER, error = [PLUS, MINUS] or "
        "errors = { NAME = NUMBER }",
    ]),
    ("zero-source", "error = 0.1", "errors = { statistical = 0.1, tagging = 0.0 }", [
        f'my.toml:5: {ONE}error source "tagging" must not be zero; leave the source out',
    ]),
    ("negative-statistical", "error = 0.1", "errors = { statistical = -0.1 }", [
        f'my.toml:5: {ONE}error source "statistical" must be positive, not -0.1; only shared sources carry a sign',
    ]),
    ("asymmetric-source", "error = 0.1", "errors = { tagging = [0.1, 0.2] }", [
        f'my.toml:5: {ONE}error source "tagging" must be one number; named sources are symmetric, use error = '
        "[plus, minus] without names",
    ]),
    ("no-source-names", "error = 0.1", "errors = {}", [
        f"my.toml:5: {ONE}errors must name each source: errors = {{ statistical = 0.1, tagging = 0.2 }}",
    ]),
    ("negative-flat", "error = 0.1", "error = 0.1\nflat_halfwidth = -1.0", [
        f"my.toml:6: {ONE}flat_halfwidth must be zero or positive, not -1",
    ]),
    ("zero-inflate", "error = 0.1", "error = 0.1\ninflate = 0.0", [
        f"my.toml:6: {ONE}inflate must be positive, not 0",
    ]),
    ("inflate-and-group", "error = 0.1", 'error = 0.1\ninflate = 2.0\ninflate_group = "x"', [
        f"my.toml:6: {ONE}inflate and inflate_group are both given; a group computes its own factor",
    ]),
    ("missing-source", 'source = "invented"\n', "", [
        f'my.toml:1: {ONE}source is missing; write source = "where the value is from"',
    ]),
    ("empty-source", '"invented"', '" "', [
        f'my.toml:7: {ONE}source is empty; write source = "where the value is from"',
    ]),
    ("missing-id", 'id = "one"\n', "", [
        'my.toml:1: [measurement 1] id is missing; give the measurement a unique id = "..."',
    ]),
    ("bad-id", '"one"', '"a=b"', [
        'my.toml:2: [measurement 1 "a=b"] id must not hold "=", line ends, or blanks at its ends',
    ]),
    ("id-number", '"one"', "7", ["my.toml:2: [measurement 1] id must be a text, not 7; put it in quotes"]),
    ("wrong-kind", "error = 0.1", 'error = 0.1\nkind = "lattice"', [
        f'my.toml:6: {ONE}kind must be one of experiment, theory, not the text "lattice"',
    ]),
    ("groups-text", "error = 0.1", 'error = 0.1\ngroups = "tree"', [
        f'my.toml:6: {ONE}groups must be a list of texts, such as groups = ["one", "two"]',
    ]),
    ("recalled-text", "error = 0.1", 'error = 0.1\nrecalled = "yes"', [
        f'my.toml:6: {ONE}recalled must be true or false, not the text "yes"',
    ]),
    ("single-brackets", "[[measurement]]", "[measurement]", [
        "my.toml:1: measurement must be a list of tables; write [[measurement]] with double brackets",
    ]),
    ("unknown-table", "[[measurement]]", "[[measurment]]", [
        'my.toml:1: unknown key "measurment"; did you mean "measurement"?',
    ]),
]  # fmt: skip

IN_BLOCK = [
    ("unknown-key", "units =", "unit =", [
        f'my.toml:1: {PAIR}units is missing; write units = ["1/ps", ...] or one unit for all ("1" if dimensionless)',
        f'my.toml:6: {PAIR}unknown key "unit"; did you mean "units"?',
    ]),
    ("not-symmetric", "[[1.0, 0.5], [0.5, 1.0]]", "[[1.0, 0.5], [0.4, 1.0]]", [
        f"my.toml:7: {PAIR}the correlation is not symmetric: row 1 column 2 has 0.5, row 2 column 1 has 0.4",
    ]),
    ("not-positive-definite", "[[1.0, 0.5], [0.5, 1.0]]", "[[1.0, 1.5], [1.5, 1.0]]", [
        f"my.toml:7: {PAIR}the correlation of this block is not positive definite: lowest eigenvalue -0.5; give more "
        "digits or check the signs",
    ]),
    ("singular", "[[1.0, 0.5], [0.5, 1.0]]", "[[1.0, 1.0], [1.0, 1.0]]", [
        f"my.toml:7: {PAIR}the correlation of this block is not positive definite: lowest eigenvalue 0; give more "
        "digits or check the signs",
    ]),
    ("wrong-size", "[[1.0, 0.5], [0.5, 1.0]]", "[[1.0]]", [
        f"my.toml:7: {PAIR}correlation has 1 rows of 1 elements; 2 quantities need 2 x 2",
    ]),
    ("ragged", "[[1.0, 0.5], [0.5, 1.0]]", "[[1.0, 0.5],\n [0.5]]", [
        f"my.toml:7: {PAIR}correlation has 2 rows of 1 or 2 elements; 2 quantities need 2 x 2",
    ]),
    ("nan-element", "[[1.0, 0.5], [0.5, 1.0]]", "[[1.0, 0.5],\n [nan, 1.0]]", [
        f"my.toml:8: {PAIR}correlation row 2 column 1 must be finite, not nan",
    ]),
    ("diagonal", "[[1.0, 0.5], [0.5, 1.0]]", "[[1.0, 0.5],\n [0.5, 4.0]]", [
        f"my.toml:8: {PAIR}the correlation has 4 on its diagonal (row 2); must be 1; write covariance = ... if "
        "it is one",
    ]),
    ("flat-list", "[[1.0, 0.5], [0.5, 1.0]]", "[1.0, 0.5]", [
        f"my.toml:7: {PAIR}correlation must be a nested list or the name of a CSV file, not a list",
    ]),
    ("no-csv", "[[1.0, 0.5], [0.5, 1.0]]", '"absent.csv"', [
        f"my.toml:7: {PAIR}the CSV file absent.csv cannot be read: No such file or directory",
    ]),
    ("covariance-diagonal", "errors = [0.1, 0.2]\nunits = [\"1\", \"1\"]\ncorrelation = [[1.0, 0.5], [0.5, 1.0]]",
     "units = [\"1\", \"1\"]\ncovariance = [[1.0, 0.5], [0.5, 0.0]]", [
        f"my.toml:6: {PAIR}the covariance has 0 on its diagonal (row 2); must be positive",
    ]),
    ("covariance-not-positive-definite",
     "errors = [0.1, 0.2]\nunits = [\"1\", \"1\"]\ncorrelation = [[1.0, 0.5], [0.5, 1.0]]",
     "units = \"1\"\ncovariance = [[1.0, 3.0], [3.0, 4.0]]", [
        f"my.toml:6: {PAIR}the covariance of this block is not positive definite: lowest eigenvalue of its "
        "correlations -0.5; give more digits or check the signs",
    ]),
    ("covariance-and-errors", "correlation =", "covariance =", [
        f"my.toml:5: {PAIR}errors and covariance are both given; a covariance holds the errors already",
    ]),
    ("no-matrix", "correlation = [[1.0, 0.5], [0.5, 1.0]]\n", "", [
        f"my.toml:1: {PAIR}correlation is missing; write correlation = [[1.0, ...], ...] with errors, or covariance "
        "alone",
    ]),
    ("short-values", "[1.0, 2.0]", "[1.0]", [
        f"my.toml:4: {PAIR}values has 1 elements for 2 quantities; give one per quantity",
    ]),
    ("negative-error", "[0.1, 0.2]", "[0.1, -0.2]", [
        f"my.toml:5: {PAIR}errors[1] must be positive, not -0.2; write errors without sign, [plus, minus] where they "
        "differ",
    ]),
    ("wrong-unit", '["1", "1"]', '["1", "GeV"]', [
        f'my.toml:6: {PAIR}unit "GeV" cannot be converted to "1"; tide_depth is in "1"',
    ]),
    ("same-quantity-twice", '["tide_height", "tide_depth"]', '["tide_height", "tide_height"]', [
        f"my.toml:3: {PAIR}two members have one id; write distinct ids = [...]",
    ]),
    ("unknown-quantity", '["tide_height", "tide_depth"]', '["tide_height",\n "tide_dept"]', [
        f'my.toml:4: {PAIR}unknown quantity "tide_dept"; closest: tide_depth, tide_height, tide_lifetime',
    ]),
    ("pdg-text", "units =", 'pdg = "S042D"\nunits =', [
        f'my.toml:6: {PAIR}pdg must be a list with one element per quantity, not the text "S042D"',
    ]),
    ("flat", "units =", "flat_halfwidths = [0.0, -1.0]\nunits =", [
        f"my.toml:6: {PAIR}flat_halfwidths[1] must be zero or positive, not -1",
    ]),
]  # fmt: skip

TWO = (
    GOOD + "\n" + GOOD.replace('"one"', '"two"').replace("tide_frequency", "tide_mass").replace("1/ps", "GeV")
)

WHOLE = [
    ("empty", "", ["my.toml:1: the file is empty; `weakmix new` writes a template"]),
    ("blank", " \n\n", ["my.toml:1: the file is empty; `weakmix new` writes a template"]),
    ("no-entries", 'title = "nothing"\n', ["my.toml: no entries; add a [[measurement]] or include a set"]),
    ("not-toml", 'title = "x"\nvalue == 3\n', ["my.toml:2: not valid TOML: Invalid value (column 8)"]),
    ("open-string", 'title = "x"\nnote = """abc\n', [
        "my.toml:2: not valid TOML: Unterminated string (at end of document)",
    ]),
    ("repeated-key", GOOD + "value = 1.0\n", ["my.toml:8: not valid TOML: Cannot overwrite a value (column 12)"]),
    ("top-key", "titel = 'x'\n" + GOOD, ['my.toml:1: unknown key "titel"; did you mean "title"?']),
    ("revision", "revision = 1.5\n" + GOOD, ["my.toml:1: revision must be a whole number from 1, not 1.5"]),
    ("duplicate-id", GOOD + "\n" + GOOD, [
        'my.toml:10: [measurement 2 "one"] duplicate id "one", first used in line 2; choose another',
    ]),
    ("duplicate-of-member", BLOCK + "\n" + GOOD.replace('"one"', '"pair:tide_depth"'), [
        'my.toml:1: [correlated 1 "pair"] duplicate id "pair:tide_depth", first used in line 11; choose another',
    ]),
    ("curve", GOOD + "[[curve]]\nid = 'c'\n", ["my.toml:8: [[curve]] is not supported yet; remove the table"]),
    ("limit", GOOD + "[[limit]]\n", ["my.toml:8: [[limit]] is not supported yet; remove the table"]),
    ("count", GOOD + "[[count]]\n", ["my.toml:8: [[count]] is not supported yet; remove the table"]),
    ("overlaps", changed(TWO, 'id = "two"', 'id = "two"\noverlaps = ["one"]'), [
        'my.toml:9: [measurement 2 "two"] overlaps with "one" (my.toml:1): the same information would count twice; '
        "remove one, drop an included one, or use --without one",
    ]),
    ("same-pdg", TWO.replace("error = 0.1", 'error = 0.1\npdg = "S042D"'), [
        'my.toml:10: [measurement 2 "two"] has the PDG identifier S042D of "one" (my.toml:1); drop one, or write the '
        'same part_of = "NAME" in both if they are to be combined',
    ]),
    ("inflate-group", TWO.replace("error = 0.1", 'error = 0.1\ninflate_group = "both"'), [
        'my.toml:10: [measurement 2 "two"] is in the inflate_group "both" of "one", which measures tide_frequency, '
        "not tide_mass; a scale factor needs one quantity",
    ]),
    ("unknown-drop", 'drop = ["on"]\n' + GOOD, [
        'my.toml:1: drop "on": no included entry has this id; none are known',
    ]),
    ("own-drop", 'drop = ["one"]\n' + GOOD, [
        'my.toml:1: drop "one": it is an entry of this very file; remove it there',
    ]),
    ("unknown-correlation", GOOD + '[[correlation]]\nbetween = ["one", "tow"]\ncoefficient = 0.1\n', [
        'my.toml:8: [correlation] no entry has the id "tow"; closest: one',
    ]),
    ("block-correlation", GOOD + BLOCK + '[[correlation]]\nbetween = ["one", "pair"]\ncoefficient = 0.1\n', [
        'my.toml:16: [correlation] "pair" is a block; name one of its members: pair:tide_height, pair:tide_depth',
    ]),
    ("self-correlation", GOOD + '[[correlation]]\nbetween = ["one", "one"]\ncoefficient = 0.1\n', [
        'my.toml:9: [correlation 1] write between = ["ID-1", "ID-2"], two different ids',
    ]),
    ("coefficient", TWO + '[[correlation]]\nbetween = ["one", "two"]\ncoefficient = 1.0\n', [
        "my.toml:18: [correlation 1] coefficient must lie between -1 and 1, not 1",
    ]),
    ("twice-correlated", TWO + 2 * '[[correlation]]\nbetween = ["one", "two"]\ncoefficient = 0.2\n', [
        "my.toml:19: [correlation] the pair was already given in line 16; keep one",
    ]),
    ("correlated-in-block", BLOCK
     + '[[correlation]]\nbetween = ["pair:tide_depth", "pair:tide_height"]\ncoefficient = 0.1', [
        'my.toml:9: [correlation] "pair:tide_depth" and "pair:tide_height" are already correlated by the block "pair"; '
        "state a correlation once",
    ]),
    ("correlated-by-source", TWO.replace("error = 0.1", "errors = { statistical = 0.1, tagging = 0.1 }")
     + '[[correlation]]\nbetween = ["two", "one"]\ncoefficient = 0.1', [
        'my.toml:16: [correlation] "two" and "one" are already correlated by the shared error source "tagging"; '
        "state a correlation once",
    ]),
    ("combined", BLOCK + GOOD + '[[correlation]]\nbetween = ["one", "pair:tide_depth"]\ncoefficient = 0.9\n'
     + '[[correlation]]\nbetween = ["one", "pair:tide_height"]\ncoefficient = -0.9\n', [
        'my.toml:1: [correlated 1 "pair"] "pair:tide_height" the combined correlation matrix of "pair:tide_height", '
        '"pair:tide_depth", "one" is not positive definite: lowest eigenvalue -0.547; check coefficients and shared '
        "error sources",
    ]),
    ("absurd-numbers", changed(GOOD, "error = 0.1", "error = 1e-300"), [
        f"my.toml:1: {ONE}has a value or error outside 1e-100 to 1e+100 1/ps; check the numbers and the unit",
    ]),
    ("absurd-asymmetry", changed(GOOD, "error = 0.1", "error = [1e-9, 1.0]"), [
        f"my.toml:1: {ONE}has errors that differ by more than a factor 1e+06; check the numbers and the unit",
    ]),
    ("fully-shared", TWO.replace("error = 0.1", "errors = { tagging = 0.1 }"), [
        'my.toml:1: [measurement 1 "one"] the combined correlation matrix of "one", "two" is not positive definite: '
        "lowest eigenvalue 0; check coefficients and shared error sources",
    ]),
    ("unknown-parameter", GOOD + "[parameters.tide_mas]\nstart = 1.0\n", [
        'my.toml:8: [parameters.tide_mas] unknown parameter "tide_mas"; closest: tide_mass, tide_phase, tide_angle',
    ]),
    ("set-quantity", GOOD + "[parameters.tide_height]\nstart = 1.0\n", [
        'my.toml:8: [parameters.tide_height] "tide_height" is computed from others; only parameters and constants '
        "can be set",
    ]),
    ("fixed-nowhere", GOOD + "[parameters.tide_mass]\nfixed = true\n", [
        "my.toml:9: [parameters.tide_mass] a fixed parameter needs its value; write start = NUMBER",
    ]),
    ("bounds", GOOD + "[parameters.tide_mass]\nlower = 2.0\nupper = 1.0\n", [
        "my.toml:10: [parameters.tide_mass] lower = 2 must be below upper = 1",
    ]),
    ("start-outside", GOOD + "[parameters.tide_mass]\nlower = 0.0\nstart = -1.0\n", [
        "my.toml:10: [parameters.tide_mass] start = -1 lies outside the bounds",
    ]),
    ("start-unit", GOOD + "[parameters.tide_mass]\nstart = 1.0\nunit = 'ps'\n", [
        'my.toml:10: [parameters.tide_mass] unit "ps" cannot be converted to "GeV"; tide_mass is in "GeV"',
    ]),
    ("prior-kind", GOOD + "[parameters.tide_mass]\nprior = { kind = 'flat' }\n", [
        "my.toml:9: [parameters.tide_mass] kind must be one of uniform, normal, log-uniform, isotropic-angle, not the "
        'text "flat"',
    ]),
    ("prior-numbers", GOOD + "[parameters.tide_mass]\nprior = { kind = 'normal', mean = 1.0 }\n", [
        "my.toml:9: [parameters.tide_mass] a normal prior takes mean and error",
    ]),
    ("prior-log", GOOD + "[parameters.tide_mass]\nprior = { kind = 'log-uniform', lower = 0, upper = 1.0 }\n", [
        "my.toml:9: [parameters.tide_mass] lower of a log-uniform prior must be positive, not 0",
    ]),
    ("unknown-include", 'include = ["no-such-set"]\n' + GOOD, None),
    ("include-itself", 'include = ["my.toml"]\n' + GOOD, [
        "my.toml:1: circular include: my.toml -> my.toml; remove one of them",
    ]),
]  # fmt: skip


@pytest.mark.parametrize(
    ("old", "new", "expected"), [case[1:] for case in SINGLE], ids=[case[0] for case in SINGLE]
)
def test_measurement(load, old: str, new: str, expected: list[str]) -> None:
    assert list(problems_of(load, changed(GOOD, old, new))) == expected


@pytest.mark.parametrize(
    ("old", "new", "expected"), [case[1:] for case in IN_BLOCK], ids=[case[0] for case in IN_BLOCK]
)
def test_block(load, old: str, new: str, expected: list[str]) -> None:
    assert list(problems_of(load, changed(BLOCK, old, new))) == expected


@pytest.mark.parametrize(("text", "expected"), [case[1:] for case in WHOLE], ids=[case[0] for case in WHOLE])
def test_file(load, text: str, expected: list[str] | None) -> None:
    problems = problems_of(load, text)
    if expected is None:  # depends on which sets are bundled
        assert len(problems) == 1
        assert problems[0].startswith(
            'my.toml:1: include "no-such-set": no-such-set: no such file and no bundled '
        )
        assert re.search(r"; closest: \S+, \S+, \S+$", problems[0])
    else:
        assert list(problems) == expected


def test_good_files_load(load) -> None:
    assert len(load(GOOD + BLOCK).entries) == 3


def test_all_problems_of_all_files_are_shown_together(write, load) -> None:
    write("base.toml", changed(GOOD, "error = 0.1", "error = 0"))
    problems = problems_of(
        load, 'include = ["base.toml"]\n' + changed(TWO, 'quantity = "tide_mass"', 'quantity = "x"')
    )
    assert [problem.split(": ")[0] for problem in problems] == ["my.toml:12", "base.toml:5"]


def test_circular_include_through_others(write, load) -> None:
    write("a.toml", 'include = ["b.toml"]\n')
    write("b.toml", '# first\ninclude = ["my.toml"]\n')
    assert problems_of(load, 'include = ["a.toml"]\n' + GOOD) == (
        "b.toml:2: circular include: my.toml -> a.toml -> b.toml -> my.toml; remove one of them",
    )


def test_file_that_is_not_there(write, catalogue) -> None:
    write("tidal.toml", GOOD)
    with pytest.raises(
        InputError, match=r"^tidl.toml: no such file and no bundled inputs of that name; closest: tidal"
    ):
        load_inputs("tidl.toml", catalogue=catalogue)


def test_directory(write, tmp_path: Path, catalogue) -> None:
    (tmp_path / "folder").mkdir()
    with pytest.raises(InputError, match=r"^folder: is a directory; give the inputs file inside it$"):
        load_inputs("folder", catalogue=catalogue)


@pytest.mark.parametrize("name", ["", " ", "a\0b", "x" * 5000])
def test_impossible_name(name: str, catalogue) -> None:
    with pytest.raises(InputError):
        load_inputs(name, catalogue=catalogue)


def test_bytes_that_are_not_text(tmp_path: Path, catalogue, monkeypatch) -> None:
    monkeypatch.chdir(tmp_path)
    (tmp_path / "my.toml").write_bytes(b'title = "x"\nnote = "\xff\xfe"\n')
    with pytest.raises(InputError, match=r"^my\.toml:2: not UTF-8 text; save the file as UTF-8$"):
        load_inputs("my.toml", catalogue=catalogue)


@pytest.mark.skipif(os.name != "posix" or os.geteuid() == 0, reason="permissions bind ordinary users only")
def test_unreadable_file(write, catalogue) -> None:
    write("my.toml", GOOD).chmod(0)
    with pytest.raises(InputError, match=r"^my\.toml: cannot be read: Permission denied$"):
        load_inputs("my.toml", catalogue=catalogue)


@pytest.mark.parametrize("text", ["x = " + "[" * 5000, "x = 1" + "0" * 5000, "x = '" + "\x00'"])
def test_hostile_text(load, text: str) -> None:
    assert problems_of(load, text)[0].startswith("my.toml:1: not valid TOML: ")


@pytest.mark.parametrize(
    ("content", "expected"),
    [
        ("1.0, 0.5\n0.5, x\n", '{csv}:2: "x" is not a finite number'),
        ("1.0, 0.5\n\n0.5, nan\n", '{csv}:3: "nan" is not a finite number'),
        ("1.0, 0.5\n", "correlation has 1 rows of 2 elements; 2 quantities need 2 x 2"),
    ],
)
def test_bad_csv(write, load, content: str, expected: str) -> None:
    write("matrix.csv", content)
    text = changed(BLOCK, "[[1.0, 0.5], [0.5, 1.0]]", '"matrix.csv"')
    assert problems_of(load, text) == (f"my.toml:7: {PAIR}{expected.format(csv='matrix.csv')}",)
