"""Which chart is recommended: every branch, by description and by sample."""

from __future__ import annotations

import numpy as np
import pytest

from assignable.spc.charts import CHARTS
from assignable.spc.data import Counts, Intervals, Subgroups, Vectors
from assignable.spc.errors import UnusableData, UnusableParameter
from assignable.spc.recommendation import Description, Recommendation, of_sample, recommend

M = "measurements"
UNITS, EVENTS = "nonconforming-units", "nonconformities"

# What is described, the chart expected, and one that must be among the alternatives.
BRANCHES = [
    (Description(M), "individuals", "ewma"),
    (Description(M, not_normal=True), "individuals", "ewma"),
    (Description(M, subgroup_size=4), "xbar-r", "xbar-s"),
    (Description(M, subgroup_size=5, sizes_vary=True), "xbar-s", "xbar-r"),
    (Description(M, subgroup_size=12), "xbar-s", "ewma"),
    (Description(M, small_shifts=True), "ewma", "cusum"),
    (Description(M, subgroup_size=5, small_shifts=True), "ewma", "xbar-r"),
    (Description(M, subgroup_size=5, differs_between_subgroups=True), "between-within", "individuals"),
    (Description(M, short_runs=True), "short-run", "individuals"),
    (Description(M, subgroup_size=3, short_runs=True), "short-run", "xbar-r"),
    (Description(M, depends_on_neighbours=True), "residual", "ewma"),
    (Description(M, subgroup_size=5, depends_on_neighbours=True), "residual", "xbar-r"),
    (Description(M, drifts=True), "trend", "residual"),
    (Description(M, subgroup_size=5, drifts=True, depends_on_neighbours=True), "trend", "acceptance"),
    (Description(M, subgroup_size=5, within_specification=True), "acceptance", "xbar-r"),
    (Description(M, variables=3), "t-squared", "mewma"),
    (Description(M, variables=3, subgroup_size=4), "t-squared", "xbar-r"),
    (Description(M, variables=2, small_shifts=True), "mewma", "t-squared"),
    (Description(M, variables=2, depends_on_neighbours=True), "t-squared", "individuals"),
    (Description(UNITS), "np", "p"),
    (Description(UNITS, sizes_vary=True), "p", "p-prime"),
    (Description(UNITS, sizes_vary=True, events_per_sample=3.0), "p", "p-prime"),
    (Description(UNITS, events_per_sample=0.2), "g", "t"),
    (Description(UNITS, dispersion="more"), "p-prime", "np"),
    (Description(UNITS, sizes_vary=True, dispersion="less"), "p-prime", "p"),
    (Description(EVENTS), "c", "u"),
    (Description(EVENTS, sizes_vary=True), "u", "u-prime"),
    (Description(EVENTS, events_per_sample=0.9), "t", "g"),
    (Description(EVENTS, dispersion="more", sizes_vary=True), "u-prime", "u"),
    (Description(EVENTS, dispersion="less", small_shifts=True), "u-prime", "c"),
    (Description(EVENTS, depends_on_neighbours=True), "c", "u-prime"),
    (Description("opportunities-between-events"), "g", "t"),
    (Description("opportunities-between-events", depends_on_neighbours=True), "g", "p"),
    (Description("time-between-events"), "t", "g"),
    (Description("time-between-events", small_shifts=True, depends_on_neighbours=True), "t", "u"),
]


def _sound(told: Recommendation) -> None:
    assert told.chart in CHARTS
    assert told.title == CHARTS[told.chart].title
    assert all(other.chart in CHARTS and other.chart != told.chart for other in told.alternatives)
    assert len({other.chart for other in told.alternatives}) == len(told.alternatives)
    assert told.alternatives
    # Two sentences, each with its full stop.
    assert told.why.count(". ") == 1
    assert told.why.endswith(".")
    assert all(other.when and not other.when.endswith(".") for other in told.alternatives)
    assert all(sentence.endswith((".", ")")) for sentence in told.beware)


@pytest.mark.parametrize(("about", "chart", "alternative"), BRANCHES)
def test_every_branch(about: Description, chart: str, alternative: str) -> None:
    told = recommend(about)
    _sound(told)
    if chart in CHARTS:
        assert told.chart == chart
    if alternative in CHARTS and told.chart == chart:
        assert alternative in {other.chart for other in told.alternatives}


