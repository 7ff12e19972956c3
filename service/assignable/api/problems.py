"""Every failure, from any layer, as a problem of RFC 9457: one table, one place.

A layer raises what is natural to it; :func:`of` looks the exception's class up in one table. The same
table of types titles the answers, describes them in the OpenAPI document, and is served as pages under
``/problems/``.
"""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Mapping
from dataclasses import dataclass, replace
from urllib.parse import quote

import orjson
from marshmallow import ValidationError
from werkzeug.exceptions import HTTPException

from ..documents.canonical import NotFinite
from ..spc.errors import DocumentMismatch, Fault, SpcError, UnusableData, UnusableParameter, Where
from .strict_json import BadJson, TooManyValues

MEDIA_TYPE = "application/problem+json"
MAX_ERRORS = 100
HERE = "_schema"  # marshmallow's name for what is wrong with an object as a whole

Headers = tuple[tuple[str, str], ...]


@dataclass(frozen=True, slots=True)
class ProblemType:
    """One kind of failure: ``meaning`` says what happened, ``remedy`` what the caller can do."""

    code: str
    status: int
    title: str
    meaning: str
    remedy: str

    @property
    def uri(self) -> str:
        return f"/problems/{self.code}"


NOT_JSON = ProblemType(
    "not-json",
    400,
    "Not JSON",
    "The body cannot be read as JSON.",
    "Mend the text at the line and column given. NaN, Infinity, keys given twice and byte order marks are "
    "not JSON here; a missing value is null.",
)
NOT_CSV = ProblemType(
    "not-csv",
    400,
    "Not CSV",
    "The body cannot be read as CSV.",
    "Mend the text at the row given; row 1 is the header. It is UTF-8, each row on a line of its own, a quote that is "
    "opened is closed on its line.",
)
BAD_REQUEST = ProblemType(
    "bad-request",
    400,
    "Bad request",
    "The request itself cannot be understood.",
    "Check how the request is put together and sent.",
)
NOT_AUTHENTICATED = ProblemType(
    "not-authenticated",
    401,
    "Not authenticated",
    "The service admits callers with a credential only, and the request has none that is good.",
    "Send an API key in X-API-Key, or a token as Authorization: Bearer, whichever the service takes; whoever runs it "
    "gives out keys.",
)
NOT_ADMITTED = ProblemType(
    "not-admitted",
    403,
    "Not admitted",
    "The credential is good, and is not one for this service.",
    "Ask the issuer for a token with this service's audience.",
)
NOT_FOUND = ProblemType(
    "not-found",
    404,
    "Not found",
    "There is nothing at this path.",
    "Check the path against the operations listed at /docs.",
)
METHOD_NOT_ALLOWED = ProblemType(
    "method-not-allowed",
    405,
    "Method not allowed",
    "The path exists and does not take this method.",
    "Use one of the methods named in the Allow header.",
)
NOT_ACCEPTABLE = ProblemType(
    "not-acceptable",
    406,
    "Not acceptable",
    "The operation answers in one media type, and the Accept header rules it out.",
    "Accept the media type the detail names; a picture has a path of its own.",
)
CONTENT_TOO_LARGE = ProblemType(
    "content-too-large",
    413,
    "Content too large",
    "The body is larger than this server takes.",
    "Send fewer values at once; the detail names the limit.",
)
UNSUPPORTED_MEDIA_TYPE = ProblemType(
    "unsupported-media-type",
    415,
    "Unsupported media type",
    "The operation does not read this media type.",
    "Send the body as JSON with Content-Type: application/json; where the answer's Accept-Post names it, a table may "
    "come as text/csv.",
)
UNSUPPORTED_CONTENT_ENCODING = ProblemType(
    "unsupported-content-encoding",
    415,
    "Unsupported content encoding",
    "The body is compressed in a way the server does not read.",
    "Send the body as it is, or compressed with gzip.",
)
CONTRACT_VIOLATION = ProblemType(
    "contract-violation",
    422,
    "The request breaks the contract",
    "The request can be read, and does not have the shape that the contract states.",
    "Mend each place listed under errors; the contract is at /openapi.json.",
)
NOT_COMPUTABLE = ProblemType(
    "not-computable",
    422,
    "Not computable",
    "The request has the right shape, and the calculation cannot be done with what it holds.",
    "Each entry under errors says what stands in the way and where.",
)
DOCUMENT_MISMATCH = ProblemType(
    "document-mismatch",
    422,
    "The document does not belong here",
    "A limits document or a carry is not of the kind, or not of the origin, that the operation needs.",
    "Send the limits document of this chart unchanged, and the carry that was last returned for it.",
)
INTERNAL = ProblemType(
    "internal",
    500,
    "Internal error",
    "The fault is in the service, not in the request.",
    "Report the request id to whoever runs the service; its log has the particulars.",
)
BUSY = ProblemType(
    "busy",
    503,
    "Busy",
    "All places for calculations are taken.",
    "Send the same request again after the seconds in Retry-After; repeating it is safe.",
)
NOT_READY = ProblemType(
    "not-ready",
    503,
    "Not ready",
    "The service does not pass its own test and takes no work.",
    "Ask whoever runs the service to look into its log.",
)

