"""``text/csv`` bodies: one rectangular table as the ``data`` of a request, its options in the query.

A table becomes the document that JSON would have been, and goes the same road from there; what is found
wrong on that road is told by row and column, or by the parameter of the query. The dialect is stated and
never guessed: RFC 4180 in UTF-8, a header row, commas unless another delimiter is named, numbers written as
JSON writes them, one line a row.

A data shape says in its attribute ``table`` (:class:`Columns`) which columns it takes; that is all that an
operation needs to take tables.
"""

from __future__ import annotations

import copy
import csv
import re
from collections.abc import Iterable, Iterator, Mapping, Sequence
from contextlib import suppress
from dataclasses import dataclass, field, replace
from functools import cached_property
from itertools import chain
from typing import Any
from urllib.parse import parse_qsl, unquote

import orjson
from marshmallow import Schema, ValidationError

from ..spc.errors import SpcError
from . import fields as f
from . import problems, strict_json
from .problems import CONTRACT_VIOLATION, MAX_ERRORS, NOT_COMPUTABLE, NOT_CSV, Coded, Entry, Problem

DELIMITERS = {"comma": ",", "semicolon": ";", "tab": "\t"}
LONGEST_LINE = 131_072  # characters; csv's own bound on a field
MOST_COLUMNS = f.MAX_COLUMNS + 8  # the pieces of a row, and what names it
MOST_ROWS = f.MAX_VALUES
MOST_CELLS = 3_000_000

Path = tuple[str | int, ...]
Place = tuple[int | None, str | None]
"""A row (the header is row 1) and a column; either may be unknown."""

_BOM = b"\xef\xbb\xbf"
_UNLOOKED = ("id", "time")  # may stand in any table: an export has them whether or not they are of use
_OF_PLACES = frozenset(
    """
    id time date timestamp datetime no nr number index row sample subgroup batch lot serial shift operator
    mean range sd size count inspected interval position part appraiser item rating reference below value
    """.split()  # noqa: SIM905 - as a list it would take forty lines
)
"""Names that a column of measurements cannot have: their numbers would enter the statistics unseen."""
_ALONE = ("value", "mean")  # beside one of these there are no pieces


# Texts as numbers -----------------------------------------------------------------------------------

_NUMBER = re.compile(r" *-?(?:0|[1-9][0-9]*)(?:\.[0-9]+)?(?:[eE][+-]?[0-9]+)? *")
_NUMERIC_LETTERS = b"0123456789+-.eE, []"
_LOOSE = r"[-+]?[0-9]"


def numbers(columns: list[list[str]], *, rows: bool) -> list[Any]:
    """The cells of a column as a list, or of some columns as rows; those that are no numbers stay texts.

    Empty cells are ``None``. ``columns`` is emptied: as many texts, still alive, would cost more than the
    reading. The numbers are those that JSON's reader makes of the same digits, for it reads them.
    """
    across = len(columns)
    joined = _joined(columns, rows)
    if joined is not None:
        columns.clear()
        try:
            found: list[Any] = orjson.loads(joined)
            return found
        except orjson.JSONDecodeError:
            flat = [cell.strip("[]") for cell in joined.decode()[1:-1].split(",")]
            columns.extend(
                [["" if cell == "null" else cell for cell in flat[at::across]] for at in range(across)]
            )
    read = [[_number(cell) for cell in column] for column in columns]
    columns.clear()
    return [list(row) for row in zip(*read, strict=True)] if rows else read[0]


def _joined(columns: list[list[str]], rows: bool) -> bytes | None:
    """The cells as the text of a JSON list; ``None`` where one holds what no number does."""
    count, across = len(columns[0]), len(columns)
    parts = [""] * (count * across)
    empty = 0
    for at, column in enumerate(columns):
        gaps = column.count("")
        empty += gaps
        parts[at::across] = [cell or "null" for cell in column] if gaps else column
    if rows:
        parts[0::across] = ["[" + cell for cell in parts[0::across]]
        parts[across - 1 :: across] = [cell + "]" for cell in parts[across - 1 :: across]]
    joined = ("[" + ",".join(parts) + "]").encode()
    del parts
    digits = joined.replace(b"null", b"") if empty else joined
    if (
        digits.translate(None, _NUMERIC_LETTERS)
        or joined.count(b"null") != empty
        or joined.count(b",") != count * across - 1
        or joined.count(b"[") != 1 + rows * count
        or joined.count(b"]") != 1 + rows * count
    ):
        return None
    return joined


