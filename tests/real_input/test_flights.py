"""A year of real flights through the command line, week by week, against the brute force: one answer, three sources."""

from __future__ import annotations

import functools
import json
import math
import uuid
from dataclasses import dataclass
from datetime import datetime
from fractions import Fraction

import psycopg
import pytest
from click.testing import CliRunner
from real_input import flights, oracle
from real_input.files import (
    ORIGINS,
    SLICED,
    TOLERANCES,
    configuration,
    lines,
    text,
    write_csv,
    write_postgresql,
    write_sqlite,
)

from watcher.cli import main

RISK = 0.001
LAST_WEEK = 42
"""The look after this many weeks seals everything."""
PLANNED = oracle.planned_restarts(364 * oracle.DAY)
WARN_EVERY = 1095
MICRO = 2e-6
"""Nats by which recorded totals may differ: both are rounded down to a millionth."""


@dataclass(frozen=True)
class Run:
    """One configuration, looked at every so many weeks."""

    source: str
    names: tuple[str, ...] = TOLERANCES
    every: int = 1
    growing: bool = False
    """Files that grow before each look, in place of all rows from the start with `--at` hiding those to come."""

    @property
    def looks(self) -> list[int]:
        """The times of the looks, all at midnight UTC."""
        weeks = range(self.every, LAST_WEEK + 1, self.every)
        return [flights.RELEASED + 7 * week * oracle.DAY for week in weeks]


RUNS = {
    "csv": Run("csv", growing=True),
    "sqlite": Run("sqlite", every=21),
    "postgresql": Run("postgresql", every=21),
    "slices": Run("csv", names=(SLICED,), every=14),
    "csv, all rows": Run("csv"),
    "sqlite, weekly": Run("sqlite"),
    "postgresql, weekly": Run("postgresql"),
}
POSTGRESQL = pytest.mark.peer("postgresql")
EACH = [
    "csv",
    "sqlite",
    pytest.param("postgresql", marks=POSTGRESQL),
    "slices",
    pytest.param("csv, all rows", marks=pytest.mark.long),
    pytest.param("sqlite, weekly", marks=pytest.mark.long),
    pytest.param("postgresql, weekly", marks=[pytest.mark.long, POSTGRESQL]),
]


@dataclass(frozen=True)
class Cell:
    """The whole of a promise or one slice value, as the rows alone tell it."""

    counts: oracle.Daily
    predictions: list[int]
    risk: float
    tolerance: float
    breach: oracle.Breach | None
    warnings: list[bool]


@pytest.fixture(scope="module")
def written():
    """The rows and the origin of each."""
    later = flights.predict(flights.load())
    return flights.rows(later), later["origin"].tolist()


@pytest.fixture(scope="module")
def cells(written):
    """What brute force says of every cell of every promise, by promise name and origin (None: the whole)."""
    rows, origins = written
    parts = {None: rows} | {o: [row for row, origin in zip(rows, origins, strict=True) if origin == o] for o in ORIGINS}
    counted = {o: counted_daily(own) for o, own in parts.items()}
    plain = {(name, None): judged(*counted[None], name, Fraction(1)) for name in TOLERANCES}
    sliced = {(SLICED, o): judged(*counted[o], SLICED, part_of(o)) for o in parts}
    return plain | sliced


def part_of(origin):
    """Half of the risk for the whole, 0.4 in equal parts for the declared values."""
    return Fraction(1, 2) if origin is None else Fraction(2, 5) / len(ORIGINS)


