from __future__ import annotations

import json

import pytest
from hypothesis import given
from hypothesis import strategies as st
from wording.invented import FORMULA, HOSTILE

from watcher.text import csv_cell, mail_subject, safe, script_json


class TestSafe:
    def test_plain_text_stays(self) -> None:
        """Letters of any script, digits, signs and plain spaces are shown as they are."""
        assert safe("Depot Ölmühle 7, 倉庫 (Nord)") == "Depot Ölmühle 7, 倉庫 (Nord)"

    @pytest.mark.parametrize(
        ("given_", "shown"),
        [
            ("a\x00b", r"a\x00b"),
            ("a\r\nb", r"a\x0d\x0ab"),
            ("\x1b[31m", r"\x1b[31m"),
            ("\x7f\x9b", r"\x7f\x9b"),
            ("a\u202egnp.exe", r"a\u202egnp.exe"),
            ("a\u2066b\u200bc", r"a\u2066b\u200bc"),
            ("a\u2028b", r"a\u2028b"),
            ("a\u00a0b", r"a\xa0b"),
            ("a\ud800b", r"a\ud800b"),
            ("\U000e0041", r"\U000e0041"),
        ],
    )
    def test_what_cannot_be_seen_is_spelled(self, given_: str, shown: str) -> None:
        """Controls, direction marks, invisible characters and lone surrogates appear as escapes."""
        assert safe(given_) == shown

    def test_long_text_is_cut(self) -> None:
        """500 characters become 80, the last one an ellipsis, and an escape is never cut in two."""
        assert safe("x" * 500) == "x" * 79 + "…"
        assert safe("x" * 78 + "\x00" + "y") == "x" * 78 + "…"
        assert safe("x" * 80) == "x" * 80

    def test_marks_do_not_climb(self) -> None:
        """A letter with twenty combining marks keeps four, the rest is spelled."""
        assert safe("e" + "\u0301" * 20, None) == "e" + "\u0301" * 4 + r"\u0301" * 16

    @given(st.text(max_size=300), st.integers(1, 100))
    def test_always_one_short_visible_line(self, text: str, limit: int) -> None:
        """Whatever comes in, what goes out is at most `limit` printable characters."""
        shown = safe(text, limit)

        assert len(shown) <= limit
        assert shown.isprintable()

    @given(st.text(max_size=60))
    def test_escapes_are_stable(self, text: str) -> None:
        """Making safe text safe again changes nothing, so a second pass does no harm."""
        once = safe(text, None)

        assert safe(once, None) == once


class TestCsvCell:
    @pytest.mark.parametrize("sign", ["=", "+", "-", "@", "\t", "\r", "＝"])
    def test_no_formula_starts(self, sign: str) -> None:
        """Text that a spreadsheet would take for a formula gets a leading apostrophe."""
        assert csv_cell(f"{sign}1+1").startswith("'")
        assert csv_cell(f"  {sign}1+1").startswith("'")

    def test_numbers_stay_numbers(self) -> None:
        """A negative number is no formula; None is an empty cell."""
        assert [csv_cell(v) for v in (-1.5, 3, None, "Alder", FORMULA)] == ["-1.5", "3", "", "Alder", "'=cmd('calc')"]

    def test_nothing_is_cut(self) -> None:
        """A file for machines keeps two long names apart."""
        assert len(csv_cell("x" * 500)) == 500


def test_a_subject_has_no_line_break() -> None:
    """No header can be smuggled into a mail through its subject."""
    subject = mail_subject(HOSTILE)

    assert "\r" not in subject
    assert "\n" not in subject
    assert len(subject) <= 200


@given(st.dictionaries(st.text(max_size=20), st.text(max_size=40)))
def test_script_json_reads_back_and_closes_nothing(value: dict[str, str]) -> None:
    """JSON for a script element holds no <, > or & and still means the same."""
    text = script_json({**value, HOSTILE: HOSTILE})

    assert not set("<>&\u2028\u2029") & set(text)
    assert json.loads(text) == {**value, HOSTILE: HOSTILE}


def test_script_json_refuses_nan() -> None:
    """NaN is no JSON."""
    with pytest.raises(ValueError, match="JSON"):
        script_json(float("nan"))
