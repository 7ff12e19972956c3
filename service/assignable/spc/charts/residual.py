"""Values that depend on those before them: ``residual`` ([iso-7870-9], [alwan-roberts-1988]).

An autoregressive model foretells each value from the p before it,
``x̂ₜ = μ + φ₁(xₜ₋₁ − μ) + … + φₚ(xₜ₋ₚ − μ)``; what it misses is independent while the process stays as it was,
and is what the chart plots. A gap breaks the memory: residuals start again p values after it.
"""

from __future__ import annotations

import functools
import math
from dataclasses import dataclass, replace
from typing import Annotated, Literal, TypeAlias

import numpy as np
import scipy

from .. import cautions as caution
from .. import diagnostics
from ..bounds import MULTIPLE, POSITIVE, PROBABILITY, SIGMA
from ..cautions import Caution
from ..data import Floats, Individuals
from ..errors import Fault, SpcError, UnusableData, UnusableParameter
from ..rules import Rule, Tail, watched
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
    ShiftPerformance,
    exclusion_mask,
    too_many_signals,
    watch,
)
from .individuals import mean_of_values, since_gap
from .price import SHIFTS, mean_performance
from .registry import Chart

LARGEST_ORDER = 20
USUAL_BOUND = 5
FEWEST_FREEDOM = 10
"""Degrees of freedom that the residuals must keep, beside the model."""
GOOD_WINDOWS = 50
STATIONARY = 1.0 - 1e-6
"""Roots nearer to the unit circle than this are on it."""


@dataclass(frozen=True, slots=True)
class ResidualPanels:
    """The panel of a ``residual`` chart."""

    residual: Annotated[Panel, "Each value less what the model foretold of it."]


@dataclass(frozen=True, slots=True)
class ResidualLines:
    """The panel of a ``residual`` chart."""

    residual: Annotated[PanelLimits, "Each value less what the model foretold of it."]


@dataclass(frozen=True, slots=True)
class KnownModel:
    """A model known in advance: mean of the process, φ, and standard deviation of the residuals."""

    mean: float
    coefficients: tuple[float, ...]
    sigma: float


@dataclass(frozen=True, slots=True)
class ResidualOptions:
    """How the model and its limits are to be found. order: ``None`` to choose it, up to ``largest_order``."""

    order: int | None = None
    largest_order: int = USUAL_BOUND
    known: KnownModel | None = None
    basis: LimitBasis = AT_THREE_SIGMA
    rules: tuple[Rule, ...] = ()
    exclude: tuple[Exclusion, ...] = ()


@dataclass(frozen=True, slots=True)
class ResidualLimits:
    """The frozen model and limits of a ``residual`` chart."""

    order: Annotated[int, "p: how many values before each the model looks at."]
    mean: Annotated[float, "Mean of the process, in the unit of the characteristic."]
    coefficients: Annotated[tuple[float, ...], "φ₁ … φₚ, the nearest value first."]
    sigma: Annotated[float, "Standard deviation of the residuals, in the unit of the characteristic.", SIGMA]
    process_sigma: Annotated[
        float, "Standard deviation of the values themselves that the model leads to, in the same unit."
    ]
    source: Annotated[Literal["estimated", "given"], "Whether the model is an estimate or was known."]
    degrees_of_freedom: Annotated[float | None, "Of sigma; null where the model was known.", POSITIVE]
    limit_basis: Annotated[Literal["sigma", "probability"], "How the limits were placed."]
    sigma_multiple: Annotated[
        float | None, "Limits lie this many sigma out; null under `probability`.", MULTIPLE
    ]
    false_alarm_probability: Annotated[float | None, "Of each point; null under `sigma`.", PROBABILITY]
    panels: Annotated[ResidualLines, "The lines of the panel."]
    rules: Annotated[tuple[Rule, ...], "The rules in force, the limit first."]
    baseline: Annotated[
        BaselineRecord | None, "What the model was computed from; null for a known model alone."
    ]

    @property
    def basis(self) -> LimitBasis:
        """How far out the limits lie."""
        return LimitBasis(self.limit_basis, self.sigma_multiple, self.false_alarm_probability)


