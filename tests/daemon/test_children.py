"""Children that can be killed, the kept one that draws, threads that hold up no exit, steps of the clock, light imports."""

from __future__ import annotations

import asyncio
import json
import os
import signal
import subprocess
import sys
import threading
import time
from pathlib import Path

import pytest

from watcher.daemon.children import Cancelled, Children, Overdue, Renderer
from watcher.daemon.steps import Steps
from watcher.daemon.threads import in_thread
from watcher.errors import SourceFailed, UsageError, WatcherError

SPEC = {"$schema": "https://vega.github.io/schema/vega-lite/v6.json", "data": {"values": [{"a": 1}]}, "mark": "point"}


# What children do is found by its name in them: these functions stand at the top of a module that can be imported.


def _fail(kind: type[Exception], *facts: str) -> None:
    raise kind(*facts)


def _signals() -> tuple[bool, bool]:
    ignored = [signal.getsignal(number) is signal.SIG_IGN for number in (signal.SIGINT, signal.SIGTERM)]
    return ignored[0], ignored[1]


def test_a_child_answers_from_a_process_of_its_own() -> None:
    """The value comes back, computed elsewhere; Ctrl-C and SIGTERM are the parent's business."""
    children = Children()

    assert children.call(60, os.getpid) != os.getpid()
    assert children.call(60, _signals) == (True, True)


def test_a_child_starts_in_well_under_a_second_of_processor_time() -> None:
    """What a pull imports was imported before the fork: 0.3 s of the child's own processor time at most, everything included."""
    children = Children()
    children.call(60, os.getpid)

    assert children.call(60, time.process_time) < 0.3


@pytest.mark.parametrize(
    ("facts", "kind", "told"),
    [
        ((SourceFailed, "desk", "missing", "no file"), SourceFailed, "missing: no file"),
        ((UsageError, "key = 3"), UsageError, "key = 3"),
        ((WatcherError, "something"), WatcherError, "something"),
        ((ZeroDivisionError, "by zero"), WatcherError, "ZeroDivisionError: by zero"),
        ((MemoryError,), WatcherError, "ran out of memory"),
    ],
)
def test_errors_of_a_child_arrive_as_what_they_were(
    facts: tuple[object, ...], kind: type[Exception], told: str
) -> None:
    """Errors of this project keep their kind and facts; any other is named."""
    with pytest.raises(kind, match=told) as caught:
        Children().call(60, _fail, *facts)
    assert type(caught.value) is kind


def test_a_child_that_does_not_answer_is_killed() -> None:
    """Overdue after the time, and the process is gone."""
    begun = time.monotonic()
    with pytest.raises(Overdue, match=r"within 0\.5 s"):
        Children().call(0.5, time.sleep, 60)
    assert time.monotonic() - begun < 30


def test_a_child_that_dies_is_told_with_its_signal() -> None:
    """The out-of-memory killer sends SIGKILL: the message says so."""
    with pytest.raises(WatcherError, match="SIGKILL"):
        Children().call(60, signal.raise_signal, signal.SIGKILL)
    with pytest.raises(WatcherError, match="exit code 7"):
        Children().call(60, os._exit, 7)


def test_stopping_cancels_what_runs_and_refuses_what_comes() -> None:
    """stop: the call under way ends as Cancelled, and so does the next one."""
    working = threading.Event()
    children = Children(started=working.set)
    caught: list[Exception] = []

    def call() -> None:
        try:
            children.call(60, time.sleep, 60)
        except WatcherError as error:
            caught.append(error)

    thread = threading.Thread(target=call)
    thread.start()
    assert working.wait(30)
    children.stop()
    thread.join(30)
    with pytest.raises(Cancelled):
        children.call(60, os.getpid)

    assert [type(error) for error in caught] == [Cancelled]


