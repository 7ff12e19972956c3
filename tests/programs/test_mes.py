"""The MES of the examples, against the real service, killed between any two of its steps."""

from __future__ import annotations

import json
import random
import re
import shutil
import sqlite3
import time
from collections import Counter
from pathlib import Path
from typing import Any

import pytest

from programs.playing import PATIENCE_SECONDS, PROGRAMS, Server, killed, rows, run, started

LINES = (PROGRAMS / "sample" / "line.jsonl").read_text(encoding="utf-8").splitlines(keepends=True)
CHARTS = {"wall thickness": "xbar-r", "cracked cartridges": "p", "bubble-point pressure": "individuals"}
FAULTY = 88
"""The subgroup whose gauge gave a text."""


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    (tmp_path / "line.jsonl").write_text("".join(LINES), encoding="utf-8")
    return tmp_path


def kept(database: Path) -> list[list[tuple[Any, ...]]]:
    """All that a database says, but for the ids of requests, which differ by nature."""
    return [
        rows(database, "SELECT name, limits, evidence, carry FROM characteristic ORDER BY name"),
        [
            (*row[:3], "a problem" if row[2] == "put-aside" else row[3])
            for row in rows(
                database, "SELECT sequence, characteristic, state, answer FROM subgroup ORDER BY 1"
            )
        ],
        rows(
            database,
            "SELECT sequence, position, characteristic, state, answer, told FROM signal ORDER BY 1, 2",
        ),
        rows(database, "SELECT * FROM lost"),
    ]


def told(output: str) -> Counter[str]:
    return Counter(line for line in output.splitlines() if line.startswith("SIGNAL"))


@pytest.fixture(scope="module")
def undisturbed(server: Server, tmp_path_factory: pytest.TempPathFactory) -> tuple[Any, Counter[str]]:
    """What a run that nothing happens to keeps and tells."""
    folder = tmp_path_factory.mktemp("undisturbed")
    database = folder / "mes.sqlite"
    done = run("mes", PROGRAMS / "sample" / "line.jsonl", "--database", database, "--address", server.address)
    assert done.returncode == 0, done.stderr
    assert "request id" in done.stderr
    return kept(database), told(done.stdout)


def test_each_subgroup_is_judged_as_one_call_judges_all(server: Server, undisturbed: tuple[Any, Any]) -> None:
    (characteristics, subgroups, signals, lost), said = undisturbed
    assert not lost
    assert [row[0] for row in subgroups] == list(range(1, len(LINES) + 1))
    assert Counter(row[2] for row in subgroups) == {"baseline": 75, "judged": 26, "put-aside": 1}
    assert [row[0] for row in subgroups if row[2] == "put-aside"] == [FAULTY]
    assert said.total() == len(signals) >= 4
    assert {row[2] for row in signals} == set(CHARTS)

    sent = [json.loads(line) for line in LINES]
    for name, limits, _, carry in characteristics:
        mine = [one for one in sent if one["characteristic"] == name and one["sequence"] != FAULTY]
        columns = {column: [one["data"][column] for one in mine] for column in mine[0]["data"]} | {
            "ids": [one["id"] for one in mine]
        }
        first, rest = (
            {key: column[part] for key, column in columns.items()} for part in (slice(25), slice(25, None))
        )
        document = json.loads(limits)
        options = {"rules": {"published": "western-electric-1956"}} if name == "wall thickness" else {}
        body = {"characteristic": document["characteristic"], "data": first, **options}
        fitted = server.post(f"/v1/charts/{CHARTS[name]}/limits", body)
        assert fitted["limits"] == document
        whole = server.post(f"/v1/charts/{CHARTS[name]}/signals", {"limits": document, "data": rest})
        assert json.loads(carry) == whole["carry"]
        numbers = [one["sequence"] for one in mine]
        expected = [
            (numbers[at + one["index"]], one["rule"], one["panel"], one["side"], one["sentence"], one["id"])
            for at, found in ((0, fitted["baseline"]), (25, whole))
            for one in found["signals"]
        ]
        found = [
            (row[0], *(json.loads(row[4])[key] for key in ("rule", "panel", "side", "sentence", "id")))
            for row in signals
            if row[2] == name
        ]
        assert found == expected


def numbered(line: str, sequence: int) -> str:
    return json.dumps({**json.loads(line), "sequence": sequence}) + "\n"


