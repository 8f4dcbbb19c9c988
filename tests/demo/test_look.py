"""The scenario through the command line: one look after the end says what the simulation said it would."""

from __future__ import annotations

import json

import pytest
from click.testing import CliRunner
from demo import quantiles
from demo.counting import count, epoch

from watcher.cli import main
from watcher.demo.scenario import CAMERA_DAY, CAMERA_DEPOT, DAY, RELEASED, generate
from watcher.demo.writing import write

SEED = 0
AT = "2026-07-06T00:00:00Z"
"""24 weeks, the lag of 10 days, and some days more: everything is sealed."""


def look(folder):
    """One look at the written scenario with an empty ledger; its exit code and JSON."""
    path = write(folder, SEED)
    done = CliRunner().invoke(main, ["look", str(path), "--at", AT, "--json"])
    assert done.exit_code in (0, 3), done.output
    return done.exit_code, json.loads(done.stdout)


@pytest.fixture(scope="module")
def told(tmp_path_factory):
    """Exit code and JSON of one look."""
    return look(tmp_path_factory.mktemp("demo"))


def by_cell(answer):
    """The promise entries by (column, value)."""
    return {
        ("", "") if entry["slice"] is None else (entry["slice"]["column"], entry["slice"]["value"]): entry
        for entry in answer["promises"]
    }


def test_only_the_camera_depot_breaches(told):
    """The depot breaches on the day that the rows alone give, the likeliest start lies near the camera, exit code 3."""
    code, answer = told
    cells = by_cell(answer)
    days = count(generate(SEED))["depot", CAMERA_DEPOT]
    expected = quantiles.breach_day(days.labels, days.errors, "depot")
    breach = cells["depot", CAMERA_DEPOT]["breach"]

    assert code == 3
    assert {key for key, entry in cells.items() if entry["breach"]} == {("depot", CAMERA_DEPOT)}
    assert epoch(breach["at"]) == RELEASED + (expected + 1) * DAY
    assert abs(epoch(breach["since"]) - (RELEASED + CAMERA_DAY * DAY)) <= 21 * DAY


def test_every_row_is_counted_or_named(told):
    """Predictions, labels and errors of every cell are those of a plain count, and every kind of reject is named."""
    _, answer = told
    cells, counted = by_cell(answer), count(generate(SEED))

    assert cells.keys() == counted.keys()
    for key, days in counted.items():
        entry = cells[key]
        assert (entry["predictions"], entry["labels"], entry["errors"]) == (
            days.predictions.sum(),
            days.labels.sum(),
            days.errors.sum(),
        ), key
    rejected = answer["rejected"]["inspection-desk"]["damage-photos"]
    assert {reason for reason, n in rejected.items() if n} == {
        "no-id",
        "bad-time",
        "unknown-label",
        "conflicting-duplicate",
    }


def test_two_runs_of_one_seed_give_the_same_json(told, tmp_path):
    """A second folder with its own ledger gets the same answer; only the identity of the ledger may differ."""
    (_, first), (_, second) = told, look(tmp_path)
    first, second = ({key: value for key, value in answer.items() if key != "head"} for answer in (first, second))

    assert first == second
