"""The rules of the house: who imports whom, what is cited, and what the documentation says."""

from __future__ import annotations

import ast
import importlib.util
import json
import re
import shlex
import subprocess
import sys
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import pytest
from werkzeug.test import TestResponse

from assignable.api.settings import described
from assignable.spc.charts import CHARTS
from assignable.spc.methods import METHODS
from assignable.spc.references import REFERENCES
from assignable.spc.rules import PUBLISHED
from contract import served

ROOT = Path(__file__).resolve().parent.parent
SERVICE = ROOT / "service" / "assignable"
README = (ROOT / "README.md").read_text(encoding="utf-8")
TRIED = ("README.md", "openapi/GUIDE.md")
"""Whose requests are sent by the tests, and whose answers compared."""
WEB = ("flask", "werkzeug", "marshmallow", "apispec", "gunicorn", "orjson", "rfc8785")


# Who imports whom -----------------------------------------------------------------------------------


def loaded_by(statement: str) -> set[str]:
    code = f"{statement}\nimport sys\nprint(*sorted(sys.modules))"
    done = subprocess.run([sys.executable, "-c", code], check=True, capture_output=True, text=True)
    return set(done.stdout.split())


def test_the_root_imports_nothing() -> None:
    assert {name for name in loaded_by("import assignable") if name.startswith("assignable")} == {
        "assignable"
    }


def test_the_numerics_load_nothing_of_the_web() -> None:
    everything = "\n".join(
        "import " + ".".join(("assignable", *file.relative_to(SERVICE).with_suffix("").parts))
        for file in sorted((SERVICE / "spc").rglob("*.py"))
        if file.name != "__init__.py"
    )
    for statement in ("import assignable.spc", everything):
        assert not loaded_by(statement) & set(WEB)


def test_a_start_loads_no_heavy_part_of_scipy() -> None:
    found = loaded_by("from assignable.api.app import create_app; create_app()")
    assert not {"scipy.stats", "scipy.optimize", "scipy.signal", "apispec", "gunicorn"} & found


@pytest.mark.skipif(
    importlib.util.find_spec("importlinter") is None,
    reason="import-linter is one of the tools for development, which are not installed",
)
def test_the_import_rules_hold() -> None:
    code = "import sys; from importlinter import cli; sys.exit(cli.lint_imports(no_cache=True))"
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, cwd=ROOT, check=False)
    assert done.returncode == 0, done.stdout + done.stderr


# What is cited --------------------------------------------------------------------------------------

CITATION = re.compile(r"\[([a-z][a-z0-9]*(?:-[a-z0-9]+)+)\]")


def docstrings() -> Iterator[tuple[str, str]]:
    for file in sorted(SERVICE.rglob("*.py")):
        for node in ast.walk(ast.parse(file.read_text(encoding="utf-8"))):
            if isinstance(node, ast.Module | ast.ClassDef | ast.FunctionDef):
                yield str(file.relative_to(SERVICE)), ast.get_docstring(node) or ""


def test_every_citation_is_in_the_bibliography() -> None:
    cited = {(file, key) for file, text in docstrings() for key in CITATION.findall(text)}
    assert len(cited) > 100
    assert sorted((file, key) for file, key in cited if key not in REFERENCES) == []


def test_what_answers_cite_is_in_the_bibliography() -> None:
    cited = {key for chart in CHARTS.values() for key in chart.references}
    cited |= {key for method in METHODS for key in method.references}
    cited |= {published.source for published in PUBLISHED.values()}
    cited |= {
        keyword.value.value
        for file in (SERVICE / "spc").rglob("*.py")
        for node in ast.walk(ast.parse(file.read_text(encoding="utf-8")))
        if isinstance(node, ast.Call)
        for keyword in node.keywords
        if keyword.arg == "reference" and isinstance(keyword.value, ast.Constant)
    }
    assert cited - {"common practice"} <= set(REFERENCES)


def test_every_reference_is_cited_somewhere() -> None:
    text = "\n".join(
        file.read_text(encoding="utf-8") for file in SERVICE.rglob("*.py") if file.name != "references.py"
    )
    assert [
        key for key in REFERENCES if not re.search(rf"(?<![a-z0-9-]){re.escape(key)}(?![a-z0-9-])", text)
    ] == []


