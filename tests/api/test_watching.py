"""Who asks for spans, and what becomes of it where nothing can make them."""

from __future__ import annotations

import subprocess
import sys

import pytest

from api.test_serving import PLAIN
from assignable.api.settings import BadSettings
from assignable.cli import watching

ENDPOINT = "OTEL_EXPORTER_OTLP_ENDPOINT"


@pytest.mark.parametrize(
    "environment",
    [
        {},
        {"OTEL_SERVICE_NAME": "line-3"},
        {"OTEL_TRACES_EXPORTER": "none", ENDPOINT: "http://127.0.0.1:4318"},
        {"OTEL_SDK_DISABLED": "true", ENDPOINT: "http://127.0.0.1:4318"},
    ],
)
def test_nobody_asks_for_spans(environment: dict[str, str]) -> None:
    assert not watching.require_tracing(environment)


def test_asked_for_without_the_extra_says_what_to_install(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(watching, "find_spec", lambda name: None)
    with pytest.raises(BadSettings, match=r"OTEL_EXPORTER_OTLP_ENDPOINT asks .* 'assignable\[otel\]'"):
        watching.require_tracing({ENDPOINT: "http://127.0.0.1:4318"})


def test_what_nobody_asked_for_is_not_imported() -> None:
    code = (
        "import sys\nfrom assignable.cli import serving, watching\nfrom assignable.api.app import create_app\n"
        "assert not watching.require_tracing({})\ncreate_app()\n"
        "print(sorted({name.split('.')[0] for name in sys.modules} & {'opentelemetry', 'google', 'requests'}))"
    )
    told = subprocess.run(
        [sys.executable, "-c", code], env=PLAIN, capture_output=True, text=True, timeout=30, check=True
    )
    assert told.stdout.strip() == "[]"
