"""The benchmark: one command that prints a table of ratios, each against its floor, measured in one run.

    python tests/benchmarks/run.py            every row
    python tests/benchmarks/run.py http       the rows whose name holds a word

Ratios of one run are what to quote: absolute times change with the machine. Nothing here is a test.
"""

from __future__ import annotations

import functools
import http.client as http_client
import io
import os
import random
import resource
import shutil
import socket
import subprocess
import sys
import tempfile
import threading
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from flask import Flask

os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")
os.environ["ASSIGNABLE_LOG"] = "off"

HERE = Path(__file__).resolve().parent
SECONDS = float(os.environ.get("BENCHMARK_SECONDS", "4"))
CLIENTS = 8


def row(name: str, measured: str, ratio: float | None, aim: str) -> None:
    told = "" if ratio is None else f"{ratio:8.1e}" if ratio < 0.01 else f"{ratio:8.2f}"
    print(f"{name:<52} {measured:>34} {told:>8}   {aim}", flush=True)


# ---------------------------------------------------------------------------------------------------
# Bodies


def fit_body() -> bytes:
    import numpy as np
    import orjson

    values = np.random.default_rng(1).normal(2.5, 0.012, (25, 5)).round(3).tolist()
    return orjson.dumps(
        {
            "characteristic": {"name": "wall thickness", "unit": "mm"},
            "data": {"values": values},
            "rules": {"published": "western-electric-1956"},
        }
    )


@functools.cache
def application() -> Flask:
    """The application, made once."""
    from assignable.api.app import create_app

    return create_app()


def post(path: str, body: bytes, media_type: str = "application/json", query: str = "") -> bytes:
    """One request through the application, without a socket."""
    environ = {
        "REQUEST_METHOD": "POST",
        "PATH_INFO": path,
        "SCRIPT_NAME": "",
        "QUERY_STRING": query,
        "SERVER_NAME": "localhost",
        "SERVER_PORT": "80",
        "SERVER_PROTOCOL": "HTTP/1.1",
        "wsgi.version": (1, 0),
        "wsgi.url_scheme": "http",
        "wsgi.input": io.BytesIO(body),
        "wsgi.errors": sys.stderr,
        "wsgi.multithread": True,
        "wsgi.multiprocess": True,
        "wsgi.run_once": False,
        "CONTENT_LENGTH": str(len(body)),
        "CONTENT_TYPE": media_type,
        "HTTP_HOST": "localhost",
    }
    status: list[str] = []
    answer = application().wsgi_app(environ, lambda s, h, e=None: status.append(s))
    written = b"".join(answer)
    assert status[0].startswith("200"), written[:500]
    return written


def judge_body() -> bytes:
    import orjson

    limits = orjson.loads(post("/v1/charts/xbar-r/limits", fit_body()))["limits"]
    data = {"values": [[2.51, 2.49, 2.5, 2.5, 2.52]]}
    first = orjson.loads(post("/v1/charts/xbar-r/signals", orjson.dumps({"limits": limits, "data": data})))
    return orjson.dumps({"limits": limits, "data": data, "carry": first["carry"]})


# ---------------------------------------------------------------------------------------------------
# Over HTTP, on the shipped server settings

BARE = """
import sys
from pathlib import Path
from types import SimpleNamespace
from flask import Flask, Response, request
from assignable.api.settings import Settings
from assignable.cli.serving import Server

answers = [Path(name).read_text() for name in sys.argv[2:]]
application = Flask("bare")
application.extensions["assignable.contract"] = SimpleNamespace(metrics=None)

@application.post("/<int:which>")
def answer(which):
    request.get_json()
    return Response(answers[which], content_type="application/json")

Server(application, Settings(port=int(sys.argv[1]), log="off", metrics="off")).run()
"""

OURS = """
import sys
from assignable.cli.serving import serve

serve({"ASSIGNABLE_PORT": sys.argv[1], "ASSIGNABLE_LOG": "off"})
"""


def _free_port() -> int:
    with socket.socket() as found:
        found.bind(("127.0.0.1", 0))
        return found.getsockname()[1]