def test_references_are_complete() -> None:
    for key, reference in REFERENCES.items():
        assert reference.key == key
        assert all((reference.authors, reference.title, reference.published)), key
        if (year := re.search(r"-(\d{4})[a-z]?$", key)) and not key.startswith(("iso-", "astm-")):
            assert year[1] == str(reference.year), key


# What the documentation says ------------------------------------------------------------------------


@dataclass(frozen=True)
class Block:
    language: str
    text: str


def blocks(name: str) -> list[Block]:
    text = (ROOT / name).read_text(encoding="utf-8")
    return [Block(*found) for found in re.findall(r"^```(\w+)\n(.*?)^```$", text, re.M | re.S)]


def commands(text: str) -> Iterator[list[str]]:
    """The curl commands of a block of shell, each as its words."""
    for line in text.replace("\\\n", " ").splitlines():
        words = shlex.split(line.partition(" | ")[0])
        if words and words[0] == "curl":
            yield words[1:]


def run(words: list[str]) -> TestResponse:
    """What curl would send, sent to the service in process."""
    headers: dict[str, str] = {}
    data: bytes | None = None
    method, path = None, None
    rest = iter(words)
    for word in rest:
        if word in ("-s", "-i", "-sS", "--compressed", "-f"):
            continue
        if word in ("-H", "--header"):
            name, _, value = next(rest).partition(":")
            headers[name] = value.strip()
        elif word in ("-X", "--request"):
            method = next(rest)
        elif word in ("-d", "--data", "--data-binary"):
            given = next(rest)
            data = (ROOT / given[1:]).read_bytes() if given.startswith("@") else given.encode()
        elif word == "-o":
            next(rest)
        elif word.startswith("http://127.0.0.1:8000"):
            path = word.removeprefix("http://127.0.0.1:8000")
        else:
            raise AssertionError(f"this test does not know what curl does with {word}")
    assert path is not None
    client = served.app().test_client()
    return client.open(path, method=method or ("GET" if data is None else "POST"), data=data, headers=headers)


class Printed(float):
    """A number as it is printed, with the weight of its last digit."""

    last: float

    @classmethod
    def of(cls, text: str) -> Printed:
        self = cls(text)
        mantissa, _, exponent = text.lower().partition("e")
        self.last = 10.0 ** (int(exponent or 0) - len(mantissa.partition(".")[2]))
        return self


DOTS = "\u2026"


def shown(text: str) -> Any:
    """A part of an answer as the documentation shows it: three dots stand for what is left out."""
    whole = re.sub(r'"\.\.\."', f'"{DOTS}"', text)
    whole = re.sub(r",\s*\.\.\.(?=\s*})", "", whole)
    whole = re.sub(r"{\s*\.\.\.\s*}", "{}", whole)
    whole = re.sub(r"(?<=[\[,\s])\.\.\.(?=\s*[\],])", f'"{DOTS}"', whole)
    return json.loads(whole, parse_float=Printed.of)


def compare(part: Any, whole: Any, where: str = "$") -> None:
    """Every member shown is one of the answer, numbers to the digits shown."""
    if part == DOTS:
        return
    if isinstance(part, dict):
        assert isinstance(whole, dict), where
        for name, inner in part.items():
            assert name in whole, f"{where}.{name}"
            compare(inner, whole[name], f"{where}.{name}")
    elif isinstance(part, list):
        assert isinstance(whole, list), where
        if DOTS in part:
            at = part.index(DOTS)
            after = len(part) - at - 1
            assert len(whole) >= len(part) - 1, where
            pairs = [
                *zip(part[:at], whole, strict=False),
                *zip(part[at + 1 :], whole[len(whole) - after :], strict=True),
            ]
        else:
            assert len(part) == len(whole), where
            pairs = list(zip(part, whole, strict=True))
        for at, (one, other) in enumerate(pairs):
            compare(one, other, f"{where}[{at}]")
    elif isinstance(part, Printed):
        assert isinstance(whole, int | float), where
        assert abs(whole - part) <= 0.5000001 * part.last, (where, part, whole)
    elif isinstance(part, str) and part.endswith("..."):
        assert isinstance(whole, str), where
        assert whole.startswith(part.removesuffix("...")), where
    else:
        assert part == whole, (where, part, whole)


