"""What the service counted, for whoever watches it; needs no place to compute."""

from __future__ import annotations

from typing import TYPE_CHECKING

from ..contract import Contract
from .health import TAG

if TYPE_CHECKING:
    from ..metrics import Metrics

ROUTE = ("GET", "/metrics", "getMetrics")


def announce(contract: Contract, metrics: Metrics) -> None:
    """Takes up the route, where metrics are on."""

    def register(contract: Contract) -> None:
        method, path, operation_id = ROUTE
        contract.tag(TAG, "For whoever runs the service.")
        contract.operation(
            method,
            path,
            operation_id=operation_id,
            tag=TAG,
            summary="What the service counted",
            description="Requests, their seconds, problems, cautions and values of all workers since the start, in "
            "Prometheus's text format. An installation may switch it off, or ask for a credential.",
            response=None,
            media_type="text/plain",
            computes=False,
            cache_seconds=None,
        )(metrics.exposition)

    contract.announce((ROUTE,), register)
