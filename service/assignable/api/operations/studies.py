"""Measurement studies: what a gauge, or people who sort, add to what they measure."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import fields
from typing import Any

from ...spc.explain import studies as worked
from ...spc.explain.steps import Step
from ...spc.studies.agreement import AgreementStudy, agreement
from ...spc.studies.bias import bias
from ...spc.studies.columns import (
    CrossedTable,
    NestedTable,
    RatingTable,
    crossed_table,
    nested_table,
    rating_table,
)
from ...spc.studies.crossed import CrossedStudy, crossed
from ...spc.studies.nested import NestedStudy, nested
from .. import problems
from ..contract import Contract
from ..schemas.common import cautions
from ..schemas.studies import (
    AgreementAnswer,
    AgreementRequest,
    BiasAnswer,
    BiasRequest,
    CrossedAnswer,
    CrossedRequest,
    NestedAnswer,
    NestedRequest,
    levels_of,
    terms_of,
)

TAG = "Measurement studies"


def _answer(study: Any, *left_out: str, **instead: Any) -> dict[str, Any]:
    """The members of a result, but those left out, and with others in the place of some or besides."""
    own = {entry.name: getattr(study, entry.name) for entry in fields(study) if entry.name not in left_out}
    return {**own, **instead}


def crossed_of(loaded: dict[str, Any]) -> tuple[CrossedTable, CrossedStudy]:
    """The measurements of a crossed study, and what they come to."""
    table = crossed_table(**loaded["data"])
    return table, crossed(table.measurements, pooling_alpha=loaded["pooling_alpha"], **terms_of(loaded))


def nested_of(loaded: dict[str, Any]) -> tuple[NestedTable, NestedStudy]:
    """The same of a nested study."""
    table = nested_table(**loaded["data"])
    return table, nested(table.measurements, **terms_of(loaded))


def crossed_study(loaded: dict[str, Any]) -> dict[str, Any]:
    """Components of a crossed study."""
    table, found = crossed_of(loaded)
    return _answer(
        found,
        "cell_means",
        "cell_ranges",
        parts=table.parts,
        appraisers=table.appraisers,
        cells=table.cells(found.cell_means, found.cell_ranges),
        cautions=cautions(found.cautions),
    )


def nested_study(loaded: dict[str, Any]) -> dict[str, Any]:
    """Components of a nested study."""
    table, found = nested_of(loaded)
    return _answer(
        found,
        "part_means",
        "part_ranges",
        appraisers=table.appraisers,
        cells=table.cells(found.part_means, found.part_ranges),
        cautions=cautions((*table.cautions, *found.cautions)),
    )


def agreement_of(loaded: dict[str, Any]) -> tuple[RatingTable, AgreementStudy]:
    """The ratings of an agreement study, and what they come to."""
    right = loaded.get("reference")
    table = rating_table(
        **loaded["data"],
        categories=loaded.get("categories"),
        reference=None if right is None else (right["items"], right["ratings"]),
        nonconforming=loaded.get("nonconforming"),
    )
    return table, agreement(
        table.ratings,
        categories=table.categories,
        appraisers=table.appraisers,
        reference=table.reference,
        nonconforming=table.nonconforming,
        confidence=loaded["confidence"],
    )


def agreement_study(loaded: dict[str, Any]) -> dict[str, Any]:
    """Agreement of appraisers who sort."""
    table, found = agreement_of(loaded)
    return _answer(
        found,
        appraisers=table.appraisers,
        categories=table.categories,
        cautions=cautions(found.cautions),
    )


def bias_study(loaded: dict[str, Any]) -> dict[str, Any]:
    """Bias and linearity of a gauge."""
    found = bias(levels_of(loaded["data"]), confidence=loaded["confidence"])
    return _answer(found, cautions=cautions(found.cautions))


def explain_crossed(loaded: dict[str, Any], answer: Mapping[str, Any]) -> tuple[Step, ...]:
    """The worked steps of a crossed study."""
    values, asked = crossed_table(**loaded["data"]).measurements, terms_of(loaded)
    found = crossed(values, pooling_alpha=loaded["pooling_alpha"], **asked)
    return worked.of_crossed(values, found, asked["tolerance"], asked.get("process_sd"))


def explain_nested(loaded: dict[str, Any], answer: Mapping[str, Any]) -> tuple[Step, ...]:
    """The worked steps of a nested study."""
    values, asked = nested_table(**loaded["data"]).measurements, terms_of(loaded)
    return worked.of_nested(values, nested(values, **asked), asked["tolerance"], asked.get("process_sd"))


def explain_agreement(loaded: dict[str, Any], answer: Mapping[str, Any]) -> tuple[Step, ...]:
    """The worked steps of an agreement study."""
    table, found = agreement_of(loaded)
    return worked.of_agreement(table.ratings, found)


def explain_bias(loaded: dict[str, Any], answer: Mapping[str, Any]) -> tuple[Step, ...]:
    """The worked steps of a bias study."""
    levels = levels_of(loaded["data"])
    return worked.of_bias(levels, bias(levels, confidence=loaded["confidence"]))


def register(contract: Contract) -> None:
    """Binds the measurement studies."""
    contract.tag(TAG, "What a gauge, or people who sort, add to what they measure.")
    contract.operation(
        "POST",
        "/v1/measurement-studies/crossed",
        operation_id="analyseCrossedStudy",
        tag=TAG,
        summary="Crossed gauge study",
        description="Repeatability, reproducibility and part variation by the analysis of variance of a balanced "
        "two-way random model, with confidence intervals; shares of the variation and of the specification; the "
        "number of distinct categories; what the gauge does to a capability index and to a chart of means. The "
        "interaction is pooled where its p-value is above `pooling_alpha`. One trial: the interaction is part of "
        "repeatability. One appraiser: one-way analysis. Sources: aiag-msa-2010, burdick-borror-montgomery-2005.",
        request=CrossedRequest(),
        response=CrossedAnswer(),
        problems=(problems.NOT_COMPUTABLE,),
        example="measurement-studies-crossed",
        provenance="crossed-study",
        explain=explain_crossed,
    )(crossed_study)
    contract.operation(
        "POST",
        "/v1/measurement-studies/nested",
        operation_id="analyseNestedStudy",
        tag=TAG,
        summary="Nested gauge study",
        description="The same for parts that only one appraiser can measure, as when measuring destroys them: parts "
        "within appraisers, pieces of a part as trials. What differs between those pieces counts as repeatability. "
        "Sources: searle-casella-mcculloch-1992, burdick-borror-montgomery-2005.",
        request=NestedRequest(),
        response=NestedAnswer(),
        problems=(problems.NOT_COMPUTABLE,),
        example="measurement-studies-nested",
        provenance="nested-study",
        explain=explain_nested,
    )(nested_study)
    contract.operation(
        "POST",
        "/v1/measurement-studies/attributes",
        operation_id="analyseAgreementStudy",
        tag=TAG,
        summary="Agreement of appraisers who sort",
        description="How far appraisers agree with themselves, with each other and with a reference: shares with "
        "exact intervals, Cohen's kappa of pairs and against the reference, Fleiss' kappa over all; misses and false "
        "alarms. Sources: aiag-msa-2010, cohen-1960, fleiss-1971, fleiss-levin-paik-2003.",
        request=AgreementRequest(),
        response=AgreementAnswer(),
        problems=(problems.NOT_COMPUTABLE,),
        example="measurement-studies-attributes",
        provenance="agreement-study",
        explain=explain_agreement,
    )(agreement_study)
    contract.operation(
        "POST",
        "/v1/measurement-studies/bias",
        operation_id="analyseBiasStudy",
        tag=TAG,
        summary="Bias and linearity of a gauge",
        description="Bias at each reference value with its t interval, and the line of bias along the gauge's range "
        "with its band and a test of its fit. Stability, bias over time, is judged by a control chart of one "
        "reference part. Sources: aiag-msa-2010, iso-22514-7-2021.",
        request=BiasRequest(),
        response=BiasAnswer(),
        problems=(problems.NOT_COMPUTABLE,),
        example="measurement-studies-bias",
        provenance="bias-study",
        explain=explain_bias,
    )(bias_study)