@dataclass(frozen=True, slots=True)
class ResidualCarry:
    """What judging needs to remember of the values before."""

    points: Annotated[int, "Values judged so far under these limits."]
    residual: Annotated[Tail, "The last residuals, for the run rules."]
    recent: Annotated[tuple[float, ...], "The last values since a gap, at most p, for the next forecast."]


NEW = ResidualCarry(0, Tail(), ())


@dataclass(frozen=True, slots=True)
class OrderTried:
    """An order that was tried, on the same values as the others."""

    order: Annotated[int, "p."]
    aicc: Annotated[float, "Akaike's criterion corrected for few values; the smallest is chosen."]


@dataclass(frozen=True, slots=True, eq=False)
class ResidualDiagnostics:
    """What the baseline itself shows."""

    orders: Annotated[tuple[OrderTried, ...], "The orders tried; none where it was given."]
    largest_root: Annotated[
        float, "Largest modulus of the roots: how much of a disturbance is left after each step, below 1."
    ]
    values_autocorrelation: Annotated[
        diagnostics.Autocorrelation | None, "Of the values themselves; null where too few."
    ]
    autocorrelation: Annotated[
        diagnostics.Autocorrelation | None, "Of the residuals, which should show none; null where too few."
    ]
    normality: Annotated[diagnostics.Normality | None, "Of the residuals; null where too few."]


@dataclass(frozen=True, slots=True)
class NextValue:
    """What the model foretells of the value to come."""

    forecast: Annotated[float, "The value it foretells, in the unit of the characteristic."]
    lower: Annotated[float, "A value below this one will signal."]
    upper: Annotated[float, "A value above this one will signal."]


ResidualFit: TypeAlias = Fit[ResidualLimits, ResidualPanels, ResidualDiagnostics]


ResidualJudgement: TypeAlias = Judgement[ResidualPanels, ResidualCarry]


def residuals(values: Floats, mean: float, coefficients: tuple[float, ...]) -> Floats:
    """(m,) each value less its forecast; NaN for the first p, at a gap, and for p values after one."""
    p, m = len(coefficients), len(values)
    about = values - mean
    found = np.full(m, np.nan)
    if m <= p:
        return found
    # Lag by lag, always in one order: each residual then has the same bits in any split of the values.
    rest = about[p:].copy()
    for lag, coefficient in enumerate(coefficients, 1):
        rest -= coefficient * about[p - lag : m - lag]
    found[p:] = rest
    return found


def largest_root(coefficients: tuple[float, ...]) -> float:
    """Largest modulus of the roots of zᵖ − φ₁zᵖ⁻¹ − … − φₚ; the model is stationary where it is below 1."""
    p = len(coefficients)
    if p < 2:
        return abs(coefficients[0]) if p else 0.0
    companion = np.zeros((p, p))
    companion[0] = np.array(coefficients)
    companion[np.arange(1, p), np.arange(p - 1)] = 1.0
    return float(np.abs(np.linalg.eigvals(companion)).max())


def process_deviation(coefficients: tuple[float, ...]) -> float:
    """Standard deviation of a stationary process over that of its residuals.

    From the reflection coefficients (Levinson–Durbin steps taken backwards): the variances' ratio is
    ``1/Π(1 − κᵢ²)``. Source: [box-jenkins-1976], section 3.2.
    """
    phi = np.array(coefficients)
    ratio = 1.0
    while len(phi):
        k = float(phi[-1])
        left = 1.0 - k * k
        ratio *= left
        phi = (phi[:-1] + k * phi[-2::-1]) / left if len(phi) > 1 else phi[:0]
    return 1.0 / math.sqrt(ratio)


@dataclass(frozen=True, slots=True)
class Model:
    """A fitted model; sigma with its degrees of freedom."""

    mean: float
    coefficients: tuple[float, ...]
    sigma: float
    degrees_of_freedom: int


