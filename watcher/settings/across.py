"""What holds between tables."""

from __future__ import annotations

from collections.abc import Sequence

from watcher.settings.promises import PromiseTable
from watcher.settings.tables import ColumnsTable
from watcher.settings.values import nearest
from watcher.settings.whole import Settings


def across(settings: Settings) -> list[str]:
    """What does not fit together, one sentence each."""
    found = []
    names: Sequence[str]
    for kind in ("source", "route"):
        names = [table.name for table in getattr(settings, kind)]
        found += [f"{kind} {name!r} is declared twice" for name in sorted({n for n in names if names.count(n) > 1})]
    versions = [(promise.name, promise.version) for promise in settings.promise]
    found += [
        f"promise {name!r} version {v!r} is declared twice"
        for name, v in sorted({x for x in versions if versions.count(x) > 1})
    ]
    names = tuple(source.name for source in settings.source)
    for promise in settings.promise:
        if promise.source not in names:
            found.append(
                f"promise {promise.name!r}: source = {promise.source!r} is not declared{nearest(promise.source, names)}; add a [[source]] of that name"
            )
            continue
        found += [
            f"promise {promise.name!r}: {problem}"
            for problem in _against(promise, settings.source_of(promise.source).columns)
        ]
    return found


def _against(promise: PromiseTable, columns: ColumnsTable) -> list[str]:
    found = []
    if (promise.measure == "loss") != (columns.loss is not None):
        found.append("measure = 'loss' and a mapped loss column belong together")
    if promise.measure in ("miss", "false-alarm") and columns.label is None:
        found.append(f"measure = {promise.measure!r} needs a label column, not error")
    if bool(promise.weight_levels) != (columns.weight is not None):
        found.append("weight_levels and a mapped weight column belong together")
    if (promise.n_max is not None) != (columns.cluster is not None) or (promise.cluster_span is not None) != (
        columns.cluster is not None
    ):
        found.append("n_max, cluster_span and a mapped cluster column belong together")
    if bool(promise.labelling_probabilities) != (columns.labelling_probability is not None):
        found.append(
            "labelling_probabilities and the mapped columns labelling_probability and selected belong together"
        )
    designs = [key for key in ("weight_levels", "n_max", "labelling_probabilities") if getattr(promise, key)]
    if len(designs) > 1:
        found.append(f"{' and '.join(designs)} describe different sampling designs; declare one")
    if designs and promise.count == "arriving":
        found.append(
            f'count = "arriving" does not go with {designs[0]}: such samples count when their bucket is sealed; use count = "sealed"'
        )
    if promise.measure in ("miss", "false-alarm") and designs and designs[0] != "n_max":
        found.append(
            f"measure = {promise.measure!r} does not go with {designs[0]}: an uneven sample has another share of positives than the "
            'predictions have, so errors among its positives are no rate of production; label evenly, or use measure = "error"'
        )
    if promise.count == "arriving" and promise.measure == "loss":
        found.append(
            'count = "arriving" does not go with measure = \'loss\': its steps are whole errors; use count = "sealed"'
        )
    if designs and promise.measure == "loss":
        found.append(f"measure = 'loss' does not go with {designs[0]}")
    return found
