"""`watcher report`: files of a week from the ledger alone, and what happens without the PDF library."""

from __future__ import annotations

import sys
from pathlib import Path

import pytest
from cli.worlds import HOSTILE, answer, folder, run


@pytest.fixture(scope="module")
def config(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A broken promise with a hostile slice name, released on Monday 5 January, looked at on Thursday 29 January."""
    path = folder(tmp_path_factory.mktemp("report"), jump=5, hostile=True)
    assert run("look", path, "--at", "2026-01-29").exit_code in (0, 3)
    return path


def test_a_week_is_written_in_every_format(config: Path, tmp_path: Path) -> None:
    """Four files named after the week, as of the newest look; JSON says so too. The week is the fourth of January."""
    found = answer("report", config, "--week", "2026-W03", "--out", tmp_path)
    names = [Path(path).name for path in found["files"]]

    assert names == [f"2026-W03.{kind}" for kind in ("html", "csv", "json", "pdf")]
    assert (tmp_path / "2026-W03.pdf").read_bytes().startswith(b"%PDF-")
    assert found["left_out"] is None
    status = answer("status", config, code=run("status", config).exit_code)
    assert (found["look"], found["head"]) == (status["look"], status["head"])
    page = (tmp_path / "2026-W03.html").read_text(encoding="utf-8")
    assert "2026-W03" in page
    assert HOSTILE not in page
    assert "\x1b" not in page


def test_the_newest_week_is_the_one_that_had_ended(config: Path, tmp_path: Path) -> None:
    """The look was in week 5 (by the calendar: Thursday 29 January 2026), so it is week 4, with or without --newest."""
    for arguments in ((), ("--newest",)):
        found = answer("report", config, *arguments, "--format", "json", "--out", tmp_path)
        assert found["week"] == "2026-W04"
        assert [Path(path).name for path in found["files"]] == ["2026-W04.json"]


def test_without_the_pdf_library_the_others_are_written_and_the_reason_is_said(
    config: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Exit 0 with the way to install it; insisting on pdf is exit 2 and writes nothing."""
    monkeypatch.setitem(sys.modules, "weasyprint", None)
    result = run("report", config, "--week", "2026-W03", "--out", tmp_path / "a")
    insisting = run("report", config, "--week", "2026-W03", "--format", "pdf", "--out", tmp_path / "b")

    assert result.exit_code == 0
    assert "promise-watcher[pdf]" in "".join(result.output.split("\n"))
    assert sorted(path.suffix for path in (tmp_path / "a").iterdir()) == [".csv", ".html", ".json"]
    assert insisting.exit_code == 2
    assert not (tmp_path / "b").exists()


@pytest.mark.parametrize(
    ("arguments", "word"),
    [
        (("--week", "2026-W60"), "2026-W60"),
        (("--week", "2026-W09"), "2026-W04"),
        (("--week", "2025-W50"), "2026-W02"),
        (("--week", "2026-W03", "--newest"), "one of them"),
    ],
)
def test_a_week_that_cannot_be_reported_is_refused_with_one_that_can(
    config: Path, tmp_path: Path, arguments: tuple[str, ...], word: str
) -> None:
    """No such week, not begun, before the release, both options: exit 2, no folder."""
    result = run("report", config, *arguments, "--out", tmp_path / "out")

    assert result.exit_code == 2
    assert word in result.stderr
    assert not (tmp_path / "out").exists()
