"""`watcher certify`: every form of promise in sentences, table and JSON; nonsense is refused by name."""

from __future__ import annotations

import json
import math
from typing import Any

import pytest
from click.testing import CliRunner, Result
from scipy.stats import binom

from watcher.cli import main


def _run(*arguments: object) -> Result:
    return CliRunner().invoke(main, ["certify", *map(str, arguments)])


def _json(*arguments: object) -> Any:
    result = _run(*arguments, "--json")

    assert result.exit_code == 0, result.output + result.stderr
    return json.loads(result.stdout)


def test_a_hold_out_bears_out_the_exact_limit_with_hoeffding_beside() -> None:
    """126 errors in 6000 bear out 0.0274 at 0.001 (method.md section 6); the limit is the exact tail of scipy (computed)."""
    found = _json("--labels", 6000, "--errors", 126, "--risk", 0.001)

    assert found["exact"] == pytest.approx(0.0274, abs=5e-5)
    assert binom.cdf(126, 6000, found["exact"]) == pytest.approx(0.001, rel=1e-9)
    assert found["hoeffding"] == pytest.approx(0.021 + math.sqrt(math.log(1000) / 12000))
    printed = _run("--labels", 6000, "--errors", 126, "--risk", 0.001).output
    assert "2.74%" in printed
    assert "1 in 1,000" in printed
    assert "Hoeffding" in printed


def test_what_is_printed_may_be_promised() -> None:
    """The printed figure is rounded up: it is borne out itself, one digit less is not."""
    assert _json("--labels", 6000, "--errors", 126, "--risk", 0.001, "--tolerance", 0.0274)["borne_out"] is True
    assert _json("--labels", 6000, "--errors", 126, "--risk", 0.001, "--tolerance", 0.0273)["borne_out"] is False
    assert "NOT borne out" in _run("--labels", 6000, "--errors", 126, "--risk", 0.001, "--tolerance", 0.0273).output


def test_the_best_of_several_models_pays_for_the_choice() -> None:
    """M models: the exact limit at risk/M (union bound)."""
    found = _json("--labels", 6000, "--errors", 126, "--risk", 0.001, "--models", 5)

    assert binom.cdf(126, 6000, found["exact"]) == pytest.approx(0.0002, rel=1e-9)


def test_a_class_by_its_vc_dimension_needs_the_ghost_sample() -> None:
    """4 m(2n) exp(-n e^2/8) = risk with m the exact sum of binomials; the shortcut n^d/d! would promise far less.

    Vapnik, Chervonenkis 1971; the value is computed here from the definition.
    """
    found = _json("--labels", 100_000, "--errors", 500, "--risk", 0.001, "--vc-dimension", 3)
    growth = sum(math.comb(200_000, i) for i in range(4))
    deviation = math.sqrt(8 * math.log(4 * growth / 0.001) / 100_000)
    shortcut = math.sqrt(math.log(2 * 100_000**3 / 6 / 0.001) / 200_000)

    assert found["deviation"] == pytest.approx(deviation, rel=1e-9)
    assert found["tolerance"] == pytest.approx(0.005 + deviation, rel=1e-9)
    assert found["deviation"] > 3 * shortcut
    assert "says nothing" in _run("--labels", 100, "--errors", 5, "--risk", 0.001, "--vc-dimension", 30).output


def test_a_finite_class_takes_the_exact_tail_at_risk_over_size() -> None:
    """20 errors in 1000, 100 models: the tail at 1e-5 (Langford 2005; computed), Hoeffding beside it wider."""
    found = _json("--labels", 1000, "--errors", 20, "--risk", 0.001, "--class-size", 100)

    assert binom.cdf(20, 1000, found["tolerance"]) == pytest.approx(1e-5, rel=1e-9)
    assert found["tolerance"] < 0.02 + found["deviation"]


def test_a_baseline_with_a_margin_gives_two_rates_and_what_is_left_of_the_risk() -> None:
    """Breach against the baseline's exact upper limit + margin, support against the lower one (method.md section 6)."""
    found = _json("--labels", 6000, "--errors", 126, "--risk", 0.001, "--margin", 0.01)

    assert binom.cdf(126, 6000, found["breach_rate"] - 0.01) == pytest.approx(0.0005, rel=1e-6)
    assert binom.sf(125, 6000, found["support_rate"] - 0.01) == pytest.approx(0.0005, rel=1e-6)
    assert found["risk"] == pytest.approx(0.0005)
    assert (
        _json("--labels", 6000, "--errors", 126, "--risk", 0.001, "--margin", 0, "--baseline-risk", 0.0001)["risk"]
        < 0.0009001
    )


