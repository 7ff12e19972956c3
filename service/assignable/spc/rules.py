"""Rules as data: what a rule is, the published sets of them, and the signals they give.

Five forms cover the published sets. Their semantics, the same here and in the run lengths:

* *Beyond* is strict. A value within ``TOLERANCE`` of that point's own sigma of a line lies on the
  line, so decimal noise never decides. *Within* is not beyond: a point on the line is within it.
* ``zone``: at least k of the last m points beyond z on one side. With z = 0, a run on one side; a
  point on the centre line is on neither side. ``mixture``: the same on either side together.
  Both signal only on a point that is itself beyond.
* ``stratification``: m points in a row within z. ``trend``: m points in a row, each above (or each
  below) the one before it. ``alternation``: m points in a row, alternately up and down. Two
  neighbours within the tolerance of each other are a tie, which ends a trend and an alternation.
* A gap (NaN) ends every run and window: a point before the gap never counts after it.
* A window may be partial: two points beyond 2 among the first two signal a 2-of-3 rule.
* After a signal the window goes on: a run that lasts signals at every further point.
* One point beyond 3 is the chart's own control limit, whatever multiple or probability the chart's
  limits have. It is always watched, whether or not a list names it.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from functools import lru_cache
from itertools import pairwise
from types import MappingProxyType
from typing import Annotated, Literal

import numpy as np
from numpy.typing import NDArray

from .data import Booleans, Floats, Integers
from .errors import DocumentMismatch, UnusableParameter

Form = Literal["zone", "mixture", "stratification", "trend", "alternation"]
Severity = Literal["action", "warning"]

TOLERANCE = 1e-10
"""How near to a line, or to its neighbour, a point counts as equal to it, in its own sigma."""

LONGEST_WINDOW = 50
FARTHEST_DISTANCE = 6.0
MOST_RULES = 20

_FORMS = ("zone", "mixture", "stratification", "trend", "alternation")
_ORDER_FORMS = ("trend", "alternation")
_FEWEST_POINTS = {"zone": 1, "mixture": 1, "stratification": 2, "trend": 3, "alternation": 3}
# Below this many new points, plain Python outruns the fixed cost of the array calls.
_FEW = 10


@dataclass(frozen=True, slots=True)
class Rule:
    """One rule; see the module for the exact meaning of each form.

    Raises ``UnusableParameter`` (where: ``points``, ``window``, ``distance``, ``severity``).
    """

    form: Annotated[Form, "What the rule looks for: one of five forms."]
    points: Annotated[int, "Points that must show the pattern."]
    window: Annotated[int, "Successive points looked at; as many as points but for zone and mixture."]
    distance: Annotated[
        float | None,
        "In sigma of each point: beyond it for zone and mixture, within it for stratification; null otherwise.",
    ] = None
    severity: Annotated[Severity, "Whether it asks for action; a warning leaves the verdict as it is."] = (
        "action"
    )

    def __post_init__(self) -> None:
        form, k, m, z = self.form, self.points, self.window, self.distance
        if form not in _FORMS:
            raise UnusableParameter.of(
                "unknown-form",
                f"There is no rule of the form {form!r}; there are {', '.join(_FORMS)}.",
                "form",
            )
        if self.severity not in ("action", "warning"):
            raise UnusableParameter.of(
                "unknown-severity", "The severity of a rule is action or warning.", "severity"
            )
        if not 1 <= m <= LONGEST_WINDOW:
            raise UnusableParameter.of(
                "window-out-of-range", f"A rule looks at 1 to {LONGEST_WINDOW} points, not {m}.", "window"
            )
        if not 1 <= k <= m:
            raise UnusableParameter.of(
                "points-out-of-range", f"A rule over {m} points needs 1 to {m} of them, not {k}.", "points"
            )
        if k < _FEWEST_POINTS[form]:
            raise UnusableParameter.of(
                "points-out-of-range",
                f"A rule of the form {form} needs at least {_FEWEST_POINTS[form]} points.",
                "points",
            )
        if k != m and form not in ("zone", "mixture"):
            raise UnusableParameter.of(
                "points-not-window",
                f"A rule of the form {form} is about points in a row: its points and its window are equal.",
                "points",
            )
        if form in _ORDER_FORMS:
            if z is not None:
                raise UnusableParameter.of(
                    "distance-not-used", f"A rule of the form {form} has no distance.", "distance"
                )
        else:
            if z is None:
                raise UnusableParameter.of(
                    "distance-missing", f"A rule of the form {form} needs a distance, in sigma.", "distance"
                )
            if not 0.0 <= z <= FARTHEST_DISTANCE or (z == 0.0 and form != "zone"):
                least = "0" if form == "zone" else "above 0"
                raise UnusableParameter.of(
                    "distance-out-of-range",
                    f"The distance of a {form} rule is {least} to {FARTHEST_DISTANCE:g} sigma, not {z:g}.",
                    "distance",
                )
            object.__setattr__(self, "distance", float(z) + 0.0)
        if self.is_limit and self.severity != "action":
            raise UnusableParameter.of(
                "limit-is-action",
                "One point beyond 3 sigma is the control limit itself, which always calls for action; "
                "a warning limit lies at another distance.",
                "severity",
            )

    @property
    def is_limit(self) -> bool:
        """Whether this is the chart's own control limit."""
        return self.form == "zone" and self.window == 1 and self.distance == 3.0

    @property
    def code(self) -> str:
        """A stable name: ``limit``, ``zone-2-of-3-beyond-2``, ``trend-6`` ..."""
        if self.is_limit:
            return "limit"
        if self.form in _ORDER_FORMS:
            return f"{self.form}-{self.window}"
        if self.form == "stratification":
            return f"stratification-{self.window}-within-{self.distance:.10g}"
        return f"{self.form}-{self.points}-of-{self.window}-beyond-{self.distance:.10g}"

    @property
    def description(self) -> str:
        """The rule in one plain sentence."""
        k, m = self.points, self.window
        if self.is_limit:
            return "A point lies beyond a control limit."
        if self.form == "trend":
            return f"{m} points in a row steadily rise, or steadily fall."
        if self.form == "alternation":
            return f"{m} points in a row go alternately up and down."
        if self.form == "stratification":
            return f"{m} points in a row lie within {self.distance:g} sigma of the centre line."
        lie = "lies" if k == 1 else "lie"
        who = "A point" if m == 1 else f"{k} points in a row" if k == m else f"{k} of {m} successive points"
        far = f"more than {self.distance:g} sigma from the centre line" if self.distance else ""
        if self.form == "mixture":
            return f"{who} {lie} {far}, on either side."
        if not far:
            return f"{who} {lie} on one side of the centre line."
        return f"{who} {lie} {far}." if k == 1 else f"{who} {lie} {far}, on the same side."


