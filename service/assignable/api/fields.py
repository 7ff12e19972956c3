"""The shapes requests and answers are made of: strict scalars, and whole arrays at numpy's speed.

Everything a field enforces stands in the JSON Schema it emits (:meth:`Field.json_schema`), and the
other way about. Faults carry a stable code, and every fault of a body is reported at once, up to
:data:`~assignable.api.problems.MAX_ERRORS` a field, each with its exact place.
"""

from __future__ import annotations

import re
from collections.abc import Callable, Iterable, Iterator, Mapping
from heapq import nsmallest
from itertools import chain, islice
from typing import Any, ClassVar

import marshmallow as ma
import numpy as np
import orjson
from marshmallow import ValidationError

from .problems import HERE, MAX_ERRORS, Coded, More

# The contract's bounds, which no installation changes.
LARGEST = 1e300  # of any number
LARGEST_INTEGER = 2**53 - 1  # beyond it a double skips integers
MAX_ROWS = 200_000  # subgroups, or other rows of a table
MAX_COLUMNS = 1_000  # values of a row
MAX_VALUES = 1_000_000  # values of a table or a list of numbers
MAX_TEXTS = 200_000  # ids or times of a list
MAX_TEXT = 200  # characters of a text
MAX_OBJECTS = 10_000  # objects of a list
_MOST_HINTS = 10  # unknown names of one object for which a known one is looked for
MAX_KEPT = 1_000  # items of a list in a document that a caller sends back

# Control characters and what XML 1.0 cannot hold; halves of surrogate pairs cannot be written as UTF-8.
_FORBIDDEN = re.compile("[\x00-\x1f\x7f-\x9f\ud800-\udfff\ufffe\uffff]")
TEXT_PATTERN = r"^[^\u0000-\u001f\u007f-\u009f\ufffe\uffff]*$"

Json = dict[str, Any]
Path = tuple[int, ...]
Fault = tuple[Path, Coded]

_KINDS: dict[type, str] = {
    str: "text",
    bool: "true or false",
    type(None): "null",
    list: "a list",
    dict: "an object",
    int: "a number",
    float: "a number",
}


def _wrong_type(code: str, expected: str, value: object) -> Coded:
    return Coded(code, f"This must be {expected}, not {_KINDS.get(type(value), 'something else')}.")


def _shown(number: float) -> str:
    return f"{number:.15g}"


class _Messages:
    """The messages marshmallow itself gives, coded."""

    default_error_messages: ClassVar[dict[str, Any]] = {
        "required": Coded("required", "This field is required."),
        "null": Coded("null", "This must not be null."),
        "validator_failed": Coded("invalid", "This value is not allowed here."),
    }


class Field(_Messages, ma.fields.Field[Any]):
    """A field that states its own schema."""

    def json_schema(self) -> Json:
        """The JSON Schema of the values taken, null aside."""
        raise NotImplementedError

    @staticmethod
    def fail_with(code: str, text: str) -> ValidationError:
        return ValidationError(Coded(code, text))


def json_schema_of(field: ma.fields.Field[Any], ret: Json) -> Json:
    """The attribute function for apispec's converter: the field's own schema, null included."""
    if not isinstance(field, Field):
        return {}
    schema = field.json_schema()
    if isinstance(field.parent, AnswerShape):
        schema = _without_default_bounds(schema)
    if field.allow_none:
        if "anyOf" in schema:
            return {"anyOf": [*schema["anyOf"], {"type": "null"}]}
        if "enum" in schema:
            # As a list of types with null among the choices, generators of clients make three types of it.
            return {"anyOf": [schema, {"type": "null"}]}
        schema["type"] = [schema["type"], "null"]
    return schema


_ONLY_FOR_REQUESTS = ("maxItems", "maxLength", "pattern")


def _without_default_bounds(schema: Json) -> Json:
    """What protects the service from its callers binds callers only; answers promise less."""
    kept: Json = {
        name: _without_default_bounds(value) if name == "items" else value
        for name, value in schema.items()
        if name not in _ONLY_FOR_REQUESTS
    }
    if "anyOf" in kept:
        kept["anyOf"] = [_without_default_bounds(choice) for choice in kept["anyOf"]]
    for name, bound in (("minimum", -1), ("maximum", 1)):
        if kept.get(name) in (bound * LARGEST, bound * LARGEST_INTEGER):
            del kept[name]
    return kept


