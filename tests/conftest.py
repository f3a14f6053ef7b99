"""What all tests share: settings of the property tests, and a catalogue that no test leaves changed."""

from __future__ import annotations

import os
import signal
import threading
from collections.abc import Iterator

import pytest
from hypothesis import settings

# Time limits of single examples measure the machine's load, not the code. The same examples every time, so that a red
# run means a change; WEAKMIX_EXPLORE=1 looks for new ones.
settings.register_profile("repeatable", deadline=None, derandomize=True, database=None)
settings.register_profile("explore", deadline=None)
settings.load_profile("explore" if os.environ.get("WEAKMIX_EXPLORE") else "repeatable")

# A shell starts its background jobs with interrupts ignored, and so would the processes that tests interrupt be.
if (
    threading.current_thread() is threading.main_thread()
    and signal.getsignal(signal.SIGINT) is signal.SIG_IGN
):
    signal.signal(signal.SIGINT, signal.default_int_handler)


@pytest.fixture(autouse=True)
def _width_of_a_pipe(monkeypatch: pytest.MonkeyPatch) -> None:
    """Tables as wide as in a pipe, whatever terminal (or test runner) the tests are started from."""
    monkeypatch.delenv("COLUMNS", raising=False)


@pytest.fixture(autouse=True)
def _public_catalogue_as_it_was() -> Iterator[None]:
    """A test may add to the public catalogue, as a user's module does; the next one finds it as shipped."""
    from observables import catalogue

    nodes, hypotheses = dict(catalogue._nodes), dict(catalogue._hypotheses)
    yield
    catalogue._nodes.clear()
    catalogue._nodes.update(nodes)
    catalogue._hypotheses.clear()
    catalogue._hypotheses.update(hypotheses)
