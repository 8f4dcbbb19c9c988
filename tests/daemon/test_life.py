"""Start, waiting, signals and stop of a real `watcher run`, from outside."""

from __future__ import annotations

import json
import os
import signal
import socket
import sqlite3
import subprocess
import sys
import time
from functools import partial
from pathlib import Path

import pytest
from daemon import house
from daemon.house import Machine, hooked, running, until

from watcher.ledger.store import Ledger
from watcher.records import Head

LATHE = Machine("lathe")
configuration = partial(house.configuration, released=house.RECENT, lag="30d")
prepare = partial(house.prepare, released=house.RECENT, lag="30d")
write_day = partial(house.write_day, released=house.RECENT)


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    """A configuration with one healthy machine and two days of rows."""
    prepare(tmp_path, [LATHE])
    for day in range(2):
        write_day(tmp_path, [LATHE], day)
    return tmp_path


@pytest.mark.parametrize("number", [signal.SIGTERM, signal.SIGINT])
def test_it_looks_serves_and_ends_with_exit_code_0(folder: Path, number: int) -> None:
    """The first look is recorded, page and health answer, and a signal ends the daemon within 30 seconds."""
    with running(folder / "watcher.toml") as daemon:
        daemon.ready()
        recorded = daemon.wait_for("look recorded")
        answers = {path: daemon.get(path)[0] for path in ("/", "/healthz", "/readyz", "/metrics")}
        code = daemon.stop(number)

    assert answers == {"/": 200, "/healthz": 200, "/readyz": 200, "/metrics": 200}
    assert (code, recorded["look"]) == (0, 1)
    assert daemon.said("stopped")


def test_every_line_during_or_about_a_look_has_its_number_and_head(folder: Path) -> None:
    """Lines of a look bear the look's number and the head of the chain: as JSON, one object a line."""
    with running(folder / "watcher.toml") as daemon:
        daemon.wait_for("look recorded")
        daemon.stop()
    with Ledger.open(f"sqlite:///{folder}/watcher.db", write=False) as ledger:
        head = ledger.head()

    about = [line for line in daemon.log if line.get("source") == "bench"]
    assert {(line["look"], line["head"]) for line in about if line["event"] in ("released", "look recorded")} == {
        (head.look, head.digest)
    }
    assert all("look" in line and "head" in line for line in about)


HELD_COMMIT = """
def at_point(point):
    if point == "buckets":
        (config.parent / "inside").touch()
        time.sleep(3)
hooks = Hooks(at_point=at_point)
"""


def test_a_commit_under_way_is_finished_before_the_exit(folder: Path) -> None:
    """SIGTERM inside a commit: the daemon ends only after the look is in the ledger."""
    config = folder / "watcher.toml"
    with running(config, *hooked(config, HELD_COMMIT)) as daemon:
        until(lambda: (folder / "inside").exists())
        code = daemon.stop()
    with Ledger.open(f"sqlite:///{folder}/watcher.db", write=False) as ledger:
        head = ledger.head()

    assert (code, head.look) == (0, 1)


def test_a_hanging_pull_is_cancelled_by_sigterm(tmp_path: Path, hanging_database: str) -> None:
    """A source that never answers does not keep the daemon from ending, and no failure is recorded for it."""
    prepare(tmp_path, [LATHE])
    hang_only(tmp_path, hanging_database, timeout="100s")
    with running(tmp_path / "watcher.toml") as daemon:
        assert daemon.address
        time.sleep(2)
        begun = time.monotonic()
        code = daemon.stop()
        took = time.monotonic() - begun
    with Ledger.open(f"sqlite:///{tmp_path}/watcher.db", write=False) as ledger:
        state = ledger.source_state("silent")

    assert code == 0
    assert took < 25
    assert state.failures_total == 0


def test_nothing_of_the_daemon_is_left_when_it_is_killed(folder: Path) -> None:
    """kill -9 of the parent: its children and the process that forks them end by themselves."""
    with running(folder / "watcher.toml", own_group=True) as daemon:
        daemon.wait_for("look recorded")
        group = daemon.process.pid
        daemon.process.kill()
        daemon.process.wait()
        until(lambda: not members(group), 10)


def test_ctrl_c_reaches_the_whole_group_and_leaves_no_trace(folder: Path) -> None:
    """A terminal sends SIGINT to the children, too: they leave it to the parent, and no traceback is printed."""
    config = folder / "watcher.toml"
    with running(config, own_group=True) as daemon:
        daemon.wait_for("look recorded")
        for day in range(2, 12):
            write_day(folder, [LATHE], day)
            time.sleep(0.2)
        os.killpg(daemon.process.pid, signal.SIGINT)
        code = daemon.process.wait(30)

    assert code == 0
    assert "Traceback" not in daemon.log_path.read_text()


def members(group: int) -> list[int]:
    """The processes of a session that are alive."""
    found = subprocess.run(["ps", "-o", "pid=,stat=", "-s", str(group)], capture_output=True, text=True, check=False)
    return [int(line.split()[0]) for line in found.stdout.splitlines() if not line.split()[1].startswith("Z")]