class _Bounds:
    """The range of a number, with each end inside it or not."""

    __slots__ = ("above", "below", "least", "most")

    def __init__(
        self, least: float | None, most: float | None, above: float | None, below: float | None
    ) -> None:
        self.least = -LARGEST if least is None and above is None else least
        self.most = LARGEST if most is None and below is None else most
        self.above = above
        self.below = below

    def fault(self, number: float) -> Coded | None:
        if self.least is not None and number < self.least:
            return Coded("too-small", f"This must be at least {_shown(self.least)}.")
        if self.above is not None and number <= self.above:
            return Coded("too-small", f"This must be greater than {_shown(self.above)}.")
        if self.most is not None and number > self.most:
            return Coded("too-large", f"This must be at most {_shown(self.most)}.")
        if self.below is not None and number >= self.below:
            return Coded("too-large", f"This must be less than {_shown(self.below)}.")
        return None

    def hold_for(self, numbers: np.ndarray) -> bool:
        """Whether every number that is not NaN lies within."""
        if not numbers.size:
            return True
        low, high = float(numbers.min()), float(numbers.max())
        if low != low:  # a NaN hides the others
            present = numbers[numbers == numbers]
            return self.hold_for(present)
        return self.fault(low) is None and self.fault(high) is None

    def json_schema(self) -> Json:
        named = {
            "minimum": self.least,
            "exclusiveMinimum": self.above,
            "maximum": self.most,
            "exclusiveMaximum": self.below,
        }
        return {name: bound for name, bound in named.items() if bound is not None}


class StrictNumber(Field):
    """A JSON number, as a float: finite, not text, not a boolean.

    ``least`` and ``most`` belong to the range, ``above`` and ``below`` do not.
    """

    def __init__(
        self,
        *,
        least: float | None = None,
        most: float | None = None,
        above: float | None = None,
        below: float | None = None,
        **kwargs: Any,
    ) -> None:
        super().__init__(**kwargs)
        self._bounds = _Bounds(least, most, above, below)

    def _deserialize(self, value: Any, attr: str | None, data: Any, **kwargs: Any) -> float:
        if type(value) is not float and type(value) is not int:
            raise ValidationError(_wrong_type("not-a-number", "a number", value))
        if fault := self._bounds.fault(value):
            raise ValidationError(fault)
        return float(value)

    def json_schema(self) -> Json:
        return {"type": "number", "format": "double", **self._bounds.json_schema()}


class StrictInteger(Field):
    """A JSON integer; 1.0 is one."""

    def __init__(self, *, least: int | None = None, most: int | None = None, **kwargs: Any) -> None:
        super().__init__(**kwargs)
        self._bounds = _Bounds(
            -LARGEST_INTEGER if least is None else least,
            LARGEST_INTEGER if most is None else most,
            None,
            None,
        )

    def _deserialize(self, value: Any, attr: str | None, data: Any, **kwargs: Any) -> int:
        if type(value) is not int and (type(value) is not float or not value.is_integer()):
            raise ValidationError(_not_integer(value))
        if fault := self._bounds.fault(value):
            raise ValidationError(fault)
        return int(value)

    def json_schema(self) -> Json:
        return {"type": "integer", "format": "int64", **self._bounds.json_schema()}


def _not_integer(value: object) -> Coded:
    if type(value) is float:
        return Coded("not-an-integer", "This must be a whole number.")
    return _wrong_type("not-an-integer", "a whole number", value)


class StrictBoolean(Field):
    """``true`` or ``false``, nothing like them."""

    def _deserialize(self, value: Any, attr: str | None, data: Any, **kwargs: Any) -> bool:
        if type(value) is not bool:
            raise ValidationError(_wrong_type("not-a-boolean", "true or false", value))
        return value

    def json_schema(self) -> Json:
        return {"type": "boolean"}


class StrictString(Field):
    """A text without control characters."""

    def __init__(self, *, min_length: int = 0, max_length: int = MAX_TEXT, **kwargs: Any) -> None:
        super().__init__(**kwargs)
        self._min_length = min_length
        self._max_length = max_length

    def _deserialize(self, value: Any, attr: str | None, data: Any, **kwargs: Any) -> str:
        if fault := _text_fault(value, self._min_length, self._max_length):
            raise ValidationError(fault)
        return value

    def json_schema(self) -> Json:
        return _text_schema(self._min_length, self._max_length)


