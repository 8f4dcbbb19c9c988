"""The board's cost grows with what is on a page, not with the history behind it.

`pytest -s -o addopts= --import-mode=importlib tests/benchmarks/test_board.py` prints the figures; processor time, best of three.
"""

from __future__ import annotations

import json
import time
from collections.abc import Callable
from dataclasses import replace
from datetime import UTC, datetime
from fractions import Fraction
from pathlib import Path

import pytest
from sqlalchemy import insert
from web.world import Client, House, demo_promise, house

from watcher.ledger.sheet import part_text
from watcher.ledger.standing import standing_body
from watcher.ledger.store import Ledger
from watcher.ledger.tables import BUCKET, CELL, LOOK, TERM, VERDICT
from watcher.ledger.terms import canonical_terms, terms_digest
from watcher.records import INTEGERS, Interval, Recent, Standing, Terms, ToDecide
from watcher.web.app import create_app
from watcher.web.places import promise_path

DAY = 86_400


def standing(terms: Terms, day: int, part: Fraction) -> Standing:
    """An invented standing of the usual size."""
    moment = datetime.fromtimestamp(terms.released + (day + 1) * DAY, UTC)
    return Standing(
        promise=terms.promise, version=terms.version, column="", value="", state="undecided", flags=(), tolerance=0.03, risk=0.001,
        part=float(part), terms="", predictions=340 * day, labels=300 * day, errors=6.0 * day, provisional_labels=90,
        provisional_errors=2.0, provisional_predictions=300, late_labels=0, estimate=0.02, life=Interval(0.015, 0.027),
        recent=Recent(moment, 8400, 160.0 + day % 7, 0.014, 0.028), support=None, total=-0.7, threshold=7.6, breach=None,
        to_decide=ToDecide(4000, 9000), newest_label=moment, counted_until=moment,
        diagnostics={"labelled_share": 0.88, "tipping_point": 0.09, "tipping_point_upper": 0.05, "over_dispersion": 1.02},
    )  # fmt: skip


def fill(path: Path, promises: int, days: int, slices: int = 4) -> None:
    """A ledger of so many promises with a verdict a day and cell; written row by row, because 500 years of looks take long."""
    base, cells = demo_promise().terms, ("", *(f"value {i}" for i in range(slices)))
    part = Fraction(1, 10)
    bodies = [
        json.dumps(standing_body(standing(base, day, part)), sort_keys=True, separators=(",", ":"))
        for day in range(days)
    ]
    with Ledger.open(f"sqlite:///{path}") as ledger, ledger.writing() as connection:
        look = {
            "number": 1, "source": base.source, "at": base.released + days * DAY, "kind": "pull", "method": 1, "terms_digest": "",
            "sheet": b"", "packed_digest": "", "sheet_digest": "", "verdict_digest": "", "previous": "", "digest": "0" * 64,
        }  # fmt: skip
        connection.execute(insert(LOOK), [look])
        first = base.released // DAY
        for i in range(promises):
            terms = replace(base, promise=f"promise-{i:03}")
            term = {
                "id": i, "promise": terms.promise, "version": "1", "source": terms.source, "terms": canonical_terms(terms),
                "digest": terms_digest(terms), "first_look": 1, "closed_by": None, "sealed_until": terms.released + days * DAY,
            }  # fmt: skip
            connection.execute(insert(TERM), [term])
            for j, value in enumerate(cells):
                cell = i * len(cells) + j
                column = "depot" if value else ""
                connection.execute(
                    insert(CELL),
                    [
                        {
                            "id": cell,
                            "term": i,
                            "column": column,
                            "value": value,
                            "part": part_text(part),
                            "discovered": 0,
                        }
                    ],
                )
                connection.execute(
                    insert(VERDICT),
                    [
                        {"cell": cell, "day": first + day, "look": 1, "body": bodies[day], "memory": "{}", "mark": ""}
                        for day in range(days)
                    ],
                )
            row = dict.fromkeys(INTEGERS, 1) | {"level": "", "newest": None, "sealed_by": 1, "cell": i * len(cells)}
            connection.execute(insert(BUCKET), [{**row, "start": terms.released + day * DAY} for day in range(days)])


def best(work: Callable[[], object]) -> float:
    """Seconds of processor time, best of three."""
    times = []
    for _ in range(3):
        began = time.process_time()
        work()
        times.append(time.process_time() - began)
    return min(times)


def measured(served: House) -> dict[str, float]:
    """Seconds of: an app alone, the overview by a new app, the overview kept, one promise, one page of the API."""
    page = promise_path("promise-007", "1")
    kept = served.client()
    assert kept.get("/").status_code == 200

    def read(path: str, client: Client) -> None:
        assert client.get(path).status_code == 200

    return {
        "app": best(lambda: create_app(served.site)),
        "overview": best(lambda: read("/", served.client())),
        "kept": best(lambda: read("/", kept)),
        "promise": best(lambda: read(page, kept)),
        "history": best(lambda: read(f"/api/v1{page}/history?limit=50", kept)),
    }


@pytest.fixture(scope="module")
def figures(tmp_path_factory: pytest.TempPathFactory) -> dict[tuple[int, int], dict[str, float]]:
    """(promises, days) -> seconds: the overview read afresh, the overview kept, one promise, one page of the API."""
    found = {}
    for promises, days in ((500, 60), (500, 600), (50, 600)):
        path = tmp_path_factory.mktemp("board") / "w.db"
        fill(path, promises, days)
        served = house(path)
        found[promises, days] = measured(served)
        served.ledger.close()
    for key, each in found.items():
        print(key, {name: round(value, 3) for name, value in each.items()})
    return found


def fresh(each: dict[str, float]) -> float:
    """Seconds of an overview that nothing was kept of."""
    return each["overview"] - each["app"]


def test_ten_times_the_history_costs_no_more(figures):
    """Overview and a page of the API cost the same with 600 days behind them as with 60 (within 1.5x); the promise page with
    its charts of up to 400 days at most 8 times as much, whatever lies before these."""
    short, long = figures[500, 60], figures[500, 600]

    assert fresh(long) < 1.5 * fresh(short) + 0.05
    assert long["kept"] < 1.5 * short["kept"] + 0.05
    assert long["history"] < 1.5 * short["history"] + 0.05
    assert long["promise"] < 8 * short["promise"]


def test_the_overview_grows_with_its_rows(figures):
    """500 promises cost at most 20 times as much as 50, and the page of 500 is there within a second of one core."""
    assert fresh(figures[500, 600]) < 20 * fresh(figures[50, 600])
    assert figures[500, 600]["kept"] < 1.0
    assert fresh(figures[500, 600]) < 4.0