def _number(cell: str) -> Any:
    if not cell:
        return None
    if _NUMBER.fullmatch(cell):
        try:
            return orjson.loads(cell)
        except orjson.JSONDecodeError:  # beyond a double
            return cell
    return cell


_LONGEST_LOOKED_AT = 60  # characters; the patterns try things again
_KINDS_OF_TEXT = tuple(
    (re.compile(pattern, re.IGNORECASE), code, words)
    for pattern, code, words in (
        (r"\s*", "blank-cell", "This cell holds spaces alone. Leave it empty where nothing was measured."),
        (
            r"[-+]?[0-9]{1,3}(?:,[0-9]{3})+\.[0-9]*|[-+]?[0-9]{1,3}(?:,[0-9]{3}){2,}",
            "thousands-separator",
            "{} has commas between its thousands. Take them out.",
        ),
        (
            r"[-+]?[0-9]{1,3}(?:\.[0-9]{3})*\.[0-9]{3},[0-9]*|[-+]?[0-9]{1,3}(?:\.[0-9]{3}){2,}",
            "thousands-separator",
            "{} has points between its thousands. Take them out, and write decimals with a point.",
        ),
        (
            r"[-+]?[0-9]*,[0-9]*(?:e[-+]?[0-9]+)?",
            "decimal-comma",
            "{} has a decimal comma, and numbers are read with a decimal point only. Write the column with points; "
            "if the comma sets off thousands, take it out.",
        ),
        (
            r"[-+]?[0-9]{1,3}(?:[\s\u00a0\u202f'\u2019_][0-9]{3})+(?:[.,][0-9]*)?",
            "thousands-separator",
            "{} has marks between its thousands. Take them out.",
        ),
        (
            rf"\s*[<>\u2264\u2265]=?\s*{_LOOSE}.*",
            "beyond-limit",
            "{} is a result beyond a limit. Capability of measurements takes such results: the limit alone in a "
            "column `below`, the cell of `value` empty. Elsewhere leave the cell empty.",
        ),
        (
            r"nan|n\.?/?a\.?|null|nil|none|missing|-+|\u2013|\u2014|\*|\.|\?|#n/?a|inf|-?inf(?:inity)?",
            "missing-as-text",
            "{} is no number. Leave the cell empty where there is no value.",
        ),
        (
            r"#.*",
            "spreadsheet-error",
            "{} is an error of the spreadsheet. Mend the formula, or empty the cell.",
        ),
        (r"true|false|yes|no", "not-a-number", "{} is no number."),
        (
            r"[\u2212\u2013\u2014]\s*[0-9].*",
            "number-form",
            "{} begins with a dash that is no minus sign. Write the hyphen that JSON has: -2.5.",
        ),
        (
            r"\s*[-+]?0x[0-9a-f]+\s*|\s*[-+]?0*[0-9]*\.?[0-9]*(?:e[-+]?[0-9]*)?\s*",
            "number-form",
            "{} is not written as JSON writes numbers: no plus sign, no zero in front, digits on both sides of a "
            "point, as in 0.5, -3 or 1e-3; and none that no double can hold.",
        ),
        (
            rf"\s*{_LOOSE}[0-9.,]*(?:e[-+]?[0-9]+)?\s*[^0-9.,\s].*",
            "unit-in-cell",
            "{} holds more than a number. Leave the number alone in the cell: units and remarks go elsewhere.",
        ),
    )
)


def fault_of_cell(cell: str) -> Coded:
    """What is wrong with a cell that should hold a number and holds this text, and what to do."""
    for pattern, code, words in _KINDS_OF_TEXT if len(cell) <= _LONGEST_LOOKED_AT else ():
        if pattern.fullmatch(cell):
            return Coded(code, words.format(_shown(cell)))
    return Coded(
        "not-a-number", f"{_shown(cell)} is no number. A column that names the points is called `id`."
    )


def _shown(text: str) -> str:
    return f"'{text}'" if len(text) <= 40 else f"'{text[:40]}...'"


# Bytes as a table -----------------------------------------------------------------------------------