def _text_fault(value: Any, least: int, most: int) -> Coded | None:
    if type(value) is not str:
        return _wrong_type("not-text", "text", value)
    if len(value) < least:
        return Coded("too-short", f"This must have at least {least} characters.")
    if len(value) > most:
        return Coded("too-long", f"This must have at most {most} characters.")
    if _FORBIDDEN.search(value):
        return Coded("forbidden-character", "This holds a control character, or half of a character.")
    return None


def _text_schema(least: int, most: int) -> Json:
    schema: Json = {"type": "string", "maxLength": most, "pattern": TEXT_PATTERN}
    return {**schema, "minLength": least} if least else schema


class Choice(Field):
    """One of a few texts."""

    def __init__(self, *choices: str, **kwargs: Any) -> None:
        super().__init__(**kwargs)
        self.choices = choices
        self._known = frozenset(choices)

    def _deserialize(self, value: Any, attr: str | None, data: Any, **kwargs: Any) -> str:
        if type(value) is not str:
            raise ValidationError(_wrong_type("not-text", "text", value))
        if value not in self._known:
            raise ValidationError(self.unknown())
        return value

    def unknown(self) -> Coded:
        """The fault of a text that is none of them."""
        return Coded("unknown-choice", f"This must be one of: {', '.join(self.choices)}.")

    def json_schema(self) -> Json:
        return {"type": "string", "enum": list(self.choices)}


class _Array(Field):
    """What all arrays share: the bound on items, and the report of faults."""

    def __init__(self, *, min_items: int, max_items: int, **kwargs: Any) -> None:
        super().__init__(**kwargs)
        self._min_items = min_items
        self._max_items = max_items

    def _bounded(self, value: Any) -> list[Any]:
        if type(value) is not list:
            raise ValidationError(_wrong_type("not-a-list", "a list", value))
        if fault := _length_fault(len(value), self._min_items, self._max_items):
            raise ValidationError(fault)
        return value

    def _items_schema(self) -> Json:
        raise NotImplementedError

    def json_schema(self) -> Json:
        schema: Json = {"type": "array", "items": self._items_schema(), "maxItems": self._max_items}
        return {**schema, "minItems": self._min_items} if self._min_items else schema


def _length_fault(length: int, least: int, most: int) -> Coded | None:
    if length < least:
        return Coded("too-few-items", f"This list has {length} items; at least {least} are needed.")
    if length > most:
        return Coded("too-many-items", f"This list has {length} items; at most {most} are taken.")
    return None


def _report(faults: Iterable[Fault]) -> ValidationError:
    """The first faults as nested messages, the rest as a count."""
    faults = iter(faults)
    messages: dict[Any, Any] = {}
    for path, fault in islice(faults, MAX_ERRORS):
        here = messages
        for step in path:
            here = here.setdefault(step, {})
        here.setdefault(HERE, []).append(fault)
    if more := sum(1 for _ in faults):
        messages.setdefault(HERE, []).append(More.of(more))
    return ValidationError(messages)


_NUMERIC = frozenset((int, float))
_NUMERIC_OR_NULL = frozenset((int, float, type(None)))


def _floats(values: Iterable[Any], count: int, types: set[type]) -> np.ndarray:
    """JSON numbers as floats, null as NaN; a number beyond a double as infinity."""
    if type(None) in types:
        return np.array(list(values), dtype=np.float64)
    return np.fromiter(values, dtype=np.float64, count=count)


class _Numbers(_Array):
    """Arrays of numbers: what one number must be."""

    def __init__(self, *, bounds: _Bounds, nullable: bool, integral: bool = False, **kwargs: Any) -> None:
        super().__init__(**kwargs)
        self._bounds = bounds
        self._nullable = nullable
        self._integral = integral
        self._types = _NUMERIC_OR_NULL if nullable else _NUMERIC

    def _array(self, values: Callable[[], Iterable[Any]], count: int) -> np.ndarray | None:
        """The numbers, flat; ``None`` when there is a fault among them, which is then looked for."""
        types = set(map(type, values()))
        if not types <= self._types:
            return None
        try:
            numbers = _floats(values(), count, types)
        except OverflowError:
            return None
        if not self._bounds.hold_for(numbers):
            return None
        if self._integral and float in types:
            present = numbers[numbers == numbers]
            if not np.array_equal(present, np.floor(present)):
                return None
        return numbers

    def _number_fault(self, value: Any) -> Coded | None:
        kind = type(value)
        if value is None:
            return None if self._nullable else Coded("null", "This must be a number, not null.")
        if kind is not int and kind is not float:
            if self._integral:
                return _wrong_type("not-an-integer", "a whole number", value)
            return _wrong_type("not-a-number", "a number", value)
        if fault := self._bounds.fault(value):
            return fault
        return _not_integer(value) if self._integral and value != int(value) else None

    def _number_schema(self) -> Json:
        kind, form = ("integer", "int64") if self._integral else ("number", "double")
        return {
            "type": [kind, "null"] if self._nullable else kind,
            "format": form,
            **self._bounds.json_schema(),
        }


