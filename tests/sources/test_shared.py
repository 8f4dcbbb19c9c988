"""Promises that ask the same question share one statement."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import pytest

from watcher.records import Columns, Question, Tally
from watcher.sources.memory import MemorySource

ROWS = [
    {"id": str(n), "t": "2026-01-05T10:00:00Z", "p": "a", "l": "a" if n % 3 else "b", "s": str(n % 2)} for n in range(9)
]
ASKED = Question(
    promise="first",
    version="1",
    columns=Columns("t", "p", id="id", label="l"),
    time_format="rfc3339",
    source_time_zone=None,
    where=(),
    classes=(),
    positive=None,
    measure="error",
    slices=("s",),
    weight_levels=(),
    n_max=None,
    cluster_span=None,
    labelling_probabilities=(),
    time_zone="UTC",
    bucket=86400,
    released=1767571200,
    open_from=1767571200,
    label_lag=86400,
    now=1767571200 + 86400,
    at_given=True,
)


def test_equal_questions_share_a_statement_and_keep_their_names(monkeypatch: pytest.MonkeyPatch) -> None:
    """Three promises, two different questions: two statements, three answers, each as if it had been asked alone."""
    from watcher.sources import memory

    asked: list[Question] = []

    def counted(statement: Any, *rest: Any) -> Tally:
        asked.append(statement.question)
        return answer(statement, *rest)

    answer = memory.answer
    monkeypatch.setattr(memory, "answer", counted)
    source = MemorySource("m", ["id", "t", "p", "l", "s"], ROWS)
    other = replace(ASKED, promise="third", where=(("s", "1"),))
    found = source.tally([ASKED, replace(ASKED, promise="second", version="2"), other])

    assert len(asked) == 2
    assert [(tally.promise, tally.version) for tally in found] == [("first", "1"), ("second", "2"), ("third", "1")]
    assert found[0].cells == found[1].cells == source.tally([ASKED])[0].cells
    assert found[2].cells != found[0].cells
