"""One canonical text for everything that is hashed: JSON without floats, and the integers that stand in for floats."""

from __future__ import annotations

import hashlib
import json
import math
from collections.abc import Mapping
from typing import Any, Final

NANO: Final = 10**9
MICRO: Final = 10**6
FLOAT_TAG: Final = "1e-9"
"""A float inside facts or diagnostics is written {"1e-9": integer}: the last binary digit differs between machines."""

_encode = json.JSONEncoder(ensure_ascii=True, allow_nan=False, sort_keys=True, separators=(",", ":")).encode


def text(value: Any) -> str:
    """The canonical JSON of `value`: sorted keys, no blanks, ASCII only, so that any outside text gives valid bytes.

    Raises TypeError when a float is inside: floats are never hashed.
    """
    _refuse_floats(value)
    return _encode(value)


def line(items: list[Any]) -> str:
    """`text` for a list that holds strings and integers only; unchecked because sheets have hundreds of thousands."""
    return _encode(items)


def _refuse_floats(value: Any) -> None:
    if isinstance(value, float):
        raise TypeError(f"a float ({value!r}) may not enter the chain: give it as an integer or as decimal text")
    if isinstance(value, Mapping):
        for inner in value.values():
            _refuse_floats(inner)
    elif isinstance(value, list | tuple):
        for inner in value:
            _refuse_floats(inner)


def parse(source: str) -> Any:
    """The inverse of `text`. Raises ValueError for anything that is no JSON without floats."""
    return json.loads(source, parse_float=_no_float, parse_constant=_no_float)


def _no_float(found: str) -> Any:
    raise ValueError(f"{found} is a float: no canonical text holds one")


def sha(data: str | bytes) -> str:
    """SHA-256 as 64 hex digits; text is hashed as UTF-8."""
    return hashlib.sha256(data.encode() if isinstance(data, str) else data).hexdigest()


def down(x: float, unit: int = NANO) -> int:
    """The largest integer r with r/unit <= x as floats, so that a limit read back is never above the one computed."""
    r = math.floor(x * unit) + 1
    while r / unit > x:
        r -= 1
    return r


def up(x: float, unit: int = NANO) -> int:
    """The smallest integer r with r/unit >= x as floats."""
    return -down(-x, unit)


def nearest(x: float, unit: int = NANO) -> int:
    """The integer closest to x*unit: for figures that are shown and bound nothing."""
    return round(x * unit)


def amount(x: float) -> int | str:
    """A count that may have a fraction: whole numbers as an integer, others as decimal text with nine digits."""
    if x == int(x):
        return int(x)
    r = nearest(x)
    if r % NANO == 0:
        return r // NANO
    sign = "-" if r < 0 else ""
    return f"{sign}{abs(r) // NANO}.{abs(r) % NANO:09d}"


def amount_from(value: int | str) -> float:
    """The inverse of `amount`."""
    return float(value)


def plain(value: Any) -> Any:
    """Facts and diagnostics without floats: numbers with a fraction become {"1e-9": integer}, NaN and infinities None.

    Raises TypeError for what JSON cannot hold and ValueError for a mapping that already uses the tag as a key.
    """
    if isinstance(value, float):
        return {FLOAT_TAG: nearest(value)} if math.isfinite(value) else None
    if isinstance(value, Mapping):
        if FLOAT_TAG in value:
            raise ValueError(f"{FLOAT_TAG!r} is reserved and cannot be a key")
        return {_key(k): plain(v) for k, v in value.items()}
    if isinstance(value, list | tuple):
        return [plain(v) for v in value]
    if value is None or isinstance(value, str | int):
        return value
    raise TypeError(f"{value!r} is no JSON value: allowed are strings, numbers, booleans, None, lists and mappings")


def _key(key: Any) -> str:
    if not isinstance(key, str):
        raise TypeError(f"the key {key!r} is no string")
    return key


def unplain(value: Any) -> Any:
    """The inverse of `plain`; floats come back within 1e-9."""
    if isinstance(value, dict):
        if value.keys() == {FLOAT_TAG}:
            return value[FLOAT_TAG] / NANO
        return {k: unplain(v) for k, v in value.items()}
    if isinstance(value, list):
        return [unplain(v) for v in value]
    return value
