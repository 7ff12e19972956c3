"""Seals of limits documents: against the standards' own examples, and checked with other libraries."""

from __future__ import annotations

import base64
import copy
import json
import re
import stat
import subprocess
import sys
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest
import rfc8785
from cryptography.hazmat.primitives.asymmetric.ed25519 import Ed25519PublicKey
from flask.testing import FlaskClient
from joserfc import jws as other
from joserfc.errors import BadSignatureError
from joserfc.jwk import OKPKey

from assignable.api.app import create_app
from assignable.api.contract import examples_directory
from assignable.api.settings import BadSettings, Settings
from assignable.cli import main
from assignable.documents import seal
from assignable.documents.canonical import digest
from assignable.spc.charts import CHARTS

ROOT = Path(__file__).resolve().parents[2]
SIGNALS = "/v1/charts/xbar-r/signals"

# RFC 8037, appendix A.1 and A.4 (from memory; Ed25519 is deterministic, so that a slip would show).
RFC_8037_KEY = {
    "kty": "OKP",
    "crv": "Ed25519",
    "d": "nWGxne_9WmC6hEr0kuwsxERJxWl7MmkZcDusAxyuf2A",
    "x": "11qYAYKxCrfVS_7TyWQHOg7hcvPapiMlrwIaaPcHURo",
}
RFC_8037_INPUT = b"eyJhbGciOiJFZERTQSJ9.RXhhbXBsZSBvZiBFZDI1NTE5IHNpZ25pbmc"
RFC_8037_SIGNATURE = "hgyY0il_MGCjP0JzlnLWG1PPOt7-09PGcvMg3AIbQR6dWbhijcNR4ki4iylGjg5BhVsPt9g7sVvpAr_MuM0KAg"

KEY = {**RFC_8037_KEY, "kid": "kiln-a"}
LATER = seal.new_key("kiln-b")


def coded(text: str) -> bytes:
    return base64.urlsafe_b64decode(text + "=" * (-len(text) % 4))


def uncoded(blob: bytes) -> str:
    return base64.urlsafe_b64encode(blob).decode().rstrip("=")


def example(name: str) -> dict[str, Any]:
    return json.loads((examples_directory() / f"{name}.request.json").read_bytes())


Served = Callable[..., FlaskClient]


@pytest.fixture(scope="module")
def served(tmp_path_factory: pytest.TempPathFactory) -> Served:
    """Gives a client of an installation with these keys."""
    folder = tmp_path_factory.mktemp("keys")
    known: dict[str, FlaskClient] = {}

    def client(*keys: dict[str, Any], required: bool = False) -> FlaskClient:
        text = json.dumps({"keys": keys})
        name = f"{required}{text}"
        if name not in known:
            file = folder / str(len(known))
            file.write_text(text)
            settings = Settings(log="off", sealing_keys=str(file) if keys else "", require_seal=required)
            known[name] = create_app(settings).test_client()
        return known[name]

    return client


def issued(client: FlaskClient) -> dict[str, Any]:
    answer = client.post("/v1/charts/xbar-r/limits", json=example("xbar-r-limits"))
    assert answer.status_code == 200, answer.json
    return answer.json["limits"]


def codes(client: FlaskClient, limits: dict[str, Any]) -> list[tuple[str, str]]:
    """What is told about this document; nothing where it is taken."""
    answer = client.post(SIGNALS, json={**example("xbar-r-signals"), "limits": limits})
    if answer.status_code == 200:
        return []
    assert answer.json["type"] == "/problems/document-mismatch"
    return [(entry["pointer"], entry["code"]) for entry in answer.json["errors"]]


# Keys and signatures --------------------------------------------------------------------------------


def test_the_standards_own_signature() -> None:
    _, key = seal.seals_of(json.dumps(KEY).encode()).signing
    assert uncoded(key.sign(RFC_8037_INPUT)) == RFC_8037_SIGNATURE


def test_a_seal_is_a_detached_jws_over_the_canonical_form_as_it_is() -> None:
    seals = seal.seals_of(json.dumps(KEY).encode())
    # Members out of order, a number in another form, letters beyond ASCII: RFC 8785 has them one way.
    made = seals.sealed({"unit": "µm", "centre": 2.50, "seal": None, "chart": "xbar-r"})["seal"]
    header, nothing, signature = made["jws"].split(".")
    assert nothing == ""
    assert json.loads(coded(header)) == {"alg": "EdDSA", "b64": False, "crit": ["b64"], "kid": "kiln-a"}
    _, key = seals.signing
    content = '{"centre":2.5,"chart":"xbar-r","unit":"µm"}'.encode()
    key.public_key().verify(coded(signature), header.encode() + b"." + content)


