"""One batch against its specifications, and what speaks for and against releasing it.

Comparison with a specification is exact decimal arithmetic on the numbers as they were written (the shortest
decimal that gives the double), so that 2.675 rounds as 2.675 and an average of 2.49 and 2.51 is 2.5.
Sources: rounding and comparison [astm-e29], [iso-80000-1]; guard bands [jcgm-106], [iso-14253-1].
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from decimal import Decimal
from typing import Annotated, Literal, TypeAlias

import numpy as np
import scipy

from .capability.indices import capability
from .capability.specification import Specification
from .capability.uncertainty import acceptance_limits
from .data import Floats, Integers
from .errors import Fault, SpcError, UnusableData, UnusableParameter, Where
from .exact import Rounding, average, less, plus, rounded, written
from .exact import shown as told
from .rules import Signal
from .words import ordinal

DecisionRule: TypeAlias = Literal["simple-acceptance", "guarded-acceptance"]
Compare: TypeAlias = Literal["each", "averages"]
Disposition: TypeAlias = Literal["supports-release", "needs-review", "does-not-support-release"]
Severity: TypeAlias = Literal["disqualifying", "review", "note"]

MOST_RESULTS = 20_000
"""Of all characteristics of a batch together."""
TOLD = 10
"""How many places or values a sentence names."""


@dataclass(frozen=True, slots=True)
class Uncertainty:
    """Measurement uncertainty of one compared value, and the decision rule.

    standard: standard uncertainty in the unit of the characteristic, ``None`` where only a guard band is
    stated. Guarded acceptance has exactly one of guard_band (its width in that unit), guard_multiple (of the
    standard uncertainty) and consumer_risk (largest probability that a value accepted on the acceptance limit
    is out of specification); simple acceptance has none of them.
    """

    standard: float | None
    rule: DecisionRule
    guard_band: float | None = None
    guard_multiple: float | None = None
    consumer_risk: float | None = None


@dataclass(frozen=True, slots=True)
class CapabilityFloor:
    """The Ppk that values are to show: its one-sided lower bound at ``confidence`` must reach ``least_ppk``.

    earlier: values of earlier batches, comparable with those compared here, (k,).
    """

    least_ppk: float
    confidence: float
    earlier: Floats


@dataclass(frozen=True, slots=True)
class Judged:
    """What the characteristic's own chart said of the batch; left_out: results below detection not charted."""

    chart: str
    signals: tuple[Signal, ...]
    signals_found: int
    left_out: int


@dataclass(frozen=True, slots=True, eq=False)
class Characteristic:
    """One characteristic of a batch.

    results: (n,) single results or (m, n) rows of replicates, NaN where missing. compare: every result, or the
    average of each row (of the whole list where there are no rows). below: positions, counted through the rows,
    of results below detection_limit; they are NaN in ``results``. expected_results: single results planned.
    """

    name: str
    unit: str | None
    results: Floats
    specification: Specification
    compare: Compare = "each"
    rounding: Rounding | None = None
    uncertainty: Uncertainty | None = None
    expected_results: int | None = None
    below: tuple[int, ...] = ()
    detection_limit: float | None = None
    trend: Judged | None = None
    capability: CapabilityFloor | None = None


@dataclass(frozen=True, slots=True)
class Reason:
    """Something that speaks against release, or that a reviewer is to know."""

    code: Annotated[str, "Stable; for programs."]
    sentence: Annotated[str, "What was found."]
    severity: Annotated[
        Severity,
        "`disqualifying`: the characteristic does not support release. `review`: it needs review. `note`: its "
        "disposition stays as it is.",
    ]
    where: Annotated[Where, "Path in the request's own names."]
    entries: Annotated[
        tuple[int, ...], "Positions in the arrays of `compared` that it is about, where it is."
    ]


