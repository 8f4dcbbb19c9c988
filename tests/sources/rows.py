"""Rows and questions made at random: small pools, so that everything collides with everything."""

from __future__ import annotations

from datetime import datetime
from random import Random

from hypothesis import strategies as st

from watcher.records import Columns, Question


def epoch(text: str) -> int:
    return int(datetime.fromisoformat(text).timestamp())


RELEASED = epoch("2026-03-27T10:00:00Z")
NOW = epoch("2026-10-27T12:00:00Z")
TIMES: list[str | None] = [
    "2026-03-27T09:59:59Z",
    "2026-03-27T10:00:00Z",
    "2026-03-28T22:59:59.999Z",
    "2026-03-28T23:00:00Z",
    "2026-03-29T01:00:00+02:00",
    "2026-03-29T00:59:59Z",
    "2026-03-29T01:00:00Z",
    "2026-03-29T03:00:00+02:00",
    "2026-03-29T21:59:59Z",
    "2026-03-29T22:00:00Z",
    "2026-06-01T12:00:00+05:30",
    "2026-10-24T21:59:59Z",
    "2026-10-24T22:00:00z",
    "2026-10-25 00:30:00Z",
    "2026-10-25T01:30:00Z",
    "2026-10-25T02:30:00+01:00",
    "2026-10-25T22:59:59.5Z",
    "2026-10-25T23:00:00-00:00",
    "2026-10-26T08:00:00Z",
    " 2026-10-26T08:00:00Z ",
    "2026-10-26T08:00:01Z",
    "2026-10-27T11:59:59Z",
    "2026-10-27T12:00:00Z",
    "2026-10-27T12:00:01Z",
    "2027-01-01T00:00:00Z",
    "1970-01-01T00:00:00Z",
    "1969-12-31T23:59:59Z",
    "2100-12-31T23:59:59Z",
    "2101-01-01T00:00:00Z",
    None,
    "infinity",
]
"""What a typed column can hold too."""
TEXT_TIMES: list[str | None] = [
    *TIMES,
    "",
    "  ",
    "-infinity ",
    "2026-02-30T00:00:00Z",
    "2026-10-26",
    "2026-10-26T08:00:00",
    "2026-03-29T02:30:00",
    "2026-10-25T02:30:00",
    "2026-10-25T02:59:59.999999999",
    "2026-10-26T8:00:00Z",
    "2026-10-26T24:00:00Z",
    "2026-10-26T08:00:60Z",
    "2026-10-26T08:00:00.9999999Z",
    "2026-10-26T08:00:00+24:00",
    "20261026T080000Z",
    "1761465600",
    "yesterday",
    "now",
    "epoch",
    "2026-10-26T08:00:00 Europe/Berlin",
    "2026-10-26T08:00:00+02",
    "'; DROP TABLE samples; --",
]
LABELS: list[str | None] = [
    "a", "a", "a ", "A", "á", "a\u0301", "b", "b", "\tb", "1", "1.0", "1.00", "-1.0", "01", "1.", ".0", "1.5", "true", "True",
    "TRUE", "tRuE", "FALSE", "", "   ", None, None, "a,b", 'say "a"', "ß", "SS", "=1+1",
]  # fmt: skip
POOLS: dict[str, list[str | None]] = {
    "parcel": ["p1", "p2", "p3", "p4", "p5", "P1", "p1 ", "7", "7.0", "é", "e", "", None],
    "rev": ["1", "2", "2.0", "9", "10", "010", "", None, "b", "a", "B", "2026-10-26T00:00:00Z", "2026-10-26T00:00:01Z"],
    "predicted": LABELS,
    "observed": [*LABELS, None, None, None],
    "wrong": ["0", "1", "true", "False", "TRUE", "1.0", "", None, "2", "yes", "-1.0"],
    "loss": ["0", "1", "0.5", " 0.25", "1.0000000", "1.0001", "-0.1", "-0", "1e-3", "0.29", ".7", "nan", "inf", "", None, "x", "1e400", "0x1", "1_0", "0.1234567"],
    "weight": ["1", "1.0", " 1.00", "0.5", ".5", "5e-1", "2", "2.000", "0.50001", "", None, "x", "NaN"],
    "customer": ["c1", "c2", "c3", "c4", "c1 ", "C1", "", None],
    "chance": ["0.1", "0.10", "1", "1.0", "0.2", "", None, "x"],
    "chosen": ["true", "True", "1", "1.0", "false", "0", "", None, "maybe"],
    "depot": ["Alder", "Birch", " Alder", "alder", "Ålder", "", None, "1.0", "1"],
    "carrier": ["north", "south", "", "NORTH"],
    "release": ["5", "5.0", "5", "5", " 5", "6", "", None],
}  # fmt: skip
COLUMNS = ("parcel", "rev", "at", "seen", *[name for name in POOLS if name not in ("parcel", "rev")])