class NumberList(_Numbers):
    """A list of numbers as a (n,) float array; null, where it is allowed, as NaN."""

    def __init__(
        self,
        *,
        nullable: bool = False,
        least: float | None = None,
        most: float | None = None,
        above: float | None = None,
        below: float | None = None,
        min_items: int = 1,
        max_items: int = MAX_VALUES,
        **kwargs: Any,
    ) -> None:
        super().__init__(
            bounds=_Bounds(least, most, above, below),
            nullable=nullable,
            min_items=min_items,
            max_items=max_items,
            **kwargs,
        )

    def _deserialize(self, value: Any, attr: str | None, data: Any, **kwargs: Any) -> np.ndarray:
        values = self._bounded(value)
        numbers = self._array(lambda: values, len(values))
        if numbers is None:
            raise _report(self._faults(values))
        return numbers

    def _faults(self, values: list[Any]) -> Iterator[Fault]:
        for i, value in enumerate(values):
            if fault := self._number_fault(value):
                yield (i,), fault

    def _items_schema(self) -> Json:
        return self._number_schema()


class IntegerList(NumberList):
    """A list of whole numbers as a (n,) int64 array; as floats with NaN for null where that is allowed."""

    def __init__(
        self,
        *,
        least: int = -LARGEST_INTEGER,
        most: int = LARGEST_INTEGER,
        nullable: bool = False,
        **kwargs: Any,
    ) -> None:
        super().__init__(least=least, most=most, nullable=nullable, integral=True, **kwargs)

    def _deserialize(self, value: Any, attr: str | None, data: Any, **kwargs: Any) -> np.ndarray:
        numbers = super()._deserialize(value, attr, data, **kwargs)
        return numbers if self._nullable else numbers.astype(np.int64)


class CountList(IntegerList):
    """A list of counts: whole numbers from 0."""

    def __init__(self, *, least: int = 0, **kwargs: Any) -> None:
        super().__init__(least=least, **kwargs)


class NumberTable(_Numbers):
    """Rows of numbers as a (rows, columns) float array; null, where it is allowed, as NaN.

    With ``ragged`` rows may differ in length, and the short ones are padded with NaN; without, each must
    be as long as the first.
    """

    def __init__(
        self,
        *,
        nullable: bool = True,
        ragged: bool = False,
        least: float | None = None,
        most: float | None = None,
        above: float | None = None,
        below: float | None = None,
        min_rows: int = 1,
        max_rows: int = MAX_ROWS,
        min_columns: int = 1,
        max_columns: int = MAX_COLUMNS,
        **kwargs: Any,
    ) -> None:
        super().__init__(
            bounds=_Bounds(least, most, above, below),
            nullable=nullable,
            min_items=min_rows,
            max_items=max_rows,
            **kwargs,
        )
        self._ragged = ragged
        self._min_columns = min_columns
        self._max_columns = max_columns

    def _deserialize(self, value: Any, attr: str | None, data: Any, **kwargs: Any) -> np.ndarray:
        rows = self._bounded(value)
        if not rows:
            return np.empty((0, 0))
        if set(map(type, rows)) != {list}:
            raise _report(self._faults(rows))
        lengths = set(map(len, rows))
        shortest, longest = min(lengths), max(lengths)
        if shortest < self._min_columns or longest > self._max_columns:
            raise _report(self._faults(rows))
        if shortest != longest and not self._ragged:
            raise _report(self._faults(rows))
        if len(rows) * longest > MAX_VALUES:
            raise self.fail_with(
                "too-many-values",
                f"This table has room for {len(rows)} by {longest} values; at most {MAX_VALUES} are taken.",
            )
        count = len(rows) * longest if shortest == longest else sum(map(len, rows))
        numbers = self._array(lambda: chain.from_iterable(rows), count)
        if numbers is None:
            raise _report(self._faults(rows))
        if shortest == longest:
            return numbers.reshape(len(rows), longest)
        table = np.full((len(rows), longest), np.nan)
        table[np.arange(longest) < np.fromiter(map(len, rows), np.intp, len(rows))[:, None]] = numbers
        return table

    def _faults(self, rows: list[Any]) -> Iterator[Fault]:
        width = next((len(row) for row in rows if type(row) is list), 0)
        for i, row in enumerate(rows):
            if type(row) is not list:
                yield (i,), _wrong_type("not-a-list", "a list", row)
                continue
            if fault := _length_fault(len(row), self._min_columns, self._max_columns):
                yield (i,), fault
            elif len(row) != width and not self._ragged:
                yield (
                    (i,),
                    Coded(
                        "unequal-length",
                        f"This row has {len(row)} values where the first has {width}; rows must be alike.",
                    ),
                )
            for j, value in enumerate(row):
                if fault := self._number_fault(value):
                    yield (i, j), fault

    def _items_schema(self) -> Json:
        row: Json = {"type": "array", "items": self._number_schema(), "maxItems": self._max_columns}
        return {**row, "minItems": self._min_columns} if self._min_columns else row