def test_keys_are_a_set_or_one_and_the_first_private_one_seals() -> None:
    alone = seal.seals_of(json.dumps(KEY).encode())
    together = seal.seals_of(json.dumps({"keys": [seal.public_of(KEY), LATER]}).encode())
    assert alone.signing[0] == "kiln-a"
    assert together.signing[0] == "kiln-b"
    assert list(together.known) == ["kiln-a", "kiln-b"]
    assert seal.seals_of(json.dumps(seal.public_of(KEY)).encode()).signing is None


@pytest.mark.parametrize(
    ("keys", "said"),
    [
        ("no json", "not JSON"),
        ("[]", "no JWK set"),
        ('{"keys": []}', "no JWK set"),
        ('{"keys": [1]}', "no JWK set"),
        ({**KEY, "kid": "a b"}, "needs an id"),
        (RFC_8037_KEY, "needs an id"),
        ({"kty": "oct", "k": "AAAA", "kid": "a"}, "not of the kind OKP"),
        ({**KEY, "crv": "X25519"}, "not of the kind OKP"),
        ({**KEY, "use": "enc"}, "another use"),
        ({**KEY, "alg": "ES256"}, "another use"),
        ({**KEY, "x": "AAAA"}, "cannot be read"),
        ({**KEY, "x": None}, "cannot be read"),
        ({**KEY, "d": "AAAA"}, "cannot be read"),
        ({**KEY, "x": LATER["x"]}, "cannot be read"),
        ({"keys": [KEY, KEY]}, "two keys of the id kiln-a"),
    ],
)
def test_keys_that_cannot_be_used_are_told_at_the_start(keys: Any, said: str, tmp_path: Path) -> None:
    file = tmp_path / "keys"
    file.write_text(keys if isinstance(keys, str) else json.dumps(keys))
    with pytest.raises(BadSettings, match=said) as caught:
        create_app(Settings(log="off", sealing_keys=str(file)))
    assert str(caught.value).startswith("ASSIGNABLE_SEALING_KEYS: ")
    assert KEY["d"] not in str(caught.value)


def test_seals_cannot_be_required_without_a_key(tmp_path: Path) -> None:
    with pytest.raises(BadSettings, match="ASSIGNABLE_REQUIRE_SEAL"):
        create_app(Settings(require_seal=True))
    with pytest.raises(BadSettings, match="cannot be read"):
        create_app(Settings(sealing_keys=str(tmp_path / "none")))


# Documents ------------------------------------------------------------------------------------------


# RFC 9864 names the algorithm Ed25519; EdDSA is what libraries of any age know.
@pytest.mark.filterwarnings("ignore:EdDSA is deprecated via RFC 9864")
def test_another_library_finds_the_seal_good(served: Served) -> None:
    client = served(KEY)
    limits = issued(client)
    (published,) = client.get("/.well-known/jwks.json").json["keys"]
    content = seal.content(json.loads(json.dumps(limits, indent=3)))
    key = OKPKey.import_key(published)
    found = other.deserialize_compact(limits["seal"]["jws"], key, ["EdDSA"], payload=content)
    assert found.headers() == {"alg": "EdDSA", "b64": False, "crit": ["b64"], "kid": "kiln-a"}
    with pytest.raises(BadSignatureError):
        other.deserialize_compact(limits["seal"]["jws"], key, ["EdDSA"], payload=content + b" ")
    # And the other way: what it signs is a seal here.
    protected = {"alg": "EdDSA", "b64": False, "crit": ["b64"], "kid": "kiln-a"}
    whole = other.serialize_compact(protected, content, OKPKey.import_key(KEY), ["EdDSA"])
    limits["seal"]["jws"] = f"{whole.split('.')[0]}..{whole.rsplit('.')[-1]}"
    assert codes(client, limits) == []


def test_the_recipe_as_it_is_printed(served: Served, tmp_path: Path) -> None:
    (recipe,) = re.findall(r"```python\n(.*?)```", (ROOT / "openapi" / "SEALS.md").read_text(), re.DOTALL)
    client = served(LATER, seal.public_of(KEY))
    limits = issued(client)
    (tmp_path / "keys").write_text(client.get("/.well-known/jwks.json").text)
    (tmp_path / "recipe.py").write_text(recipe)

    def status_of(document: dict[str, Any]) -> int:
        (tmp_path / "limits").write_text(json.dumps(document, indent=1, sort_keys=True))
        command = [sys.executable, "recipe.py", "limits", "keys"]
        return subprocess.run(command, cwd=tmp_path, capture_output=True, check=False).returncode

    assert status_of(limits) == 0
    assert status_of({**limits, "centre": 0.5}) == 1
    assert status_of({**limits, "seal": {**limits["seal"], "key_id": "kiln-a"}}) == 1


