"""Runs an example program that is killed (SIGKILL) at the n-th step, over and over; no part of the program knows.

A step is what stands between two effects: before each statement to a database, before and after each call of the
service and each line that is printed, before a file is put in its place. Standard input has
``{"program": "mes", "runs": [{"arguments": [...], "output": "file", "kill_at": [3, 17, null]}, ...]}``: each run goes
through its numbers, one process after the other, null for one that is left alone. Standard output has, for each run,
the exit status of each process (-9: killed) and the steps it got to.

The processes are forked from this one, which has no threads and has imported the program already.
"""

from __future__ import annotations

import builtins
import contextlib
import importlib
import json
import os
import signal
import sqlite3
import sys
from pathlib import Path
from typing import Any

PROGRAMS = Path(__file__).resolve().parents[2] / "openapi" / "programs"


class Steps:
    """Counts steps into a file, and ends this process at its last."""

    def __init__(self, kill_at: int | None, counted: int) -> None:
        self.taken = 0
        self.kill_at = kill_at
        self.counted = counted

    def __call__(self) -> None:
        self.taken += 1
        os.pwrite(self.counted, b"%8d" % self.taken, 0)
        if self.taken == self.kill_at:
            os.kill(os.getpid(), signal.SIGKILL)


def prepared(program: Any, step: Steps) -> None:
    """Puts steps around everything that has an effect."""

    class Connection(sqlite3.Connection):
        def __init__(self, *args: Any, **kwargs: Any) -> None:
            super().__init__(*args, **kwargs)
            # A process that is killed loses nothing that it wrote, and the tests need not wait for the disk.
            super().execute("PRAGMA synchronous = OFF")

        def execute(self, *args: Any) -> sqlite3.Cursor:
            step()
            return super().execute(*args)

        def executemany(self, *args: Any) -> sqlite3.Cursor:
            step()
            return super().executemany(*args)

    connect, post, say, replace = sqlite3.connect, program.Service.post, builtins.print, os.replace

    def stepped_post(*args: Any) -> Any:
        step()
        answer = post(*args)
        step()
        return answer

    def stepped_print(*args: Any, **kwargs: Any) -> None:
        step()
        say(*args, **kwargs)
        step()

    def stepped_replace(*args: Any) -> None:
        step()
        replace(*args)

    sqlite3.connect = lambda *args, **kwargs: connect(*args, factory=Connection, **kwargs)  # type: ignore
    program.Service.post = stepped_post
    builtins.print = stepped_print
    os.replace = stepped_replace  # type: ignore[assignment]


def once(program: Any, arguments: list[str], output: Path, kill_at: int | None) -> tuple[int, int]:
    """Status of one process, and the steps it got to."""
    counter = output.with_suffix(".steps")
    counted = os.open(counter, os.O_CREAT | os.O_RDWR | os.O_TRUNC)
    child = os.fork()
    if child == 0:
        with output.open("a") as file, contextlib.redirect_stdout(file), contextlib.redirect_stderr(file):
            prepared(program, Steps(kill_at, counted))
            status = program.main(arguments)
        os._exit(status)
    _, ended = os.waitpid(child, 0)
    steps = int(os.pread(counted, 8, 0) or 0)
    os.close(counted)
    return os.waitstatus_to_exitcode(ended), steps


def main() -> None:
    asked = json.load(sys.stdin)
    sys.path.insert(0, str(PROGRAMS))
    program = importlib.import_module(asked["program"])
    done = [
        [once(program, run["arguments"], Path(run["output"]), number) for number in run["kill_at"]]
        for run in asked["runs"]
    ]
    json.dump(done, sys.stdout)


if __name__ == "__main__":
    main()
