"""Files as they really come: each either counts in full or fails with its reason; nothing is ever lost in silence."""

from __future__ import annotations

import gzip
import os
import time
from dataclasses import replace
from pathlib import Path

import pytest
from sources.rows import question

from watcher.errors import SourceFailed
from watcher.records import Columns, Question, Tally
from watcher.sources import SourceSpec, open_source

HEADER = "parcel,at,predicted,observed,depot\n"
NOW = 2_000_000_000


def row(number: int, label: str = "ok") -> str:
    return f"p{number},2026-06-01T12:00:00Z,ok,{label},Alder\n"


def asked(**more: object) -> Question:
    columns = Columns(time="at", prediction="predicted", label="observed", id="parcel")
    return replace(question(slices=("depot",)), columns=columns, **more)  # type: ignore[arg-type]


def tally(
    folder: Path, path: str = "rows.csv", *, clock: float = NOW, pulled: object = None, **limits: object
) -> Tally:
    spec = SourceSpec("desk", "csv", path=path, base=folder, **limits)  # type: ignore[arg-type]
    source = open_source(spec, clock=lambda: clock, pulled=pulled or (lambda: None))  # type: ignore[arg-type]
    return source.tally([asked()])[0]


def refused(folder: Path, path: str = "rows.csv", **more: object) -> SourceFailed:
    with pytest.raises(SourceFailed) as caught:
        tally(folder, path, **more)  # type: ignore[arg-type]
    return caught.value


def predictions(found: Tally) -> int:
    return sum(cell.counts.predictions for cell in found.cells if not cell.column)


def put(folder: Path, text: str | bytes, name: str = "rows.csv") -> Path:
    path = folder / name
    path.write_bytes(text if isinstance(text, bytes) else text.encode())
    return path


def many(start: int, end: int) -> str:
    return "".join(map(row, range(start, end)))


def test_a_stray_quote_where_nothing_is_quoted_is_text(tmp_path: Path) -> None:
    """One quote character in a file without quoted fields costs no row."""
    put(tmp_path, HEADER + many(0, 500) + 'p500,2026-06-01T12:00:00Z,ok,ok,12" pipe\n' + many(501, 1000))
    found = tally(tmp_path)

    assert (predictions(found), found.rejected, found.lines, found.blank) == (1000, {}, 1000, 0)
    assert any(cell.value == '12" pipe' for cell in found.cells)


def test_a_stray_quote_at_a_fields_start_fails_the_look(tmp_path: Path) -> None:
    """A quote that is opened and never closed is named with its line; no count is returned."""
    put(tmp_path, HEADER + many(0, 500) + 'p500,2026-06-01T12:00:00Z,ok,ok,"Alder\n' + many(501, 1000))
    failure = refused(tmp_path)

    assert failure.reason == "lines-unaccounted"
    assert "line 502" in failure.detail


def test_a_stray_quote_among_quoted_fields_fails_the_look(tmp_path: Path) -> None:
    """An opened quote that the next quoted field would close is found at the place where it is wrong."""
    quoted = 'p{},2026-06-01T12:00:00Z,ok,ok,"Alder"\n'
    put(tmp_path, HEADER + quoted.format(1) + 'p2,2026-06-01T12:00:00Z,ok,ok,"Alder\n' + many(3, 9) + quoted.format(9))

    assert refused(tmp_path).reason == "lines-unaccounted"


def test_a_quote_inside_an_unquoted_field_among_quoted_ones_fails(tmp_path: Path) -> None:
    """Where fields are quoted, a quote inside another field is refused by line."""
    put(tmp_path, HEADER + 'p1,2026-06-01T12:00:00Z,ok,ok,"Alder"\np2,2026-06-01T12:00:00Z,ok,ok,12" pipe\n')
    failure = refused(tmp_path)

    assert failure.reason == "lines-unaccounted"
    assert "line 3" in failure.detail


def test_newlines_inside_quoted_fields_are_accounted_for(tmp_path: Path) -> None:
    """Embedded newlines, doubled quotes and blank lines do not disturb the count of lines."""
    put(
        tmp_path,
        HEADER + 'p1,2026-06-01T12:00:00Z,ok,ok,"A\n\n""x"", y\nB"\n\n\n"p2","2026-06-01T12:00:00Z","ok","no",""\n',
    )
    found = tally(tmp_path)

    assert (predictions(found), found.lines, found.blank) == (2, 4, 2)
    assert {"", 'A\n\n"x", y\nB'} == {cell.value for cell in found.cells if cell.column}


