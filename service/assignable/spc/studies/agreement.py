"""Agreement of appraisers who sort items into categories."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from itertools import combinations
from typing import Annotated

import numpy as np
import scipy

from ..cautions import Caution
from ..data import Booleans, Floats, Integers
from ..errors import Fault, UnusableData, UnusableParameter
from .variance_components import confidence_faults, noted

_MOST_FAULTS = 100


@dataclass(frozen=True, slots=True)
class AgreementShare:
    """A share with its exact interval [clopper-pearson-1934]; no numbers where there was no opportunity."""

    count: Annotated[int, "How many."]
    opportunities: Annotated[int, "Of how many."]
    proportion: Annotated[float | None, "Count over opportunities."]
    lower: Annotated[float | None, "Lower confidence bound."]
    upper: Annotated[float | None, "Upper confidence bound."]


@dataclass(frozen=True, slots=True, eq=False)
class RatingCounts:
    """A row of a cross table: how the second rated what the first put into one category."""

    category: Annotated[str, "The first one's category."]
    counts: Annotated[Integers, "By the second one's category, in the order of `categories`."]


@dataclass(frozen=True, slots=True, eq=False)
class CohenKappa:
    """Agreement of two columns of ratings beyond chance [cohen-1960].

    The standard error takes items as the sampling unit; with one trial it is that of
    [fleiss-cohen-everitt-1969]. The interval is kappa ± z standard errors inside [-1, 1].
    """

    table: Annotated[tuple[RatingCounts, ...], "The cross table, a row for each category of the first."]
    observed: Annotated[float, "Share of ratings that agree."]
    expected: Annotated[float, "The share that the margins alone would give."]
    kappa: Annotated[
        float | None,
        "(observed - expected) / (1 - expected); null where both used one and the same category only.",
    ]
    standard_error: Annotated[float | None, "Of kappa; null where kappa is."]
    lower: Annotated[
        float | None,
        "Lower confidence bound; null where the standard error is zero, as under perfect agreement, where the "
        "large-sample interval says nothing.",
    ]
    upper: Annotated[float | None, "Upper confidence bound; null as the lower one."]
    reason: Annotated[str | None, "Why there is no kappa; null where there is one."]


@dataclass(frozen=True, slots=True)
class AppraiserPair:
    """Agreement of two appraisers; trial k of one goes with trial k of the other."""

    first: Annotated[str, "One appraiser."]
    second: Annotated[str, "The other."]
    cohen: Annotated[CohenKappa, "Cohen's kappa of the two."]


@dataclass(frozen=True, slots=True)
class CategoryKappa:
    """Fleiss' kappa of one category against all others; null where it is used never or always."""

    category: Annotated[str, "The category."]
    share: Annotated[float, "Its share of all ratings."]
    kappa: Annotated[float | None, "Agreement on it beyond chance."]
    null_standard_error: Annotated[float | None, "Of kappa under no agreement beyond chance."]
    z: Annotated[float | None, "Kappa over that standard error."]
    p_value: Annotated[float | None, "Upper tail: agreement better than chance."]


@dataclass(frozen=True, slots=True)
class FleissKappa:
    """Agreement of many ratings an item beyond chance [fleiss-1971], tested after [fleiss-levin-paik-2003].

    Kappa and what follows from it are null, with the reason, where only one category was used or each item
    has one rating.
    """

    items: Annotated[int, "Number of items."]
    ratings_per_item: Annotated[int, "Ratings of each item."]
    observed: Annotated[float | None, "Share of pairs of ratings of an item that agree."]
    expected: Annotated[float, "The share that chance would give."]
    kappa: Annotated[float | None, "(observed - expected) / (1 - expected)."]
    null_standard_error: Annotated[float | None, "Of kappa under no agreement beyond chance."]
    z: Annotated[float | None, "Kappa over that standard error."]
    p_value: Annotated[float | None, "Upper tail: agreement better than chance."]
    categories: Annotated[tuple[CategoryKappa, ...], "Each category against all others."]
    reason: Annotated[str | None, "Why there is no kappa; null where there is one."]


@dataclass(frozen=True, slots=True)
class AppraiserAgreement:
    """One appraiser: agreement with themselves and with the reference.

    The intervals of misses and false alarms take ratings as independent.
    """

    appraiser: Annotated[str, "Who."]
    repeated: Annotated[
        AgreementShare | None, "Items given the same category in every trial; null with one trial."
    ]
    within: Annotated[FleissKappa | None, "Fleiss' kappa over the trials; null with one trial."]
    matched: Annotated[
        AgreementShare | None, "Items rated as the reference in every trial; null without a reference."
    ]
    against_reference: Annotated[
        CohenKappa | None, "Cohen's kappa of all ratings with the reference; null without one."
    ]
    misses: Annotated[
        AgreementShare | None,
        "Nonconforming items passed, of all ratings of nonconforming items; null unless a reference, two "
        "categories and `nonconforming` are given.",
    ]
    false_alarms: Annotated[
        AgreementShare | None,
        "Conforming items rejected, of all ratings of conforming items; null as misses.",
    ]


