"""Release checks: rounding, guard bands and the order of reasons, one characteristic at a time."""

from __future__ import annotations

import random
from collections.abc import Sequence
from dataclasses import replace
from decimal import Decimal
from fractions import Fraction
from statistics import NormalDist

import numpy as np
import pytest

from assignable.spc import exact, release
from assignable.spc.capability.indices import capability
from assignable.spc.capability.specification import Specification
from assignable.spc.errors import UnusableData, UnusableParameter
from assignable.spc.exact import Rounding
from assignable.spc.release import (
    CapabilityFloor,
    Characteristic,
    Checked,
    Judged,
    Uncertainty,
    check,
)
from assignable.spc.rules import Signal

NORMAL = NormalDist()


def one(results: Sequence[object], lower: float | None = None, upper: float | None = None) -> Characteristic:
    return Characteristic(
        "wall thickness", "mm", np.array(results, dtype=np.float64), Specification(lower, upper)
    )


def codes(found: Checked) -> list[str]:
    return [reason.code for reason in found.reasons]


# Rounding -------------------------------------------------------------------------------------------


# ASTM E29, table of examples of the rounding method (from memory): unit retained, observed, rounded, conforms.
E29 = [
    # Yield point, 36 000 psi at least, to the nearest 1000.
    ((36_000, None), -3, 35_940.0, 36_000.0, True),
    ((36_000, None), -3, 35_500.0, 36_000.0, True),
    ((36_000, None), -3, 35_460.0, 35_000.0, False),
    # Nickel, 57 % by mass at least, to the nearest 1 %.
    ((57, None), 0, 56.4, 56.0, False),
    ((57, None), 0, 56.5, 56.0, False),
    ((57, None), 0, 56.6, 57.0, True),
    # Water extract conductivity, 40 ms/m at most, to the nearest 1.
    ((None, 40), 0, 40.4, 40.0, True),
    ((None, 40), 0, 40.5, 40.0, True),
    ((None, 40), 0, 40.6, 41.0, False),
    # Sodium bicarbonate, 0.5 % at most, to the nearest 0.1 %.
    ((None, 0.5), 1, 0.54, 0.5, True),
    ((None, 0.5), 1, 0.55, 0.6, False),
    ((None, 0.5), 1, 0.56, 0.6, False),
]


@pytest.mark.parametrize(("limits", "decimals", "observed", "expected", "conforms"), E29)
def test_the_rounding_method_of_astm_e29(
    limits: tuple[float | None, float | None],
    decimals: int,
    observed: float,
    expected: float,
    conforms: bool,
) -> None:
    found = check(replace(one([observed], *limits), rounding=Rounding(decimals, "half-even")))
    assert found.figures.method == "rounding"
    assert found.figures.compared.value.tolist() == [expected]
    assert (found.disposition == "supports-release") is conforms


# United States Pharmacopeia, general notices, illustration of rounding for comparison with requirements (from
# memory): halves go up.
USP = [
    ((98.0, None), 1, 97.96, 98.0, True),
    ((98.0, None), 1, 97.92, 97.9, False),
    ((98.0, None), 1, 97.95, 98.0, True),
    ((None, 101.5), 1, 101.55, 101.6, False),
    ((None, 101.5), 1, 101.46, 101.5, True),
    ((None, 101.5), 1, 101.45, 101.5, True),
    ((None, 0.02), 2, 0.025, 0.03, False),
    ((None, 0.02), 2, 0.015, 0.02, True),
    ((None, 0.02), 2, 0.027, 0.03, False),
    ((None, 3), 0, 3.5, 4.0, False),
    ((None, 3), 0, 3.4, 3.0, True),
    ((None, 3), 0, 2.5, 3.0, True),
]


@pytest.mark.parametrize(("limits", "decimals", "observed", "expected", "conforms"), USP)
def test_the_illustration_of_the_pharmacopeia(
    limits: tuple[float | None, float | None],
    decimals: int,
    observed: float,
    expected: float,
    conforms: bool,
) -> None:
    found = check(replace(one([observed], *limits), rounding=Rounding(decimals, "half-up")))
    assert found.figures.compared.value.tolist() == [expected]
    assert (found.disposition == "supports-release") is conforms


