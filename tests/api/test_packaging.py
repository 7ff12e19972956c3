"""What is shipped: the wheel's files, the lock files, the image's parts."""

from __future__ import annotations

import re
import shutil
import subprocess
import sys
import tomllib
from importlib.metadata import distribution
from pathlib import Path
from zipfile import ZipFile

import pytest
from packaging.requirements import Requirement
from packaging.utils import canonicalize_name
from packaging.version import Version

from assignable.api import contract, openapi
from assignable.cli import contract_files, main

ROOT = Path(__file__).resolve().parents[2]
DOCKER = ROOT / "docker"
PROJECT = tomllib.loads((ROOT / "pyproject.toml").read_text())
LOCKS = ("constraints.txt", "requirements.lock", "build.lock")
AGAIN = "run: .venv/bin/python docker/lock.py"

_PINNED = re.compile(r"([a-z0-9-]+)==([^\s;\\]+)(?: ; ([^\\]+))?(?: \\)?")


def pinned(name: str) -> dict[str, Version]:
    """The versions of a lock file; every line is one, or a hash of the one before."""
    versions = {}
    for line in (DOCKER / name).read_text().splitlines():
        if line.lstrip().startswith("--hash=sha256:"):
            continue
        found = _PINNED.fullmatch(line.strip())
        assert found, f"{name}: {line}"
        assert found[1] not in versions, f"{name}: two versions of {found[1]}"
        versions[found[1]] = Version(found[2])
    return versions


def required(*extras: str) -> list[Requirement]:
    texts = list(PROJECT["project"]["dependencies"])
    for extra in extras:
        texts += PROJECT["project"]["optional-dependencies"][extra]
    return [Requirement(text) for text in texts]


def unmet(needs: list[Requirement], versions: dict[str, Version]) -> list[str]:
    """What a lock file does not answer; empty when it is current."""
    return [
        str(need)
        for need in needs
        if canonicalize_name(need.name) not in versions
        or not need.specifier.contains(versions[canonicalize_name(need.name)])
    ]


def closure(needs: list[Requirement]) -> set[str]:
    """Names of everything these need, as far down as this installation knows it."""
    names: set[str] = set()
    todo = [need.name for need in needs]
    while todo:
        name = canonicalize_name(todo.pop())
        if name in names:
            continue
        names.add(name)
        for text in distribution(name).requires or ():
            need = Requirement(text)
            if need.marker is None or need.marker.evaluate({"extra": ""}):
                todo.append(need.name)
    return names


@pytest.fixture(scope="module")
def wheel(tmp_path_factory: pytest.TempPathFactory) -> ZipFile:
    folder = tmp_path_factory.mktemp("wheel")
    built = subprocess.run(
        [sys.executable, "-m", "hatchling", "build", "-t", "wheel", "-d", str(folder)],
        cwd=ROOT,
        capture_output=True,
        text=True,
        timeout=120,
        check=False,
    )
    assert built.returncode == 0, built.stderr
    (path,) = folder.glob("*.whl")
    return ZipFile(path)


def test_the_wheel_holds_every_file_of_the_package_and_of_the_contract(wheel: ZipFile) -> None:
    expected = {
        f"assignable/{path.relative_to(base)}"
        for base, folder in ((ROOT / "service" / "assignable", "."), (ROOT, "openapi"))
        for path in (base / folder).rglob("*")
        if path.is_file()
        and not any(part.startswith((".", "__pycache__")) for part in path.relative_to(base).parts)
    }
    names = set(wheel.namelist())
    assert len(expected) > 50
    assert not expected - names
    assert {"assignable/openapi/examples/xbar-r-limits.request.json", "assignable/web/page.css"} <= names
    assert {"LICENSE", "NOTICE"} <= {name.rsplit("/", 1)[1] for name in names if "/licenses/" in name}


def test_the_wheel_holds_nothing_else(wheel: ZipFile) -> None:
    tops = {name.split("/")[0] for name in wheel.namelist()}
    assert {top for top in tops if not top.endswith(".dist-info")} == {"assignable"}
    assert not [name for name in wheel.namelist() if "__pycache__" in name]


def test_the_command_is_an_entry_point(wheel: ZipFile) -> None:
    (name,) = (name for name in wheel.namelist() if name.endswith("entry_points.txt"))
    assert b"assignable = assignable.cli:main" in wheel.read(name)


