from __future__ import annotations

from dataclasses import replace
from datetime import timedelta
from fractions import Fraction

import numpy as np
import pytest
from report.world import make_snapshot, moment, snapshot_of
from scipy.stats import beta
from wording.invented import DAY, make_terms, utc

from watcher.bounds.evidence import evidence
from watcher.errors import UsageError
from watcher.records import CellCounts, Counts, Head
from watcher.report.figures import WeekFigures
from watcher.report.week import Week
from watcher.report.weekly import Report, changes, newest_week, published, weekly

# The invented promise is released on Monday 2 November 2026 (2026-W45), label lag 10 days, looked at on 4 January 2027,
# after 63 days: 53 days are sealed (up to 25 December), so W51 (to 20 December) is the newest final week.


def whole(report: Report) -> tuple[WeekFigures, ...]:
    return report.promises[0].whole.shown


class TestWhichWeeks:
    def test_the_newest_final_week_and_the_provisional_ones(self) -> None:
        """Monday's report shows the newest final week and every week after it, marked provisional."""
        report = weekly(make_snapshot())

        assert report.week.name == "2026-W53"
        assert [(f.week.name, f.final) for f in whole(report)] == [
            ("2026-W51", True),
            ("2026-W52", False),
            ("2026-W53", False),
        ]

    def test_an_earlier_week_once_final_stands_alone(self) -> None:
        """The report of a week that has become final shows that week only."""
        report = weekly(make_snapshot(), Week.parse("2026-W48"))

        assert [(f.week.name, f.final, f.ordinal) for f in whole(report)] == [("2026-W48", True, 4)]

    def test_before_any_week_is_final(self) -> None:
        """Three days after the release there is one provisional week and no interval."""
        report = weekly(make_snapshot(days=3))

        assert [(f.week.name, f.final, f.interval) for f in whole(report)] == [("2026-W45", False, None)]
        assert report.promises[0].whole.focus is None

    def test_the_first_week_runs_from_the_release(self) -> None:
        """A release on Thursday makes a first week of four days."""
        terms = make_terms(released=int(utc(2026, 11, 5).timestamp()))
        report = weekly(snapshot_of(terms, days=21))

        first = report.promises[0].whole.weeks[0]
        assert (first.week.name, first.ordinal, first.start) == ("2026-W45", 1, utc(2026, 11, 5))
        assert first.end == utc(2026, 11, 9)

    def test_the_zone_of_the_promise_cuts_the_week(self) -> None:
        """Auckland's Monday bucket (from Sunday 11:00 UTC) belongs to Auckland's week."""
        zone = "Pacific/Auckland"
        terms = make_terms(time_zone=zone, released=int(utc(2026, 11, 1, 11).timestamp()))
        report = weekly(snapshot_of(terms, days=21))

        weeks = report.promises[0].whole.weeks
        rows = [row.counts.labels for row in report.promises[0].snapshot.counts]
        assert [f.labels for f in weeks[:2]] == [sum(rows[:7]), sum(rows[7:14])]

    @pytest.mark.parametrize(
        ("week", "message"),
        [("2027-W20", "had not begun at the newest look"), ("2026-W40", "no promise was released by its end")],
    )
    def test_other_weeks_are_refused(self, week: str, message: str) -> None:
        """A week in the future and one before every release are refused with the week to ask for."""
        with pytest.raises(UsageError, match=message):
            weekly(make_snapshot(), Week.parse(week))

    def test_an_empty_ledger_is_refused(self) -> None:
        """Without a look there is nothing to report, and the message says what to do."""
        empty = replace(make_snapshot(), promises=())

        with pytest.raises(UsageError, match="make a look first"):
            weekly(empty)
        with pytest.raises(UsageError, match="make a look first"):
            weekly(empty, Week.parse("2026-W48"))

    def test_the_current_week_when_none_has_ended(self) -> None:
        """In the week of the release the newest week is the current one."""
        assert newest_week(make_snapshot(days=3)).name == "2026-W45"


