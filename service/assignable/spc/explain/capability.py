"""Worked steps of capability: of measurements, of counts, of several characteristics, and of conformance."""

from __future__ import annotations

from collections.abc import Sequence

import scipy

from ..capability.attributes import AttributeCapability
from ..capability.indices import Capability, Index, MachineCapability, NormalSummary
from ..capability.joint import JointCapability
from ..capability.nonnormal import QuantileCapability
from ..capability.specification import Specification
from ..capability.uncertainty import (
    GlobalRisks,
    GuardedLimits,
    ProcessDistribution,
    ProductCapability,
    ResultConformance,
)
from ..data import Floats, Subgroups
from ..factors import c4_of_freedom
from .distributions import quantile_step
from .pieces import moving_sigma_steps, within_steps
from .steps import Pad, Step, Value, present, summed


def of_measurements(
    data: Floats | NormalSummary,
    specification: Specification,
    capability: Capability | None,
    machine: MachineCapability | None,
    quantiles: QuantileCapability | None,
) -> tuple[Step, ...]:
    """The steps from values to the indices and their intervals."""
    pad = Pad()
    if capability is not None:
        _normal(pad, data, specification, capability)
    if machine is not None:
        _machine(pad, specification, machine)
    if quantiles is not None:
        _by_quantiles(pad, specification, quantiles)
    return pad.steps


def _normal(pad: Pad, data: Floats | NormalSummary, specification: Specification, found: Capability) -> None:
    if not isinstance(data, NormalSummary):
        mean = pad.mean(f"Mean of the {found.count} values", data.reshape(-1), "#/capability/mean")
        pad.deviation("Overall standard deviation", data.reshape(-1), mean, "#/capability/total/sigma")
        if found.within is not None:
            estimator = found.within.estimator
            if data.ndim == 2:
                within_steps(pad, Subgroups(data).statistics(), estimator, "#/capability/within/sigma")
            else:
                moving_sigma_steps(pad, data, 2, estimator, "#/capability/within/sigma")
    for estimate, names, word, unbiased in (
        (found.within, ("cp", "cpl", "cpu", "cpk"), "within-subgroup sigma", True),
        (found.total, ("pp", "ppl", "ppu", "ppk"), "overall standard deviation", False),
    ):
        if estimate is None:
            continue
        _indices(pad, specification, found.mean, estimate.sigma, names, word, "#/capability")
        both, least = getattr(found, names[0]), getattr(found, names[3])
        if both is not None:
            _chi_square(
                pad, names[0], both, estimate.degrees_of_freedom, unbiased, found.confidence, "#/capability"
            )
            _bissell(
                pad,
                names[3],
                least,
                found.count,
                estimate.degrees_of_freedom,
                found.confidence,
                "#/capability",
            )
    _towards_target(pad, specification, found)
    _expected(pad, specification, found)


def _indices(
    pad: Pad,
    specification: Specification,
    mean: float,
    sigma: float,
    names: Sequence[str],
    word: str,
    at: str,
) -> None:
    both, below, above, least = names
    lower, upper = specification.lower, specification.upper
    if lower is not None and upper is not None and both:
        pad.work(
            f"{both.capitalize()}: width of the specification over six times the {word}",
            "(upper - lower) / (6 * sigma)",
            f"{at}/{both}/value",
            upper=upper,
            lower=lower,
            sigma=sigma,
        )
    sides: dict[str, Value] = {}
    if lower is not None:
        sides[below or "to_lower"] = pad.work(
            f"{(below or 'To the lower limit').capitalize()}: from the lower limit to the mean, over three times the "
            f"{word}",
            "(mean - lower) / (3 * sigma)",
            f"{at}/{below}/value" if below else None,
            mean=mean,
            lower=lower,
            sigma=sigma,
        )
    if upper is not None:
        sides[above or "to_upper"] = pad.work(
            f"{(above or 'To the upper limit').capitalize()}: from the mean to the upper limit, over three times the "
            f"{word}",
            "(upper - mean) / (3 * sigma)",
            f"{at}/{above}/value" if above else None,
            upper=upper,
            mean=mean,
            sigma=sigma,
        )
    formula = f"min({', '.join(sides)})" if len(sides) > 1 else next(iter(sides))
    pad.work(
        f"{least.capitalize()}: the smaller of the two, or the only one",
        formula,
        f"{at}/{least}/value",
        **sides,
    )