def test_line_ends_may_be_mixed(tmp_path: Path) -> None:
    """CRLF in the middle of a file with LF costs no row and ends up in no value."""
    put(tmp_path, (HEADER + many(0, 300) + many(300, 700).replace("\n", "\r\n") + many(700, 1000)).encode())
    found = tally(tmp_path)

    assert (1000, 1000, {"Alder"}) == (
        predictions(found),
        found.lines,
        {cell.value for cell in found.cells if cell.column},
    )


def test_half_a_last_line_is_held_back_while_the_file_is_young(tmp_path: Path) -> None:
    """A line still being written is not read; it is told that the file will count for more although it does not change."""
    path = put(tmp_path, HEADER + many(0, 10) + "p10,2026-06-01T12:00")
    os.utime(path, (NOW - 59, NOW - 59))
    found = tally(tmp_path)

    assert (predictions(found), found.lines, found.rejected, found.has_future) == (10, 10, {}, True)


def test_half_a_last_line_that_stays_is_no_row(tmp_path: Path) -> None:
    """After 60 seconds an unfinished line is taken as it stands: too few columns fail the look."""
    path = put(tmp_path, HEADER + many(0, 10) + "p10,2026-06-01T12:00")
    os.utime(path, (NOW - 60, NOW - 60))

    assert refused(tmp_path).reason == "lines-unaccounted"


def test_a_complete_last_line_without_newline_counts_after_a_minute(tmp_path: Path) -> None:
    """A last line without a newline is a line once nothing more comes."""
    path = put(tmp_path, (HEADER + many(0, 10)).removesuffix("\n"))
    os.utime(path, (NOW - 61, NOW - 61))
    late = tally(tmp_path)
    early = tally(tmp_path, clock=NOW - 10)

    assert (predictions(late), late.has_future, predictions(early), early.has_future) == (10, False, 9, True)


def test_a_byte_order_mark_is_no_part_of_the_first_column(tmp_path: Path) -> None:
    """A mark in front of the header, quoted or not, changes nothing."""
    put(tmp_path, b"\xef\xbb\xbf" + (HEADER + many(0, 3)).encode())
    put(tmp_path, b'\xef\xbb\xbf"parcel"' + (HEADER + many(0, 3)).encode().removeprefix(b"parcel"), "quoted.csv")

    assert (predictions(tally(tmp_path)), predictions(tally(tmp_path, "quoted.csv"))) == (3, 3)