LIMIT = Rule("zone", 1, 1, 3.0)


@dataclass(frozen=True, slots=True)
class PublishedSet:
    """A set of rules as published: its title, the key of its source, the rules with the limit first."""

    title: str
    source: str
    rules: tuple[Rule, ...]


PUBLISHED: Mapping[str, PublishedSet] = MappingProxyType(
    {
        "shewhart-1931": PublishedSet("Shewhart 1931: the limits alone", "shewhart-1931", (LIMIT,)),
        "western-electric-1956": PublishedSet(
            "Western Electric 1956",
            "western-electric-1956",
            (LIMIT, Rule("zone", 2, 3, 2.0), Rule("zone", 4, 5, 1.0), Rule("zone", 8, 8, 0.0)),
        ),
        "nelson-1984": PublishedSet(
            "Nelson 1984",
            "nelson-1984",
            (
                LIMIT,
                Rule("zone", 9, 9, 0.0),
                Rule("trend", 6, 6),
                Rule("alternation", 14, 14),
                Rule("zone", 2, 3, 2.0),
                Rule("zone", 4, 5, 1.0),
                Rule("stratification", 15, 15, 1.0),
                Rule("mixture", 8, 8, 1.0),
            ),
        ),
    }
)
"""The published sets, by author and year."""


@lru_cache(maxsize=256)
def _watched(rules: tuple[Rule, ...]) -> tuple[Rule, ...]:
    if len(rules) > MOST_RULES:
        raise UnusableParameter.of(
            "too-many-rules", f"At most {MOST_RULES} rules are watched at once, not {len(rules)}.", "rules"
        )
    kept = {LIMIT.code: LIMIT}
    for rule in rules:
        if rule.code not in kept or rule.severity == "action":
            kept[rule.code] = rule
    return tuple(kept.values())


def watched(rules: Sequence[Rule]) -> tuple[Rule, ...]:
    """The rules in force: the limit first, then the others in their order, each once.

    A rule listed both as warning and as action is an action. Raises ``UnusableParameter`` when the
    list is longer than ``MOST_RULES``.
    """
    return _watched(tuple(rules))


def longest_window(rules: Sequence[Rule]) -> int:
    """The most points that a rule of the list looks at."""
    return max((rule.window for rule in rules), default=1)


