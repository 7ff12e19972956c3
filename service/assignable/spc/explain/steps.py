"""A worked step, and the pad on which steps are written."""

from __future__ import annotations

import ast
import functools
import math
import operator
from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import dataclass
from typing import Annotated, Any, TypeAlias

import numpy as np

from ..words import ordinal

MOST_LISTED = 30
"""Values of a sum that are written out; of more, the sum is stated."""

Value: TypeAlias = "float | tuple[float, str]"
"""A value put into a formula, or the same with where it comes from."""


@dataclass(frozen=True, slots=True)
class Given:
    """A value put into a formula."""

    name: Annotated[str, "Its name in the formula."]
    value: Annotated[float | None, "The value; null where it cannot be represented."]
    source: Annotated[
        str | None,
        "Where it comes from, such as a table; null for a value of the request, or of a step before.",
    ]


@dataclass(frozen=True, slots=True)
class Step:
    """One step of a calculation."""

    what: Annotated[str, "What is calculated."]
    formula: Annotated[
        str,
        "With the usual signs, ** for a power and the usual names of functions (sqrt, exp, log the natural one, erfc "
        "the complementary error function).",
    ]
    values: Annotated[tuple[Given, ...], "The values put into the formula, by name."]
    result: Annotated[
        float | None,
        "What comes out; null where the formula states how something is computed that no hand calculator does, or "
        "where what comes out cannot be represented.",
    ]
    where: Annotated[
        str | None,
        "The number of this answer that it is: a JSON Pointer fragment; null for a step on the way.",
    ]


_BINARY: Mapping[type, Callable[[float, float], float]] = {
    ast.Add: operator.add,
    ast.Sub: operator.sub,
    ast.Mult: operator.mul,
    ast.Div: operator.truediv,
    ast.Pow: operator.pow,
}
_FUNCTIONS: Mapping[str, Callable[..., float]] = {
    **{
        name: getattr(math, name)
        for name in (
            "sqrt",
            "exp",
            "log",
            "log1p",
            "expm1",
            "gamma",
            "lgamma",
            "erf",
            "erfc",
            "floor",
            "ceil",
            "comb",
            "sinh",
            "asinh",
        )
    },
    "abs": abs,
    "min": min,
    "max": max,
    "round": round,
}


@functools.lru_cache(1024)
def _parsed(formula: str) -> ast.expr:
    return ast.parse(formula, mode="eval").body


def evaluate(formula: str, values: Mapping[str, float]) -> float | None:
    """What the formula gives with these values; ``None`` where it is no finite number."""
    try:
        found = float(_value(_parsed(formula), values))
    except (ArithmeticError, ValueError):
        return None
    return found if math.isfinite(found) else None


def _value(node: Any, values: Mapping[str, float]) -> Any:
    if isinstance(node, ast.BinOp):
        return _BINARY[type(node.op)](_value(node.left, values), _value(node.right, values))
    if isinstance(node, ast.UnaryOp) and isinstance(node.op, ast.USub):
        return -_value(node.operand, values)
    if isinstance(node, ast.Constant):
        return node.value
    if isinstance(node, ast.Name):
        return math.pi if node.id == "pi" else values[node.id]
    if isinstance(node, ast.Call) and isinstance(node.func, ast.Name):
        return _FUNCTIONS[node.func.id](*(_value(argument, values) for argument in node.args))
    raise TypeError(f"no arithmetic: {ast.dump(node)}")