def _chi_square(
    pad: Pad, name: str, index: Index, freedom: float, unbiased: bool, confidence: float, at: str
) -> None:
    """The interval of an index of width."""
    tail = 0.5 * (1.0 - confidence)
    scale = c4_of_freedom(freedom) if unbiased else 1.0
    for end, probability, where in (
        ("Lower", tail, "lower"),
        ("Upper", 1.0 - tail, "upper"),
    ):
        half = 0.5 * freedom
        chi = 2.0 * float(
            scipy.special.gammaincinv(half, tail)
            if where == "lower"
            else scipy.special.gammainccinv(half, tail)
        )
        values: dict[str, Value] = {
            "index": index.value,
            "chi": (chi, f"quantile of chi-square at {probability:g} with {freedom:.9g} degrees of freedom"),
            "freedom": freedom,
        }
        if unbiased:
            values["c4"] = (scale, "mean standard deviation of that many degrees of freedom over sigma")
        pad.work(
            f"{end} end of the interval of {name}",
            "index * sqrt(chi / freedom)" + (" / c4" if unbiased else ""),
            f"{at}/{name}/{where}",
            **values,
        )


def _bissell(
    pad: Pad, name: str, index: Index, count: int, freedom: float, confidence: float, at: str
) -> None:
    """The interval of an index of the nearer limit."""
    if index.method != "bissell-1990":
        return
    error = pad.work(
        f"Standard error of {name} (Bissell 1990)",
        "sqrt(1 / (9 * n) + index**2 / (2 * freedom))",
        None,
        n=count,
        index=index.value,
        freedom=freedom,
    )
    z: Value = (
        float(scipy.special.ndtri(0.5 + 0.5 * confidence)),
        f"normal quantile at {0.5 + 0.5 * confidence:g}",
    )
    for sign, where in (("-", "lower"), ("+", "upper")):
        pad.work(
            f"{where.capitalize()} end of the interval of {name}",
            f"index {sign} z * error",
            f"{at}/{name}/{where}",
            index=index.value,
            z=z,
            error=error,
        )


def _towards_target(pad: Pad, specification: Specification, found: Capability) -> None:
    if found.cpm is None or found.total is None or specification.target is None:
        return
    assert specification.lower is not None
    assert specification.upper is not None
    deviation = pad.work(
        "Root mean square deviation from the target",
        "sqrt(sigma**2 * (n - 1) / n + (mean - target)**2)",
        None,
        sigma=found.total.sigma,
        n=found.count,
        mean=found.mean,
        target=specification.target,
    )
    pad.work(
        "Cpm: width of the specification over six times that",
        "(upper - lower) / (6 * deviation)",
        "#/capability/cpm/value",
        upper=specification.upper,
        lower=specification.lower,
        deviation=deviation,
    )
    pad.work(
        "Cpmk: from the mean to the nearer limit, over three times that",
        "min(upper - mean, mean - lower) / (3 * deviation)",
        "#/capability/cpmk/value",
        upper=specification.upper,
        mean=found.mean,
        lower=specification.lower,
        deviation=deviation,
    )


def _expected(pad: Pad, specification: Specification, found: Capability) -> None:
    name, expected, estimate = "expected_total", found.expected_total, found.total
    if expected is None or estimate is None:
        name, expected, estimate = "expected_within", found.expected_within, found.within
    if expected is None or estimate is None:
        return
    at = f"#/capability/{name}"
    if specification.lower is not None:
        pad.work(
            "Expected below the lower limit, in parts per million, were the values normal",
            "1e6 * erfc((mean - lower) / sigma / sqrt(2)) / 2",
            f"{at}/below_ppm",
            mean=found.mean,
            lower=specification.lower,
            sigma=estimate.sigma,
        )
    if specification.upper is not None:
        pad.work(
            "Expected above the upper limit likewise",
            "1e6 * erfc((upper - mean) / sigma / sqrt(2)) / 2",
            f"{at}/above_ppm",
            upper=specification.upper,
            mean=found.mean,
            sigma=estimate.sigma,
        )
    if found.observed is not None:
        pad.work(
            "Observed nonconforming, in parts per million",
            "1e6 * outside / inspected",
            "#/capability/observed/total_ppm",
            outside=found.observed.total,
            inspected=found.observed.inspected,
        )


def _machine(pad: Pad, specification: Specification, found: MachineCapability) -> None:
    _indices(
        pad,
        specification,
        found.mean,
        found.total.sigma,
        ("cm" if found.cm is not None else "", "", "", "cmk"),
        "overall standard deviation",
        "#/machine",
    )


