"""What the charts with memory share: their data, and the mean and sigma they stand on.

Points are subgroup means or single values. Each is weighed by its own size, so subgroups may differ in
size and pieces may be missing. A gap adds nothing to the memory, and keeps its place; so does an excluded
point of the baseline.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from typing import Annotated, Literal, TypeVar

import numpy as np

from .. import cautions as caution
from .. import diagnostics
from ..baseline import change_points
from ..bounds import POSITIVE, SIGMA, SIZE
from ..cautions import Caution
from ..data import Booleans, Floats, Individuals, Subgroups, SubgroupStatistics, SubgroupSummary
from ..design.memory import SMALLEST_SHIFT
from ..errors import DocumentMismatch, Fault, UnusableData, UnusableParameter
from ..runlength.memory import LARGEST_SHIFT, LONGEST_ARL, MemoryRunLength
from ..runlength.survival import RunLength
from ..sigma import WITHIN, SigmaEstimate, moving_range, within
from .common import (
    NO_STANDARDS,
    BaselineRecord,
    Exclusion,
    Performance,
    ShiftPerformance,
    Standards,
    exclusion_mask,
    standards_alone,
)
from .individuals import mean_of_values
from .price import SHIFTS
from .subgroups import SubgroupDiagnostics, diagnose, grand_mean

D = TypeVar("D")

Data = Subgroups | SubgroupSummary | Individuals

OF_SINGLE_VALUES = ("mean-moving-range", "median-moving-range")

SHIFT_UNIT = "standard deviations of a single value"


@dataclass(frozen=True, slots=True)
class Detect:
    """The shift a chart is to find soonest, at a stated rate of false alarms."""

    shift: Annotated[float, "Of the process mean, in standard deviations of a single value."]
    in_control_arl: Annotated[float, "Average number of points between false alarms."]


@dataclass(frozen=True, slots=True)
class Source:
    """Where the mean and sigma of a chart come from.

    sigma_estimator: one of ``WITHIN`` for subgroups, of ``OF_SINGLE_VALUES`` for single values; ``None``
    for the usual one. span: of the moving ranges. subgroup_size: only without data; 1 unless given.
    """

    sigma_estimator: str | None = None
    span: int = 2
    standards: Standards = NO_STANDARDS
    subgroup_size: int | None = None
    exclude: tuple[Exclusion, ...] = ()


@dataclass(frozen=True, slots=True)
class Parameters:
    """The mean and sigma that a chart with memory stands on."""

    centre: Annotated[float, "In-control mean, or target, in the unit of the characteristic."]
    sigma: Annotated[float, "Standard deviation of single values, in the unit of the characteristic.", SIGMA]
    sigma_estimator: Annotated[str, "How sigma was estimated; `given` where it was a standard."]
    degrees_of_freedom: Annotated[
        float | None, "Effective degrees of freedom of sigma; null where it was a standard.", POSITIVE
    ]
    subgroup_size: Annotated[
        int | None,
        "Values behind a point, 1 for single values; null where the baseline's points differ.",
        SIZE,
    ]
    baseline: Annotated[
        BaselineRecord | None, "What the limits were computed from; null for standards alone."
    ]

    @property
    def row(self) -> tuple[float, float, str, float | None, int | None, BaselineRecord | None]:
        """The fields in order."""
        return (
            self.centre,
            self.sigma,
            self.sigma_estimator,
            self.degrees_of_freedom,
            self.subgroup_size,
            self.baseline,
        )


@dataclass(frozen=True, slots=True, eq=False)
class Established:
    """Parameters, with what they were estimated from.

    points: the baseline's points with the excluded ones as gaps, ``None`` for standards alone; typical:
    values behind a point, on average and rounded.
    """

    parameters: Parameters
    points: SubgroupStatistics | None
    typical: float
    diagnostics: SubgroupDiagnostics | None
    cautions: tuple[Caution, ...]


def points_of(data: Data) -> SubgroupStatistics:
    """The points of any data; single values are subgroups of one, without a spread."""
    if isinstance(data, Individuals):
        values = data.values
        return SubgroupStatistics((values == values).astype(np.int64), values, None, None)
    return data.statistics()


def establish(data: Data | None, source: Source) -> Established:
    """Mean and sigma from a baseline, from standards, or from both.

    Subgroups: ``Σnᵢx̄ᵢ/N`` and a within-subgroup sigma. Single values: their mean and a sigma from moving
    ranges, which no gap and no excluded value breaks into. Raises UnusableData for fewer than two points
    or no variation; UnusableParameter for options that do not fit. Source: [iso-7870-2], [astm-e2587].
    """
    given = source.standards
    if data is None:
        if faults := standards_alone(given, source.exclude):
            raise UnusableParameter(*faults)
        assert given.mean is not None
        assert given.sigma is not None
        size = source.subgroup_size or 1
        alone = Parameters(given.mean, given.sigma, "given", None, size, None)
        return Established(alone, None, float(size), None, ())
    if source.subgroup_size is not None:
        raise UnusableParameter.of(
            "size-with-data",
            "The subgroup size comes from the data; give it only without data.",
            "subgroup_size",
        )
    single = isinstance(data, Individuals)
    points = points_of(data)
    kept = exclusion_mask(len(points.size), source.exclude)
    used = points if kept is None else points.keep(kept)
    filled = int(np.count_nonzero(used.size))
    if filled < 2 and (given.mean is None or given.sigma is None):
        raise UnusableData.of(
            "too-few-points",
            f"Limits need at least two points, and 20 to 25 to deserve trust; there "
            f"{'is one' if filled == 1 else 'are none'}.",
            "data",
        )
    total = int(used.size.sum())
    if given.mean is not None:
        centre = given.mean
    else:
        centre = mean_of_values(used.mean, filled) if single else grand_mean(used, total)
    if given.sigma is not None:
        sigma, estimator, freedom = given.sigma, "given", None
    else:
        estimate = _estimate(used, source, single)
        sigma, estimator, freedom = estimate.sigma, estimate.estimator, estimate.degrees_of_freedom
    common = used.common_size
    parameters = Parameters(
        centre,
        sigma,
        estimator,
        freedom,
        common,
        BaselineRecord(filled, total, source.exclude),
    )
    found = _diagnose(data, used, kept)
    # Whole, so that run lengths once computed serve the next baseline too.
    typical = float(max(round(total / max(filled, 1)), 1)) if common is None else float(common)
    return Established(parameters, used, typical, found, _cautions(found, used, filled, single, parameters))


def _estimate(used: SubgroupStatistics, source: Source, single: bool) -> SigmaEstimate:
    estimator = source.sigma_estimator
    fitting = OF_SINGLE_VALUES if single else WITHIN
    if estimator is not None and estimator not in fitting:
        raise UnusableParameter.of(
            "estimator-of-other-data",
            f"`{estimator}` is not an estimator for {'single values' if single else 'subgroups'}; those are: "
            f"{', '.join(fitting)}.",
            "sigma_estimator",
        )
    if single:
        statistic: Literal["mean", "median"] = "median" if estimator == "median-moving-range" else "mean"
        return moving_range(used.mean, span=source.span, statistic=statistic)
    if used.sd is None and used.range is None:
        raise UnusableData.of(
            "spread-missing",
            "Means alone do not show how values vary within a subgroup: give `ranges` or `sds` with them, or "
            "the sigma under `standards`.",
            "data",
        )
    return within(used, estimator or ("mean-range" if used.sd is None else "mean-sd"))


def _diagnose(data: Data, used: SubgroupStatistics, kept: Booleans | None) -> SubgroupDiagnostics:
    means = used.mean
    if isinstance(data, Individuals):
        return SubgroupDiagnostics(
            diagnostics.autocorrelation(means),
            diagnostics.normality(means),
            diagnostics.resolution(means, None),
            None,
            change_points.of_values(means),
        )
    if used.range is None and used.sd is None:
        steps = change_points.of_values(means)
        level = None if steps is None else change_points.ChangePoint(steps.mean, None)
        return SubgroupDiagnostics(diagnostics.autocorrelation(means), None, None, None, level)
    return diagnose(data, used, kept)


def _cautions(
    found: SubgroupDiagnostics, used: SubgroupStatistics, filled: int, single: bool, parameters: Parameters
) -> tuple[Caution, ...]:
    ranges = parameters.sigma_estimator in ("mean-range", "median-range")
    return caution.collect(
        caution.few_individuals(filled) if single else caution.few_subgroups(filled),
        caution.large_subgroups(used),
        caution.range_inefficient(used) if ranges else None,
        caution.autocorrelated(found.autocorrelation),
        caution.not_normal(found.normality),
        caution.coarse_resolution(found.resolution),
        caution.unstable_spread(found.spread_stability),
        change_points.caution_of_level(found.change_point),
        change_points.caution_of_spread(found.change_point),
        None if single else _between(used, filled, parameters),
    )


def _between(used: SubgroupStatistics, filled: int, parameters: Parameters) -> Caution | None:
    with np.errstate(over="ignore"):
        far = np.abs(used.mean - parameters.centre) * np.sqrt(used.size) > 3.0 * parameters.sigma
    typical = float(used.size.sum()) / max(filled, 1)
    return caution.varies_between(
        used.mean, int(np.count_nonzero(far)), typical, parameters.sigma, parameters.degrees_of_freedom
    )


def check_carry(sound: bool) -> None:
    """Raises DocumentMismatch for a carry whose figures cannot have come from this service."""
    if not sound:
        raise DocumentMismatch.of(
            "carry-edited",
            "The figures of this carry do not fit each other. Send the carry exactly as it was received, or leave "
            "it out to start afresh.",
            "carry",
        )


def scattered(there: Booleans | None, of_points: Floats, elsewhere: float) -> Floats:
    """Values of the points that are there, put back in their places; ``there`` is ``None`` without gaps."""
    if there is None:
        return of_points
    whole = np.full(len(there), elsewhere)
    whole[there] = of_points
    return whole


def present(points: SubgroupStatistics) -> tuple[Floats, Floats, Booleans | None]:
    """Means and sizes of the points that are there, and where they are (``None``: everywhere)."""
    there = points.size > 0
    if bool(there.all()):
        return points.mean, points.size.astype(np.float64), None
    return points.mean[there], points.size[there].astype(np.float64), there


def designed(detect: Detect, typical: float, design: Callable[[float], D]) -> D:
    """What ``design`` makes of a shift in standard deviations of the plotted points.

    Raises UnusableParameter, with its place in the request, for what no chart is designed for.
    """
    shift = detect.shift * math.sqrt(typical)
    if not SMALLEST_SHIFT <= shift <= LARGEST_SHIFT:
        raise UnusableParameter.of(
            "shift-out-of-range",
            f"A shift of {detect.shift:g} standard deviations of a single value is {shift:.4g} standard deviations "
            f"of a point; charts with memory are designed for {SMALLEST_SHIFT:g} to {LARGEST_SHIFT:g} of them.",
            "detect",
            "shift",
        )
    try:
        return design(shift)
    except UnusableParameter as error:
        faults = [Fault(fault.code, fault.detail, ("detect", "in_control_arl")) for fault in error.faults]
    raise UnusableParameter(*faults)


def price(
    panel: str, run_length: Callable[[float], MemoryRunLength | RunLength], typical: float, besides: str = ""
) -> Performance:
    """What a chart costs and buys, from its run length at a shift in standard deviations of its points.

    Shifts beyond what the run lengths are computed for are left out: any chart finds them at once.
    """
    root = math.sqrt(typical)
    try:
        found = run_length(0.0)
        in_control, method = told(found.arl), found.method + besides
    except UnusableParameter as error:
        in_control, method = None, f"not computed: {error}"
    shifts = []
    for shift in SHIFTS:
        if shift * root <= LARGEST_SHIFT:
            try:
                arl = told(run_length(shift * root).arl)
            except UnusableParameter:
                arl = None
            shifts.append(ShiftPerformance(shift, arl))
    return Performance(panel, in_control, None, tuple(shifts), SHIFT_UNIT, typical, method)


def told(arl: float) -> float | None:
    """An average run length, or ``None`` where it is beyond sense."""
    return arl if arl < LONGEST_ARL else None


def check_given(detect: Detect | None, *given: tuple[str, float | None]) -> None:
    """Raises UnusableParameter unless a chart is either given all its parameters, or what to detect."""
    if detect is None:
        both = " and ".join(f"`{name}`" for name, _ in given)
        faults = [
            Fault("parameter-missing", f"Give {both}, or what the chart is to `detect`.", (name,))
            for name, value in given
            if value is None
        ]
    else:
        faults = [
            Fault(
                "given-and-designed", f"Give `{name}`, or what the chart is to `detect`, not both.", (name,)
            )
            for name, value in given
            if value is not None
        ]
    if faults:
        raise UnusableParameter(*faults)


FROM_DATA = Source()
