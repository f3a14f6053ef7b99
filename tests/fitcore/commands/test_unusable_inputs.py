"""`weakmix fit FILE` with unusable files: exit code 2, place and mend named, no traceback, nothing left behind."""

from __future__ import annotations

import os
import subprocess
import sys
from collections.abc import Callable
from pathlib import Path

import pytest
from click.testing import Result

Run = Callable[..., Result]

TITLE = 'title = "Mine"\n\n'
ONE = """\
[[measurement]]
id = "V-us"
quantity = "magnitude_V_us"
value = 0.2243
error = 0.0008
unit = "1"
source = "invented"
"""
TWO = """
[[measurement]]
id = "gamma"
quantity = "angle_gamma"
value = 66.0
error = 3.0
unit = "deg"
source = "invented"
"""
PAIR = """\
[[correlated]]
id = "pair"
quantities = ["magnitude_V_cd", "magnitude_V_cs"]
values = [0.22, 0.97]
errors = [0.01, 0.01]
units = ["1", "1"]
correlation = [[1.0, 0.2], [0.2, 1.0]]
source = "invented"
"""
FIRST = '[measurement 1 "V-us"] '


def but(text: str, old: str, new: str) -> str:
    assert old in text
    return text.replace(old, new, 1)


#: Name -> text of mine.toml, where the message must point, and what it must say.
CASES = {
    "not-toml": (TITLE + ONE + "value = = 3\n", "mine.toml:10: ", "not valid TOML"),
    "empty": ("", "mine.toml:1: ", "the file is empty; `weakmix new` writes a template"),
    "unknown-key": (TITLE + ONE + 'sauce = "x"\n', f"mine.toml:10: {FIRST}", 'did you mean "source"?'),
    "unknown-quantity": (
        TITLE + but(ONE, "magnitude_V_us", "magnitude_V_su"),
        f"mine.toml:5: {FIRST}",
        "closest: magnitude_V_us, magnitude_V_ud, magnitude_V_ub",
    ),
    "wrong-unit": (
        TITLE + but(ONE, 'unit = "1"', 'unit = "GeV"'),
        f"mine.toml:8: {FIRST}",
        'magnitude_V_us is in "1"',
    ),
    "unknown-unit": (
        TITLE + ONE + but(TWO, '"deg"', '"furlong"'),
        'mine.toml:16: [measurement 2 "gamma"] ',
        'unit "furlong" is not known; angle_gamma is in "deg"',
    ),
    "missing-unit": (TITLE + but(ONE, 'unit = "1"\n', ""), f"mine.toml:3: {FIRST}", 'write unit = "1"'),
    "missing-source": (
        TITLE + but(ONE, 'source = "invented"\n', ""),
        f"mine.toml:3: {FIRST}",
        'write source = "where the value is from"',
    ),
    "negative-error": (
        TITLE + but(ONE, "0.0008", "-0.0008"),
        f"mine.toml:7: {FIRST}",
        "error must be positive, not -0.0008; write errors without sign",
    ),
    "zero-error": (TITLE + but(ONE, "0.0008", "0.0"), f"mine.toml:7: {FIRST}", "not 0; write an error that"),
    "nan-error": (
        TITLE + but(ONE, "0.0008", "nan"),
        f"mine.toml:7: {FIRST}",
        "error must be finite, not nan",
    ),
    "infinite-value": (TITLE + but(ONE, "0.2243", "inf"), f"mine.toml:6: {FIRST}", "value must be finite"),
    "matrix-not-symmetric": (
        TITLE + but(PAIR, "[0.2, 1.0]]", "[0.3, 1.0]]"),
        'mine.toml:9: [correlated 1 "pair"] ',
        "row 1 column 2 has 0.2, row 2 column 1 has 0.3",
    ),
    "matrix-not-positive": (
        TITLE + PAIR.replace("0.2]", "1.2]").replace("[0.2,", "[1.2,"),
        'mine.toml:9: [correlated 1 "pair"] ',
        "lowest eigenvalue -0.2; give more digits or check the signs",
    ),
    "matrix-of-wrong-size": (
        TITLE + but(PAIR, "[[1.0, 0.2], [0.2, 1.0]]", "[[1.0]]"),
        'mine.toml:9: [correlated 1 "pair"] ',
        "2 quantities need 2 x 2",
    ),
    "duplicate-id": (
        TITLE + ONE + "\n" + ONE,
        'mine.toml:12: [measurement 2 "V-us"] ',
        "first used in line 4",
    ),
    "circular-include": (
        'include = ["other.toml"]\n' + TITLE + ONE,
        "other.toml:1: ",
        "circular include: mine.toml -> other.toml -> mine.toml; remove one",
    ),
    "overlap": (
        TITLE + but(ONE, 'unit = "1"', 'unit = "1"\noverlaps = ["gamma"]') + TWO,
        f"mine.toml:3: {FIRST}",
        "use --without gamma",
    ),
    "included-file-missing": ('include = ["nowhere.toml"]\n' + TITLE + ONE, "mine.toml:1: ", "no such file"),
    "dropped-id-unknown": (
        TITLE + 'include = ["averages-2026"]\ndrop = ["V-uss"]\n',
        "mine.toml:4: ",
        "closest: V-us, V-ud, V-ub",
    ),
}


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    (tmp_path / "other.toml").write_text('include = ["mine.toml"]\n' + TITLE + ONE)
    return tmp_path