def test_the_two_commands_come_first_and_are_one_line_each() -> None:
    first, second = [block.text for block in blocks("README.md") if block.language == "sh"][:2]
    for text in (first, second):
        assert len(text.strip().splitlines()) == 1
        assert text.startswith("python3 -m venv .venv")
    assert "assignable serve" in first
    assert "pytest" in second


def test_the_readme_is_finished() -> None:
    assert "@@" not in README
    assert "TODO" not in README


@pytest.mark.parametrize("name", TRIED)
def test_what_is_shown_is_what_the_service_answers(name: str) -> None:
    compared, answer = 0, None
    for block in blocks(name):
        if block.language == "sh":
            for words in commands(block.text):
                answer = run(words)
                assert answer.status_code in (200, 422), (words, answer.get_data(as_text=True))
                kind = answer.content_type or ""
                assert kind == "image/svg+xml" if "-o" in words else "json" in kind, words
        elif block.language == "json":
            assert answer is not None, "an answer is shown before any request"
            if "ndjson" in answer.content_type:
                told = [json.loads(line) for line in answer.data.splitlines()]
                for line in block.text.strip().splitlines():
                    part = shown(line)
                    number = None if "line" not in part else int(part["line"])
                    (whole,) = (
                        one
                        for one in told
                        if one.get("line") == number
                        and set(part) <= set(one)
                        and part.get("characteristic") == one.get("characteristic")
                    )
                    compare(part, whole)
            else:
                compare(shown(block.text), json.loads(answer.data))
            compared += 1
    assert compared >= 4


def test_the_guide_goes_on_with_what_was_answered() -> None:
    """A limits document or a carry of one step is the one the next step sends."""

    def file(name: str) -> Any:
        return json.loads((ROOT / "openapi" / name).read_bytes())

    frozen = served.answer_of("fitXbarRLimits", file("guide/baseline-mended.json"))["limits"]
    first = file("examples/xbar-r-signals.request.json")
    following = file("guide/next-car.json")
    for judged in (first, following, file("guide/after-repair.json")):
        assert close(judged["limits"], frozen)
    assert close(following["carry"], served.answer_of("judgeXbarR", first)["carry"])
    assert "carry" not in file("guide/after-repair.json")


def close(one: Any, other: Any) -> bool:
    """Equal, but for the last digits of numbers on another processor, and the digests that follow from them."""
    if isinstance(one, dict) and isinstance(other, dict):
        return one.keys() == other.keys() and all(close(one[name], other[name]) for name in one)
    if isinstance(one, list) and isinstance(other, list):
        return len(one) == len(other) and all(map(close, one, other))
    if isinstance(one, float) and isinstance(other, float):
        return one == pytest.approx(other, rel=1e-9)
    if isinstance(one, str) and one.startswith("sha-256:"):
        return isinstance(other, str) and other.startswith("sha-256:")
    return one == other


def test_files_the_readme_links_to_exist() -> None:
    for name in (*TRIED, "DEVELOPERS.md", "docker/README.md"):
        file = ROOT / name
        for target in re.findall(r"\]\((?!https?:|#)([^)#]+)", file.read_text(encoding="utf-8")):
            assert (file.parent / target).exists(), target


def test_every_setting_is_in_the_table_of_the_readme() -> None:
    rows = dict(re.findall(r"^\| `(ASSIGNABLE_[A-Z_]+)` \|(.*)\|$", README, re.M))
    assert set(rows) == {setting.variable for setting in described()}
    for setting in described():
        assert setting.description in rows[setting.variable]


def test_a_wrong_example_would_be_noticed() -> None:
    answer = {"limits": {"centre": 2.4988, "sigma": 0.0121, "rules": [1, 2, 3], "note": "long text"}}
    for right in (
        '{"limits": {"centre": 2.499, "rules": [1, ...], "note": "long..."}}',
        '{"limits": {"sigma": "...", "rules": [..., 3], ...}}',
        '{"limits": {...}}',
    ):
        compare(shown(right), answer)
    for wrong in (
        '{"limits": {"centre": 2.498}}',
        '{"limits": {"center": 2.499}}',
        '{"limits": {"rules": [1, 2]}}',
        '{"limits": {"rules": [2, ...]}}',
    ):
        with pytest.raises(AssertionError):
            compare(shown(wrong), answer)
