from __future__ import annotations

import csv
import io
import json
import re
import subprocess
import sys
import zlib
from dataclasses import replace
from html.parser import HTMLParser
from pathlib import Path
from typing import Any

import pytest
from report.world import DEPOTS, make_snapshot, renamed
from wording.invented import FORMULA, HOSTILE

from watcher import wording
from watcher.errors import UsageError, WatcherError
from watcher.records import Head
from watcher.report import render
from watcher.report.files import DEFAULT, contents, write
from watcher.report.json_form import as_json, published_from
from watcher.report.page import as_html
from watcher.report.pdf import as_pdf
from watcher.report.table import HEADER, as_csv
from watcher.report.week import Week
from watcher.report.weekly import Report, published, weekly


def plain(spec: dict[str, Any], prefix: str) -> str:
    """A picture that costs nothing."""
    return f'<svg xmlns="http://www.w3.org/2000/svg" id="{prefix}"><title>{len(spec)}</title></svg>'


def unpacked(pdf: bytes) -> bytes:
    """A PDF with its compressed streams laid open: what is searched for could hide in them."""
    streams = re.findall(rb"stream\r?\n(.*?)\r?\nendstream", pdf, re.DOTALL)
    assert len(streams) > 5
    return pdf + b"".join(zlib.decompressobj().decompress(each) if each[:1] == b"x" else each for each in streams)


@pytest.fixture(scope="module")
def report() -> Report:
    return weekly(make_snapshot())


@pytest.fixture(scope="module")
def drawn(report: Report) -> str:
    return as_html(report)


class Page(HTMLParser):
    """Tags, attributes and text of a page."""

    def __init__(self, html: str) -> None:
        super().__init__()
        self.tags: list[str] = []
        self.attributes: list[tuple[str, str]] = []
        self.words: list[str] = []
        self.feed(html)

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.tags.append(tag)
        self.attributes += [(name, value or "") for name, value in attrs]

    def handle_data(self, data: str) -> None:
        self.words.append(data)

    @property
    def text(self) -> str:
        return " ".join(" ".join(self.words).split())


class TestPage:
    def test_fetches_nothing(self, drawn: str) -> None:
        """No script, link, import or address: whoever opens the file causes no request."""
        page = Page(drawn)

        assert not {"script", "link", "iframe", "object", "img", "form", "base"} & set(page.tags)
        assert not {name for name, _ in page.attributes} & {
            "src",
            "srcset",
            "action",
            "xlink:href",
            "onload",
            "onclick",
        }
        assert all(value.startswith("#") for name, value in page.attributes if name == "href")
        assert "@import" not in drawn
        assert all(found.startswith("#") for found in re.findall(r"url\(([^)]*)\)", drawn))

    def test_says_everything_the_week_needs(self, drawn: str, report: Report) -> None:
        """Sentence, both intervals with their assumption, events, changes, list, method, cautions, look and head."""
        text = Page(drawn).text
        promise = report.promises[0]
        figures = promise.whole.shown[0]
        assert figures.interval is not None
        assert figures.exact is not None
        for wanted in (
            wording.sentence(promise.whole.standing, promise.terms, "parcel"),
            wording.span(figures.interval.lower, figures.interval.upper),
            wording.span(figures.exact.lower, figures.exact.upper),
            "a volume fixed beforehand and outcomes that do not react to one another",
            "2026-W51",
            "provisional until 7 January 2027",
            "1 in 2,000",
            *(f"depot = {name}" for name in DEPOTS),
            *promise.whole.changes,
            *(wording.event_sentence(stored.event, promise.terms) for stored in promise.events),
            *wording.method(promise.terms),
            wording.budgets(promise.terms),
            wording.CAUTIONS,
            "As of look 63",
            report.head.digest,
            "at most 5% are expected to be listed wrongly",
        ):
            assert wanted in text, wanted

    def test_steps_show_commands_as_code(self, drawn: str) -> None:
        """What a person would type stands as code, without backticks."""
        assert "<code>watcher acknowledge</code>" in drawn
        assert "`" not in Page(drawn).text

    def test_tables_name_their_columns(self, drawn: str) -> None:
        """Every header cell says whether it heads a column or a row."""
        page = Page(drawn)

        assert page.tags.count("th") == sum(name == "scope" for name, _ in page.attributes)

    def test_ids_are_unique(self, drawn: str) -> None:
        """No two pictures share an id."""
        ids = [value for name, value in Page(drawn).attributes if name == "id"]

        assert len(ids) == len(set(ids))

    def test_several_promises_have_an_overview(self) -> None:
        """With two promises a table in front names both."""
        found = make_snapshot()
        two = replace(found, promises=(*found.promises, *renamed(found, "late-parcels").promises))
        text = Page(as_html(weekly(two), plain)).text

        assert "Overview" in text
        assert text.index("damage-photos, version 1") < text.index("late-parcels, version late-parcels")

    def test_a_week_without_anything(self) -> None:
        """Three days after the release the page stands, without intervals and without a broken word."""
        text = Page(as_html(weekly(make_snapshot((), days=3)), plain)).text

        assert "No labelled parcel has entered the evidence yet" in text
        assert "nothing yet" in text
        assert "None since the week began" not in text  # the release itself is an event
        assert "nan" not in text.lower().split()

    def test_a_revision_is_shown(self) -> None:
        """A changed figure of an earlier week stands under a heading of its own with both values."""
        said = [replace(p, labels=p.labels - 3) for p in published(weekly(make_snapshot(), Week.parse("2026-W48")))]
        later = replace(make_snapshot(), head=Head(99, "00" * 32), published=tuple(said[:1]))
        text = Page(as_html(weekly(later), plain)).text

        assert "Revised figures" in text
        assert f"the report as of look 63 said {said[0].labels:,} with" in text


