"""Worked steps of measurement studies."""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import Any

import numpy as np
import scipy

from ..data import Floats, Integers
from ..studies.agreement import AgreementStudy, CohenKappa, FleissKappa
from ..studies.bias import BiasStudy, ReferenceLevel
from ..studies.crossed import CrossedStudy
from ..studies.nested import NestedStudy
from ..studies.variance_components import AnovaRow, OneSidedTolerance
from .steps import MOST_LISTED, Pad, Step, Value, numbered, total_of


def _squares(pad: Pad, what: str, means: Floats, centre: float, copies: int, word: str, where: str) -> None:
    """A sum of squares of means about a centre, each standing for so many measurements."""
    flat = means.reshape(-1)
    if len(flat) <= MOST_LISTED:
        names, given = numbered("m", flat.tolist())
        text = " + ".join(f"({name} - mean)**2" for name in names)
        pad.work(what, f"copies * ({text})", where, copies=(copies, word), mean=centre, **given)
        return
    total = total_of((flat - centre) ** 2)
    pad.work(
        what,
        "copies * sum_squares",
        where,
        copies=(copies, word),
        sum_squares=(total, f"sum of the {len(flat)} squared distances from the mean"),
    )


def _table(pad: Pad, table: Sequence[AnovaRow]) -> dict[str, float]:
    """Mean squares and F ratios of an analysis of variance; the mean squares by source."""
    found: dict[str, float] = {}
    for at, row in enumerate(table):
        if row.mean_square is None:
            continue
        found[row.source] = pad.work(
            f"Mean square of {row.source}",
            "sum_of_squares / freedom",
            f"#/table/{at}/mean_square",
            sum_of_squares=row.sum_of_squares,
            freedom=row.degrees_of_freedom,
        )
    for at, row in enumerate(table):
        if row.f_ratio is None or row.tested_against is None or row.mean_square is None:
            continue
        other = next(each for each in table if each.source == row.tested_against)
        pad.work(
            f"F ratio of {row.source} against {row.tested_against}",
            "mean_square / other",
            f"#/table/{at}/f_ratio",
            mean_square=row.mean_square,
            other=other.mean_square or 0.0,
        )
    return found


def _component(pad: Pad, name: str, first: float, second: float | None, copies: int, what: str) -> None:
    where = f"#/components/{name}/estimate"
    if second is None:
        pad.work(f"Variance of {what}: its mean square", "ms", where, ms=first)
        return
    pad.work(
        f"Variance of {what}: what its mean square is above the one below, over the measurements it stands for",
        "(ms - ms_below) / copies",
        where,
        ms=first,
        ms_below=second,
        copies=copies,
    )


