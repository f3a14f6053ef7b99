"""Where tasks run: this process, local processes, or a dask cluster; all behind `concurrent.futures.Executor`.

Tasks are coarse, keyed and idempotent, carry their own seed, and return their result to the caller, who alone
writes: the numbers cannot depend on the executor, on the number of processes or on the order of completion.
"""

from __future__ import annotations

import contextlib
import importlib
import importlib.util
import multiprocessing
import os
import re
import signal
import socket
import sys
import tempfile
from collections.abc import Callable, Hashable, Iterator, Mapping
from concurrent.futures import (
    FIRST_COMPLETED,
    BrokenExecutor,
    CancelledError,
    Executor,
    Future,
    ProcessPoolExecutor,
    ThreadPoolExecutor,
    wait,
)
from dataclasses import dataclass
from pathlib import Path
from typing import Any, TypeVar

from observables.errors import ConvergenceError, InputError, StoreError

__all__ = [
    "ClusterExecutor",
    "LocalProcesses",
    "ProblemSpec",
    "SerialExecutor",
    "open_executor",
    "portable",
    "problem_from",
    "run_tasks",
]

Key = TypeVar("Key", bound=Hashable)

#: Seconds after which an address without a scheduler is given up.
CONNECTION_TIMEOUT = 5.0
HINT = (
    "start one with `dask scheduler` and `dask worker ADDRESS`, check the address, or leave the cluster out"
)
#: How often a task may be lost with its worker before it is blamed.
ATTEMPTS = 4
#: Problems kept per worker process.
KEPT_PROBLEMS = 4

_THREADS = (
    "OMP_NUM_THREADS",
    "OPENBLAS_NUM_THREADS",
    "MKL_NUM_THREADS",
    "BLIS_NUM_THREADS",
    "VECLIB_MAXIMUM_THREADS",
)


# -- problems that travel ---------------------------------------------------------------------------------------------


@dataclass(frozen=True)
class ProblemSpec:
    """What another process needs to build the same problem; small and picklable.

    Attributes
    ----------
    name : str
        Name of the inputs.
    inputs_toml : str
        Self-contained inputs file.
    hypothesis : str
        Names of hypotheses, joined by ``+``.
    theory_errors : str
    fingerprint : str
        Of the problem that this was made from.
    modules : tuple of (str, str)
        Names and paths of the user's modules that declare quantities or hypotheses.
    """

    name: str
    inputs_toml: str
    hypothesis: str
    theory_errors: str
    fingerprint: str
    modules: tuple[tuple[str, str], ...] = ()

    def build(self) -> Any:
        """Build the problem.

        Raises
        ------
        StoreError
            The problem built here is not the one described: another version of weakmix or of a user's module.
        InputError
            A user's module does not exist here.
        """
        from fitcore.problem import Problem

        for module, file in self.modules:
            _import_module(module, file)
        with tempfile.TemporaryDirectory(prefix="weakmix-") as folder:
            path = Path(folder) / "inputs.toml"
            path.write_text(self.inputs_toml, encoding="utf-8")
            problem = Problem.load(path, self.hypothesis, theory_errors=self.theory_errors)
        if problem.fingerprint != self.fingerprint:
            raise StoreError(
                f"{self.name}: a worker built a different problem ({problem.fingerprint[:8]} instead of "
                f"{self.fingerprint[:8]}); give all workers the same versions of weakmix and of your modules"
            )
        return problem


def _import_module(name: str, path: str) -> None:
    file = Path(path)
    if any(_same_file(getattr(module, "__file__", None), file) for module in list(sys.modules.values())):
        return
    if not file.exists():
        raise InputError(
            f"{path}: the module {name!r} with your quantities is not on this worker; copy it there"
        )
    with contextlib.suppress(ImportError, ValueError):
        found = importlib.util.find_spec(name)
        if found is not None and _same_file(found.origin, file):
            importlib.import_module(name)
            return
    found = importlib.util.spec_from_file_location(name, file)
    if found is None or found.loader is None:
        raise InputError(f"{path}: cannot be imported as a Python module")
    module = importlib.util.module_from_spec(found)
    sys.modules[name] = module
    try:
        found.loader.exec_module(module)
    except BaseException:
        del sys.modules[name]
        raise


def _same_file(one: str | None, other: Path) -> bool:
    return one is not None and Path(one).resolve() == other.resolve()


_problems: dict[str, Any] = {}


def problem_from(portable_problem: Any) -> Any:
    """The problem that `portable` packed; built once per process."""
    build = getattr(portable_problem, "build", None)
    if build is None:
        return portable_problem
    key = portable_problem.fingerprint
    if key not in _problems:
        while len(_problems) >= KEPT_PROBLEMS:
            _problems.pop(next(iter(_problems)))
        _problems[key] = build()
    return _problems[key]


def portable(problem: Any, executor: Executor) -> Any:
    """What to send to the tasks of an executor: the problem itself inside this process, its spec elsewhere."""
    if isinstance(executor, SerialExecutor):
        return problem
    return getattr(problem, "spec", problem)


