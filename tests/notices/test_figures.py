"""Outcome counts for the metrics. Check values: computed by hand."""

from watcher.notices.figures import figures


def test_every_route_and_outcome_is_there_from_the_start() -> None:
    """Zeros before anything was sent, so that no series appears late."""
    found = figures({}, ["desk"])

    assert found.total == {("desk", "cancelled"): 0, ("desk", "dead"): 0, ("desk", "delivered"): 0}
    assert found.waiting == {"desk": 0}


def test_the_counts_are_the_ledgers_and_a_removed_route_keeps_its_series() -> None:
    """Waiting is a figure of its own."""
    found = figures({("old", "dead"): 2, ("desk", "waiting"): 3, ("desk", "delivered"): 5}, ["desk"])

    assert found.waiting == {"desk": 3, "old": 0}
    assert (found.total["old", "dead"], found.total["desk", "delivered"]) == (2, 5)
