"""Agreement of appraisers who sort items into categories."""

from __future__ import annotations

import math
from dataclasses import dataclass
from itertools import combinations

import numpy as np
import scipy

from ..data import Booleans, Floats, Integers
from ..errors import Fault, UnusableData, UnusableParameter
from .variance_components import StudyNote, confidence_faults

_MOST_FAULTS = 100


@dataclass(frozen=True, slots=True)
class Proportion:
    """A share with its exact interval [clopper-pearson-1934].

    count of opportunities; proportion, lower and upper are ``None`` when there was no opportunity.
    """

    count: int
    opportunities: int
    proportion: float | None
    lower: float | None
    upper: float | None


@dataclass(frozen=True, slots=True, eq=False)
class CohenKappa:
    """Agreement of two columns of ratings beyond chance [cohen-1960].

    table: (categories, categories) counts, the first one's category by row.
    observed, expected: share agreeing, and what the margins alone would give.
    kappa: ``None``, with the reason, when both used one and the same category only.
    standard_error: with items as the sampling unit; with one trial that of [fleiss-cohen-everitt-1969].
    lower, upper: kappa ± z standard errors inside [-1, 1]; ``None`` when the standard error is zero, as
        under perfect agreement, where the large-sample interval says nothing.
    """

    table: Integers
    observed: float
    expected: float
    kappa: float | None
    standard_error: float | None
    lower: float | None
    upper: float | None
    reason: str | None


@dataclass(frozen=True, slots=True)
class AppraiserPair:
    """Cohen's kappa of two appraisers, by their indices; trial k of one goes with trial k of the other."""

    first: int
    second: int
    cohen: CohenKappa


@dataclass(frozen=True, slots=True)
class CategoryKappa:
    """Fleiss' kappa of one category against all others; ``None`` where it is used never or always."""

    category: int
    share: float
    kappa: float | None
    null_standard_error: float | None
    z: float | None
    p_value: float | None


@dataclass(frozen=True, slots=True)
class FleissKappa:
    """Agreement of many ratings an item beyond chance [fleiss-1971].

    null_standard_error: under no agreement beyond chance; z: kappa over it; p_value: upper tail, for
        agreement better than chance [fleiss-levin-paik-2003].
    kappa and what follows: ``None``, with the reason, when only one category was used or each item has
        one rating.
    """

    items: int
    ratings_per_item: int
    observed: float | None
    expected: float
    kappa: float | None
    null_standard_error: float | None
    z: float | None
    p_value: float | None
    categories: tuple[CategoryKappa, ...]
    reason: str | None


@dataclass(frozen=True, slots=True)
class AppraiserAgreement:
    """One appraiser.

    repeated: items given the same category in every trial; within: Fleiss' kappa over the trials. Both
        ``None`` with one trial.
    matched: items rated as the reference in every trial; against_reference: kappa of all ratings with
        the reference. Both ``None`` without reference.
    misses: nonconforming items passed, of all ratings of nonconforming items; false_alarms: conforming
        items rejected. ``None`` unless reference, two categories and ``nonconforming`` are given. Their
        intervals take ratings as independent.
    """

    appraiser: int
    repeated: Proportion | None
    within: FleissKappa | None
    matched: Proportion | None
    against_reference: CohenKappa | None
    misses: Proportion | None
    false_alarms: Proportion | None


@dataclass(frozen=True, slots=True)
class AgreementStudy:
    """The analysis of an agreement study.

    between: items that all appraisers gave the same category in all trials (``None`` with one appraiser);
    all_matched: items that all rated as the reference (``None`` without reference).
    overall: Fleiss' kappa over every rating of an item; pairs: Cohen's kappa of each two appraisers.
    """

    items: int
    appraisers: int
    trials: int
    categories: int
    confidence: float
    by_appraiser: tuple[AppraiserAgreement, ...]
    between: Proportion | None
    all_matched: Proportion | None
    pairs: tuple[AppraiserPair, ...]
    overall: FleissKappa
    notes: tuple[StudyNote, ...]


def agreement(
    ratings: Integers,
    *,
    categories: int,
    reference: Integers | None = None,
    nonconforming: int | None = None,
    confidence: float = 0.95,
) -> AgreementStudy:
    """Agreement of appraisers within themselves, with each other and with a reference.

    ratings: (items, appraisers, trials), codes 0 ... categories - 1; reference: (items,) of such codes.
    nonconforming: with two categories, the code that rejects an item; needed for misses and false alarms.

    Raises :class:`UnusableData` (fewer than two items, codes out of range, a reference of another length)
    and :class:`UnusableParameter`. Sources: [aiag-msa-2010] ch. III C, [fleiss-levin-paik-2003] ch. 18.
    """
    _check(ratings, categories, reference, nonconforming, confidence)
    n, o, r = ratings.shape
    notes: list[StudyNote] = []
    if np.unique(ratings).size == 1:
        notes.append(
            StudyNote(
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
                j,
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
        categories,
        confidence,
        tuple(by_appraiser),
        _proportion((flat == flat[:, :1]).all(axis=1), confidence) if o > 1 else None,
        None if hit is None else _proportion(hit.all(axis=1), confidence),
        tuple(
            AppraiserPair(i, j, _cohen(ratings[:, i, :], ratings[:, j, :], categories, confidence))
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
            "data",
            "reference",
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
                ("data", "reference", i),
            )
            for (i,) in np.argwhere((reference < 0) | (reference >= categories))[:_MOST_FAULTS].tolist()
        ]
    if faults:
        raise UnusableData(*faults[:_MOST_FAULTS])


def _proportion(outcomes: Booleans, confidence: float) -> Proportion:
    x, n = int(outcomes.sum()), outcomes.size
    if n == 0:
        return Proportion(0, 0, None, None, None)
    tail = (1 - confidence) / 2
    lower = float(scipy.special.betaincinv(x, n - x + 1, tail)) if x > 0 else 0.0
    upper = float(scipy.special.betainccinv(x + 1, n - x, tail)) if x < n else 1.0
    return Proportion(x, n, x / n, lower, upper)


def _cohen(first: Integers, second: Integers, categories: int, confidence: float) -> CohenKappa:
    """Kappa of ratings (items, trials) paired one to one."""
    items, trials = first.shape
    table = np.bincount((first * categories + second).ravel(), minlength=categories**2)
    table = table.reshape(categories, categories)
    total = items * trials
    rows, columns = table.sum(axis=1), table.sum(axis=0)
    agreeing, chance = int(np.trace(table)), int(rows @ columns)
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


def _fleiss(ratings: Integers, categories: int) -> FleissKappa:
    """Fleiss' kappa of ratings (items, ratings per item)."""
    n, m = ratings.shape
    place = ratings + categories * np.arange(n)[:, None]
    counts = np.bincount(place.ravel(), minlength=n * categories).reshape(n, categories)
    totals = counts.sum(axis=0)
    share: Floats = totals / (n * m)
    expected = float(share @ share)
    each = []
    for j in range(categories):
        p, q = float(share[j]), 1 - float(share[j])
        if m < 2 or totals[j] in (0, n * m):
            each.append(CategoryKappa(j, p, None, None, None, None))
            continue
        split = int(counts[:, j] @ (m - counts[:, j]))
        kappa = 1 - split / (n * m * (m - 1) * p * q)
        error = math.sqrt(2 / (n * m * (m - 1)))
        each.append(CategoryKappa(j, p, kappa, error, kappa / error, _upper_tail(kappa / error)))
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
