"""Every sampling design and measure from the rows of a file to the verdict, against a count and a formula written out by hand."""

from __future__ import annotations

import csv
import math
import random
import re
import time
from collections import defaultdict
from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass, field
from datetime import datetime, timedelta
from pathlib import Path
from typing import Any

import pytest
from look import byhand
from look.byhand import DAY, Item, Windows
from look.rows import RELEASED, text
from scipy.stats import binom

from watcher import assembly, settings
from watcher.checking import check
from watcher.daemon.children import Children
from watcher.daemon.parts import build
from watcher.errors import SettingsError
from watcher.ledger import keys
from watcher.ledger.audit import audit
from watcher.ledger.store import Ledger
from watcher.look import OneSided, Outcome, Routing, WeakEvidence, attempt
from watcher.notices.base import Delivery, LogTarget, Message, RouteSpec
from watcher.notices.booked import Booked
from watcher.notices.message import Writer
from watcher.notices.outbox import send_due
from watcher.records import Standing
from watcher.replay import Replay
from watcher.wording import diagnostic_lines

DAYS, LAG = 24, 3
RISK, TOLERANCE, RESTARTS = 0.01, 0.05, 363
Row = dict[str, str]


@dataclass
class Case:
    """A design: its rows, its configuration, and what the hand makes of the rows."""

    name: str
    columns: str
    promise: str
    rows: list[Row]
    gain: byhand.Gain
    items: Callable[[Iterable[Row]], list[tuple[int, Item]]]
    """Usable rows -> (day, item) in evidence."""
    entered: Callable[[Sequence[Item]], tuple[int, float]]
    """Labels and errors as the standing names them."""
    above: float = TOLERANCE
    below: float = TOLERANCE
    rejected: dict[str, int] = field(default_factory=dict)
    label: bool = True


def _configuration(case: Case, *, evidence: str = "uncertified = true", lag: int = LAG) -> str:
    outcome = 'prediction = "prediction"\nlabel = "label"' if case.label else ""
    return f"""
[ledger]
url = "sqlite:///watcher.db"
[[source]]
name = "desk"
kind = "csv"
path = "rows.csv"
[source.columns]
id = "id"
time = "time"
{outcome}
{case.columns}
[[promise]]
name = "p"
source = "desk"
tolerance = {TOLERANCE}
risk = {RISK}
released = 2026-01-05T00:00:00Z
label_lag = "{lag}d"
slices = {{ site = ["a", "b"] }}
stale_after = "365d"
{evidence}
{case.promise}
"""


def _write(folder: Path, case: Case, rows: Sequence[Row] | None = None, **options: Any) -> Path:
    rows = case.rows if rows is None else rows
    with (folder / "rows.csv").open("w", newline="", encoding="utf-8") as file:
        writer = csv.DictWriter(file, list(rows[0]), lineterminator="\n")
        writer.writeheader()
        writer.writerows(rows)
    path = folder / "watcher.toml"
    path.write_text(_configuration(case, **options), encoding="utf-8")
    return path


def _look(ledger: Ledger, path: Path, day: float, routes: Sequence[Routing] = ()) -> Outcome:
    config = settings.read(path)
    table, now = config.source[0], int((RELEASED + timedelta(days=day)).timestamp())
    source, watched = assembly.source_of(config, table), assembly.watched(config, table.name)
    return attempt(ledger, source, watched, now, time.monotonic, at_given=True, routes=routes)


def _day(row: Row) -> int:
    return (int(row["time"][5:7]) - 1) * 31 + int(row["time"][8:10]) - 5


def _base(draw: random.Random, day: int, n: int, rate: float, *, unlabelled: float = 0.1) -> Row:
    """A row with id, time, site, and a prediction whose label is wrong with chance `rate`; yes in three of ten cases."""
    made = RELEASED + timedelta(days=day, seconds=draw.randrange(DAY))
    truth = "yes" if draw.random() < 0.3 else "no"
    wrong = draw.random() < rate
    prediction = truth if not wrong else ("no" if truth == "yes" else "yes")
    label = "" if draw.random() < unlabelled else truth
    return {"id": f"{day}-{n}", "time": text(made), "site": draw.choice("ab"), "prediction": prediction, "label": label}


def _wrong(row: Row) -> int:
    return int(row["label"] != row["prediction"])