@dataclass(frozen=True, slots=True, eq=False)
class Track:
    """What rules look at: m points in time order, NaN in ``value`` and ``z`` at a gap.

    value: (m,), as plotted; z: (m,), signed distance from the centre line in that point's own
    sigma; sigma: (m,) or a scalar, of the plotted point; lower, upper: (m,) or scalars, the
    control limits, infinite (or the natural bound) where there is none.
    """

    value: Floats
    z: Floats
    sigma: Floats | float
    lower: Floats | float
    upper: Floats | float


@dataclass(frozen=True, slots=True)
class Tail:
    """What the next call needs: the last points since the last gap, fewer than the longest window."""

    value: Annotated[tuple[float, ...], "As plotted, in the unit of the chart."] = ()
    z: Annotated[tuple[float, ...], "Signed distances from the centre line, in each point's own sigma."] = ()
    sigma: Annotated[tuple[float, ...], "Of each point, in the unit of the chart."] = ()

    def __post_init__(self) -> None:
        if not len(self.value) == len(self.z) == len(self.sigma) < LONGEST_WINDOW:
            raise DocumentMismatch.of(
                "carry-not-usable",
                "The points that the carry remembers do not fit each other. Send the carry exactly as it was "
                "received, or leave it out to start afresh.",
                "carry",
            )


@dataclass(frozen=True, slots=True, eq=False)
class Detection:
    """The signals of one call, in columns, sorted by index and then by rule.

    rules: those in force, the limit first; rule: position in ``rules``; index: the point, 0 for
    the first of this call; side: 1 above or rising, -1 below or falling, 0 where there is no side;
    tail: for the next call.
    """

    rules: tuple[Rule, ...]
    rule: NDArray[np.int64]
    index: Integers
    side: NDArray[np.int8]
    tail: Tail
    _z: Floats | Sequence[float]  # of the tail given and of this call's points together
    _before: int  # how many of them came with the tail

    def __len__(self) -> int:
        return len(self.index)

    @property
    def actions(self) -> int:
        """How many of the signals call for action."""
        acts = [position for position, rule in enumerate(self.rules) if rule.severity == "action"]
        if len(acts) == len(self.rules):
            return len(self.index)
        return int(np.isin(self.rule, acts).sum())

    def took_part(self, hit: int) -> tuple[int, ...]:
        """The points that make the signal; a negative index reaches back into earlier calls."""
        return self._look_back(hit)[0]

    def _look_back(self, hit: int) -> tuple[tuple[int, ...], int]:
        """The points that make a signal, and how many points its window held."""
        rule = self.rules[int(self.rule[hit])]
        end = int(self.index[hit]) + self._before + 1
        start = max(0, end - rule.window)
        z = [float(each) for each in self._z[start:end]]
        for position in range(len(z) - 1, -1, -1):
            if z[position] != z[position]:
                start += position + 1
                z = z[position + 1 :]
                break
        first = start - self._before
        if rule.window == 1 or rule.form not in ("zone", "mixture"):
            return tuple(range(first, first + len(z))), len(z)
        assert rule.distance is not None
        edge = rule.distance + TOLERANCE
        side = int(self.side[hit])
        signed = [abs(each) for each in z] if side == 0 else [side * each for each in z]
        return tuple(first + p for p, each in enumerate(signed) if each > edge), len(z)


def detect(rules: Sequence[Rule], track: Track, tail: Tail | None = None) -> Detection:
    """Every signal of the rules, and of the limits, among the points of a track.

    ``tail`` is the ``tail`` of the detection before this one (``None`` at the start): judging
    points in one call, or in any split with the tail passed on, gives identical signals.
    Raises ``UnusableParameter`` when there are too many rules. [western-electric-1956],
    [nelson-1984]
    """
    in_force = _watched(tuple(rules))
    road = _detect_few if len(track.z) <= _FEW else _detect_many
    return road(in_force, track, tail if tail is not None and tail.z else None)


def _column(values: Floats | float, m: int) -> list[float]:
    if isinstance(values, np.ndarray) and values.ndim:
        column: list[float] = values.tolist()
        return column
    return [float(values)] * m


def _detection(
    rules: tuple[Rule, ...], hits: list[tuple[int, int, int]], tail: Tail, z: Sequence[float], before: int
) -> Detection:
    if not hits:
        return Detection(rules, _NONE, _NONE, _NO_SIDE, tail, z, before)
    table = np.array(hits, dtype=np.int64)
    return Detection(rules, table[:, 1], table[:, 0], table[:, 2].astype(np.int8), tail, z, before)


_NONE = np.empty(0, dtype=np.int64)
_NO_SIDE = np.empty(0, dtype=np.int8)
_NONE.flags.writeable = False
_NO_SIDE.flags.writeable = False


