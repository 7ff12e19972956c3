"""The LIMS of the examples, against the real service, killed between any two of its steps."""

from __future__ import annotations

import json
import re
import shutil
import sqlite3
import subprocess
from pathlib import Path
from typing import Any

import pytest

from assignable.documents.seal import new_key, public_set
from programs.playing import PLAIN, PROGRAMS, ROOT, Server, command, killed, rows, run, started

SAMPLE = PROGRAMS / "sample" / "laboratory"
BATCHES = ("B-201", "B-202", "B-203", "B-204", "B-205")
OF_EACH_RUN = r"checked \d{4}-\S+|Request id \S+"
"""What a report says that differs from run to run."""


class Laboratory:
    """A copy of the sample, and the program run on it."""

    def __init__(self, folder: Path, server: Server) -> None:
        self.sources = folder / "laboratory"
        self.database = folder / "lims.sqlite"
        self.reports = folder / "reports"
        self.server = server
        shutil.copytree(SAMPLE, self.sources)

    def arguments(self, batch: str, *more: object) -> list[str]:
        given = ("--database", self.database, "--reports", self.reports, "--address", self.server.address)
        return [str(one) for one in (batch, "--laboratory", self.sources, *given, *more)]

    def run(self, batch: str, *more: object) -> subprocess.CompletedProcess[str]:
        return run("lims", *self.arguments(batch, *more))

    def change(self, file: str, old: str, new: str) -> None:
        text = (self.sources / file).read_text(encoding="utf-8")
        assert old in text
        (self.sources / file).write_text(text.replace(old, new, 1), encoding="utf-8")

    def kept(self) -> list[list[tuple[Any, ...]]]:
        """All that the trail says, but for times and ids of requests, which differ by nature."""
        said = "SELECT number, batch, again, disposition, written, request, request_digest, answer FROM disposition"
        return [rows(self.database, said)] + [
            rows(self.database, f"SELECT * FROM {table} ORDER BY 1, 2")
            for table in ("reason", "limits", "carry")
        ]

    def reported(self) -> dict[str, str]:
        """All reports, but for what differs from run to run."""
        return {
            file.name: re.sub(OF_EACH_RUN, "", file.read_text(encoding="utf-8"))
            for file in self.reports.iterdir()
            if file.suffix == ".txt"
        }

    def carries(self, batch: str) -> dict[str, Any]:
        """The carries that the last request of a batch was sent with."""
        (*_, (text,)) = rows(self.database, f"SELECT request FROM disposition WHERE batch = '{batch}'")
        characteristics = json.loads(text)["characteristics"]
        return {one["name"]: one["trend"]["carry"] for one in characteristics if "trend" in one}


@pytest.fixture
def laboratory(tmp_path: Path, server: Server) -> Laboratory:
    return Laboratory(tmp_path, server)


def test_each_batch_gets_the_disposition_it_deserves(laboratory: Laboratory) -> None:
    done = {batch: laboratory.run(batch) for batch in BATCHES}
    assert [one.returncode for one in done.values()] == [0, 1, 1, 1, 1], [one.stderr for one in done.values()]
    assert all("request id" in one.stderr for one in done.values())
    assert [row[3] for row in laboratory.kept()[0]] == [
        "supports-release",
        "needs-review",
        "does-not-support-release",
        "needs-review",
        "needs-review",
    ]
    reasons = [(row[0], row[1], row[3]) for row in laboratory.kept()[1]]
    assert reasons == [
        (2, "wall thickness", "out-of-trend"),
        (3, "leachable lead", "out-of-specification"),
        (4, "bubble-point pressure", "in-guard-band"),
        (5, "length", "missing-results"),
        (5, "length", "too-few-results"),
    ]
    for number, batch in enumerate(BATCHES, 1):
        page = (laboratory.reports / f"{number:05d}-{batch}.txt").read_text(encoding="utf-8")
        assert "A verdict informs a qualified person's decision" in page
        assert "signature" in page
        for (sentence,) in rows(laboratory.database, f"SELECT sentence FROM reason WHERE number = {number}"):
            assert sentence in page
        for digest, request in rows(
            laboratory.database,
            f"SELECT digest, request_digest FROM limits JOIN disposition USING (number) WHERE number = {number}",
        ):
            assert digest in page
            assert request in page
    assert "<2.0  2.1  <1.5" in (laboratory.reports / "00001-B-201.txt").read_text(encoding="utf-8")

    # What went into each check: the carry that the batch before it left, and in the end what all together leave.
    left = {(number, name): json.loads(carry) for number, name, _, carry in laboratory.kept()[3]}
    assert all(carry is None for carry in laboratory.carries("B-201").values())
    for before, batch in enumerate(BATCHES[1:], 1):
        assert laboratory.carries(batch) == {name: left[before, name] for name in laboratory.carries(batch)}
    assert left[5, "wall thickness"]["points"] == 5
    sent = [json.loads(row[5])["characteristics"][2] for row in laboratory.kept()[0]]
    body = {"limits": sent[0]["trend"]["limits"], "data": {"values": [one["results"] for one in sent]}}
    assert laboratory.server.post("/v1/charts/xbar-r/signals", body)["carry"] == left[5, "wall thickness"]