def _plain(rows: Iterable[Row]) -> list[tuple[int, Item]]:
    return [(_day(row), (_wrong(row),)) for row in rows if row["label"]]


def _counted(items: Sequence[Item]) -> tuple[int, float]:
    return len(items), sum(item[-1] for item in items)


def _some(seed: int, rate: float, a_day: int = 40) -> list[Row]:
    draw = random.Random(seed)
    return [_base(draw, day, n, rate) for day in range(DAYS) for n in range(a_day)]


def _weighted(seed: int, rate: float, a_day: int = 40) -> Case:
    """Half of the labels from the hard tenth (weight 0.2), half from the rest (1.8); some weights nobody declared."""
    draw, rows, bad = random.Random(seed), [], 0
    for day in range(DAYS):
        for n in range(a_day):
            hard = draw.random() < 0.5
            row = _base(draw, day, n, 3 * rate if hard else rate) | {"weight": "0.2" if hard else "1.80"}
            if row["label"] and draw.random() < 0.02:
                row["weight"], bad = "0.7", bad + 1
            rows.append(row)

    def items(given: Iterable[Row]) -> list[tuple[int, Item]]:
        kept = (row for row in given if row["label"] and row["weight"] != "0.7")
        return [(_day(row), (float(row["weight"]), _wrong(row))) for row in kept]

    return Case(
        "weights", 'weight = "weight"', 'weight_levels = ["0.2", "1.8"]', rows, byhand.weighted(1.8), items, _counted,
        rejected={"bad-weight": bad},
    )  # fmt: skip


def _clustered(seed: int, rate: float) -> Case:
    """Customers with 1 to 4 rows over up to 30 hours, wholly right or wrong; one customer a day is larger than allowed."""
    draw, rows, large = random.Random(seed), [], 0
    for day in range(DAYS):
        for c in range(16):
            size, wrong = draw.randint(1, 4), draw.random() < rate
            size = 7 if c == 15 else size
            began = RELEASED + timedelta(days=day, seconds=draw.randrange(DAY))
            for n in range(size):
                made = began + timedelta(seconds=0 if n == 0 else draw.randrange(30 * 3600))
                truth = draw.choice(("yes", "no"))
                prediction = truth if not wrong else ("no" if truth == "yes" else "yes")
                label = "" if c < 15 and draw.random() < 0.1 else truth
                rows.append(
                    {"id": f"{day}-{c}-{n}", "time": text(made), "site": draw.choice("ab"), "prediction": prediction,
                     "label": label, "customer": f"{day}-{c}"}
                )  # fmt: skip
            large += size if c == 15 else 0

    def items(given: Iterable[Row]) -> list[tuple[int, Item]]:
        began = {}
        for row in sorted(rows, key=lambda row: row["time"]):
            began.setdefault(row["customer"], _day(row))
        sums: dict[str, list[int]] = defaultdict(lambda: [0, 0])
        for row in given:
            if row["label"] and not row["customer"].endswith("-15"):
                sums[row["customer"]][0] += 1
                sums[row["customer"]][1] += _wrong(row)
        return [(began[customer], (n, k)) for customer, (n, k) in sums.items()]

    def entered(found: Sequence[Item]) -> tuple[int, float]:
        return int(sum(n for n, _ in found)), sum(k for _, k in found)

    return Case(
        "clusters", 'cluster = "customer"', 'n_max = 4\ncluster_span = "2d"', rows, byhand.clustered(4), items, entered,
        rejected={"cluster-too-large": large},
    )  # fmt: skip


def _horvitz(seed: int, rate: float) -> Case:
    """A quarter of the sure predictions and all of the doubtful ones are selected; some labels never come."""
    draw, rows = random.Random(seed), []
    for day in range(DAYS):
        for n in range(60):
            doubtful = draw.random() < 0.2
            row = _base(draw, day, n, 3 * rate if doubtful else rate, unlabelled=0.05)
            chosen = doubtful or draw.random() < 0.25
            rows.append(
                row
                | {
                    "label": row["label"] if chosen else "",
                    "chance": "1" if doubtful else "0.25",
                    "chosen": str(int(chosen)),
                }
            )

    def items(given: Iterable[Row]) -> list[tuple[int, Item]]:
        found = []
        for row in given:
            q = float(row["chance"]) if row["chosen"] == "1" else 0.0
            found.append((_day(row), (q, float(bool(row["label"])), float(bool(row["label"]) and _wrong(row)))))
        return found

    def entered(found: Sequence[Item]) -> tuple[int, float]:
        return int(sum(labelled for _, labelled, _ in found)), sum(error for *_, error in found)

    columns = 'labelling_probability = "chance"\nselected = "chosen"'
    return Case(
        "horvitz", columns, 'labelling_probabilities = ["0.25", "1"]', rows, byhand.horvitz(0.25), items, entered
    )


