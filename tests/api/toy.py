"""Operations only the tests have: each shows one conduct of the edge."""

from __future__ import annotations

from threading import Event
from typing import Any

import numpy as np

from assignable.api.contract import Contract, Provenance
from assignable.api.fields import (
    AnswerShape,
    NumberList,
    NumberTable,
    Object,
    ObjectList,
    RequestShape,
    StrictInteger,
    StrictNumber,
    StrictString,
    TimeList,
)
from assignable.api.problems import DOCUMENT_MISMATCH, NOT_COMPUTABLE
from assignable.spc.errors import DocumentMismatch, Fault, UnusableData

BUSY = Event()
GO_ON = Event()


class CarData(RequestShape):
    """Wall thicknesses, a row for each kiln car."""

    values = NumberTable(required=True, ragged=True, max_rows=1000, max_columns=10)
    times = TimeList()


class CarExclusion(RequestShape):
    """A car that is left out."""

    index = StrictInteger(required=True, least=0)
    reason = StrictString()


class CarMeansRequest(RequestShape):
    """What the toy operation takes."""

    data = Object(CarData, required=True)
    multiple = StrictNumber(above=0, most=10, load_default=3.0)
    exclude = ObjectList(CarExclusion, load_default=())


class CarMeans(AnswerShape):
    """What the toy operation answers."""

    means = NumberList(required=True)
    upper = StrictNumber(required=True, allow_none=True)
    provenance = Object(Provenance, required=True)


class FactorQuery(RequestShape):
    """The query of the toy reference."""

    n = StrictInteger(required=True, least=2, most=25)
    name = StrictString()


class Factor(AnswerShape):
    """What the toy reference answers."""

    n = StrictInteger(required=True)


def means(order: dict[str, Any]) -> dict[str, Any]:
    values = order["data"]["values"]
    if len(values) < 2:
        raise UnusableData(
            Fault("too-few", "Two cars are needed.", ("data", "values")),
            Fault("odd-key", "A key that needs escaping.", ("data", "a/b~c d")),
        )
    if np.isnan(values).all(axis=1).any():
        raise UnusableData.of("empty-car", "A car has no values.", "data", "values")
    if order["multiple"] == 9:
        raise DocumentMismatch.of("other-chart", "These are limits of another chart.", "limits")
    return {"means": np.nanmean(values, axis=1), "upper": None}


def fail(order: dict[str, Any]) -> dict[str, Any]:
    raise ValueError("secret measurement 2.51")


def not_finite(order: dict[str, Any]) -> dict[str, Any]:
    return {"means": np.array([1.0, np.nan]), "upper": None}


def wait(order: dict[str, Any]) -> dict[str, Any]:
    BUSY.set()
    assert GO_ON.wait(10)
    return means(order)


def picture(order: dict[str, Any]) -> str:
    return '<svg xmlns="http://www.w3.org/2000/svg"/>'


def register(contract: Contract) -> None:
    contract.tag("Toys", "Only for tests.")
    shared: dict[str, Any] = {"tag": "Toys", "description": "Only for tests.", "request": CarMeansRequest()}

    @contract.operation(
        "POST",
        "/v1/means",
        operation_id="computeMeans",
        summary="Means",
        response=CarMeans(),
        problems=(NOT_COMPUTABLE, DOCUMENT_MISMATCH),
        links={"again": {"operationId": "computeMeans", "requestBody": "$request.body"}},
        provenance="toy-means",
        **shared,
    )
    def _means(order: dict[str, Any]) -> dict[str, Any]:
        return means(order)

    for name, view in (("fail", fail), ("notFinite", not_finite), ("wait", wait)):
        contract.operation(
            "POST",
            f"/v1/{name.lower()}",
            operation_id=name,
            summary=name,
            response=CarMeans(),
            provenance="toy",
            **shared,
        )(view)
    contract.operation(
        "POST",
        "/v1/means/picture",
        operation_id="drawMeans",
        summary="Picture",
        response=None,
        media_type="image/svg+xml",
        **shared,
    )(picture)
    contract.operation(
        "GET",
        "/v1/factors",
        operation_id="getFactor",
        tag="Toys",
        summary="A factor",
        description="Only for tests.",
        query=FactorQuery(),
        response=Factor(),
    )(lambda asked: {"n": asked["n"]})
