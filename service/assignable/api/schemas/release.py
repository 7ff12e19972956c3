"""Shapes of release checks, and how what they load becomes objects of ``spc``."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np

from ...spc import release
from ...spc.capability.indices import LEAST_CONFIDENCE, MOST_CONFIDENCE
from ...spc.charts import CHARTS
from ...spc.data import Floats
from ...spc.errors import Fault, UnusableParameter
from ...spc.exact import Rounding
from ...spc.rules import Signal
from .. import fields as f
from . import derive
from .capability import SpecificationRequest, specification_of
from .common import CAUTIONS, PROVENANCE, AsItIs, CautionAnswer

MOST_CHARACTERISTICS = 200
MOST_SINGLE = 500  # results of a characteristic in one list
MOST_ROWS, MOST_REPLICATES = 100, 20
MOST_EARLIER = 1_000
LARGEST_DECIMALS = 15

NOTE = (
    "This is evidence, not a decision: whether the batch is released is decided by the person authorised to release "
    "it, under the site's approved procedure."
)

DISPOSITION = (
    "`does-not-support-release`: a value is out of specification. `needs-review`: evidence is missing, in doubt, or "
    "out of trend. `supports-release`: neither."
)


class RoundingRequest(f.RequestShape):
    """How values are rounded, once and exactly as written, before they meet the specification."""

    decimals = f.StrictInteger(
        required=True,
        least=-LARGEST_DECIMALS,
        most=LARGEST_DECIMALS,
        metadata={
            "description": "Places kept: those of the specification as it is written; -1 rounds to tens. Fewer than "
            "the limits have is refused."
        },
    )
    rule = f.Choice(
        "half-up",
        "half-even",
        required=True,
        metadata={
            "description": "Of a value halfway between two: `half-up` takes the one of greater magnitude (as "
            "pharmacopoeias do), `half-even` the one whose last digit is even (as ASTM E29 does)."
        },
    )


class UncertaintyRequest(f.RequestShape):
    """Measurement uncertainty of one compared value (a result, or an average), and the decision rule."""

    standard = f.StrictNumber(
        least=1e-300, metadata={"description": "Standard uncertainty, in the characteristic's unit."}
    )
    expanded = f.StrictNumber(
        least=1e-290, metadata={"description": "Or expanded uncertainty, with its coverage factor."}
    )
    coverage_factor = f.StrictNumber(
        least=0.1, most=100, metadata={"description": "The k of the expanded uncertainty."}
    )
    decision_rule = f.Choice(
        "simple-acceptance",
        "guarded-acceptance",
        required=True,
        metadata={
            "description": "`simple-acceptance`: within the specification is accepted. `guarded-acceptance`: a value "
            "between acceptance and specification limit needs review; state the guard band in one of three ways."
        },
    )
    guard_band = f.StrictNumber(least=0, metadata={"description": "Its width, in the characteristic's unit."})
    guard_multiple = f.StrictNumber(
        least=0, most=100, metadata={"description": "Its width as a multiple of the standard uncertainty."}
    )
    consumer_risk = f.StrictNumber(
        least=1e-9,
        below=0.5,
        metadata={
            "description": "Its width by the risk that a value on the acceptance limit is out of specification, for a "
            "normal measurement error (JCGM 106)."
        },
    )


class AnyLimitsDocument(AsItIs):
    """A limits document exactly as it was received, of any chart of one characteristic.

    Its other members are those of that chart's own limits document, by which it is checked.
    """

    chart = f.Choice(*CHARTS, required=True, metadata={"description": "The chart these limits are of."})
    digest = f.StrictString(
        required=True, metadata={"description": "SHA-256 of the document's canonical form (RFC 8785)."}
    )


class AnyCarryDocument(AsItIs):
    """A carry exactly as it was received, of any chart.

    Its other members are those of that chart's own carry, by which it is checked.
    """

    chart = f.Choice(*CHARTS, required=True, metadata={"description": "The chart it belongs to."})
    limits = f.StrictString(required=True, metadata={"description": "Digest of the limits it belongs to."})
    digest = f.StrictString(required=True, metadata={"description": "SHA-256 over the rest of the carry."})


class ReleaseTrendRequest(f.RequestShape):
    """The characteristic's own chart, which judges the batch as its next point or points."""

    limits = f.Object(
        AnyLimitsDocument,
        required=True,
        metadata={"description": "The limits document of the chart, exactly as received."},
    )
    carry = f.Object(
        AnyCarryDocument,
        allow_none=True,
        load_default=None,
        metadata={
            "description": "As it came with the last batch's answer, or with the chart's own; null or absent to start "
            "afresh."
        },
    )
    point = f.Choice(
        "subgroup",
        "average",
        "each",
        metadata={
            "description": "What of the results, before rounding, makes a point. `subgroup`: the results together, a "
            "row of replicates a subgroup where there are rows. `average`: their average as a single value, of each "
            "row where there are rows. `each`: every result by itself, in order. Unless given: `subgroup` on a chart "
            "of subgroups, `average` on one of single values, `each` on one of counts or of intervals."
        },
    )
    inspected = f.StrictNumber(
        above=0,
        most=1e15,
        metadata={
            "description": "On a chart of counts: units inspected, or area of opportunity, of each result."
        },
    )
    positions = f.NumberList(
        least=-1e15,
        most=1e15,
        max_items=MOST_SINGLE,
        metadata={
            "description": "On a `trend` chart whose line was fitted on given positions: of each point."
        },
    )
    part_name = f.StrictString(
        min_length=1, metadata={"description": "On a `short-run` chart: which part the batch is of."}
    )