@dataclass(frozen=True, slots=True, eq=False)
class Compared:
    """Each value as it was compared, in the order of the results; entries of equal position belong together."""

    index: Annotated[
        Integers,
        "Which result, counted through the rows from 0; or which row, where averages are compared.",
    ]
    unrounded: Annotated[
        Floats, "The result or average before rounding; for one below detection, what it is below."
    ]
    value: Annotated[Floats, "The value compared with the specification: rounded, where that is asked for."]
    margin_to_lower: Annotated[
        Floats | None, "Value less lower limit, negative beyond it; null without a lower limit."
    ]
    margin_to_upper: Annotated[
        Floats | None, "Upper limit less value, negative beyond it; null without an upper limit."
    ]
    below: Annotated[
        Integers,
        "Positions in these arrays of values known only to lie below the one that stands there.",
    ]
    standing: Annotated[
        tuple[str, ...],
        "`conforms`, `in-guard-band`, `out-of-specification`, or `undecided` (below a detection limit that "
        "tells too little).",
    ]


@dataclass(frozen=True, slots=True)
class Acceptance:
    """How measurement uncertainty entered. Acceptance limits are compared with unrounded values."""

    rule: Annotated[
        DecisionRule,
        "`simple-acceptance`: a value within the specification is accepted. `guarded-acceptance`: it is accepted "
        "within the acceptance limits.",
    ]
    standard_uncertainty: Annotated[
        float | None, "Of one compared value, in the unit of the characteristic; null where not given."
    ]
    guard_band: Annotated[float, "Width of each guard band, in the same unit; 0 under simple acceptance."]
    lower: Annotated[float | None, "Lower acceptance limit; null without a lower limit."]
    upper: Annotated[float | None, "Upper acceptance limit; null without an upper limit."]
    least_conformance_probability: Annotated[
        float | None,
        "The smallest probability, over the values compared, that the true value conforms, given the value and "
        "a normal measurement error; null without a standard uncertainty or without such values.",
    ]


@dataclass(frozen=True, slots=True)
class ShownCapability:
    """What the values show of Ppk."""

    values: Annotated[int, "How many values it rests on."]
    ppk: Annotated[float, "The estimate."]
    lower_bound: Annotated[float, "One-sided lower bound at the confidence asked."]
    least_ppk: Annotated[float, "What the bound must reach."]
    confidence: Annotated[float, "Of the bound."]


@dataclass(frozen=True, slots=True, eq=False)
class Figures:
    """The figures of one characteristic that was checked."""

    name: Annotated[str, "As given."]
    unit: Annotated[str | None, "As given; null where none was."]
    method: Annotated[
        Literal["absolute", "rounding"],
        "How values met the specification, as ASTM E29 names it: as they are, or rounded first.",
    ]
    results_present: Annotated[int, "Results with a number, or stated to be below detection."]
    results_missing: Annotated[int, "Results given as null."]
    compared: Annotated[Compared, "The values compared."]
    least_margin: Annotated[
        float | None,
        "Of the values with a number: the smallest distance to a limit, negative beyond it; null without any.",
    ]
    acceptance: Annotated[Acceptance | None, "Null where no uncertainty is stated."]
    capability: Annotated[ShownCapability | None, "Null where not asked for, or where it cannot be shown."]


@dataclass(frozen=True, slots=True, eq=False)
class Checked:
    """One characteristic, checked.

    reasons: in the order a reviewer reads them: out of specification, inside the guard band, out of trend,
    missing or insufficient, capability at risk. disposition: what the gravest of them leads to.
    """

    disposition: Disposition
    reasons: tuple[Reason, ...]
    figures: Figures


_RANK: tuple[Disposition, ...] = ("supports-release", "needs-review", "does-not-support-release")


def disposition(checked: Sequence[Checked]) -> Disposition:
    """Of a batch: the gravest of its characteristics; one without any needs review."""
    return _RANK[max((_RANK.index(one.disposition) for one in checked), default=1)]


# ---------------------------------------------------------------------------------------------------
# Guard bands