class _Texts(_Array):
    """Lists of texts, kept as they are given."""

    def __init__(self, *, min_items: int = 1, max_items: int = MAX_TEXTS, **kwargs: Any) -> None:
        super().__init__(min_items=min_items, max_items=max_items, **kwargs)

    def _deserialize(self, value: Any, attr: str | None, data: Any, **kwargs: Any) -> list[str]:
        texts = self._bounded(value)
        if texts and not (set(map(type, texts)) == {str} and self._all_good(texts)):
            raise _report(((i,), fault) for i, text in enumerate(texts) if (fault := self._fault(text)))
        return texts

    def _all_good(self, texts: list[str]) -> bool:
        raise NotImplementedError

    def _fault(self, text: Any) -> Coded | None:
        raise NotImplementedError


class StringList(_Texts):
    """A list of texts such as ids, each without control characters."""

    def __init__(self, *, min_length: int = 0, max_length: int = MAX_TEXT, **kwargs: Any) -> None:
        super().__init__(**kwargs)
        self._min_length = min_length
        self._max_length = max_length

    def _all_good(self, texts: list[str]) -> bool:
        lengths = set(map(len, texts))
        return (
            min(lengths) >= self._min_length
            and max(lengths) <= self._max_length
            and _FORBIDDEN.search("".join(texts)) is None
        )

    def _fault(self, text: Any) -> Coded | None:
        return _text_fault(text, self._min_length, self._max_length)

    def _items_schema(self) -> Json:
        return _text_schema(self._min_length, self._max_length)


class ChoiceList(_Texts):
    """A list of some of a few texts."""

    def __init__(self, *choices: str, **kwargs: Any) -> None:
        super().__init__(**{"max_items": len(choices), **kwargs})
        self._choice = Choice(*choices)

    def _all_good(self, texts: list[str]) -> bool:
        return set(texts) <= set(self._choice.choices)

    def _fault(self, text: Any) -> Coded | None:
        if type(text) is not str:
            return _wrong_type("not-text", "text", text)
        return None if text in self._choice.choices else self._choice.unknown()

    def _items_schema(self) -> Json:
        return self._choice.json_schema()


_DAYS_OF_MONTH = (
    "(?:0[13578]|1[02])-(?:0[1-9]|[12][0-9]|3[01])"
    "|(?:0[469]|11)-(?:0[1-9]|[12][0-9]|30)"
    "|02-(?:0[1-9]|1[0-9]|2[0-9])"
)
_TIME = (
    rf"[0-9]{{4}}-(?:{_DAYS_OF_MONTH})[Tt](?:[01][0-9]|2[0-3]):[0-5][0-9]:(?:[0-5][0-9]|60)"
    r"(?:\.[0-9]{1,12})?(?:[Zz]|[+-](?:[01][0-9]|2[0-3]):[0-5][0-9])"
)
_ONE_TIME = re.compile(_TIME)
_MANY_TIMES = re.compile(rf"(?:{_TIME}\n)*+")
_LONGEST_TIME = len("2026-03-02T06:00:00.000000000000+00:00")


