"""Many parts on one chart, against plain transcriptions and simulation."""

from __future__ import annotations

import math
from itertools import pairwise

import numpy as np
import pytest
import scipy

from assignable.spc.charts import individuals, short_run
from assignable.spc.charts.common import Exclusion, Standards
from assignable.spc.charts.individuals import IndividualsOptions
from assignable.spc.charts.lines import beyond_spread_lines
from assignable.spc.charts.short_run import PartData, PartTarget, ShortRunOptions
from assignable.spc.data import Individuals, Subgroups, SubgroupSummary
from assignable.spc.errors import UnusableData, UnusableParameter
from assignable.spc.factors import d2, d3
from assignable.spc.rules import PUBLISHED

NAMES = list("AAABBBCCCAABBCCCABCABCAABBCCABCA")
TARGETS = {"A": 10.0, "B": 25.0, "C": -4.0}
SIGMAS = {"A": 0.5, "B": 2.0, "C": 0.1}
PARTS = tuple(PartTarget(name, target) for name, target in TARGETS.items())
# Michelson's velocity of light less 299000 km/s, the first ten of each of five series (Stigler 1977; bundled with
# pydataset 0.2.0 as "morley").
# fmt: off
MORLEY = {
    "1": [850, 740, 900, 1070, 930, 850, 950, 980, 980, 880],
    "2": [960, 940, 960, 940, 880, 800, 850, 880, 900, 840],
    "3": [880, 880, 880, 860, 720, 720, 620, 860, 970, 950],
    "4": [890, 810, 810, 820, 800, 770, 760, 740, 750, 760],
    "5": [890, 840, 780, 810, 760, 810, 790, 810, 820, 850],
}
# fmt: on


def made(seed: int, *, unequal: bool, size: int | None = None) -> np.ndarray:
    rng = np.random.default_rng(seed)
    target = np.array([TARGETS[name] for name in NAMES])
    sigma = np.array([SIGMAS[name] if unequal else 0.5 for name in NAMES])
    if size is None:
        return target + sigma * rng.standard_normal(len(NAMES))
    return target[:, None] + sigma[:, None] * rng.standard_normal((len(NAMES), size))


def test_series_of_michelson_as_parts() -> None:
    names = [name for name, values in MORLEY.items() for _ in values]
    values = np.array([float(value) for row in MORLEY.values() for value in row])
    parts = tuple(PartTarget(name, float(np.mean(row))) for name, row in MORLEY.items())
    found = short_run.fit(PartData(Individuals(values), names), ShortRunOptions(parts))
    deviations = [value - float(np.mean(row)) for row in MORLEY.values() for value in row]
    ranges = [abs(b - a) for a, b in pairwise(deviations)]
    sigma = sum(ranges) / len(ranges) / 1.1283791670955126
    assert found.limits.sigma == pytest.approx(sigma, rel=1e-12)
    assert found.limits.panels.level.upper == pytest.approx(3 * sigma, rel=1e-12)
    assert found.baseline is not None
    assert found.baseline.panels.level.value == pytest.approx(deviations)
    # The series differ in spread: Bartlett's test by scipy.
    assert found.diagnostics is not None
    assert found.diagnostics.equal_spread is not None
    reference = scipy.stats.bartlett(*(np.array(row, dtype=float) for row in MORLEY.values()))
    assert found.diagnostics.equal_spread.statistic == pytest.approx(float(reference.statistic), rel=1e-9)
    assert found.diagnostics.equal_spread.p_value == pytest.approx(float(reference.pvalue), rel=1e-8)


