"""Where a number comes from: versions, time, fingerprint."""

from __future__ import annotations

import platform
from datetime import UTC, datetime
from importlib import metadata
from typing import Any

__all__ = ["provenance", "versions"]

PACKAGES = ("weakmix", "numpy", "scipy", "iminuit", "emcee", "h5py")


def versions() -> dict[str, str]:
    """Versions of Python and of the packages that decide the numbers."""
    found = {"python": platform.python_version()}
    for package in PACKAGES:
        try:
            found[package] = metadata.version(package)
        except metadata.PackageNotFoundError:
            found[package] = "not installed"
    return found


def provenance(problem: Any) -> dict[str, Any]:
    """What a result records about its origin besides the inputs."""
    return {
        "versions": versions(),
        "created": datetime.now(UTC).isoformat(timespec="seconds"),
        "fingerprint": problem.fingerprint,
    }