@dataclass(frozen=True, slots=True)
class AgreementStudy:
    """The analysis of an agreement study."""

    items: Annotated[int, "Number of items."]
    appraisers: Annotated[int, "Number of appraisers."]
    trials: Annotated[int, "Ratings of each item by each appraiser."]
    categories: Annotated[int, "Number of categories."]
    confidence: Annotated[float, "Of each interval by itself."]
    by_appraiser: Annotated[tuple[AppraiserAgreement, ...], "Each appraiser by themselves."]
    between: Annotated[
        AgreementShare | None,
        "Items that all appraisers gave the same category in all trials; null with one appraiser.",
    ]
    all_matched: Annotated[
        AgreementShare | None,
        "Items that all rated as the reference in all trials; null without a reference.",
    ]
    pairs: Annotated[tuple[AppraiserPair, ...], "Cohen's kappa of each two appraisers."]
    overall: Annotated[FleissKappa, "Fleiss' kappa over every rating of an item."]
    cautions: tuple[Caution, ...]


def agreement(
    ratings: Integers,
    *,
    categories: Sequence[str],
    appraisers: Sequence[str] = (),
    reference: Integers | None = None,
    nonconforming: int | None = None,
    confidence: float = 0.95,
) -> AgreementStudy:
    """Agreement of appraisers within themselves, with each other and with a reference.

    ratings: (items, appraisers, trials), places in ``categories``; reference: (items,) of such places.
    appraisers: their names; numbers from 1 unless given.
    nonconforming: with two categories, the place of the one that rejects an item; needed for misses and false alarms.

    Raises :class:`UnusableData` (fewer than two items, codes out of range, a reference of another length)
    and :class:`UnusableParameter`. Sources: [aiag-msa-2010] ch. III C, [fleiss-levin-paik-2003] ch. 18.
    """
    _check(ratings, len(categories), reference, nonconforming, confidence)
    n, o, r = ratings.shape
    who = tuple(appraisers) or tuple(str(j + 1) for j in range(o))
    notes: list[Caution] = []
    if np.unique(ratings).size == 1:
        notes.append(
            noted(
                "one-category",
                "Every rating is the same category, so agreement beyond chance cannot be judged; "
                "choose items of every category.",
            )
        )
    same = (ratings == ratings[:, :, :1]).all(axis=2)
    target = None if reference is None else np.broadcast_to(reference[:, None], (n, r))
    hit = None if reference is None else (ratings == reference[:, None, None]).all(axis=2)

    by_appraiser = []
    for j in range(o):
        misses = false_alarms = None
        if reference is not None and nonconforming is not None:
            rejected = ratings[:, j, :] == nonconforming
            bad = reference == nonconforming
            misses = _proportion(~rejected[bad], confidence)
            false_alarms = _proportion(rejected[~bad], confidence)
        by_appraiser.append(
            AppraiserAgreement(
                who[j],
                _proportion(same[:, j], confidence) if r > 1 else None,
                _fleiss(ratings[:, j, :], categories) if r > 1 else None,
                None if hit is None else _proportion(hit[:, j], confidence),
                None if target is None else _cohen(ratings[:, j, :], target, categories, confidence),
                misses,
                false_alarms,
            )
        )
    flat = ratings.reshape(n, o * r)
    return AgreementStudy(
        n,
        o,
        r,
        len(categories),
        confidence,
        tuple(by_appraiser),
        _proportion((flat == flat[:, :1]).all(axis=1), confidence) if o > 1 else None,
        None if hit is None else _proportion(hit.all(axis=1), confidence),
        tuple(
            AppraiserPair(who[i], who[j], _cohen(ratings[:, i, :], ratings[:, j, :], categories, confidence))
            for i, j in combinations(range(o), 2)
        ),
        _fleiss(flat, categories),
        tuple(notes),
    )


def _check(
    ratings: Integers,
    categories: int,
    reference: Integers | None,
    nonconforming: int | None,
    confidence: float,
) -> None:
    wrong: list[Fault] = []
    if categories < 2:
        wrong.append(Fault("out-of-range", "There must be at least two categories.", ("categories",)))
    wrong += confidence_faults(confidence)
    if nonconforming is not None:
        if reference is None or categories != 2:
            wrong.append(
                Fault(
                    "does-not-apply",
                    "Misses and false alarms need two categories and a reference; leave this option out.",
                    ("nonconforming",),
                )
            )
        elif nonconforming not in (0, 1):
            detail = "This must be one of the two category codes, 0 or 1."
            wrong.append(Fault("out-of-range", detail, ("nonconforming",)))
    if wrong:
        raise UnusableParameter(*wrong)
    if ratings.ndim != 3 or ratings.size == 0 or ratings.shape[0] < 2:
        raise UnusableData.of(
            "too-few-items", "An agreement study needs at least two items.", "data", "ratings"
        )
    n, o, r = ratings.shape
    if reference is not None and reference.shape != (n,):
        raise UnusableData.of(
            "unequal-lengths",
            f"The reference has {reference.size} values for {n} items; each item needs one.",
            "reference",
            "ratings",
        )
    if reference is None and o * r < 2:
        raise UnusableData.of(
            "nothing-repeated",
            "One rating an item and no reference leave nothing to agree with.",
            "data",
            "ratings",
        )
    faults = [
        Fault(
            "unknown-category",
            f"Category {int(ratings[i, j, k])} is not one of 0 to {categories - 1}.",
            ("data", "ratings", i, j, k),
        )
        for i, j, k in np.argwhere((ratings < 0) | (ratings >= categories))[:_MOST_FAULTS].tolist()
    ]
    if reference is not None:
        faults += [
            Fault(
                "unknown-category",
                f"Category {int(reference[i])} is not one of 0 to {categories - 1}.",
                ("reference", "ratings", i),
            )
            for (i,) in np.argwhere((reference < 0) | (reference >= categories))[:_MOST_FAULTS].tolist()
        ]
    if faults:
        raise UnusableData(*faults[:_MOST_FAULTS])


