"""Who gets in: no operation without a credential, nothing of a credential anywhere, and any good one admits."""

from __future__ import annotations

import base64
import hmac
import json
import subprocess
import sys
import time
from collections.abc import Callable, Iterator
from hashlib import sha256
from io import BytesIO
from pathlib import Path
from typing import Any

import jwt
import pytest
from cryptography.hazmat.primitives.asymmetric import ec, ed25519, rsa
from cryptography.hazmat.primitives.serialization import Encoding, PublicFormat
from flask import Flask
from jwt.algorithms import ECAlgorithm, OKPAlgorithm, RSAAlgorithm
from openapi_spec_validator import validate
from werkzeug.test import TestResponse

from assignable.api import openapi, problems, security
from assignable.api.app import create_app
from assignable.api.contract import Contract, examples_directory
from assignable.api.observability import Log
from assignable.api.settings import BadSettings, Settings
from assignable.cli import main
from assignable.cli.serving import CannotServe, settings_from
from contract import served

KEYS = {"line-1": "T6fPq0-first-key-of-the-tests", "line-2": "b81-second-key-of-the-tests"}
AUDIENCE, ISSUER = "assignable.plant.example", "https://login.plant.example"
ED, EC, RSA = (
    ed25519.Ed25519PrivateKey.generate(),
    ec.generate_private_key(ec.SECP256R1()),
    rsa.generate_private_key(65537, 2048),
)
PRIVATE = {"EdDSA": ED, "ES256": EC, "RS256": RSA}
KINDS = {"EdDSA": OKPAlgorithm, "ES256": ECAlgorithm, "RS256": RSAAlgorithm}
RULES = "/v1/rules"


def jwk(algorithm: str, key: Any = None, **more: Any) -> dict[str, Any]:
    """The public half as a JWK, named after its algorithm."""
    public = (PRIVATE[algorithm] if key is None else key).public_key()
    return {**KINDS[algorithm].to_jwk(public, as_dict=True), "kid": f"of-{algorithm}", **more}


def token(algorithm: str = "EdDSA", key: Any = None, header: Any = None, **claims: Any) -> str:
    now = int(time.time())
    stated = {"aud": AUDIENCE, "iss": ISSUER, "exp": now + 600, "sub": "mes", **claims}
    stated = {name: value for name, value in stated.items() if value is not None}
    header = {"kid": f"of-{algorithm}"} if header is None else header
    return jwt.encode(stated, PRIVATE[algorithm] if key is None else key, algorithm, headers=header)


def bearer(text: str) -> dict[str, str]:
    return {"Authorization": f"Bearer {text}"}


@pytest.fixture(scope="module")
def files(tmp_path_factory: pytest.TempPathFactory) -> dict[str, str]:
    folder = tmp_path_factory.mktemp("access")
    entries = {name: sha256(key.encode()).hexdigest() for name, key in KEYS.items()}
    (folder / "api.json").write_text(json.dumps(entries))
    (folder / "jwks.json").write_text(json.dumps({"keys": [jwk(name) for name in PRIVATE]}))
    return {"api": str(folder / "api.json"), "jwks": str(folder / "jwks.json")}


@pytest.fixture(scope="module")
def apps(files: dict[str, str]) -> dict[str, Flask]:
    """An application of each level."""
    keys = {"api_keys": files["api"]}
    tokens = {"jwt_keys": files["jwks"], "jwt_audience": AUDIENCE, "jwt_issuer": ISSUER}
    return {
        "none": served.app(),
        "keys": create_app(Settings(log="off", **keys)),
        "jwt": create_app(Settings(log="off", **tokens)),
        "both": create_app(Settings(log="off", **keys, **tokens)),
    }


def get(app: Flask, path: str = RULES, **headers: str) -> TestResponse:
    return app.test_client().get(
        path, headers={name.replace("_", "-"): text for name, text in headers.items()}
    )


def refused(answer: TestResponse, status: int = 401) -> dict[str, Any]:
    """The problem of a refusal."""
    assert answer.status_code == status, answer.text
    assert answer.content_type == problems.MEDIA_TYPE
    assert answer.headers["Cache-Control"] == "no-store"
    kind = problems.NOT_AUTHENTICATED if status == 401 else problems.NOT_ADMITTED
    assert answer.json["type"] == kind.uri
    assert ("WWW-Authenticate" in answer.headers) is (status == 401)
    return answer.json


