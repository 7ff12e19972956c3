"""Charts of rare events: ``g`` counts the opportunities between events, ``t`` the time between them.

A *small* interval means that events come faster, a large one that they come more slowly: the lower limit
tells of a rise of the rate, the upper one of a fall. Both distributions are far from symmetric.

* ``g`` ([kaminsky-1992]): opportunities follow the geometric distribution. They are counted from
  ``starts_at``: 0 counts the units between two events, none of which is an event (two events in a row
  give 0); 1 counts the second event too (two events in a row give 1). Zeros are values like any other.
* ``t`` ([xie-goh-ranjan-2002]): times follow the exponential or the Weibull distribution. Limits are
  exact equal tails, the centre line is the median, and rules watch the normal score of each time, so
  that zones hold what they hold on a normal statistic; a multiple of sigma would mean nothing here.
  A time of 0 lies below any lower limit. It cannot enter a fitted Weibull shape, and is refused there.
"""

from __future__ import annotations

import functools
import math
from dataclasses import dataclass, replace
from typing import Annotated, Generic, Literal, TypeAlias, TypeVar

import numpy as np
import scipy

from .. import cautions as caution
from .. import diagnostics, runlength
from ..bounds import MULTIPLE, POSITIVE, PROBABILITY, SIGMA, WEIGHT
from ..cautions import Caution
from ..data import Booleans, Floats, Intervals
from ..errors import Fault, UnusableData, UnusableParameter
from ..rules import Rule, Tail, Track, watched
from ..runlength.of_rules import continuous_law
from .common import (
    AT_THREE_SIGMA,
    Baseline,
    BaselineRecord,
    Exclusion,
    Fit,
    Judgement,
    LimitBasis,
    Panel,
    PanelLimits,
    Performance,
    Plot,
    Watched,
    exclusion_mask,
    normal_multiple,
    too_many_signals,
    watch,
    watch_track,
)
from .lattice import WholeLaw, run_law
from .price import FACTORS, after_shifts, priced
from .registry import Chart

T = TypeVar("T")
Distribution = Literal["exponential", "weibull"]
Estimator = Literal["maximum-likelihood", "unbiased"]

FEW_INTERVALS = 20
LEAST_SHAPE, MOST_SHAPE = 0.05, 1000.0
_FURTHEST_SCORE = 40.0
_SHIFT_UNIT = "factors on the rate of events"


@dataclass(frozen=True, slots=True)
class BetweenEvents(Generic[T]):
    """The panel of a ``g`` or ``t`` chart."""

    interval: Annotated[
        T,
        "What lies between successive events. A small value means that events come faster. On a `t` chart the "
        "centre line is the median.",
    ]


@dataclass(frozen=True, slots=True)
class IntervalCarry:
    """What judging needs to remember of the events before."""

    points: Annotated[int, "Intervals judged so far under these limits."]
    tail: Annotated[Tail, "The last points, for the run rules."]


NEW = IntervalCarry(0, Tail())


IntervalJudgement: TypeAlias = Judgement[BetweenEvents[Panel], IntervalCarry]


def _in_words(seen: Watched) -> Watched:
    """The signals, each with what its side means for the rate."""
    if not seen.signals:
        return seen
    meaning = {
        "below": " Small intervals mean that events come faster.",
        "above": " Large intervals mean that events come more slowly.",
        None: "",
    }
    told = tuple(replace(signal, sentence=signal.sentence + meaning[signal.side]) for signal in seen.signals)
    return Watched(told, seen.found)


def _kept(data: Intervals, exclude: tuple[Exclusion, ...]) -> tuple[Booleans | None, Floats, int]:
    """Which intervals count, those that do in their places, and how many they are."""
    kept = exclusion_mask(len(data.values), exclude)
    used = data.values if kept is None else np.where(kept, data.values, np.nan)
    return kept, used, int(np.count_nonzero(used == used))


def _too_few(filled: int) -> UnusableData:
    error = UnusableData.of(
        "too-few-intervals",
        "Limits need at least two intervals between events, and 20 to 25 to deserve trust; there "
        f"{'is one' if filled == 1 else 'are none'}.",
        "data",
        "intervals",
    )
    assert isinstance(error, UnusableData)
    return error