def _by_quantiles(pad: Pad, specification: Specification, found: QuantileCapability) -> None:
    bounds = specification.natural_lower, specification.natural_upper
    for at, one in enumerate(found.quantiles):
        p = one.probability
        q = found.quantiles[2 - at].probability
        what = ("0.135 % quantile", "median", "99.865 % quantile")[at]
        if found.distribution == "empirical":
            pad.work(
                f"The {what} of the values themselves",
                "quantile",
                f"#/quantiles/quantiles/{at}/value",
                quantile=(one.value, "interpolated between the ordered values at place (n + 1/3) p + 1/3"),
            )
            continue
        quantile_step(
            pad,
            f"The {what} of the {found.distribution} distribution fitted",
            found.distribution,
            found.parameters,
            p,
            q,
            one.value,
            f"#/quantiles/quantiles/{at}/value",
            bounds,
        )
    low, middle, high = (one.value for one in found.quantiles)
    lower, upper = specification.lower, specification.upper
    if lower is not None and upper is not None:
        pad.work(
            "Pp: width of the specification over that of the outer quantiles",
            "(upper - lower) / (q3 - q1)",
            "#/quantiles/pp/value",
            upper=upper,
            lower=lower,
            q3=high,
            q1=low,
        )
    sides: dict[str, Value] = {}
    if lower is not None:
        sides["ppl"] = pad.work(
            "Ppl: from the lower limit to the median, over from the 0.135 % quantile to the median",
            "(median - lower) / (median - q1)",
            "#/quantiles/ppl/value",
            median=middle,
            lower=lower,
            q1=low,
        )
    if upper is not None:
        sides["ppu"] = pad.work(
            "Ppu: from the median to the upper limit, over from the median to the 99.865 % quantile",
            "(upper - median) / (q3 - median)",
            "#/quantiles/ppu/value",
            upper=upper,
            median=middle,
            q3=high,
        )
    formula = f"min({', '.join(sides)})" if len(sides) > 1 else next(iter(sides))
    pad.work("Ppk: the smaller of the two, or the only one", formula, "#/quantiles/ppk/value", **sides)


# Counts ---------------------------------------------------------------------------------------------


def of_counts(counts: Floats, found: AttributeCapability) -> tuple[Step, ...]:
    """The steps from counts to the rate, its interval and the index it amounts to."""
    pad = Pad()
    binomial = found.kind == "nonconforming-units"
    there = present(counts)
    if len(there) > 1:
        text, given = summed("x", there)
        pad.work(f"Events in the {len(there)} samples", text, "#/capability/events", **given)
    pad.work(
        "Rate: events over what was inspected",
        "events / inspected",
        "#/capability/rate/value",
        events=found.events,
        inspected=found.inspected,
    )
    _exact_interval(pad, binomial, found)
    share: Value = found.rate.value
    if binomial:
        pad.work(
            "Nonconforming units in parts per million",
            "1e6 * rate",
            "#/capability/nonconforming_ppm",
            rate=share,
        )
    else:
        pad.work(
            "Units with one nonconformity at least, in parts per million",
            "-1e6 * expm1(-rate)",
            "#/capability/nonconforming_ppm",
            rate=share,
        )
    if found.index.value is not None:
        part = found.nonconforming_ppm / 1e6
        pad.work(
            "Index that this share amounts to: a third of the normal quantile that it lies beyond",
            "z / 3",
            "#/capability/index/value",
            z=(float(-scipy.special.ndtri(part)), f"normal quantile exceeded with probability {part:.9g}"),
        )
    return pad.steps


def _exact_interval(pad: Pad, binomial: bool, found: AttributeCapability) -> None:
    """The ends, put back into the law: each leaves half of the risk."""
    events, inspected = found.events, found.inspected
    if events != int(events) or events > 30:
        return
    for end, rate, most in (
        ("upper", found.rate.upper, int(events)),
        ("lower", found.rate.lower, int(events) - 1),
    ):
        if most < 0 or (rate >= 1.0 and binomial):
            continue
        if binomial:
            terms = [f"comb({int(inspected)}, {i}) * p**{i} * (1 - p)**(n - {i})" for i in range(most + 1)]
            formula = " + ".join(terms)
        else:
            formula = (
                "exp(-p * n) * ("
                + " + ".join(f"(p * n)**{i} / gamma({i + 1})" for i in range(most + 1))
                + ")"
            )
        pad.work(
            f"Probability of {most} events or fewer at the {end} end of the interval: "
            f"{'half of the risk' if end == 'upper' else '1 less half of the risk'}, by which the end is found",
            formula,
            None,
            p=(rate, f"{end} end of the interval"),
            n=inspected,
        )


# Several characteristics ----------------------------------------------------------------------------


