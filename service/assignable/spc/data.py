"""What a caller measured, as frozen and validated arrays.

Missing pieces are NaN inside these objects and nowhere else. Construction validates: an object that
exists can be calculated with, at least in shape.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from .errors import UnusableData

Floats = NDArray[np.float64]
Integers = NDArray[np.int64]
Booleans = NDArray[np.bool_]


def _frozen(array: NDArray) -> NDArray:
    array = array.view()
    array.flags.writeable = False
    return array


def _unit_of_square(largest: float) -> float:
    """A unit in which ``largest`` can be squared; 1 but for extreme values, so that a row's figures are its own."""
    return 1.0 if 1e-140 < largest < 1e140 or largest == 0.0 else largest


@dataclass(frozen=True, slots=True, eq=False)
class SubgroupStatistics:
    """Each subgroup's own figures; what a chart of subgroups is computed from.

    size: (m,) values present in each subgroup, 0 for a gap.
    mean: (m,) mean of the values present, NaN where size is 0.
    range: (m,) largest less smallest, NaN where size < 2; ``None`` where only deviations were kept.
    sd: (m,) standard deviation (divisor size - 1), NaN where size < 2; ``None`` where only ranges
        were kept.
    """

    size: Integers
    mean: Floats
    range: Floats | None
    sd: Floats | None

    @property
    def common_size(self) -> int | None:
        """The one size of all subgroups that are not gaps, or ``None`` when sizes differ."""
        first = int(self.size.max(initial=0))
        return first if first and bool(((self.size == first) | (self.size == 0)).all()) else None

    @property
    def usual_size(self) -> int | None:
        """The commonest size of two or more, the larger of two as common; ``None`` where there is none."""
        one = self.common_size
        if one is not None:
            return one if one > 1 else None
        counted = np.bincount(self.size)
        counted[:2] = 0
        return len(counted) - 1 - int(counted[::-1].argmax()) if counted.any() else None

    def keep(self, kept: Booleans) -> SubgroupStatistics:
        """The same with the subgroups not kept, (m,) bool, turned into gaps."""
        if bool(kept.all()):
            return self
        return SubgroupStatistics(
            np.where(kept, self.size, 0),
            np.where(kept, self.mean, np.nan),
            None if self.range is None else np.where(kept, self.range, np.nan),
            None if self.sd is None else np.where(kept, self.sd, np.nan),
        )


@dataclass(frozen=True, slots=True, eq=False)
class Subgroups:
    """Rational subgroups: values (m, n), a row each, NaN where a piece is missing."""

    values: Floats

    def __post_init__(self) -> None:
        if self.values.ndim != 2 or self.values.size == 0:
            raise UnusableData.of("empty", "There are no subgroups in the data.", "data", "values")
        object.__setattr__(self, "values", _frozen(self.values))

    def statistics(self) -> SubgroupStatistics:
        """Size, mean, range and standard deviation of each row.

        Two-pass, so that values like 10000000.2 keep their digits; values near 1e300 or 1e-300 are squared
        in units of the largest range, so that they neither overflow nor vanish.
        """
        x = self.values
        m, n = x.shape
        sums = np.add.reduce(x, axis=1)
        total = float(np.add.reduce(sums))
        # A missing piece makes the total NaN; values are bounded so that nothing else can.
        if total == total:
            size = np.full(m, n)
            mean = sums / n
            # A second pass over the residuals restores the digits the first one lost.
            residual = x - mean[:, None]
            mean = mean + np.add.reduce(residual, axis=1) / n
            if n < 2:
                nothing = np.full(m, np.nan)
                return SubgroupStatistics(size, mean, nothing, nothing)
            spread = np.maximum.reduce(x, axis=1) - np.minimum.reduce(x, axis=1)
            unit = _unit_of_square(float(np.maximum.reduce(spread)))
            residual /= unit
            # Equal values near 1e300 may overflow by their rounding errors; their deviation is 0 all the same.
            with np.errstate(over="ignore", invalid="ignore"):
                square = np.einsum("ij,ij->i", residual, residual)
                square -= np.add.reduce(residual, axis=1) ** 2 / n
            sd = np.sqrt(np.maximum(square, 0.0) / (n - 1)) * unit
            return SubgroupStatistics(size, mean, spread, np.where(spread > 0, sd, 0.0))
        present = x == x
        size = present.sum(axis=1)
        filled = np.where(present, x, 0.0)
        some = np.maximum(size, 1)
        mean = filled.sum(axis=1) / some
        residual = np.where(present, x - mean[:, None], 0.0)
        mean = np.where(size > 0, mean + residual.sum(axis=1) / some, np.nan)
        top = np.where(present, x, -np.inf).max(axis=1)
        spread = np.where(size > 1, top - np.where(present, x, np.inf).min(axis=1), np.nan)
        unit = _unit_of_square(float(np.where(size > 1, spread, 0.0).max()))
        residual /= unit
        with np.errstate(over="ignore", invalid="ignore"):  # as above
            square = np.einsum("ij,ij->i", residual, residual) - residual.sum(axis=1) ** 2 / some
        sd = np.sqrt(np.maximum(square, 0.0) / np.maximum(size - 1, 1)) * unit
        sd = np.where(size > 1, np.where(spread > 0, sd, 0.0), np.nan)
        return SubgroupStatistics(size, mean, spread, sd)