def test_killed_at_every_step(server: Server, folder: Path) -> None:
    """From the last subgroup of a baseline on: limits frozen, judgements, signals, one put aside, one lost."""
    before, early, late = folder / "before.sqlite", folder / "early.jsonl", folder / "late.jsonl"
    last_of_a_baseline = 74
    known = [*LINES[: last_of_a_baseline - 1], numbered(LINES[last_of_a_baseline], last_of_a_baseline)]
    early.write_text("".join(known), encoding="utf-8")
    arguments = ("--address", server.address, "--database")
    assert run("mes", early, *arguments, before).returncode == 0
    coming = {last_of_a_baseline: 75, FAULTY: 76, 97: 77, 95: 79, 100: 80}
    late.write_text(
        "".join([known[-1], *(numbered(LINES[one - 1], number) for one, number in coming.items())]),
        encoding="utf-8",
    )

    def scenario(name: str, *kill_at: int | None) -> dict[str, Any]:
        shutil.copy(before, folder / f"{name}.sqlite")
        output = folder / f"{name}.txt"
        return {
            "arguments": [str(late), *arguments, str(folder / f"{name}.sqlite")],
            "output": output,
            "kill_at": kill_at,
        }

    (((status, steps),),) = killed("mes", [scenario("whole", None)])
    assert status == 0
    assert steps > 60
    expected, said = kept(folder / "whole.sqlite"), told((folder / "whole.txt").read_text())
    assert [row[2] for row in expected[1][74:]] == ["baseline", "put-aside", "judged", "judged", "judged"]
    assert expected[3] == [(78, 78)]
    assert said.total() >= 2

    chance = random.Random(20260302)
    # After each death another during the recovery, wherever that falls.
    done = killed("mes", [scenario(str(n), n, chance.randint(1, 30), None) for n in range(1, steps + 1)])
    for n, processes in enumerate(done, 1):
        assert processes[0] == (-9, n)
        assert processes[-1][0] == 0
        assert kept(folder / f"{n}.sqlite") == expected, n
        again = told((folder / f"{n}.txt").read_text())
        assert set(again) == set(said), n
        assert (again - said).total() <= 2, n  # killed after a line was printed, before it was marked as told
    assert sum(processes[1][0] == -9 for processes in done) > steps // 4


def test_killed_at_random_all_the_way(server: Server, folder: Path, undisturbed: tuple[Any, Any]) -> None:
    chance = random.Random(7)
    database = folder / "mes.sqlite"
    plan: list[int | None] = [chance.randint(4, 60) for _ in range(60)]
    asked = {
        "arguments": [str(folder / "line.jsonl"), "--database", str(database), "--address", server.address],
        "output": folder / "said.txt",
        "kill_at": [*plan, None],
    }
    (processes,) = killed("mes", [asked])
    assert sum(status == -9 for status, _ in processes) >= 20
    assert processes[-1][0] == 0
    assert kept(database) == undisturbed[0]
    said = (folder / "said.txt").read_text()
    assert set(told(said)) == set(undisturbed[1])
    assert said.count("GOING ON after") > 20


def test_killed_from_outside(server: Server, folder: Path, undisturbed: tuple[Any, Any]) -> None:
    """As a person starts it, and as the kernel ends it: at moments that nobody chose."""
    chance = random.Random(11)
    database, kills = folder / "mes.sqlite", 0
    words = ("mes", folder / "line.jsonl", "--database", database, "--address", server.address)
    for _ in range(12):
        with started(*words) as process:
            assert process.stdout is not None
            process.stdout.readline()  # it has begun
            time.sleep(chance.uniform(0.0, 0.05))
            process.kill()
        kills += process.returncode == -9
    assert kills >= 3
    done = run("mes", folder / "line.jsonl", "--database", database, "--address", server.address)
    assert done.returncode == 0, done.stderr
    assert kept(database) == undisturbed[0]


def test_the_service_is_killed_under_it(folder: Path, undisturbed: tuple[Any, Any]) -> None:
    """The line is received while nobody judges, and judged when the service is back."""
    server, database, source = Server(), folder / "mes.sqlite", folder / "feed.jsonl"
    server.start()
    try:
        source.write_text("".join(LINES[:80]), encoding="utf-8")
        words = ("mes", source, "--follow", "--database", database, "--address", server.address)
        with started(*words) as process:
            assert process.stdout is not None
            lines = iter(process.stdout.readline, "")
            assert any(line.startswith("FROZEN limits of bubble-point") for line in lines)
            until(database, "SELECT count(*) FROM subgroup WHERE state = 'judged'", 5)
            server.kill()
            with source.open("a", encoding="utf-8") as file:
                file.write("".join(LINES[80:])[:-20])  # the last line is half written
            assert any(line.startswith("WAITING") for line in lines)
            until(database, "SELECT max(sequence) FROM subgroup", 101)
            server.start()
            with source.open("a", encoding="utf-8") as file:
                file.write("".join(LINES)[-20:])
            until(database, "SELECT count(*) FROM subgroup WHERE state = 'judged'", 26)
            until(database, "SELECT count(*) FROM signal WHERE told = 0", 0)
            process.kill()
    finally:
        server.kill()
    assert kept(database) == undisturbed[0]