def _few(filled: int) -> Caution | None:
    if filled >= FEW_INTERVALS:
        return None
    return Caution(
        "few-intervals",
        f"The limits rest on {filled} intervals; with fewer than {FEW_INTERVALS} the rate of events is poorly "
        "known, and false alarms come at another rate than stated.",
        ("data", "intervals"),
        "common practice",
    )


def _correlation(used: Floats, shape: float = 1.0) -> diagnostics.Autocorrelation | None:
    """Of the intervals to a power that makes exponential values nearly normal [nelson-1994]."""
    # As they are, a single long interval would decide.
    largest = float(np.fmax.reduce(used, initial=0.0))
    if not largest > 0.0:
        return None
    return diagnostics.autocorrelation((used / largest) ** (shape / 3.6))


# ---------------------------------------------------------------------------------------------------
# g: opportunities between events


@dataclass(frozen=True, slots=True)
class OpportunityOptions:
    """How the limits of a ``g`` chart are to be computed.

    ``event_probability`` is a known probability, which replaces the estimate.
    """

    basis: LimitBasis = AT_THREE_SIGMA
    estimator: Estimator = "maximum-likelihood"
    starts_at: int = 0
    rules: tuple[Rule, ...] = ()
    event_probability: float | None = None
    exclude: tuple[Exclusion, ...] = ()


@dataclass(frozen=True, slots=True)
class OpportunityLimits:
    """The frozen parameters of a ``g`` chart."""

    mean: Annotated[float, "Mean number of opportunities between events, counted from `starts_at`."]
    event_probability: Annotated[float, "Probability of an event at an opportunity.", WEIGHT]
    estimator: Annotated[
        Literal["maximum-likelihood", "unbiased", "given"],
        "How the probability was estimated. `maximum-likelihood`: 1/(1 + ȳ) of the n intervals y counted from "
        "0. `unbiased`: (n - 1)/(n - 1 + Σy), the estimate of least variance among those without bias. `given`: "
        "a standard.",
    ]
    starts_at: Annotated[int, "The smallest possible interval: that of two events in a row."]
    limit_basis: Annotated[Literal["sigma", "probability"], "How the limits were placed."]
    sigma_multiple: Annotated[
        float | None, "Limits lie this many sigma out; null under `probability`.", MULTIPLE
    ]
    false_alarm_probability: Annotated[
        float | None, "At most this, half beyond each limit; null under `sigma`.", PROBABILITY
    ]
    panels: Annotated[BetweenEvents[PanelLimits], "The lines of the panel."]
    rules: Annotated[tuple[Rule, ...], "The rules in force, the limit first."]
    baseline: Annotated[
        BaselineRecord | None, "What the limits were computed from; null for a standard alone."
    ]

    @property
    def basis(self) -> LimitBasis:
        """How far out the limits lie."""
        return LimitBasis(self.limit_basis, self.sigma_multiple, self.false_alarm_probability)


@dataclass(frozen=True, slots=True)
class GeometricDispersion:
    """Whether opportunities vary as the geometric distribution says."""

    ratio: Annotated[float, "Variance of the intervals over that of the geometric distribution."]
    p_value: Annotated[
        float,
        "Two-sided probability of a ratio as far from 1 where the distribution holds; approximate (the ratio "
        "taken as normal with variance 4/n), so that few intervals reject somewhat too often.",
    ]


@dataclass(frozen=True, slots=True, eq=False)
class OpportunityDiagnostics:
    """What the baseline itself shows."""

    dispersion: Annotated[GeometricDispersion | None, "Null for fewer than 8 intervals."]
    autocorrelation: Annotated[
        diagnostics.Autocorrelation | None,
        "Of the intervals to the power 1/3.6, which makes them nearly normal; null where too few.",
    ]


OpportunityFit: TypeAlias = Fit[OpportunityLimits, BetweenEvents[Panel], OpportunityDiagnostics]


def opportunity_lines(mean: float, basis: LimitBasis) -> tuple[float | None, float]:
    """Lower and upper limit of a geometric count from 0 with this mean; lower ``None`` where not above 0.

    ``sigma``: mean ± multiple · √(mean (mean + 1)). ``probability``: the upper limit is the smallest count
    that is exceeded with at most half the false-alarm probability, the lower one the largest count that is
    undercut with at most half of it; a count on a limit is within. Both from P(Y > y) = (1 - p)^(y + 1).
    Source: [kaminsky-1992].
    """
    if basis.sigma_multiple is not None:
        far = basis.sigma_multiple * math.sqrt(mean * (mean + 1.0))
        lower, upper = mean - far, mean + far
    else:
        each = -math.log1p(1.0 / mean)
        most, least = math.log(basis.tail), math.log1p(-basis.tail)
        upper = max(math.ceil(most / each) - 1.0, 0.0)
        lower = float(math.floor(least / each))
        # Quotients that rounding carried over a whole number.
        if upper >= 1.0 and upper * each <= most:
            upper -= 1.0
        if lower * each < least:
            lower -= 1.0
    return (lower if lower > 0.0 else None), float(upper)


