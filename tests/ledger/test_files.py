"""A ledger in a file: one writer, readers beside it, and nothing half written whatever happens."""

from __future__ import annotations

import contextlib
import multiprocessing
import os
import random
import shutil
import signal
import sqlite3
import tempfile
import time
import warnings
from collections.abc import Iterator
from pathlib import Path

import pytest
from ledger import dying
from ledger.world import DAY, RELEASED, SimpleReplay, World
from sqlalchemy import select, text, update

from watcher.errors import LedgerBusy, LedgerDamaged, SchemaMismatch, UsageError, WatcherError
from watcher.ledger import Ledger, engine
from watcher.ledger.audit import audit
from watcher.ledger.tables import LOOK, META, SCHEMA
from watcher.ledger.upgrade import backup, upgrade
from watcher.records import Entry, Event

FORK = multiprocessing.get_context("forkserver")
FORK.set_forkserver_preload(["ledger.dying"])
POINTS = ("begun", "terms", "buckets", "verdicts", "events", "look", "head", "committed")


def url(path: Path) -> str:
    return f"sqlite:///{path}"


@pytest.fixture
def path(tmp_path: Path) -> Path:
    return tmp_path / "watcher.db"


def fill(path: Path, days: int = 3, seed: int = 1) -> World:
    world = World(seed)
    with Ledger.open(url(path), new_id="00ff") as ledger:
        for day in range(1, days + 1):
            ledger.commit(world.entry(RELEASED + day * DAY, day - 1))
    return world


def verified_head(path: Path) -> int:
    """The number of the newest look of a ledger that verifies."""
    with Ledger.open(url(path), write=False) as ledger:
        found = audit(ledger, replay=SimpleReplay())
    assert found.findings == ()
    return found.head.look


def test_a_ledger_is_the_same_after_opening_again(path: Path) -> None:
    """Closing and opening loses nothing and the id stays."""
    fill(path)
    with Ledger.open(url(path)) as ledger:
        assert (ledger.id, ledger.head().look) == ("00ff", 3)
        assert ledger.size_bytes() >= path.stat().st_size > 0
    assert verified_head(path) == 3


def test_drawn_ids_differ(tmp_path: Path) -> None:
    """Two ledgers never share an id by themselves."""
    with Ledger.open(url(tmp_path / "a.db")) as a, Ledger.open(url(tmp_path / "b.db")) as b:
        assert a.id != b.id
        assert len(a.id) == 32


def test_sqlite_is_set_to_survive_a_power_cut(path: Path) -> None:
    """Write-ahead log and full synchronisation, on every connection."""
    with Ledger.open(url(path)) as ledger, ledger.reading() as connection:
        assert connection.execute(text("PRAGMA journal_mode")).scalar_one() == "wal"
        assert connection.execute(text("PRAGMA synchronous")).scalar_one() == 2  # FULL, from SQLite's manual


@pytest.mark.parametrize("point", POINTS)
def test_a_process_killed_inside_a_commit_leaves_the_old_state_or_the_new_one(path: Path, point: str) -> None:
    """kill -9 at each named point: the chain verifies, the look is there whole or not at all, and the next one fits."""
    step = 4
    child = FORK.Process(target=dying.die_at, args=(url(path), point, step))
    child.start()
    child.join(60)

    assert child.exitcode == -signal.SIGKILL
    assert verified_head(path) == (step + 1 if point == "committed" else step)
    with Ledger.open(url(path)) as ledger:
        newest, _ = ledger.newest_look("desk")
        ledger.commit(dying.replayed(newest).entry(dying.look_time(newest), newest))
    assert verified_head(path) == newest + 1


def test_a_process_killed_at_any_time_leaves_a_ledger_that_verifies(path: Path) -> None:
    """kill -9 five times at random moments of continuous writing; every ledger left behind verifies and grows on."""
    moments = random.Random(20261102)
    heads = [0]
    for _ in range(5):
        child = FORK.Process(target=dying.write_on, args=(str(path),))
        child.start()
        deadline = time.monotonic() + 60
        while not path.exists() or head_of(path) <= heads[-1]:
            assert time.monotonic() < deadline
            time.sleep(0.01)
        time.sleep(moments.random() * 0.1)
        assert child.is_alive()
        child.kill()
        child.join(60)
        heads.append(verified_head(path))

    assert heads == sorted(set(heads))


def head_of(path: Path) -> int:
    """The head as committed, or -1 while the tables are being made."""
    try:
        with Ledger.open(url(path), write=False) as ledger:
            return ledger.head().look
    except UsageError:
        return -1


