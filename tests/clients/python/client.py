"""What an MES written in Python does with the generated package: freeze limits, watch, assess, meet a problem.

``python client.py URL MEASUREMENTS`` prints what was read, and the answers as the typed objects hold them.
"""

from __future__ import annotations

import json
import sys
from pathlib import Path
from typing import Any, TypeVar

from assignable_client import Client
from assignable_client.api.capability import assess_measurements
from assignable_client.api.charts import fit_xbar_r_limits, judge_xbar_r
from assignable_client.api.pictures import draw_xbar_r_limits
from assignable_client.models import (
    Characteristic,
    MeasurementData,
    MeasurementsRequest,
    Problem,
    SpecificationRequest,
    SubgroupData,
    XbarRCarryDocument,
    XbarRFit,
    XbarRJudge,
    XbarRLimitsDocument,
)

Answer = TypeVar("Answer")


def good(answer: Answer | Problem | None) -> Answer:
    """The answer, where there is one; a problem ends the program with its sentences."""
    if answer is None or isinstance(answer, Problem):
        raise SystemExit("no answer" if answer is None else f"{answer.title} {answer.detail}")
    return answer


def run(url: str, measured: dict[str, Any]) -> dict[str, Any]:
    client = Client(base_url=url, raise_on_unexpected_status=True)
    wall = Characteristic(name="wall thickness", unit="mm")
    baseline = XbarRFit(characteristic=wall, data=SubgroupData.from_dict(measured["baseline"]))

    fitted = good(fit_xbar_r_limits.sync(client=client, body=baseline))
    # Kept beside the characteristic as JSON, and taken from there for every judgement.
    kept = json.dumps(fitted.limits.to_dict())

    judged, carry = [], None
    for new in (measured["first"], measured["second"]):
        limits = XbarRLimitsDocument.from_dict(json.loads(kept))
        request = XbarRJudge(limits=limits, data=SubgroupData.from_dict(new), carry=carry)
        answer = good(judge_xbar_r.sync(client=client, body=request))
        carry = XbarRCarryDocument.from_dict(answer.carry.to_dict())
        judged.append(answer)

    capability = good(
        assess_measurements.sync(
            client=client,
            body=MeasurementsRequest(
                characteristic=wall,
                data=MeasurementData(values=measured["baseline"]["values"]),
                specification=SpecificationRequest(**measured["specification"]),
            ),
        )
    )
    assert capability.capability is not None
    assert capability.capability.cpk is not None

    wrong = XbarRFit(data=baseline.data, sigma_multiple=-3.0)
    problem = fit_xbar_r_limits.sync(client=client, body=wrong)
    assert isinstance(problem, Problem)
    assert problem.errors

    picture = good(draw_xbar_r_limits.sync(client=client, body=baseline))

    return {
        "read": {
            "centre": fitted.limits.centre,
            "mean_upper": fitted.limits.panels.mean.upper,
            "range_lower": fitted.limits.panels.range_.lower,
            "verdicts": [answer.verdict.value for answer in judged],
            "signals": [
                [one.rule, one.panel, one.id, one.side and one.side.value, one.sentence]
                for answer in judged
                for one in answer.signals
            ],
            "points_behind": judged[-1].carry.points,
            "cpk": capability.capability.cpk.value,
            "pointer": problem.errors[0].pointer,
            "code": problem.errors[0].code,
        },
        "fitted": fitted.to_dict(),
        "judged": [answer.to_dict() for answer in judged],
        "capability": capability.to_dict(),
        "problem": problem.to_dict(),
        "picture": picture,
    }


if __name__ == "__main__":
    print(json.dumps(run(sys.argv[1], json.loads(Path(sys.argv[2]).read_text(encoding="utf-8")))))
