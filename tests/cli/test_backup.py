"""`watcher backup`: a copy that verifies, taken while another process writes."""

from __future__ import annotations

from pathlib import Path

from cli.worlds import answer, folder, run

from watcher.ledger.store import Ledger


def test_a_copy_taken_beside_a_writer_verifies_and_has_the_printed_head(tmp_path: Path) -> None:
    """The ledger is locked, and a transaction is half way: the copy is the state before it, whole."""
    config = folder(tmp_path)
    assert run("look", config, "--at", "2026-02-01").exit_code == 0
    copy = tmp_path / "copy.db"
    with Ledger.open(f"sqlite:///{tmp_path / 'watcher.db'}") as daemon, daemon.writer():
        head = daemon.head()
        with daemon.writing() as connection:
            connection.exec_driver_sql("DELETE FROM bucket")
            found = answer("backup", config, copy)

    assert (found["look"], found["head"]) == (head.look, head.digest)
    assert found["bytes"] > 0
    other = tmp_path / "other.toml"
    other.write_text(config.read_text(encoding="utf-8").replace("watcher.db", "copy.db"), encoding="utf-8")
    kept = answer("audit", other, "--head", f"{head.look}:{head.digest}")
    assert kept["findings"] == []
    assert kept["rederived"] == kept["looks"] > 0


def test_nothing_is_overwritten_and_no_ledger_is_made(tmp_path: Path) -> None:
    """An existing FILE, a missing folder, a missing ledger: exit 2, and nothing appears."""
    config = folder(tmp_path)
    missing = run("backup", config, tmp_path / "copy.db")
    assert run("look", config, "--at", "2026-02-01").exit_code == 0
    taken = tmp_path / "taken.db"
    taken.write_text("mine", encoding="utf-8")

    assert missing.exit_code == 2
    assert "no ledger" in missing.stderr
    assert run("backup", config, taken).exit_code == 2
    assert taken.read_text(encoding="utf-8") == "mine"
    nowhere = run("backup", config, tmp_path / "none" / "copy.db")
    assert nowhere.exit_code == 2
    assert "folder" in nowhere.stderr
    assert not list(tmp_path.glob("*.part"))
    assert "up to look 1" in " ".join(run("backup", config, tmp_path / "copy.db").output.split())


def test_a_postgresql_ledger_is_left_to_its_own_tools(tmp_path: Path) -> None:
    """Exit 2 with the way to do it, before anything is reached."""
    config = folder(tmp_path)
    url = "postgresql+psycopg://localhost/none"
    config.write_text(config.read_text(encoding="utf-8").replace("sqlite:///watcher.db", url), encoding="utf-8")
    result = run("backup", config, tmp_path / "copy.db")

    assert result.exit_code == 2
    assert "pg_dump" in result.stderr
