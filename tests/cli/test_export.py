"""`watcher export`: every table as CSV that a spreadsheet opens without running anything."""

from __future__ import annotations

import csv
from pathlib import Path

import pytest
from cli.worlds import HOSTILE, answer, folder, run

from watcher.cli.exporting import COLUMNS
from watcher.ledger.store import Ledger

Tables = dict[str, list[dict[str, str]]]


def tables(path: Path) -> Tables:
    """Every file as rows; read by Python's own csv."""
    found = {}
    for file in path.glob("*.csv"):
        with file.open(newline="", encoding="utf-8") as text:
            found[file.stem] = list(csv.DictReader(text))
    return found


@pytest.fixture(scope="module")
def world(tmp_path_factory: pytest.TempPathFactory) -> tuple[Path, Tables]:
    """A broken promise with a hostile slice value, acknowledged, exported after two looks."""
    path = tmp_path_factory.mktemp("export")
    config = folder(path, jump=5, hostile=True)
    run("look", config, "--at", "2026-01-20")
    assert run("look", config, "--at", "2026-03-01").exit_code == 3
    assert run("acknowledge", config, "triage", "--breach", "1", "--who", "=1+1", "--why", "@x").exit_code == 0
    exported = answer("export", config, "--out", path / "out")
    found = tables(path / "out")

    assert exported["files"] == {f"{name}.csv": len(rows) for name, rows in found.items()}
    return config, found


def test_every_table_has_its_columns_and_agrees_with_the_ledger(world: tuple[Path, Tables]) -> None:
    """Counts per cell add up to what status says; verdicts are one a cell and day; every event and notice is there."""
    config, found = world
    status = answer("status", config, code=3)
    whole = next(p for p in status["promises"] if p["slice"] is None)

    assert {name: tuple(rows[0]) for name, rows in found.items()} == dict(COLUMNS)
    sealed = [row for row in found["counts"] if row["sealed"] == "yes"]
    for column in ("", "site"):
        assert sum(int(row["labels"]) for row in sealed if row["column"] == column) == whole["labels"]
        assert sum(int(row["errors"]) for row in sealed if row["column"] == column) == whole["errors"]
    assert found["promises"][0]["terms_digest"] == whole["terms"]
    newest = [row for row in found["verdicts"] if row["column"] == ""][-1]
    assert (newest["state"], int(newest["labels"])) == ("breached", whole["labels"])
    assert {row["day"] for row in found["verdicts"]} == {"2026-01-20", "2026-03-01"}
    url = f"sqlite:///{config.parent / 'watcher.db'}"
    with Ledger.open(url, write=False) as ledger:
        assert len(found["events"]) == len(ledger.events(limit=10_000))
        assert [row["key"] for row in found["notices"]] == [n.key for n in reversed(ledger.notices(limit=10_000))]
    breach = next(row for row in found["events"] if row["kind"] == "breach" and row["acknowledged_by"])
    assert breach["acknowledged_by"] == "'=1+1"


def test_no_cell_starts_a_formula_or_holds_a_control_character(world: tuple[Path, Tables]) -> None:
    """The hostile value stands in every table that names slices, harmless, at full length; numbers stay numbers."""
    _, found = world
    seen = set()
    for name, rows in found.items():
        for row in rows:
            for key, cell in row.items():
                assert cell.isprintable(), (name, key, cell)
                if cell[:1] in "=+-@" and cell:
                    float(cell)
                if cell.startswith("'="):
                    seen.add(name)
    value = next(row["value"] for row in found["counts"] if row["value"].startswith("'=cmd"))
    # The CSV reader gives line ends inside quotes as plain newlines.
    assert value == "'" + HOSTILE.replace("\x1b", "\\x1b").replace("\r\n", "\\x0a")
    assert {"counts", "verdicts", "events"} <= seen


def test_an_old_file_is_replaced_whole(world: tuple[Path, Tables], tmp_path: Path) -> None:
    """A second export over the first leaves the new rows and no leftovers; the same ledger gives the same bytes."""
    config, _ = world
    (tmp_path / "counts.csv").write_text("old", encoding="utf-8")
    (tmp_path / "mine.csv").write_text("mine", encoding="utf-8")
    assert run("export", config, "--out", tmp_path).exit_code == 0
    first = {path.name: path.read_bytes() for path in tmp_path.iterdir()}
    assert "rows" in run("export", config, "--out", tmp_path).output

    assert {path.name: path.read_bytes() for path in tmp_path.iterdir()} == first
    assert first["mine.csv"] == b"mine"
    assert set(first) == {"mine.csv", *(f"{name}.csv" for name in COLUMNS)}


def test_a_folder_that_cannot_be_written_is_said(world: tuple[Path, Tables], tmp_path: Path) -> None:
    """A file in the way: exit 2 or 1 with its name, no trace."""
    config, _ = world
    taken = tmp_path / "taken"
    taken.write_text("x", encoding="utf-8")
    result = run("export", config, "--out", taken / "deeper")

    assert result.exit_code == 1
    assert "cannot be written" in result.stderr


def test_an_empty_ledger_gives_headers_alone(tmp_path: Path) -> None:
    """Every file is there, with its columns and no row."""
    config = folder(tmp_path)
    assert run("token", config, "make", "x", "--role", "read").exit_code == 0
    assert run("export", config, "--out", tmp_path / "out").exit_code == 0

    for name, columns in COLUMNS.items():
        assert (tmp_path / "out" / f"{name}.csv").read_text(encoding="utf-8").strip() == ",".join(columns)
