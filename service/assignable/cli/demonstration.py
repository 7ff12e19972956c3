"""The main job, shown on a running service: nothing but its public contract over HTTP.

Bodies are the examples of the service's own document, which names the file of each. The plant is invented.
"""

from __future__ import annotations

import json
import os
import sys
import time
import urllib.error
import urllib.request
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Any

Answer = dict[str, Any]

_PATIENCE_SECONDS = 30
_TIMEOUT_SECONDS = 20
_EXAMPLES = "openapi/examples"


class Unreachable(Exception):
    """Nothing that answers as this service does is at the address."""


@dataclass(frozen=True, slots=True)
class Step:
    """One request: ``tell`` gives the lines about its answer, ``frozen`` sends the limits just answered."""

    title: str
    path: str
    tell: Callable[[Answer], Iterator[str]]
    frozen: bool = False


@dataclass(frozen=True, slots=True)
class Service:
    """A running service, and the API key it admits this caller by, if it asks for one."""

    url: str
    key: str | None = None

    def answer(self, path: str, body: Answer | None = None) -> Answer:
        """The answer to a request. Raises Unreachable."""
        return _answer_of(self.url + path, body, {} if self.key is None else {"X-API-Key": self.key})


def demonstrate(url: str, key_file: str | None = None) -> int:
    """Prints requests and answers, then where the documentation is; returns the status to exit with."""
    try:
        key = None if key_file is None else Path(key_file).read_text(encoding="latin-1").strip()
    except OSError as error:
        print(f"{key_file} cannot be read ({error.strerror}).", file=sys.stderr)
        return 2
    service = Service(url, key)
    try:
        ready = _when_ready(service)
        document = service.answer("/openapi.json")
        print(f"\nAssignable {ready['version']} answers at {url}. The plant below is invented.")
        limits: Any = None
        for number, step in enumerate(STEPS, 1):
            print(f"\n{number}. {step.title}")
            found = _example_of(document, step.path)
            if found is None:
                print(f"   This version of the service does not offer {step.path}.")
                continue
            name, body = found
            _print_request(service, step, name)
            if step.frozen and limits is not None:
                body = {**body, "limits": limits}
            answer = service.answer(step.path, body)
            limits = answer.get("limits", limits)
            for line in step.tell(answer):
                print(f"   {line}")
    except Unreachable as error:
        print(error, file=sys.stderr)
        return 1
    print(f"\nDocumentation: {url}/docs", flush=True)
    return 0


def _limits(answer: Answer) -> Iterator[str]:
    limits, baseline = answer["limits"], answer["baseline"]
    unit = limits["characteristic"].get("unit", "")
    excluded = limits["baseline"]["excluded"]
    yield (
        f"{limits['baseline']['points']} cars, {len(excluded)} left out with its reason: {baseline['verdict']}; "
        f"sigma within a car {limits['sigma']:.4g} {unit}"
    )
    for name, panel in baseline["panels"].items():
        yield (
            f"{name:>5}: {panel['lower'][0]:.4f} to {panel['upper'][0]:.4f} {unit}, "
            f"centre {panel['centre'][0]:.4f}"
        )
    arl = answer["performance"].get("in_control_arl")
    if arl is not None:
        yield f"price: a false alarm every {arl:.0f} cars on average while nothing has changed"


def _signals(answer: Answer) -> Iterator[str]:
    yield f"verdict: {answer['verdict']}"
    ids = answer.get("ids") or []
    for signal in answer["signals"]:
        where = ids[signal["index"]] if signal["index"] < len(ids) else f"point {signal['index']}"
        yield f"{where}, {signal['panel']}: {signal['sentence']}"
    yield "carry: what the next call needs to remember comes with the answer; the service keeps nothing"


def _capability(answer: Answer) -> Iterator[str]:
    for name in ("cpk", "ppk", "cpm"):
        index = _found(answer, name)
        if isinstance(index, dict):
            yield f"{name.capitalize()} {index['value']:.2f}, interval {index['lower']:.2f} to {index['upper']:.2f}"


def _run_length(answer: Answer) -> Iterator[str]:
    for row in answer["run_lengths"]:
        moved = f"mean moved by {row['shift']:g} sigma" if row["shift"] else "nothing has changed"
        hours = f", {row['ats_hours']:.1f} hours" if row.get("ats_hours") is not None else ""
        yield f"{moved}: a signal after {row['arl']:.1f} cars on average{hours}"


STEPS: tuple[Step, ...] = (
    Step(
        "Wall thickness of 25 kiln cars, five cartridges each: limits to freeze",
        "/v1/charts/xbar-r/limits",
        _limits,
    ),
    Step("New cars, judged by those limits", "/v1/charts/xbar-r/signals", _signals, frozen=True),
    Step(
        "What the process can hold, against its specification",
        "/v1/capability/measurements",
        _capability,
    ),
    Step("How soon a chart of this design tells of a change", "/v1/designs/run-length", _run_length),
)


def _found(within: Any, name: str) -> Any:
    """The first member of that name, however deep."""
    if isinstance(within, dict):
        if name in within:
            return within[name]
        within = list(within.values())
    if isinstance(within, list):
        for inner in within:
            found = _found(inner, name)
            if found is not None:
                return found
    return None


def _example_of(document: Answer, path: str) -> tuple[str, Answer] | None:
    """Name and body of the first example of a path's POST."""
    operation = document["paths"].get(path, {}).get("post")
    if operation is None:
        return None
    examples = operation["requestBody"]["content"]["application/json"]["examples"]
    name = next(iter(examples))
    return name, examples[name]["value"]


def _print_request(service: Service, step: Step, name: str) -> None:
    key = "" if service.key is None else ' -H "X-API-Key: $KEY"'
    print(
        f"   curl -s {service.url}{step.path}{key} -H 'Content-Type: application/json' \\\n"
        f"     -d @{_EXAMPLES}/{name}.request.json"
    )


def _when_ready(service: Service) -> Answer:
    """What the service says of itself once it takes work."""
    until = time.monotonic() + _PATIENCE_SECONDS
    parent = os.getppid()
    while True:
        try:
            return service.answer("/health/ready")
        except Unreachable:
            if time.monotonic() > until or os.getppid() != parent:  # the server that started this is gone
                raise
        time.sleep(0.05)


def _answer_of(url: str, body: Answer | None, credential: dict[str, str]) -> Answer:
    request = urllib.request.Request(  # noqa: S310 - the address is the one the user gave
        url,
        None if body is None else json.dumps(body).encode(),
        {"Accept": "application/json", "Content-Type": "application/json", **credential},
    )
    try:
        with urllib.request.urlopen(request, timeout=_TIMEOUT_SECONDS) as response:  # noqa: S310
            answer = json.load(response)
    except urllib.error.HTTPError as error:
        with error:
            said = error.read(2000).decode(errors="replace")
        if error.code == 401:
            raise Unreachable(
                f"{url} asks who is calling: give a file that holds an API key it admits, as --api-key-file FILE."
            ) from None
        raise Unreachable(f"{url} answers {error.code}: {said}") from None
    except (OSError, ValueError) as error:
        raise Unreachable(f"No answer from {url} ({error}).") from None
    if not isinstance(answer, dict):
        raise Unreachable(f"{url} does not answer as this service does.")
    return answer
