"""Work in a child process that can be killed: the guard against a source that hangs, and against memory that grows."""

from __future__ import annotations

import contextlib
import multiprocessing
import os
import signal
import threading
import time
from collections.abc import Callable
from multiprocessing import forkserver, resource_tracker
from multiprocessing.connection import Connection
from multiprocessing.context import ForkServerContext
from multiprocessing.process import BaseProcess
from typing import Any, Final, TypeVar

from watcher.errors import SourceFailed, UsageError, WatcherError

T = TypeVar("T")
FORKS: Final[ForkServerContext] = multiprocessing.get_context("forkserver")
"""A small process that has imported what pulls need and forks: a pull starts in some milliseconds of processor time, and
no thread of the daemon is ever forked."""
PRELOADED: Final = ("click", "watcher.daemon.pulls", "watcher.sources.files", "watcher.sources.database")
OURS: Final = (signal.SIGINT, signal.SIGTERM)
"""Ctrl-C and a service manager reach the whole group: the daemon alone decides, its children are killed by it."""


class Cancelled(WatcherError):
    """The child was ended because the daemon stops."""


class Overdue(WatcherError):
    """The child did not answer in time and was killed."""


def prepare() -> None:
    """Start the process that forks, from the main thread; work that comes earlier starts it as well."""
    # The tracker unblocks signals when it is started, so it must run before they are blocked for the other.
    resource_tracker.ensure_running()
    forkserver.set_forkserver_preload(list(PRELOADED))
    before = signal.pthread_sigmask(signal.SIG_BLOCK, OURS)
    try:
        forkserver.ensure_running()
    finally:
        signal.pthread_sigmask(signal.SIG_SETMASK, before)


class Children:
    """Starts children and ends every one of them when the daemon stops.

    `started` is called in the parent once a child is at work.
    """

    def __init__(self, started: Callable[[], None] = lambda: None) -> None:
        self._started = started
        self._running: set[BaseProcess] = set()
        self._lock = threading.Lock()
        self._stopped = False

    def call(self, timeout: float, function: Callable[..., T], *arguments: Any) -> T:
        """What `function(*arguments)` returns in a child.

        Function, arguments and result must pickle. Raises what it raised if that is an error of `watcher`, Overdue after
        `timeout` seconds, Cancelled when `stop` was called, WatcherError when the child died.
        """
        deadline = time.monotonic() + timeout
        child, ours = self._start(_work, function, arguments)
        try:
            self._started()
            kind, value = self._answer(child, ours, deadline, timeout)
        finally:
            ours.close()
            self._end(child)
        if kind == "value":
            return value  # type: ignore[no-any-return]
        raise _raised(kind, value)

    def _start(self, target: Callable[..., None], *arguments: Any) -> tuple[BaseProcess, Connection]:
        ours, theirs = FORKS.Pipe(duplex=False)
        child = FORKS.Process(target=target, args=(theirs, *arguments), daemon=True)
        try:
            with self._lock:
                if self._stopped:
                    raise Cancelled("the daemon stops; no new work is begun")  # noqa: TRY301 - checked under the lock
                child.start()
                self._running.add(child)
        except OSError as error:
            ours.close()
            raise WatcherError(f"no child process could be started ({error.strerror or error})") from error
        except BaseException:
            ours.close()
            raise
        finally:
            theirs.close()
        return child, ours

    def _answer(self, child: BaseProcess, ours: Connection, deadline: float, timeout: float) -> tuple[str, Any]:
        if not ours.poll(max(deadline - time.monotonic(), 0)):
            raise Overdue(f"no answer within {timeout:g} s; the child process was killed")
        try:
            answer: tuple[str, Any] = ours.recv()
        except (EOFError, OSError):
            child.join(5)
            if self._stopped:
                raise Cancelled("the pull was cancelled because the daemon stops") from None
            raise WatcherError(f"the child process died {_how(child.exitcode)}") from None
        return answer

    def stop(self) -> None:
        """Kill every child and refuse new ones."""
        with self._lock:
            self._stopped = True
            for child in self._running:
                if child.is_alive():
                    child.kill()

    def _end(self, child: BaseProcess) -> None:
        # It has answered and ends by itself, or there is nothing more to expect of it.
        child.join(0.5)
        with self._lock:
            self._running.discard(child)
            if child.is_alive():
                child.kill()
        child.join()
        child.close()


