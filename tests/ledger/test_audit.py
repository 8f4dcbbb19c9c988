"""Anything that is changed in the chained tables is found and named; what cannot be seen without a kept head is not."""

from __future__ import annotations

import zlib
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import replace
from itertools import pairwise
from typing import Any

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from ledger.world import DAY, METHOD, RELEASED, SimpleReplay, World, make_terms
from sqlalchemy import Connection, Table, delete, func, insert, select, update

from watcher.ledger import Ledger, findings
from watcher.ledger.audit import audit, audit_connection
from watcher.ledger.chain import VerdictRow, mark
from watcher.ledger.engine import writing
from watcher.ledger.findings import Audit
from watcher.ledger.tables import BUCKET, CELL, EVENT, LOOK, META, NOTICE, REJECT, SOURCE_STATE, TERM, VERDICT
from watcher.records import Entry, Event, Head

CHAINED = (META, TERM, CELL, LOOK, BUCKET, VERDICT, EVENT)


class _Undo(Exception):
    """Rolls a tampering back."""


def build(ledger: Ledger) -> Head:
    """Two promises on one source and one on another, two looks a day, breaches, an acknowledgement."""
    world = World(
        seed=7,
        rate=0.06,
        promises=(make_terms(), make_terms("scans"), make_terms("other", source="yard", slices=())),
    )
    for day in range(1, 7):
        for hour in (1, 5):
            for source in ("desk", "yard"):
                number, _ = ledger.newest_look(source)
                ledger.commit(world.entry(RELEASED + day * DAY + 3600 * hour, number, source=source))
    fact = {"look": ledger.events()[0].look, "event": ledger.events()[0].n, "who": "duty", "why": "seen"}
    acknowledged = Event("acknowledged", "damage-photos", "1", "", "", None, fact)
    return ledger.commit(Entry("", RELEASED + 7 * DAY, "acknowledge", METHOD, 0, (), (acknowledged,)))


@pytest.fixture(scope="module")
def ledger() -> Iterator[Ledger]:
    with Ledger.memory(new_id="00ff") as made:
        build(made)
        yield made


@contextmanager
def tampered(ledger: Ledger) -> Iterator[Connection]:
    try:
        with writing(ledger._engine) as connection:
            yield connection
            raise _Undo
    except _Undo:
        pass


def look_over(connection: Connection, head: Head | None = None) -> Audit:
    return audit_connection(connection, head=head, replay=SimpleReplay())


def tables_of(found: Audit) -> set[str]:
    return {f.table for f in found.findings}


def rows_of(connection: Connection, table: Table) -> list[dict[str, Any]]:
    keys = list(table.primary_key.columns)
    return [dict(r._mapping) for r in connection.execute(select(table).order_by(*keys))]


def same_row(table: Table, row: dict[str, Any]) -> list[Any]:
    return [c == row[c.name] for c in table.primary_key.columns]


def changed(value: Any) -> Any:
    if value is None:
        return 1
    if isinstance(value, int):
        return value + 7
    if isinstance(value, bytes):
        return value[:-1] + bytes([value[-1] ^ 1])
    return value[:-1] + chr(ord(value[-1]) ^ 1) if value else "x"


def test_a_ledger_that_was_only_written_by_commits_verifies(ledger: Ledger) -> None:
    """An untouched ledger has no findings and every pull is derived again."""
    found = audit(ledger, head=ledger.head(), replay=SimpleReplay())

    assert found.findings == ()
    assert (found.looks, found.rederived, found.other_method, found.not_rederived) == (25, 25, 0, 0)
    assert found.ok
    assert found.kept_head
    assert found.head == ledger.head()


def test_without_a_replay_nothing_is_called_derived(ledger: Ledger) -> None:
    """An audit without a replay verifies the chain and says that it derived nothing."""
    found = audit(ledger)

    assert (found.findings, found.rederived, found.not_rederived, found.kept_head) == ((), 0, 25, False)


