"""Nested measurement studies against published analyses, least squares and simulation."""

from __future__ import annotations

import math

import numpy as np
import pytest

from assignable.spc.errors import UnusableData
from assignable.spc.studies.crossed import crossed
from assignable.spc.studies.nested import NestedStudy, nested
from assignable.spc.studies.variance_components import AnovaRow, combination_interval


def _table(text: str) -> np.ndarray:
    return np.array(text.split(), dtype=float)


# Davies & Goldsmith (1972): strength of a chemical paste, ten deliveries, three casks of each, two tests.
# From memory, recomputed: the printed sums of squares come out.
_PASTE = _table(
    """
    62.8 62.6 60.1 62.3 62.7 63.1   60.0 61.4 57.5 56.9 61.1 58.9   58.7 57.5 63.9 63.1 65.4 63.7
    57.1 56.4 56.9 58.6 64.7 64.5   55.1 55.1 54.7 54.2 58.8 57.5   63.4 64.9 59.3 58.1 60.5 60.0
    62.5 62.6 61.0 58.7 56.9 57.7   59.2 59.4 65.2 66.0 64.8 64.1   54.8 54.8 64.0 64.0 57.7 56.8
    58.3 59.3 59.2 59.2 58.9 56.6
    """
).reshape(10, 3, 2)

# Montgomery, Design and Analysis of Experiments: purity (coded) of three suppliers' four batches, three
# determinations each. From memory, recomputed: the printed sums of squares come out.
_PURITY = _table(
    """
    1 -1 0  -2 -3 -4  -2 0 1  1 4 0
    1 -2 -3  0 4 2  -1 0 -2  0 3 2
    2 4 0  -2 0 2  1 -1 2  3 2 1
    """
).reshape(3, 4, 3)

# NIST e-Handbook 2.6.1, probe 2362: (wafer, run, day) averages. Checked in print.
_PROBE = _table(
    """
    95.1162 95.0569 95.0598 95.1487 95.0743 95.1010  95.1687 95.1564 95.1354 95.0422 95.1354 95.1075
    99.2939 99.3234 99.2748 99.3512 99.2350 99.3574  99.3408 99.3116 99.3241 99.2991 99.3049 99.2782
    96.0771 95.9976 96.0148 96.0397 96.0407 96.0445  96.0793 96.1115 96.0803 96.0411 96.0988 96.0482
    101.0471 101.0224 101.0702 101.0904 101.0626 101.0686
    101.1353 101.1201 101.0946 100.9977 101.0963 101.0300
    94.2437 94.2115 94.2348 94.2124 94.2214 94.1651  94.2052 94.2824 94.2396 94.2087 94.2937 94.2330
    """
).reshape(5, 2, 6)


def _row(study: NestedStudy, source: str) -> AnovaRow:
    return next(row for row in study.table if row.source == source)


def test_paste() -> None:
    study = nested(_PASTE)
    for source, square, df in (("appraiser", 247.40, 9), ("part", 350.91, 20), ("repeatability", 20.34, 30)):
        assert _row(study, source).sum_of_squares == pytest.approx(square, abs=6e-3)
        assert _row(study, source).degrees_of_freedom == df
    # Balanced and all positive, so restricted likelihood agrees: 1.657, 8.434, 0.678 (from memory).
    assert study.components.appraiser is not None
    assert study.components.appraiser.estimate == pytest.approx(1.657, abs=6e-4)
    assert study.components.part.estimate == pytest.approx(8.434, abs=6e-4)
    assert study.components.repeatability.estimate == pytest.approx(0.678, abs=6e-4)
    assert study.components.reproducibility == study.components.appraiser


def test_purity_has_a_negative_component() -> None:
    study = nested(_PURITY)
    for source, square, mean_square, f_ratio, p_value in (
        ("appraiser", 15.06, 7.53, 0.97, 0.4158),
        ("part", 69.92, 7.77, 2.94, 0.0167),
        ("repeatability", 63.33, 2.64, None, None),
    ):
        row = _row(study, source)
        assert row.sum_of_squares == pytest.approx(square, abs=6e-3)
        assert row.mean_square == pytest.approx(mean_square, abs=6e-3)
        assert row.f_ratio == (None if f_ratio is None else pytest.approx(f_ratio, abs=6e-3))
        assert row.p_value == (None if p_value is None else pytest.approx(p_value, abs=6e-5))
    assert study.components.part.estimate == pytest.approx(1.71, abs=5e-3)
    assert study.components.appraiser is not None
    assert study.components.appraiser.estimate == pytest.approx((7.527778 - 7.768519) / 12, abs=1e-6)
    assert study.components.appraiser.variance == 0
    assert study.components.gauge.variance == study.components.repeatability.variance
    assert "negative-component" in [note.code for note in study.cautions]