@dataclass(slots=True)
class Table:
    """A body with its header read; its rows are taken apart when a column is first asked for.

    A column can be taken once: as many texts, kept alive, would cost more than the reading. What takes columns
    raises :class:`Faulty` where the rows cannot be taken apart.
    """

    names: list[str]
    rows: int
    mark: str
    _text: str
    faults: list[Entry] = field(default_factory=list)
    _columns: dict[str, list[str]] | None = None

    def __contains__(self, name: str) -> bool:
        return name in self.names

    def texts(self, name: str) -> list[str]:
        """A column as it stands."""
        if self._columns is None:
            flat = _cells(self._text, self.mark, self.rows, self.names)
            self._text = ""
            self._columns = {known: flat[at :: len(self.names)] for at, known in enumerate(self.names)}
        return self._columns.pop(name)

    def numbers(self, name: str) -> list[Any]:
        """A column of numbers; what is no number stays a text."""
        return numbers([self.texts(name)], rows=False)

    def rows_of(self, names: Sequence[str]) -> list[list[Any]]:
        """Some columns of numbers, row by row."""
        before = self.names[: -len(names)]
        if self._columns is None and self.names == [*before, *names]:
            found = _rows_at_end(self._text, self.mark, self.rows, len(before), len(names))
            if found is not None:
                columns, read = found
                self._text = ""
                self._columns = dict(zip(before, columns, strict=True))
                return read
        return numbers([self.texts(name) for name in names], rows=True)


def _rows_at_end(
    text: str, mark: str, rows: int, before: int, across: int
) -> tuple[list[list[str]], list[list[Any]]] | None:
    """The cells of the columns before, and the numbers at the end of each line; the quick road of most tables.

    ``None`` where anything is out of the ordinary, which the slower road then sees to.
    """
    columns: list[list[str]] = []
    if before:
        # One flat list of texts: a list for each line would keep the collector of garbage busy.
        quoted = '"' in text
        cell = rf'("[^"\n]*"|[^"{mark}\n]*){mark}' if quoted else rf"([^{mark}\n]*){mark}"
        parts = re.split(f"(?m)^{cell * before}", text)
        if len(parts) != rows * (before + 1) + 1:
            return None
        columns = [parts[at :: before + 1] for at in range(1, before + 1)]
        if quoted:
            columns = [[one[1:-1] if one[:1] == '"' else one for one in column] for column in columns]
        text = "".join(parts[before + 1 :: before + 1])
        del parts
    ends = text.encode()
    if mark != ",":
        if b"," in ends:
            return None
        ends = ends.replace(mark.encode(), b",")
    if ends.translate(None, b"0123456789+-.eE, \n") or ends.count(b",") != rows * (across - 1):
        return None
    ends = b"[" + ends.replace(b"\n", b"],[") + b"]"
    if b",," in ends or b"[," in ends or b",]" in ends or b"[]" in ends:
        for gap, null in ((b",,", b",null,"), (b",,", b",null,"), (b"[,", b"[null,"), (b",]", b",null]")):
            ends = ends.replace(gap, null)
        ends = ends.replace(b"[]", b"[null]")
    try:
        read: list[list[Any]] = orjson.loads(b"[" + ends + b"]")
    except orjson.JSONDecodeError:
        return None
    return (columns, read) if set(map(len, read)) == {across} else None


class Faulty(Exception):
    """The table cannot be taken apart: its faults, and where there are more, how many."""

    def __init__(self, *found: Entry | int, kind: problems.ProblemType = CONTRACT_VIOLATION) -> None:
        super().__init__()
        self.kind = kind
        self.found = found


def _unreadable(code: str, detail: str, row: int | None = None) -> Faulty:
    shown = detail if row is None else f"{detail} (Row {row}.)"
    return Faulty(Entry(code, shown, row=row, pointer=None if row else "#"), kind=NOT_CSV)


def taken_apart(body: bytes, mark: str) -> Table:
    """The table that a body holds. Raises :class:`Faulty` for a text or a header that cannot be read."""
    text = _text_of(body)
    header, _, rest = text.partition("\n")
    del text
    if not rest:
        detail = (
            "There are no rows below the header. (curl keeps the ends of lines with --data-binary alone.)"
        )
        raise Faulty(Entry("no-rows", detail, row=1))
    names = _names_of(header, mark)
    rows = rest.count("\n") + 1
    if rows > MOST_ROWS:
        raise Faulty(
            Entry("too-many-rows", f"The table has {rows} rows; at most {MOST_ROWS} are taken.", "#")
        )
    if rows * len(names) > MOST_CELLS:
        detail = f"The table has {rows} rows of {len(names)} columns; at most {MOST_CELLS} cells are taken."
        raise Faulty(Entry("too-many-values", detail, "#"))
    return Table(names, rows, mark, rest)


