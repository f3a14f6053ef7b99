"""A run folder appears whole or not at all, and never over someone else's files."""

from __future__ import annotations

import hashlib
import json
import logging
from datetime import UTC, datetime
from pathlib import Path

import pytest

from fitcore.commands import run_folder
from observables.errors import StoreError


def make(place: Path, text: str = "one") -> None:
    with run_folder.writing("fit", "invented", out=place, options={"only": []}, seed=7) as run:
        run.write_text("notes.txt", text)


def test_folder_is_whole_with_its_record(tmp_path: Path) -> None:
    place = tmp_path / "deep" / "run"
    with run_folder.writing("fit", "invented", out=place, options={"only": ["tree"]}, seed=7) as run:
        run.write_inputs("invented", "title = 'x'\n")
        run.write_json("result.json", {"chi2": float("nan")})
        logging.getLogger("fitcore.minimise").warning("a second minimum")
        assert not place.exists()
    record = json.loads((place / "run.json").read_text())
    assert record["command"] == "fit"
    assert record["seed"] == 7
    assert record["options"] == {"only": ["tree"]}
    assert set(record["versions"]) >= {"weakmix", "python", "numpy", "scipy", "iminuit"}
    digest = hashlib.sha256((place / "inputs.toml").read_bytes()).hexdigest()
    assert record["inputs"] == {"name": "invented", "resolved_sha256": digest}
    assert record["files"]["inputs.toml"] == digest
    assert set(record["files"]) == {"inputs.toml", "result.json", "log.jsonl"}
    assert json.loads((place / "result.json").read_text()) == {"chi2": None}
    events = [json.loads(line)["event"] for line in (place / "log.jsonl").read_text().splitlines()]
    assert events == ["started", "a second minimum", "finished"]
    assert [path.name for path in place.parent.iterdir()] == ["run"]


@pytest.mark.parametrize("error", [RuntimeError, KeyboardInterrupt, OSError])
def test_nothing_is_left_when_the_work_fails(tmp_path: Path, error: type[BaseException]) -> None:
    def work() -> None:
        with run_folder.writing("fit", "x", out=tmp_path / "new" / "run", options={}) as run:
            run.write_text("half.txt", "half")
            raise error

    with pytest.raises(StoreError if error is OSError else error):
        work()
    assert list(tmp_path.iterdir()) == []


def test_failed_work_keeps_the_earlier_run(tmp_path: Path) -> None:
    make(tmp_path / "run")
    with pytest.raises(RuntimeError), run_folder.writing("fit", "x", out=tmp_path / "run", options={}):
        raise RuntimeError
    assert (tmp_path / "run" / "notes.txt").read_text() == "one"


def test_an_earlier_run_is_replaced(tmp_path: Path) -> None:
    make(tmp_path / "run")
    make(tmp_path / "run", "two")
    assert (tmp_path / "run" / "notes.txt").read_text() == "two"
    assert [path.name for path in tmp_path.iterdir()] == ["run"]


def test_an_empty_folder_is_used(tmp_path: Path) -> None:
    (tmp_path / "run").mkdir()
    make(tmp_path / "run")
    assert (tmp_path / "run" / "notes.txt").exists()


def test_other_peoples_files_are_safe(tmp_path: Path) -> None:
    thesis = tmp_path / "thesis"
    thesis.mkdir()
    (thesis / "chapter.tex").write_text("years of work")
    with pytest.raises(StoreError, match="not a weakmix run folder"):
        make(thesis)
    make(tmp_path / "run")
    (tmp_path / "run" / "mine.txt").write_text("kept beside the run")
    with pytest.raises(StoreError, match=r"mine\.txt"):
        make(tmp_path / "run")
    assert (tmp_path / "run" / "mine.txt").exists()
    (tmp_path / "file").write_text("")
    with pytest.raises(StoreError, match="not a folder"):
        make(tmp_path / "file")
    with pytest.raises(StoreError, match="cannot be made"):
        make(tmp_path / "file" / "below")


def test_default_places_do_not_collide(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.chdir(tmp_path)
    now = datetime(2026, 1, 2, 3, 4, 5, tzinfo=UTC)
    first = run_folder.default_place("fit", "my file/../é", now)
    assert first == Path("weakmix-runs/fit-my-file-..-20260102-030405")
    make(first)
    assert run_folder.default_place("fit", "my file/../é", now).name == "fit-my-file-..-20260102-030405-2"


def test_reading_something_that_is_no_run(tmp_path: Path) -> None:
    assert run_folder.read_record(tmp_path) is None
    for text in ("{", "[]", "{}", '{"format_name": "other"}'):
        (tmp_path / "run.json").write_text(text)
        assert run_folder.read_record(tmp_path) is None