def _rest(pad: Pad, found: CrossedStudy | NestedStudy, asked: Any, process_sd: float | None) -> None:
    """What follows from the components: sums, shares, categories, capability, chart."""
    parts = found.components
    values: dict[str, Value] = {"repeatability": parts.repeatability.variance}
    for name, one in (("appraiser", parts.appraiser), ("interaction", parts.part_by_appraiser)):
        if one is not None:
            values[name] = one.variance
    gauge = pad.work(
        "Variance of the gauge: repeatability and reproducibility, negative components as 0",
        " + ".join(values),
        "#/components/gauge/variance",
        **values,
    )
    pad.work("Its standard deviation", "sqrt(variance)", "#/components/gauge/sd", variance=gauge)
    part: Value = parts.part.variance
    if process_sd is None:
        total = pad.work(
            "Total variance", "gauge + part", "#/components/total/variance", gauge=gauge, part=part
        )
    else:
        total = pad.work("Total variance: that of the process", "process_sd**2", None, process_sd=process_sd)
        part = pad.work(
            "Variance of the parts of the process", "total - gauge", None, total=total, gauge=gauge
        )
    if parts.gauge.sd_share_percent is not None:
        pad.work(
            "Gauge in percent of the total standard deviation",
            "100 * sqrt(gauge / total)",
            "#/components/gauge/sd_share_percent",
            gauge=gauge,
            total=total,
        )
    if parts.gauge.share_of_tolerance_percent is not None:
        room: Value
        if isinstance(asked, OneSidedTolerance):
            room = pad.work(
                "Twice the room between the mean and the only limit",
                "2 * abs(limit - mean)",
                None,
                limit=asked.limit,
                mean=found.grand_mean,
            )
        else:
            room = asked
        pad.work(
            "Gauge in percent of the specification",
            "100 * multiple * sqrt(gauge) / width",
            "#/components/gauge/share_of_tolerance_percent",
            multiple=found.spread_multiple,
            gauge=gauge,
            width=room,
        )
    if found.discrimination.distinct_categories_ratio is not None:
        pad.work(
            "Ratio of which the number of distinct categories is made",
            "sqrt(2) * sqrt(part / gauge)",
            "#/discrimination/distinct_categories_ratio",
            part=part,
            gauge=gauge,
        )
        pad.work(
            "Number of distinct categories, with 1.41 as the rule has it",
            "floor(1.41 * sqrt(part / gauge))",
            "#/discrimination/distinct_categories",
            part=part,
            gauge=gauge,
        )
    if found.capability.ratio is not None:
        pad.work(
            "Observed over true capability index",
            "sqrt(part / total)",
            "#/capability/ratio",
            part=part,
            total=total,
        )
    if found.chart is not None:
        pad.work(
            "Average run length of a chart of means with this gauge, for the shift looked at",
            "1 / (erfc((3 - d) / sqrt(2)) / 2 + erfc((3 + d) / sqrt(2)) / 2)",
            "#/chart/arl_with_gauge",
            d=(
                found.chart.shift * found.chart.shift_factor * math.sqrt(found.chart.subgroup_size),
                "shift times shift factor times the root of the subgroup size",
            ),
        )


def of_crossed(
    measurements: Floats, found: CrossedStudy, tolerance: Any, process_sd: float | None
) -> tuple[Step, ...]:
    """The steps of a crossed study: sums of squares, mean squares, components and what follows from them."""
    pad = Pad()
    p, o, r = found.parts, found.appraisers, found.trials
    mean = pad.mean(f"Mean of all {p * o * r} measurements", measurements.reshape(-1), "#/grand_mean")
    at = {row.source: f"#/table/{place}/sum_of_squares" for place, row in enumerate(found.table)}
    squares = {row.source: row.sum_of_squares for row in found.table}
    if squares["part"] > 0:
        _squares(
            pad,
            "Sum of squares of parts, from the part means",
            found.part_means,
            mean,
            o * r,
            "measurements of a part",
            at["part"],
        )
    if o > 1 and squares["appraiser"] > 0:
        _squares(
            pad,
            "Sum of squares of appraisers, from their means",
            found.appraiser_means,
            mean,
            p * r,
            "measurements of an appraiser",
            at["appraiser"],
        )
    within = total_of((measurements - found.cell_means[:, :, None]) ** 2)
    cells = found.cell_means - found.part_means[:, None] - found.appraiser_means + found.grand_mean
    between = r * total_of(cells**2)
    values: dict[str, Value] = {
        "within": (within, "sum of the squared distances of measurements from the mean of their cell"),
        "between": (between, "trials times the sum of (cell - part - appraiser + mean)**2 of the means"),
    }
    if found.model == "with-interaction":
        if squares["part-by-appraiser"] > 0:
            pad.work(
                "Sum of squares of the interaction",
                "between",
                at["part-by-appraiser"],
                between=values["between"],
            )
        if squares["repeatability"] > 0:
            pad.work(
                "Sum of squares of repeatability", "within", at["repeatability"], within=values["within"]
            )
    elif squares["repeatability"] > 0:
        pad.work(
            "Sum of squares of repeatability, the interaction pooled into it",
            "within + between",
            at["repeatability"],
            **values,
        )
    ms = _table(pad, found.table)
    error = ms["repeatability"]
    _component(pad, "repeatability", error, None, 1, "repeatability")
    against = ms.get("part-by-appraiser", error)
    if "part-by-appraiser" in ms:
        _component(pad, "part_by_appraiser", ms["part-by-appraiser"], error, r, "the interaction")
    if "appraiser" in ms:
        _component(pad, "appraiser", ms["appraiser"], against, p * r, "appraisers")
    _component(pad, "part", ms["part"], against, o * r, "parts")
    _rest(pad, found, tolerance, process_sd)
    return pad.steps


