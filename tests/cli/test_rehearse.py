"""`watcher rehearse`: labelled as such, touches nothing, says what would have been said."""

from __future__ import annotations

from pathlib import Path

import pytest
from cli.worlds import HOSTILE, answer, folder, run

SPAN = ("--until", "2026-02-14", "--step", "20d")


@pytest.fixture(scope="module")
def config(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """30 healthy days; one site has a hostile name; no ledger."""
    return folder(tmp_path_factory.mktemp("rehearse"), hostile=True)


@pytest.fixture(scope="module")
def drifted(config: Path) -> object:
    """The JSON of a rehearsal with eight times the errors from 10 January on."""
    chart = config.parent / "chart.svg"
    drift = ("--inject", "from=2026-01-10,rate=8x")
    return answer("rehearse", config, *SPAN, *drift, "--chart", chart, code=3)


def test_the_answer_is_marked_as_a_rehearsal_and_keeps_nothing(config: Path) -> None:
    """In text and in JSON, with why it is no evidence; no ledger appears, an existing one is not touched."""
    shown = run("rehearse", config, *SPAN)

    assert shown.exit_code == 0
    assert shown.output.startswith("REHEARSAL, 2 looks")
    assert "REHEARSED, not recorded" in shown.output
    assert "no evidence" in " ".join(shown.output.split())
    assert "\x1b[31m" not in shown.output
    assert not (config.parent / "watcher.db").exists()
    assert run("look", config, "--at", "2026-01-20").exit_code == 0
    before = {path: path.read_bytes() for path in config.parent.glob("watcher.db*")}
    assert run("rehearse", config, *SPAN, "--json").exit_code == 0
    assert {path: path.read_bytes() for path in config.parent.glob("watcher.db*")} == before
    for path in before:
        path.unlink()


def test_without_drift_it_ends_where_one_look_ends(config: Path, tmp_path: Path) -> None:
    """Counts and totals are those of a single real look at the last moment, since labelled_at is mapped (method, section 2)."""
    found = answer("rehearse", config, *SPAN)
    look = answer("look", folder(tmp_path, hostile=True), "--at", "2026-02-14")

    assert (found["rehearsal"], found["looks"], found["injected"]) == (True, 2, None)
    for mine, other in zip(found["promises"], look["promises"], strict=True):
        for key in ("slice", "labels", "errors", "total", "breach"):
            assert mine[key] == other[key]


def test_injected_drift_is_described_and_its_notice_is_timed(drifted: dict[str, object], config: Path) -> None:
    """Base rate, chance, target, and the days to the first warning and breach, which are of the events said."""
    injected = drifted["injected"]
    assert isinstance(injected, dict)
    [applied] = injected["applied"]
    breaches = [said for said in drifted["said"] if said["kind"] == "breach"]  # type: ignore[attr-defined]

    assert applied["target"] == pytest.approx(8 * applied["errors"] / applied["labels"])
    assert applied["worse"]
    assert breaches[0]["at"] == applied["first"]["breach"]["at"]
    # The looks are on 25 January and 14 February: 15 or 35 days after the 10th, by the calendar.
    assert applied["first"]["breach"]["days"] in (15, 35)
    assert "is broken" in breaches[0]["sentence"]
    assert HOSTILE not in str([said["sentence"] for said in drifted["said"]])  # type: ignore[attr-defined]
    picture = (config.parent / "chart.svg").read_text(encoding="utf-8")
    assert picture.startswith("<svg")


def test_drift_in_a_slice_stays_in_it(config: Path) -> None:
    """Site a gets errors, the hostile one keeps its own; in words the slice is named."""
    plain = {str(p["slice"]): p["errors"] for p in answer("rehearse", config, *SPAN)["promises"]}
    drift = ("--inject", "from=2026-01-10,rate=0.2,slice=site=a")
    found = answer("rehearse", config, *SPAN, *drift, code=3)
    errors = {str(p["slice"]): p["errors"] for p in found["promises"]}
    more = {name: errors[name] - plain[name] for name in plain}

    changed = {name for name, number in more.items() if number}
    assert changed == {"None", str({"column": "site", "value": "a"})}
    assert len({more[name] for name in changed}) == 1
    shown = run("rehearse", config, *SPAN, *drift)
    assert "with site = a" in " ".join(shown.output.split())
    assert "the first breach" in " ".join(shown.output.split())


@pytest.mark.parametrize(
    ("arguments", "word"),
    [
        (("--inject", "rate=2x"), "from=2026-03-01"),
        (("--inject", "from=2026-03-01,rate=two"), "2x"),
        (("--inject", "from=2026-03-01,rate=1.5"), "between 0 and 1"),
        (("--inject", "from=2026-03-01,rate=0x"), "2x"),
        (("--inject", "from=yesterday,rate=2x"), "yesterday"),
        (("--inject", "from=2026-01-10,rate=2x,slice=site"), "a value"),
        (("--inject", "from=2026-01-10,rate=2x,slice=site="), "a value"),
        (("--inject", "from=2026-01-10,rate=2x,slice=site=nowhere"), "no labelled sample"),
        (("--inject", "from=2026-01-10,rate=500x"), "at most 1"),
        (("--promise", "nobody"), "'triage'"),
        (("--until", "2025-01-01"), "before until"),
        (("--step", "0d"), "longer than 0"),
        (("--step", "soon"), "soon"),
    ],
)
def test_what_cannot_be_rehearsed_is_refused_with_an_example(
    config: Path, arguments: tuple[str, ...], word: str
) -> None:
    """Exit 2, and what would be right."""
    result = run("rehearse", config, *SPAN, *arguments)

    assert result.exit_code == 2
    assert word in " ".join(result.stderr.replace("│", " ").split())


def test_a_source_that_fails_ends_it(tmp_path: Path) -> None:
    """Exit 1 with the reason."""
    config = folder(tmp_path)
    (tmp_path / "rows.csv").unlink()
    result = run("rehearse", config, *SPAN)

    assert result.exit_code == 1
    assert "missing" in result.stderr
