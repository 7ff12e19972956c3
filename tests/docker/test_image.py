"""The image, built without a network and run as the file says: asked for by ``pytest -m image``.

No container engine is needed: Debian's own packages make the base, buildah builds, and the container is run by
the kernel's namespaces: a network of its own without a way out, a root that cannot be written to, the user of
the image without any privilege, and the service as process 1.
"""

from __future__ import annotations

import base64
import hashlib
import json
import os
import platform
import re
import shlex
import shutil
import signal
import subprocess
import sys
import tarfile
import time
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from functools import cached_property
from importlib.metadata import version
from pathlib import Path
from typing import Any

import pytest

from assignable.api.contract import examples_directory
from machines import PATIENCE_SECONDS, PLAIN, ROOT
from test_house import close

pytestmark = [
    pytest.mark.image,
    pytest.mark.skipif(sys.platform != "linux", reason="containers need Linux"),
]

README = (ROOT / "docker" / "README.md").read_text()
NAME = f"assignable:{version('assignable')}"
NO_INDEX = "https://index.plant.invalid/simple"
"""Given to the build, which must not leave it in the image."""
BUILD_TOOLS = {"pip", "setuptools", "wheel", "hatchling", "uv", "build", "pytest", "ruff", "mypy"}


def run(*command: str | Path, cwd: Path | None = None, **variables: str) -> str:
    done = subprocess.run(
        [str(word) for word in command],
        cwd=cwd,
        env={**PLAIN, **variables},
        capture_output=True,
        text=True,
        timeout=600,
        check=False,
    )
    assert done.returncode == 0, f"{command}: {done.stdout[-3000:]}{done.stderr[-3000:]}"
    return done.stdout


def documented(*words: str) -> list[str]:
    """The one command of docker/README.md's shell blocks that holds these words."""
    blocks = re.findall(r"^```sh\n(.*?)^```$", README, re.MULTILINE | re.DOTALL)
    lines = "".join(blocks).replace("\\\n", " ").splitlines()
    (line,) = (line for line in lines if all(word in line for word in words))
    return shlex.split(line)


def committed(folder: Path) -> Path:
    """A copy of the files under version control, as a clone has them."""
    names = run("git", "ls-files", "-z", cwd=ROOT).split("\0")
    for name in filter(None, names):
        (folder / name).parent.mkdir(parents=True, exist_ok=True)
        shutil.copy(ROOT / name, folder / name)
    return folder


def alone(home: Path) -> list[str]:
    """The start of a command that has no network, and none of this user's settings."""
    kept = (f"PATH={os.environ['PATH']}", f"HOME={home}", "PIP_CONFIG_FILE=/dev/null")
    return ["unshare", "--net", "env", "-i", *kept]


# The wheels by themselves ---------------------------------------------------------------------------


def test_wheels_are_installed_without_a_network(tmp_path: Path) -> None:
    """Made by one documented command, installed by the next into an empty environment."""
    if subprocess.run(["unshare", "--net", "true"], capture_output=True, check=False).returncode:
        pytest.skip("this user may not make a network of its own (unshare --net)")
    site = committed(tmp_path / "clone")
    run(sys.executable, "-m", "venv", site / ".venv")
    run(*documented("pip wheel"), cwd=site)
    wheels = {path.name.split("-")[0].lower() for path in (site / "wheels").iterdir()}
    assert {"assignable", "numpy", "scipy", "gunicorn", "flask"} <= wheels
    assert not wheels & {"pytest", "hatchling"}

    plant = tmp_path / "plant"
    plant.mkdir()
    (site / "wheels").rename(plant / "wheels")
    run(*alone(tmp_path), sys.executable, "-m", "venv", plant / ".venv")
    run(*alone(tmp_path), *documented("pip install", "--no-index"), cwd=plant)
    assert " published cases agree" in run(*alone(tmp_path), ".venv/bin/assignable", "verify", cwd=plant)


# The image ------------------------------------------------------------------------------------------


