"""How large a ledger grows and how fast it is: `python tests/ledger/measure.py` with the tests folder on PYTHONPATH.

1,000 cells, 22 open daily buckets, hourly looks; every cell is seen PER_DAY times a day and each sample gets its label one
to nine days later. Standings are of realistic size and cost nothing to make: the ledger alone is measured. Seconds are processor time.
"""

from __future__ import annotations

import random
import sys
import tempfile
import time
from dataclasses import replace
from fractions import Fraction
from pathlib import Path

from ledger.world import DAY, METHOD, RELEASED, make_terms, moment
from sqlalchemy import func, select

from watcher.ledger import Ledger
from watcher.ledger.audit import audit
from watcher.ledger.standing import instant
from watcher.ledger.tables import LOOK, VERDICT
from watcher.ledger.terms import terms_digest
from watcher.records import (
    Cell,
    CellCounts,
    Counts,
    Entry,
    Interval,
    Recent,
    Remarks,
    Slice,
    Standing,
    Support,
    TermDraft,
    Terms,
    ToDecide,
)

CELLS = 1000
OPEN = 22
HOURS = 24 * 4


def terms() -> Terms:
    names = tuple(f"depot {i:03d}" for i in range(1, CELLS))
    return make_terms(slices=(Slice("depot", names, ("1",) * len(names)),), label_lag=(OPEN - 1) * DAY)


def cells_of(t: Terms) -> list[Cell]:
    values = t.slices[0].values
    return [Cell("", "", Fraction(1, 2), 0), *(Cell("depot", v, Fraction(2, 5 * len(values)), 0) for v in values)]


