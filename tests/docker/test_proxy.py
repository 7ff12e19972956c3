"""The proxy of ``docker/proxy``: what it keeps from the servers, what it hands on, and what it says itself."""

from __future__ import annotations

import gzip
import json
import re
import shutil
import socket
import statistics
import subprocess
import threading
import time
from base64 import b64encode
from collections.abc import Iterator, Sequence
from contextlib import ExitStack, contextmanager, suppress
from datetime import UTC, datetime, timedelta
from hashlib import sha256
from http.server import BaseHTTPRequestHandler, ThreadingHTTPServer
from pathlib import Path
from typing import Literal

import pytest
from cryptography import x509
from cryptography.hazmat.primitives import hashes
from cryptography.hazmat.primitives.asymmetric import ec
from cryptography.hazmat.primitives.serialization import Encoding, NoEncryption, PrivateFormat
from cryptography.x509.oid import NameOID

from assignable.api.contract import examples_directory
from assignable.api.problems import TYPES
from assignable.api.settings import Settings
from machines import (
    PATIENCE_SECONDS,
    PROXY,
    Answer,
    Replica,
    call,
    configure,
    eventually,
    free_port,
    needs_nginx,
    nginx,
    proxy,
    raw,
    replica,
)

pytestmark = needs_nginx

LIMITS = "/v1/charts/xbar-r/limits"
EXAMPLE = (examples_directory() / "xbar-r-limits.request.json").read_bytes()
TOO_LARGE = Settings().max_body_bytes + 1


@pytest.fixture(scope="module")
def server(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Replica]:
    with replica(tmp_path_factory.mktemp("server")) as started:
        yield started


@pytest.fixture(scope="module")
def port(server: Replica, tmp_path_factory: pytest.TempPathFactory) -> Iterator[int]:
    with proxy(tmp_path_factory.mktemp("proxy"), [server.port]) as started:
        yield started


@contextmanager
def stand_in(does: Literal["answer", "hang up", "wait"]) -> Iterator[tuple[int, list[dict[str, str]]]]:
    """A server that does no work; its port, and the headers it was sent."""
    seen: list[dict[str, str]] = []
    over = threading.Event()

    class Handler(BaseHTTPRequestHandler):
        def do_POST(self) -> None:
            self.rfile.read(int(self.headers["Content-Length"]))
            seen.append({name.lower(): value for name, value in self.headers.items()})
            if does == "answer":
                self.send_response(204)
                self.end_headers()
                return
            if does == "wait":
                over.wait(PATIENCE_SECONDS)
            with suppress(OSError):  # whoever asked may be gone
                self.connection.shutdown(socket.SHUT_RDWR)

        def log_message(self, *_: object) -> None:
            pass

    with ThreadingHTTPServer(("127.0.0.1", 0), Handler) as listening:
        serving = threading.Thread(target=listening.serve_forever, args=(0.05,))
        serving.start()
        try:
            yield listening.server_address[1], seen
        finally:
            over.set()
            listening.shutdown()
            serving.join()


# Its configuration ----------------------------------------------------------------------------------


def read(folder: Path) -> subprocess.CompletedProcess[str]:
    """What nginx says of the configuration there."""
    command = [*nginx(folder / "nginx.conf"), "-t"]
    return subprocess.run(command, capture_output=True, text=True, check=False)


def test_it_reads_what_is_shipped(tmp_path: Path) -> None:
    shutil.copytree(PROXY, tmp_path, dirs_exist_ok=True)
    upstream = (PROXY / "upstream.conf").read_text()
    assert upstream.count("server service:8000 resolve ") == 1
    # This machine is not in the container network.
    upstream = upstream.replace("service:8000", "127.0.0.1:8000")
    version = subprocess.run(["nginx", "-v"], capture_output=True, text=True, check=True).stderr
    if tuple(map(int, re.findall(r"\d+", version)[:3])) < (
        1,
        27,
        3,
    ):  # the first that resolves names as it runs
        upstream = re.sub("^resolver .*", "", upstream.replace(" resolve ", " "), flags=re.MULTILINE)
    (tmp_path / "upstream.conf").write_text(upstream)
    checked = read(tmp_path)
    assert checked.returncode == 0, checked.stderr
    assert "[warn]" not in checked.stderr


