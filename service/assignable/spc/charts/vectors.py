"""What the charts of several variables share: mean and covariance, distances, and what a signal is made of.

Covariances are worked with as correlations and standard deviations, so the units of the variables never
meet; their Cholesky factor measures distances. Variables that are sums of others are refused by name.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from functools import lru_cache
from typing import Annotated, Literal

import numpy as np
import scipy

from .. import cautions as caution
from .. import diagnostics
from ..cautions import Caution
from ..data import Booleans, Floats, Integers, Vectors
from ..errors import Fault, UnusableData, UnusableParameter
from ..rules import Signal
from . import successive
from .common import Exclusion, exclusion_mask

Estimator = Literal["sample", "successive-differences", "pooled"]
Matrix = tuple[tuple[float, ...], ...]

MOST_VARIABLES = 50
MOST_DECOMPOSED = 1000
"""Signals taken apart by variable in an answer."""

DEPENDENT = 1e-10
"""Eigenvalue of the correlation matrix below which variables count as dependent."""
NEARLY_DEPENDENT = 1e-4
_INVOLVED = 0.05  # of the largest loading on a dependency, from which a variable takes part in it
_FARTHEST = 1e120  # standard deviations
_SIGNIFICANCE = 0.01


@dataclass(frozen=True, slots=True)
class VectorStandards:
    """Mean and covariance known in advance, which replace the estimates."""

    variables: tuple[str, ...]
    mean: tuple[float, ...]
    covariance: Matrix


@dataclass(frozen=True, slots=True, eq=False)
class Estimate:
    """mean: (p,); covariance: (p, p), of single observations; degrees_of_freedom: effective ones;
    observations: points used; kept: (m,) bool, those used; record of gaps: points that are none.
    """

    mean: Floats
    covariance: Floats
    estimator: Estimator
    degrees_of_freedom: float
    observations: int
    kept: Booleans
    gaps: int


@dataclass(frozen=True, slots=True, eq=False)
class Metric:
    """Distances under a mean and a covariance.

    mean, sd: (p,); whitener: (p, p) lower triangular, turns deviations into independent ones of unit
    variance; precision: diagonal (p,) of the inverse covariance; smallest: eigenvalue of the correlation.
    """

    mean: Floats
    sd: Floats
    whitener: Floats
    precision: Floats
    smallest: float

    def whiten(self, deviations: Floats) -> Floats:
        """(m, p) deviations from the mean as independent ones; each row the same however many there are."""
        with np.errstate(over="ignore", invalid="ignore"):
            white = deviations[:, :1] * self.whitener[:, 0]
            for variable in range(1, len(self.mean)):
                white += deviations[:, variable, None] * self.whitener[:, variable]
        return white

    def squares(self, deviations: Floats) -> Floats:
        """(m,) squared distances of (m, p) deviations from the mean, NaN at gaps."""
        white = self.whiten(deviations)
        with np.errstate(over="ignore", invalid="ignore"):
            found: Floats = (white * white).sum(axis=1)
        strange = ~(found < np.inf)
        if bool(strange.any()) and not bool(np.isnan(deviations[strange]).any(axis=1).all()):
            return self.squares(self.within_reach(deviations))
        return found

    def within_reach(self, deviations: Floats) -> Floats:
        """Deviations of at most 1e120 standard deviations, whose squares can be represented."""
        return np.clip(deviations, -_FARTHEST * self.sd, _FARTHEST * self.sd)


@lru_cache(maxsize=256)
def metric(mean: tuple[float, ...], covariance: Matrix) -> Metric:
    """The metric of a mean and a covariance that :func:`check_covariance` has passed."""
    return _metric(np.array(mean), np.array(covariance))


def _metric(centre: Floats, rows: Floats) -> Metric:
    sd = np.sqrt(rows.diagonal())
    correlation = rows / sd[:, None] / sd
    factor = np.linalg.cholesky(correlation)
    whitener = np.linalg.solve(factor, np.eye(len(centre)))
    precision = (whitener * whitener).sum(axis=0) / sd**2
    whitener = np.tril(whitener) / sd
    for array in (centre, sd, whitener, precision):
        array.flags.writeable = False
    return Metric(centre, sd, whitener, precision, float(np.linalg.eigvalsh(correlation)[0]))


def _listed(names: Sequence[str]) -> str:
    return names[0] if len(names) == 1 else ", ".join(names[:-1]) + " and " + names[-1]


def check_covariance(covariance: Floats, names: Sequence[str], *where: str | int) -> None:
    """Raises UnusableData (``no-variation``, ``out-of-scale``, ``dependent-variables``), naming the variables."""
    variance = covariance.diagonal()
    if not bool(np.isfinite(covariance).all()) or bool(((variance > 0) & (variance < 1e-300)).any()):
        raise UnusableData.of(
            "out-of-scale",
            "The covariance of these values cannot be represented; choose other units.",
            *where,
        )
    still = [name for name, each in zip(names, variance.tolist(), strict=True) if each <= 0.0]
    if still:
        raise UnusableData.of(
            "no-variation",
            f"There is no variation in {_listed(still)}; leave such a variable out, or record more digits.",
            *where,
        )
    sd = np.sqrt(variance)
    values, vectors = np.linalg.eigh(covariance / sd[:, None] / sd)
    if values[0] > DEPENDENT:
        return
    if values[0] < -1e-8:
        raise UnusableData.of(
            "not-a-covariance",
            "No data can have this covariance matrix: it is not positive definite.",
            *where,
        )
    loadings = np.abs(vectors[:, values <= DEPENDENT]).max(axis=1)
    involved = [
        name
        for name, loading in zip(names, loadings.tolist(), strict=True)
        if loading > _INVOLVED * loadings.max()
    ]
    raise UnusableData.of(
        "dependent-variables",
        f"The variables {_listed(involved)} depend on each other: one of them follows exactly from the "
        "rest, so the covariance cannot be inverted. Leave one of them out.",
        *where,
    )


def estimate(data: Vectors, estimator: Estimator | None, exclude: Sequence[Exclusion]) -> Estimate:
    """Mean and covariance of a baseline.

    ``sample``: divisor m − 1. ``successive-differences``: Σ d d'/(2k) over the k differences of
    neighbours, of which none spans a gap or an excluded point. ``pooled``: within subgroups, divisor
    m(n − 1). Two-pass, each variable in units of its own largest deviation.

    Raises UnusableData (``too-few-observations``, ``no-variation``, ``dependent-variables``) and
    UnusableParameter (``estimator-not-for-this-data``). Source: [holmes-mergen-1993],
    [tracy-young-mason-1992].
    """
    size, names = data.subgroup_size, data.names
    chosen: Estimator = estimator or ("pooled" if size > 1 else "sample")
    if (chosen == "pooled") != (size > 1):
        raise UnusableParameter.of(
            "estimator-not-for-this-data",
            "Subgroups take the covariance pooled within them (`pooled`); single observations take that of "
            "the sample (`sample`) or of successive differences (`successive-differences`).",
            "covariance_estimator",
        )
    points, p = len(data.values), len(names)
    wanted = exclusion_mask(points, exclude)
    present = data.present()
    kept = present if wanted is None else present & wanted
    whole = bool(kept.all())
    m = points if whole else int(np.count_nonzero(kept))
    gaps = 0 if whole else points - int(np.count_nonzero(present))
    _enough(chosen, m, p, size)
    values = data.values if whole else data.values[kept]
    flat = values.reshape(-1, p)
    mean = flat.mean(axis=0)
    mean = mean + (flat - mean).mean(axis=0)
    away = values - (mean if size == 1 else values.mean(axis=1, keepdims=True))
    unit = np.abs(away).reshape(-1, p).max(axis=0)
    some = np.where(unit > 0, unit, 1.0)
    if bool(np.isfinite(unit).all()):
        away = away / some
    away = away - away.mean(axis=1 if size > 1 else 0, keepdims=True)
    if chosen == "successive-differences":
        steps = np.diff(away, axis=0)
        if not whole:
            steps = steps[np.diff(np.flatnonzero(kept)) == 1]
        if 2 * len(steps) < m:
            raise UnusableData.of(
                "too-few-neighbours",
                f"Only {len(steps)} pairs of neighbours stand without a gap between them, too few for "
                "successive differences; use the covariance of the sample.",
                "data",
                "values",
            )
        scaled = steps.T @ steps / (2.0 * len(steps))
        freedom = successive.freedom(successive.paths(kept)[1])
    else:
        freedom = float(m * (size - 1) if size > 1 else m - 1)
        rows = away.reshape(-1, p)
        scaled = rows.T @ rows / freedom
    scaled = 0.5 * (scaled + scaled.T)
    # Rounding leaves a little variance in a variable that has none.
    scaled[unit <= 1e-14 * np.abs(mean), :] = 0.0
    with np.errstate(over="ignore", invalid="ignore", under="ignore"):
        covariance = scaled * some[:, None] * some
    check_covariance(covariance, names, "data", "values")
    return Estimate(mean, covariance, chosen, freedom, m, kept, gaps)


def _enough(estimator: Estimator, m: int, p: int, size: int) -> None:
    if estimator == "pooled":
        least = max(2, math.ceil(p / (size - 1)))
        what = f"subgroups of {size}"
    elif estimator == "sample":
        least, what = p + 2, "observations"
    else:
        least, what = max(p + 4, successive.FEWEST), "observations"
    if m < least:
        raise UnusableData.of(
            "too-few-observations",
            f"The covariance of {p} variables needs at least {least} {what} without a missing value, and "
            f"many more to deserve trust; there {'is' if m == 1 else 'are'} {m}.",
            "data",
            "values",
        )


def matrix(rows: Floats) -> Matrix:
    """A square array as rows of numbers."""
    return tuple(map(tuple, rows.tolist()))


def check_standards(given: VectorStandards) -> None:
    """Raises UnusableParameter where a given mean or covariance is none."""
    p = len(given.variables)
    faults = []
    if p < 2:
        faults.append(
            Fault(
                "too-few-variables",
                "This chart is for two variables or more; for one, use the charts of single values or subgroups.",
                ("standards", "variables"),
            )
        )
    if len(given.mean) != p:
        faults.append(
            Fault(
                "unequal-length",
                f"There are {len(given.mean)} means for {p} variables.",
                ("standards", "mean"),
            )
        )
    if len(given.covariance) != p or any(len(row) != p for row in given.covariance):
        faults.append(
            Fault(
                "unequal-length",
                f"The covariance needs {p} rows of {p} numbers, one for each variable.",
                ("standards", "covariance"),
            )
        )
    if faults:
        raise UnusableParameter(*faults)
    rows = np.array(given.covariance)
    sd = np.sqrt(np.abs(rows.diagonal()))
    if bool((np.abs(rows - rows.T) > 1e-9 * sd[:, None] * sd).any()):
        raise UnusableParameter.of(
            "not-symmetric", "A covariance matrix is symmetric; this one is not.", "standards", "covariance"
        )
    try:
        check_covariance(rows, given.variables, "standards", "covariance")
    except UnusableData as error:
        raise UnusableParameter(*error.faults) from None


def same_data(names: tuple[str, ...], size: int, data: Vectors) -> None:
    """Raises UnusableData where new data does not have the variables, or the subgroup size, of its limits."""
    if data.names != names:
        raise UnusableData.of(
            "variables-differ",
            f"These limits are for the variables {_listed(names)}, in that order; the data names "
            f"{_listed(data.names)}.",
            "data",
            "variables",
        )
    if data.subgroup_size != size:
        raise UnusableData.of(
            "size-differs",
            f"These limits are for subgroups of {size}; the data gives {data.subgroup_size}.",
            "data",
            "subgroup_size",
        )


# ---------------------------------------------------------------------------------------------------
# What a signal is made of


@dataclass(frozen=True, slots=True, eq=False)
class Decomposition:
    """One signal taken apart by variable."""

    index: Annotated[int, "Position of the point in the request, from 0."]
    statistic: Annotated[float, "The plotted statistic."]
    deviations: Annotated[
        Floats,
        "Distance of each variable from its mean, in standard deviations of what is plotted; signed.",
    ]
    unconditional: Annotated[Floats, "What each variable gives by itself: its own squared distance."]
    conditional: Annotated[
        Floats,
        "What each variable adds to all the others: large where it breaks its usual relation to them.",
    ]
    sentence: Annotated[str, "Which variables stand out, and how."]


@dataclass(frozen=True, slots=True, eq=False)
class Decompositions:
    """The signals taken apart by variable (Mason, Tracy & Young 1995)."""

    variables: Annotated[tuple[str, ...], "The variables, in the order of the terms."]
    unconditional_limit: Annotated[float, "A variable by itself stands out beyond it."]
    conditional_limit: Annotated[float, "A variable, given the others, stands out beyond it."]
    decompositions: Annotated[
        tuple[Decomposition, ...], "One for each of the first 1000 signals, in the order of the points."
    ]


def decompose(
    signals: Sequence[Signal],
    deviations: Floats,
    statistics: Floats,
    scale: float | Floats,
    measure: Metric,
    names: tuple[str, ...],
    limits: tuple[float, float],
) -> Decompositions | None:
    """Signals by variable: unconditional terms, and each variable's term given all the others.

    deviations: (m, p) from the mean, statistics: (m,) plotted, of the call; scale: of the statistic over
    the squared distance of the deviations, one or (m,); limits: for the two kinds of term. The statistic
    falls by just the conditional term where a variable is left out. ``None`` without signals.
    Source: [mason-tracy-young-1995].
    """
    at = np.array([signal.index for signal in signals[:MOST_DECOMPOSED]], dtype=np.int64)
    if not len(at):
        return None
    rows = measure.within_reach(deviations[at])
    factor = np.sqrt(scale[at, None] if isinstance(scale, np.ndarray) else scale)
    z = rows / measure.sd * factor
    apart = np.square(z)
    given = np.square((measure.whiten(rows) @ measure.whitener) * factor) / measure.precision
    told = tuple(
        Decomposition(
            index, value, z[i], apart[i], given[i], _sentence(names, z[i], apart[i], given[i], limits)
        )
        for i, (index, value) in enumerate(zip(at.tolist(), statistics[at].tolist(), strict=True))
    )
    return Decompositions(names, *limits, told)


def _sentence(
    names: tuple[str, ...], z: Floats, apart: Floats, given: Floats, limits: tuple[float, float]
) -> str:
    alone = np.flatnonzero(apart > limits[0])
    alone = alone[np.argsort(-apart[alone], kind="stable")]
    related = np.flatnonzero((given > limits[1]) & ~(apart > limits[0]))
    related = related[np.argsort(-given[related], kind="stable")]
    parts = []
    for variable in alone[:3].tolist():
        side = "above" if z[variable] > 0 else "below"
        parts.append(f"{names[variable]} lies {abs(z[variable]):.3g} standard deviations {side} its mean")
    if len(related):
        broken = [names[variable] for variable in related[:3].tolist()]
        verb = "breaks its" if len(broken) == 1 else "break their"
        parts.append(f"{_listed(broken)} {verb} usual relation to the others")
    if not parts:
        return "No variable stands out by itself or given the others; their combination does."
    return f"By variable: {'; '.join(parts)}."


# ---------------------------------------------------------------------------------------------------
# What a baseline shows


@dataclass(frozen=True, slots=True)
class VariableDiagnostics:
    """One variable of the baseline."""

    variable: Annotated[str, "Its name."]
    autocorrelation: Annotated[
        diagnostics.Autocorrelation | None,
        "Of its values, or subgroup means, in time order; null where too few.",
    ]


@dataclass(frozen=True, slots=True)
class Kurtosis:
    """Mardia's test of the joint normality of single observations, by their kurtosis."""

    statistic: Annotated[float, "Mean of the fourth power of the distance from the mean."]
    expected: Annotated[float, "What joint normality leads to."]
    p_value: Annotated[float, "Approximate; two-sided."]


