"""The demo: the real daemon under a simulated clock, and its replay at full speed."""

from __future__ import annotations

import json
import os
import re
import signal
import subprocess
import sys
from datetime import UTC, datetime
from pathlib import Path
from urllib.request import urlopen

import pytest
from click.testing import CliRunner
from daemon.house import until

from watcher.cli import demo as demo_command
from watcher.cli.demo_live import AHEAD, Clock
from watcher.cli.main import main
from watcher.demo.scenario import DAY, RELEASED, generate
from watcher.demo.writing import append, prepare

COMMAND = str(Path(sys.executable).parent / "watcher")


def test_it_serves_tells_and_ends_with_exit_code_0(tmp_path: Path) -> None:
    """Address, page, metrics and health; the story without a line of log; Ctrl-C to the whole group ends it in 30 seconds."""
    told = tmp_path / "told"
    with told.open("wb") as out:
        process = subprocess.Popen(
            [COMMAND, "demo", "folder"],
            stdout=out,
            stderr=subprocess.STDOUT,
            cwd=tmp_path,
            start_new_session=True,
            env={**os.environ, "PYTHONUNBUFFERED": "1"},
        )
        try:
            address = until(lambda: re.search(r"http://127\.0\.0\.1:\d+", told.read_text()))[0]
            until(lambda: "week  2" in told.read_text(), 240)
            answers = {}
            for path in ("/", "/metrics", "/healthz", "/readyz"):
                with urlopen(address + path, timeout=60) as answer:
                    answers[path] = (answer.status, answer.read().decode())
            os.killpg(process.pid, signal.SIGINT)
            code = process.wait(30)
        finally:
            if process.poll() is None:
                process.kill()
            process.wait()
    text = told.read_text()

    assert code == 0
    assert {path: status for path, (status, _) in answers.items()} == dict.fromkeys(answers, 200)
    assert 'watcher_state{promise="damage-photos"' in answers["/metrics"][1]
    assert "Stopped." in text
    assert not re.search(r"Traceback|warning|error\b|\[info|\{", text)
    assert max(len(line) for line in text.splitlines()) <= 120


def once(folder: str, *more: str) -> dict[str, object]:
    """The answer of `watcher demo --once --json`."""
    done = CliRunner().invoke(main, ["demo", folder, "--once", "--json", *more])
    assert done.exit_code == 0, done.output
    found: dict[str, object] = json.loads(done.stdout)
    return found


def first_days(folder: Path, seed: int) -> Path:
    """The scenario's first days, as the demo writes them."""
    path = prepare(folder)
    append(folder, [row for row in generate(seed) if row.arrived < RELEASED + 4 * DAY])
    return path


def test_one_seed_gives_one_answer(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Two replays of a seed (its first days, to save time) agree to the head of the chain; another seed does not."""
    monkeypatch.chdir(tmp_path)
    monkeypatch.setattr(demo_command, "DAYS", 1)
    monkeypatch.setattr(demo_command, "write", first_days)
    first, again, other = once("a"), once("b"), once("c", "--seed", "8")

    assert first == again
    assert first["head"] != other["head"]


@pytest.mark.long
def test_the_whole_scenario_gives_one_answer_and_breaks_in_one_depot(tmp_path: Path) -> None:
    """Two processes agree to the byte; the depot with the new camera is broken, and nothing else is."""
    answers = [
        subprocess.run(
            [COMMAND, "demo", name, "--once", "--json"], cwd=tmp_path, capture_output=True, text=True, check=True
        ).stdout
        for name in ("a", "b")
    ]
    broken = [p["slice"] for p in json.loads(answers[0])["promises"] if p["state"] == "breached"]

    assert answers[0] == answers[1]
    assert broken == [{"column": "depot", "value": "Cedar"}]


def test_the_clock_runs_a_day_a_second_and_waits_for_looks() -> None:
    """Never more than a day and a half ahead of the newest look; past the end it runs at the usual pace."""
    now = [100.0]
    clock = Clock(RELEASED + 4 * DAY, lambda: now[0])

    def after(seconds: float) -> float:
        now[0] += seconds
        return (clock() - datetime.fromtimestamp(RELEASED, UTC)).total_seconds() / DAY

    assert [after(1), after(1), after(60)] == [1.0, AHEAD, AHEAD]
    clock.looked()
    assert after(1) == AHEAD + 1
    clock.looked()
    assert (after(60), clock.over) == (4.0, True)
    assert after(3600) == pytest.approx(4 + 3600 / DAY, abs=1e-4)