# -- executors --------------------------------------------------------------------------------------------------------


class SerialExecutor(Executor):
    """Runs every task at once, in this process."""

    concurrency = 1

    def submit(self, fn: Callable[..., Any], /, *args: Any, **kwargs: Any) -> Future[Any]:
        """Run the task and return its finished future."""
        future: Future[Any] = Future()
        future.set_running_or_notify_cancel()
        try:
            future.set_result(fn(*args, **kwargs))
        except Exception as error:  # delivered with the future; an interrupt is not
            future.set_exception(error)
        return future


class LocalProcesses(Executor):
    """Processes of this machine, started afresh (spawn), each with one BLAS thread and one copy of the problem.

    Parameters
    ----------
    jobs : int
    spec : ProblemSpec, optional
        Built by every worker when it starts.

    Notes
    -----
    A worker that dies takes its pool down: tasks at work are lost (`run_tasks` repeats them) and the next submission
    starts a new pool.
    """

    def __init__(self, jobs: int, spec: Any = None) -> None:
        if jobs < 1:
            raise InputError(f"{jobs} processes: at least one is needed")
        self.concurrency = jobs
        self._spec = spec
        self._pool = self._new_pool()

    def _new_pool(self) -> ProcessPoolExecutor:
        return ProcessPoolExecutor(
            self.concurrency,
            mp_context=multiprocessing.get_context("spawn"),
            initializer=_start_worker,
            initargs=(self._spec,),
        )

    def submit(self, fn: Callable[..., Any], /, *args: Any, **kwargs: Any) -> Future[Any]:
        """Queue a task."""
        with _single_threaded(), _interrupts_held():  # workers start here and inherit both
            try:
                return self._pool.submit(fn, *args, **kwargs)
            except BrokenExecutor:
                self._pool.shutdown(wait=False)
                self._pool = self._new_pool()
                return self._pool.submit(fn, *args, **kwargs)

    def shutdown(self, wait: bool = True, *, cancel_futures: bool = False) -> None:
        """Stop the workers once their present tasks are done."""
        self._pool.shutdown(wait=wait, cancel_futures=cancel_futures)


def _start_worker(spec: Any) -> None:
    signal.signal(signal.SIGINT, signal.SIG_IGN)  # an interrupt is the parent's to handle
    if spec is not None:
        problem_from(spec)


@contextlib.contextmanager
def _interrupts_held() -> Iterator[None]:
    """Hold back interrupts while a worker starts: it would print a traceback before it can ignore them."""
    if not hasattr(signal, "pthread_sigmask"):
        yield
        return
    before = signal.pthread_sigmask(signal.SIG_BLOCK, {signal.SIGINT})
    try:
        yield
    finally:
        signal.pthread_sigmask(signal.SIG_SETMASK, before)


@contextlib.contextmanager
def _single_threaded() -> Iterator[None]:
    before = {name: os.environ.get(name) for name in _THREADS}
    os.environ.update(dict.fromkeys(_THREADS, "1"))
    try:
        yield
    finally:
        for name, value in before.items():
            if value is None:
                os.environ.pop(name, None)
            else:
                os.environ[name] = value


class ClusterExecutor(Executor):
    """The executor view of a dask client.

    Parameters
    ----------
    address : str
        Of a running scheduler, e.g. ``tcp://host:8786``.
    timeout : float
        Seconds to wait for the scheduler and for a first worker.

    Raises
    ------
    InputError
        dask is not installed, nobody answers at the address, or the cluster has no workers.
    """

    def __init__(self, address: str, *, timeout: float = CONNECTION_TIMEOUT) -> None:
        try:
            import distributed
        except ImportError as error:
            raise InputError(
                "--cluster needs dask: install weakmix with the extra 'cluster' (weakmix[cluster])"
            ) from error
        self.address = address
        open_client: Any = distributed.Client
        _knock(address, timeout)
        try:
            _shake_hands(address, timeout)
            self._client: Any = open_client(address, timeout=timeout, set_as_default=False)
        except (OSError, ValueError, TypeError) as error:
            raise InputError(
                f"cluster {address!r}: what answers there within {timeout:g} s is no dask scheduler; {HINT}"
            ) from error
        try:
            self._client.wait_for_workers(1, timeout=timeout)
        except (OSError, TimeoutError) as error:
            self._client.close()
            raise InputError(
                f"cluster {address!r}: the scheduler has no workers; start some with `dask worker {address}`"
            ) from error
        self.concurrency = max(sum(self._client.nthreads().values()), 1)
        self._view = self._client.get_executor()

    def submit(self, fn: Callable[..., Any], /, *args: Any, **kwargs: Any) -> Future[Any]:
        """Send a task to the cluster."""
        if self._client.status != "running":
            raise StoreError(
                f"cluster {self.address!r}: the connection to the scheduler was lost; what is finished is kept, "
                "start the cluster again and repeat the command"
            )
        future: Future[Any] = self._view.submit(fn, *args, **kwargs)
        return future

    def shutdown(self, wait: bool = True, *, cancel_futures: bool = False) -> None:
        """Leave the cluster; it keeps running."""
        # the view's own shutdown would wait for everything that was sent
        with contextlib.suppress(OSError, TimeoutError):
            self._client.close()