def _noisy(seed: int, rate: float) -> Case:
    """Tested at eps(1-a-b) + b against, at eps(1-a-b) + a for (section 5)."""
    a, b = 0.01, 0.02
    scale = TOLERANCE * (1 - a - b)
    return Case(
        "noise", "", f"label_noise = [{a}, {b}]", _some(seed, rate), byhand.uniform, _plain, _counted,
        above=scale + b, below=scale + a,
    )  # fmt: skip


def _lossy(seed: int, rate: float) -> Case:
    """Losses in [0, 1] in steps of 1/64, which millionths and floats hold exactly; two a day are no losses."""
    draw, rows, bad = random.Random(seed), [], 0
    for row in _some(seed, 0.0):
        loss = f"{min(64, round(64 * draw.expovariate(1 / rate))) / 64:.6f}" if row["label"] else ""
        if row["id"].endswith(("-7", "-8")) and row["label"]:
            loss, bad = draw.choice(("1.5", "-0.1", "much")), bad + 1
        rows.append({key: row[key] for key in ("id", "time", "site")} | {"loss": loss})

    def items(given: Iterable[Row]) -> list[tuple[int, Item]]:
        kept = [row for row in given if row["loss"] and row["loss"] not in ("1.5", "-0.1", "much")]
        return [(_day(row), (float(row["loss"]),)) for row in kept]

    return Case(
        "loss", 'loss = "loss"', 'measure = "loss"', rows, byhand.uniform, items, _counted, rejected={"bad-loss": bad},
        label=False,
    )  # fmt: skip


def _sided(seed: int, rate: float, measure: str, truth: str) -> Case:
    def items(given: Iterable[Row]) -> list[tuple[int, Item]]:
        return [(_day(row), (_wrong(row),)) for row in given if row["label"] == truth]

    promise = f'measure = "{measure}"\npositive = "yes"'
    return Case(measure, "", promise, _some(seed, rate), byhand.uniform, items, _counted)


CASES = [
    made(seed, rate)
    for seed, (made, quiet, loud) in enumerate(
        [
            (_weighted, 0.004, 0.09),
            (_clustered, 0.004, 0.16),
            (_horvitz, 0.004, 0.12),
            (_noisy, 0.004, 0.2),
            (_lossy, 0.008, 0.11),
            (lambda seed, rate: _sided(seed, rate, "miss", "yes"), 0.001, 0.2),
            (lambda seed, rate: _sided(seed, rate, "false-alarm", "no"), 0.004, 0.12),
        ]
    )
    for rate in (quiet, loud)
]


def _windows(case: Case, site: str) -> Windows:
    days: list[list[Item]] = [[] for _ in range(DAYS)]
    for day, item in case.items(row for row in case.rows if site in ("", row["site"])):
        if day < DAYS:
            days[day].append(item)
    return Windows(days, case.gain, RESTARTS)


@pytest.mark.parametrize(
    "case", CASES, ids=[f"{case.name}-{'loud' if n % 2 else 'quiet'}" for n, case in enumerate(CASES)]
)
def test_rows_become_the_verdict_that_the_hand_computes(tmp_path: Path, case: Case) -> None:
    """Two looks through file, statement and ledger; counts, totals, crossing, limits and support as written out by hand.

    Every check value is computed by `byhand` from method.md sections 1, 2, 4 and 5; audit derives both looks again.
    """
    path = _write(tmp_path, case)
    with Ledger.memory() as ledger, Ledger.memory() as once:
        _look(ledger, path, 13)
        done, only = _look(ledger, path, DAYS + LAG), _look(once, path, DAYS + LAG)
        found = audit(ledger, replay=Replay())

    assert found.findings == ()
    assert found.rederived == found.looks == 2
    assert dict(only.rejected.get("p", {})) == case.rejected
    assert [(s.state, s.total, s.life) for s in only.standings] == [(s.state, s.total, s.life) for s in done.standings]
    for standing, part in zip(done.standings, (0.5, 0.2, 0.2), strict=True):
        _compare(case, standing, RISK * part)


