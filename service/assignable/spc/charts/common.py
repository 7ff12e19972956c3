"""What every chart shares: options, panels, signals in order, what is frozen and what is carried.

A chart turns its data into one :class:`Plot` a panel. From a plot come the panel of the answer and the
track that the rules look at, so that a fit and a judgement walk the same road.

Docstrings of the fields stand in ``Annotated``: the contract takes its descriptions from here.
"""

from __future__ import annotations

import functools
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Annotated, Any, Generic, Literal, TypeVar

import numpy as np
import scipy

from ..baseline.estimation import EstimatedPerformance
from ..cautions import Caution
from ..data import Booleans, Floats, Integers
from ..errors import Fault, UnusableParameter
from ..rules import Rule, Signal, Tail, Track, detect
from ..rules import signals as in_words

MOST_SIGNALS = 10_000
"""Signals told one by one in an answer; beyond it they are counted."""

Verdict = Literal["in-control", "signal"]
Q = TypeVar("Q")
L = TypeVar("L")
D = TypeVar("D")
C = TypeVar("C")


@dataclass(frozen=True, slots=True)
class Exclusion:
    """A baseline point that is left out of the estimates for a stated reason."""

    index: Annotated[int, "Position of the point in the baseline, from 0."]
    reason: Annotated[str, "Why it is left out."]


@dataclass(frozen=True, slots=True)
class BaselineRecord:
    """What the limits were computed from; it stays with them."""

    points: Annotated[int, "Points the estimates rest on."]
    values: Annotated[int, "Values, or inspected samples, the estimates rest on."]
    excluded: Annotated[tuple[Exclusion, ...], "Points left out, each with its reason."]


@dataclass(frozen=True, slots=True)
class LimitBasis:
    """How far from the centre the limits lie."""

    limit_basis: Annotated[
        Literal["sigma", "probability"],
        "`sigma`: a multiple of the standard deviation of the plotted statistic. `probability`: equal tails "
        "of its exact distribution.",
    ] = "sigma"
    sigma_multiple: Annotated[float | None, "The multiple, under `sigma`."] = 3.0
    false_alarm_probability: Annotated[
        float | None, "Probability that a point in control lies outside the limits, under `probability`."
    ] = None

    @property
    def multiple(self) -> float:
        """The multiple for a normal statistic."""
        if self.sigma_multiple is not None:
            return self.sigma_multiple
        return normal_multiple(self.tail)

    @property
    def tail(self) -> float:
        """The probability beyond each limit, under ``probability``."""
        return (self.false_alarm_probability or 0.0) / 2


AT_THREE_SIGMA = LimitBasis()


@functools.lru_cache(256)
def normal_multiple(tail: float) -> float:
    """The standard normal quantile with ``tail`` above it."""
    return -float(scipy.special.ndtri(tail))


@dataclass(frozen=True, slots=True)
class PanelLimits:
    """The frozen lines of a panel, for the usual size; ``null`` where there is none."""

    centre: Annotated[float | None, "Centre line."]
    lower: Annotated[
        float | None, "Lower limit; null where there is none, or where it follows each point's size."
    ]
    upper: Annotated[
        float | None, "Upper limit; null where there is none, or where it follows each point's size."
    ]


FOLLOWING = PanelLimits(None, None, None)


@dataclass(frozen=True, slots=True, eq=False)
class Panel:
    """The plotted points of one statistic with their lines. Gaps are left out: ``index`` says which are here.

    A limit that does not exist is the natural bound here: nothing can lie beyond it.
    """

    index: Annotated[Integers, "Position of each point in the request, from 0."]
    value: Annotated[Floats, "The plotted statistic."]
    centre: Annotated[Floats, "Centre line at each point."]
    lower: Annotated[Floats, "Lower limit at each point; the natural bound where there is none."]
    upper: Annotated[Floats, "Upper limit at each point; the natural bound where there is none."]