def _detect_few(rules: tuple[Rule, ...], track: Track, tail: Tail | None) -> Detection:
    """The road of small calls; tested equal to the other."""
    m = len(track.z)
    new_value, new_z, new_sigma = track.value.tolist(), track.z.tolist(), _column(track.sigma, m)
    lower, upper = _column(track.lower, m), _column(track.upper, m)
    if tail is None:
        before, value, z, sigma = 0, new_value, new_z, new_sigma
    else:
        before = len(tail.z)
        value, z, sigma = [*tail.value, *new_value], [*tail.z, *new_z], [*tail.sigma, *new_sigma]
    hits: list[tuple[int, int, int]] = []
    start = 0  # the first point since the last gap
    steps: list[int] | None = None
    for index in range(m):
        end = before + index
        here = z[end]
        if here != here:
            start = end + 1
            continue
        slack = TOLERANCE * sigma[end]
        if value[end] > upper[index] + slack:
            hits.append((index, 0, 1))
        elif value[end] < lower[index] - slack:
            hits.append((index, 0, -1))
        for position in range(1, len(rules)):
            rule = rules[position]
            form, k, distance = rule.form, rule.points, rule.distance
            if end - start + 1 < k:
                continue
            if distance is not None:
                edge = distance + TOLERANCE
                first = max(start, end - rule.window + 1)
                if form == "zone":
                    if here > edge:
                        if sum([each > edge for each in z[first : end + 1]]) >= k:
                            hits.append((index, position, 1))
                    elif here < -edge and sum([each < -edge for each in z[first : end + 1]]) >= k:
                        hits.append((index, position, -1))
                elif form == "mixture":
                    if abs(here) > edge and sum([abs(each) > edge for each in z[first : end + 1]]) >= k:
                        hits.append((index, position, 0))
                elif abs(here) <= edge and all(abs(each) <= edge for each in z[first : end + 1]):
                    hits.append((index, position, 0))
                continue
            if steps is None:
                steps = [0, *map(_step, value, value[1:], sigma[1:])]
            way = steps[end]
            if not way:
                continue
            run = steps[end - k + 2 : end + 1]
            if form == "trend":
                if run.count(way) == k - 1:
                    hits.append((index, position, way))
            elif all(one == -other for one, other in pairwise(run)):
                hits.append((index, position, 0))
    keep = max(start, before + m - longest_window(rules) + 1)
    left = Tail(tuple(value[keep:]), tuple(z[keep:]), tuple(sigma[keep:]))
    return _detection(rules, hits, left, z, before)


def _step(before: float, after: float, sigma: float) -> int:
    rise, slack = after - before, TOLERANCE * sigma
    return 1 if rise > slack else -1 if rise < -slack else 0


def _k_of_m(flags: Booleans, k: int, m: int, stretch: Integers | None) -> Integers:
    """The true positions that end a window of m with at least k true.

    stretch: the number of the stretch between gaps that each position belongs to, or ``None``
    without gaps.
    """
    at: Integers = flags.nonzero()[0]
    if k == 1:
        return at
    if len(at) < k:
        return _NONE
    ends, starts = at[k - 1 :], at[: 1 - k]
    near = ends - starts < m
    # k of k in a row leave no room for a gap between them.
    if stretch is not None and k < m:
        near &= stretch[ends] == stretch[starts]
    return ends[near]