def _windows(values: Floats, order: int) -> Floats:
    """(w, order + 1) values with the ``order`` before each, the oldest first; whole windows alone."""
    found = np.lib.stride_tricks.sliding_window_view(values, order + 1)
    whole = ~np.isnan(found).any(axis=1)
    return found if bool(whole.all()) else found[whole]


def needed(order: int) -> int:
    """The whole windows that a model of an order needs."""
    return order + 1 + FEWEST_FREEDOM


def tried(values: Floats, largest: int, unit: float = 1.0) -> tuple[OrderTried, ...]:
    """AICc of the orders 0 to ``largest`` of values (m,) in some unit, all by least squares on the same windows.

    ``AICc = w ln(SSE/w) + 2k + 2k(k + 1)/(w − k − 1)``, k = p + 2 parameters. Source: [hurvich-tsai-1989].
    """
    windows = _windows(values, largest)
    w = len(windows)
    matrix = np.empty((w, largest + 2))
    matrix[:, 0] = 1.0
    matrix[:, 1:-1] = windows[:, -2::-1]
    matrix[:, -1] = windows[:, -1]
    # One orthogonal factor serves every order: each column takes its share off the sum of squares.
    last = np.asarray(np.linalg.qr(matrix, mode="r"))[:, -1]
    left = np.cumsum(np.square(last[::-1]))[::-1][1:]
    in_unit = 2.0 * w * math.log(unit)
    found = []
    for order in range(largest + 1):
        k = order + 2
        fitted = float(left[order])
        if fitted > 0.0:
            aicc = w * math.log(fitted / w) + in_unit + 2.0 * k + 2.0 * k * (k + 1.0) / (w - k - 1.0)
        else:
            aicc = -1e300
        found.append(OrderTried(order, aicc))
    return tuple(found)


def fit_model(values: Floats, order: int) -> Model:
    """An autoregressive model by conditional least squares, of values (m,) with NaN for a gap.

    Each whole window of p + 1 successive values is one equation; sigma² is the sum of squares over windows less
    p + 1. Raises UnusableData for too few windows, for no variation, and for a model that is not stationary.
    """
    windows = _windows(values, order) if len(values) > order else np.empty((0, order + 1))
    w = len(windows)
    if w < needed(order):
        raise UnusableData.of(
            "too-few-values",
            f"A model of order {order} needs {needed(order)} runs of {order + 1} successive values without a gap "
            f"({needed(order) + order} values in a row have them), and there are {w}.",
            "data",
            "values",
        )
    response = windows[:, -1]
    centres = windows.mean(axis=0)
    design = windows[:, -2::-1] - centres[-2::-1] if order else np.empty((w, 0))
    y = response - centres[-1]
    if order:
        solved, _, rank, _ = np.linalg.lstsq(design, y, rcond=None)
        residual = y - design @ solved
    else:
        solved, rank, residual = np.empty(0), 0, y
    freedom = w - order - 1
    sigma = math.sqrt(float(residual @ residual) / freedom)
    spread = float(np.abs(y).max())
    if not sigma > 1e-12 * spread:
        raise UnusableData.of(
            "no-variation",
            "The values follow each other without any variation of their own, so there is nothing to set limits from; "
            "check how they were recorded.",
            "data",
            "values",
        )
    if int(rank) < order:
        raise UnusableData.of(
            "no-single-model",
            f"The values follow each other so exactly that a model of order {order} has no single solution; "
            "choose a smaller order, or check how the values were recorded.",
            "order",
        )
    coefficients = tuple(solved.tolist())
    check_stationary(coefficients, UnusableData, "data", "values")
    # From μ = c/(1 − Σφ), c the constant: least squares through the centres of the windows.
    mean = (
        float(centres[-1] - centres[-2::-1] @ solved) / (1.0 - sum(coefficients))
        if order
        else float(centres[-1])
    )
    return Model(mean, coefficients, sigma, freedom)