@pytest.mark.parametrize("name", CASES)
def test_mistake_in_a_file(weakmix: Run, folder: Path, name: str) -> None:
    text, place, mend = CASES[name]
    (folder / "mine.toml").write_text(text)
    before = sorted(folder.iterdir())
    for options in (["--json", "result.json"], ["--out", "run"]):
        done = weakmix("fit", "mine.toml", *options)
        assert done.exit_code == 2
        assert done.stdout == ""
        assert done.stderr.startswith(f"weakmix: unusable input: {place}"), done.stderr
        assert mend in done.stderr
        assert "Traceback" not in done.output
        assert sorted(folder.iterdir()) == before  # no run folder, no JSON, no remains


def test_all_mistakes_are_shown_together(weakmix: Run, folder: Path) -> None:
    spoilt = but(but(ONE, "0.0008", "-1.0"), "magnitude_V_us", "magnitude_V_su") + but(TWO, '"deg"', '"GeV"')
    (folder / "mine.toml").write_text(TITLE + spoilt)
    lines = weakmix("fit", "mine.toml").stderr.splitlines()
    assert lines[0] == "weakmix: unusable input:"
    assert [line.split(" ")[0] for line in lines[1:]] == ["mine.toml:5:", "mine.toml:7:", "mine.toml:16:"]


@pytest.mark.parametrize(
    ("source", "words"),
    [
        ("nowhere.toml", "no such file and no bundled inputs"),
        (".", "is a directory"),
        ("", "the name of the inputs file is empty"),
        ("nul\0inside", "the name of the inputs file is empty"),
        ("avrages-2026", "averages-2026"),
    ],
)
def test_no_such_file(weakmix: Run, folder: Path, source: str, words: str) -> None:
    done = weakmix("fit", source, "--out", "run")
    assert done.exit_code == 2
    assert words in done.stderr
    assert not (folder / "run").exists()


def test_bytes_that_are_no_text(weakmix: Run, folder: Path) -> None:
    (folder / "mine.toml").write_bytes(b'title = "\xff\xfe"\n')
    done = weakmix("fit", "mine.toml")
    assert done.exit_code == 2
    assert "mine.toml" in done.stderr
    assert "Traceback" not in done.output


@pytest.mark.parametrize("name", ["not-toml", "matrix-not-positive", "overlap"])
def test_mistakes_seen_from_the_shell(folder: Path, name: str) -> None:
    text, place, mend = CASES[name]
    (folder / "mine.toml").write_text(text)
    code = "from fitcore.commands.main import main; main()"
    command = [sys.executable, "-c", code, "fit", "mine.toml", "--json", "-"]
    done = subprocess.run(command, capture_output=True, text=True, cwd=folder, env=os.environ)
    assert (done.returncode, done.stdout) == (2, "")
    assert done.stderr.startswith(f"weakmix: unusable input: {place}")
    assert mend in done.stderr
    assert not (folder / "weakmix-runs").exists()


IMPOSSIBLE = """
import numpy as np
from observables import Real, quantity

@quantity(unit="1", title="A root of something negative", source="invented")
def impossible_root(magnitude_V_us) -> Real:
    return np.sqrt(-1.0 - magnitude_V_us)
"""


def test_a_fit_that_cannot_converge_exits_1_and_says_why(weakmix: Run, folder: Path) -> None:
    (folder / "own.py").write_text(IMPOSSIBLE)
    (folder / "mine.toml").write_text(TITLE + but(ONE, "magnitude_V_us", "impossible_root"))
    done = weakmix("fit", "mine.toml", "--module", "own.py", "--json", "-")
    assert done.exit_code == 1
    assert '"converged": false' in done.stdout
    assert "the fit did not converge: no start of the search is a possible point" in done.stderr
    assert "Traceback" not in done.output
