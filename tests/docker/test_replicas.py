"""Two servers that share nothing, behind the proxy: any of them goes on where another left off."""

from __future__ import annotations

import random
from collections.abc import Iterator
from contextlib import ExitStack
from pathlib import Path
from typing import Any, NamedTuple

import pytest

from assignable.cli import main
from machines import Answer, Replica, call, eventually, needs_nginx, proxy, replica

pytestmark = needs_nginx

BASELINE, NEW = 30, 40


class Pair(NamedTuple):
    port: int
    replicas: list[Replica]
    sealed: bool


def _start(stack: ExitStack, folder: Path, sealed: bool) -> Pair:
    variables = {}
    if sealed:
        keys = folder / "sealing.jwk"
        assert main(["keys", "new", "--id", "kiln-2", "--out", str(keys)]) == 0
        variables = {"ASSIGNABLE_SEALING_KEYS": str(keys), "ASSIGNABLE_REQUIRE_SEAL": "yes"}
    replicas = [stack.enter_context(replica(folder, **variables)) for _ in range(2)]
    return Pair(stack.enter_context(proxy(folder, [one.port for one in replicas])), replicas, sealed)


@pytest.fixture(scope="module", params=[False, True], ids=["no keys", "one key file"])
def pair(request: pytest.FixtureRequest, tmp_path_factory: pytest.TempPathFactory) -> Iterator[Pair]:
    with ExitStack() as stack:
        yield _start(stack, tmp_path_factory.mktemp("pair"), request.param)


def kiln_cars(seed: int) -> tuple[list[Any], list[Any]]:
    """Wall thicknesses by kiln car: a baseline, and later cars, of which some are missing and the last drift."""
    draw = random.Random(seed)

    def car(level: float) -> list[float | None]:
        return [round(draw.gauss(level, 0.012), 4) for _ in range(5)]

    later: list[Any] = [car(2.5 + 0.0008 * max(0, i - 15)) for i in range(NEW)]
    later[7][2] = None
    later[20] = [None] * 5
    return [car(2.5) for _ in range(BASELINE)], later


DETECT = {"detect": {"shift": 1.0, "in_control_arl": 400}}
CHARTS: dict[str, dict[str, Any]] = {
    "xbar-r": {"rules": {"published": "nelson-1984"}},
    "ewma": DETECT,
    "cusum": DETECT,
}


def fit(port: int, chart: str, values: list[Any]) -> Any:
    body = {"data": {"values": values}, **CHARTS[chart]}
    answer = call(port, "POST", f"/v1/charts/{chart}/limits", body)
    assert answer.status == 200, answer.body
    return answer.json["limits"]


def judge(
    port: int, chart: str, limits: Any, values: list[Any], carry: Any = None, name: str = "whole"
) -> Answer:
    body = {"limits": limits, "data": {"values": values}, "carry": carry}
    return call(port, "POST", f"/v1/charts/{chart}/signals", body, {"X-Request-ID": name})


def counted_from(start: int, signals: list[Any]) -> list[Any]:
    """Signals of a call that began at this point, by the numbers they have in the whole."""
    return [
        {**one, "index": one["index"] + start, "points": [at + start for at in one["points"]]}
        for one in signals
    ]


@pytest.mark.parametrize("chart", CHARTS)
def test_calls_to_servers_in_turn_say_what_one_call_says(pair: Pair, chart: str) -> None:
    baseline, later = kiln_cars(5)
    limits = fit(pair.port, chart, baseline)
    assert (limits["seal"] is not None) == pair.sealed
    whole = judge(pair.port, chart, limits, later)
    assert whole.status == 200, whole.body
    assert len(whole.json["signals"]) > 5

    carry, signals = None, []
    for i, values in enumerate(later):
        answer = judge(pair.port, chart, limits, [values], carry, f"{chart}-{i}")
        assert answer.status == 200, answer.body
        carry = answer.json["carry"]
        signals += counted_from(i, answer.json["signals"])
    assert signals == whole.json["signals"]
    assert carry == whole.json["carry"]

    names = {f"{chart}-{i}" for i in range(NEW)}

    def shares() -> list[set[str]]:
        return [names & set(one.answered()) for one in pair.replicas]

    assert eventually(lambda: set().union(*shares()) == names)
    assert sum(map(len, shares())) == NEW
    assert min(map(len, shares())) > NEW / 3


def test_a_document_edited_on_its_way_is_refused_by_either(pair: Pair) -> None:
    baseline, later = kiln_cars(6)
    limits = fit(pair.port, "xbar-r", baseline)
    carry = judge(pair.port, "xbar-r", limits, later[:3]).json["carry"]
    for _ in pair.replicas:
        edited = judge(pair.port, "xbar-r", {**limits, "centre": limits["centre"] + 0.001}, later[3:])
        assert (edited.status, edited.json["type"]) == (422, "/problems/document-mismatch")
        edited = judge(pair.port, "xbar-r", limits, later[3:], {**carry, "points": 4})
        assert (edited.status, edited.json["type"]) == (422, "/problems/document-mismatch")


def test_one_server_is_lost_and_nobody_notices(tmp_path: Path) -> None:
    with ExitStack() as stack:
        port, replicas, _ = _start(stack, tmp_path, sealed=False)
        baseline, later = kiln_cars(7)
        limits = fit(port, "xbar-r", baseline)
        whole = judge(port, "xbar-r", limits, later).json
        carry, signals = None, []
        for i, values in enumerate(later):
            if i == NEW // 2:
                assert eventually(lambda: bool({*replicas[0].answered()} & {f"step-{k}" for k in range(NEW)}))
                replicas[0].end()
            answer = judge(port, "xbar-r", limits, [values], carry, f"step-{i}")
            assert answer.status == 200, answer.body
            carry = answer.json["carry"]
            signals += counted_from(i, answer.json["signals"])
        assert signals == whole["signals"]
        assert carry == whole["carry"]
        rest = {f"step-{i}" for i in range(NEW // 2, NEW)}
        assert eventually(lambda: rest <= set(replicas[1].answered()))

        replicas[1].end()
        lost = judge(port, "xbar-r", limits, later)
        assert (lost.status, lost.json["type"], lost.headers["Retry-After"]) == (503, "/problems/busy", "1")
