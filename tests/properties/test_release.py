"""Release checks: what must not change the outcome does not."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st

from assignable.spc.capability.specification import Specification
from assignable.spc.exact import Rounding
from assignable.spc.release import Characteristic, Checked, Uncertainty, check

QUICK = settings(derandomize=True, deadline=None, max_examples=60)

# Whole thousandths near the limits, so that ties and values on a limit are common.
THOUSANDTHS = st.lists(st.integers(2_430, 2_570), min_size=1, max_size=8)
RULES = st.sampled_from(("half-up", "half-even"))
COMPARE = st.sampled_from(("each", "averages"))
GUARD = Uncertainty(None, "guarded-acceptance", guard_band=0.01)


def characteristic(thousandths: list[int], rule: str, compare: str, scale: int = 1_000) -> Characteristic:
    decimals = len(str(scale)) - 2
    return Characteristic(
        "wall thickness",
        "mm",
        np.array([value / scale for value in thousandths]),
        Specification(2_440 / scale, 2_560 / scale),
        compare=compare,  # type: ignore[arg-type]
        rounding=Rounding(decimals, rule),  # type: ignore[arg-type]
        uncertainty=replace(GUARD, guard_band=10 / scale),
    )


def outcome(found: Checked) -> tuple[object, ...]:
    return found.disposition, [(reason.code, reason.entries) for reason in found.reasons]


@QUICK
@given(THOUSANDTHS, RULES, COMPARE)
def test_the_unit_does_not_matter(thousandths: list[int], rule: str, compare: str) -> None:
    expected = check(characteristic(thousandths, rule, compare))
    for scale in (1, 10, 100_000):
        found = check(characteristic(thousandths, rule, compare, scale))
        assert outcome(found) == outcome(expected)


@QUICK
@given(THOUSANDTHS, RULES, COMPARE)
def test_a_mirrored_characteristic_is_a_mirror_image(thousandths: list[int], rule: str, compare: str) -> None:
    one = characteristic(thousandths, rule, compare)
    found = check(one).figures
    mirrored = check(replace(one, results=-one.results, specification=Specification(-2.56, -2.44))).figures
    assert mirrored.compared.standing == found.compared.standing
    assert mirrored.compared.value.tolist() == (-found.compared.value).tolist()
    assert mirrored.least_margin == found.least_margin


@QUICK
@given(THOUSANDTHS, RULES, st.randoms(use_true_random=False))
def test_the_order_of_replicates_does_not_matter_to_their_average(
    thousandths: list[int], rule: str, shuffled: object
) -> None:
    expected = check(characteristic(thousandths, rule, "averages")).figures
    other = list(thousandths)
    shuffled.shuffle(other)  # type: ignore[attr-defined]
    found = check(characteristic(other, rule, "averages")).figures
    assert found.compared.unrounded.tolist() == expected.compared.unrounded.tolist()
    assert found.compared.value.tolist() == expected.compared.value.tolist()


@QUICK
@given(THOUSANDTHS, RULES, st.integers(0, 20))
def test_a_wider_guard_band_never_speaks_for_release(thousandths: list[int], rule: str, further: int) -> None:
    one = characteristic(thousandths, rule, "each")
    wider = replace(one, uncertainty=replace(GUARD, guard_band=(10 + further) / 1_000))
    rank = ("supports-release", "needs-review", "does-not-support-release")
    assert rank.index(check(wider).disposition) >= rank.index(check(one).disposition)