# Every operation, and every page ---------------------------------------------------------------------


def sent(app: Flask, **headers: str) -> Iterator[tuple[str, TestResponse]]:
    """The answer of every route to its own method."""
    client = app.test_client()
    for rule in app.url_map.iter_rules():
        (method,) = (rule.methods or set()) - {"HEAD", "OPTIONS"}
        path = (
            rule.rule.replace("<code>", "busy")
            .replace("<operation_id>", "judgeXbarR")
            .replace("<edition>", "none")
        )
        yield rule.endpoint, client.open(path, method=method, headers=headers)


@pytest.mark.parametrize("level", ["keys", "jwt", "both"])
def test_every_operation_refuses_whoever_has_no_credential(apps: dict[str, Flask], level: str) -> None:
    asked = set()
    for endpoint, answer in sent(apps[level]):
        if endpoint in security.OPEN:
            assert answer.status_code == (404 if endpoint == "pages.asset" else 200), endpoint
        else:
            refused(answer)
            asked.add(endpoint)
    assert len(asked) > 50
    assert asked >= {"fitXbarRLimits", "judgeXbarR", "listCharts", "getVerification", "pages.verification"}


def test_open_are_probes_public_keys_and_documentation_and_each_exists(apps: dict[str, Flask]) -> None:
    assert set(apps["keys"].view_functions) >= security.OPEN
    for path in ("/", "/docs", "/openapi.json", "/problems", "/problems/not-authenticated", "/health/live"):
        assert get(apps["both"], path).status_code == 200, path
    assert get(apps["both"], "/health/ready").status_code == 200
    assert get(apps["both"], "/.well-known/jwks.json").status_code == 200


def test_nothing_is_read_of_a_request_that_is_refused(apps: dict[str, Flask]) -> None:
    refused(apps["keys"].test_client().post("/v1/charts/xbar-r/limits", data=b"no json", content_type="a/b"))
    assert apps["keys"].test_client().head(RULES).status_code == 401
    refused(apps["keys"].test_client().options(RULES))


def test_what_is_not_there_is_told_to_everyone(apps: dict[str, Flask]) -> None:
    assert get(apps["keys"], "/v1/none").status_code == 404
    assert apps["keys"].test_client().delete(RULES).status_code == 405


def test_without_keys_nothing_of_it_takes_part(apps: dict[str, Flask]) -> None:
    app = apps["none"]
    assert not app.before_request_funcs
    assert not app.after_request_funcs
    assert get(app).headers["Cache-Control"] == "public, max-age=300"
    code = "import sys\nfrom assignable.api.app import create_app\ncreate_app()\nprint('jwt' in sys.modules)"
    done = subprocess.run([sys.executable, "-c", code], check=True, capture_output=True, text=True)
    assert done.stdout.strip() == "False"


# API keys -------------------------------------------------------------------------------------------


def test_any_key_of_the_file_admits(apps: dict[str, Flask]) -> None:
    for level in ("keys", "both"):
        for key in KEYS.values():
            answer = get(apps[level], X_API_Key=key)
            assert answer.status_code == 200
            # Not for a cache that others share, and still to be asked for again cheaply.
            assert answer.headers["Cache-Control"] == "private, max-age=300"
            again = get(apps[level], X_API_Key=key, If_None_Match=answer.headers["ETag"])
            assert again.status_code == 304
    body = json.loads((examples_directory() / "xbar-r-limits.request.json").read_bytes())
    client = apps["keys"].test_client()
    answer = client.post("/v1/charts/xbar-r/limits", json=body, headers={"X-API-Key": KEYS["line-1"]})
    assert answer.status_code == 200
    assert answer.headers["Cache-Control"] == "no-store"


@pytest.mark.parametrize(
    "key",
    [
        "",
        "wrong",
        KEYS["line-1"][:-1],
        KEYS["line-1"] + "x",
        sha256(KEYS["line-1"].encode()).hexdigest(),
        "é" * 9,
    ],
)
def test_a_wrong_key_is_refused(apps: dict[str, Flask], key: str) -> None:
    found = refused(get(apps["keys"], X_API_Key=key))
    assert found["detail"] == "The key in the X-API-Key header is not one that this service admits."
    assert get(apps["keys"], X_API_Key=key).headers["WWW-Authenticate"] == 'ApiKey realm="assignable"'
    refused(get(apps["jwt"], X_API_Key=KEYS["line-1"]))


