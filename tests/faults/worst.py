"""The costliest legal request known of every operation: what bounds the work of one request is measured on these.

They were looked for by going through the shapes: the largest arrays, every choice, extremes of every number, data in
which every point signals, mixtures of sizes, rules of the longest windows. Where a label says so, the request is
refused after as much work as one may take. A new operation needs an entry here. Bodies are made where they are
measured, in a process of their own.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from functools import cache, partial
from typing import Any

import numpy as np

from assignable.api.contract import Operation
from assignable.spc.charts import CHARTS
from contract import served

Json = dict[str, Any]
Make = Callable[[], Any]

ROWS = 200_000
VALUES = 1_000_000
CHOICES = 10_000  # values from which a distribution is chosen
FITTED = 100_000  # values to which one is fitted


def _random() -> np.random.Generator:
    return np.random.default_rng(7)


def _normal(*shape: int) -> np.ndarray:
    return _random().normal(0, 1, shape).round(4)


def _zone(points: int, window: int, distance: float, form: str = "zone") -> Json:
    return {"form": form, "points": points, "window": window, "distance": distance}


def _long_rules() -> Json:
    """As many rules as are taken, of the longest windows: the most to look for in the data."""
    rules = [
        _zone(50, 50, 0),
        _zone(50, 50, 0.01, "mixture"),
        _zone(50, 50, 6, "stratification"),
        {"form": "trend", "points": 50, "window": 50},
        {"form": "alternation", "points": 50, "window": 50},
        *({**_zone(50 - i, 50, i / 1000), "severity": "warning"} for i in range(15)),
    ]
    return {"own": rules}


def _wide_rules() -> Json:
    """Rules whose automaton has about as many transitions as are followed."""
    return {"own": [_zone(2, 50, d / 10) for d in range(10, 30)]}


def _wild(rows: int, columns: int = 1) -> np.ndarray:
    """Every point far out, on alternate sides."""
    return np.where(np.arange(rows)[:, None] % 2, 9.0, -9.0) + 0.01 * _normal(rows, columns)


@cache
def labels() -> Json:
    """Names and times of as many points as are taken; made once, before a process is forked for each request."""
    return {
        "ids": [f"K-{at:08d}" for at in range(ROWS)],
        "times": [
            f"2026-03-02T{at // 3600 % 24:02d}:{at // 60 % 60:02d}:{at % 60:02d}Z" for at in range(ROWS)
        ],
    }


def _named(data: Json, points: int) -> Json:
    return {
        **data,
        "ids": [f"K-{at:08d}" for at in range(points)],
        "times": [
            f"2026-03-02T{at // 3600 % 24:02d}:{at // 60 % 60:02d}:{at % 60:02d}Z" for at in range(ROWS)
        ],
    }


def _named(data: Json, points: int) -> Json:
    return {**data, **{name: texts[:points] for name, texts in labels().items()}}


# Charts ---------------------------------------------------------------------------------------------


def _chart_data(chart: str, points: int, *, wild: bool) -> Json:
    random = _random()
    values = _wild(points) if wild else _normal(points, 1)
    if chart in ("xbar-r", "xbar-s", "between-within", "acceptance"):
        return {"values": _wild(points, 5) if wild else _normal(points, 5)}
    if chart in ("individuals", "residual"):
        return {"values": values.ravel()}
    if chart in ("ewma", "cusum", "moving-average", "trend"):
        return {"individuals": values.ravel()}
    if chart == "short-run":
        return {"individuals": values.ravel(), "part_names": [f"part {at % 500}" for at in range(points)]}
    if chart in ("p", "np", "p-prime"):
        counts = np.where(np.arange(points) % 2, 100, 0) if wild else random.binomial(100, 0.1, points)
        return {"counts": counts, "inspected": 100 if chart == "np" else 100 + np.arange(points) % 9973}
    if chart == "c":
        return {"counts": np.where(np.arange(points) % 2, 999, 0) if wild else random.poisson(10, points)}
    if chart in ("u", "u-prime"):
        counts = np.where(np.arange(points) % 2, 999, 0) if wild else random.poisson(10, points)
        return {"counts": counts, "inspected": 1 + 100 * random.random(points)}
    if chart == "g":
        return {"intervals": random.geometric(0.05, points)}
    if chart == "t":
        return {"intervals": random.exponential(10, points)}
    if chart in ("t-squared", "mewma"):
        table = _wild(points, 50) if wild else _normal(points, 50)
        return {"values": table, "variables": [f"v{at}" for at in range(50)]}
    raise KeyError(f"{chart}: say what its largest data is")


def _points(chart: str) -> int:
    return 20_000 if chart in ("t-squared", "mewma") else ROWS


def _fit(chart: str, data: Json, **more: Any) -> Json:
    body: Json = served.example(f"{chart}-limits")
    for name in ("exclude", "adjustment"):
        body.pop(name, None)
    if chart == "short-run":
        body["parts"] = [{"name": f"part {at}", "target": 0.0} for at in range(500)]
    if chart == "acceptance":
        body["specification"] = {"lower": -10.0, "upper": 10.0}
    return {**body, "data": data, "explain": True, **more}


def _mixed_sizes(spread: str) -> Json:
    """Every size of subgroup there is, by turns."""
    sizes = 2 + np.arange(ROWS) % 999
    return _named({"means": _normal(ROWS), spread: np.abs(_normal(ROWS)) + 1, "sizes": sizes}, ROWS)


def _without_basis(body: Json) -> Json:
    basis = ("limit_basis", "sigma_multiple", "false_alarm_probability")
    return {name: value for name, value in body.items() if name not in basis}


_TINY = {"limit_basis": "probability", "false_alarm_probability": 1e-12}


def _fits(chart: str, takes_rules: bool) -> list[tuple[str, Make]]:
    m = _points(chart)
    ruled: Json = {"rules": _long_rules()} if takes_rules else {}
    found: list[tuple[str, Make]] = [
        (
            "all data, longest rules",
            lambda: _fit(chart, _named(_chart_data(chart, m, wild=False), m), **ruled),
        ),
    ]
    if chart == "xbar-r":
        found += [
            (
                "mixed sizes, probability",
                lambda: _without_basis(_fit(chart, _mixed_sizes("ranges"))) | _TINY,
            ),
            (
                "screening of heavy tails",
                lambda: _fit(
                    chart,
                    {"values": _random().standard_t(1.0, (ROWS, 5)).round(4)},
                    screening={"max_rounds": 10, "largest_share": 0.5},
                    joint_false_alarm_probability=1e-6,
                ),
            ),
        ]
    elif chart == "individuals":
        found += [
            (
                "a distribution chosen",
                lambda: _fit(chart, {"values": np.exp(_normal(CHOICES))}, distribution="auto"),
            ),
            (
                "a guarantee",
                lambda: _fit(
                    chart, {"values": _normal(ROWS)}, guarantee={"in_control_arl": 1e8, "confidence": 0.999}
                ),
            ),
        ]
    elif chart == "p":
        sizes = 10**9 - 9_000 * np.arange(ROWS) % 10_000
        found.append(
            (
                "as many sizes as exact limits are computed for",
                lambda: (
                    _without_basis(_fit(chart, {"counts": _random().poisson(1e8, ROWS), "inspected": sizes}))
                    | _TINY
                ),
            )
        )
    elif chart == "mewma":
        found.append(
            (
                "the longest memory, exact limits",
                lambda: {
                    "data": {"values": _normal(2000, 50), "variables": [f"v{at}" for at in range(50)]},
                    "smoothing": 0.1,
                    "limit_covariance": "time-varying",
                    "in_control_arl": 5,
                    "explain": True,
                },
            )
        )
    elif chart == "cusum":
        found.append(
            (
                "mixed sizes, restarts",
                lambda: _fit(
                    chart, _mixed_sizes("ranges"), sigma_estimator="median-range", after_signal="restart"
                ),
            )
        )
    elif chart == "t":
        data = {"intervals": _random().weibull(0.1, ROWS) + 1e-9}
        found.append(
            ("a shape fitted", lambda: _fit(chart, data, distribution="weibull", rules=_long_rules()))
        )
    return found


def _judged(chart: str, takes_rules: bool) -> Json:
    stem = CHARTS[chart].stem
    ruled: Json = {"rules": _long_rules()} if takes_rules else {}
    few = _chart_data(chart, 5000 if chart == "short-run" else 500, wild=False)
    from assignable.api import answers

    answer = served.answer_of(f"fit{stem}Limits", answers.dumps(_fit(chart, few, **ruled)))
    m = _points(chart)
    return {
        "limits": answer["limits"],
        "data": _named(_chart_data(chart, m, wild=True), m),
        "explain": True,
    }


# Capability, studies, designs -----------------------------------------------------------------------

_SHIFTS = np.linspace(0, 3, 50).round(3).tolist()
_SCALES = np.linspace(0.5, 2, 50).round(3).tolist()
_WITHIN = np.linspace(1, 1e6, 50).astype(int).tolist()
_SPECIFICATION = {"lower": -6, "upper": 6, "target": 0.1}


def _below() -> Json:
    values: list[float | None] = np.exp(_normal(CHOICES)).tolist()
    below: list[float | None] = [None] * CHOICES
    for at in range(0, CHOICES, 2):
        values[at], below[at] = None, 0.1 + (at % 997) / 100
    return {"values": values, "below": below}


def _crossed(parts: int, appraisers: int, trials: int, *, own: bool = False) -> Json:
    rows = [(i, j) for i in range(parts) for j in range(appraisers) for _ in range(trials)]
    return {
        "parts": [f"part {i}-{j}" if own else f"part {i}" for i, j in rows],
        "appraisers": [f"appraiser {j}" for _, j in rows],
        "values": _normal(len(rows)),
    }


def _ratings(items: int, appraisers: int, trials: int, categories: int) -> Json:
    rows = [(i, j) for i in range(items) for j in range(appraisers) for _ in range(trials)]
    chosen = _random().integers(0, categories, len(rows))
    return {
        "data": {
            "items": [f"item {i}" for i, _ in rows],
            "appraisers": [f"appraiser {j}" for _, j in rows],
            "ratings": [f"category {c}" for c in chosen],
        },
        "reference": {
            "items": [f"item {i}" for i in range(items)],
            "ratings": [f"category {i % categories}" for i in range(items)],
        },
    }


def _release() -> Json:
    """As many characteristics as are taken, each with a chart, a long past and all the results there may be."""
    example = served.example("release-checks")
    one = example["characteristics"][0]
    characteristics = []
    for at in range(200):
        trend = {**one["trend"], "point": "average"}
        capability = {**one["capability"], "earlier": (312 + _normal(1000)).tolist()}
        characteristics.append(
            {
                **one,
                "name": f"characteristic {at}",
                "results": [[316.4] * 20 for _ in range(5)],
                "expected_results": 100,
                "trend": trend,
                "capability": capability,
            }
        )
    return {"batch": "K-0442", "characteristics": characteristics, "explain": True}


def _several() -> Json:
    characteristics = [{"name": f"c{at}", "specification": {"lower": -3, "upper": 3}} for at in range(8)]
    values = _normal(125_000, 8)
    return {"characteristics": characteristics, "data": {"values": values}, "explain": True}


def _chart_of(**chart: Json) -> Json:
    return {**chart, "shifts": _SHIFTS, "scales": _SCALES, "within_points": _WITHIN, "explain": True}


_MEASURED: list[tuple[str, Make]] = [
    (
        "a million values",
        lambda: {
            "data": {"values": np.exp(_normal(VALUES))},
            "specification": {"upper": 100},
            "explain": True,
        },
    ),
    (
        "rows",
        lambda: {"data": {"values": _normal(ROWS, 5)}, "specification": _SPECIFICATION, "explain": True},
    ),
    (
        "a distribution chosen",
        lambda: {
            "data": {"values": np.exp(_normal(CHOICES))},
            "specification": {"upper": 100, "natural_lower": 0},
            "distribution": "auto",
            "explain": True,
        },
    ),
    (
        "a distribution fitted (refused)",
        lambda: {
            "data": {"values": np.exp(_normal(FITTED))},
            "specification": {"upper": 100},
            "distribution": "johnson-sb",
            "explain": True,
        },
    ),
    (
        "results below limits",
        lambda: {
            "data": _below(),
            "specification": {"upper": 100, "natural_lower": 0},
            "distribution": "lognormal",
            "explain": True,
        },
    ),
]

OTHERS: dict[str, list[tuple[str, Make]]] = {
    "recommendChart": [
        ("rows", lambda: {"sample": {"values": _normal(ROWS, 5)}, "explain": True}),
        ("single values", lambda: {"sample": {"values": np.exp(_normal(ROWS))}, "explain": True}),
    ],
    "assessMeasurements": _MEASURED,
    "assessAttributes": [
        (
            "units",
            lambda: {
                "kind": "nonconforming-units",
                "data": {"counts": _random().poisson(50, ROWS), "inspected": 100 + np.arange(ROWS) % 9973},
                "explain": True,
            },
        )
    ],
    "assessSeveral": [("eight of them", _several)],
    "assessConformance": [
        (
            "results with a process",
            lambda: {
                "specification": _SPECIFICATION,
                "standard_uncertainty": 0.01,
                "results": _normal(10_000),
                "process": {"mean": 0, "sd": 1, "count": 100},
                "consumer_risk": 1e-12,
                "explain": True,
            },
        )
    ],
    "computeToleranceInterval": [
        (
            "a million values",
            lambda: {
                "data": {"values": _normal(VALUES)},
                "coverage": 0.999,
                "method": "non-parametric",
                "explain": True,
            },
        ),
        (
            "the largest sample",
            lambda: {
                "sample_size": {"excess_coverage": 0.9999995, "excess_risk": 1e-6},
                "coverage": 0.999999,
                "confidence": 0.999999,
                "explain": True,
            },
        ),
    ],
    "checkRelease": [("everything", _release)],
    "computeRunLength": [
        ("many transitions (refused)", lambda: _chart_of(shewhart={"rules": _wide_rules()})),
        ("long rules (refused)", lambda: _chart_of(shewhart={"rules": _long_rules()})),
        (
            "counts",
            lambda: {
                "counts": {"law": "poisson", "mean": 5, "size": 1, "rules": {"own": [_zone(2, 50, 1.5)]}},
                "factors": np.linspace(0.3, 3, 50).tolist(),
                "within_points": _WITHIN,
                "explain": True,
            },
        ),
        ("cusum", lambda: _chart_of(cusum={"reference": 0.01, "decision": 0.1, "head_start": 0.05})),
        ("ewma", lambda: _chart_of(ewma={"smoothing": 0.01, "limit": 3})),
        (
            "mewma",
            lambda: {
                "mewma": {
                    "variables": 2,
                    "smoothing": 0.1,
                    "limits": "time-varying",
                    "in_control_arl": 5,
                },
                "shifts": _SHIFTS,
                "within_points": _WITHIN,
                "explain": True,
            },
        ),
    ],
    "designSubgroups": [
        (
            "many transitions (refused)",
            lambda: {
                **served.example("designs-subgroups"),
                "rules": _wide_rules(),
                "shifts": _SHIFTS,
                "candidates": [{"size": 1 + at, "interval_hours": 1} for at in range(100)],
                "explain": True,
            },
        )
    ],
    "designEwma": [
        (
            "seldom alarms",
            lambda: {
                "in_control_arl": 1e9,
                "shift": 1,
                "state": "steady-state",
                "limits": "time-varying",
                "smoothing": 0.05,
                "shifts": np.linspace(-3, 3, 40).tolist(),
                "explain": True,
            },
        )
    ],
    "designCusum": [
        (
            "frequent alarms",
            lambda: {
                "in_control_arl": 2,
                "shift": 1,
                "state": "steady-state",
                "reference": 0.1,
                "head_start_fraction": 0.5,
                "shifts": np.linspace(-3, 3, 40).tolist(),
                "explain": True,
            },
        )
    ],
    "designAttributes": [
        (
            "exact tails (refused)",
            lambda: {
                "chart": "np",
                "level": 1e-4,
                "detect": {"shifted_level": 1.01e-4, "power": 0.999999},
                "lower_limit_size": True,
                "levels": np.linspace(1e-5, 3e-4, 100).tolist(),
                "false_alarm_probability": 0.5,
                "explain": True,
            },
        ),
        (
            "the largest sample",
            lambda: {
                "chart": "p",
                "level": 0.3,
                "size": 1_000_000,
                "lower_limit_size": True,
                "levels": np.linspace(0.03, 0.9, 100).tolist(),
                "false_alarm_probability": 1e-12,
                "explain": True,
            },
        ),
    ],
    "designBaseline": [
        (
            "a full table",
            lambda: {
                "subgroups": 25,
                "size": 1000,
                "sigma_estimator": "mean-range",
                "in_control_arl": 1e8,
                "confidence": 0.999,
                "share_of_nominal": 0.99,
                "risk": 0.001,
                "percentiles": np.linspace(0.001, 0.999, 20).tolist(),
                "table": {"subgroups": [2 + 400 * at * at for at in range(50)], "sizes": [2, 7, 1000]},
                "explain": True,
            },
        )
    ],
    "designEconomic": [
        (
            "awkward requirements (refused)",
            lambda: {
                "process": {**served.example("designs-economic")["process"], "shift": 0.05},
                "requirements": {"longest_ats_hours": 1000, "shortest_hours_between_false_alarms": 1e10},
                "explain": True,
            },
        ),
        (
            "rules",
            lambda: {**served.example("designs-economic-rules"), "requirements": {}, "explain": True},
        ),
    ],
    "compareDesigns": [
        (
            "every chart",
            lambda: {
                "shift": 0.25,
                "pieces_per_hour": 1,
                "hours_between_false_alarms": 6_000,
                "sizes": [2, 3, 4],
                "explain": True,
            },
        )
    ],
    "analyseCrossedStudy": [
        ("many parts", lambda: {"data": _crossed(1000, 50, 2), "explain": True}),
        ("many trials", lambda: {"data": _crossed(10, 100, 100), "explain": True}),
    ],
    "analyseNestedStudy": [
        ("many trials", lambda: {"data": _crossed(10, 100, 100, own=True), "explain": True}),
    ],
    "analyseAgreementStudy": [
        ("many pairs", lambda: {**_ratings(500, 100, 2, 20), "explain": True}),
        ("many items", lambda: {**_ratings(1000, 100, 1, 20), "explain": True}),
    ],
    "analyseBiasStudy": [
        (
            "many levels",
            lambda: {
                "data": {
                    "levels": [
                        {"part": f"ring {at}", "reference": at, "values": (at + _normal(500)).tolist()}
                        for at in range(200)
                    ]
                },
                "explain": True,
            },
        )
    ],
    "drawMeasurements": [
        (
            "a million values",
            lambda: {"data": {"values": np.exp(3 * _normal(VALUES))}, "specification": _SPECIFICATION},
        )
    ],
    "drawSubgroupDesign": [
        (
            "rules (refused)",
            lambda: {**served.example("designs-subgroups"), "rules": _wide_rules(), "shifts": _SHIFTS},
        )
    ],
    "drawRunLength": [
        ("ewma", lambda: {"ewma": {"smoothing": 0.01, "limit": 3}, "shifts": _SHIFTS, "scales": _SCALES})
    ],
}


# A stream of lines is as long as its sender likes; a line takes a turn as its own operation does, bounded there.
OF_LINES = frozenset(("answerLines", "judgeLines"))
OTHERS.update({name: [] for name in OF_LINES})


def requests_of(operation: Operation) -> Iterator[tuple[str, Make]]:
    """The costliest requests of an operation. Raises KeyError for one that nobody has thought about."""
    name = operation.operation_id
    for chart, known in CHARTS.items():
        takes_rules = "rules" in served.operations()[f"fit{known.stem}Limits"].request.load_fields  # type: ignore[union-attr]
        if name == f"fit{known.stem}Limits":
            yield from _fits(chart, takes_rules)
        elif name == f"draw{known.stem}Limits":
            yield "all data, all signals" if chart != "residual" else "all data", partial(_picture_of, chart)
        elif name in (f"judge{known.stem}", f"draw{known.stem}Signals"):
            yield "all data, all signals", partial(_judged, chart, takes_rules)
        else:
            continue
        return
    drawn = operation.path.removesuffix("/picture")
    source = next(one.operation_id for one in served.operations().values() if one.path == drawn)
    yield from OTHERS[name if name in OTHERS else source]


def _picture_of(chart: str) -> Json:
    m = _points(chart)
    wild = chart != "residual"  # such values follow no model of it
    found = _fit(chart, _named(_chart_data(chart, m, wild=wild), m))
    del found["explain"]
    return found


QUERIES: dict[str, dict[str, Any]] = {
    "listCharts": {},
    "getFactors": {"size": 1000},
    "getRules": {},
    "getMethods": {},
    "getVerification": {},
    "getSealingKeys": {},
    "getLiveness": {},
    "getReadiness": {},
    "getMetrics": {},
}
"""The costliest queries of the operations that take no body."""