def _opportunity_plot(values: Floats, mean: float, starts_at: int, basis: LimitBasis) -> Plot:
    """``mean`` as in the limits, counted from ``starts_at``."""
    from_zero = mean - starts_at
    lower, upper = opportunity_lines(from_zero, basis)
    return Plot(
        values,
        mean,
        math.sqrt(from_zero * (from_zero + 1.0)),
        None if lower is None else lower + starts_at,
        upper + starts_at,
        floor=float(starts_at),
    )


def _check_start(values: Floats, starts_at: int) -> None:
    small = np.flatnonzero(values < starts_at)[:100].tolist()
    if small:
        raise UnusableData(
            *(
                Fault(
                    "interval-too-small",
                    f"{values[at]:g} is not possible where intervals are counted from {starts_at}; count the "
                    "event itself, or set `starts_at` to 0.",
                    ("data", "intervals", at),
                )
                for at in small
            )
        )


def fit_opportunities(data: Intervals | None, options: OpportunityOptions) -> OpportunityFit:
    """Limits of a ``g`` chart from the opportunities between events, or from a known probability.

    Raises UnusableData for intervals below ``starts_at``, fewer than two, or none above it;
    UnusableParameter for options that do not fit. Source: [kaminsky-1992]; the unbiased estimate
    [girshick-mosteller-savage-1946].
    """
    rules = watched(options.rules)
    basis, start, given = options.basis, options.starts_at, options.event_probability
    if data is None:
        faults = []
        if given is None:
            faults.append(
                Fault(
                    "data-missing",
                    "Without baseline data the probability of an event must be given as a standard.",
                    ("standards", "event_probability"),
                )
            )
        if options.exclude:
            faults.append(
                Fault("no-such-point", "There is no baseline to exclude points from.", ("exclude",))
            )
        if faults:
            raise UnusableParameter(*faults)
        assert given is not None
        mean = (1.0 - given) / given + start
        limits = _opportunity_limits(options, rules, mean, given, None)
        return Fit(
            limits,
            None,
            None,
            _opportunity_performance(rules, mean, start, basis),
            caution.collect(*_opportunity_cautions(limits)),
        )
    _check_start(data.values, start)
    kept, used, filled = _kept(data, options.exclude)
    if given is not None:
        mean, probability = (1.0 - given) / given + start, given
    else:
        if filled < 2:
            raise _too_few(filled)
        total = float(np.nansum(used)) - start * filled
        if total <= 0.0:
            raise UnusableData.of(
                "no-variation",
                "Every opportunity was an event, so there is nothing to set limits from; chart the proportion "
                "with the p chart instead.",
                "data",
                "intervals",
            )
        events = filled - 1.0 if options.estimator == "unbiased" else float(filled)
        mean, probability = total / events + start, events / (events + total)
    limits = _opportunity_limits(
        options, rules, mean, probability, BaselineRecord(filled, filled, options.exclude)
    )
    plot = _opportunity_plot(data.values, mean, start, basis)
    seen, _ = watch("interval", plot, rules, kept=kept)
    seen = _in_words(seen)
    found = OpportunityDiagnostics(_geometric_dispersion(used - start, filled), _correlation(used - start))
    return Fit(
        limits,
        Baseline(seen.verdict, BetweenEvents(plot.panel()), seen.signals, seen.found),
        found,
        _opportunity_performance(rules, mean, start, basis),
        caution.collect(
            _few(filled),
            _not_geometric(found.dispersion),
            caution.autocorrelated(found.autocorrelation),
            *_opportunity_cautions(limits),
            *too_many_signals(seen),
        ),
    )


