"""Reading small documents that are as they should be without the cost of a shape.

One subgroup a call is the commonest load, and its carry the largest part of its reading. A quick reader
takes exactly what the document's shape takes, or less: whatever is irregular goes to the shape, which
tells what is wrong. A test holds the two to each other.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import fields, is_dataclass
from typing import Annotated, Any, get_args, get_origin, get_type_hints

from .. import fields as f


class Irregular(Exception):
    """Something that the document's shape has to look at."""


Reader = Callable[[Any], Any]


def reader(result: Any, frame: Mapping[str, Any]) -> Reader | None:
    """A reader of the document of a dataclass with the texts of ``frame`` around it.

    ``None`` where a field is of a kind that only the shape reads. The reader raises :class:`Irregular`.
    """
    if get_origin(result) is not None:
        return None
    inner = _of(result)
    if inner is None:
        return None
    names = frozenset(frame)

    def read(value: Any) -> Any:
        if type(value) is not dict or not names <= value.keys():
            raise Irregular
        for name in names:
            _text(value[name])
        return inner({key: each for key, each in value.items() if key not in names})

    return read


def _text(value: Any) -> str:
    if type(value) is not str or len(value) > f.MAX_TEXT or not value.isascii() or not value.isprintable():
        raise Irregular
    return value


def _number(value: Any) -> float:
    if (type(value) is not float and type(value) is not int) or not -f.LARGEST <= value <= f.LARGEST:
        raise Irregular
    return float(value)


def _integer(value: Any) -> int:
    if type(value) is not int or not -f.LARGEST_INTEGER <= value <= f.LARGEST_INTEGER:
        raise Irregular
    return value


def _numbers(value: Any) -> tuple[float, ...]:
    if type(value) is not list or len(value) > f.MAX_KEPT:
        raise Irregular
    if not set(map(type, value)) <= {float, int}:
        raise Irregular
    if value and not (min(value) >= -f.LARGEST and max(value) <= f.LARGEST):
        raise Irregular
    return tuple(map(float, value))


def _of(hint: Any) -> Reader | None:
    if get_origin(hint) is Annotated:
        hint = get_args(hint)[0]
    simple: dict[Any, Reader] = {float: _number, int: _integer, str: _text, tuple[float, ...]: _numbers}
    if hint in simple:
        return simple[hint]
    if isinstance(hint, type) and is_dataclass(hint):
        return _of_class(hint)
    return None


def _of_class(cls: Any) -> Reader | None:
    hints = get_type_hints(cls, include_extras=True)
    readers: dict[str, Reader] = {}
    for entry in fields(cls):
        found = _of(hints[entry.name])
        if found is None:
            return None
        readers[entry.name] = found
    count = len(readers)

    def read(value: Any) -> Any:
        if type(value) is not dict or len(value) != count:
            raise Irregular
        try:
            return cls(*[each(value[name]) for name, each in readers.items()])
        except KeyError:
            raise Irregular from None

    return read
