"""Capability of a process whose product is counted: its nonconforming rate, and the index that amounts to.

The interval of the rate is exact: [clopper-pearson-1934] for nonconforming units, [garwood-1936] for
nonconformities. The equivalent index is the Ppk of a normal characteristic with one limit beyond which the same
share of units lies, -Φ⁻¹(p)/3, p being 1 - exp(-rate) where nonconformities are counted.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Annotated, Literal, TypeAlias

import numpy as np
import scipy

from .. import cautions as caution
from .. import diagnostics
from ..cautions import Caution
from ..charts import attributes as charts
from ..data import Booleans, Counts, Floats
from ..errors import Fault, SpcError, UnusableData
from .indices import check_confidence
from .nonconforming import clopper_pearson

AttributeKind: TypeAlias = Literal["nonconforming-units", "nonconformities"]

FEWEST_EVENTS = 5
FEWEST_SAMPLES = 20
_MILLION = 1e6


@dataclass(frozen=True, slots=True)
class AttributeRate:
    """A rate with its exact interval."""

    value: Annotated[float, "Nonconforming share of the units, or nonconformities a unit of area."]
    lower: Annotated[float, "Lower end of the two-sided interval."]
    upper: Annotated[float, "Upper end of it."]
    upper_bound: Annotated[float, "One-sided bound: the true rate is at most this."]
    method: Annotated[str, "Of interval and bound: `clopper-pearson-1934` or `garwood-1936`."]


@dataclass(frozen=True, slots=True)
class EquivalentIndex:
    """The Ppk of a normal characteristic with one limit and the same share of nonconforming units."""

    value: Annotated[float | None, "Null where nothing nonconforming was seen: no finite index says that."]
    lower: Annotated[float, "Lower end of the two-sided interval."]
    upper: Annotated[float | None, "Upper end of it; null likewise."]
    lower_bound: Annotated[float, "One-sided bound: the true index is at least this."]


@dataclass(frozen=True, slots=True)
class AttributeCapability:
    """Capability of a counted characteristic."""

    kind: Annotated[AttributeKind, "What was counted."]
    samples: Annotated[int, "How many samples there were."]
    events: Annotated[float, "Nonconforming units, or nonconformities, in all of them."]
    inspected: Annotated[float, "Units inspected, or area of opportunity, in all of them."]
    confidence: Annotated[float, "Of each interval by itself, as a proportion."]
    rate: Annotated[AttributeRate, "The rate with its interval."]
    nonconforming_ppm: Annotated[
        float,
        "Nonconforming units in parts per million; of nonconformities, units of area with one at least.",
    ]
    index: Annotated[EquivalentIndex, "The index that the share of nonconforming units amounts to."]


@dataclass(frozen=True, slots=True)
class AttributeStudy:
    """Capability of counts with what must be known to trust it."""

    status: Literal["established", "provisional", "not-assessed"]
    capability: AttributeCapability
    dispersion: diagnostics.Dispersion | None
    cautions: tuple[Caution, ...]


def garwood(events: float, confidence: float) -> tuple[float, float]:
    """Exact two-sided interval for the mean of a Poisson count [garwood-1936]."""
    tail = 0.5 * (1.0 - confidence)
    lower = float(scipy.special.gammaincinv(events, tail)) if events > 0 else 0.0
    return lower, float(scipy.special.gammainccinv(events + 1.0, tail))


def study(
    counts: Floats, inspected: Floats, kind: AttributeKind, *, confidence: float = 0.95
) -> AttributeStudy:
    """Capability of counts (m,), NaN for a gap, in samples of so many units or so much area (m,).

    The counts' own p or u chart at three sigma says whether the process was in control [iso-22514-1].
    Raises UnusableParameter ``confidence-out-of-range``; UnusableData ``empty``, ``no-size``,
    ``fraction-of-a-unit``, ``count-too-large`` and what ``Counts`` raises.
    """
    check_confidence(confidence)
    binomial = kind == "nonconforming-units"
    data = Counts(counts, inspected)
    present: Booleans = counts == counts
    _check(counts, inspected, present, binomial)
    events, total = float(counts[present].sum()), float(inspected[present].sum())
    outer = 2.0 * confidence - 1.0
    if binomial:
        low, high = clopper_pearson(int(events), int(total), confidence)
        bound = clopper_pearson(int(events), int(total), outer)[1]
        rate = AttributeRate(events / total, low, high, bound, "clopper-pearson-1934")
    else:
        low, high = (one / total for one in garwood(events, confidence))
        bound = garwood(events, outer)[1] / total
        rate = AttributeRate(events / total, low, high, bound, "garwood-1936")
    shares = [one if binomial else -math.expm1(-one) for one in (rate.value, low, high, bound)]
    value, best, worst, assured = (_index(share) for share in shares)
    judged = _chart(data, binomial)
    signals = None if judged is None or judged.baseline is None else judged.baseline.signals_found
    dispersion = None if judged is None or judged.diagnostics is None else judged.diagnostics.dispersion
    samples = int(np.count_nonzero(present))
    return AttributeStudy(
        "not-assessed" if signals is None else "provisional" if signals else "established",
        AttributeCapability(
            kind=kind,
            samples=samples,
            events=events,
            inspected=total,
            confidence=confidence,
            rate=rate,
            nonconforming_ppm=shares[0] * _MILLION,
            index=EquivalentIndex(
                value, -1e3 if worst is None else worst, best, -1e3 if assured is None else assured
            ),
        ),
        dispersion,
        caution.collect(
            _not_in_control(signals, binomial),
            _few(samples, events),
            *(() if judged is None else (one for one in judged.cautions if one.code == "overdispersed")),
        ),
    )


def _index(share: float) -> float | None:
    """-Φ⁻¹(p)/3; ``None`` for a share of 0 or 1."""
    if not 0.0 < share < 1.0:
        return None
    return float(-scipy.special.ndtri(share)) / 3.0


def _check(counts: Floats, inspected: Floats, present: Booleans, binomial: bool) -> None:
    faults = []
    if not bool(present.any()):
        raise UnusableData.of("empty", "Every count is missing.", "data", "counts")
    unsized = np.flatnonzero(present & ~(inspected > 0.0))
    faults += [
        Fault("no-size", "A sample with a count must have been inspected.", ("data", "inspected", int(i)))
        for i in unsized[:20]
    ]
    if binomial:
        broken = np.flatnonzero(present & (inspected != np.floor(inspected)))
        faults += [
            Fault(
                "fraction-of-a-unit", "Units inspected must be a whole number.", ("data", "inspected", int(i))
            )
            for i in broken[:20]
        ]
        over = np.flatnonzero(present & (counts > inspected))
        faults += [
            Fault(
                "count-too-large",
                f"{counts[i]:.15g} of {inspected[i]:.15g} units cannot be nonconforming.",
                ("data", "counts", int(i)),
            )
            for i in over[:20]
        ]
    if faults:
        raise UnusableData(*faults)


def _chart(data: Counts, binomial: bool) -> charts.AttributeFit | None:
    """The counts on their own chart; ``None`` where they cannot be charted, as without any event."""
    try:
        return charts.fit(data, charts.AttributeOptions(), chart="p" if binomial else "u")
    except SpcError:
        return None


def _not_in_control(signals: int | None, binomial: bool) -> Caution | None:
    if not signals:
        return None
    return Caution(
        "not-in-control",
        f"The counts' own {'p' if binomial else 'u'} chart gives {signals} {'signal' if signals == 1 else 'signals'}: "
        "the process was not in control, so the rate describes what was made and promises nothing of what will be. "
        "Treat it as provisional; find the causes first.",
        ("data", "counts"),
        "iso-22514-1",
    )


def _few(samples: int, events: float) -> Caution | None:
    if samples >= FEWEST_SAMPLES and events >= FEWEST_EVENTS:
        return None
    return Caution(
        "few-samples",
        f"The rate rests on {events:g} events in {samples} {'sample' if samples == 1 else 'samples'}; with fewer than "
        f"{FEWEST_EVENTS} events or {FEWEST_SAMPLES} samples its interval is wide and its stability hardly shown. "
        "Judge by the upper bound, not by the rate.",
        ("data", "counts"),
        "common practice",
    )
