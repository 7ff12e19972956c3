"""The pictures: each takes the request of another operation, and draws that operation's result."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from functools import partial
from typing import Any

import numpy as np

from ...pictures import agreement, bias, capability, charts, curves, economic, gauge
from ...spc.cautions import Caution
from ...spc.charts import CHARTS, Chart
from ...spc.studies.bias import bias as bias_study
from ...spc.studies.crossed import CrossedStudy
from ...spc.studies.nested import NestedStudy
from ...spc.charts.common import PanelLimits
from .. import answers
from ..contract import Contract
from ..schemas.capability import specification_of
from ..schemas.charts import ChartRequest, request_of
from ..schemas.common import labels_of
from .capability import study_of
from .charts import fitted, judged
from ...spc.design.economic import ProcessEconomics, neighbourhood
from ..schemas.economic import requirements_of
from ..schemas.studies import levels_of
from ..schemas.common import rules_of
from .designs import design_economic, design_subgroups
from .run_length import run_length
from .studies import agreement_of, crossed_of, nested_of

TAG = "Pictures"
Drawing = Callable[[dict[str, Any]], str]
"""A picture of what is computed from what a request's shape loaded."""


def register(contract: Contract) -> None:
    """Binds the picture of every operation that has one."""
    contract.tag(
        TAG,
        "The same requests, answered as SVG: drawn from the same result, told in words to a screen reader, and "
        "the same bytes for the same request.",
    )
    for chart in CHARTS.values():
        stem, takes = chart.stem, request_of(chart.name)
        _bind(contract, f"fit{stem}Limits", f"draw{stem}Limits", partial(draw_limits, chart, takes))
        _bind(contract, f"judge{stem}", f"draw{stem}Signals", partial(draw_signals, chart, takes))
    _bind(contract, "assessMeasurements", "drawMeasurements", draw_measurements)
    _bind(contract, "designSubgroups", "drawSubgroupDesign", draw_subgroup_design)
    _bind(contract, "computeRunLength", "drawRunLength", draw_run_length)
    _bind(contract, "designEconomic", "drawEconomicDesign", draw_economic_design)
    _bind(contract, "analyseCrossedStudy", "drawCrossedStudy", draw_crossed_study)
    _bind(contract, "analyseNestedStudy", "drawNestedStudy", draw_nested_study)
    _bind(contract, "analyseAgreementStudy", "drawAgreementStudy", draw_agreement_study)
    _bind(contract, "analyseBiasStudy", "drawBiasStudy", draw_bias_study)


def _bind(contract: Contract, source_id: str, operation_id: str, drawing: Drawing) -> None:
    source = contract.bound(source_id)
    contract.operation(
        source.method,
        f"{source.path}/picture",
        operation_id=operation_id,
        tag=TAG,
        summary=f"Picture: {source.summary[0].lower()}{source.summary[1:]}",
        description=f"Takes the request of `POST {source.path}` and answers a picture (SVG) of its result. It holds "
        "no script and no reference to anything else, so that it may stand in a page as it is.",
        request=source.request,
        response=None,
        media_type=answers.SVG,
        problems=source.problems,
        example=source.examples,
    )(drawing)


# Charts ---------------------------------------------------------------------------------------------


def draw_limits(chart: Chart, takes: ChartRequest, loaded: dict[str, Any]) -> str:
    """The baseline under its own limits; the limits alone where there is none."""
    result = fitted(chart, takes, loaded)
    record = result.limits.baseline
    return _draw(
        chart,
        loaded.get("characteristic"),
        result.limits,
        result.baseline,
        loaded.get("data", {}),
        result.cautions,
        excluded=() if record is None else tuple(one.index for one in record.excluded),
    )


def draw_signals(chart: Chart, takes: ChartRequest, loaded: dict[str, Any]) -> str:
    """New data under frozen limits."""
    kept, result = loaded["limits"], judged(chart, takes, loaded)
    return _draw(chart, kept.characteristic, kept[1], result, loaded["data"], result.cautions, new=True)


def _draw(
    chart: Chart,
    characteristic: Mapping[str, Any] | None,
    limits: Any,
    found: Any,
    posted: dict[str, Any],
    cautions: Sequence[Caution],
    *,
    new: bool = False,
    excluded: tuple[int, ...] = (),
) -> str:
    of = characteristic or {}
    return charts.draw(
        charts.Charted(
            chart=chart,
            name=of.get("name"),
            unit=of.get("unit"),
            new=new,
            panels=None if found is None else found.panels,
            frozen={
                name: PanelLimits(lines.centre, lines.lower, lines.upper)
                for name, lines in charts.panels_of(limits.panels)
            },
            verdict=None if found is None else found.verdict,
            signals=() if found is None else found.signals,
            signals_found=0 if found is None else found.signals_found,
            excluded=excluded,
            cautions=tuple(caution.code for caution in cautions),
            **labels_of(posted),
        )
    )


