"""Shapes of measurement studies: columns as they are exported, a row for each measurement or rating."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from marshmallow import Schema

from ...spc.capability.specification import Specification
from ...spc.errors import Fault, UnusableData
from ...spc.studies.agreement import AgreementStudy
from ...spc.studies.bias import BiasStudy, ReferenceLevel
from ...spc.studies.columns import MOST_CATEGORIES, StudyCells
from ...spc.studies.crossed import CrossedStudy
from ...spc.studies.nested import NestedStudy
from ...spc.studies.variance_components import OneSidedTolerance
from .. import fields as f
from ..contract import Provenance
from ..problems import Entry
from ..tables import Columns, Read, Table
from . import derive
from .capability import SpecificationRequest
from .common import CAUTIONS, CautionAnswer, Characteristic

MOST_ROWS = 100_000
MOST_LEVELS = 200
MOST_LEVEL_VALUES = 10_000
MOST_CONFIDENCE = 0.9999
# The fourth powers of measurements must stay within double precision.
LARGEST_MEASUREMENT = 1e60


def _names(text: str, **bounds: Any) -> f.StringList:
    return f.StringList(
        required=True, min_length=1, max_items=MOST_ROWS, metadata={"description": text}, **bounds
    )


class StudyData(f.RequestShape):
    """Measurements in columns, a row for each. Trials are told by part and appraiser coming again."""

    table = Columns({"part": "parts", "appraiser": "appraisers", "value": "values"})
    parts = _names("The part of each row.")
    appraisers = _names("Who measured it.")
    values = f.NumberList(
        nullable=True,
        least=-LARGEST_MEASUREMENT,
        most=LARGEST_MEASUREMENT,
        max_items=MOST_ROWS,
        required=True,
        metadata={"description": "What was measured, in the characteristic's unit; null is a missing value."},
    )


CONFIDENCE: dict[str, Any] = {
    "above": 0.5,
    "most": MOST_CONFIDENCE,
    "load_default": 0.95,
    "metadata": {"description": "Of each interval by itself; 0.95 unless given."},
}


class GaugeRequest(f.RequestShape):
    """What the studies of a gauge's variation have in common."""

    characteristic = f.Object(Characteristic, metadata={"description": "What was measured."})
    data = f.Object(StudyData, required=True, metadata={"description": "The measurements."})
    specification = f.Object(
        SpecificationRequest,
        metadata={
            "description": "What the characteristic must meet; the gauge is compared with its width, or with the "
            "distance from the mean to its only limit."
        },
    )
    spread_multiple = f.StrictNumber(
        above=0,
        most=100,
        load_default=6.0,
        metadata={
            "description": "Standard deviations that make up a spread; 6 unless given; older practice has 5.15."
        },
    )
    process_sd = f.StrictNumber(
        above=0,
        most=LARGEST_MEASUREMENT,
        metadata={
            "description": "Standard deviation seen in production, gauge included; shares and categories then refer to "
            "it and not to the parts of the study."
        },
    )
    confidence = f.StrictNumber(**CONFIDENCE)
    chart_shift = f.StrictNumber(
        above=0,
        most=10,
        load_default=1.0,
        metadata={
            "description": "The shift, in product sigmas, that the effect on a chart of means is stated for; "
            "1 unless given."
        },
    )
    chart_subgroup_size = f.StrictInteger(
        least=1,
        most=1000,
        load_default=5,
        metadata={"description": "The subgroup size that it is stated for; 5 unless given."},
    )


class CrossedRequest(GaugeRequest):
    """A study in which every appraiser measures every part as many times."""

    pooling_alpha = f.StrictNumber(
        least=0,
        most=1,
        allow_none=True,
        load_default=0.05,
        metadata={
            "description": "The interaction of part and appraiser is pooled into repeatability where its p-value is "
            "above this; null keeps it always. 0.05 unless given."
        },
    )


class NestedRequest(GaugeRequest):
    """A study in which each appraiser has parts of their own, as when measuring destroys them.

    A part is then a batch so uniform that its pieces stand for repeated trials.
    """


