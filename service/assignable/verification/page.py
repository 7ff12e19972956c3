"""The verification as a page to read and to print, without scripts and without anything from outside."""

from __future__ import annotations

from collections.abc import Iterator
from html import escape
from importlib.resources import files

from .runner import MEANING, Verification, VerifiedCase, VerifiedCheck

_HEAD = """<!doctype html>
<html lang="en-GB">
<head>
<meta charset="utf-8">
<meta name="viewport" content="width=device-width, initial-scale=1">
<title>Verification of Assignable {version}</title>
<link rel="icon" href="data:,">
{style}
</head>
<body>
<main>
"""
_TAIL = "</main>\n</body>\n</html>\n"


def style() -> str:
    """The page's own style sheet."""
    return files("assignable.verification").joinpath("page.css").read_text(encoding="utf-8")


def page(verification: Verification, version: str, *, link: str | None = None) -> str:
    """The whole page. Its style stands in it, unless ``link`` is where the sheet is served."""
    sheet = (
        f"<style>\n{style()}</style>"
        if link is None
        else f'<link rel="stylesheet" href="{escape(link, quote=True)}">'
    )
    head = _HEAD.format(version=escape(version), style=sheet)
    return head + "".join(_parts(verification, version)) + _TAIL


def number(value: float) -> str:
    """A number as the page shows it."""
    return f"{value:.10g}"


def verdict(passed: bool) -> str:
    """In words: colour is never the only sign."""
    return "agrees" if passed else "DIFFERS"


def _parts(verification: Verification, version: str) -> Iterator[str]:
    yield f"<h1>Verification of Assignable {escape(version)}</h1>\n"
    total, failed = verification.cases_run, verification.cases_failed
    outcome = (
        f"All {total} published cases agree"
        if verification.passed
        else f"{failed} of {total} published cases differ"
    )
    yield (
        f'<p class="{"good" if verification.passed else "bad"} outcome">{outcome}; '
        f"{verification.checks_run} figures were compared.</p>\n"
        "<p>Each case was computed on this installation, through the same road as a request. A figure agrees "
        "where it lies within the distance stated, half a unit of the last digit of print unless its note says "
        "more. This is evidence for a site's own validation, and does not replace it.</p>\n"
        "<dl>\n"
    )
    for trust, meaning in MEANING.items():
        yield f"<dt>{_words(trust)}</dt><dd>{escape(meaning)}</dd>\n"
    yield "</dl>\n"
    for case in verification.cases:
        yield from _case(case)


def _words(trust: str) -> str:
    return escape(trust.replace("-", " "))


def _case(case: VerifiedCase) -> Iterator[str]:
    yield (
        f'<section id="{escape(case.id, quote=True)}">\n<h2>{escape(case.title)}</h2>\n'
        f'<p class="about">{escape(case.source)} <span>({_words(case.trust)})</span>. Case '
        f"<code>{escape(case.id)}</code>, operation <code>{escape(case.operation_id)}</code>: "
        f'<strong class="{"good" if case.passed else "bad"}">{verdict(case.passed)}</strong></p>\n'
    )
    if case.problem is not None:
        yield f'<p class="bad">No answer: {escape(case.problem)}</p>\n'
    yield (
        '<table>\n<thead><tr><th scope="col">Figure</th><th scope="col">Published</th>'
        '<th scope="col">Obtained</th><th scope="col">Within</th><th scope="col"></th></tr></thead>\n<tbody>\n'
    )
    for check in case.checks:
        yield _row(check)
    yield "</tbody>\n</table>\n"
    yield f"<details><summary>Request</summary><pre>{escape(case.request)}</pre></details>\n</section>\n"


def _row(check: VerifiedCheck) -> str:
    note = "" if check.note is None else f'<br><span class="note">{escape(check.note)}</span>'
    return (
        f'<tr{"" if check.passed else " class=differs"}><th scope="row">{escape(check.what)}{note}</th>'
        f"<td>{_numbers(check.expected)}</td><td>{_numbers(check.obtained)}</td>"
        f"<td>{number(check.rounding)}</td>"
        f'<td class="{"good" if check.passed else "bad"}">{verdict(check.passed)}</td></tr>\n'
    )


def _numbers(values: tuple[float, ...]) -> str:
    return ", ".join(map(number, values)) or "none"
