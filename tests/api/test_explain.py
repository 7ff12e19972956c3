"""``explain``: every calculation tells its steps, each of which comes out as it says, and as the answer has it."""

from __future__ import annotations

import math
from typing import Any

import pytest

from contract import served

CALCULATIONS = [
    (operation_id, name)
    for operation_id, name in served.examples()
    if served.operations()[operation_id].provenance is not None
    and served.operations()[operation_id].method == "POST"
]
ARITHMETIC = {
    **{name: found for name, found in vars(math).items() if callable(found)},
    "pi": math.pi,
    "abs": abs,
    "max": max,
    "min": min,
    "round": round,
}
FEWEST = 3


def at(answer: Any, pointer: str) -> Any:
    found = answer
    for step in served.steps_of(pointer):
        found = found[int(step)] if isinstance(found, list) else found[step]
    return found


def checked(answer: dict[str, Any]) -> int:
    """How many steps come out, by Python's own arithmetic; fails where one does not."""
    worked = 0
    for step in answer["steps"]:
        given = {one["name"]: one["value"] for one in step["values"]}
        if step["result"] is None:
            assert step["where"] is None, step
            continue
        names = compile(step["formula"], "formula", "eval").co_names
        assert set(given) == set(names) - set(ARITHMETIC), step
        result = eval(step["formula"], {"__builtins__": {}}, {**ARITHMETIC, **given})
        assert result == pytest.approx(step["result"], rel=1e-12, abs=1e-300), step
        worked += 1
        if step["where"] is not None:
            told = at(answer, step["where"])
            assert told is not None, step
            size = max([abs(value) for value in given.values()], default=0.0)
            assert told == pytest.approx(step["result"], rel=1e-9, abs=1e-14 * min(size, 1e6)), step
    return worked


@pytest.mark.parametrize(("operation_id", "name"), CALCULATIONS)
def test_every_calculation_tells_its_steps(operation_id: str, name: str) -> None:
    request = {**served.example(name), "explain": True}
    answer = served.answer_of(operation_id, request)
    if name == "charts-recommendation":  # from a description alone: rules, and no arithmetic
        assert answer["steps"]
        return
    assert checked(answer) >= FEWEST
    assert any(step["where"] is not None for step in answer["steps"])
    for step in answer["steps"]:
        assert step["what"][0].isupper()
