"""The lock of the one writer of an SQLite ledger: an advisory file lock, which the kernel drops when the process dies."""

from __future__ import annotations

import contextlib
import fcntl
import os
import socket
from pathlib import Path

from watcher.errors import LedgerBusy, WatcherError


class FileLock:
    """`flock` on FILE.lock. No time is involved: nothing expires, nothing has to be renewed.

    A forked child closes its copy of the descriptor, so that a pull that outlives the daemon does not keep the lock.
    """

    def __init__(self, ledger: Path) -> None:
        self._path = ledger.with_name(ledger.name + ".lock")
        self._descriptor: int | None = None
        os.register_at_fork(after_in_child=self._forget)

    @property
    def held(self) -> bool:
        """Whether this object holds the lock."""
        return self._descriptor is not None

    def take(self) -> None:
        """Take the lock at once. Raises LedgerBusy, naming the holder as it wrote itself down."""
        try:
            descriptor = os.open(self._path, os.O_RDWR | os.O_CREAT | os.O_CLOEXEC, 0o644)
        except OSError as error:
            raise WatcherError(
                f"the ledger's lock file {self._path.name!r} cannot be opened: {error.strerror}"
            ) from error
        try:
            fcntl.flock(descriptor, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except OSError as error:
            holder = os.pread(descriptor, 200, 0).decode(errors="replace").strip() or "a process that left no name"
            os.close(descriptor)
            raise LedgerBusy(
                f"the ledger is held by {holder}: stop it, or let it do the work; reading (status, explain) is possible"
            ) from error
        with contextlib.suppress(OSError):  # a full disk must not keep the name from being a mere courtesy
            os.ftruncate(descriptor, 0)
            os.pwrite(descriptor, f"process {os.getpid()} on {socket.gethostname()}\n".encode(), 0)
        self._descriptor = descriptor

    def release(self) -> None:
        """Give the lock back; the file stays, for removing it would race with the next holder."""
        if self._descriptor is not None:
            # Said outright: closing would leave the lock with a child that was forked a moment ago and still has its copy.
            fcntl.flock(self._descriptor, fcntl.LOCK_UN)
            os.close(self._descriptor)
            self._descriptor = None

    def _forget(self) -> None:
        if self._descriptor is not None:
            os.close(self._descriptor)
            self._descriptor = None