def _knock(address: str, timeout: float) -> None:
    """Raise InputError unless something listens at the address; cheaper and cleaner than a client that gives up."""
    found = re.fullmatch(
        r"(?:(?P<protocol>[a-z]+)://)?\[?(?P<host>[^/\[\]]+)\]?:(?P<port>\d{1,5})/?", address
    )
    if found is None:
        raise InputError(f"cluster {address!r}: no address of a scheduler; write it like tcp://host:8786")
    if found["protocol"] not in (None, "tcp", "tls", "ws", "wss"):
        return  # another transport: the client's business
    try:
        socket.create_connection((found["host"], int(found["port"])), timeout=timeout).close()
    except (OSError, OverflowError) as error:
        raise InputError(f"cluster {address!r}: nobody answers there ({error}); {HINT}") from error


def _shake_hands(address: str, timeout: float) -> None:
    """Raise OSError unless a scheduler speaks at the address: a client that meets something silent never returns."""
    import asyncio

    from distributed import core

    connect: Any = core.connect

    async def greet() -> None:
        connection = await asyncio.wait_for(connect(address, timeout=timeout), timeout)
        connection.abort()

    # a thread of its own, since a notebook's has an event loop already
    with ThreadPoolExecutor(1) as thread:
        thread.submit(asyncio.run, greet()).result()


def open_executor(*, jobs: int = 1, cluster: str | None = None, spec: Any = None) -> Executor:
    """Open the place where tasks run; use it as a context manager.

    Parameters
    ----------
    jobs : int
        Number of local processes; 1 is this process.
    cluster : str, optional
        Address of a dask scheduler, in place of local processes.
    spec : ProblemSpec, optional
        Problem that local workers build when they start.

    Raises
    ------
    InputError
        As `LocalProcesses` and `ClusterExecutor` do.
    """
    if cluster is not None:
        return ClusterExecutor(cluster)
    return SerialExecutor() if jobs == 1 else LocalProcesses(jobs, spec)


# -- tasks ------------------------------------------------------------------------------------------------------------


def run_tasks(
    executor: Executor,
    function: Callable[..., Any],
    tasks: Mapping[Key, tuple[Any, ...]],
    *,
    patience: float | None = None,
    attempts: int = ATTEMPTS,
) -> Iterator[tuple[Key, Any]]:
    """Run keyed, idempotent tasks and hand over their results as they come.

    Parameters
    ----------
    executor : Executor
        May finish tasks in any order, finish them twice, or lose them.
    function : callable
        Importable from its module; called with each task's arguments.
    tasks : mapping of key to tuple
    patience : float, optional
        Seconds without any result after which everything outstanding is sent again (the first answer counts).
    attempts : int
        How often a task may be lost before giving up.

    Yields
    ------
    (key, result)
        Every key exactly once, in order of completion.

    Raises
    ------
    ConvergenceError
        A task was lost every time.
    Exception
        Whatever a task raised.
    """
    waiting: list[Key] = list(tasks)[::-1]
    sent: dict[Key, int] = dict.fromkeys(tasks, 0)
    open_futures: dict[Future[Any], Key] = {}
    open_keys: set[Key] = set(tasks)
    # enough to keep every worker busy, few enough to stop quickly
    concurrency = getattr(executor, "concurrency", 8)
    window = 1 if concurrency == 1 else 2 * concurrency + 2

    def send(key: Key) -> None:
        if sent[key] >= attempts:
            raise ConvergenceError(
                f"task {key}: its worker was lost {attempts} times; finished tasks are kept; look for workers that "
                "run out of memory"
            )
        sent[key] += 1
        open_futures[executor.submit(function, *tasks[key])] = key

    try:
        while open_keys:
            # futures of answered tasks may never finish: they take no place in the window
            busy = len(open_keys.intersection(open_futures.values()))
            for _ in range(min(len(waiting), window - busy)):
                send(waiting.pop())
            finished, _ = wait(open_futures, timeout=patience, return_when=FIRST_COMPLETED)
            if not finished:
                late = [key for key in dict.fromkeys(open_futures.values()) if key in open_keys]
                for key in late:
                    send(key)
                continue
            for future in finished:
                key = open_futures.pop(future)
                if key not in open_keys:
                    continue  # answered already
                error = CancelledError() if future.cancelled() else future.exception()
                if error is None:
                    open_keys.remove(key)
                    yield key, future.result()
                elif _lost(error):
                    send(key)
                else:
                    raise error
    finally:
        for future in open_futures:
            future.cancel()


def _lost(error: BaseException) -> bool:
    """Whether the worker died, as opposed to the task having failed."""
    if isinstance(error, CancelledError | BrokenExecutor):
        return True
    return type(error).__name__ in ("KilledWorker", "CommClosedError", "FutureCancelledError")
