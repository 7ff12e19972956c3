"""Measures requests, each in a fresh process forked from a warmed one: the tests run this as a program.

Lines of standard input are pairs of an operation's id and the number of its request in :mod:`faults.worst`; each is
answered by a line: seconds of CPU, status, bytes of the body, bytes by which the memory rose at its peak.
"""

from __future__ import annotations

import json
import os
import resource
import sys
import time
from pathlib import Path

for name in ("OPENBLAS_NUM_THREADS", "OMP_NUM_THREADS"):
    os.environ[name] = "1"

LONGEST_SECONDS = 60  # of CPU; then the process is ended by the system


def kilobytes(name: str) -> int:
    text = Path("/proc/self/status").read_text()
    return next(int(line.split()[1]) for line in text.splitlines() if line.startswith(name))


def main() -> None:
    from assignable.api import answers
    from assignable.cli.serving import warm_up
    from contract import served
    from faults import worst

    app = served.app()
    warm_up(app)
    worst.labels()
    client = app.test_client()

    def measured(operation_id: str, which: int) -> list[object]:
        operation = served.operations()[operation_id]
        if operation.method == "GET":
            began = time.process_time()
            answer = client.get(operation.path, query_string=worst.QUERIES.get(operation_id, {}))
            return [time.process_time() - began, answer.status_code, 0, 0]
        body = answers.dumps(list(worst.requests_of(operation))[which][1]())
        Path("/proc/self/clear_refs").write_text("5")  # the peak counts from here
        held = kilobytes("VmRSS")
        began = time.process_time()
        answer = client.post(operation.path, data=body, content_type="application/json")
        took = time.process_time() - began
        told = answer.data[:300].decode() if answer.status_code != 200 else ""
        return [took, answer.status_code, len(body), (kilobytes("VmHWM") - held) * 1024, told]

    for line in sys.stdin:
        operation_id, which = json.loads(line)
        child = os.fork()
        if child == 0:
            resource.setrlimit(resource.RLIMIT_CPU, (LONGEST_SECONDS, LONGEST_SECONDS))
            print(json.dumps(measured(operation_id, which)), flush=True)
            os._exit(0)
        _, status = os.waitpid(child, 0)
        if status:
            print(json.dumps([float("1e9"), status, 0, 0, "the process did not end by itself"]), flush=True)


if __name__ == "__main__":
    main()
