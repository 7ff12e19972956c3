"""What `mes.py` keeps, in SQLite: all that a restart needs to go on. Each method is one transaction."""

from __future__ import annotations

import json
import sqlite3
from collections.abc import Iterator, Mapping, Sequence
from contextlib import contextmanager
from pathlib import Path
from typing import Any

from calls import Answer, Refused
from plant import CannotGoOn, Subgroup

BASELINE = 25
"""Subgroups from which limits are fitted, once."""

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
    """The database of one line. Of each method all happens, or nothing."""

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
