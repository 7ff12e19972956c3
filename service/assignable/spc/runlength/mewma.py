"""Run lengths of the charts of several variables: T² in closed form, MEWMA on quadrature grids.

Both see the process only through distances in its own metric, so the covariance may be taken as the
identity, and a shift matters only by its size (its Mahalanobis distance). Smoothed vectors are measured
in units of λ: ``u = z/λ`` moves by ``u' = x + (1 − λ) u`` and the chart signals when ``|u|`` exceeds
``√(h/(λ(2 − λ)))``.

In control the radius of u alone is a Markov process whose step is a noncentral chi distribution: its
integral equation ([rigdon-1995]) is solved on Gauss–Legendre nodes. After a shift two numbers are
enough, the part of u along the shift and the radius of the rest ([runger-prabhu-1996]): the same in two
dimensions, the equation solved by iteration.
"""

from __future__ import annotations

import math
from functools import lru_cache
from itertools import pairwise

import numpy as np
import scipy

from ..data import Floats
from ..errors import UnusableParameter
from .quadrature import StoppedChain, gauss_legendre
from .survival import Decay, follow, geometric, settle

METHOD = "integral equation (Rigdon 1995; Runger & Prabhu 1996) on Gauss–Legendre nodes"
ACCURACY = "relative 1e-6"

SMALLEST_SMOOTHING = 0.01
SMALLEST_SMOOTHING_EXACT = 0.03
FEW_VARIABLES = 10
SMALLEST_SMOOTHING_EXACT_OF_MANY = 0.1  # by exact limits every point has its own kernel, a dear one with many
"""Below it the limits of the first points settle too slowly to be followed one by one."""
SHORTEST_ARL = 5.0
LONGEST_ARL = 1e7
_TINY = 1e-280
_SETTLED_IN_CONTROL = 1e-7
_SETTLED_SHIFTED = 1e-4
_SEEN = 10.0  # standard deviations beyond which the normal density is none


def chi_square_tail(limit: float, variables: int, noncentrality: float = 0.0) -> float:
    """P(χ² > limit) of the noncentral chi-square law, as a sum of positive terms.

    With a limit h this is the chance that a T² point signals after a shift of Mahalanobis distance d,
    ``noncentrality = n d²`` for subgroups of n. Poisson mixture of central laws, cut where its weights are
    below 1e-17.
    """
    if noncentrality <= 0.0:
        return float(scipy.special.chdtrc(variables, limit))
    half = 0.5 * noncentrality
    reach = 9.0 * math.sqrt(half) + 40.0
    k = np.arange(max(0, math.floor(half - reach)), math.ceil(half + reach) + 1)
    weight = np.exp(k * math.log(half) - half - scipy.special.gammaln(k + 1.0))
    return min(1.0, float(weight @ scipy.special.chdtrc(variables + 2 * k, limit)))


def _radial_density(s: Floats, c: Floats, p: int) -> Floats:
    """Density at radius ``s`` of a p-variate standard normal vector about a mean of length ``c``."""
    if p == 1:
        near: Floats = np.exp(-0.5 * (s - c) ** 2)
        both: Floats = (near + np.exp(-0.5 * (s + c) ** 2)) / math.sqrt(2.0 * math.pi)
        return both
    order = 0.5 * p - 1.0
    z = s * c
    bessel = scipy.special.ive(order, z)
    usable = (bessel > _TINY) & (z > 0.0)
    with np.errstate(divide="ignore"):
        # Below what the scaled function can hold, the first two terms of its series are exact.
        log_ratio = np.where(
            usable,
            np.log(np.where(usable, bessel, 1.0)) - order * np.log(np.where(usable, z, 1.0)),
            -z + np.log1p(z * z / (4.0 * (order + 1.0))) - order * math.log(2.0) - math.lgamma(order + 1.0),
        )
        density: Floats = np.exp(log_ratio + (2.0 * order + 1.0) * np.log(s) - 0.5 * (s - c) ** 2)
    return density


def _nodes(width: float, per_unit: float = 2.0, least: int = 14) -> int:
    return least + math.ceil(per_unit * width)


def _bound(smoothing: float, limit: float) -> float:
    return math.sqrt(limit / (smoothing * (2.0 - smoothing)))