def alternative(text: str) -> str:
    """A file of the site with the lines it offers instead of those it has."""
    return re.sub(
        r"^# (?=[a-z_]+ .*;(?: #.*)?$)",
        "",
        re.sub(r"^[a-z].*;$", "", text, flags=re.MULTILINE),
        flags=re.MULTILINE,
    )


def test_it_reads_what_is_offered_besides(tmp_path: Path) -> None:
    shutil.copytree(PROXY, tmp_path, dirs_exist_ok=True)
    certificate, key = self_signed(tmp_path)
    listen = alternative((PROXY / "listen.conf").read_text())
    assert listen.count("/run/secrets/") == 2
    for offered, here in (("/run/secrets/proxy.pem", certificate), ("/run/secrets/proxy.key", key)):
        listen = listen.replace(offered, str(here))
    (tmp_path / "listen.conf").write_text(listen)
    upstream = alternative((PROXY / "upstream.conf").read_text())
    assert len(re.findall("^server ", upstream, re.MULTILINE)) == 2
    (tmp_path / "upstream.conf").write_text(upstream)
    checked = read(tmp_path)
    assert checked.returncode == 0, checked.stderr


def self_signed(folder: Path) -> tuple[Path, Path]:
    """A certificate for nobody, and its key."""
    key = ec.generate_private_key(ec.SECP256R1())
    name = x509.Name([x509.NameAttribute(NameOID.COMMON_NAME, "localhost")])
    now = datetime.now(UTC)
    made = (
        x509.CertificateBuilder(name, name, key.public_key(), 1, now, now + timedelta(hours=1))
        .sign(key, hashes.SHA256())
        .public_bytes(Encoding.PEM)
    )
    (folder / "proxy.pem").write_bytes(made)
    (folder / "proxy.key").write_bytes(key.private_bytes(Encoding.PEM, PrivateFormat.PKCS8, NoEncryption()))
    return folder / "proxy.pem", folder / "proxy.key"


def test_it_would_not_read_a_misspelt_directive(tmp_path: Path) -> None:
    configuration = configure(tmp_path, free_port(), [free_port()])
    configuration.write_text(
        configuration.read_text().replace("proxy_next_upstream ", "proxy_next_upstreams ")
    )
    checked = read(tmp_path)
    assert checked.returncode == 1
    assert "proxy_next_upstreams" in checked.stderr


# What it hands on -----------------------------------------------------------------------------------


def test_an_answer_is_the_servers_byte_for_byte(port: int, server: Replica) -> None:
    through = call(port, "POST", LIMITS, EXAMPLE)
    direct = call(server.port, "POST", LIMITS, EXAMPLE)
    assert (through.status, through.body) == (200, direct.body)
    ours = {"date", "server", "connection", "x-request-id"}
    assert {(name.lower(), value) for name, value in through.headers.items() if name.lower() not in ours} == {
        (name.lower(), value) for name, value in direct.headers.items() if name.lower() not in ours
    }


def content_digest(body: bytes) -> str:
    return f"sha-256=:{b64encode(sha256(body).digest()).decode()}:"


def test_a_digest_is_of_the_bytes_that_arrive(port: int) -> None:
    for wanted in ("gzip", "gzip, deflate, br", "identity"):
        answer = call(port, "POST", LIMITS, EXAMPLE, {"Accept-Encoding": wanted})
        assert answer.status == 200
        assert "Content-Encoding" not in answer.headers
        assert answer.headers["Content-Digest"] == content_digest(answer.body)


def test_why_it_does_not_compress(server: Replica, tmp_path: Path) -> None:
    """RFC 9530: a Content-Digest is of the content as it is coded. nginx would code, and leave the digest."""
    with proxy(
        tmp_path, [server.port], "gzip on; gzip_proxied any; gzip_types application/json;"
    ) as compressing:
        answer = call(compressing, "POST", LIMITS, EXAMPLE, {"Accept-Encoding": "gzip"})
    assert answer.headers["Content-Encoding"] == "gzip"
    assert answer.headers["Content-Digest"] == content_digest(gzip.decompress(answer.body))
    assert answer.headers["Content-Digest"] != content_digest(answer.body)


def test_a_compressed_request_arrives(port: int) -> None:
    answer = call(port, "POST", LIMITS, gzip.compress(EXAMPLE), {"Content-Encoding": "gzip"})
    assert answer.status == 200
    assert answer.json["limits"] == call(port, "POST", LIMITS, EXAMPLE).json["limits"]