class Stream:
    """Samples and labels as they come, hour by hour."""

    def __init__(self, per_day: float, seed: int = 1) -> None:
        self.random = random.Random(seed)
        self.per_hour = per_day / 24
        self.rows: dict[tuple[int, int], list[int]] = {}
        self.due: dict[int, list[tuple[int, int, int]]] = {}

    def hour(self, at: int) -> set[tuple[int, int]]:
        """The (cell, bucket) that changed in the hour that ends at `at`; cell 0 is the whole."""
        touched = set()
        start = (at - 1) // DAY * DAY
        for cell in range(1, CELLS):
            for _ in range(self.poisson()):
                taken = at - self.random.randrange(1, 3600)
                self.add((cell, start), 0, 1, None, touched)
                lag = self.random.randrange(DAY, 9 * DAY)
                self.due.setdefault((taken + lag) // 3600, []).append((cell, start, taken))
        for cell, bucket, taken in self.due.pop(at // 3600, []):
            self.add((cell, bucket), 1, 0, taken, touched)
        return touched

    def poisson(self) -> int:
        n, left = 0, self.random.expovariate(1)
        while left < self.per_hour:
            n, left = n + 1, left + self.random.expovariate(1)
        return n

    def add(
        self, key: tuple[int, int], label: int, prediction: int, taken: int | None, touched: set[tuple[int, int]]
    ) -> None:
        wrong = int(label and self.random.random() < 0.02)
        for place in (key, (0, key[1])):
            row = self.rows.setdefault(place, [0, 0, 0, 0])
            row[0] += prediction
            row[1] += label
            row[2] += wrong
            row[3] = max(row[3], taken or 0)
            touched.add(place)


def counted(cells: list[Cell], key: tuple[int, int], row: list[int]) -> CellCounts:
    cell = cells[key[0]]
    return CellCounts(
        cell.column, cell.value, key[1], "", Counts(row[0], row[1], row[2], row[1] // 5, 0, 0, newest=row[3] or None)
    )


def standing(t: Terms, digest: str, cell: Cell, at: int, rng: random.Random) -> Standing:
    labels = rng.randrange(1000, 20000)
    x = rng.random() / 50
    now = instant(at)
    return Standing(
        *(
            t.promise,
            t.version,
            cell.column,
            cell.value,
            "undecided",
            (),
            t.tolerance,
            t.risk,
            float(cell.part),
            digest,
        ),
        *(labels + 100, labels, float(int(labels * x)), 900, 20.0, 1500, 0, x),
        life=Interval(x / 2, x * 2),
        recent=Recent(now, labels // 4, float(int(labels * x / 4)), x / 3, x * 3),
        support=Support(now, now, x + 0.01),
        total=rng.random() * 5,
        threshold=9.21,
        breach=None,
        to_decide=ToDecide(4473, 7640),
        newest_label=moment(at),
        counted_until=moment(at // DAY * DAY),
        diagnostics={"labelled_share": x * 40, "tipping_point": 0.5 + x, "tipping_point_upper": 0.4 + x},
    )


def entry(
    t: Terms, digest: str, cells: list[Cell], counts: list[CellCounts], at: int, expected: int, sealed: tuple[int, ...]
) -> Entry:
    rng = random.Random(at)
    draft = TermDraft(
        promise=t.promise,
        version=t.version,
        new_terms=None if expected else t,
        new_cells=() if expected else tuple(cells),
        counts=tuple(counts),
        gone=(),
        sealed=sealed,
        sealed_until=max(RELEASED, at // DAY * DAY - (OPEN - 1) * DAY),
        remarks=Remarks(),
        standings=tuple(standing(t, digest, c, at, rng) for c in cells),
        memories=tuple({"breached": None, "warned": None, "noticed": None} for _ in cells),
    )
    return Entry("desk", at, "pull", METHOD, expected, (draft,), ())


def grow(per_day: float) -> None:
    t = terms()
    digest, cells, stream = terms_digest(t), cells_of(t), Stream(per_day)
    at = RELEASED
    while at < RELEASED + OPEN * DAY:
        at += 3600
        stream.hour(at)
    with tempfile.TemporaryDirectory() as folder, Ledger.open(f"sqlite:///{Path(folder) / 'm.db'}") as ledger:
        first = [counted(cells, k, r) for k, r in sorted(stream.rows.items())]
        ledger.commit(entry(t, digest, cells, first, at, 0, ()))
        before = ledger.size_bytes()
        rows, seconds = 0, []
        for hour in range(HOURS):
            at += 3600
            touched = stream.hour(at)
            sealed = (at // DAY * DAY - OPEN * DAY,) if hour % 24 == 0 and hour else ()
            made = entry(
                t, digest, cells, [counted(cells, k, stream.rows[k]) for k in sorted(touched)], at, hour + 1, sealed
            )
            rows += len(touched)
            began = time.process_time()
            ledger.commit(made)
            seconds.append(time.process_time() - began)
        with ledger.reading() as connection:
            packed = connection.execute(
                select(func.sum(func.length(LOOK.c.sheet))).where(LOOK.c.number > 1)
            ).scalar_one()
            bodies = connection.execute(
                select(func.sum(func.length(VERDICT.c.body) + func.length(VERDICT.c.memory)))
            ).scalar_one()
            verdicts = connection.execute(select(func.count()).select_from(VERDICT)).scalar_one()
        began = time.process_time()
        found = audit(ledger)
        took = time.process_time() - began
        assert found.ok, found.findings[:3]
        grown = ledger.size_bytes() - before
    print(
        f"{per_day:g} samples a day and cell: {rows / HOURS:.0f} changed rows a look, sheet {packed / HOURS / 1e3:.1f} kB = "
        f"{packed / HOURS * 24 * 365 / 1e9:.3f} GB a year; verdict row {bodies / verdicts:.0f} B = "
        f"{bodies / verdicts * CELLS * 365 / 1e9:.3f} GB a year; file grew {grown / HOURS * 24 / 1e6:.2f} MB a day; "
        f"commit median {sorted(seconds)[HOURS // 2]:.3f} s; audit without replay {took:.2f} s for {HOURS + 1} looks"
    )


def read_many(buckets: int = 400) -> None:
    t = replace(terms(), label_lag=DAY)
    digest, cells, rng = terms_digest(t), cells_of(t), random.Random(3)
    counts = [
        counted(
            cells, (c, RELEASED + b * DAY), [rng.randrange(50, 90), rng.randrange(40, 50), 1, RELEASED + b * DAY + 9]
        )
        for c in range(CELLS)
        for b in range(buckets)
    ]
    at = RELEASED + buckets * DAY
    sealed = tuple(RELEASED + b * DAY for b in range(buckets - 1))
    with tempfile.TemporaryDirectory() as folder, Ledger.open(f"sqlite:///{Path(folder) / 'm.db'}") as ledger:
        made = entry(t, digest, cells, counts, at, 0, sealed)
        began = time.process_time()
        ledger.commit(made)
        wrote = time.process_time() - began
        read = []
        for ask in (ledger.count_table, ledger.counts):
            best = []
            for _ in range(3):
                began = time.process_time()
                assert len(ask(1)) == CELLS * buckets  # type: ignore[arg-type, operator]
                best.append(time.process_time() - began)
            read.append(min(best))
        began = time.process_time()
        assert len(ledger.memories(1)) == len(ledger.standings()) == CELLS
        rest = time.process_time() - began
        size = ledger.size_bytes()
    print(
        f"{CELLS} cells x {buckets} buckets: first commit {wrote:.2f} s, count_table {read[0]:.2f} s, counts {read[1]:.2f} s, "
        f"memories and standings {rest:.2f} s, file {size / 1e6:.0f} MB"
    )


if __name__ == "__main__":
    read_many()
    for rate in map(float, sys.argv[1:] or ("7", "70")):
        grow(rate)