@dataclass(frozen=True, slots=True)
class _Zone:
    """The acceptance limits, exactly."""

    width: Decimal
    lower: Decimal | None
    upper: Decimal | None


def _zone(given: Uncertainty, specification: Specification) -> _Zone:
    width = _width(given, specification)
    band = written(width)
    lower = None if specification.lower is None else plus(written(specification.lower), band)
    upper = None if specification.upper is None else less(written(specification.upper), band)
    if lower is not None and upper is not None and lower > upper:
        raise _no_zone(f"guard bands of {width:.6g}")
    return _Zone(band, lower, upper)


def _width(given: Uncertainty, specification: Specification) -> float:
    stated = [
        name for name in ("guard_band", "guard_multiple", "consumer_risk") if getattr(given, name) is not None
    ]
    if given.rule == "simple-acceptance":
        if stated:
            raise UnusableParameter.of(
                "guard-band-of-no-use",
                f"`{stated[0]}` has no meaning under simple acceptance; leave it out, or choose guarded-acceptance.",
                "uncertainty",
                stated[0],
            )
        if given.standard is None:
            raise _no_uncertainty("Simple acceptance is judged with the uncertainty; give it.")
        return 0.0
    if len(stated) != 1:
        raise UnusableParameter.of(
            "guard-band-unstated",
            "Guarded acceptance needs exactly one of guard_band, guard_multiple and consumer_risk.",
            "uncertainty",
            *stated[1:2],
        )
    if given.guard_band is not None:
        return given.guard_band
    if given.standard is None:
        raise _no_uncertainty(f"A guard band by `{stated[0]}` needs the uncertainty; give it.")
    if given.guard_multiple is not None:
        return given.guard_multiple * given.standard
    assert given.consumer_risk is not None
    # Moved to where the guard band keeps all of its digits.
    lower, upper = specification.lower, specification.upper
    moved = Specification(None, 0.0) if lower is None else Specification(0.0, None)
    if lower is not None and upper is not None:
        moved = Specification(0.0, upper - lower)
    found = acceptance_limits(given.standard, moved, given.consumer_risk)
    if found is None:
        raise _no_zone(f"a consumer's risk of {given.consumer_risk:g}")
    width = found.guard_upper if lower is None else found.guard_lower
    assert width is not None
    return width


def _no_uncertainty(detail: str) -> SpcError:
    return UnusableParameter.of("uncertainty-missing", detail, "uncertainty")


def _no_zone(by: str) -> SpcError:
    return UnusableParameter.of(
        "no-acceptance-zone",
        f"With {by} no value could be accepted: the uncertainty is too large for this specification.",
        "uncertainty",
    )


# ---------------------------------------------------------------------------------------------------
# One characteristic


@dataclass(frozen=True, slots=True)
class _Value:
    """A value to be compared: a number, or what it is known to lie below."""

    index: int
    exact: Decimal
    below: bool
    where: Where


