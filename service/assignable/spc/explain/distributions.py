"""Worked steps of quantiles and tails of fitted distributions."""

from __future__ import annotations

import math
from collections.abc import Sequence

import scipy

from ..capability.distributions import DistributionParameter
from .steps import Pad, Value

_TABLE = "normal quantile"


def quantile_step(
    pad: Pad,
    what: str,
    name: str,
    parameters: Sequence[DistributionParameter],
    p: float,
    q: float,
    found: float,
    where: str | None,
    *,
    mirrored: bool = False,
) -> float:
    """A quantile of a distribution, ``p`` below it and ``q = 1 - p`` above; ``found`` by the service.

    Where no closed form exists, the step puts what was found back into the distribution.
    """
    own = {one.name.replace("-", "_"): one.value for one in parameters}
    z = float(scipy.special.ndtri(p) if p < 0.5 else -scipy.special.ndtri(q))
    z_given: Value = (z, f"{_TABLE} with probability {p:.9g} below it")
    tails: dict[str, Value] = {"p": p, "q": q}
    # A mirrored distribution runs down from its bound: what lies below is its upper tail.
    sign = "-" if mirrored else "+"
    if mirrored:
        z_given = (-z, f"{_TABLE} with probability {q:.9g} below it")
        tails = {"p": q, "q": p}
    formula, values = "", dict[str, Value](own)
    if name == "normal":
        formula, values["z"] = "mean + sd * z", z_given
    elif name in ("lognormal", "lognormal-3", "johnson-sl"):
        formula, values["z"] = "exp(log_mean + log_sd * z)", z_given
    elif name in ("weibull", "weibull-3"):
        formula, values["q"] = "scale * (-log(q))**(1 / shape)", tails["q"]
    elif name == "exponential":
        formula, values["q"] = "scale * -log(q)", tails["q"]
    elif name == "rayleigh":
        formula, values["q"] = "scale * sqrt(-2 * log(q))", tails["q"]
    elif name == "smallest-extreme-value":
        formula, values["q"] = "location + scale * log(-log(q))", tails["q"]
    elif name == "largest-extreme-value":
        formula, values["p"] = "location - scale * log(-log(p))", tails["p"]
    elif name == "gamma":
        shape = own["shape"]
        table = scipy.special.gammaincinv(shape, p) if p < 0.5 else scipy.special.gammainccinv(shape, q)
        formula, values = "g * scale", {"scale": own["scale"]}
        values["g"] = (float(table), f"quantile of the gamma distribution of shape {shape:.9g} and scale 1")
    elif name == "half-normal":
        half = -scipy.special.ndtri(0.5 * q) if p >= 0.1 else math.sqrt(2.0) * scipy.special.erfinv(p)
        formula = "scale * z"
        values["z"] = (float(half), f"{_TABLE} exceeded with half of {q:.9g}")
    elif name == "box-cox":
        formula, values["z"] = (
            "(power * (transformed_mean + transformed_sd * z) + 1)**(1 / power)",
            z_given,
        )
        if abs(own["power"]) < 1e-8:
            formula = "exp(transformed_mean + transformed_sd * z)"
            del values["power"]
    elif name == "johnson-su":
        formula, values["z"] = "location + scale * sinh((z - gamma_) / delta)", z_given
        values["gamma_"] = values.pop("gamma")
    elif name == "johnson-sb":
        formula = "lower_bound + (upper_bound - lower_bound) / (1 + exp(-(z - gamma_) / delta))"
        values["z"], values["gamma_"] = z_given, values.pop("gamma")
    else:
        return pad.work(
            f"Probability below {what[:1].lower()}{what[1:]}, {found:.9g}, in the folded normal distribution",
            "(erf((x - location) / (scale * sqrt(2))) + erf((x + location) / (scale * sqrt(2)))) / 2",
            None,
            x=(found, "found by bisection"),
            **own,
        )
    if "threshold" in values:
        formula = f"threshold {sign} {formula}"
    return pad.work(what, formula, where, **values)
