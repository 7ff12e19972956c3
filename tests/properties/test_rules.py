"""Rules against a naive transcription of their definitions, and their invariances."""

from __future__ import annotations

import math

import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st

from assignable.spc import rules as module
from assignable.spc.rules import Detection, Rule, Tail, Track, watched

TOLERANCE = 1e-10
Hit = tuple[int, int, int, tuple[int, ...]]


@st.composite
def a_rule(draw: st.DrawFn) -> Rule:
    form = draw(st.sampled_from(["zone", "zone", "mixture", "stratification", "trend", "alternation"]))
    window = draw(st.integers(3, 7))
    points = draw(st.integers(1, window)) if form in ("zone", "mixture") else window
    distance = None
    if form not in ("trend", "alternation"):
        distance = draw(st.sampled_from([0.0, 0.5, 1.0, 2.0] if form == "zone" else [0.5, 1.0, 2.0]))
    return Rule(form, points, window, distance)


# Halves make ties and points on lines common; None is a gap.
some_points = st.lists(
    st.one_of(
        st.integers(-7, 7).map(lambda n: n / 2),
        st.floats(-4, 4, allow_nan=False),
        st.just(math.nan),
    ),
    min_size=1,
    max_size=40,
)
some_rules = st.lists(a_rule(), max_size=4).map(lambda rules: watched(rules))
quick = settings(derandomize=True, deadline=None, max_examples=150)


def naive(rules: tuple[Rule, ...], z: list[float]) -> list[Hit]:
    """Each definition read out, one point and one rule at a time."""
    hits: list[Hit] = []
    for i in range(len(z)):
        if math.isnan(z[i]):
            continue
        since = i
        while since > 0 and not math.isnan(z[since - 1]):
            since -= 1
        for number, rule in enumerate(rules):
            if number == 0:
                if z[i] > 3 + TOLERANCE:
                    hits.append((i, 0, 1, (i,)))
                if z[i] < -3 - TOLERANCE:
                    hits.append((i, 0, -1, (i,)))
                continue
            seen = [j for j in range(i - rule.window + 1, i + 1) if j >= since]
            whole = len(seen) == rule.window
            d = rule.distance
            if rule.form == "zone":
                for side in (1, -1):
                    out = [j for j in seen if side * z[j] > d + TOLERANCE]
                    if i in out and len(out) >= rule.points:
                        hits.append((i, number, side, tuple(out)))
            elif rule.form == "mixture":
                out = [j for j in seen if z[j] > d + TOLERANCE or z[j] < -d - TOLERANCE]
                if i in out and len(out) >= rule.points:
                    hits.append((i, number, 0, tuple(out)))
            elif rule.form == "stratification":
                if whole and all(-d - TOLERANCE <= z[j] <= d + TOLERANCE for j in seen):
                    hits.append((i, number, 0, tuple(seen)))
            elif whole:
                steps = [z[j + 1] - z[j] for j in seen[:-1]]
                up = [step > TOLERANCE for step in steps]
                down = [step < -TOLERANCE for step in steps]
                if rule.form == "trend":
                    if all(up):
                        hits.append((i, number, 1, tuple(seen)))
                    if all(down):
                        hits.append((i, number, -1, tuple(seen)))
                elif all((up if k % 2 else down)[k] for k in range(len(steps))) or all(
                    (down if k % 2 else up)[k] for k in range(len(steps))
                ):
                    hits.append((i, number, 0, tuple(seen)))
    return hits


def a_track(z: list[float], scale: float = 1.0, centre: float = 0.0) -> Track:
    unit = np.array(z, dtype=float)
    return Track(centre + scale * unit, unit, scale, centre - 3 * scale, centre + 3 * scale)


def hits(detection: Detection, offset: int = 0) -> list[Hit]:
    return [
        (
            int(detection.index[k]) + offset,
            int(detection.rule[k]),
            int(detection.side[k]),
            tuple(j + offset for j in detection.took_part(k)),
        )
        for k in range(len(detection))
    ]


@quick
@given(some_rules, some_points)
def test_both_roads_do_what_the_definitions_say(rules: tuple[Rule, ...], z: list[float]) -> None:
    expected = naive(rules, z)
    few = module._detect_few(rules, a_track(z), None)
    many = module._detect_many(rules, a_track(z), None)
    assert hits(few) == expected
    assert hits(many) == expected
    assert few.tail == many.tail


@quick
@given(some_rules, some_points, st.data())
def test_any_split_gives_the_same_signals(
    rules: tuple[Rule, ...], z: list[float], data: st.DataObject
) -> None:
    together = module.detect(rules, a_track(z))
    split: list[Hit] = []
    tail: Tail | None = None
    at = 0
    while at < len(z):
        end = data.draw(st.integers(at + 1, len(z)))
        road = data.draw(st.sampled_from([module._detect_few, module._detect_many]))
        part = road(rules, a_track(z[at:end]), tail if tail is not None and tail.z else None)
        split += hits(part, at)
        tail, at = part.tail, end
    assert split == hits(together)
    assert tail == together.tail


@quick
@given(some_rules, some_points)
def test_reflection_turns_the_sides(rules: tuple[Rule, ...], z: list[float]) -> None:
    mirrored = module.detect(rules, a_track([-each for each in z]))
    turned = [(index, rule, -side, points) for index, rule, side, points in hits(mirrored)]
    assert turned == hits(module.detect(rules, a_track(z)))


@quick
@given(some_rules, some_points, st.sampled_from([0.25, 1.0, 64.0]), st.sampled_from([-8.0, 0.0, 1024.0]))
def test_unit_and_origin_do_not_matter(
    rules: tuple[Rule, ...], z: list[float], scale: float, centre: float
) -> None:
    # On a grid where the change of unit is exact, so that it makes and breaks no ties.
    z = [round(each * 1024) / 1024 if each == each else each for each in z]
    moved = module.detect(rules, a_track(z, scale, centre))
    assert hits(moved) == hits(module.detect(rules, a_track(z)))