@contextmanager
def _server(source: str, *arguments: str) -> Iterator[int]:
    """The source run as a server with the shipped settings, on a free loopback port."""
    port = _free_port()
    process = subprocess.Popen(
        [sys.executable, "-c", source, str(port), *arguments],
        stdout=subprocess.DEVNULL,
        stderr=subprocess.DEVNULL,
    )
    try:
        for _ in range(400):
            try:
                socket.create_connection(("127.0.0.1", port), 1).close()
                break
            except OSError:
                time.sleep(0.05)
        else:
            raise SystemExit("the server did not start: run `assignable serve` to see why")
        yield port
    finally:
        process.terminate()
        process.wait(40)


def _rate(port: int, path: str, body: bytes, folder: Path) -> float:
    """Answered requests a second, by wrk where it is installed, by plain sockets else."""
    if shutil.which("wrk"):
        quoted = body.decode().replace("\\", "\\\\").replace("'", "\\'")
        script = folder / "post.lua"
        script.write_text(
            f"wrk.method='POST'\nwrk.body='{quoted}'\nwrk.headers['Content-Type']='application/json'\n"
        )
        command = ["wrk", "-t1", f"-c{CLIENTS}", f"-d{SECONDS:g}s", "-s", str(script)]
        out = subprocess.run(
            [*command, f"http://127.0.0.1:{port}{path}"], capture_output=True, text=True, check=True
        ).stdout
        assert "Non-2xx" not in out, out
        return float(out.split("Requests/sec:")[1].split()[0])
    return _rate_by_sockets(port, path, body)


