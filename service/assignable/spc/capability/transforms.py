"""Transformations that make values normal: Box and Cox's power, and Johnson's three systems.

Each is a law like any other, its parameters fitted together by maximum likelihood [box-cox-1964],
[johnson-1949], so that quantiles, intervals and goodness of fit need nothing else.
"""

from __future__ import annotations

import math

import numpy as np
import scipy

from ..data import Floats
from ..errors import UnusableData
from .distributions import CLIMB_CAP, LAWS, DistributionParameter, Law, climb, threshold_normal

_LOG_ROOT_2PI = 0.5 * math.log(2.0 * math.pi)
_TINY = 1e-300
_FARTHEST_POWER = 5.0
_NO_POWER = 1e-8
_NEAREST_BOUND, _FARTHEST_BOUND = math.log(1e-3), math.log(100.0)
_STEEPEST = math.log(40.0)
_PART = 4000
_FEW_STEPS = 8


def _quantile(p: Floats, q: Floats) -> Floats:
    found: Floats = np.where(p < 0.5, scipy.special.ndtri(p), -scipy.special.ndtri(q))
    return found


class _ToNormal(Law):
    """A law whose values some increasing function makes standard normal."""

    def _z(self, u: Floats, theta: Floats) -> Floats:
        raise NotImplementedError

    def _back(self, z: Floats, theta: Floats) -> Floats:
        raise NotImplementedError

    def log_cdf(self, u: Floats, theta: Floats) -> Floats:
        found: Floats = scipy.special.log_ndtr(self._z(u, theta))
        return found

    def log_survival(self, u: Floats, theta: Floats) -> Floats:
        found: Floats = scipy.special.log_ndtr(-self._z(u, theta))
        return found

    def quantile(self, p: Floats, q: Floats, theta: Floats) -> Floats:
        return self._back(_quantile(p, q), theta)

    def shape_key(self, theta: Floats) -> Floats:
        return theta

    def _no_maximum(self) -> UnusableData:
        error = UnusableData.of(
            "no-maximum",
            f"The likelihood of the distribution {self.name} has no maximum with these values: a simpler one says as "
            "much of them.",
            "data",
            "values",
        )
        assert isinstance(error, UnusableData)
        return error


class _BoxCox(_ToNormal):
    """(u^λ - 1)/λ is normal; θ = (λ, μ, log σ)."""

    name = "box-cox"
    half_line = True
    parameters = 3
    censored = False

    def _power(self, log_u: Floats, power: float) -> Floats:
        if abs(power) < _NO_POWER:
            return log_u
        found: Floats = np.expm1(np.clip(power * log_u, -300.0, 300.0)) / power
        return found

    def _z(self, u: Floats, theta: Floats) -> Floats:
        y = self._power(np.log(np.maximum(u, _TINY)), float(theta[0]))
        found: Floats = (y - theta[1]) / math.exp(float(theta[2]))
        return found

    def _back(self, z: Floats, theta: Floats) -> Floats:
        power = float(theta[0])
        y = theta[1] + math.exp(float(theta[2])) * z
        if abs(power) < _NO_POWER:
            found: Floats = np.exp(np.clip(y, -690.0, 690.0))
            return found
        # Beyond its bound the power has no root: the bound itself stands for it.
        root: Floats = np.log1p(np.maximum(power * y, -1.0 + 1e-12)) / power
        return np.exp(np.clip(root, -690.0, 690.0))

    def log_density(self, u: Floats, theta: Floats) -> Floats:
        z = self._z(u, theta)
        found: Floats = (
            -0.5 * z * z - _LOG_ROOT_2PI - theta[2] + (theta[0] - 1.0) * np.log(np.maximum(u, _TINY))
        )
        return found

    def fit(self, u: Floats) -> Floats:
        log_u = np.log(u)
        total = float(log_u.sum())

        def loss(power: float) -> float:
            spread = float(self._power(log_u, power).std())
            return len(u) * math.log(max(spread, _TINY)) - (power - 1.0) * total

        found = scipy.optimize.minimize_scalar(
            loss, bounds=(-_FARTHEST_POWER, _FARTHEST_POWER), method="bounded", options={"xatol": 1e-7}
        )
        power = float(found.x)
        if abs(power) > _FARTHEST_POWER - 1e-3:
            raise self._no_maximum()
        y = self._power(log_u, power)
        return np.array([power, float(y.mean()), math.log(float(y.std()))])

    def units(self, theta: Floats, u: Floats) -> Floats:
        sigma = math.exp(float(theta[2]))
        return np.array([1.0, sigma, 1.0])

    def told(self, theta: Floats, shift: float, unit: float) -> tuple[DistributionParameter, ...]:
        power = float(theta[0])
        y = np.array([theta[1]])
        scale = math.exp(power * math.log(unit))
        mean = float(
            (y[0] + math.log(unit))
            if abs(power) < _NO_POWER
            else (scale * (power * y[0] + 1.0) - 1.0) / power
        )
        return (
            DistributionParameter("power", power),
            DistributionParameter("transformed-mean", mean),
            DistributionParameter("transformed-sd", scale * math.exp(float(theta[2]))),
        )