def test_a_request_keeps_its_id(port: int, server: Replica) -> None:
    kept = call(port, "POST", LIMITS, EXAMPLE, {"X-Request-ID": "lot-7.b_2"})
    assert kept.headers["X-Request-ID"] == "lot-7.b_2"
    assert eventually(lambda: "lot-7.b_2" in server.answered())
    for given in ("", "two words", "x" * 129):
        made = call(port, "POST", LIMITS, b"{", {"X-Request-ID": given} if given else {})
        assert made.json["request_id"] == made.headers["X-Request-ID"] != given
        assert re.fullmatch(
            "[0-9a-f]{32}", made.headers["X-Request-ID"]
        )  # nginx's, so that both logs have it
        name = made.headers["X-Request-ID"]
        assert eventually(lambda name=name: name in server.answered())


def test_the_server_is_told_who_asked_and_how(tmp_path: Path) -> None:
    with stand_in("answer") as (upstream, seen), proxy(tmp_path, [upstream]) as port:
        headers = {"Host": "spc.plant.example", "X-Forwarded-For": "203.0.113.9", "Connection": "keep-alive"}
        assert call(port, "POST", "/", b"1", headers).status == 204
    (told,) = seen
    assert told["host"] == "spc.plant.example"
    assert told["x-forwarded-for"] == "203.0.113.9, 127.0.0.1"
    assert told["x-forwarded-proto"] == "http"
    assert "connection" not in told


# What it says itself --------------------------------------------------------------------------------


def is_problem(answer: Answer, status: int, code: str) -> None:
    problem = answer.json
    assert (answer.status, problem["status"], problem["type"]) == (status, status, f"/problems/{code}")
    assert problem["title"] == TYPES[code].title
    assert TYPES[code].status == status
    assert problem["detail"]
    assert answer.headers["Content-Type"] == "application/problem+json"
    assert answer.headers["X-Request-ID"] == problem["request_id"]
    assert answer.headers["Cache-Control"] == "no-store"
    assert answer.headers["X-Content-Type-Options"] == "nosniff"
    assert (answer.headers["Retry-After"] == "1") == (status == 503)
    assert ("Allow" in answer.headers) == (status == 405)


HEAD = b"POST / HTTP/1.1\r\nHost: here\r\nX-Request-ID: mine\r\n"


@pytest.mark.parametrize(
    "text",
    [
        b"NOT HTTP\r\n\r\n",
        b"GET / HTTP/3.0\r\nHost: here\r\n\r\n",
        b"GET / HTTP/1.1\r\n\r\n",
        b"GET / HTTP/1.1\r\nHost: a b\r\n\r\n",
        b"GET /" + b"x" * 40_000 + b" HTTP/1.1\r\nHost: here\r\n\r\n",
        b"GET / HTTP/1.1\r\nHost: here\r\nLong: " + b"x" * 40_000 + b"\r\n\r\n",
        HEAD + b"Content-Length: -1\r\n\r\n",
        HEAD + b"Content-Length: 2\r\nTransfer-Encoding: chunked\r\n\r\n0\r\n\r\n",
        HEAD + b"Transfer-Encoding: gzip\r\n\r\n",
        HEAD + b"Transfer-Encoding: chunked\r\n\r\nno number\r\n",
    ],
)
def test_what_is_no_request(port: int, text: bytes) -> None:
    is_problem(raw(port, text), 400, "bad-request")


@pytest.mark.parametrize("path", ["/metrics", "//metrics", "/%6detrics", "/./metrics?a=1", "/~problem"])
def test_what_is_not_for_callers(port: int, server: Replica, path: str) -> None:
    before = len(server.answered())
    is_problem(raw(port, f"GET {path} HTTP/1.1\r\nHost: here\r\n\r\n".encode()), 404, "not-found")
    assert len(server.answered()) == before


def test_a_method_of_no_use(port: int) -> None:
    is_problem(call(port, "TRACE", "/"), 405, "method-not-allowed")


