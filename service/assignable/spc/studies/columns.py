"""Studies as they are exported: columns with a row for each measurement or rating, and names in them.

What is measured again is told by its names coming again; the order of rows decides which trial it is.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass
from itertools import islice
from typing import Annotated

import numpy as np

from ..cautions import Caution
from ..data import Floats, Integers
from ..errors import Fault, UnusableData, UnusableParameter
from .variance_components import noted

MOST_PARTS = 1_000
MOST_APPRAISERS = 100
MOST_CATEGORIES = 20
_MOST_FAULTS = 100


@dataclass(frozen=True, slots=True, eq=False)
class StudyCells:
    """What each appraiser found of each part: parallel lists."""

    parts: Annotated[tuple[str, ...], "The part."]
    appraisers: Annotated[tuple[str, ...], "Who measured it."]
    means: Annotated[Floats, "Mean of the trials."]
    ranges: Annotated[Floats, "Largest less smallest of the trials; zero with one."]


@dataclass(frozen=True, slots=True, eq=False)
class CrossedTable:
    """A full table of a crossed study: measurements (parts, appraisers, trials), with the names."""

    parts: tuple[str, ...]
    appraisers: tuple[str, ...]
    measurements: Floats

    def cells(self, means: Floats, ranges: Floats) -> StudyCells:
        """Figures (parts, appraisers) as lists with their names."""
        pairs = [(part, appraiser) for part in self.parts for appraiser in self.appraisers]
        return _cells(pairs, means, ranges)


@dataclass(frozen=True, slots=True, eq=False)
class NestedTable:
    """A full table of a nested study: measurements (appraisers, parts, trials), with the names.

    parts: of each appraiser in turn.
    """

    appraisers: tuple[str, ...]
    parts: tuple[tuple[str, ...], ...]
    measurements: Floats
    cautions: tuple[Caution, ...]

    def cells(self, means: Floats, ranges: Floats) -> StudyCells:
        """Figures (appraisers, parts) as lists with their names."""
        pairs = [
            (part, appraiser)
            for appraiser, own in zip(self.appraisers, self.parts, strict=True)
            for part in own
        ]
        return _cells(pairs, means, ranges)


@dataclass(frozen=True, slots=True, eq=False)
class RatingTable:
    """A full table of an agreement study: ratings (items, appraisers, trials) as places in the categories.

    reference: (items,), or ``None``; nonconforming: a place, or ``None``.
    """

    items: tuple[str, ...]
    appraisers: tuple[str, ...]
    categories: tuple[str, ...]
    ratings: Integers
    reference: Integers | None
    nonconforming: int | None


def crossed_table(parts: Sequence[str], appraisers: Sequence[str], values: Floats) -> CrossedTable:
    """The table of a crossed study.

    parts, appraisers, values: a row for each measurement; NaN in values is a missing one. Raises
    :class:`UnusableData`: ``unequal-length``, ``empty``, ``too-many-parts``, ``too-many-appraisers``,
    ``missing-measurement`` and ``unbalanced`` with the names of part and appraiser, ``nested`` where each
    part was measured by one appraiser only.
    """
    _alike(len(values), "values", parts=parts, appraisers=appraisers)
    part_names, part = _coded(parts)
    appraiser_names, appraiser = _coded(appraisers)
    _few_enough(part_names, appraiser_names)
    across = len(appraiser_names)
    cell = part * across + appraiser
    if across > 1 and np.unique(cell).size == len(part_names):
        raise UnusableData.of(
            "nested",
            "Each part was measured by one appraiser only, so parts are nested in appraisers, not crossed with them; "
            "use the nested analysis, or have every appraiser measure every part.",
            "data",
            "appraisers",
        )

    def named(at: int) -> str:
        return f"part {part_names[at // across]} by {appraiser_names[at % across]}"

    order, trials = _balanced(cell, len(part_names) * across, named, values)
    return CrossedTable(part_names, appraiser_names, values[order].reshape(len(part_names), across, trials))


def nested_table(parts: Sequence[str], appraisers: Sequence[str], values: Floats) -> NestedTable:
    """The table of a nested study, where the parts of each appraiser are their own.

    Arguments and errors as of :func:`crossed_table`, but that a part is known by its name and its
    appraiser's: one name under two appraisers is two parts, and a caution says so.
    """
    _alike(len(values), "values", parts=parts, appraisers=appraisers)
    appraiser_names, appraiser = _coded(appraisers)
    pairs = list(zip(appraiser.tolist(), parts, strict=True))
    # Appraiser by appraiser, and within each in the order in which the parts come.
    distinct = sorted(dict.fromkeys(pairs), key=lambda pair: pair[0])
    own: list[list[str]] = [[] for _ in appraiser_names]
    for a, part in distinct:
        own[a].append(part)
    _few_enough(max(own, key=len), appraiser_names)
    usual = _usual(np.array([len(each) for each in own]))
    faults = [
        Fault(
            "unbalanced",
            f"Appraiser {appraiser_names[a]} has {len(each)} {'part' if len(each) == 1 else 'parts'} where most "
            f"have {usual}; this analysis needs as many parts of every appraiser.",
            ("data", "appraisers", int(np.argmax(appraiser == a))),
        )
        for a, each in enumerate(own)
        if len(each) != usual
    ]
    if faults:
        raise UnusableData(*faults[:_MOST_FAULTS])
    place = {pair: i for i, pair in enumerate(distinct)}
    cell = np.fromiter(map(place.__getitem__, pairs), np.intp, len(pairs))

    def named(at: int) -> str:
        a, part = distinct[at]
        return f"part {part} of {appraiser_names[a]}"

    order, trials = _balanced(cell, len(distinct), named, values)
    shape = (len(appraiser_names), usual, trials)
    return NestedTable(appraiser_names, tuple(map(tuple, own)), values[order].reshape(shape), _shared(own))


def rating_table(
    items: Sequence[str],
    appraisers: Sequence[str],
    ratings: Sequence[str],
    *,
    categories: Sequence[str] | None = None,
    reference: tuple[Sequence[str], Sequence[str]] | None = None,
    nonconforming: str | None = None,
) -> RatingTable:
    """The table of an agreement study.

    items, appraisers, ratings: a row for each rating. categories: all there are, in their order; those met,
    in the order in which they are met, unless given. reference: items, and the right rating of each.
    nonconforming: the category that rejects an item.

    Raises :class:`UnusableData`: ``unequal-length``, ``too-many-items``, ``too-many-appraisers``,
    ``too-many-categories``, ``one-category``, ``unknown-category``, ``unbalanced``, ``repeated-item``,
    ``no-reference``; :class:`UnusableParameter` for the options.
    """
    _alike(len(ratings), "ratings", items=items, appraisers=appraisers)
    item_names, item = _coded(items)
    appraiser_names, appraiser = _coded(appraisers)
    _few_enough(item_names, appraiser_names, "items")
    names, known = _categories(ratings, categories, reference, nonconforming)
    across = len(appraiser_names)

    def named(at: int) -> str:
        return f"item {item_names[at // across]} by {appraiser_names[at % across]}"

    order, trials = _balanced(item * across + appraiser, len(item_names) * across, named)
    codes = np.fromiter(map(known.__getitem__, ratings), np.int64, len(ratings))
    return RatingTable(
        item_names,
        appraiser_names,
        names,
        codes[order].reshape(len(item_names), across, trials),
        None if reference is None else _reference(item_names, known, *reference),
        None if nonconforming is None else known[nonconforming],
    )


def _categories(
    ratings: Sequence[str],
    categories: Sequence[str] | None,
    reference: tuple[Sequence[str], Sequence[str]] | None,
    nonconforming: str | None,
) -> tuple[tuple[str, ...], dict[str, int]]:
    """The categories in their order, and the place of each."""
    right = () if reference is None else reference[1]
    met = dict.fromkeys((*ratings, *right))
    names = tuple(dict.fromkeys(categories)) if categories is not None else tuple(met)
    if categories is not None and len(names) < len(categories):
        raise UnusableParameter.of("repeated-category", "A category is named twice.", "categories")
    if categories is None and nonconforming is not None and nonconforming not in met:
        names = (*names, nonconforming)
    if len(names) > MOST_CATEGORIES:
        raise UnusableData.of(
            "too-many-categories",
            f"There are {len(names)} categories; at most {MOST_CATEGORIES} are taken. Is this a measurement?",
            "data",
            "ratings",
        )
    if len(names) < 2:
        raise UnusableData.of(
            "one-category",
            f"Every rating is {names[0]}, so agreement beyond chance cannot be judged; rate items of every category, "
            "or name the categories there are in `categories`.",
            "data",
            "ratings",
        )
    known = {name: place for place, name in enumerate(names)}
    detail = "{} is not one of the categories " + ", ".join(names) + "."
    faults = [
        Fault("unknown-category", detail.format(name), (*where, i))
        for where, column in ((("data", "ratings"), ratings), (("reference", "ratings"), right))
        for i, name in enumerate(column)
        if name not in known
    ]
    if faults:
        raise UnusableData(*faults[:_MOST_FAULTS])
    if nonconforming is not None and nonconforming not in known:
        raise UnusableParameter.of("unknown-category", detail.format(nonconforming), "nonconforming")
    return names, known


def _reference(
    items: tuple[str, ...], known: dict[str, int], named: Sequence[str], right: Sequence[str]
) -> Integers:
    """The right category of each item, (items,)."""
    if len(named) != len(right):
        raise UnusableData.of(
            "unequal-length",
            f"There are {len(named)} items and {len(right)} ratings; each item needs one.",
            "reference",
            "ratings",
        )
    found: dict[str, int] = {}
    faults: list[Fault] = []
    for i, (name, rating) in enumerate(zip(named, right, strict=True)):
        if name in found:
            faults.append(
                Fault("repeated-item", f"Item {name} has its reference already.", ("reference", "items", i))
            )
        found[name] = known[rating]
    lacking = [name for name in items if name not in found]
    faults += [
        Fault("no-reference", f"Item {name} has no reference rating.", ("reference", "items"))
        for name in lacking[:_MOST_FAULTS]
    ]
    if faults:
        raise UnusableData(*faults[:_MOST_FAULTS])
    return np.fromiter(map(found.__getitem__, items), np.int64, len(items))


def _alike(rows: int, last: str, **columns: Sequence[str]) -> None:
    faults = [
        Fault(
            "unequal-length",
            f"There are {len(column)} {name} for {rows} {last}; every row needs one.",
            ("data", name),
        )
        for name, column in columns.items()
        if len(column) != rows
    ]
    if faults:
        raise UnusableData(*faults)


def _coded(names: Sequence[str]) -> tuple[tuple[str, ...], Integers]:
    """Different names in the order in which they come, and the place of each row's."""
    place = {name: i for i, name in enumerate(dict.fromkeys(names))}
    return tuple(place), np.fromiter(map(place.__getitem__, names), np.intp, len(names))