def of_several(
    values: Floats, specifications: Sequence[Specification], found: JointCapability
) -> tuple[Step, ...]:
    """The steps of the first characteristic, and of all together as if they were independent."""
    pad = Pad()
    rows = values[(values == values).all(axis=1)]
    own, asked = found.characteristics[0], specifications[0]
    at = "#/joint/characteristics/0"
    mean = pad.mean(f"Mean of the first characteristic over {found.count} items", rows[:, 0], f"{at}/mean")
    pad.deviation("Its standard deviation", rows[:, 0], mean, f"{at}/sd")
    sides = []
    given: dict[str, Value] = {"mean": own.mean, "sd": own.sd}
    if asked.lower is not None:
        sides.append(("mean - lower", "erfc((mean - lower) / sd / sqrt(2)) / 2"))
        given["lower"] = asked.lower
    if asked.upper is not None:
        sides.append(("upper - mean", "erfc((upper - mean) / sd / sqrt(2)) / 2"))
        given["upper"] = asked.upper
    distances = ", ".join(side for side, _ in sides)
    nearer = f"min({distances})" if len(sides) > 1 else f"({distances})"
    pad.work("Its Ppk", f"{nearer} / (3 * sd)", f"{at}/ppk", **given)
    pad.work(
        "Items expected outside its own specification, in parts per million",
        f"1e6 * ({' + '.join(area for _, area in sides)})",
        f"{at}/nonconforming_ppm",
        **given,
    )
    names = [f"p{i}" for i in range(1, len(found.characteristics) + 1)]
    product = " + ".join(f"log1p(-{name} / 1e6)" for name in names)
    pad.work(
        "Nonconforming product were the characteristics independent, in parts per million",
        f"-1e6 * expm1({product})",
        "#/joint/independent_ppm",
        **{name: one.nonconforming_ppm for name, one in zip(names, found.characteristics, strict=True)},
    )
    pad.state(
        "The joint share is the probability that a vector of that mean and covariance leaves the box of "
        "specifications, by numerical integration (Genz 1992)",
        "1 - integral over the box of density(x)",
        nonconforming_ppm=found.nonconforming_ppm,
        standard_error_ppm=found.standard_error_ppm,
    )
    pad.work(
        "Conforming share",
        "1 - nonconforming_ppm / 1e6",
        "#/joint/conforming",
        nonconforming_ppm=found.nonconforming_ppm,
    )
    return pad.steps


# Conformance ----------------------------------------------------------------------------------------


def of_conformance(
    uncertainty: float,
    specification: Specification,
    prior: ProcessDistribution | None,
    results: Sequence[ResultConformance],
    limits: GuardedLimits | None,
    process: ProcessDistribution | None,
    plan: GlobalRisks | None,
    product: ProductCapability | None,
) -> tuple[Step, ...]:
    """The steps of the first measured value, of the acceptance limits, of the plan and of the product."""
    pad = Pad()
    if product is not None:
        _product(pad, uncertainty, specification, product)
    weight, sd = 1.0, uncertainty
    if prior is not None:
        weight = pad.work(
            "Weight of the measured value beside what is known of the process",
            "process_sd**2 / (process_sd**2 + u**2)",
            None,
            process_sd=prior.sd,
            u=uncertainty,
        )
        sd = pad.work(
            "Standard uncertainty of the true value, given the result",
            "u * process_sd / sqrt(process_sd**2 + u**2)",
            "#/results/0/standard_uncertainty" if results else None,
            u=uncertainty,
            process_sd=prior.sd,
        )
    if results:
        _result(pad, specification, results[0], prior, weight, sd)
    if limits is not None:
        _acceptance_limits(pad, specification, limits, prior, weight, sd)
    if process is not None:
        _nonconforming(pad, specification, process, plan)
    if not pad.steps:
        pad.work("Variance of a measured value about the true one", "u**2", None, u=uncertainty)
    return pad.steps


def _result(
    pad: Pad,
    specification: Specification,
    one: ResultConformance,
    prior: ProcessDistribution | None,
    weight: float,
    sd: float,
) -> None:
    at = "#/results/0"
    expected = one.value
    if prior is not None:
        expected = pad.work(
            f"Expectation of the true value of the first result, {one.value:g}",
            "process_mean + weight * (value - process_mean)",
            f"{at}/expected",
            process_mean=prior.mean,
            weight=weight,
            value=one.value,
        )
    parts: dict[str, Value] = {}
    if specification.lower is not None:
        parts["below"] = pad.work(
            "Probability that the true value is below the lower limit",
            "erfc((expected - lower) / sd / sqrt(2)) / 2",
            f"{at}/below_probability",
            expected=expected,
            lower=specification.lower,
            sd=sd,
        )
    if specification.upper is not None:
        parts["above"] = pad.work(
            "Probability that it is above the upper limit",
            "erfc((upper - expected) / sd / sqrt(2)) / 2",
            f"{at}/above_probability",
            upper=specification.upper,
            expected=expected,
            sd=sd,
        )
    pad.work(
        "Probability that the item conforms",
        f"max(0, 1 - {' - '.join(parts)})",
        f"{at}/conformance_probability",
        **parts,
    )


