"""The verdict table: against the digests in the chain, and against the verdicts derived again."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from sqlalchemy import Connection, select

from watcher.ledger import canon, chain
from watcher.ledger.compare import body_differences, event_differences, memory_differences
from watcher.ledger.expected import Expected
from watcher.ledger.findings import Findings, Replay
from watcher.ledger.standing import standing_body, standing_from
from watcher.ledger.tables import CELL, VERDICT
from watcher.records import Entry, Standing

Derived = tuple[int, Standing, Mapping[str, Any]]
"""look, standing, memory"""


class VerdictAudit:
    """Waits until a source enters a new day: only then the rows of the last one are final."""

    def __init__(self, connection: Connection, found: Findings, expected: Expected, replay: Replay | None) -> None:
        self._connection = connection
        self._found = found
        self._expected = expected
        self._replay = replay
        self._days: dict[str, tuple[int, str, dict[int, Derived]]] = {}
        """source -> (day, verdict digest of its newest look, what was derived for each cell)"""
        self.rederived = 0
        self.other_method = 0

    def before(self, source: str, at: int) -> None:
        """A look of `source` at `at` follows."""
        if source in self._days and self._days[source][0] != chain.day_of(at):
            self._close(source)

    def look(self, number: int, entry: Entry, verdict_digest: str) -> None:
        """Derive a look again, if its method is ours."""
        day = chain.day_of(entry.at)
        _, _, derived = self._days.get(entry.source, (day, "", {}))
        self._days[entry.source] = (day, verdict_digest, derived)
        if self._replay is None:
            return
        if entry.method == self._replay.method:
            self._derive(self._replay, number, entry, derived)
        else:
            self.other_method += 1
            self._adopt(self._replay, number, entry)

    def finish(self) -> None:
        """The chain has ended: close every day that is still open."""
        for source in list(self._days):
            self._close(source)

    def _derive(self, replay: Replay, number: int, entry: Entry, derived: dict[int, Derived]) -> None:
        try:
            said = replay.look(entry)
        except Exception as error:  # noqa: BLE001 - a chain that was tampered with may break the replay anywhere
            self._found.add("look", number, f"cannot be derived again: {error!r}; nor can the looks after it")
            self._replay = None
            return
        self.rederived += 1
        recorded = [e for e in entry.events if e.kind in replay.derives]
        again = [e for e in said.events if e.kind in replay.derives]
        for what in event_differences(recorded, again):
            self._found.add("event", f"look {number}", what)
        for standing, memory in zip(said.standings, said.memories, strict=True):
            term = self._expected.terms[standing.promise, standing.version]
            cell_id, _ = term.cells[standing.column, standing.value]
            derived[cell_id] = (number, standing, memory)

    def _adopt(self, replay: Replay, number: int, entry: Entry) -> None:
        standings, memories = [], []
        for row in self._rows(entry.source, chain.day_of(entry.at)):
            if row.look == number and row.cell in self._expected.cells:
                term, cell = self._expected.cells[row.cell]
                body = canon.parse(row.body)
                standings.append(standing_from(body, terms=term.terms, digest=term.digest, cell=cell))
                memories.append(canon.parse(row.memory))
        replay.adopt(entry, tuple(standings), tuple(memories))

    def _rows(self, source: str, day: int) -> list[Any]:
        ids = [term.id for term in self._expected.source_terms(source)]
        statement = (
            select(VERDICT)
            .join_from(VERDICT, CELL, CELL.c.id == VERDICT.c.cell)
            .where(VERDICT.c.day == day, CELL.c.term.in_(ids))
        )
        return list(self._connection.execute(statement))

    def _close(self, source: str) -> None:
        day, digest, derived = self._days.pop(source)
        lines = []
        whole = True
        for row in self._rows(source, day):
            name = self._expected.name(row.cell, f"day {day}")
            try:
                line = self._line(row)
                lines.append(line)
                if chain.mark(line) != row.mark:
                    whole = False
                    self._found.add("verdict", name, "does not give its mark: the row was changed")
                self._compare(row, name, derived.get(row.cell))
            except (ValueError, TypeError, KeyError, AttributeError) as error:
                whole = False
                self._found.add("verdict", name, f"cannot be read: {error}")
        if whole and chain.verdict_digest(lines) != digest:
            self._found.add(
                "verdict",
                f"source {source!r} day {day}",
                "the rows of this day do not give the verdict digest in the chain",
            )

    def _line(self, row: Any) -> str:
        term, cell = self._expected.cells[row.cell]
        t = term.terms
        return chain.VerdictRow(
            t.promise, t.version, cell.column, cell.value, row.day, row.look, row.body, row.memory
        ).line

    def _compare(self, row: Any, name: str, derived: Derived | None) -> None:
        if derived is None or derived[0] != row.look:
            return
        _, standing, memory = derived
        wrong = body_differences(canon.parse(row.body), standing_body(standing))
        if wrong:
            self._found.add("verdict", name, f"is not what its look derives: {', '.join(wrong)}")
        wrong = memory_differences(canon.parse(row.memory), memory)
        if wrong:
            self._found.add("verdict", name, f"its memory is not what its look derives: {', '.join(wrong)}")