# Studies and designs --------------------------------------------------------------------------------


def draw_measurements(loaded: dict[str, Any]) -> str:
    """A capability study."""
    found = study_of(loaded)
    of = loaded.get("characteristic") or {}
    return capability.draw(
        capability.Studied(
            name=of.get("name"),
            unit=of.get("unit"),
            values=loaded["data"]["values"] if "data" in loaded else None,
            specification=specification_of(loaded["specification"]).effective,
            status=found.status,
            capability=found.capability,
            quantiles=found.quantiles,
            machine=found.machine,
            fitted=found.fitted,
            cautions=tuple(caution.code for caution in found.cautions),
        )
    )


def draw_subgroup_design(loaded: dict[str, Any]) -> str:
    """The operating characteristics of the plan and of the present one; or plans compared."""
    answer = design_subgroups(loaded)
    return curves.operating(
        loaded["shift"], answer["characteristics"], answer["present"], answer["comparison"]
    )


def draw_economic_design(loaded: dict[str, Any]) -> str:
    """The cost around the plan of least cost."""
    found = design_economic(loaded)["design"]
    around = neighbourhood(
        ProcessEconomics(**loaded["process"]),
        found,
        requirements=requirements_of(loaded),
        rules=rules_of(loaded.get("rules")) or None,
    )
    return economic.draw(found, around)


def draw_run_length(loaded: dict[str, Any]) -> str:
    """Run lengths by shift."""
    answer = run_length(loaded)
    kind = next(name for name in curves.KINDS if name in loaded)
    return curves.run_lengths(
        kind,
        tuple(
            curves.RunLengthAt(
                shift=one["shift"],
                scale=one["scale"],
                factor=one["factor"],
                arl=one["arl"],
                percentiles=tuple((part["probability"], part["points"]) for part in one["percentiles"]),
            )
            for one in answer["run_lengths"]
        ),
    )


# Measurement studies --------------------------------------------------------------------------------


def draw_crossed_study(loaded: dict[str, Any]) -> str:
    """Where the spread of a crossed study comes from, and what each appraiser found."""
    table, found = crossed_of(loaded)
    interaction = None
    if found.interaction_p_value is not None:
        interaction = f"Appraisers differing from part to part (interaction): p = {found.interaction_p_value:.3g}"
        interaction += ", counted as repeatability." if found.interaction_pooled else "."
    return gauge.draw(
        gauge.Gauged(
            **_characteristic(loaded),
            shared=True,
            appraisers=table.appraisers,
            parts=(table.parts,) * len(table.appraisers),
            measurements=table.measurements.swapaxes(0, 1),
            interaction=interaction,
            **_gauge_of(found),
            cautions=_codes(found.cautions),
        )
    )


def draw_nested_study(loaded: dict[str, Any]) -> str:
    """The same of a nested study."""
    table, found = nested_of(loaded)
    return gauge.draw(
        gauge.Gauged(
            **_characteristic(loaded),
            shared=False,
            appraisers=table.appraisers,
            parts=table.parts,
            measurements=table.measurements,
            interaction=None,
            **_gauge_of(found),
            cautions=_codes((*table.cautions, *found.cautions)),
        )
    )


def _gauge_of(found: CrossedStudy | NestedStudy) -> dict[str, Any]:
    """What both kinds of study say of a gauge."""
    return {
        "grand_mean": found.grand_mean,
        "components": found.components,
        "discrimination": found.discrimination,
        "own": found.repeatability_by_appraiser,
        "confidence": found.confidence,
    }


def _characteristic(loaded: Mapping[str, Any]) -> dict[str, str | None]:
    of = loaded.get("characteristic") or {}
    return {"name": of.get("name"), "unit": of.get("unit")}


def _codes(found: Sequence[Caution]) -> tuple[str, ...]:
    return tuple(caution.code for caution in found)


def draw_agreement_study(loaded: dict[str, Any]) -> str:
    """How far people who sort agree, and on which items they do not."""
    table, found = agreement_of(loaded)
    ratings = table.ratings.reshape(len(table.items), -1)
    right = ratings[:, 0] if table.reference is None else table.reference
    disputed = np.flatnonzero((ratings != right[:, None]).any(axis=1))
    return agreement.draw(
        agreement.Agreed(
            name=_characteristic(loaded)["name"],
            study=found,
            disputed=[table.items[at] for at in disputed.tolist()],
            right_known=table.reference is not None,
            cautions=_codes(found.cautions),
        )
    )


def draw_bias_study(loaded: dict[str, Any]) -> str:
    """Bias against the reference, with its line."""
    levels = levels_of(loaded["data"])
    found = bias_study(levels, confidence=loaded["confidence"])
    return bias.draw(
        bias.Biased(
            **_characteristic(loaded),
            study=found,
            values=[level.values for level in levels],
            cautions=_codes(found.cautions),
        )
    )