def check_stationary(coefficients: tuple[float, ...], error: type[SpcError], *where: str) -> None:
    """Raises the error where disturbances do not die away."""
    root = largest_root(coefficients)
    if root < STATIONARY:
        return
    raise error.of(
        "not-stationary",
        f"The values do not return to a level of their own: in the model of order {len(coefficients)} a disturbance "
        f"keeps {100.0 * root:.1f} % of itself at each step. Look for a drift (the `trend` chart), a step in the "
        "level, or too frequent sampling.",
        *where,
    )


def fit(data: Individuals | None, options: ResidualOptions) -> ResidualFit:
    """A model and the limits ``0 ± k·σ̂`` of its residuals, from a baseline or known.

    The order is the smallest in AICc among 0 to ``largest_order`` (as far as the values allow), unless given; the
    model is then fitted by conditional least squares on every whole window. A gap or an excluded value ends the
    windows that hold it.

    Raises UnusableData for too few values (with the number needed), no variation, or values that are not
    stationary; UnusableParameter for options that do not fit. Source: [iso-7870-9], [alwan-roberts-1988],
    [box-jenkins-1976], [hurvich-tsai-1989].
    """
    rules, basis, known = watched(options.rules), options.basis, options.known
    if known is not None:
        if options.order is not None:
            raise UnusableParameter.of(
                "order-of-known-model", "The order of a known model is that of its coefficients.", "order"
            )
        check_stationary(known.coefficients, UnusableParameter, "standards", "coefficients")
    if data is None:
        if known is None or options.exclude:
            faults = []
            if known is None:
                faults.append(
                    Fault("data-missing", "Without baseline data the model must be given.", ("standards",))
                )
            if options.exclude:
                faults.append(
                    Fault("no-such-point", "There is no baseline to exclude points from.", ("exclude",))
                )
            raise UnusableParameter(*faults)
        model = Model(known.mean, known.coefficients, known.sigma, 0)
        limits = _limits(model, options, rules, None)
        return Fit(limits, None, None, _performance(rules, basis, model.coefficients), ())
    values = data.values
    kept = exclusion_mask(len(values), options.exclude)
    used = values if kept is None else np.where(kept, values, np.nan)
    filled = int(np.count_nonzero(~np.isnan(used)))
    unit, zero = _scale(used, filled)
    orders: tuple[OrderTried, ...] = ()
    if known is not None:
        model = Model(known.mean, known.coefficients, known.sigma, 0)
    else:
        plain = (used - zero) / unit
        order = options.order
        if order is None:
            orders = _orders(plain, options.largest_order, unit)
            order = min(orders, key=lambda one: one.aicc).order
        found = fit_model(plain, order)
        model = replace(found, mean=zero + unit * found.mean, sigma=unit * found.sigma)
    limits = _limits(model, options, rules, BaselineRecord(filled, filled, options.exclude))
    watched_only = residuals(used, model.mean, model.coefficients)
    plot = _plot(residuals(values, model.mean, model.coefficients), limits)
    seen, _ = watch("residual", plot, rules, kept=None if kept is None else ~np.isnan(watched_only))
    shown = ResidualDiagnostics(
        orders,
        largest_root(model.coefficients),
        diagnostics.autocorrelation(used),
        diagnostics.autocorrelation(watched_only),
        diagnostics.normality(watched_only),
    )
    return Fit(
        limits,
        Baseline(
            seen.verdict,
            ResidualPanels(plot.panel()),
            seen.signals,
            seen.found,
            _next(limits, _last(values, limits)),
        ),
        shown,
        _performance(rules, basis, model.coefficients),
        caution.collect(
            _few_windows(watched_only, limits),
            _independent(limits, orders),
            _still_autocorrelated(shown.autocorrelation),
            caution.not_normal(shown.normality),
            *too_many_signals(seen),
        ),
    )