def test_resistivity_probe() -> None:
    # Print: s_runs 0.01295841; s_days 0.02057092 after taking out the level-1 sd 0.0729 of six readings.
    study = nested(_PROBE)
    assert study.components.part.sd == pytest.approx(0.01295841, rel=1e-3)
    # From the levels' sds as printed (0.0362 and 0.0196, rounded): the same by hand.
    assert _row(study, "part").mean_square == pytest.approx(6 * 0.0196**2, rel=5e-3)
    level_1 = 0.07287
    days = study.components.repeatability.variance - level_1**2 / 6
    assert math.sqrt(days) == pytest.approx(0.02057092, rel=1e-3)


def test_sums_of_squares_are_projections() -> None:
    rng = np.random.default_rng(2)
    x = 180 + rng.normal(size=(4, 5, 3)) + 2 * rng.normal(size=(4, 1, 1))
    i, j, _ = (index.ravel() for index in np.indices(x.shape))
    y = x.ravel()

    def left(design: np.ndarray) -> float:
        fit, *_ = np.linalg.lstsq(design, y, rcond=None)
        return float(np.sum((y - design @ fit) ** 2))

    total, appraisers, parts = left(np.ones((60, 1))), left(np.eye(4)[i]), left(np.eye(20)[i * 5 + j])
    study = nested(x)
    for source, square in (
        ("appraiser", total - appraisers),
        ("part", appraisers - parts),
        ("repeatability", parts),
        ("total", total),
    ):
        assert _row(study, source).sum_of_squares == pytest.approx(square, rel=1e-9)


def test_one_appraiser_is_the_one_way_analysis() -> None:
    x = np.random.default_rng(4).normal(size=(1, 8, 3)) + np.arange(8.0)[:, None]
    ours, other = nested(x), crossed(np.moveaxis(x, 0, 1))
    assert ours.components == other.components
    assert ours.discrimination == other.discrimination
    assert ours.table == other.table
    assert ours.components.appraiser is None
    assert [note.code for note in ours.cautions] == ["one-appraiser"]


@pytest.mark.parametrize(("appraiser", "part"), [(0.5, 10.0), (2.0, 1.0)])
def test_coverage(appraiser: float, part: float) -> None:
    a, b, r = 3, 10, 2
    df = [a - 1, a * (b - 1), a * b * (r - 1)]
    means = [1 + r * part + b * r * appraiser, 1 + r * part, 1.0]
    rng = np.random.default_rng(12)
    squares = np.array([m * rng.chisquare(v, 20_000) / v for m, v in zip(means, df, strict=True)])
    for coefficients, truth in (
        ((1 / (b * r), -1 / (b * r), 0), appraiser),
        ((0, 1 / r, -1 / r), part),
        ((1 / (b * r), -1 / (b * r), 1), appraiser + 1),
        ((1 / (b * r), (b - 1) / (b * r), (r - 1) / r), appraiser + part + 1),
    ):
        lower, upper = combination_interval(coefficients, squares, df, 0.95)
        assert 0.944 < np.mean((lower <= truth) & (upper >= truth)) < 0.967


@pytest.mark.parametrize(
    ("x", "code"),
    [
        (np.ones((3, 1, 2)), "too-few-parts"),
        (np.ones((3, 4, 1)), "nothing-repeated"),
        (np.ones((3, 4)), "empty"),
    ],
)
def test_unusable(x: np.ndarray, code: str) -> None:
    with pytest.raises(UnusableData) as caught:
        nested(x)
    assert caught.value.faults[0].code == code


def test_missing_cells_are_named() -> None:
    x = _PASTE.copy()
    x[3, 2, 1] = np.nan
    with pytest.raises(UnusableData) as caught:
        nested(x)
    assert caught.value.faults[0].where == ("data", "values", 3, 2, 1)


def test_no_variation() -> None:
    study = nested(np.full((3, 4, 2), 0.3))
    assert study.components.total.variance == 0
    assert study.components.gauge.variance_share_percent is None
    assert study.chart is None


def test_a_sum_is_never_bounded_below_what_it_adds() -> None:
    # Appraisers alike to the digit, parts far apart: their difference drags the gauge's own estimate down.
    x = np.random.default_rng(6).normal(0, 0.1, (3, 4, 2)) + 5 * np.arange(4.0)[:, None]
    study = nested(x - x.mean(axis=(1, 2), keepdims=True))
    found = study.components
    assert found.gauge.estimate < 0
    assert found.gauge.variance == found.repeatability.variance
    assert found.gauge.variance_upper >= found.repeatability.variance_upper