def _text_of(body: bytes) -> str:
    """The text with line feeds alone between its lines, and none at its end."""
    if body.startswith((b"\xff\xfe", b"\xfe\xff")):
        raise _unreadable("not-utf-8", "The body is UTF-16. Save the table as CSV in UTF-8.")
    body = body.removeprefix(_BOM)
    if not body.strip():
        raise _unreadable("empty-body", "The body is empty; a table with a header row is expected.")
    if (at := body.find(b"\0")) >= 0:
        raise _unreadable("forbidden-character", "There is a zero byte here.", body.count(b"\n", 0, at) + 1)
    try:
        text = body.decode("utf-8")
    except UnicodeDecodeError as error:
        row = body.count(b"\n", 0, error.start) + 1
        detail = "There is a byte here that is not UTF-8. Save the table as CSV in UTF-8."
        raise _unreadable("not-utf-8", detail, row) from None
    if "\r" in text:
        text = text.replace("\r\n", "\n")
        if (at := text.find("\r")) >= 0:
            detail = "There is a carriage return without a line feed here; lines end in LF or CR LF."
            raise _unreadable("line-end", detail, text.count("\n", 0, at) + 1)
    return text.removesuffix("\n")


def _names_of(header: str, mark: str) -> list[str]:
    names = _cells_of_line(header, mark, 1)
    if len(names) > MOST_COLUMNS:
        detail = f"The header names {len(names)} columns; at most {MOST_COLUMNS} are taken."
        raise Faulty(Entry("too-many-columns", detail, row=1))
    other = next((name for name, other in DELIMITERS.items() if other != mark and other in header), None)
    if len(names) == 1 and other is not None:
        detail = (
            f"The header holds a {other} and is one column as it is read. If that parts the columns, add "
        )
        raise Faulty(Entry("other-delimiter", f"{detail}delimiter={other} to the query.", row=1))
    faults: list[Entry] = []
    for at, name in enumerate(names):
        if fault := _fault_of_name(name, names[:at]):
            faults.append(Entry(fault.code, fault, row=1, column=_printable(name) or str(at + 1)))
    if faults:
        raise Faulty(*faults)
    return names


def _printable(name: str) -> str:
    return f._FORBIDDEN.sub("\ufffd", name[: f.MAX_TEXT]).strip()


def _fault_of_name(name: str, before: Sequence[str]) -> Coded | None:
    if not name.strip():
        return Coded("unnamed-column", "This column has no name. The first row must name every column.")
    if fault := f._text_fault(name, 1, f.MAX_TEXT):
        return fault
    if name in before:
        return Coded("repeated-column", f"There are two columns named {_shown(name)}.")
    if re.fullmatch(rf"\s*{_LOOSE}[0-9.,]*(?:[eE][-+]?[0-9]+)?\s*", name):
        return Coded(
            "number-as-name",
            f"{_shown(name)} is a number. The first row must name the columns, and a name is no number: x1, say.",
        )
    return None


def _cells(text: str, mark: str, rows: int, names: Sequence[str]) -> list[str]:
    """All cells, row by row. Raises :class:`Faulty`."""
    quick = _cells_without_quotes if '"' not in text else _cells_in_quotes
    found = quick(text, mark, rows, len(names))
    return list(_cells_line_by_line(text, mark, names)) if found is None else found


def _cells_without_quotes(text: str, mark: str, rows: int, across: int) -> list[str] | None:
    """All cells, row by row; ``None`` where rows are of another length."""
    if text.count(mark) != rows * (across - 1):
        return None
    if across == 1:
        return text.split("\n")
    flat = text.replace("\n", mark + "\n").split(mark)
    # Every line feed begins a cell: so many in the cells of the first column leave none for the others.
    first = "".join(flat[::across])
    if first.count("\n") != rows - 1:
        return None
    flat[::across] = first.split("\n")
    return flat