def _scale(used: Floats, filled: int) -> tuple[float, float]:
    """A unit and a zero in which the values are of order 1. Raises UnusableData where they do not vary."""
    if filled < 2:
        raise UnusableData.of(
            "too-few-values",
            f"A model needs {needed(1) + 1} values or more; there {'is one' if filled else 'are none'}.",
            "data",
            "values",
        )
    zero = mean_of_values(used, filled)
    unit = float(np.nanmax(np.abs(used - zero)))
    if unit <= 1e-15 * abs(zero) or unit == 0.0:
        raise UnusableData.of(
            "no-variation",
            "Every value is the same, so there is no variation to calculate with; check the resolution of the gauge or "
            "how the values were recorded.",
            "data",
            "values",
        )
    if not 1e-140 <= unit <= 1e150:
        raise UnusableData.of("out-of-scale", "The spread of the values cannot be represented.", "data")
    return unit, zero


def _orders(values: Floats, largest: int, unit: float) -> tuple[OrderTried, ...]:
    """The orders up to ``largest`` for which there are values enough. Raises UnusableData for not even 1."""
    bound = min(largest, len(values) - 1)
    while bound > 1 and len(_windows(values, bound)) < needed(bound):
        bound -= 1
    if bound < 1 or (found := len(_windows(values, bound))) < needed(bound):
        count = found if bound >= 1 else 0
        raise UnusableData.of(
            "too-few-values",
            f"A model of order 1 needs {needed(1)} pairs of successive values ({needed(1) + 1} values in a row have "
            f"them), and there are {count}.",
            "data",
            "values",
        )
    return tried(values, bound, unit)


def _limits(
    model: Model, options: ResidualOptions, rules: tuple[Rule, ...], record: BaselineRecord | None
) -> ResidualLimits:
    basis = options.basis
    far = basis.multiple * model.sigma
    return ResidualLimits(
        len(model.coefficients),
        model.mean,
        model.coefficients,
        model.sigma,
        model.sigma * process_deviation(model.coefficients),
        "estimated" if options.known is None else "given",
        float(model.degrees_of_freedom) if options.known is None else None,
        basis.limit_basis,
        basis.sigma_multiple,
        basis.false_alarm_probability,
        ResidualLines(PanelLimits(0.0, -far, far)),
        rules,
        record,
    )


def _plot(found: Floats, limits: ResidualLimits) -> Plot:
    far = limits.basis.multiple * limits.sigma
    return Plot(found, 0.0, limits.sigma, -far, far)


def _next(limits: ResidualLimits, recent: tuple[float, ...]) -> NextValue | None:
    """The forecast from the last p values; ``None`` where they are not there."""
    if len(recent) < len(limits.coefficients):
        return None
    about = 0.0
    for coefficient, value in zip(limits.coefficients, reversed(recent), strict=True):
        about += coefficient * (value - limits.mean)
    forecast, far = limits.mean + about, limits.basis.multiple * limits.sigma
    return NextValue(forecast, forecast - far, forecast + far)


def _last(series: Floats, limits: ResidualLimits) -> tuple[float, ...]:
    """The last p values since a gap."""
    order = len(limits.coefficients)
    return since_gap(series, order) if order else ()


def _few_windows(found: Floats, limits: ResidualLimits) -> Caution | None:
    windows = int(np.count_nonzero(~np.isnan(found)))
    if windows >= GOOD_WINDOWS:
        return None
    return Caution(
        "few-values",
        f"The model of order {limits.order} rests on {windows} residuals; with fewer than {GOOD_WINDOWS} its "
        "coefficients are uncertain. Treat the limits as provisional.",
        ("data",),
        "box-jenkins-1976",
    )


def _independent(limits: ResidualLimits, orders: tuple[OrderTried, ...]) -> Caution | None:
    if limits.order or not orders:
        return None
    return Caution(
        "no-dependence",
        "No dependence on earlier values was found (order 0), so the residuals are the deviations from the mean. The "
        "`individuals` chart serves as well, and needs no model.",
        ("data",),
        "hurvich-tsai-1989",
    )


def _still_autocorrelated(found: diagnostics.Autocorrelation | None) -> Caution | None:
    if found is None or found.p_value >= caution.SIGNIFICANCE:
        return None
    return Caution(
        "residuals-autocorrelated",
        f"The residuals still depend on each other (Ljung–Box test over {found.lags} lags: p = {found.p_value:.2g}), "
        "so the model does not describe the values. Allow a larger order, or look for cycles and steps.",
        ("largest_order",),
        "ljung-box-1978",
    )


