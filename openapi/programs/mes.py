"""A line's own program: takes subgroups from a source, has each judged exactly once, and tells signals.

It may be killed at any moment. What is kept in its database says what is done; everything else is done again:

1. a subgroup that comes from the source is stored, under its sequence number;
2. it is judged by the service, which changes nothing there, so that this may happen twice;
3. verdict, signals and the carry for the next subgroup are stored together, or not at all;
4. each signal is told, and then marked as told.

What is measured, and where it comes from, is in `plant.py`; MES.md says what to change for your plant.
"""

from __future__ import annotations

import argparse
import json
import re
import sqlite3
import sys
import time
from collections.abc import Iterator, Mapping, Sequence
from contextlib import closing, contextmanager
from pathlib import Path
from typing import Any

import calls
from calls import Answer, Away, Refused, Service
from plant import CHARACTERISTICS, CannotGoOn, Characteristic, JsonLines, Subgroup

BASELINE = 25
"""Subgroups from which limits are fitted, once."""


# What is kept ----------------------------------------------------------------------------------------

SCHEMA = (
    "CREATE TABLE IF NOT EXISTS characteristic "
    "(name TEXT PRIMARY KEY, limits TEXT NOT NULL, evidence TEXT NOT NULL, carry TEXT)",
    # state: waiting, baseline, judged or put-aside; answer: verdict and provenance, or the problem
    "CREATE TABLE IF NOT EXISTS subgroup (sequence INTEGER PRIMARY KEY, characteristic TEXT NOT NULL, "
    "text TEXT NOT NULL, state TEXT NOT NULL, answer TEXT, request_id TEXT)",
    "CREATE INDEX IF NOT EXISTS by_state ON subgroup (characteristic, state, sequence)",
    "CREATE TABLE IF NOT EXISTS signal (sequence INTEGER, position INTEGER, characteristic TEXT NOT NULL, "
    "state TEXT NOT NULL, answer TEXT NOT NULL, told INTEGER NOT NULL DEFAULT 0, PRIMARY KEY (sequence, position))",
    "CREATE INDEX IF NOT EXISTS untold ON signal (told) WHERE told = 0",
    "CREATE TABLE IF NOT EXISTS lost (first INTEGER PRIMARY KEY, last INTEGER NOT NULL)",
)