@dataclass(frozen=True, slots=True)
class VectorDiagnostics:
    """What the baseline itself shows."""

    correlation: Annotated[Matrix, "Correlation matrix that belongs to the covariance."]
    smallest_eigenvalue: Annotated[float, "Of the correlation matrix; near 0 where variables nearly depend."]
    gaps: Annotated[int, "Points left out because a value is missing."]
    variables: Annotated[tuple[VariableDiagnostics, ...], "Each variable by itself."]
    kurtosis: Annotated[Kurtosis | None, "Null for subgroups, and for fewer than 20 observations."]


FEWEST_FOR_KURTOSIS = 20


def diagnose(found: Estimate, means: Floats, measure: Metric, data: Vectors) -> VectorDiagnostics:
    """Correlations, dependence in time of each variable, and joint normality. Source: [mardia-1974]."""
    used = means if bool(found.kept.all()) else np.where(found.kept[:, None], means, np.nan)
    sd = measure.sd
    m, p = found.observations, len(sd)
    kurtosis = None
    if data.subgroup_size == 1 and m >= FEWEST_FOR_KURTOSIS and m > p + 2:
        rows = used[found.kept] - measure.mean
        if found.estimator == "sample":
            squares = measure.squares(rows) * (m / (m - 1.0))
        else:
            scaled = rows / sd
            squares = _metric(np.zeros(p), scaled.T @ scaled / m).squares(scaled)
        statistic = float(np.square(squares).mean())
        expected = p * (p + 2.0) * (m - 1.0) / (m + 1.0)
        variance = 8.0 * p * (p + 2.0) * (m - 3.0) * (m - p - 1.0) * (m - p + 1.0)
        variance /= (m + 1.0) ** 2 * (m + 3.0) * (m + 5.0)
        z = abs(statistic - expected) / math.sqrt(variance)
        kurtosis = Kurtosis(statistic, expected, 2.0 * float(scipy.special.ndtr(-z)))
    columns = np.ascontiguousarray(used.T)
    correlation = np.clip(found.covariance / sd[:, None] / sd, -1.0, 1.0)
    np.fill_diagonal(correlation, 1.0)
    return VectorDiagnostics(
        matrix(correlation),
        measure.smallest,
        found.gaps,
        tuple(
            VariableDiagnostics(name, diagnostics.autocorrelation(column))
            for name, column in zip(data.names, columns, strict=True)
        ),
        kurtosis,
    )