def test_every_entry_is_compared_in_constant_time_whatever_the_key(
    apps: dict[str, Flask], monkeypatch: pytest.MonkeyPatch
) -> None:
    """By design, not by stopwatch: digests of one length, all of them, by the function made for it."""
    compared: list[tuple[bytes, bytes]] = []
    real = security.compare_digest

    def spying(a: bytes, b: bytes) -> bool:
        compared.append((a, b))
        return real(a, b)

    monkeypatch.setattr(security, "compare_digest", spying)
    entries = [sha256(key.encode()).hexdigest().encode() for key in KEYS.values()]
    for key in (*KEYS.values(), "wrong", "", "x" * 4000):
        compared.clear()
        get(apps["keys"], X_API_Key=key)
        assert [b for _, b in compared] == entries
        assert {a for a, _ in compared} == {sha256(key.encode()).hexdigest().encode()}


def test_a_key_check_costs_microseconds() -> None:
    entries = tuple(sha256(b"%d" % i).hexdigest().encode() for i in range(8))
    access = security.Access(entries)
    environ = {"HTTP_X_API_KEY": "7"}
    best = min(_seconds(lambda: access.admit(environ)) for _ in range(5))
    assert best < 20e-6  # 4 us where this was written, of eight keys


def _seconds(work: Callable[[], object], times: int = 500) -> float:
    began = time.perf_counter()
    for _ in range(times):
        work()
    return (time.perf_counter() - began) / times


def test_keys_are_changed_without_a_caller_turned_away(tmp_path: Path) -> None:
    file = tmp_path / "keys.json"
    digests = {name: sha256(name.encode()).hexdigest() for name in ("old", "new")}

    def status(key: str, *names: str) -> int:
        file.write_text(json.dumps({name: digests[name] for name in names}))
        return get(create_app(Settings(log="off", api_keys=str(file))), X_API_Key=key).status_code

    assert [status("old", *names) for names in (("old",), ("old", "new"), ("new",))] == [200, 200, 401]
    assert [status("new", *names) for names in (("old",), ("old", "new"), ("new",))] == [401, 200, 200]


def test_a_key_from_the_command_admits(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["keys", "api", "--name", "line-3"]) == 0
    key, line = capsys.readouterr().out.splitlines()
    assert len(base64.urlsafe_b64decode(key + "=")) == 32
    assert key not in line
    (tmp_path / "keys.json").write_text("{" + line + "}")
    app = create_app(Settings(log="off", api_keys=str(tmp_path / "keys.json")))
    assert get(app, X_API_Key=key).status_code == 200
    assert main(["keys", "api", "--name", "line-3"]) == 0
    assert key not in capsys.readouterr().out
    assert main(["keys", "api", "--name", 'a"b']) == 2


@pytest.mark.parametrize(
    "text",
    [
        "no json",
        "[]",
        "{}",
        '{"a": 1}',
        '{"a": "T6fPq0-a-key-and-no-digest"}',
        json.dumps({"a": "A" * 64}),
        json.dumps({"a b": "a" * 64}),
        json.dumps({"a": "a" * 64})[:-1] + ", " + json.dumps({"a": "b" * 64})[1:],
    ],
)
def test_a_file_of_keys_that_is_wrong_is_told_at_the_start(tmp_path: Path, text: str) -> None:
    (tmp_path / "keys.json").write_text(text)
    with pytest.raises(BadSettings, match="ASSIGNABLE_API_KEYS: ") as caught:
        create_app(Settings(api_keys=str(tmp_path / "keys.json")))
    assert "T6fPq0" not in str(caught.value)


# Tokens ---------------------------------------------------------------------------------------------


@pytest.mark.parametrize("algorithm", list(PRIVATE))
def test_a_good_token_admits(apps: dict[str, Flask], algorithm: str) -> None:
    for level in ("jwt", "both"):
        good = token(algorithm)
        assert get(apps[level], **bearer(good)).status_code == 200
        assert get(apps[level], **bearer(good)).status_code == 200  # known by now
        assert get(apps[level], Authorization=f"bearer  {good}").status_code == 200
        assert get(apps[level], **bearer(token(algorithm, header={}))).status_code == 200  # names no key
        assert get(apps[level], **bearer(token(algorithm, aud=["other", AUDIENCE]))).status_code == 200


