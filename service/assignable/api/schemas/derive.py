"""Shapes derived from result objects: an answer cannot drift from what the numerics return.

``answer`` describes a frozen dataclass as the contract shows it. ``document`` makes the closed shape that
loads such an object back from what a caller kept. Descriptions come from ``Annotated``.
"""

from __future__ import annotations

import math
import types
from collections.abc import Callable, Mapping
from dataclasses import fields, is_dataclass
from functools import cache
from typing import Annotated, Any, Literal, Union, get_args, get_origin, get_type_hints

import marshmallow as ma

from ...spc.bounds import Bound
from ...spc.data import Floats, Integers
from .. import fields as f


def answer(
    result: Any, name: str | None = None, text: str | None = None, frame: Mapping[str, Any] | None = None
) -> type[f.AnswerShape]:
    """The open shape of a result dataclass, or of a generic one with its argument.

    ``name``, ``text`` and the members of ``frame`` are for one that is shown within something more. A member
    of ``frame`` stands in the place of one of the dataclass's own of that name; with ``None`` it is not shown.
    """
    if name is None:
        return _plain_answer(result)
    return _shape(result, f.AnswerShape, name, text, frame or {}, answer, None)


@cache
def _plain_answer(result: Any) -> type[f.AnswerShape]:
    return _shape(result, f.AnswerShape, _name(result), None, {}, answer, None)


def document(
    result: Any, name: str | None = None, text: str | None = None, frame: Mapping[str, Any] | None = None
) -> type[f.RequestShape]:
    """The closed shape that loads a dataclass; its component's name ends in ``Document``.

    Members of ``frame`` are checked as shapes are, and are no part of the object loaded.
    """
    if name is None:
        return _plain_document(result)
    return _shape(result, f.RequestShape, name, text, frame or {}, document, _class(result))


@cache
def _plain_document(result: Any) -> type[f.RequestShape]:
    return _shape(result, f.RequestShape, f"{_name(result)}Document", None, {}, document, _class(result))


def text_of(result: Any, name: str) -> dict[str, str]:
    """The metadata of a field of a request that becomes this field of a dataclass: what it says of itself."""
    _, text, *_ = get_args(get_type_hints(result, include_extras=True)[name])
    return {"description": text}


def meta(base: Any, text: str) -> type:
    """The Meta of a shape made here: its description, and no entry in marshmallow's own registry."""

    class Meta(base.Meta):  # type: ignore[misc]
        description = text
        register = False

    return Meta


def _class(result: Any) -> Any:
    return get_origin(result) or result


def _name(result: Any) -> str:
    origin = get_origin(result)
    if origin is None:
        return result.__name__
    return origin.__name__ + "".join(_name(argument) for argument in get_args(result))


def _shape(
    result: Any,
    base: Any,
    name: str,
    text: str | None,
    frame: Mapping[str, Any],
    nested: Callable[[Any], Any],
    load: Any,
) -> Any:
    cls = _class(result)
    given = dict(zip(getattr(cls, "__parameters__", ()), get_args(result), strict=True))
    hints = get_type_hints(cls, include_extras=True)
    own = {
        entry.name: _field(hints[entry.name], given, nested, load is not None)
        for entry in fields(cls)
        if load is not None or entry.name not in frame
    }
    shown = {member: field for member, field in frame.items() if field is not None}
    members: dict[str, Any] = {**shown, **own}
    members["Meta"] = meta(base, text or " ".join((cls.__doc__ or "").split("\n\n")[0].split()))
    if load is not None:
        names = tuple(own)

        def make(_: Any, data: dict[str, Any], **__: Any) -> Any:
            return load(**{each: data[each] for each in names})

        members["make"] = ma.post_load(make)
    return type(name, (base,), members)


class _Tuple(f.NumberList):
    """Numbers kept in a document, as the tuple that the object holds."""

    def _deserialize(self, value: Any, attr: str | None, data: Any, **kwargs: Any) -> Any:
        return tuple(super()._deserialize(value, attr, data, **kwargs).tolist())


class _Matrix(f.NumberTable):
    """Rows of numbers kept in a document, as the tuple of tuples that the object holds."""

    def _deserialize(self, value: Any, attr: str | None, data: Any, **kwargs: Any) -> Any:
        return tuple(map(tuple, super()._deserialize(value, attr, data, **kwargs).tolist()))