def _few_enough(parts: Sequence[str], appraisers: Sequence[str], what: str = "parts") -> None:
    faults = [
        Fault(
            f"too-many-{name}",
            f"There are {len(found)} {name}; a study takes at most {most}.",
            ("data", name),
        )
        for name, found, most in ((what, parts, MOST_PARTS), ("appraisers", appraisers, MOST_APPRAISERS))
        if len(found) > most
    ]
    if faults:
        raise UnusableData(*faults)


def _usual(counts: Integers) -> int:
    """The commonest count of those above zero; of two as common, the larger."""
    seen = np.bincount(counts[counts > 0])
    return int(len(seen) - 1 - np.argmax(seen[::-1]))


def _balanced(
    cell: Integers, cells: int, named: Callable[[int], str], values: Floats | None = None
) -> tuple[Integers, int]:
    """The order that brings the rows with a value cell by cell, and how many each cell has."""
    rows = np.arange(len(cell)) if values is None else np.flatnonzero(values == values)
    if not rows.size:
        raise UnusableData.of("empty", "Every measurement is missing.", "data", "values")
    counts = np.bincount(cell[rows], minlength=cells)
    trials = _usual(counts)
    wrong = np.flatnonzero(counts != trials)
    if wrong.size:
        raise UnusableData(*islice(_unbalanced(cell, counts, trials, wrong, named, values), _MOST_FAULTS))
    return rows[np.argsort(cell[rows], kind="stable")], trials