@dataclass
class Image:
    store: Path
    base: dict[str, int]
    """The base's files, to know what is the image's own, with their sizes; 0 for links."""

    def buildah(self, *words: str | Path, cwd: Path | None = None) -> str:
        where = ("--root", self.store / "root", "--runroot", self.store / "run", "--storage-driver", "vfs")
        return run(*alone(self.store), "buildah", *where, *words, cwd=cwd)

    @cached_property
    def description(self) -> dict[str, Any]:
        found: dict[str, Any] = json.loads(self.buildah("inspect", "--type", "image", NAME))["Docker"]
        return found

    @property
    def config(self) -> dict[str, Any]:
        found: dict[str, Any] = self.description["config"]
        return found

    @cached_property
    def root(self) -> Path:
        """A container's files."""
        container = self.buildah("from", "--pull-never", NAME).strip()
        return Path(self.buildah("mount", container).strip())

    @cached_property
    def own(self) -> dict[str, Path]:
        """The files that the base does not have, by their paths inside."""
        return {name: path for name, path in walk(self.root) if name not in self.base}


def walk(root: Path) -> Iterator[tuple[str, Path]]:
    for folder, _, names in os.walk(root):
        for name in names:
            path = Path(folder, name)
            yield f"/{path.relative_to(root)}", path


@pytest.fixture(scope="module")
def image(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Image]:
    for tool in ("buildah", "mmdebstrap", "unshare", "nsenter", "setpriv", "ip"):
        if shutil.which(tool) is None:
            pytest.skip(f"{tool} is not installed")
    if os.geteuid() != 0:
        pytest.skip("only root may build and run without a container engine")
    if platform.machine() != "x86_64":
        pytest.skip("the documented command fetches wheels for x86_64")
    folder = tmp_path_factory.mktemp("image")
    try:
        began = time.monotonic()
        base = folder / "base.tar"
        made = subprocess.run(
            ["mmdebstrap", *documented("mmdebstrap")[1:-1], base], capture_output=True, text=True, check=False
        )
        if made.returncode:
            pytest.skip(f"no base can be made of Debian's packages here: {made.stderr[-300:]}")
        with tarfile.open(base) as tar:
            files = {member.name.removeprefix("."): member.size for member in tar if not member.isdir()}
        built = Image(folder / "store", files)
        built.store.mkdir()
        container = built.buildah("from", "scratch").strip()
        built.buildah("add", "--quiet", container, base)
        built.buildah("commit", "--quiet", "--format", "docker", container, "localhost/debian-python")
        based = time.monotonic()

        site = committed(folder / "clone")
        run(sys.executable, "-m", "venv", site / ".venv")
        run(*documented("pip download"), cwd=site)
        fetched = time.monotonic()
        # Chroot isolation makes no network of its own; here there is none to begin with.
        words = (
            " ".join(documented("docker build", "PIP_NO_INDEX=1")[2:]).replace("--network none ", "").split()
        )
        given = {"BASE": "localhost/debian-python", "PIP_INDEX_URL": NO_INDEX}
        more = [word for item in given.items() for word in ("--build-arg", "=".join(item))]
        built.buildah("bud", "--isolation", "chroot", "--format", "docker", *more, *words, cwd=site)
        done = time.monotonic()
        print(f"base {based - began:.0f} s, wheels {fetched - based:.0f} s, image {done - fetched:.0f} s")
        yield built
    finally:
        shutil.rmtree(folder)


def test_it_says_what_it_is_and_how_it_is_run(image: Image) -> None:
    config = image.config
    assert config["User"] == "10001:10001"
    assert config["Entrypoint"] == ["/opt/assignable/bin/assignable"]
    assert config["Cmd"] == ["serve"]
    assert list(config["ExposedPorts"]) == ["8000/tcp"]
    labels = {name.removeprefix("org.opencontainers.image."): text for name, text in config["Labels"].items()}
    assert {"title", "description", "version", "licenses"} <= labels.keys()
    assert labels["version"] == version("assignable")
    check = config["Healthcheck"]
    assert check["Test"][0] == "CMD"
    assert check["Interval"] > check["Timeout"] > 0
    assert check["Retries"] == 3