class TimeList(_Texts):
    """A list of RFC 3339 date-times, kept as they are given."""

    def _all_good(self, texts: list[str]) -> bool:
        # One text for all of them: a newline inside one would make it two, so lines are counted as well.
        joined = "\n".join(texts) + "\n"
        return (
            joined.count("\n") == len(texts)
            and _MANY_TIMES.fullmatch(joined) is not None
            and ("-02-29" not in joined or all(map(_is_time, texts)))
        )

    def _fault(self, text: Any) -> Coded | None:
        if type(text) is not str:
            return _wrong_type("not-a-time", "a date and time as text", text)
        if _is_time(text):
            return None
        return Coded(
            "not-a-time", "This must be an RFC 3339 date and time with offset, such as 2026-03-02T06:00:00Z."
        )

    def _items_schema(self) -> Json:
        return {"type": "string", "format": "date-time", "maxLength": _LONGEST_TIME}


def _is_time(text: str) -> bool:
    if _ONE_TIME.fullmatch(text) is None:
        return False
    if text[5:10] != "02-29":
        return True
    year = int(text[:4])
    return year % 4 == 0 and (year % 100 != 0 or year % 400 == 0)


class Object(_Messages, ma.fields.Nested):
    """An object of its own named shape."""


class ObjectList(_Messages, ma.fields.List):
    """A list of objects of one named shape."""

    def __init__(
        self,
        shape: type[ma.Schema] | Callable[[], ma.Schema],
        *,
        min_items: int = 0,
        max_items: int = MAX_OBJECTS,
        **kwargs: Any,
    ) -> None:
        super().__init__(Object(shape), **kwargs)
        self.min_items = min_items
        self.max_items = max_items

    def _deserialize(self, value: Any, attr: str | None, data: Any, **kwargs: Any) -> list[Any]:
        if type(value) is not list:
            raise ValidationError(_wrong_type("not-a-list", "a list of objects", value))
        if fault := _length_fault(len(value), self.min_items, self.max_items):
            raise ValidationError(fault)
        shape: Any = self.inner
        loaded: list[Any] = []
        faults: dict[int, Any] = {}
        for at, one in enumerate(value):
            try:
                loaded.append(shape.deserialize(one, **kwargs))
            except ValidationError as error:
                faults[at] = error.messages
                if len(faults) >= MAX_ERRORS:  # as many as are told; the rest is not looked at
                    break
        if faults:
            raise ValidationError(faults)
        return loaded


def list_bounds_of(field: ma.fields.Field[Any], ret: Json) -> Json:
    """The attribute function for lists of objects."""
    if not isinstance(field, ObjectList) or isinstance(field.parent, AnswerShape):
        return {}
    bounds: Json = {"maxItems": field.max_items}
    return {**bounds, "minItems": field.min_items} if field.min_items else bounds


class _Shape(ma.Schema):
    error_messages: dict[str, Any] = {  # noqa: RUF012
        "type": Coded("not-an-object", "This must be a JSON object."),
        "unknown": Coded("unknown-field", "There is no such field here."),
    }


class RequestShape(_Shape):
    """Base of everything a caller sends: closed, so that a misspelt option is never ignored."""

    class Meta:
        unknown = ma.RAISE

    def __init__(self, **kwargs: Any) -> None:
        super().__init__(**kwargs)
        self._plan = [
            (name, field.data_key or name, field, field.load_default is not ma.missing)
            for name, field in self.load_fields.items()
        ]
        self._keys = frozenset(key for _, key, _, _ in self._plan)
        self._makes = bool(self._hooks["post_load"])

    def load(self, data: Any, **kwargs: Any) -> Any:
        """What the base does for one object with no options, at a third of its cost; a test holds the two equal.

        Reading shapes is the largest part of a small request that is no arithmetic.
        """
        if type(data) is not dict:
            raise ValidationError({HERE: [self.error_messages["type"]]})
        loaded: dict[str, Any] = {}
        faults: dict[str, Any] = {}
        for name, key, field, has_default in self._plan:
            if key not in data:
                if field.required:
                    faults[key] = [field.error_messages["required"]]
                elif has_default:
                    loaded[name] = field.load_default
                continue
            value = data[key]
            if value is None:
                if field.allow_none:
                    loaded[name] = None
                else:
                    faults[key] = [field.error_messages["null"]]
                continue
            try:
                loaded[name] = field._deserialize(value, key, data)
            except ValidationError as error:
                faults[key] = error.messages
        if not data.keys() <= self._keys:
            unknown = data.keys() - self._keys
            for key in nsmallest(MAX_ERRORS, unknown):
                faults[key] = [self.error_messages["unknown"]]
            if len(unknown) > MAX_ERRORS:
                faults[HERE] = [More.of(len(unknown) - MAX_ERRORS)]
        if faults:
            failed = ValidationError(faults, data=data, valid_data=loaded)
            self.handle_error(failed, data, many=False)
            raise failed
        if self._makes:
            return self._invoke_load_processors(
                "post_load", loaded, many=False, original_data=data, unknown=self.unknown, partial=None
            )
        return loaded

    def handle_error(self, error: ValidationError, data: Any, *, many: bool, **kwargs: Any) -> None:
        """Puts the nearest known name beside an unknown one, in a stable order."""
        messages = error.messages
        if not isinstance(messages, dict):
            return
        unknown = sorted(key for key, found in messages.items() if _is_unknown(found))
        if not unknown:
            return
        from difflib import get_close_matches

        known = [field.data_key or name for name, field in self.load_fields.items()]
        for at, key in enumerate(unknown):
            near = get_close_matches(key[:MAX_TEXT], known, n=1) if at < _MOST_HINTS else []
            hint = f" Did you mean {near[0]}?" if near else ""
            shown = key if len(key) <= 80 else key[:80] + "..."
            del messages[key]
            messages[key] = [Coded("unknown-field", f"There is no field {shown} here.{hint}")]


