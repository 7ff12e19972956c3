"""The pictures: each takes the request of another operation, and draws that operation's result."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from functools import partial
from typing import Any

import numpy as np

from ...documents.seal import Seals
from ...pictures import agreement, bias, capability, charts, curves, economic, gauge, release
from ...spc.cautions import Caution
from ...spc.charts import CHARTS, Chart
from ...spc.charts.common import PanelLimits
from ...spc.design.economic import ProcessEconomics, neighbourhood
from ...spc.release import group_averages
from ...spc.studies.bias import bias as bias_study
from .. import answers
from ..contract import Contract
from ..schemas.capability import specification_of
from ..schemas.charts import ChartRequest, request_of
from ..schemas.common import labels_of, rules_of
from ..schemas.economic import requirements_of
from ..schemas.release import below_of
from ..schemas.studies import levels_of
from .capability import study_of
from .charts import fitted, judged
from .designs import design_economic, design_subgroups
from .release import check
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
    _bind(contract, "checkRelease", "drawReleaseCheck", partial(draw_release_check, contract.seals))


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
    return capability.draw(
        capability.Studied(
            **_characteristic(loaded),
            values=loaded["data"]["values"] if "data" in loaded else None,
            specification=specification_of(loaded["specification"]).effective,
            status=found.status,
            capability=found.capability,
            quantiles=found.quantiles,
            machine=found.machine,
            fitted=found.fitted,
            cautions=_codes(found.cautions),
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
    return gauge.draw(
        gauge.Gauged(
            **_characteristic(loaded),
            study=found,
            appraisers=table.appraisers,
            parts=(table.parts,) * len(table.appraisers),
            measurements=table.measurements.swapaxes(0, 1),
            cautions=_codes(found.cautions),
        )
    )


def draw_nested_study(loaded: dict[str, Any]) -> str:
    """The same of a nested study."""
    table, found = nested_of(loaded)
    return gauge.draw(
        gauge.Gauged(
            **_characteristic(loaded),
            study=found,
            appraisers=table.appraisers,
            parts=table.parts,
            measurements=table.measurements,
            cautions=_codes((*table.cautions, *found.cautions)),
        )
    )


def _characteristic(loaded: Mapping[str, Any]) -> dict[str, Any]:
    """Name and unit."""
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


# Release --------------------------------------------------------------------------------------------


def draw_release_check(seals: Seals, loaded: dict[str, Any]) -> str:
    """A batch at a glance, a row for each characteristic."""
    answer = check(seals, loaded)
    return release.draw(
        release.Released(
            batch=answer["batch"],
            disposition=answer["disposition"],
            note=answer["note"],
            rows=[
                _release_row(posted, told)
                for posted, told in zip(loaded["characteristics"], answer["characteristics"], strict=True)
            ],
            cautions=tuple(caution["code"] for caution in answer["cautions"]),
        )
    )


def _release_row(posted: Mapping[str, Any], told: Mapping[str, Any]) -> release.Row:
    acceptance, trend = told["acceptance"], told["trend"]
    own = None if trend is None else _own_limits(posted["trend"]["limits"])
    averages: tuple[float, ...] = ()
    if own is not None and trend["point"] != "each" and posted["compare"] == "each":
        found = group_averages(posted["results"], below_of(posted))
        averages = tuple(one for one in found if one is not None)
    return release.Row(
        name=told["name"],
        unit=told["unit"],
        disposition=told["disposition"],
        reasons=tuple(reason["sentence"] for reason in told["reasons"]),
        present=told["results_present"],
        least_margin=told["least_margin"],
        compared=told["compared"],
        rounded=told["method"] == "rounding",
        specification=specification_of(posted["specification"]),
        acceptance=(None, None) if acceptance is None else (acceptance.lower, acceptance.upper),
        standard=None if acceptance is None else acceptance.standard_uncertainty,
        own=own,
        averages=averages,
    )


def _own_limits(document: Mapping[str, Any]) -> tuple[float, float] | None:
    """The limits of a chart of values or averages, where it has two in the characteristic's own unit."""
    for name in ("value", "mean"):
        lines = document["panels"].get(name)
        if isinstance(lines, Mapping):
            low, high = lines.get("lower"), lines.get("upper")
            if isinstance(low, int | float) and isinstance(high, int | float):
                return float(low), float(high)
    return None