def _cells_in_quotes(text: str, mark: str, rows: int, across: int) -> list[str] | None:
    """All cells, row by row; ``None`` where anything is wrong."""
    lines = text.split("\n")
    if "" in lines or max(map(len, lines)) > LONGEST_LINE:
        return None
    try:
        found = list(csv.reader(lines, delimiter=mark, strict=True))
    except csv.Error:
        return None
    # A quote that stays open takes the next line into its cell.
    if len(found) != rows or set(map(len, found)) != {across}:
        return None
    return list(chain.from_iterable(found))


def _cells_line_by_line(text: str, mark: str, names: Sequence[str]) -> Iterator[str]:
    """All cells, row by row. Raises :class:`Faulty` with every row that is not as long as the header."""
    across = len(names)
    faults: list[Entry] = []
    more = 0
    for row, line in enumerate(text.split("\n"), 2):
        if '"' not in line:
            found = line.count(mark) + 1
            cells = line.split(mark) if found == across else ()
        else:
            cells = _cells_of_line(line, mark, row)
            found = len(cells)
        if found == across:
            if not faults:
                yield from cells
        elif len(faults) < MAX_ERRORS:
            faults.append(_ragged(line, found, mark, names, row))
        else:
            more += 1
    if faults:
        raise Faulty(*faults, more)


def _cells_of_line(line: str, mark: str, row: int) -> list[str]:
    """The cells of one line. A quote that is opened is closed on its line: no name holds a line feed."""
    if len(line) > LONGEST_LINE:
        detail = f"This line has {len(line)} characters; at most {LONGEST_LINE} are taken."
        raise _unreadable("line-too-long", detail, row)
    if '"' not in line:
        return line.split(mark)
    try:
        return next(csv.reader((line,), delimiter=mark, strict=True))
    except csv.Error:
        detail = (
            'A quotation mark (") here is not closed on its line, or is followed by more than a delimiter. Within '
            "quotes it is written twice."
        )
        raise _unreadable("stray-quote", detail, row) from None


_WHOLE = re.compile(r" *[-+]?[0-9]+ *")
_DIGITS = re.compile(r"[0-9]+ *")


def _ragged(line: str, found: int, mark: str, names: Sequence[str], row: int) -> Entry:
    across = len(names)
    if not line:
        return Entry("empty-row", "This row is empty. Take the line out.", row=row)
    more = found - across
    if mark == "," and more > 0 and len(line) <= LONGEST_LINE and '"' not in line:
        cells = line.split(mark)
        pairs = [
            at for at in range(found - 1) if _WHOLE.fullmatch(cells[at]) and _DIGITS.fullmatch(cells[at + 1])
        ]
        if len(pairs) >= more:
            shown = f"{cells[pairs[0]]},{cells[pairs[0] + 1]}".strip()
            return Entry(
                "decimal-comma",
                f"This row has {found} cells where the header has {across}. If {shown} is one number with a decimal "
                "comma: numbers are read with a decimal point only. Write them with points.",
                row=row,
                column=names[min(pairs[0], across - 1)],
            )
    lacking = "" if more > 0 else " A cell without a value is left empty, with its delimiter."
    return Entry(
        "unequal-length",
        f"This row has {found} {'cell' if found == 1 else 'cells'} where the header has {across}.{lacking}",
        row=row,
    )


# A table as the members of data ---------------------------------------------------------------------


@dataclass(slots=True)
class Read:
    """What a table became: the members of ``data``, others of the request, and where each comes from."""

    data: dict[str, Any]
    columns: dict[str, tuple[str, ...]]
    """Of each member of ``data`` the columns it is made of, or would be."""
    besides: dict[str, Any] = field(default_factory=dict)
    places: dict[Path, Any] = field(default_factory=dict)
    """Of a path, the place of each step from there, where it is not row by row from row 2."""

    def place(self, path: Path) -> Place:
        """Where in the table stands what a path of the document is about."""
        for at in range(len(path) - 1, 0, -1):
            with suppress(LookupError, TypeError):
                found: Place = self.places[path[:at]][path[at]]
                return found
        columns = self.columns.get(str(path[1]), ()) if len(path) > 1 else ()
        row = path[2] + 2 if len(path) > 2 and isinstance(path[2], int) else None
        if len(path) > 3 and isinstance(path[3], int) and path[3] < len(columns):
            return row, columns[path[3]]
        return row, columns[0] if len(columns) == 1 else None