# --- starting without a ledger or a source


def test_a_ledger_that_is_down_at_start_is_waited_for(folder: Path) -> None:
    """The folder of the ledger is missing: alive, not ready, saying why; it goes on when the folder is there."""
    config = folder / "watcher.toml"
    config.write_text(configuration([LATHE], ledger="sqlite:///later/watcher.db"))
    with running(config) as daemon:
        warned = daemon.wait_for("the ledger cannot be opened; trying again")
        alive, ready = daemon.get("/healthz"), daemon.get("/readyz")
        metrics = daemon.get("/metrics")[1]
        (folder / "later").mkdir()
        daemon.ready()
        code = daemon.stop()

    assert "folder does not exist" in warned["detail"]
    assert (alive[0], ready[0]) == (200, 503)
    assert "folder does not exist" in ready[1]
    assert 'watcher_state{promise="lathe",slice="",version="1",watcher_state="undecided"} 1.0' in metrics
    assert code == 0


def test_a_source_that_is_down_at_start_is_tried_again(folder: Path) -> None:
    """No file yet: a failed look, told as source-failed, and source-restored when the files are there."""
    (folder / "rows").rename(folder / "elsewhere")
    with running(folder / "watcher.toml") as daemon:
        daemon.wait_for("source-failed")
        daemon.ready()
        failing = daemon.metric('watcher_source_failing{source="bench"}')
        (folder / "elsewhere").rename(folder / "rows")
        daemon.wait_for("source-restored")
        until(lambda: daemon.metric('watcher_source_failing{source="bench"}') == 0.0)
        failures = daemon.metric('watcher_look_failures_total{source="bench"}')
        code = daemon.stop()

    assert failing == 1.0
    assert failures is not None
    assert failures >= 1
    assert code == 0


def test_a_ledger_of_another_schema_ends_it_with_the_command(folder: Path) -> None:
    """A ledger written by another version: exit 2, naming `watcher upgrade`."""
    with Ledger.open(f"sqlite:///{folder}/watcher.db", new_id="0a"):
        pass
    with sqlite3.connect(folder / "watcher.db") as connection:
        connection.execute("UPDATE meta SET value = '0' WHERE name = 'schema'")
    connection.close()
    done = subprocess.run(
        [str(Path(sys.executable).parent / "watcher"), "run", str(folder / "watcher.toml")],
        capture_output=True,
        text=True,
        timeout=60,
        check=False,
    )

    assert done.returncode == 2
    assert "watcher upgrade" in done.stderr


def test_terms_that_changed_end_the_start_with_the_reason(folder: Path) -> None:
    """Another tolerance than the frozen one: exit 2, naming key and both values."""
    config = folder / "watcher.toml"
    with running(config) as daemon:
        daemon.wait_for("look recorded")
        daemon.stop()
    config.write_text(config.read_text().replace("tolerance = 0.03", "tolerance = 0.05"))
    with running(config) as daemon:
        code = daemon.process.wait(60)

    assert code == 2
    assert "tolerance was frozen as 0.03" in daemon.log_path.read_text()


def test_an_address_that_is_taken_ends_it_with_the_reason(folder: Path) -> None:
    """Another process listens there: exit 2 with another port as the way out."""
    config = folder / "watcher.toml"
    with socket.socket() as taken:
        taken.bind(("127.0.0.1", 0))
        taken.listen()
        config.write_text(config.read_text().replace("127.0.0.1:0", f"127.0.0.1:{taken.getsockname()[1]}"))
        with running(config) as daemon:
            code = daemon.process.wait(60)

    assert code == 2
    assert "Choose another port" in daemon.log_path.read_text()


def test_a_lock_held_by_another_process_is_waited_for(folder: Path) -> None:
    """Two daemons on one ledger: the second serves, says who holds it, and takes over when the first is killed."""
    config = folder / "watcher.toml"
    with running(config) as first:
        first.wait_for("look recorded")
        with running(config) as second:
            waits = second.wait_for("another process holds the ledger; waiting until it lets go")
            status, why = second.get("/readyz")
            alive = second.get("/healthz")[0]
            looked = second.metric("watcher_ledger_look")
            held = second.metric("watcher_lease_held")
            first.process.kill()
            second.ready()
            taken = until(lambda: second.metric("watcher_lease_held"))
            code = second.stop()

    holder = f"process {first.process.pid}"
    assert holder in waits["detail"]
    assert (status, alive, looked, held, taken, code) == (503, 200, 1.0, 0.0, 1.0, 0)
    assert holder in why


# --- SIGHUP