def counted_daily(rows):
    """Sealed counts, and predictions, of each day."""
    predictions = [0] * flights.DAYS
    for row in rows:
        predictions[(row.time - flights.RELEASED) // oracle.DAY] += 1
    return oracle.daily(rows, released=flights.RELEASED, lag=oracle.DAY, days=flights.DAYS), predictions


def judged(counts, predictions, name, part):
    """Breach and warnings of one cell."""
    tolerance, risk = float(name.partition("-")[0]), RISK * float(part)
    breach = oracle.breach(counts, tolerance=tolerance, risk=risk, planned=PLANNED)
    warnings = oracle.warnings(counts, tolerance=tolerance, every=WARN_EVERY)
    return Cell(counts, predictions, risk, tolerance, breach, warnings)


def look(folder, at):
    """One look of the command line; its exit code and JSON."""
    done = CliRunner().invoke(main, ["look", str(folder / "watcher.toml"), "--at", text(at), "--json"])
    assert done.exit_code in (0, 3), done.output
    return done.exit_code, json.loads(done.stdout)


def database_of(server):
    """The url of a new, empty database."""
    name = "t" + uuid.uuid4().hex
    with psycopg.connect(f"{server.replace('+psycopg', '')}/postgres", autocommit=True) as connection:
        connection.execute(f"CREATE DATABASE {name}")
    return f"{server}/{name}"


@pytest.fixture(scope="module")
def told(written, tmp_path_factory, request):
    """Every answer of a run, as (time, exit code, JSON); each run is made once, when it is first asked for."""
    rows, origins = written
    found = lines(rows, origins)

    def place(folder, kind):
        if kind == "csv":
            return write_csv(folder / "flights.csv", found)
        if kind == "sqlite":
            return write_sqlite(folder / "flights.db", found)
        return write_postgresql(database_of(request.getfixturevalue("postgresql_server")), found)

    def grow(folder, before, at):
        new = [line for row, line in zip(rows, found, strict=True) if before <= row.time < at]
        write_csv(folder / f"flights-{at}.csv", new)

    @functools.cache
    def answers(name):
        run = RUNS[name]
        folder = tmp_path_factory.mktemp("flights")
        source = 'kind = "csv"\npath = "flights-*.csv"\n' if run.growing else place(folder, run.source)
        (folder / "watcher.toml").write_text(configuration(source, run.names), encoding="utf-8")
        result, before = [], flights.RELEASED
        for at in run.looks:
            if run.growing:
                grow(folder, before, at)
            result.append((at, *look(folder, at)))
            before = at
        return result

    return answers


def by_cell(answer):
    """Promise entries of one JSON answer by promise name and origin."""
    found = {}
    for entry in answer["promises"]:
        place = entry["slice"]["value"] if entry["slice"] else None
        found[entry["promise"].removeprefix("late-"), place] = entry
    return found


def moment(value):
    """Epoch seconds of an RFC 3339 time; None stays None."""
    return None if value is None else int(datetime.fromisoformat(value).timestamp())


def day_start(day):
    """Epoch seconds of the midnight at which a day since the release begins."""
    return flights.RELEASED + day * oracle.DAY


def those_of(cells, name):
    """The cells that a run's configuration declares."""
    return {key: cell for key, cell in cells.items() if key[0] in RUNS[name].names}


def sealed_days(at):
    """Days whose end and lag lie at or before a time."""
    return (at - flights.RELEASED) // oracle.DAY - 1


@pytest.mark.parametrize("run", EACH)
def test_counts_and_totals_equal_the_brute_force_at_every_look(told, cells, run):
    """Predictions, labels, errors and the recorded total of every cell are those of the rows alone."""
    for at, _, answer in told(run):
        sealed, entries = sealed_days(at), by_cell(answer)
        assert entries.keys() == those_of(cells, run).keys()
        for key, entry in entries.items():
            cell, where = cells[key], f"{key} at {text(at)}"
            total = oracle.recorded(oracle.total(cell.counts, sealed - 1, cell.tolerance, PLANNED))
            assert entry["predictions"] == sum(cell.predictions[:sealed]), where
            assert entry["labels"] == cell.counts.labels[:sealed].sum(), where
            assert entry["errors"] == cell.counts.errors[:sealed].sum(), where
            assert math.isclose(entry["total"], total, abs_tol=MICRO), where
            assert math.isclose(entry["threshold"], math.log(1 / cell.risk), rel_tol=1e-9), where


@pytest.mark.parametrize("run", EACH)
def test_day_and_window_of_every_breach_equal_the_brute_force(told, cells, run):
    """A breach is told from the first look after its seal on, with the day, the window and the limit of the brute force."""
    seen = set()
    for at, code, answer in told(run):
        entries = by_cell(answer)
        for key, entry in entries.items():
            expected, breach, where = cells[key].breach, entry["breach"], f"{key} at {text(at)}"
            if expected is None or expected.day >= sealed_days(at):
                assert breach is None, where
                continue
            seen.add(key)
            assert moment(breach["at"]) == day_start(expected.day + 1), where
            assert moment(breach["since"]) == day_start(expected.since), where
            assert moment(breach["noticed"]) == next(t for t in RUNS[run].looks if sealed_days(t) > expected.day), where
            assert math.isclose(breach["lower"], expected.lower, rel_tol=1e-6), where
            assert breach["lower"] >= cells[key].tolerance, where
        assert code == (3 if any(entry["breach"] for entry in entries.values()) else 0)
    assert seen == {key for key, cell in those_of(cells, run).items() if cell.breach}


def test_every_breach_would_convince_an_exact_test(cells):
    """The exact binomial tail of each breach's window is below the window's share of the risk; at 0.45 there is none."""
    breaches = {key: cell for key, cell in cells.items() if cell.breach}

    for cell in breaches.values():
        tail = oracle.log_tail(cell.breach.errors, cell.breach.labels, cell.tolerance)
        assert tail < math.log(cell.risk * cell.breach.share)
    assert {name for name, _ in breaches} == {"0.12", "0.16", "0.22", SLICED}


@pytest.mark.parametrize("run", EACH)
def test_states_equal_the_brute_force(told, cells, run):
    """Supported is what has no breach, no warning, and a window of a week or more whose upper limit is low enough."""
    for at, _, answer in told(run):
        day = sealed_days(at) - 1
        for key, entry in by_cell(answer).items():
            cell, where = cells[key], f"{key} at {text(at)}"
            since = oracle.support(
                cell.counts, day, tolerance=cell.tolerance, risk=cell.risk, planned=PLANNED, at_least=7
            )
            breached = cell.breach is not None and cell.breach.day <= day
            supported = since is not None and not cell.warnings[day]
            assert entry["state"] == ("breached" if breached else "supported" if supported else "undecided"), where
            assert ("warning" in entry["flags"]) == cell.warnings[day], where
            if supported and not breached:
                upper = oracle.upper_limit(cell.counts, day, since, risk=cell.risk, planned=PLANNED)
                assert moment(entry["support"]["since"]) == day_start(since), where
                assert math.isclose(entry["support"]["upper"], upper, rel_tol=1e-6), where


def test_the_year_sees_every_state(told):
    """The weekly looks meet all three states, so that none of the comparisons above is empty."""
    assert {entry["state"] for _, _, answer in told("csv") for entry in answer["promises"]} == {
        "breached",
        "supported",
        "undecided",
    }


@pytest.mark.parametrize("run", ["sqlite", pytest.param("postgresql", marks=POSTGRESQL)])
def test_sources_agree_to_the_last_digit(told, run):
    """SQLite, PostgreSQL and CSV files that grew week by week tell the same to the last digit, but for when they looked."""
    files = {at: answer["promises"] for at, _, answer in told("csv")}

    for at, _, answer in told(run):
        assert without_look(answer["promises"]) == without_look(files[at])


def without_look(promises):
    """The promise entries as JSON text, without the moment at which a breach was noticed."""
    own = json.loads(json.dumps(promises))
    for entry in own:
        if entry["breach"]:
            del entry["breach"]["noticed"]
    return json.dumps(own, sort_keys=True)


def test_at_a_tolerance_far_above_nothing_breaches(written, tmp_path):
    """A promise at 0.45 alone ends the year supported, without a breach and with exit code 0."""
    source = write_csv(tmp_path / "flights.csv", lines(*written))
    (tmp_path / "watcher.toml").write_text(configuration(source, ["0.45"]), encoding="utf-8")

    code, answer = look(tmp_path, RUNS["csv"].looks[-1])
    assert code == 0
    assert [entry["state"] for entry in answer["promises"]] == ["supported"]
