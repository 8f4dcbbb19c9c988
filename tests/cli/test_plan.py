"""`watcher plan`: the figures, weeks with the label lag, volumes from a ledger or a source, advice and chart."""

from __future__ import annotations

import json
import math
import xml.etree.ElementTree as ET
from datetime import timedelta
from pathlib import Path
from typing import Any

import pytest
from click.testing import CliRunner, Result
from look.rows import RELEASED, configuration, write, year

from watcher import settings
from watcher.bounds.exact import operating_characteristics
from watcher.bounds.lead_time import weeks_until
from watcher.bounds.planning import WEEK, smallest_rise, widest_bucket
from watcher.checking import Finding, check
from watcher.cli import main
from watcher.report.plan_chart import DelayBar, plan_chart

FREE = ("--tolerance", "0.03", "--risk", "0.001", "--labels-per-week", "490", "--streams", "100")


def _run(*arguments: object) -> Result:
    return CliRunner().invoke(main, ["plan", *map(str, arguments)])


def _json(*arguments: object) -> Any:
    result = _run(*arguments, "--json")

    assert result.exit_code == 0, result.output + result.stderr
    return json.loads(result.stdout)


@pytest.fixture(scope="module")
def folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A configuration, 40 healthy days of 60 rows, and a look on day 45."""
    made = tmp_path_factory.mktemp("plan")
    write(made / "rows.csv", year(11, 40, 60, late=False, rate=0.01))
    (made / "watcher.toml").write_text(configuration(), encoding="utf-8")
    assert CliRunner().invoke(main, ["look", str(made / "watcher.toml"), "--at", "2026-02-19"]).exit_code == 0
    return made


def test_weeks_include_the_label_lag() -> None:
    """10 days of lag come on top of every delay; the exact figure goes to the end of its daily bucket."""
    (plan,) = _json(*FREE, "--label-lag", "10d")["plans"]

    for row in plan["rises"]:
        labels, jump = row["from_release"], row["after_jump"]
        assert labels["median_weeks"] == pytest.approx(math.ceil(labels["median_labels"] / 70) / 7 + 10 / 7)
        assert jump["p90_weeks"] == pytest.approx(jump["p90_labels"] / 490 + 10 / 7)
    assert plan["label_lag"] == 10 * 86400


def test_the_first_figure_is_exact() -> None:
    """Median and 90% of window 0 at risk * 0.20, from the exact pass; rises 1.25x to 5x; Wald's limit beside them."""
    (plan,) = _json(*FREE)["plans"]
    exact = operating_characteristics(0.03, 0.0002, 0.06, 4000)
    row = next(row for row in plan["rises"] if row["rise"] == 2.0)

    assert [row["rise"] for row in plan["rises"]] == [1.25, 1.5, 2.0, 3.0, 5.0]
    assert row["from_release"]["median_labels"] == exact.median_labels
    assert row["from_release"]["p90_labels"] == exact.labels_quantile(0.9)
    assert row["limit"] == pytest.approx(573, abs=0.5)
    assert 0 < plan["false_breach"]["chance"] < 0.001
    assert plan["smallest_rise"] == smallest_rise(0.03, 0.001, plan["life_labels"])
    assert plan["bucket_fits"]


def test_labels_a_week_for_a_wanted_delay() -> None:
    """More for a shorter delay, the lag taken off; none when lag and bucket alone take longer."""
    quick = _json(*FREE, "--label-lag", "1w", "--within", "2w")["wanted"]
    slow = _json(*FREE, "--label-lag", "1w", "--within", "4w")["wanted"]
    never = _run(*FREE, "--label-lag", "2w", "--within", "2w")

    assert quick["labels_per_week"] > 2 * slow["labels_per_week"] > 300
    assert "no number of labels" in never.output