def of_nested(
    measurements: Floats, found: NestedStudy, tolerance: Any, process_sd: float | None
) -> tuple[Step, ...]:
    """The steps of a nested study."""
    pad = Pad()
    a, b, r = found.appraisers, found.parts, found.trials
    mean = pad.mean(f"Mean of all {a * b * r} measurements", measurements.reshape(-1), "#/grand_mean")
    at = {row.source: f"#/table/{place}/sum_of_squares" for place, row in enumerate(found.table)}
    squares = {row.source: row.sum_of_squares for row in found.table}
    if a > 1 and squares["appraiser"] > 0:
        _squares(
            pad,
            "Sum of squares of appraisers, from their means",
            found.appraiser_means,
            mean,
            b * r,
            "measurements of an appraiser",
            at["appraiser"],
        )
    if squares["part"] > 0:
        away = found.part_means - found.appraiser_means[:, None]
        _squares(
            pad,
            "Sum of squares of parts, from their means less those of their appraisers",
            away,
            0.0,
            r,
            "measurements of a part",
            at["part"],
        )
    if squares["repeatability"] > 0:
        inside = total_of((measurements - found.part_means[:, :, None]) ** 2)
        pad.work(
            "Sum of squares of repeatability",
            "within",
            at["repeatability"],
            within=(inside, "sum of the squared distances of measurements from the mean of their part"),
        )
    ms = _table(pad, found.table)
    _component(pad, "repeatability", ms["repeatability"], None, 1, "repeatability")
    _component(pad, "part", ms["part"], ms["repeatability"], r, "parts")
    if "appraiser" in ms:
        _component(pad, "appraiser", ms["appraiser"], ms["part"], b * r, "appraisers")
    _rest(pad, found, tolerance, process_sd)
    return pad.steps


# Bias -----------------------------------------------------------------------------------------------


def of_bias(levels: Sequence[ReferenceLevel], found: BiasStudy) -> tuple[Step, ...]:
    """The steps of the first reference value, and of the line."""
    pad = Pad()
    one, level = levels[0], found.levels[0]
    at = "#/levels/0"
    mean = pad.mean(
        f"Mean of the {level.size} measurements of the first reference, {level.reference:g}",
        one.values,
        f"{at}/mean",
    )
    bias = pad.work("Bias", "mean - reference", f"{at}/bias", mean=mean, reference=level.reference)
    if level.sd is not None and level.standard_error is not None:
        sd = pad.deviation("Standard deviation", one.values, mean, f"{at}/sd")
        error = pad.work(
            "Standard error of the bias", "sd / sqrt(n)", f"{at}/standard_error", sd=sd, n=level.size
        )
        tail = 0.5 * (1.0 + found.confidence)
        t: Value = (
            float(scipy.special.stdtrit(level.degrees_of_freedom, tail)),
            f"quantile at {tail:g} of Student's t with {level.degrees_of_freedom} degrees of freedom",
        )
        for sign, name in (("-", "lower"), ("+", "upper")):
            pad.work(
                f"{name.capitalize()} end of its interval",
                f"bias {sign} t * error",
                f"{at}/{name}",
                bias=bias,
                t=t,
                error=error,
            )
    line = found.linearity
    if line is not None:
        sizes = np.array([each.size for each in found.levels], dtype=np.float64)
        references = np.array([each.reference for each in found.levels])
        biases = np.array([each.bias for each in found.levels])
        centre = float(sizes @ references) / float(sizes.sum())
        middle = float(sizes @ biases) / float(sizes.sum())
        slope = pad.work(
            "Slope of the line of bias on reference, by least squares",
            "sum_xy / sum_xx",
            "#/linearity/slope/estimate",
            sum_xy=(
                float(sizes @ ((references - centre) * (biases - middle))),
                "sum over the measurements of (reference - mean) times (bias - mean)",
            ),
            sum_xx=(
                float(sizes @ (references - centre) ** 2),
                "sum over the measurements of (reference - mean)**2",
            ),
        )
        pad.work(
            "Bias of the line at reference 0",
            "mean_bias - slope * mean_reference",
            "#/linearity/intercept/estimate",
            mean_bias=middle,
            slope=slope,
            mean_reference=centre,
        )
    names, given = numbered("b", [each.bias for each in found.levels])
    if len(names) <= MOST_LISTED:
        weights = {f"n{i}": each.size for i, each in enumerate(found.levels, 1)}
        text = " + ".join(f"n{i} * {name}" for i, name in enumerate(names, 1))
        pad.work(
            "Mean bias over all measurements",
            f"({text}) / n",
            "#/mean_bias",
            **given,
            **weights,
            n=sum(each.size for each in found.levels),
        )
    return pad.steps