class TestSameBytes:
    def test_the_same_ledger_gives_the_same_bytes(self) -> None:
        """Two snapshots of equal content give equal HTML, CSV, JSON and PDF, to the byte."""
        found = [weekly(make_snapshot.__wrapped__()) for _ in range(2)]
        first, second = (contents(each, ("html", "csv", "json", "pdf")) for each in found)

        assert first == second

    def test_another_look_gives_other_bytes(self) -> None:
        """The look number is part of every format, so a report tells as of when it speaks."""
        other = weekly(replace(make_snapshot(), head=Head(64, "ab" * 32)))
        first, second = (contents(each, DEFAULT, plain) for each in (weekly(make_snapshot()), other))

        assert all(first[each] != second[each] for each in DEFAULT)

    def test_nothing_of_the_machine_is_inside(self, report: Report, drawn: str) -> None:
        """No path, no version of a library and no time but those of the ledger."""
        import vl_convert

        for content in (*contents(report, DEFAULT, plain).values(), drawn.encode()):
            assert str(Path.cwd()).encode() not in content
            assert b"promise-watcher" not in content
        pdf = unpacked(as_pdf(drawn))
        for secret in ("WeasyPrint", "CreationDate", "Producer", vl_convert.__version__):
            assert secret.encode() not in pdf


class TestJson:
    def test_reads_back_as_published_figures(self, report: Report) -> None:
        """What a later report compares itself with survives the way through JSON unchanged."""
        assert published_from(as_json(report)) == published(report)

    def test_a_revision_holds_both_figures(self) -> None:
        """A changed figure of an earlier week stands with what was said, and as of which look."""
        said = [replace(p, labels=p.labels - 3) for p in published(weekly(make_snapshot(), Week.parse("2026-W48")))]
        later = replace(make_snapshot(), head=Head(99, "00" * 32), published=tuple(said[:1]))
        revision = json.loads(as_json(weekly(later)))["promises"][0]["cells"][0]["revisions"]

        assert [each["week"] for each in revision] == ["2026-W48"]
        assert revision[0]["now"]["labels"] - revision[0]["was"]["labels"] == 3
        assert revision[0]["was"]["look"] == 63

    def test_other_text_is_refused(self) -> None:
        """Text that is no report is refused in one sentence."""
        for text in ("{", "[]", '{"promises": [{}]}', "null"):
            with pytest.raises(UsageError, match="no weekly report"):
                published_from(text)

    def test_holds_every_figure(self, report: Report) -> None:
        """Cells, weeks, both intervals, standing, sentence, list, look and head are there as numbers."""
        body = json.loads(as_json(report))
        cell = body["promises"][0]["cells"][0]

        assert (body["week"], body["look"], body["head"]) == ("2026-W53", 63, report.head.digest)
        assert cell["standing"]["labels"] == report.promises[0].whole.standing.labels
        assert cell["weeks"][0]["simultaneous"]["lower"] <= cell["weeks"][0]["exact"]["lower"]
        assert cell["weeks"][1]["simultaneous"] is None
        assert body["list"]["listed"][0]["slice"] == {"column": "depot", "value": "Cedar"}