def test_the_ledger_tells_the_volume_of_whole_and_slices(folder: Path) -> None:
    """Labels of the sealed buckets over their weeks, as `status` counts them; each slice at its part of the risk."""
    plans = _json(folder / "watcher.toml", "triage", "--streams", "100")["plans"]
    status = json.loads(CliRunner().invoke(main, ["status", str(folder / "watcher.toml"), "--json"]).stdout)["promises"]
    labels = {json.dumps(p["slice"]): p["labels"] for p in status}

    assert [json.dumps(plan["slice"]) for plan in plans] == [json.dumps(p["slice"]) for p in status]
    for plan in plans:
        assert plan["labels_per_week"] == pytest.approx(labels[json.dumps(plan["slice"])] / 40 * 7)
    assert [plan["risk"] for plan in plans] == pytest.approx([0.005, 0.002, 0.002, 0.0005])
    assert plans[0]["label_lag"] == 5 * 86400


def test_one_slice_in_full_and_another_volume(folder: Path) -> None:
    """--slice plans one; --labels-per-week replaces the whole's volume, slices keep their share."""
    (one,) = _json(folder / "watcher.toml", "triage", "--slice", "site=a", "--streams", "100")["plans"]
    plans = _json(folder / "watcher.toml", "triage", "--labels-per-week", "5000", "--streams", "100")["plans"]

    assert one["slice"] == {"column": "site", "value": "a"}
    assert plans[0]["labels_per_week"] == 5000
    assert sum(plan["labels_per_week"] for plan in plans[1:]) == pytest.approx(5000)
    assert not plans[0]["bucket_fits"]
    assert plans[0]["widest_bucket"] == widest_bucket(0.03, 0.005, 5000) < 86400


def test_without_a_ledger_the_source_is_counted(tmp_path: Path, folder: Path) -> None:
    """Buckets whose lag is over at the machine's clock; nothing is written."""
    for name in ("rows.csv", "watcher.toml"):
        (tmp_path / name).write_bytes((folder / name).read_bytes())
    plans = _json(tmp_path / "watcher.toml", "triage", "--streams", "100")["plans"]

    assert plans[0]["labels_per_week"] > 0
    assert {(plan["slice"] or {}).get("value") for plan in plans} == {None, "a", "b", "c"}
    assert {path.name for path in tmp_path.iterdir()} == {"rows.csv", "watcher.toml"}


def test_sentences_table_and_slices(folder: Path) -> None:
    """What a person reads names both figures, the false breach, the smallest rise, the bucket, the slices."""
    text = " ".join(_run(folder / "watcher.toml", "triage", "--streams", "100").output.split())

    for words in ("A promise of at most 3%", "too high from release", "a jump later", "false breach", "smallest rise",
                  "A bucket of 1 day", "Slices, each at its part of the risk", "site = c", "Volume:"):  # fmt: skip
        assert words in text


@pytest.mark.parametrize("suffix", ["svg", "png"])
def test_the_chart_is_drawn(tmp_path: Path, suffix: str) -> None:
    """An SVG that parses and has a name for screen readers; a PNG by its signature."""
    path = tmp_path / f"plan.{suffix}"
    assert _run(*FREE, "--chart", path).exit_code == 0

    if suffix == "png":
        assert path.read_bytes()[:8] == b"\x89PNG\r\n\x1a\n"
    else:
        tree = ET.fromstring(path.read_text(encoding="utf-8"))
        assert "2 times: " in tree.attrib["aria-label"]
        text = " ".join(tree.itertext())
        assert "service life" in text
        assert "1.25x" in text


def test_what_is_longer_than_a_life_is_an_arrow() -> None:
    """A delay that is not known has no dot and no end, but an arrow; both figures of a rise stand beside one another."""
    bars = [DelayBar(1.5, 0.045, kind, 30.0, None) for kind in ("release", "jump")]  # type: ignore[arg-type]
    bars += [DelayBar(1.25, 0.0375, kind, None, None) for kind in ("release", "jump")]  # type: ignore[arg-type]
    spec = plan_chart(bars, 52.0)
    texts = [
        row["text"]
        for layer in spec["layer"]
        for row in layer["data"]["values"]
        if layer["mark"]["type"] == "text" and "text" in row
    ]

    assert texts == ["→", "→ longer"] * 2
    assert [len(layer["data"]["values"]) for layer in spec["layer"] if layer["mark"]["type"] == "point"] == [1, 1]