TYPES: dict[str, ProblemType] = {
    kind.code: kind
    for kind in (
        NOT_JSON,
        NOT_CSV,
        BAD_REQUEST,
        NOT_AUTHENTICATED,
        NOT_ADMITTED,
        NOT_FOUND,
        METHOD_NOT_ALLOWED,
        NOT_ACCEPTABLE,
        CONTENT_TOO_LARGE,
        UNSUPPORTED_MEDIA_TYPE,
        UNSUPPORTED_CONTENT_ENCODING,
        CONTRACT_VIOLATION,
        NOT_COMPUTABLE,
        DOCUMENT_MISMATCH,
        INTERNAL,
        BUSY,
        NOT_READY,
    )
}

OF_CLASS: dict[type[Exception], ProblemType] = {
    BadJson: NOT_JSON,
    TooManyValues: CONTENT_TOO_LARGE,
    ValidationError: CONTRACT_VIOLATION,
    UnusableData: NOT_COMPUTABLE,
    UnusableParameter: NOT_COMPUTABLE,
    DocumentMismatch: DOCUMENT_MISMATCH,
}

BEYOND_SCHEMAS = frozenset(("unequal-length", "too-many-values"))
"""Codes of faults that fields find and no schema can state."""

_OF_STATUS = {
    400: BAD_REQUEST,
    401: NOT_AUTHENTICATED,
    403: NOT_ADMITTED,
    404: NOT_FOUND,
    405: METHOD_NOT_ALLOWED,
    406: NOT_ACCEPTABLE,
    413: CONTENT_TOO_LARGE,
    415: UNSUPPORTED_MEDIA_TYPE,
    503: BUSY,
}


class Coded(str):
    """The text of a fault, with its stable code; goes through marshmallow as any message does."""

    __slots__ = ("code",)
    code: str

    def __new__(cls, code: str, text: str) -> Coded:
        self = super().__new__(cls, text)
        self.code = code
        return self

    def __reduce__(self) -> tuple[type[Coded], tuple[str, str]]:
        return Coded, (self.code, str(self))

    def format(self, *args: object, **kwargs: object) -> Coded:
        return Coded(self.code, super().format(*args, **kwargs))


class More(Coded):
    """Stands for ``further`` faults of one field, which are not listed."""

    __slots__ = ("further",)
    further: int

    @classmethod
    def of(cls, further: int) -> More:
        self = cls("more", f"{further} more.")
        self.further = further
        return self


@dataclass(frozen=True, slots=True)
class Entry:
    """One fault of a request: in its body (``pointer``, or ``row`` and ``column``) or in its query (``parameter``)."""

    code: str
    detail: str
    pointer: str | None = None
    parameter: str | None = None
    row: int | None = None
    column: str | None = None

    @property
    def place(self) -> str:
        """Where it is, in words; empty where it is of the body as a whole."""
        if self.parameter is not None:
            return f"Parameter {self.parameter}"
        if self.row is not None:
            return f"Row {self.row}" + ("" if self.column is None else f", column {self.column}")
        if self.column is not None:
            return f"Column {self.column}"
        return "" if self.pointer in (None, "#") else f"At {self.pointer}"