def _opportunity_limits(
    options: OpportunityOptions,
    rules: tuple[Rule, ...],
    mean: float,
    probability: float,
    record: BaselineRecord | None,
) -> OpportunityLimits:
    basis = options.basis
    return OpportunityLimits(
        mean,
        probability,
        options.estimator if options.event_probability is None else "given",
        options.starts_at,
        basis.limit_basis,
        basis.sigma_multiple,
        basis.false_alarm_probability,
        BetweenEvents(_opportunity_plot(np.empty(0), mean, options.starts_at, basis).limits()),
        rules,
        record,
    )


def _geometric_dispersion(from_zero: Floats, filled: int) -> GeometricDispersion | None:
    """Under the geometric law S²/(ȳ(1 + ȳ)) is about normal, with mean 1 and variance 4/n."""
    if filled < diagnostics.FEWEST_VALUES:
        return None
    y = from_zero[from_zero == from_zero]
    mean = float(y.mean())
    if not mean > 0.0:
        return None
    deviation = (y - mean) / mean
    ratio = float(deviation @ deviation) / (filled - 1.0) * (mean / (1.0 + mean))
    far = abs(ratio - 1.0) * math.sqrt(filled) / 2.0
    return GeometricDispersion(ratio, 2.0 * float(scipy.special.ndtr(-far)))


def _not_geometric(found: GeometricDispersion | None) -> Caution | None:
    if found is None or found.p_value >= caution.SIGNIFICANCE:
        return None
    return Caution(
        "not-geometric",
        f"The intervals vary {found.ratio:.3g} times as much as the geometric distribution leads to (p about "
        f"{found.p_value:.1g}): the probability of an event is not the same at every opportunity, and the "
        "limits alarm at another rate than stated. Look for clusters of events, or for a change of the rate "
        "within the baseline.",
        ("data", "intervals"),
        "kaminsky-1992",
    )


def _opportunity_cautions(limits: OpportunityLimits) -> tuple[Caution, ...]:
    found = []
    if limits.panels.interval.lower is None:
        found.append(
            Caution(
                "no-lower-limit",
                f"There is no lower limit: an interval as small as {limits.starts_at} is likely enough "
                f"(probability {limits.event_probability:.2g}) to be no signal. A point beyond the limits "
                "tells of a fall of the rate alone; add run rules to see a rise, and read `performance` for "
                "what they cost.",
                ("limit_basis",),
                "kaminsky-1992",
            )
        )
    if limits.sigma_multiple is not None:
        found.append(
            Caution(
                "skewed",
                "Opportunities between events are far from symmetric: limits at a multiple of sigma alarm at "
                "another rate than on a normal statistic (`performance` states it exactly). Probability limits "
                "hold the rate that is asked for.",
                ("limit_basis",),
                "kaminsky-1992",
            )
        )
    return tuple(found)


@functools.lru_cache(1024)
def _opportunity_performance(
    rules: tuple[Rule, ...], mean: float, starts_at: int, basis: LimitBasis
) -> Performance:
    """Run lengths in events, exact under the geometric law; see :mod:`.lattice`."""
    from_zero = mean - starts_at
    lower, upper = opportunity_lines(from_zero, basis)
    sigma = math.sqrt(from_zero * (from_zero + 1.0))
    probability = 1.0 / (1.0 + from_zero)

    def run_length(factor: float) -> runlength.RunLength:
        # At a factor of 1 from the mean itself, which keeps its digits.
        each = -math.log1p(1.0 / from_zero) if factor == 1.0 else math.log1p(-factor * probability)
        law = WholeLaw(
            lambda count: -np.expm1((count + 1.0) * each),
            lambda count: np.exp((count + 1.0) * each),
            math.log(0.5) / each,
        )
        return run_law(
            rules, law, centre=from_zero, sigma=sigma, lower=0.0 if lower is None else lower, upper=upper
        ).run_length()

    in_control, method = priced(lambda: run_length(1.0))
    possible = [factor for factor in FACTORS if probability * factor < 1.0]
    return Performance(
        "interval",
        in_control,
        None,
        after_shifts(run_length, possible),
        _SHIFT_UNIT,
        None,
        f"{method}; run lengths are counted in events",
    )


def judge_opportunities(
    limits: OpportunityLimits, data: Intervals, carry: IntervalCarry | None
) -> IntervalJudgement:
    """New opportunities under frozen limits: points, signals, and the carry for the next call.

    Raises UnusableData for an interval below ``starts_at``.
    """
    _check_start(data.values, limits.starts_at)
    before = carry or NEW
    plot = _opportunity_plot(data.values, limits.mean, limits.starts_at, limits.basis)
    seen, tail = watch("interval", plot, limits.rules, tail=before.tail)
    return _judgement(seen, plot, tail, before)