# Agreement ------------------------------------------------------------------------------------------


def of_agreement(ratings: Integers, found: AgreementStudy) -> tuple[Step, ...]:
    """The steps of the kappa over all ratings, of the first pair, and of the first share."""
    pad = Pad()
    _fleiss(pad, ratings.reshape(len(ratings), -1), found.overall)
    if found.pairs:
        pair = found.pairs[0]
        _cohen(pad, pair.cohen, f"{pair.first} and {pair.second}", "#/pairs/0/cohen")
    elif found.by_appraiser[0].against_reference is not None:
        one = found.by_appraiser[0]
        assert one.against_reference is not None
        _cohen(
            pad,
            one.against_reference,
            f"{one.appraiser} and the reference",
            "#/by_appraiser/0/against_reference",
        )
    first = found.by_appraiser[0]
    for name, share in (("repeated", first.repeated), ("matched", first.matched)):
        if share is not None and share.proportion is not None:
            what = (
                "given the same category in every trial" if name == "repeated" else "rated as the reference"
            )
            pad.work(
                f"Share of items {what} by {first.appraiser}",
                "count / opportunities",
                f"#/by_appraiser/0/{name}/proportion",
                count=share.count,
                opportunities=share.opportunities,
            )
    return pad.steps


def _fleiss(pad: Pad, ratings: Integers, found: FleissKappa) -> None:
    n, m = ratings.shape
    shares = [one.share for one in found.categories]
    names, given = numbered("p", shares)
    if len(names) <= MOST_LISTED:
        expected = pad.work(
            "Agreement that chance would give: the squared shares of the categories",
            " + ".join(f"{name}**2" for name in names),
            "#/overall/expected",
            **given,
        )
    else:
        expected = found.expected
    if found.observed is None:
        return
    counts = np.stack([(ratings == k).sum(axis=1) for k in range(len(shares))])
    observed = pad.work(
        "Share of pairs of ratings of an item that agree",
        "(sum_squares - n * m) / (n * m * (m - 1))",
        "#/overall/observed",
        sum_squares=(
            float((counts * counts).sum()),
            "sum over items and categories of the squared numbers of ratings",
        ),
        n=n,
        m=m,
    )
    if found.kappa is not None:
        pad.work(
            "Fleiss' kappa",
            "(observed - expected) / (1 - expected)",
            "#/overall/kappa",
            observed=observed,
            expected=expected,
        )


def _cohen(pad: Pad, found: CohenKappa, who: str, at: str) -> None:
    table = np.array([row.counts for row in found.table], dtype=np.float64)
    total = float(table.sum())
    names, given = numbered("a", np.diagonal(table).tolist())
    observed = pad.work(
        f"Share of ratings on which {who} agree",
        f"({' + '.join(names)}) / n",
        f"{at}/observed",
        **given,
        n=total,
    )
    rows, columns = table.sum(axis=1).tolist(), table.sum(axis=0).tolist()
    first, one = numbered("r", rows)
    second, other = numbered("c", columns)
    text = " + ".join(f"{a} * {b}" for a, b in zip(first, second, strict=True))
    expected = pad.work(
        "Agreement that their margins alone would give",
        f"({text}) / n**2",
        f"{at}/expected",
        **one,
        **other,
        n=total,
    )
    if found.kappa is not None:
        pad.work(
            "Cohen's kappa",
            "(observed - expected) / (1 - expected)",
            f"{at}/kappa",
            observed=observed,
            expected=expected,
        )
