from __future__ import annotations

import re
from dataclasses import replace

import numpy as np
import pytest
from wording.invented import DAY, HOSTILE, make_standing, make_terms, utc, with_depots

from watcher import wording
from watcher.bounds.deciding import labels_to_decide
from watcher.bounds.windows import restarts, window_limits
from watcher.records import EVENTS, FLAGS, Breach, Event, Interval, Support, ToDecide

COLOURS = re.compile(r"\b(red|green|amber|yellow|orange|traffic|light)\b", re.IGNORECASE)
BREACH = Breach(1, utc(2026, 11, 28), utc(2026, 12, 8, 6), utc(2026, 11, 20), 0.03127)


class TestUndecided:
    def test_the_example(self) -> None:
        """1,204 labels with 31 errors read as the issue gives them, limits rounded outward."""
        expected = (
            "From 2 to 29 November 2026, 1,204 labelled parcels entered the evidence, 31 of them misjudged. The promise of 3% "
            "is neither supported nor broken: since the release the average error lies between 0.9% and 5.1% (the lower limit "
            "is wrong with chance at most 1 in 5,000, the upper one 1 in 2,000). About 27,000 more labels would decide in half "
            "of such cases."
        )

        assert wording.sentence(make_standing(), make_terms(), "parcel") == expected

    def test_its_figures_are_those_of_the_method(self) -> None:
        """The limits and the labels to decide in the example are what `bounds` computes for 31 in 1,204."""
        terms = make_terms()
        count = restarts(terms.service_life, terms.bucket)
        lower, upper = window_limits(np.array([[1204, 31]]), np.array([0]), np.array([0.001]), count)

        assert make_standing().life.lower == pytest.approx(lower[0], abs=1e-8)
        assert make_standing().life.upper == pytest.approx(upper[0], abs=1e-8)
        median = labels_to_decide(1204, 31, 0.03, 0.001)[0]
        assert median is not None
        assert wording.about(median) == "27,000"  # the figure

    def test_no_lower_limit(self) -> None:
        """With too few errors for a lower limit only the upper one is told."""
        text = wording.sentence(make_standing(life=Interval(0.0, 0.2)), make_terms())

        assert "is at most 20.0% (wrong with chance at most 1 in 2,000)" in text

    def test_no_limit_at_all(self) -> None:
        """With hardly a label it says that the labels limit nothing yet."""
        text = wording.sentence(make_standing(labels=2, errors=0.0, life=Interval(0.0, 1.0)), make_terms())

        assert "too few labels have come to limit the average error" in text
        assert "none of them misjudged" in text

    def test_too_many_labels_to_decide(self) -> None:
        """Where no number up to a million decides, it says so and names the plan as the next step."""
        standing = make_standing(to_decide=ToDecide(None, None))

        assert "More than 1,000,000 further labels" in wording.sentence(standing, make_terms())
        assert "watcher plan" in " ".join(wording.next_steps(standing))

    def test_nothing_counted(self) -> None:
        """Before the first sealed bucket it says when buckets count and on what the promise rests."""
        standing = make_standing(counted_until=None, labels=0, errors=0.0, estimate=None, life=Interval(0.0, 1.0))
        text = wording.sentence(standing, make_terms(), "parcel")

        assert text == (
            "No labelled parcel has entered the evidence yet: a bucket counts 10 days after its end. The promise of 3% rests "
            "on its release evidence."
        )
        assert "has no release evidence" in wording.sentence(replace(standing, flags=("uncertified",)), make_terms())

    def test_sealed_but_unlabelled(self) -> None:
        """Counted days without a label are told with their dates."""
        standing = make_standing(labels=0, errors=0.0, estimate=None, life=Interval(0.0, 1.0))

        assert wording.sentence(standing, make_terms(), "parcel").startswith(
            "From 2 to 29 November 2026, no labelled parcel entered the evidence. The promise of 3% rests"
        )