def test_it_holds_the_service_and_nothing_else(image: Image) -> None:
    assert all(name.startswith("/opt/assignable/") for name in image.own)
    there = dict(walk(image.root))
    assert not [name for name, size in image.base.items() if size and there[name].lstat().st_size != size]

    commands = {path.name for path in (image.root / "opt/assignable/bin").iterdir() if not path.is_symlink()}
    assert commands == {"assignable"}
    (packages,) = (image.root / "opt/assignable/lib").glob("python3*/site-packages")
    installed = {path.name.split("-")[0].lower() for path in packages.glob("*.dist-info")}
    assert {"assignable", "numpy", "gunicorn"} <= installed
    assert not installed & BUILD_TOOLS
    assert not [name for name in image.own if "/tests/" in name or "/.cache/" in name]


def test_it_tells_no_index(image: Image) -> None:
    told = json.dumps(image.description)
    names = [name for name in image.own if NO_INDEX.encode() in image.own[name].read_bytes()]
    assert not names
    assert NO_INDEX not in told
    assert "PIP_" not in told
    assert not [name for name in image.own if Path(name).name in ("direct_url.json", "pip.conf")]


def test_its_size(image: Image) -> None:
    own = sum(path.lstat().st_size for path in image.own.values()) / 1e6
    whole = sum(path.lstat().st_size for _, path in walk(image.root)) / 1e6
    print(f"the service {own:.0f} MB, with Debian's Python {whole:.0f} MB")
    (stated,) = re.findall(r"own files \((\d+) MB", README)
    assert own == pytest.approx(int(stated), rel=0.1)


# The container --------------------------------------------------------------------------------------

# What an engine does, by the kernel's own commands: a read-only root with /proc, /tmp and /dev of its own.
SET_UP = """
set -e
mount --make-rprivate /
mount --bind "$ROOT" "$ROOT"
mount -o remount,ro,bind "$ROOT"
mount -t proc proc "$ROOT/proc"
mount -t tmpfs -o size=64m,mode=1777 tmpfs "$ROOT/tmp"
mount -t tmpfs -o mode=755 tmpfs "$ROOT/dev"
mkdir -m 1777 "$ROOT/dev/shm"
for device in null zero random urandom; do
  touch "$ROOT/dev/$device"
  mount --bind "/dev/$device" "$ROOT/dev/$device"
done
ip link set lo up
cd "$ROOT"
exec chroot . /usr/bin/setpriv --reuid "${OWNER%:*}" --regid "${OWNER#*:}" --clear-groups \
  --bounding-set=-all --inh-caps=-all --no-new-privs /usr/bin/env -i -C "$WORKDIR" "$@"
"""


def inside(image: Image) -> list[str]:
    """The start of a command in a new container of the image."""
    config = image.config
    return [
        *("unshare", "--mount", "--pid", "--net", "--ipc", "--uts", "--fork", "--kill-child"),
        *("env", f"ROOT={image.root}", f"OWNER={config['User']}", f"WORKDIR={config['WorkingDir']}"),
        *("sh", "-c", SET_UP, "container", *config["Env"]),
    ]


@dataclass
class Container:
    outer: subprocess.Popen[bytes]
    pid: int
    log: Path
    environment: list[str]

    def beside(self, *command: str, body: bytes = b"") -> subprocess.CompletedProcess[bytes]:
        """A command of this machine's in the network of the container."""
        return subprocess.run(
            ["nsenter", f"--net=/proc/{self.pid}/ns/net", *command],
            input=body,
            capture_output=True,
            timeout=PATIENCE_SECONDS,
            check=False,
            env=PLAIN,
        )

    def call(self, method: str, path: str, body: bytes = b"") -> tuple[int, dict[str, str], bytes]:
        done = self.beside(sys.executable, "-c", CALL, method, path, body=body)
        assert done.returncode == 0, done.stderr.decode()
        status, headers, answer = json.loads(done.stdout)
        return status, headers, base64.b64decode(answer)

    def execute(self, *command: str, user: str) -> subprocess.CompletedProcess[bytes]:
        """A command of the image's in the container, as an engine's ``exec``."""
        return subprocess.run(
            [
                *("nsenter", "--target", str(self.pid), "--all", "--root", "--wd", "--setuid", user),
                *("--setgid", user, "/usr/bin/env", "-i", *self.environment, *command),
            ],
            capture_output=True,
            timeout=PATIENCE_SECONDS,
            check=False,
        )