def test_clocks_may_differ_by_half_a_minute(apps: dict[str, Flask]) -> None:
    now = int(time.time())
    for claims, status in (
        ({"exp": now - 20}, 200),
        ({"exp": now - 40}, 401),
        ({"nbf": now + 20}, 200),
        ({"nbf": now + 50}, 401),
        ({"iat": now + 50}, 401),
    ):
        assert get(apps["jwt"], **bearer(token(**claims))).status_code == status, claims


def without_signature(algorithm: str) -> str:
    body = token().split(".")[1]
    made = base64.urlsafe_b64encode(json.dumps({"alg": algorithm, "kid": "of-EdDSA"}).encode()).decode()
    return f"{made.rstrip('=')}.{body}."


def signed_with_the_public_key(algorithm: str) -> str:
    """HS256 keyed with a public key: what a checker that lets a token choose the algorithm takes for good."""

    def coded(blob: bytes) -> str:
        return base64.urlsafe_b64encode(blob).decode().rstrip("=")

    public = PRIVATE[algorithm].public_key().public_bytes(Encoding.PEM, PublicFormat.SubjectPublicKeyInfo)
    body = token().split(".")[1]
    head = coded(json.dumps({"alg": "HS256", "typ": "JWT", "kid": f"of-{algorithm}"}).encode())
    return f"{head}.{body}.{coded(hmac.new(public, f'{head}.{body}'.encode(), 'sha256').digest())}"


OTHER = ed25519.Ed25519PrivateKey.generate()


@pytest.mark.parametrize(
    ("made", "said"),
    [
        (lambda: "", "cannot be read"),
        (lambda: "a.b.c", "cannot be read"),
        (lambda: "é.é.é", "cannot be read"),
        (lambda: "x" * 5000, "cannot be read"),
        (lambda: KEYS["line-1"], "cannot be read"),
        (lambda: token() + "AAAA", "not signed by a key"),
        (lambda: token(key=OTHER), "not signed by a key"),
        (lambda: token(header={"kid": "of-RS256"}), "not signed by a key"),
        (lambda: token(header={"kid": "nobodys"}), "not signed by a key"),
        (lambda: without_signature("none"), "not signed by a key"),
        (lambda: without_signature("EdDSA"), "not signed by a key"),
        (lambda: signed_with_the_public_key("RS256"), "not signed by a key"),
        (lambda: signed_with_the_public_key("EdDSA"), "not signed by a key"),
        (lambda: jwt.encode({"exp": 9e9}, RSA, "RS512", headers={"kid": "of-RS256"}), "not signed by a key"),
        (lambda: token(exp=1), "has expired"),
        (lambda: token(exp=1, aud="another"), "has expired"),
        (lambda: token(exp=None), "does not state exp"),
        (lambda: token(aud=None), "does not state aud"),
        (lambda: token(iss=None), "does not state iss"),
        (lambda: token(nbf=int(time.time()) + 900), "not valid yet"),
        (lambda: token(exp="soon"), "cannot be read"),
        (lambda: token(exp=float("inf")), "cannot be read"),
    ],
)
def test_a_token_that_proves_nothing_is_refused(
    apps: dict[str, Flask], made: Callable[[], str], said: str
) -> None:
    for _ in range(2):  # nothing of it is remembered
        answer = get(apps["jwt"], **bearer(made()))
        assert said in refused(answer)["detail"]
        assert answer.headers["WWW-Authenticate"] == 'Bearer realm="assignable", error="invalid_token"'


def test_a_good_token_that_is_meant_for_others_is_not_admitted(apps: dict[str, Flask]) -> None:
    for claims in ({"aud": "another"}, {"iss": "https://another.example"}):
        refused(get(apps["jwt"], **bearer(token(**claims))), 403)


