"""Distributions of a measured characteristic, fitted by maximum likelihood, with left-censored values.

Nine of the twelve are a location and a scale of the values or of their logarithms, on a normal or an
extreme-value law; the gamma, half normal and folded normal have their own. Values are fitted in a unit of their own
size, so that no size of value overflows, and a law on a half line may start at any natural bound, upwards
or downwards. Sources: [johnson-kotz-balakrishnan-1994], [cohen-1959] for the likelihood of values below a limit.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from typing import Annotated

import numpy as np
import scipy

from ..data import Booleans, Floats
from ..errors import UnusableData
from . import goodness

FEWEST_VALUES = 10
MOST_VALUES = 100_000

_LOG_ROOT_2PI = 0.5 * math.log(2.0 * math.pi)
_TINY = 1e-300
_NEWTON_CAP = 60
CLIMB_CAP = 80
_GRID = 28
# A threshold so far away that the law is a normal (lognormal) or an extreme-value one (Weibull) to the eye.
_FARTHEST = 300.0
_NEAREST = 1e-3
_NO_DISTANCE = 1e-100
_TOO_LARGE = 1e150
_PART = 4000
# A folded normal whose mean is nearer its fold than this, in sigma, cannot be told from a half normal.
_FOLDED_APART = 0.3
_TAKING_BOUND = ("half-normal", "folded-normal", "exponential")


@dataclass(frozen=True, slots=True)
class DistributionParameter:
    """A parameter of a fitted distribution."""

    name: Annotated[str, "`mean`, `sd`, `log-mean`, `log-sd`, `location`, `scale`, `shape` or `threshold`."]
    value: Annotated[float, "Its estimate of maximum likelihood, in the values' unit where it has one."]


# ---------------------------------------------------------------------------------------------------
# Standard laws of z


@dataclass(frozen=True, slots=True)
class _Standard:
    """A law without parameters: its functions of z, and its quantile from both tails p and q = 1 - p."""

    log_density: Callable[[Floats], Floats]
    log_cdf: Callable[[Floats], Floats]
    log_survival: Callable[[Floats], Floats]
    quantile: Callable[[Floats, Floats], Floats]


def _log1mexp(log_p: Floats) -> Floats:
    """log(1 - exp(x)) for x ≤ 0."""
    x = np.minimum(log_p, -1e-300)
    near = x > -0.693
    return np.where(
        near, np.log(-np.expm1(np.where(near, x, -1.0))), np.log1p(-np.exp(np.where(near, -1.0, x)))
    )


def _safe_exp(z: Floats) -> Floats:
    return np.exp(np.minimum(z, 700.0))


_NORMAL = _Standard(
    lambda z: -0.5 * z * z - _LOG_ROOT_2PI,
    lambda z: scipy.special.log_ndtr(z),
    lambda z: scipy.special.log_ndtr(-z),
    lambda p, q: np.where(p < 0.5, scipy.special.ndtri(p), -scipy.special.ndtri(q)),
)
_SMALLEST = _Standard(
    lambda z: z - _safe_exp(z),
    lambda z: _log1mexp(-_safe_exp(z)),
    lambda z: -_safe_exp(z),
    lambda p, q: np.log(np.where(p < 0.5, -np.log1p(-np.minimum(p, 0.5)), -np.log(np.maximum(q, _TINY)))),
)
_LARGEST = _Standard(
    lambda z: -z - _safe_exp(-z),
    lambda z: -_safe_exp(-z),
    lambda z: _log1mexp(-_safe_exp(-z)),
    lambda p, q: -np.log(np.where(p < 0.5, -np.log(np.maximum(p, _TINY)), -np.log1p(-np.minimum(q, 0.5)))),
)


# ---------------------------------------------------------------------------------------------------
# Laws with parameters, θ unconstrained


class Law:
    """A law in its own unit: functions of u and θ, and its maximum likelihood without censoring."""

    name: str
    half_line: bool
    parameters: int
    modification: goodness.Modification = "none"
    threshold = False
    censored = True  # whether values below a limit can be fitted
    mirrored = False  # whether it goes down where the values have their tail below

    def log_density(self, u: Floats, theta: Floats) -> Floats:
        raise NotImplementedError

    def log_cdf(self, u: Floats, theta: Floats) -> Floats:
        raise NotImplementedError

    def log_survival(self, u: Floats, theta: Floats) -> Floats:
        raise NotImplementedError

    def quantile(self, p: Floats, q: Floats, theta: Floats) -> Floats:
        raise NotImplementedError

    def fit(self, u: Floats) -> Floats:
        """θ of maximum likelihood; raises UnusableData ``no-maximum``."""
        raise NotImplementedError

    def units(self, theta: Floats, u: Floats) -> Floats:
        """The size of a step in each parameter that changes the law about as much."""
        return np.ones(self.parameters)

    def told(self, theta: Floats, shift: float, unit: float) -> tuple[DistributionParameter, ...]:
        raise NotImplementedError

    def shape_key(self, theta: Floats) -> Floats:
        """θ at a standard location and scale: all that the goodness of fit depends on."""
        raise NotImplementedError


class _Located(Law):
    """Location and scale of the values, or of their logarithms above a threshold."""

    def __init__(
        self,
        name: str,
        base: _Standard,
        modification: goodness.Modification,
        *,
        logs: bool = False,
        threshold: bool = False,
        fixed: float | None = None,
        mirrored: bool = False,
    ) -> None:
        self.name = name
        self.mirrored = mirrored
        self.censored = not threshold
        self.half_line = logs and not threshold
        self.threshold = threshold
        self.modification = modification
        self.parameters = (1 if fixed is not None else 2) + threshold
        self._base = base
        self._logs = logs
        self._fixed = fixed

    def _scale(self, theta: Floats) -> float:
        return self._fixed if self._fixed is not None else math.exp(min(max(float(theta[1]), -300.0), 300.0))

    def _z(self, u: Floats, theta: Floats) -> tuple[Floats, Floats, Booleans | None]:
        """z, log |dz/du|, and where u is above the threshold (None: everywhere)."""
        scale = self._scale(theta)
        if not self._logs:
            return (u - theta[0]) / scale, np.full(1, -math.log(scale)), None
        above = u - theta[2] if self.threshold else u
        inside: Booleans = above > 0.0
        log: Floats = np.log(np.where(inside, above, 1.0))
        return (log - theta[0]) / scale, -log - math.log(scale), None if inside.all() else inside

    def log_density(self, u: Floats, theta: Floats) -> Floats:
        z, jacobian, inside = self._z(u, theta)
        found = self._base.log_density(z) + jacobian
        return found if inside is None else np.where(inside, found, -1e300)

    def log_cdf(self, u: Floats, theta: Floats) -> Floats:
        z, _, inside = self._z(u, theta)
        found = self._base.log_cdf(z)
        return found if inside is None else np.where(inside, found, -1e300)

    def log_survival(self, u: Floats, theta: Floats) -> Floats:
        z, _, inside = self._z(u, theta)
        found = self._base.log_survival(z)
        return found if inside is None else np.where(inside, found, 0.0)

    def quantile(self, p: Floats, q: Floats, theta: Floats) -> Floats:
        y = theta[0] + self._scale(theta) * self._base.quantile(p, q)
        if not self._logs:
            found: Floats = y
            return found
        found = _safe_exp(y)
        return found + theta[2] if self.threshold else found

    def fit(self, u: Floats) -> Floats:
        if self.threshold:
            return self._fit_threshold(u)
        return self._fit_located(np.log(u) if self._logs else u)

    def _fit_located(self, y: Floats) -> Floats:
        if self._fixed is not None:
            # exp(y/σ) is exponential: its mean is the scale to the power 1/σ.
            top = float(y.max())
            return np.array([top + self._fixed * math.log(float(np.exp((y - top) / self._fixed).mean()))])
        if self._base is _NORMAL:
            mean = float(y.mean())
            return np.array([mean, 0.5 * math.log(max(float(((y - mean) ** 2).mean()), _TINY))])
        if self._base is _LARGEST:
            found = _smallest_extreme(-y)
            return np.array([-found[0], found[1]])
        return _smallest_extreme(y)

    def _fit_threshold(self, u: Floats) -> Floats:
        """The local maximum of the profile likelihood of the threshold.

        The likelihood is unbounded as the threshold nears the least value, so that the maximum in question
        is the one inside [cohen-whitten-1980]; values rounded to that least value make none.
        """
        least = float(u.min())
        reach = float(np.quantile(u, 0.75) - least) or float(u.max() - least)

        def profile(log_gap: float, u: Floats = u) -> tuple[float, Floats]:
            above = u - (least - reach * math.exp(log_gap))
            y = np.log(above)
            theta = self._fit_located(y)
            scale = math.exp(theta[1])
            value = float((self._base.log_density((y - theta[0]) / scale) - y).sum()) - len(u) * theta[1]
            return value, theta

        gaps = np.linspace(math.log(_FARTHEST), math.log(_NEAREST), _GRID)
        # A part of many values shows where the maximum is, or that there is none.
        part = np.sort(u)[:: u.size // _PART] if u.size > 2 * _PART else u
        values = [profile(float(gap), part)[0] for gap in gaps]
        inner = [i for i in range(1, _GRID - 1) if values[i - 1] < values[i] >= values[i + 1]]
        if not inner:
            raise UnusableData.of(
                "no-maximum",
                f"The likelihood of the distribution {self.name} has no maximum with these values: they do not show "
                "where it starts.",
                "data",
                "values",
            )
        best = max(inner, key=lambda i: values[i])
        found = scipy.optimize.minimize_scalar(
            lambda gap: -profile(float(gap))[0],
            bounds=(float(gaps[best + 1]), float(gaps[best - 1])),
            method="bounded",
            options={"xatol": 1e-7},
        )
        theta = profile(float(found.x))[1]
        return np.array([theta[0], theta[1], least - reach * math.exp(float(found.x))])

    def units(self, theta: Floats, u: Floats) -> Floats:
        scale = self._scale(theta)
        if self.threshold:
            return np.array([min(scale, 1.0), 1.0, 0.3 * (float(u.min()) - theta[2])])
        return np.array([scale, 1.0])[: self.parameters]

    def told(self, theta: Floats, shift: float, unit: float) -> tuple[DistributionParameter, ...]:
        scale = self._scale(theta)
        location = float(theta[0])
        if not self._logs:
            names = ("mean", "sd") if self._base is _NORMAL else ("location", "scale")
            pairs = [(names[0], shift + unit * location), (names[1], unit * scale)]
        elif self._base is _NORMAL:
            pairs = [("log-mean", location + math.log(unit)), ("log-sd", scale)]
        else:
            pairs = [("scale", unit * math.exp(location))]
            if self._fixed is None:
                pairs.append(("shape", 1.0 / scale))
            elif self._fixed == 0.5:
                # The deviation of each coordinate, of which a Rayleigh length is made.
                pairs = [("scale", unit * math.exp(location) / math.sqrt(2.0))]
        if self.threshold:
            pairs.append(("threshold", shift + unit * float(theta[2])))
        return tuple(DistributionParameter(name, value) for name, value in pairs)

    def shape_key(self, theta: Floats) -> Floats:
        if self.threshold:
            return np.array([0.0, theta[1], 0.0])
        return np.zeros(self.parameters)


def _smallest_extreme(y: Floats) -> Floats:
    """(μ, log σ) of a smallest-extreme-value law by Newton steps in σ [lawless-2003], section 5.1."""
    top = float(y.max())
    w = y - top
    mean = float(w.mean())
    sd = math.sqrt(max(float(((w - mean) ** 2).mean()), _TINY))
    sigma = 0.78 * sd
    low, high = 1e-3 * sd, 1e3 * sd
    for _ in range(_NEWTON_CAP):
        e = np.exp(w / sigma)
        s0, s1, s2 = float(e.sum()), float(e @ w), float(e @ (w * w))
        ratio = s1 / s0
        gap = ratio - sigma - mean
        # The gap falls as σ rises.
        if gap > 0:
            low = sigma
        else:
            high = sigma
        slope = -(s2 / s0 - ratio * ratio) / (sigma * sigma) - 1.0
        new = sigma - gap / slope
        if not low < new < high:
            new = 0.5 * (low + high)
        if abs(new - sigma) <= 1e-12 * sigma:
            sigma = new
            break
        sigma = new
    location = top + sigma * math.log(float(np.exp(w / sigma).mean()))
    return np.array([location, math.log(sigma)])


class _Gamma(Law):
    """Gamma, θ = (log shape, log mean)."""

    name = "gamma"
    half_line = True
    parameters = 2

    def _split(self, theta: Floats) -> tuple[float, float]:
        shape = math.exp(min(max(float(theta[0]), -20.0), 40.0))
        return shape, math.exp(min(float(theta[1]), 600.0)) / shape

    def log_density(self, u: Floats, theta: Floats) -> Floats:
        shape, scale = self._split(theta)
        y = u / scale
        return (shape - 1.0) * np.log(np.maximum(y, _TINY)) - y - math.lgamma(shape) - math.log(scale)

    def log_cdf(self, u: Floats, theta: Floats) -> Floats:
        shape, scale = self._split(theta)
        found: Floats = np.log(np.maximum(scipy.special.gammainc(shape, np.maximum(u, 0.0) / scale), _TINY))
        return found

    def log_survival(self, u: Floats, theta: Floats) -> Floats:
        shape, scale = self._split(theta)
        found: Floats = np.log(np.maximum(scipy.special.gammaincc(shape, np.maximum(u, 0.0) / scale), _TINY))
        return found

    def quantile(self, p: Floats, q: Floats, theta: Floats) -> Floats:
        shape, scale = self._split(theta)
        found: Floats = scale * np.where(
            p < 0.5, scipy.special.gammaincinv(shape, p), scipy.special.gammainccinv(shape, q)
        )
        return found

    def fit(self, u: Floats) -> Floats:
        mean = float(u.mean())
        gap = max(math.log(mean) - float(np.log(u).mean()), 1e-14)
        # Minka's starting value and generalised Newton steps for log k - ψ(k) = gap.
        shape = (3.0 - gap + math.sqrt((gap - 3.0) ** 2 + 24.0 * gap)) / (12.0 * gap)
        for _ in range(_NEWTON_CAP):
            difference = math.log(shape) - float(scipy.special.psi(shape)) - gap
            slope = 1.0 / shape - float(scipy.special.polygamma(1, shape))
            inverse = 1.0 / shape + difference / (shape * shape * slope)
            new = 1.0 / inverse if inverse > 0 else 0.5 * shape
            if abs(new - shape) <= 1e-12 * shape:
                break
            shape = new
        return np.array([math.log(shape), math.log(mean)])

    def units(self, theta: Floats, u: Floats) -> Floats:
        return np.array([1.0, min(1.0, math.exp(-0.5 * float(theta[0])))])

    def told(self, theta: Floats, shift: float, unit: float) -> tuple[DistributionParameter, ...]:
        shape, scale = self._split(theta)
        return DistributionParameter("shape", shape), DistributionParameter("scale", unit * scale)

    def shape_key(self, theta: Floats) -> Floats:
        return np.array([theta[0], 0.0])


class _HalfNormal(Law):
    """Half normal, θ = (log σ)."""

    name = "half-normal"
    half_line = True
    parameters = 1

    def log_density(self, u: Floats, theta: Floats) -> Floats:
        z = u * math.exp(-float(theta[0]))
        return math.log(2.0) - _LOG_ROOT_2PI - 0.5 * z * z - float(theta[0])

    def log_cdf(self, u: Floats, theta: Floats) -> Floats:
        z = np.maximum(u, 0.0) * math.exp(-float(theta[0]))
        found: Floats = np.log(np.maximum(scipy.special.erf(z * math.sqrt(0.5)), _TINY))
        return found

    def log_survival(self, u: Floats, theta: Floats) -> Floats:
        z = np.maximum(u, 0.0) * math.exp(-float(theta[0]))
        found: Floats = math.log(2.0) + scipy.special.log_ndtr(-z)
        return found

    def quantile(self, p: Floats, q: Floats, theta: Floats) -> Floats:
        small = p < 0.1
        z = np.where(
            small,
            math.sqrt(2.0) * scipy.special.erfinv(np.where(small, p, 0.0)),
            -scipy.special.ndtri(0.5 * q),
        )
        found: Floats = z * math.exp(float(theta[0]))
        return found

    def fit(self, u: Floats) -> Floats:
        return np.array([0.5 * math.log(float(u @ u) / len(u))])

    def told(self, theta: Floats, shift: float, unit: float) -> tuple[DistributionParameter, ...]:
        return (DistributionParameter("scale", unit * math.exp(float(theta[0]))),)

    def shape_key(self, theta: Floats) -> Floats:
        return np.zeros(1)


class _FoldedNormal(Law):
    """Absolute value of a normal, θ = (μ, log σ) with μ ≥ 0 [leone-nelson-nottingham-1961]."""

    name = "folded-normal"
    half_line = True
    parameters = 2

    def _split(self, theta: Floats) -> tuple[float, float]:
        return float(theta[0]), math.exp(min(max(float(theta[1]), -300.0), 300.0))

    def log_density(self, u: Floats, theta: Floats) -> Floats:
        mean, sigma = self._split(theta)
        z = (u - mean) / sigma
        fold = np.log1p(np.exp(np.minimum(-2.0 * u * mean / (sigma * sigma), 700.0)))
        return -0.5 * z * z - _LOG_ROOT_2PI - math.log(sigma) + fold

    def log_cdf(self, u: Floats, theta: Floats) -> Floats:
        mean, sigma = self._split(theta)
        u = np.maximum(u, 0.0)
        area = scipy.special.ndtr((u - mean) / sigma) - scipy.special.ndtr((-u - mean) / sigma)
        found: Floats = np.log(np.maximum(area, _TINY))
        return found

    def log_survival(self, u: Floats, theta: Floats) -> Floats:
        mean, sigma = self._split(theta)
        u = np.maximum(u, 0.0)
        area = scipy.special.ndtr((mean - u) / sigma) + scipy.special.ndtr((-u - mean) / sigma)
        found: Floats = np.log(np.maximum(area, _TINY))
        return found

    def quantile(self, p: Floats, q: Floats, theta: Floats) -> Floats:
        mean, sigma = self._split(theta)
        low = np.zeros_like(p)
        high = abs(mean) - sigma * scipy.special.ndtri(np.maximum(0.5 * q, _TINY))
        left = p < 0.5
        for _ in range(_NEWTON_CAP):
            middle = 0.5 * (low + high)
            above = np.where(
                left,
                self.log_cdf(middle, theta) > np.log(np.maximum(p, _TINY)),
                self.log_survival(middle, theta) < np.log(np.maximum(q, _TINY)),
            )
            low, high = np.where(above, low, middle), np.where(above, middle, high)
        found: Floats = 0.5 * (low + high)
        return found

    def fit(self, u: Floats) -> Floats:
        square = float(u @ u) / len(u)

        def gap(mean: float) -> float:
            return float((u * np.tanh(u * (mean / (square - mean * mean)))).mean()) - mean

        # At the mean of the values tanh < 1 leaves a negative gap; a maximum inside needs a positive one below.
        top = float(u.mean())
        spread = math.sqrt(max(square - top * top, _TINY))
        least = _FOLDED_APART * spread
        if least >= top or gap(least) <= 0.0 or square - top * top <= 0.0:
            raise UnusableData.of(
                "no-maximum",
                "The values cannot tell a folded normal distribution from a half normal one.",
                "data",
                "values",
            )
        mean = top if gap(top) >= 0.0 else float(scipy.optimize.brentq(gap, least, top, xtol=1e-14))
        return np.array([mean, 0.5 * math.log(square - mean * mean)])

    def units(self, theta: Floats, u: Floats) -> Floats:
        return np.array([self._split(theta)[1], 1.0])

    def told(self, theta: Floats, shift: float, unit: float) -> tuple[DistributionParameter, ...]:
        mean, sigma = self._split(theta)
        return DistributionParameter("location", unit * mean), DistributionParameter("scale", unit * sigma)

    def shape_key(self, theta: Floats) -> Floats:
        return np.array([theta[0] * math.exp(-float(theta[1])), 0.0])


def threshold_normal(name: str) -> Law:
    """A three-parameter lognormal of another name, whose tail is on the side where the values have theirs."""
    return _Located(name, _NORMAL, "none", logs=True, threshold=True, mirrored=True)


LAWS: dict[str, Law] = {
    law.name: law
    for law in (
        _Located("normal", _NORMAL, "normal"),
        _Located("lognormal", _NORMAL, "normal", logs=True),
        _Located("weibull", _SMALLEST, "extreme-value", logs=True),
        _Gamma(),
        _Located("exponential", _SMALLEST, "exponential", logs=True, fixed=1.0),
        _HalfNormal(),
        _FoldedNormal(),
        _Located("rayleigh", _SMALLEST, "exponential", logs=True, fixed=0.5),
        _Located("largest-extreme-value", _LARGEST, "extreme-value"),
        _Located("smallest-extreme-value", _SMALLEST, "extreme-value"),
        _Located("lognormal-3", _NORMAL, "none", logs=True, threshold=True),
        _Located("weibull-3", _SMALLEST, "none", logs=True, threshold=True),
    )
}
NAMES = tuple(LAWS)


# ---------------------------------------------------------------------------------------------------
# Samples and fits


@dataclass(frozen=True, slots=True, eq=False)
class Sample:
    """Values (n,) without gaps, and limits (k,) that further values were below, in the characteristic's unit.

    natural_lower, natural_upper: bounds that no value can be beyond. A law on a half line starts at the
    natural lower bound, or at 0 where neither is given, or goes down from a natural upper bound given alone.
    """

    values: Floats
    below: Floats
    natural_lower: float | None = None
    natural_upper: float | None = None

    @property
    def count(self) -> int:
        """Of all values, those below a limit among them."""
        return int(self.values.size + self.below.size)


@dataclass(frozen=True, slots=True, eq=False)
class Fitted:
    """A distribution fitted by maximum likelihood.

    theta: its parameters in the law's own unit, u = direction·(x - shift)/unit. covariance: of theta, from
    the observed information; ``None`` where that is not positive definite.
    """

    law: Law
    theta: Floats
    shift: float
    unit: float
    direction: int
    count: int
    log_likelihood: float
    covariance: Floats | None

    @property
    def parameters(self) -> tuple[DistributionParameter, ...]:
        """As they are told, in the values' unit; of a mirrored law, the distance from its bound down."""
        if self.direction < 0 and not self.law.half_line:
            told = self.law.told(self.theta, 0.0, self.unit)
            return tuple(
                DistributionParameter(one.name, self.shift - one.value) if one.name == "threshold" else one
                for one in told
            )
        return self.law.told(self.theta, 0.0 if self.law.half_line else self.shift, self.unit)

    @property
    def aicc(self) -> float | None:
        """Akaike's criterion corrected for few values [hurvich-tsai-1989]; ``None`` for too few."""
        k = self.law.parameters
        if self.count <= k + 1:
            return None
        return -2.0 * self.log_likelihood + 2.0 * k * (1.0 + (k + 1.0) / (self.count - k - 1.0))

    def _own(self, x: Floats) -> Floats:
        return (self.direction * (x - self.shift)) / self.unit

    def quantile(self, p: Floats, q: Floats | None = None, theta: Floats | None = None) -> Floats:
        """Quantiles of p (k,), with q = 1 - p where p is near 1, in the values' unit."""
        q = 1.0 - p if q is None else q
        own = self.theta if theta is None else theta
        if self.direction < 0:
            p, q = q, p
        return self.shift + self.direction * self.unit * self.law.quantile(p, q, own)

    def tails(self, x: Floats, theta: Floats | None = None) -> tuple[Floats, Floats]:
        """P(X ≤ x) and P(X > x), (k,) each."""
        own = self.theta if theta is None else theta
        u = self._own(x)
        below, above = np.exp(self.law.log_cdf(u, own)), np.exp(self.law.log_survival(u, own))
        return (above, below) if self.direction < 0 else (below, above)

    def density(self, x: Floats) -> Floats:
        """Density (k,) at x (k,) in the values' unit; zero where there can be no value."""
        with np.errstate(all="ignore"):
            own = np.exp(self.law.log_density(self._own(x), self.theta)) / self.unit
        return np.nan_to_num(own, nan=0.0)

    def scores(self, x: Floats) -> Floats:
        """Normal scores Φ⁻¹(F(x)) of values of any shape, NaN where missing."""
        present = x == x
        below, above = self.tails(np.where(present, x, self.shift + self.direction * self.unit).reshape(-1))
        z = np.where(
            below < 0.5,
            scipy.special.ndtri(np.maximum(below, _TINY)),
            -scipy.special.ndtri(np.maximum(above, _TINY)),
        ).reshape(x.shape)
        return np.where(present, z, np.nan)

    def goodness(self, sample: Sample) -> goodness.GoodnessOfFit | None:
        """Anderson–Darling test with parameters estimated; ``None`` with values below a limit, or fewer than 10."""
        if sample.below.size or sample.values.size < FEWEST_VALUES:
            return None
        u = np.sort(self._own(sample.values))
        statistic = goodness.statistic(
            self.law.log_cdf(u, self.theta), self.law.log_survival(u, self.theta)[::-1]
        )
        return goodness.of_fit(
            statistic,
            u.size,
            self.law.modification,
            goodness.eigenvalues(
                f"{self.law.name}",
                tuple(np.round(self.law.shape_key(self.theta), 4).tolist()),
                _score_functions(self.law),
            ),
        )