class _RatingColumns(Columns):
    """The right rating, where it is known, in a column of its own: the same in each row of an item, or empty."""

    def read(self, table: Table, shape: Schema, options: Mapping[str, Any]) -> Read:
        right = table.texts("reference") if "reference" in table else None
        made = super().read(table, shape, options)
        made.columns["reference"] = ("reference",)
        if right is None or "items" not in made.data:
            return made
        found: dict[str, tuple[str, int]] = {}
        for row, (item, rating) in enumerate(zip(made.data["items"], right, strict=True), 2):
            if rating and found.setdefault(item, (rating, row))[0] != rating:
                known, first = found[item]
                detail = f"Item {item} is {rating} here and {known} in row {first}; it has one right rating."
                table.faults.append(Entry("two-references", detail, row=row, column="reference"))
        made.besides["reference"] = {
            "items": list(found),
            "ratings": [rating for rating, _ in found.values()],
        }
        rows = [row for _, row in found.values()]
        made.places["reference", "items"] = [(row, "item") for row in rows]
        made.places["reference", "ratings"] = [(row, "reference") for row in rows]
        made.places["reference",] = {"items": (None, "reference"), "ratings": (None, "reference")}
        return made


class RatingData(f.RequestShape):
    """Ratings in columns, a row for each. Trials are told by item and appraiser coming again."""

    table = _RatingColumns(
        {"item": "items", "appraiser": "appraisers", "rating": "ratings"},
        text="Columns: `item` becomes `data.items`; `appraiser` `data.appraisers`; `rating` `data.ratings`; "
        "`reference`, where it is known, the right rating of the row's item, the same in all its rows or empty.",
        takes=("reference",),
    )
    items = _names("The item of each row.")
    appraisers = _names("Who rated it.")
    ratings = _names("The category it was put into.")


class RatingReference(f.RequestShape):
    """The right rating of each item."""

    items = _names("Each item once.")
    ratings = _names("Its right category.")


class AgreementRequest(f.RequestShape):
    """A study in which appraisers sort the same items into categories."""

    characteristic = f.Object(Characteristic, metadata={"description": "What was rated."})
    data = f.Object(RatingData, required=True, metadata={"description": "The ratings."})
    reference = f.Object(
        RatingReference, metadata={"description": "The right ratings, where they are known."}
    )
    categories = f.StringList(
        min_items=2,
        max_items=MOST_CATEGORIES,
        min_length=1,
        metadata={
            "description": "All categories in their order; unless given, those of the data in the order in which "
            "they come."
        },
    )
    nonconforming = f.StrictString(
        min_length=1,
        metadata={
            "description": "Of two categories, the one that rejects an item; with a reference it gives misses and "
            "false alarms."
        },
    )
    confidence = f.StrictNumber(**CONFIDENCE)


class LevelRequest(f.RequestShape):
    """A reference part and its measurements."""

    part = f.StrictString(metadata={"description": "Its name."})
    reference = f.StrictNumber(
        least=-LARGEST_MEASUREMENT,
        most=LARGEST_MEASUREMENT,
        required=True,
        metadata={"description": "Its reference value, in the unit of the measurements."},
    )
    values = f.NumberList(
        least=-LARGEST_MEASUREMENT,
        most=LARGEST_MEASUREMENT,
        max_items=MOST_LEVEL_VALUES,
        required=True,
        metadata={"description": "Repeated measurements of it."},
    )


class _LevelColumns(Columns):
    """A row a measurement: those of one part and reference value are a level, in the order in which they come."""

    def read(self, table: Table, shape: Schema, options: Mapping[str, Any]) -> Read:
        made = Read({}, {})
        lacking = [name for name in ("reference", "value") if name not in table]
        table.faults += [
            Entry("required", f"The table needs a column {name}.", row=1, column=name) for name in lacking
        ]
        self.others(table)
        if table.faults:
            return made
        parts = table.texts("part") if "part" in table else [None] * table.rows
        rows: dict[tuple[Any, Any], list[int]] = {}
        references, values = table.numbers("reference"), table.numbers("value")
        for at, key in enumerate(zip(parts, references, strict=True)):
            rows.setdefault(key, []).append(at)
        levels = made.data["levels"] = []
        for level, ((part, reference), own) in enumerate(rows.items()):
            named = {} if part is None else {"part": part}
            levels.append({**named, "reference": reference, "values": [values[at] for at in own]})
            here, first = ("data", "levels", level), own[0] + 2
            made.places[here] = {name: (first, name.removesuffix("s")) for name in levels[-1]}
            made.places[(*here, "values")] = [(at + 2, "value") for at in own]
        made.places["data", "levels"] = [(own[0] + 2, None) for own in rows.values()]
        return made