def test_a_second_writer_is_told_who_holds_the_ledger(path: Path) -> None:
    """The lock names its holder's process; reading goes on; death of the holder frees the lock at once."""
    world = fill(path)
    child = FORK.Process(target=dying.hold, args=(str(path),))
    child.start()
    deadline = time.monotonic() + 60
    while not Path(f"{path}.held").exists():
        assert time.monotonic() < deadline
        time.sleep(0.01)
    entry = world.entry(RELEASED + 4 * DAY, 3)

    with Ledger.open(url(path)) as ledger:
        with pytest.raises(LedgerBusy, match=f"held by process {child.pid} on "):
            ledger.commit(entry)
        assert verified_head(path) == 3
        child.kill()
        child.join(60)
        assert ledger.commit(entry).look == 4


def test_the_lock_is_held_through_nested_use_and_given_back_at_the_end(path: Path) -> None:
    """A daemon enters once and commits inside; two ledgers of one process exclude one another as well."""
    world = fill(path)
    with Ledger.open(url(path)) as a, Ledger.open(url(path)) as b:
        with a.writer():
            assert a.held
            a.commit(world.entry(RELEASED + 4 * DAY, 3))
            a.renew()
            with pytest.raises(LedgerBusy), b.writer():
                pass
        assert not a.held
        with pytest.raises(UsageError, match="not the writer"):
            a.renew()
        b.commit(world.entry(RELEASED + 5 * DAY, 4))


def test_a_child_process_does_not_inherit_the_lock(path: Path) -> None:
    """A forked child that outlives the writer (a pull that hangs) does not keep the ledger locked."""
    world = fill(path)
    read, write = os.pipe()
    with Ledger.open(url(path)) as ledger:
        with ledger.writer():
            with warnings.catch_warnings():
                # Python 3.12 warns when other tests left threads; the child only waits and leaves.
                warnings.simplefilter("ignore", DeprecationWarning)
                pid = os.fork()
            if pid == 0:
                os.close(write)
                os.read(read, 1)  # until the parent closes the pipe
                os._exit(0)
        os.close(read)
        with Ledger.open(url(path)) as other:
            assert other.commit(world.entry(RELEASED + 4 * DAY, 3)).look == 4
        os.close(write)
        assert os.waitpid(pid, 0)[1] == 0


def test_an_acknowledgement_needs_no_lock(path: Path) -> None:
    """It can be given on the command line beside the daemon that holds the ledger."""
    fill(path)
    event = Event("acknowledged", "damage-photos", "1", "", "", None, {"look": 1, "event": 0, "who": "duty"})
    with Ledger.open(url(path)) as daemon, daemon.writer(), Ledger.open(url(path)) as command:
        assert command.commit(Entry("", RELEASED + 4 * DAY, "acknowledge", 1, 0, (), (event,))).look == 4
    assert verified_head(path) == 4


def test_reading_makes_nothing_and_locks_nothing(path: Path) -> None:
    """A read-only ledger creates no file, refuses to write, and works while another holds the lock."""
    with pytest.raises(UsageError, match="there is no ledger"):
        Ledger.open(url(path), write=False)
    with pytest.raises(UsageError, match="there is no ledger"):
        Ledger.open(url(path), create=False)
    assert list(path.parent.iterdir()) == []
    fill(path)
    path.with_name("watcher.db.lock").unlink()
    with Ledger.open(url(path), write=False) as ledger:
        assert ledger.head().look == 3
        with pytest.raises(UsageError, match="for reading only"):
            ledger.forget_rejects()
        with pytest.raises(UsageError, match="for reading only"), ledger.writer():
            pass
    assert not path.with_name("watcher.db.lock").exists()


def test_a_reader_sees_one_state_while_the_writer_goes_on(path: Path) -> None:
    """Inside one snapshot the head does not move."""
    world = fill(path)
    with (
        Ledger.open(url(path)) as writer,
        Ledger.open(url(path), write=False) as reader,
        reader.reading() as connection,
    ):
        before = connection.execute(select(META.c.value).where(META.c.name == "head")).scalar_one()
        writer.commit(world.entry(RELEASED + 4 * DAY, 3))
        after = connection.execute(select(META.c.value).where(META.c.name == "head")).scalar_one()

    assert before == after