def cautions_of(found: Estimate, seen: VectorDiagnostics) -> tuple[Caution, ...]:
    """What the baseline of several variables should be known for."""
    p = len(seen.variables)
    m, enough = found.observations, max(caution.FEW_SUBGROUPS, 5 * p)
    told = []
    if m < enough:
        told.append(
            Caution(
                "few-observations",
                f"The limits rest on {m} points of {p} variables; with fewer than {enough} their covariance is "
                "uncertain. Treat them as provisional.",
                ("data",),
                caution.COMMON_PRACTICE,
            )
        )
    if seen.gaps:
        told.append(
            Caution(
                "gaps",
                f"{seen.gaps} points lack a value and are left out whole: a distance needs every variable.",
                ("data", "values"),
                caution.COMMON_PRACTICE,
            )
        )
    if seen.smallest_eigenvalue < NEARLY_DEPENDENT:
        told.append(
            Caution(
                "nearly-dependent",
                "Some variables follow almost exactly from the others (smallest eigenvalue of the correlation "
                f"matrix {seen.smallest_eigenvalue:.2g}), so rounding of their values weighs heavily. Consider "
                "leaving one of them out.",
                ("data", "values"),
                "jackson-1991",
            )
        )
    slow = [
        each.variable
        for each in seen.variables
        if each.autocorrelation is not None and each.autocorrelation.p_value * p < _SIGNIFICANCE
    ]
    if slow:
        told.append(
            Caution(
                "autocorrelated",
                f"Points depend on those before them in {_listed(slow)} (Ljung–Box test). Limits and run lengths "
                "suppose independent points, so the rate of false alarms is not the one stated.",
                ("data",),
                "ljung-box-1978",
            )
        )
    if seen.kurtosis is not None and seen.kurtosis.p_value < _SIGNIFICANCE:
        side = "more" if seen.kurtosis.statistic > seen.kurtosis.expected else "less"
        told.append(
            Caution(
                "not-normal",
                f"The observations do not look jointly normal: far ones are {side} frequent (kurtosis "
                f"{seen.kurtosis.statistic:.4g} where {seen.kurtosis.expected:.4g} is expected). Look for shifts, "
                "mixed streams or outliers first; the rate of false alarms is not the one stated.",
                ("data",),
                "mardia-1974",
            )
        )
    return tuple(told)


def filled(present: Booleans) -> Integers:
    """(m,) for each point the last one that is no gap, −1 where there is none yet."""
    at = np.where(present, np.arange(len(present)), -1)
    last: Integers = np.maximum.accumulate(at)
    return last