class Store:
    """The database. Each method is one transaction: all of it happens, or nothing."""

    def __init__(self, path: Path) -> None:
        self._db = sqlite3.connect(path, isolation_level=None, timeout=30)
        for statement in SCHEMA:
            self._db.execute(statement)

    def close(self) -> None:
        """Nothing is lost without it."""
        self._db.close()

    @contextmanager
    def _transaction(self) -> Iterator[sqlite3.Connection]:
        self._db.execute("BEGIN IMMEDIATE")
        try:
            yield self._db
        except BaseException:
            self._db.execute("ROLLBACK")
            raise
        self._db.execute("COMMIT")

    def last(self) -> int:
        """The highest number received; 0 before the first."""
        return int(self._db.execute("SELECT coalesce(max(sequence), 0) FROM subgroup").fetchone()[0])

    def receive(self, one: Subgroup) -> None:
        """Stores a subgroup that is new. Raises CannotGoOn where its number was another's."""
        fault = one.fault
        with self._transaction() as db:
            known = db.execute("SELECT text FROM subgroup WHERE sequence = ?", (one.sequence,)).fetchone()
            if known is not None:
                if known[0] != one.text:
                    raise CannotGoOn(
                        f"Number {one.sequence} comes with other content than before: the source's numbers have "
                        "begun anew, or it belongs to another database."
                    )
                return
            last = self.last()
            if last and one.sequence > last + 1:
                db.execute("INSERT INTO lost VALUES (?, ?)", (last + 1, one.sequence - 1))
            elif one.sequence < last:
                fault = f"It came late, after {last}."
            db.execute(
                "INSERT INTO subgroup VALUES (?, ?, ?, ?, ?, NULL)",
                (one.sequence, one.characteristic, one.text, "put-aside" if fault else "waiting", fault),
            )
        if last and one.sequence > last + 1:
            print(f"LOST {last + 1} to {one.sequence - 1}: the source did not send them", flush=True)
        if fault:
            print(f"PUT ASIDE {one.sequence}: {fault}", flush=True)

    def waiting(self, name: str) -> tuple[str | None, str | None, list[tuple[int, dict[str, Any]]]]:
        """Limits and carry of a characteristic, and what the next call is about: one subgroup, or a baseline."""
        rows = self._db.execute(
            "SELECT limits, carry, sequence, text FROM subgroup LEFT JOIN characteristic ON name = characteristic "
            "WHERE characteristic = ? AND state = 'waiting' ORDER BY sequence LIMIT ?",
            (name, BASELINE),
        ).fetchall()
        limits, carry = rows[0][:2] if rows else (None, None)
        return limits, carry, [(row[2], json.loads(row[3])) for row in rows[: 1 if limits else None]]

    def freeze(self, name: str, subgroups: Sequence[int], answer: Answer) -> None:
        """Keeps the limits, and what speaks for them, of these subgroups."""
        body = answer.body
        with self._transaction() as db:
            evidence = {key: body[key] for key in ("diagnostics", "performance", "cautions", "provenance")}
            db.execute(
                "INSERT INTO characteristic VALUES (?, ?, ?, NULL)",
                (name, json.dumps(body["limits"]), json.dumps(evidence)),
            )
            self._settle(name, subgroups, "baseline", body["baseline"], answer)

    def judged(self, name: str, sequence: int, answer: Answer) -> None:
        """Keeps verdict, signals and carry."""
        with self._transaction() as db:
            db.execute(
                "UPDATE characteristic SET carry = ? WHERE name = ?", (json.dumps(answer.body["carry"]), name)
            )
            self._settle(name, [sequence], "judged", answer.body, answer)

    def _settle(
        self, name: str, subgroups: Sequence[int], state: str, judged: Mapping[str, Any], answer: Answer
    ) -> None:
        told = json.dumps({"verdict": judged["verdict"], "provenance": answer.body["provenance"]})
        self._mark(subgroups, state, told, answer.request_id)
        self._db.executemany(
            "INSERT INTO signal (sequence, position, characteristic, state, answer) VALUES (?, ?, ?, ?, ?)",
            [
                (subgroups[one["index"]], position, name, state, json.dumps(one))
                for position, one in enumerate(judged["signals"])
            ],
        )

    def put_aside(self, subgroups: Sequence[int], refused: Refused) -> None:
        """Takes subgroups that cannot be judged out of the line's way."""
        with self._transaction():
            self._mark(subgroups, "put-aside", json.dumps(refused.problem), None)

    def _mark(self, subgroups: Sequence[int], state: str, answer: str, request_id: str | None) -> None:
        for sequence in subgroups:
            done = self._db.execute(
                "UPDATE subgroup SET state = ?, answer = ?, request_id = ? WHERE sequence = ? AND state = 'waiting'",
                (state, answer, request_id, sequence),
            )
            if done.rowcount != 1:
                raise CannotGoOn("Another program is at work on this database.")

    def tell(self) -> None:
        """Prints each signal that was not told: at least once, and twice only if killed before it is marked."""
        for sequence, position, name, state, text in self._db.execute(
            "SELECT sequence, position, characteristic, state, answer FROM signal WHERE told = 0 ORDER BY 1, 2"
        ).fetchall():
            one = json.loads(text)
            where = f"{name} {one['id']} ({sequence}, {one['panel']})"
            print(
                f"SIGNAL {'in the baseline, ' * (state == 'baseline')}{where}: {one['sentence']}", flush=True
            )
            self._db.execute(
                "UPDATE signal SET told = 1 WHERE sequence = ? AND position = ?", (sequence, position)
            )


# What is done ----------------------------------------------------------------------------------------


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
            if refused.status in (401, 403, 404, 405):
                raise CannotGoOn(str(refused)) from refused
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
