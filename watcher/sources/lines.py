"""The physical lines of a CSV file, counted from its bytes: what the parser's rows are held against."""

from __future__ import annotations

import gzip
import zlib
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Final

import numpy as np

CHUNK: Final = 1 << 20
LONGEST: Final = 2_000_000
"""Bytes in a line; the parser's buffer holds a little more."""
_NEWLINE: Final = 10
_QUOTE: Final = 34
_RETURN: Final = 13


class Malformed(Exception):
    """The bytes are no file of this kind: a short reason code and a sentence."""

    def __init__(self, reason: str, detail: str) -> None:
        self.reason, self.detail = reason, detail
        super().__init__(detail)


@dataclass(frozen=True, slots=True)
class Lines:
    """What the bytes of one file say."""

    total: int
    """Physical lines, the header and an unfinished last one included."""
    embedded: int
    """Newlines inside quoted fields."""
    quoted: bool
    """Whether any field is quoted; if none is, a quote character is text like any other."""
    size: int
    """Bytes after decompression."""
    unfinished: int
    """Bytes of a last line that has no newline."""
    mixed: bool = False
    """Some lines end in CRLF and some in LF."""


def chunks(path: Path) -> Iterator[bytes]:
    """Yield the decompressed bytes; `Malformed` if a gz file is truncated or damaged."""
    if path.suffix != ".gz":
        with path.open("rb") as file:
            while block := file.read(CHUNK):
                yield block
        return
    try:
        with gzip.open(path, "rb") as file:
            while block := file.read(CHUNK):
                yield block
    except EOFError as error:
        raise Malformed(
            "truncated", f"{path.name} ends before its compressed data do: it is still being written or damaged"
        ) from error
    except (gzip.BadGzipFile, zlib.error) as error:
        raise Malformed("truncated", f"{path.name} is no intact gz file: {error}") from error


def count(path: Path, delimiter: str, most: int | None = None) -> Lines:
    """Count the lines of a file; `most` bounds its bytes. Raises `Malformed` for stray quotes, long lines, too many bytes."""
    quoted = _quotes_in_use(path, delimiter)
    scan = _Scan(path.name, ord(delimiter), quoted)
    for block in chunks(path):
        scan.take(block)
        if most is not None and scan.size > most:
            raise Malformed(
                "too-many-bytes", f"{path.name} holds more than max_bytes = {most} bytes after decompression"
            )
    return scan.result()


def copy(path: Path, to: Path, size: int, *, mend: bool) -> None:
    """Copy the first `size` decompressed bytes; `mend` makes every CRLF an LF."""
    left, kept = size, b""
    with to.open("wb") as out:
        for block in chunks(path):
            part = kept + block[:left]
            left -= min(left, len(block))
            kept = b"\r" if mend and left and part.endswith(b"\r") else b""
            part = part[: len(part) - len(kept)]
            out.write(part.replace(b"\r\n", b"\n") if mend else part)
            if not left:
                return


def blank(path: Path, lines: Lines, delimiter: str) -> int:
    """Count the lines with nothing in them, quoted fields left aside; a second pass, made only when rows are missing."""
    scan = _Scan(path.name, ord(delimiter), lines.quoted, blanks=0)
    for block in chunks(path):
        scan.take(block)
    return scan.blanks or 0


def _quotes_in_use(path: Path, delimiter: str) -> bool:
    """Whether some field begins with a quote character."""
    start = b"\n"
    openings = (b'\n"', delimiter.encode() + b'"', b'\n\xef\xbb\xbf"')
    for block in chunks(path):
        if b'"' in block:
            text = start + block
            if any(opening in text for opening in openings):
                return True
        start = (start + block)[-4:]
    return False


