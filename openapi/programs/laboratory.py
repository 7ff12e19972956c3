"""The laboratory as `lims.py` knows it: where results, specifications and limits come from. This is the file to change.

A laboratory here is a folder: `results.csv` has a line for each result (batch, characteristic, result), `plan.json`
the characteristics with the members of the request that do not change from batch to batch, and its `trend.limits`
names the file of a frozen limits document.
"""

from __future__ import annotations

import csv
import json
import re
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import seals

_NUMBER = re.compile(r"<?\s*([+-]?[0-9]+(?:\.[0-9]+)?(?:[eE][+-]?[0-9]{1,2})?)")


class CannotCheck(Exception):
    """Why a batch could not be checked, in a sentence."""


@dataclass(frozen=True)
class Inputs:
    """What is checked: the characteristics of the request, all but the carries; and the results as they are written."""

    characteristics: list[dict[str, Any]]
    written: dict[str, list[str]]


def inputs_of(laboratory: Path, batch: str, keys: Path | None = None) -> Inputs:
    """What the laboratory has on a batch; with ``keys``, limits are taken with a good seal only. Raises CannotCheck."""
    try:
        plan: list[dict[str, Any]] = json.loads((laboratory / "plan.json").read_bytes())["characteristics"]
        written = _results(laboratory / "results.csv", batch, [one["name"] for one in plan])
        for one in plan:
            one.update(_read(written[one["name"]], one.get("expected_results", 1)))
            if "trend" in one:
                file = laboratory / one["trend"]["limits"]
                if keys is not None:
                    seals.check(file, keys)
                one["trend"]["limits"] = json.loads(file.read_bytes())
    except (CannotCheck, seals.BadSeal) as error:
        raise CannotCheck(str(error)) from error
    except (OSError, ValueError, KeyError, TypeError, AttributeError, csv.Error) as error:
        raise CannotCheck(f"{laboratory} cannot be read: {error!r}") from error
    return Inputs(plan, written)


def _results(file: Path, batch: str, names: Sequence[str]) -> dict[str, list[str]]:
    """The results of a batch as they are written, by characteristic. Raises CannotCheck."""
    found: dict[str, list[str]] = {name: [] for name in names}
    if len(found) < len(names):
        raise CannotCheck("The plan has two characteristics of one name.")
    with file.open(encoding="utf-8-sig", newline="") as lines:
        table = csv.DictReader(lines, strict=True)
        if not {"batch", "characteristic", "result"} <= set(table.fieldnames or ()):
            raise CannotCheck(
                f"{file} needs the columns batch, characteristic and result, separated by commas."
            )
        for number, row in enumerate(table, 2):
            if row["batch"] != batch:
                continue
            name, text = row["characteristic"], (row["result"] or "").strip()
            if name not in found:
                raise CannotCheck(f"{file}, line {number}: the plan does not know the characteristic {name}.")
            if text and not _NUMBER.fullmatch(text):
                raise CannotCheck(f"{file}, line {number}: {text} is neither a number nor one like <2.0.")
            found[name].append(text)
    if not any(found.values()):
        raise CannotCheck(f"{file} has no results of the batch {batch}.")
    return found


def _read(texts: Sequence[str], expected: int) -> dict[str, Any]:
    """Results as the request has them: null is a missing one, or one below detection (`<2.0`)."""
    numbers = [float(found[1]) if (found := _NUMBER.fullmatch(text)) else None for text in texts]
    below = [at for at, text in enumerate(texts) if text.startswith("<")]
    read: dict[str, Any] = {"results": [None if at in below else value for at, value in enumerate(numbers)]}
    if not texts:
        read["results"] = [None] * expected
    if below:  # one limit is stated for all: what is below a lower one is below the highest too
        read.update(below_detection=below, detection_limit=max(numbers[at] or 0.0 for at in below))
    return read