@dataclass(frozen=True, slots=True, eq=False)
class Plot:
    """A panel before it is judged: (m,) arrays with NaN at gaps; lines are scalars, or (m,) where they vary.

    ``lower`` and ``upper`` are ``None`` where no limit exists, or arrays that hold ``floor`` and
    ``ceiling`` at such points. ``sigma`` is the standard deviation of each plotted value.
    """

    value: Floats
    centre: float | Floats
    sigma: float | Floats
    lower: float | Floats | None
    upper: float | Floats | None
    floor: float = -np.inf
    ceiling: float = np.inf

    @property
    def varies(self) -> bool:
        """Whether the lines differ from point to point."""
        return isinstance(self.lower, np.ndarray) or isinstance(self.upper, np.ndarray)

    def limits(self) -> PanelLimits:
        """The frozen lines."""
        if self.varies or isinstance(self.centre, np.ndarray):
            return FOLLOWING
        return PanelLimits(self.centre, self.lower, self.upper)  # type: ignore[arg-type]

    def track(self, kept: Booleans | None = None) -> Track:
        """What the rules look at; points not ``kept`` are gaps to them."""
        value = self.value if kept is None else np.where(kept, self.value, np.nan)
        return Track(
            value=value,
            z=self._standardised(value),
            sigma=np.asarray(self.sigma),
            lower=np.asarray(self.floor if self.lower is None else self.lower),
            upper=np.asarray(self.ceiling if self.upper is None else self.upper),
        )

    def _standardised(self, value: Floats) -> Floats:
        """Distances from the centre in sigma, kept within what a document can hold."""
        sigma = self.sigma
        if (sigma if isinstance(sigma, float) else float(np.min(sigma, initial=1.0))) > 1e-7:
            return (value - self.centre) / sigma
        with np.errstate(over="ignore"):
            return np.clip((value - self.centre) / sigma, -1e300, 1e300)

    def beyond(self) -> Booleans:
        """(m,) bool: values strictly beyond a limit; a gap is not."""
        above = False if self.upper is None else self.value > self.upper
        below = False if self.lower is None else self.value < self.lower
        return np.logical_or(above, below)

    def panel(self) -> Panel:
        """The panel of the answer; lines that do not vary are one number seen at every point."""
        index = (self.value == self.value).nonzero()[0]
        whole = len(index) == len(self.value)
        shape = index.shape

        def line(at: float | Floats | None, bound: float) -> Floats:
            if isinstance(at, np.ndarray):
                return at if whole else at[index]
            # np.broadcast_to does the same at ten times the cost, which small requests would feel.
            return np.ndarray(shape, np.float64, np.array(bound if at is None else at), 0, (0,))

        return Panel(
            index,
            self.value if whole else self.value[index],
            line(self.centre, np.nan),
            line(self.lower, self.floor),
            line(self.upper, self.ceiling),
        )


@dataclass(frozen=True, slots=True)
class Watched:
    """Signals of some panels, in the order of the points, and how many there are in all."""

    signals: tuple[Signal, ...] = ()
    found: int = 0

    @property
    def verdict(self) -> Verdict:
        """``signal`` where any signal asks for action."""
        return "signal" if any(signal.severity == "action" for signal in self.signals) else "in-control"

    def with_(self, other: Watched) -> Watched:
        """Both together, in the order of the points."""
        if not other.found:
            return self
        if not self.found:
            return other
        both = sorted((*self.signals, *other.signals), key=lambda signal: signal.index)
        return Watched(tuple(both[:MOST_SIGNALS]), self.found + other.found)


def watch(
    name: str,
    plot: Plot,
    rules: Sequence[Rule] = (),
    *,
    tail: Tail | None = None,
    kept: Booleans | None = None,
) -> tuple[Watched, Tail]:
    """The signals of one panel under its limits and ``rules``, and the tail that the next call needs."""
    return watch_track(name, plot.track(kept), rules, tail=tail)


def watch_track(
    name: str, track: Track, rules: Sequence[Rule] = (), *, tail: Tail | None = None
) -> tuple[Watched, Tail]:
    """The same for a panel whose scores are not those of its plot."""
    detection = detect(rules, track, tail)
    if not len(detection):
        return Watched(), detection.tail
    return Watched(in_words(detection, panel=name, most=MOST_SIGNALS), len(detection)), detection.tail


@dataclass(frozen=True, slots=True, eq=False)
class Baseline(Generic[Q]):
    """The baseline judged by its own limits."""

    verdict: Annotated[Verdict, "`signal` where any signal asks for action."]
    panels: Annotated[Q, "The plotted points."]
    signals: Annotated[tuple[Signal, ...], "In the order of the points."]
    signals_found: Annotated[int, "How many signals there are, told or not."]
    details: Annotated[object | None, "What this chart tells besides."] = None


@dataclass(frozen=True, slots=True)
class Standards:
    """Values known in advance, which replace the estimates (the "standard given" case)."""

    mean: Annotated[float | None, "Known process mean, in the unit of the characteristic."] = None
    sigma: Annotated[float | None, "Known within-subgroup standard deviation, in the same unit."] = None