def test_a_locked_database_is_busy_and_nothing_is_written(path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Another program inside a write transaction: LedgerBusy in clear words, and the ledger as before."""
    monkeypatch.setattr(engine, "BUSY_SECONDS", 0.05)
    world = fill(path)
    with contextlib.closing(sqlite3.connect(path, isolation_level=None)) as other, Ledger.open(url(path)) as ledger:
        other.execute("BEGIN IMMEDIATE")
        with pytest.raises(LedgerBusy, match="locked by another process"):
            ledger.commit(world.entry(RELEASED + 4 * DAY, 3))
        other.execute("ROLLBACK")
    assert verified_head(path) == 3


def test_a_full_database_keeps_the_old_state(path: Path) -> None:
    """SQLite's own "full" error, brought about by a page limit: a clear message, no half commit, and work goes on after."""
    world = fill(path)
    entry = world.entry(RELEASED + 90 * DAY, 3)
    with Ledger.open(url(path)) as ledger:
        with ledger.reading() as connection:
            pages = connection.execute(text("PRAGMA page_count")).scalar_one()
            connection.execute(text(f"PRAGMA max_page_count = {pages + 2}"))
        with pytest.raises(WatcherError, match="disk is full"):
            ledger.commit(entry)
        assert verified_head(path) == 3
        with ledger.reading() as connection:
            connection.execute(text("PRAGMA max_page_count = 1000000"))
        assert ledger.commit(entry).look == 4
    assert verified_head(path) == 4


def test_a_write_that_the_system_refuses_keeps_the_old_state(path: Path) -> None:
    """The kernel refuses to let the files grow: the writer says so in its own words, what was committed verifies."""
    child = FORK.Process(target=dying.write_in_little_room, args=(str(path), 400_000))
    child.start()
    child.join(60)
    step, said = Path(f"{path}.said").read_text().split("\n", 1)

    assert child.exitcode == 7
    assert "nothing was written" in said
    assert verified_head(path) == int(step) > 1


@contextlib.contextmanager
def nobody() -> Iterator[None]:
    """Without the powers of root, which no permission bit stops."""
    if os.geteuid() != 0:
        yield
        return
    os.seteuid(65534)
    try:
        yield
    finally:
        os.seteuid(0)


@pytest.fixture
def folder() -> Iterator[Path]:
    """A folder that a user without rights can reach and not write."""
    made = Path(tempfile.mkdtemp(prefix="ledger"))
    made.chmod(0o755)
    yield made
    made.chmod(0o755)
    shutil.rmtree(made)


def test_a_read_only_folder_can_be_read_and_not_written(folder: Path) -> None:
    """status and explain work on a ledger one may not write; writing says why not."""
    path = folder / "watcher.db"
    fill(path)
    for file in folder.iterdir():
        file.chmod(0o444)
    folder.chmod(0o555)
    with nobody():
        assert verified_head(path) == 3
        with pytest.raises(WatcherError, match="cannot be"):
            Ledger.open(url(path))


@pytest.mark.parametrize(
    ("bad", "what"),
    [
        ("mysql+pymysql://u:secret@h/d", "allowed are sqlite"),
        ("no url", "cannot be read"),
        ("sqlite:////no/such/folder/watcher.db", "make the folder first"),
    ],
)
def test_urls_that_name_no_ledger_are_refused_without_their_password(bad: str, what: str) -> None:
    """The message tells what is allowed and never a password."""
    with pytest.raises(UsageError, match=what) as raised:
        Ledger.open(bad)

    assert "secret" not in str(raised.value)


def test_a_folder_or_another_file_is_no_ledger(tmp_path: Path) -> None:
    """A folder, a text file and a database without the tables are told apart."""
    with pytest.raises(UsageError, match="is a folder"):
        Ledger.open(url(tmp_path))
    stray = tmp_path / "notes.txt"
    stray.write_text("not a database at all, but long enough to be looked at\n" * 40)
    with pytest.raises(LedgerDamaged, match="damaged"):
        Ledger.open(url(stray))
    other = tmp_path / "other.db"
    with contextlib.closing(sqlite3.connect(other)) as connection:
        connection.execute("CREATE TABLE t (a)")
    with pytest.raises(UsageError, match="holds no ledger"):
        Ledger.open(url(other), write=False)


@pytest.mark.parametrize(
    ("number", "way"), [(SCHEMA + 1, "install the newer watcher"), (SCHEMA - 1, "watcher upgrade")]
)
def test_another_schema_number_is_refused_with_the_way_out(path: Path, number: int, way: str) -> None:
    """A ledger of another version is not touched."""
    fill(path)
    set_meta(path, "schema", str(number))

    with pytest.raises(SchemaMismatch, match=way):
        Ledger.open(url(path))


def set_meta(path: Path, name: str, value: str) -> None:
    with contextlib.closing(sqlite3.connect(path, isolation_level=None)) as connection:
        connection.execute("UPDATE meta SET value = ? WHERE name = ?", (value, name))


def test_a_ledger_without_its_schema_row_or_head_is_damaged(path: Path) -> None:
    """Missing meta rows are no invitation to begin afresh."""
    world = fill(path)
    with contextlib.closing(sqlite3.connect(path, isolation_level=None)) as connection:
        connection.execute("DELETE FROM meta WHERE name = 'head'")
        with Ledger.open(url(path)) as ledger, pytest.raises(LedgerDamaged, match="meta head is missing"):
            ledger.commit(world.entry(RELEASED + 4 * DAY, 3))
        connection.execute("DELETE FROM meta WHERE name = 'schema'")
    with pytest.raises(LedgerDamaged, match="meta schema"):
        Ledger.open(url(path))


def test_an_upgrade_copies_first_and_then_climbs_in_one_transaction(path: Path) -> None:
    """The copy has the old number, the ledger the new one, and its chain verifies; a second upgrade does nothing."""
    fill(path)
    set_meta(path, "schema", str(SCHEMA - 1))
    done = upgrade(url(path), steps={SCHEMA - 1: lambda c: c.execute(text("CREATE TABLE extra (a INTEGER)"))})

    assert (done.found, done.now) == (SCHEMA - 1, SCHEMA)
    assert done.copy is not None
    with contextlib.closing(sqlite3.connect(done.copy)) as copy:
        assert copy.execute("SELECT value FROM meta WHERE name = 'schema'").fetchone() == (str(SCHEMA - 1),)
        assert copy.execute("SELECT max(number) FROM look").fetchone() == (3,)
    assert verified_head(path) == 3
    again = upgrade(url(path))
    assert (again.found, again.now, again.copy) == (SCHEMA, SCHEMA, None)


def test_an_upgrade_that_fails_leaves_the_ledger_as_it_was(path: Path) -> None:
    """A step that breaks rolls back; an unknown way, a newer ledger and an existing copy are refused."""
    fill(path)
    set_meta(path, "schema", str(SCHEMA - 1))
    with pytest.raises(UsageError, match="there is no way"):
        upgrade(url(path))
    copy = path.with_name(f"watcher.db.schema-{SCHEMA - 1}")
    with pytest.raises(UsageError, match="exists already"):
        upgrade(url(path))
    copy.unlink()
    with pytest.raises(WatcherError, match="cannot be used"):
        upgrade(url(path), steps={SCHEMA - 1: lambda c: c.execute(text("NO SQL"))})
    set_meta(path, "schema", str(SCHEMA))
    assert verified_head(path) == 3
    set_meta(path, "schema", str(SCHEMA + 1))
    with pytest.raises(SchemaMismatch):
        upgrade(url(path))
    set_meta(path, "schema", "x")
    with pytest.raises(LedgerDamaged, match="no number"):
        upgrade(url(path))


def test_a_backup_taken_while_the_ledger_is_written_verifies(path: Path, tmp_path: Path) -> None:
    """The copy is one state of the ledger, whole; an existing file is not overwritten."""
    world = fill(path)
    target = tmp_path / "copy.db"
    with Ledger.open(url(path)) as ledger, ledger.writer():
        ledger.commit(world.entry(RELEASED + 4 * DAY, 3))
        backup(path, target)
        ledger.commit(world.entry(RELEASED + 5 * DAY, 4))

    assert (verified_head(target), verified_head(path)) == (4, 5)
    with pytest.raises(UsageError, match="exists already"):
        backup(path, target)
    with pytest.raises(UsageError, match="there is no ledger"):
        backup(tmp_path / "none.db", tmp_path / "other.db")


def test_a_damaged_head_or_term_is_named(path: Path) -> None:
    """Rows that cannot be read give LedgerDamaged with the row's name."""
    fill(path)
    set_meta(path, "head", "nonsense")
    with Ledger.open(url(path)) as ledger:
        with pytest.raises(LedgerDamaged, match="no NUMBER:DIGEST"):
            ledger.head()
        with engine.writing(ledger._engine) as connection:
            connection.execute(text("UPDATE term SET terms = '[]'"))
        with pytest.raises(LedgerDamaged, match="term 'damage-photos' version '1' cannot be read"):
            ledger.terms()
        with engine.writing(ledger._engine) as connection:
            connection.execute(update(LOOK).values(sheet=b""))
        assert {f.table for f in audit(ledger).findings} == {"meta", "look"}