def check(one: Characteristic) -> Checked:
    """A characteristic against its specification, with all that speaks for and against release.

    A batch needs review where evidence is missing or in doubt, and does not support release where a value is out
    of specification; a note changes nothing. Values are averaged first where asked for, then rounded (once, from
    the exact average), then compared [astm-e29]. Acceptance limits are compared with unrounded values.

    Raises UnusableParameter ``coarser-than-specification``, ``no-acceptance-zone``, ``detection-limit-missing``,
    ``guard-band-unstated``, ``guard-band-of-no-use``, ``uncertainty-missing``; UnusableData
    ``index-out-of-range``, ``repeated-index``, ``number-below-detection``.
    """
    _refuse(one)
    specification = one.specification
    lower = None if specification.lower is None else written(specification.lower)
    upper = None if specification.upper is None else written(specification.upper)
    zone = None if one.uncertainty is None else _zone(one.uncertainty, specification)
    values = _values(one)
    compared = [
        value.exact if one.rounding is None else rounded(value.exact, one.rounding) for value in values
    ]
    standing = [
        _standing(value, shown, one, lower, upper, zone)
        for value, shown in zip(values, compared, strict=True)
    ]
    below = one.below
    missing = int(np.count_nonzero(one.results != one.results)) - len(below)
    shown_capability, at_risk = _capability(one, values)
    reasons = (
        *_out_of_specification(one, values, compared, standing, lower, upper),
        *_in_guard_band(one, values, standing, zone),
        *_out_of_trend(one),
        *_insufficient(one, values, standing, missing),
        *at_risk,
    )
    numbers = [shown for value, shown in zip(values, compared, strict=True) if not value.below]
    margins = [
        float(less(a, b))
        for shown in numbers
        for a, b in ((shown, lower), (upper, shown))
        if a is not None and b is not None
    ]
    figures = Figures(
        one.name,
        one.unit,
        "absolute" if one.rounding is None else "rounding",
        one.results.size - missing,
        missing,
        Compared(
            np.array([value.index for value in values], dtype=np.int64),
            np.array([float(value.exact) for value in values], dtype=np.float64),
            np.array([float(shown) for shown in compared], dtype=np.float64),
            None
            if lower is None
            else np.array([float(less(shown, lower)) for shown in compared], dtype=np.float64),
            None
            if upper is None
            else np.array([float(less(upper, shown)) for shown in compared], dtype=np.float64),
            np.array([at for at, value in enumerate(values) if value.below], dtype=np.int64),
            tuple(standing),
        ),
        min(margins, default=None),
        None if zone is None else _acceptance(one, values, zone),
        shown_capability,
    )
    return Checked(_disposition(reasons), reasons, figures)


def _disposition(reasons: Sequence[Reason]) -> Disposition:
    found = {reason.severity for reason in reasons}
    if "disqualifying" in found:
        return "does-not-support-release"
    return "needs-review" if "review" in found else "supports-release"


def _refuse(one: Characteristic) -> None:
    """Raises what cannot be meant so."""
    size, flat = one.results.size, one.results.reshape(-1)
    faults: list[Fault] = []
    seen: set[int] = set()
    for at, index in enumerate(one.below):
        where = ("below_detection", at)
        if index >= size:
            faults.append(
                Fault("index-out-of-range", f"There are {size} results; {index} is none of them.", where)
            )
        elif index in seen:
            faults.append(Fault("repeated-index", f"Result {index} is named twice.", where))
        elif flat[index] == flat[index]:
            faults.append(
                Fault(
                    "number-below-detection",
                    f"Result {index} is stated to be below detection, and has a number: give null there.",
                    place(one.results, index),
                )
            )
        seen.add(index)
    if faults:
        raise UnusableData(*faults)
    if one.below and one.detection_limit is None:
        raise UnusableParameter.of(
            "detection-limit-missing",
            "Results below detection need the detection limit.",
            "detection_limit",
        )
    if one.rounding is not None:
        for name in ("lower", "upper"):
            limit = getattr(one.specification, name)
            if limit is not None and rounded(written(limit), one.rounding) != written(limit):
                raise UnusableParameter.of(
                    "coarser-than-specification",
                    f"Rounding to {one.rounding.decimals} decimals is coarser than the {name} limit, {limit!r}, is "
                    "stated: round to the digits of the specification, or finer.",
                    "rounding",
                    "decimals",
                )


def place(results: Floats, index: int) -> Where:
    """Where the result of this position, counted through the rows, was written."""
    if results.ndim == 1:
        return ("results", index)
    row, column = divmod(index, results.shape[1])
    return ("results", row, column)


def groups(results: Floats) -> Floats:
    """(m, n): the rows of replicates; a list without rows is one of them."""
    return results if results.ndim == 2 else results[None, :]


