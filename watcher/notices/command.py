"""Notices to a program on this machine: an argument list, never a shell; the envelope on stdin; the exit code decides."""

from __future__ import annotations

import contextlib
import io
import os
import signal
import subprocess
import threading
from typing import IO, Final

from watcher.notices.base import CommandTarget, Delivery, Message
from watcher.notices.envelope import body
from watcher.notices.reply import excerpt, read_answer

REFUSED: Final = 65
"""EX_DATAERR: the program says that it will never take this message."""
PATH: Final = "/usr/local/bin:/usr/bin:/bin"
_READ: Final = 65536
_GRACE: Final = 0.5
"""Seconds that are waited for the rest of the output once the program has ended."""


class CommandSender:
    """Runs one program for each message."""

    def __init__(self, target: CommandTarget) -> None:
        self._target = target

    def deliver(self, message: Message) -> Delivery:
        """Try once; what the program does ends in the outcome, never in an exception."""
        target = self._target
        try:
            program = subprocess.Popen(
                list(target.arguments),
                stdin=subprocess.PIPE,
                stdout=subprocess.PIPE,
                stderr=subprocess.PIPE,
                env={"PATH": PATH, **dict(target.environment)},
                start_new_session=True,
            )
        except (OSError, ValueError) as error:
            why = error.strerror if isinstance(error, OSError) else str(error)
            return Delivery("temporary", f"cannot be started: {excerpt(str(why))}", unreachable=True)
        return _finish(program, body(message), target.timeout)


def _finish(program: subprocess.Popen[bytes], payload: bytes, timeout: float) -> Delivery:
    output, errors = _Beginning(program.stdout), _Beginning(program.stderr)
    feeder = threading.Thread(target=_feed, args=(program.stdin, payload), daemon=True)
    feeder.start()
    try:
        code = program.wait(timeout)
    except subprocess.TimeoutExpired:
        return Delivery("temporary", f"still running after {timeout:g} s: killed", unreachable=True)
    finally:
        if program.poll() is None:
            # The program leads its own session: its pid names the group until it is waited for.
            os.killpg(program.pid, signal.SIGKILL)
            program.wait()
    return judge(code, output.text(), errors.text())


class _Beginning:
    """Reads a pipe to its end in a thread and keeps the beginning: a program that prints without end fills no memory."""

    def __init__(self, pipe: IO[bytes] | None) -> None:
        self._pipe = pipe
        self._kept = bytearray()
        self._thread = threading.Thread(target=self._read, daemon=True)
        self._thread.start()

    def _read(self) -> None:
        if self._pipe is None:
            return
        with self._pipe as pipe:
            while part := pipe.read1(_READ) if isinstance(pipe, io.BufferedReader) else pipe.read(_READ):
                self._kept += part[: _READ - len(self._kept)]

    def text(self) -> bytes:
        """What was read. Waits briefly only: a job left in the background may hold the pipe for hours."""
        self._thread.join(_GRACE)
        return bytes(self._kept)


def _feed(pipe: IO[bytes] | None, payload: bytes) -> None:
    if pipe is None:
        return
    # A program need not read its input to its end, or at all.
    with contextlib.suppress(BrokenPipeError), pipe:
        pipe.write(payload)


def judge(code: int, output: bytes, errors: bytes) -> Delivery:
    """What an exit code means: 0 delivered (its output may be a retraining answer), 65 permanent, all else temporary.

    Only one code is permanent, because a program that fails for any other reason (1 of a shell script, a signal, 75) is
    mended within the seven days more often than not.
    """
    said, reference = read_answer(output)
    if code == 0:
        return Delivery("delivered", "exit 0", status=said, reference=reference)
    ended = f"exit {code}" if code > 0 else f"ended by signal {-code}"
    complaint = excerpt(errors)
    told = f"{ended}: {complaint}" if complaint else ended
    if code == REFUSED:
        return Delivery("permanent", told, status=said, reference=reference)
    return Delivery("temporary", told)
