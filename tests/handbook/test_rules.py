"""Rules on hand-made points: what each form sees, its edges, and the published sets."""

from __future__ import annotations

import numpy as np
import pytest

from assignable.spc import rules as module
from assignable.spc.errors import UnusableParameter
from assignable.spc.rules import (
    LIMIT,
    MOST_RULES,
    PUBLISHED,
    Detection,
    Rule,
    Tail,
    Track,
    detect,
    longest_window,
    signals,
    watched,
)

GAP = np.nan


def track(z: list[float], *, lower: float = -3.0, upper: float = 3.0) -> Track:
    values = np.array(z, dtype=float)
    return Track(values, values, 1.0, lower, upper)


def found(rule: Rule, z: list[float], tail: Tail | None = None) -> list[tuple[int, int]]:
    """(index, side) of the hits of one rule."""
    detection = detect([rule], track(z), tail)
    position = 0 if rule.is_limit else 1
    at = detection.rule == position
    return list(zip(detection.index[at].tolist(), detection.side[at].tolist(), strict=True))


def test_western_electric_1956() -> None:
    # Western Electric 1956, the four tests for instability; from memory.
    codes = [rule.code for rule in PUBLISHED["western-electric-1956"].rules]
    assert codes == ["limit", "zone-2-of-3-beyond-2", "zone-4-of-5-beyond-1", "zone-8-of-8-beyond-0"]


def test_nelson_1984() -> None:
    # Nelson 1984, J. Quality Technology 16; from memory.
    codes = {rule.code for rule in PUBLISHED["nelson-1984"].rules}
    assert codes == {
        "limit", "zone-9-of-9-beyond-0", "trend-6", "alternation-14", "zone-2-of-3-beyond-2",
        "zone-4-of-5-beyond-1", "stratification-15-within-1", "mixture-8-of-8-beyond-1",
    }  # fmt: skip


def test_every_published_set_starts_with_the_limit() -> None:
    assert all(each.rules[0] == LIMIT for each in PUBLISHED.values())
    assert PUBLISHED["shewhart-1931"].rules == (LIMIT,)


def test_limit_is_always_watched_and_is_the_charts_own() -> None:
    detection = detect([], Track(np.array([1.0, 5.0, -9.0]), np.zeros(3), 1.0, np.array([0.0, 0, -8]), 4.0))
    assert detection.index.tolist() == [1, 2]
    assert detection.side.tolist() == [1, -1]
    assert watched([Rule("trend", 6, 6)])[0] == LIMIT


def test_one_of_one_elsewhere_is_an_ordinary_rule() -> None:
    warning = Rule("zone", 1, 1, 2.0, "warning")
    detection = detect([warning], track([2.5, 3.5]))
    assert [detection.rules[r].code for r in detection.rule] == [
        "zone-1-of-1-beyond-2",
        "limit",
        "zone-1-of-1-beyond-2",
    ]
    assert detection.actions == 1


@pytest.mark.parametrize(
    ("z", "hits"),
    [
        ([2.5, 0.0, 2.5], [(2, 1)]),
        ([2.5, 2.5], [(1, 1)]),  # a partial window
        ([2.5, 0.0, 0.0, 2.5], []),  # one too far back
        ([2.5, 2.5, 0.0, 2.5], [(1, 1), (3, 1)]),  # not on the point inside
        ([2.5, -2.5, 2.5], [(2, 1)]),  # one side only
        ([2.5, -2.5], []),
        ([2.0, 2.5], []),  # on the line is not beyond it
        ([2.0 + 5e-11, 2.5], []),  # nor is decimal noise
        ([2.0 + 2e-10, 2.5], [(1, 1)]),
        ([2.5, GAP, 2.5], []),  # a gap ends the window
        ([-2.5, GAP, -2.5, -2.6], [(3, -1)]),
        ([2.5, 2.5, 2.5], [(1, 1), (2, 1)]),  # the window goes on
    ],
)
def test_zone(z: list[float], hits: list[tuple[int, int]]) -> None:
    assert found(Rule("zone", 2, 3, 2.0), z) == hits