def test_a_batch_is_checked_once(laboratory: Laboratory) -> None:
    """Run again it says the same, with nobody there to ask."""
    first = laboratory.run("B-202")
    kept, reported = laboratory.kept(), laboratory.reported()
    shutil.rmtree(laboratory.reports)
    laboratory.server = Server()  # never started
    again = laboratory.run("B-202")
    assert (again.returncode, again.stdout) == (first.returncode, first.stdout) == (1, first.stdout)
    assert laboratory.kept() == kept
    assert laboratory.reported() == reported


@pytest.mark.parametrize(
    ("file", "old", "new", "told"),
    [
        ("results.csv", "B-201,leachable lead,2.1", "B-201,leachable lead,1.1", "leachable lead (results)"),
        ("results.csv", "B-201,leachable lead,2.1", "B-201,leachable lead,2.10", "leachable lead (results)"),
        ("plan.json", '"upper": 5.0', '"upper": 6.0', "leachable lead (specification)"),
        ("plan.json", '"point": "average"', '"point": "each"', "bubble-point pressure (trend.point)"),
        ("limits/wall-thickness.json", '"mm"', '"cm"', "wall thickness (trend.limits)"),
    ],
)
def test_inputs_that_were_changed_are_noticed(
    laboratory: Laboratory, file: str, old: str, new: str, told: str
) -> None:
    assert laboratory.run("B-201").returncode == 0
    kept = laboratory.kept()
    laboratory.change(file, old, new)
    done = laboratory.run("B-201")
    assert done.returncode == 2
    assert f"Changed since: {told}." in done.stderr
    assert laboratory.kept() == kept


def test_a_check_with_a_reason_comes_beside_the_first(laboratory: Laboratory) -> None:
    for batch in ("B-201", "B-203"):
        laboratory.run(batch)
    laboratory.change("results.csv", "B-203,leachable lead,5.6", "B-203,leachable lead,3.6")
    for _ in range(2):  # a second time nothing more is done
        assert laboratory.run("B-203", "--again", "laboratory error, retested under OOS-17").returncode == 0
    assert [row[:4] for row in laboratory.kept()[0]] == [
        (1, "B-201", None, "supports-release"),
        (2, "B-203", None, "does-not-support-release"),
        (3, "B-203", "laboratory error, retested under OOS-17", "supports-release"),
    ]
    assert "retested under OOS-17" in (laboratory.reports / "00003-B-203.txt").read_text(encoding="utf-8")
    assert "DOES NOT SUPPORT" in (laboratory.reports / "00002-B-203.txt").read_text(encoding="utf-8")

    # A batch that later ones followed is judged as it was then, and does not change what they were judged with.
    laboratory.change("results.csv", "B-201,wall thickness,2.497", "B-201,wall thickness,2.500")
    assert laboratory.run("B-201", "--again", "misread").returncode == 0
    assert all(carry is None for carry in laboratory.carries("B-201").values())
    assert {row[0] for row in laboratory.kept()[3]} == {1, 2, 3}
    laboratory.run("B-202")
    left = {(row[0], row[1]): json.loads(row[3]) for row in laboratory.kept()[3]}
    assert laboratory.carries("B-202")["wall thickness"] == left[3, "wall thickness"]
    assert left[5, "wall thickness"]["points"] == 3


