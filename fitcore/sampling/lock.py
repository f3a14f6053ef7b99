"""One writer per chain file: an advisory lock file that names its owner."""

from __future__ import annotations

import contextlib
import json
import os
import socket
from datetime import UTC, datetime
from pathlib import Path

from observables.errors import StoreError

__all__ = ["WriterLock"]


class WriterLock:
    """The right to write one file, held until :meth:`release`.

    The lock is the file ``NAME.lock`` beside the chain. It holds the host and process number of the
    writer and an operating-system lock, which the kernel gives back when the process dies: a lock left
    by a killed writer of this host is taken over, one of another host is respected.

    Parameters
    ----------
    path : path-like
        The file to be written (not the lock file).

    Raises
    ------
    StoreError
        When another writer holds the lock, or the folder cannot be written.
    """

    def __init__(self, path: str | os.PathLike[str]) -> None:
        self.target = Path(path)
        self.path = self.target.with_name(self.target.name + ".lock")
        self._descriptor: int | None = None
        # A previous owner may remove its lock file between our opening and locking it, hence the loop.
        for _ in range(10):
            if self._try():
                return
        raise StoreError(f"{self.path}: could not take the lock; try again")

    def _try(self) -> bool:
        try:
            descriptor = os.open(self.path, os.O_RDWR | os.O_CREAT, 0o644)
        except OSError as error:
            raise StoreError(
                f"{self.target.parent}: cannot write here ({error.strerror}); choose another folder"
            ) from error
        try:
            if not _exclusive(descriptor):
                raise StoreError(self._refusal(self._owner(descriptor)))
            try:
                if os.fstat(descriptor).st_ino != self.path.stat().st_ino:
                    os.close(descriptor)
                    return False
            except FileNotFoundError:
                os.close(descriptor)
                return False
            owner = self._owner(descriptor)
            if owner and owner.get("host") != socket.gethostname():
                raise StoreError(self._refusal(owner))
            text = json.dumps(
                {
                    "host": socket.gethostname(),
                    "pid": os.getpid(),
                    "since": datetime.now(UTC).isoformat(timespec="seconds"),
                }
            )
            os.ftruncate(descriptor, 0)
            os.pwrite(descriptor, text.encode(), 0)
        except StoreError:
            os.close(descriptor)
            raise
        except OSError as error:
            os.close(descriptor)
            raise StoreError(f"{self.path}: cannot write the lock file ({error.strerror})") from error
        self._descriptor = descriptor
        return True

    @staticmethod
    def _owner(descriptor: int) -> dict[str, object]:
        try:
            owner = json.loads(os.pread(descriptor, 4096, 0).decode())
        except (ValueError, OSError):
            return {}
        return owner if isinstance(owner, dict) else {}

    def _refusal(self, owner: dict[str, object]) -> str:
        who = (
            f"process {owner.get('pid')} on host {owner.get('host')} (since {owner.get('since')})"
            if owner
            else "another process"
        )
        return (
            f"{self.target}: is being written by {who}; wait for it or stop it. "
            f"If that writer is certainly gone, remove {self.path}"
        )

    def release(self) -> None:
        """Give the lock back; harmless when called twice."""
        if self._descriptor is None:
            return
        with contextlib.suppress(OSError):
            self.path.unlink()
        os.close(self._descriptor)
        self._descriptor = None


def _exclusive(descriptor: int) -> bool:
    """Take the operating system's lock without waiting; True when it is ours."""
    try:
        import fcntl
    except ImportError:  # no such lock on this system: the content of the file decides alone
        return True
    try:
        fcntl.flock(descriptor, fcntl.LOCK_EX | fcntl.LOCK_NB)
    except OSError:
        return False
    return True