def _on(low: float, high: float, count: int) -> tuple[Floats, Floats]:
    x, w = gauss_legendre(count)
    half = 0.5 * (high - low)
    return low + half * (x + 1.0), half * w


def _chain(p: int, smoothing: float, limit: float) -> tuple[StoppedChain, Floats, Floats]:
    """The radial process under settled limits, its nodes and their weights; the likeliest node is home."""
    bound = _bound(smoothing, limit)
    u, w = _on(0.0, bound, _nodes(bound))
    home = int(np.argmin(np.abs(u - min(math.sqrt(p / (smoothing * (2.0 - smoothing))), 0.8 * bound))))
    order = np.concatenate(([home], np.delete(np.arange(len(u)), home)))
    u, w = u[order], w[order]
    c = (1.0 - smoothing) * u
    steps = _radial_density(u[None, :], c[:, None], p) * w
    reach = _SEEN + max(0.0, math.sqrt(float(c.max()) ** 2 + p) - bound)
    beyond, weight = _on(bound, bound + reach, _nodes(reach, 3.0, 24))
    exits = _radial_density(beyond[None, :], c[:, None], p) @ weight
    return StoppedChain(steps, exits), u, w


def _check(p: int, smoothing: float, limit: float, exact: bool) -> None:
    least = SMALLEST_SMOOTHING
    if exact:
        least = SMALLEST_SMOOTHING_EXACT if p <= FEW_VARIABLES else SMALLEST_SMOOTHING_EXACT_OF_MANY
    if not least <= smoothing <= 1.0:
        raise UnusableParameter.of(
            "smoothing-out-of-range",
            f"The smoothing of this chart lies between {least} and 1, not at {smoothing:g}.",
            "smoothing",
        )
    if not limit > 0.0:
        raise UnusableParameter.of("limit-out-of-range", "The limit must be greater than 0.", "limit")


@lru_cache(maxsize=512)
def in_control_arl(p: int, smoothing: float, limit: float, *, exact: bool = False) -> float:
    """In-control average run length of a MEWMA of p variables from a start at the mean.

    limit: h, of the statistic z'Σz⁻¹z; exact: whether Σz is that of each point, growing from the start,
    and not the settled one. Infinity where it is beyond 1e300. Accuracy: relative 1e-6 or better.
    Raises UnusableParameter for a smoothing or a limit out of range. Source: [rigdon-1995],
    [lowry-woodall-champ-rigdon-1992].
    """
    _check(p, smoothing, limit, exact)
    if smoothing == 1.0:
        tail = chi_square_tail(limit, p)
        return 1.0 / tail if tail > 0.0 else math.inf
    chain, u, w = _chain(p, smoothing, limit)
    if chain.rate <= 0.0:
        return math.inf
    if not exact:
        row = _radial_density(u, np.zeros_like(u), p) * w
        return chain.mean_from(row) / chain.rate
    keep = 1.0 - smoothing
    bound = _bound(smoothing, limit)
    last = math.ceil(math.log(_SETTLED_IN_CONTROL) / (2.0 * math.log(keep)))
    total = 1.0
    at, mass = np.zeros(1), np.ones(1)
    for point in range(1, last + 1):
        here = bound * math.sqrt(1.0 - keep ** (2 * point))
        u_next, w_next = _on(0.0, here, _nodes(here))
        mass = mass @ (_radial_density(u_next[None, :], keep * at[:, None], p) * w_next)
        at = u_next
        total += float(mass.sum())
    mass = mass @ (_radial_density(u[None, :], keep * at[:, None], p) * w)
    return total + float(mass @ chain.mean) / chain.rate