# ISO 80000-1:2009, annex B (from memory): rule A takes the even multiple, rule B the one of greater magnitude.
@pytest.mark.parametrize(
    ("number", "decimals", "even", "up"),
    [
        ("12.223", 1, "12.2", "12.2"),
        ("12.251", 1, "12.3", "12.3"),
        ("12.275", 1, "12.3", "12.3"),
        ("12.25", 1, "12.2", "12.3"),
        ("12.35", 1, "12.4", "12.4"),
        ("1225", -1, "1220", "1230"),
        ("1235", -1, "1240", "1240"),
        ("-12.25", 1, "-12.2", "-12.3"),
    ],
)
def test_the_rules_of_iso_80000_1(number: str, decimals: int, even: str, up: str) -> None:
    assert exact.rounded(Decimal(number), Rounding(decimals, "half-even")) == Decimal(even)
    assert exact.rounded(Decimal(number), Rounding(decimals, "half-up")) == Decimal(up)


def test_a_double_rounds_as_it_is_written() -> None:
    # The double nearest 2.675 lies below it, and that nearest 1.005 too.
    assert round(2.675, 2) == 2.67
    for value, up in ((2.675, 2.68), (1.005, 1.01), (1.115, 1.12)):
        found = check(replace(one([value], 0.0), rounding=Rounding(2, "half-up")))
        assert found.figures.compared.value.tolist() == [up]


def test_rounding_agrees_with_rational_arithmetic() -> None:
    seeded = random.Random(1)
    for _ in range(300):
        decimals = seeded.randrange(-2, 5)
        count = seeded.randrange(1, 8)
        texts = [f"{seeded.uniform(-9, 9):.{seeded.randrange(1, 6)}f}" for _ in range(count)]
        mean = sum(map(Fraction, texts), Fraction(0)) / count
        scaled = mean * Fraction(10) ** decimals
        whole, part = scaled.numerator // scaled.denominator, scaled % 1
        even = whole + (part > Fraction(1, 2) or (part == Fraction(1, 2) and whole % 2 == 1))
        up = whole + (part > Fraction(1, 2) or (part == Fraction(1, 2) and scaled > 0))
        mean_of = exact.average([exact.written(float(text)) for text in texts])
        for rule, expected in (("half-even", even), ("half-up", up)):
            found = exact.rounded(mean_of, Rounding(decimals, rule))  # type: ignore[arg-type]
            assert Fraction(found) == expected / Fraction(10) ** decimals, (texts, decimals, rule)


def test_an_average_is_exact_and_rounded_once() -> None:
    # In doubles 0.1 + 0.2 + 0.3 exceeds 0.6, and the mean of the three is 0.20000000000000004.
    assert (0.1 + 0.2 + 0.3) / 3 > 0.2
    found = check(replace(one([0.1, 0.2, 0.3], None, 0.2), compare="averages"))
    assert found.disposition == "supports-release"
    assert found.figures.compared.unrounded.tolist() == [0.2]
    # 2.4445 to two places is 2.44; by way of three it would be 2.45 (2.445 halves up).
    found = check(
        replace(one([[2.444, 2.445]], None, 2.44), compare="averages", rounding=Rounding(2, "half-up"))
    )
    assert found.figures.compared.value.tolist() == [2.44]
    assert found.disposition == "supports-release"


def test_an_average_beyond_a_limit_by_less_than_a_double_tells_is_beyond_it() -> None:
    # The mean is 2.5 and 1e-16, which as a double is 2.5.
    found = check(replace(one([*[2.5] * 9, 2.500000000000001], None, 2.5), compare="averages"))
    assert found.figures.compared.unrounded.tolist() == [2.5]
    assert codes(found) == ["out-of-specification"]


def test_each_result_or_the_average_of_its_replicates() -> None:
    rows = [[2.4, 2.7], [2.5, 2.5]]
    each = check(one(rows, None, 2.6))
    assert each.figures.compared.index.tolist() == [0, 1, 2, 3]
    assert each.disposition == "does-not-support-release"
    assert each.reasons[0].where == ("results", 0, 1)
    averages = check(replace(one(rows, None, 2.6), compare="averages"))
    assert averages.figures.compared.index.tolist() == [0, 1]
    assert averages.figures.compared.unrounded.tolist() == [2.55, 2.5]
    assert averages.disposition == "supports-release"