class CapabilityFloorRequest(f.RequestShape):
    """The Ppk that the values compared (before rounding) are to show, those of earlier batches included."""

    least_ppk = f.StrictNumber(
        required=True,
        least=-10,
        most=100,
        metadata={"description": "What the one-sided lower bound of Ppk must reach."},
    )
    confidence = f.StrictNumber(
        above=LEAST_CONFIDENCE,
        most=MOST_CONFIDENCE,
        load_default=0.95,
        metadata={"description": "Of the bound; 0.95 unless given."},
    )
    earlier = f.NumberList(
        max_items=MOST_EARLIER,
        metadata={"description": "Values of earlier batches, comparable with those compared here."},
    )


class ReleaseCharacteristicRequest(f.RequestShape):
    """One characteristic of the batch."""

    name = f.StrictString(
        required=True, min_length=1, metadata={"description": "Name of the characteristic."}
    )
    unit = f.StrictString(
        max_length=40, metadata={"description": "Unit of results and specification, as it is written."}
    )
    results = f.ListOrTable(
        f.NumberList(nullable=True, max_items=MOST_SINGLE),
        f.NumberTable(nullable=True, max_rows=MOST_ROWS, max_columns=MOST_REPLICATES),
        required=True,
        metadata={
            "description": "Single results, or rows of replicates; null is a missing one, or one below detection. At "
            f"most {release.MOST_RESULTS} in all characteristics together."
        },
    )
    specification = f.Object(
        SpecificationRequest,
        required=True,
        metadata={"description": "What the characteristic must meet. A value on a limit conforms."},
    )
    compare = f.Choice(
        "each",
        "averages",
        load_default="each",
        metadata={
            "description": "What is compared: `each` result, or the `averages` of the rows (of the whole list where "
            "there are no rows)."
        },
    )
    rounding = f.Object(
        RoundingRequest, metadata={"description": "Without it values are compared as they are."}
    )
    uncertainty = f.Object(
        UncertaintyRequest, metadata={"description": "Without it values are taken as exact."}
    )
    expected_results = f.StrictInteger(
        least=1,
        most=MOST_SINGLE * 4,
        metadata={"description": "How many single results, replicates included, the plan asks for."},
    )
    below_detection = f.IntegerList(
        least=0,
        most=MOST_SINGLE * 4 - 1,
        max_items=MOST_SINGLE * 4,
        metadata={
            "description": "Positions, counted through the rows from 0, of results below the detection limit; each is "
            "null among the results."
        },
    )
    detection_limit = f.StrictNumber(
        metadata={"description": "What those results are below, in the characteristic's unit."}
    )
    trend = f.Object(ReleaseTrendRequest, metadata={"description": "Without it no trend is judged."})
    capability = f.Object(
        CapabilityFloorRequest, metadata={"description": "Without it no capability is asked for."}
    )


class ReleaseCheckRequest(f.RequestShape):
    """One batch with its characteristics."""

    batch = f.StrictString(metadata={"description": "Your name for the batch; comes back with the answer."})
    characteristics = f.ObjectList(
        ReleaseCharacteristicRequest,
        required=True,
        min_items=1,
        max_items=MOST_CHARACTERISTICS,
        metadata={"description": "What was tested, in your order; answered in the same."},
    )


def characteristic_of(posted: dict[str, Any], trend: release.Judged | None) -> release.Characteristic:
    """A characteristic as posted, with what its chart said. Raises UnusableParameter."""
    return release.Characteristic(
        posted["name"],
        posted.get("unit"),
        posted["results"],
        specification_of(posted["specification"]),
        compare=posted["compare"],
        rounding=Rounding(**posted["rounding"]) if "rounding" in posted else None,
        uncertainty=_uncertainty(posted["uncertainty"]) if "uncertainty" in posted else None,
        expected_results=posted.get("expected_results"),
        below=below_of(posted),
        detection_limit=posted.get("detection_limit"),
        trend=trend,
        capability=_floor(posted["capability"]) if "capability" in posted else None,
    )


def below_of(posted: Mapping[str, Any]) -> tuple[int, ...]:
    """Positions of results below detection."""
    return tuple(posted["below_detection"].tolist()) if "below_detection" in posted else ()