def _is_unknown(found: object) -> bool:
    return isinstance(found, list) and any(getattr(text, "code", "") == "unknown-field" for text in found)


class AnswerShape(_Shape):
    """Base of everything the service answers: open, so that a new field breaks nobody."""

    class Meta:
        unknown = ma.INCLUDE


def known_names(shape: ma.Schema) -> Mapping[str, ma.fields.Field[Any]]:
    """The fields of a request by the names callers use."""
    return {field.data_key or name: field for name, field in shape.load_fields.items()}


def reads_json(field: ma.fields.Field[Any]) -> bool:
    """Whether the text of a query is read as JSON for this field: a number, or true or false."""
    return isinstance(field, StrictNumber | StrictInteger | StrictBoolean)


def from_text(text: str) -> Any:
    """A number, true, false or null as JSON writes it; any other text as it is."""
    try:
        return orjson.loads(text)
    except orjson.JSONDecodeError:
        return text


class OneOrMany(_Array):
    """A number for all points, or a list with one for each; an array (1,) or (n,)."""

    def __init__(self, many: NumberList, **kwargs: Any) -> None:
        super().__init__(min_items=1, max_items=many._max_items, **kwargs)
        self._many = many

    def _deserialize(self, value: Any, attr: str | None, data: Any, **kwargs: Any) -> np.ndarray:
        if type(value) is list:
            return self._many._deserialize(value, attr, data, **kwargs)
        if type(value) not in _NUMERIC:
            raise ValidationError(_wrong_type("not-a-number", "a number, or a list of numbers", value))
        if fault := self._many._number_fault(value):
            raise ValidationError(fault)
        return np.array([value], dtype=np.int64 if self._many._integral else np.float64)

    def one(self, **kwargs: Any) -> StrictInteger | StrictNumber:
        """A field for the one number alone."""
        field: StrictInteger | StrictNumber
        field = StrictInteger(**kwargs) if self._many._integral else StrictNumber(**kwargs)
        field._bounds = self._many._bounds
        return field

    def json_schema(self) -> Json:
        one = self._many._number_schema()
        if isinstance(one["type"], list):
            one["type"] = one["type"][0]
        return {"anyOf": [one, self._many.json_schema()]}


class ListOrTable(_Array):
    """Numbers in one list, or in rows; an array (n,) or (rows, columns)."""

    def __init__(self, flat: NumberList, table: NumberTable, **kwargs: Any) -> None:
        super().__init__(min_items=1, max_items=max(flat._max_items, table._max_items), **kwargs)
        self._flat = flat
        self._table = table

    def _deserialize(self, value: Any, attr: str | None, data: Any, **kwargs: Any) -> np.ndarray:
        rows = self._bounded(value)
        road = self._table if any(type(row) is list for row in rows) else self._flat
        return road._deserialize(value, attr, data, **kwargs)

    def json_schema(self) -> Json:
        return {"anyOf": [self._flat.json_schema(), self._table.json_schema()]}