@dataclass(frozen=True, slots=True)
class Columns:
    """Which columns a data shape takes, and the member that each becomes.

    ``rows_of`` is the member that all other columns become together, row by row; ``names`` the one that
    their names become. Beside a column ``value`` or ``mean`` that is known there are no others.
    """

    of: Mapping[str, str]
    rows_of: str | None = None
    names: str | None = None
    text: str = ""
    takes: tuple[str, ...] = ()
    """Members of the request, besides ``data``, that columns give, and so no parameter."""

    def and_of(self, **more: str) -> Columns:
        """The same with columns more."""
        return replace(self, of={**self.of, **more})

    def described(self) -> str:
        """For the contract: the columns, in words."""
        if self.text:
            return self.text
        known = [f"`{name}` becomes `data.{member}`" for name, member in self.of.items()]
        if self.rows_of is not None:
            given = "" if self.names is None else f", their names `data.{self.names}`"
            other = "every other column" if "value" not in self.of else "without `value`, every other column"
            known.append(f"{other} together `data.{self.rows_of}`, row by row{given}")
        return f"Columns: {'; '.join(known)}."

    def read(self, table: Table, shape: Schema, options: Mapping[str, Any]) -> Read:
        """The members of ``data`` in the order of the columns; faults of names are the table's."""
        fields = f.known_names(shape)
        others = self.others(table)
        made = Read({}, {member: (name,) for name, member in self.of.items()})
        if others and self.rows_of is not None:
            made.columns[self.rows_of] = tuple(others)
            made.data[self.rows_of] = table.rows_of(others)
            if self.names is not None:
                made.data[self.names] = others
                made.places["data", self.names] = [(1, name) for name in others]
        for name, member in self.of.items():
            if name in table:
                is_text = isinstance(fields[member], f.StringList | f.TimeList)
                made.data[member] = table.texts(name) if is_text else table.numbers(name)
        return made

    def others(self, table: Table) -> list[str]:
        """The columns of pieces. A name that is unknown, or that no pieces can have, is a fault."""
        several = self.rows_of is not None and not any(name in self.of and name in table for name in _ALONE)
        found: list[str] = []
        for name in table.names:
            if name in self.of or name in self.takes or name in _UNLOOKED:
                continue
            plain = name.strip().casefold()
            meant = next(
                (known for known in (*self.of, *self.takes, *_UNLOOKED) if plain in (known, f"{known}s")),
                None,
            )
            if several and meant is None and not {plain, plain.removesuffix("s")} & _OF_PLACES:
                found.append(name)
                continue
            if meant is None and not several:
                meant = _nearest(plain, self.of)
            why = " and no measurement is called so" if several and meant is None else ""
            hint = f"Did you mean {meant}?" if meant else f"It has {self._known()}."
            detail = f"This table has no column {_shown(name)}{why}. {hint}"
            table.faults.append(Entry("unknown-column", detail, row=1, column=name))
        return found

    def _known(self) -> str:
        known = ", ".join(dict.fromkeys((*self.of, *self.takes, *_UNLOOKED)))
        return known if self.rows_of is None else f"{known} and columns of measurements"


# Options in the query -------------------------------------------------------------------------------


class JsonText(f.Field):
    """Something that is no scalar, as JSON text."""

    def json_schema(self) -> f.Json:
        return {"type": "string", "contentMediaType": "application/json"}


def _parameters(shape: Schema, table: Columns, data: Schema) -> dict[str, Any]:
    """A number of ``data`` that may hold for all rows is an option; so is every member no column gives."""
    found: dict[str, Any] = {}
    for name, option in f.known_names(shape).items():
        if name == "data":
            columns = {*table.of.values(), table.rows_of, table.names}
            for member, one in f.known_names(data).items():
                if isinstance(one, f.OneOrMany) or member not in columns:
                    found |= _flat(f"data.{member}", one, required=False)
        elif name not in table.takes:
            found |= _flat(name, option, required=option.required)
    return found