def test_gz_is_decompressed_and_a_truncated_one_fails(tmp_path: Path) -> None:
    """A whole gz file counts like the plain one; half of one is no short file but a failed look."""
    whole = gzip.compress((HEADER + many(0, 5000)).encode())
    put(tmp_path, whole, "rows.csv.gz")
    put(tmp_path, whole[: len(whole) // 2], "half.csv.gz")
    put(tmp_path, b"no gz at all", "fake.csv.gz")

    assert predictions(tally(tmp_path, "rows.csv.gz")) == 5000
    assert refused(tmp_path, "half.csv.gz").reason == "truncated"
    assert refused(tmp_path, "fake.csv.gz").reason == "truncated"


def test_no_bytes_no_header_no_file_are_no_zero(tmp_path: Path) -> None:
    """0 bytes, an empty first line and a missing file are failures, never zero rows; a header alone is zero rows."""
    put(tmp_path, b"", "empty.csv")
    put(tmp_path, b"\n\n", "blank.csv")
    put(tmp_path, HEADER, "header.csv")

    assert refused(tmp_path, "empty.csv").reason == "empty-file"
    assert refused(tmp_path, "blank.csv").reason == "empty-file"
    assert refused(tmp_path, "nowhere.csv").reason == "missing"
    assert refused(tmp_path, "*.parquet").reason == "missing"
    header = tally(tmp_path, "header.csv")
    assert (predictions(header), header.lines, header.cells) == (0, 0, ())


def test_a_file_replaced_once_during_the_pull_is_read_again(tmp_path: Path) -> None:
    """The second read is what counts."""
    path = put(tmp_path, HEADER + many(0, 10))
    calls = []

    def replace_once() -> None:
        calls.append(1)
        if len(calls) == 1:
            put(tmp_path, HEADER + many(0, 20), "new.csv").replace(path)

    assert predictions(tally(tmp_path, pulled=replace_once)) == 20
    assert len(calls) == 2


def test_a_file_that_keeps_growing_puts_the_look_off(tmp_path: Path) -> None:
    """Growing during both reads: no count."""
    path = put(tmp_path, HEADER + many(0, 10))

    def grow() -> None:
        with path.open("a") as file:
            file.write(row(time.monotonic_ns()))

    assert refused(tmp_path, pulled=grow).reason == "changed-during-pull"


def test_a_file_that_vanishes_during_the_pull_puts_the_look_off(tmp_path: Path) -> None:
    """Gone after the read: the count is thrown away and the file is missing."""
    path = put(tmp_path, HEADER + many(0, 10))

    assert refused(tmp_path, pulled=path.unlink).reason == "missing"


def test_columns_may_stand_in_another_order_in_each_file(tmp_path: Path) -> None:
    """Columns are found by name in each file's own header, further ones are ignored."""
    put(tmp_path, HEADER + many(0, 10), "a.csv")
    put(tmp_path, "note,depot,observed,predicted,at,parcel\n" + "x,Birch,no,ok,2026-06-01T12:00:00Z,q1\n", "b.csv")
    found = tally(tmp_path, "*.csv")
    whole = next(cell for cell in found.cells if not cell.column)

    assert (whole.counts.predictions, whole.counts.errors, found.lines) == (11, 1, 11)


def test_a_missing_column_is_named_with_the_nearest(tmp_path: Path) -> None:
    """The message names the column, the nearest one and all there are."""
    put(tmp_path, HEADER.replace("observed", "obsreved") + many(0, 1))
    failure = refused(tmp_path)

    assert failure.reason == "column-missing"
    assert "'observed'" in failure.detail
    assert "did you mean 'obsreved'" in failure.detail
    put(tmp_path, HEADER.replace("depot", "at") + many(0, 1))
    assert refused(tmp_path).reason == "column-ambiguous"


def test_a_field_of_three_megabytes_fails_by_line(tmp_path: Path) -> None:
    """A line longer than the reader's buffer is refused before reading, by number."""
    put(tmp_path, HEADER + many(0, 10) + row(10).replace("Alder", "A" * 3_000_000) + many(11, 20))
    failure = refused(tmp_path)

    assert failure.reason == "line-too-long"
    assert "line 12" in failure.detail


@pytest.mark.parametrize(
    "bad", ["p1,2026-06-01T12:00:00Z,ok,ok\n", "p1,2026-06-01T12:00:00Z,ok,ok,Alder,more\n", "p1\n", "x\x00\n"]
)
def test_a_line_with_another_number_of_fields_fails(tmp_path: Path, bad: str) -> None:
    """Too few or too many fields are a failed look that names the line, not a dropped row."""
    put(tmp_path, HEADER + many(0, 100) + bad + many(100, 200))
    failure = refused(tmp_path)

    assert failure.reason == "lines-unaccounted"


def test_bytes_that_are_no_utf8_fail(tmp_path: Path) -> None:
    """Another encoding is refused with its own reason."""
    put(tmp_path, (HEADER + row(1).replace("Alder", "Ålder")).encode("latin-1"))

    assert refused(tmp_path).reason == "not-utf8"


def test_limits_of_rows_bytes_and_time(tmp_path: Path) -> None:
    """max_rows, max_bytes and timeout each end the pull with their own reason."""
    put(tmp_path, HEADER + many(0, 100))

    assert refused(tmp_path, max_rows=99).reason == "too-many-rows"
    assert refused(tmp_path, max_bytes=1000).reason == "too-many-bytes"
    assert refused(tmp_path, timeout=0.0).reason == "timeout"
    assert predictions(tally(tmp_path, max_rows=100, max_bytes=100_000)) == 100


def test_too_many_slice_values_are_refused_before_anything_is_counted(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """201 values with a limit of 200: refused with the count, and the counting statement is never built."""
    from watcher.sources.statement import Statement

    put(tmp_path, HEADER + "".join(row(i).replace("Alder", f"d{i}") for i in range(201)))
    monkeypatch.setattr(Statement, "counted", lambda *_: pytest.fail("aggregated"))
    failure = refused(tmp_path)

    assert failure.reason == "too-many-values"
    assert "201 values" in failure.detail


def test_values_that_only_show_up_while_counting_are_refused_too(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """A column whose first rows look harmless is refused with its full count when the counts come in."""
    import watcher.sources.files as files

    monkeypatch.setattr(files, "_SAMPLE", 10)
    put(tmp_path, HEADER + many(0, 10) + "".join(row(100 + i).replace("Alder", f"d{i}") for i in range(300)))
    failure = refused(tmp_path)

    assert failure.reason == "too-many-values"
    assert "301 values" in failure.detail


HOSTILE = [
    "=1+1",
    "'; DROP TABLE samples; --",
    '"><script>',
    "a\x1b[31mb",
    "$1",
    ":x",
    "%s",
    "\\",
    "{0}",
    "Ω≈ç√",
    "a" * 500,
]


def test_hostile_text_is_only_text(tmp_path: Path) -> None:
    """Values and column names with quotes, markup, escapes and placeholders are counted as they stand."""
    import csv

    names = ['at"; DROP', "pre$1dicted", "obs:erved", "de'pot", "c0"]
    with (tmp_path / "rows.csv").open("w", newline="") as file:
        writer = csv.writer(file, lineterminator="\n")
        writer.writerow(names)
        writer.writerows([["2026-06-01T12:00:00Z", text, "x", text, text] for text in HOSTILE])
    columns = Columns(time=names[0], prediction=names[1], label=names[2])
    q = replace(question(identified=False, slices=("de'pot",)), columns=columns, where=(("c0", HOSTILE[1]),))
    everything = replace(q, where=())
    source = open_source(SourceSpec("desk", "csv", path="rows.csv", base=tmp_path))
    one, found = source.tally([q, everything])

    assert (predictions(one), one.outside) == (1, 10)
    assert set(HOSTILE) == {cell.value for cell in found.cells if cell.column}


def test_rejected_rows_are_shown_with_file_and_line(tmp_path: Path) -> None:
    """A sample of a reason: file, line, id and the values as read; without them where raw rows may not be kept."""
    put(
        tmp_path,
        HEADER
        + many(0, 3)
        + "p3,2026-02-30T00:00:00Z,ok,ok,Alder\n"
        + many(4, 9)
        + ",2026-06-01T12:00:00Z,ok,ok, Birch\n",
    )
    source = open_source(SourceSpec("desk", "csv", path="rows.csv", base=tmp_path))
    (bad,) = source.rejected(asked(), "bad-time")
    (nameless,) = source.rejected(asked(), "no-id")
    (secret,) = open_source(SourceSpec("desk", "csv", path="rows.csv", base=tmp_path, keep_raw=False)).rejected(
        asked(), "bad-time"
    )

    assert (bad.file, bad.line, bad.id, bad.values["at"]) == ("rows.csv", 5, "p3", "2026-02-30T00:00:00Z")
    assert (nameless.line, nameless.id, nameless.values["depot"]) == (11, None, " Birch")
    assert (secret.id, secret.values) == (None, {})
    assert len(source.rejected(asked(now=0), "future-time", limit=2)) == 2


def test_the_signature_changes_with_the_files(tmp_path: Path) -> None:
    """Size, time, inode or a further file change the signature; a second look does not."""
    path = put(tmp_path, HEADER + many(0, 3))
    source = open_source(SourceSpec("desk", "csv", path="*.csv", base=tmp_path))
    first, again = source.signature(), source.signature()
    os.utime(path, (1, 1))
    touched = source.signature()
    put(tmp_path, HEADER, "more.csv")

    assert first == again
    assert len({first, touched, source.signature()}) == 3


def test_a_survey_names_columns_values_and_the_first_day(tmp_path: Path) -> None:
    """What `draft` and `check` need to know is found without counting."""
    put(tmp_path, HEADER + row(0) + row(1, "1.0") + row(2, "") + "p3,2025-01-01T00:00:00Z,1,1,Birch\n")
    source = open_source(SourceSpec("desk", "csv", path="rows.csv", base=tmp_path))
    draft, values = source.survey(), source.survey(asked())

    assert HEADER.strip().split(",") == list(draft.columns) == source.columns()
    assert ("p0", "2026-06-01T12:00:00Z", "ok", "ok", "Alder") in draft.rows
    assert (
        values.predictions,
        values.labels,
        values.pairs,
        values.differing,
    ) == ((("ok", 3), ("1", 1)), (("1", 2), ("ok", 1)), 3, 1)
    assert (values.first_time, values.slices, values.disjoint) == (1735689600, (("depot", 2),), False)
