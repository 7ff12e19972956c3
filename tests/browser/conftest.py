"""One service and one browser for all tests of the pages."""

from __future__ import annotations

import json
import os
import shutil
import subprocess
import threading
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from hashlib import sha256
from pathlib import Path

import pytest
from flask import Flask
from werkzeug.serving import make_server

from assignable.api.app import create_app
from assignable.api.settings import Settings
from browser import chromium
from contract import served

SCREENSHOTS = "SCREENSHOTS"
AXE = "AXE_CORE"


@contextmanager
def serving(app: Flask) -> Iterator[str]:
    """An application where a browser reaches it."""
    server = make_server("127.0.0.1", 0, app, threaded=True)
    thread = threading.Thread(target=server.serve_forever, daemon=True)
    thread.start()
    yield f"127.0.0.1:{server.server_port}"
    server.shutdown()
    thread.join(timeout=5)
    server.server_close()


@pytest.fixture(scope="session")
def host() -> Iterator[str]:
    """The service that asks nobody who they are."""
    with serving(served.app()) as found:
        yield found


@pytest.fixture
def guarded(tmp_path: Path) -> Iterator[str]:
    """The service that admits callers with the key ``open-sesame`` only."""
    keys = tmp_path / "keys.json"
    keys.write_text(json.dumps({"bench": sha256(b"open-sesame").hexdigest()}))
    with serving(create_app(Settings(log="off", api_keys=str(keys)))) as found:
        yield found


@pytest.fixture(scope="session")
def socket(tmp_path_factory: pytest.TempPathFactory) -> Iterator[chromium.ClientConnection]:
    if not chromium.PROGRAM.exists():
        pytest.skip(f"there is no {chromium.PROGRAM}: Debian's package chromium has it")
    with chromium.chromium(tmp_path_factory.mktemp("profile")) as found:
        yield found


@pytest.fixture
def page(socket: chromium.ClientConnection, host: str) -> Iterator[chromium.Page]:
    """A tab; a test fails that leaves a complaint, or asks any other host for anything."""
    found = chromium.tab(socket)
    found.hosts.add(host)
    yield found
    assert found.complaints == []
    assert found.strangers() == []
    assert found.requests
    found.close()


@pytest.fixture
def keep(page: chromium.Page) -> Callable[[str], None]:
    """Writes what a page looks like, wide, narrow and in print, where the environment says where to."""
    folder = os.environ.get(SCREENSHOTS)

    def write(name: str) -> None:
        if not folder:
            return
        where = Path(folder)
        where.mkdir(parents=True, exist_ok=True)
        for width in (390, 1280):
            page.size(width)
            (where / f"{name}-{width}.png").write_bytes(page.picture())
        (where / f"{name}.pdf").write_bytes(page.printed())

    return write


@pytest.fixture(scope="session")
def axe() -> str:
    """The rules of accessibility: axe-core of npm, where it is installed."""
    places = [Path(os.environ[AXE])] if AXE in os.environ else []
    places.append(Path(__file__).parent / "node_modules" / "axe-core" / "axe.min.js")
    if npm := shutil.which("npm"):
        done = subprocess.run([npm, "root", "--global"], capture_output=True, text=True, check=False)
        places.append(Path(done.stdout.strip()) / "axe-core" / "axe.min.js")
    places.append(Path("node_modules/axe-core/axe.min.js"))
    for place in places:
        if place.is_file():
            return place.read_text(encoding="utf-8")
    pytest.skip(
        "axe-core is not installed: `npm install --prefix tests/browser --ignore-scripts --no-package-lock`, or let "
        f"{AXE} name its axe.min.js"
    )