class BiasData(f.RequestShape):
    """Measurements of parts whose true values are known."""

    table = _LevelColumns(
        {"part": "part", "reference": "reference", "value": "values"},
        rows_of=None,
        names="levels",
        text="Columns: `reference`, the part's reference value, and `value`, one measurement of it; `part`, its name, "
        "may be left out. The rows of one part and reference become one of `data.levels`.",
    )
    levels = f.ObjectList(
        LevelRequest,
        min_items=1,
        max_items=MOST_LEVELS,
        required=True,
        metadata={"description": "The reference parts; several along the gauge's range show its linearity."},
    )


class BiasRequest(f.RequestShape):
    """A study of a gauge's bias, and of its linearity along the range."""

    characteristic = f.Object(Characteristic, metadata={"description": "What was measured."})
    data = f.Object(BiasData, required=True, metadata={"description": "The measurements."})
    confidence = f.StrictNumber(**CONFIDENCE)


def tolerance_of(loaded: dict[str, Any]) -> float | OneSidedTolerance | None:
    """The width of the specification, or its only limit."""
    if "specification" not in loaded:
        return None
    given = loaded["specification"]
    asked = Specification(given.get("lower"), given.get("upper"), given.get("target"))
    if asked.lower is None:
        assert asked.upper is not None
        return OneSidedTolerance(asked.upper, "upper")
    if asked.upper is None:
        return OneSidedTolerance(asked.lower, "lower")
    return asked.upper - asked.lower


def terms_of(loaded: dict[str, Any]) -> dict[str, Any]:
    """The options of a gauge study by the names of the numerics."""
    names = ("spread_multiple", "process_sd", "confidence", "chart_shift", "chart_subgroup_size")
    return {"tolerance": tolerance_of(loaded), **{name: loaded[name] for name in names if name in loaded}}


def levels_of(loaded: dict[str, Any]) -> tuple[ReferenceLevel, ...]:
    """The reference parts. Raises UnusableData with more measurements than are taken."""
    levels = tuple(
        ReferenceLevel(level["reference"], level["values"], level.get("part")) for level in loaded["levels"]
    )
    total = sum(level.values.size for level in levels)
    if total > MOST_ROWS:
        detail = f"There are {total} measurements; a study takes at most {MOST_ROWS}."
        raise UnusableData(Fault("too-many-values", detail, ("data", "levels")))
    return levels


def _list(text: str) -> f.StringList:
    return f.StringList(min_items=0, required=True, metadata={"description": text})


def _framed(**instead: Any) -> dict[str, Any]:
    """Members besides those of the numerics, or in the place of them."""
    return {
        **instead,
        "cautions": f.ObjectList(CautionAnswer, **CAUTIONS),
        "provenance": f.Object(
            Provenance, required=True, metadata={"description": "What computed this answer."}
        ),
    }


def _cells() -> f.Object:
    return f.Object(
        derive.answer(StudyCells),
        required=True,
        metadata={"description": "What each appraiser found of each part."},
    )


CrossedAnswer = derive.answer(
    CrossedStudy,
    "CrossedStudyAnswer",
    "The analysis of a crossed study.",
    _framed(
        parts=_list("The parts, in the order in which they come."),
        appraisers=_list("The appraisers, in the order in which they come."),
        cells=_cells(),
        cell_means=None,
        cell_ranges=None,
    ),
)
NestedAnswer = derive.answer(
    NestedStudy,
    "NestedStudyAnswer",
    "The analysis of a nested study. Of the components, appraiser and reproducibility are one and the same, null "
    "with one appraiser; there is no interaction.",
    _framed(
        appraisers=_list("The appraisers, in the order in which they come."),
        cells=_cells(),
        part_means=None,
        part_ranges=None,
    ),
)
AgreementAnswer = derive.answer(
    AgreementStudy,
    "AgreementStudyAnswer",
    "The analysis of an agreement study.",
    _framed(
        appraisers=_list("The appraisers, in the order in which they come."),
        categories=_list("The categories, in the order that counts are given in."),
    ),
)
BiasAnswer = derive.answer(BiasStudy, "BiasStudyAnswer", "The analysis of a bias study.", _framed())