def _proportion(outcomes: Booleans, confidence: float) -> AgreementShare:
    x, n = int(outcomes.sum()), outcomes.size
    if n == 0:
        return AgreementShare(0, 0, None, None, None)
    tail = (1 - confidence) / 2
    lower = float(scipy.special.betaincinv(x, n - x + 1, tail)) if x > 0 else 0.0
    upper = float(scipy.special.betainccinv(x + 1, n - x, tail)) if x < n else 1.0
    return AgreementShare(x, n, x / n, lower, upper)


def _cohen(first: Integers, second: Integers, names: Sequence[str], confidence: float) -> CohenKappa:
    """Kappa of ratings (items, trials) paired one to one."""
    items, trials = first.shape
    categories = len(names)
    counted = np.bincount((first * categories + second).ravel(), minlength=categories**2)
    counted = counted.reshape(categories, categories)
    table = tuple(map(RatingCounts, names, counted))
    total = items * trials
    rows, columns = counted.sum(axis=1), counted.sum(axis=0)
    agreeing, chance = int(np.trace(counted)), int(rows @ columns)
    observed, expected = agreeing / total, chance / total**2
    if chance == total**2:
        return CohenKappa(
            table, observed, expected, None, None, None, None,
            "Both used one and the same category throughout, so agreement beyond chance is not defined.",
        )  # fmt: skip
    beyond = 1 - expected
    kappa = (observed - expected) / beyond
    if agreeing == total:
        return CohenKappa(table, observed, expected, 1.0, 0.0, None, None, None)
    # The delta method's share of each pair; summed by item, because trials of one item go together.
    margins = (rows[second] + columns[first]) / total
    influence = ((first == second) * beyond - margins * (1 - observed)) / beyond**2
    by_item = (influence - influence.mean()).sum(axis=1)
    error = float(np.sqrt(by_item @ by_item)) / total
    if error < 1e-9:
        return CohenKappa(table, observed, expected, kappa, 0.0, None, None, None)
    reach = float(scipy.special.ndtri((1 + confidence) / 2)) * error
    return CohenKappa(
        table, observed, expected, kappa, error, max(kappa - reach, -1.0), min(kappa + reach, 1.0), None
    )


def _fleiss(ratings: Integers, names: Sequence[str]) -> FleissKappa:
    """Fleiss' kappa of ratings (items, ratings per item)."""
    n, m = ratings.shape
    categories = len(names)
    place = ratings + categories * np.arange(n)[:, None]
    counts = np.bincount(place.ravel(), minlength=n * categories).reshape(n, categories)
    totals = counts.sum(axis=0)
    share: Floats = totals / (n * m)
    expected = float(share @ share)
    each = []
    for j in range(categories):
        p, q = float(share[j]), 1 - float(share[j])
        if m < 2 or totals[j] in (0, n * m):
            each.append(CategoryKappa(names[j], p, None, None, None, None))
            continue
        split = int(counts[:, j] @ (m - counts[:, j]))
        kappa = 1 - split / (n * m * (m - 1) * p * q)
        error = math.sqrt(2 / (n * m * (m - 1)))
        each.append(CategoryKappa(names[j], p, kappa, error, kappa / error, _upper_tail(kappa / error)))
    if m < 2:
        reason = "Each item has one rating, so there is nothing to agree with."
        return FleissKappa(n, m, None, expected, None, None, None, None, tuple(each), reason)
    observed = (int((counts * counts).sum()) - n * m) / (n * m * (m - 1))
    if int(totals.max()) == n * m:
        reason = "Only one category was used, so agreement beyond chance is not defined."
        return FleissKappa(n, m, observed, expected, None, None, None, None, tuple(each), reason)
    pq = share * (1 - share)
    beyond = float(pq.sum())
    kappa = (observed - expected) / beyond
    spread = beyond**2 - float(pq @ (1 - 2 * share))
    error = math.sqrt(2 * spread / (n * m * (m - 1))) / beyond
    return FleissKappa(
        n, m, observed, expected, kappa, error, kappa / error, _upper_tail(kappa / error), tuple(each), None
    )


def _upper_tail(z: float) -> float:
    return float(scipy.special.ndtr(-z))
