"""Agreement studies against published tables, formulas written out again, and simulation."""

from __future__ import annotations

import math

import numpy as np
import pytest
import scipy

from assignable.spc.errors import UnusableData, UnusableParameter
from assignable.spc.studies.agreement import CohenKappa, agreement


def _columns(table: list[list[int]]) -> np.ndarray:
    """Two columns of ratings with a given cross table: (items, 2)."""
    return np.array([(i, j) for i, row in enumerate(table) for j, n in enumerate(row) for _ in range(n)])


def _names(count: int) -> tuple[str, ...]:
    return tuple("abcde"[:count])


def _pair(table: list[list[int]]) -> CohenKappa:
    ratings = _columns(table)[:, :, None]
    return agreement(ratings, categories=_names(len(table))).pairs[0].cohen


# AIAG Measurement Systems Analysis, 4th ed. (2010), ch. III C: cross tables of three appraisers (0 rejects, 1
# accepts) with each other and the reference, 50 parts by three trials. From memory, recomputed.
_BETWEEN = {"A*B": [[44, 6], [3, 97]], "B*C": [[42, 5], [9, 94]], "A*C": [[43, 7], [8, 92]]}
_REFERENCE = {"A": [[45, 5], [3, 97]], "B": [[45, 2], [3, 100]], "C": [[42, 9], [6, 93]]}


class TestAiag:
    @pytest.mark.parametrize(("pair", "kappa"), [("A*B", 0.86), ("B*C", 0.79), ("A*C", 0.78)])
    def test_pairs(self, pair: str, kappa: float) -> None:
        found = _pair(_BETWEEN[pair])
        assert [row.counts.tolist() for row in found.table] == _BETWEEN[pair]
        assert found.kappa == pytest.approx(kappa, abs=5e-3)

    @pytest.mark.parametrize(
        ("appraiser", "kappa", "misses", "false_alarms"),
        [("A", 0.88, 0.063, 0.049), ("B", 0.92, 0.063, 0.020), ("C", 0.77, 0.125, 0.088)],
    )
    def test_against_reference(
        self, appraiser: str, kappa: float, misses: float, false_alarms: float
    ) -> None:
        columns = _columns(_REFERENCE[appraiser])
        study = agreement(
            columns[:, :1, None], reference=columns[:, 1], categories=_names(2), nonconforming=0
        )
        (found,) = study.by_appraiser
        assert found.against_reference is not None
        assert found.against_reference.kappa == pytest.approx(kappa, abs=5e-3)
        assert found.misses is not None
        assert found.false_alarms is not None
        assert found.misses.proportion == pytest.approx(misses, abs=6e-4)
        assert found.false_alarms.proportion == pytest.approx(false_alarms, abs=6e-4)
        assert found.misses.opportunities == 48
        assert found.false_alarms.opportunities == 102


def test_cohen_with_one_trial_is_the_published_standard_error() -> None:
    # Fleiss, Cohen & Everitt (1969), written out term by term.
    table = [[44, 6, 2], [3, 57, 9], [5, 1, 23]]
    found = _pair(table)
    p = np.array(table) / np.sum(table)
    rows, columns = p.sum(axis=1), p.sum(axis=0)
    observed, expected = np.trace(p), rows @ columns
    bracket = sum(p[i, i] * ((1 - expected) - (columns[i] + rows[i]) * (1 - observed)) ** 2 for i in range(3))
    bracket += (1 - observed) ** 2 * sum(
        p[i, j] * (columns[i] + rows[j]) ** 2 for i in range(3) for j in range(3) if i != j
    )
    bracket -= (observed * expected - 2 * expected + observed) ** 2
    error = math.sqrt(bracket / (150 * (1 - expected) ** 4))
    assert found.kappa == pytest.approx((observed - expected) / (1 - expected), rel=1e-12)
    assert found.standard_error == pytest.approx(error, rel=1e-12)
    assert found.lower == pytest.approx(found.kappa - 1.959963985 * error, rel=1e-8)


