"""The numbers do not depend on where the work is done, nor on what dies on the way."""

from __future__ import annotations

import json
import os
import pickle
import signal
import socket
import subprocess
import sys
import textwrap
import time
from concurrent.futures import ThreadPoolExecutor
from dataclasses import replace

import pytest
from linear_problem import LinearProblem
from unreliable_executor import UnreliableExecutor, die, die_once, fail, square, threads

from fitcore import Problem, scaleout
from fitcore.scaleout import (
    LocalProcesses,
    ProblemSpec,
    SerialExecutor,
    open_executor,
    problem_from,
    run_tasks,
)
from fitcore.studies import calibration
from fitcore.studies.calibration import calibrate
from observables.errors import ConvergenceError, InputError, StoreError

TASKS = {f"task {k}": (k,) for k in range(40)}
SQUARES = {f"task {k}": k * k for k in range(40)}


@pytest.fixture(scope="module")
def tree():
    return Problem.load("averages-2026-tree")


def numbers(result):
    data = result.to_dict()
    del data["provenance"]
    return json.dumps(data), result.toy_chi2.tobytes()


# -- tasks ------------------------------------------------------------------------------------------------------------


def test_every_task_once_in_this_process():
    with SerialExecutor() as executor:
        answers = list(run_tasks(executor, square, TASKS))
    assert [key for key, _ in answers] == list(TASKS)
    assert dict(answers) == SQUARES


@pytest.mark.parametrize("seed", range(5))
def test_reordered_duplicated_and_dropped_tasks(seed):
    executor = UnreliableExecutor(seed)
    answers = list(run_tasks(executor, square, TASKS, patience=0.02, attempts=50))
    assert executor.dropped > 0
    assert executor.died > 0
    assert len(answers) == len(TASKS)  # each once
    assert dict(answers) == SQUARES


def test_same_numbers_on_an_unreliable_executor(monkeypatch):
    monkeypatch.setattr(calibration, "BLOCK", 50)

    def run_patiently(executor, function, tasks):
        return run_tasks(executor, function, tasks, patience=0.05, attempts=50)

    problem = LinearProblem([[1.0], [1.0], [2.0]], [0.1, -1.0, 1.5])
    arguments = {"rng": 1, "coverage": "all", "points": {"x0": 0.3}}
    straight = calibrate(problem, 1000, **arguments)
    monkeypatch.setattr(calibration, "run_tasks", run_patiently)
    executor = UnreliableExecutor(3)
    assert numbers(calibrate(problem, 1000, executor=executor, **arguments)) == numbers(straight)
    assert executor.calls > 40


def test_an_error_of_a_task_is_not_a_lost_worker():
    with ThreadPoolExecutor(2) as executor, pytest.raises(ZeroDivisionError, match="task"):
        list(run_tasks(executor, fail, TASKS))
    with SerialExecutor() as executor, pytest.raises(ZeroDivisionError, match="task 0"):
        list(run_tasks(executor, fail, TASKS))


def test_a_local_worker_that_dies_loses_nothing(tmp_path):
    tasks = {key: (k, str(tmp_path)) for key, (k,) in TASKS.items()}
    with open_executor(jobs=2) as executor:
        assert dict(run_tasks(executor, die_once, tasks, attempts=10)) == SQUARES
    assert (tmp_path / "died").exists()


def test_a_task_that_always_kills_its_worker_is_named():
    with (
        open_executor(jobs=2) as executor,
        pytest.raises(ConvergenceError, match="task 0: its worker was lost 2 times"),
    ):
        list(run_tasks(executor, die, {"task 0": (0,)}, attempts=2))


def test_workers_have_one_thread_each_and_the_parent_keeps_its_own(monkeypatch):
    monkeypatch.setenv("OMP_NUM_THREADS", "7")
    monkeypatch.delenv("MKL_NUM_THREADS", raising=False)
    with open_executor(jobs=2) as executor:
        [(_, found)] = run_tasks(executor, threads, {"threads": (0,)})
    assert set(found.values()) == {"1"}
    assert os.environ["OMP_NUM_THREADS"] == "7"
    assert "MKL_NUM_THREADS" not in os.environ


def test_zero_processes():
    with pytest.raises(InputError, match="at least one"):
        open_executor(jobs=0)


# -- problems that travel ---------------------------------------------------------------------------------------------


@pytest.mark.parametrize("name", ["averages-2026", "world-2026", "tidewater"])
def test_a_spec_rebuilds_the_problem(name):
    problem = Problem.load(name)
    spec = pickle.loads(pickle.dumps(problem.spec))
    built = spec.build()
    assert built.fingerprint == problem.fingerprint
    assert built.parameters == problem.parameters
    assert built.chi2(problem.start) == problem.chi2(problem.start)


def test_a_spec_remembers_selections_settings_and_theory_errors(tree):
    one, two = (entry.id for entry in tree.entries[:2])
    problem = Problem.load(
        "averages-2026", without=[one], settings=[f"{two}.error=0.0123"], theory_errors="flat"
    )
    assert problem.spec.build().fingerprint == problem.fingerprint


def test_a_worker_that_builds_something_else_is_refused(tree):
    with pytest.raises(StoreError, match="a worker built a different problem"):
        replace(tree.spec, fingerprint="0" * 64).build()