def test_a_token_once_known_still_expires(apps: dict[str, Flask], monkeypatch: pytest.MonkeyPatch) -> None:
    good = token(exp=int(time.time()) + 5)
    assert get(apps["jwt"], **bearer(good)).status_code == 200
    later = time.time() + 5 + security.LEEWAY_SECONDS
    monkeypatch.setattr(security, "time", lambda: later)

    class Later(jwt.api_jwt.datetime):
        @classmethod
        def now(cls, tz: Any = None) -> Any:
            return cls.fromtimestamp(later, tz)

    monkeypatch.setattr(jwt.api_jwt, "datetime", Later)
    assert "has expired" in refused(get(apps["jwt"], **bearer(good)))["detail"]


def test_tokens_remembered_are_bounded(files: dict[str, str], monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(security, "_KEPT_TOKENS", 3)
    settings = Settings(jwt_keys=files["jwks"], jwt_audience=AUDIENCE, jwt_issuer=ISSUER)
    tokens = security.access_of(settings).tokens
    for i in range(8):
        tokens.check(token(sub=str(i)))
        assert len(tokens._good_until) <= 3


def test_any_valid_credential_admits(apps: dict[str, Flask]) -> None:
    key, good = KEYS["line-2"], token()
    assert get(apps["both"], X_API_Key=key, Authorization="Bearer x").status_code == 200
    assert get(apps["both"], X_API_Key="wrong", Authorization=f"Bearer {good}").status_code == 200
    assert get(apps["both"], X_API_Key=key, Authorization="Basic eDp5").status_code == 200
    refused(get(apps["both"], X_API_Key="wrong", Authorization="Bearer x"))
    answer = get(apps["both"])
    assert answer.headers.getlist("WWW-Authenticate") == [
        'Bearer realm="assignable"',
        'ApiKey realm="assignable"',
    ]
    assert "X-API-Key header, or a token as Authorization: Bearer" in answer.json["detail"]


def test_a_key_without_a_name_takes_tokens_that_name_one(tmp_path: Path) -> None:
    nameless = {name: part for name, part in jwk("EdDSA").items() if name != "kid"}
    (tmp_path / "jwk").write_text(json.dumps(nameless))
    app = create_app(
        Settings(log="off", jwt_keys=str(tmp_path / "jwk"), jwt_audience=AUDIENCE, jwt_issuer=ISSUER)
    )
    assert get(app, **bearer(token())).status_code == 200
    refused(get(app, **bearer(token(key=OTHER))))


def test_keys_of_tokens_are_changed_without_a_caller_turned_away(tmp_path: Path) -> None:
    old, new = ed25519.Ed25519PrivateKey.generate(), ed25519.Ed25519PrivateKey.generate()
    both = {"old": jwk("EdDSA", old, kid="old"), "new": jwk("EdDSA", new, kid="new")}

    def status(name: str, *names: str) -> int:
        (tmp_path / "jwks").write_text(json.dumps({"keys": [both[one] for one in names]}))
        settings = Settings(
            log="off", jwt_keys=str(tmp_path / "jwks"), jwt_audience=AUDIENCE, jwt_issuer=ISSUER
        )
        made = token(key={"old": old, "new": new}[name], header={"kid": name})
        return get(create_app(settings), **bearer(made)).status_code

    assert [status("old", *names) for names in (("old",), ("old", "new"), ("new",))] == [200, 200, 401]
    assert [status("new", *names) for names in (("old",), ("old", "new"), ("new",))] == [401, 200, 200]


@pytest.mark.parametrize(
    ("keys", "said"),
    [
        ("no json", "not JSON"),
        ("{}", "is none for"),
        ([{"kty": "oct", "k": "c2VjcmV0", "kid": "s"}], "the key s is none for"),
        ([jwk("RS256", alg="RS512")], "is none for"),
        ([jwk("RS256", alg="none")], "is none for"),
        ([jwk("ES256", ec.generate_private_key(ec.SECP384R1()))], "is none for"),
        ([jwk("RS256", rsa.generate_private_key(65537, 1024))], "shorter than 2048 bits"),
        ([OKPAlgorithm.to_jwk(ED, as_dict=True)], "is private"),
        ([{**jwk("EdDSA"), "x": "AAAA"}], "cannot be read"),
        ([{**jwk("EdDSA"), "kid": 7}], "is none for"),
        ([jwk("EdDSA", use="enc")], "no key in it is for signatures"),
    ],
)
def test_keys_of_tokens_that_are_wrong_are_told_at_the_start(tmp_path: Path, keys: Any, said: str) -> None:
    (tmp_path / "jwks").write_text(keys if isinstance(keys, str) else json.dumps({"keys": keys}))
    with pytest.raises(BadSettings, match=said) as caught:
        create_app(Settings(jwt_keys=str(tmp_path / "jwks"), jwt_audience=AUDIENCE, jwt_issuer=ISSUER))
    assert str(caught.value).startswith("ASSIGNABLE_JWT_KEYS: ")


def test_audience_and_issuer_are_needed(files: dict[str, str]) -> None:
    with pytest.raises(BadSettings, match=r"ASSIGNABLE_JWT_AUDIENCE(.|\n)*ASSIGNABLE_JWT_ISSUER"):
        create_app(Settings(jwt_keys=files["jwks"]))
    with pytest.raises(BadSettings, match="ASSIGNABLE_JWT_KEYS"):
        create_app(Settings(jwt_audience=AUDIENCE, jwt_issuer=ISSUER))


# The contract, the log, the address -----------------------------------------------------------------


@pytest.mark.parametrize(
    ("level", "names"),
    [("none", []), ("keys", ["apiKey"]), ("both", ["apiKey", "bearerToken"])],
)
def test_the_contract_says_who_gets_in(apps: dict[str, Flask], level: str, names: list[str]) -> None:
    contract: Contract = apps[level].extensions["assignable.contract"]
    document = json.loads(contract.document())
    if level == "both":
        validate(document)
    assert list(document["components"].get("securitySchemes", {})) == names
    if level == "none":
        assert b'"security"' not in contract.document()
        assert b"WWW-Authenticate" not in contract.document()
    for operation in contract.operations.values():
        entry = document["paths"][operation.path][operation.method.lower()]
        asked = bool(names) and operation.operation_id not in security.OPEN
        assert entry.get("security", []) == ([{name: []} for name in names] if asked else [])
        assert ("401" in entry["responses"]) is asked
        assert ("403" in entry["responses"]) is (asked and "bearerToken" in names)
        if asked:
            assert "WWW-Authenticate" in entry["responses"]["401"]["headers"]
            assert problems.NOT_AUTHENTICATED in openapi.problems_of(operation, security.Access((b"",)))


def test_nothing_of_a_credential_is_logged_or_answered(files: dict[str, str]) -> None:
    stream = BytesIO()
    settings = Settings(
        api_keys=files["api"], jwt_keys=files["jwks"], jwt_audience=AUDIENCE, jwt_issuer=ISSUER
    )
    app = create_app(settings, log=Log("requests", stream))
    good, bad, late = token(), token(key=OTHER), token(exp=1)
    texts = ""
    for headers in (
        {"X_API_Key": KEYS["line-1"]},
        {"X_API_Key": "wrong-key-of-somebody"},
        bearer(good),
        bearer(bad),
        bearer(late),
        {},
    ):
        texts += get(app, **headers).text
    lines = [json.loads(line) for line in stream.getvalue().splitlines()]
    assert [line["status"] for line in lines] == [200, 401, 200, 401, 401, 401]
    assert {line["operation_id"] for line in lines} == {"getRules"}
    digests = [sha256(text.encode()).hexdigest() for text in (*KEYS.values(), "wrong-key-of-somebody")]
    parts = [part for made in (good, bad, late) for part in made.split(".")[1:]]
    for secret in (*KEYS.values(), *KEYS, "wrong-key-of-somebody", *digests, *parts):
        assert secret not in stream.getvalue().decode()
        assert secret not in texts


def test_an_address_that_others_reach_is_allowed_where_callers_are_asked(files: dict[str, str]) -> None:
    remote = {"ASSIGNABLE_HOST": "0.0.0.0"}
    with pytest.raises(CannotServe, match="ASSIGNABLE_API_KEYS"):
        settings_from(remote)
    assert settings_from({**remote, "ASSIGNABLE_API_KEYS": files["api"]}).host == "0.0.0.0"
    tokens = {
        "ASSIGNABLE_JWT_KEYS": files["jwks"],
        "ASSIGNABLE_JWT_AUDIENCE": "a",
        "ASSIGNABLE_JWT_ISSUER": "b",
    }
    assert settings_from({**remote, **tokens}).asks_who
    with pytest.raises(CannotServe):
        settings_from({**remote, "ASSIGNABLE_JWT_AUDIENCE": "a"})