def test_other_limits_start_afresh(laboratory: Laboratory) -> None:
    laboratory.run("B-201")
    request = json.loads((ROOT / "openapi" / "examples" / "xbar-r-limits.request.json").read_bytes())
    del request["rules"]
    other = laboratory.server.post("/v1/charts/xbar-r/limits", request)
    (laboratory.sources / "limits" / "wall-thickness.json").write_text(
        json.dumps(other["limits"]), encoding="utf-8"
    )
    assert laboratory.run("B-202").returncode == 1
    carries = laboratory.carries("B-202")
    assert carries["wall thickness"] is None
    assert carries["bubble-point pressure"] is not None


@pytest.mark.parametrize(
    ("file", "old", "new", "told"),
    [
        ("limits/wall-thickness.json", "2.515033317552205", "2.525", "wall thickness: trend/limits/digest"),
        ("plan.json", '"expected_results"', '"expected"', "bubble-point pressure: expected"),
        ("plan.json", '"name": "bore"', '"name": "mass"', "two characteristics of one name"),
        ("plan.json", '"characteristics"', '"all"', "cannot be read"),
        ("results.csv", "B-201,bore,", "B-201,bor,", "does not know the characteristic bor."),
        ("results.csv", "B-201,leachable lead,2.1", "B-201,leachable lead,nan", "nan is neither a number"),
        ("results.csv", "B-201,leachable lead,2.1", "B-201,leachable lead,>2.1", ">2.1 is neither a number"),
        ("results.csv", "B-201,leachable lead,2.1", 'B-201,leachable lead,"2,1"', "2,1 is neither a number"),
        ("results.csv", "batch,", "Charge,", "needs the columns batch, characteristic and result"),
    ],
)
def test_what_cannot_be_checked_is_told(
    laboratory: Laboratory, file: str, old: str, new: str, told: str
) -> None:
    laboratory.change(file, old, new)
    done = laboratory.run("B-201")
    assert done.returncode == 2
    assert told in done.stderr.splitlines()[-1]
    assert not laboratory.reports.exists()
    assert not laboratory.database.exists() or laboratory.kept() == [[], [], [], []]


def test_nothing_is_checked_where_nothing_is(laboratory: Laboratory, tmp_path: Path) -> None:
    assert "no results of the batch B-999" in laboratory.run("B-999").stderr
    assert laboratory.run("B-201", "--address", "nowhere").returncode == 2
    assert laboratory.run("B-201", "--key-file", tmp_path / "gone").returncode == 2
    assert laboratory.run("B-201", "--address", f"{laboratory.server.address}/elsewhere").returncode == 2
    laboratory.sources = tmp_path / "gone"
    assert laboratory.run("B-201").returncode == 2


def test_a_characteristic_without_results_needs_review(laboratory: Laboratory) -> None:
    text = (laboratory.sources / "results.csv").read_text(encoding="utf-8")
    kept = "".join(
        line for line in text.splitlines(keepends=True) if not line.startswith(("B-201,mass", "B-201,wall"))
    )
    (laboratory.sources / "results.csv").write_text(kept, encoding="utf-8-sig")
    assert laboratory.run("B-201").returncode == 1
    assert {row[1] for row in laboratory.kept()[1]} == {"mass", "wall thickness"}


def test_a_service_that_is_away_is_waited_for(laboratory: Laboratory) -> None:
    laboratory.server = Server()
    done = laboratory.run("B-201", "--patience", "0.8")
    assert done.returncode == 2
    assert "cannot be reached" in done.stderr.splitlines()[-1]
    assert laboratory.kept() == [[], [], [], []]
    with started("lims", *laboratory.arguments("B-201", "--patience", "30")) as process:
        try:
            assert process.stdout is not None
            assert "failed" in process.stdout.readline()
            laboratory.server.start()
            said = process.stdout.read()
        finally:
            laboratory.server.kill()
    assert process.returncode == 0
    assert said.splitlines()[-1].startswith("B-201 supports-release")


