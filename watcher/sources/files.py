"""CSV files, read by DuckDB: every line is accounted for, or nothing is counted."""

from __future__ import annotations

import contextlib
import glob
import hashlib
import tempfile
import time
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any, Final, TypeVar

import sqlalchemy as sa

from watcher.errors import SourceFailed
from watcher.records import Question, RejectedRow, Tally
from watcher.sources import lines as physical
from watcher.sources.base import SourceSpec, Survey
from watcher.sources.duck import Duck, csv_relation
from watcher.sources.header import Header, positions, read_header
from watcher.sources.lines import Lines, Malformed
from watcher.sources.statement import Statement, Table, parts_of
from watcher.sources.surveying import SAMPLE, survey_of
from watcher.sources.tallying import answer, rejected_row, shared

_T = TypeVar("_T")

SETTLED: Final = 60
"""Seconds after which a last line without a newline is taken to be finished."""
_SAMPLE: Final = 200_000
"""Rows in which the values of slice columns are counted before anything is aggregated."""


@dataclass(frozen=True, slots=True)
class _File:
    """One file of a pull: where it is read from (a copy when its last line is held back) and what its bytes say."""

    path: Path
    read: Path
    header: Header
    lines: Lines
    held: bool

    @property
    def records(self) -> int:
        """Lines that should be rows or blank."""
        return self.lines.total - self.lines.embedded - self.header.lines