def _score_functions(law: Law) -> Callable[[Floats, Floats, Floats], Floats]:
    """Scores of each parameter (k, m) at the quantiles of p (m,), for the law with θ."""

    def scores(p: Floats, q: Floats, theta: Floats) -> Floats:
        u = law.quantile(p, q, theta)
        # The threshold's score has no unit to take a step in but the distance of each value from it.
        found = np.empty((law.parameters, p.size))
        for k in range(law.parameters):
            if law.threshold and k == 2:
                scale = math.exp(float(theta[1]))
                z = (np.log(u) - theta[0]) / scale
                slope = -np.expm1(np.minimum(z, 700.0)) if law.name == "weibull-3" else -z
                found[k] = (1.0 - slope / scale) / u
                continue
            step = np.zeros(law.parameters)
            step[k] = 1e-5
            found[k] = (law.log_density(u, theta + step) - law.log_density(u, theta - step)) / 2e-5
        return found

    return scores


def _frame(law: Law, sample: Sample) -> tuple[float, float, int]:
    """Shift, unit and direction of a law's own unit. Raises UnusableData ``outside-support``."""
    values, below = sample.values, sample.below
    everything = np.concatenate([values, below]) if below.size else values
    if law.half_line:
        direction, origin = 1, sample.natural_lower or 0.0
        if sample.natural_lower is None and sample.natural_upper is not None:
            direction, origin = -1, sample.natural_upper
        u = direction * (everything - origin)
        unit = float(u.mean()) or 1.0
        least = float(u.min())
        # So near its bound that it is there to rounding, and its logarithm would rule everything.
        if 0.0 < least < _NO_DISTANCE * unit:
            least = 0.0
        takes_bound = law.name in _TAKING_BOUND and not (below.size and float(below.min()) <= origin)
        if least < 0.0 or (least == 0.0 and not takes_bound):
            side = "above" if direction > 0 else "below"
            raise UnusableData.of(
                "outside-support",
                f"The distribution {law.name} has values {side} {origin:.15g} only, and the data hold others; give the "
                "natural bound of the characteristic, or choose another distribution.",
                "data",
                "values",
            )
        if direction < 0 and below.size:
            raise UnusableData.of(
                "outside-support",
                f"The distribution {law.name} going down from a natural upper bound takes no results below a limit.",
                "data",
                "below",
            )
        return origin, unit, direction
    shift = float(np.median(everything))
    u = everything - shift
    unit = float(np.abs(u).mean()) or 1.0
    down = law.mirrored and float((((u - u.mean()) / unit) ** 3).sum()) < 0.0
    return shift, unit, -1 if down else 1


