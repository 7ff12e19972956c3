"""Worked steps of quantiles of fitted distributions."""

from __future__ import annotations

import math
from collections.abc import Sequence

import scipy

from ..capability.distributions import DistributionParameter
from .steps import Pad, Value, evaluate

_NEAR = 1e-9


def quantile_step(
    pad: Pad,
    what: str,
    name: str,
    parameters: Sequence[DistributionParameter],
    p: float,
    q: float,
    found: float,
    where: str | None,
    bounds: tuple[float | None, float | None] = (None, None),
) -> None:
    """A quantile of a distribution, ``p`` below it and ``q = 1 - p`` above; ``found`` by the service.

    bounds: natural ones, from which a distribution on one side may count. Where no closed form exists, the step
    states what was found as from a table.
    """
    own = {one.name.replace("-", "_"): one.value for one in parameters}
    for bound, mirrored in ((None, False), (bounds[0], False), (bounds[1], True), (None, True)):
        formula, values = _formula(name, own, *((q, p) if mirrored else (p, q)))
        if not formula:
            break
        sign = "-" if mirrored else "+"
        if "threshold" in own:
            formula = f"threshold {sign} {formula}"
            values["threshold"] = own["threshold"]
        elif bound is not None:
            formula, values = f"bound {sign} {formula}", {**values, "bound": (bound, "natural bound")}
        elif mirrored:
            continue
        plain = {key: value[0] if isinstance(value, tuple) else value for key, value in values.items()}
        result = evaluate(formula, plain)
        if result is not None and abs(result - found) <= _NEAR * max(
            abs(found), abs(plain.get("bound", 0.0))
        ):
            pad.work(what, formula, where, **values)
            return
    pad.work(
        what,
        "quantile",
        where,
        quantile=(found, f"of this distribution, with probability {p:.9g} below it, computed numerically"),
    )


def _formula(name: str, own: dict[str, float], p: float, q: float) -> tuple[str, dict[str, Value]]:
    """The quantile with ``p`` below it, any threshold left out; no text where there is no closed form."""
    z: Value = (_normal(p, q), f"normal quantile with probability {p:.9g} below it")
    scale, location = own.get("scale", 1.0), own.get("location", 0.0)
    if name == "normal":
        return "mean + sd * z", {"mean": own["mean"], "sd": own["sd"], "z": z}
    if name in ("lognormal", "lognormal-3", "johnson-sl"):
        return "exp(log_mean + log_sd * z)", {"log_mean": own["log_mean"], "log_sd": own["log_sd"], "z": z}
    if name in ("weibull", "weibull-3"):
        return "scale * (-log(q))**(1 / shape)", {"scale": scale, "shape": own["shape"], "q": q}
    if name == "exponential":
        return "scale * -log(q)", {"scale": scale, "q": q}
    if name == "rayleigh":
        return "scale * sqrt(-2 * log(q))", {"scale": scale, "q": q}
    if name == "smallest-extreme-value":
        return "location + scale * log(-log(q))", {"location": location, "scale": scale, "q": q}
    if name == "largest-extreme-value":
        return "location - scale * log(-log(p))", {"location": location, "scale": scale, "p": p}
    if name == "gamma":
        shape = own["shape"]
        table = scipy.special.gammaincinv(shape, p) if p < 0.5 else scipy.special.gammainccinv(shape, q)
        source = f"quantile of the gamma distribution of shape {shape:.9g} and scale 1"
        return "scale * g", {"scale": scale, "g": (float(table), source)}
    if name == "half-normal":
        half = math.sqrt(2.0) * scipy.special.erfinv(p) if p < 0.1 else -scipy.special.ndtri(0.5 * q)
        return "scale * z", {
            "scale": scale,
            "z": (float(half), f"normal quantile exceeded with half of {q:.9g}"),
        }
    if name == "box-cox":
        values: dict[str, Value] = {"m": own["transformed_mean"], "s": own["transformed_sd"], "z": z}
        if abs(own["power"]) < 1e-8:
            return "exp(m + s * z)", values
        return "(power * (m + s * z) + 1)**(1 / power)", {**values, "power": own["power"]}
    johnson: dict[str, Value] = {"z": z, "g": own.get("gamma", 0.0), "d": own.get("delta", 1.0)}
    if name == "johnson-su":
        return "location + scale * sinh((z - g) / d)", {**johnson, "location": location, "scale": scale}
    if name == "johnson-sb":
        ends: dict[str, Value] = {"low": own["lower_bound"], "high": own["upper_bound"]}
        return "low + (high - low) / (1 + exp(-(z - g) / d))", {**johnson, **ends}
    return "", {}


def _normal(p: float, q: float) -> float:
    return float(scipy.special.ndtri(p) if p < 0.5 else -scipy.special.ndtri(q))
