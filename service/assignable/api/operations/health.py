"""Whether the process answers, and whether it computes rightly; neither needs a place to compute."""

from __future__ import annotations

from functools import cache, partial

from ..answers import CONTRACT_VERSION, service_version
from ..contract import Contract
from ..fields import AnswerShape, Choice, StrictString
from ..problems import NOT_READY, Problem

TAG = "Running it"


class Health(AnswerShape):
    """The state of the service."""

    status = Choice("pass", required=True, metadata={"description": "That all is well."})
    version = StrictString(required=True, metadata={"description": "Of the program."})
    contract = StrictString(required=True, metadata={"description": "Of this document."})


def register(contract: Contract) -> None:
    """Binds the health operations."""
    contract.tag(TAG, "For whoever runs the service.")
    contract.operation(
        "GET",
        "/health/live",
        operation_id="getLiveness",
        tag=TAG,
        summary="Whether the process answers",
        description="Answers as long as the process does; checks nothing.",
        response=Health(),
        computes=False,
        cache_seconds=None,
    )(_state)
    contract.operation(
        "GET",
        "/health/ready",
        operation_id="getReadiness",
        tag=TAG,
        summary="Whether the service takes work",
        description="Answers once the numerics are loaded and a known factor is computed rightly.",
        response=Health(),
        problems=(NOT_READY,),
        computes=False,
        cache_seconds=None,
    )(partial(_ready, contract))


def _state() -> dict[str, str]:
    return {"status": "pass", "version": service_version(), "contract": CONTRACT_VERSION}


def _ready(contract: Contract) -> dict[str, str]:
    try:
        right = bool(contract.operations) and self_test()
    except Exception as error:
        raise Problem(NOT_READY) from error
    if not right:
        raise Problem(NOT_READY)
    return _state()


@cache
def self_test() -> bool:
    """Whether a known value comes out: d2 of five, 2.32593 [tippett-1925]."""
    from ...spc.factors import d2

    return abs(d2(5) - 2.32593) < 5e-5
