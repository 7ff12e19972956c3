"""A line's own program: takes subgroups from a source, has each judged exactly once, and tells signals.

It may be killed at any moment. What is kept in its database says what is done; everything else is done again:

1. a subgroup that comes from the source is stored, under its sequence number;
2. it is judged by the service, which changes nothing there, so that this may happen twice;
3. verdict, signals and the carry for the next subgroup are stored together, or not at all;
4. each signal is told, and then marked as told.

What is measured, and where it comes from, is in `plant.py`; what is kept in `store.py`. MES.md says what to change for
your plant.
"""

from __future__ import annotations

import argparse
import json
import re
import sqlite3
import sys
import time
from collections.abc import Mapping, Sequence
from contextlib import closing
from pathlib import Path
from typing import Any

import calls
from calls import Answer, Away, Refused, Service
from plant import CHARACTERISTICS, CannotGoOn, Characteristic, JsonLines
from store import BASELINE, Store


class Line:
    """Judges what waits. ``stopped`` names the characteristics that a person has to look at, until a restart."""

    def __init__(self, store: Store, service: Service) -> None:
        self._store = store
        self._service = service
        self._failures = 0
        self._not_before = 0.0
        self.stopped: set[str] = set()

    def work(self) -> bool:
        """Does what can be done now; whether that was everything. While the service is away, it waits its time."""
        if time.monotonic() < self._not_before:
            return False
        try:
            for one in CHARACTERISTICS.values():
                while one.name not in self.stopped and self._step(one):
                    self._failures = 0
                    self._store.tell()
        except Away as away:
            self._failures += 1
            seconds = calls.pause(self._failures, away)
            self._not_before = time.monotonic() + seconds
            print(f"WAITING {seconds:.1f} s: {away}", flush=True)
            return False
        return True

    def _step(self, one: Characteristic) -> bool:
        """Freezes limits, or judges one subgroup; False where there is nothing to do. Raises Away."""
        limits, carry, waiting = self._store.waiting(one.name)
        if len(waiting) < (1 if limits else BASELINE):
            return False
        subgroups = [sequence for sequence, _ in waiting]
        data = {name: [found["data"].get(name) for _, found in waiting] for name in one.columns}
        data["ids"] = [str(found.get("id", sequence)) for sequence, found in waiting]
        try:
            if limits is None:
                unit = {"unit": one.unit} if one.unit else {}
                body = {"characteristic": {"name": one.name, **unit}, "data": data, **one.options}
                answer = self._post(one, "limits", body)
                self._store.freeze(one.name, subgroups, answer)
                print(
                    f"FROZEN limits of {one.name}, from {BASELINE} subgroups up to {subgroups[-1]}",
                    flush=True,
                )
                for caution in answer.body["cautions"]:
                    print(f"CAUTION {one.name}: {caution['sentence']}", flush=True)
            else:
                body = {"limits": json.loads(limits), "data": data, "carry": json.loads(carry or "null")}
                self._store.judged(one.name, subgroups[0], self._post(one, "signals", body))
        except Refused as refused:
            if not refused.kind or refused.status in (401, 403, 404, 405):
                # A key or an address is to be put right; until then the line is received.
                raise Away(str(refused)) from refused
            faulty = _faulty(refused, subgroups)
            if faulty:
                self._store.put_aside(faulty, refused)
                print(f"PUT ASIDE {', '.join(map(str, faulty))} of {one.name}: {refused}", flush=True)
            else:
                self.stopped.add(one.name)
                print(f"STOPPED {one.name} at {subgroups[0]}, the others go on: {refused}", flush=True)
        return True

    def _post(self, one: Characteristic, verb: str, body: Mapping[str, Any]) -> Answer:
        return self._service.post(
            f"/v1/charts/{one.chart}/{verb}", json.dumps(body, allow_nan=False).encode()
        )


def _faulty(refused: Refused, subgroups: Sequence[int]) -> list[int]:
    """The subgroups that a refusal is about; none where it is about anything else besides."""
    pointers = [one.get("pointer", "#") for one in refused.errors]
    if refused.kind in ("contract-violation", "not-computable"):
        found = [re.match(r"#/data/\w+/(\d+)", pointer) for pointer in pointers]
        named = {subgroups[int(one[1])] for one in found if one}
        whole = all(pointer.startswith("#/data") for pointer in pointers)
        return sorted(named) if all(found) else list(subgroups) if whole and len(subgroups) == 1 else []
    return list(subgroups) if refused.status in (400, 413) and len(subgroups) == 1 else []


def main(arguments: Sequence[str] | None = None) -> int:
    """0: all judged; 1: a characteristic is stopped; 2: the program cannot go on."""
    parser = argparse.ArgumentParser(
        description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter
    )
    parser.add_argument("source", type=Path, help="file of JSON lines, one a subgroup")
    parser.add_argument(
        "--database", type=Path, default=Path("mes.sqlite"), help="what is kept (%(default)s)"
    )
    parser.add_argument("--follow", action="store_true", help="wait for more at the end of the file")
    calls.add_options(parser)
    given = parser.parse_args(arguments)
    calls.set_up_output()
    try:
        with closing(calls.from_options(given)) as called, closing(Store(given.database)) as store:
            return _run(Line(store, called), store, JsonLines(given.source, given.follow))
    except KeyboardInterrupt:
        print("ENDED by hand; a restart goes on from here", flush=True)
        return 0
    except (CannotGoOn, calls.BadOptions, OSError, sqlite3.Error) as error:
        print(f"CANNOT GO ON: {error}", file=sys.stderr)
        return 2


def _run(line: Line, store: Store, source: JsonLines) -> int:
    last = store.last()
    print(f"GOING ON after {last}" if last else "STARTING at the first subgroup", flush=True)
    store.tell()
    for subgroup in source.replay(last):
        if subgroup is not None:
            store.receive(subgroup)
        line.work()
    while not line.work():
        time.sleep(0.1)
    print(f"RECEIVED up to {store.last()}; stopped: {', '.join(sorted(line.stopped)) or 'none'}", flush=True)
    return 1 if line.stopped else 0


if __name__ == "__main__":
    sys.exit(main())