class _Texts(f.StringList):
    """Texts kept in a document, as the tuple that the object holds."""

    def _deserialize(self, value: Any, attr: str | None, data: Any, **kwargs: Any) -> Any:
        return tuple(super()._deserialize(value, attr, data, **kwargs))


class _ObjectTuple(f.ObjectList):
    """Objects kept in a document, as the tuple that the object holds."""

    def _deserialize(self, value: Any, attr: str | None, data: Any, **kwargs: Any) -> Any:
        return tuple(super()._deserialize(value, attr, data, **kwargs))


def _field(hint: Any, given: dict[Any, Any], nested: Callable[[Any], Any], loading: bool) -> ma.fields.Field:
    text = ""
    bound: Bound | None = None
    if get_origin(hint) is Annotated:
        hint, text, *more = get_args(hint)
        bound = next((each for each in more if isinstance(each, Bound)), None)
    hint = given.get(hint, hint)
    nullable = False
    if get_origin(hint) in (Union, types.UnionType):
        options = [option for option in get_args(hint) if option is not type(None)]
        nullable = len(options) < len(get_args(hint))
        if set(options) == {int, str}:
            options = [str]
        (hint,) = options
        if get_origin(hint) is Annotated:
            hint = get_args(hint)[0]
        hint = given.get(hint, hint)
    options_: dict[str, Any] = {
        "required": True,
        "allow_none": nullable,
        "metadata": {"description": text} if text else {},
    }
    # What bounds a document binds callers; an answer only says what it says.
    bounds = _bounds(bound) if loading and bound is not None else {}
    if hint is float:
        return f.StrictNumber(**bounds, **options_)
    if hint is int:
        return f.StrictInteger(**_whole(bounds), **options_)
    if hint is bool:
        return f.StrictBoolean(**options_)
    if hint is str:
        return f.StrictString(**options_)
    if get_origin(hint) is Literal:
        return f.Choice(*get_args(hint), **options_)
    if hint == Floats:
        return f.NumberList(min_items=0, **options_)
    if hint == Integers:
        return f.IntegerList(min_items=0, **options_)
    hint = _bound(hint, given)
    if is_dataclass(_class(hint)):
        return f.Object(nested(hint), **options_)
    if get_origin(hint) is tuple:
        item, *more = get_args(hint)
        if more == [...]:
            return _sequence(item, nested, loading, options_)
    raise TypeError(f"no shape for {hint!r}")


def _bounds(bound: Bound) -> dict[str, Any]:
    given = {name: getattr(bound, name) for name in ("least", "most", "above", "below")}
    return {name: value for name, value in given.items() if value is not None}


def _whole(bounds: dict[str, Any]) -> dict[str, int]:
    """The same range of whole numbers, both ends inside."""
    whole = {name: int(value) for name, value in bounds.items() if name in ("least", "most")}
    if "above" in bounds:
        whole["least"] = math.floor(bounds["above"]) + 1
    if "below" in bounds:
        whole["most"] = math.ceil(bounds["below"]) - 1
    return whole


def _bound(hint: Any, given: dict[Any, Any]) -> Any:
    """A generic dataclass with the type variables of the one that holds it put in."""
    parameters = getattr(hint, "__parameters__", ())
    if get_origin(hint) is not None and parameters and is_dataclass(get_origin(hint)):
        return hint[tuple(given[parameter] for parameter in parameters)]
    return hint


def _sequence(item: Any, nested: Callable[[Any], Any], loading: bool, options: dict[str, Any]) -> Any:
    if item is float:
        if loading:
            return _Tuple(min_items=0, max_items=f.MAX_KEPT, **options)
        return f.NumberList(min_items=0, **options)
    if item is int:
        return f.IntegerList(min_items=0, **options)
    if item == tuple[float, ...]:
        most = f.MAX_KEPT if loading else f.MAX_ROWS
        return (_Matrix if loading else f.NumberTable)(nullable=False, min_rows=0, max_rows=most, **options)
    if item is str:
        texts = {"max_items": f.MAX_KEPT} if loading else {}
        return (_Texts if loading else f.StringList)(min_items=0, **texts, **options)
    if is_dataclass(_class(item)):
        return (_ObjectTuple if loading else f.ObjectList)(nested(item), **options)
    raise TypeError(f"no shape for a sequence of {item!r}")