def test_weeks_until_rounds_to_whole_buckets_only_where_asked() -> None:
    """36 labels at 70 a week: half a week and a day's rest; a lag adds itself; nothing for nothing."""
    assert weeks_until(36, 70, 0) == pytest.approx(36 / 70)
    assert weeks_until(36, 70, 0, bucket=86400) == pytest.approx(4 / 7)
    assert weeks_until(40, 70, WEEK, bucket=86400) == pytest.approx(4 / 7 + 1)
    assert weeks_until(None, 70, WEEK) is None
    with pytest.raises(ValueError, match="labels_per_week = 0"):
        weeks_until(1, 0, 0)


@pytest.mark.parametrize(
    ("arguments", "named"),
    [
        (("--tolerance", "0.03"), "--risk, --labels-per-week"),
        ((*FREE[:-4], "--labels-per-week", "-1"), "labels_per_week = -1"),
        (("--tolerance", "2", *FREE[2:]), "tolerance = 2"),
        ((*FREE, "--bucket", "5"), "5"),
        ((*FREE, "--slice", "a=b"), "--slice"),
        ((*FREE, "--chart", "plan.gif"), ".svg or .png"),
        (("watcher.toml",), "name of a promise"),
    ],
)
def test_nonsense_is_refused_by_name(arguments: tuple[str, ...], named: str) -> None:
    """Exit 2 and the argument in the message."""
    result = _run(*arguments)

    assert result.exit_code == 2
    assert named in result.stderr


def test_what_follows_from_the_promise_is_not_given_beside_it(folder: Path) -> None:
    """Terms beside CONFIG PROMISE, an unknown promise and an unknown slice are refused with what is known."""
    path = folder / "watcher.toml"

    assert "--tolerance" in _run(path, "triage", "--tolerance", "0.03").stderr
    assert "triage" in _run(path, "nobody").stderr
    assert "site=a" in _run(path, "triage", "--slice", "site=z").stderr


def _checked(folder: Path, rows: list[tuple[str, ...]], days: int, text: str) -> list[Finding]:
    """What `check` finds when the last bucket of the rows is due; corrections, which turn right into wrong, are left out."""
    write(folder / "rows.csv", [row for row in rows if row[1] != "2"])
    (folder / "watcher.toml").write_text(text, encoding="utf-8")
    now = RELEASED + timedelta(days=days + 5)
    return check(settings.read(folder / "watcher.toml"), int(now.timestamp()))


def test_check_says_that_a_promise_cannot_be_decided_in_its_life(tmp_path: Path) -> None:
    """A rate just below the tolerance and few labels: neither supported nor refuted, with the smallest rise; a good one is not."""
    near = _checked(tmp_path, year(3, 20, 30, late=False, rate=0.028), 20, configuration())
    (told,) = [f.text for f in near if "neither supported nor refuted" in f.text]

    assert [f.level for f in near if f.text == told] == ["warning"]
    assert "What a whole life can notice is" in told
    (fact,) = [f.text for f in near if "smallest rise over the tolerance" in f.text]
    assert "site = c" in fact
    good = _checked(tmp_path, year(3, 20, 120, late=False, rate=0.004), 20, configuration())
    assert not any("neither" in f.text for f in good)


def test_check_names_the_bucket_that_would_do(tmp_path: Path) -> None:
    """200 labels a day are more than a tenth of what a doubled rate needs; the bucket named is the widest that fits."""
    rows = year(3, 12, 220, late=False, rate=0.01)
    found = _checked(tmp_path, rows, 12, configuration())
    (told,) = [f.text for f in found if "would do" in f.text]
    labels = len({row[0] for row in rows if row[6]}) / 12 * 7
    hours = widest_bucket(0.03, 0.005, labels)

    assert hours is not None
    assert f'bucket = "{hours // 3600}h" would do' in told
    narrow = _checked(tmp_path, rows, 12, configuration(extra=f'bucket = "{hours // 3600}h"'))
    assert not any("would do" in f.text for f in narrow)