class Pad:
    """Where the steps of one answer are written, in their order."""

    def __init__(self) -> None:
        self._steps: list[Step] = []

    @property
    def steps(self) -> tuple[Step, ...]:
        """All steps so far."""
        return tuple(self._steps)

    def work(self, what: str, formula: str, where: str | None = None, /, **values: Value) -> float:
        """Writes a step, and gives what comes out: NaN where nothing does."""
        plain: dict[str, float] = {}
        given = []
        for name, value in values.items():
            number, source = value if isinstance(value, tuple) else (value, None)
            number = float(number)
            plain[name] = number
            given.append(Given(name, number if math.isfinite(number) else None, source))
        found = evaluate(formula, plain)
        self._steps.append(Step(what, formula, tuple(given), found, None if found is None else where))
        return math.nan if found is None else found

    def state(self, what: str, formula: str, /, **values: Value) -> None:
        """Writes what is computed by other means than a hand calculator."""
        given = []
        for name, value in values.items():
            number, source = value if isinstance(value, tuple) else (value, None)
            given.append(Given(name, float(number) if math.isfinite(number) else None, source))
        self._steps.append(Step(what, formula, tuple(given), None, None))

    # What recurs --------------------------------------------------------------------------------------

    def mean(self, what: str, values: Iterable[float], where: str | None = None, name: str = "x") -> float:
        """The mean of some values."""
        text, given = summed(name, values)
        count = len(given) if text != f"sum_{name}" else len(present(values))
        formula = f"({text}) / n" if len(given) > 1 else f"{text} / n"
        return self.work(what, formula, where, **given, n=count)

    def deviation(self, what: str, values: Iterable[float], mean: float, where: str | None = None) -> float:
        """The standard deviation, divisor n - 1, of values with this mean."""
        there = present(values)
        if len(there) <= MOST_LISTED:
            names, given = numbered("x", there)
            text = " + ".join(f"({name} - mean)**2" for name in names)
            return self.work(what, f"sqrt(({text}) / (n - 1))", where, **given, mean=mean, n=len(there))
        squares = total_of(np.square(np.asarray(there) - mean))
        return self.work(
            what,
            "sqrt(sum_squares / (n - 1))",
            where,
            sum_squares=(squares, f"sum of the squared distances of the {len(there)} values from their mean"),
            n=len(there),
        )

    def range(self, what: str, values: Iterable[float], where: str | None = None) -> float:
        """Largest less smallest."""
        there = present(values)
        if len(there) <= MOST_LISTED:
            names, given = numbered("x", there)
            listed = ", ".join(names)
            return self.work(what, f"max({listed}) - min({listed})", where, **given)
        return self.work(what, "largest - smallest", where, largest=max(there), smallest=min(there))

    def median(self, what: str, values: Iterable[float], where: str | None = None) -> float:
        """The value in the middle, or the mean of the two there."""
        ordered = sorted(present(values))
        m = len(ordered)
        place = f"the {{}} smallest of the {m} values"
        return self.work(
            what,
            "(low + high) / 2",
            where,
            low=(ordered[(m - 1) // 2], place.format(ordinal((m - 1) // 2 + 1))),
            high=(ordered[m // 2], place.format(ordinal(m // 2 + 1))),
        )


def present(values: Iterable[float]) -> list[float]:
    """The values that are there, as plain numbers."""
    return [value for value in np.asarray(values, dtype=np.float64).reshape(-1).tolist() if value == value]


def total_of(values: Iterable[float]) -> float:
    """The sum of some numbers, correctly rounded; infinite where it cannot be represented."""
    try:
        return math.fsum(values.reshape(-1).tolist() if isinstance(values, np.ndarray) else values)
    except OverflowError:
        return math.inf


def numbered(name: str, values: Sequence[float]) -> tuple[list[str], dict[str, Value]]:
    """Names x1, x2, … with the values they stand for."""
    names = [f"{name}{at}" for at in range(1, len(values) + 1)]
    return names, dict(zip(names, values, strict=True))


def summed(name: str, values: Iterable[float]) -> tuple[str, dict[str, Value]]:
    """The text of a sum and the values in it; of many values, their sum."""
    there = present(values)
    if len(there) <= MOST_LISTED:
        names, given = numbered(name, there)
        return " + ".join(names) or "0", given
    return f"sum_{name}", {f"sum_{name}": (total_of(there), f"sum of {len(there)} values")}