def test_every_chart_is_recommended_or_named_somewhere() -> None:
    told = [recommend(about) for about, _, _ in BRANCHES]
    named = {one.chart for one in told} | {other.chart for one in told for other in one.alternatives}
    assert named == set(CHARTS)


@pytest.mark.parametrize(
    ("about", "field"),
    [
        (Description(UNITS, variables=2), "variables"),
        (Description(EVENTS, subgroup_size=4), "subgroup_size"),
        (Description(UNITS, drifts=True), "drifts"),
        (Description(EVENTS, short_runs=True), "short_runs"),
        (Description(UNITS, within_specification=True), "within_specification"),
        (Description("time-between-events", not_normal=True), "not_normal"),
        (Description(M, events_per_sample=3.0), "events_per_sample"),
        (Description("time-between-events", dispersion="more"), "dispersion"),
        (Description(M, differs_between_subgroups=True), "differs_between_subgroups"),
    ],
)
def test_a_description_that_contradicts_itself(about: Description, field: str) -> None:
    with pytest.raises(UnusableParameter) as error:
        recommend(about)
    assert error.value.faults[0].where == ("description", field)


# ---------------------------------------------------------------------------------------------------
# Samples


def _ar(rng: np.random.Generator, m: int, phi: float) -> np.ndarray:
    x = rng.standard_normal(m)
    for at in range(1, m):
        x[at] += phi * x[at - 1]
    return x


def _samples() -> list[tuple[str, Subgroups | Vectors | Counts | Intervals, Description, str]]:
    rng = np.random.default_rng(14)
    steady = rng.normal(10.0, 1.0, (30, 5))
    ragged = steady.copy()
    ragged[::3, 4] = np.nan
    step = rng.normal(10.0, 1.0, 60)
    step[30:] += 4.0
    loads = steady + rng.normal(0.0, 2.0, 30)[:, None]
    drift = rng.normal(0.0, 1.0, 60) + 0.3 * np.arange(60)
    few, many = Description(M), Description(M, small_shifts=True)
    units, events = Description(UNITS), Description(EVENTS)
    rate = rng.gamma(5.0, 4.0, 40)
    return [
        ("single values", Subgroups(rng.normal(0, 1, (40, 1))), few, "individuals"),
        ("single values, small shifts", Subgroups(rng.normal(0, 1, (40, 1))), many, "ewma"),
        ("skewed values", Subgroups(rng.lognormal(0.0, 1.0, (80, 1))), few, "individuals"),
        ("a step is no dependence", Subgroups(step[:, None]), few, "individuals"),
        ("dependent", Subgroups(_ar(rng, 100, 0.7)[:, None]), few, "residual"),
        ("drifting", Subgroups(drift[:, None]), few, "trend"),
        ("subgroups", Subgroups(steady), few, "xbar-r"),
        ("ragged subgroups", Subgroups(ragged), few, "xbar-s"),
        ("large subgroups", Subgroups(rng.normal(0, 1, (30, 12))), few, "xbar-s"),
        ("loads", Subgroups(loads), few, "between-within"),
        ("two columns", Vectors(rng.normal(0, 1, (50, 2)), ("a", "b")), few, "t-squared"),
        ("two columns, small shifts", Vectors(rng.normal(0, 1, (50, 2)), ("a", "b")), many, "mewma"),
        ("units", Counts(rng.binomial(100, 0.1, 40) * 1.0, np.full(40, 100.0)), units, "np"),
        (
            "units, sizes vary",
            Counts(rng.binomial(100, 0.1, 40) * 1.0, 100.0 + np.arange(40) % 7),
            units,
            "p",
        ),
        ("rare units", Counts(rng.binomial(50, 0.005, 60) * 1.0, np.full(60, 50.0)), units, "g"),
        (
            "dispersed units",
            Counts(rng.binomial(2000, rng.beta(10, 90, 40)) * 1.0, np.full(40, 2000.0)),
            units,
            "p-prime",
        ),
        ("events", Counts(rng.poisson(9.0, 40) * 1.0), events, "c"),
        ("events over areas", Counts(rng.poisson(9.0, 40) * 1.0, 1.0 + np.arange(40) % 2), events, "u-prime"),
        ("rare events", Counts(rng.poisson(0.3, 60) * 1.0), events, "t"),
        ("dispersed events", Counts(rng.poisson(rate) * 1.0), events, "u-prime"),
        ("even events", Counts(np.tile([19.0, 20.0, 21.0], 12)), events, "u-prime"),
        (
            "opportunities",
            Intervals(rng.geometric(0.01, 40) * 1.0),
            Description("opportunities-between-events"),
            "g",
        ),
        ("times", Intervals(rng.exponential(30.0, 40)), Description("time-between-events"), "t"),
    ]


