"""Findings as sentences with the place in the words of the file."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

from pydantic import BaseModel

from watcher.settings.promises import EvidenceTable, PromiseTable
from watcher.settings.routes import RouteTable
from watcher.settings.tables import ColumnsTable, LedgerTable, MetricsTable, ReportTable, SourceTable, WebTable
from watcher.settings.values import nearest
from watcher.settings.whole import Settings


def all_told(entries: Sequence[Any], tree: Mapping[str, Any]) -> list[str]:
    """The findings as sentences; what only follows from another finding is left out."""
    places = [tuple(entry["loc"]) for entry in entries]
    told = []
    for entry, place in zip(entries, places, strict=True):
        follows = entry["type"] == "too_short" and any(p[: len(place)] == place and p != place for p in places)
        wrong_branch = entry["type"] in ("tuple_type", "dict_type") and any(
            p[:-1] == place[:-1] and p != place for p in places
        )
        if not follows and not wrong_branch:
            told.append(_told(entry, tree))
    return list(dict.fromkeys(told))


def _told(entry: Any, tree: Mapping[str, Any]) -> str:
    """One pydantic finding as a sentence with the place in the words of the file."""
    place = _place(entry["loc"], tree)
    kind, message = entry["type"], entry["msg"].removeprefix("Value error, ")
    if kind == "extra_forbidden":
        known = sorted(_keys_at(entry["loc"][:-1]))
        return f"{place}: unknown key{nearest(str(entry['loc'][-1]), known)}; known keys here: {', '.join(known)}"
    if kind == "missing":
        return f"{place}: is required"
    given = entry.get("input")
    shown = (
        f" = {given!r}"
        if isinstance(given, str | int | float | bool) and not str(place).endswith(("url", "secret"))
        else ""
    )
    return f"{place}{shown if 'Value error' not in entry['msg'] else ''}: {message}"


def _place(loc: tuple[int | str, ...], tree: Mapping[str, Any]) -> str:
    words: list[str] = []
    node: Any = tree
    for step in loc:
        if isinstance(step, int):
            inside = node[step] if isinstance(node, list) and step < len(node) else None
            name = inside.get("name") if isinstance(inside, dict) else None
            words[-1] += f" {name!r}" if isinstance(name, str) else f" number {step + 1}"
            node = inside
        elif step.startswith(("tuple[", "dict[", "function-")):
            continue
        else:
            words.append(str(step))
            node = node.get(step) if isinstance(node, dict) else None
    return ": ".join(words)


def _keys_at(loc: tuple[int | str, ...]) -> list[str]:
    """The keys that are known at a place of the file."""
    hidden = {"folder", "environment"}
    table: type[BaseModel] = Settings
    inner: dict[str, type[BaseModel]] = {
        "ledger": LedgerTable,
        "web": WebTable,
        "metrics": MetricsTable,
        "report": ReportTable,
        "source": SourceTable,
        "promise": PromiseTable,
        "route": RouteTable,
        "columns": ColumnsTable,
        "release_evidence": EvidenceTable,
    }
    for step in loc:
        if isinstance(step, str):
            table = inner.get(step, table)
    return [name for name in table.model_fields if name not in hidden]