def _compare(case: Case, standing: Standing, risk: float) -> None:
    windows, last, bar = _windows(case, standing.value), DAYS - 1, -math.log(risk)
    everything = [item for day in windows.days for item in day]
    labels, errors = case.entered(everything)
    crossed = windows.crossing(case.above, bar)

    assert (standing.labels, standing.errors) == (labels, pytest.approx(errors, abs=1e-9))
    assert standing.threshold == pytest.approx(bar, abs=1e-9)
    assert standing.total == pytest.approx(windows.total(last, case.above), abs=2e-6)
    assert (standing.breach is None) == (crossed is None)
    if crossed is not None:
        assert standing.breach is not None
        assert standing.breach.at == RELEASED + timedelta(days=crossed + 1)
        seen = _seen(case, standing.breach.lower)
        assert windows.total(crossed, seen) == pytest.approx(bar, abs=1e-5)
    else:
        window = windows.shortest_support(last, case.below, risk, 7)
        expected = None if window is None or "warning" in standing.flags else RELEASED + timedelta(days=window)
        assert (standing.support.since if standing.support else None) == expected
    if standing.life.lower > 0:
        low = windows.evidence(0, last, _seen(case, standing.life.lower), above=True)
        assert low == pytest.approx(-math.log(risk * 0.20), abs=1e-4)


def _seen(case: Case, rate: float) -> float:
    """The rate at which errors are seen, noise included, of a lower limit."""
    return rate * (1 - 0.01 - 0.02) + 0.02 if case.name == "noise" else rate


def test_the_cases_reach_breach_support_and_neither(tmp_path: Path) -> None:
    """By hand: the loud ones cross on the whole, the quiet ones do not, and at least four of these are supported."""
    crossed = [_windows(case, "").crossing(case.above, -math.log(RISK * 0.5)) for case in CASES]
    quiet = [_windows(case, "").shortest_support(DAYS - 1, case.below, RISK * 0.5, 7) for case in CASES[::2]]

    assert all(day is not None for day in crossed[1::2])
    assert all(day is None for day in crossed[::2])
    assert sum(window is not None for window in quiet) >= 4


# --- flags that rest on the samples


def test_wrong_weights_are_flagged_and_right_ones_are_not(tmp_path: Path) -> None:
    """Weights declared a quarter too large: mean 1.25 in place of 1; the right ones of the same rows stay without a flag."""
    right = _weighted(3, 0.01, 80)
    off = _weighted(3, 0.01, 80)
    off.rows = [row | {"weight": {"0.2": "0.25", "1.80": "2.25", "0.7": "0.7"}[row["weight"]]} for row in off.rows]
    off.promise = 'weight_levels = ["0.25", "2.25"]'
    flags = {}
    for name, case in (("right", right), ("off", off)):
        folder = tmp_path / name
        folder.mkdir()
        with Ledger.memory() as ledger:
            whole = _look(ledger, _write(folder, case), DAYS + LAG).standings[0]
            flags[name] = whole.flags
            mean = sum(
                float(row["weight"]) for row in case.rows if row["label"] and row["weight"] != "0.7" and _day(row) < 21
            )
            n = sum(1 for row in case.rows if row["label"] and row["weight"] != "0.7" and _day(row) < 21)
            assert whole.diagnostics["mean_weight"] == pytest.approx(mean / n, abs=1e-9)

    assert "weights-off" in flags["off"]
    assert "weights-off" not in flags["right"]


def test_bunched_errors_are_flagged_and_independent_ones_are_not(tmp_path: Path) -> None:
    """Days that are good (1%) or bad (25%) against one rate for all; the flag has no influence on the state."""
    flags = {}
    for name, rates in (("bunched", (0.01, 0.25)), ("plain", (0.05, 0.05))):
        draw = random.Random(8)
        rows = [_base(draw, day, n, rates[day % 2]) for day in range(DAYS) for n in range(60)]
        case = Case(name, "", "", rows, byhand.uniform, _plain, _counted)
        folder = tmp_path / name
        folder.mkdir()
        with Ledger.memory() as ledger:
            flags[name] = _look(ledger, _write(folder, case), DAYS + LAG).standings[0].flags

    assert "clustered" in flags["bunched"]
    assert "clustered" not in flags["plain"]