class FileSource:
    """One CSV file or all that match a glob; `.gz` is decompressed.

    `clock` gives seconds since 1970 (the age of an unfinished last line); `pulled` is called after the rows were read and
    before the files are looked at again.
    """

    def __init__(
        self, spec: SourceSpec, clock: Callable[[], float] = time.time, pulled: Callable[[], None] = lambda: None
    ) -> None:
        self._spec, self._clock, self._pulled = spec, clock, pulled

    @property
    def name(self) -> str:
        """The source's name in the configuration."""
        return self._spec.name

    def signature(self) -> str:
        """Return a digest of path, size, modification time and inode of every file."""
        return _signature(self._paths())

    def columns(self) -> list[str]:
        """Return the columns of the first file, in file order."""
        with self._told():
            return list(read_header(self._paths()[0]).names)

    def tally(self, questions: Sequence[Question]) -> list[Tally]:
        """Answer all questions from one state of the files; a file that changes meanwhile is read again once."""

        def pull(files: Sequence[_File], engine: Duck) -> list[Tally]:
            found = shared(questions, lambda question: self._answer(question, files, engine))
            self._pulled()
            return found

        return self._steady(pull)

    def rejected(self, question: Question, reason: str, limit: int = 20) -> list[RejectedRow]:
        """Return at most `limit` of the rows that were rejected for `reason`, by file and line."""

        def pull(files: Sequence[_File], engine: Duck) -> list[RejectedRow]:
            statement = _ranking(Statement(question, _table(engine, files, parts_of(question), numbered=True)), engine)
            rows = engine.run(statement.rejected_rows(reason, limit))
            return [self._rejected(question, reason, row, files) for row in rows]

        return self._steady(pull)

    def survey(self, question: Question | None = None) -> Survey:
        """Look at the columns and first rows (no question), or at the values that a question would read."""

        def pull(files: Sequence[_File], engine: Duck) -> Survey:
            header = files[0].header
            if question is not None:
                statement = Statement(question, _table(engine, files, parts_of(question)))
                return survey_of(statement, engine.run, header.names)
            names = tuple(dict.fromkeys(header.names))
            table = _table(engine, files[:1], names)
            rows = engine.run(sa.select(*[table.columns[name] for name in names]).limit(SAMPLE))
            return Survey(names, tuple(tuple(row) for row in rows))

        return self._steady(pull)

    # --- one consistent read ------------------------------------------------------------------------------------------

    def _steady(self, pull: Callable[[Sequence[_File], Duck], _T]) -> _T:
        """Return what `pull` found while the files stayed the same; the second change in a row puts the look off."""
        for _ in range(2):
            before = self.signature()
            failure: SourceFailed | None = None
            found: list[_T] = []
            try:
                found.append(self._once(pull))
            except SourceFailed as error:
                failure = error
            try:
                steady = self.signature() == before
            except SourceFailed:
                steady = False
            if steady:
                if failure is not None:
                    raise failure
                return found[0]
        raise SourceFailed(
            self.name,
            "changed-during-pull",
            "a file changed while it was read, twice in a row; write to a file beside it and rename it when it is complete",
        )

    def _once(self, pull: Callable[[Sequence[_File], Duck], _T]) -> _T:
        paths = self._paths()
        began = time.monotonic()
        with self._told(), tempfile.TemporaryDirectory(prefix="watcher-") as scratch_name:
            scratch = Path(scratch_name)
            files = self._examined(paths, scratch)
            left = self._spec.timeout - (time.monotonic() - began)
            with Duck([file.read.parent for file in files], scratch, self._spec.memory, left) as engine:
                return pull(files, engine)

    @contextlib.contextmanager
    def _told(self) -> Iterator[None]:
        try:
            yield
        except Malformed as error:
            raise SourceFailed(self.name, error.reason, error.detail) from error
        except OSError as error:
            raise SourceFailed(self.name, "unreadable", f"{error.filename}: {error.strerror}") from error

    def _paths(self) -> list[Path]:
        pattern = self._spec.path
        if not pattern:
            raise SourceFailed(self.name, "missing", "no path is given; name a file or a glob such as 'labels/*.csv'")
        whole = self._spec.base / pattern
        found = [whole] if whole.is_file() else [Path(path) for path in sorted(glob.glob(str(whole), recursive=True))]  # noqa: PTH207 - base and pattern may both be absolute
        files = [path.resolve() for path in found if path.is_file()]
        if not files:
            raise SourceFailed(
                self.name, "missing", f"no file matches path = {pattern!r}; it is taken relative to the configuration"
            )
        return list(dict.fromkeys(files))

    def _examined(self, paths: Sequence[Path], scratch: Path) -> list[_File]:
        files = []
        for number, path in enumerate(paths):
            if path.stat().st_size == 0:
                raise Malformed("empty-file", f"{path.name} has 0 bytes: it is being written, or its export failed")
            header = read_header(path)
            counted = physical.count(path, header.delimiter, self._spec.max_bytes)
            file = _File(path, path, header, counted, held=False)
            held = bool(counted.unfinished) and self._clock() - path.stat().st_mtime < SETTLED
            if held or counted.mixed:
                file = _copied(file, scratch / f"{number}.csv", held=held)
            files.append(file)
        rows, size = sum(file.records for file in files), sum(file.lines.size for file in files)
        for key, found, most in (("max_rows", rows, self._spec.max_rows), ("max_bytes", size, self._spec.max_bytes)):
            if most is not None and found > most:
                raise Malformed(
                    f"too-many-{key[4:]}", f"the files hold {found} {key[4:]} and {key} = {most}; raise it or give less"
                )
        return files

    # --- one question -------------------------------------------------------------------------------------------------

    def _answer(self, question: Question, files: Sequence[_File], engine: Duck) -> Tally:
        statement = _ranking(Statement(question, _table(engine, files, parts_of(question))), engine)
        found = answer(statement, engine.run, self.name, self._spec.slice_limit, _SAMPLE)
        rows = sum(cell.counts.predictions for cell in found.cells if not cell.column)
        rows += found.duplicates + found.outside + sum(found.rejected.values())
        records = sum(file.records for file in files)
        empty = 0
        if rows != records:
            empty = sum(physical.blank(file.read, file.lines, file.header.delimiter) for file in files)
        if rows + empty != records:
            names = ", ".join(file.path.name for file in files[:5])
            raise SourceFailed(
                self.name,
                "lines-unaccounted",
                f"{names}: {records} lines stand in the files and {rows} rows and {empty} blank lines were read; nothing is counted",
            )
        held = any(file.held for file in files)
        return replace(found, lines=records, blank=empty, has_future=found.has_future or held)

    def _rejected(self, question: Question, reason: str, row: Any, files: Sequence[_File]) -> RejectedRow:
        file = next(file for file in files if str(file.read) == row.extra0)
        plain = file.lines.embedded == 0 and not physical.blank(file.read, file.lines, file.header.delimiter)
        line = file.header.lines + row.extra1 if plain else None
        return rejected_row(question, reason, file.path.name, line, row, keep=self._spec.keep_raw)


