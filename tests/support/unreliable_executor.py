"""An executor that reorders, duplicates and drops tasks, and workers that die."""

from __future__ import annotations

import os
import random
from concurrent.futures import CancelledError, Executor, Future
from pathlib import Path


class UnreliableExecutor(Executor):
    """Holds tasks back and finishes them in random order; some twice, some never, some as if their worker had died."""

    concurrency = 3

    def __init__(self, seed: int = 0) -> None:
        self.random = random.Random(seed)
        self.held: list = []
        self.calls = self.dropped = self.died = 0

    def submit(self, fn, /, *args, **kwargs):
        future: Future = Future()
        self.calls += 1
        fate = self.random.random()
        if fate < 0.1:
            self.dropped += 1  # never finished
            return future
        if fate < 0.2:
            self.died += 1
            future.set_exception(CancelledError())
            return future
        self.held.append((future, fn, args, kwargs))
        self.random.shuffle(self.held)
        while len(self.held) > 2:
            self._finish()
        if fate > 0.7:
            self._finish()
        return future

    def _finish(self):
        future, fn, args, kwargs = self.held.pop()
        if not future.cancelled():
            fn(*args, **kwargs)  # run twice: tasks are idempotent
            future.set_result(fn(*args, **kwargs))


def square(x):
    return x * x


def fail(x):
    raise ZeroDivisionError(f"task {x}")


def die_once(x, folder):
    """Kill the worker the first time that task 3 is run."""
    mark = Path(folder) / "died"
    if x == 3 and not mark.exists():
        mark.touch()
        os._exit(1)
    return x * x


def die(x):
    os._exit(1)


def threads(_x):
    return {
        name: os.environ.get(name) for name in ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS")
    }