@pytest.mark.parametrize("chart", CHARTS)
def test_documents_of_every_chart_are_sealed_over_what_others_read(served: Served, chart: str) -> None:
    client = served(KEY, required=True)
    answer = client.post(f"/v1/charts/{chart}/limits", json=example(f"{chart}-limits"))
    document = json.loads(answer.text, parse_int=float)["limits"]
    header, _, signature = document.pop("seal")["jws"].split(".")
    key = Ed25519PublicKey.from_public_bytes(coded(KEY["x"]))
    key.verify(coded(signature), header.encode() + b"." + rfc8785.dumps(document))
    body = {**example(f"{chart}-signals"), "limits": answer.json["limits"], "carry": None}
    judged = client.post(f"/v1/charts/{chart}/signals", json=body)
    assert judged.status_code == 200, judged.text


def test_every_edit_is_told_as_what_it_is(served: Served) -> None:
    client = served(KEY)
    limits = issued(client)
    assert codes(client, limits) == []
    assert codes(client, limits) == []  # now from what is kept
    edited = copy.deepcopy(limits)
    edited["characteristic"]["unit"] = "cm"
    assert codes(client, edited) == [("#/limits/digest", "digest-mismatch")]
    edited["digest"] = digest(edited)
    assert codes(client, edited) == [("#/limits/seal", "seal-broken")]
    assert codes(client, {**limits, "seal": None}) == []  # this server takes unsealed ones too


@pytest.mark.parametrize("keys", [(), (LATER,)])
def test_a_seal_of_a_key_that_is_not_here_is_not_known(
    served: Served, keys: tuple[dict[str, Any], ...]
) -> None:
    limits = issued(served(KEY))
    assert codes(served(*keys), limits) == [("#/limits/seal", "seal-not-known")]


def test_a_wrong_key_under_a_known_name_breaks_the_seal(served: Served) -> None:
    limits = issued(served(seal.new_key("kiln-a")))
    assert codes(served(KEY), limits) == [("#/limits/seal", "seal-broken")]


def test_texts_that_are_no_seal_are_broken_ones(served: Served) -> None:
    client = served(KEY, LATER)
    limits = issued(client)
    header, _, signature = limits["seal"]["jws"].split(".")
    content = seal.content(limits)
    _, key = seal.seals_of(json.dumps(KEY).encode()).signing

    def by(protected: dict[str, Any], body: bytes) -> str:
        head = uncoded(json.dumps(protected).encode())
        return f"{head}..{uncoded(key.sign(head.encode() + b'.' + body))}"

    right = {"alg": "EdDSA", "b64": False, "crit": ["b64"], "kid": "kiln-a"}
    assert seal.verifies(content, by(right, content), "kiln-a", key.public_key())
    for jws in (
        "x",
        "..",
        f"{header}.{signature}",
        f"{header}.{uncoded(content)[:400]}.{signature}",  # not detached
        f"{header}..{signature[:-4]}",
        f"{header}..{uncoded(bytes(64))}",
        f"{uncoded(b'[]')}..{signature}",
        by({**right, "kid": "kiln-b"}, content),  # a name it was not made under
        by({name: right[name] for name in ("alg", "b64", "crit")}, content),
        by({**right, "alg": "none"}, content),
        by({**right, "alg": "HS256"}, content),
        by({**right, "crit": ["b64", "exp"], "exp": 1}, content),  # critical, and not understood
        by({"alg": "EdDSA", "b64": False, "kid": "kiln-a"}, content),  # not said to be critical
        by({"alg": "EdDSA", "kid": "kiln-a"}, uncoded(content).encode()),  # the encoded form
        "é..é",
    ):
        made = {**limits, "seal": {"key_id": "kiln-a", "jws": jws}}
        assert codes(client, made) == [("#/limits/seal", "seal-broken")], jws
    assert codes(client, {**limits, "seal": {"key_id": "kiln-b", "jws": limits["seal"]["jws"]}}) == [
        ("#/limits/seal", "seal-broken")
    ]


def test_only_sealed_documents_where_that_is_asked(served: Served) -> None:
    client = served(KEY, required=True)
    limits = issued(client)
    assert codes(client, limits) == []
    assert codes(client, {**limits, "seal": None}) == [("#/limits/seal", "seal-missing")]
    assert codes(client, issued(served())) == [("#/limits/seal", "seal-missing")]
    # A document that another installation in this process took is not taken here.
    assert codes(served(), {**limits, "seal": None}) == []
    assert codes(client, {**limits, "seal": None}) == [("#/limits/seal", "seal-missing")]