def test_a_value_on_a_limit_conforms_and_margins_are_as_written() -> None:
    found = check(one([2.44, 2.56, 2.51], 2.44, 2.56))
    assert found.disposition == "supports-release"
    assert found.figures.method == "absolute"
    assert found.figures.compared.margin_to_lower is not None
    assert found.figures.compared.margin_to_lower.tolist() == [0.0, 0.12, 0.07]
    assert found.figures.compared.margin_to_upper is not None
    assert found.figures.compared.margin_to_upper.tolist() == [0.12, 0.0, 0.05]
    assert found.figures.least_margin == 0.0
    found = check(one([np.nextafter(2.56, 3)], 2.44, 2.56))
    assert found.disposition == "does-not-support-release"


def test_rounding_coarser_than_the_specification_is_refused() -> None:
    coarse = replace(one([2.5], 2.44, 2.565), rounding=Rounding(2, "half-up"))
    with pytest.raises(UnusableParameter) as refused:
        check(coarse)
    assert refused.value.faults[0].code == "coarser-than-specification"
    assert refused.value.faults[0].where == ("rounding", "decimals")


def test_extreme_numbers() -> None:
    found = check(replace(one([1e300, -1e300, 1e-300], -1e300, 1e300), rounding=Rounding(15, "half-even")))
    assert found.disposition == "supports-release"
    assert found.figures.compared.value.tolist() == [1e300, -1e300, 0.0]
    found = check(replace(one([1e300, -1e300, 1e-300], -1.0, 1.0), compare="averages"))
    assert found.figures.compared.unrounded[0] == pytest.approx(1e-300 / 3, rel=1e-15)


# Guard bands ----------------------------------------------------------------------------------------


def test_a_guard_band_of_a_stated_risk_with_one_limit() -> None:
    # JCGM 106:2012, 8.3: with w = u Φ⁻¹(0.95), 1.645 u, a value on the acceptance limit conforms with 95 %.
    asked = Uncertainty(0.4, "guarded-acceptance", consumer_risk=0.05)
    found = check(replace(one([9.0], None, 10.0), uncertainty=asked)).figures.acceptance
    assert found is not None
    assert found.guard_band == pytest.approx(NORMAL.inv_cdf(0.95) * 0.4, rel=1e-14)
    assert found.guard_band / 0.4 == pytest.approx(1.645, abs=5e-4)
    assert found.upper == pytest.approx(10.0 - found.guard_band, rel=1e-15)
    assert found.lower is None
    assert found.least_conformance_probability == pytest.approx(NORMAL.cdf(2.5), rel=1e-14)


@pytest.mark.parametrize(("standard", "risk"), [(0.1, 0.05), (0.3, 0.12), (0.4, 0.22), (0.5, 0.32)])
def test_the_risk_of_a_value_on_the_acceptance_limit(standard: float, risk: float) -> None:
    # Both tails count where the limits are near each other: the definition, with the standard library's Φ.
    asked = Uncertainty(standard, "guarded-acceptance", consumer_risk=risk)
    found = check(replace(one([9.5], 9.0, 10.0), uncertainty=asked)).figures.acceptance
    assert found is not None
    assert found.upper is not None
    beyond = NORMAL.cdf((found.upper - 10.0) / standard) + NORMAL.cdf((9.0 - found.upper) / standard)
    assert beyond == pytest.approx(risk, rel=1e-9)
    assert found.guard_band >= NORMAL.inv_cdf(1.0 - risk) * standard


def test_a_specification_too_narrow_for_the_uncertainty() -> None:
    for asked in (
        Uncertainty(0.5, "guarded-acceptance", consumer_risk=0.05),
        Uncertainty(0.5, "guarded-acceptance", guard_multiple=2.0),
        Uncertainty(None, "guarded-acceptance", guard_band=0.6),
    ):
        with pytest.raises(UnusableParameter) as refused:
            check(replace(one([9.5], 9.0, 10.0), uncertainty=asked))
        assert refused.value.faults[0].code == "no-acceptance-zone"


def test_values_in_and_beside_the_guard_band() -> None:
    # ISO 14253-1's expanded uncertainty as the guard band: U = 2 u = 0.02.
    asked = Uncertainty(0.01, "guarded-acceptance", guard_multiple=2.0)
    found = check(replace(one([2.46, 2.459, 2.44, 2.54, 2.541, 2.561], 2.44, 2.56), uncertainty=asked))
    assert found.figures.acceptance is not None
    assert (found.figures.acceptance.lower, found.figures.acceptance.upper) == (2.46, 2.54)
    assert found.figures.compared.standing == (
        "conforms",
        "in-guard-band",
        "in-guard-band",
        "conforms",
        "in-guard-band",
        "out-of-specification",
    )
    assert codes(found) == ["out-of-specification", "in-guard-band", "in-guard-band"]
    assert [reason.entries for reason in found.reasons] == [(5,), (1, 2), (4,)]
    assert found.disposition == "does-not-support-release"