class Problem(Exception):
    """A failure ready to be answered; the edge's own layers raise it."""

    def __init__(
        self,
        kind: ProblemType,
        detail: str | None = None,
        *,
        errors: Iterable[Entry] = (),
        more: int = 0,
        headers: Headers = (),
    ) -> None:
        super().__init__(kind.code)
        self.kind = kind
        self.detail = detail or kind.meaning
        self.errors = tuple(errors)
        self.more = more
        self.headers = headers

    def members(self, request_id: str) -> dict[str, object]:
        """The problem as an object: in a line of a bulk answer, or as a whole body."""
        members: dict[str, object] = {
            "type": self.kind.uri,
            "title": self.kind.title,
            "status": self.kind.status,
            "detail": _encodable(self.detail + self._place()),
            "instance": _instance(request_id),
            "request_id": request_id,
        }
        if self.errors:
            members["errors"] = [_members(entry) for entry in self.errors]
        return members

    def _place(self) -> str:
        """Where the one fault is that the detail tells: not everybody looks at the entry beside it."""
        if len(self.errors) != 1 or self.errors[0].detail != self.detail:
            return ""
        place = self.errors[0].place
        return f" ({place}.)" if place else ""

    def below(self, root: str) -> Problem:
        """The same problem of a body that stands in a larger one, at this pointer."""
        moved = (
            replace(entry, pointer=root + entry.pointer[1:] if entry.pointer else root)
            for entry in self.errors
        )
        return Problem(self.kind, self.detail, errors=moved, more=self.more, headers=self.headers)

    def body(self, request_id: str) -> bytes:
        return orjson.dumps(self.members(request_id))


def of(error: Exception) -> Problem:
    """The problem an exception means; one that no table knows is the service's own fault."""
    if isinstance(error, Problem):
        return error
    if isinstance(error, BadJson):
        return Problem(NOT_JSON, error.detail, errors=(Entry(error.code, error.detail, "#"),))
    if isinstance(error, TooManyValues):
        return Problem(
            CONTENT_TOO_LARGE, "The body holds more values, lists or objects than any operation takes."
        )
    if isinstance(error, ValidationError):
        entries = tuple(pointers(error.messages))
        return listed(_kind_of(entries), entries)
    if isinstance(error, SpcError):
        kind = next((OF_CLASS[cls] for cls in type(error).__mro__ if cls in OF_CLASS), NOT_COMPUTABLE)
        return listed(kind, (Entry(fault.code, fault.detail, pointer(fault.where)) for fault in error.faults))
    if isinstance(error, NotFinite):
        return Problem(NOT_COMPUTABLE, _OUT_OF_SCALE, errors=(Entry("out-of-scale", _OUT_OF_SCALE, "#"),))
    if isinstance(error, HTTPException):
        return _of_http(error)
    return Problem(INTERNAL)


_OUT_OF_SCALE = (
    "A result cannot be represented as a number: the values are too large, too small, or too far apart. Check "
    "their unit, and send them in one that keeps them nearer to 1."
)


def unforeseen(error: Exception) -> Exception | None:
    """What went wrong where no layer expected it: something to be logged, whatever the caller is told."""
    cause = error.__cause__
    if isinstance(error, DocumentMismatch) and isinstance(cause, Exception):
        return None if isinstance(cause, (SpcError, ValidationError)) else cause
    if isinstance(error, NotFinite):
        return error
    kind = of(error).kind
    return (cause if isinstance(cause, Exception) else error) if kind in (INTERNAL, NOT_READY) else None


def _kind_of(entries: tuple[Entry | int, ...]) -> ProblemType:
    """A body with no other fault than what a schema cannot state has the shape that the contract states."""
    codes = {entry.code for entry in entries if isinstance(entry, Entry)}
    return NOT_COMPUTABLE if codes and codes <= BEYOND_SCHEMAS else CONTRACT_VIOLATION