CALL = """
import base64, http.client, json, sys
connection = http.client.HTTPConnection("127.0.0.1", 8000, timeout=30)
connection.request(sys.argv[1], sys.argv[2], sys.stdin.buffer.read() or None, {"Content-Type": "application/json"})
response = connection.getresponse()
print(json.dumps([response.status, dict(response.getheaders()), base64.b64encode(response.read()).decode()]))
"""


@contextmanager
def serving(image: Image, folder: Path) -> Iterator[Container]:
    """The image run as its file says, with nothing changed."""
    config = image.config
    log = folder / "log"
    with log.open("wb") as errors:
        outer = subprocess.Popen(
            [*inside(image), *config["Entrypoint"], *config["Cmd"]], stdout=errors, stderr=errors, env=PLAIN
        )
    try:
        until = time.monotonic() + PATIENCE_SECONDS
        while '"message":"Listening at' not in log.read_text():
            assert outer.poll() is None, log.read_text()
            assert time.monotonic() < until, log.read_text()
            time.sleep(0.05)
        (pid,) = Path(f"/proc/{outer.pid}/task/{outer.pid}/children").read_text().split()
        yield Container(outer, int(pid), log, config["Env"])
    finally:
        if outer.poll() is None:
            outer.kill()  # and with it, by --kill-child, what it started
            outer.wait(PATIENCE_SECONDS)


def test_it_serves_and_ends_when_told(image: Image, tmp_path: Path) -> None:
    began = time.monotonic()
    with serving(image, tmp_path) as container:
        until = time.monotonic() + PATIENCE_SECONDS
        healthcheck = image.config["Healthcheck"]["Test"][1:]
        while container.execute(*healthcheck, user="10001").returncode != 0:
            assert time.monotonic() < until, container.log.read_text()
            time.sleep(0.05)
        print(f"healthy after {time.monotonic() - began:.1f} s")
        status, _, body = container.call("GET", "/health/ready")
        assert (status, json.loads(body)["status"]) == (200, "pass")

        request, answer = (
            (examples_directory() / f"xbar-r-limits.{kind}.json").read_bytes()
            for kind in ("request", "response")
        )
        status, headers, body = container.call("POST", "/v1/charts/xbar-r/limits", request)
        assert status == 200
        assert close(json.loads(body), json.loads(answer))
        assert not close(json.loads(body.replace(b"2.4988", b"2.4989")), json.loads(answer))
        digest = base64.b64encode(hashlib.sha256(body).digest()).decode()
        assert headers["Content-Digest"] == f"sha-256=:{digest}:"

        state = dict(
            re.findall(r"^(\w+):\s+(.*)$", Path(f"/proc/{container.pid}/status").read_text(), re.MULTILINE)
        )
        assert set(state["Uid"].split()) == set(state["Gid"].split()) == {"10001"}
        assert (state["NSpid"].split()[-1], state["NoNewPrivs"], int(state["CapBnd"], 16)) == ("1", "1", 0)
        write = "open('/opt/assignable/written', 'w')"
        refused = container.execute("/opt/assignable/bin/python", "-c", write, user="0")
        assert b"Read-only file system" in refused.stderr
        print(f"memory at rest {resident(container.pid) / 1e6:.0f} MB")

        os.kill(container.pid, signal.SIGTERM)
        assert container.outer.wait(PATIENCE_SECONDS) == 0, container.log.read_text()
        assert "Traceback" not in container.log.read_text()


def resident(pid: int) -> int:
    """Memory of a process and its children, what they share counted once, in bytes."""
    children = Path(f"/proc/{pid}/task/{pid}/children").read_text().split()
    (pss,) = re.findall(r"^Pss:\s+(\d+) kB", Path(f"/proc/{pid}/smaps_rollup").read_text(), re.MULTILINE)
    return int(pss) * 1024 + sum(resident(int(child)) for child in children)


def test_it_can_be_checked_on_the_spot(image: Image) -> None:
    assert " published cases agree" in run(*inside(image), *image.config["Entrypoint"], "verify")
