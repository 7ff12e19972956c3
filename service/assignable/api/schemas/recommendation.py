"""Shapes of the request for a recommendation and of its answer."""

from __future__ import annotations

from typing import Any, get_args

import numpy as np

from ...spc.data import Counts, Floats, Intervals, Subgroups, Vectors
from ...spc.errors import Fault, UnusableData, UnusableParameter
from ...spc.factors import LARGEST_SIZE
from ...spc.recommendation import Description, Dispersion, Evidence, Kind, Recommendation
from .. import fields as f
from . import derive
from .common import PROVENANCE, Characteristic

MOST_VARIABLES = 50

_COUNTED = {"units": "nonconforming-units", "events": "nonconformities"}


def _flag(text: str) -> f.StrictBoolean:
    return f.StrictBoolean(metadata={"description": f"{text}; false unless given."})


class DescriptionRequest(f.RequestShape):
    """What is known of the data. With a sample, what the sample shows is added to it."""

    kind = f.Choice(
        *get_args(Kind),
        metadata={
            "description": "What is recorded; needed without a sample. `nonconforming-units`: each unit conforms or "
            "not. `nonconformities`: any number on one unit or area. The last two: what lies between events."
        },
    )
    variables = f.StrictInteger(
        least=1,
        most=MOST_VARIABLES,
        metadata={
            "description": "Characteristics measured on each piece and watched together; 1 unless given."
        },
    )
    subgroup_size = f.StrictInteger(
        least=1,
        most=LARGEST_SIZE,
        metadata={"description": "Measurements in a subgroup; 1, single values, unless given."},
    )
    sizes_vary = _flag("Whether subgroups, samples or areas differ in size")
    events_per_sample = f.StrictNumber(
        least=0, most=1e9, metadata={"description": "Average count of a sample: rate times size."}
    )
    dispersion = f.Choice(
        *get_args(Dispersion),
        metadata={
            "description": "Whether counts vary as chance has it, or more (batches, seasons, mixed streams), or less; "
            "`by-chance` unless given."
        },
    )
    depends_on_neighbours = _flag("Whether points are known to depend on those before them in time")
    drifts = _flag("Whether the level drifts by nature: tool wear, a bath used up")
    differs_between_subgroups = _flag("Whether subgroups differ by nature: loads, cavities, reels")
    short_runs = _flag("Whether many part numbers with targets of their own come in short runs")
    small_shifts = _flag("Whether shifts of less than about 1.5 sigma of a point matter")
    within_specification = _flag(
        "Whether the level may move freely as long as product meets a wide specification"
    )
    not_normal = _flag("Whether measurements are skewed, or otherwise far from normal, by nature")


class SampleRequest(f.RequestShape):
    """A sample of the data, in time order, in one of five forms."""

    values = f.ListOrTable(
        f.NumberList(nullable=True, max_items=f.MAX_ROWS),
        f.NumberTable(nullable=True, ragged=True, min_columns=0),
        metadata={
            "description": "Measurements: a list of single values, or a row a subgroup; null is missing."
        },
    )
    variables = f.NumberTable(
        nullable=True,
        min_columns=2,
        max_columns=MOST_VARIABLES,
        metadata={
            "description": "Several characteristics: a row a piece, a column a characteristic; null is missing."
        },
    )
    counts = f.CountList(
        nullable=True,
        max_items=f.MAX_ROWS,
        metadata={"description": "Counts, with `counted`; null is a gap."},
    )
    counted = f.Choice(
        *_COUNTED,
        metadata={"description": "What counts count: nonconforming `units`, or `events` (nonconformities)."},
    )
    inspected = f.OneOrMany(
        f.NumberList(least=0, max_items=f.MAX_ROWS),
        metadata={
            "description": "With counts: units inspected, or the area; one number for all, or one each. Needed for "
            "units."
        },
    )
    opportunities = f.CountList(
        nullable=True,
        max_items=f.MAX_ROWS,
        metadata={"description": "Opportunities from one event to the next; null is a gap."},
    )
    times_between = f.NumberList(
        least=0,
        nullable=True,
        max_items=f.MAX_ROWS,
        metadata={"description": "Time from one event to the next; null is a gap."},
    )