def test_killed_at_every_step(laboratory: Laboratory, tmp_path: Path, server: Server) -> None:
    """From an empty trail, and as a later batch."""

    def scenario(
        name: str, start: Laboratory | None, *kill_at: int | None
    ) -> tuple[Laboratory, dict[str, Any]]:
        (tmp_path / name).mkdir()
        made = Laboratory(tmp_path / name, server)
        batch = "B-201"
        if start is not None:
            shutil.copy(start.database, made.database)
            shutil.copytree(start.reports, made.reports)
            batch = "B-202"
        output = tmp_path / name / "said.txt"
        return made, {"arguments": made.arguments(batch), "output": output, "kill_at": kill_at}

    assert laboratory.run("B-201").returncode == 0
    for start, status in ((None, 0), (laboratory, 1)):
        title = "later" if start else "first"
        whole, asked = scenario(f"{title}-whole", start, None)
        (((ended, steps),),) = killed("lims", [asked])
        assert ended == status
        assert steps > 20
        made = [scenario(f"{title}-{n}", start, n, None) for n in range(1, steps + 1)]
        done = killed("lims", [asked for _, asked in made])
        for n, ((one, _), (death, recovery)) in enumerate(zip(made, done, strict=True), 1):
            assert death == (-9, n)
            assert recovery[0] == status
            assert one.kept() == whole.kept(), n
            assert one.reported() == whole.reported(), n


def test_the_trail_only_grows(laboratory: Laboratory) -> None:
    laboratory.run("B-202")
    connection = sqlite3.connect(laboratory.database)
    for table in ("disposition", "reason", "limits", "carry"):
        for statement in (f"DELETE FROM {table}", f"UPDATE {table} SET number = 7"):
            with pytest.raises(sqlite3.IntegrityError, match="only grows"):
                connection.execute(statement)
    connection.execute("DROP TRIGGER disposition_UPDATE")
    connection.execute("UPDATE disposition SET request = replace(request, '2.531', '2.501')")
    connection.commit()
    connection.close()
    done = laboratory.run("B-202")
    assert done.returncode == 2
    assert "changed after it was stored" in done.stderr


def test_two_at_once_do_not_lose_a_carry(laboratory: Laboratory) -> None:
    words = [command("lims", *laboratory.arguments(batch)) for batch in BATCHES]
    processes = [
        subprocess.Popen(one, stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL, env=PLAIN)
        for one in words
    ]
    assert sorted(process.wait(30) for process in processes) == [0, 1, 1, 1, 1]
    left = [json.loads(row[3])["points"] for row in laboratory.kept()[3] if row[1] == "wall thickness"]
    assert left == [1, 2, 3, 4, 5]


def test_limits_are_taken_with_a_good_seal_only(laboratory: Laboratory, tmp_path: Path) -> None:
    key = new_key("kiln-a")
    (tmp_path / "keys.jwk").write_text(json.dumps(key), encoding="utf-8")
    keys = tmp_path / "public.json"
    keys.write_text(json.dumps(public_set([key])), encoding="utf-8")
    examples = ROOT / "openapi" / "examples"
    files = {"individuals": "bubble-point-pressure", "xbar-r": "wall-thickness"}

    done = laboratory.run("B-201", "--keys", keys)
    assert done.returncode == 2
    assert "bubble-point-pressure.json has no seal." in done.stderr

    laboratory.server = Server(
        ASSIGNABLE_SEALING_KEYS=str(tmp_path / "keys.jwk"), ASSIGNABLE_REQUIRE_SEAL="yes"
    )
    laboratory.server.start()
    try:
        for chart, name in files.items():
            request = json.loads((examples / f"{chart}-limits.request.json").read_bytes())
            limits = laboratory.server.post(f"/v1/charts/{chart}/limits", request)["limits"]
            (laboratory.sources / "limits" / f"{name}.json").write_text(json.dumps(limits), encoding="utf-8")
        assert laboratory.run("B-201", "--keys", keys).returncode == 0
        assert "sealed by kiln-a" in (laboratory.reports / "00001-B-201.txt").read_text(encoding="utf-8")
    finally:
        laboratory.server.kill()
    laboratory.change("limits/wall-thickness.json", "2.5150", "2.5160")
    done = laboratory.run("B-202", "--keys", keys)
    assert done.returncode == 2
    assert "wall-thickness.json was changed after it was sealed." in done.stderr
    keys.write_text(json.dumps(public_set([new_key("kiln-b")])), encoding="utf-8")
    assert "sealed with the key kiln-a, which is not in" in laboratory.run("B-202", "--keys", keys).stderr