# --- arriving labels through files


def _arriving(today: int, *, mended: bool) -> list[Row]:
    """What the file holds at the end of a day: 60 rows a day, half of the labels a day late; a fifth are slips of the labeller."""
    draw, rows = random.Random(21), []
    for day in range(min(today, 9)):
        for n in range(60):
            row = _base(draw, day, n, 0.02, unlabelled=0.0)
            slipped, early = draw.random() < 0.2, draw.random() < 0.5
            if today - day < 2 and not early:
                rows.append({**row, "revision": "0", "label": ""})
                continue
            other = "no" if row["label"] == "yes" else "yes"
            rows.append({**row, "revision": "1", "label": other if slipped else row["label"]})
            if slipped and mended:
                rows.append({**row, "revision": "2"})
    return rows


def _newest(rows: Iterable[Row]) -> list[Row]:
    """The highest revision of each id."""
    return list({row["id"]: row for row in sorted(rows, key=lambda row: row["revision"])}.values())


class Down:
    """A receiver of retraining notices that is down."""

    def deliver(self, message: Message) -> Delivery:
        """Nobody answers."""
        return Delivery("temporary", "nobody there", unreachable=True)


def _send(ledger: Ledger, at: datetime) -> None:
    books, route = Booked(ledger, keys.message_key), RouteSpec("retraining", LogTarget(), retrain=True)
    send_due(books, [route], {"retraining": Down()}, Writer(books, lambda *_: ""), clock=lambda: at)


def test_a_corrected_breach_is_withdrawn_and_its_waiting_notice_cancelled(tmp_path: Path) -> None:
    """Slips raise a breach; the corrected file withdraws it: events, states, the notice that had not left yet, audit.

    Counts and totals after each look are those of the newest revisions in the file, by hand.
    """
    case = Case("arriving", 'revision = "revision"', 'count = "arriving"', [], byhand.uniform, _plain, _counted)
    route, kinds = Routing("retraining", frozenset({"breach"}), retrain=True), []
    with Ledger.memory() as ledger, ledger.writer():
        for today in range(1, 9):
            case.rows = _newest(rows := _arriving(today, mended=today >= 7))
            done = _look(ledger, _write(tmp_path, case, rows, lag=10), today, [route])
            kinds += [event.kind for event in done.events if event.value == "" and event.kind.startswith("breach")]
            _send(ledger, done.at)
            states = [notice.state for notice in ledger.notices(route="retraining")]
            assert states == ([] if not kinds else ["waiting"] if kinds == ["breach"] else ["cancelled"])
            for standing, part in zip(done.standings, (0.5, 0.2, 0.2), strict=True):
                windows, items = (
                    _windows(case, standing.value),
                    case.items(r for r in case.rows if standing.value in ("", r["site"])),
                )
                assert (standing.labels, standing.errors) == _counted([item for _, item in items])
                assert standing.threshold == pytest.approx(-math.log(RISK * part), abs=1e-9)
                assert standing.total == pytest.approx(windows.total(today - 1, TOLERANCE), abs=2e-6)
        found = audit(ledger, replay=Replay())

    assert kinds == ["breach", "breach-withdrawn"]
    assert [standing.breach for standing in done.standings] == [None] * 3
    assert found.findings == ()
    assert found.rederived == found.looks == 8