def test_run_on_one_side_ends_on_the_centre_line() -> None:
    run = Rule("zone", 4, 4, 0.0)
    assert found(run, [0.1, 0.2, 0.1, 0.3, 0.2]) == [(3, 1), (4, 1)]
    assert found(run, [0.1, 0.2, 0.0, 0.3, 0.2]) == []
    assert found(run, [-0.1, -0.2, -1e-11, -0.3, -0.2]) == []


def test_mixture_takes_either_side_and_ends_on_the_line() -> None:
    rule = Rule("mixture", 3, 3, 1.0)
    assert found(rule, [1.5, -1.5, 1.2]) == [(2, 0)]
    assert found(rule, [1.5, -1.0, 1.2]) == []
    assert found(Rule("mixture", 2, 3, 1.0), [1.5, 0.0, -1.2, 0.0]) == [(2, 0)]


def test_stratification_takes_the_line_in() -> None:
    rule = Rule("stratification", 3, 3, 1.0)
    assert found(rule, [1.0, -1.0, 0.3, 1.2, 0.1, 0.1]) == [(2, 0)]
    assert found(rule, [0.0, GAP, 0.0, 0.0]) == []


def test_six_points_make_five_rises() -> None:
    rule = Rule("trend", 6, 6)
    assert found(rule, [0, 1, 2, 3, 4]) == []
    assert found(rule, [0, 0.1, 0.2, 0.3, 0.4, 0.5, 0.6]) == [(5, 1), (6, 1)]
    assert found(rule, [0.5, 0.4, 0.3, 0.2, 0.1, 0.0]) == [(5, -1)]
    assert found(rule, [0, 0.1, 0.2, 0.2, 0.4, 0.5, 0.6]) == []  # a tie ends it
    assert found(rule, [0, 0.1, 0.2, 0.2 + 5e-11, 0.4, 0.5]) == []
    assert found(rule, [0, 0.1, 0.2, GAP, 0.3, 0.4, 0.5]) == []


def test_fourteen_points_make_thirteen_alternating_steps() -> None:
    rule = Rule("alternation", 14, 14)
    zigzag = [0.5 * (-1) ** i for i in range(15)]
    assert found(rule, zigzag[:13]) == []
    assert found(rule, zigzag) == [(13, 0), (14, 0)]
    tied = [*zigzag[:7], zigzag[6], *zigzag[7:14]]
    assert found(rule, tied) == []


def test_sigma_of_each_point_sets_its_own_tolerance() -> None:
    # Steps of 1 are ties where sigma is 1e11, and steps where it is 1.
    value = np.arange(6.0)
    rule = Rule("trend", 3, 3)
    wide = Track(value, np.zeros(6), np.array([1, 1, 1e11, 1, 1, 1.0]), -np.inf, np.inf)
    assert detect([rule], wide).index.tolist() == [4, 5]


@pytest.mark.parametrize("road", [module._detect_few, module._detect_many])
def test_points_that_took_part_reach_back_into_earlier_calls(road: object) -> None:
    rules = watched(PUBLISHED["western-electric-1956"].rules)
    first: Detection = road(rules, track([0.0, 2.5, -0.1]), None)  # type: ignore[operator]
    second: Detection = road(rules, track([2.7, -0.5]), first.tail)  # type: ignore[operator]
    assert len(first) == 0
    assert len(second) == 1
    assert second.took_part(0) == (-2, 0)
    (signal,) = signals(second, panel="mean")
    assert signal.points == (-2, 0)
    assert signal.sentence == "2 of the last 3 points lie more than 2 sigma above the centre line."
    assert (signal.rule, signal.side, signal.severity) == ("zone-2-of-3-beyond-2", "above", "action")


def test_tail_is_no_longer_than_needed_and_stops_at_a_gap() -> None:
    rules = PUBLISHED["western-electric-1956"].rules
    assert longest_window(rules) == 8
    assert len(detect(rules, track([0.1] * 30)).tail.z) == 7
    assert detect(rules, track([0.1] * 30 + [GAP, 0.2])).tail.z == (0.2,)
    assert detect([], track([0.1] * 30)).tail == Tail()


