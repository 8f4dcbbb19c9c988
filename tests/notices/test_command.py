"""The command sender with real programs."""

from __future__ import annotations

import json
import os
import sys
import time
from pathlib import Path
from typing import Any

import pytest
from notices.memory import some_message

from watcher.notices.base import CommandTarget, Delivery
from watcher.notices.command import CommandSender


def _python(code: str, *arguments: str, **options: Any) -> Delivery:
    return CommandSender(CommandTarget((sys.executable, "-c", code, *arguments), **options)).deliver(some_message())


def test_the_envelope_arrives_on_stdin(tmp_path: Path) -> None:
    """The same JSON that a webhook gets."""
    file = tmp_path / "got.json"
    delivery = _python("import sys, pathlib; pathlib.Path(sys.argv[1]).write_bytes(sys.stdin.buffer.read())", str(file))

    assert delivery.outcome == "delivered"
    assert json.loads(file.read_text())["data"]["keys"] == ["k1"]


def test_no_shell_reads_the_arguments(tmp_path: Path) -> None:
    """Metacharacters arrive as they stand."""
    file = tmp_path / "got"
    hostile = "$(touch owned); `id` && x > y"
    _python("import sys, pathlib; pathlib.Path(sys.argv[1]).write_text(sys.argv[2])", str(file), hostile)

    assert file.read_text() == hostile


@pytest.mark.parametrize(
    ("code", "outcome"), [(0, "delivered"), (1, "temporary"), (75, "temporary"), (65, "permanent"), (127, "temporary")]
)
def test_the_exit_code_decides(code: int, outcome: str) -> None:
    """0 delivered, 65 permanent, everything else is tried again."""
    assert _python(f"raise SystemExit({code})").outcome == outcome


def test_a_program_ended_by_a_signal_is_tried_again() -> None:
    """The signal is named."""
    delivery = _python("import os; os.kill(os.getpid(), 15)")

    assert (delivery.outcome, delivery.answer) == ("temporary", "ended by signal 15")


def test_only_the_allowed_environment_is_passed_on(monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> None:
    """A fixed PATH and what the configuration lists; none of the daemon's secrets."""
    monkeypatch.setenv("WATCHER_RETRAIN_SECRET", "hush")
    file = tmp_path / "environment"
    code = "import os, sys, pathlib, json; pathlib.Path(sys.argv[1]).write_text(json.dumps(dict(os.environ)))"
    _python(code, str(file), environment=(("PAGER_TEAM", "blue"),))
    seen = json.loads(file.read_text())
    seen.pop("LC_CTYPE", None)  # Python sets it for itself (PEP 538)

    assert seen == {"PATH": "/usr/local/bin:/usr/bin:/bin", "PAGER_TEAM": "blue"}


def test_after_the_time_out_the_whole_process_group_is_killed(tmp_path: Path) -> None:
    """Neither the program nor the child that it started lives on."""
    file = tmp_path / "pids"
    code = (
        "import os, sys, time, subprocess, pathlib\n"
        "child = subprocess.Popen([sys.executable, '-c', 'import time; time.sleep(60)'])\n"
        "pathlib.Path(sys.argv[1]).write_text(f'{os.getpid()} {child.pid}')\n"
        "time.sleep(60)"
    )
    began = time.monotonic()
    delivery = _python(code, str(file), timeout=1.5)
    pids = [int(pid) for pid in file.read_text().split()]

    assert (delivery.outcome, delivery.answer) == ("temporary", "still running after 1.5 s: killed")
    assert time.monotonic() - began < 20
    assert _gone_within(5, pids)


def _gone_within(seconds: float, pids: list[int]) -> bool:
    until = time.monotonic() + seconds
    while time.monotonic() < until:
        if not any(_lives(pid) for pid in pids):
            return True
        time.sleep(0.02)
    return False


def _lives(pid: int) -> bool:
    """A zombie whose new parent has not reaped it is dead all the same."""
    try:
        return Path(f"/proc/{pid}/stat").read_text().rsplit(")", 1)[1].split()[0] != "Z"
    except (FileNotFoundError, ProcessLookupError):
        return False


def test_a_job_left_in_the_background_lives_on_and_does_not_delay_the_outcome(tmp_path: Path) -> None:
    """A command that starts a long training and exits 0 has delivered; the training is not ended."""
    file = tmp_path / "pid"
    code = (
        "import sys, subprocess, pathlib\n"
        "child = subprocess.Popen([sys.executable, '-c', 'import time; time.sleep(30)'])\n"
        "pathlib.Path(sys.argv[1]).write_text(str(child.pid))"
    )
    began = time.monotonic()
    delivery = _python(code, str(file))
    took, pid = time.monotonic() - began, int(file.read_text())
    lives = _lives(pid)
    os.kill(pid, 9)

    assert (delivery.outcome, lives) == ("delivered", True)
    assert took < 9


def test_a_program_that_prints_without_end_fills_no_memory() -> None:
    """Only the beginning of the output is kept; the time-out ends it."""
    delivery = _python("import os\nwhile True: os.write(1, b'x' * 65536)", timeout=1)

    assert delivery.answer == "still running after 1 s: killed"


def test_a_program_that_does_not_read_its_input_is_no_error() -> None:
    """Not even when the message is larger than a pipe holds."""
    target = CommandTarget((sys.executable, "-c", "pass"))
    delivery = CommandSender(target).deliver(some_message(title="x" * 1_000_000))

    assert delivery.outcome == "delivered"


def test_a_program_that_is_not_there_is_tried_again_and_named_as_missing() -> None:
    """It may be installed within the seven days."""
    delivery = CommandSender(CommandTarget(("/nowhere/page-me",))).deliver(some_message())

    assert (delivery.outcome, delivery.answer) == ("temporary", "cannot be started: No such file or directory")


def test_the_output_may_be_a_retraining_answer() -> None:
    """The same JSON as in a webhook's body."""
    delivery = _python('print(\'{"status": "accepted", "reference": "job 4"}\')')

    assert (delivery.status, delivery.reference) == ("accepted", "job 4")


def test_what_it_writes_to_stderr_is_recorded_on_one_safe_line() -> None:
    """Control characters are shown, not passed on."""
    delivery = _python("import sys; sys.stderr.write('no\\x1b[31m\\nroute'); sys.exit(3)")

    assert delivery.answer == r"exit 3: no\x1b[31m\x0aroute"


def test_an_empty_command_is_refused_at_construction() -> None:
    """With an example of what to write."""
    with pytest.raises(ValueError, match="command: is empty"):
        CommandTarget(())
