"""What no analysis of a measurement study may depend on: the zero, the unit, the order of labels."""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import fields, is_dataclass
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from assignable.spc.studies.agreement import agreement
from assignable.spc.studies.bias import ReferenceLevel, bias
from assignable.spc.studies.crossed import crossed
from assignable.spc.studies.nested import nested

_FEW = settings(derandomize=True, deadline=None, max_examples=40)


@st.composite
def _measurements(draw: st.DrawFn, *, least: tuple[int, int, int] = (2, 1, 2)) -> np.ndarray:
    """Measurements to a hundredth, ties and equal trials included."""
    shape = tuple(draw(st.integers(low, low + 3)) for low in least)
    size = math.prod(shape)
    values = draw(st.lists(st.integers(-300, 300), min_size=size, max_size=size))
    return np.array(values, dtype=float).reshape(shape) / 100


# The power of the unit each number carries; numbers not named here carry none.
_SQUARED = {"estimate", "variance", "variance_lower", "variance_upper", "sum_of_squares", "mean_square"}
_PLAIN = {"sd", "sd_lower", "sd_upper", "spread"}
# What moves with the zero, or is prose.
_APART = {
    "grand_mean",
    "part_means",
    "appraiser_means",
    "cell_means",
    "cautions",
    "cell_ranges",
    "part_ranges",
    "repeatability_by_appraiser",  # looked at by itself: in the unit of the measurements, and in their order
}


def _numbers(result: Any, unit: float = 1.0, path: str = "") -> Iterator[tuple[str, float | None]]:
    """Every number of a result, brought to the unit 1."""
    if is_dataclass(result):
        for field in fields(result):
            if field.name not in _APART:
                value = getattr(result, field.name)
                power = 2 if field.name in _SQUARED else 1 if field.name in _PLAIN else 0
                if isinstance(value, float):
                    yield f"{path}.{field.name}", value / unit**power
                else:
                    yield from _numbers(value, unit, f"{path}.{field.name}")
    elif isinstance(result, tuple):
        for place, item in enumerate(result):
            yield from _numbers(item, unit, f"{path}[{place}]")
    elif isinstance(result, np.ndarray):
        for place, item in enumerate(result.ravel().tolist()):
            yield f"{path}[{place}]", item
    elif not isinstance(result, str):
        yield path, result


def _alike(one: Any, other: Any, unit: float = 1.0) -> None:
    first, second = dict(_numbers(one)), dict(_numbers(other, unit))
    assert first.keys() == second.keys()
    for name, value in first.items():
        # Roots of a difference of nearly equal mean squares keep half its digits.
        near = 1e-9 if name.rpartition(".")[2] in _SQUARED else 1e-4
        assert second[name] == (value if value is None else pytest.approx(value, rel=1e-6, abs=near)), name


def _own(study: Any) -> np.ndarray:
    """How each appraiser repeats, with its bounds: a row an appraiser."""
    own = [(one.sd, one.lower, one.upper) for one in study.repeatability_by_appraiser]
    return np.array(own).reshape(-1, 3)


@_FEW
@given(
    _measurements(least=(2, 1, 2)),
    st.sampled_from([-40.0, 0.0, 7.5, 900.0]),
    st.sampled_from([0.01, 1.0, 25.4]),
)
def test_crossed_knows_no_zero_and_no_unit(x: np.ndarray, shift: float, scale: float) -> None:
    plain = crossed(x, tolerance=2.0)
    moved = crossed(shift + scale * x, tolerance=2.0 * scale)
    _alike(plain, moved, scale)
    assert _own(moved) / scale == pytest.approx(_own(plain), rel=1e-6, abs=1e-6)
    assert moved.grand_mean == pytest.approx(shift + scale * plain.grand_mean, abs=1e-9)
    assert moved.part_means == pytest.approx(shift + scale * plain.part_means, abs=1e-9)


@_FEW
@given(_measurements(least=(2, 1, 2)), st.sampled_from([-40.0, 7.5, 900.0]), st.sampled_from([0.01, 25.4]))
def test_nested_knows_no_zero_and_no_unit(x: np.ndarray, shift: float, scale: float) -> None:
    plain, moved = nested(np.moveaxis(x, 0, 1)), nested(shift + scale * np.moveaxis(x, 0, 1))
    _alike(plain, moved, scale)
    assert _own(moved) / scale == pytest.approx(_own(plain), rel=1e-6, abs=1e-6)


@_FEW
@given(_measurements(least=(2, 2, 1)), st.randoms(use_true_random=False))
def test_crossed_knows_no_order(x: np.ndarray, chance: Any) -> None:
    part, appraiser, trial = (chance.sample(range(n), n) for n in x.shape)
    plain, mixed = crossed(x), crossed(x[np.ix_(part, appraiser, trial)])
    _alike(plain, mixed)
    if x.shape[2] > 1:
        assert _own(mixed) == pytest.approx(_own(plain)[appraiser], rel=1e-6, abs=1e-6)


