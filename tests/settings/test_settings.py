"""The configuration: every problem is named at once, with the place and the way to mend it."""

from __future__ import annotations

import re
from pathlib import Path

import pytest
from pydantic import BaseModel

from watcher import settings
from watcher.errors import SettingsError
from watcher.settings import duration, parse, seconds

GOOD = """
[[source]]
name = "inspection-desk"
kind = "csv"
path = "labels/*.csv"
[source.columns]
id = "parcel"
time = "decided_at"
prediction = "predicted"
label = "observed"
[[promise]]
name = "damage-photos"
source = "inspection-desk"
tolerance = 0.03
risk = 0.001
released = 2026-11-02T00:00:00Z
label_lag = "10d"
slices = { depot = ["Alder", "Birch", "Cedar"] }
[[route]]
name = "desk"
kind = "log"
"""


def _read(text: str, **environment: str) -> settings.Settings:
    return parse(text, Path("/nowhere"), environment)


def _findings(text: str) -> tuple[str, ...]:
    with pytest.raises(SettingsError) as caught:
        _read(text)
    return caught.value.findings


def test_defaults_are_those_of_the_documents() -> None:
    """A promise with its required keys has every other term by default."""
    promise = _read(GOOD).promise[0]
    terms = promise.terms(_read(GOOD).source[0])

    assert (terms.service_life, terms.bucket, terms.time_zone, terms.count) == (52 * 604800, 86400, "UTC", "sealed")
    assert (terms.support_at_least, terms.warn_every, promise.staleness) == (7 * 86400, 1095 * 86400, 20 * 86400)
    assert terms.slices[0].weights == ("1", "1", "1")


@pytest.mark.parametrize(
    ("before", "after", "expected"),
    [
        ('path = "labels', 'pth = "labels', "source 'inspection-desk': pth: unknown key (did you mean 'path'?)"),
        ("tolerance = 0.03", "tolerance = 3", "promise 'damage-photos': tolerance = 3: Input should be less than 1"),
        ("tolerance = 0.03\n", "", "promise 'damage-photos': tolerance: is required"),
        ("00:00:00Z", "00:00:00", "has no offset from UTC"),
        ('"10d"', "10", 'label_lag: 10 has no unit; write for instance "10d"'),
        ('source = "inspection-desk"', 'source = "inspection-dsk"', "did you mean 'inspection-desk'?"),
        ('kind = "log"', 'kind = "log"\nevents = ["breech"]', "'breech' is no event (did you mean 'breach'?)"),
        ('kind = "log"', 'kind = "webhook"', "needs exactly one of url, url_env, url_file"),
        ('kind = "log"', 'kind = "webhook"\nurl = "https://me:pw@host/"', "holds a password"),
        ('label = "observed"', 'label = "observed"\nerror = "wrong"', "exactly one of label, error, loss"),
        ('label_lag = "10d"', 'label_lag = "10d"\nmeasure = "miss"', "needs positive"),
        ('label_lag = "10d"', 'label_lag = "10d"\nbucket = "5h"', "allowed: 1h, 2h, 3h, 4h, 6h, 8h, 12h, 1d"),
        ('label_lag = "10d"', 'label_lag = "10d"\ntime_zone = "Mars/Base"', "not a known time zone"),
        ('label_lag = "10d"', 'label_lag = "10d"\nweight_levels = [0.5, 2]', "weight_levels and a mapped weight"),
        ('label_lag = "10d"', 'label_lag = "10d"\nlabel_noise = [0.2, 0.9]', "a + b < 1"),
        ('"Birch", "Cedar"]', '"Birch", "Birch"]', "slices.depot names a value twice"),
        ("[[route]]", '[report]\nat = "monday"\n[[route]]', "not a time of the week"),
        ("[[route]]", '[web]\nlisten = "8750"\n[[route]]', "is not an address"),
    ],
)
def test_a_problem_names_its_place_and_the_way_out(before: str, after: str, expected: str) -> None:
    """Key, value, what is allowed."""
    found = _findings(GOOD.replace(before, after, 1))

    assert len(found) == 1, found
    assert expected in found[0]


def test_every_problem_is_named_at_once() -> None:
    """Three mistakes in three tables give three sentences."""
    broken = (
        GOOD.replace('path = "labels', 'pth = "labels').replace("risk = 0.001", "risk = 0").replace('"log"', '"lgo"')
    )

    assert len(_findings(broken)) == 3


def test_secrets_come_from_the_environment_and_do_not_show() -> None:
    """A variable that is not set is named; a set one does not appear in the settings' text."""
    text = GOOD.replace('kind = "log"', 'kind = "webhook"\nurl_env = "HOOK"')
    with pytest.raises(SettingsError, match=r"url_env = 'HOOK': the environment variable is not set"):
        _read(text).secret(_read(text).route[0])
    read = _read(text, HOOK="https://host/secret-path")

    assert read.secret(read.route[0]) == "https://host/secret-path"
    assert "secret-path" not in repr(read)


def test_a_relative_ledger_lies_beside_the_configuration() -> None:
    """Whatever folder the command is started from."""
    assert _read(GOOD).ledger_url() == "sqlite:////nowhere/watcher.db"


@pytest.mark.parametrize(
    ("text", "span"), [("90s", 90), ("10m", 600), ("6h", 21600), ("10d", 864000), ("52w", 31449600)]
)
def test_durations_go_there_and_back(text: str, span: int) -> None:
    """Seconds of a duration, and the shortest way to write them."""
    assert seconds(text) == span
    assert seconds(duration(span)) == span


@pytest.mark.parametrize("text", ["", "10", "d", "-1d", "1.5d", "1y", None, True])
def test_what_is_no_duration_is_refused(text: object) -> None:
    """With an example of what is meant."""
    with pytest.raises(ValueError, match=r"10d|no unit"):
        seconds(text)


def test_every_key_is_documented() -> None:
    """docs/configuration.md names each key of each table in backticks."""
    text = (Path(__file__).parents[2] / "docs" / "configuration.md").read_text(encoding="utf-8")
    named = set(re.findall(r"`([a-z_]+)`", text))
    tables = [
        t
        for t in vars(settings).values()
        if isinstance(t, type) and issubclass(t, BaseModel) and t.__module__.startswith(settings.__name__)
    ]
    keys = {name for table in tables for name in table.model_fields} - {
        "folder",
        "environment",
        "ledger",
        "web",
        "metrics",
        "source",
        "promise",
        "route",
        "report",
    }

    assert keys <= named | {"environment"}, keys - named


def test_the_configuration_of_the_readme_is_one() -> None:
    """The lines that a newcomer copies."""
    text = (Path(__file__).parents[2] / "README.md").read_text(encoding="utf-8")
    (block,) = re.findall(r"```toml\n(.*?)```", text, re.DOTALL)

    assert _read(block).promise[0].name == "damage-photos"