def test_charts_are_drawn_by_a_kept_child_that_is_replaced_when_it_dies() -> None:
    """The same child draws twice; killed, the next chart fails or is drawn by another; idle, it is let go."""
    renderer = Renderer()
    try:
        first = renderer.svg(SPEC)
        assert renderer._child is not None
        child = renderer._child[0]
        assert renderer.svg(SPEC) == first
        assert renderer._child[0] is child
        assert child.pid is not None
        os.kill(child.pid, signal.SIGKILL)
        with pytest.raises(WatcherError, match="child process ended"):
            renderer.svg(SPEC)
        assert renderer.svg(SPEC) == first
        with pytest.raises(WatcherError, match="could not be drawn"):
            renderer.svg({"mark": "no such mark"})
        renderer.rest()
        assert renderer._child is not None
        renderer.rest()
        assert renderer._child is None
    finally:
        renderer.close()
    with pytest.raises(WatcherError, match="stops"):
        renderer.svg(SPEC)


def test_a_thread_hands_back_results_and_errors_and_keeps_nothing_from_ending() -> None:
    """Values and exceptions reach whoever waits; a thread that hangs does not hold up the end of the process."""
    assert asyncio.run(in_thread(divmod, 7, 2)) == (3, 1)
    with pytest.raises(ZeroDivisionError):
        asyncio.run(in_thread(divmod, 7, 0))
    script = """
import asyncio, time
from watcher.daemon.threads import in_thread
async def main():
    hanging = asyncio.create_task(in_thread(time.sleep, 600))
    await asyncio.sleep(0.1)
asyncio.run(main())
"""
    done = subprocess.run([sys.executable, "-c", script], capture_output=True, text=True, timeout=60, check=False)

    assert (done.returncode, done.stderr) == (0, "")


def test_steps_of_the_clock_are_seen_and_its_running_is_not() -> None:
    """Running, slewing by seconds and a busy machine are no steps; setting it by an hour either way is one, once."""
    wall, steady = [1000.0], [50.0]
    steps = Steps(lambda: wall[0], lambda: steady[0])

    def after(seconds: float, step: float = 0.0) -> float:
        wall[0] += seconds + step
        steady[0] += seconds
        return steps.moved()

    assert [after(2), after(500), after(2, 3.0)] == [0.0, 0.0, 0.0]
    assert [after(2, 3600.0), after(2), after(2, -3600.0), after(2)] == [3603.0, 0.0, -3600.0, 0.0]


def test_logs_are_readable_on_a_terminal_and_json_otherwise() -> None:
    """One JSON object a line into a pipe; words on a terminal; control characters of outside text reach neither raw."""
    script = """
import io, sys
from watcher.daemon import logs
class Terminal(io.StringIO):
    def isatty(self):
        return True
shown = Terminal() if sys.argv[1] == "terminal" else io.StringIO()
log = logs.configure(shown)
log.info("look recorded", look=7, slice="depot=\\x1b[2J")
try:
    1 / 0
except ZeroDivisionError:
    log.exception("a job failed")
sys.stdout.write(shown.getvalue())
"""
    piped, terminal = (
        subprocess.run([sys.executable, "-c", script, kind], capture_output=True, text=True, check=True).stdout
        for kind in ("pipe", "terminal")
    )
    lines = [json.loads(line) for line in piped.splitlines()]

    assert [line["event"] for line in lines] == ["look recorded", "a job failed"]
    assert (lines[0]["look"], lines[0]["level"]) == (7, "info")
    assert "ZeroDivisionError" in lines[1]["exception"]
    assert "look recorded" in terminal
    assert not terminal.lstrip().startswith("{")
    assert "\x1b[2J" not in terminal + piped


HEAVY = ("pandas", "scipy.stats", "vl_convert", "weasyprint", "pyarrow", "pyspark")


def test_the_daemons_own_process_loads_nothing_that_only_children_need() -> None:
    """Importing the whole daemon brings in no table, chart, page or distribution library."""
    script = f"import sys, watcher.daemon.service; print([n for n in {HEAVY!r} if n in sys.modules])"
    done = subprocess.run([sys.executable, "-c", script], capture_output=True, text=True, check=True)

    assert done.stdout.strip() == "[]"


def test_a_configuration_that_cannot_be_read_ends_the_start(tmp_path: Path) -> None:
    """A configuration that cannot be read ends `watcher run` with exit 2 and one sentence, before any log line."""
    command = [str(Path(sys.executable).parent / "watcher"), "run", str(tmp_path / "none.toml")]
    done = subprocess.run(command, capture_output=True, text=True, check=False, timeout=120)

    assert done.returncode == 2
    assert done.stderr.startswith("watcher: ")
    assert "cannot be read" in done.stderr