def group_averages(results: Floats, below: Sequence[int]) -> tuple[float | None, ...]:
    """The average of the numbers of each group; ``None`` where it has none, or one below detection."""
    rows = groups(results)
    width = rows.shape[1]
    censored = {index // width for index in below}
    found: list[float | None] = []
    for row, values in enumerate(rows.tolist()):
        numbers = [written(value) for value in values if value == value]
        found.append(float(average(numbers)) if numbers and row not in censored else None)
    return tuple(found)


def _values(one: Characteristic) -> list[_Value]:
    """What is compared: every result, or the average of each group; an average of one below detection is below."""
    below = frozenset(one.below)
    limit = None if one.detection_limit is None else written(one.detection_limit)
    flat: list[_Value] = []
    for index, value in enumerate(one.results.reshape(-1).tolist()):
        if value == value:
            flat.append(_Value(index, written(value), False, place(one.results, index)))
        elif index in below and limit is not None:
            flat.append(_Value(index, limit, True, place(one.results, index)))
    if one.compare == "each":
        return flat
    width = groups(one.results).shape[1]
    rows: dict[int, list[_Value]] = {}
    for each in flat:
        rows.setdefault(each.index // width, []).append(each)
    return [
        _Value(
            row,
            average([each.exact for each in members]),
            any(each.below for each in members),
            ("results",) if one.results.ndim == 1 else ("results", row),
        )
        for row, members in rows.items()
    ]


def _standing(
    value: _Value,
    shown: Decimal,
    one: Characteristic,
    lower: Decimal | None,
    upper: Decimal | None,
    zone: _Zone | None,
) -> str:
    if value.below:
        if lower is not None:
            # It lies below its bound, strictly; only rounded may it still reach a limit there.
            sure = shown < lower or (one.rounding is None and shown == lower)
            return "out-of-specification" if sure else "undecided"
        if upper is not None and shown > upper:
            return "undecided"
        if zone is not None and zone.upper is not None and value.exact > zone.upper:
            return "in-guard-band" if zone.width else "conforms"
        return "conforms"
    if (lower is not None and shown < lower) or (upper is not None and shown > upper):
        return "out-of-specification"
    if zone is None or not zone.width:
        return "conforms"
    if zone.lower is not None and value.exact < zone.lower:
        return "in-guard-band"
    if zone.upper is not None and value.exact > zone.upper:
        return "in-guard-band"
    return "conforms"


def _acceptance(one: Characteristic, values: Sequence[_Value], zone: _Zone) -> Acceptance:
    given = one.uncertainty
    assert given is not None
    return Acceptance(
        given.rule,
        given.standard,
        float(zone.width),
        None if zone.lower is None else float(zone.lower),
        None if zone.upper is None else float(zone.upper),
        _least_probability(given.standard, one.specification, [v.exact for v in values if not v.below]),
    )


def _least_probability(
    standard: float | None, specification: Specification, values: Sequence[Decimal]
) -> float | None:
    """The smallest conformance probability of any of the values; [jcgm-106], section 7."""
    if standard is None or not values:
        return None
    x = np.array([float(value) for value in values])
    # An overflow is as far as can be; its probability is 0.
    with np.errstate(over="ignore"):
        beyond = np.zeros(len(x))
        if specification.upper is not None:
            beyond += scipy.special.ndtr((x - specification.upper) / standard)
        if specification.lower is not None:
            beyond += scipy.special.ndtr((specification.lower - x) / standard)
    return float(min(max(1.0 - float(beyond.max()), 0.0), 1.0))


# ---------------------------------------------------------------------------------------------------
# Reasons


def _things(count: int, one: str, many: str) -> str:
    return f"{count} {one if count == 1 else many}"


def _kind(one: Characteristic, count: int, of: int, verb: str, verbs: str) -> str:
    """``2 of 5 averages are``."""
    noun = "average" if one.compare == "averages" else "result"
    return f"{count} of {of} {noun}{'' if of == 1 else 's'} {verb if count == 1 else verbs}"


def _named(one: Characteristic, values: Sequence[_Value], entries: Sequence[int]) -> str:
    """Which values, by their positions."""
    if one.compare == "averages" and one.results.ndim == 1:
        return "the average of the list"
    counted = _listed([values[entry].index for entry in entries])
    return f"{counted} row{'s' if len(entries) > 1 else ''}" if one.compare == "averages" else counted


def _listed(positions: Sequence[int]) -> str:
    """``the 1st, 3rd and 4th``, of positions from 0."""
    told = [ordinal(position + 1) for position in positions[:TOLD]]
    if len(positions) > TOLD:
        told.append(f"{len(positions) - TOLD} more")
    return "the " + " and ".join(part for part in (", ".join(told[:-1]), told[-1]) if part)


def _out_of_specification(
    one: Characteristic,
    values: Sequence[_Value],
    compared: Sequence[Decimal],
    standing: Sequence[str],
    lower: Decimal | None,
    upper: Decimal | None,
) -> list[Reason]:
    out = [entry for entry, each in enumerate(standing) if each == "out-of-specification"]
    found = []
    for side, limit, entries in (
        ("below the lower", lower, [e for e in out if upper is None or not compared[e] > upper]),
        ("above the upper", upper, [e for e in out if upper is not None and compared[e] > upper]),
    ):
        if not entries or limit is None:
            continue
        pick = min if limit is lower else max
        worst = pick(entries, key=lambda entry: compared[entry])
        sentence = (
            f"{_kind(one, len(entries), len(values), 'is', 'are')} out of specification, {side} limit "
            f"{told(limit, one.unit)}: {_named(one, values, entries)}"
        )
        far = told(compared[worst], one.unit)
        if values[worst].below:
            sentence += f"; below the detection limit {far}."
        elif one.rounding is None:
            sentence += f"; the farthest is {far}."
        else:
            sentence += f"; the farthest is {far} as rounded, {told(values[worst].exact, one.unit)} before."
        found.append(
            Reason("out-of-specification", sentence, "disqualifying", values[worst].where, tuple(entries))
        )
    return found


def _in_guard_band(
    one: Characteristic, values: Sequence[_Value], standing: Sequence[str], zone: _Zone | None
) -> list[Reason]:
    entries = [entry for entry, each in enumerate(standing) if each == "in-guard-band"]
    if not entries or zone is None:
        return []
    low = [e for e in entries if zone.lower is not None and values[e].exact < zone.lower]
    high = [e for e in entries if e not in set(low)]
    found = []
    for side, limit, part in (("lower", zone.lower, low), ("upper", zone.upper, high)):
        if not part or limit is None:
            continue
        pick = min if side == "lower" else max
        worst = pick(part, key=lambda entry: values[entry].exact)
        found.append(
            Reason(
                "in-guard-band",
                f"{_kind(one, len(part), len(values), 'lies', 'lie')} within the specification, but beyond the {side} "
                f"acceptance limit {told(limit, one.unit)}: {_named(one, values, part)}; the farthest is "
                f"{told(values[worst].exact, one.unit)}. Measurement uncertainty leaves conformity in doubt.",
                "review",
                values[worst].where,
                tuple(part),
            )
        )
    return found


def _out_of_trend(one: Characteristic) -> list[Reason]:
    judged = one.trend
    if judged is None:
        return []
    found: list[Reason] = []
    actions = [signal for signal in judged.signals if signal.severity == "action"]
    warnings = [signal for signal in judged.signals if signal.severity == "warning"]
    untold = judged.signals_found - len(judged.signals)

    def tell(part: Sequence[Signal], code: str, severity: Severity, word: str, more: int) -> None:
        first = part[0]
        further = f" {_things(more, 'more signal', 'more signals')}." if more else ""
        found.append(
            Reason(
                code,
                f"{word} against its own limits ({judged.chart} chart, {first.panel.replace('_', ' ')} panel, "
                f"{ordinal(first.index + 1)} point): {first.sentence}{further}",
                severity,
                ("trend",),
                (),
            )
        )

    if actions:
        tell(actions, "out-of-trend", "review", "Out of trend", len(actions) - 1 + untold)
    if warnings:
        tell(warnings, "trend-warning", "note", "Warning", len(warnings) - 1)
    if judged.left_out:
        found.append(
            Reason(
                "not-charted",
                f"{_things(judged.left_out, 'point was', 'points were')} left out of its own chart, as a gap: a result "
                "below detection has no number to chart.",
                "note",
                ("below_detection",),
                (),
            )
        )
    return found


def _insufficient(
    one: Characteristic, values: Sequence[_Value], standing: Sequence[str], missing: int
) -> list[Reason]:
    found = []

    def review(code: str, sentence: str, where: Where, entries: Sequence[int] = ()) -> None:
        found.append(Reason(code, sentence, "review", where, tuple(entries)))

    present = one.results.size - missing
    if not present:
        review("no-results", "There is no result.", ("results",))
    elif missing:
        flat = one.results.reshape(-1)
        below = frozenset(one.below)
        gaps = [at for at in np.flatnonzero(flat != flat).tolist() if at not in below]
        sentence = f"{_things(missing, 'result is', 'results are')} missing: {_listed(gaps)}."
        if one.compare == "averages":
            sentence += " Averages are of the replicates there are."
        review("missing-results", sentence, place(one.results, gaps[0]))
    wanted = one.expected_results
    if wanted is not None and present < wanted:
        review(
            "too-few-results",
            f"{_things(present, 'result', 'results')} where {wanted} are expected.",
            ("expected_results",),
        )
    if wanted is not None and present > wanted:
        review(
            "more-results-than-expected",
            f"{_things(present, 'result', 'results')} where {_things(wanted, 'is', 'are')} expected: say which are "
            "repeats, and why they were made.",
            ("expected_results",),
        )
    undecided = [entry for entry, each in enumerate(standing) if each == "undecided"]
    if undecided:
        review(
            "undecided-below-detection",
            f"{_kind(one, len(undecided), len(values), 'is', 'are')} known only to lie below "
            f"{told(values[undecided[0]].exact, one.unit)}, which does not tell whether the specification is met.",
            ("detection_limit",),
            undecided,
        )
    if one.detection_limit is not None:
        limit = one.detection_limit
        low = np.flatnonzero(one.results.reshape(-1) < limit)
        if len(low):
            review(
                "number-under-detection-limit",
                f"{_things(len(low), 'result has a number', 'results have numbers')} under the detection limit "
                f"{told(written(limit), one.unit)}, and not stated as below it.",
                place(one.results, int(low[0])),
            )
    return found


def _capability(
    one: Characteristic, values: Sequence[_Value]
) -> tuple[ShownCapability | None, tuple[Reason, ...]]:
    asked = one.capability
    if asked is None:
        return None, ()

    def unshown(why: str) -> tuple[None, tuple[Reason, ...]]:
        sentence = f"Capability is not shown: {why}"
        return None, (Reason("capability-not-shown", sentence, "review", ("capability",), ()),)

    if any(value.below for value in values):
        return unshown("a result below detection has no number.")
    here = np.array([float(value.exact) for value in values], dtype=np.float64)
    both = np.concatenate((asked.earlier, here))
    both = both[both == both]
    if len(both) < 2:
        return unshown("fewer than two values are there.")
    try:
        index = capability(both, one.specification, confidence=asked.confidence).ppk
    except SpcError as error:
        return unshown(error.faults[0].detail)
    assert index is not None
    shown = ShownCapability(len(both), index.value, index.lower_bound, asked.least_ppk, asked.confidence)
    if index.lower_bound >= asked.least_ppk:
        return shown, ()
    return shown, (
        Reason(
            "capability-at-risk",
            f"Ppk of {len(both)} values is {index.value:.3g}, and at least {index.lower_bound:.3g} with "
            f"{100.0 * asked.confidence:g} % confidence, which does not reach {asked.least_ppk:g}.",
            "review",
            ("capability", "least_ppk"),
            (),
        ),
    )