@functools.lru_cache(512)
def _performance(rules: tuple[Rule, ...], basis: LimitBasis, coefficients: tuple[float, ...]) -> Performance:
    """Run lengths of the residuals, were the model known exactly.

    A lasting shift of the process shows in full in its first residual, then less as the forecasts follow it. With
    the limit alone the run length is exact; with run rules it is that of the part that lasts, ``δ(1 − Σφ)``, and is
    told for the shifts δ whose lasting part is a round number.
    """
    plain = mean_performance(rules, basis, 1.0, None)
    left = np.concatenate(([1.0], 1.0 - np.cumsum(coefficients))).tolist()
    if len(rules) == 1:
        shifts = tuple(ShiftPerformance(shift, _run_length(basis.multiple, shift, left)) for shift in SHIFTS)
        besides = "; the first residuals after a shift included"
    else:
        shifts = tuple(ShiftPerformance(one.shift / left[-1], one.arl) for one in plain.shifts)
        besides = "; for a shift, by the part of it that lasts, the first residuals left out"
    return replace(
        plain,
        panel="residual",
        shifts=shifts,
        shift_unit="standard deviations of a residual, of a lasting shift of the process mean",
        method=plain.method + (besides if coefficients else ""),
    )


def _run_length(reach: float, shift: float, left: list[float]) -> float:
    """Under the limit alone: the first residuals hold the shares ``left`` of a shift, all later ones the last share."""
    arl, not_yet, chance = 0.0, 1.0, 1.0
    for share in left:
        chance = float(scipy.special.ndtr(-reach - shift * share) + scipy.special.ndtr(shift * share - reach))
        arl += not_yet
        not_yet *= 1.0 - chance
    return arl + not_yet / chance


def judge(limits: ResidualLimits, data: Individuals, carry: ResidualCarry | None) -> ResidualJudgement:
    """New values under a frozen model: residuals, signals, and the carry for the next call.

    Without a carry the first p values only start the model. Judging in one call or in any split with the carry
    passed on gives identical signals.
    """
    before = carry or NEW
    values, recent = data.values, before.recent
    series = np.concatenate((recent, values)) if recent else values
    found = residuals(series, limits.mean, limits.coefficients)[len(recent) :]
    plot = _plot(found, limits)
    seen, tail = watch("residual", plot, limits.rules, tail=before.residual)
    last = _last(series, limits)
    return Judgement(
        seen.verdict,
        ResidualPanels(plot.panel()),
        seen.signals,
        seen.found,
        ResidualCarry(before.points + len(values), tail, last),
        (*_nothing_judged(found, limits), *too_many_signals(seen)),
        _next(limits, last),
    )


def _nothing_judged(found: Floats, limits: ResidualLimits) -> tuple[Caution, ...]:
    unjudged = int(np.isnan(found).sum())
    if not unjudged:
        return ()
    return (
        Caution(
            "not-judged",
            f"{unjudged} of {len(found)} points have no residual and are not judged: they are gaps, or some of the "
            f"{limits.order} values before them, which the model looks at, are not there.",
            ("data",),
            "iso-7870-9",
        ),
    )


CHARTS = (
    Chart(
        name="residual",
        title="Residuals of an autoregressive model",
        purpose="Watches values that depend on those before them: a model foretells each value, and the chart plots "
        "what it missed.",
        takes="Single values in time order, evenly spaced.",
        beware="A lasting shift shows in full in the first residual alone where values depend strongly on each other.",
        panels=("residual",),
        references=("iso-7870-9", "alwan-roberts-1988", "box-jenkins-1976", "hurvich-tsai-1989"),
        fit=fit,
        judge=judge,
        limits=ResidualLimits,
        plotted=ResidualPanels,
        carry=ResidualCarry,
        diagnostics=ResidualDiagnostics,
        details=NextValue,
    ),
)