def _ranking(statement: Statement, engine: Duck) -> Statement:
    """Find the few ids that may occur more than once, so that only their rows need to be ranked.

    Rows whose id has a digest of its own are alone with their id: ranking would leave them as they are.
    """
    if not statement.question.columns.id:
        return statement
    if not engine.keep("suspects", statement.repeated()):
        return replace(statement, unique=True)
    return replace(statement, suspects=sa.table("suspects", sa.column("digest", sa.BigInteger())))


def _table(engine: Duck, files: Sequence[_File], wanted: Sequence[str], *, numbered: bool = False) -> Table:
    """Make one view over all files; files whose headers agree are read together, the others by their own order."""
    groups: dict[tuple[Header, bool, bool], list[_File]] = {}
    for file in files:
        groups.setdefault((file.header, file.lines.quoted, file.read.suffix == ".gz"), []).append(file)
    parts = []
    for (header, quoted, zipped), group in groups.items():
        place = positions(header, wanted, group[0].path.name)
        names = [f"c{i}" for i in range(len(header.names))]
        picked = [f"c{place[name]} AS n{i}" for i, name in enumerate(wanted)]
        for one in [[file] for file in group] if numbered else [group]:
            relation = csv_relation(
                [file.read for file in one], names, header.delimiter, header.lines, quoted=quoted, zipped=zipped
            )
            extra = ["filename AS file", "row_number() OVER () AS line"] if numbered else []
            parts.append(f"SELECT {', '.join([*picked, *extra])} FROM {relation}")  # noqa: S608 - names are ours, paths are literals
    if numbered:
        engine.execute("SET preserve_insertion_order = true")
    engine.execute(f"CREATE OR REPLACE TEMP VIEW samples AS {' UNION ALL '.join(parts)}")
    columns = [sa.column(f"n{i}", sa.Text()) for i in range(len(wanted))]
    extra_columns: list[sa.ColumnClause[Any]] = (
        [sa.column("file", sa.Text()), sa.column("line", sa.BigInteger())] if numbered else []
    )
    rows = sa.table("samples", *columns, *extra_columns)
    return Table(
        rows,
        {name: rows.c[f"n{i}"] for i, name in enumerate(wanted)},
        dict.fromkeys(wanted, "text"),
        ("file", "line") if numbered else (),
    )


def _copied(file: _File, copy: Path, *, held: bool) -> _File:
    """Return the file as a copy that the engine can read: one kind of line end, without an unfinished last line if `held`."""
    size = file.lines.size - (file.lines.unfinished if held else 0)
    physical.copy(file.path, copy, size, mend=file.lines.mixed)
    kept = replace(file.lines, total=file.lines.total - 1, size=size, unfinished=0) if held else file.lines
    return replace(file, read=copy.resolve(), lines=kept, held=held)


def _signature(paths: Sequence[Path]) -> str:
    digest = hashlib.sha256()
    for path in paths:
        try:
            stat = path.stat()
        except OSError:
            digest.update(f"{path}|gone\n".encode())
            continue
        digest.update(f"{path}|{stat.st_size}|{stat.st_mtime_ns}|{stat.st_ino}\n".encode())
    return digest.hexdigest()
