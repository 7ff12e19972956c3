"""Pictures as a test reads them: what is written and drawn where, and the numbers that places stand for."""

from __future__ import annotations

import re
from collections.abc import Callable, Iterator
from typing import Any
from xml.etree import ElementTree

import numpy as np

from assignable.api import answers
from assignable.api.contract import Operation
from contract import served

SVG = "{http://www.w3.org/2000/svg}"
AMBER = "#b86200"
PICTURES = {name: found for name, found in served.operations().items() if found.media_type == answers.SVG}


def source_of(operation_id: str) -> Operation:
    path = PICTURES[operation_id].path.removesuffix("/picture")
    return next(found for found in served.operations().values() if found.path == path)


def picture(operation_id: str, body: Any) -> str:
    found = served.call(operation_id, body)
    assert found.status_code == 200, found.get_data(as_text=True)
    return found.get_data(as_text=True)


def parsed(text: str) -> ElementTree.Element:
    return ElementTree.fromstring(text)


def words(root: ElementTree.Element) -> list[str]:
    return [element.text or "" for element in root.iter(f"{SVG}text")]


def places(root: ElementTree.Element, mark: str) -> list[tuple[float, float]]:
    """Where the marks of a kind stand, the signs beside sentences and in the key included."""
    found = []
    for path in root.iter(f"{SVG}path"):
        d, stroke = path.get("d", ""), path.get("stroke")
        if mark == "dot" and path.get("stroke-linecap") == "round":
            found += [(float(x), float(y)) for x, y in re.findall(r"M([\d.-]+) ([\d.-]+)h.01", d)]
        if mark == "ring" and stroke == AMBER:
            arcs = re.findall(r"M([\d.-]+) ([\d.-]+)a([\d.]+) ", d)
            found += [(float(x) + float(r), float(y)) for x, y, r in arcs]
        if mark == "open" and path.get("fill") == "#ffffff" and "a" in d:
            arcs = re.findall(r"M([\d.-]+) ([\d.-]+)a([\d.]+) ", d)
            found += [(float(x) + float(r), float(y)) for x, y, r in arcs]
        if mark in ("diamond", "open diamond") and (path.get("fill") == "#ffffff") == (mark != "diamond"):
            found += [
                (float(x), float(y) + float(r))
                for x, y, r in re.findall(r"M([\d.-]+) ([\d.-]+)l([\d.]+) \3", d)
            ]
    return found


def texts(root: ElementTree.Element) -> Iterator[tuple[str, float, float]]:
    """Each text with its place."""
    for element in root.iter(f"{SVG}text"):
        yield element.text or "", float(element.get("x", 0)), float(element.get("y", 0))


def number(text: str) -> float | None:
    try:
        return float(text.replace("\u2212", "-").replace(",", ""))
    except ValueError:
        return None


def along(root: ElementTree.Element, y: float, *, log: bool = False) -> Callable[[float], float]:
    """The scale written at this height: from a place to the number there, by two or more of its figures."""
    found = [
        (x, known) for text, x, at in texts(root) if abs(at - y) < 0.3 and (known := number(text)) is not None
    ]
    return _fitted(found, log=log)


def up(root: ElementTree.Element, x: float, between: tuple[float, float]) -> Callable[[float], float]:
    """The scale written at this side, its figures standing four pixels under their places."""
    found = [
        (y - 4, known)
        for text, at, y in texts(root)
        if abs(at - x) < 0.3 and between[0] <= y <= between[1] and (known := number(text)) is not None
    ]
    return _fitted(found)


def _fitted(found: list[tuple[float, float]], *, log: bool = False) -> Callable[[float], float]:
    assert len(found) >= 2, found
    at, numbers = np.array(found).T
    slope, start = np.polyfit(at, np.log(numbers) if log else numbers, 1)
    assert np.abs((np.log(numbers) if log else numbers) - slope * at - start).max() < abs(slope), (
        "no such scale"
    )
    return lambda place: float(np.exp(slope * place + start) if log else slope * place + start)


def vertices(path: ElementTree.Element) -> list[tuple[float, float]]:
    return [(float(x), float(y)) for x, y in re.findall(r"[ML]([\d.-]+) ([\d.-]+)", path.get("d", ""))]