def _flat(name: str, option: Any, *, required: bool) -> dict[str, Any]:
    if isinstance(option, f.Object):
        return {
            inner: one
            for member, field_ in f.known_names(option.schema).items()
            for inner, one in _flat(f"{name}.{member}", field_, required=False).items()
        }
    text = option.metadata.get("description", "")
    if isinstance(option, f.OneOrMany):
        return {
            name: option.one(metadata={"description": f"{text} Here the one number, instead of a column."})
        }
    if isinstance(
        option, f.ObjectList | f.ListOrTable | f.NumberList | f.NumberTable | f.StringList | f.ChoiceList
    ):
        shown = '[{"...": ...}]' if isinstance(option, f.ObjectList) else "[...]"
        return {name: JsonText(required=required, metadata={"description": f"{text} As JSON text: {shown}."})}
    plain = copy.copy(option)
    plain.data_key = None
    plain.required = required
    return {name: plain}


_DELIMITER = f.Choice(
    *DELIMITERS,
    load_default="comma",
    metadata={"description": "What parts the cells; a comma unless given. It is never guessed."},
)

PARAMETER_TEXT = (
    "Only with a `text/csv` body: the options, each a parameter of its own (`sigma_multiple=3`, "
    "`specification.lower=2.44`), and the delimiter. JSON holds its options itself, and parameters beside it are "
    "refused."
)


@dataclass(frozen=True)
class Tabled:
    """An operation's request as a table with options beside it."""

    request: Schema
    columns: Columns
    data: Schema

    @cached_property
    def parameters(self) -> dict[str, Any]:
        """The options by their names in a query, dotted where they are nested, and a field for each."""
        return _parameters(self.request, self.columns, self.data)

    @property
    def name(self) -> str:
        """Of the shape of the query."""
        return f"{type(self.request).__name__}Query"

    def shape(self) -> Schema:
        """What the query takes, as a shape of the contract."""
        members = {**self.parameters, "delimiter": _DELIMITER}
        text = f"The options of `{type(self.request).__name__}` beside a table, by the names they have in a query."
        meta = type("Meta", (f.RequestShape.Meta,), {"description": text})
        made: Schema = type(self.name, (f.RequestShape,), {**members, "Meta": meta})()
        return made

    def described(self) -> str:
        """What the body is, in words."""
        return (
            "One table in UTF-8 (RFC 4180): a header row, then a row a line, cells parted by commas unless `delimiter` "
            "names another mark. Numbers as JSON writes them, with a decimal point; an empty cell is a missing value. "
            f"{self.columns.described()} `id` and `time` may stand in any table. Faults name row (the header is row 1) "
            "and column."
        )

    def loaded(self, body: bytes, query: bytes) -> tuple[dict[str, Any], Read]:
        """The document that JSON would have been, and where its members come from. Raises :class:`Problem`."""
        options, mark, faults = self._options(
            parse_qsl(query.decode("ascii", "replace"), keep_blank_values=True)
        )
        read: Read | None = None
        table_faults: tuple[Entry | int, ...] = ()
        kind = CONTRACT_VIOLATION
        try:
            table = taken_apart(body, mark)
            faults = table.faults = [*faults, *table.faults]
            read = self.columns.read(table, self.data, options)
        except Faulty as found:
            table_faults, kind = found.found, found.kind
        if faults or table_faults:
            raise problems.listed(kind, (*faults, *table_faults))
        assert read is not None
        document: dict[str, Any] = {"data": {**read.data}, **read.besides}
        for name, value in options.items():
            *outer, last = name.split(".")
            here = document
            for step in outer:
                here = here.setdefault(step, {})
            if last in here:
                detail = f"The table has a column for this already, {read.columns[last][0]}."
                raise Problem(
                    CONTRACT_VIOLATION, detail, errors=(Entry("given-twice", detail, parameter=name),)
                )
            here[last] = value
        return document, read

    def _options(self, query: Sequence[tuple[str, str]]) -> tuple[dict[str, Any], str, list[Entry]]:
        given: dict[str, Any] = {}
        faults: list[Entry] = []
        mark = ","
        seen: set[str] = set()
        for name, text in query:
            if name in seen:
                faults.append(Entry("repeated-parameter", "This parameter is given twice.", parameter=name))
            elif name == "delimiter":
                if text in DELIMITERS:
                    mark = DELIMITERS[text]
                else:
                    faults.append(Entry("unknown-choice", _DELIMITER.unknown(), parameter=name))
            elif name not in self.parameters:
                faults.append(_unknown(name, self.parameters))
            elif isinstance(option := self.parameters[name], JsonText):
                try:
                    given[name] = strict_json.loads(text.encode("utf-8", "replace"))
                except strict_json.BadJson as error:
                    detail = f"This parameter holds JSON text. {error.detail}"
                    faults.append(Entry(error.code, detail, parameter=name))
            else:
                given[name] = f.from_text(text) if f.reads_json(option) else text
            seen.add(name)
        return given, mark, faults

    def placed(self, error: ValidationError | SpcError, document: dict[str, Any], read: Read) -> Problem:
        """The problem that an error means, each fault by row and column, or by its parameter."""
        if isinstance(error, SpcError):
            error = problems.placed(error, document)
        problem = problems.of(error)
        entries = tuple(self._placed(entry, document, read) for entry in problem.errors)
        detail = entries[0].detail if len(entries) == 1 and not problem.more else problem.detail
        return Problem(problem.kind, detail, errors=entries, more=problem.more)

    def _placed(self, entry: Entry, document: dict[str, Any], read: Read) -> Entry:
        path = _path_of(entry.pointer or "#")
        if not path or (path[0] != "data" and path[0] not in self.columns.takes):
            return self._of_option(entry, path)
        name = ".".join(map(str, path[:2]))
        if name in self.parameters and path[1] in document["data"] and path[1] not in read.data:
            return self._of_option(entry, path)
        code, detail = entry.code, entry.detail
        row, column = read.place(path)
        cell = _at(document, path)
        if code in ("not-a-number", "not-an-integer") and isinstance(cell, str):
            fault = fault_of_cell(cell)
            code, detail = fault.code, str(fault)
        elif code == "null":
            detail = "This cell is empty, and a number is needed here."
        elif code == "required" and column is not None:
            instead = f", or the parameter {name}" if name in self.parameters else ""
            row, detail = 1, f"The table needs a column {column}{instead}."
        return Entry(code, detail, None if row or column else "#", row=row, column=column)

    def _of_option(self, entry: Entry, path: Path) -> Entry:
        for at in range(len(path), 0, -1):
            name = ".".join(map(str, path[:at]))
            if name in self.parameters:
                rest = problems.pointer(path[at:]) if path[at:] else None
                detail = (
                    "This parameter is required." if entry.code == "required" and not rest else entry.detail
                )
                return Entry(entry.code, detail, rest, parameter=name)
        name = ".".join(map(str, path))
        inner = [known for known in self.parameters if known.startswith(f"{name}.")]
        if entry.code == "required" and inner:
            detail = f"This is required: give its members as parameters of the query, such as {inner[0]}."
            return Entry(entry.code, detail, parameter=name)
        return Entry(entry.code, entry.detail, parameter=name) if name else entry