class TestOtherStates:
    def test_breached(self) -> None:
        """A breach is told with its dates, its lower limit rounded down and the chance that it is said wrongly."""
        text = wording.sentence(make_standing(state="breached", breach=BREACH, to_decide=None), make_terms())

        assert "is broken (breach 1, noticed on 8 December 2026, 06:00)" in text
        assert "ended with 27 November 2026 the average error was above 3.12%" in text
        assert "ever said wrongly is at most 1 in 1,000" in text
        assert "likeliest start is 20 November 2026" in text
        assert "acknowledge" in wording.next_steps(make_standing(breach=BREACH))[0]

    def test_supported(self) -> None:
        """Support names its window and its upper limit rounded up."""
        support = Support(utc(2026, 11, 5), utc(2026, 11, 30), 0.02981)
        text = wording.sentence(make_standing(state="supported", support=support), make_terms())

        assert "is supported: from 5 to 29 November 2026 the average error was at most 2.99%" in text
        assert wording.next_steps(make_standing(support=support)) == ()

    def test_a_slice_names_itself_and_its_part(self) -> None:
        """A slice has a part of the risk (2/15 here) and chances to match: 1 in 37,500 below, 1 in 15,000 above."""
        standing = make_standing(column="depot", value="Cedar", part=2 / 15)
        text = wording.sentence(standing, with_depots("Alder", "Birch", "Cedar"), "parcel")

        assert text.startswith("depot = Cedar (judged at 13.3% of the risk of 1 in 1,000): From 2 to")
        assert wording.limits_chance(standing) == ("1 in 37,500", "1 in 15,000")

    def test_remarks(self) -> None:
        """Waiting labels, a standing warning and silence are in the sentence itself."""
        standing = make_standing(provisional_labels=210, provisional_errors=5.0, flags=("warning", "stale"))
        text = wording.sentence(standing, make_terms(), "parcel")

        assert text.endswith(
            "210 further labelled parcels (5 misjudged) do not count yet: their label lag of 10 days is not over. An early "
            "warning stands. No label is newer than 8 December 2026; nothing is known of the time since."
        )
        assert "1 further labelled parcel (1 misjudged) does not count yet: its label lag" in wording.sentence(
            make_standing(provisional_labels=1, provisional_errors=1.0), make_terms(), "parcel"
        )

    @pytest.mark.parametrize(
        ("measure", "words"),
        [
            ("miss", "1,204 labelled positive parcels entered the evidence, 31 of them missed"),
            ("false-alarm", "1,204 labelled negative parcels entered the evidence, 31 of them a false alarm"),
            ("loss", "1,204 labelled parcels entered the evidence, with a total loss of 31"),
        ],
    )
    def test_measures(self, measure: str, words: str) -> None:
        """Each measure counts in its own words and never speaks of another."""
        text = wording.sentence(make_standing(), make_terms(measure=measure), "parcel")

        assert words in text
        assert "misjudged" not in text

    def test_clusters_say_what_their_limits_need(self) -> None:
        """Limits from clusters hold for a constant rate only, and the sentence says so."""
        assert "for a rate that does not change" in wording.sentence(make_standing(), make_terms(n_max=5))


class TestFlags:
    @pytest.mark.parametrize("flag", FLAGS)
    def test_every_flag_is_told_and_has_a_next_step(self, flag: str) -> None:
        """Each flag has one plain sentence and one thing to do."""
        standing = make_standing(flags=(flag,), to_decide=None)

        assert len(wording.flag_sentences(standing, make_terms())) == 1
        assert len(wording.next_steps(standing)) == 1

    def test_nothing_to_say(self) -> None:
        """Without flags there is no flag sentence."""
        assert wording.flag_sentences(make_standing(), make_terms()) == ()


class TestEvents:
    @pytest.mark.parametrize("kind", EVENTS)
    def test_every_kind_has_words_of_its_own(self, kind: str) -> None:
        """Each recorded kind is told in a sentence even when its facts are missing."""
        event = Event(kind, "damage-photos", "1", "depot", "Cedar", int(utc(2026, 11, 5).timestamp()))
        text = wording.event_sentence(event, make_terms())

        assert text.endswith(".")
        assert "damage-photos version 1, depot = Cedar: " in text
        assert text != wording.event_sentence(replace(event, kind="something-else"), make_terms())

    def test_a_breach_with_its_facts(self) -> None:
        """The facts that the verdict records are told with their dates and numbers."""
        facts = {
            "number": 1,
            "at": "2026-11-28T00:00:00+00:00",
            "since": "2026-11-20T00:00:00+00:00",
            "lower": "0.03127",
            "window_labels": 1679,
            "window_errors": "95",
            "window": 18,
        }
        event = Event("breach", "damage-photos", "1", "", "", None, facts)

        assert wording.event_sentence(event, make_terms()) == (
            "damage-photos version 1: the promise of 3% is broken (breach 1): over some period that ended with 27 November "
            "2026 the average error was above 3.12%; likeliest start 20 November 2026, 95 errors in 1,679 labels since then."
        )

    def test_a_source_that_failed(self) -> None:
        """Events of a source need no promise; what the source said is made safe."""
        facts = {"source": "desk", "reason": "missing", "detail": "no file \x1b[31m"}
        text = wording.event_sentence(Event("source-failed", "", "", "", "", None, facts))

        assert text == r"Source desk gave no answer: missing (no file \x1b[31m). The counts stay as they were."

    def test_odd_facts_do_no_harm(self) -> None:
        """Facts of an unforeseen kind are shown as they are instead of failing."""
        event = Event("evidence-shrank", "p", "1", "", "", None, {"labels": "fewer", "predictions": [3, 2]})

        assert (
            wording.event_sentence(event) == "p version 1: rows vanished from the source: predictions 3 to 2, labels ?."
        )