def test_keys_are_changed_without_a_document_lost(served: Served) -> None:
    before = issued(served(KEY))
    both = served(LATER, seal.public_of(KEY))
    after = issued(both)
    assert (before["seal"]["key_id"], after["seal"]["key_id"]) == ("kiln-a", "kiln-b")
    assert codes(both, before) == codes(both, after) == []
    assert codes(served(LATER), before) == [("#/limits/seal", "seal-not-known")]


def test_a_server_with_public_keys_only_checks_and_does_not_seal(served: Served) -> None:
    sealed = issued(served(KEY))
    client = served(seal.public_of(KEY))
    assert codes(client, sealed) == []
    assert issued(client)["seal"] is None
    assert issued(client)["digest"] == sealed["digest"]


def test_the_same_limits_get_the_same_seal(served: Served) -> None:
    assert issued(served(KEY)) == issued(served(KEY, LATER))


def test_release_checks_and_pictures_look_at_the_seal(served: Served) -> None:
    client = served(KEY, required=True)
    body = {**example("xbar-r-signals"), "limits": {**issued(client), "seal": None}}
    picture = client.post(f"{SIGNALS}/picture", json=body)
    assert [entry["code"] for entry in picture.json["errors"]] == ["seal-missing"]
    refused = client.post("/v1/release-checks", json=example("release-checks"))
    assert refused.status_code == 422
    assert {entry["code"] for entry in refused.json["errors"]} == {"seal-missing"}
    assert all(entry["pointer"].endswith("/trend/limits/seal") for entry in refused.json["errors"])


def test_a_seal_is_checked_once_and_then_known(served: Served, monkeypatch: pytest.MonkeyPatch) -> None:
    client = served({**KEY, "kid": "asked-once"})
    limits = issued(client)
    checked = []
    real = seal.verifies
    monkeypatch.setattr(seal, "verifies", lambda *given: checked.append(1) or real(*given))
    assert [codes(client, limits) for _ in range(3)] == [[], [], []]
    assert len(checked) == 1


def test_without_a_key_nothing_of_it_is_loaded() -> None:
    code = (
        "import sys\nfrom assignable.api.app import create_app\n"
        "app = create_app()\napp.extensions['assignable.contract'].operations\n"
        "print(sorted({'jwt', 'cryptography'} & set(sys.modules)))"
    )
    done = subprocess.run([sys.executable, "-c", code], check=True, capture_output=True, text=True)
    assert done.stdout.strip() == "[]"


# What the service publishes, and the command --------------------------------------------------------


def test_only_public_halves_are_published(served: Served) -> None:
    answer = served(KEY, LATER).get("/.well-known/jwks.json")
    assert answer.headers["Cache-Control"] == "public, max-age=300"
    assert answer.headers["ETag"]
    assert [set(key) for key in answer.json["keys"]] == [{"kty", "crv", "kid", "use", "alg", "x"}] * 2
    assert KEY["d"] not in answer.text
    assert LATER["d"] not in answer.text
    assert served().get("/.well-known/jwks.json").json == {"keys": []}


def test_keys_from_the_command(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    first, second = str(tmp_path / "first.jwk"), str(tmp_path / "second.jwk")
    assert main(["keys", "new", "--id", "2026-03", "--out", first]) == 0
    printed = json.loads(capsys.readouterr().out)
    assert stat.S_IMODE(Path(first).stat().st_mode) == 0o600
    private = json.loads(Path(first).read_text())
    assert {**printed, "d": private["d"]} == private

    assert main(["keys", "public", first]) == 0
    assert json.loads(capsys.readouterr().out) == printed

    assert main(["keys", "new", "--id", "2026-09", "--out", second, "--keep", first]) == 0
    capsys.readouterr()
    new, old = json.loads(Path(second).read_text())["keys"]
    assert (new["kid"], "d" in new, old) == ("2026-09", True, printed)
    assert main(["keys", "public", second]) == 0
    assert '"d"' not in capsys.readouterr().out

    kept = Path(first).read_bytes()
    for wrong in (
        ["new", "--id", "2026-10", "--out", first],  # no key is lost under a new one
        ["new", "--id", "a b", "--out", str(tmp_path / "third")],
        ["new", "--id", "2026-03", "--out", str(tmp_path / "third"), "--keep", first],
        ["new", "--id", "2026-10", "--out", str(tmp_path / "third"), "--keep", str(tmp_path / "none")],
        ["public", str(tmp_path / "none")],
    ):
        assert main(["keys", *wrong]) == 2
        assert len(capsys.readouterr().err.splitlines()) == 1
    assert Path(first).read_bytes() == kept
    assert not (tmp_path / "third").exists()
