"""Charts as Vega-Lite specs: pure functions that return dicts made of numbers and safe text only.

`report.render` draws them for the report and for pages without script; a page may hand them to its own script. Times are
on the clock of the promise's zone. `width` is in pixels or "container"; `scheme` is "light" or "dark"; `tips` adds a layer
that answers the pointer, which a drawn picture does not need.
"""

from __future__ import annotations

from watcher.report.count_charts import DayCounts, WeekBar, daily, labels, weeks
from watcher.report.history_charts import bounds, slices, thinned, total
from watcher.report.sparkline import sparkline
from watcher.report.theme import THEMES, Scheme, Spec

__all__ = [
    "THEMES",
    "DayCounts",
    "Scheme",
    "Spec",
    "WeekBar",
    "bounds",
    "daily",
    "labels",
    "slices",
    "sparkline",
    "thinned",
    "total",
    "weeks",
]
