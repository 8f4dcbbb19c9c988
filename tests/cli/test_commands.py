"""The commands: exit codes, JSON, refusals with a way out, and answers that say what they mean."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import pytest
from click.testing import CliRunner, Result
from look.rows import configuration, write, year

from watcher.cli import main
from watcher.cli.main import _Group

DAYS = 50


def _run(*arguments: str | Path) -> Result:
    return CliRunner().invoke(main, [str(argument) for argument in arguments])


def _json(*arguments: str | Path, code: int = 0) -> Any:
    result = _run(*arguments, "--json")

    assert code == result.exit_code, result.output + result.stderr
    return json.loads(result.stdout)


@pytest.fixture(scope="module")
def healthy(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A folder with a configuration, rows of 50 healthy days, and one look made on day 56."""
    folder = tmp_path_factory.mktemp("healthy")
    write(folder / "rows.csv", year(11, DAYS, 40, late=True, rate=0.01))
    path = folder / "watcher.toml"
    path.write_text(configuration(), encoding="utf-8")
    assert _run("look", path, "--at", "2026-03-02").exit_code == 0
    return path


@pytest.fixture(scope="module")
def broken(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """The same with a jump at site b that breaks the promise there."""
    folder = tmp_path_factory.mktemp("broken")
    write(folder / "rows.csv", year(12, DAYS, 120, late=False, rate=0.03, jump=5))
    path = folder / "watcher.toml"
    path.write_text(configuration(), encoding="utf-8")
    assert _run("look", path, "--at", "2026-03-02").exit_code == 3
    return path


def test_the_json_of_a_look_has_the_keys_of_the_contract(healthy: Path) -> None:
    """Every promise and slice with its numbers; rates are fractions, times RFC 3339."""
    found = _json("look", healthy, "--at", "2026-03-02")
    whole = found["promises"][0]

    assert set(found) == {"at", "look", "head", "promises", "rejected", "failed"}
    assert found["at"] == "2026-03-02T00:00:00Z"
    assert whole["slice"] is None
    assert {"column": "site", "value": "c"} in [promise["slice"] for promise in found["promises"]]
    expected = {
        "promise", "version", "slice", "state", "flags", "tolerance", "risk", "terms", "predictions", "labels", "errors",
        "provisional", "estimate", "life", "recent", "support", "total", "threshold", "breach", "labels_to_decide",
        "newest_label",
    }  # fmt: skip
    assert expected <= set(whole)
    assert 0 <= whole["life"]["lower"] <= whole["estimate"] <= whole["life"]["upper"] <= 1


def test_a_second_look_without_news_writes_nothing(healthy: Path) -> None:
    """The look number stays."""
    first = _json("look", healthy, "--at", "2026-03-02")["look"]

    assert _json("look", healthy, "--at", "2026-03-02")["look"] == first


def test_a_breach_exits_3_everywhere(broken: Path) -> None:
    """look, status: 3; the sentence names the slice."""
    result = _run("status", broken)

    assert result.exit_code == 3
    assert "site = b" in result.output
    assert "broken" in result.output
    assert _json("status", broken, code=3)["promises"][0]["promise"] == "triage"


def test_at_before_the_newest_look_is_refused(healthy: Path) -> None:
    """Exit 2, pointing to rehearse."""
    result = _run("look", healthy, "--at", "2026-02-01")

    assert result.exit_code == 2
    assert "rehearse" in result.stderr


def test_at_after_the_clock_needs_dry_run(healthy: Path) -> None:
    """The future may be asked for only without writing."""
    refused = _run("look", healthy, "--at", "2199-01-01")

    assert refused.exit_code == 2
    assert "--dry-run" in refused.stderr


def test_dry_run_leaves_the_ledger_as_it_was(healthy: Path) -> None:
    """Head and counts stay."""
    before = _json("status", healthy)["head"]
    dry = _json("look", healthy, "--at", "2026-03-04", "--dry-run")

    assert dry["promises"][0]["labels"] > 0
    assert _json("status", healthy)["head"] == before


def test_changed_terms_are_refused_with_the_way_out(healthy: Path) -> None:
    """Key, both values, a new version."""
    text = healthy.read_text(encoding="utf-8")
    other = healthy.with_name("other.toml")
    other.write_text(text.replace("tolerance = 0.03", "tolerance = 0.04"), encoding="utf-8")
    result = _run("look", other, "--at", "2026-03-03")

    assert result.exit_code == 2
    for word in ("tolerance", "0.03", "0.04", "new version"):
        assert word in result.stderr


def test_audit_verifies_and_rederives(healthy: Path, broken: Path) -> None:
    """Every look of a real ledger is derived again; a wrong head is found."""
    for path in (healthy, broken):
        found = _json("audit", path)
        assert found["findings"] == []
        assert found["rederived"] == found["looks"] > 0
    assert _run("audit", healthy, "--head", f"1:{'0' * 64}").exit_code == 1
    assert _run("audit", healthy, "--head", "nonsense").exit_code == 2


def test_explain_can_be_redone_by_hand(broken: Path) -> None:
    """The windows' parts and the remainder add up to exp(total); window 0 has all labels."""
    import math

    found = _json("explain", broken, "triage", "--slice", "site=b", "--all")
    parts = sum(window["part"] for window in found["windows"]) + found["remainder"]

    assert math.log(parts) == pytest.approx(found["total"], abs=2e-6)
    assert found["threshold"] == pytest.approx(math.log(1 / found["risk"]), abs=1e-9)
    status = {(p["slice"] or {}).get("value"): p for p in _json("status", broken, code=3)["promises"]}
    assert found["windows"][0]["labels"] == status["b"]["labels"]
    assert _json("explain", broken, "triage", "--look", "1")["windows"][0]["labels"] == status[None]["labels"]
    assert _run("explain", broken, "triage").exit_code == 0


@pytest.mark.parametrize("arguments", [("nobody",), ("triage", "--slice", "site=z"), ("triage", "--look", "99")])
def test_explain_names_what_it_knows(broken: Path, arguments: tuple[str, ...]) -> None:
    """An unknown promise, slice or look is exit 2."""
    assert _run("explain", broken, *arguments).exit_code == 2


def test_check_finds_every_problem_at_once(tmp_path: Path, healthy: Path) -> None:
    """A missing source and weak release evidence in one answer; a good configuration is ready."""
    assert _run("check", healthy).exit_code == 0
    text = configuration().replace("errors = 126", "errors = 400")
    path = tmp_path / "watcher.toml"
    path.write_text(text, encoding="utf-8")
    found = _json("check", path, code=2)
    problems = [finding["text"] for finding in found if finding["level"] == "problem"]

    assert any("missing" in text for text in problems)
    assert any("bear out" in text for text in problems)


def test_labels_that_share_no_value_with_predictions_are_refused(tmp_path: Path) -> None:
    """Both lists are printed, nothing is written."""
    rows = [(*row[:5], "spam" if row[5] == "yes" else "ham", row[6]) for row in year(1, 3, 20, late=False)]
    write(tmp_path / "rows.csv", rows)
    path = tmp_path / "watcher.toml"
    path.write_text(configuration(), encoding="utf-8")
    result = _run("look", path, "--at", "2026-01-20")

    assert result.exit_code == 2
    assert "'spam'" in result.stderr
    assert "'no'" in result.stderr
    assert _run("status", path).exit_code == 0


def test_a_file_can_be_judged_without_a_configuration(healthy: Path, tmp_path: Path) -> None:
    """Columns are guessed and said; nothing is kept; without --tolerance it is refused."""
    file = tmp_path / "rows.csv"
    file.write_text((healthy.parent / "rows.csv").read_text(encoding="utf-8"), encoding="utf-8")
    result = _run("look", file, "--tolerance", "0.03", "--at", "2026-03-02")

    assert result.exit_code == 0, result.output
    assert "guessed" in result.stderr
    assert "Nothing is kept" in result.output
    assert list(tmp_path.iterdir()) == [file]
    assert _run("look", file).exit_code == 2


def test_a_draft_becomes_a_configuration_that_check_accepts(healthy: Path, tmp_path: Path) -> None:
    """Marked lines say what could not be guessed."""
    file = tmp_path / "rows.csv"
    file.write_text((healthy.parent / "rows.csv").read_text(encoding="utf-8"), encoding="utf-8")
    drafted = _run("draft", file)
    path = tmp_path / "watcher.toml"
    path.write_text(drafted.output, encoding="utf-8")

    assert "# <-- decide" in drafted.output
    assert _run("check", path).exit_code == 0


def test_bounds_answers_with_both_intervals(tmp_path: Path) -> None:
    """The interval at all times holds the exact one of a single look; evidence for a tolerance on request."""
    found = _json("bounds", "--labels", "6000", "--errors", "126", "--risk", "0.001", "--tolerance", "0.03")

    assert (
        found["always"]["lower"] < found["exact"]["lower"] < 0.021 < found["exact"]["upper"] < found["always"]["upper"]
    )
    assert found["evidence"]["below"] > 0
    assert _run("bounds", "--labels", "5", "--errors", "6").exit_code == 2
    assert _run("bounds", "--labels", "5", "--errors", "1", "--risk", "2").exit_code == 2
    assert _run("bounds", "--labels", "600", "--errors", "12").exit_code == 0


def test_a_source_that_is_gone_is_a_failed_look(tmp_path: Path) -> None:
    """Exit 1, counts stay, and it is restored later."""
    path = tmp_path / "watcher.toml"
    path.write_text(configuration(), encoding="utf-8")
    first = _json("look", path, "--at", "2026-01-20", code=1)
    write(tmp_path / "rows.csv", year(1, 3, 20, late=False))
    second = _json("look", path, "--at", "2026-01-21")

    assert first["failed"][0]["reason"] == "missing"
    assert second["failed"] == []
    assert second["look"] > first["look"] > 0


def test_rejected_rows_are_counted_kept_and_shown(tmp_path: Path) -> None:
    """By reason, with file and line."""
    rows = [*year(1, 3, 20, late=False), ("x1", "0", "2026-02-30T00:00:00Z", "", "a", "yes", "yes")]
    write(tmp_path / "rows.csv", rows)
    path = tmp_path / "watcher.toml"
    path.write_text(configuration(), encoding="utf-8")
    _run("look", path, "--at", "2026-01-20")
    found = _json("rejects", path)["triage"]

    assert found["counts"] == {"bad-time": 1}
    assert found["samples"][0]["id"] == "x1"
    assert found["samples"][0]["line"] == len(rows) + 1
    assert "bad-time" in _run("rejects", path).output


def test_a_new_version_supersedes(tmp_path: Path) -> None:
    """The old one is closed, the new one starts afresh, the old terms stay readable."""
    write(tmp_path / "rows.csv", year(1, 20, 20, late=False))
    path = tmp_path / "watcher.toml"
    path.write_text(configuration(), encoding="utf-8")
    _run("look", path, "--at", "2026-01-20")
    newer = (
        configuration()
        .replace('name = "triage"', 'name = "triage"\nversion = "2"')
        .replace("2026-01-05T", "2026-01-15T")
    )
    path.write_text(newer, encoding="utf-8")
    found = _json("look", path, "--at", "2026-01-26")

    assert {promise["version"] for promise in found["promises"]} == {"2"}
    assert _run("explain", path, "triage", "--version", "1").exit_code == 0
    assert _json("audit", path)["findings"] == []


def test_a_promise_that_vanishes_from_the_file_stays_watched(tmp_path: Path) -> None:
    """Flagged unlisted until it is retired."""
    write(tmp_path / "rows.csv", year(1, 20, 20, late=False))
    path = tmp_path / "watcher.toml"
    path.write_text(configuration(), encoding="utf-8")
    _run("look", path, "--at", "2026-01-20")
    path.write_text(configuration().replace('name = "triage"', 'name = "other"'), encoding="utf-8")
    found = {
        p["promise"]: p["flags"] for p in _json("look", path, "--at", "2026-01-22")["promises"] if p["slice"] is None
    }

    assert "unlisted" in found["triage"]
    assert "unlisted" not in found["other"]


def test_every_command_has_help_and_is_in_the_readme_or_docs() -> None:
    """`--help` works for each, and a misspelt one is answered with the nearest."""
    text = "".join(p.read_text(encoding="utf-8") for p in [Path("README.md"), *Path("docs").glob("*.md")])
    for name in _Group.commands_at:
        assert _run(name, "--help").exit_code == 0
        assert f"watcher {name}" in text, name
    assert "Did you mean 'status'" in _run("statsu").stderr


def test_dry_run_needs_no_ledger(tmp_path: Path) -> None:
    """Before the first look it judges in memory and leaves nothing behind."""
    write(tmp_path / "rows.csv", year(1, 3, 20, late=False))
    path = tmp_path / "watcher.toml"
    path.write_text(configuration(), encoding="utf-8")
    found = _json("look", path, "--at", "2026-01-20", "--dry-run")

    assert found["promises"][0]["labels"] > 0
    assert sorted(p.name for p in tmp_path.iterdir()) == ["rows.csv", "watcher.toml"]