def test_the_guard_band_looks_at_the_value_before_rounding() -> None:
    asked = Uncertainty(None, "guarded-acceptance", guard_band=0.1)
    found = check(replace(one([9.94], None, 10.0), uncertainty=asked, rounding=Rounding(1, "half-up")))
    assert found.figures.compared.value.tolist() == [9.9]
    assert codes(found) == ["in-guard-band"]


def test_simple_acceptance_has_no_guard_band() -> None:
    found = check(replace(one([9.99], None, 10.0), uncertainty=Uncertainty(0.2, "simple-acceptance")))
    assert found.disposition == "supports-release"
    assert found.figures.acceptance is not None
    assert (found.figures.acceptance.guard_band, found.figures.acceptance.upper) == (0.0, 10.0)
    assert found.figures.acceptance.least_conformance_probability == pytest.approx(NORMAL.cdf(0.05))


@pytest.mark.parametrize(
    ("asked", "code"),
    [
        (Uncertainty(0.1, "guarded-acceptance"), "guard-band-unstated"),
        (Uncertainty(0.1, "guarded-acceptance", guard_band=1.0, guard_multiple=1.0), "guard-band-unstated"),
        (Uncertainty(0.1, "simple-acceptance", consumer_risk=0.05), "guard-band-of-no-use"),
        (Uncertainty(None, "simple-acceptance"), "uncertainty-missing"),
        (Uncertainty(None, "guarded-acceptance", consumer_risk=0.05), "uncertainty-missing"),
    ],
)
def test_a_decision_rule_half_stated_is_refused(asked: Uncertainty, code: str) -> None:
    with pytest.raises(UnusableParameter) as refused:
        check(replace(one([9.0], None, 10.0), uncertainty=asked))
    assert refused.value.faults[0].code == code


# Below detection ------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("limits", "detection_limit", "standing"),
    [
        ((None, 5.0), 2.0, "conforms"),
        ((None, 5.0), 5.0, "conforms"),
        ((None, 5.0), 5.1, "undecided"),
        ((5.0, None), 5.0, "out-of-specification"),
        ((5.0, None), 5.1, "undecided"),
        ((1.0, 5.0), 2.0, "undecided"),
    ],
)
def test_what_a_detection_limit_tells(
    limits: tuple[float | None, float | None], detection_limit: float, standing: str
) -> None:
    found = check(replace(one([np.nan], *limits), below=(0,), detection_limit=detection_limit))
    assert found.figures.compared.standing == (standing,)
    assert found.figures.results_present == 1
    assert found.figures.results_missing == 0
    assert found.figures.least_margin is None


def test_rounded_a_result_just_below_a_lower_limit_may_reach_it() -> None:
    asked = replace(one([np.nan], 5.0), below=(0,), detection_limit=5.0, rounding=Rounding(1, "half-up"))
    assert check(asked).figures.compared.standing == ("undecided",)


def test_an_average_with_a_result_below_detection_is_bounded_and_not_guessed() -> None:
    asked = replace(one([np.nan, 6.0], None, 5.0), compare="averages", below=(0,), detection_limit=2.0)
    found = check(asked)
    assert found.figures.compared.unrounded.tolist() == [4.0]
    assert found.figures.compared.below.tolist() == [0]
    assert found.disposition == "supports-release"
    found = check(replace(asked, specification=Specification(None, 3.9)))
    assert codes(found) == ["undecided-below-detection"]


def test_detection_that_is_stated_wrongly_is_refused() -> None:
    for asked, code in (
        (replace(one([1.0, np.nan], None, 5.0), below=(0,), detection_limit=2.0), "number-below-detection"),
        (replace(one([np.nan], None, 5.0), below=(1,), detection_limit=2.0), "index-out-of-range"),
        (replace(one([np.nan], None, 5.0), below=(0, 0), detection_limit=2.0), "repeated-index"),
    ):
        with pytest.raises(UnusableData) as refused:
            check(asked)
        assert code in {fault.code for fault in refused.value.faults}
    with pytest.raises(UnusableParameter):
        check(replace(one([np.nan], None, 5.0), below=(0,)))


def test_a_number_under_the_detection_limit_is_told() -> None:
    found = check(replace(one([1.0], None, 5.0), detection_limit=2.0))
    assert codes(found) == ["number-under-detection-limit"]