def _judgement(seen: Watched, plot: Plot, tail: Tail, before: IntervalCarry) -> IntervalJudgement:
    told = _in_words(seen)
    return Judgement(
        told.verdict,
        BetweenEvents(plot.panel()),
        told.signals,
        told.found,
        IntervalCarry(before.points + len(plot.value), tail),
        too_many_signals(told),
    )


# ---------------------------------------------------------------------------------------------------
# t: time between events


@dataclass(frozen=True, slots=True)
class TimeOptions:
    """How the limits of a ``t`` chart are to be computed.

    ``mean`` and ``shape`` are known values that replace the estimates.
    """

    distribution: Distribution = "exponential"
    false_alarm_probability: float = 0.0027
    rules: tuple[Rule, ...] = ()
    mean: float | None = None
    shape: float | None = None
    exclude: tuple[Exclusion, ...] = ()


@dataclass(frozen=True, slots=True)
class TimeLimits:
    """The frozen parameters of a ``t`` chart."""

    distribution: Annotated[Distribution, "Of the times between events."]
    mean: Annotated[float, "Mean time between events, in the unit of the characteristic."]
    mean_source: Annotated[Literal["estimated", "given"], "Whether the mean is an estimate or a standard."]
    shape: Annotated[
        float,
        "Shape of the Weibull distribution: 1 is the exponential one (events at a constant rate), below 1 events "
        "come in clusters, above 1 they keep a distance.",
        POSITIVE,
    ]
    shape_source: Annotated[
        Literal["maximum-likelihood", "given", "exponential"], "Where the shape comes from."
    ]
    scale: Annotated[float, "Scale of the distribution: 63.2 % of the times are shorter.", SIGMA]
    false_alarm_probability: Annotated[float, "Of a point in control, half beyond each limit.", PROBABILITY]
    panels: Annotated[BetweenEvents[PanelLimits], "The lines of the panel."]
    rules: Annotated[tuple[Rule, ...], "The rules in force, the limit first."]
    baseline: Annotated[
        BaselineRecord | None, "What the limits were computed from; null for standards alone."
    ]


@dataclass(frozen=True, slots=True)
class ExponentialTest:
    """Likelihood ratio test of the exponential distribution within the Weibull family."""

    shape: Annotated[float, "Shape of the Weibull distribution, by maximum likelihood."]
    statistic: Annotated[float, "Twice the gain in log likelihood."]
    p_value: Annotated[
        float, "Probability of as large a statistic where times are exponential (chi-square, 1 degree)."
    ]


@dataclass(frozen=True, slots=True, eq=False)
class TimeDiagnostics:
    """What the baseline itself shows."""

    exponential: Annotated[
        ExponentialTest | None, "Null for fewer than 8 times, equal times, or where one of them is 0."
    ]
    autocorrelation: Annotated[
        diagnostics.Autocorrelation | None,
        "Of the times to the power shape/3.6, which makes them nearly normal; null where too few.",
    ]


TimeFit: TypeAlias = Fit[TimeLimits, BetweenEvents[Panel], TimeDiagnostics]


def weibull_shape(times: Floats) -> float | None:
    """The Weibull shape by maximum likelihood, from positive times (n,); ``None`` where all are equal.

    The root of Σxᵏ ln x/Σxᵏ - 1/k - mean(ln x), which rises with k: Newton steps, kept within a bracket,
    until a step is below 1e-14 of k, at most 200. Source: [cohen-1965].
    """
    log = np.log(times)
    # Measured from the largest, no power overflows.
    y = log - float(log.max())
    mean = float(y.mean())
    spread = float(np.sqrt(((y - mean) ** 2).mean()))
    if not spread > 1e-12 * max(1.0, float(np.abs(log).max())):
        return None
    low, high = 0.0, math.inf
    k = math.pi / (math.sqrt(6.0) * spread)
    for _ in range(200):
        weight = np.exp(k * y)
        weight /= float(weight.sum())
        tilted = float(weight @ y)
        slope = float(weight @ (y - tilted) ** 2) + 1.0 / k**2
        value = tilted - 1.0 / k - mean
        low, high = (k, high) if value < 0.0 else (low, k)
        after = k - value / slope
        if not low <= after <= high:
            after = 2.0 * k if high == math.inf else 0.5 * (low + high)
        step, k = abs(after - k), after
        if step <= 1e-14 * k:
            break
    return k


