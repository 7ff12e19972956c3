"""The quick reader of carries takes what their shape takes, to the same object, and nothing else."""

import copy
import functools
import json
import random

import numpy as np
import pytest
from marshmallow import Schema, ValidationError

from assignable.api.app import create_app
from assignable.api.contract import examples_directory
from assignable.api.operations import charts as operations
from assignable.api.schemas import derive, quick
from assignable.api.settings import Settings
from assignable.spc.charts import CHARTS
from assignable.spc.errors import SpcError

PALETTE = (
    None,
    True,
    -1,
    1.5,
    1e301,
    10**400,
    "x",
    "é",
    "\x07",
    "a" * 300,
    [],
    [1, 2.5],
    [None],
    {},
    {"a": 1},
)


def _carry(name):
    client = create_app(Settings(log="off")).test_client()
    body = (examples_directory() / f"{name}-signals.request.json").read_bytes()
    return client.post(f"/v1/charts/{name}/signals", data=body, content_type="application/json").json["carry"]


def _nodes(value, path=()):
    yield path
    for key, inner in value.items() if isinstance(value, dict) else ():
        yield from _nodes(inner, (*path, key))


@pytest.mark.parametrize("name", list(CHARTS))
def test_quick_and_shape_agree(name):
    chart = CHARTS[name]
    frame = operations._carry_frame(chart)
    read = quick.reader(chart.carry, frame)
    if read is None:
        pytest.skip("the shape alone reads this carry")
    shape = derive.document(chart.carry, f"Test{chart.stem}Carry", "As received.", frame)()
    whole = _carry(name)
    assert read(whole) == shape.load(whole)
    draw = random.Random(1)
    for _ in range(300):
        changed = copy.deepcopy(whole)
        *steps, last = draw.choice([path for path in _nodes(whole) if path])
        here = changed
        for step in steps:
            here = here[step]
        if draw.random() < 0.2:
            del here[last]
        else:
            here[last if draw.random() < 0.8 else "another"] = draw.choice(PALETTE)
        try:
            quickly = read(changed)
        except quick.Irregular:
            continue
        except SpcError as error:
            with pytest.raises(type(error)):
                shape.load(json.loads(json.dumps(changed)))
            continue
        told, loaded = _fault_or_value(shape.load, json.loads(json.dumps(changed)))
        # A chart's name of another chart is the one text that only the shape knows.
        assert loaded == _plain(quickly) if told == "loaded" else set(loaded) <= {"chart"}


def _fault_or_value(load, data):
    try:
        return "loaded", _plain(load(data))
    except ValidationError as error:
        return "faults", json.loads(json.dumps(error.messages))


def _plain(value):
    if isinstance(value, np.ndarray):
        return [str(each) for each in value.reshape(-1)]
    if isinstance(value, dict):
        return {key: _plain(inner) for key, inner in value.items()}
    if isinstance(value, (list, tuple)):
        return [_plain(inner) for inner in value]
    return value


@pytest.mark.parametrize(
    "operation",
    create_app(Settings(log="off")).extensions["assignable.contract"].operations.values(),
    ids=lambda operation: operation.operation_id,
)
def test_shapes_read_as_the_library_reads_them(operation):
    if operation.request is None:
        pytest.skip("takes no body")
    draw = random.Random(2)
    slow = functools.partial(Schema.load, operation.request)
    for name in operation.examples:
        whole = json.loads((examples_directory() / f"{name}.request.json").read_text())
        assert _fault_or_value(slow, whole) == _fault_or_value(operation.request.load, whole)
        paths = [path for path in _nodes(whole) if path]
        for _ in range(40):
            changed = copy.deepcopy(whole)
            *steps, last = draw.choice(paths)
            here = changed
            for step in steps:
                here = here[step]
            if draw.random() < 0.3:
                del here[last]
            else:
                here[last if draw.random() < 0.8 else "another"] = draw.choice(PALETTE)
            found = []
            for load in (slow, operation.request.load):
                try:
                    found.append(_fault_or_value(load, copy.deepcopy(changed)))
                except SpcError as error:
                    found.append(("faults", str(error)))
            assert found[0] == found[1]