NO_STANDARDS = Standards()


@dataclass(frozen=True, slots=True)
class ShiftPerformance:
    """How soon the chart signals after a shift."""

    shift: Annotated[float, "Size of the shift, in the unit that `shift_unit` names."]
    arl: Annotated[float | None, "Average number of points until the signal; null where it is beyond 1e15."]


@dataclass(frozen=True, slots=True)
class Performance:
    """What the limits and rules cost and buy, were the estimates exact."""

    panel: Annotated[str, "The panel these figures speak of: run rules watch this one alone."]
    in_control_arl: Annotated[
        float | None,
        "Average number of points between false alarms of this panel; null where it is beyond 1e15.",
    ]
    spread_false_alarm_probability: Annotated[
        float | None,
        "Probability that a point in control lies outside the limits of the spread panel; null where the chart "
        "has none, or where it is not known exactly.",
    ]
    shifts: Annotated[tuple[ShiftPerformance, ...], "Run lengths after a lasting shift of the location."]
    shift_unit: Annotated[str, "What a shift of 1 means."]
    subgroup_size: Annotated[float | None, "The size these figures are for."]
    method: Annotated[str, "How the run lengths were computed."]
    estimated: Annotated[
        EstimatedPerformance | None,
        "What limits from estimates deliver; null where nothing was estimated, or it is not known for the chart.",
    ] = None


@dataclass(frozen=True, slots=True, eq=False)
class Fit(Generic[L, Q, D]):
    """Limits of a chart with the evidence for them."""

    limits: L
    baseline: Baseline[Q] | None
    diagnostics: D | None
    performance: Performance
    cautions: tuple[Caution, ...]


@dataclass(frozen=True, slots=True, eq=False)
class Judgement(Generic[Q, C]):
    """New data judged by frozen limits; ``details`` is what some charts tell besides."""

    verdict: Verdict
    panels: Q
    signals: tuple[Signal, ...]
    signals_found: int
    carry: C
    cautions: tuple[Caution, ...]
    details: Any = None


def exclusion_mask(points: int, exclude: Sequence[Exclusion]) -> Booleans | None:
    """(m,) bool, False at excluded points; ``None`` where nothing is excluded.

    Raises UnusableParameter for a position outside the data or named twice.
    """
    if not exclude:
        return None
    faults = []
    seen: set[int] = set()
    for at, exclusion in enumerate(exclude):
        if not 0 <= exclusion.index < points:
            faults.append(
                Fault(
                    "no-such-point",
                    f"There is no point {exclusion.index}: the data has points 0 to {points - 1}.",
                    ("exclude", at, "index"),
                )
            )
        elif exclusion.index in seen:
            faults.append(
                Fault(
                    "excluded-twice", f"Point {exclusion.index} is excluded twice.", ("exclude", at, "index")
                )
            )
        seen.add(exclusion.index)
    if faults:
        raise UnusableParameter(*faults)
    kept = np.ones(points, dtype=bool)
    kept[list(seen)] = False
    return kept


def standards_alone(given: Standards, exclude: Sequence[Exclusion]) -> list[Fault]:
    """The faults of a fit without data, which needs both standards and can exclude nothing."""
    faults = [
        Fault(
            "data-missing",
            "Without baseline data both standards must be given: the mean and the sigma.",
            ("standards", name),
        )
        for name, value in (("mean", given.mean), ("sigma", given.sigma))
        if value is None
    ]
    if exclude:
        faults.append(Fault("no-such-point", "There is no baseline to exclude points from.", ("exclude",)))
    return faults


def baseline_alone(guarantee: object, joint: object, screening: object) -> list[Fault]:
    """The faults of a fit without data that asks for what needs a baseline: each ``None`` where it does not."""
    return [
        Fault("data-missing", "There is no baseline that this could be about; leave it out.", (name,))
        for name, asked in (
            ("guarantee", guarantee),
            ("joint_false_alarm_probability", joint),
            ("screening", screening),
        )
        if asked is not None
    ]


def too_many_signals(watched: Watched) -> tuple[Caution, ...]:
    """The caution that not every signal is told, where that is so."""
    if watched.found <= MOST_SIGNALS:
        return ()
    return (
        Caution(
            "signals-cut",
            f"{watched.found} signals were found; the first {MOST_SIGNALS} are told one by one.",
            ("data",),
            "common practice",
        ),
    )
