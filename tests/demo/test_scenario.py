"""The invented scenario is what it says it is: rhythm, rates, delays, corrections, duplicates and unusable rows."""

from __future__ import annotations

import hashlib
from collections import Counter, defaultdict
from itertools import pairwise

import pytest
from demo.counting import count, epoch, usable
from scipy.special import bdtr, bdtrc

from watcher.demo.scenario import (
    CAMERA_DAY,
    CAMERA_DEPOT,
    CAMERA_ERROR_RATE,
    CARRIERS,
    CLASSES,
    DAY,
    DAYS,
    DEPOTS,
    ERROR_RATE,
    RELEASED,
    generate,
)
from watcher.demo.writing import CONFIGURATION, LABELS, append, prepare, write
from watcher.errors import UsageError
from watcher.settings import read

SEED = 7
UNLIKELY = 1e-6
"""A side, for every test of a rate: so rarely would a right generator fail."""


@pytest.fixture(scope="module")
def rows():
    return generate(SEED)


@pytest.fixture(scope="module")
def judged(rows):
    """The labelled rows that a look can use, each with its day."""
    return [(row, (epoch(row.decided_at) - RELEASED) // DAY) for row in usable(rows) if row.observed]


def holds(errors, labels, rate):
    """The exact binomial chance of so few or so many errors is not below `UNLIKELY` on either side."""
    return bdtr(errors, labels, rate) > UNLIKELY and bdtrc(errors - 1, labels, rate) > UNLIKELY


def files(folder):
    """Name and bytes of everything in a folder."""
    return {path.relative_to(folder).as_posix(): path.read_bytes() for path in folder.rglob("*") if path.is_file()}


def test_two_runs_of_one_seed_give_the_same_bytes(tmp_path):
    """Files and configuration of one seed are equal to the byte, those of another seed differ."""
    for name, seed in (("a", SEED), ("b", SEED), ("c", SEED + 1)):
        write(tmp_path / name, seed)

    assert files(tmp_path / "a") == files(tmp_path / "b")
    assert files(tmp_path / "a") != files(tmp_path / "c")


def test_the_bytes_of_a_seed_stay_what_they_were(tmp_path):
    """The files of seed 0 have the digest they had when the scenario was made (computed; any change of it shows here)."""
    write(tmp_path, 0)
    digest = hashlib.sha256()
    for name, content in sorted(files(tmp_path / LABELS).items()):
        digest.update(name.encode() + content)

    assert digest.hexdigest() == "2d582529de6835163c1069d602795f311eb278fd62b1d3da0b6c3269fd047971"


def test_rows_appended_day_by_day_leave_the_same_files(tmp_path, rows):
    """A live replay, one simulated day after the other, ends in the very files that are written at once."""
    write(tmp_path / "whole", SEED)
    prepare(tmp_path / "daily")
    for day in range(DAYS + 10):
        append(tmp_path / "daily", [row for row in rows if (row.arrived - RELEASED) // DAY == day])

    assert files(tmp_path / "daily") == files(tmp_path / "whole")


def test_nothing_is_overwritten(tmp_path):
    """A folder that holds a configuration or rows already is refused by name, and stays as it is."""
    prepare(tmp_path)
    before = files(tmp_path)

    with pytest.raises(UsageError, match=r"watcher\.toml exists there already; name an empty folder"):
        write(tmp_path, SEED + 1)
    assert files(tmp_path) == before


def test_the_configuration_is_read_without_a_finding(tmp_path):
    """The written file is a complete configuration of exactly this scenario."""
    settings = read(prepare(tmp_path), {})
    promise = settings.promise[0]
    terms = promise.terms(settings.source[0])

    assert (terms.tolerance, terms.risk, terms.released, terms.label_lag) == (0.03, 0.001, RELEASED, 10 * DAY)
    assert [(s.column, s.values) for s in terms.slices] == [
        ("carrier", tuple(name for name, _ in CARRIERS)),
        ("depot", tuple(name for name, _ in DEPOTS)),
    ]
    assert promise.release_evidence is not None
    assert terms.columns.labelled_at == "inspected_at"
    assert CONFIGURATION in files(tmp_path)


def test_rows_arrive_in_order(rows):
    """The rows are sorted by the second of their arrival, the first on the day of the release."""
    assert all(before.arrived <= after.arrived for before, after in pairwise(rows))
    assert 0 <= rows[0].arrived - RELEASED < DAY


def test_a_parcel_keeps_its_time_and_prediction(rows):
    """Revisions of one parcel differ in the label alone, and a higher revision never arrives before a lower one."""
    by_parcel = defaultdict(list)
    for row in rows:
        if row.parcel and "02-30" not in row.decided_at:
            by_parcel[row.parcel].append(row)

    for found in by_parcel.values():
        assert len({(row.decided_at, row.depot, row.carrier, row.predicted) for row in found}) == 1
        assert [row.revision for row in found] == sorted(row.revision for row in found)
        assert found[0].observed == ""


def test_labels_come_one_to_nine_days_later(judged):
    """No usable label is younger than a day or older than nine, and both ends are met."""
    delays = [epoch(row.inspected_at) - epoch(row.decided_at) for row, _ in judged]

    assert min(delays) >= DAY
    assert max(delays) <= 9 * DAY
    assert min(delays) < 1.1 * DAY
    assert max(delays) > 8.9 * DAY


def test_most_photos_get_a_label(rows, judged):
    """88% of the photos are labelled at last (exact binomial test, 1e-6 a side)."""
    assert holds(len(judged), len(usable(rows)), 0.88)


@pytest.mark.parametrize("depot", [name for name, _ in DEPOTS])
@pytest.mark.parametrize("after", [False, True])
def test_only_the_camera_depot_changes(judged, depot, after):
    """Every depot errs at 0.018, the one with the new camera at 0.054 from that day on (exact binomial, 1e-6 a side)."""
    outcomes = [r.predicted != r.observed for r, day in judged if r.depot == depot and (day >= CAMERA_DAY) == after]
    rate = CAMERA_ERROR_RATE if after and depot == CAMERA_DEPOT else ERROR_RATE
    other = ERROR_RATE if rate == CAMERA_ERROR_RATE else CAMERA_ERROR_RATE

    assert holds(sum(outcomes), len(outcomes), rate)
    assert not holds(sum(outcomes), len(outcomes), other)


@pytest.mark.parametrize("carrier", [name for name, _ in CARRIERS])
def test_the_camera_depot_has_a_fifth_of_every_carrier(judged, carrier):
    """Whole and carriers rise to 0.8 x 0.018 + 0.2 x 0.054 = 0.0252, below the tolerance (1e-6 a side)."""
    found = [
        (row.depot == CAMERA_DEPOT, row.predicted != row.observed, day) for row, day in judged if row.carrier == carrier
    ]
    late = [wrong for _, wrong, day in found if day >= CAMERA_DAY]

    assert holds(sum(there for there, _, _ in found), len(found), 0.2)
    assert holds(sum(late), len(late), 0.0252)


def test_the_delay_does_not_depend_on_the_outcome(judged):
    """Early and late labels err alike in the depots without the camera (both at 0.018, 1e-6 a side)."""
    plain = [
        (epoch(r.inspected_at) - epoch(r.decided_at), r.predicted != r.observed)
        for r, _ in judged
        if r.depot != CAMERA_DEPOT
    ]
    middle = sorted(delay for delay, _ in plain)[len(plain) // 2]
    for half in ([w for d, w in plain if d < middle], [w for d, w in plain if d >= middle]):
        assert holds(sum(half), len(half), ERROR_RATE)


def test_the_week_has_its_rhythm(rows):
    """The fullest day is Monday, the emptiest Sunday, and every day brings some 100 to 400 labels."""
    labels = count(rows)["", ""].labels
    week = labels.reshape(-1, 7).sum(axis=0)

    assert (week.argmax(), week.argmin()) == (0, 6)
    assert labels.min() >= 100
    assert labels.max() <= 450


def test_there_are_corrections_duplicates_and_unusable_rows(rows):
    """Some labels were put right, some lines came twice, and every kind of unusable row occurs."""
    lines = Counter(rows)
    revisions = Counter(row.revision for row in rows)
    conflicts = defaultdict(set)
    for row in rows:
        conflicts[row.parcel, row.revision].add(row.observed)

    assert revisions[2] > 50
    assert sum(n - 1 for n in lines.values()) > 100
    assert any(row.parcel == "" for row in rows)
    assert any(row.decided_at.startswith("2026-02-30") for row in rows)
    assert any(row.observed not in ("", *CLASSES) for row in rows)
    assert any(len(found) > 1 for (parcel, _), found in conflicts.items() if parcel)