class _Unbounded(_ToNormal):
    """Johnson's SU: γ + δ asinh((u - ξ)/λ) is standard normal; θ = (γ, log δ, ξ, log λ)."""

    name = "johnson-su"
    half_line = False
    parameters = 4
    censored = False

    def _z(self, u: Floats, theta: Floats) -> Floats:
        found: Floats = theta[0] + math.exp(min(float(theta[1]), 50.0)) * np.arcsinh(self._y(u, theta))
        return found

    def _y(self, u: Floats, theta: Floats) -> Floats:
        found: Floats = (u - theta[2]) / math.exp(min(max(float(theta[3]), -50.0), 50.0))
        return found

    def _back(self, z: Floats, theta: Floats) -> Floats:
        found: Floats = theta[2] + math.exp(float(theta[3])) * np.sinh(
            np.clip((z - theta[0]) / math.exp(float(theta[1])), -600.0, 600.0)
        )
        return found

    def log_density(self, u: Floats, theta: Floats) -> Floats:
        z, y = self._z(u, theta), self._y(u, theta)
        found: Floats = (
            -0.5 * z * z
            - _LOG_ROOT_2PI
            + theta[1]
            - theta[3]
            - 0.5 * np.log1p(np.minimum(np.abs(y), 1e150) ** 2)
        )
        return found

    def fit(self, u: Floats) -> Floats:
        quarter, half, three = np.quantile(u, [0.25, 0.5, 0.75])
        spread = max(float(three - quarter) / 1.35, 1e-3 * float(np.ptp(u)))
        start = np.array([0.0, math.log(1.5), float(half), math.log(1.5 * spread)])
        try:
            theta = start
            # A part of many values shows where the maximum is, or that there is none.
            if u.size > 2 * _PART:
                theta = self._climbed(theta, np.sort(u)[:: u.size // _PART], CLIMB_CAP)
                return self._climbed(theta, u, _FEW_STEPS)
            return self._climbed(theta, u, CLIMB_CAP)
        except UnusableData:
            raise self._no_maximum() from None

    def _climbed(self, start: Floats, u: Floats, steps: int) -> Floats:
        theta = climb(self, lambda at: float(self.log_density(u, at).sum()), start, u, steps)
        if not -3.0 < float(theta[1]) < _STEEPEST:
            raise self._no_maximum()
        return theta

    def units(self, theta: Floats, u: Floats) -> Floats:
        delta, scale = math.exp(min(float(theta[1]), 50.0)), math.exp(min(max(float(theta[3]), -50.0), 50.0))
        return np.array([1.0, min(1.0, 1.0 / delta), scale / delta, min(1.0, 1.0 / delta)])

    def told(self, theta: Floats, shift: float, unit: float) -> tuple[DistributionParameter, ...]:
        gamma, log_delta, location, log_scale = (float(one) for one in theta)
        return (
            DistributionParameter("gamma", gamma),
            DistributionParameter("delta", math.exp(log_delta)),
            DistributionParameter("location", shift + unit * location),
            DistributionParameter("scale", unit * math.exp(log_scale)),
        )


class _Bounded(_ToNormal):
    """Johnson's SB: γ + δ log((u - a)/(b - u)) is standard normal; θ = (γ, log δ, a, b)."""

    name = "johnson-sb"
    half_line = False
    parameters = 4
    censored = False

    def _odds(self, u: Floats, theta: Floats) -> tuple[Floats, Floats]:
        return np.maximum(u - theta[2], _TINY), np.maximum(theta[3] - u, _TINY)

    def _z(self, u: Floats, theta: Floats) -> Floats:
        low, high = self._odds(u, theta)
        found: Floats = theta[0] + math.exp(float(theta[1])) * (np.log(low) - np.log(high))
        return found

    def _back(self, z: Floats, theta: Floats) -> Floats:
        share = scipy.special.expit((z - theta[0]) / math.exp(float(theta[1])))
        found: Floats = theta[2] + (theta[3] - theta[2]) * share
        return found

    def log_density(self, u: Floats, theta: Floats) -> Floats:
        low, high = self._odds(u, theta)
        z = self._z(u, theta)
        found: Floats = (
            -0.5 * z * z
            - _LOG_ROOT_2PI
            + theta[1]
            + math.log(theta[3] - theta[2])
            - np.log(low)
            - np.log(high)
        )
        return found

    def fit(self, u: Floats) -> Floats:
        least, most = float(u.min()), float(u.max())
        reach = most - least

        def at(gaps: Floats) -> tuple[float, Floats]:
            low, high = least - reach * math.exp(gaps[0]), most + reach * math.exp(gaps[1])
            below, above = np.log(u - low), np.log(high - u)
            y = below - above
            mean, sd = float(y.mean()), float(y.std())
            value = len(u) * (math.log(high - low) - math.log(sd) - 0.5 - _LOG_ROOT_2PI)
            value -= float((below + above).sum())
            return value, np.array([-mean / sd, -math.log(sd), low, high])

        def loss(gaps: Floats) -> float:
            inside = np.clip(gaps, _NEAREST_BOUND, _FARTHEST_BOUND)
            return -at(inside)[0] + 1e3 * float(np.abs(gaps - inside).sum())

        found = scipy.optimize.minimize(
            loss,
            np.array([-1.5, -1.5]),
            method="Nelder-Mead",
            options={"xatol": 1e-5, "fatol": 1e-8, "maxiter": 300},
        )
        if not bool(((found.x > _NEAREST_BOUND + 0.01) & (found.x < _FARTHEST_BOUND - 0.01)).all()):
            raise self._no_maximum()
        return at(found.x)[1]

    def units(self, theta: Floats, u: Floats) -> Floats:
        return np.array([1.0, 1.0, 0.3 * (float(u.min()) - theta[2]), 0.3 * (theta[3] - float(u.max()))])

    def told(self, theta: Floats, shift: float, unit: float) -> tuple[DistributionParameter, ...]:
        gamma, log_delta, low, high = (float(one) for one in theta)
        return (
            DistributionParameter("gamma", gamma),
            DistributionParameter("delta", math.exp(log_delta)),
            DistributionParameter("lower-bound", shift + unit * low),
            DistributionParameter("upper-bound", shift + unit * high),
        )


TRANSFORMS: dict[str, Law] = {
    law.name: law for law in (_BoxCox(), threshold_normal("johnson-sl"), _Bounded(), _Unbounded())
}
ALL_LAWS: dict[str, Law] = {**LAWS, **TRANSFORMS}
