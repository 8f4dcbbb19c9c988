"""The API against its own OpenAPI document: requests drawn at random, answers held to the schema."""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterator
from dataclasses import replace
from datetime import datetime

import pytest
import schemathesis
from hypothesis import HealthCheck, given, settings
from hypothesis.strategies import booleans
from schemathesis import GenerationMode
from web.world import House, serving

EXAMPLES = settings(
    max_examples=12, deadline=None, derandomize=True, database=None, suppress_health_check=list(HealthCheck)
)
KNOWN = {
    "name": "damage-photos",
    "version": "1",
    "promise": "damage-photos",
    "week": "2026-W10",
    "revision": 0,
    "file": "a.csv",
}
"""Half of the requests speak of what is there, so that answers other than 404 are held to the schema too."""


@pytest.fixture
def api(guarded: House) -> Iterator[schemathesis.BaseSchema]:
    """The document as the API serves it on a port off loopback, where everything needs a token."""

    def hurry() -> datetime:
        # The drawn wrong tokens must meet the check, not the limit on failures.
        guarded.clock.forward(minutes=1)
        return guarded.clock()

    guarded.ledger.reports.add(
        "2026-W10", [("a.csv", b"x")], head=guarded.ledger.head(), created=guarded.clock(), final=True
    )
    headers = {"Authorization": f"Bearer {guarded.act}"}
    with serving(replace(guarded.site, clock=hurry)) as address:
        loaded = schemathesis.openapi.from_url(f"{address}/api/v1/openapi.json", headers=headers)
        loaded.config.update(headers=headers)
        yield loaded


def test_every_answer_keeps_to_the_schema(api: schemathesis.BaseSchema) -> None:
    """Whatever is asked, valid or not, no answer is a failure of the server and each has the form that the schema promises."""
    seen: Counter[tuple[str, int]] = Counter()
    for found in api.get_all_operations():
        operation = found.ok()
        for mode in GenerationMode:

            @EXAMPLES
            @given(case=operation.as_strategy(generation_mode=mode), known=booleans())
            def holds(case: schemathesis.Case, known: bool) -> None:
                if known:
                    for given_ in (case.path_parameters, case.query):
                        given_.update({key: value for key, value in KNOWN.items() if key in given_})
                answer = case.call_and_validate()
                seen[case.operation.label, answer.status_code] += 1

            holds()
    labels = {label for label, _ in seen}

    assert labels == {f"{m.upper()} {path}" for path, methods in api.raw_schema["paths"].items() for m in methods}
    fine = {label for label, status in seen if 200 <= status < 300}
    assert labels - fine <= {"POST /api/v1/acknowledgements"}, seen
    assert not [key for key in seen if key[1] >= 500]