def test_the_constraints_pin_all_that_the_project_needs() -> None:
    versions = pinned("constraints.txt")
    assert not unmet(required(*PROJECT["project"]["optional-dependencies"]), versions), AGAIN
    assert closure(required("test")) <= versions.keys(), AGAIN


def test_the_image_is_locked_to_all_that_the_service_needs_and_no_more() -> None:
    versions = pinned("requirements.lock")
    assert not unmet(required(), versions), AGAIN
    needed = closure(required())
    assert needed <= versions.keys(), AGAIN
    assert versions.keys() - needed <= {"colorama"}, AGAIN  # of click, on Windows


def test_the_wheel_is_built_with_locked_versions() -> None:
    versions = pinned("build.lock")
    assert not unmet([Requirement(text) for text in PROJECT["build-system"]["requires"]], versions), AGAIN


def test_a_lock_that_is_behind_is_noticed() -> None:
    versions = {**pinned("requirements.lock"), "flask": Version("0.1")}
    del versions["numpy"]
    assert {Requirement(text).name for text in unmet(required(), versions)} == {"flask", "numpy"}


@pytest.mark.parametrize("name", LOCKS[1:])
def test_locks_agree_with_the_constraints(name: str) -> None:
    constraints = pinned("constraints.txt")
    assert pinned(name).items() <= constraints.items(), AGAIN


@pytest.mark.parametrize("name", LOCKS[1:])
def test_every_locked_version_has_its_hash(name: str) -> None:
    text = (DOCKER / name).read_text()
    blocks = re.split(r"^(?=\S)", text, flags=re.MULTILINE)[1:]
    assert len(blocks) == len(pinned(name))
    assert all("--hash=sha256:" in block for block in blocks)


@pytest.mark.parametrize("name", LOCKS)
def test_locks_hold_no_address(name: str) -> None:
    text = (DOCKER / name).read_text()
    assert "://" not in text
    assert not re.search(r"^-", text, re.MULTILINE)


@pytest.fixture
def examples(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    """A copy of the example requests, with neither answers nor document."""
    folder = tmp_path / "openapi" / "examples"
    folder.mkdir(parents=True)
    for path in contract.examples_directory().glob("*.request.*json"):
        shutil.copy(path, folder)
    for module in (contract, openapi, contract_files):
        monkeypatch.setattr(module, "examples_directory", lambda: folder)
    return folder


def test_the_contract_written_is_the_contract_checked(
    examples: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    assert main(["contract"]) == 1
    assert "openapi.json is not there." in capsys.readouterr().err

    (examples / "gone.response.json").write_text("{}")
    assert main(["contract", "--write"]) == 0
    assert not (examples / "gone.response.json").exists()
    assert main(["contract", "--check"]) == 0

    answer = examples / "xbar-r-limits.response.json"
    answer.write_text(answer.read_text().replace('"centre": 2.4988', '"centre": 2.4989'))
    (examples / "gone.response.json").write_text("{}")
    capsys.readouterr()
    assert main(["contract", "--check"]) == 1
    said = capsys.readouterr().err
    assert '-    "centre": 2.4989' in said
    assert '+    "centre": 2.4988' in said
    assert "gone.response.json answers an example that is not there." in said
    assert "assignable contract --write" in said


def test_last_digits_of_another_processor_are_no_difference(
    examples: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    assert main(["contract", "--write"]) == 0
    answer = examples / "xbar-r-limits.response.json"
    written = answer.read_text()
    (centre,) = set(re.findall(r'^    "centre": (2\.[0-9]+)', written, re.MULTILINE))
    for factor, status in ((1 + 1e-15, 0), (1 - 1e-12, 0), (1 + 1e-8, 1)):
        answer.write_text(written.replace(centre, repr(float(centre) * factor)))
        assert answer.read_text() != written
        assert main(["contract", "--check"]) == status
    answer.write_text(written.replace("sha-256:", "sha-512:"))
    assert main(["contract", "--check"]) == 1
    answer.write_text(written.replace('"in-control"', '"signal"'))
    assert main(["contract", "--check"]) == 1
    capsys.readouterr()


def test_an_example_that_breaks_the_contract_is_told(
    examples: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    (examples / "xbar-r-limits.request.json").write_text('{"data": {"values": [[1, true]]}}')
    (examples / "nobodys.request.json").write_text("{}")
    assert main(["contract", "--write"]) == 1
    said = capsys.readouterr().err
    assert "#/data/values/0/1" in said
    assert "nobodys.request.json: no operation names it." in said
    assert not list(examples.glob("*.response.json"))