def fit(name: str, sample: Sample) -> Fitted:
    """The named distribution fitted to a sample; see :func:`fit_law`."""
    return fit_law(LAWS[name], sample)


def fit_law(law: Law, sample: Sample) -> Fitted:
    """A law fitted to a sample by maximum likelihood.

    Values below a limit enter with the probability of being below it [cohen-1959]; the likelihood is then
    climbed by Newton steps. Raises UnusableData: ``outside-support``, ``no-maximum``, ``no-variation``,
    ``too-few-values``, ``too-many-values``, ``all-below-limits``, ``too-large``, ``too-small``.
    """
    name = law.name
    check(sample)
    shift, unit, direction = _frame(law, sample)
    u = direction * (sample.values - shift) / unit
    limits = direction * (sample.below - shift) / unit
    if limits.size and not law.censored:
        raise UnusableData.of(
            "no-maximum",
            f"Results below a limit do not show where the distribution {name} starts or ends; choose one without a "
            "threshold.",
            "data",
            "below",
        )
    if name == "exponential" and not limits.size:
        average = float(u.mean())
        if not average > 0.0:
            raise UnusableData.of(
                "no-variation", "The values differ by less than a number can express.", "data", "values"
            )
        theta = np.array([math.log(average)])
    else:
        # A value on the bound itself has no logarithm, and any likelihood with the exponential alone.
        theta = law.fit(u) if not limits.size else _start(law, u, limits)
    if name == "exponential":
        u = np.maximum(u, 1e-12)

    def likelihood(at: Floats) -> float:
        total = float(law.log_density(u, at).sum())
        if limits.size:
            total += float(law.log_cdf(limits, at).sum())
        return total

    # Far from its maximum a likelihood may overflow; what comes of it is refused below.
    with np.errstate(all="ignore"):
        if limits.size:
            theta = climb(law, likelihood, theta, u)
        covariance = _inverse_information(likelihood, theta, law.units(theta, u))
        value = likelihood(theta) - u.size * math.log(unit)
    if not (math.isfinite(value) and np.isfinite(theta).all()):
        raise UnusableData.of(
            "no-maximum",
            f"The likelihood of the distribution {name} cannot be computed for these values; choose another.",
            "data",
            "values",
        )
    return Fitted(law, theta, shift, unit, direction, sample.count, value, covariance)


