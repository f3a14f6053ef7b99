"""A writer killed at any moment leaves a file that opens, verifies and ends as if nothing had happened."""

import json
import signal
import subprocess
import time
from pathlib import Path

import numpy as np
import pytest

pytest.importorskip("emcee")

from fitcore.sampling.chain_file import ChainFile
from fitcore.sampling.verify import verify

UNTIL = 240


def write(command, path, *options, check=True):
    return subprocess.run(
        [*command, str(path), str(UNTIL), *map(str, options)], check=check, capture_output=True, text=True
    )


def content(path):
    with ChainFile.open(path) as chain:
        return (*chain.read_all(), chain.random_state[1], chain.accepted)


@pytest.fixture(scope="module")
def uninterrupted(writer_script, tmp_path_factory):
    path = tmp_path_factory.mktemp("reference") / "chain.h5"
    write(writer_script, path)
    return content(path)


@pytest.mark.parametrize("repetitions", [6, pytest.param(100, marks=pytest.mark.slow)])
def test_kill_at_random_moments(writer_script, uninterrupted, tmp_path, repetitions):
    script = Path(writer_script[1]).with_name("chain_killer.py")
    killed = subprocess.run(
        [writer_script[0], str(script), str(tmp_path), str(repetitions), str(UNTIL)],
        check=True, capture_output=True, text=True,
    )  # fmt: skip
    survived = json.loads(killed.stdout)
    assert len(survived) == repetitions
    for number in range(repetitions):
        path = tmp_path / f"{number}.h5"
        assert verify(path).steps == UNTIL
        for a, b in zip(content(path), uninterrupted, strict=True):
            np.testing.assert_array_equal(a, b)
    assert any(0 < steps < UNTIL for steps in survived), survived


def test_reader_never_meets_a_writer_in_the_middle(writer_script, tmp_path):
    """Whatever moment a reader looks at, it sees a sound chain."""
    path = tmp_path / "chain.h5"
    with subprocess.Popen([*writer_script, str(path), "240"], stdout=subprocess.DEVNULL) as process:
        while not path.exists() and process.poll() is None:
            time.sleep(0.01)
        seen = [verify(path).steps]
        while process.poll() is None:
            seen.append(verify(path).steps)
    assert process.returncode == 0
    assert seen == sorted(seen)
    assert verify(path).steps == 240


def test_full_disk_stops_the_run_and_loses_nothing(writer_script, uninterrupted, tmp_path):
    path = tmp_path / "chain.h5"
    stopped = write(writer_script, path, 0, 1_250_000, check=False)
    assert stopped.returncode == 2
    assert stopped.stderr == ""
    assert "StoreError" in stopped.stdout
    assert "steps are safe in the file" in stopped.stdout
    assert 0 < verify(path).steps < UNTIL
    write(writer_script, path)
    for a, b in zip(content(path), uninterrupted, strict=True):
        np.testing.assert_array_equal(a, b)


def test_interrupt_from_the_keyboard_commits_and_ends_in_good_order(writer_script, uninterrupted, tmp_path):
    path = tmp_path / "chain.h5"
    with subprocess.Popen(
        [*writer_script, str(path), str(UNTIL), "0.0008"],
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
    ) as process:
        deadline = time.monotonic() + 60
        while time.monotonic() < deadline:
            if path.exists():
                with ChainFile.open(path) as chain:
                    if chain.steps:
                        break
            time.sleep(0.05)
        process.send_signal(signal.SIGINT)
        output, errors = process.communicate(timeout=60)
    assert process.returncode == 0
    assert errors == ""
    assert "interrupted True" in output
    assert 0 < verify(path).steps < UNTIL
    write(writer_script, path)
    for a, b in zip(content(path), uninterrupted, strict=True):
        np.testing.assert_array_equal(a, b)
