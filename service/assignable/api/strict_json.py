"""JSON as the contract means it, read at the speed of arrays.

``orjson`` reads the body: it knows no NaN, no Infinity, nothing a double cannot hold, and only UTF-8.
What it cannot see is a key given twice, of which it keeps the last; a repeated ``data`` would then
drop half of the measurements without a word. Every key takes a colon in the text, so a body that
shows no more colons than the parsed object has keys repeats none. Only where the counts differ, or
where ``orjson`` refuses, does the standard library's decoder read the text once more, and decide.
"""

from __future__ import annotations

import json
import re
from typing import Any, NoReturn

import orjson

MAX_DEPTH = 1024  # what orjson itself goes to
MAX_COMMAS = 3_000_000  # no operation takes as many values
MAX_BRACKETS = 500_000  # nor as many lists and objects
MAX_KEYS = 100_000  # nor as many members of objects
_LARGE = 1_000_000  # bytes; of more, the slow decoder would keep a place for seconds

_BOM = b"\xef\xbb\xbf"
_KEY = re.compile(rb'"[ \t\n\r]*:')
# Strings are taken whole, so that nothing inside one is taken for more; one without an end is taken to
# the end of the text, and nothing is tried twice, so that a hostile text costs no more than its length.
_STRING = r'"(?:[^"\\]++|\\.)*+(?:"|\\?\Z)'
_STRUCTURE = re.compile(rf"({_STRING})([ \t\n\r]*:)?|[{{}}\[\]]", re.DOTALL)
_LITERAL = re.compile(rf"{_STRING}|(NaN|-?Infinity)", re.DOTALL)
_NUMBER = re.compile(rf"{_STRING}|(-?\d+(?:\.\d+)?(?:[eE][+-]?\d+)?)", re.DOTALL)
_LONGEST_INTEGER = 310  # digits; longer than any double can hold


class BadJson(Exception):
    """A body that is not JSON; ``detail`` is a sentence, ``line`` and ``column`` count from 1."""

    def __init__(self, code: str, detail: str, line: int = 1, column: int = 1) -> None:
        super().__init__(detail)
        self.code = code
        self.detail = detail
        self.line = line
        self.column = column


class TooManyValues(Exception):
    """A body with more values than any operation takes, found before objects are made of them."""


def loads(body: bytes) -> Any:
    """The object a JSON body holds.

    Raises :class:`BadJson` for what is not JSON: NaN, Infinity, numbers beyond a double, a key given
    twice in one object, a byte order mark, bytes that are not UTF-8, nesting beyond :data:`MAX_DEPTH`.
    Integers beyond 64 bits may arrive as floats. Raises :class:`TooManyValues` beyond :data:`MAX_COMMAS`,
    :data:`MAX_BRACKETS` or :data:`MAX_KEYS`: an object weighs up to fifty times what its text does.
    """
    large = len(body) > _LARGE
    if large and (body.count(b",") > MAX_COMMAS or body.count(b"[") + body.count(b"{") > MAX_BRACKETS):
        raise TooManyValues
    try:
        document = orjson.loads(body)
    except orjson.JSONDecodeError as error:
        if large:
            _refuse_large(body, error)
        return _read_slowly(body)
    # Neither count can be too low for the text, nor too high for the object: equal means no key twice.
    keys = _keys_of(document)
    if keys > MAX_KEYS:
        raise TooManyValues
    if body.count(b":") == keys or len(_KEY.findall(body)) == keys:
        return document
    if large:
        text = body.decode("utf-8")
        if (repeated := _find_repeated(text)) is not None:
            raise _repeated(text, *repeated)
        return document
    return _read_slowly(body)


def _refuse_large(body: bytes, error: orjson.JSONDecodeError) -> NoReturn:
    """What is wrong with a large body, by what orjson says of it, which is less than the slow decoder does."""
    if body.startswith(_BOM):
        raise _byte_order_mark()
    text = body.decode("utf-8", "replace")
    if "recursion" in error.msg:
        raise BadJson("nested-too-deeply", "Lists or objects are nested too deeply.")
    position = min(error.pos, len(text))
    if not text[position:].strip():
        raise _at("not-json", "The JSON ends here before it is complete.", text, len(text))
    raise _at("not-json", "This is not JSON here.", text, position)


def _byte_order_mark() -> BadJson:
    return BadJson(
        "byte-order-mark",
        "The body begins with a byte order mark; JSON is sent as plain UTF-8 without one.",
    )


def _repeated(text: str, key: str, position: int) -> BadJson:
    return _at("repeated-key", f"The key {key} is given twice in the same object.", text, position)


def _keys_of(document: object) -> int:
    """Keys of all objects inside; lists are entered only when they begin with an object."""
    if type(document) is not dict and type(document) is not list:
        return 0
    keys = 0
    todo: list[Any] = [document]
    while todo:
        here = todo.pop()
        if type(here) is dict:
            keys += len(here)
            for value in here.values():
                kind = type(value)
                if kind is dict or (kind is list and value and type(value[0]) is dict):
                    todo.append(value)
        elif here and type(here[0]) is dict:
            todo.extend(item for item in here if type(item) is dict)
    return keys


