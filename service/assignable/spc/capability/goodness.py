"""Anderson–Darling goodness of fit of any distribution whose parameters are estimated by maximum likelihood.

Asymptotically A² is Σ λⱼ χ²₁, and estimation takes away what the scores of the parameters explain
[durbin-1973], [stephens-1976]. In the normalised Legendre polynomials pⱼ of F(x) the process of A² has independent
coefficients of variance 1/(j(j + 1)) [anderson-darling-1952], and a parameter's score projects on them: with
G the projections and J the information, λ are the eigenvalues of D(I - G J⁻¹ Gᵀ)D, D² = diag 1/(j(j + 1)).
The tail of the sum is had by inverting its characteristic function [davies-1973].
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from functools import lru_cache
from typing import Annotated, Literal, TypeAlias

import numpy as np
import scipy

from ..data import Floats

Modification: TypeAlias = Literal["normal", "extreme-value", "exponential", "none"]
Scores: TypeAlias = Callable[[Floats, Floats, Floats], Floats]

_TERMS = 40
_KEPT = 24
_STEP = 0.35
_POINTS = 900
_LARGEST_STATISTIC = 12.0
_LEAST_P = 1e-6
_LEAST_INFORMATION = 1e-9


@dataclass(frozen=True, slots=True)
class GoodnessOfFit:
    """Anderson–Darling test of a distribution with its parameters estimated from the same values."""

    statistic: Annotated[float, "A²."]
    adjusted: Annotated[float, "A² adjusted for the number of values, where a published adjustment is known."]
    p_value: Annotated[
        float,
        "Probability of as large a statistic where the distribution is right; below 0.000001 it is told as that.",
    ]
    method: Annotated[str, "How the probability was had, as the key of its source."] = "durbin-1973"


def statistic(log_cdf: Floats, log_survival_down: Floats) -> float:
    """A² of n ordered values: log F in rising order, log(1 - F) in falling order [anderson-darling-1952]."""
    n = log_cdf.size
    weights = (2.0 * np.arange(1, n + 1) - 1.0) / n
    return -n - float(weights @ (np.maximum(log_cdf, -690.0) + np.maximum(log_survival_down, -690.0)))


def of_fit(
    statistic: float, count: int, modification: Modification, weights: tuple[float, ...]
) -> GoodnessOfFit:
    """The test of A² from ``count`` values, with the weights of its limiting law.

    Adjustments for few values are those of [dagostino-stephens-1986], tables 4.7, 4.11 and 4.17.
    """
    factor = {
        "normal": 1.0 + 0.75 / count + 2.25 / count**2,
        "extreme-value": 1.0 + 0.2 / count**0.5,
        "exponential": 1.0 + 0.6 / count,
        "none": 1.0,
    }[modification]
    adjusted = statistic * factor
    return GoodnessOfFit(statistic, adjusted, tail(adjusted, weights))


@lru_cache(maxsize=1)
def _grid() -> tuple[Floats, Floats, Floats, Floats]:
    """Probabilities and their complements, weights, and normalised Legendre polynomials (terms, nodes)."""
    # The trapezium over a probit is exact to rounding for what is smooth in it, ends included.
    z = np.linspace(-8.2, 8.2, 329)
    p, q = scipy.special.ndtr(z), scipy.special.ndtr(-z)
    weight = np.exp(-0.5 * z * z) / np.sqrt(2.0 * np.pi) * (z[1] - z[0])
    x = p - q
    table = np.empty((_TERMS + 1, z.size))
    table[0], table[1] = 1.0, x
    for j in range(1, _TERMS):
        table[j + 1] = ((2 * j + 1) * x * table[j] - j * table[j - 1]) / (j + 1)
    order = np.arange(1, _TERMS + 1)
    return p, q, weight, table[1:] * np.sqrt(2.0 * order + 1.0)[:, None]


@lru_cache(maxsize=256)
def _known(name: str, key: tuple[float, ...], scores: Scores) -> tuple[float, ...]:
    p, q, weight, polynomials = _grid()
    score = scores(p, q, np.array(key))
    information = (score * weight) @ score.T
    size = np.sqrt(np.diag(information))
    size = np.where(size > 0.0, size, 1.0)
    eigen, vectors = np.linalg.eigh(information / np.outer(size, size))
    # A direction without information explains nothing.
    told = eigen > _LEAST_INFORMATION
    root = (vectors[:, told] / np.sqrt(eigen[told])).T / size
    explained = (polynomials * weight) @ (root @ score).T
    order = np.arange(1, _TERMS + 1)
    spread = 1.0 / np.sqrt(order * (order + 1.0))
    matrix = -(explained * spread[:, None]) @ (explained * spread[:, None]).T
    matrix[np.diag_indices(_TERMS)] += spread * spread
    found = np.linalg.eigvalsh(matrix)[::-1]
    return tuple(np.maximum(found, 0.0).tolist())


_HELD: dict[str, Scores] = {}


def eigenvalues(name: str, key: tuple[float, ...], scores: Scores) -> tuple[float, ...]:
    """The weights λ, largest first, for a law of this name with θ = key. scores: (p, 1 - p, θ) → (k, m)."""
    # One function a law, so that the cache knows it again.
    return _known(name, key, _HELD.setdefault(name, scores))


def tail(x: float, weights: tuple[float, ...]) -> float:
    """P(Σ λⱼ χ²₁ > x), to 1e-6; the smallest weights enter with their mean, and so does the rest of the sum."""
    if x >= _LARGEST_STATISTIC:
        return _LEAST_P
    lam = np.array(weights[:_KEPT])
    x = x - float(sum(weights[_KEPT:])) - 1.0 / (_TERMS + 1.0)
    if x <= 0.0:
        return 1.0
    half = np.arange(_POINTS) + 0.5
    u = half * _STEP
    # log of the characteristic function, whose arguments add up without leaving the branch.
    angle = np.arctan((2.0 * u)[:, None] * lam)
    phase = 0.5 * angle.sum(axis=1) - u * x
    modulus = np.exp(0.5 * np.log(np.cos(angle)).sum(axis=1))
    found = 0.5 + float((np.sin(phase) * modulus / half).sum()) / np.pi
    return min(max(found, _LEAST_P), 1.0)
