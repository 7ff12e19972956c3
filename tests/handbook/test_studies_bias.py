"""Bias and linearity against published analyses and least squares written out again."""

from __future__ import annotations

import math

import numpy as np
import pytest
import scipy

from assignable.spc.errors import UnusableData, UnusableParameter
from assignable.spc.studies.bias import ReferenceLevel, band, bias


def _levels(references: list[float], values: list[list[float]]) -> tuple[ReferenceLevel, ...]:
    return tuple(ReferenceLevel(r, np.array(v, dtype=float)) for r, v in zip(references, values, strict=True))


# AIAG Measurement Systems Analysis, 4th ed. (2010), ch. III B: linearity study, five parts measured twelve
# times. From memory, recomputed: the printed line comes out.
_LINEARITY = _levels(
    [2.0, 4.0, 6.0, 8.0, 10.0],
    [
        [2.7, 2.5, 2.4, 2.5, 2.7, 2.3, 2.5, 2.5, 2.4, 2.4, 2.6, 2.4],
        [5.1, 3.9, 4.2, 5.0, 3.8, 3.9, 3.9, 3.9, 3.9, 4.0, 4.1, 3.8],
        [5.8, 5.7, 5.9, 5.9, 6.0, 6.1, 6.0, 6.1, 6.4, 6.3, 6.0, 6.1],
        [7.6, 7.7, 7.8, 7.7, 7.8, 7.8, 7.8, 7.7, 7.8, 7.5, 7.6, 7.7],
        [9.1, 9.3, 9.5, 9.3, 9.4, 9.5, 9.5, 9.5, 9.6, 9.2, 9.3, 9.4],
    ],
)

# AIAG, same chapter: one part of reference 6.0 measured fifteen times. Print: mean 6.0067, bias 0.0067; its
# standard deviation comes from ranges and is not compared. From memory, recomputed.
_FIFTEEN = _levels([6.0], [[5.8, 5.7, 5.9, 5.9, 6.0, 6.1, 6.0, 6.1, 6.4, 6.3, 6.0, 6.1, 6.2, 5.6, 6.0]])


class TestAiagLinearity:
    study = bias(_LINEARITY)

    def test_bias_of_each_level(self) -> None:
        printed = (0.491667, 0.125, 0.025, -0.291667, -0.616667)
        assert [level.bias for level in self.study.levels] == pytest.approx(printed, abs=6e-7)

    def test_line(self) -> None:
        line = self.study.linearity
        assert line is not None
        assert line.slope.estimate == pytest.approx(-0.131667, abs=6e-7)
        assert line.intercept.estimate == pytest.approx(0.736667, abs=6e-7)
        assert line.residual_sd == pytest.approx(0.23954, abs=6e-6)
        assert line.r_squared == pytest.approx(0.714, abs=5e-4)
        assert line.slope.t == pytest.approx(-12.043, abs=5e-4)
        assert line.intercept.t == pytest.approx(10.158, abs=6e-4)
        assert line.degrees_of_freedom == 58

    def test_line_by_least_squares_on_the_single_values(self) -> None:
        reference = np.repeat([level.reference for level in _LINEARITY], 12)
        y = np.concatenate([level.values for level in _LINEARITY]) - reference
        design = np.column_stack([np.ones(60), reference])
        fit, *_ = np.linalg.lstsq(design, y, rcond=None)
        residual = y - design @ fit
        square = residual @ residual / 58
        covariance = square * np.linalg.inv(design.T @ design)
        line = self.study.linearity
        assert line is not None
        assert [line.intercept.estimate, line.slope.estimate] == pytest.approx(fit, rel=1e-10)
        errors = [line.intercept.standard_error, line.slope.standard_error]
        assert errors == pytest.approx(np.sqrt(np.diag(covariance)), rel=1e-10)
        assert line.r_squared == pytest.approx(
            1 - residual @ residual / np.sum((y - y.mean()) ** 2), rel=1e-10
        )
        t = 2.0017174830120927  # 97.5 % of t with 58 degrees of freedom (computed)
        assert line.slope.upper - line.slope.estimate == pytest.approx(
            t * line.slope.standard_error, rel=1e-9
        )
        at = np.column_stack([np.ones(5), [level.reference for level in _LINEARITY]])
        half = t * np.sqrt(np.einsum("ij,jk,ik->i", at, covariance, at))
        assert line.fitted == pytest.approx(at @ fit, rel=1e-9)
        assert line.fitted_upper - line.fitted == pytest.approx(half, rel=1e-9)
        # A straight line against five means.
        pure = sum(float(np.sum((level.values - level.values.mean()) ** 2)) for level in _LINEARITY)
        f_ratio = (residual @ residual - pure) / 3 / (pure / 55)
        assert line.lack_of_fit_f == pytest.approx(f_ratio, rel=1e-9)
        assert self.study.repeatability_sd == pytest.approx(math.sqrt(pure / 55), rel=1e-12)

    def test_mean_bias(self) -> None:
        assert self.study.mean_bias == pytest.approx(-0.053333, abs=6e-7)