def weibull_scale(times: Floats, shape: float) -> float:
    """The Weibull scale by maximum likelihood where the shape is known: (mean of xᵏ)^(1/k)."""
    if shape == 1.0:
        return float(times.mean())
    largest = float(times.max())
    if not largest > 0.0:
        return 0.0
    return largest * float(((times / largest) ** shape).mean()) ** (1.0 / shape)


def _exponential_test(times: Floats, shape: float | None) -> ExponentialTest | None:
    """Of positive times with their fitted ``shape``."""
    n = len(times)
    if shape is None or n < diagnostics.FEWEST_VALUES:
        return None
    mean = float(times.mean())
    log_scale = math.log(weibull_scale(times, shape)) - math.log(mean)
    logs = float(np.log(times).sum()) - n * math.log(mean)
    gain = n * math.log(shape) - n * shape * log_scale + (shape - 1.0) * logs
    statistic = max(2.0 * gain, 0.0)
    return ExponentialTest(shape, statistic, float(scipy.special.chdtrc(1, statistic)))


def _scores(times: Floats, scale: float, shape: float) -> Floats:
    """The standard normal value with as much probability below it as lies below each time."""
    with np.errstate(divide="ignore", over="ignore"):
        hazard = np.exp(np.minimum(shape * np.log(times / scale), 690.0))
    below = scipy.special.ndtri(-np.expm1(-hazard))
    above = -scipy.special.ndtri_exp(-np.maximum(hazard, 0.5))
    nearer = np.where(hazard < math.log(2.0), below, above)
    return np.clip(nearer, -_FURTHEST_SCORE, _FURTHEST_SCORE)


def time_lines(scale: float, shape: float, false_alarm: float) -> tuple[float, float, float]:
    """Lower limit, median and upper limit of a Weibull time, half of ``false_alarm`` beyond each limit."""
    tail = false_alarm / 2.0
    hazards = (-math.log1p(-tail), math.log(2.0), -math.log(tail))
    lower, median, upper = (scale * hazard ** (1.0 / shape) for hazard in hazards)
    return lower, median, upper


def _time_plot(values: Floats, limits: TimeLimits) -> Plot:
    """What is shown; the rules look at the scores."""
    lines = limits.panels.interval
    assert lines.centre is not None
    return Plot(values, lines.centre, 1.0, lines.lower, lines.upper, floor=0.0)


def _watch_times(
    values: Floats, limits: TimeLimits, tail: Tail | None = None, kept: Booleans | None = None
) -> tuple[Watched, Tail]:
    z = _scores(values, limits.scale, limits.shape)
    if kept is not None:
        z = np.where(kept, z, np.nan)
    reach = normal_multiple(limits.false_alarm_probability / 2.0)
    track = Track(value=z, z=z, sigma=np.float64(1.0), lower=np.float64(-reach), upper=np.float64(reach))
    return watch_track("interval", track, limits.rules, tail=tail)


def fit_times(data: Intervals | None, options: TimeOptions) -> TimeFit:
    """Limits of a ``t`` chart from the times between events, or from standards.

    Exponential: the mean is that of the times. Weibull: shape and scale by maximum likelihood, or the
    scale alone where the shape is given; ``mean = scale Γ(1 + 1/shape)``.

    Raises UnusableData for fewer than two times, times that are all 0 or (for a fitted shape) all equal,
    and for a 0 among the times a shape is fitted to; UnusableParameter for options that do not fit.
    Source: [xie-goh-ranjan-2002], [cohen-1965].
    """
    rules = watched(options.rules)
    _check_time_options(options, data is None)
    exponential = options.distribution == "exponential"
    if data is None:
        assert options.mean is not None
        shape = 1.0 if exponential or options.shape is None else options.shape
        limits = _time_limits(options, rules, shape, None, None)
        return Fit(limits, None, None, _time_performance(rules, shape, options.false_alarm_probability), ())
    kept, used, filled = _kept(data, options.exclude)
    times = used[used == used]
    if filled < 2 and (options.mean is None or not (exponential or options.shape is not None)):
        raise _too_few(filled)
    zeros = int(np.count_nonzero(times == 0.0))
    fitted = None
    if filled and not zeros:
        fitted = weibull_shape(times)
    if exponential:
        shape = 1.0
    elif options.shape is not None:
        shape = options.shape
    else:
        shape = _fitted(fitted, used, zeros)
    scale = weibull_scale(times, shape) if options.mean is None else None
    limits = _time_limits(options, rules, shape, scale, BaselineRecord(filled, filled, options.exclude))
    plot = _time_plot(data.values, limits)
    seen, _ = _watch_times(data.values, limits, kept=kept)
    seen = _in_words(seen)
    found = TimeDiagnostics(_exponential_test(times, fitted), _correlation(used, shape) if filled else None)
    return Fit(
        limits,
        Baseline(seen.verdict, BetweenEvents(plot.panel()), seen.signals, seen.found),
        found,
        _time_performance(rules, shape, options.false_alarm_probability),
        caution.collect(
            _few(filled),
            _not_exponential(found.exponential) if exponential else None,
            caution.autocorrelated(found.autocorrelation),
            _zeros(zeros),
            _rounded(times),
            *too_many_signals(seen),
        ),
    )


