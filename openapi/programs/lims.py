"""A laboratory's own program: has one batch checked, and keeps what was said of it in a trail that only grows.

Exit status: 0 supports release; 1 needs review, or does not support release; 2 could not be checked.

Run again, it says the same and checks nothing: a batch is checked once. Where its results, its specification or its
limits were changed since, it says so and stops, unless --again gives the reason for another check. It may be killed at
any moment: disposition, reasons and the carries for the next batch are stored together, or not at all.

Where results, specifications and limits come from is in `laboratory.py`, the page to sign in `report.py`; LIMS.md says
what to change for your laboratory.
"""

from __future__ import annotations

import argparse
import json
import re
import sqlite3
import sys
import time
from collections.abc import Iterator, Sequence
from contextlib import closing
from datetime import UTC, datetime
from hashlib import sha256
from pathlib import Path
from typing import Any

import calls
from calls import Answer, Away, Refused, Service
from laboratory import CannotCheck, Inputs, inputs_of
from report import Entry, write_report

# What is kept ----------------------------------------------------------------------------------------

TABLES = {
    "disposition": "number INTEGER PRIMARY KEY, batch TEXT NOT NULL, checked_at TEXT NOT NULL, again TEXT, "
    "disposition TEXT NOT NULL, written TEXT NOT NULL, request TEXT NOT NULL, request_digest TEXT NOT NULL, "
    "answer TEXT NOT NULL, request_id TEXT NOT NULL",
    "reason": "number INTEGER, characteristic TEXT, severity TEXT, code TEXT, sentence TEXT",
    "limits": "number INTEGER, characteristic TEXT, digest TEXT",
    "carry": "number INTEGER, characteristic TEXT, limits TEXT, carry TEXT",
}


class Trail:
    """The database. It refuses to change or to lose what it has."""

    def __init__(self, path: Path) -> None:
        self._db = sqlite3.connect(path, isolation_level=None, timeout=30)
        for table, columns in TABLES.items():
            self._db.execute(f"CREATE TABLE IF NOT EXISTS {table} ({columns})")
            for verb in ("UPDATE", "DELETE"):
                self._db.execute(
                    f"CREATE TRIGGER IF NOT EXISTS {table}_{verb} BEFORE {verb} ON {table} "
                    "BEGIN SELECT RAISE(ABORT, 'the trail only grows'); END"
                )

    def close(self) -> None:
        """Nothing is lost without it."""
        self._db.close()

    def last(self) -> int:
        """Number of the last entry; 0 before the first."""
        return int(self._db.execute("SELECT coalesce(max(number), 0) FROM disposition").fetchone()[0])

    def entry(self, batch: str) -> Entry | None:
        """The last entry of a batch. Raises CannotCheck where it is not as it was stored."""
        row = self._db.execute(
            "SELECT * FROM disposition WHERE batch = ? ORDER BY number DESC LIMIT 1", (batch,)
        ).fetchone()
        if row is None:
            return None
        found = Entry(*row)
        if found.request_digest != digest_of(found.request):
            raise CannotCheck(f"Entry {found.number} of the trail was changed after it was stored.")
        return found

    def first(self, batch: str) -> int:
        """Number of the first entry of a batch; of the next entry where there is none."""
        row = self._db.execute("SELECT min(number) FROM disposition WHERE batch = ?", (batch,)).fetchone()
        return int(row[0] or self.last() + 1)

    def carry(self, batch: str, name: str, limits: str) -> dict[str, Any] | None:
        """What the batches before this one left under these limits; of other limits, nothing belongs here."""
        row = self._db.execute(
            "SELECT carry FROM carry WHERE characteristic = ? AND limits = ? AND number < ? "
            "ORDER BY number DESC LIMIT 1",
            (name, limits, self.first(batch)),
        ).fetchone()
        found: dict[str, Any] | None = json.loads(row[0]) if row else None
        return found

    def keep(self, seen: int, entry: Entry) -> bool:
        """Stores an entry with all that belongs to it; nothing, where others came since the one that was seen last."""
        answer = json.loads(entry.answer)
        self._db.execute("BEGIN IMMEDIATE")
        try:
            if self.last() != seen:
                self._db.execute("ROLLBACK")
                return False
            # Later batches were judged with what this one had left when it was first checked: that stays.
            is_last = not self._db.execute(
                "SELECT 1 FROM disposition WHERE number > ? AND batch <> ?",
                (self.first(entry.batch), entry.batch),
            ).fetchone()
            self._insert("disposition", tuple(vars(entry).values()))
            for one in answer["characteristics"]:
                for reason in one["reasons"]:
                    told = (reason["severity"], reason["code"], reason["sentence"])
                    self._insert("reason", (entry.number, one["name"], *told))
                if one["trend"] is not None:
                    carry = one["trend"]["carry"]
                    self._insert("limits", (entry.number, one["name"], carry["limits"]))
                    if is_last:
                        self._insert("carry", (entry.number, one["name"], carry["limits"], json.dumps(carry)))
            self._db.execute("COMMIT")
        except BaseException:
            self._db.execute("ROLLBACK")
            raise
        return True

    def _insert(self, table: str, values: tuple[Any, ...]) -> None:
        self._db.execute(f"INSERT INTO {table} VALUES ({', '.join('?' * len(values))})", values)


