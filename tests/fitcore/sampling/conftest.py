import importlib.util
import os
import sys
from pathlib import Path

import pytest

os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")


def _load(name):
    path = Path(__file__).with_name(f"{name}.py")
    spec = importlib.util.spec_from_file_location(name, path)
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module


@pytest.fixture(scope="session")
def problems():
    """The analytic problems of this folder."""
    return _load("analytic_problems")


@pytest.fixture(scope="session")
def writer_script():
    """Command of the subprocess that writes a chain, without its arguments."""
    return [sys.executable, str(Path(__file__).with_name("chain_writer.py"))]