def _floor(posted: dict[str, Any]) -> release.CapabilityFloor:
    earlier: Floats = posted.get("earlier", np.empty(0))
    return release.CapabilityFloor(posted["least_ppk"], posted["confidence"], earlier)


def _uncertainty(posted: dict[str, Any]) -> release.Uncertainty:
    faults = []
    if "standard" in posted and "expanded" in posted:
        detail = "Give either the standard uncertainty or the expanded one."
        faults.append(Fault("two-forms", detail, ("uncertainty", "expanded")))
    if ("expanded" in posted) != ("coverage_factor" in posted):
        detail = "expanded and coverage_factor go together."
        lacking = "coverage_factor" if "expanded" in posted else "expanded"
        faults.append(Fault("coverage-factor-missing", detail, ("uncertainty", lacking)))
    if faults:
        raise UnusableParameter(*faults)
    standard = posted.get("standard")
    if "expanded" in posted:
        standard = posted["expanded"] / posted["coverage_factor"]
    return release.Uncertainty(
        standard,
        posted["decision_rule"],
        guard_band=posted.get("guard_band"),
        guard_multiple=posted.get("guard_multiple"),
        consumer_risk=posted.get("consumer_risk"),
    )


# ---------------------------------------------------------------------------------------------------
# Answers


class ReasonAnswer(f.AnswerShape):
    """Something that speaks against release, or that a reviewer is to know."""

    code = f.StrictString(required=True, metadata={"description": "Stable; for programs."})
    sentence = f.StrictString(required=True, metadata={"description": "What was found."})
    pointer = f.StrictString(
        required=True,
        metadata={"description": "The place in the request it is about: a JSON Pointer fragment."},
    )
    severity = f.Choice(
        "disqualifying",
        "review",
        "note",
        required=True,
        metadata={
            "description": "`disqualifying`: the characteristic does not support release. `review`: it needs review. "
            "`note`: its disposition stays as it is."
        },
    )
    entries = f.IntegerList(
        min_items=0,
        required=True,
        metadata={"description": "Positions in the arrays of `compared` that it is about, where it is."},
    )


class AnyCarry(f.AnswerShape):
    """What the next batch needs to remember. Send it back as it is, with the next results.

    Its other members are those of the chart's own carry.
    """

    chart = f.Choice(*CHARTS, required=True, metadata={"description": "The chart it belongs to."})
    limits = f.StrictString(required=True, metadata={"description": "Digest of the limits it belongs to."})
    digest = f.StrictString(required=True, metadata={"description": "SHA-256 over the rest of the carry."})


class ReleaseTrendAnswer(f.AnswerShape):
    """What the characteristic's own chart says of the batch."""

    chart = f.Choice(*CHARTS, required=True, metadata={"description": "The chart that judged."})
    point = f.Choice(
        "subgroup",
        "average",
        "each",
        required=True,
        metadata={"description": "What of the results made a point."},
    )
    points = f.StrictInteger(
        required=True, metadata={"description": "How many points were judged, gaps included."}
    )
    verdict = f.Choice(
        "in-control",
        "signal",
        required=True,
        metadata={"description": "`signal` where any signal asks for action."},
    )
    signals = f.ObjectList(
        derive.answer(Signal),
        required=True,
        metadata={"description": "In the order of the points; indexes are positions among these points."},
    )
    signals_found = f.StrictInteger(
        required=True, metadata={"description": "How many signals there are; the first 10000 are told."}
    )
    carry = f.Object(
        AnyCarry, required=True, metadata={"description": "Send it with the next batch's results."}
    )


class ReleaseCharacteristicAnswer(derive.answer(release.Figures)):  # type: ignore[misc]
    """One characteristic, checked."""

    disposition = f.Choice(
        "supports-release",
        "needs-review",
        "does-not-support-release",
        required=True,
        metadata={"description": f"Of this characteristic alone. {DISPOSITION}"},
    )
    reasons = f.ObjectList(
        ReasonAnswer,
        required=True,
        metadata={
            "description": "In the order a reviewer reads them: out of specification, inside the guard band, out of "
            "trend, missing or insufficient, capability at risk."
        },
    )
    trend = f.Object(
        ReleaseTrendAnswer,
        required=True,
        allow_none=True,
        metadata={"description": "Null where no trend was to be judged."},
    )


class ReleaseCheckAnswer(f.AnswerShape):
    """A batch, checked."""

    batch = f.StrictString(
        required=True, allow_none=True, metadata={"description": "As given; null where it was not."}
    )
    disposition = f.Choice(
        "supports-release",
        "needs-review",
        "does-not-support-release",
        required=True,
        metadata={"description": f"The gravest of the characteristics. {DISPOSITION}"},
    )
    note = f.StrictString(required=True, metadata={"description": "Whose decision it is."})
    characteristics = f.ObjectList(
        ReleaseCharacteristicAnswer, required=True, metadata={"description": "In the order of the request."}
    )
    cautions = f.ObjectList(CautionAnswer, **CAUTIONS)
    provenance = PROVENANCE