@pytest.mark.parametrize("trials", [1, 3])
def test_kappa_interval_covers(trials: int) -> None:
    """With three trials of the same items too, where independence would make the interval too short."""
    rng = np.random.default_rng(31)
    # Each item has a clear or an unclear nature; given it, all ratings are independent.
    rates = np.array([0.03, 0.25, 0.75, 0.97])
    both = (rates**2 + (1 - rates) ** 2).mean()
    expected = rates.mean() ** 2 + (1 - rates.mean()) ** 2
    truth = (both - expected) / (1 - expected)
    runs, hits, errors, kappas = 800, 0, [], []
    for _ in range(runs):
        nature = rng.choice(rates, (100, 1, 1))
        ratings = (rng.random((100, 2, trials)) < nature).astype(np.int64)
        found = agreement(ratings, categories=_names(2)).pairs[0].cohen
        assert found.lower is not None
        assert found.upper is not None
        hits += found.lower <= truth <= found.upper
        errors.append(found.standard_error)
        kappas.append(found.kappa)
    assert 0.92 < hits / runs < 0.975
    assert np.mean(np.array(errors)) == pytest.approx(float(np.std(kappas)), rel=0.1)


# Fleiss, Levin & Paik (2003), ch. 18: five ratings of each of ten subjects. From memory, recomputed.
_FIVE_RATINGS = [
    (1, 4, 0), (2, 0, 3), (0, 0, 5), (4, 0, 1), (3, 0, 2),
    (1, 4, 0), (5, 0, 0), (0, 4, 1), (1, 0, 4), (3, 0, 2),
]  # fmt: skip

# A table often used to explain Fleiss (1971): fourteen raters, ten subjects, five categories; kappa 0.210,
# observed 0.378, expected 0.213. From memory, recomputed.
_FOURTEEN_RATERS = [
    (0, 0, 0, 0, 14), (0, 2, 6, 4, 2), (0, 0, 3, 5, 6), (0, 3, 9, 2, 0), (2, 2, 8, 1, 1),
    (7, 7, 0, 0, 0), (3, 2, 6, 3, 0), (2, 5, 3, 2, 2), (6, 5, 2, 1, 0), (0, 2, 2, 3, 7),
]  # fmt: skip


def _ratings(counts: list[tuple[int, ...]]) -> np.ndarray:
    return np.array([np.repeat(np.arange(len(row)), row) for row in counts])[:, :, None]


def test_fleiss_five_ratings() -> None:
    found = agreement(_ratings(_FIVE_RATINGS), categories=_names(3)).overall
    assert found.kappa == pytest.approx(0.42, abs=5e-3)
    assert found.null_standard_error == pytest.approx(0.072, abs=5e-4)
    assert found.z == pytest.approx(5.8, abs=0.05)
    for category, kappa in zip(found.categories, (0.29, 0.67, 0.35), strict=True):
        assert category.kappa == pytest.approx(kappa, abs=5e-3)
        assert category.null_standard_error == pytest.approx(0.1)
    # The overall kappa is the p·q-weighted mean of the categories' own.
    weights = [c.share * (1 - c.share) for c in found.categories]
    total = sum(w * (c.kappa or 0) for w, c in zip(weights, found.categories, strict=True))
    assert found.kappa == pytest.approx(total / sum(weights))


def test_fleiss_fourteen_raters() -> None:
    found = agreement(_ratings(_FOURTEEN_RATERS), categories=_names(5)).overall
    assert found.kappa == pytest.approx(0.210, abs=5e-4)
    assert found.observed == pytest.approx(0.378, abs=5e-4)
    assert found.expected == pytest.approx(0.213, abs=5e-4)


def test_fleiss_z_is_standard_under_chance() -> None:
    rng = np.random.default_rng(9)
    z = []
    for _ in range(1500):
        ratings = rng.choice(3, size=(60, 4, 1), p=[0.5, 0.3, 0.2])
        value = agreement(ratings, categories=_names(3)).overall.z
        assert value is not None
        z.append(value)
    # The mean of kappa under chance is about -1/(N m - 1), a sixteenth of a standard error here.
    assert np.mean(z) == pytest.approx(0, abs=4 / math.sqrt(1500) + 0.08)
    assert np.std(z) == pytest.approx(1, abs=4 / math.sqrt(3000))