class TestFigures:
    def test_counts_are_those_of_the_buckets(self) -> None:
        """Labels, errors and predictions of a week are the sums over its seven days, for the whole and each slice."""
        report = weekly(make_snapshot(), Week.parse("2026-W48"))
        start = utc(2026, 11, 23).timestamp()
        for cell in report.promises[0].cells:
            mine = [
                row.counts
                for row in report.promises[0].snapshot.counts
                if (row.column, row.value) == cell.cell.key and start <= row.bucket < start + 7 * DAY
            ]
            figures = cell.shown[0]
            assert len(mine) == 7
            assert figures.labels == sum(c.labels for c in mine)
            assert figures.errors == sum(c.errors for c in mine)
            assert figures.predictions == sum(c.predictions for c in mine)
            assert figures.estimate == pytest.approx(figures.errors / figures.labels)

    def test_the_simultaneous_interval_is_that_of_the_method(self) -> None:
        """At its ends the evidence equals log(1/(0.95*risk*part/(2W))), W = 364/7 + 1 = 53 (method.md section 9)."""
        report = weekly(make_snapshot(), Week.parse("2026-W48"))
        for cell in report.promises[0].cells:
            figures = cell.shown[0]
            bar = -np.log(0.95 * 0.001 * float(cell.cell.part) / (2 * 53))
            row = np.array([figures.labels, int(figures.errors)])
            assert figures.interval is not None
            assert float(evidence(row, figures.interval.upper, "below")) == pytest.approx(bar, rel=1e-6)
            if figures.interval.lower > 0:
                assert float(evidence(row, figures.interval.lower, "above")) == pytest.approx(bar, rel=1e-6)

    def test_the_exact_interval_is_the_textbook_one(self) -> None:
        """The plain interval is Clopper-Pearson at the cell's risk, by scipy's beta quantiles, and lies inside the other."""
        figures = weekly(make_snapshot(), Week.parse("2026-W48")).promises[0].whole.shown[0]
        n, k, half = figures.labels, int(figures.errors), 0.001 / 2 / 2
        assert figures.exact is not None
        assert figures.interval is not None

        assert figures.exact.lower == pytest.approx(beta.ppf(half, k, n - k + 1), rel=1e-9)
        assert figures.exact.upper == pytest.approx(beta.isf(half, k + 1, n - k), rel=1e-9)
        assert figures.interval.lower <= figures.exact.lower
        assert figures.exact.upper <= figures.interval.upper

    def test_weights_have_no_exact_interval(self) -> None:
        """Weighted samples have an estimate and a simultaneous interval, but no plain binomial one."""
        terms = make_terms(weight_levels=("0.5", "2"))
        found = snapshot_of(make_terms(), days=21)
        promise = found.promises[0]
        rows = []
        for row in promise.counts:
            half = Counts(row.counts.predictions, row.counts.labels, row.counts.errors)
            rows += [CellCounts("", "", row.bucket, "0.5", half), CellCounts("", "", row.bucket, "2", Counts(9, 8, 1))]
        changed = replace(promise, terms=terms, counts=tuple(rows))
        figures = weekly(replace(found, promises=(changed,)), Week.parse("2026-W45")).promises[0].whole.shown[0]

        light = [row.counts for row in promise.counts[:7]]
        n = sum(c.labels for c in light) + 7 * 8
        weighted = Fraction(1, 2) * sum(c.errors for c in light) + 2 * 7
        assert figures.final
        assert figures.exact is None
        assert figures.interval is not None
        assert figures.estimate == pytest.approx(float(weighted / n))
        assert figures.interval.lower < figures.estimate < figures.interval.upper

    def test_label_noise_moves_both_intervals(self) -> None:
        """Known noise of the labels is taken out of the limits, the lower one at its worst."""
        plain = weekly(snapshot_of(make_terms(), days=21), Week.parse("2026-W45")).promises[0].whole.shown[0]
        noisy_terms = make_terms(label_noise=(0.0, 0.01))
        noisy = weekly(snapshot_of(noisy_terms, days=21), Week.parse("2026-W45")).promises[0].whole.shown[0]

        assert plain.interval is not None
        assert noisy.interval is not None
        assert noisy.interval.lower == pytest.approx(max(0.0, (plain.interval.lower - 0.01) / 0.99), abs=1e-9)
        assert noisy.interval.upper == pytest.approx(plain.interval.upper / 0.99, abs=1e-9)

    def test_slices_come_by_their_share_of_the_threshold(self) -> None:
        """The whole is first; Cedar, whose errors tripled, leads the slices and is broken."""
        cells = weekly(make_snapshot()).promises[0].cells

        assert [cell.cell.value for cell in cells][:2] == ["", "Cedar"]
        assert cells[1].standing.state == "breached"


