"""Work in a child process that can be killed: the guard against a source that hangs, and against memory that grows."""

from __future__ import annotations

import multiprocessing
import os
import signal
import threading
from collections.abc import Callable
from concurrent.futures import ProcessPoolExecutor
from multiprocessing.connection import Connection
from multiprocessing.process import BaseProcess
from typing import Any, Final, TypeVar

from watcher.errors import SourceFailed, UsageError, WatcherError

T = TypeVar("T")
SPAWN: Final = multiprocessing.get_context("spawn")


class Cancelled(WatcherError):
    """The child was ended because the daemon stops."""


class Overdue(WatcherError):
    """The child did not answer in time and was killed."""


class Children:
    """Starts children and ends every one of them when the daemon stops."""

    def __init__(self) -> None:
        self._running: set[BaseProcess] = set()
        self._lock = threading.Lock()
        self._stopped = False

    def call(self, timeout: float, function: Callable[..., T], *arguments: Any) -> T:
        """What `function(*arguments)` returns in a child.

        Function, arguments and result must pickle. Raises what it raised if that is an error of `watcher`, Overdue after
        `timeout` seconds, Cancelled when `stop` was called, WatcherError when the child died.
        """
        ours, theirs = SPAWN.Pipe(duplex=False)
        child = SPAWN.Process(target=_work, args=(theirs, function, arguments), daemon=True)
        with self._lock:
            if self._stopped:
                raise Cancelled("the daemon stops; no new work is begun")
            child.start()
            self._running.add(child)
        theirs.close()
        try:
            if not ours.poll(timeout):
                raise Overdue(f"no answer within {timeout:g} s; the child process was killed")
            try:
                answer = ours.recv()
            except EOFError:
                child.join(5)
                if self._stopped:
                    raise Cancelled("the pull was cancelled because the daemon stops") from None
                raise WatcherError(f"the child process died with exit code {child.exitcode}") from None
        finally:
            ours.close()
            _end(child)
            with self._lock:
                self._running.discard(child)
        kind, value = answer
        if kind == "value":
            return value  # type: ignore[no-any-return]
        raise _raised(kind, value)

    def stop(self) -> None:
        """Kill every child and refuse new ones."""
        with self._lock:
            self._stopped = True
            running = list(self._running)
        for child in running:
            child.kill()


def _raised(kind: str, value: Any) -> WatcherError:
    if kind == "source-failed":
        return SourceFailed(*value)
    return UsageError(value) if kind == "usage" else WatcherError(value)


def _work(out: Connection, function: Callable[..., Any], arguments: tuple[Any, ...]) -> None:
    signal.signal(signal.SIGINT, signal.SIG_IGN)
    signal.signal(signal.SIGTERM, signal.SIG_DFL)
    _die_with_parent()
    try:
        answer: tuple[str, Any] = ("value", function(*arguments))
    except SourceFailed as error:
        answer = ("source-failed", (error.source, error.reason, error.detail))
    except UsageError as error:
        answer = ("usage", str(error))
    except WatcherError as error:
        answer = ("error", str(error))
    except MemoryError:
        answer = ("error", "the child process ran out of memory; lower max_rows or give the machine more")
    except Exception as error:  # noqa: BLE001 - whatever it was, the daemon must hear of it and live on
        answer = ("error", f"{type(error).__name__}: {error}")
    out.send(answer)
    out.close()


def _die_with_parent() -> None:
    """A parent that was killed cannot end its children: they watch it themselves."""
    parent = multiprocessing.parent_process()
    assert parent is not None

    def watch() -> None:
        parent.join()
        os._exit(1)

    threading.Thread(target=watch, daemon=True).start()


def _end(child: BaseProcess) -> None:
    if child.is_alive():
        child.join(0.5)
    if child.is_alive():
        child.kill()
    child.join()
    child.close()


class Renderer:
    """Draws charts in one child that is kept while charts are wanted and let go when none is."""

    def __init__(self, timeout: float = 30.0) -> None:
        self._timeout = timeout
        self._pool: ProcessPoolExecutor | None = None
        self._lock = threading.Lock()
        self._used = False

    def svg(self, spec: dict[str, Any]) -> str:
        """The chart of a specification as SVG text. Raises WatcherError when it cannot be drawn."""
        with self._lock:
            self._used = True
            if self._pool is None:
                self._pool = ProcessPoolExecutor(1, mp_context=SPAWN, initializer=_quiet_child)
            pool = self._pool
        try:
            return pool.submit(_draw, spec).result(self._timeout)
        except Exception as error:
            self.close()
            raise WatcherError(f"the chart could not be drawn: {type(error).__name__}: {error}") from error

    def rest(self) -> None:
        """Let the child go if nothing was drawn since the last call."""
        with self._lock:
            idle, self._used = not self._used, False
        if idle:
            self.close()

    def close(self) -> None:
        """End the child."""
        with self._lock:
            pool, self._pool = self._pool, None
        if pool is not None:
            pool.shutdown(wait=False, cancel_futures=True)


def _quiet_child() -> None:
    signal.signal(signal.SIGINT, signal.SIG_IGN)
    _die_with_parent()


def _draw(spec: dict[str, Any]) -> str:
    from watcher.report.render import svg

    return svg(spec)
