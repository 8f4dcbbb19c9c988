"""A report in its formats, as bytes and as files."""

from __future__ import annotations

import os
from collections.abc import Callable, Sequence
from contextlib import suppress
from pathlib import Path
from typing import Final

from watcher.errors import UsageError, WatcherError
from watcher.report import render
from watcher.report.json_form import as_json
from watcher.report.page import Draw, as_html
from watcher.report.pdf import as_pdf
from watcher.report.table import as_csv
from watcher.report.weekly import Report

FORMATS: Final = ("html", "csv", "json", "pdf")
DEFAULT: Final = ("html", "csv", "json")
"""What needs no extra."""


def contents(report: Report, formats: Sequence[str] = DEFAULT, draw: Draw = render.svg) -> dict[str, bytes]:
    """Format -> content, in the order asked for; the same report gives the same bytes.

    Raises UsageError for an unknown format, and for pdf without the extra.
    """
    unknown = [each for each in formats if each not in FORMATS]
    if unknown:
        raise UsageError(f"format = {unknown[0]!r}: allowed are {', '.join(FORMATS)}")
    page = as_html(report, draw) if {"html", "pdf"} & set(formats) else ""
    made: dict[str, Callable[[], bytes]] = {
        "html": lambda: page.encode(),
        "csv": lambda: as_csv(report).encode(),
        "json": lambda: as_json(report).encode(),
        "pdf": lambda: as_pdf(page),
    }
    return {each: made[each]() for each in formats}


def write(report: Report, folder: Path, formats: Sequence[str] = DEFAULT, draw: Draw = render.svg) -> list[Path]:
    """Write WEEK.FORMAT files into a folder, which is made if need be; each appears whole or not at all.

    Everything is made before the first file is touched. Raises UsageError as `contents` does, WatcherError when the folder
    cannot be written.
    """
    made = contents(report, formats, draw)
    written = []
    try:
        folder.mkdir(parents=True, exist_ok=True)
        for each, content in made.items():
            path = folder / f"{report.week.name}.{each}"
            _replace(path, content)
            written.append(path)
    except OSError as error:
        raise WatcherError(f"folder = {str(folder)!r}: cannot be written ({error.strerror or error})") from error
    return written


def _replace(path: Path, content: bytes) -> None:
    # Beside and renamed: whoever reads meanwhile sees the old file or the new one, never half of one.
    beside = path.with_name(f".{path.name}.{os.getpid()}")
    try:
        beside.write_bytes(content)
        beside.replace(path)
    except OSError:
        with suppress(OSError):
            beside.unlink()
        raise
