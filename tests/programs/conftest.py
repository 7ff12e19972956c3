"""One real service for all tests of the example programs."""

from __future__ import annotations

from collections.abc import Iterator

import pytest

from programs.playing import Server


@pytest.fixture(scope="session")
def server() -> Iterator[Server]:
    started = Server()
    try:
        started.start()
        yield started
    finally:
        started.kill()