@lru_cache(maxsize=512)
def limit_for(p: int, smoothing: float, arl: float, *, exact: bool = False) -> float:
    """The limit h whose in-control average run length is ``arl``, to a relative 1e-9 in h.

    Brent's method between brackets that always hold: the chi-square quantile of independent points lies
    above. Raises UnusableParameter for an average below 5 or above 1e7.
    """
    if not SHORTEST_ARL <= arl <= LONGEST_ARL:
        raise UnusableParameter.of(
            "arl-out-of-range",
            f"The in-control run length lies between {SHORTEST_ARL:g} and {LONGEST_ARL:g} points.",
            "in_control_arl",
        )
    _check(p, smoothing, 1.0, exact)
    above = float(scipy.special.chdtri(p, 1.0 / arl))
    if smoothing == 1.0:
        return above

    def surplus(limit: float) -> float:
        return math.log(in_control_arl(p, smoothing, limit, exact=exact) / arl)

    below = above
    if exact:
        # Early limits are tighter than the settled ones, so the settled chart's own h lies below.
        below, above = limit_for(p, smoothing, arl) * (1.0 - 1e-9), above * (1.0 + 1e-9)
        # An average by the exact limits takes long; by how much it grows with h, the settled ones tell at once.
        slope = math.log(in_control_arl(p, smoothing, 1.01 * below) / in_control_arl(p, smoothing, below)) / (
            0.01 * below
        )
        near = below - 1.1 * surplus(below) / slope if slope > 0.0 else above
        if below < near < above and surplus(near) >= 0.0:
            above = near
        return float(scipy.optimize.brentq(surplus, below, above, rtol=1e-8))
    while surplus(below) >= 0.0:
        below *= 0.7
    return float(scipy.optimize.brentq(surplus, below, above * (1.0 + 1e-9), rtol=1e-10))


def _shape(bound: float) -> tuple[int, int]:
    return _nodes(2.0 * bound, 2.6, 14), _nodes(bound)


class _Disc:
    """The grid of one bound: along the shift ``y = b sin θ``, the rest ``w = v b cos θ``."""

    __slots__ = ("bound", "shape", "w", "weight", "y", "y_weight")

    def __init__(self, bound: float) -> None:
        along, across = _shape(bound)
        theta, weight = _on(-0.5 * math.pi, 0.5 * math.pi, along)
        v, v_weight = _on(0.0, 1.0, across)
        half = bound * np.cos(theta)
        self.bound, self.shape = bound, (along, across)
        self.y, self.y_weight = bound * np.sin(theta), weight * half
        self.w, self.weight = half[:, None] * v, half[:, None] * v_weight

    def rest(self, keep: float, start: Floats, p: int) -> Floats:
        """(starts, along, across): weights of the rest's next radius, from each radius of ``start``."""
        return np.asarray(
            _radial_density(self.w[None], keep * start[:, None, None], p - 1) * self.weight, dtype=np.float64
        )

    def along(self, keep: float, start: Floats, shift: float) -> Floats:
        """(starts, along): weights of the next place along the shift."""
        step = self.y[None, :] - keep * start[:, None] - shift
        weights: Floats = np.exp(-0.5 * step * step) * self.y_weight / math.sqrt(2.0 * math.pi)
        return weights


def _interpolation(bound: float) -> tuple[Floats, Floats]:
    """Chebyshev nodes on (0, bound) and their barycentric weights."""
    count = _nodes(bound, 1.6)
    angle = np.pi * (2.0 * np.arange(count) + 1.0) / (2.0 * count)
    weight = np.sin(angle) * np.where(np.arange(count) % 2 == 0, 1.0, -1.0)
    return 0.5 * bound * (1.0 - np.cos(angle)), weight


def _reading(nodes: Floats, weight: Floats, at: Floats) -> Floats:
    """(..., nodes): what reads a function known at the nodes off at the places ``at``."""
    gap = at[..., None] - nodes
    gap = np.where(gap == 0.0, 1e-300, gap)
    share = weight / gap
    reading: Floats = share / share.sum(axis=-1, keepdims=True)
    return reading