def test_deviations_of_subgroups() -> None:
    values = made(1, unequal=False, size=4)
    values[5, 2:] = np.nan
    values[6] = np.nan
    found = short_run.fit(PartData(Subgroups(values), NAMES), ShortRunOptions(PARTS, centre_line="mean"))
    f = {n: (d2(n) / d3(n)) ** 2 for n in (2, 4)}
    rows = [(row[~np.isnan(row)], TARGETS[name]) for row, name in zip(values, NAMES, strict=True)]
    rows = [(row, target) for row, target in rows if len(row)]
    top = sum(f[len(row)] * float(np.ptp(row)) / d2(len(row)) for row, _ in rows)
    sigma = top / sum(f[len(row)] for row, _ in rows)
    centre = sum(float((row - target).sum()) for row, target in rows) / sum(len(row) for row, _ in rows)
    assert found.limits.sigma == pytest.approx(sigma, rel=1e-12)
    assert found.limits.centre == pytest.approx(centre, rel=1e-9)
    assert found.baseline is not None
    level = found.baseline.panels.level
    at = level.index.tolist().index(5)
    assert level.upper[at] - level.centre[at] == pytest.approx(3 * sigma / math.sqrt(2), rel=1e-12)
    assert 6 not in level.index.tolist()


@pytest.mark.parametrize("size", [None, 5])
def test_standardised_by_each_parts_own_sigma(size: int | None) -> None:
    values = made(2, unequal=True, size=size)
    points = Individuals(values) if size is None else Subgroups(values)
    given = (PartTarget("A", 10.0), PartTarget("B", 25.0, 2.0), PartTarget("C", -4.0))
    found = short_run.fit(PartData(points, NAMES), ShortRunOptions(given, "standardised"))
    mask = {name: np.array([n == name for n in NAMES]) for name in TARGETS}
    expected = {"B": 2.0}
    for name in ("A", "C"):
        own = values[mask[name]]
        if size is None:
            expected[name] = float(np.abs(np.diff(own)).mean()) / d2(2)
        else:
            expected[name] = float(np.ptp(own, axis=1).mean()) / d2(size)
    for part in found.limits.parts:
        assert part.sigma == pytest.approx(expected[part.name], rel=1e-12)
    sigma = np.array([expected[name] for name in NAMES])
    target = np.array([TARGETS[name] for name in NAMES])
    level = values if size is None else values.mean(axis=1)
    assert found.baseline is not None
    assert found.baseline.panels.level.value == pytest.approx((level - target) / sigma, rel=1e-9)
    assert found.limits.panels.level.upper == pytest.approx(3 / math.sqrt(size or 1), rel=1e-12)


def test_unequal_spread_and_wrong_targets_are_told() -> None:
    values = made(3, unequal=True)
    found = short_run.fit(PartData(Individuals(values), NAMES), ShortRunOptions(PARTS))
    assert "parts-differ-in-spread" in [caution.code for caution in found.cautions]
    moved = (PartTarget("A", 10.0), PartTarget("B", 25.0), PartTarget("C", -3.0))
    off = short_run.fit(PartData(Individuals(made(3, unequal=False)), NAMES), ShortRunOptions(moved))
    told = [caution for caution in off.cautions if caution.code == "part-off-target"]
    assert len(told) == 1
    assert "part C" in told[0].sentence


def test_one_part_at_target_0_is_the_chart_of_single_values() -> None:
    values = np.random.default_rng(5).normal(0.0, 1.0, 60)
    rules = PUBLISHED["nelson-1984"].rules
    one = short_run.fit(
        PartData(Individuals(values), ["A"] * 60), ShortRunOptions((PartTarget("A", 0.0),), rules=rules)
    )
    same = individuals.fit(
        Individuals(values), IndividualsOptions(rules=rules, standards=Standards(mean=0.0))
    )
    assert one.limits.sigma == same.limits.sigma
    assert one.baseline is not None
    assert same.baseline is not None
    assert [(s.rule, s.index) for s in one.baseline.signals] == [
        (s.rule, s.index) for s in same.baseline.signals
    ]


