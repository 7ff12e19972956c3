"""What must not change when data and specification change together."""

from __future__ import annotations

import math

import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st

from assignable.spc.capability.indices import Capability, Index, capability
from assignable.spc.capability.specification import Specification
from assignable.spc.sigma import SigmaEstimate

_settings = settings(derandomize=True, deadline=None, max_examples=25)

samples = st.lists(st.integers(-500, 500), min_size=3, max_size=40).filter(lambda x: len(set(x)) > 1)
limits = st.tuples(st.integers(-600, 590), st.integers(1, 1200)).map(lambda p: (p[0], p[0] + p[1]))
share = st.floats(0.05, 0.95)


def _find(values: np.ndarray, lower: float, upper: float, target: float, sigma: float) -> Capability:
    estimate = SigmaEstimate(sigma, 0.7 * values.size, "mean-range")
    return capability(values, Specification(lower, upper, target), within=estimate)


def _close(a: Index | None, b: Index | None) -> bool:
    assert a is not None
    assert b is not None
    fields = ("value", "lower", "upper", "lower_bound")
    return a.method == b.method and all(
        math.isclose(getattr(a, f), getattr(b, f), rel_tol=1e-7, abs_tol=1e-9) for f in fields
    )


def _near(a: float | None, b: float | None) -> bool:
    assert a is not None
    assert b is not None
    return math.isclose(a, b, rel_tol=1e-6, abs_tol=1e-6)


INDICES = ("cp", "cpk", "cpu", "cpl", "pp", "ppk", "ppu", "ppl", "cpm", "cpmk")


@_settings
@given(samples, limits, share, st.sampled_from([1e-3, 0.5, 25.4, 1e4]), st.integers(-1000, 1000))
def test_unit_and_origin_do_not_matter(
    sample: list[int], limit: tuple[int, int], part: float, unit: float, origin: int
) -> None:
    x = np.array(sample, dtype=np.float64)
    lower, upper = map(float, limit)
    target = lower + part * (upper - lower)
    sigma = float(x.std()) * 0.9
    plain = _find(x, lower, upper, target, sigma)

    def moved(value: float) -> float:
        return (value + origin) * unit

    other = _find((x + origin) * unit, moved(lower), moved(upper), moved(target), sigma * unit)
    for name in INDICES:
        assert _close(getattr(plain, name), getattr(other, name)), name
    for name in ("expected_within", "expected_total"):
        a, b = getattr(plain, name), getattr(other, name)
        assert _near(a.total_ppm, b.total_ppm)
        assert _near(a.total_lower_ppm, b.total_lower_ppm)
        assert _near(a.total_upper_ppm, b.total_upper_ppm)


@_settings
@given(samples, limits, share)
def test_reflection_swaps_the_sides(sample: list[int], limit: tuple[int, int], part: float) -> None:
    x = np.array(sample, dtype=np.float64)
    lower, upper = map(float, limit)
    target = lower + part * (upper - lower)
    sigma = float(x.std()) * 1.1
    plain = _find(x, lower, upper, target, sigma)
    other = _find(-x, -upper, -lower, -target, sigma)
    for name, twin in (
        ("cp", "cp"), ("cpk", "cpk"), ("cpu", "cpl"), ("cpl", "cpu"), ("pp", "pp"),
        ("ppk", "ppk"), ("ppu", "ppl"), ("ppl", "ppu"), ("cpm", "cpm"), ("cpmk", "cpmk"),
    ):  # fmt: skip
        assert _close(getattr(plain, name), getattr(other, twin)), name
    assert plain.observed is not None
    assert other.observed is not None
    assert (plain.observed.below, plain.observed.above) == (other.observed.above, other.observed.below)
    for name in ("expected_within", "expected_total"):
        a, b = getattr(plain, name), getattr(other, name)
        assert _near(a.below_ppm, b.above_ppm)
        assert _near(a.above_ppm, b.below_ppm)
        assert _near(a.total_lower_ppm, b.total_lower_ppm)
        assert _near(a.total_upper_ppm, b.total_upper_ppm)


@_settings
@given(samples, limits, share)
def test_indices_keep_their_order(sample: list[int], limit: tuple[int, int], part: float) -> None:
    x = np.array(sample, dtype=np.float64)
    lower, upper = map(float, limit)
    found = _find(x, lower, upper, lower + part * (upper - lower), float(x.std()))
    assert found.cp is not None
    assert found.cpk is not None
    assert found.cpu is not None
    assert found.cpl is not None
    assert found.cpm is not None
    assert found.cpmk is not None
    assert found.cpk.value == min(found.cpu.value, found.cpl.value)
    assert math.isclose(found.cp.value, 0.5 * (found.cpu.value + found.cpl.value), rel_tol=1e-9)
    assert found.cpk.value <= found.cp.value * (1 + 1e-12)
    assert found.cpmk.value <= found.cpm.value * (1 + 1e-12)


@_settings
@given(samples, limits)
def test_more_confidence_is_a_wider_interval(sample: list[int], limit: tuple[int, int]) -> None:
    x = np.array(sample, dtype=np.float64)
    specification = Specification(float(limit[0]), float(limit[1]))
    narrow = capability(x, specification, confidence=0.8)
    wide = capability(x, specification, confidence=0.99)
    for name in ("pp", "ppk", "ppu", "ppl"):
        a, b = getattr(narrow, name), getattr(wide, name)
        assert b.lower < a.lower <= a.lower_bound
        assert b.upper > a.upper
        assert b.method == a.method
    assert narrow.expected_total is not None
    assert wide.expected_total is not None
    assert wide.expected_total.total_lower_ppm <= narrow.expected_total.total_lower_ppm + 1e-9
    assert wide.expected_total.total_upper_ppm >= narrow.expected_total.total_upper_ppm - 1e-9