def test_sighup_takes_a_new_configuration(folder: Path) -> None:
    """A promise that was added is looked at without a restart, and a route that was added is used."""
    config = folder / "watcher.toml"
    drill = Machine("drill")
    write_day(folder, [LATHE, drill], 2)
    with running(config) as daemon:
        daemon.wait_for("look recorded")
        routes = '\n[[route]]\nname = "desk"\nkind = "log"\n'
        config.write_text(configuration([LATHE, drill], routes=routes))
        daemon.process.send_signal(signal.SIGHUP)
        daemon.wait_for("the new configuration is in force", routes=1)
        daemon.wait_for("released", promise="drill")
        waiting = until(lambda: daemon.metric('watcher_notices_waiting{route="desk"}') is not None)
        daemon.stop()

    assert waiting


@pytest.mark.parametrize(
    ("old", "new", "reason"),
    [
        ("tolerance = 0.03", "tolerance = 0.04", "tolerance was frozen as 0.03"),
        ("tolerance = 0.03", "tolerance = ", "watcher.toml"),
        ('kind = "csv"', 'kind = "carrier-pigeon"', "carrier-pigeon"),
        ('name = "bench"', 'name = "shelf"', "bench"),
    ],
    ids=["terms", "bad-file", "bad-value", "source-gone"],
)
def test_sighup_refuses_what_cannot_be_and_goes_on(folder: Path, old: str, new: str, reason: str) -> None:
    """The old configuration stays in force, with the reason in the log, and looks go on."""
    config = folder / "watcher.toml"
    with running(config) as daemon:
        daemon.wait_for("look recorded", look=1)
        changed = config.read_text().replace(old, new)
        config.write_text(changed.replace('source = "bench"', 'source = "shelf"') if "shelf" in new else changed)
        daemon.process.send_signal(signal.SIGHUP)
        refused = daemon.wait_for("the new configuration was refused; the old one goes on")
        write_day(folder, [LATHE], 2)
        daemon.wait_for("look recorded", look=2)
        code = daemon.stop()

    assert reason in refused["detail"]
    assert code == 0


# --- beside the running daemon


def test_status_explain_and_audit_work_beside_it(folder: Path) -> None:
    """The commands read the ledger that the daemon is writing."""
    config = folder / "watcher.toml"
    command = str(Path(sys.executable).parent / "watcher")
    with running(config) as daemon:
        daemon.wait_for("look recorded")
        done = [
            subprocess.run([command, *words], capture_output=True, text=True, timeout=120, check=False)
            for words in (
                ["status", str(config), "--json"],
                ["explain", str(config), "lathe", "--json"],
                ["audit", str(config), "--json"],
            )
        ]
        daemon.stop()

    assert [each.returncode for each in done] == [0, 0, 0], [each.stderr for each in done]
    audited = json.loads(done[2].stdout)
    assert (audited["findings"], audited["looks"]) == ([], audited["rederived"])
    assert audited["head"] == str(Head(audited["looks"], audited["head"].partition(":")[2]))


# --- a source that hangs


@pytest.fixture
def hanging_database() -> object:
    """A PostgreSQL address that accepts and never answers."""
    with socket.socket() as silent:
        silent.bind(("127.0.0.1", 0))
        silent.listen(50)
        yield f"postgresql+psycopg://nobody@127.0.0.1:{silent.getsockname()[1]}/nothing"


def hanging_source(url: str, timeout: str) -> str:
    """A source table, and a promise on it, that rest on a server which never answers."""
    return f"""
[[source]]
name = "silent"
kind = "database"
url = "{url}"
table = "rows"
every = "1s"
timeout = "{timeout}"
[source.columns]
id = "id"
time = "at"
prediction = "said"
label = "was"
[[promise]]
name = "unheard"
source = "silent"
tolerance = 0.03
risk = 0.001
released = 2026-03-02T00:00:00Z
label_lag = "1h"
uncertified = true
"""


def hang_only(folder: Path, url: str, timeout: str) -> None:
    """Replace the configuration by one with the hanging source alone."""
    head = '[ledger]\nurl = "sqlite:///watcher.db"\n[web]\nlisten = "127.0.0.1:0"\n'
    (folder / "watcher.toml").write_text(head + hanging_source(url, timeout))


SHORT_GRACE = """
from watcher.daemon import pulls
pulls.GRACE = 1.0
hooks = Hooks()
"""


def test_a_source_that_hangs_is_killed_and_stops_nothing_else(folder: Path, hanging_database: str) -> None:
    """Its child is killed after the time-out, the failure is told, and the other source is looked at all the time."""
    config = folder / "watcher.toml"
    config.write_text(config.read_text() + hanging_source(hanging_database, "1s"))
    with running(config, *hooked(config, SHORT_GRACE)) as daemon:
        daemon.wait_for("look recorded", source="bench")
        failed = daemon.wait_for("source gave no answer", source="silent")
        write_day(folder, [LATHE], 2)
        write_day(folder, [LATHE], 3)
        head = daemon.said("look recorded", source="bench")[-1]["look"]
        until(lambda: any(line["look"] > head for line in daemon.said("look recorded", source="bench")))
        code = daemon.stop()

    assert failed["reason"] == "timeout"
    assert code == 0