def check(sample: Sample) -> None:
    """Raises UnusableData where no distribution can be fitted."""
    n = sample.count
    if n < FEWEST_VALUES:
        raise UnusableData.of(
            "too-few-values",
            f"A distribution is fitted to {FEWEST_VALUES} values or more; there are {n}.",
            "data",
            "values",
        )
    if n > MOST_VALUES:
        raise UnusableData.of(
            "too-many-values",
            f"Distributions are fitted to {MOST_VALUES} values at the most; there are {n}.",
            "data",
            "values",
        )
    if sample.values.size == 0:
        raise UnusableData.of(
            "all-below-limits",
            "Every result is below its limit, which bounds the process but shows no distribution; a more sensitive "
            "method of measurement is needed.",
            "data",
            "below",
        )
    if float(sample.values.min()) == float(sample.values.max()):
        raise UnusableData.of(
            "no-variation",
            "There is no variation among the values, so no distribution can be fitted; check the resolution of the "
            "gauge or how the values were recorded.",
            "data",
            "values",
        )
    check_size(sample)


def check_size(sample: Sample) -> None:
    """Raises UnusableData ``too-large`` or ``too-small`` where squares of the values would leave a double."""
    largest = float(np.abs(sample.values).max())
    if sample.below.size:
        largest = max(largest, float(np.abs(sample.below).max()))
    if largest > _TOO_LARGE:
        raise UnusableData.of(
            "too-large",
            "The values are too large to fit a distribution to; choose a larger unit.",
            "data",
            "values",
        )
    if float(np.ptp(sample.values)) < 1.0 / _TOO_LARGE:
        raise UnusableData.of(
            "too-small",
            "The values differ too little to fit a distribution to; choose a smaller unit.",
            "data",
            "values",
        )


