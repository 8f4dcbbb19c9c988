"""Every integer of the statement against a plain Python count, on every engine."""

from __future__ import annotations

from pathlib import Path

import pytest
from hypothesis import HealthCheck, Phase, given, settings
from sources import oracle, stores
from sources.rows import COLUMNS, DESIGNS, TEXT_TIMES, TIMES, Row, question, questions, random_rows, some_rows
from sqlalchemy.exc import SQLAlchemyError

from watcher.records import REASONS, Question
from watcher.sources.memory import MemorySource
from watcher.sources.statement import Statement

SETTINGS = settings(
    deadline=None,
    max_examples=20,
    phases=[Phase.explicit, Phase.generate, Phase.shrink],
    derandomize=True,
    suppress_health_check=[HealthCheck.function_scoped_fixture, HealthCheck.too_slow],
)


def accounted(tally: object, rows: list[Row]) -> None:
    found = oracle.told(tally)  # type: ignore[arg-type]
    usable = sum(sums[0] for (column, *_), sums in found["cells"].items() if not column)

    assert usable + found["duplicates"] + found["outside"] + sum(found["rejected"].values()) == len(rows)


@SETTINGS
@given(rows=some_rows(TEXT_TIMES), q=questions())
def test_csv(tmp_path: Path, rows: list[Row], q: Question) -> None:
    """DuckDB counts a CSV file as the contract says, column for column and reason for reason."""
    source = stores.csv_source(stores.write_csv(tmp_path / "rows.csv", rows))
    (tally,) = source.tally([q])

    assert oracle.count(rows, q) == oracle.told(tally)
    accounted(tally, rows)
    assert tally.lines == len(rows)


@SETTINGS
@given(rows=some_rows(TEXT_TIMES), q=questions())
def test_sqlite(tmp_path: Path, rows: list[Row], q: Question) -> None:
    """SQLite counts a table as the contract says."""
    (tally,) = stores.sqlite_source(tmp_path / "rows.db", rows).tally([q])

    assert oracle.count(rows, q) == oracle.told(tally)
    accounted(tally, rows)


@SETTINGS
@given(rows=some_rows(TIMES), q=questions(typed=True))
@pytest.mark.peer("postgresql")
def test_postgresql(postgresql: str, rows: list[Row], q: Question) -> None:
    """PostgreSQL counts a table as the contract says; what its typed columns cannot hold is left out."""
    (tally,) = stores.postgresql_source(postgresql, rows).tally([q])

    assert oracle.count(rows, q) == oracle.told(tally)
    accounted(tally, rows)


@pytest.mark.parametrize("design", sorted(DESIGNS))
@pytest.mark.parametrize("labelled_at", [False, True])
def test_many_rows_agree_on_all_engines(tmp_path: Path, design: str, labelled_at: bool) -> None:
    """1,500 rows at once: the same integers from DuckDB, SQLite and memory as from the plain count."""
    rows = random_rows(11, 1500, TEXT_TIMES)
    q = question(
        design,
        labelled_at=labelled_at,
        slices=("depot", "carrier"),
        where=True,
        zone="Europe/Berlin",
        source_zone="Europe/Berlin",
    )
    expected = oracle.count(rows, q)

    for source in (
        stores.csv_source(stores.write_csv(tmp_path / "rows.csv", rows)),
        stores.sqlite_source(tmp_path / "rows.db", rows),
        MemorySource("memory", COLUMNS, rows),
    ):
        assert expected == oracle.told(source.tally([q])[0])


EVIDENT = {
    "no-id": "label",
    "bad-time": "label",
    "future-time": "label",
    "conflicting-duplicate": "label",
    "unknown-label": "classes",
    "bad-weight": "weight",
    "no-cluster": "cluster",
    "cluster-too-long": "cluster",
    "cluster-too-large": "cluster",
    "bad-loss": "loss",
}


@pytest.mark.parametrize("reason", REASONS)
def test_every_reason_is_guarded(monkeypatch: pytest.MonkeyPatch, reason: str) -> None:
    """Taking one reason out of the statement makes the comparison with the plain count fail."""
    rows = random_rows(5, 2000, TEXT_TIMES)
    narrow = {"n_max": 1} if reason == "cluster-too-large" else {}
    q = question(EVIDENT[reason], revised=reason != "conflicting-duplicate", **narrow)
    source = MemorySource("memory", COLUMNS, rows)
    assert oracle.count(rows, q)["rejected"][reason] > 0
    assert oracle.count(rows, q) == oracle.told(source.tally([q])[0])
    original = Statement._reason
    monkeypatch.setattr(
        Statement, "_reason", lambda self, name, condition: [] if name == reason else original(self, name, condition)
    )

    try:
        found = oracle.told(source.tally([q])[0])
    except (KeyError, SQLAlchemyError):  # a row without a place in time has no bucket, a loss of NaN no integer
        return
    assert oracle.count(rows, q) != found