class _Refused(Exception):
    """Raised inside the decoder, which alone knows that something is wrong but not where."""


class _Repeated(_Refused):
    pass


class _Literal(_Refused):
    pass


class _TooLarge(_Refused):
    pass


def _object(pairs: list[tuple[str, Any]]) -> dict[str, Any]:
    found = dict(pairs)
    if len(found) != len(pairs):
        raise _Repeated
    return found


def _constant(name: str) -> NoReturn:
    raise _Literal(name)


def _float(text: str) -> float:
    number = float(text)
    if number in (float("inf"), float("-inf")):
        raise _TooLarge
    return number


def _integer(text: str) -> int | float:
    if len(text) > _LONGEST_INTEGER:
        raise _TooLarge
    number = int(text)
    try:
        float(number)
    except OverflowError:
        raise _TooLarge from None
    return number


_DECODER = json.JSONDecoder(
    object_pairs_hook=_object, parse_constant=_constant, parse_float=_float, parse_int=_integer
)


def _read_slowly(body: bytes) -> Any:
    if not body.strip():
        raise BadJson("empty-body", "The body is empty; a JSON object is expected.")
    if body.startswith(_BOM):
        raise _byte_order_mark()
    try:
        text = body.decode("utf-8")
    except UnicodeDecodeError as error:
        before = body[: error.start].decode("utf-8")
        raise _at(
            "not-utf-8", "There is a byte here that is not UTF-8; JSON is sent as UTF-8.", before, len(before)
        ) from None
    _bound_depth(text)
    try:
        return _DECODER.decode(text)
    except _Repeated:
        repeated = _find_repeated(text)
        assert repeated is not None, "the decoder saw a repeated key"
        raise _repeated(text, *repeated) from None
    except _Literal as error:
        position = next(found.start(1) for found in _LITERAL.finditer(text) if found[1])
        raise _at(
            "not-a-json-number",
            f"{error} is not a JSON number; send null for a missing value where the field allows it.",
            text,
            position,
        ) from None
    except _TooLarge:
        position = next(
            found.start(1) for found in _NUMBER.finditer(text) if found[1] and _overflows(found[1])
        )
        raise _at("number-too-large", "This number is too large for a double.", text, position) from None
    except json.JSONDecodeError as error:
        raise _at("not-json", _plainly(error, text), text, error.pos) from None
    except RecursionError:
        raise _too_deep(text, 0) from None


def _overflows(number: str) -> bool:
    return abs(float(number)) == float("inf")


def _bound_depth(text: str) -> None:
    if text.count("[") + text.count("{") <= MAX_DEPTH:
        return
    depth = 0
    for found in _STRUCTURE.finditer(text):
        mark = found[0]
        if mark in "[{":
            depth += 1
            if depth > MAX_DEPTH:
                raise _too_deep(text, found.start())
        elif mark in "]}":
            depth -= 1


def _too_deep(text: str, position: int) -> BadJson:
    return _at("nested-too-deeply", "Lists or objects are nested too deeply here.", text, position)


def _find_repeated(text: str) -> tuple[str, int] | None:
    """The first key given twice in its object, as it is written, and where; None where there is none."""
    open_objects: list[set[str]] = []
    for found in _STRUCTURE.finditer(text):
        mark = found[0]
        if mark in ("{", "["):
            open_objects.append(set())
        elif mark in ("}", "]"):
            open_objects.pop()
        elif found[2] is not None:
            key = json.loads(found[1])
            if key in open_objects[-1]:
                shown = found[1] if len(found[1]) <= 80 else found[1][:80] + '..."'
                return shown, found.start()
            open_objects[-1].add(key)
    return None


_PLAIN = {
    "Expecting value": "A value is expected here.",
    "Expecting ',' delimiter": "A comma or a closing bracket is missing here.",
    "Expecting ':' delimiter": "A colon is missing here, between a key and its value.",
    "Expecting property name enclosed in double quotes": "A key in double quotes is expected here.",
    "Illegal trailing comma before end of object": "There is a comma before the end of the object.",
    "Illegal trailing comma before end of array": "There is a comma before the end of the list.",
    "Unterminated string starting at": "The string that begins here has no end.",
    "Extra data": "There is more text after the end of the JSON value.",
    "Invalid control character at": "A control character stands unescaped in a string here.",
    "Invalid \\escape": "There is a backslash here that begins no JSON escape.",
    "Invalid \\uXXXX escape": "There is a \\u escape here without four hexadecimal digits.",
}


def _plainly(error: json.JSONDecodeError, text: str) -> str:
    position = error.pos
    if not text[position:].strip():
        return "The JSON ends here before it is complete."
    if text[position] == "'":
        return "Strings and keys stand in double quotes in JSON."
    message = error.msg.removesuffix(": ")
    return _PLAIN.get(message, "This is not JSON here.")


def _at(code: str, sentence: str, text: str, position: int) -> BadJson:
    line = text.count("\n", 0, position) + 1
    column = position - text.rfind("\n", 0, position)
    return BadJson(code, f"{sentence} (Line {line}, column {column}.)", line, column)