def of(request: Schema | None) -> Tabled | None:
    """A request's shape as a table with options; ``None`` where its data is no single table.

    A limits document is longer than a query may be: what takes one takes JSON.
    """
    if request is None or "limits" in request.load_fields:
        return None
    data = request.load_fields.get("data")
    if not isinstance(data, f.Object):
        return None
    columns = getattr(data.schema, "table", None)
    if columns is None:
        return None
    return Tabled(request, columns, data.schema)


def refuse_parameters(query: Iterable[str]) -> None:
    """Raises the problem of a JSON body with options in the query, where they would be ignored.

    The contract has no words for parameters of one media type, so that such a request has the shape it states.
    """
    detail = "Parameters are for CSV bodies; JSON holds its options itself. Put this into the body."
    raise problems.listed(NOT_COMPUTABLE, (Entry("only-with-csv", detail, parameter=name) for name in query))


def _unknown(name: str, known: Iterable[str]) -> Entry:
    near = _nearest(name[: f.MAX_TEXT], (*known, "delimiter"))
    hint = f" Did you mean {near}?" if near else ""
    return Entry("unknown-parameter", f"There is no such parameter here.{hint}", parameter=name)


def _nearest(name: str, known: Iterable[str]) -> str | None:
    from difflib import get_close_matches

    return next(iter(get_close_matches(name, known, n=1)), None)


def _path_of(pointer: str) -> Path:
    steps = (unquote(step).replace("~1", "/").replace("~0", "~") for step in pointer[1:].split("/")[1:])
    return tuple(int(step) if step.isdigit() else step for step in steps)


def _at(document: Any, path: Path) -> Any:
    for step in path:
        try:
            document = document[step]
        except (KeyError, IndexError, TypeError):
            return None
    return document