def placed(error: SpcError, document: object) -> SpcError:
    """The error with each fault at a place that the body has, or that it lacks.

    One number may stand for all points of a list, and a fault of one point is then a fault of that number.
    """
    faults = {(fault.code, fault.detail, _within(document, fault.where)): None for fault in error.faults}
    return type(error)(*(Fault(*found) for found in faults))


def _within(document: object, where: Where) -> Where:
    here = document
    for at, step in enumerate(where):
        if isinstance(here, dict):
            if step not in here:
                lacking = where[at:]
                names = next((i for i, name in enumerate(lacking) if isinstance(name, int)), len(lacking))
                return where[: at + names]
            here = here[step]
        elif isinstance(here, list) and isinstance(step, int) and -len(here) <= step < len(here):
            here = here[step]
        else:
            return where[:at]
    return where


def pointer(path: Iterable[str | int]) -> str:
    """A path as a JSON Pointer (RFC 6901) in a URI fragment: ``#/data/values/3/1``."""
    steps = (str(step).replace("~", "~0").replace("/", "~1") for step in path)
    return "#" + "".join("/" + quote(step, safe="!$&'()*+,;=:@-._~", errors="replace") for step in steps)


def pointers(messages: object) -> Iterator[Entry | int]:
    """Marshmallow's nested messages as entries, in order; an integer stands for so many not listed."""
    todo: list[tuple[tuple[str | int, ...], object]] = [((), messages)]
    while todo:
        path, here = todo.pop()
        if isinstance(here, Mapping):
            todo.extend(
                (path if step == HERE else (*path, step), found)
                for step, found in reversed(list(here.items()))
            )
        elif isinstance(here, (list, tuple)):
            todo.extend((path, found) for found in reversed(here))
        elif isinstance(here, More):
            yield here.further
        else:
            yield Entry(getattr(here, "code", "invalid"), str(here), pointer(path))


def listed(kind: ProblemType, found: Iterable[Entry | int]) -> Problem:
    """A problem of these faults: the first are listed, those beyond counted; so are those given as a number."""
    entries: list[Entry] = []
    more = 0
    for entry in found:
        if isinstance(entry, int):
            more += entry
        elif len(entries) < MAX_ERRORS:
            entries.append(entry)
        else:
            more += 1
    count = len(entries) + more
    if count == 1:
        detail = entries[0].detail
    elif more:
        detail = f"{kind.meaning} {count} faults; the first {len(entries)} are listed, {more} more are not."
    else:
        detail = f"{kind.meaning} {count} faults are listed."
    return Problem(kind, detail, errors=entries, more=more)


def _of_http(error: HTTPException) -> Problem:
    status = error.code or 500
    kind = _OF_STATUS.get(status, BAD_REQUEST if 400 <= status < 500 else INTERNAL)
    headers = tuple(
        (name, value)
        for name, value in error.get_headers()
        if name.lower() not in ("content-type", "content-length")
    )
    detail = None
    if status == 405:
        allowed = next((value for name, value in headers if name == "Allow"), "")
        detail = f"This path takes {allowed}." if allowed else None
    return Problem(kind, detail, headers=headers)


def _members(entry: Entry) -> dict[str, str | int]:
    where = {
        "pointer": entry.pointer,
        "parameter": entry.parameter and _encodable(entry.parameter),
        "row": entry.row,
        "column": entry.column and _encodable(entry.column),
    }
    given = {name: value for name, value in where.items() if value is not None}
    return {**given, "code": entry.code, "detail": _encodable(entry.detail)}


def _encodable(text: str) -> str:
    """A key of the request may be quoted in a sentence, and may hold half a character."""
    return text.encode("utf-8", "replace").decode("utf-8")


def _instance(request_id: str) -> str:
    return f"urn:uuid:{request_id}" if _is_uuid(request_id) else request_id


def _is_uuid(text: str) -> bool:
    return (
        len(text) == 36
        and text[8] == text[13] == text[18] == text[23] == "-"
        and all(letter in "0123456789abcdefABCDEF-" for letter in text)
        and text.count("-") == 4
    )
