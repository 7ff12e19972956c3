"""The plant as `mes.py` knows it: what is measured, and where it comes from. This is the file to change."""

from __future__ import annotations

import json
import time
from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any


@dataclass(frozen=True)
class Characteristic:
    """What is measured; ``columns`` are the members of a subgroup's data that its chart takes."""

    name: str
    chart: str
    columns: tuple[str, ...]
    unit: str = ""
    options: Mapping[str, Any] = field(default_factory=dict)


CHARACTERISTICS = {
    one.name: one
    for one in (
        Characteristic(
            "wall thickness", "xbar-r", ("values",), "mm", {"rules": {"published": "western-electric-1956"}}
        ),
        Characteristic("cracked cartridges", "p", ("counts", "inspected")),
        Characteristic("bubble-point pressure", "individuals", ("values",), "kPa"),
    )
}


class CannotGoOn(Exception):
    """Something that a person has to look at, in one sentence."""


@dataclass(frozen=True)
class Subgroup:
    """One subgroup as it came; ``fault`` says why it cannot be judged, where that shows at once."""

    sequence: int
    characteristic: str
    text: str
    fault: str | None = None

    @staticmethod
    def of(line: str) -> Subgroup:
        """A line of the source. Raises ValueError, KeyError and TypeError where it has no sequence number."""
        found = json.loads(line)
        sequence, name, fault = found["sequence"], found.get("characteristic"), None
        if type(sequence) is not int or not 0 < sequence < 2**63:
            raise ValueError("sequence is no number from 1")
        if (
            not isinstance(name, str)
            or name not in CHARACTERISTICS
            or not isinstance(found.get("data"), dict)
        ):
            name, fault = "", "No characteristic of this program, or no data."
        try:
            return Subgroup(sequence, name, json.dumps(found, allow_nan=False), fault)
        except ValueError:
            return Subgroup(sequence, name, json.dumps(found), "It holds what is no number.")


@dataclass(frozen=True)
class JsonLines:
    """A file that another program appends to. It stands for a PLC's ring buffer, or a message broker."""

    path: Path
    follow: bool = False

    def replay(self, last: int) -> Iterator[Subgroup | None]:
        """Subgroups in order, from number ``last`` on, that one too; None whenever there is nothing new yet."""
        newest = 0
        with self.path.open(encoding="utf-8", errors="replace") as lines:
            while True:
                before, line = lines.tell(), lines.readline()
                if line.endswith("\n"):
                    try:
                        found = Subgroup.of(line)
                    except (ValueError, KeyError, TypeError, AttributeError, RecursionError) as error:
                        print(f"PASSED OVER a line of {self.path} that cannot be read: {error!r}", flush=True)
                        continue
                    newest = found.sequence
                    if newest >= last:
                        yield found
                    continue
                if newest < last:
                    raise CannotGoOn(
                        f"{self.path} ends at {newest}, and {last} was received before: its numbers have begun anew, "
                        "or it belongs to another database."
                    )
                if not self.follow:
                    return
                lines.seek(before)  # the end, or a line that is half written
                yield None
                time.sleep(0.2)
