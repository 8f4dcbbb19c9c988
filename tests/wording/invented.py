"""Invented terms and standings for tests of words and reports."""

from __future__ import annotations

from dataclasses import replace
from datetime import UTC, datetime
from typing import Any

from watcher.records import Columns, Interval, Slice, Standing, Terms, ToDecide

DAY = 86_400
HOSTILE = "<script>alert(1)</script>=cmd()\x1b[31m\r\nBcc: all\x00\u202egnp.exe" + "x" * 500
"""A depot name as an attacker would choose it: markup, control characters, a right-to-left override, far too long."""
FORMULA = "=cmd('calc')"
"""A depot name that a spreadsheet would run."""


def utc(*parts: int) -> datetime:
    return datetime(*parts, tzinfo=UTC)


def make_terms(**changes: Any) -> Terms:
    terms = Terms(
        promise="damage-photos",
        model="",
        version="1",
        source="inspection-desk",
        where=(),
        columns=Columns(time="decided_at", prediction="predicted", label="observed"),
        time_format="rfc3339",
        source_time_zone=None,
        classes=(),
        positive=None,
        measure="error",
        tolerance=0.03,
        risk=0.001,
        released=int(utc(2026, 11, 2).timestamp()),
        service_life=364 * DAY,
        bucket=DAY,
        time_zone="UTC",
        label_lag=10 * DAY,
        count="sealed",
        slices=(),
        weight_levels=(),
        n_max=None,
        cluster_span=None,
        labelling_probabilities=(),
        label_noise=None,
        window_at_least=None,
        support_at_least=7 * DAY,
        warn_every=1095 * DAY,
    )
    return replace(terms, **changes)


def with_depots(*names: str) -> Terms:
    return make_terms(slices=(Slice("depot", names, ("1",) * len(names)),))


def make_standing(**changes: Any) -> Standing:
    """The figures of the issue's example: 1,204 labelled, 31 misjudged, 2 to 29 November."""
    standing = Standing(
        promise="damage-photos",
        version="1",
        column="",
        value="",
        state="undecided",
        flags=(),
        tolerance=0.03,
        risk=0.001,
        part=1.0,
        terms="0" * 64,
        predictions=1400,
        labels=1204,
        errors=31.0,
        provisional_labels=0,
        provisional_errors=0.0,
        provisional_predictions=0,
        late_labels=0,
        estimate=31 / 1204,
        life=Interval(0.00999862, 0.05073101),
        recent=None,
        support=None,
        total=0.31,
        threshold=6.907756,
        breach=None,
        to_decide=ToDecide(26933, 46469),
        newest_label=utc(2026, 12, 8),
        counted_until=utc(2026, 11, 30),
    )
    return replace(standing, **changes)