def _detect_many(rules: tuple[Rule, ...], track: Track, tail: Tail | None) -> Detection:
    m = len(track.z)
    value, z = track.value, track.z
    sigma = np.asarray(track.sigma, dtype=np.float64)
    slack = TOLERANCE * sigma
    found: list[tuple[int, int, Integers]] = [
        (0, 1, (value > track.upper + slack).nonzero()[0]),
        (0, -1, (value < track.lower - slack).nonzero()[0]),
    ]
    if len(rules) == 1 and not len(found[0][2]) and not len(found[1][2]):
        return Detection(rules, _NONE, _NONE, _NO_SIDE, Tail(), z, 0)
    before = 0
    if tail is not None:
        before = len(tail.z)
        value, z = np.concatenate((tail.value, value)), np.concatenate((tail.z, z))
        sigma = np.concatenate((tail.sigma, np.broadcast_to(sigma, m)))
        slack = TOLERANCE * sigma
    gap = np.isnan(z)
    stretch = np.cumsum(gap) if bool(gap.any()) else None
    size: Floats | None = None
    rises: Booleans | None = None
    falls: Booleans | None = None
    flips: Booleans | None = None

    for position in range(1, len(rules)):
        rule = rules[position]
        form, k, window, distance = rule.form, rule.points, rule.window, rule.distance
        if distance is not None:
            edge = distance + TOLERANCE
            if form == "zone":
                found.append((position, 1, _k_of_m(z > edge, k, window, stretch) - before))
                found.append((position, -1, _k_of_m(z < -edge, k, window, stretch) - before))
                continue
            if size is None:
                size = np.abs(z)
            flags = size > edge if form == "mixture" else size <= edge
            found.append((position, 0, _k_of_m(flags, k, window, stretch) - before))
            continue
        if rises is None or falls is None:
            step = np.diff(value)
            least = slack[1:] if slack.ndim else slack
            rises, falls = step > least, step < -least
        if form == "trend":
            # The step at position i leads to the point i + 1.
            found.append((position, 1, _k_of_m(rises, k - 1, k - 1, None) + (1 - before)))
            found.append((position, -1, _k_of_m(falls, k - 1, k - 1, None) + (1 - before)))
            continue
        if flips is None:
            flips = (rises[1:] & falls[:-1]) | (falls[1:] & rises[:-1])
        found.append((position, 0, _k_of_m(flips, k - 2, k - 2, None) + (2 - before)))

    keep = max(0, before + m - longest_window(rules) + 1)
    last = np.flatnonzero(gap[keep:])
    if len(last):
        keep += int(last[-1]) + 1
    left = Tail(
        tuple(value[keep:].tolist()),
        tuple(z[keep:].tolist()),
        tuple(np.broadcast_to(sigma, before + m)[keep:].tolist()),
    )
    # What the tail's own points signalled was reported by the call they came from.
    found = [(position, side, at[at >= 0] if before else at) for position, side, at in found if len(at)]
    if not found:
        return Detection(rules, _NONE, _NONE, _NO_SIDE, left, z, before)
    lengths = [len(at) for _, _, at in found]
    index = np.concatenate([at for _, _, at in found])
    rule_at = np.repeat([position for position, _, _ in found], lengths)
    side_at = np.repeat(np.array([side for _, side, _ in found], dtype=np.int8), lengths)
    order = np.argsort(index * len(rules) + rule_at, kind="stable")
    return Detection(rules, rule_at[order], index[order], side_at[order], left, z, before)


@dataclass(frozen=True, slots=True)
class Signal:
    """One signal, in words."""

    rule: Annotated[str, "Code of the rule as `GET /v1/rules` spells it; `limit` for the control limits."]
    form: Annotated[Form, "What the rule looks for."]
    panel: Annotated[str, "The panel it is given on."]
    index: Annotated[int, "The point it is given on, from 0 for the first of this request."]
    side: Annotated[
        Literal["above", "below"] | None,
        "Above (or rising), below (or falling), or null where the rule has no side.",
    ]
    points: Annotated[tuple[int, ...], "Those that took part; below 0 where they lie in earlier calls."]
    severity: Annotated[Severity, "Whether it asks for action; a warning leaves the verdict as it is."]
    sentence: Annotated[str, "What is seen, plainly."]


def signals(detection: Detection, *, panel: str, most: int = 1000) -> tuple[Signal, ...]:
    """The first ``most`` signals of a detection, in words; ``len(detection)`` is their total."""
    told = []
    for hit in range(min(most, len(detection))):
        rule = detection.rules[int(detection.rule[hit])]
        side = int(detection.side[hit])
        points, span = detection._look_back(hit)
        told.append(
            Signal(
                rule.code,
                rule.form,
                panel,
                int(detection.index[hit]),
                "above" if side > 0 else "below" if side < 0 else None,
                points,
                rule.severity,
                _sentence(rule, side, len(points), span),
            )
        )
    return tuple(told)


def _sentence(rule: Rule, side: int, count: int, span: int) -> str:
    where = "above" if side > 0 else "below"
    if rule.is_limit:
        return f"The point lies {where} the {'upper' if side > 0 else 'lower'} control limit."
    if rule.form == "trend":
        return f"{count} points in a row steadily {'rise' if side > 0 else 'fall'}."
    if rule.form == "alternation":
        return f"{count} points in a row go alternately up and down."
    if rule.form == "stratification":
        return f"{count} points in a row lie within {rule.distance:g} sigma of the centre line."
    if count == 1:
        who = "The point lies"
    elif count == span:
        who = f"{count} points in a row lie"
    else:
        who = f"{count} of the last {span} points lie"
    if rule.form == "mixture":
        return f"{who} more than {rule.distance:g} sigma from the centre line, on either side."
    far = f"more than {rule.distance:g} sigma {where}" if rule.distance else where
    return f"{who} {far} the centre line."
