"""Frozen terms as canonical JSON, and back."""

from __future__ import annotations

from dataclasses import MISSING, fields
from typing import Any, Final

from watcher.ledger import canon
from watcher.records import Columns, Slice, Terms

_FLOATS: Final = ("tolerance", "risk")
_ORDER: Final = tuple(f.name for f in fields(Terms))


def canonical_terms(terms: Terms) -> str:
    """The text under which terms are frozen and hashed; `tolerance`, `risk` and `label_noise` as repr strings."""
    return canon.text({name: _plain(name, getattr(terms, name)) for name in _ORDER})


def terms_from(source: str) -> Terms:
    """The inverse of `canonical_terms`, to the last bit. Raises ValueError when a term is missing or unknown."""
    found = canon.parse(source)
    if not isinstance(found, dict):
        raise ValueError("terms are no JSON object")
    unknown = sorted(set(found) - set(_ORDER))
    if unknown:
        raise ValueError(f"unknown terms {unknown}: written by a newer program?")
    missing = [f.name for f in fields(Terms) if f.name not in found and f.default is MISSING]
    if missing:
        raise ValueError(f"terms {missing} are missing")
    return Terms(**{name: _rich(name, value) for name, value in found.items()})


def terms_digest(terms: Terms) -> str:
    """SHA-256 of the canonical text."""
    return canon.sha(canonical_terms(terms))


def _plain(name: str, value: Any) -> Any:
    if name in _FLOATS:
        return repr(float(value))
    if name == "label_noise":
        return None if value is None else [repr(float(x)) for x in value]
    if isinstance(value, Columns | Slice):
        return {f.name: _plain("", getattr(value, f.name)) for f in fields(value)}
    if isinstance(value, tuple):
        return [_plain("", inner) for inner in value]
    return value


def _rich(name: str, value: Any) -> Any:
    if name in _FLOATS:
        return float(value)
    if name == "label_noise":
        return None if value is None else tuple(float(x) for x in value)
    if name == "columns":
        return Columns(**value)
    if name == "slices":
        return tuple(Slice(**{k: _tuples(v) for k, v in one.items()}) for one in value)
    return _tuples(value)


def _tuples(value: Any) -> Any:
    return tuple(_tuples(inner) for inner in value) if isinstance(value, list) else value
