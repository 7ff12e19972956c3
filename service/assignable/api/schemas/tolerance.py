"""Shapes of requests for tolerance intervals, and of their answers."""

from __future__ import annotations

from typing import Any

from ...spc.capability.tolerance import (
    LARGEST_COUNT,
    LEAST_COVERAGE,
    MOST_COVERAGE,
    ToleranceInterval,
    ToleranceSampleSize,
)
from ...spc.diagnostics import Normality
from .. import fields as f
from ..tables import Columns
from . import derive
from .common import CAUTIONS, PROVENANCE, CautionAnswer, Characteristic


class ToleranceData(f.RequestShape):
    """Measured values of a process in control."""

    table = Columns({"value": "values"})
    values = f.NumberList(
        nullable=True, required=True, metadata={"description": "Single values; null is a missing value."}
    )


class ToleranceSummary(f.RequestShape):
    """What a normal interval needs, where the values themselves were not kept."""

    mean = f.StrictNumber(required=True, metadata={"description": "Mean of the values."})
    sd = f.StrictNumber(
        required=True, least=1e-290, metadata={"description": "Their standard deviation, divisor count - 1."}
    )
    count = f.StrictInteger(
        required=True, least=2, most=LARGEST_COUNT, metadata={"description": "How many values there were."}
    )


class ToleranceSampleRequest(f.RequestShape):
    """What the sample must achieve. Without a distribution the coverage and confidence say it all."""

    excess_coverage = f.StrictNumber(
        above=LEAST_COVERAGE,
        below=1,
        metadata={
            "description": "For a normal interval: a coverage, above the one asked, to be exceeded seldom."
        },
    )
    excess_risk = f.StrictNumber(
        above=0, below=1, metadata={"description": "And the largest probability that it is."}
    )


class ToleranceRequest(f.RequestShape):
    """An interval from data or a summary, or the sample that one needs: exactly one of the three."""

    characteristic = f.Object(Characteristic, metadata={"description": "What was measured."})
    data = f.Object(ToleranceData, metadata={"description": "The values."})
    summary = f.Object(
        ToleranceSummary, metadata={"description": "Instead of the values; for a normal interval."}
    )
    sample_size = f.Object(
        ToleranceSampleRequest, metadata={"description": "Asks how many values an interval needs."}
    )
    coverage = f.StrictNumber(
        required=True,
        least=LEAST_COVERAGE,
        most=MOST_COVERAGE,
        metadata={"description": "Share of the product that the interval is to hold."},
    )
    confidence = f.StrictNumber(
        least=LEAST_COVERAGE,
        most=MOST_COVERAGE,
        load_default=0.95,
        metadata={"description": "With which it is to hold it; 0.95 unless given."},
    )
    sides = f.Choice(
        "two-sided",
        "lower",
        "upper",
        load_default="two-sided",
        metadata={"description": "`two-sided` unless given; or a `lower` or `upper` bound alone."},
    )
    method = f.Choice(
        "normal-exact",
        "normal-howe-1969",
        "non-parametric",
        load_default="normal-exact",
        metadata={
            "description": "`normal-exact` unless given; `normal-howe-1969`, the approximation that tables often hold; "
            "`non-parametric` between order statistics, for any continuous distribution."
        },
    )


class ToleranceAnswer(f.AnswerShape):
    """A tolerance interval, or the sample it needs."""

    interval = f.Object(
        derive.answer(ToleranceInterval),
        required=True,
        allow_none=True,
        metadata={"description": "The interval; null where a sample size was asked for."},
    )
    sample_size = f.Object(
        derive.answer(ToleranceSampleSize),
        required=True,
        allow_none=True,
        metadata={"description": "The sample needed; null where an interval was asked for."},
    )
    normality = f.Object(
        derive.answer(Normality),
        required=True,
        allow_none=True,
        metadata={"description": "Tests of the values' normality; null without values, or with too few."},
    )
    cautions = f.ObjectList(CautionAnswer, **CAUTIONS)
    provenance = PROVENANCE


def asked_of(loaded: dict[str, Any]) -> list[str]:
    """Which of data, summary and sample size are given."""
    return [name for name in ("data", "summary", "sample_size") if name in loaded]