class _Step:
    """One step from the states of a disc to those of the next disc, applied without its full matrix.

    Only the next place along the shift depends on the shift, and only the radius of the rest on the rest:
    what is integrated over the rest is a smooth function of the radius, known from few of them.
    """

    __slots__ = ("_ahead", "_keep", "_now", "_reading", "_rest")

    def __init__(self, now: _Disc, ahead: _Disc, keep: float, p: int) -> None:
        nodes, weight = _interpolation(now.bound)
        self._now, self._ahead, self._keep = now, ahead, keep
        self._rest = ahead.rest(keep, nodes, p).transpose(1, 0, 2).copy()
        self._reading = _reading(nodes, weight, now.w)

    def along(self, shift: float) -> Floats:
        return self._ahead.along(self._keep, self._now.y, shift)

    def ahead(self, along: Floats, mass: Floats) -> Floats:
        """Where the ``mass`` over this disc goes: that over the next one; the transpose of a call."""
        radii = np.matmul(mass[:, None, :], self._reading)[:, 0, :]
        there: Floats = np.matmul((along.T @ radii)[:, None, :], self._rest)[:, 0, :]
        return there

    def exits(self, p: int, shift: float) -> Floats:
        """The chance of a signal at the next point from each state of this disc."""
        disc, bound = self._now, self._ahead.bound
        centre = np.hypot(self._keep * disc.y[:, None] + shift, self._keep * disc.w)
        farthest = float(centre.max())
        reach = _SEEN + max(0.0, math.sqrt(farthest**2 + p) - bound)
        beyond, weight = _on(bound, bound + reach, _nodes(reach, 3.0, 24))
        # A smooth function of one radius, whose logarithm is known from few of them.
        nodes, share = _interpolation(farthest)
        known = _radial_density(beyond[None, :], nodes[:, None], p) @ weight
        exits: Floats = np.exp(_reading(nodes, share, centre) @ np.log(np.maximum(known, 1e-300)))
        return np.minimum(exits, 1.0)

    def __call__(self, along: Floats, later: Floats) -> Floats:
        """Expected ``later`` (over the next disc) from each state of this one."""
        rest = np.matmul(self._rest, later[:, :, None])[:, :, 0]
        here: Floats = np.matmul(self._reading, (along @ rest)[:, :, None])[:, :, 0]
        return here


def _settled(step: _Step, disc: _Disc, along: Floats) -> Floats:
    """Mean run length from each state under settled limits."""
    size = disc.shape[0] * disc.shape[1]

    def left(flat: Floats) -> Floats:
        state = flat.reshape(disc.shape)
        result: Floats = (state - step(along, state)).ravel()
        return result

    operator = scipy.sparse.linalg.LinearOperator((size, size), matvec=left, dtype=np.float64)
    found, code = scipy.sparse.linalg.gmres(
        operator, np.ones(size), rtol=1e-9, atol=0.0, restart=60, maxiter=40
    )
    if code != 0:
        raise UnusableParameter.of(
            "not-converged", "The run length of this chart could not be computed.", "smoothing"
        )
    return np.asarray(found, dtype=np.float64).reshape(disc.shape)


def _points_followed(smoothing: float) -> int:
    return math.ceil(math.log(_SETTLED_SHIFTED) / (2.0 * math.log1p(-smoothing)))


def work(smoothing: float, limit: float, *, exact: bool) -> int:
    """About how many values of the kernel :func:`arls` needs: some 5 million a second."""
    if smoothing == 1.0:
        return 0
    along, across = _shape(_bound(smoothing, limit))
    return along * across * across * (_points_followed(smoothing) if exact else 1)


@lru_cache(maxsize=256)
def arls(
    p: int, smoothing: float, limit: float, shifts: tuple[float, ...], *, exact: bool = False
) -> tuple[float, ...]:
    """Average run lengths after lasting shifts from the first point on, the start at the mean.

    shifts: Mahalanobis distances of the new mean, in standard deviations of the plotted vectors (for
    means of n, √n times that of single pieces); otherwise as :func:`in_control_arl`. Accuracy: relative
    1e-6, and 1e-4 with ``exact``. Source: [runger-prabhu-1996].
    """
    _check(p, smoothing, limit, exact)
    if smoothing == 1.0:
        return tuple(1.0 / max(chi_square_tail(limit, p, shift * shift), 1e-300) for shift in shifts)
    keep = 1.0 - smoothing
    disc = _Disc(_bound(smoothing, limit))
    step = _Step(disc, disc, keep, p)
    means = [_settled(step, disc, step.along(shift)) for shift in shifts]
    if exact:
        for point in range(_points_followed(smoothing), 0, -1):
            now = _Disc(_bound(smoothing, limit) * math.sqrt(1.0 - keep ** (2 * point)))
            back = _Step(now, disc, keep, p)
            means = [1.0 + back(back.along(shift), later) for shift, later in zip(shifts, means, strict=True)]
            disc = now
    start = disc.rest(keep, np.zeros(1), p)[0]
    return tuple(
        1.0 + float((disc.along(keep, np.zeros(1), shift)[0] @ (start * mean)).sum())
        for shift, mean in zip(shifts, means, strict=True)
    )


