"""Lines in, lines out: a body of newline-delimited JSON, answered line by line in bounded memory.

A stream takes a place to compute in short turns, so that single requests come in between. Its answers are
held back as long as they are few: a client that sends its whole body before it reads is served too, as long
as they fit. The last line is always a summary; an answer without one was cut off.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Iterator
from dataclasses import dataclass, field
from time import perf_counter
from typing import Any, Protocol

import orjson

from . import answers, problems
from .problems import CONTENT_TOO_LARGE, Problem
from .shedding import Slots
from .strict_json import loads
from .tally import OTHER
from .tally import Tally as OfCalculation

BLOCK_BYTES = 1024 * 1024
BLOCK_LINES = 16_384
HELD_BYTES = 8 * 1024 * 1024
SENT_BYTES = 256 * 1024
TURN_SECONDS = 0.05


@dataclass(frozen=True, slots=True)
class Line:
    """A line as it came, with its number from 1."""

    number: int
    text: bytes

    def parsed(self) -> Any:
        """The JSON it holds. Raises BadJson."""
        return loads(self.text)


@dataclass(slots=True)
class Tally:
    """What became of the lines so far."""

    lines: int = 0
    answered: int = 0
    problems: int = 0


class Conversation(Protocol):
    """What an operation makes of one stream's lines."""

    def answer(self, block: list[Line]) -> Iterator[bytes]:
        """The answers, in order; nothing but a wish to be interrupted where it yields no bytes."""

    def close(self) -> Iterator[bytes]:
        """What is left to be told when the lines are over, however they ended."""


Counted = Callable[[str, OfCalculation, int], None]
"""Is told of lines that are over: the operation's id, what came to light, how many lines it was of."""


def uncounted(operation: str, tally: OfCalculation, lines: int) -> None:
    """Where nobody counts."""


Converse = Callable[["Call"], Conversation]


@dataclass(frozen=True, slots=True)
class Call:
    """One stream, as an operation sees it."""

    request_id: str
    failed: Callable[[Exception], None] = lambda error: None
    """Is told of what no layer expected."""
    counted: Counted = uncounted
    tally: Tally = field(default_factory=Tally)

    def told(self, line: dict[str, Any], name: bytes, answer: bytes) -> bytes:
        """The line of a good answer: a member of this name, whose JSON is written already."""
        self.tally.answered += 1
        return orjson.dumps({**line, "status": 200})[:-1] + b',"' + name + b'":' + answer + b"}\n"

    def refused(
        self, line: dict[str, Any], error: Exception, root: str = "#", operation: str = OTHER
    ) -> bytes:
        """The line of a problem of this operation; pointers are into the line, below ``root``."""
        self.tally.problems += 1
        if (unforeseen := problems.unforeseen(error)) is not None:
            self.failed(unforeseen)
        problem = problems.of(error).below(root)
        tally = OfCalculation()
        tally.problem = problem
        self.counted(operation, tally, 1)
        members = {**line, "status": problem.kind.status, "problem": problem.members(self.request_id)}
        return orjson.dumps(members) + b"\n"


def blocks(pieces: Iterable[bytes], longest: int) -> Iterator[list[Line]]:
    """The lines that are not blank, some at a time; what is wrong with the body is raised after those before it.

    Raises the problem ``content-too-large`` for a line that is longer than ``longest``.
    """
    block: list[Line] = []
    weight = 0
    try:
        for line in _lines(pieces, longest):
            block.append(line)
            weight += len(line.text)
            if weight >= BLOCK_BYTES or len(block) >= BLOCK_LINES:
                yield block
                block, weight = [], 0
    except Problem:
        if block:
            yield block
        raise
    if block:
        yield block


def _lines(pieces: Iterable[bytes], longest: int) -> Iterator[Line]:
    number, length = 0, 0
    begun: list[bytes] = []
    for piece in pieces:
        *ended, rest = piece.split(b"\n")
        for end in ended:
            number += 1
            _bound(number, length + len(end), longest)
            text = b"".join((*begun, end)) if begun else end
            begun, length = [], 0
            if text and not text.isspace():
                yield Line(number, text)
        if rest:
            begun.append(rest)
            length += len(rest)
            _bound(number + 1, length, longest)
    text = b"".join(begun)
    if text and not text.isspace():
        yield Line(number + 1, text)


def _bound(number: int, length: int, longest: int) -> None:
    if length > longest:
        raise Problem(
            CONTENT_TOO_LARGE, f"Line {number} is longer than the {longest} bytes this server takes of one."
        )


def stream(
    converse: Converse, call: Call, pieces: Iterable[bytes], slots: Slots, longest: int
) -> Iterator[bytes]:
    """The answers to a body as it arrives, in parts of some size, and the summary."""
    held: list[bytes] = []
    weight, bound = 0, HELD_BYTES
    conversation = converse(call)
    fault: Exception | None = None

    def turns(source: Iterator[bytes]) -> Iterator[bytes]:
        """Each turn's answers; outside the turns others compute, and a slow reader holds nobody up."""
        over = False
        while not over:
            told = []
            with slots.in_turn():
                until = perf_counter() + TURN_SECONDS
                for answer in source:
                    told.append(answer)
                    if perf_counter() > until:
                        break
                else:
                    over = True
            yield b"".join(told)

    def all_answers() -> Iterator[bytes]:
        nonlocal fault
        try:
            for block in blocks(pieces, longest):
                call.tally.lines += len(block)
                yield from turns(conversation.answer(block))
        except Problem as problem:
            fault = problem
        yield from turns(conversation.close())

    for part in all_answers():
        held.append(part)
        weight += len(part)
        if weight >= bound:
            yield b"".join(held)
            held, weight, bound = [], 0, SENT_BYTES
    held.append(summary(call, fault))
    yield b"".join(held)


def summary(call: Call, fault: Exception | None) -> bytes:
    """The last line."""
    tally = call.tally
    members: dict[str, Any] = {
        "done": fault is None,
        "lines": tally.lines,
        "answered": tally.answered,
        "problems": tally.problems,
    }
    if fault is not None:
        members["problem"] = problems.of(fault).members(call.request_id)
    return answers.dumps(members) + b"\n"