class RecommendationRequest(f.RequestShape):
    """A description of the data, a sample of it, or both."""

    characteristic = f.Object(Characteristic, metadata={"description": "What is measured."})
    description = f.Object(DescriptionRequest, metadata={"description": "What is known of the data."})
    sample = f.Object(SampleRequest, metadata={"description": "Data to look at."})


Sample = Subgroups | Vectors | Counts | Intervals
_FORMS = ("values", "variables", "counts", "opportunities", "times_between")


def asked(loaded: dict[str, Any]) -> tuple[Description, Sample | None]:
    """What is known, and the sample. Raises UnusableParameter or UnusableData for what does not fit."""
    told = dict(loaded.get("description", {}))
    kind = told.pop("kind", None)
    if "sample" not in loaded:
        if kind is None:
            raise UnusableParameter.of(
                "kind-missing", "Say what kind of data it is, or give a sample of it.", "description", "kind"
            )
        return Description(kind, **told), None
    shown, sample = _sample(loaded["sample"])
    if kind is not None and kind != shown:
        raise UnusableParameter.of(
            "another-kind",
            f"The sample holds {shown}, and the description says {kind}.",
            "description",
            "kind",
        )
    for name in ("variables", "subgroup_size"):
        if name in told:
            raise UnusableParameter.of(
                "size-with-data", "This comes from the sample; give it only without one.", "description", name
            )
    return Description(shown, **told), sample  # type: ignore[arg-type]


def _sample(loaded: dict[str, Any]) -> tuple[str, Sample]:
    forms = [name for name in _FORMS if name in loaded]
    if len(forms) != 1:
        raise UnusableData.of(
            "one-form", f"Give the sample in one of these forms: {', '.join(_FORMS)}.", "sample"
        )
    (form,) = forms
    if form != "counts" and (besides := [name for name in ("counted", "inspected") if name in loaded]):
        raise UnusableData(
            *(Fault("only-with-counts", "This goes with counts alone.", ("sample", name)) for name in besides)
        )
    data: Floats = loaded[form]
    if form == "values":
        return "measurements", Subgroups(data[:, None] if data.ndim == 1 else data)
    if form == "variables":
        return "measurements", Vectors(data, tuple(f"column {at}" for at in range(data.shape[1])))
    if form == "opportunities":
        return "opportunities-between-events", Intervals(data)
    if form == "times_between":
        return "time-between-events", Intervals(data)
    if "counted" not in loaded:
        raise UnusableData.of(
            "counted-missing", "With counts, say what they count: units or events.", "sample", "counted"
        )
    inspected = loaded.get("inspected")
    if inspected is not None:
        inspected = np.asarray(inspected, dtype=np.float64)
        if len(inspected) == 1:
            inspected = np.full(len(data), inspected[0])
        if len(inspected) != len(data):
            raise UnusableData.of(
                "unequal-length",
                f"There are {len(inspected)} sizes for {len(data)} counts; give one for each, or one for all.",
                "sample",
                "inspected",
            )
        if not (inspected > 0).all():
            raise UnusableData.of(
                "nothing-inspected",
                "A sample needs a size above 0; leave out what was not inspected.",
                "sample",
                "inspected",
                int((inspected > 0).argmin()),
            )
    return _COUNTED[loaded["counted"]], Counts(data, inspected)


class RecommendationAnswer(derive.answer(Recommendation)):  # type: ignore[misc]
    """The chart to use, why, and what else would do."""

    limits = f.StrictString(
        required=True, metadata={"description": "Path of the operation that fits its limits."}
    )
    taken_as = f.Object(
        derive.answer(Description),
        required=True,
        metadata={"description": "What decided: the description, with what the sample showed added."},
    )
    evidence = f.Object(
        derive.answer(Evidence),
        required=True,
        allow_none=True,
        metadata={"description": "What the sample shows; null without one."},
    )
    provenance = PROVENANCE