def _unbalanced(
    cell: Integers,
    counts: Integers,
    trials: int,
    wrong: Integers,
    named: Callable[[int], str],
    values: Floats | None,
) -> Iterator[Fault]:
    column = "ratings" if values is None else "values"
    for at in wrong.tolist():
        own = np.flatnonzero(cell == at)
        lost = own[:0] if values is None else own[values[own] != values[own]]
        for row in lost.tolist():
            yield Fault(
                "missing-measurement",
                f"The measurement of {named(at)} is missing, and this analysis needs every cell filled; measure it "
                "again, or leave that part out of the study.",
                ("data", column, row),
            )
        if int(counts[at]) + len(lost) != trials:
            name, count = named(at), int(counts[at])
            yield Fault(
                "unbalanced",
                f"{name[0].upper()}{name[1:]} has {count} {column if count != 1 else column[:-1]} where most have "
                f"{trials}; this analysis needs as many everywhere.",
                ("data", column, int(own[0])) if len(own) else ("data", column),
            )


def _shared(own: Sequence[Sequence[str]]) -> tuple[Caution, ...]:
    """One name under several appraisers: a crossed study in the wrong place, perhaps."""
    met: set[str] = set()
    for names in own:
        for name in names:
            if name in met:
                return (
                    noted(
                        "shared-part-names",
                        f"More than one appraiser has a part called {name}. They were taken as different parts; if "
                        "each is one and the same piece, the study is crossed.",
                    ),
                )
        met.update(names)
    return ()


def _cells(pairs: Sequence[tuple[str, str]], means: Floats, ranges: Floats) -> StudyCells:
    return StudyCells(
        tuple(part for part, _ in pairs),
        tuple(appraiser for _, appraiser in pairs),
        means.ravel(),
        ranges.ravel(),
    )