def _check_time_options(options: TimeOptions, alone: bool) -> None:
    faults = []
    if alone and options.mean is None:
        faults.append(
            Fault(
                "data-missing",
                "Without baseline data the mean time between events must be given as a standard.",
                ("standards", "mean"),
            )
        )
    if options.distribution == "exponential" and options.shape is not None:
        faults.append(
            Fault(
                "not-of-this-distribution",
                "The exponential distribution has no shape; ask for the distribution `weibull`, or leave the "
                "shape out.",
                ("standards", "shape"),
            )
        )
    if options.distribution == "weibull" and options.mean is not None and options.shape is None:
        faults.append(
            Fault(
                "shape-missing",
                "A known mean of a Weibull distribution needs its shape too.",
                ("standards", "shape"),
            )
        )
    if alone and options.exclude:
        faults.append(Fault("no-such-point", "There is no baseline to exclude points from.", ("exclude",)))
    if faults:
        raise UnusableParameter(*faults)


def _fitted(shape: float | None, used: Floats, zeros: int) -> float:
    if zeros:
        raise UnusableData(
            *(
                Fault(
                    "zero-time",
                    "A Weibull shape cannot be fitted to a time of 0. Record times more finely, give the shape "
                    "as a standard, or use the exponential distribution.",
                    ("data", "intervals", at),
                )
                for at in np.flatnonzero(used == 0.0)[:100].tolist()
            )
        )
    if shape is None:
        raise UnusableData.of(
            "no-variation",
            "All times are equal, so no Weibull shape can be fitted; give it as a standard.",
            "data",
            "intervals",
        )
    if not LEAST_SHAPE <= shape <= MOST_SHAPE:
        raise UnusableData.of(
            "out-of-scale",
            f"The Weibull shape that fits these times, {shape:.3g}, is outside {LEAST_SHAPE:g} to {MOST_SHAPE:g}: "
            "they do not look like times between events.",
            "data",
            "intervals",
        )
    return shape


def _time_limits(
    options: TimeOptions,
    rules: tuple[Rule, ...],
    shape: float,
    scale: float | None,
    record: BaselineRecord | None,
) -> TimeLimits:
    """With the scale found, or that of the mean given."""
    relative = float(scipy.special.gamma(1.0 + 1.0 / shape))
    if scale is None:
        assert options.mean is not None
        mean, scale = options.mean, options.mean / relative
    else:
        mean = scale if shape == 1.0 else scale * relative
    if mean == 0.0:
        raise UnusableData.of(
            "no-variation", "Every time is 0, so there is nothing to set limits from.", "data", "intervals"
        )
    lower, median, upper = time_lines(scale, shape, options.false_alarm_probability)
    if not (lower > 0.0 and math.isfinite(upper) and math.isfinite(mean)):
        raise UnusableData.of("out-of-scale", "The spread of the times cannot be represented.", "data")
    if options.distribution == "exponential":
        source: Literal["maximum-likelihood", "given", "exponential"] = "exponential"
    else:
        source = "maximum-likelihood" if options.shape is None else "given"
    return TimeLimits(
        options.distribution,
        mean,
        "estimated" if options.mean is None else "given",
        shape,
        source,
        scale,
        options.false_alarm_probability,
        BetweenEvents(PanelLimits(median, lower, upper)),
        rules,
        record,
    )


