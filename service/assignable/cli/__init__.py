"""The command: ``assignable serve | demo | compute | verify | keys | contract``.

Nothing heavy is imported before :func:`main` has set how many threads linear algebra may start: a worker
does one calculation at a time, and the same sum in another order is another answer in its last digit.
"""

from __future__ import annotations

import argparse
import os
import sys

_ONE_THREAD = ("OPENBLAS_NUM_THREADS", "OMP_NUM_THREADS", "MKL_NUM_THREADS")
_PREFIX = "ASSIGNABLE_"


def main(arguments: list[str] | None = None) -> int:
    """Runs one subcommand; returns the status to exit with: 0 done, 1 failed, 2 not understood."""
    for name in _ONE_THREAD:
        os.environ.setdefault(name, "1")
    given = _parser().parse_args(arguments)
    try:
        status: int = given.run(given)
    except KeyboardInterrupt:
        return 130
    except BrokenPipeError:
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        return 1
    return status


def _parser() -> argparse.ArgumentParser:
    parser = argparse.ArgumentParser(
        prog="assignable", description="The statistics of process control as a stateless HTTP service."
    )
    commands = parser.add_subparsers(title="commands", required=True, metavar="COMMAND")

    serve = commands.add_parser(
        "serve", help="run the service", description="Runs the service until it is told to stop."
    )
    for setting, text in (
        ("host", "address to listen on"),
        ("port", "port to listen on"),
        ("workers", "worker processes"),
        ("threads", "threads of a worker"),
    ):
        serve.add_argument(
            f"--{setting}", metavar=setting.upper(), help=f"{text} (variable {_PREFIX}{setting.upper()})"
        )
    serve.add_argument(
        "--allow-remote",
        action="store_true",
        help=f"listen on an address other machines reach (variable {_PREFIX}ALLOW_REMOTE=yes)",
    )
    serve.add_argument("--demo", action="store_true", help="show the main job once the service answers")
    serve.set_defaults(run=_serve)

    demo = commands.add_parser(
        "demo",
        help="show the main job on a running service",
        description="Walks a running service through the main job and prints requests and answers.",
    )
    demo.add_argument("--url", default="http://127.0.0.1:8000", help="the service (default: %(default)s)")
    demo.add_argument(
        "--api-key-file", metavar="FILE", help="a file with the API key that the service asks for, if it does"
    )
    demo.set_defaults(run=_demo)

    compute = commands.add_parser(
        "compute",
        help="run one operation without a server",
        description="Runs one operation of the contract on a JSON file and prints the answer; a problem goes "
        "to standard error, with exit status 1.",
    )
    compute.add_argument("operation", metavar="OPERATION_ID", help="for example fitXbarRLimits")
    compute.add_argument(
        "file", metavar="FILE", nargs="?", help="the request's body, - for standard input; none for a GET"
    )
    compute.set_defaults(run=_compute)

    verify = commands.add_parser(
        "verify",
        help="compute the published cases on this installation",
        description="Computes every published case through the road of a request and prints what was published "
        "beside what comes out; exit status 1 where a figure differs.",
    )
    verify.add_argument(
        "--json", action="store_true", help="print the answer of GET /v1/verification instead"
    )
    verify.add_argument("--html", metavar="FILE", help="also write a page to read and to print")
    verify.set_defaults(run=_verify)

    keys = commands.add_parser(
        "keys",
        help="make keys: of seals, and of callers",
        description="Makes the keys that seal limits documents, and the API keys of callers.",
    )
    kinds = keys.add_subparsers(title="what", required=True, metavar="WHAT")
    new = kinds.add_parser(
        "new",
        help="a key that seals limits documents",
        description="Makes an Ed25519 key for the variable ASSIGNABLE_SEALING_KEYS, writes it where only its owner can "
        "read it, and prints its public half.",
    )
    new.add_argument("--id", required=True, help="its name in every seal, for example 2026-03")
    new.add_argument("--out", required=True, metavar="FILE", help="the file to make; none there is replaced")
    new.add_argument(
        "--keep",
        metavar="FILE",
        help="the keys used so far: their public halves go into the file too, to check what they sealed",
    )
    new.set_defaults(run=_keys_new)
    public = kinds.add_parser(
        "public",
        help="the public half of such keys",
        description="Prints the public half of a key, or of each in a set.",
    )
    public.add_argument("file", metavar="FILE")
    public.set_defaults(run=_keys_public)
    api = kinds.add_parser(
        "api",
        help="a key that admits a caller",
        description="Prints a new random API key, this once, and the line that admits it for the JSON object in the "
        "file of the variable ASSIGNABLE_API_KEYS; the file holds no key.",
    )
    api.add_argument("--name", required=True, help="who is to use it")
    api.set_defaults(run=_keys_api)

    contract = commands.add_parser(
        "contract",
        help="make or check the committed contract",
        description="Executes every example request and compares the answers, and the contract's document, "
        "with the files of openapi/.",
    )
    which = contract.add_mutually_exclusive_group()
    which.add_argument("--check", action="store_true", help="compare only (the default)")
    which.add_argument("--write", action="store_true", help="write the files anew")
    contract.set_defaults(run=_contract)
    return parser


def _serve(given: argparse.Namespace) -> int:
    # A flag is the variable of the same name, so that both go through the same checks.
    environment = dict(os.environ)
    for setting in ("host", "port", "workers", "threads"):
        value = getattr(given, setting)
        if value is not None:
            environment[_PREFIX + setting.upper()] = value
    if given.allow_remote:
        environment[_PREFIX + "ALLOW_REMOTE"] = "yes"
    if given.demo:
        environment.setdefault(_PREFIX + "LOG", "errors")
    from .serving import serve

    return serve(environment, demonstrate=given.demo)


def _demo(given: argparse.Namespace) -> int:
    from .demonstration import demonstrate

    return demonstrate(given.url.rstrip("/"), given.api_key_file)


def _compute(given: argparse.Namespace) -> int:
    from .computing import compute

    return compute(given.operation, given.file)


def _verify(given: argparse.Namespace) -> int:
    from .verifying import verify

    return verify(as_json=given.json, html=given.html)


def _keys_new(given: argparse.Namespace) -> int:
    from .keys import new

    return new(given.id, given.out, given.keep)


def _keys_public(given: argparse.Namespace) -> int:
    from .keys import public

    return public(given.file)


def _keys_api(given: argparse.Namespace) -> int:
    from .keys import api

    return api(given.name)


def _contract(given: argparse.Namespace) -> int:
    from .contract_files import check, write

    return write() if given.write else check()