class TestCsv:
    def test_one_row_a_cell_and_week(self, report: Report) -> None:
        """Four cells and three weeks make twelve rows under one header, every row as wide as the header."""
        rows = list(csv.reader(io.StringIO(as_csv(report))))

        assert tuple(rows[0]) == HEADER
        assert len(rows) == 1 + 4 * 3
        assert {len(row) for row in rows} == {len(HEADER)}

    def test_figures_are_numbers(self, report: Report) -> None:
        """Counts are integers, limits are fractions, what does not exist is empty."""
        rows = list(csv.DictReader(io.StringIO(as_csv(report))))
        figures = report.promises[0].whole.shown[0]
        assert figures.interval is not None

        assert (rows[0]["labels"], rows[0]["errors"]) == (str(figures.labels), str(int(figures.errors)))
        assert float(rows[0]["simultaneous_upper"]) == figures.interval.upper
        assert (rows[1]["status"], rows[1]["exact_lower"]) == ("provisional", "")


class TestPdf:
    def test_is_a_tagged_pdf(self, drawn: str) -> None:
        """It starts as a PDF does, asks for PDF/UA, and holds every picture as lines, not as pixels."""
        pdf = as_pdf(drawn)
        inside = unpacked(pdf)

        assert pdf.startswith(b"%PDF-1.7")
        assert b'pdfuaid:part="1"' in inside
        assert b"/Lang (en)" in inside
        assert b"/Subtype /Image" not in inside

    @pytest.mark.peer("poppler")
    def test_reads_as_the_page_does(self, drawn: str, tmp_path: Path) -> None:
        """A PDF reader finds title, sentence and head in it, on numbered pages."""
        path = tmp_path / "report.pdf"
        path.write_bytes(as_pdf(drawn))
        read = subprocess.run(
            ["pdftotext", "-layout", str(path), "-"], capture_output=True, text=True, check=True
        ).stdout
        text = " ".join(read.split())

        assert "Weekly report 2026-W53" in text
        assert "The promise of 3% is" in text
        assert re.search(r"\b2 ?/ ?\d\b", text)

    def test_without_the_extra(self, monkeypatch: pytest.MonkeyPatch) -> None:
        """Where weasyprint is missing the message names the extra and the formats that need none."""
        monkeypatch.setitem(sys.modules, "weasyprint", None)

        with pytest.raises(UsageError, match=r"promise-watcher\[pdf\].*html, csv and json need neither"):
            as_pdf("<p>")

    def test_addresses_are_refused(self, tmp_path: Path) -> None:
        """A page that points to a file gets nothing of it: its PDF is that of the page without the picture."""
        secret = tmp_path / "secret.svg"
        secret.write_text(
            '<svg xmlns="http://www.w3.org/2000/svg" width="9" height="9"><rect width="9" height="9"/></svg>'
        )
        page = '<html lang="en"><title>t</title><p>text</p>{}'

        assert as_pdf(page.format(f'<img alt="" src="{secret.as_uri()}">')) == as_pdf(page.format('<img alt="">'))