def _start(law: Law, u: Floats, limits: Floats) -> Floats:
    """Where to begin climbing: the fit with each value below a limit put at a part of it."""
    filled = np.concatenate([u, limits * 0.6 if law.half_line else limits - 0.5])
    try:
        return law.fit(filled)
    except UnusableData:
        return np.array([0.5 * float(u.mean()), math.log(float(u.std()) or 1.0)])


def _derivatives(f: Callable[[Floats], float], at: Floats, units: Floats) -> tuple[float, Floats, Floats]:
    """Value, gradient and Hessian in steps of the units, by central differences."""
    k = at.size
    h = 2e-3
    centre = f(at)
    gradient, hessian = np.empty(k), np.empty((k, k))
    plus, minus = np.empty(k), np.empty(k)
    steps = np.diag(units * h)
    for i in range(k):
        plus[i], minus[i] = f(at + steps[i]), f(at - steps[i])
        gradient[i] = (plus[i] - minus[i]) / (2.0 * h)
        hessian[i, i] = (plus[i] - 2.0 * centre + minus[i]) / (h * h)
    for i in range(k):
        for j in range(i):
            both = f(at + steps[i] + steps[j]) + f(at - steps[i] - steps[j])
            hessian[i, j] = hessian[j, i] = (
                both - plus[i] - plus[j] - minus[i] - minus[j] + 2.0 * centre
            ) / (2.0 * h * h)
    return centre, gradient, hessian


