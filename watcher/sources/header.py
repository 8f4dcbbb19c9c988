"""The first record of a CSV file, read by Python's own reader: which column stands where."""

from __future__ import annotations

import csv
import difflib
import gzip
import io
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Final

from watcher.sources.lines import Malformed

DELIMITERS: Final = ",;\t|"
_FIELD: Final = 1 << 20


@dataclass(frozen=True, slots=True)
class Header:
    """The names of a file's columns in file order, the delimiter between them and the physical lines they take."""

    names: tuple[str, ...]
    delimiter: str
    lines: int


def read_header(path: Path) -> Header:
    """Read the header of a CSV file; `Malformed` when there is none or it is no text."""
    opener = gzip.open if path.suffix == ".gz" else open
    try:
        with opener(path, "rb") as raw, io.TextIOWrapper(raw, encoding="utf-8-sig", newline="") as file:
            first = file.readline(_FIELD)
            if not first.strip():
                raise Malformed("empty-file", f"{path.name} has no header line; the first line must name the columns")
            delimiter = max(DELIMITERS, key=lambda mark: (first.count(mark), -DELIMITERS.index(mark)))
            file.seek(0)
            reader = csv.reader(file, delimiter=delimiter)
            names = next(reader)
            return Header(tuple(name.strip() for name in names), delimiter, reader.line_num)
    except UnicodeDecodeError as error:
        raise Malformed("not-utf8", f"{path.name} is not UTF-8 text ({error.reason}); export it as UTF-8") from error
    except (EOFError, gzip.BadGzipFile) as error:
        raise Malformed("truncated", f"{path.name} is no intact gz file: {error}") from error
    except csv.Error as error:
        raise Malformed("lines-unaccounted", f"the header of {path.name} cannot be read: {error}") from error


def positions(header: Header, wanted: Iterable[str], place: str) -> dict[str, int]:
    """Return the position of each wanted column; `Malformed` names what is missing, the nearest name, and what there is."""
    found = {}
    for name in wanted:
        hits = [i for i, column in enumerate(header.names) if column == name]
        if len(hits) > 1:
            raise Malformed("column-ambiguous", f"{place} has {len(hits)} columns named {name!r}; rename all but one")
        if not hits:
            raise Malformed("column-missing", missing(name, header.names, place))
        found[name] = hits[0]
    return found


def missing(name: str, columns: Sequence[str], place: str) -> str:
    """Say that a column is missing, with the nearest name and all there are."""
    near = difflib.get_close_matches(name, columns, n=1)
    hint = f"; did you mean {near[0]!r}?" if near else ""
    return f"{place} has no column {name!r}{hint} Its columns: {', '.join(map(repr, columns[:50]))}"
