"""Operations of tolerance intervals."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from ...spc import cautions as caution
from ...spc import diagnostics
from ...spc.capability import tolerance
from ...spc.cautions import Caution
from ...spc.errors import UnusableParameter
from ...spc.explain import tolerance as worked
from ...spc.explain.steps import Step
from ...spc.sigma import overall
from .. import problems
from ..contract import Contract
from ..schemas.common import cautions, located
from ..schemas.tolerance import ToleranceAnswer, ToleranceRequest, asked_of

TAG = "Tolerance intervals"


def interval(loaded: dict[str, Any]) -> dict[str, Any]:
    """A tolerance interval, or the sample it needs."""
    given = asked_of(loaded)
    if len(given) != 1:
        raise UnusableParameter.of(
            "one-question",
            "Give the data, or a summary of it, or ask for a sample size.",
            given[1] if given else "data",
        )
    if given == ["sample_size"]:
        return _answer(None, _sample_size(loaded))
    coverage, confidence, sides, method = (
        loaded[name] for name in ("coverage", "confidence", "sides", "method")
    )
    if given == ["summary"]:
        if method == "non-parametric":
            raise UnusableParameter.of(
                "needs-values", "Without a distribution the interval needs the values themselves.", "method"
            )
        known = loaded["summary"]
        with located(data=("summary",)):
            found = tolerance.normal_interval(
                known["count"],
                known["mean"],
                known["sd"],
                coverage=coverage,
                confidence=confidence,
                sides=sides,
                method=method,
            )
        return _answer(found, None)
    values = loaded["data"]["values"]
    values = values[values == values]
    if method == "non-parametric":
        found = tolerance.nonparametric_interval(
            values, coverage=coverage, confidence=confidence, sides=sides
        )
        return _answer(found, None)
    spread = overall(values)
    # Divided before they are added up, so that no size of value overflows; the second pass restores the digits.
    mean = float((values / values.size).sum())
    mean += float(((values - mean) / values.size).sum())
    found = tolerance.normal_interval(
        values.size,
        mean,
        spread.sigma,
        coverage=coverage,
        confidence=confidence,
        sides=sides,
        method=method,
    )
    normality = diagnostics.normality(values)
    return _answer(found, None, normality, caution.collect(_not_normal(normality)))


def _not_normal(found: diagnostics.Normality | None) -> Caution | None:
    if found is None or found.anderson_darling.p_value >= caution.SIGNIFICANCE:
        return None
    p = found.anderson_darling.p_value
    shown = "< 0.0001" if p < 1e-4 else f"= {p:.2g}"
    return Caution(
        "not-normal",
        f"The values do not follow a normal distribution (Anderson-Darling test: p {shown}), "
        "and the interval leans on it in the tails. Use `non-parametric`, or transform the values first.",
        ("method",),
        "dagostino-stephens-1986",
    )


def _sample_size(loaded: dict[str, Any]) -> tolerance.ToleranceSampleSize:
    coverage, confidence, sides, method = (
        loaded[name] for name in ("coverage", "confidence", "sides", "method")
    )
    asked = loaded["sample_size"]
    excess = {name for name in ("excess_coverage", "excess_risk") if name in asked}
    if method == "non-parametric":
        if excess:
            raise UnusableParameter.of(
                "normal-only",
                "A coverage to be exceeded seldom is for the normal interval.",
                "sample_size",
                min(excess),
            )
        return tolerance.nonparametric_size(coverage=coverage, confidence=confidence, sides=sides)
    if method != "normal-exact":
        raise UnusableParameter.of("exact-only", "The sample size is that of the exact interval.", "method")
    if len(excess) != 2:
        raise UnusableParameter.of(
            "excess-missing",
            "Any two values or more give a normal interval; say which coverage it may exceed, and how seldom "
            "(`excess_coverage` and `excess_risk`), or ask for `non-parametric`.",
            "sample_size",
        )
    with located(
        excess_coverage=("sample_size", "excess_coverage"), excess_risk=("sample_size", "excess_risk")
    ):
        return tolerance.normal_size(
            coverage=coverage,
            confidence=confidence,
            excess_coverage=asked["excess_coverage"],
            excess_risk=asked["excess_risk"],
            sides=sides,
        )


def _answer(
    found: tolerance.ToleranceInterval | None,
    size: tolerance.ToleranceSampleSize | None,
    normality: diagnostics.Normality | None = None,
    told: tuple[Caution, ...] = (),
) -> dict[str, Any]:
    return {"interval": found, "sample_size": size, "normality": normality, "cautions": cautions(told)}


def explain(loaded: dict[str, Any], answer: Mapping[str, Any]) -> tuple[Step, ...]:
    """The worked steps of the interval, or of the sample size."""
    if answer["interval"] is None:
        return worked.of_sample_size(answer["sample_size"])
    values = loaded["data"]["values"] if "data" in loaded else None
    return worked.of_interval(None if values is None else values[values == values], answer["interval"])


def register(contract: Contract) -> None:
    """Binds the operation of tolerance intervals."""
    contract.tag(TAG, "Between which values a stated share of the product lies, with a stated confidence.")
    contract.operation(
        "POST",
        "/v1/tolerance-intervals",
        operation_id="computeToleranceInterval",
        tag=TAG,
        summary="Tolerance interval, or its sample size",
        description="From data or a summary: the exact normal interval (two-sided by its integral equation, one-sided "
        "by non-central t), Howe's approximation, or an interval between order statistics. Or how many values an "
        "interval needs: without a distribution, for the extremes to hold the coverage; of a normal one, to exceed a "
        "larger coverage seldom. Sources: wald-wolfowitz-1946, howe-1969, wilks-1941, faulkenberry-weeks-1968.",
        request=ToleranceRequest(),
        response=ToleranceAnswer(),
        problems=(problems.NOT_COMPUTABLE,),
        example=("tolerance-interval", "tolerance-sample-size"),
        provenance="tolerance-interval",
        explain=explain,
    )(interval)