class TestCounts:
    # Cartridges sorted cracked (0) or sound (1): five, by two inspectors, twice.
    ratings = np.array(
        [[[0, 0], [0, 0]], [[0, 1], [0, 0]], [[1, 1], [1, 1]], [[1, 1], [0, 1]], [[1, 1], [1, 1]]]
    )
    reference = np.array([0, 0, 1, 1, 0])
    study = agreement(ratings, reference=reference, categories=_names(2), nonconforming=0)

    def test_agreement_within_between_and_with_the_reference(self) -> None:
        first, second = self.study.by_appraiser
        assert first.repeated is not None
        assert first.matched is not None
        assert second.repeated is not None
        assert second.matched is not None
        assert (first.repeated.count, second.repeated.count) == (4, 4)
        assert (first.matched.count, second.matched.count) == (3, 3)
        assert self.study.between is not None
        assert self.study.all_matched is not None
        assert self.study.between.count == 3
        assert self.study.all_matched.count == 2

    def test_misses_and_false_alarms(self) -> None:
        first, second = self.study.by_appraiser
        assert first.misses is not None
        assert first.false_alarms is not None
        assert second.misses is not None
        assert second.false_alarms is not None
        assert (first.misses.count, first.misses.opportunities) == (3, 6)
        assert (first.false_alarms.count, first.false_alarms.opportunities) == (0, 4)
        assert (second.misses.count, second.false_alarms.count) == (2, 1)

    def test_exact_interval(self) -> None:
        # Clopper & Pearson (1934): each bound leaves half of 5 % beyond the count seen.
        assert self.study.by_appraiser[0].repeated is not None
        found = self.study.by_appraiser[0].repeated
        assert scipy.special.bdtrc(3, 5, found.lower) == pytest.approx(0.025, rel=1e-9)
        assert scipy.special.bdtr(4, 5, found.upper) == pytest.approx(0.025, rel=1e-9)
        none = self.study.by_appraiser[0].false_alarms
        assert none is not None
        assert none.lower == 0
        assert none.upper == pytest.approx(1 - 0.025 ** (1 / 4))


class TestDegenerate:
    def test_one_category_gives_a_reason(self) -> None:
        study = agreement(np.ones((6, 2, 2), dtype=np.int64), categories=_names(2))
        assert study.overall.kappa is None
        assert study.overall.z is None
        assert study.overall.reason is not None
        assert study.pairs[0].cohen.kappa is None
        assert study.pairs[0].cohen.reason is not None
        assert [note.code for note in study.cautions] == ["one-category"]
        assert study.between is not None
        assert study.between.proportion == 1

    def test_each_of_two_sticking_to_another_category(self) -> None:
        ratings = np.broadcast_to(np.array([0, 1])[None, :, None], (6, 2, 1))
        found = agreement(ratings, categories=_names(2)).pairs[0].cohen
        assert found.kappa == 0
        assert found.lower is None

    def test_perfect_agreement_has_no_large_sample_interval(self) -> None:
        ratings = np.broadcast_to(np.array([0, 1, 1, 0, 2])[:, None, None], (5, 3, 2))
        study = agreement(ratings, categories=_names(3))
        assert study.overall.kappa == pytest.approx(1)
        assert all(pair.cohen.kappa == 1 and pair.cohen.lower is None for pair in study.pairs)
        assert len(study.pairs) == 3

    def test_one_trial_has_nothing_within(self) -> None:
        study = agreement(np.array([[[0], [1]], [[1], [1]], [[0], [0]]]), categories=_names(2))
        assert study.by_appraiser[0].repeated is None
        assert study.by_appraiser[0].within is None

    def test_no_nonconforming_item(self) -> None:
        ratings = np.array([[[0]], [[1]], [[1]]])
        study = agreement(
            ratings, reference=np.ones(3, dtype=np.int64), categories=_names(2), nonconforming=0
        )
        assert study.by_appraiser[0].misses is not None
        assert study.by_appraiser[0].misses.proportion is None
        assert study.overall.kappa is None

    def test_unknown_categories_are_each_named(self) -> None:
        ratings = np.array([[[0, 1], [2, 0]], [[0, 0], [-1, 1]]])
        with pytest.raises(UnusableData) as caught:
            agreement(ratings, reference=np.array([0, 5]), categories=_names(2))
        assert [fault.where for fault in caught.value.faults] == [
            ("data", "ratings", 0, 1, 0),
            ("data", "ratings", 1, 1, 0),
            ("reference", "ratings", 1),
        ]

    def test_unusable(self) -> None:
        with pytest.raises(UnusableData):
            agreement(np.zeros((1, 2, 2), dtype=np.int64), categories=_names(2))
        with pytest.raises(UnusableData):
            agreement(np.zeros((4, 1, 1), dtype=np.int64), categories=_names(2))
        with pytest.raises(UnusableData):
            agreement(
                np.zeros((4, 1, 2), dtype=np.int64),
                reference=np.zeros(3, dtype=np.int64),
                categories=_names(2),
            )
        with pytest.raises(UnusableParameter) as caught:
            agreement(
                np.zeros((4, 1, 2), dtype=np.int64), categories=_names(1), nonconforming=0, confidence=2.0
            )
        assert [fault.where for fault in caught.value.faults] == [
            ("categories",),
            ("confidence",),
            ("nonconforming",),
        ]