def test_early_and_late_labels_stand_beside_the_verdict(tmp_path: Path) -> None:
    """After sealing, the error rates of labels seen by label_lag/2 and later, counted by hand; a sentence tells both."""
    case = Case("arriving", 'revision = "revision"', 'count = "arriving"', [], byhand.uniform, _plain, _counted)
    early: dict[str, str] = {}
    with Ledger.memory() as ledger:
        for today in range(1, 13):
            rows = _arriving(min(today, 9), mended=False) if today < 11 else _arriving(11, mended=False)
            case.rows = _newest(rows)
            done = _look(ledger, _write(tmp_path, case, rows, lag=2), today)
            for row in case.rows:
                if row["label"] and today <= _day(row) + 2:
                    early.setdefault(row["id"], row["label"])
        config = settings.read(tmp_path / "watcher.toml")
        terms = assembly.watched(config, "desk")[0].terms
        assert audit(ledger, replay=Replay()).findings == ()
    ids = {row["id"]: row for row in case.rows}
    groups = {True: [ids[name] for name in early], False: [row for row in case.rows if row["id"] not in early]}
    lag = done.standings[0].diagnostics["error_by_lag"]

    assert (lag["early_labels"], lag["late_labels"]) == (len(groups[True]), len(groups[False]))
    assert lag["early"] == pytest.approx(sum(map(_wrong, groups[True])) / len(groups[True]), abs=1e-9)
    assert lag["late"] == pytest.approx(sum(map(_wrong, groups[False])) / len(groups[False]), abs=1e-9)
    lines = diagnostic_lines(done.standings[0], terms)
    assert len(lines) <= 3
    assert "labels that came early" in " ".join(lines)
    assert "error_by_lag" not in done.standings[1].diagnostics


# --- what is refused


@pytest.mark.parametrize(("measure", "never"), [("miss", "no"), ("false-alarm", "yes")])
def test_a_measure_whose_errors_are_never_labelled_is_refused(tmp_path: Path, measure: str, never: str) -> None:
    """Predicted negatives (for false-alarm positives) without a single label: refused at the look and by `check`, nothing written."""
    case = _sided(7, 0.05, measure, "yes")
    rows = [row | {"label": "" if row["prediction"] == never else row["label"]} for row in case.rows]
    path = _write(tmp_path, case, rows)
    with Ledger.memory() as ledger:
        with pytest.raises(OneSided, match=f"'{measure}' is refused"):
            _look(ledger, path, DAYS + LAG)
        assert ledger.head().look == 0
    problems = [
        f.text
        for f in check(settings.read(path), int((RELEASED + timedelta(days=40)).timestamp()))
        if f.level == "problem"
    ]

    assert any("could never be seen" in text for text in problems)


def test_a_measure_is_not_refused_before_its_labels_could_have_come(tmp_path: Path) -> None:
    """The same rows while no bucket is sealed, and with four labels of the other side: labels may still come, or did."""
    case = _sided(7, 0.05, "miss", "yes")
    rows = [row | {"label": "" if row["prediction"] == "no" else row["label"]} for row in case.rows]
    with Ledger.memory() as ledger:
        assert _look(ledger, _write(tmp_path, case, rows), 3.5).written
    other = [n for n, row in enumerate(case.rows) if row["prediction"] == "no" and row["label"]][:4]
    for n in other:
        rows[n] = case.rows[n]
    with Ledger.memory() as ledger:
        assert _look(ledger, _write(tmp_path, case, rows), DAYS + LAG).written


def test_a_few_labels_of_one_side_are_no_reason_to_refuse(tmp_path: Path) -> None:
    """All labels are of rows predicted yes: refused from as many on as have chance below 1e-4 if drawn from all rows."""
    case = _sided(7, 0.0, "miss", "yes")
    labelled = [n for n, row in enumerate(case.rows) if row["prediction"] == "yes" and row["label"]]
    share = sum(row["prediction"] == "no" for row in case.rows) / len(case.rows)
    few = int(math.log(1e-4) / math.log(1 - share))
    for count, refused in ((few, False), (few + 1, True)):
        rows = [row | {"label": row["label"] if n in labelled[:count] else ""} for n, row in enumerate(case.rows)]
        with Ledger.memory() as ledger:
            path = _write(tmp_path, case, rows)
            if refused:
                with pytest.raises(OneSided):
                    _look(ledger, path, DAYS + LAG)
            else:
                assert _look(ledger, path, DAYS + LAG).written


