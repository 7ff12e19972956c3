"""The non-central t distribution, and the noncentrality that a confidence limit needs.

T = (Z + δ) / W with Z standard normal and W = χ(ν)/√ν independent of it. Library routines sum a
Poisson series whose length grows with δ², lose digits with it, and give up for large ν and δ. Here one
of the two variables is conditioned on and the other integrated by a fixed Gauss–Legendre rule,
whichever leaves the smoother integrand, so that the cost and the error (below 1e-11 absolute for ν of 2
or more) do not depend on ν or δ, up to ν = 1e7 and any δ.
"""

from __future__ import annotations

from functools import lru_cache

import numpy as np
import scipy

from ..data import Floats
from ..factors import gauss_legendre

_NODES = 96
_REACH = 8.3  # standard normal mass beyond it: 1e-16
_ROOT_TOLERANCE = 1e-11
_ROOT_CAP = 60


@lru_cache(maxsize=64)
def _chi_nodes(degrees_of_freedom: float) -> tuple[Floats, Floats]:
    """Nodes and probability weights, (96,) each, for W = χ(ν)/√ν, integrated over log W."""
    half = 0.5 * degrees_of_freedom
    low = float(scipy.special.gammaincinv(half, 1e-16)) / half
    high = float(scipy.special.gammainccinv(half, 1e-16)) / half
    # Below exp(-20) lies mass of 1e-9 at most even for ν = 1, and of nothing for a usable ν.
    low_log = max(0.5 * float(np.log(max(low, 1e-300))), -20.0 if degrees_of_freedom >= 1 else -40.0)
    high_log = 0.5 * float(np.log(high))
    x, weight = gauss_legendre(_NODES)
    s = low_log + (high_log - low_log) * x
    density = np.exp(-half * (np.expm1(2.0 * s) - 2.0 * s))
    mass = weight * density
    # Dividing by the sum spares the gamma function, and with it the digits it loses for large ν.
    return np.exp(s), mass / mass.sum()


def _by_spread(t: Floats, degrees_of_freedom: float, delta: Floats) -> Floats:
    w, mass = _chi_nodes(degrees_of_freedom)
    return scipy.special.ndtr(t[:, None] * w - delta[:, None]) @ mass


def _by_location(t: Floats, degrees_of_freedom: float, delta: Floats) -> Floats:
    x, weight = gauss_legendre(_NODES)
    low = np.clip(-delta, -_REACH, _REACH)
    length = _REACH - low
    z = low[:, None] + length[:, None] * x
    w = np.maximum((z + delta[:, None]) / t[:, None], 0.0)
    survival = scipy.special.gammaincc(0.5 * degrees_of_freedom, 0.5 * degrees_of_freedom * w * w)
    density = np.exp(-0.5 * z * z) / np.sqrt(2.0 * np.pi)
    # Below z = -δ the event is certain.
    return np.minimum(scipy.special.ndtr(low) + length * ((density * survival) @ weight), 1.0)


def noncentral_t_cdf(t: Floats, degrees_of_freedom: float, delta: Floats) -> Floats:
    """P(T ≤ t) for T non-central t.

    t, delta: (k,) finite; degrees_of_freedom: one positive number, whole or not.
    Returns (k,). Source: the definition (Johnson, Kotz & Balakrishnan 1995, chapter 31).
    """
    reflected = t < 0
    size = np.abs(t)
    centre = np.where(reflected, -delta, delta)
    answer = np.empty(size.shape)
    # The spread's step in W is 1/t wide beside W's own 1/√(2ν): the smoother of the two is integrated.
    wide = size >= np.sqrt(2.0 * degrees_of_freedom)
    if wide.any():
        answer[wide] = _by_location(size[wide], degrees_of_freedom, centre[wide])
    narrow = ~wide
    if narrow.any():
        answer[narrow] = _by_spread(size[narrow], degrees_of_freedom, centre[narrow])
    return np.where(reflected, 1.0 - answer, answer)


def noncentrality(t: Floats, degrees_of_freedom: float, probability: Floats) -> Floats:
    """The δ for which P(T ≤ t) equals `probability`: a confidence limit for δ once t is observed.

    t, probability: (k,), finite and strictly between 0 and 1; degrees_of_freedom: one positive number.
    Secant steps in the probit of the probability, kept inside a bracket; they end when every probit
    agrees to 1e-11 or the bracket has closed to rounding, after 60 steps at the most (bisection alone
    would then have closed the bracket by 2^-60).
    """
    reflected = t < 0
    size = np.abs(t)
    target = np.where(reflected, 1.0 - probability, probability)
    wanted = scipy.special.ndtri(target)
    half = 0.5 * degrees_of_freedom
    # P(T ≤ t) ≥ P(Z ≤ z)P(W ≥ w) at δ = tw − z, and the like for the other side: brackets that hold.
    spare_low, spare_high = 0.5 * (1.0 - target), 0.5 * target
    low_w = np.sqrt(scipy.special.gammaincinv(half, spare_low) / half)
    high_w = np.sqrt(scipy.special.gammainccinv(half, spare_high) / half)
    low = size * low_w + scipy.special.ndtri(spare_low)
    high = size * high_w - scipy.special.ndtri(spare_high)
    slope = np.sqrt(1.0 + size * size / (2.0 * degrees_of_freedom))
    delta = np.clip(size * (1.0 - 0.25 / degrees_of_freedom) - wanted * slope, low, high)
    previous_delta, previous_gap = delta, None
    for _ in range(_ROOT_CAP):
        gap = _probit(noncentral_t_cdf(size, degrees_of_freedom, delta)) - wanted
        low = np.where(gap > 0, delta, low)
        high = np.where(gap <= 0, delta, high)
        done = (np.abs(gap) <= _ROOT_TOLERANCE) | (high - low <= 4e-16 * np.abs(delta))
        if done.all():
            break
        if previous_gap is None:
            step = gap * slope
        else:
            moved = previous_gap - gap
            flat = np.abs(moved) < 1e-300
            step = gap * np.where(flat, slope, (delta - previous_delta) / np.where(flat, 1.0, moved))
        proposed = delta + step
        inside = (proposed > low) & (proposed < high)
        previous_delta, previous_gap = delta, gap
        delta = np.where(done, delta, np.where(inside, proposed, 0.5 * (low + high)))
    return np.where(reflected, -delta, delta)


def _probit(probability: Floats) -> Floats:
    return scipy.special.ndtri(np.clip(probability, 1e-300, 1.0 - 1e-16))