@dataclass(frozen=True, slots=True, eq=False)
class SubgroupSummary:
    """Subgroups of which only the summary was kept.

    means: (m,), NaN for a gap; sizes: (m,) int; and one of ranges (m,) or sds (m,), NaN where a
    subgroup has fewer than two values.
    """

    means: Floats
    sizes: Integers
    ranges: Floats | None = None
    sds: Floats | None = None

    def statistics(self) -> SubgroupStatistics:
        """The summary in the form the charts compute from."""
        gap = np.isnan(self.means) | (self.sizes == 0)
        lonely = gap | (self.sizes < 2)

        def spread(values: Floats | None) -> Floats | None:
            return None if values is None else np.where(lonely, np.nan, values)

        return SubgroupStatistics(
            np.where(gap, 0, self.sizes),
            np.where(gap, np.nan, self.means),
            spread(self.ranges),
            spread(self.sds),
        )


@dataclass(frozen=True, slots=True, eq=False)
class Individuals:
    """Single values in time order: values (m,), NaN for a gap."""

    values: Floats

    def __post_init__(self) -> None:
        if self.values.ndim != 1 or self.values.size == 0:
            raise UnusableData.of("empty", "There are no values in the data.", "data", "values")
        object.__setattr__(self, "values", _frozen(self.values))


@dataclass(frozen=True, slots=True, eq=False)
class Vectors:
    """Several characteristics of one piece, in time order.

    values: (m, p) single observations, or (m, n, p) subgroups of n pieces. A point with a NaN is a gap
    as a whole: what is left of it is not used. names: of the p characteristics, in the columns' order.
    """

    values: Floats
    names: tuple[str, ...]

    def __post_init__(self) -> None:
        if self.values.ndim not in (2, 3) or self.values.size == 0:
            raise UnusableData.of("empty", "There are no observations in the data.", "data", "values")
        if self.values.shape[-1] != len(self.names):
            raise UnusableData.of(
                "unequal-length",
                f"There are {self.values.shape[-1]} numbers in a row for {len(self.names)} variables.",
                "data",
                "values",
            )
        object.__setattr__(self, "values", _frozen(self.values))

    @property
    def subgroup_size(self) -> int:
        """Pieces in a subgroup; 1 for single observations."""
        return int(self.values.shape[1]) if self.values.ndim == 3 else 1

    def present(self) -> Booleans:
        """(m,), False at gaps."""
        flat = self.values.reshape(len(self.values), -1)
        present: Booleans = np.logical_not(np.isnan(flat).any(axis=1))
        return present

    def means(self) -> Floats:
        """(m, p) the observations, or the means of the subgroups."""
        if self.values.ndim == 2:
            return self.values
        mean = self.values.mean(axis=1)
        # A second pass over the residuals restores the digits the first one lost.
        corrected: Floats = mean + (self.values - mean[:, None, :]).mean(axis=1)
        return corrected


@dataclass(frozen=True, slots=True, eq=False)
class Intervals:
    """What lies between successive events, in their order: opportunities, or time; (m,), NaN for a gap."""

    values: Floats

    def __post_init__(self) -> None:
        if self.values.ndim != 1 or self.values.size == 0:
            raise UnusableData.of("empty", "There are no intervals in the data.", "data", "intervals")
        object.__setattr__(self, "values", _frozen(self.values))


@dataclass(frozen=True, slots=True, eq=False)
class Counts:
    """Counts in time order.

    counts: (m,), NaN for a gap: nonconforming units, or nonconformities.
    inspected: (m,) or ``None``: units inspected, or the area of opportunity, of each sample.
    """

    counts: Floats
    inspected: Floats | None = None

    def __post_init__(self) -> None:
        if self.counts.ndim != 1 or self.counts.size == 0:
            raise UnusableData.of("empty", "There are no counts in the data.", "data", "counts")
        object.__setattr__(self, "counts", _frozen(self.counts))
