"""`watcher` for a notebook: what the evidence says about a released classifier's error rate.

Arrays, scalars or pandas columns go in and broadcast; arrays (or numbers, for scalars) come out. Impossible input is a
ValueError that names the argument. Everything here may be read as often as one likes, except `exact_bounds`, which is
for one sample and one look.
"""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

__all__ = ["certify", "confidence_bounds", "evidence", "exact_bounds", "operating_characteristics"]

if TYPE_CHECKING:
    from watcher.bounds.face import certify, confidence_bounds, evidence, exact_bounds, operating_characteristics


def __getattr__(name: str) -> Any:
    # numpy and scipy take a quarter of a second to import: only who computes pays for them.
    if name not in __all__:
        raise AttributeError(f"module 'watcher' has no attribute {name!r}; it offers {', '.join(__all__)}")
    from watcher.bounds import face

    return getattr(face, name)


def __dir__() -> list[str]:
    return sorted(__all__)
