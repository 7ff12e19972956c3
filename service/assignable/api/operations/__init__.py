"""The operations, by group: which routes there are, and the module that binds them when they are needed."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from functools import partial
from importlib import import_module

from ...spc.charts import MODULES
from ...spc.charts.registry import stem_of
from ..contract import Contract, Route


@dataclass(frozen=True, slots=True)
class Group:
    """Operations that one module binds."""

    module: str
    routes: tuple[Route, ...]


def _of_charts(names: Iterable[str]) -> tuple[Route, ...]:
    return tuple(
        route
        for name in names
        for route in (
            ("POST", f"/v1/charts/{name}/limits", f"fit{stem_of(name)}Limits"),
            ("POST", f"/v1/charts/{name}/signals", f"judge{stem_of(name)}"),
        )
    )


def _pictures_of_charts(names: Iterable[str]) -> tuple[Route, ...]:
    return tuple(
        ("POST", f"/v1/charts/{name}/{verb}/picture", f"draw{stem_of(name)}{verb.capitalize()}")
        for name in names
        for verb in ("limits", "signals")
    )


GROUPS = (
    Group("charts", _of_charts(name for names in MODULES.values() for name in names)),
    Group("recommendation", (("POST", "/v1/charts/recommendation", "recommendChart"),)),
    Group(
        "capability",
        (
            ("POST", "/v1/capability/measurements", "assessMeasurements"),
            ("POST", "/v1/capability/attributes", "assessAttributes"),
            ("POST", "/v1/capability/several", "assessSeveral"),
            ("POST", "/v1/capability/conformance", "assessConformance"),
        ),
    ),
    Group("tolerance", (("POST", "/v1/tolerance-intervals", "computeToleranceInterval"),)),
    Group("release", (("POST", "/v1/release-checks", "checkRelease"),)),
    Group("run_length", (("POST", "/v1/designs/run-length", "computeRunLength"),)),
    Group(
        "designs",
        (
            ("POST", "/v1/designs/subgroups", "designSubgroups"),
            ("POST", "/v1/designs/ewma", "designEwma"),
            ("POST", "/v1/designs/cusum", "designCusum"),
            ("POST", "/v1/designs/attributes", "designAttributes"),
            ("POST", "/v1/designs/baseline", "designBaseline"),
            ("POST", "/v1/designs/economic", "designEconomic"),
            ("POST", "/v1/designs/comparison", "compareDesigns"),
        ),
    ),
    Group(
        "studies",
        (
            ("POST", "/v1/measurement-studies/crossed", "analyseCrossedStudy"),
            ("POST", "/v1/measurement-studies/nested", "analyseNestedStudy"),
            ("POST", "/v1/measurement-studies/attributes", "analyseAgreementStudy"),
            ("POST", "/v1/measurement-studies/bias", "analyseBiasStudy"),
        ),
    ),
    Group(
        "pictures",
        (
            *_pictures_of_charts(name for names in MODULES.values() for name in names),
            ("POST", "/v1/capability/measurements/picture", "drawMeasurements"),
            ("POST", "/v1/designs/subgroups/picture", "drawSubgroupDesign"),
            ("POST", "/v1/designs/run-length/picture", "drawRunLength"),
        ),
    ),
    Group(
        "bulk",
        (("POST", "/v1/bulk", "answerLines"), ("POST", "/v1/bulk/signals", "judgeLines")),
    ),
    Group(
        "reference",
        (
            ("GET", "/v1/charts", "listCharts"),
            ("GET", "/v1/factors", "getFactors"),
            ("GET", "/v1/rules", "getRules"),
            ("GET", "/v1/methods", "getMethods"),
        ),
    ),
    Group("verification", (("GET", "/v1/verification", "getVerification"),)),
    Group("sealing", (("GET", "/.well-known/jwks.json", "getSealingKeys"),)),
    Group(
        "health",
        (("GET", "/health/live", "getLiveness"), ("GET", "/health/ready", "getReadiness")),
    ),
)
"""Every group, in the order in which the contract lists them."""


def announce(contract: Contract) -> None:
    """Takes up the routes of every group."""
    for group in GROUPS:
        contract.announce(group.routes, partial(_bind, group.module))


def _bind(module: str, contract: Contract) -> None:
    import_module(f"{__name__}.{module}").register(contract)