def digest_of(request: str) -> str:
    """The digest under which the service's answer names a request."""
    return "sha-256:" + sha256(request.encode()).hexdigest()


# What is done ----------------------------------------------------------------------------------------


def check(
    trail: Trail, called: Service, batch: str, inputs: Inputs, again: str | None, patience: float
) -> Entry:
    """The entry of a batch: the one there is, or a new one. Raises CannotCheck."""
    while True:
        seen, known = trail.last(), trail.entry(batch)
        if known is not None:
            before = Inputs(json.loads(known.request)["characteristics"], json.loads(known.written))
            changed = list(_changed(before, inputs))
            if not changed:
                return known
            if not again:
                raise CannotCheck(
                    f"{batch} was checked on {known.checked_at} (entry {known.number}). Changed since: "
                    f"{'; '.join(changed)}. To check it again, give the reason with --again."
                )
        sent = json.loads(json.dumps(inputs.characteristics))
        for one in sent:
            if "trend" in one:
                one["trend"]["carry"] = trail.carry(
                    batch, one["name"], one["trend"]["limits"].get("digest", "")
                )
        request = json.dumps({"batch": batch, "characteristics": sent}, ensure_ascii=False)
        answer = _call(called, request, list(inputs.written), patience)
        entry = Entry(
            seen + 1,
            batch,
            datetime.now(UTC).isoformat(timespec="seconds"),
            again if known else None,
            answer.body["disposition"],
            json.dumps(inputs.written, ensure_ascii=False),
            request,
            digest_of(request),
            json.dumps(answer.body, ensure_ascii=False),
            answer.request_id,
        )
        if answer.body["provenance"]["request_digest"] != entry.request_digest:
            raise CannotCheck("The answer is of another request than the one that was sent.")
        if trail.keep(seen, entry):
            return entry


def _changed(before: Inputs, now: Inputs) -> Iterator[str]:
    """What differs between inputs, the carries aside."""
    old, new = _members(before), _members(now)
    for name in dict.fromkeys((*old, *new)):
        was, is_now = old.get(name, {}), new.get(name, {})
        members = [key for key in dict.fromkeys((*was, *is_now)) if was.get(key) != is_now.get(key)]
        if members:
            yield f"{name} ({', '.join(members)})"


def _members(inputs: Inputs) -> dict[str, dict[str, Any]]:
    found = {one["name"]: {**one, "results": inputs.written[one["name"]]} for one in inputs.characteristics}
    for one in found.values():
        for key, value in one.pop("trend", {}).items():
            if key != "carry":
                one[f"trend.{key}"] = value
    return found


def _call(called: Service, request: str, names: Sequence[str], patience: float) -> Answer:
    """The answer, waited for as long as patience lasts. Raises CannotCheck."""
    until, failures = time.monotonic() + patience, 0
    while True:
        try:
            return called.post("/v1/release-checks", request.encode())
        except Away as away:
            failures += 1
            wait = calls.pause(failures, away)
            if time.monotonic() + wait > until:
                raise CannotCheck(f"{away}; nothing was stored, run it again later.") from away
            time.sleep(wait)
        except Refused as refused:
            said = str(refused)
            for at, name in enumerate(names):
                said = re.sub(rf"#/characteristics/{at}(?!\d)/?", f"{name}: ", said)
            raise CannotCheck(f"The service refuses this batch: {said}") from refused


def main(arguments: Sequence[str] | None = None) -> int:
    """The exit status."""
    parser = argparse.ArgumentParser(
        description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter
    )
    parser.add_argument("batch")
    parser.add_argument(
        "--laboratory", type=Path, required=True, help="folder of plan.json, results.csv and limits documents"
    )
    parser.add_argument("--database", type=Path, default=Path("lims.sqlite"), help="the trail (%(default)s)")
    parser.add_argument(
        "--reports", type=Path, default=Path("reports"), help="folder for reports (%(default)s)"
    )
    parser.add_argument("--keys", type=Path, help="public keys (JWK set): take limits with a good seal only")
    parser.add_argument("--again", metavar="REASON", help="why a batch with changed inputs is checked again")
    parser.add_argument(
        "--patience", type=float, default=60, help="seconds to wait for a service that is away"
    )
    calls.add_options(parser)
    given = parser.parse_args(arguments)
    calls.set_up_output()
    try:
        inputs = inputs_of(given.laboratory, given.batch, given.keys)
        with closing(calls.from_options(given)) as called, closing(Trail(given.database)) as trail:
            entry = check(trail, called, given.batch, inputs, given.again, given.patience)
        file = write_report(given.reports, entry)
    except (CannotCheck, calls.BadOptions, OSError, sqlite3.Error) as error:
        print(f"COULD NOT BE CHECKED: {error}", file=sys.stderr)
        return 2
    print(f"{entry.batch} {entry.disposition}: {file}", flush=True)
    return 0 if entry.disposition == "supports-release" else 1


if __name__ == "__main__":
    sys.exit(main())
