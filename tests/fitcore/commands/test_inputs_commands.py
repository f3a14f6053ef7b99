"""show and new, and how mistakes in inputs reach the user."""

from __future__ import annotations

import json
from collections.abc import Callable
from pathlib import Path

import pytest
from click.testing import Result

Run = Callable[..., Result]


def test_show_lists_entries_groups_and_notices(weakmix: Run, template: Path) -> None:
    done = weakmix("show", template)
    assert done.exit_code == 0, done.stderr
    assert done.stdout.startswith("weakmix ")
    assert "quark mixing" in done.stdout.splitlines()[0]
    for words in (
        "element-us",
        "57.0 +3.1 -2.8",
        "inflated",
        "shared",
        "Groups: cp-asymmetry, loop",
        "Free parameters (4)",
    ):
        assert words in done.stdout


def test_show_json_carries_the_converted_values(weakmix: Run, template: Path) -> None:
    done = weakmix("show", template, "--json", "-", "--quiet")
    assert done.stderr == ""
    content = json.loads(done.stdout)
    beta = next(entry for entry in content["entries"] if entry["id"] == "beta")
    assert beta["unit"] == "deg"
    assert beta["value"] == pytest.approx(0.361 * 57.29577951308232, rel=1e-12)  # radians as written
    assert content["parameters"] == [f"wolfenstein_{name}" for name in ("lambda", "A", "rhobar", "etabar")]


def test_show_selects_and_sets(weakmix: Run, template: Path) -> None:
    def ids(*options: str) -> list[str]:
        return [
            entry["id"]
            for entry in json.loads(weakmix("show", template, *options, "--json", "-").stdout)["entries"]
        ]

    assert ids("--only", "loop", "--only", "gamma") == ["gamma", "beta"]
    assert ids("--without", "tree") == ["beta"]
    done = weakmix("show", template, "--set", "gamma.error=1.5", "--json", "-")
    gamma = next(entry for entry in json.loads(done.stdout)["entries"] if entry["id"] == "gamma")
    assert (gamma["plus"], gamma["minus"]) == (1.5, 1.5)


@pytest.mark.parametrize(
    ("options", "words"),
    [
        (("--only", "treee"), "treee"),
        (("--without", "nonsense"), "nonsense"),
        (("--set", "gamma.error=-1"), "gamma"),
        (("--set", "gamma"), "gamma"),
        (("--set", "gama.error=1"), "gama"),
        (("--hypothesis", "nonsense"), "nonsense"),
        (("--without", "tree", "--without", "loop"), "no entry"),
    ],
)
def test_wrong_selections_exit_2(weakmix: Run, template: Path, options: tuple[str, ...], words: str) -> None:
    for command in ("show", "fit"):
        done = weakmix(command, template, *options)
        assert done.exit_code == 2, done.output
        assert words in done.stderr
        assert "Traceback" not in done.stderr


ENTRY = 'title = "x"\n[[measurement]]\nid = "a"\nvalue = 1\nsource = "s"\n'


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("", "empty"),
        ("title = ", "1"),
        (ENTRY + 'quantity = "jarlskgo"\nerror = 1\nunit = "1"\n', "jarlskog"),
        (ENTRY + 'quantity = "jarlskog"\nerror = 1\n', "unit"),
        (ENTRY + 'quantity = "jarlskog"\nerror = -1\nunit = "1"\n', "error"),
    ],
)
def test_mistakes_in_a_file_name_file_and_entry(weakmix: Run, tmp_path: Path, text: str, words: str) -> None:
    path = tmp_path / "wrong.toml"
    path.write_text(text)
    for command in ("show", "fit"):
        done = weakmix(command, path)
        assert done.exit_code == 2, done.output
        assert "wrong.toml" in done.stderr
        assert words in done.stderr
        assert done.stdout == ""
    assert [item.name for item in tmp_path.iterdir()] == ["wrong.toml"]


def test_new_never_overwrites(weakmix: Run, template: Path, tmp_path: Path) -> None:
    template.write_text("precious")
    done = weakmix("new", template)
    assert done.exit_code == 2
    assert "was not touched" in done.stderr
    assert template.read_text() == "precious"
    missing = weakmix("new", tmp_path / "nowhere" / "file.toml")
    assert missing.exit_code == 2
    assert "does not exist" in missing.stderr
    assert weakmix("new", tmp_path).exit_code == 2