def _not_exponential(found: ExponentialTest | None) -> Caution | None:
    if found is None or found.p_value >= caution.SIGNIFICANCE:
        return None
    how = "in clusters" if found.shape < 1.0 else "more evenly than chance alone"
    return Caution(
        "not-exponential",
        f"The times do not follow the exponential distribution (Weibull shape {found.shape:.3g}, p = "
        f"{found.p_value:.1g}): events come {how}, or their rate changed within the baseline. Look for a change "
        "first; if the process is so by nature, use the distribution `weibull`.",
        ("distribution",),
        "cohen-1965",
    )


def _zeros(zeros: int) -> Caution | None:
    if not zeros:
        return None
    return Caution(
        "zero-times",
        f"{zeros} {'time is' if zeros == 1 else 'times are'} 0. Such a time lies below any lower limit; where "
        "times are only rounded to 0, record them more finely.",
        ("data", "intervals"),
        "common practice",
    )


def _rounded(times: Floats) -> Caution | None:
    distinct = len(np.unique(times))
    if len(times) <= caution.TIED * distinct:
        return None
    return Caution(
        "rounded-times",
        f"The {len(times)} times hold only {distinct} different values. Limits suppose times that are recorded "
        "finely; where they are whole days or shifts, chart the opportunities between events with the g chart.",
        ("data", "intervals"),
        "common practice",
    )


@functools.lru_cache(1024)
def _time_performance(rules: tuple[Rule, ...], shape: float, false_alarm: float) -> Performance:
    """Run lengths in events, exact; a factor on the rate divides the times by it."""
    reach = normal_multiple(false_alarm / 2.0)

    def run_length(factor: float) -> runlength.RunLength:
        # A hazard of 1e299 is as good as any beyond it.
        growth = math.exp(min(shape * math.log(factor), 680.0))

        def between(cuts: Floats) -> Floats:
            below, above = scipy.special.log_ndtr(cuts), scipy.special.log_ndtr(-cuts)
            # The cumulative hazard at each line, from the tail in which it keeps its digits.
            calm = np.where(cuts < 0.0, -np.log1p(-np.exp(below)), -above)
            hazard = np.concatenate(([0.0], calm * growth, [math.inf]))
            cdf, sf = -np.expm1(-hazard), np.exp(-hazard)
            return np.where(cdf[1:] < 0.5, cdf[1:] - cdf[:-1], sf[:-1] - sf[1:])

        return continuous_law(rules, between=between, lower=-reach, upper=reach).run_length()

    in_control, method = priced(lambda: run_length(1.0))
    return Performance(
        "interval",
        in_control,
        None,
        after_shifts(run_length, FACTORS),
        _SHIFT_UNIT,
        None,
        f"{method}; run lengths are counted in events",
    )


def judge_times(limits: TimeLimits, data: Intervals, carry: IntervalCarry | None) -> IntervalJudgement:
    """New times under frozen limits: points, signals, and the carry for the next call."""
    before = carry or NEW
    seen, tail = _watch_times(data.values, limits, before.tail)
    return _judgement(seen, _time_plot(data.values, limits), tail, before)


CHARTS = (
    Chart(
        name="g",
        title="Opportunities between events",
        purpose="Watches how rare an event is, by the number of opportunities from one event to the next.",
        takes="Opportunities between successive events, in the order of the events.",
        beware="A small interval means that events come faster; a single one hardly proves it. Use it where events "
        "are too rare for the p chart.",
        panels=("interval",),
        references=("kaminsky-1992",),
        fit=fit_opportunities,
        judge=judge_opportunities,
        limits=OpportunityLimits,
        plotted=BetweenEvents[Panel],
        carry=IntervalCarry,
        diagnostics=OpportunityDiagnostics,
    ),
    Chart(
        name="t",
        title="Time between events",
        purpose="Watches how rare an event is, by the time from one event to the next.",
        takes="Times between successive events, in the order of the events.",
        beware="A small time means that events come faster; a single one hardly proves it: a modest rise of the rate "
        "is found later than a false alarm comes (see `performance`), and run rules help.",
        panels=("interval",),
        references=("xie-goh-ranjan-2002", "nelson-1994", "cohen-1965"),
        fit=fit_times,
        judge=judge_times,
        limits=TimeLimits,
        plotted=BetweenEvents[Panel],
        carry=IntervalCarry,
        diagnostics=TimeDiagnostics,
    ),
)
