"""How many subgroups deserve trust: consistency with the run lengths, limiting cases and refusals."""

from __future__ import annotations

import math
import time

import pytest
from scipy.special import ndtr

from assignable.spc.design.baseline import SufficientBaseline, assess, enough, table
from assignable.spc.errors import UnusableParameter
from assignable.spc.runlength import estimated


def test_twenty_five_subgroups_of_five_are_few() -> None:
    found = assess(25, 5)
    # Saleh et al. (2015), Jardim et al. (2020): hundreds of subgroups, not 20 to 25, are needed; from memory,
    # as a statement. Figures: computed from the definition, see test_run_length_estimated.
    assert not found.trusted
    assert found.enough is not None
    assert found.enough.subgroups > 300
    assert str(found.enough.subgroups) in found.conclusion
    assert found.guarantee.confidence_as_is < 0.5
    assert found.guarantee.widening > 1.1
    assert found.sigma_estimator == "mean-range"
    assert "approximation" in found.method
    assert "exact chi" in assess(25, 5, sigma_estimator="pooled-sd").method
    assert assess(500, 5).trusted
    assert "That is enough" in assess(500, 5).conclusion


@pytest.mark.parametrize(
    ("size", "estimator", "share", "risk"),
    [
        (5, "mean-range", 0.8, 0.1),
        (5, "mean-sd", 0.95, 0.05),
        (1, "mean-moving-range", 0.5, 0.2),
        (2, "pooled-sd", 0.3, 0.3),
        (1000, "pooled-sd", 0.5, 0.3),
        (1, "mean-moving-range", 0.05, 0.4),
    ],
)
def test_one_subgroup_less_is_too_few(
    size: int, estimator: estimated.SigmaEstimator, share: float, risk: float
) -> None:
    found = enough(size, sigma_estimator=estimator, share_of_nominal=share, risk=risk)

    def shorter(m: int) -> float:
        return estimated.probability_shorter(
            estimated.baseline(m, size, estimator), 3.0, share * found.nominal_arl
        )

    assert found.values == size * found.subgroups
    assert shorter(found.subgroups) <= risk
    if found.subgroups > 2:
        assert shorter(found.subgroups - 1) > risk
    assert found.arl >= share * found.nominal_arl * (1 - 1e-9)


def test_the_guarantee_and_its_price() -> None:
    found = assess(30, 4, in_control_arl=500.0, confidence=0.95)
    wide = found.guarantee
    assert 1 - estimated.probability_shorter(found.knowledge, wide.multiple, 500.0) == pytest.approx(0.95)
    assert wide.widening == pytest.approx(wide.multiple / 3.0)
    for each in wide.shifts:
        d = 2 * each.shift
        assert each.arl == pytest.approx(1 / float(ndtr(d - 3) + ndtr(-d - 3)), rel=1e-13)
        assert each.guaranteed_arl > each.arl or math.isclose(each.arl, 1.0, rel_tol=1e-6)
    single = assess(100, 1)
    assert single.sigma_estimator == "mean-moving-range"
    assert "100 values" in single.conclusion
    # Hardly anything is known from two values: the answer stays an answer.
    assert assess(2, 1).guarantee.multiple > 20


def test_the_table() -> None:
    found = table([20, 25], [4, 5], risk=0.1, confidence=0.9)
    assert [(cell.size, cell.subgroups) for cell in found.cells] == [(4, 20), (4, 25), (5, 20), (5, 25)]
    last = found.cells[-1]
    whole = assess(25, 5)
    tenth = next(each for each in whole.conditional.percentiles if each.probability == 0.10)
    assert last.percentile_arl == pytest.approx(tenth.arl, rel=1e-12)
    assert last.guaranteed_multiple == pytest.approx(whole.guarantee.multiple, rel=1e-12)
    assert last.probability_below_half_nominal == pytest.approx(
        whole.conditional.probability_below_half_nominal, rel=1e-12
    )
    assert last.share_of_nominal == pytest.approx(last.percentile_arl / found.nominal_arl)


def test_refusals() -> None:
    for call, where in (
        (lambda: enough(5, share_of_nominal=1.0), "share_of_nominal"),
        (lambda: enough(5, risk=0.5), "risk"),
        (lambda: enough(2, share_of_nominal=0.99, risk=0.001), "share_of_nominal"),
        (lambda: enough(5, multiple=math.nan), "multiple"),
        (lambda: assess(25, 5, multiple=6.5), "multiple"),
        (lambda: assess(25, 5, sigma_estimator="mean-moving-range"), "sigma_estimator"),
        (lambda: table([10] * 16, [2] * 10), "subgroups"),
        (lambda: table([], []), "subgroups"),
        (lambda: table([10], [1, 5]), "sigma_estimator"),
    ):
        with pytest.raises(UnusableParameter) as caught:
            call()
        assert caught.value.faults[0].where == (where,)
    assert assess(25, 2, share_of_nominal=0.99, risk=0.001).enough is None
    assert isinstance(enough(5, multiple=0.5, share_of_nominal=0.05), SufficientBaseline)


def test_it_is_quick() -> None:
    assess(25, 5)
    begun = time.process_time()
    assess(26, 6, multiple=3.01)
    table()
    assert time.process_time() - begun < 1.0
