"""Worked steps of a release check: for each characteristic, the value nearest to a limit or farthest beyond."""

from __future__ import annotations

from collections.abc import Sequence
from decimal import Decimal

import numpy as np

from ..exact import average, written
from ..release import Characteristic, Figures, groups
from .steps import Pad, Step, Value, numbered


def of_check(checked: Sequence[tuple[Characteristic, Figures]]) -> tuple[Step, ...]:
    """The steps of each characteristic, in their order."""
    pad = Pad()
    for at, (one, figures) in enumerate(checked):
        _characteristic(pad, one, figures, f"#/characteristics/{at}")
    return pad.steps


def _characteristic(pad: Pad, one: Characteristic, figures: Figures, at: str) -> None:
    compared = figures.compared
    below = set(compared.below.tolist())
    margins = [
        (
            min(
                float(each[entry])
                for each in (compared.margin_to_lower, compared.margin_to_upper)
                if each is not None
            ),
            entry,
        )
        for entry in range(len(compared.value))
        if entry not in below
    ]
    if margins:
        _value(pad, one, figures, min(margins)[1], at)
    _guard(pad, one, figures, at)
    shown = figures.capability
    if shown is not None and one.capability is not None:
        _ppk(pad, one, figures, at)


def _value(pad: Pad, one: Characteristic, figures: Figures, entry: int, at: str) -> None:
    compared = figures.compared
    index = int(compared.index[entry])
    exact: Decimal
    if one.compare == "averages":
        row = groups(one.results)[index]
        numbers = [value for value in row.tolist() if value == value]
        exact = average([written(value) for value in numbers])
        names, given = numbered("x", numbers)
        pad.work(
            f"Average {index} of {one.name}, the one nearest to a limit, or farthest beyond it",
            f"({' + '.join(names)}) / n",
            f"{at}/compared/unrounded/{entry}",
            **given,
            n=len(numbers),
        )
    else:
        exact = written(float(compared.unrounded[entry]))
        pad.work(
            f"Result {index} of {one.name}, the one nearest to a limit, or farthest beyond it",
            "x",
            f"{at}/compared/unrounded/{entry}",
            x=float(compared.unrounded[entry]),
        )
    if one.rounding is not None:
        places = one.rounding.decimals
        scaled = exact.scaleb(places)
        half = one.rounding.rule == "half-up"
        sign = "-" if scaled < 0 else ""
        formula = f"{sign}floor({sign}scaled + 1/2)" if half else "round(scaled)"
        pad.work(
            f"Rounded to {places} decimals, a half "
            + (
                "away from zero"
                if half
                else "to the even digit (round: to the nearest whole number, halves to even)"
            ),
            f"{formula} / 10**decimals",
            f"{at}/compared/value/{entry}",
            scaled=(float(scaled), f"the value times 10**{places}, exactly as it is written"),
            decimals=places,
        )
    value = float(compared.value[entry])
    specification = one.specification
    for limit, margin, name, formula in (
        (specification.lower, compared.margin_to_lower, "lower", "value - lower"),
        (specification.upper, compared.margin_to_upper, "upper", "upper - value"),
    ):
        if limit is not None and margin is not None:
            pad.work(
                f"Margin to the {name} limit, negative beyond it",
                formula,
                f"{at}/compared/margin_to_{name}/{entry}",
                **{name: limit, "value": value},
            )


def _guard(pad: Pad, one: Characteristic, figures: Figures, at: str) -> None:
    acceptance, given = figures.acceptance, one.uncertainty
    if acceptance is None or given is None:
        return
    if given.guard_multiple is not None and given.standard is not None:
        pad.work(
            f"Width of the guard band of {one.name}",
            "multiple * u",
            f"{at}/acceptance/guard_band",
            multiple=given.guard_multiple,
            u=given.standard,
        )
    elif given.consumer_risk is not None and given.standard is not None:
        _risk(pad, one, acceptance.guard_band, at)
    specification = one.specification
    if acceptance.lower is not None and specification.lower is not None:
        pad.work(
            f"Lower acceptance limit of {one.name}",
            "lower + guard_band",
            f"{at}/acceptance/lower",
            lower=specification.lower,
            guard_band=acceptance.guard_band,
        )
    if acceptance.upper is not None and specification.upper is not None:
        pad.work(
            f"Upper acceptance limit of {one.name}",
            "upper - guard_band",
            f"{at}/acceptance/upper",
            upper=specification.upper,
            guard_band=acceptance.guard_band,
        )


def _risk(pad: Pad, one: Characteristic, width: float, at: str) -> None:
    """The guard band put back: the risk on the acceptance limit."""
    given, specification = one.uncertainty, one.specification
    assert given is not None
    assert given.standard is not None
    values: dict[str, Value] = {"guard_band": width, "u": given.standard}
    formula = "erfc(guard_band / u / sqrt(2)) / 2"
    if specification.lower is not None and specification.upper is not None:
        formula += " + erfc((upper - lower - guard_band) / u / sqrt(2)) / 2"
        values |= {"upper": specification.upper, "lower": specification.lower}
    pad.work(
        f"Risk that an item is out of specification whose {one.name} is on an acceptance limit: the consumer's "
        "risk, by which the guard band is found",
        formula,
        None,
        **values,
    )


def _ppk(pad: Pad, one: Characteristic, figures: Figures, at: str) -> None:
    assert one.capability is not None
    both = np.concatenate((one.capability.earlier, figures.compared.unrounded))
    both = both[both == both]
    mean = pad.mean(f"Mean of the {len(both)} values of {one.name}, earlier batches included", both)
    sd = pad.deviation("Their standard deviation", both, mean)
    values: dict[str, Value] = {"mean": mean, "sd": sd}
    sides = []
    lower, upper = one.specification.effective_limits
    if lower is not None:
        sides.append("mean - lower")
        values["lower"] = lower
    if upper is not None:
        sides.append("upper - mean")
        values["upper"] = upper
    nearer = f"min({', '.join(sides)})" if len(sides) > 1 else f"({sides[0]})"
    pad.work(f"Ppk of {one.name}", f"{nearer} / (3 * sd)", f"{at}/capability/ppk", **values)