class TestFiles:
    def test_written_whole(self, report: Report, tmp_path: Path) -> None:
        """Files are named after the week, hold exactly the contents, and nothing else is left behind."""
        place = tmp_path / "deep" / "reports"
        paths = write(report, place, DEFAULT, plain)

        assert [path.name for path in paths] == ["2026-W53.html", "2026-W53.csv", "2026-W53.json"]
        assert {path.name for path in place.iterdir()} == {path.name for path in paths}
        assert paths[1].read_bytes() == as_csv(report).encode()

    def test_written_again(self, report: Report, tmp_path: Path) -> None:
        """A second run replaces the files."""
        write(report, tmp_path, ("csv",))
        path = tmp_path / "2026-W53.csv"
        path.write_text("old")

        assert write(report, tmp_path, ("csv",))[0].read_text() != "old"

    def test_unknown_format(self, report: Report, tmp_path: Path) -> None:
        """An unknown format is refused before anything is written."""
        with pytest.raises(UsageError, match="allowed are html, csv, json, pdf"):
            write(report, tmp_path / "none", ("csv", "docx"), plain)

        assert not (tmp_path / "none").exists()

    def test_a_folder_that_cannot_be_written(self, report: Report, tmp_path: Path) -> None:
        """Where a file stands in place of the folder the message names it."""
        (tmp_path / "taken").write_text("")

        with pytest.raises(WatcherError, match="taken"):
            write(report, tmp_path / "taken", ("csv",))

    def test_nothing_half_written_is_left(
        self, report: Report, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
    ) -> None:
        """When the disk fails in the middle neither the file nor its unfinished twin is there."""

        def fail(self: Path, target: Path) -> Path:
            raise OSError(28, "No space left on device")

        monkeypatch.setattr(Path, "replace", fail)
        with pytest.raises(WatcherError, match="No space left"):
            write(report, tmp_path, ("csv",))

        assert list(tmp_path.iterdir()) == []


class TestHostileNames:
    @pytest.fixture
    def hostile(self) -> Report:
        found = make_snapshot(("Alder", HOSTILE, FORMULA), seed=3)
        return weekly(renamed(found, HOSTILE))

    def test_page(self, hostile: Report) -> None:
        """No markup, no control character, no direction mark and no more than 80 characters of a name get through."""
        html = as_html(hostile)
        page = Page(html)

        assert "script" not in page.tags
        assert "&lt;script&gt;alert(1)&lt;/script&gt;" in html
        assert all(c.isprintable() or c == "\n" for c in html)
        assert "x" * 81 not in html

    def test_pdf(self, hostile: Report) -> None:
        """The PDF can be made of it."""
        assert as_pdf(as_html(hostile, plain)).startswith(b"%PDF")

    def test_csv(self, hostile: Report) -> None:
        """No cell starts a formula or holds a control character, and every row is still whole."""
        rows = list(csv.reader(io.StringIO(as_csv(hostile))))

        assert {len(row) for row in rows} == {len(HEADER)}
        assert not [cell for row in rows for cell in row if cell[:1] in "=+@\t\r" and cell]
        assert not [
            cell for row in rows for cell in row if cell.startswith("-") and not re.fullmatch(r"-[\d.e-]+", cell)
        ]
        assert all(cell.isprintable() for row in rows for cell in row)
        assert f"'{FORMULA}" in {cell for row in rows for cell in row}

    def test_json(self, hostile: Report) -> None:
        """For machines the name is whole, and in the bytes nothing but ASCII stands."""
        text = as_json(hostile)

        assert text.isascii()
        assert HOSTILE in {
            (c["standing"]["slice"] or {}).get("value") for c in json.loads(text)["promises"][0]["cells"]
        }
        assert published_from(text) == published(hostile)


def test_pictures_are_drawn_by_the_given_hand(report: Report) -> None:
    """The page draws through its argument, so that a process that must not load the renderer can hand pictures in."""
    seen: list[str] = []

    def note(spec: dict[str, Any], prefix: str) -> str:
        seen.append(prefix)
        return plain(spec, prefix)

    as_html(report, note)
    assert seen == [f"c{i}-" for i in range(len(seen))]
    assert len(seen) == 6  # weeks, bounds, total, labels, one broken slice, small multiples
    assert render.VEGA_LITE == "6.4"