def _acceptance_limits(
    pad: Pad,
    specification: Specification,
    limits: GuardedLimits,
    prior: ProcessDistribution | None,
    weight: float,
    sd: float,
) -> None:
    lower, upper = specification.lower, specification.upper
    inner = limits.lower if lower is not None else limits.upper
    assert inner is not None
    one = -float(scipy.special.ndtri(limits.consumer_risk))
    two = lower is not None and upper is not None
    if prior is None and not two:
        values: dict[str, Value] = {
            "z": (one, f"normal quantile exceeded with probability {limits.consumer_risk:g}"),
            "u": sd,
        }
        if lower is not None:
            pad.work(
                "Lower acceptance limit", "lower + z * u", "#/acceptance_limits/lower", lower=lower, **values
            )
        else:
            assert upper is not None
            pad.work(
                "Upper acceptance limit", "upper - z * u", "#/acceptance_limits/upper", upper=upper, **values
            )
        return
    at = inner if prior is None else prior.mean + weight * (inner - prior.mean)
    terms, given = [], dict[str, Value](x=at, sd=sd)
    if lower is not None:
        terms.append("erfc((x - lower) / sd / sqrt(2)) / 2")
        given["lower"] = lower
    if upper is not None:
        terms.append("erfc((upper - x) / sd / sqrt(2)) / 2")
        given["upper"] = upper
    pad.work(
        f"Probability that an item is nonconforming whose measured value is on the acceptance limit {inner:.9g}: "
        "the risk stated, by which the limit is found",
        " + ".join(terms),
        "#/acceptance_limits/consumer_risk",
        **given,
    )
    if limits.guard_lower is not None and limits.lower is not None and lower is not None:
        pad.work(
            "Guard band at the lower limit",
            "acceptance - lower",
            "#/acceptance_limits/guard_lower",
            acceptance=limits.lower,
            lower=lower,
        )
    if limits.guard_upper is not None and limits.upper is not None and upper is not None:
        pad.work(
            "Guard band at the upper limit",
            "upper - acceptance",
            "#/acceptance_limits/guard_upper",
            upper=upper,
            acceptance=limits.upper,
        )


def _nonconforming(
    pad: Pad, specification: Specification, process: ProcessDistribution, plan: GlobalRisks | None
) -> None:
    terms, given = [], dict[str, Value](mean=process.mean, sd=process.sd)
    if specification.lower is not None:
        terms.append("erfc((mean - lower) / sd / sqrt(2)) / 2")
        given["lower"] = specification.lower
    if specification.upper is not None:
        terms.append("erfc((upper - mean) / sd / sqrt(2)) / 2")
        given["upper"] = specification.upper
    pad.work(
        "Share of the product that does not conform",
        " + ".join(terms),
        None if plan is None else "#/plan/nonconforming",
        **given,
    )
    if plan is None:
        return
    pad.state(
        "Consumer's risk: the product's density times the probability of being accepted, integrated numerically over "
        "the values that do not conform; producer's risk likewise",
        "integral of f(x) * P(accepted | x)",
        consumer=plan.consumer,
        producer=plan.producer,
    )
    if plan.consumer_of_accepted is not None:
        pad.work(
            "Share of the accepted product that does not conform",
            "min(1, consumer / accepted)",
            "#/plan/consumer_of_accepted",
            consumer=plan.consumer,
            accepted=plan.accepted,
        )


def _product(pad: Pad, uncertainty: float, specification: Specification, found: ProductCapability) -> None:
    pad.work(
        "Standard deviation of the product itself",
        "sqrt(observed**2 - u**2)",
        "#/product/product_sd",
        observed=found.observed_sd,
        u=uncertainty,
    )
    pad.work(
        "Share of the observed variance that is the measurement's",
        "(u / observed)**2",
        "#/product/measurement_share",
        u=uncertainty,
        observed=found.observed_sd,
    )
    if specification.lower is not None and specification.upper is not None:
        pad.work(
            "Pp of the product itself",
            "(upper - lower) / (6 * sd)",
            "#/product/product_pp",
            upper=specification.upper,
            lower=specification.lower,
            sd=found.product_sd,
        )
