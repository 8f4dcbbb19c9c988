"""The alerts, by Debian's promtool."""

from __future__ import annotations

import re
import shutil
import subprocess
from pathlib import Path
from typing import Any

import pytest
import yaml

from watcher.metrics import Snapshot, families
from watcher.records import Head, SourceState

FOLDER = Path(__file__).parents[2] / "docker" / "prometheus"
RULES: dict[str, Any] = yaml.safe_load((FOLDER / "rules.yml").read_text())
ALERTS = [rule["alert"] for group in RULES["groups"] for rule in group["rules"]]


def _promtool(*arguments: str, folder: Path = FOLDER) -> subprocess.CompletedProcess[str]:
    return subprocess.run(["promtool", *arguments], cwd=folder, check=False, capture_output=True, text=True, timeout=60)


@pytest.mark.peer("prometheus")
def test_the_rules_are_valid_and_pass_their_tests() -> None:
    """`promtool check rules` and `promtool test rules`."""
    checked, tested = _promtool("check", "rules", "rules.yml"), _promtool("test", "rules", "rules_test.yml")

    assert checked.returncode == 0, checked.stderr
    assert tested.returncode == 0, tested.stdout + tested.stderr


@pytest.mark.peer("prometheus")
def test_each_alert_is_needed_by_its_tests(tmp_path: Path) -> None:
    """With expressions that never fire in their place, the tests of the rules fail for every alert."""
    changed: dict[str, Any] = yaml.safe_load((FOLDER / "rules.yml").read_text())
    for group in changed["groups"]:
        for rule in group["rules"]:
            rule["expr"] = "vector(0) > 1"
    (tmp_path / "rules.yml").write_text(yaml.safe_dump(changed))
    shutil.copy(FOLDER / "rules_test.yml", tmp_path)
    tested = _promtool("test", "rules", "rules_test.yml", folder=tmp_path)
    failed = set(re.findall(r"alertname: (\w+),", tested.stdout + tested.stderr))

    assert tested.returncode != 0
    assert failed == set(ALERTS)


def test_the_rules_ask_only_for_metrics_that_the_daemon_shows() -> None:
    """Every watcher_ name in an expression is a family of the metrics (counters with _total)."""
    snapshot = Snapshot(
        standings=(),
        waiting=(),
        sources=(SourceState("s"),),
        rejected={},
        notices={},
        routes=("r",),
        lease_held=True,
        head=Head(0, ""),
        ledger_bytes=0,
        version="0",
    )
    shown = {family.name + ("_total" if family.type == "counter" else "") for family in families(snapshot, slices=True)}
    asked = {name for group in RULES["groups"] for rule in group["rules"] for name in _metrics(rule["expr"])}

    assert asked <= shown | {"watcher_ledger_up"}
    assert len(asked) >= 8


def _metrics(expression: str) -> set[str]:
    without_labels = re.sub(r"\{[^}]*\}", "", expression)
    return set(re.findall(r"\bwatcher_\w+", without_labels))


@pytest.mark.peer("prometheus")
def test_the_configuration_of_prometheus_is_valid(tmp_path: Path) -> None:
    """With the token's file where the configuration looks for it."""
    token = tmp_path / "token"
    token.write_text("x")
    text = (FOLDER / "prometheus.yml").read_text().replace("/run/secrets/watcher_read_token", str(token))
    (tmp_path / "prometheus.yml").write_text(text)
    shutil.copy(FOLDER / "rules.yml", tmp_path)
    checked = _promtool("check", "config", "prometheus.yml", folder=tmp_path)

    assert checked.returncode == 0, checked.stdout + checked.stderr


def test_the_job_that_is_scraped_is_the_one_whose_absence_is_told() -> None:
    """The name of the job stands in both files."""
    scraped = [job["job_name"] for job in yaml.safe_load((FOLDER / "prometheus.yml").read_text())["scrape_configs"]]
    absent = next(rule for group in RULES["groups"] for rule in group["rules"] if rule["alert"] == "WatcherAbsent")

    assert scraped == ["watcher"]
    assert absent["expr"] == 'up{job="watcher"} == 0 or absent(up{job="watcher"})'


def test_the_readme_lists_every_alert_with_its_severity() -> None:
    """The table of docker/README.md."""
    listed = dict(
        re.findall(r"^\| `(Watcher\w+)` \| (\w+) \|", (FOLDER.parent / "README.md").read_text(), re.MULTILINE)
    )
    declared = {rule["alert"]: rule["labels"]["severity"] for group in RULES["groups"] for rule in group["rules"]}

    assert listed == declared