def _how(code: int | None) -> str:
    if code is None:
        return "without a trace"
    return f"by signal {signal.Signals(-code).name}" if code < 0 else f"with exit code {code}"


def _raised(kind: str, value: Any) -> WatcherError:
    if kind == "source-failed":
        return SourceFailed(*value)
    return UsageError(value) if kind == "usage" else WatcherError(value)


def _work(out: Connection, function: Callable[..., Any], arguments: tuple[Any, ...]) -> None:
    _settle_in()
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


def _settle_in() -> None:
    """Leave signals to the parent, and do not outlive it: a parent that was killed cannot end its children."""
    signal.signal(signal.SIGINT, signal.SIG_IGN)
    signal.signal(signal.SIGTERM, signal.SIG_IGN)
    parent = multiprocessing.parent_process()
    assert parent is not None

    def watch() -> None:
        parent.join()
        os._exit(1)

    threading.Thread(target=watch, daemon=True).start()


class Renderer:
    """Draws charts in one child that is kept while charts are wanted and let go when none is."""

    def __init__(self, timeout: float = 30.0) -> None:
        self._timeout = timeout
        self._child: tuple[BaseProcess, Connection] | None = None
        self._lock = threading.Lock()
        self._used = False
        self._closed = False

    def svg(self, spec: dict[str, Any]) -> str:
        """The chart of a specification as SVG text. Raises WatcherError when it cannot be drawn."""
        with self._lock:
            self._used = True
            try:
                kind, value = self._ask(spec)
            except (OSError, EOFError) as error:
                self._drop()
                raise WatcherError(f"the chart could not be drawn: the child process ended ({error})") from error
            except WatcherError:
                self._drop()
                raise
        if kind == "value":
            return str(value)
        raise WatcherError(f"the chart could not be drawn: {value}")

    def _ask(self, spec: dict[str, Any]) -> tuple[str, Any]:
        if self._closed:
            raise WatcherError("the chart could not be drawn: the daemon stops")
        if self._child is None:
            ours, theirs = FORKS.Pipe()
            child = FORKS.Process(target=_draw_on, args=(theirs,), daemon=True)
            child.start()
            theirs.close()
            self._child = (child, ours)
        pipe = self._child[1]
        pipe.send(spec)
        if not pipe.poll(self._timeout):
            raise WatcherError(f"the chart could not be drawn within {self._timeout:g} s; the child process was killed")
        answer: tuple[str, Any] = pipe.recv()
        return answer

    def rest(self) -> None:
        """Let the child go if nothing was drawn since the last call."""
        with self._lock:
            idle, self._used = not self._used, False
            if idle:
                self._drop()

    def close(self) -> None:
        """End the child, for good; a chart under way fails."""
        self._closed = True
        held = self._child
        if held is not None:
            with contextlib.suppress(ValueError):  # it was let go this very moment
                held[0].kill()
        with self._lock:
            self._drop()

    def _drop(self) -> None:
        held, self._child = self._child, None
        if held is not None:
            held[1].close()
            held[0].kill()
            held[0].join()
            held[0].close()


def _draw_on(pipe: Connection) -> None:
    _settle_in()
    from watcher.report.render import svg

    while True:
        try:
            spec = pipe.recv()
        except EOFError:
            return
        try:
            pipe.send(("value", svg(spec)))
        except Exception as error:  # noqa: BLE001 - told to the parent, which shows the table instead
            pipe.send(("error", f"{type(error).__name__}: {error}"))