def _inverse_information(f: Callable[[Floats], float], at: Floats, units: Floats) -> Floats | None:
    information = -_derivatives(f, at, units)[2]
    if not np.isfinite(information).all():
        return None
    eigen = np.linalg.eigvalsh(information)
    if float(eigen[0]) <= 1e-9 * abs(float(eigen[-1])):
        return None
    inverse: Floats = np.linalg.inv(information) * np.outer(units, units)
    return inverse


def climb(law: Law, f: Callable[[Floats], float], start: Floats, u: Floats, steps: int = CLIMB_CAP) -> Floats:
    """The maximum of f by damped Newton steps. Raises UnusableData ``no-maximum``."""
    at = start
    for _ in range(steps):
        units = law.units(at, u)
        value, gradient, hessian = _derivatives(f, at, units)
        eigen, vectors = np.linalg.eigh(-hessian)
        step = vectors @ (
            (vectors.T @ gradient) / np.maximum(np.abs(eigen), 1e-6 * max(abs(float(eigen[-1])), 1.0))
        )
        longest = float(np.abs(step).max())
        if longest < 1e-7:
            return at
        step *= min(1.0, 2.0 / longest) * units
        for _ in range(40):
            new = at + step
            if f(new) >= value - 1e-10 * abs(value):
                break
            step *= 0.5
        else:
            return at
        at = new
    raise UnusableData.of(
        "no-maximum",
        f"The likelihood of the distribution {law.name} has no maximum with these values: too many of them are below "
        "their limits, or it fits none of them.",
        "data",
        "values",
    )


def split(values: Floats, below: Floats | None) -> tuple[Floats, Floats]:
    """Values (n,) and limits of those below one, (k,), from parallel lists with NaN where there is nothing.

    Raises UnusableData ``unequal-length`` or ``both-given``.
    """
    if below is None:
        return values[values == values], np.empty(0)
    if below.shape != values.shape:
        raise UnusableData.of(
            "unequal-length",
            "The limits of results below one must be a list as long as the values, with null where there is a value.",
            "data",
            "below",
        )
    given: Booleans = below == below
    clash = np.flatnonzero(given & (values == values))
    if clash.size:
        raise UnusableData.of(
            "both-given",
            "This result has a value and is also said to be below a limit; one of them must be null.",
            "data",
            "below",
            int(clash[0]),
        )
    return values[values == values], below[given]
