"""Any list of the API as CSV: nested names joined by dots, every cell safe for a spreadsheet."""

from __future__ import annotations

import csv
import io
import json
from collections.abc import Mapping, Sequence
from typing import Any

from starlette.responses import Response

from watcher.text import csv_cell

Row = Mapping[str, Any]


def flat(row: Row, prefix: str = "") -> dict[str, Any]:
    """One level: {"life": {"lower": 0}} becomes {"life.lower": 0}; lists and free-form facts become JSON text."""
    made: dict[str, Any] = {}
    for key, value in row.items():
        name = f"{prefix}{key}"
        if isinstance(value, Mapping) and key not in ("facts", "diagnostics", "values", "terms"):
            made.update(flat(value, name + "."))
        elif isinstance(value, Mapping | list | tuple):
            made[name] = json.dumps(value, ensure_ascii=True, sort_keys=True)
        elif isinstance(value, bool):
            made[name] = "true" if value else "false"
        else:
            made[name] = value
    return made


def csv_text(rows: Sequence[Row], columns: Sequence[str] = ()) -> str:
    """CSV of rows; the columns are those given, then every further one in the order it is met."""
    flats = [flat(row) for row in rows]
    names = dict.fromkeys(columns)
    for each in flats:
        names.update(dict.fromkeys(each))
    # A mapping that is absent in some rows leaves its own name behind; where its parts are there, they say it.
    heads = [name for name in names if not any(other.startswith(name + ".") for other in names)]
    out = io.StringIO()
    writer = csv.writer(out, lineterminator="\r\n")
    writer.writerow([csv_cell(name) for name in heads])
    writer.writerows([csv_cell(each.get(name)) for name in heads] for each in flats)
    return out.getvalue()


def csv_answer(rows: Sequence[Row], name: str, columns: Sequence[str] = ()) -> Response:
    """A download called `name`.csv (our own text)."""
    headers = {"Content-Disposition": f'attachment; filename="{name}.csv"'}
    return Response(csv_text(rows, columns), headers=headers, media_type="text/csv; charset=utf-8")