def _rate_by_sockets(port: int, path: str, body: bytes) -> float:
    request = (
        f"POST {path} HTTP/1.1\r\nHost: x\r\nContent-Type: application/json\r\nContent-Length: {len(body)}\r\n\r\n"
    ).encode() + body
    counts = [0] * CLIENTS
    until = time.monotonic() + SECONDS

    def client(at: int) -> None:
        with (
            socket.create_connection(("127.0.0.1", port)) as connection,
            connection.makefile("rb") as answers,
        ):
            while time.monotonic() < until:
                connection.sendall(request)
                length = 0
                assert b" 200 " in answers.readline()
                while (line := answers.readline()) != b"\r\n":
                    if line.lower().startswith(b"content-length:"):
                        length = int(line.split(b":")[1])
                answers.read(length)
                counts[at] += 1

    threads = [threading.Thread(target=client, args=(at,)) for at in range(CLIENTS)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    return sum(counts) / SECONDS


def http() -> None:
    """Requests a second against a bare Flask application on the same settings."""
    fit, judge = fit_body(), judge_body()
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        for at, (path, body) in enumerate(
            (("/v1/charts/xbar-r/limits", fit), ("/v1/charts/xbar-r/signals", judge))
        ):
            (folder / f"answer{at}").write_bytes(post(path, body))
        with _server(BARE, *(str(folder / f"answer{at}") for at in (0, 1))) as floor, _server(OURS) as ours:
            for at, title, path, body, aim in (
                (
                    0,
                    "http: xbar-r limits, 25x5, all diagnostics",
                    "/v1/charts/xbar-r/limits",
                    fit,
                    "aim ≥ 0.4",
                ),
                (1, "http: one subgroup judged with carry", "/v1/charts/xbar-r/signals", judge, "aim ≥ 0.6"),
            ):
                ratios = []
                for _ in range(3):
                    a = _rate(ours, path, body, folder)
                    b = _rate(floor, f"/{at}", body, folder)
                    ratios.append((a / b, a, b))
                ratio, a, b = sorted(ratios)[1]
                row(title, f"{a:.0f} of {b:.0f} requests/s", ratio, aim)


# ---------------------------------------------------------------------------------------------------
# In process


CHARACTERISTICS = 200
LINES = 20_000


def _lines_a_second(port: int, path: str, head: bytes, lines: list[bytes]) -> float:
    """Lines a second that as many streams as there are processors carry together."""
    body = head + b"".join(lines)
    began = time.monotonic()
    streams = os.cpu_count() or 1

    def stream() -> None:
        connection = http_client.HTTPConnection("127.0.0.1", port, timeout=120)
        connection.request("POST", path, body, {"Content-Type": "application/x-ndjson"})
        told = connection.getresponse().read()
        connection.close()
        assert told.rpartition(b'{"done":true')[2].endswith(b'"problems":0}\n'), told[-300:]

    threads = [threading.Thread(target=stream) for _ in range(streams)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    return streams * len(lines) / (time.monotonic() - began)


def bulk() -> None:
    """Single subgroups of many characteristics: a call each, and a line each."""
    import orjson

    limits = orjson.loads(judge_body())["limits"]
    chance = random.Random(1)
    data = [[[round(chance.gauss(2.5, 0.012), 3) for _ in range(5)]] for _ in range(LINES)]
    head = b"".join(
        orjson.dumps({"characteristic": f"c{at}", "limits": limits}) + b"\n" for at in range(CHARACTERISTICS)
    )
    brought = [
        orjson.dumps({"characteristic": f"c{at % CHARACTERISTICS}", "data": {"values": values}}) + b"\n"
        for at, values in enumerate(data)
    ]
    whole = b'{"operation":"judgeXbarR","body":' + judge_body() + b"}\n"
    with tempfile.TemporaryDirectory() as folder, _server(OURS) as port:
        single = _rate(port, "/v1/charts/xbar-r/signals", judge_body(), Path(folder))
        series = _lines_a_second(port, "/v1/bulk/signals", head, brought)
        plain = _lines_a_second(port, "/v1/bulk", b"", [whole] * (LINES // 4))
    row(
        f"one subgroup a line, {CHARACTERISTICS} characteristics, against a call each",
        f"{series:,.0f} lines/s, {single:,.0f} calls/s",
        series / single,
        "at least 5",
    )
    row("the same as whole requests in lines", f"{plain:,.0f} lines/s", plain / single, "-")


def _cpu(action: Callable[[], object], times: int = 3) -> float:
    best = float("inf")
    for _ in range(times):
        start = time.process_time()
        action()
        best = min(best, time.process_time() - start)
    return best


def large() -> None:
    """200,000 subgroups of five, bytes in and bytes out, against parsing, arithmetic and writing alone."""
    import numpy as np
    import orjson

    values = np.random.default_rng(2).normal(2.5, 0.012, (200_000, 5)).round(4).tolist()
    body = orjson.dumps({"data": {"values": values}, "rules": {"published": "western-electric-1956"}})
    table = "".join(("x1,x2,x3,x4,x5\n", *(",".join(map(str, one)) + "\n" for one in values))).encode()
    query = "rules.published=western-electric-1956"
    del values

    def floor() -> bytes:
        x = np.array(orjson.loads(body)["data"]["values"])
        mean, spread = x.mean(axis=1), x.max(axis=1) - x.min(axis=1)
        return orjson.dumps({"mean": mean, "range": spread}, option=orjson.OPT_SERIALIZE_NUMPY)

    post("/v1/charts/xbar-r/limits", fit_body())
    pairs = [(_cpu(lambda: post("/v1/charts/xbar-r/limits", body), 1), _cpu(floor, 1)) for _ in range(5)]
    ours, bare = min(a for a, _ in pairs), min(b for _, b in pairs)
    row(
        "large: xbar-r limits, 200,000x5",
        f"{ours * 1e3:.0f} of {bare * 1e3:.0f} ms CPU",
        ours / bare,
        "aim ≤ 2",
    )
    as_table = _cpu(lambda: post("/v1/charts/xbar-r/limits", table, "text/csv", query), 5)
    row(
        "the same as CSV, to JSON",
        f"{as_table * 1e3:.0f} of {ours * 1e3:.0f} ms CPU",
        as_table / ours,
        "aim ≤ 1.2",
    )


def memory() -> None:
    """Peak memory of that request over what the process held before, against the body."""
    code = """
import sys
sys.path.insert(0, sys.argv[1])
import run
import numpy as np, orjson
run.post("/v1/charts/xbar-r/limits", run.fit_body())
parts = [b'{"data":{"values":[']
rows = np.random.default_rng(2).normal(2.5, 0.012, (200_000, 5)).round(4)
for at in range(0, len(rows), 1000):
    parts.append(orjson.dumps(rows[at:at + 1000], option=orjson.OPT_SERIALIZE_NUMPY)[1:-1])
    parts.append(b",")
parts[-1] = b']},"rules":{"published":"western-electric-1956"}}'
body = b"".join(parts)
del rows, parts

def kilobytes(name):
    return next(int(line.split()[1]) for line in open("/proc/self/status") if line.startswith(name))

held = kilobytes("VmRSS")
run.post("/v1/charts/xbar-r/limits", body)
print(len(body), (kilobytes("VmHWM") - held) * 1024)
"""
    command = [sys.executable, "-c", code, str(HERE)]
    out = subprocess.run(command, capture_output=True, text=True, check=True).stdout
    size, peak = map(int, out.split())
    row(
        "memory: peak of that request over the body",
        f"{peak / 1e6:.0f} MB for {size / 1e6:.1f} MB",
        peak / size,
        "aim ≤ 15",
    )


def runs() -> None:
    """Run length of the four Western Electric rules, cold, and again."""
    code = """
import time
from assignable.spc import runlength
from assignable.spc.rules import PUBLISHED, Rule
import scipy.linalg, scipy.special
rules = PUBLISHED["western-electric-1956"].rules
for _ in range(2):
    start = time.process_time()
    runlength.shewhart(rules)
    print(time.process_time() - start)
"""
    out = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True).stdout
    cold, again = map(float, out.split())
    row("runs: Western Electric 1956, cold", f"{cold * 1e3:.1f} ms CPU", None, "aim < 50 ms")
    row("runs: the same again", f"{again * 1e6:.0f} µs CPU", None, "cached")


def start() -> None:
    """Import to ready, against importing flask, marshmallow and numpy alone."""

    def seconds(code: str) -> float:
        began = resource.getrusage(resource.RUSAGE_CHILDREN)
        subprocess.run([sys.executable, "-c", code], check=True)
        ended = resource.getrusage(resource.RUSAGE_CHILDREN)
        return ended.ru_utime + ended.ru_stime - began.ru_utime - began.ru_stime

    nothing = min(seconds("pass") for _ in range(5))
    ours, floor = [], []
    for _ in range(9):
        ours.append(seconds("from assignable.api.app import create_app; create_app()"))
        floor.append(seconds("import flask, marshmallow, numpy"))
    a, b = min(ours) - nothing, min(floor) - nothing
    row("start: import to ready", f"{a * 1e3:.0f} of {b * 1e3:.0f} ms CPU", a / b, "aim ≤ 1.5")


def pictures() -> None:
    """Drawing alone: the picture of a chart whose result is there, of few points and of very many."""
    import numpy as np

    from assignable.pictures import charts
    from assignable.spc.charts import CHARTS
    from assignable.spc.charts.common import PanelLimits
    from assignable.spc.charts.subgroups import SubgroupOptions
    from assignable.spc.data import Subgroups
    from assignable.spc.rules import PUBLISHED

    options = SubgroupOptions("mean-range", rules=PUBLISHED["western-electric-1956"].rules)
    for points, aim in ((25, "aim < 5 ms"), (200_000, "aim < 60 ms")):
        values = np.random.default_rng(2).normal(2.5, 0.012, (points, 5)).round(4)
        found = CHARTS["xbar-r"].fit(Subgroups(values), options)
        lines = dict(charts.panels_of(found.limits.panels))
        charted = charts.Charted(
            chart=CHARTS["xbar-r"],
            name="wall thickness",
            unit="mm",
            new=False,
            panels=found.baseline.panels,
            frozen={name: PanelLimits(one.centre, one.lower, one.upper) for name, one in lines.items()},
            verdict=found.baseline.verdict,
            signals=found.baseline.signals,
            signals_found=found.baseline.signals_found,
        )
        seconds = _cpu(lambda charted=charted: charts.draw(charted), 15)
        row(f"pictures: xbar-r, {points:,} points", f"{seconds * 1e3:.1f} ms CPU", None, aim)


DESIGN = """
import time
import scipy.linalg, scipy.special, scipy.sparse, scipy.optimize
from assignable.spc import runlength
from assignable.spc.design import economic, memory as designs
from assignable.spc.rules import PUBLISHED
from assignable.spc.runlength import estimated, memory
rules = PUBLISHED["nelson-1984"].rules
costs = economic.duncan(mean_hours_to_shift=100, shift=2, loss_per_hour_out_of_control=100, false_alarm_cost=50,
    cost_of_finding_cause=25, cost_per_sample=0.5, cost_per_piece=0.1, hours_per_piece=0.05, hours_to_find_cause=2)
def work(): %s
for _ in range(2):
    start = time.process_time()
    work()
    print(time.process_time() - start)
"""
"""Cold: a fresh process, the library's own modules and those of scipy loaded before the clock starts."""


def _shewhart_simulation(shift: float, runs: int) -> None:
    from assignable.spc.rules import PUBLISHED
    from assignable.spc.runlength.simulation import simulate

    simulate(
        PUBLISHED["nelson-1984"].rules,
        draw=lambda generator, shape: generator.standard_normal(shape) + shift,
        replicates=runs,
        block=64,
    )


def _ewma_simulation(runs: int, smoothing: float, limit: float, shift: float) -> None:
    import numpy as np

    rng = np.random.default_rng(1)
    state = np.zeros(runs)
    edge = limit * (smoothing / (2 - smoothing)) ** 0.5
    while len(state):
        state = (1 - smoothing) * state + smoothing * (rng.standard_normal(len(state)) + shift)
        state = state[np.abs(state) <= edge]


def _cusum_simulation(runs: int, reference: float, decision: float, shift: float) -> None:
    import numpy as np

    rng = np.random.default_rng(1)
    up, down = np.zeros(runs), np.zeros(runs)
    while len(up):
        x = rng.standard_normal(len(up)) + shift
        up, down = np.maximum(up + x - reference, 0), np.maximum(down - x - reference, 0)
        alive = (up <= decision) & (down <= decision)
        up, down = up[alive], down[alive]


def _economic_simulation(cycles: int) -> None:
    """Cycles of Duncan's process at its best plan, sample by sample until the signal."""
    import numpy as np

    rng = np.random.default_rng(1)
    interval, power, alarm = 1.41, 0.918, 0.00207
    shift = rng.exponential(100, cycles)
    alarms = rng.binomial(np.floor(shift / interval).astype(int), alarm)
    signal = rng.geometric(power, cycles) * interval
    (alarms * 50 + signal * 100).sum() / (shift + signal).sum()


def _baseline_simulation(baselines: int) -> None:
    """Conditional run lengths of 25 subgroups of 5, for a quantile of them."""
    import math

    import numpy as np
    from scipy.special import ndtr

    values = np.random.default_rng(1).standard_normal((baselines, 25, 5))
    centre = values.mean(axis=(1, 2)) * math.sqrt(5)
    sigma = (values.max(axis=2) - values.min(axis=2)).mean(axis=1) / 2.326
    np.quantile(1 / (ndtr(-3.39 * sigma + centre) + ndtr(-3.39 * sigma - centre)), 0.1)


def designs() -> None:
    """Design numbers, cold and again, and over a simulation of the same at a standard error of 0.1 %.

    A run length whose standard deviation is its mean takes a million runs for that, others as many as the square
    of their ratio says. A simulation is timed on fewer runs, and its time scaled by their number; of an optimum it is
    that of the one chart found (in control and shifted), or plan, where a search would take many.
    """
    from assignable.spc import runlength
    from assignable.spc.rules import PUBLISHED
    from assignable.spc.runlength import memory as with_memory

    whole = 1e6

    def needed(found) -> float:
        return whole * (found.sd / found.arl) ** 2

    def nelson() -> float:
        rules = PUBLISHED["nelson-1984"].rules
        return sum(
            _cpu(lambda s=s: _shewhart_simulation(s, 1500), 1)
            * needed(runlength.shewhart(rules, shift=s))
            / 1500
            for s in (0.0, 0.5, 1.0, 1.5, 2.0, 2.5, 3.0)
        )

    def ewma(smoothing: float = 0.1, limit: float = 2.7, shift: float = 1.0, runs: int = 20_000) -> float:
        found = with_memory.ewma(smoothing=smoothing, limit=limit, shift=shift)
        return _cpu(lambda: _ewma_simulation(runs, smoothing, limit, shift), 1) * needed(found) / runs

    def best_ewma() -> float:
        return ewma(0.135, 2.78, 0.0, 5_000) + ewma(0.135, 2.78, 1.0)

    def best_cusum() -> float:
        return sum(
            _cpu(lambda s=s: _cusum_simulation(5_000, 0.5, 4.77, s), 1)
            * needed(with_memory.cusum(reference=0.5, decision=4.77, shift=s))
            / 5_000
            for s in (0.0, 1.0)
        )

    def cost() -> float:
        return _cpu(lambda: _economic_simulation(100_000), 1) * whole / 100_000

    def guarantee() -> float:
        # The error of this quantile is about 1.4 times that of a mean of the same numbers.
        return _cpu(lambda: _baseline_simulation(10_000), 1) * 2 * whole / 10_000

    for name, source, aim, simulated in (
        (
            "Nelson 1984, all eight rules, seven shifts",
            "[runlength.shewhart(rules, shift=s) for s in (0, .5, 1, 1.5, 2, 2.5, 3)]",
            "aim < 1500 ms",
            nelson,
        ),
        (
            "EWMA at one shift, 1e-8 or better",
            "memory.ewma(smoothing=0.1, limit=2.7, shift=1.0)",
            "aim < 10 ms",
            ewma,
        ),
        (
            "optimal EWMA, one sigma, 370.4",
            "designs.optimal_ewma(shift=1.0, in_control_arl=370.4)",
            "aim < 400 ms",
            best_ewma,
        ),
        (
            "optimal CUSUM, one sigma, 370.4",
            "designs.optimal_cusum(shift=1.0, in_control_arl=370.4)",
            "aim < 400 ms",
            best_cusum,
        ),
        ("economic optimum", "economic.design(costs)", "aim < 500 ms", cost),
        (
            "guaranteeing multiple, 25 subgroups of 5",
            "estimated.guaranteed_multiple(estimated.baseline(25, 5, 'mean-range'), 370.4, 0.9)",
            "aim < 200 ms",
            guarantee,
        ),
    ):
        out = subprocess.run(
            [sys.executable, "-c", DESIGN % source],
            capture_output=True,
            text=True,
            check=True,
            env={**os.environ, "OPENBLAS_NUM_THREADS": "1"},
        ).stdout
        cold, again = map(float, out.split())
        row(
            f"designs: {name}",
            f"{cold * 1e3:.1f} / {again * 1e3:.2f} ms CPU",
            cold / simulated(),
            f"{aim}, cold; ratio to a simulation at 0.1 %, scaled from fewer runs",
        )


# ---------------------------------------------------------------------------------------------------
# Every chart at 200,000 points


def _series(name: str, m: int) -> dict[str, object]:
    """The chart's own example with invented data of m points in its place."""
    import json

    import numpy as np

    example = HERE.parents[1] / "openapi" / "examples" / f"{name}-limits.request.json"
    asked = json.loads(example.read_text())
    for left_out in ("exclude", "subgroup_size", "adjustment"):
        asked.pop(left_out, None)
    draw = np.random.default_rng(3)
    values = draw.normal(2.5, 0.012, m).round(4).tolist()
    data: dict[str, object]
    if name in ("ewma", "cusum", "moving-average", "trend", "residual"):
        data = (
            {"values": values}
            if "values" in asked["data"] and name == "residual"
            else {"individuals": values}
        )
    elif name == "individuals":
        data = {"values": values}
    elif name in ("p", "np", "p-prime"):
        data = {"counts": draw.binomial(120, 0.06, m).tolist(), "inspected": 120}
    elif name in ("c", "u", "u-prime"):
        data = {"counts": draw.poisson(9.0, m).tolist(), **({} if name == "c" else {"inspected": 1.5})}
    elif name in ("g", "t"):
        spread = draw.geometric(0.02, m) if name == "g" else draw.exponential(40.0, m).round(3)
        data = {"intervals": spread.tolist()}
    elif name in ("t-squared", "mewma"):
        variables = asked["data"]["variables"]
        data = {
            "variables": variables,
            "values": draw.normal(0.0, 1.0, (m, len(variables))).round(3).tolist(),
        }
    else:
        data = {"values": draw.normal(2.5, 0.012, (m, 5)).round(4).tolist()}
    return {**asked, "data": data}


def _plain_work(name: str, data: dict[str, object]) -> dict[str, object]:
    """The chart's own arithmetic in a few array calls: what any implementation must do."""
    import numpy as np
    import scipy

    column = next(data[key] for key in ("values", "individuals", "counts", "intervals") if key in data)
    x = np.array(column, dtype=float)
    if x.ndim == 2 and name in ("t-squared", "mewma"):
        if name == "mewma":
            x = scipy.signal.lfilter([0.1], [1.0, -0.9], x, axis=0)
        z = x - x.mean(axis=0)
        factor = np.linalg.cholesky(np.cov(z.T))
        return {"t_squared": (np.linalg.solve(factor, z.T) ** 2).sum(axis=0)}
    if x.ndim == 2:
        return {"mean": x.mean(axis=1), "spread": x.std(axis=1, ddof=1)}
    z = (x - x.mean()) / x.std()
    if name == "ewma":
        return {"ewma": scipy.signal.lfilter([0.1], [1.0, -0.9], z)}
    if name == "cusum":
        upper, lower = np.cumsum(z - 0.5), np.cumsum(-z - 0.5)
        return {"upper": upper - np.minimum.accumulate(upper), "lower": lower - np.minimum.accumulate(lower)}
    if name == "moving-average":
        return {"average": np.convolve(z, np.full(4, 0.25), "same")}
    if name in ("individuals", "trend", "residual"):
        return {"value": x, "moving_range": np.abs(np.diff(x))}
    return {"value": x / x.mean()}


def _as_answered(found: dict[str, object]) -> dict[str, object]:
    """The points with their places and lines, which is what the answer has to write."""
    import numpy as np

    return {
        name: {
            "index": np.arange(len(value)),
            "value": value,
            **{line: np.full(len(value), 2.5162123) for line in ("centre", "lower", "upper")},
        }
        for name, value in found.items()
    }


def charts() -> None:
    """Fit and judge of 200,000 points, bytes in and bytes out, against the chart's own arithmetic so done."""
    import orjson
    import scipy.signal  # noqa: F401 - loading it is no part of the arithmetic

    from assignable.spc.charts import CHARTS

    chosen = [name for name in CHARTS if name not in ("xbar-r", "short-run", "acceptance")]
    for name in chosen:
        asked = _series(name, 200_000)
        body = orjson.dumps(asked)
        small = orjson.dumps(_series(name, 60))
        path = f"/v1/charts/{name}"
        post(f"{path}/limits", small)
        limits = orjson.loads(post(f"{path}/limits", body))["limits"]
        judged = orjson.dumps({"limits": limits, "data": asked["data"]})

        def floor(body: bytes = body, name: str = name) -> bytes:
            found = _plain_work(name, orjson.loads(body)["data"])
            return orjson.dumps(_as_answered(found), option=orjson.OPT_SERIALIZE_NUMPY)

        for verb, sent in (("limits", body), ("signals", judged)):
            ask = functools.partial(post, f"{path}/{verb}", sent)
            pairs = [(_cpu(ask, 1), _cpu(floor, 1)) for _ in range(3)]
            ours, bare = min(a for a, _ in pairs), min(b for _, b in pairs)
            what = "fit" if verb == "limits" else "judge"
            measured = f"{ours * 1e3:.0f} of {bare * 1e3:.0f} ms CPU"
            row(f"charts: {name}, {what}, 200,000 points", measured, ours / bare, "aim ≤ 2")


ROWS = {
    "http": http,
    "large": large,
    "bulk": bulk,
    "memory": memory,
    "charts": charts,
    "runs": runs,
    "designs": designs,
    "start": start,
    "pictures": pictures,
}


def main(words: list[str]) -> None:
    """Prints the rows asked for."""
    print(f"{'what':<52} {'measured':>34} {'ratio':>8}")
    for name, measure in ROWS.items():
        if not words or any(word in name for word in words):
            measure()


if __name__ == "__main__":
    main(sys.argv[1:])