def test_excluded_points_count_for_nothing() -> None:
    values = made(6, unequal=False)
    wild = values.copy()
    wild[10] += 40.0
    gap = values.copy()
    gap[10] = np.nan
    found = short_run.fit(
        PartData(Individuals(wild), NAMES), ShortRunOptions(PARTS, exclude=(Exclusion(10, "chipped die"),))
    )
    assert (
        found.limits.sigma
        == short_run.fit(PartData(Individuals(gap), NAMES), ShortRunOptions(PARTS)).limits.sigma
    )
    assert found.baseline is not None
    assert 10 in found.baseline.panels.level.index.tolist()
    assert all(signal.index != 10 for signal in found.baseline.signals)


def test_false_alarms_by_simulation() -> None:
    rng = np.random.default_rng(77)
    points = 60_000
    names = [("A", "B", "C")[at] for at in rng.integers(0, 3, points)]
    target = np.array([TARGETS[name] for name in names])
    sigma = np.array([SIGMAS[name] for name in names])
    values = target[:, None] + sigma[:, None] * rng.standard_normal((points, 3))
    parts = tuple(PartTarget(name, TARGETS[name], SIGMAS[name]) for name in TARGETS)
    limits = short_run.fit(None, ShortRunOptions(parts, "standardised", subgroup_size=3)).limits
    judged = short_run.judge(limits, PartData(Subgroups(values), names), None)
    for panel, chance in (
        (judged.panels.level, 2 * float(scipy.special.ndtr(-3.0))),
        (judged.panels.spread, beyond_spread_lines("range", 3, 3.0, 0.0)),
    ):
        alarms = int(np.count_nonzero((panel.value > panel.upper) | (panel.value < panel.lower)))
        assert abs(alarms - chance * points) < 4 * math.sqrt(chance * points)


def test_refusals() -> None:
    values = made(7, unequal=False)

    def fault(data: PartData | None, options: ShortRunOptions) -> tuple[str, tuple[str | int, ...]]:
        with pytest.raises((UnusableData, UnusableParameter)) as found:
            short_run.fit(data, options)
        return found.value.faults[0].code, found.value.faults[0].where

    data = PartData(Individuals(values), NAMES)
    assert fault(data, ShortRunOptions(PARTS[:2])) == ("part-without-target", ("data", "part_names", 6))
    with pytest.raises(UnusableData, match="Part C has no target"):
        short_run.fit(data, ShortRunOptions(PARTS[:2]))
    assert fault(PartData(Individuals(values), NAMES[:-1]), ShortRunOptions(PARTS))[0] == "unequal-length"
    assert fault(data, ShortRunOptions((*PARTS, PARTS[0])))[0] == "part-named-twice"
    assert fault(data, ShortRunOptions((*PARTS, PartTarget("D", 1.0)), "standardised")) == (
        "part-without-sigma",
        ("parts", 3, "sigma"),
    )
    assert fault(data, ShortRunOptions((PartTarget("A", 1.0, 2.0), *PARTS[1:])))[0] == "not-of-this-scale"
    assert fault(None, ShortRunOptions(PARTS))[1] == ("standards", "sigma")
    assert fault(None, ShortRunOptions(PARTS, "standardised"))[1] == ("parts", 0, "sigma")
    assert fault(data, ShortRunOptions(PARTS, sigma_estimator="pooled-sd"))[0] == "estimator-of-other-data"
    summary = PartData(SubgroupSummary(np.ones(2), np.array([4, 4]), sds=np.ones(2)), ["A", "B"])
    assert fault(summary, ShortRunOptions(PARTS))[0] == "spread-missing"
    limits = short_run.fit(data, ShortRunOptions(PARTS)).limits
    with pytest.raises(UnusableData, match="Part D has no target"):
        short_run.judge(limits, PartData(Individuals(np.ones(2)), ["A", "D"]), None)
    with pytest.raises(UnusableData) as form:
        short_run.judge(limits, PartData(Subgroups(np.ones((2, 2))), ["A", "A"]), None)
    assert form.value.faults[0].code == "form-differs"
