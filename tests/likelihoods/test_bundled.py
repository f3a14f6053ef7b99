"""Looking up inputs files by name and path."""

from __future__ import annotations

from pathlib import Path

import pytest

from likelihoods import bundled_names, bundled_path, load_inputs
from likelihoods.bundled import find_inputs
from observables.errors import InputError


def test_published_sets_are_bundled() -> None:
    assert bundled_path("averages-2026").read_text(encoding="utf-8").startswith("#")
    assert len(set(bundled_names())) == len(bundled_names())


def test_closest_names() -> None:
    with pytest.raises(
        InputError, match=r'^no bundled inputs file "averages-2062"; closest: averages-2026, '
    ):
        bundled_path("averages-2062")
    with pytest.raises(
        InputError, match=r"^averages-2062: no such file and no bundled .*; closest: averages-2026, "
    ):
        load_inputs("averages-2062")


def test_an_existing_file_comes_first(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.chdir(tmp_path)
    assert find_inputs("averages-2026")[0] == bundled_path("averages-2026")
    (tmp_path / "averages-2026").write_text("# mine")
    assert find_inputs("averages-2026") == (Path("averages-2026"), "averages-2026")


def test_a_folder_does_not_hide_a_bundled_set(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.chdir(tmp_path)
    (tmp_path / "averages-2026").mkdir()
    assert find_inputs("averages-2026")[0] == bundled_path("averages-2026")


def test_name_is_the_file_name_without_ending(tmp_path: Path) -> None:
    (tmp_path / "my.set.toml").write_text("")
    assert find_inputs(tmp_path / "my.set.toml")[1] == "my.set"