def test_a_body_that_is_too_large(port: int) -> None:
    is_problem(raw(port, HEAD + b"Content-Length: %d\r\n\r\n" % TOO_LARGE), 413, "content-too-large")
    # Whoever first sends all of it sees the answer too.
    is_problem(call(port, "POST", LIMITS, b" " * TOO_LARGE), 413, "content-too-large")
    with socket.create_connection(("127.0.0.1", port), timeout=10) as client:
        client.sendall(HEAD + b"Transfer-Encoding: chunked\r\n\r\n")
        chunk = b"100000\r\n" + b" " * 0x100000 + b"\r\n"
        for _ in range(TOO_LARGE // 0x100000):
            client.sendall(chunk)
        client.sendall(b"1\r\n \r\n0\r\n\r\n")
        head, _, body = client.makefile("rb").read(100_000).partition(b"\r\n\r\n")
    assert head.startswith(b"HTTP/1.1 413 ")
    assert json.loads(body)["type"] == "/problems/content-too-large"


def test_the_largest_body_there_may_be(port: int) -> None:
    answer = call(port, "POST", LIMITS, EXAMPLE + b" " * (TOO_LARGE - 1 - len(EXAMPLE)))
    assert answer.status == 200


def test_no_server_is_there(tmp_path: Path) -> None:
    with proxy(tmp_path, [free_port()]) as port:
        is_problem(call(port, "POST", LIMITS, EXAMPLE), 503, "busy")


# Streams of lines -----------------------------------------------------------------------------------

BULK = "/v1/bulk/signals"
LINES = (examples_directory() / "bulk-signals.request.ndjson").read_bytes()
AS_LINES = {"Content-Type": "application/x-ndjson", "X-Request-ID": "lines"}


def test_lines_are_answered(port: int, server: Replica) -> None:
    through = call(port, "POST", BULK, LINES, AS_LINES)
    assert through.status == 200
    assert through.body == call(server.port, "POST", BULK, LINES, AS_LINES).body
    assert json.loads(through.body.splitlines()[-1])["done"]


def test_a_stream_may_be_longer_than_a_body(port: int) -> None:
    blank = b" " * 999 + b"\n"
    longer = call(port, "POST", BULK, LINES + blank * (TOO_LARGE // 1000 + 1), AS_LINES)
    assert longer.body.splitlines()[:-1] == call(port, "POST", BULK, LINES, AS_LINES).body.splitlines()[:-1]
    limit = Settings().max_stream_bytes
    head = f"POST {BULK} HTTP/1.1\r\nHost: here\r\nContent-Length: {limit + 1}\r\n\r\n"
    is_problem(raw(port, head.encode()), 413, "content-too-large")


def test_the_first_answers_leave_before_the_last_lines_come(port: int) -> None:
    """Held back are the first 8 MiB of answers: here they are more."""
    refused = b'{"x":1}\n' * 1000
    with socket.create_connection(("127.0.0.1", port), timeout=PATIENCE_SECONDS) as client:
        head = b"POST /v1/bulk HTTP/1.1\r\nHost: here\r\nContent-Type: application/x-ndjson\r\n"
        client.sendall(head + b"Transfer-Encoding: chunked\r\n\r\n")
        for _ in range(200):
            client.settimeout(PATIENCE_SECONDS)
            client.sendall(b"%x\r\n" % len(refused) + refused + b"\r\n")
            client.settimeout(0.05)
            try:
                assert client.recv(1000).startswith(b"HTTP/1.1 200 ")
            except TimeoutError:
                continue
            return
    pytest.fail("No answer came while lines were sent.")


def test_streams_that_stall_leave_threads_to_the_others(port: int) -> None:
    head = f"POST {BULK} HTTP/1.1\r\nHost: here\r\nContent-Type: application/x-ndjson\r\n".encode()
    with ExitStack() as stack:
        for _ in range(Settings().threads):
            stall(stack, port, head + b"Content-Length: 5000\r\n\r\n{", 1)
            time.sleep(0.1)
            answer = call(port, "POST", BULK, LINES, AS_LINES)
            if answer.status != 200:
                break
        is_problem(answer, 503, "busy")  # the service's own: streams have half of its threads
        assert max(seconds(port, 20)) < 3
    assert eventually(lambda: call(port, "POST", BULK, LINES, AS_LINES).status == 200)


# What it does when a server is lost -----------------------------------------------------------------


def test_a_calculation_lost_with_its_server_is_done_by_the_next(server: Replica, tmp_path: Path) -> None:
    with stand_in("hang up") as (lost, seen), proxy(tmp_path, [lost, server.port]) as port:
        for _ in range(4):
            assert call(port, "POST", LIMITS, EXAMPLE).status == 200
    assert len(seen) == 1  # tried once, and left alone then


def test_a_calculation_that_ends_servers_does_not_end_all(tmp_path: Path) -> None:
    with ExitStack() as stack:
        lost = [stack.enter_context(stand_in("hang up")) for _ in range(3)]
        port = stack.enter_context(proxy(tmp_path, [upstream for upstream, _ in lost]))
        is_problem(call(port, "POST", LIMITS, EXAMPLE), 503, "busy")
        assert sum(len(seen) for _, seen in lost) == 2


def test_a_calculation_that_takes_too_long_is_not_begun_again(tmp_path: Path) -> None:
    """The proxy's 65 and 10 s, as 2 and 0.5 s."""
    scaled = {"proxy_read_timeout": "2s", "proxy_next_upstream_timeout": "500ms"}
    with ExitStack() as stack:
        slow = [stack.enter_context(stand_in("wait")) for _ in range(2)]
        port = stack.enter_context(proxy(tmp_path, [upstream for upstream, _ in slow], scaled=scaled))
        is_problem(call(port, "POST", LIMITS, EXAMPLE), 503, "busy")
        assert sum(len(seen) for _, seen in slow) == 1


@contextmanager
def black_hole() -> Iterator[int]:
    """A port that lets nobody in and refuses nobody, as a machine without power."""
    with socket.socket() as listening, ExitStack() as stack:
        listening.bind(("127.0.0.1", 0))
        listening.listen(0)
        address = listening.getsockname()
        for _ in range(4):  # fill its queue
            waiting = stack.enter_context(socket.socket())
            waiting.setblocking(False)
            waiting.connect_ex(address)
        time.sleep(0.1)
        yield address[1]


def test_a_server_that_is_not_reached_is_passed_over(server: Replica, tmp_path: Path) -> None:
    with black_hole() as gone, proxy(tmp_path, [gone, server.port]) as port:
        began = time.monotonic()
        assert [call(port, "POST", LIMITS, EXAMPLE).status for _ in range(4)] == [200] * 4
        assert 2.5 < time.monotonic() - began < 8


def test_none_is_reached(tmp_path: Path) -> None:
    with black_hole() as gone, proxy(tmp_path, [gone]) as port:
        is_problem(call(port, "POST", LIMITS, EXAMPLE), 503, "busy")  # after the connect timeout: nginx's 504


# What it keeps from the servers ---------------------------------------------------------------------

STALLED = 40
STALLS = (
    b"POST " + LIMITS.encode() + b" HTTP/1.1\r\nHo",
    b"POST " + LIMITS.encode() + b" HTTP/1.1\r\nHost: here\r\nContent-Type: application/json\r\n"
    b"Content-Length: 5000\r\n\r\n{",
    b"GET /openapi.json HTTP/1.1\r\nHost: here\r\n\r\n" * 20,  # and reads none of the answers
)


def stall(stack: ExitStack, port: int, text: bytes, count: int) -> None:
    for _ in range(count):
        client = stack.enter_context(socket.socket())
        client.setsockopt(socket.SOL_SOCKET, socket.SO_RCVBUF, 4096)
        client.connect(("127.0.0.1", port))
        client.sendall(text)


def seconds(port: int, count: int) -> Sequence[float]:
    taken = []
    for _ in range(count):
        began = time.perf_counter()
        assert call(port, "POST", LIMITS, EXAMPLE, patience=5).status == 200
        taken.append(time.perf_counter() - began)
    return taken


@pytest.mark.parametrize("text", STALLS, ids=["header", "body", "reading"])
def test_clients_that_stall_do_no_harm(port: int, text: bytes) -> None:
    quiet = statistics.median(seconds(port, 20))
    with ExitStack() as stack:
        stall(stack, port, text, STALLED)
        time.sleep(0.3)
        taken = seconds(port, 40)
    print(
        f"median {quiet * 1000:.1f} ms, beside {STALLED} that stall {statistics.median(taken) * 1000:.1f} ms"
    )
    assert statistics.median(taken) < 5 * quiet + 0.02
    assert max(taken) < 3