def test_old_and_new_model_on_the_same_samples() -> None:
    """90 to 30 in 2000: the new one is worse for certain, whether by more than a point is open; the bet by hand.

    Evidence by the formula of method.md section 5 for losses 0, 1/2, 1 against (1 + margin)/2, the mixture of section 1.
    """
    found = _json("--labels", 2000, "--worse", 90, "--better", 30, "--risk", 0.001, "--margin", 0.01)
    shifts = [0.001 * 3000 ** (i / 63) for i in range(64)]
    scale = sum(math.sqrt(shift) for shift in shifts)
    by_hand = math.log(
        sum(
            math.sqrt(shift) / scale
            * math.exp(
                90 * math.log1p(math.expm1(shift)) + 1880 * math.log1p(math.expm1(shift) / 2)
                - 2000 * math.log1p(math.expm1(shift) * 0.505)
            )
            for shift in shifts
        )
    )  # fmt: skip

    assert found["evidence"]["above"] == pytest.approx(by_hand, abs=1e-9)
    assert 0 < found["difference"]["lower"] < 0.03 < found["difference"]["upper"]
    assert found["verdict"] == "neither broken nor borne out"
    assert _json("--labels", 2000, "--worse", 90, "--better", 30, "--risk", 0.001)["verdict"] == "broken"
    assert _json("--labels", 2000, "--worse", 30, "--better", 90, "--risk", 0.001)["verdict"] == "borne out"


def test_the_other_way_round_the_smallest_hold_out() -> None:
    """Labels for a tolerance, risk and power: the sample found certifies with that chance (scipy), Hoeffding's is larger."""
    found = _json("--tolerance", 0.03, "--risk", 0.001, "--power", 0.9)
    n, k = found["labels"], found["errors_allowed"]

    assert binom.cdf(k, n, 0.03) <= 0.001
    assert binom.cdf(k, n, 0.02) >= 0.9
    assert binom.cdf(k + 1, n, 0.03) > 0.001
    wide = found["hoeffding_labels"]
    allowed = math.floor(wide * (0.03 - math.sqrt(math.log(1000) / (2 * wide))))
    assert binom.cdf(allowed, wide, 0.02) >= 0.9
    assert wide > 5 * n
    assert f"{n:,} labels" in _run("--tolerance", 0.03, "--risk", 0.001).output


def test_the_other_way_round_for_a_class() -> None:
    """Consistent with 30 models: log(30/0.001)/0.03 = 344 labels (computed); VC dimension 3: 421,669, its deviation fits."""
    assert _json("--tolerance", 0.03, "--risk", 0.001, "--class-size", 30)["labels"] == math.ceil(
        math.log(30_000) / 0.03
    )
    n = _json("--tolerance", 0.03, "--risk", 0.001, "--vc-dimension", 3)["labels"]

    def deviation(labels: int) -> float:
        return math.sqrt(8 * math.log(4 * sum(math.comb(2 * labels, i) for i in range(4)) / 0.001) / labels)

    assert deviation(n) <= 0.03 < deviation(n - 1)


@pytest.mark.parametrize(
    ("arguments", "named"),
    [
        (("--risk", 0.001), "--tolerance"),
        (("--risk", 2, "--labels", 10, "--errors", 1), "risk = 2"),
        (("--risk", 0.1, "--labels", 10, "--errors", 11), "errors = 11"),
        (("--risk", 0.1, "--labels", 10), "belong together"),
        (("--risk", 0.1, "--labels", 10, "--errors", 1, "--margin", 1.5), "margin = 1.5"),
        (("--risk", 0.1, "--labels", 10, "--errors", 1, "--margin", 0.1, "--models", 3), "one at a time"),
        (("--risk", 0.1, "--labels", 10, "--errors", 1, "--vc-dimension", 3, "--class-size", 5), "give one"),
        (("--risk", 0.1, "--labels", 10, "--worse", 8, "--better", 3), "worse + better"),
        (("--risk", 0.1, "--labels", 10, "--worse", 8), "--better"),
        (("--risk", 0.1, "--tolerance", 0.03, "--rate", 0.04), "rate = 0.04"),
        (("--risk", 0.1, "--tolerance", 0.03, "--rate", 0.02999), "promise a tolerance further above"),
    ],
)
def test_nonsense_is_refused_by_name(arguments: tuple[object, ...], named: str) -> None:
    """Exit 2 and the argument in the message."""
    result = _run(*arguments)

    assert result.exit_code == 2
    assert named in result.stderr