class TestRevisions:
    def test_nothing_changed_nothing_revised(self) -> None:
        """The same figures a week later are no revision."""
        before = weekly(make_snapshot(), Week.parse("2026-W48"))
        later = replace(make_snapshot(), head=Head(99, "00" * 32), published=published(before))

        assert all(cell.revised == () for cell in weekly(later).promises[0].cells)

    def test_a_changed_figure_is_shown_with_what_was_said(self) -> None:
        """An earlier week whose counts changed since carries the figures of the newest report that gave others."""
        before = weekly(make_snapshot(), Week.parse("2026-W48"))
        said = [replace(p, labels=p.labels - 3, errors=p.errors - 1) for p in published(before) if not p.column]
        older = [replace(p, labels=1, look=5) for p in said]
        later = replace(make_snapshot(), head=Head(99, "00" * 32), published=(*said, *older))

        revised = weekly(later).promises[0].whole.revised
        assert [figures.week.name for figures in revised] == ["2026-W48"]
        assert revised[0].was == said[0]
        assert revised[0].labels == said[0].labels + 3

    def test_a_report_is_not_compared_with_itself(self) -> None:
        """Figures published as of the same look are not earlier ones."""
        found = make_snapshot()
        said = [replace(p, labels=1) for p in published(weekly(found))]

        assert weekly(replace(found, published=tuple(said))).promises[0].whole.revised == ()


class TestWhatHappened:
    def test_changes_are_told_against_a_week_earlier(self) -> None:
        """New labels, moved limits and the moved total are told; a new state and flags too."""
        rows = make_snapshot().promises[0].history["depot", "Cedar"]
        now = replace(rows[-1].standing, flags=("warning",), state="supported")
        told = " ".join(changes(rows, now))

        then = rows[-8].standing
        assert f"The state went from {then.state} to supported." in told
        assert "Newly flagged: warning." in told
        assert (
            f"{now.labels - then.labels} labels with {int(now.errors - then.errors)} errors entered the evidence."
            in told
        )

    def test_a_quiet_week_and_a_week_of_corrections(self) -> None:
        """No new label, labels taken away, and a flag that came down are told as such."""
        rows = make_snapshot().promises[0].history["", ""]
        then = replace(rows[-8].standing, flags=("stale",))
        flagged = (*rows[:-8], replace(rows[-8], standing=then), *rows[-7:])

        assert changes(flagged, replace(then, flags=())) == (
            "No longer flagged: stale.",
            "No label entered the evidence.",
        )
        assert changes(flagged, replace(then, labels=then.labels - 2)) == (
            "Corrections took 2 labels out of the evidence.",
        )

    def test_no_week_earlier(self) -> None:
        """In the first week there is nothing to compare with."""
        assert changes((), make_snapshot().promises[0].standings[0]) == (
            "There is no standing of a week earlier to compare with.",
        )

    def test_events_are_those_since_the_week_began(self) -> None:
        """The report lists what was recorded since its week began, oldest first."""
        everything = weekly(make_snapshot(), Week.parse("2026-W45")).promises[0].events
        later = weekly(make_snapshot(), Week.parse("2026-W53")).promises[0].events

        assert next(stored.event.kind for stored in everything) == "released"
        assert [stored.at for stored in everything] == sorted(stored.at for stored in everything)
        assert all(stored.at >= utc(2026, 12, 28) for stored in later)


class TestList:
    def test_who_stands_out(self) -> None:
        """e-BH at 0.05 lists Cedar alone: its total is over log(3/0.05), the others' are not."""
        report = weekly(make_snapshot())

        assert [each.value for each in report.listed] == ["Cedar"]
        assert report.listed[0].total >= np.log(3 / 0.05)
        assert report.slices == 3

    def test_no_slices_no_list(self) -> None:
        """A promise without slices has none to list."""
        report = weekly(make_snapshot(()))

        assert (report.listed, report.slices) == ((), 0)

    def test_a_smaller_rate_lists_less(self) -> None:
        """At a false discovery rate of 1e-30 nothing is listed."""
        assert weekly(make_snapshot(), fdr=1e-30).listed == ()


def test_no_clock_is_read() -> None:
    """The report speaks as of its newest look: its time is that of the snapshot."""
    found = make_snapshot()

    assert weekly(found).at == found.at == moment(found.promises[0].terms.released) + timedelta(days=63)