@_FEW
@given(_measurements(least=(2, 2, 2)))
def test_components_add_up(x: np.ndarray) -> None:
    for alpha in (None, 0.05, 0.0):
        study = crossed(x, pooling_alpha=alpha)
        c = study.components
        assert c.appraiser is not None
        assert c.reproducibility is not None
        interaction = c.part_by_appraiser
        assert c.reproducibility.variance == pytest.approx(
            c.appraiser.variance + (interaction.variance if interaction else 0)
        )
        assert c.gauge.variance == pytest.approx(c.repeatability.variance + c.reproducibility.variance)
        assert c.total.variance == pytest.approx(c.gauge.variance + c.part.variance)
        total = study.table[-1]
        squares = float(np.sum((x - x.mean()) ** 2))
        assert total.sum_of_squares == pytest.approx(squares, rel=1e-9, abs=1e-20)
        assert total.degrees_of_freedom == x.size - 1
        for component in (c.repeatability, c.appraiser, c.reproducibility, c.gauge, c.part, c.total):
            assert 0 <= component.variance_lower <= component.variance_upper
        for component in (c.repeatability, c.appraiser, c.part, interaction):
            assert component is None or component.variance == max(component.estimate, 0)
        for _, value in _numbers(study):
            assert value is None or math.isfinite(value)


@st.composite
def _ratings(draw: st.DrawFn) -> tuple[np.ndarray, np.ndarray, int]:
    items, appraisers, trials = draw(st.integers(2, 8)), draw(st.integers(1, 3)), draw(st.integers(2, 3))
    categories = draw(st.integers(2, 4))
    size = items * appraisers * trials
    code = st.integers(0, categories - 1)
    ratings = np.array(draw(st.lists(code, min_size=size, max_size=size))).reshape(items, appraisers, trials)
    return ratings, np.array(draw(st.lists(code, min_size=items, max_size=items))), categories


@_FEW
@given(_ratings(), st.randoms(use_true_random=False))
def test_agreement_knows_no_names(case: tuple[np.ndarray, np.ndarray, int], chance: Any) -> None:
    ratings, reference, categories = case
    renamed = np.array(chance.sample(range(categories), categories))
    order = chance.sample(range(len(reference)), len(reference))
    one = agreement(ratings, reference=reference, categories="abcd"[:categories])
    other = agreement(
        renamed[ratings][order], reference=renamed[reference][order], categories="abcd"[:categories]
    )
    for mine, theirs in zip(one.by_appraiser, other.by_appraiser, strict=True):
        assert mine.repeated == theirs.repeated
        assert mine.matched == theirs.matched
        assert mine.against_reference is not None
        assert theirs.against_reference is not None
        for name in ("kappa", "standard_error", "lower", "upper"):
            expected = getattr(mine.against_reference, name)
            found = getattr(theirs.against_reference, name)
            assert found == (expected if expected is None else pytest.approx(expected, abs=1e-9))
    assert other.overall.kappa == (None if one.overall.kappa is None else pytest.approx(one.overall.kappa))
    assert one.between == other.between
    assert one.all_matched == other.all_matched
    for _, value in _numbers(one):
        assert value is None or math.isfinite(value)
    for pair in one.pairs:
        assert pair.cohen.kappa is None or -1 <= pair.cohen.kappa <= 1


@_FEW
@given(_measurements(least=(2, 1, 1)), st.sampled_from([-40.0, 3.0, 500.0]), st.sampled_from([0.01, 25.4]))
def test_bias_knows_no_zero_and_no_unit(x: np.ndarray, shift: float, scale: float) -> None:
    rows = [(float(2 * i), row.ravel() + 2 * i) for i, row in enumerate(x)]
    plain = bias(tuple(ReferenceLevel(r, v) for r, v in rows))
    moved = bias(tuple(ReferenceLevel(shift + scale * r, shift + scale * v) for r, v in rows))
    for mine, theirs in zip(plain.levels, moved.levels, strict=True):
        assert theirs.bias == pytest.approx(scale * mine.bias, abs=1e-9)
        # Nothing but rounding left of a bias decides between a test and none.
        if mine.p_value is not None and abs(mine.bias) > 1e-6:
            assert theirs.p_value == pytest.approx(mine.p_value, abs=1e-6)
    if plain.linearity is not None:
        assert moved.linearity is not None
        one, other = plain.linearity, moved.linearity
        assert other.slope.estimate == pytest.approx(one.slope.estimate, abs=1e-9)
        assert other.residual_sd == pytest.approx(scale * one.residual_sd, abs=1e-9)
        assert other.fitted_upper == pytest.approx(scale * one.fitted_upper, abs=1e-8)
    for _, value in _numbers(plain):
        assert value is None or math.isfinite(value)