def pools(times: list[str | None]) -> dict[str, list[str | None]]:
    return {**POOLS, "at": times, "seen": [*times, None, None, None]}


Row = dict[str, str | None]


def random_rows(seed: int, number: int, times: list[str | None]) -> list[Row]:
    rng = Random(seed)
    every = pools(times)
    every["parcel"] = [*every["parcel"], *[f"id{i}" for i in range(number)]]
    every["customer"] = [*every["customer"], *[f"k{i}" for i in range(number // 4)]]
    return [{name: rng.choice(every[name]) for name in COLUMNS} for _ in range(number)]


def some_rows(times: list[str | None]) -> st.SearchStrategy[list[Row]]:
    every = pools(times)
    return st.lists(st.fixed_dictionaries({name: st.sampled_from(every[name]) for name in COLUMNS}), max_size=30)


DESIGNS: dict[str, dict[str, object]] = {
    "label": {"columns": {"prediction": "predicted", "label": "observed"}},
    "positive": {"columns": {"prediction": "predicted", "label": "observed"}, "positive": " a", "measure": "miss"},
    "classes": {
        "columns": {"prediction": "predicted", "label": "observed"},
        "classes": ("a", "b", "1.0"),
        "positive": "1",
    },
    "error": {"columns": {"error": "wrong"}},
    "loss": {"columns": {"loss": "loss"}, "measure": "loss"},
    "weight": {
        "columns": {"prediction": "predicted", "label": "observed", "weight": "weight"},
        "weight_levels": ("0.5", "1", "2"),
    },
    "chosen": {
        "columns": {"error": "wrong", "labelling_probability": "chance", "selected": "chosen"},
        "labelling_probabilities": ("0.1", "1"),
    },
    "cluster": {"columns": {"error": "wrong", "cluster": "customer"}, "n_max": 2, "cluster_span": 86_400},
    "cluster-miss": {
        "columns": {"prediction": "predicted", "label": "observed", "cluster": "customer"},
        "n_max": 1,
        "cluster_span": 3 * 86_400,
        "positive": "a",
        "measure": "miss",
    },
}


def question(
    design: str = "label",
    *,
    identified: bool = True,
    revised: bool = True,
    labelled_at: bool = False,
    where: bool = False,
    slices: tuple[str, ...] = (),
    zone: str = "UTC",
    bucket: int = 86_400,
    source_zone: str | None = None,
    at_given: bool = False,
    open_from: int | None = None,
    label_lag: int = 86_400,
    now: int = NOW,
    released: int = RELEASED,
    **more: object,
) -> Question:
    kind = {**DESIGNS[design], **more}
    columns = Columns(
        time="at",
        **{
            "prediction": None,
            "id": "parcel" if identified else None,
            "revision": "rev" if revised else None,
            "labelled_at": "seen" if labelled_at else None,
            **kind.pop("columns"),  # type: ignore[dict-item]
        },
    )
    defaults: dict[str, object] = {
        "classes": (), "positive": None, "measure": "error", "weight_levels": (), "n_max": None, "cluster_span": None,
        "labelling_probabilities": (), "time_format": "rfc3339",
    }  # fmt: skip
    return Question(
        promise="damage",
        version="1",
        columns=columns,
        source_time_zone=source_zone,
        where=(("release", "5.0"),) if where else (),
        slices=slices,
        time_zone=zone,
        bucket=bucket,
        released=released,
        open_from=released if open_from is None else open_from,
        label_lag=label_lag,
        now=now,
        at_given=at_given,
        **{**defaults, **kind},  # type: ignore[arg-type]
    )


@st.composite
def questions(draw: st.DrawFn, typed: bool = False) -> Question:
    zone, bucket = draw(
        st.sampled_from(
            [("UTC", 86_400), ("Europe/Berlin", 86_400), ("Europe/Berlin", 3600), ("America/St_Johns", 7200)]
        )
    )
    from watcher.buckets import bucket_starts

    starts = bucket_starts(RELEASED, NOW, bucket, zone)
    near = [RELEASED, starts[1], starts[2], starts[3], starts[-3], starts[-2], starts[-1]]
    return question(
        draw(st.sampled_from(sorted(DESIGNS))),
        identified=draw(st.booleans()),
        revised=draw(st.booleans()),
        labelled_at=draw(st.booleans()),
        where=draw(st.booleans()),
        slices=draw(st.sampled_from([(), ("depot",), ("depot", "carrier")])),
        zone=zone,
        bucket=bucket,
        source_zone=None if typed else draw(st.sampled_from([None, None, "Europe/Berlin", "Asia/Kolkata"])),
        at_given=draw(st.booleans()),
        open_from=draw(st.sampled_from(near)),
        label_lag=draw(st.sampled_from([3600, 86_400, 10 * 86_400])),
    )