@pytest.mark.parametrize(("sample", "about", "chart"), [pytest.param(*s[1:], id=s[0]) for s in _samples()])
def test_a_sample_speaks_for_itself(
    sample: Subgroups | Vectors | Counts | Intervals, about: Description, chart: str
) -> None:
    told, found, evidence = of_sample(sample, about)
    _sound(told)
    if chart in CHARTS:
        assert told.chart == chart
    assert found.kind == about.kind
    assert evidence.points > 0


def test_what_a_sample_shows_is_told() -> None:
    by_name = {name: (sample, about) for name, sample, about, _ in _samples()}
    told, found, evidence = of_sample(*by_name["a step is no dependence"])
    assert not found.depends_on_neighbours
    assert evidence.change_point is not None
    assert evidence.change_point.mean is not None
    assert evidence.change_point.mean.index == 30
    assert any("changed at point 30" in sentence for sentence in told.beware)
    _, found, evidence = of_sample(*by_name["drifting"])
    assert found.drifts
    assert evidence.drift is not None
    # numpy's own least squares.
    sample = by_name["drifting"][0]
    assert isinstance(sample, Subgroups)
    assert evidence.drift.slope == pytest.approx(
        np.polyfit(np.arange(60), sample.values[:, 0], 1)[0], rel=1e-9
    )
    _, found, _ = of_sample(*by_name["skewed values"])
    assert found.not_normal
    _, found, evidence = of_sample(*by_name["loads"])
    assert evidence.between_subgroups is not None
    assert evidence.between_subgroups.ratio > 3.0


def test_what_is_known_is_not_taken_back() -> None:
    quiet = Subgroups(np.random.default_rng(0).normal(0.0, 1.0, (30, 4)))
    told, found, _ = of_sample(
        quiet, Description(M, depends_on_neighbours=True, drifts=True, not_normal=True)
    )
    assert found.depends_on_neighbours
    assert found.drifts
    assert told.chart == ("trend" if "trend" in CHARTS else "xbar-r")
    assert any("do not look normal" in sentence for sentence in told.beware)


@pytest.mark.parametrize(
    "sample",
    [
        Subgroups(np.full((4, 3), np.nan)),
        Vectors(np.array([[1.0, np.nan], [np.nan, 2.0]]), ("a", "b")),
    ],
)
def test_a_sample_without_data(sample: Subgroups | Vectors) -> None:
    with pytest.raises(UnusableData):
        of_sample(sample, Description(M))


def test_counts_that_cannot_be() -> None:
    with pytest.raises(UnusableData):
        of_sample(Counts(np.array([3.0, 4.0])), Description(UNITS))
    with pytest.raises(UnusableData):
        of_sample(Counts(np.array([3.0, 4.0]), np.array([10.0, 3.0])), Description(UNITS))
    with pytest.raises(UnusableData):
        of_sample(Counts(np.full(3, np.nan)), Description(EVENTS))
    with pytest.raises(UnusableData):
        of_sample(Intervals(np.full(3, np.nan)), Description("time-between-events"))


@pytest.mark.filterwarnings("error")
@pytest.mark.parametrize("m", [1, 2, 7])
def test_small_samples_still_get_an_answer(m: int) -> None:
    x = np.arange(m, dtype=float)
    _sound(of_sample(Subgroups(x[:, None]), Description(M))[0])
    _sound(of_sample(Subgroups(np.stack((x, x + 1, x - 1), axis=1)), Description(M))[0])
    _sound(of_sample(Subgroups(np.ones((m, 3))), Description(M))[0])
    _sound(of_sample(Counts(x, np.full(m, 20.0)), Description(UNITS))[0])
    _sound(of_sample(Counts(np.zeros(m)), Description(EVENTS))[0])
    _sound(of_sample(Intervals(x), Description("time-between-events"))[0])
    _sound(of_sample(Vectors(np.stack((x, x), axis=1), ("a", "b")), Description(M))[0])