@pytest.mark.parametrize(
    ("evidence", "refused"),
    [
        ("release_evidence = { labels = 6000, errors = 250 }", False),
        ("release_evidence = { labels = 6000, errors = 275 }", True),
        ("release_evidence = { labels = 6000, errors = 258, models = 1 }", False),
        ("release_evidence = { labels = 6000, errors = 258, models = 100 }", True),
        ("release_evidence = { labels = 6000, errors = 275 }\nuncertified = true", False),
        ("", False),
    ],
)
def test_release_evidence_that_does_not_bear_the_tolerance_out_is_refused(
    tmp_path: Path, evidence: str, refused: bool
) -> None:
    """At the look, by `check` and where the daemon is built; by the exact tail of scipy at risk/models."""
    case = Case("plain", "", "", _some(5, 0.02), byhand.uniform, _plain, _counted)
    path = _write(tmp_path, case, evidence=evidence)
    if "errors" in evidence and "uncertified" not in evidence:
        numbers = dict(re.findall(r"(\w+) = (\d+)", evidence))
        tail = binom.cdf(int(numbers["errors"]), int(numbers["labels"]), TOLERANCE)
        assert (tail > RISK / int(numbers.get("models", 1))) == refused
    config = settings.read(path)
    problems = [f.text for f in check(config, int((RELEASED + timedelta(days=40)).timestamp())) if f.level == "problem"]
    with Ledger.memory() as ledger:
        if refused:
            with pytest.raises(WeakEvidence, match=r"bear out a tolerance of 0\.05"):
                _look(ledger, path, DAYS + LAG)
            with pytest.raises(WeakEvidence):
                build(config, Children(), lambda _: None, lambda: RELEASED)
        else:
            flags = _look(ledger, path, DAYS + LAG).standings[0].flags
            assert ("uncertified" in flags) == (evidence == "" or "uncertified" in evidence)

    assert bool(problems) == refused


def test_a_loss_is_not_borne_out_by_counted_errors(tmp_path: Path) -> None:
    """Fractions are no errors (method.md section 5): refused until the key is gone, then uncertified."""
    case = _lossy(4, 0.01)
    with Ledger.memory() as ledger:
        with pytest.raises(WeakEvidence, match="about a loss"):
            _look(
                ledger, _write(tmp_path, case, evidence="release_evidence = { labels = 6000, errors = 1 }"), DAYS + LAG
            )
        assert "uncertified" in _look(ledger, _write(tmp_path, case, evidence=""), DAYS + LAG).standings[0].flags


@pytest.mark.parametrize(("second", "sealed"), [(-1, 9), (0, 10)])
def test_a_bucket_is_sealed_the_second_its_label_lag_is_over(tmp_path: Path, second: int, sealed: int) -> None:
    """At end + label_lag and not before (the ledger's own rule: at or after); counted by hand."""
    case = Case("plain", "", "", _some(5, 0.02), byhand.uniform, _plain, _counted)
    with Ledger.memory() as ledger:
        whole = _look(ledger, _write(tmp_path, case), 10 + LAG + second / DAY).standings[0]

    assert whole.labels == sum(1 for row in case.rows if row["label"] and _day(row) < sealed)
    assert whole.counted_until == RELEASED + timedelta(days=sealed)


def test_arriving_labels_are_errors_or_none(tmp_path: Path) -> None:
    """A loss cannot arrive step by step: refused with the way out; miss and label noise can, and audit follows."""
    lossy = _lossy(3, 0.1)
    lossy.promise += '\ncount = "arriving"'
    with pytest.raises(SettingsError, match='use count = "sealed"'):
        settings.read(_write(tmp_path, lossy))
    for case in (_sided(3, 0.1, "miss", "yes"), _noisy(3, 0.1)):
        case.promise += '\ncount = "arriving"'
        with Ledger.memory() as ledger:
            done = [_look(ledger, _write(tmp_path, case), day) for day in (5, 13, DAYS + LAG)][-1]
            assert audit(ledger, replay=Replay()).findings == ()
        for standing in done.standings:
            windows = _windows(case, standing.value)
            assert standing.total == pytest.approx(windows.total(DAYS - 1, case.above), abs=2e-6)


@pytest.mark.parametrize("made", [_weighted, _horvitz])
@pytest.mark.parametrize("measure", ["miss", "false-alarm"])
def test_a_rate_among_positives_is_not_read_off_an_uneven_sample(tmp_path: Path, made: Any, measure: str) -> None:
    """Refused: with half of the labels from predicted negatives the weighted misses per labelled positive are no miss rate.

    Computed: 20% predicted positive, of them 90% positive, of the others 1%: miss rate .008/.188 = .043; sampled half and
    half (weights .4 and 1.6) the weighted misses per labelled positive are 1.6*.005/.455 = .018.
    """
    case = made(3, 0.01)
    case.promise += f'\nmeasure = "{measure}"\npositive = "yes"'

    with pytest.raises(SettingsError, match=f"measure = '{measure}' does not go with"):
        settings.read(_write(tmp_path, case))
