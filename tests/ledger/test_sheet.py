"""What is hashed: canonical texts that read back to the last bit, whatever outside text is inside."""

from __future__ import annotations

import dataclasses
import json
import math
import random
from dataclasses import replace
from datetime import UTC, datetime, timedelta
from fractions import Fraction

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from ledger.world import DAY, RELEASED, make_terms

from watcher.ledger import canon
from watcher.ledger.sheet import pack, parse_sheet, sheet_text, unpack
from watcher.ledger.standing import standing_body, standing_from
from watcher.ledger.terms import canonical_terms, terms_digest, terms_from
from watcher.records import (
    Breach,
    Cell,
    CellCounts,
    Counts,
    Entry,
    Event,
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

ANY_TEXT = st.text(st.characters(codec=None), max_size=8)
"""Lone surrogates, NULs, newlines and line separators included."""
RATE = st.floats(0, 1)
COUNT = st.integers(0, 10**12)
EPOCH = st.integers(0, 4_102_444_800)

COUNTS = st.builds(Counts, COUNT, COUNT, COUNT, COUNT, COUNT, COUNT, COUNT, COUNT, COUNT, st.none() | EPOCH)
TERMS = st.builds(
    lambda name, tolerance, risk, noise, values: make_terms(
        name,
        tolerance=tolerance,
        risk=risk,
        label_noise=noise,
        slices=(Slice("depot", tuple(values), tuple("1" for _ in values)),),
        classes=tuple(values),
    ),
    ANY_TEXT,
    RATE,
    RATE,
    st.none() | st.tuples(RATE, RATE),
    st.lists(ANY_TEXT, unique=True, max_size=4),
)
FACTS = st.dictionaries(
    st.text(max_size=5).filter(lambda k: k != "1e-9"),
    st.none() | st.booleans() | st.integers() | ANY_TEXT | st.lists(ANY_TEXT, max_size=2),
    max_size=3,
)
EVENT = st.builds(
    Event, st.sampled_from(["breach", "stale"]), ANY_TEXT, ANY_TEXT, ANY_TEXT, ANY_TEXT, st.none() | EPOCH, FACTS
)


@st.composite
def drafts(draw: st.DrawFn, name: str) -> TermDraft:
    terms = draw(st.none() | TERMS)
    keys = draw(st.lists(st.tuples(ANY_TEXT, ANY_TEXT), unique=True, max_size=5))
    places = draw(st.lists(st.tuples(st.sampled_from(keys), EPOCH, ANY_TEXT), unique=True, max_size=8)) if keys else []
    counts = [CellCounts(*key, bucket, level, draw(COUNTS)) for key, bucket, level in sorted(places)]
    cells = [Cell(*key, Fraction(draw(st.integers(1, 10**6)), draw(st.integers(1, 10**12))), 0) for key in sorted(keys)]
    return TermDraft(
        promise=name,
        version=draw(ANY_TEXT),
        new_terms=terms,
        new_cells=tuple(cells),
        counts=tuple(counts),
        gone=tuple((*key, bucket, level) for key, bucket, level in sorted(places)),
        sealed=tuple(sorted(draw(st.sets(EPOCH, max_size=3)))),
        sealed_until=draw(EPOCH),
        remarks=Remarks(draw(st.booleans()), draw(st.booleans()), draw(COUNT), draw(COUNT)),
        standings=(),
        memories=(),
        closed=draw(st.booleans()),
    )


@st.composite
def entries(draw: st.DrawFn) -> Entry:
    names = draw(st.lists(ANY_TEXT, unique=True, max_size=3))
    return Entry(
        source="desk",
        at=RELEASED,
        kind="pull",
        method=1,
        expected=0,
        terms=tuple(draw(drafts(name)) for name in names),
        events=tuple(draw(st.lists(EVENT, max_size=12))),
        rejected_counts=draw(
            st.dictionaries(ANY_TEXT, st.dictionaries(ANY_TEXT, st.integers(1, 99), min_size=1, max_size=2), max_size=2)
        ),
    )


@settings(max_examples=150, deadline=None, derandomize=True)
@given(entry=entries())
def test_a_sheet_read_back_is_the_entry(entry: Entry) -> None:
    """Parsing the packed sheet gives every draft, event and rejected count again, whatever text is inside."""
    sheet = parse_sheet(unpack(pack(sheet_text(entry))))

    assert sheet.terms == entry.terms
    assert sheet.events == entry.events
    assert sheet.rejected_counts == entry.rejected_counts


@settings(max_examples=60, deadline=None, derandomize=True)
@given(entry=entries(), seed=st.integers(0, 9))
def test_the_order_of_counts_does_not_matter(entry: Entry, seed: int) -> None:
    """Counts in any order give the same bytes."""
    shuffled = []
    for draft in entry.terms:
        counts = list(draft.counts)
        random.Random(seed).shuffle(counts)
        shuffled.append(replace(draft, counts=tuple(counts), sealed=draft.sealed[::-1]))

    assert sheet_text(replace(entry, terms=tuple(shuffled))) == sheet_text(entry)


def test_a_sheet_is_sorted_lines_of_ascii_json_without_floats() -> None:
    """Every line is a JSON array, the lines are sorted, and no number has a fraction."""
    cell = Cell("depot", "Bir\u2028ch\n", Fraction(2, 15), 0)
    counts = CellCounts("depot", "Bir\u2028ch\n", RELEASED, "", Counts(70, 68, 2, newest=RELEASED + 5))
    draft = TermDraft("p", "1", make_terms("p"), (cell,), (counts,), (), (RELEASED,), RELEASED + DAY, Remarks(), (), ())
    event = Event("breach", "p", "1", "", "", None, {"rate": 1 / 3, "total": "6.907755"})
    text = sheet_text(Entry("desk", RELEASED, "pull", 1, 0, (draft,), (event,)))
    lines = text.splitlines()

    assert text.isascii()
    assert lines == sorted(lines)
    assert all(isinstance(json.loads(line, parse_float=pytest.fail), list) for line in lines)
    assert lines[0] == r'["cell",0,"depot","Bir\u2028ch\n","2/15",0]'
    assert lines[1] == r'["count",0,"depot","Bir\u2028ch\n",1793577600,"",70,68,2,0,0,0,0,0,0,5]'
    assert lines[2] == '["event",0,"breach","p","1","","",null,{"rate":{"1e-9":333333333},"total":"6.907755"}]'


@pytest.mark.parametrize(
    "text",
    [
        '["count",0]\n',
        '["promise",0,"p"]\n',
        '["what",1]\n',
        '["event",1,"breach","","","","",null,{}]\n',
        "{}\n",
        '["sealed"',
        "[1.5]\n",
    ],
)
def test_a_line_that_cannot_be_read_is_a_value_error(text: str) -> None:
    """A damaged sheet gives one kind of error, so that audit can name the look."""
    if text.startswith('["count"'):
        text += '["promise",0,"p","1",0,false,false,false,0,0]\n'
    with pytest.raises(ValueError):
        parse_sheet(text)


@settings(max_examples=100, deadline=None, derandomize=True)
@given(terms=TERMS)
def test_terms_read_back_to_the_last_bit(terms: Terms) -> None:
    """Frozen terms come back equal, floats included, and equal terms have equal digests."""
    text = canonical_terms(terms)

    assert terms_from(text) == terms
    assert terms_digest(terms_from(text)) == terms_digest(terms)


@pytest.mark.parametrize("name", [f.name for f in dataclasses.fields(Terms)])
def test_every_term_is_in_the_digest(name: str) -> None:
    """Changing any single term changes the digest."""
    terms = make_terms()
    value = getattr(terms, name)
    other: object = "other"
    if isinstance(value, float | int):
        other = value * 2
    elif isinstance(value, tuple):
        other = ()
    elif name == "columns":
        other = replace(terms.columns, label="other")
    elif name in ("n_max", "cluster_span", "window_at_least"):
        other = 7
    elif name == "label_noise":
        other = (0.01, 0.02)
    if value == other == ():
        other = ("1",)

    assert terms_digest(replace(terms, **{name: other})) != terms_digest(terms)


def test_unknown_and_missing_terms_are_refused() -> None:
    """Terms of a newer program, or cut ones, are not guessed at."""
    text = canonical_terms(make_terms())

    with pytest.raises(ValueError, match="unknown terms"):
        terms_from(text.replace('"bucket":', '"basket":'))
    with pytest.raises(ValueError, match="are missing"):
        terms_from(text.replace('"bucket":86400,', ""))
    with pytest.raises(ValueError, match="no JSON object"):
        terms_from("[]")


@settings(max_examples=300, deadline=None, derandomize=True)
@given(x=st.floats(-1e6, 1e6))
def test_rounding_keeps_to_the_safe_side_and_is_stable(x: float) -> None:
    """down never exceeds, up never falls short, both within one unit, and a value read back rounds to itself."""
    low, high = canon.down(x), canon.up(x)

    assert low / canon.NANO <= x <= high / canon.NANO
    assert high - low <= 1 + abs(x) * 1e-6  # beyond 1e7 the floats themselves are wider than a unit
    assert canon.down(low / canon.NANO) == low
    assert canon.up(high / canon.NANO) == high


def test_round_numbers_stay_themselves() -> None:
    """0.03 is stored as 30000000, not as 29999999: its float lies below 3/100."""
    assert (canon.down(0.03), canon.up(0.03), canon.down(0.0), canon.up(1.0)) == (30_000_000, 30_000_000, 0, canon.NANO)


def test_floats_never_enter_a_canonical_text() -> None:
    """A float anywhere inside is refused by name, so no memory can smuggle one into the chain."""
    for value in (0.5, [1, {"a": math.inf}], {"total": 6.9}):
        with pytest.raises(TypeError, match="may not enter the chain"):
            canon.text(value)


def test_facts_keep_their_numbers() -> None:
    """Floats in facts come back within 1e-9, not-a-number as None, everything else exactly."""
    facts = {"a": 1 / 3, "b": [math.nan, 2, "x"], "c": {"d": True, "e": None, "f": -0.25}}

    back = canon.unplain(json.loads(canon.text(canon.plain(facts))))

    assert back == {"a": 0.333333333, "b": [None, 2, "x"], "c": {"d": True, "e": None, "f": -0.25}}
    with pytest.raises(TypeError):
        canon.plain({"a": object()})
    with pytest.raises(TypeError):
        canon.plain({1: 2})
    with pytest.raises(ValueError, match="reserved"):
        canon.plain({"1e-9": 2})


MOMENT = EPOCH.map(lambda e: datetime.fromtimestamp(e, UTC))
STANDINGS = st.builds(
    Standing,
    promise=st.just("damage-photos"),
    version=st.just("1"),
    column=st.just("depot"),
    value=st.just("Alder"),
    state=st.sampled_from(["breached", "supported", "undecided"]),
    flags=st.lists(st.sampled_from(["stale", "warning"]), unique=True).map(tuple),
    tolerance=st.just(0.03),
    risk=st.just(0.001),
    part=st.just(2 / 15),
    terms=st.just("ab" * 32),
    predictions=COUNT,
    labels=COUNT,
    errors=st.integers(0, 10**12).map(float) | st.floats(0, 1e5),
    provisional_labels=COUNT,
    provisional_errors=st.integers(0, 10**6).map(float),
    provisional_predictions=COUNT,
    late_labels=COUNT,
    estimate=st.none() | RATE,
    life=st.builds(Interval, RATE, RATE),
    recent=st.none() | st.builds(Recent, MOMENT, COUNT, st.integers(0, 99).map(float), RATE, RATE),
    support=st.none() | st.builds(Support, MOMENT, MOMENT, RATE),
    total=st.floats(-1e3, 1e5) | st.just(-math.inf),
    threshold=st.floats(0, 100),
    breach=st.none() | st.builds(Breach, st.integers(1, 9), MOMENT, MOMENT, MOMENT, st.floats(0.03, 1)),
    to_decide=st.none() | st.builds(ToDecide, st.none() | COUNT, st.none() | COUNT),
    newest_label=st.none() | MOMENT,
    counted_until=st.none() | MOMENT,
    diagnostics=st.dictionaries(st.sampled_from(["share", "tipping"]), RATE | st.none(), max_size=2),
)


@settings(max_examples=200, deadline=None, derandomize=True)
@given(standing=STANDINGS)
def test_a_standing_read_back_is_on_the_safe_side(standing: Standing) -> None:
    """Lower limits and totals come back no higher, upper limits no lower, all within their unit; the rest equal."""
    cell = Cell("depot", "Alder", Fraction(2, 15), 0)
    body = json.loads(canon.text(standing_body(standing)))
    back = standing_from(body, terms=make_terms(), digest="ab" * 32, cell=cell)

    def near(read: float, given: float, sign: int, unit: float = 1e-9) -> bool:
        # A hair over a unit: 1e-9 itself is no binary fraction.
        return read == given or 0 <= sign * (read - given) <= unit * 1.001 + abs(given) * 1e-15

    assert near(back.life.lower, standing.life.lower, -1)
    assert near(back.life.upper, standing.life.upper, 1)
    assert near(back.total, standing.total, -1, 1e-6)
    assert near(back.threshold, standing.threshold, 1)
    assert back.estimate == pytest.approx(standing.estimate, abs=1e-9)
    assert back.errors == pytest.approx(standing.errors, abs=1e-9)
    assert back.diagnostics == pytest.approx(standing.diagnostics, abs=1e-9)
    if standing.recent is not None:
        assert back.recent is not None
        assert near(back.recent.lower, standing.recent.lower, -1)
        assert near(back.recent.upper, standing.recent.upper, 1)
    if standing.support is not None:
        assert back.support is not None
        assert near(back.support.upper, standing.support.upper, 1)
    if standing.breach is not None:
        assert back.breach is not None
        assert near(back.breach.lower, standing.breach.lower, -1)
        assert back.breach.lower >= standing.tolerance
    rough = {"life", "total", "threshold", "estimate", "errors", "diagnostics", "recent", "support", "breach"}
    for field in dataclasses.fields(Standing):
        if field.name not in rough:
            assert getattr(back, field.name) == getattr(standing, field.name), field.name
    assert standing_body(back) == standing_body(standing)


@settings(max_examples=200, deadline=None, derandomize=True)
@given(total=st.integers(0, 2 * 10**7).map(lambda n: n / 10**6), threshold=st.floats(0.1, 20))
def test_rounding_never_moves_a_total_across_its_threshold(total: float, threshold: float) -> None:
    """A recorded total (a multiple of 1e-6) is at or over the threshold read back exactly when it was before."""
    assert (total >= canon.up(threshold) / canon.NANO) == (total >= threshold)


def test_times_between_seconds_are_rounded_down() -> None:
    """A moment inside a second is kept as its second."""
    moment = datetime(2026, 11, 2, tzinfo=UTC) + timedelta(microseconds=999_999)
    standing = replace(EXAMPLE, newest_label=moment)

    assert standing_body(standing)["newest"] == RELEASED


EXAMPLE = Standing(
    *("damage-photos", "1", "", "", "undecided", (), 0.03, 0.001, 0.5, "", 0, 0, 0.0, 0, 0.0, 0, 0, None),
    life=Interval(0.0, 1.0),
    recent=None,
    support=None,
    total=0.0,
    threshold=7.6,
    breach=None,
    to_decide=None,
    newest_label=None,
    counted_until=None,
)