@dataclass(slots=True)
class _Scan:
    name: str
    delimiter: int
    quoted: bool
    size: int = 0
    newlines: int = 0
    crlf: int = 0
    embedded: int = 0
    open: bool = False
    since: int = 0
    """Bytes since the last newline."""
    tail: bytes = b"\n"
    opened: int = 0
    """The line in which the quote that is open was opened."""
    blanks: int | None = None
    """Empty lines so far; None: not counted."""

    def take(self, block: bytes) -> None:
        array = np.frombuffer(block, dtype=np.uint8)
        found = int(np.count_nonzero(array == _NEWLINE))
        self._measure(block, found)
        if b"\r" in block or self.tail[-1:] == b"\r":
            self.crlf += block.count(b"\r\n") + (self.tail[-1:] == b"\r" and block[:1] == b"\n")
        if self.blanks is not None:
            self._blank(block, array)
        if self.quoted:
            self._quotes(block, array)
        self.newlines += found
        self.size += len(block)
        self.tail = (self.tail + block)[-4:]

    def _measure(self, block: bytes, found: int) -> None:
        if not found:
            self.since += len(block)
            longest = self.since
        else:
            longest = self.since + block.index(b"\n")
            self.since = len(block) - 1 - block.rindex(b"\n")
        if longest > LONGEST or self.since > LONGEST:
            where = f"line {self.newlines + 1} of {self.name}"
            raise Malformed(
                "line-too-long", f"{where} is longer than {LONGEST} bytes; leave such columns out of the export"
            )

    def _blank(self, block: bytes, array: Any) -> None:
        kept = self.tail[-2:] if self.size else b"\n"
        text = np.frombuffer(kept + block, dtype=np.uint8)
        ends = np.flatnonzero(text == _NEWLINE)
        ends = ends[ends >= len(kept)]
        empty = text[ends - 1] == _NEWLINE
        empty |= (text[ends - 1] == _RETURN) & (text[np.maximum(ends - 2, 0)] == _NEWLINE) & (ends >= 2)
        if self.quoted:
            places = np.flatnonzero(array == _QUOTE)
            empty &= (np.searchsorted(places, ends - len(kept)) + (1 if self.open else 0)) % 2 == 0
        self.blanks = (self.blanks or 0) + int(np.count_nonzero(empty))

    def _quotes(self, block: bytes, array: Any) -> None:
        """Hold every quote character to its place: opening at a field's start, closing at a field's end."""
        places = np.flatnonzero(array == _QUOTE)
        if self.tail[-1:] == b'"':
            self._after(array[0], self.newlines + 1)
        if not places.size:
            if self.open:
                self.embedded += int(np.count_nonzero(array == _NEWLINE))
            return
        before = np.empty(places.size, dtype=np.uint8)
        before[:] = array[places - 1]
        if places[0] == 0:
            before[0] = self.tail[-1]
        first = 1 if self.open else 0
        opening, closing = places[first::2], places[1 - first :: 2]
        ahead = before[first::2]
        allowed = (ahead == self.delimiter) | (ahead == _NEWLINE) | (ahead == _QUOTE) | (ahead == _RETURN)
        if not allowed.all():
            wrong = int(opening[int(np.argmin(allowed))])
            is_mark = self.size + wrong == 3 and (self.tail + block[:wrong])[-3:] == b"\xef\xbb\xbf"
            if not (is_mark and int(np.count_nonzero(~allowed)) == 1):
                self._stray(int(np.count_nonzero(array[:wrong] == _NEWLINE)))
        inner = closing[closing + 1 < array.size]
        next_ = array[inner + 1]
        fine = (next_ == self.delimiter) | (next_ == _NEWLINE) | (next_ == _QUOTE) | (next_ == _RETURN)
        if not fine.all():
            self._stray(int(np.count_nonzero(array[: int(inner[int(np.argmin(fine))])] == _NEWLINE)))
        newlines = np.flatnonzero(array == _NEWLINE)
        parity = (np.searchsorted(places, newlines) + first) % 2
        self.embedded += int(np.count_nonzero(parity))
        self.open = (places.size + first) % 2 == 1
        if self.open:
            self.opened = self.newlines + 1 + int(np.searchsorted(newlines, places[-1]))

    def _after(self, byte: int, line: int) -> None:
        """A quote that ended the block before: if it closed a field, the field must end here."""
        if not self.open and byte not in (self.delimiter, _NEWLINE, _QUOTE, _RETURN):
            self._stray(line - 1 - self.newlines)

    def _stray(self, further: int) -> None:
        raise Malformed(
            "lines-unaccounted",
            f"line {self.newlines + 1 + further} of {self.name} has a quote character inside a field; "
            f'write it twice inside a quoted field ("") or quote no field at all',
        )

    def result(self) -> Lines:
        if self.open:
            raise Malformed(
                "lines-unaccounted",
                f"the quote opened in line {self.opened} of {self.name} is never closed and would swallow the rest of the file",
            )
        total = self.newlines + (1 if self.since else 0)
        mixed = 0 < self.crlf < self.newlines
        return Lines(total, self.embedded, self.quoted, self.size, self.since, mixed)