def test_aiag_bias() -> None:
    study = bias(_FIFTEEN)
    (level,) = study.levels
    assert level.mean == pytest.approx(6.0067, abs=5e-5)
    assert level.bias == pytest.approx(0.0067, abs=5e-5)
    values = _FIFTEEN[0].values
    error = float(np.std(values, ddof=1)) / math.sqrt(15)
    assert level.t == pytest.approx((values.mean() - 6) / error, rel=1e-9)
    # t 2.144787 at 97.5 % with 14 degrees of freedom, as every table prints it.
    assert level.upper is not None
    assert level.upper - level.bias == pytest.approx(2.144787 * error, rel=1e-6)
    assert level.p_value == pytest.approx(2 * (1 - scipy.special.stdtr(14, level.t)), rel=1e-9)
    assert study.linearity is None
    assert [note.code for note in study.cautions] == ["one-reference"]


def test_probe_against_the_mean_of_five() -> None:
    # NIST e-Handbook 2.6.1, run 1: averages of probe 2362 on five wafers (checked in print) less the mean of
    # the five probes (computed from the same data). Print: bias -0.0272.
    study = bias(
        _levels(
            [95.130037, 99.315353, 96.061807, 101.08541, 94.25309],
            [[95.09282], [99.30595], [96.03573], [101.06022], [94.21482]],
        )
    )
    assert study.mean_bias == pytest.approx(-0.0272, abs=6e-5)
    assert study.repeatability_sd is None
    assert study.levels[0].p_value is None
    assert study.linearity is not None
    assert study.linearity.lack_of_fit_f is None
    assert [note.code for note in study.cautions] == ["nothing-repeated"]


def test_levels_with_the_same_reference_count_together() -> None:
    whole = bias(_LINEARITY).linearity
    halves = tuple(
        ReferenceLevel(level.reference, part)
        for level in _LINEARITY
        for part in (level.values[:5], level.values[5:])
    )
    split = bias(halves).linearity
    assert whole is not None
    assert split is not None
    assert split.slope.estimate == pytest.approx(whole.slope.estimate)
    assert split.residual_sd == pytest.approx(whole.residual_sd)
    assert split.lack_of_fit_f == pytest.approx(whole.lack_of_fit_f)
    assert split.r_squared == pytest.approx(whole.r_squared)


class TestDegenerate:
    def test_exact_gauge(self) -> None:
        study = bias(_levels([0.1, 0.2, 0.3], [[0.1, 0.1], [0.2, 0.2], [0.3, 0.3]]))
        assert [level.bias for level in study.levels] == [0, 0, 0]
        assert [level.p_value for level in study.levels] == [None] * 3
        assert study.linearity is not None
        assert study.linearity.r_squared is None
        assert study.linearity.slope.p_value is None
        assert study.repeatability_sd == 0
        assert [note.code for note in study.cautions] == ["no-gauge-variation"]

    def test_exact_offset(self) -> None:
        study = bias(_levels([1.0, 2.0, 4.0], [[1.25, 1.25], [2.25, 2.25], [4.25, 4.25]]))
        assert [level.t for level in study.levels] == [None] * 3
        assert [level.p_value for level in study.levels] == [0] * 3
        assert study.linearity is not None
        assert study.linearity.slope.estimate == 0
        assert study.linearity.intercept.p_value == 0

    def test_two_measurements_make_no_line(self) -> None:
        study = bias(_levels([1.0, 2.0], [[1.1], [2.1]]))
        assert study.linearity is None
        assert "too-few-measurements" in [note.code for note in study.cautions]

    def test_faults_are_each_named(self) -> None:
        levels = _levels([1.0, math.nan, 3.0], [[1.0, math.nan], [2.0], []])
        with pytest.raises(UnusableData) as caught:
            bias(levels)
        assert [fault.where for fault in caught.value.faults] == [
            ("data", "levels", 0, "values", 1),
            ("data", "levels", 1, "reference"),
            ("data", "levels", 2, "values"),
        ]
        with pytest.raises(UnusableData):
            bias(())
        with pytest.raises(UnusableParameter):
            bias(_FIFTEEN, confidence=0.0)


def test_the_band_between_the_levels_is_that_of_the_line() -> None:
    study = bias(_LINEARITY, confidence=0.9)
    line = study.linearity
    assert line is not None
    at = np.array([level.reference for level in study.levels])
    for found, told in zip(band(study, at), (line.fitted, line.fitted_lower, line.fitted_upper), strict=True):
        assert found == pytest.approx(told, rel=1e-12)
    # At reference zero it is the intercept with its interval.
    found = [float(each[0]) for each in band(study, np.zeros(1))]
    assert found == pytest.approx([line.intercept.estimate, line.intercept.lower, line.intercept.upper])
    with pytest.raises(ValueError, match="no line"):
        band(bias(_FIFTEEN), at)
