"""The count of physical lines against Python's own CSV reader, on files made at random."""

from __future__ import annotations

import csv
import io
from pathlib import Path

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from watcher.sources import lines

TEXTS = st.text(alphabet='ab,"\n\r é', max_size=6)


@settings(
    deadline=None, max_examples=300, derandomize=True, suppress_health_check=[HealthCheck.function_scoped_fixture]
)
@given(
    records=st.lists(st.lists(TEXTS, min_size=2, max_size=2), min_size=1, max_size=8),
    end=st.sampled_from(["\n", "\r\n"]),
    chunk=st.sampled_from([1, 2, 3, 7, 1 << 20]),
    every=st.booleans(),
)
def test_lines_less_embedded_newlines_are_the_records(
    tmp_path: Path, records: list[list[str]], end: str, chunk: int, every: bool
) -> None:
    """However the bytes are cut into chunks, lines - embedded newlines = records, and a well-formed file is never refused."""
    text = io.StringIO(newline="")
    csv.writer(text, lineterminator=end, quoting=csv.QUOTE_ALL if every else csv.QUOTE_MINIMAL).writerows(records)
    path = tmp_path / "rows.csv"
    path.write_bytes(text.getvalue().encode())
    before = lines.CHUNK
    lines.CHUNK = chunk  # type: ignore[misc]
    try:
        found = lines.count(path, ",")
        blank = lines.blank(path, found, ",")
    finally:
        lines.CHUNK = before  # type: ignore[misc]

    assert len(records) == found.total - found.embedded
    assert text.getvalue().count("\n") == found.total
    assert (blank, found.unfinished, found.size) == (0, 0, path.stat().st_size)


@pytest.mark.parametrize("text", ['a,"b\n', 'a,"b"c\n', 'a,"b""\n', '"a" ,b\n', 'x,"y"\nx"y,z\n'])
@pytest.mark.parametrize("chunk", [1, 2, 3, 64])
def test_stray_quotes_are_refused(tmp_path: Path, monkeypatch: pytest.MonkeyPatch, text: str, chunk: int) -> None:
    """A quote that does not stand at a field's start or end is refused wherever a chunk begins."""
    path = tmp_path / "rows.csv"
    path.write_text(text)
    monkeypatch.setattr(lines, "CHUNK", chunk)

    with pytest.raises(lines.Malformed) as caught:
        lines.count(path, ",")
    assert caught.value.reason == "lines-unaccounted"


@pytest.mark.parametrize("chunk", [1, 2, 5, 64])
def test_blank_lines_and_mended_ends(tmp_path: Path, monkeypatch: pytest.MonkeyPatch, chunk: int) -> None:
    """Blank lines are counted in both line ends, and mending leaves LF alone."""
    path, copy = tmp_path / "rows.csv", tmp_path / "copy.csv"
    path.write_bytes(b'\na,b\n\n\r\n"x\n\n",y\r\n\r\n\r\nc,d\r\n\n')
    monkeypatch.setattr(lines, "CHUNK", chunk)
    found = lines.count(path, ",")
    lines.copy(path, copy, found.size, mend=True)

    assert (lines.blank(path, found, ","), found.total, found.embedded, found.mixed) == (6, 11, 2, True)
    assert copy.read_bytes() == b'\na,b\n\n\n"x\n\n",y\n\n\nc,d\n\n'
