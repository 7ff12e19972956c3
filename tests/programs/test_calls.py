"""How the example programs call: against a server that does what the real one, or a proxy before it, does seldom."""

from __future__ import annotations

import json
import sys
import threading
import time
from collections.abc import Iterator
from http.server import BaseHTTPRequestHandler, ThreadingHTTPServer
from typing import Any

import pytest

from programs.playing import PROGRAMS

GOOD = (200, {}, b'{"verdict": "in-control"}')


class Script:
    """A server that gives these answers, one a request; a number is a wait, and None hangs up."""

    def __init__(self) -> None:
        self.answers: list[Any] = []
        self.seen: list[tuple[str, dict[str, str], bytes]] = []
        self.connections = 0
        script = self

        class Handler(BaseHTTPRequestHandler):
            protocol_version = "HTTP/1.1"

            def setup(self) -> None:
                script.connections += 1
                super().setup()

            def do_POST(self) -> None:
                body = self.rfile.read(int(self.headers["Content-Length"]))
                script.seen.append((self.path, dict(self.headers), body))
                answer = script.answers.pop(0)
                if isinstance(answer, float):
                    time.sleep(answer)
                    answer = None
                if answer is None:
                    self.close_connection = True
                    return
                status, headers, content = answer
                self.send_response(status)
                for name, value in {"Content-Length": str(len(content)), **headers}.items():
                    self.send_header(name, value)
                self.end_headers()
                self.wfile.write(content)

            def log_message(self, *args: object) -> None:
                pass

        self._server = ThreadingHTTPServer(("127.0.0.1", 0), Handler)
        self._server.daemon_threads = True
        self.address = f"http://127.0.0.1:{self._server.server_port}"
        self._thread = threading.Thread(target=self._server.serve_forever, args=(0.05,), daemon=True)
        self._thread.start()

    def stop(self) -> None:
        self._server.shutdown()
        self._thread.join(5)
        self._server.server_close()


@pytest.fixture
def script() -> Iterator[Script]:
    started = Script()
    yield started
    started.stop()


@pytest.fixture
def calls(monkeypatch: pytest.MonkeyPatch) -> Any:
    monkeypatch.syspath_prepend(str(PROGRAMS))
    import calls

    yield calls
    sys.modules.pop("calls")


def test_one_connection_carries_all_calls(script: Script, calls: Any) -> None:
    script.answers = [GOOD] * 3
    service = calls.Service(f"{script.address}/spc/", key="of-line-3")
    answers = [service.post("/v1/x", b"{}") for _ in range(3)]
    service.close()
    assert script.connections == 1
    assert {path for path, _, _ in script.seen} == {"/spc/v1/x"}
    assert all(headers["X-API-Key"] == "of-line-3" for _, headers, _ in script.seen)
    ids = [headers["X-Request-ID"] for _, headers, _ in script.seen]
    assert len(set(ids)) == 3
    assert [answer.request_id for answer in answers] == ids
    assert answers[0].body == {"verdict": "in-control"}


def test_a_kept_connection_that_was_closed_is_no_failure(script: Script, calls: Any) -> None:
    script.answers = [(200, {"Connection": "keep-alive"}, b"{}"), None, GOOD]
    service = calls.Service(script.address)
    service.post("/v1/x", b"{}")
    assert service.post("/v1/x", b"{}").body == {"verdict": "in-control"}
    service.close()
    assert script.connections == 2


@pytest.mark.parametrize(
    ("answer", "seconds"),
    [
        ((503, {"Retry-After": "7"}, b"{}"), 7),
        ((503, {"Retry-After": "Wed, 02 Mar 2026 06:00:00 GMT"}, b"{}"), 0),
        ((429, {}, b"slow down"), 0),
        ((502, {}, b"<html>Bad gateway</html>"), 0),
        ((504, {}, b""), 0),
        (None, 0),
        (2.0, 0),
        ((200, {"Content-Length": "90", "Connection": "close"}, b'{"verdict": '), 0),
    ],
)
def test_what_is_worth_another_try(script: Script, calls: Any, answer: Any, seconds: float) -> None:
    script.answers = [answer, GOOD]
    service = calls.Service(script.address, timeout=0.3)
    with pytest.raises(calls.Away) as caught:
        service.post("/v1/x", b"{}")
    assert caught.value.seconds == seconds
    assert calls.pause(1, caught.value) >= seconds
    assert service.post("/v1/x", b"{}").body == {"verdict": "in-control"}
    service.close()


@pytest.mark.parametrize(
    ("answer", "told"),
    [
        ((200, {}, b"<html>Welcome</html>"), "No answer of Assignable"),
        ((200, {}, b"[]"), "No answer of Assignable"),
        ((404, {}, b"not here"), "No answer of Assignable"),
        (
            (
                500,
                {},
                b'{"type": "/problems/internal", "title": "Internal error", "detail": "The fault is ours."}',
            ),
            "ours",
        ),
        (
            (422, {}, json.dumps({"title": "No", "errors": [{"pointer": "#/a", "detail": "Bad."}]}).encode()),
            "No (422): #/a Bad. [",
        ),
    ],
)
def test_what_is_not(script: Script, calls: Any, answer: Any, told: str) -> None:
    script.answers = [answer]
    service = calls.Service(script.address)
    with pytest.raises(calls.Refused) as caught:
        service.post("/v1/x", b"{}")
    service.close()
    assert told in str(caught.value)
    assert script.seen[0][1]["X-Request-ID"] in str(caught.value)


def test_pauses_grow_and_end(calls: Any) -> None:
    away = calls.Away("")
    longest = [max(calls.pause(n, away) for _ in range(200)) for n in range(1, 12)]
    assert longest[0] <= 0.5
    assert longest[3] > 3
    assert 25 < max(longest) <= 30
    assert len({calls.pause(3, away) for _ in range(20)}) > 10