@lru_cache(maxsize=2)
def _steps(p: int, smoothing: float, limit: float, growing: int) -> tuple[_Disc, tuple[_Step, ...]]:
    """The disc of the first point, and the steps from there on: the last one is that of the settled limits."""
    keep, bound = 1.0 - smoothing, _bound(smoothing, limit)
    settled = _Disc(bound)
    discs = [_Disc(bound * math.sqrt(1.0 - keep ** (2 * point))) for point in range(1, growing + 1)]
    discs += [settled, settled]
    return discs[0], tuple(_Step(now, ahead, keep, p) for now, ahead in pairwise(discs))


class _Walk:
    """The survivors after a shift, point by point, on the grid of each point's limit."""

    __slots__ = ("_along", "_exits", "_first", "_keep", "_p", "_point", "_shift", "_steps", "mass")

    def __init__(self, p: int, smoothing: float, limit: float, shift: float, *, growing: int) -> None:
        self._p, self._keep, self._shift = p, 1.0 - smoothing, shift
        self._first, self._steps = _steps(p, smoothing, limit, growing)
        self._point = 0
        self._along = self._exits = self.mass = np.zeros(self._first.shape)

    def __call__(self) -> tuple[float, float]:
        self._point += 1
        if self._point == 1:
            start = self._first.rest(self._keep, np.zeros(1), self._p)[0]
            self.mass = self._first.along(self._keep, np.zeros(1), self._shift)[0][:, None] * start
            signal = chi_square_tail(self._first.bound**2, self._p, self._shift**2)
        else:
            at = self._point - 2
            step = self._steps[min(at, len(self._steps) - 1)]
            if at < len(self._steps):
                self._along, self._exits = step.along(self._shift), step.exits(self._p, self._shift)
            signal = float((self.mass * self._exits).sum())
            self.mass = step.ahead(self._along, self.mass)
        return signal, float(self.mass.sum())


def _check_several(p: int) -> None:
    if p < 2:
        raise UnusableParameter.of(
            "variables-out-of-range", "Several variables are 2 or more; one has an EWMA.", "variables"
        )


@lru_cache(maxsize=64)
def mewma_law(p: int, smoothing: float, limit: float, shift: float = 0.0, *, exact: bool = False) -> Decay:
    """The law of the run length of a MEWMA of p ≥ 2 variables after a lasting shift from the first point on.

    The survivors are followed on the grid of :func:`arls`, whose arguments and accuracy these are; to that
    accuracy its mean is that of :func:`arls`.
    """
    _check_several(p)
    _check(p, smoothing, limit, exact)
    if smoothing == 1.0:
        return geometric(chi_square_tail(limit, p, shift * shift))
    walk = _Walk(p, smoothing, limit, shift, growing=_points_followed(smoothing) if exact else 0)
    return follow(
        walk,
        memory=math.ceil(1.0 / smoothing),
        work=step_work(smoothing, limit),
        method=METHOD,
        accuracy="relative 1e-4" if exact else ACCURACY,
    )


def step_work(smoothing: float, limit: float) -> int:
    """Operations of one point on the grid of the settled limits."""
    along, across = _shape(_bound(smoothing, limit))
    return along * across * (along + 2 * across)


@lru_cache(maxsize=8)
def _calm(p: int, smoothing: float, limit: float) -> Floats | None:
    walk = _Walk(p, smoothing, limit, 0.0, growing=0)

    def state() -> Floats:
        return walk.mass

    return settle(walk, state, work=step_work(smoothing, limit))


@lru_cache(maxsize=256)
def steady_state_arl(p: int, smoothing: float, limit: float, shift: float = 0.0) -> float | None:
    """Mean points from a shift to the signal after long operation in control without one; to a relative 1e-6.

    The limits have settled by then. None where the law of the smoothed vector does not settle within the
    steps allowed. Arguments as for :func:`mewma_law`.
    """
    _check_several(p)
    _check(p, smoothing, limit, False)
    if smoothing == 1.0:
        return 1.0 / max(chi_square_tail(limit, p, shift * shift), 1e-300)
    start = _calm(p, smoothing, limit)
    if start is None:
        return None
    disc, steps = _steps(p, smoothing, limit, 0)
    step = steps[-1]
    return max(float((start * _settled(step, disc, step.along(shift))).sum()), 1.0)