# Reasons --------------------------------------------------------------------------------------------

ACTION = Signal("limit", "zone", "value", 0, "above", (0,), "action", "The point lies above the limit.")
WARNING = replace(ACTION, rule="zone-2-of-3", severity="warning")


def test_reasons_come_in_the_order_a_reviewer_reads_them() -> None:
    asked = replace(
        one([2.43, 2.57, 2.555, np.nan, np.nan], 2.44, 2.56),
        uncertainty=Uncertainty(0.005, "guarded-acceptance", guard_multiple=2.0),
        trend=Judged("individuals", (WARNING, ACTION), 2, 0),
        expected_results=6,
        below=(4,),
        detection_limit=2.5,
        capability=CapabilityFloor(1.33, 0.95, np.empty(0)),
    )
    found = check(asked)
    assert codes(found) == [
        "out-of-specification",
        "out-of-specification",
        "in-guard-band",
        "out-of-trend",
        "trend-warning",
        "missing-results",
        "too-few-results",
        "undecided-below-detection",
        "number-under-detection-limit",
        "capability-not-shown",
    ]
    assert found.disposition == "does-not-support-release"
    severities = {reason.code: reason.severity for reason in found.reasons}
    assert severities["out-of-specification"] == "disqualifying"
    assert severities["trend-warning"] == "note"
    assert {reason.severity for reason in found.reasons[5:]} == {"review"}


@pytest.mark.parametrize(
    ("changes", "expected", "disposition"),
    [
        ({}, [], "supports-release"),
        ({"trend": Judged("xbar-r", (), 0, 0)}, [], "supports-release"),
        ({"trend": Judged("xbar-r", (WARNING,), 1, 0)}, ["trend-warning"], "supports-release"),
        ({"trend": Judged("xbar-r", (ACTION,), 1, 0)}, ["out-of-trend"], "needs-review"),
        ({"trend": Judged("xbar-r", (), 0, 1)}, ["not-charted"], "supports-release"),
        ({"expected_results": 2}, [], "supports-release"),
        ({"expected_results": 3}, ["too-few-results"], "needs-review"),
        ({"expected_results": 1}, ["more-results-than-expected"], "needs-review"),
        ({"results": np.array([2.5, np.nan])}, ["missing-results"], "needs-review"),
        ({"results": np.array([np.nan, np.nan])}, ["no-results"], "needs-review"),
        ({"results": np.array([2.5, 2.57])}, ["out-of-specification"], "does-not-support-release"),
    ],
)
def test_one_reason_at_a_time(changes: dict[str, object], expected: list[str], disposition: str) -> None:
    found = check(replace(one([2.5, 2.51], 2.44, 2.56), **changes))  # type: ignore[arg-type]
    assert codes(found) == expected
    assert found.disposition == disposition


def test_capability_is_that_of_the_values_compared_after_earlier_ones() -> None:
    earlier = np.array([2.5, 2.51, 2.49, 2.505, 2.492, 2.507])
    asked = replace(one([2.498, 2.503], 2.44, 2.56), capability=CapabilityFloor(1.0, 0.95, earlier))
    ppk = capability(np.append(earlier, [2.498, 2.503]), asked.specification).ppk
    found = check(asked)
    assert ppk is not None
    assert found.figures.capability is not None
    assert found.figures.capability.values == 8
    assert found.figures.capability.lower_bound == ppk.lower_bound
    assert found.disposition == "supports-release"
    above = replace(asked, capability=CapabilityFloor(ppk.lower_bound + 1e-9, 0.95, earlier))
    assert codes(check(above)) == ["capability-at-risk"]
    exactly = replace(asked, capability=CapabilityFloor(ppk.lower_bound, 0.95, earlier))
    assert codes(check(exactly)) == []
    same = replace(asked, results=np.array([2.5, 2.5]), capability=CapabilityFloor(1.0, 0.95, np.empty(0)))
    assert codes(check(same)) == ["capability-not-shown"]


def test_the_batch_is_as_its_gravest_characteristic() -> None:
    good = check(one([2.5], 2.44, 2.56))
    doubtful = check(replace(one([2.5], 2.44, 2.56), expected_results=2))
    bad = check(one([2.6], 2.44, 2.56))
    assert release.disposition([good]) == "supports-release"
    assert release.disposition([good, doubtful]) == "needs-review"
    assert release.disposition([bad, doubtful, good]) == "does-not-support-release"