def until(database: Path, query: str, wanted: int) -> None:
    limit = time.monotonic() + 2 * PATIENCE_SECONDS
    while (found := rows(database, query)[0][0]) != wanted:
        assert time.monotonic() < limit, (query, found)
        time.sleep(0.05)


def test_limits_that_were_edited_stop_their_characteristic_only(
    server: Server, folder: Path, undisturbed: tuple[Any, Any]
) -> None:
    database, early = folder / "mes.sqlite", folder / "early.jsonl"
    early.write_text("".join(LINES[:78]), encoding="utf-8")
    arguments = ("--database", database, "--address", server.address)
    assert run("mes", early, *arguments).returncode == 0
    ((good,),) = rows(database, "SELECT limits FROM characteristic WHERE name = 'wall thickness'")
    edited = json.loads(good)
    edited["panels"]["mean"]["upper"] += 0.01
    change(database, "UPDATE characteristic SET limits = ? WHERE name = 'wall thickness'", json.dumps(edited))

    done = run("mes", folder / "line.jsonl", *arguments)
    assert done.returncode == 1
    (stopped,) = [line for line in done.stdout.splitlines() if line.startswith("STOPPED")]
    assert "wall thickness" in stopped
    assert "changed after it was issued" in stopped
    waiting = rows(database, "SELECT DISTINCT characteristic FROM subgroup WHERE state = 'waiting'")
    assert waiting == [("wall thickness",)]

    change(database, "UPDATE characteristic SET limits = ? WHERE name = 'wall thickness'", good)
    done = run("mes", folder / "line.jsonl", *arguments)
    assert done.returncode == 0
    assert "GOING ON after 102" in done.stdout
    assert kept(database) == undisturbed[0]


def change(database: Path, statement: str, *values: object) -> None:
    connection = sqlite3.connect(database)
    with connection:
        connection.execute(statement, values)
    connection.close()


def line(sequence: int, values: Any, name: str = "wall thickness", **more: Any) -> str:
    return (
        json.dumps({"sequence": sequence, "characteristic": name, "data": {"values": values}, **more}) + "\n"
    )


def test_a_faulty_subgroup_does_not_get_into_a_baseline(server: Server, tmp_path: Path) -> None:
    chance = random.Random(3)
    good = [[round(chance.gauss(2.5, 0.012), 3) for _ in range(5)] for _ in range(30)]
    texts = [line(1 + at, values) for at, values in enumerate(good)]
    texts[4] = line(5, [2.5, "OL", 2.5, 2.5, 2.5])
    texts[9] = (
        '{"sequence": 10, "characteristic": "wall thickness", "data": {"values": [NaN, 2.5, 2.5, 2.5, 2.5]}}\n'
    )
    texts[12] = line(13, [[2.5]])
    texts[14] = line(15, 1, "glaze")
    source, database = tmp_path / "line.jsonl", tmp_path / "mes.sqlite"
    source.write_text(
        "".join([*texts, "not JSON\n", line(28, [1.0] * 5).replace("28", "32")]), encoding="utf-8"
    )
    done = run("mes", source, "--database", database, "--address", server.address)
    assert done.returncode == 0, done.stdout + done.stderr
    assert "PASSED OVER" in done.stdout
    assert rows(database, "SELECT * FROM lost") == [(31, 31)]
    aside = rows(database, "SELECT sequence FROM subgroup WHERE state = 'put-aside' ORDER BY 1")
    assert [row[0] for row in aside] == [5, 10, 13, 15]
    baseline = rows(database, "SELECT max(sequence), count(*) FROM subgroup WHERE state = 'baseline'")
    assert baseline == [(29, 25)]
    assert rows(database, "SELECT sequence FROM signal")[-1] == (32,)


