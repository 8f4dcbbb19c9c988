"""What the product says about itself wherever it shows a verdict: cautions, budgets, and the method in five lines."""

from __future__ import annotations

from typing import Final

from watcher.records import Terms
from watcher.wording.numbers import one_in, rate

CAUTIONS: Final = (
    "A verdict is about the labelled samples and how they were sampled; it is no proof of safety. Where the classifier's "
    "errors can hurt someone, decisions to stop it or to fall back belong to the accountable people and to the rules that "
    "apply there; watcher informs them and must not be the only safeguard. Whoever writes the labels can hide a breach: the "
    "unlabelled share and a second labeller are the remedy."
)


def budgets(terms: Terms) -> str:
    """The sentence on the three budgets of risk, which every page shows."""
    each, all_three = one_in(terms.risk), one_in(min(1.0, 3 * terms.risk))
    return (
        f"Three budgets of risk stand behind what is shown, each of {each}: breaches with the lower limits, support with the "
        f"upper limits, and the weekly intervals. The chance that anything of all three is ever wrong is at most {all_three}. "
        "Early warnings have no risk but a mean time to a false one."
    )


def method(terms: Terms) -> tuple[str, ...]:
    """The method of a report in five lines."""
    order = (
        "Labels enter the evidence in the order of their buckets of prediction time, each bucket once and whole when its "
        "labels can no longer come; the order does not depend on what the labels say."
    )
    if terms.count == "arriving":
        order = (
            "Labels enter the evidence as they arrive. This is right only if how fast a label comes does not depend on whether "
            "the prediction was an error."
        )
    evidence = (
        "For every window from a bucket's start to now the evidence that its average error exceeds "
        f"{rate(terms.tolerance)} is the logarithm of a betting gain whose mean is at most 1 while it does not (Ville's "
        "inequality)."
    )
    breach = (
        f"The windows share the risk of {one_in(terms.risk)}; the promise is broken when the total reaches the logarithm of "
        "the inverse risk, however often anybody looks and however the error rate drifts."
    )
    if terms.slices:
        breach += (
            " Half of the risk is kept for the whole, 0.4 of it is split over the declared slice values, 0.1 over values found "
            "later."
        )
    weekly = (
        "The interval of a week is the same bound at a share of a budget of its own; all weeks hold at once. The exact "
        "binomial interval beside it is for that week alone and needs a volume fixed beforehand and outcomes that do not "
        "react to one another."
    )
    support = (
        "A promise is supported when some window that reaches to the newest counted label has an upper limit at or below the "
        "tolerance, no warning stands and labels still arrive."
    )
    return order, evidence, breach, weekly, support
