"""Ten million CSV rows: the whole contract of counting against a bare aggregation of the same file.

Run by hand: `pytest -s -o addopts= --import-mode=importlib tests/benchmarks/test_scan_speed.py`; each process does one
thing, so that peak memory is its own.
"""

from __future__ import annotations

import json
import statistics
import subprocess
import sys
from collections.abc import Iterator
from pathlib import Path

import duckdb
import pytest

ROWS = 10_000_000
PAIRS = 5
COLUMNS = "{'parcel': 'VARCHAR', 'decided_at': 'TIMESTAMP', 'depot': 'VARCHAR', 'predicted': 'VARCHAR', 'observed': 'VARCHAR'}"

BARE = """
import duckdb, json, resource, sys, time
connection = duckdb.connect()
connection.execute("SET enable_progress_bar = false")
read = f"read_csv('{sys.argv[1]}', header = true, auto_detect = false, delim = ',', quote = '', columns = {sys.argv[2]})"
sql = (
    "SELECT epoch_ms(decided_at) // 86400000 AS bucket, depot, count(*), count(observed), "
    f"sum(CAST(observed <> predicted AS INTEGER)) FROM {read} GROUP BY 1, 2"
)
began = time.perf_counter()
rows = connection.execute(sql).fetchall()
seconds = time.perf_counter() - began
peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024
print(json.dumps([seconds, peak, [sum(row[i] or 0 for row in rows) for i in (2, 3, 4)]]))
"""

OURS = """
import json, resource, sys, time
from datetime import datetime
from pathlib import Path
from watcher.records import Columns, Question
from watcher.sources import SourceSpec, open_source
import watcher.sources.files
def epoch(text): return int(datetime.fromisoformat(text).timestamp())
released = epoch("2026-01-01T00:00:00Z")
question = Question(
    promise="damage", version="1", time_format="rfc3339", source_time_zone=None, where=(), classes=(), positive=None,
    columns=Columns(time="decided_at", prediction="predicted", label="observed", id=sys.argv[2] or None),
    measure="error", slices=("depot",), weight_levels=(), n_max=None, cluster_span=None, labelling_probabilities=(),
    time_zone="UTC", bucket=86400, released=released, open_from=released, label_lag=864000,
    now=epoch("2027-01-01T00:00:00Z"), at_given=False,
)
path = Path(sys.argv[1])
source = open_source(SourceSpec("desk", "csv", path=path.name, base=path.parent))
began = time.perf_counter()
(tally,) = source.tally([question])
seconds = time.perf_counter() - began
peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024
whole = [cell.counts for cell in tally.cells if not cell.column]
sums = [sum(getattr(counts, name) for counts in whole) for name in ("predictions", "labels", "errors")]
print(json.dumps([seconds, peak, sums, dict(tally.rejected), tally.duplicates, tally.lines]))
"""


@pytest.fixture(scope="module")
def rows(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Path]:
    """Ten million rows, 500 MB: a year of days, five depots, 30% unlabelled, 5% errors."""
    path = tmp_path_factory.mktemp("scan") / "rows.csv"
    duckdb.connect().execute(
        f"""COPY (SELECT 'p' || lpad(CAST(i AS VARCHAR), 9, '0') AS parcel,
        strftime(TIMESTAMP '2026-01-01' + to_seconds(CAST(hash(i) % (364 * 86400) AS BIGINT)), '%Y-%m-%dT%H:%M:%SZ') AS decided_at,
        ['Alder', 'Birch', 'Cedar', 'Dogwood', 'Elm'][1 + CAST(hash(i + 7) % 5 AS INTEGER)] AS depot,
        CASE WHEN hash(i + 13) % 100 < 5 THEN 'damaged' ELSE 'intact' END AS predicted,
        CASE WHEN hash(i + 99) % 10 < 3 THEN NULL WHEN hash(i + 31) % 100 < 5 THEN 'damaged' ELSE 'intact' END AS observed
        FROM range({ROWS}) AS t(i)) TO '{path}' (HEADER true)"""
    )
    yield path
    path.unlink()


def run(program: str, path: Path, argument: str) -> list[object]:
    done = subprocess.run(
        [sys.executable, "-c", program, str(path), argument], check=True, capture_output=True, text=True
    )
    return json.loads(done.stdout)  # type: ignore[no-any-return]


def ratios(path: Path, ident: str) -> tuple[float, float, list[object], list[object]]:
    """Return the median ratio and the largest peak (MiB) of interleaved pairs, and what each side last counted."""
    found, peaks = [], []
    for _ in range(PAIRS):
        bare, ours = run(BARE, path, COLUMNS), run(OURS, path, ident)
        found.append(ours[0] / bare[0])  # type: ignore[operator]
        peaks.append(ours[1])
        print(f"bare {bare[0]:.2f} s, ours {ours[0]:.2f} s, ratio {found[-1]:.2f}, peak {ours[1]:.0f} MiB")
    return statistics.median(found), max(peaks), bare, ours  # type: ignore[type-var, return-value]


def test_without_an_id(rows: Path) -> None:
    """At most twice the time of the bare aggregation, under 400 MiB, and the same integers."""
    ratio, peak, bare, ours = ratios(rows, "")

    assert ours[2:] == [bare[2], {}, 0, ROWS]
    assert ratio <= 2.0
    assert peak < 400


def test_with_an_id_that_never_repeats(rows: Path) -> None:
    """At most six times with ten million ids to tell apart."""
    ratio, _, bare, ours = ratios(rows, "parcel")

    assert ours[2:] == [bare[2], {}, 0, ROWS]
    assert ratio <= 6.0


def test_with_ids_of_which_one_in_a_hundred_repeats(rows: Path) -> None:
    """At most six times when 100,000 rows are there twice."""
    path = rows.with_name("repeated.csv")
    with rows.open("rb") as source, path.open("wb") as out:
        first = b""
        while block := source.read(1 << 24):
            first = first or block
            out.write(block)
        lines = first.split(b"\n")[1:100_001]
        out.write(b"\n".join(lines) + b"\n")
    try:
        ratio, _, _, ours = ratios(path, "parcel")
    finally:
        path.unlink()

    assert ours[3:] == [{}, 100_000, ROWS + 100_000]
    assert ratio <= 6.0
