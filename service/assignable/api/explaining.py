"""``explain``: what it adds to a request's shape, to an answer's, and to a view."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from typing import Any

import numpy as np
from marshmallow import Schema

from ..spc.explain.steps import Step
from . import fields as f
from .schemas import derive

View = Callable[..., Any]
Explain = Callable[[dict[str, Any], Mapping[str, Any]], tuple[Step, ...]]
"""The worked steps, of what a request's shape loaded and of the members of its answer."""

_StepAnswer = derive.answer(Step)


def asking(request: Schema) -> Schema:
    """The request's shape with the member that asks for the steps."""
    return _extended(
        request,
        "explain",
        f.StrictBoolean(
            load_default=False,
            metadata={
                "description": "True adds the worked steps to the answer, as `steps`: enough to follow its main "
                "numbers with a hand calculator."
            },
        ),
    )


def telling(response: Schema) -> Schema:
    """The answer's shape with the steps, where they were asked for."""
    return _extended(
        response,
        "steps",
        f.ObjectList(
            _StepAnswer,
            metadata={
                "description": "The worked steps, where `explain` asked for them; of one point, one index or one "
                "component where there are many."
            },
        ),
    )


def with_steps(view: View, explain: Explain) -> View:
    """A view that answers the steps too where they are asked for."""

    def answer(loaded: dict[str, Any], **path: str) -> Any:
        if not loaded.pop("explain", False):
            return view(loaded, **path)
        found = view(loaded, **path)
        # A sum that overflows is a value that cannot be told, and no fault.
        with np.errstate(all="ignore"):
            return {**found, "steps": explain(loaded, found)}

    return answer


def _extended(shape: Schema, name: str, field: Any) -> Schema:
    """A shape of the same name and description with one field more."""
    kind = type(shape)
    text = getattr(kind.Meta, "description", None) or (kind.__doc__ or "").split("\n\n")[0]
    made: Schema = type(kind.__name__, (kind,), {name: field, "Meta": derive.meta(kind, text)})()
    return made