def test_sentences() -> None:
    def sentence(rule: Rule, z: list[float]) -> str:
        detection = detect([rule], track(z))
        return signals(detection, panel="mean")[-1].sentence

    assert sentence(LIMIT, [-4.0]) == "The point lies below the lower control limit."
    assert (
        sentence(Rule("zone", 3, 3, 0.0), [-0.1, -0.2, -0.1])
        == "3 points in a row lie below the centre line."
    )
    assert sentence(Rule("trend", 3, 3), [0.0, 1.0, 2.0]) == "3 points in a row steadily rise."
    assert (
        sentence(Rule("alternation", 3, 3), [0.0, 1.0, 0.5])
        == "3 points in a row go alternately up and down."
    )
    assert (
        sentence(Rule("stratification", 3, 3, 0.5), [0.1, 0.1, 0.2])
        == "3 points in a row lie within 0.5 sigma of the centre line."
    )
    assert (
        sentence(Rule("mixture", 2, 3, 1.0), [1.2, 0.0, -1.2])
        == "2 of the last 3 points lie more than 1 sigma from the centre line, on either side."
    )
    assert (
        sentence(Rule("zone", 1, 1, 2.0), [2.2]) == "The point lies more than 2 sigma above the centre line."
    )


def test_signals_are_capped_and_their_total_is_known() -> None:
    detection = detect([], track([4.0] * 50))
    assert len(signals(detection, panel="mean", most=7)) == 7
    assert len(detection) == 50


def test_hits_are_sorted_by_point_and_then_by_rule() -> None:
    z = [2.5, 3.5, 3.5] * 8
    detection = detect(PUBLISHED["western-electric-1956"].rules, track(z))
    order = list(zip(detection.index.tolist(), detection.rule.tolist(), strict=True))
    assert order == sorted(order)
    assert len(set(order)) == len(order)


@pytest.mark.parametrize(
    ("arguments", "code"),
    [
        (("zone", 0, 3, 1.0), "points-out-of-range"),
        (("zone", 4, 3, 1.0), "points-out-of-range"),
        (("zone", 2, 51, 1.0), "window-out-of-range"),
        (("zone", 2, 3, None), "distance-missing"),
        (("zone", 2, 3, -1.0), "distance-out-of-range"),
        (("zone", 2, 3, 6.5), "distance-out-of-range"),
        (("zone", 2, 3, float("nan")), "distance-out-of-range"),
        (("mixture", 8, 8, 0.0), "distance-out-of-range"),
        (("stratification", 14, 15, 1.0), "points-not-window"),
        (("trend", 5, 6), "points-not-window"),
        (("trend", 2, 2), "points-out-of-range"),
        (("alternation", 14, 14, 1.0), "distance-not-used"),
        (("cycle", 14, 14), "unknown-form"),
        (("zone", 1, 1, 3.0, "warning"), "limit-is-action"),
        (("zone", 2, 3, 2.0, "panic"), "unknown-severity"),
    ],
)
def test_what_is_no_rule_is_refused(arguments: tuple, code: str) -> None:
    with pytest.raises(UnusableParameter) as refusal:
        Rule(*arguments)
    assert refusal.value.faults[0].code == code


def test_rules_are_kept_once_and_action_prevails() -> None:
    pair = (Rule("zone", 2, 3, 2.0, "warning"), Rule("zone", 2, 3, 2.0), Rule("zone", 2, 3, 2.0, "warning"))
    assert watched(pair) == (LIMIT, Rule("zone", 2, 3, 2.0))


def test_a_list_of_rules_is_bounded() -> None:
    with pytest.raises(UnusableParameter):
        watched([Rule("trend", n, n) for n in range(3, 4 + MOST_RULES)])


def test_every_rule_describes_itself() -> None:
    assert LIMIT.description == "A point lies beyond a control limit."
    texts = [rule.description for each in PUBLISHED.values() for rule in each.rules]
    assert all(text.endswith(".") and text[0].isalnum() for text in texts)
