"""What docs/ledger.md says is so."""

from __future__ import annotations

import re
import subprocess
import sys
from fractions import Fraction
from pathlib import Path

from ledger.world import DAY, RELEASED, World, make_terms

from watcher.ledger import Ledger
from watcher.ledger.sheet import sheet_text
from watcher.ledger.tables import METADATA
from watcher.ledger.terms import canonical_terms
from watcher.records import Cell, CellCounts, Counts, Entry, Event, Remarks, TermDraft

DOCS = Path(__file__).parents[2] / "docs" / "ledger.md"


def blocks(language: str) -> list[str]:
    return re.findall(rf"^```{language}\n(.*?)^```", DOCS.read_text(), re.DOTALL | re.MULTILINE)


def test_the_example_of_a_sheet_is_a_sheet() -> None:
    """The lines shown are those that the entry they tell of gives; the terms are cut with dots."""
    draft = TermDraft(
        promise="damage-photos",
        version="1",
        new_terms=make_terms(),
        new_cells=(Cell("", "", Fraction(1, 2), 0), Cell("depot", "Alder", Fraction(1, 5), 0)),
        counts=(CellCounts("depot", "Alder", RELEASED, "", Counts(38, 33, 2, newest=RELEASED + DAY - 1)),),
        gone=(("depot", "Alder", RELEASED + DAY, ""),),
        sealed=(RELEASED,),
        sealed_until=RELEASED + DAY,
        remarks=Remarks(uncertified=True),
        standings=(),
        memories=(),
    )
    event = Event("breach", "damage-photos", "1", "", "", RELEASED, {"errors": 4, "rate": 4 / 31})
    rejected = {"damage-photos": {"bad-time": 3}}
    entry = Entry("desk", RELEASED, "pull", 1, 0, (draft,), (event,), rejected_counts=rejected)
    shown = blocks("")[0]
    cut = canonical_terms(make_terms()).split(',"cluster_span"')[0]

    assert shown.splitlines()[:-1] == sheet_text(entry).splitlines()[:-1]
    assert shown.splitlines()[-1] == f'["terms",0,{cut},...}}]'


def test_the_program_that_verifies_a_chain_by_hand_does(tmp_path: Path) -> None:
    """The few lines in the docs, which share no code with the ledger, agree with it and notice one changed byte."""
    path = tmp_path / "watcher.db"
    program = tmp_path / "verify.py"
    program.write_text(blocks("python")[0])
    world = World(4, rate=0.1)
    with Ledger.open(f"sqlite:///{path}") as ledger:
        for day in range(1, 6):
            ledger.commit(world.entry(RELEASED + day * DAY, day - 1))
        head = ledger.head()
        told = subprocess.run([sys.executable, program, path], capture_output=True, text=True, check=True)
        with ledger.writing() as connection:
            connection.exec_driver_sql("UPDATE look SET at = at + 1 WHERE number = 3")
        changed = subprocess.run([sys.executable, program, path], capture_output=True, text=True, check=False)

    assert told.stdout == f"{head} is the head\n"
    assert (changed.returncode, changed.stderr) == (1, "look 3 does not verify\n")


def test_every_table_is_told() -> None:
    """No table of the ledger is missing from the docs."""
    told = DOCS.read_text()

    assert [name for name in METADATA.tables if f"`{name}`" not in told] == []