def _everything(name: str) -> list[str]:
    terms = replace(with_depots(name), promise=name, version=name, label_lag=0)
    told = []
    for changes in ({}, {"breach": BREACH, "state": "breached"}, {"provisional_labels": 3, "flags": FLAGS}):
        standing = make_standing(column="depot", value=name, part=0.4, promise=name, **changes)
        told += [wording.sentence(standing, terms, name), *wording.flag_sentences(standing, terms)]
        told += [*wording.next_steps(standing), wording.headline(standing, terms), wording.name(standing)]
        told += wording.diagnostic_sentences(replace(standing, diagnostics={name: name}), terms)
    told += [
        wording.event_sentence(Event(k, name, name, name, name, None, {name: name, "by": name}), terms) for k in EVENTS
    ]
    return [*told, wording.budgets(terms), *wording.method(terms), wording.CAUTIONS]


def test_hostile_names_are_made_safe_everywhere() -> None:
    """No sentence carries a control character, a direction mark or more than 80 characters of an outside name."""
    for text in _everything(HOSTILE):
        assert text.isprintable(), text
        assert "x" * 81 not in text


def test_no_colour_is_named() -> None:
    """States are told in words, never in colours or lights."""
    for text in _everything("Alder"):
        assert not COLOURS.search(text), text


def test_the_budgets_add_up() -> None:
    """Three budgets of 1 in 1,000 are 1 in 333 together, rounded so that "at most" stays true."""
    assert "1 in 1,000" in wording.budgets(make_terms())
    assert "at most 1 in 333" in wording.budgets(make_terms())


def test_the_method_has_five_lines() -> None:
    """Five lines, and the first one depends on how labels are counted."""
    assert len(wording.method(make_terms())) == 5
    assert wording.method(make_terms(count="arriving"))[0] != wording.method(make_terms())[0]
    assert "Half of the risk" in wording.method(with_depots("Alder"))[2]


def test_diagnostics_in_words() -> None:
    """Share, age, tipping point and dispersion are told as sentences; each only where it is known."""
    found = {
        "labelled_share": 0.86,
        "unlabelled": 196,
        "label_age_seconds": 3 * DAY + 5,
        "tipping_point": 0.0561,
        "tipping_point_upper": -0.1,
        "over_dispersion": 0.914,
    }
    text = wording.diagnostic_sentences(make_standing(diagnostics=found), make_terms())

    assert text[0] == "86.0% of the predictions in the evidence are labelled; 196 are not."
    assert text[1] == "The newest label is of a prediction of 8 December 2026, 3 days before the look."
    assert text[2] == (
        "The average passes the tolerance if more than 5.6% of the unlabelled are errors; with the upper limit in place of "
        "the estimate, from 0% on."
    )
    assert text[3] == "Errors a bucket vary 0.91 times as much as independent labels of one rate would."
    assert len(text) == 4
    assert wording.diagnostic_sentences(make_standing(), make_terms()) == ()


@pytest.mark.parametrize(
    ("point", "careful", "words"),
    [
        (-0.2, -0.5, "alone lie above the tolerance"),
        (1.4, 1.2, "Even if every unlabelled sample were an error, the average would keep the tolerance."),
        (1.4, 0.5, "would keep the tolerance; with the upper limit in place of the estimate, from 50.0% on."),
        (0.08, 1.2, "if more than 8.0% of the unlabelled are errors."),
    ],
)
def test_tipping_points(point: float, careful: float, words: str) -> None:
    """Below 0, above 1 and between, the tipping point means different things and is told so."""
    found = {"tipping_point": point, "tipping_point_upper": careful}

    assert words in wording.diagnostic_sentences(make_standing(diagnostics=found), make_terms())[0]


@pytest.mark.parametrize(
    ("changes", "words"),
    [
        ({}, "is neither supported nor broken"),
        ({"breach": BREACH}, "is broken, likeliest since 20 November 2026"),
        ({"support": Support(utc(2026, 11, 5), utc(2026, 11, 30), 0.0298)}, "is supported up to 29 November 2026"),
        ({"labels": 0}, "nothing counted yet"),
    ],
)
def test_headlines(changes: dict[str, object], words: str) -> None:
    """A few words for a list say the state and the date that matters."""
    assert words in wording.headline(make_standing(**changes), make_terms())


def test_only_a_lower_limit() -> None:
    """When nearly everything is wrong there is a lower limit and no upper one."""
    text = wording.sentence(make_standing(life=Interval(0.4, 1.0)), make_terms())

    assert "is at least 40.0% (wrong with chance at most 1 in 5,000)" in text


def test_late_labels_are_told_and_have_a_next_step() -> None:
    """Labels that came too late are counted in words, with what to do about them."""
    standing = make_standing(late_labels=7)

    assert "7 labels came too late to be counted." in wording.diagnostic_sentences(standing, make_terms())
    assert "`label_lag` is too short" in " ".join(wording.next_steps(standing))
