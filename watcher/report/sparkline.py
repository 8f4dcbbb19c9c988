"""A line the height of a word, written as SVG by hand: five hundred of them cost nothing."""

from __future__ import annotations

from collections.abc import Sequence
from html import escape
from typing import Final

_POINTS: Final = 60


def sparkline(
    values: Sequence[float], limit: float, *, title: str, width: int = 120, height: int = 24, low: float = 0.0
) -> str:
    """Inline SVG of `values` (oldest first) against a dashed `limit`; the newest value ends in a dot.

    It draws in the colour of the text around it, so that it fits light, dark and print. `title` is read out by screen
    readers; it is escaped. More than 60 values are thinned, the newest is kept. No value: the limit alone.
    """
    head = (
        f'<svg class="spark" role="img" xmlns="http://www.w3.org/2000/svg" width="{width}" height="{height}" '
        f'viewBox="0 0 {width} {height}" fill="none" stroke="currentColor"><title>{escape(title)}</title>'
    )
    step = -(-len(values) // _POINTS) if values else 1
    shown = [max(float(value), low) for value in list(values)[::-1][::step][::-1]]
    top = max([1.25 * limit, *(1.05 * value for value in shown)]) or 1.0

    def y(value: float) -> float:
        return height - 2 - (value - low) / (top - low) * (height - 4)

    line = f'<path d="M0 {y(limit):.1f}H{width}" stroke-width="0.75" stroke-dasharray="3 2" opacity="0.6"/>'
    if not shown:
        return f"{head}{line}</svg>"
    reach = width - 4
    across = [2.0] if len(shown) == 1 else [2 + reach * i / (len(shown) - 1) for i in range(len(shown))]
    points = " ".join(f"{x:.1f},{y(value):.1f}" for x, value in zip(across, shown, strict=True))
    dot = f'<circle cx="{across[-1]:.1f}" cy="{y(shown[-1]):.1f}" r="1.8" fill="currentColor" stroke="none"/>'
    return f'{head}{line}<polyline points="{points}" stroke-width="1.25" stroke-linejoin="round"/>{dot}</svg>'