@pytest.mark.parametrize("table", CHAINED, ids=lambda t: t.name)
def test_every_changed_value_is_found_and_its_table_named(ledger: Ledger, table: Table) -> None:
    """One changed value, in any row and column of a chained table, gives a finding in that table."""
    with tampered(ledger) as connection:
        rows = rows_of(connection, table)
        # Every row where there are few, every seventh else, so that each column is changed in many rows.
        for i, row in enumerate(rows):
            for j, column in enumerate(table.c):
                if len(rows) > 40 and (i + j) % 7:
                    continue
                with connection.begin_nested() as savepoint:
                    other = changed(row[column.name])
                    if column.primary_key and table in (TERM, CELL, LOOK, BUCKET, VERDICT, EVENT):
                        other = other if isinstance(other, str) else row[column.name] + 10**6
                    connection.execute(update(table).where(*same_row(table, row)).values({column.name: other}))
                    found = look_over(connection)
                    assert table.name in tables_of(found), (row, column.name, found.findings)
                    savepoint.rollback()


@pytest.mark.parametrize("table", CHAINED, ids=lambda t: t.name)
def test_every_removed_or_added_row_is_found_and_its_table_named(ledger: Ledger, table: Table) -> None:
    """One removed row, or one row more, gives a finding in that table."""
    with tampered(ledger) as connection:
        rows = rows_of(connection, table)
        last = rows[-1]
        for row in rows[:: max(1, len(rows) // 40)]:
            with connection.begin_nested() as savepoint:
                connection.execute(delete(table).where(*same_row(table, row)))
                assert table.name in tables_of(look_over(connection)), row
                savepoint.rollback()
        for name in [c.name for c in table.primary_key.columns]:
            with connection.begin_nested() as savepoint:
                added = {**last, name: "zz" if isinstance(last[name], str) else last[name] + 1}
                if table in (TERM, CELL):
                    added |= {"promise": "new"} if table is TERM else {"value": "new"}
                connection.execute(insert(table).values(added))
                assert table.name in tables_of(look_over(connection)), added
                savepoint.rollback()


@pytest.mark.parametrize("table", CHAINED, ids=lambda t: t.name)
def test_two_rows_that_change_places_are_found_and_their_table_named(ledger: Ledger, table: Table) -> None:
    """Neighbouring rows whose contents are exchanged under their keys give a finding in that table."""
    keys = {c.name for c in table.primary_key.columns}
    with tampered(ledger) as connection:
        rows = rows_of(connection, table)
        pairs = list(pairwise(rows))
        for a, b in pairs[:: max(1, len(pairs) // 30)]:
            contents = [{k: v for k, v in row.items() if k not in keys} for row in (a, b)]
            if contents[0] == contents[1]:
                continue
            with connection.begin_nested() as savepoint:
                parked = {k: f"parked{v}" for k, v in contents[0].items() if k in ("promise", "column")}
                if parked:  # term and cell have a second unique key
                    connection.execute(update(table).where(*same_row(table, a)).values(parked))
                connection.execute(update(table).where(*same_row(table, b)).values(contents[0]))
                connection.execute(update(table).where(*same_row(table, a)).values(contents[1]))
                assert table.name in tables_of(look_over(connection)), (a, b)
                savepoint.rollback()


def test_every_byte_of_a_sheet_counts(ledger: Ledger) -> None:
    """Flipping any single bit of a packed sheet is found in that look: one bit a byte, another one in each."""
    with tampered(ledger) as connection:
        sheet = connection.execute(select(LOOK.c.sheet).where(LOOK.c.number == 5)).scalar_one()
        for place in range(len(sheet)):
            forged = bytearray(sheet)
            forged[place] ^= 1 << (place % 8)
            connection.execute(update(LOOK).where(LOOK.c.number == 5).values(sheet=bytes(forged)))
            found = look_over(connection)
            assert ("look", "5") in {(f.table, f.key) for f in found.findings}, place


def test_another_packing_of_the_same_sheet_is_found(ledger: Ledger) -> None:
    """Even bytes that unpack to the very same sheet are other bytes."""
    with tampered(ledger) as connection:
        sheet = connection.execute(select(LOOK.c.sheet).where(LOOK.c.number == 5)).scalar_one()
        connection.execute(
            update(LOOK).where(LOOK.c.number == 5).values(sheet=zlib.compress(zlib.decompress(sheet), level=0))
        )
        found = look_over(connection)

    assert [(f.table, f.key) for f in found.findings] == [("look", "5")]
    assert "packed_digest" in found.findings[0].what


TEXTS = [
    (table, column.name)
    for table in CHAINED
    for column in table.c
    if column.type.python_type is str and column.name not in ("promise", "version", "column", "value", "level")
]


@settings(max_examples=60, deadline=None, derandomize=True, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(data=st.data())
def test_any_byte_of_any_text_counts(ledger: Ledger, data: st.DataObject) -> None:
    """A random character of a random stored text, replaced, removed or doubled, gives a finding in that table."""
    table, name = data.draw(st.sampled_from(TEXTS))
    with tampered(ledger) as connection:
        row = data.draw(st.sampled_from(rows_of(connection, table)))
        text = row[name] or "-"
        place = data.draw(st.integers(0, len(text) - 1))
        put = data.draw(st.sampled_from(["", text[place] * 2, "0", "1", "a", " ", "\u00e9", '"', "}"]))
        forged = text[:place] + put + text[place + 1 :]
        if forged == row[name]:
            return
        connection.execute(update(table).where(*same_row(table, row)).values({name: forged}))

        assert table.name in tables_of(look_over(connection)), (row, name, forged)


def test_a_changed_verdict_is_named_with_its_cell_and_day(ledger: Ledger) -> None:
    """The finding about a verdict row tells promise, slice and day."""
    with tampered(ledger) as connection:
        row = rows_of(connection, VERDICT)[8]
        connection.execute(update(VERDICT).where(*same_row(VERDICT, row)).values(body=row["body"].replace("4", "5", 1)))
        keys = {f.key for f in look_over(connection).findings}

    term, cell = 1, row["cell"]
    assert (term, cell) == (1, 2)  # ids count up in the order of sheets: the whole, then Alder
    assert f"'damage-photos' version '1' depot='Alder' day {row['day']}" in keys


def test_a_forged_verdict_with_a_forged_mark_is_still_found(ledger: Ledger) -> None:
    """The mark only helps to name a row; the digest of the day is in the chain, and the replay names the cell."""
    with tampered(ledger) as connection:
        row = rows_of(connection, VERDICT)[8]
        body = row["body"].replace('"labels":', '"labels":1', 1)

        line = VerdictRow("damage-photos", "1", "depot", "Alder", row["day"], row["look"], body, row["memory"]).line
        connection.execute(update(VERDICT).where(*same_row(VERDICT, row)).values(body=body, mark=mark(line)))
        with_replay = look_over(connection).findings
        without = audit_connection(connection, head=None, replay=None).findings

    day = row["day"]
    assert [f.key for f in without] == [f"source 'desk' day {day}"]
    assert [f.key for f in with_replay] == [
        f"'damage-photos' version '1' depot='Alder' day {day}",
        f"source 'desk' day {day}",
    ]


def cut_tail(connection: Connection) -> None:
    """Take the newest look away with everything it brought, as an attacker with all the code would: rebuild without."""
    last = connection.execute(select(func.max(LOOK.c.number))).scalar_one()
    connection.execute(delete(LOOK).where(LOOK.c.number == last))
    connection.execute(delete(EVENT).where(EVENT.c.look == last))
    digest = connection.execute(select(LOOK.c.digest).where(LOOK.c.number == last - 1)).scalar_one()
    connection.execute(update(META).where(META.c.name == "head").values(value=f"{last - 1}:{digest}"))


def test_a_cut_tail_is_seen_only_with_a_kept_head(ledger: Ledger) -> None:
    """Without a head kept elsewhere a shortened chain verifies; with one the missing look is named."""
    kept = ledger.head()
    with tampered(ledger) as connection:
        cut_tail(connection)
        blind = look_over(connection)
        seeing = look_over(connection, kept)

    assert blind.findings == ()
    assert [(f.table, f.key) for f in seeing.findings] == [("look", str(kept.look))]


def test_a_rewritten_chain_is_seen_only_with_a_kept_head(ledger: Ledger) -> None:
    """A ledger written afresh with kinder counts verifies by itself and fails against a kept head."""
    kept = ledger.head()
    with Ledger.memory(new_id="00ff") as forged:
        world = World(seed=8, rate=0.0, promises=(make_terms(),))
        for day in range(1, 30):
            forged.commit(world.entry(RELEASED + day * DAY, forged.newest_look("desk")[0]))
        blind = audit(forged, replay=SimpleReplay())
        seeing = audit(forged, replay=SimpleReplay(), head=kept)

    assert blind.findings == ()
    assert [(f.table, f.key) for f in seeing.findings] == [("look", str(kept.look))]


def test_an_earlier_kept_head_is_met_on_the_way(ledger: Ledger) -> None:
    """A head written down months ago is compared with the look of that number."""
    with ledger.reading() as connection:
        row = connection.execute(select(LOOK).where(LOOK.c.number == 9)).one()

    assert audit(ledger, head=Head(9, row.digest)).ok
    assert not audit(ledger, head=Head(9, "0" * 64)).ok


class Louder(SimpleReplay):
    """A rule that disagrees: it sees each breach's total a little higher."""

    def __init__(self, by: int) -> None:
        super().__init__()
        self.by = by

    def look(self, entry: Entry) -> Any:
        said = super().look(entry)
        return replace(said, standings=tuple(replace(s, total=s.total + self.by * 1e-6) for s in said.standings))


@pytest.mark.parametrize(("by", "ok"), [(2, True), (3, False)])
def test_totals_may_differ_by_two_micro_nats_and_no_more(ledger: Ledger, by: int, ok: bool) -> None:
    """A total derived again is accepted up to 2e-6 nats away (contracts.md, the ledger)."""
    found = audit(ledger, replay=Louder(by))

    assert found.ok is ok
    assert tables_of(found) <= {"verdict"}


class Deaf(SimpleReplay):
    """A rule that never raises a breach."""

    def look(self, entry: Entry) -> Any:
        return replace(super().look(entry), events=())


def test_an_event_that_is_not_derived_again_is_named(ledger: Ledger) -> None:
    """Events in the sheets that the rule does not make are findings."""
    found = audit(ledger, replay=Deaf())

    assert {f.table for f in found.findings} == {"event"}
    assert "was recorded and is not derived again" in found.findings[0].what


class Failing(SimpleReplay):
    """A rule that cannot cope."""

    def look(self, entry: Entry) -> Any:
        raise RuntimeError("no")


def test_a_replay_that_fails_is_a_finding_not_a_crash(ledger: Ledger) -> None:
    """When the rule itself breaks, the audit says at which look and goes on with the rest."""
    found = audit(ledger, replay=Failing())

    assert [(f.table, f.key) for f in found.findings] == [("look", "1")]
    assert found.rederived == 0


def test_looks_of_another_method_are_verified_and_said_not_to_be_derived() -> None:
    """Looks judged by an older method keep their chain; the rule takes over what they left, and the answer counts them."""
    world = World(seed=3, rate=0.08)
    replay = SimpleReplay()
    with Ledger.memory() as ledger:
        for day in range(1, 9):
            entry = world.entry(RELEASED + day * DAY, ledger.newest_look("desk")[0])
            ledger.commit(replace(entry, method=METHOD - 1 if day < 6 else METHOD))
        assert ledger.events(kinds=["breach"])[-1].look < 6
        found = audit(ledger, replay=replay)

    assert found.findings == ()
    assert (found.rederived, found.other_method, found.not_rederived) == (3, 5, 0)
    assert len(replay.adopted) == 5


def test_a_missing_look_in_the_middle_is_named(ledger: Ledger) -> None:
    """A gap in the numbers is told, and the tables are not compared with a model that has a hole."""
    with tampered(ledger) as connection:
        connection.execute(delete(LOOK).where(LOOK.c.number == 4))
        found = look_over(connection)

    assert ("look", "4") in {(f.table, f.key) for f in found.findings}
    assert tables_of(found) == {"look"}


def test_ten_thousand_damaged_rows_are_not_ten_thousand_lines(ledger: Ledger, monkeypatch: pytest.MonkeyPatch) -> None:
    """Findings are told up to a limit for each table, the rest as a number."""
    monkeypatch.setattr(findings, "MOST", 20)
    with tampered(ledger) as connection:
        rows = len(rows_of(connection, BUCKET))
        connection.execute(update(BUCKET).values(labels=BUCKET.c.labels + 1))
        found = look_over(connection)

    assert rows > 21
    assert len(found.findings) == 21
    assert found.findings[-1].what == f"and {rows - 20} more"


def test_rejects_notices_and_states_are_outside_the_chain(ledger: Ledger) -> None:
    """Deleting raw rows or notices is no damage: they may hold personal data, and are bounded."""
    with tampered(ledger) as connection:
        for table in (NOTICE, REJECT, SOURCE_STATE):
            connection.execute(delete(table))
        found = look_over(connection)

    assert found.ok