def test_the_problem_is_built_once_per_process(tree, monkeypatch):
    monkeypatch.setattr(scaleout, "_problems", {})
    calls = []
    build = ProblemSpec.build
    monkeypatch.setattr(ProblemSpec, "build", lambda self: calls.append(1) or build(self))
    spec = tree.spec
    assert problem_from(spec) is problem_from(spec)
    assert len(calls) == 1
    assert problem_from(tree) is tree


def test_a_module_of_the_user_travels_along(tmp_path):
    """A quantity of one's own, declared in a module, is there in the workers."""
    (tmp_path / "my_quantities.py").write_text(
        textwrap.dedent(
            """
            from observables import quantity, Real

            @quantity(unit="1", title="sum of two parameters", latex="s", source="invented", cp="even")
            def my_sum(wolfenstein_lambda, wolfenstein_A) -> Real:
                return wolfenstein_lambda + wolfenstein_A
            """
        )
    )
    (tmp_path / "mine.toml").write_text(
        textwrap.dedent(
            """
            title = "mine"
            [[measurement]]
            id = "sum"
            quantity = "my_sum"
            value = 1.0
            error = 0.01
            unit = "1"
            kind = "experiment"
            source = "invented"
            [[measurement]]
            id = "lambda"
            quantity = "wolfenstein_lambda"
            value = 0.2
            error = 0.01
            unit = "1"
            kind = "experiment"
            source = "invented"
            """
        )
    )
    (tmp_path / "main.py").write_text(
        textwrap.dedent(
            """
            if __name__ == "__main__":
                import my_quantities
                from fitcore import Problem
                from fitcore.scaleout import open_executor
                from fitcore.studies.calibration import calibrate

                problem = Problem.load("mine.toml")
                with open_executor(jobs=2, spec=problem.spec) as executor:
                    result = calibrate(problem, 100, rng=1, executor=executor, points={"my_sum": 1.01})
                print(result.points[0].calibrated.toys, problem.spec.modules[0][0])
            """
        )
    )
    done = subprocess.run(
        [sys.executable, "main.py"], cwd=tmp_path, capture_output=True, text=True, timeout=120
    )
    assert done.stdout.split() == ["100", "my_quantities"], done.stderr


# -- same numbers everywhere ------------------------------------------------------------------------------------------

ARGUMENTS = {"rng": 3, "points": {"angle_beta": 22.0}, "coverage": ("wolfenstein_A",)}


def test_same_numbers_for_one_and_two_processes(tree):
    one = calibrate(tree, 2500, **ARGUMENTS)
    with open_executor(jobs=2, spec=tree.spec) as executor:
        assert isinstance(executor, LocalProcesses)
        two = calibrate(tree, 2500, executor=executor, **ARGUMENTS)
    assert numbers(one) == numbers(two)


@pytest.mark.slow
@pytest.mark.filterwarnings("ignore::DeprecationWarning:distributed", "ignore::ResourceWarning")
def test_same_numbers_on_a_cluster_with_a_worker_killed_on_the_way(tree, tmp_path, monkeypatch):
    distributed = pytest.importorskip("distributed")
    monkeypatch.setattr(calibration, "BLOCK", 250)
    expected = calibrate(tree, 3000, **ARGUMENTS)
    killed = []
    with distributed.LocalCluster(
        n_workers=2, threads_per_worker=1, processes=True, dashboard_address=None, silence_logs=50
    ) as cluster:

        def kill_one(done, _total):
            if done > 0 and not killed:
                killed.append(cluster.workers[0].pid)
                os.kill(killed[0], signal.SIGKILL)

        with open_executor(cluster=cluster.scheduler_address) as executor:
            result = calibrate(
                tree, 3000, executor=executor, store=tmp_path / "toys.jsonl", progress=kill_one, **ARGUMENTS
            )
    assert killed
    assert numbers(result) == numbers(expected)
    assert (tmp_path / "toys.jsonl").read_bytes().count(b"\n") == 1 + 24  # every block once


@pytest.mark.parametrize(
    ("address", "message"),
    [
        ("nonsense", "no address of a scheduler"),
        ("tcp://127.0.0.1:9", "nobody answers there"),
        ("tcp://no-such-host.invalid:8786", "nobody answers there"),
    ],
)
def test_an_unreachable_cluster_is_named(address, message):
    pytest.importorskip("distributed")
    began = time.monotonic()
    with pytest.raises(InputError, match=message) as caught:
        open_executor(cluster=address)
    assert repr(address) in str(caught.value)
    assert time.monotonic() - began < 15.0


def test_something_else_at_the_address():
    pytest.importorskip("distributed")
    with socket.socket() as silent:
        silent.bind(("127.0.0.1", 0))
        silent.listen()
        address = f"tcp://127.0.0.1:{silent.getsockname()[1]}"
        with pytest.raises(InputError, match="is no dask scheduler"):
            scaleout.ClusterExecutor(address, timeout=0.5)


def test_without_dask_the_extra_is_named(monkeypatch):
    monkeypatch.setitem(sys.modules, "distributed", None)
    with pytest.raises(InputError, match=r"weakmix\[cluster\]"):
        open_executor(cluster="tcp://127.0.0.1:9")