def test_nothing_that_comes_stops_the_line(server: Server, folder: Path) -> None:
    wrong: list[Any] = [[], "2.5", None, {"a": 1}, [2.5] * 5000, [[[[2.5]]]], [True] * 5, [2.5] * 4 + [1e308]]
    database, source = folder / "mes.sqlite", folder / "feed.jsonl"
    texts = LINES[:75]
    for values in wrong:
        texts = [*texts, line(len(texts) + 1, values, id="\ud800"), line(len(texts) + 2, [2.5] * 5)]
    source.write_text("".join(texts), encoding="utf-8")
    done = run("mes", source, "--database", database, "--address", server.address)
    assert done.returncode == 0, done.stdout + done.stderr
    states = [
        row[0] for row in rows(database, "SELECT state FROM subgroup WHERE sequence > 75 ORDER BY sequence")
    ]
    assert states == ["put-aside", "judged"] * len(wrong)
    ((carry,),) = rows(database, "SELECT carry FROM characteristic WHERE name = 'wall thickness'")
    assert json.loads(carry)["points"] == len(wrong)


def test_limits_fitted_again_and_rules_that_forget(server: Server, tmp_path: Path) -> None:
    """The statements that the page of the program gives."""
    for_limits, for_carry = re.findall(
        r"`((?:DELETE|UPDATE) [^`]+)`", (PROGRAMS / "MES.md").read_text(encoding="utf-8")
    )
    chance = random.Random(5)
    source, database = tmp_path / "line.jsonl", tmp_path / "mes.sqlite"

    def come(number: int, level: float) -> str:
        last = (
            rows(database, "SELECT coalesce(max(sequence), 0) FROM subgroup")[0][0]
            if database.exists()
            else 0
        )
        values = [[round(chance.gauss(level, 0.012), 3) for _ in range(5)] for _ in range(number)]
        with source.open("a", encoding="utf-8") as file:
            file.write("".join(line(last + at, one) for at, one in enumerate(values, 1)))
        done = run("mes", source, "--database", database, "--address", server.address)
        assert done.returncode == 0, done.stderr
        return done.stdout

    def points() -> Any:
        return json.loads(rows(database, "SELECT carry FROM characteristic")[0][0])["points"]

    assert "in the baseline" not in come(24, 2.5)
    assert "SIGNAL in the baseline, wall thickness 25 (25, mean)" in come(1, 2.6)
    come(3, 2.5)
    assert points() == 3
    change(database, for_carry)
    come(2, 2.5)
    assert points() == 2
    assert "SIGNAL wall thickness 31" in come(1, 2.7)
    change(database, for_limits)
    assert "SIGNAL" not in come(24, 2.7)
    assert "FROZEN limits of wall thickness, from 25 subgroups up to 56" in come(1, 2.7)
    assert "SIGNAL" not in come(1, 2.7)


def test_a_source_that_begins_anew_is_noticed(server: Server, folder: Path) -> None:
    database = folder / "mes.sqlite"
    arguments = ("--database", database, "--address", server.address)
    (folder / "short.jsonl").write_text("".join(LINES[:9]), encoding="utf-8")
    (folder / "other.jsonl").write_text(line(9, [2.5] * 5), encoding="utf-8")
    (folder / "anew.jsonl").write_text(line(1, [2.5] * 5), encoding="utf-8")
    assert run("mes", folder / "short.jsonl", *arguments).returncode == 0
    for name in ("other", "anew"):
        done = run("mes", folder / f"{name}.jsonl", *arguments)
        assert done.returncode == 2
        assert "begun anew" in done.stderr
    assert rows(database, "SELECT count(*) FROM subgroup") == [(9,)]


def test_what_makes_no_sense_is_told(server: Server, folder: Path) -> None:
    assert "source" in run("mes", "--help").stdout
    for address in ("nowhere", "http://127.0.0.1:99999"):
        done = run("mes", folder / "line.jsonl", "--database", folder / "mes.sqlite", "--address", address)
        assert done.returncode == 2
        assert done.stderr.splitlines()[-1].startswith("CANNOT GO ON")
    assert run("mes", folder / "gone.jsonl", "--database", folder / "mes.sqlite").returncode == 2


def test_a_wrong_address_loses_nothing(server: Server, folder: Path, undisturbed: tuple[Any, Any]) -> None:
    database = folder / "mes.sqlite"
    words = ("mes", folder / "line.jsonl", "--database", database, "--address")
    with started(*words, f"{server.address}/elsewhere") as process:
        assert process.stdout is not None
        waiting = next(text for text in iter(process.stdout.readline, "") if text.startswith("WAITING"))
        until(database, "SELECT count(*) FROM subgroup WHERE state = 'waiting'", len(LINES))
        process.kill()
    assert "Not found (404)" in waiting
    assert (
        run("mes", folder / "line.jsonl", "--database", database, "--address", server.address).returncode == 0
    )
    assert kept(database) == undisturbed[0]
