"""Compose and Kubernetes files: of the right shape, nothing left open, and at one with the program."""

from __future__ import annotations

import json
import re
import shutil
import subprocess
import tomllib
from collections.abc import Callable, Iterator
from copy import deepcopy
from importlib.resources import files
from pathlib import Path
from typing import Any

import pytest
import yaml
from jsonschema.validators import validator_for

from assignable.api.app import create_app
from assignable.api.contract import Contract
from assignable.api.operations.monitoring import ROUTE
from assignable.api.settings import Settings, described
from assignable.cli.serving import GRACE_SECONDS, options

ROOT = Path(__file__).resolve().parents[2]
DOCKER = ROOT / "docker"
KUBERNETES = DOCKER / "kubernetes"
MIB = 1024 * 1024
OLDEST, NEWEST = "1.30", "1.34"
"""Versions of Kubernetes that the manifests are for: the first with a preStop that sleeps, and a late one."""
NOT_THERE = "one of the tools for development, which are not installed"

DOCKERFILE = (DOCKER / "Dockerfile").read_text()
VERSION = tomllib.loads((ROOT / "pyproject.toml").read_text())["project"]["version"]


def load(path: Path) -> Any:
    return yaml.safe_load(path.read_text())


MANIFESTS = {
    path.stem: load(path)
    for path in sorted((KUBERNETES / "base").glob("*.yaml"))
    if path.stem != "kustomization"
}
POD = MANIFESTS["deployment"]["spec"]["template"]["spec"]
(CONTAINER,) = POD["containers"]
COMPOSE = load(DOCKER / "compose.yaml")
SERVICE, PROXY = COMPOSE["services"]["service"], COMPOSE["services"]["proxy"]


# Of the right shape ---------------------------------------------------------------------------------

Check = Callable[[Any], list[str]]


@pytest.fixture(scope="module")
def wrong_in_manifest() -> Check:
    """The faults of a manifest, by the schemas of Kubernetes with every member known."""
    module: Any = pytest.importorskip("kubernetes_validate", reason=f"kubernetes-validate is {NOT_THERE}")

    def check(manifest: Any) -> list[str]:
        found = []
        for version in (OLDEST, NEWEST):
            try:
                module.validate(manifest, version, strict=True)
            except (module.ValidationError, module.InvalidSchemaError) as error:
                found.append(str(error))
        return found

    return check


@pytest.fixture(scope="module")
def wrong_in_compose() -> Check:
    """The faults of a Compose file, by the schema of the Compose specification."""
    pytest.importorskip("check_jsonschema", reason=f"check-jsonschema is {NOT_THERE}")
    schema = json.loads(
        files("check_jsonschema").joinpath("builtin_schemas", "vendor", "compose-spec.json").read_text()
    )
    validator = validator_for(schema)(schema)
    return lambda file: [error.message for error in validator.iter_errors(file)]


@pytest.mark.parametrize("name", MANIFESTS)
def test_a_manifest_has_the_shape_kubernetes_takes(wrong_in_manifest: Check, name: str) -> None:
    assert not wrong_in_manifest(MANIFESTS[name])


@pytest.mark.parametrize("name", ["compose.yaml", "compose.keys.yaml"])
def test_a_compose_file_has_the_shape_of_the_specification(wrong_in_compose: Check, name: str) -> None:
    assert not wrong_in_compose(load(DOCKER / name))


def parent_of(tree: Any, path: str) -> tuple[Any, Any]:
    *way, last = (int(part) if part.isdigit() else part for part in path.split("/"))
    for part in way:
        tree = tree[part]
    return tree, last


def renamed(tree: Any, path: str, name: str) -> Any:
    changed = deepcopy(tree)
    parent, last = parent_of(changed, path)
    parent[name] = parent.pop(last)
    return changed


def replaced(tree: Any, path: str, value: Any) -> Any:
    changed = deepcopy(tree)
    parent, last = parent_of(changed, path)
    parent[last]  # the mistake is made where something stands
    parent[last] = value
    return changed


IN_POD = "spec/template/spec"
IN_CONTAINER = f"{IN_POD}/containers/0"


@pytest.mark.parametrize(
    ("name", "mistake"),
    [
        ("deployment", lambda it: renamed(it, f"{IN_CONTAINER}/readinessProbe", "readynessProbe")),
        ("deployment", lambda it: renamed(it, f"{IN_CONTAINER}/securityContext", "securitycontext")),
        ("deployment", lambda it: renamed(it, f"{IN_POD}/terminationGracePeriodSeconds", "terminationGrace")),
        ("deployment", lambda it: renamed(it, "spec/selector", "selectors")),
        ("deployment", lambda it: replaced(it, f"{IN_CONTAINER}/ports/0/containerPort", "8000")),
        ("deployment", lambda it: replaced(it, f"{IN_CONTAINER}/env/0/value", 2)),
        ("deployment", lambda it: replaced(it, f"{IN_CONTAINER}/lifecycle/preStop/sleep/seconds", "5s")),
        ("deployment", lambda it: replaced(it, f"{IN_POD}/automountServiceAccountToken", "false")),
        ("deployment", lambda it: replaced(it, f"{IN_POD}/volumes", {"scratch": {}})),
        ("service", lambda it: replaced(it, "spec/ports/0/port", "80")),
        ("service", lambda it: renamed(it, "spec/ports/0/targetPort", "targetport")),
        ("autoscaler", lambda it: replaced(it, "spec/metrics/0/resource/target/averageUtilization", "70%")),
        ("autoscaler", lambda it: renamed(it, "spec/scaleTargetRef", "scaleTarget")),
        ("disruption-budget", lambda it: renamed(it, "spec/maxUnavailable", "maxUnavailible")),
        ("network-policy", lambda it: renamed(it, "spec/ingress/0/from", "form")),
        ("service-account", lambda it: renamed(it, "automountServiceAccountToken", "automountToken")),
    ],
)
def test_a_mistake_in_a_manifest_is_found(
    wrong_in_manifest: Check, name: str, mistake: Callable[[Any], Any]
) -> None:
    assert len(wrong_in_manifest(mistake(MANIFESTS[name]))) == 2


@pytest.mark.parametrize(
    "mistake",
    [
        lambda it: renamed(it, "services/service/read_only", "readonly"),
        lambda it: renamed(it, "services/service/healthcheck/test", "tests"),
        lambda it: renamed(it, "services/proxy/depends_on/service/condition", "conditions"),
        lambda it: replaced(it, "services/proxy/depends_on/service/condition", "service_ready"),
        lambda it: replaced(it, "services/service/cap_drop", "ALL"),
        lambda it: replaced(it, "services/service/read_only", [True]),
        lambda it: replaced(it, "services/service/deploy/resources/limits/pids", [200]),
        lambda it: renamed(it, "networks/inside/internal", "inner"),
    ],
)
def test_a_mistake_in_a_compose_file_is_found(wrong_in_compose: Check, mistake: Callable[[Any], Any]) -> None:
    assert wrong_in_compose(mistake(COMPOSE))


@pytest.fixture(scope="module")
def with_keys(tmp_path_factory: pytest.TempPathFactory) -> list[Any]:
    """What ``kubectl apply -k docker/kubernetes/with-keys`` would send."""
    if shutil.which("kubectl") is None:
        pytest.skip("kubectl is not installed")
    folder = tmp_path_factory.mktemp("site") / "kubernetes"
    shutil.copytree(KUBERNETES, folder)
    for name in ("sealing.jwk", "api-keys.json"):
        (folder / "with-keys" / name).write_text("{}")
    done = subprocess.run(
        ["kubectl", "kustomize", str(folder / "with-keys")], capture_output=True, text=True, check=False
    )
    assert done.returncode == 0, done.stderr
    return list(yaml.safe_load_all(done.stdout))


def test_the_keys_are_files_of_a_secret(wrong_in_manifest: Check, with_keys: list[Any]) -> None:
    assert not [fault for manifest in with_keys for fault in wrong_in_manifest(manifest)]
    by_kind = {manifest["kind"]: manifest for manifest in with_keys}
    assert by_kind.keys() == {manifest["kind"] for manifest in MANIFESTS.values()} | {"Secret"}
    secret, pod = by_kind["Secret"], by_kind["Deployment"]["spec"]["template"]["spec"]
    (keys,) = (volume["secret"] for volume in pod["volumes"] if volume["name"] == "keys")
    assert keys["secretName"] == secret["metadata"]["name"]
    assert keys["secretName"].startswith("assignable-keys-")  # the rest is a digest of the keys
    assert keys["defaultMode"] == 0o440
    (container,) = pod["containers"]
    (mount,) = (mount for mount in container["volumeMounts"] if mount["name"] == "keys")
    assert mount["readOnly"]
    values = {entry["name"]: entry["value"] for entry in container["env"]}
    given = {values["ASSIGNABLE_SEALING_KEYS"], values["ASSIGNABLE_API_KEYS"]}
    assert given == {f"{mount['mountPath']}/{name}" for name in secret["data"]}
    # What the base has is there still.
    assert values.items() >= {entry["name"]: entry["value"] for entry in CONTAINER["env"]}.items()
    assert pod["securityContext"] == {
        **POD["securityContext"],
        "fsGroup": POD["securityContext"]["runAsGroup"],
    }
    assert container["securityContext"] == CONTAINER["securityContext"]


def test_the_secrets_of_compose_are_the_files_the_settings_name() -> None:
    file = load(DOCKER / "compose.keys.yaml")
    (service,) = file["services"].values()
    assert set(service["environment"].values()) == {f"/run/secrets/{name}" for name in service["secrets"]}
    assert {name: entry["file"] for name, entry in file["secrets"].items()} == {
        name: f"./keys/{name}" for name in service["secrets"]
    }


def test_every_manifest_is_applied() -> None:
    for folder in (KUBERNETES / "base", KUBERNETES / "with-keys"):
        listed = load(folder / "kustomization.yaml")
        named = {*listed["resources"], *(patch["path"] for patch in listed.get("patches", ()))} - {"../base"}
        assert named == {path.name for path in folder.glob("*.yaml")} - {"kustomization.yaml"}


# Nothing left open ----------------------------------------------------------------------------------


def test_a_pod_may_do_nothing_but_serve() -> None:
    for holder in (POD, MANIFESTS["service-account"]):
        assert holder["automountServiceAccountToken"] is False
    assert POD["serviceAccountName"] == MANIFESTS["service-account"]["metadata"]["name"]
    assert POD["securityContext"]["runAsNonRoot"]
    assert POD["securityContext"]["seccompProfile"] == {"type": "RuntimeDefault"}
    assert CONTAINER["securityContext"] == {
        "allowPrivilegeEscalation": False,
        "readOnlyRootFilesystem": True,
        "capabilities": {"drop": ["ALL"]},
    }
    assert not {"hostNetwork", "hostPID", "hostIPC"} & POD.keys()
    policy = MANIFESTS["network-policy"]["spec"]
    assert policy["policyTypes"] == ["Ingress", "Egress"]
    assert policy["egress"] == []
    assert all(rule["from"] and rule["ports"] for rule in policy["ingress"])


@pytest.mark.parametrize("name", ["service", "proxy"])
def test_a_container_may_do_nothing_but_serve(name: str) -> None:
    container = COMPOSE["services"][name]
    assert container["read_only"] is True
    assert container["cap_drop"] == ["ALL"]
    assert container["security_opt"] == ["no-new-privileges:true"]
    assert container["tmpfs"][0].startswith("/tmp:size=")
    assert container["deploy"]["resources"]["limits"].keys() == {"cpus", "memory", "pids"}
    assert container["healthcheck"]["test"][0] == "CMD"
    assert int(container["logging"]["options"]["max-file"]) > 1
    assert not {"privileged", "cap_add", "network_mode", "pid", "container_name"} & container.keys()


def test_only_the_proxy_is_reached_from_outside() -> None:
    assert "ports" not in SERVICE
    assert SERVICE["networks"] == ["inside"]
    assert COMPOSE["networks"]["inside"] == {"internal": True}
    (port,) = PROXY["ports"]
    assert port.startswith("127.0.0.1:")
    assert all(volume.endswith(":ro") for volume in PROXY["volumes"])
    assert PROXY["depends_on"]["service"]["condition"] == "service_healthy"
    assert SERVICE["deploy"]["replicas"] >= 2


def test_the_service_outlives_the_loss_of_a_machine() -> None:
    scale, budget = MANIFESTS["autoscaler"]["spec"], MANIFESTS["disruption-budget"]["spec"]
    assert "replicas" not in MANIFESTS["deployment"]["spec"]  # or each apply would undo the autoscaler's work
    assert scale["scaleTargetRef"] == {
        "apiVersion": MANIFESTS["deployment"]["apiVersion"],
        "kind": "Deployment",
        "name": MANIFESTS["deployment"]["metadata"]["name"],
    }
    assert [metric["resource"]["name"] for metric in scale["metrics"]] == ["cpu"]
    assert 0 < budget["maxUnavailable"] < scale["minReplicas"] <= scale["maxReplicas"]
    assert CONTAINER["resources"]["requests"]["cpu"]  # what the autoscaler's per cent are of
    assert {one["topologyKey"] for one in POD["topologySpreadConstraints"]} == {"kubernetes.io/hostname"}
    rolling = MANIFESTS["deployment"]["spec"]["strategy"]["rollingUpdate"]
    assert (rolling["maxUnavailable"], rolling["maxSurge"]) == (0, 1)


# At one with the program ----------------------------------------------------------------------------


def test_what_is_set_are_settings_the_program_takes() -> None:
    known = {row.variable for row in described()}
    for path in (DOCKER / "Dockerfile", *DOCKER.rglob("*.yaml"), DOCKER / "README.md"):
        used = set(re.findall(r"(ASSIGNABLE_[A-Z_]+)", path.read_text()))
        assert used <= known, path.name
    image = dict(re.findall(r"(ASSIGNABLE_[A-Z_]+)=(\S+)", DOCKERFILE))
    pod = {entry["name"]: entry["value"] for entry in CONTAINER["env"]}
    for environment in (image, {**image, **pod}, {**image, **SERVICE["environment"]}):
        settings = Settings.from_environment(environment)
        assert settings.allow_remote


def test_ports_agree() -> None:
    port = int(re.search(r"ASSIGNABLE_PORT=(\d+)", DOCKERFILE)[1])  # type: ignore[index]
    assert re.findall(r"^EXPOSE (\d+)$", DOCKERFILE, re.MULTILINE) == [str(port)]
    assert SERVICE["expose"] == [str(port)]
    (upstream,) = re.findall(r"^server (\S+):(\d+) ", (DOCKER / "proxy" / "upstream.conf").read_text(), re.M)
    assert upstream == ("service", str(port))
    (listen,) = re.findall(r"^listen (\d+);", (DOCKER / "proxy" / "listen.conf").read_text(), re.MULTILINE)
    assert PROXY["ports"][0].endswith(f":{listen}")
    assert f"http://127.0.0.1:{listen}/health/live" in PROXY["healthcheck"]["test"]

    assert CONTAINER["ports"] == [{"name": "http", "containerPort": port}]
    assert [one["targetPort"] for one in MANIFESTS["service"]["spec"]["ports"]] == ["http"]
    (rule,) = MANIFESTS["network-policy"]["spec"]["ingress"]
    assert [one["port"] for one in rule["ports"]] == ["http"]


def test_a_scraper_is_sent_to_the_port_that_listens() -> None:
    template = load(KUBERNETES / "base" / "deployment.yaml")["spec"]["template"]
    told = template["metadata"]["annotations"]
    assert told["prometheus.io/scrape"] == "true"
    assert told["prometheus.io/path"] == ROUTE[1]
    (port,) = template["spec"]["containers"][0]["ports"]
    assert told["prometheus.io/port"] == str(port["containerPort"])


def test_the_build_is_sent_what_it_copies_and_no_more() -> None:
    copied = re.findall(r"^COPY (?!--from)(.*) \S+$", DOCKERFILE, re.MULTILINE)
    first, *sent = [
        line
        for line in (ROOT / ".dockerignore").read_text().splitlines()
        if line and not line.startswith("#")
    ]
    assert first == "*"
    assert {line.removeprefix("!") for line in sent if line.startswith("!")} == set(" ".join(copied).split())
    assert {line for line in sent if not line.startswith("!")} == {"**/__pycache__"}


def test_labels_agree() -> None:
    labels = MANIFESTS["deployment"]["spec"]["template"]["metadata"]["labels"]
    (spread,) = POD["topologySpreadConstraints"]
    for selector in (
        MANIFESTS["deployment"]["spec"]["selector"]["matchLabels"],
        MANIFESTS["service"]["spec"]["selector"],
        MANIFESTS["disruption-budget"]["spec"]["selector"]["matchLabels"],
        MANIFESTS["network-policy"]["spec"]["podSelector"]["matchLabels"],
        spread["labelSelector"]["matchLabels"],
    ):
        assert selector == labels
    assert {manifest["metadata"]["name"] for manifest in MANIFESTS.values()} == {"assignable"}


def test_probes_ask_what_the_service_answers() -> None:
    contract: Contract = create_app().extensions["assignable.contract"]
    paths = {name: contract.operations[name].path for name in ("getLiveness", "getReadiness")}
    for probe, name in (
        ("startup", "getReadiness"),
        ("readiness", "getReadiness"),
        ("liveness", "getLiveness"),
    ):
        asked = CONTAINER[f"{probe}Probe"]
        assert asked["httpGet"] == {"path": paths[name], "port": "http"}
        assert asked["periodSeconds"] * asked["failureThreshold"] >= 10
    assert f"{paths['getReadiness']}'" in DOCKERFILE


def test_compose_asks_as_the_image_does() -> None:
    (command,) = re.findall(r"^  CMD (\[.*\])$", DOCKERFILE, re.MULTILINE)
    (times,) = re.findall(r"^HEALTHCHECK (.*) \\$", DOCKERFILE, re.MULTILINE)
    check = SERVICE["healthcheck"]
    assert check["test"] == ["CMD", *json.loads(command)]
    names = {
        "interval": "interval",
        "timeout": "timeout",
        "start-period": "start_period",
        "retries": "retries",
    }
    for name, value in re.findall(r"--([a-z-]+)=(\S+)", times):
        assert str(check[names.pop(name)]) == value
    assert not names


def test_users_agree() -> None:
    (user,) = re.findall(r"^USER (\d+):(\d+)$", DOCKERFILE, re.MULTILINE)
    assert min(map(int, user)) >= 10_000
    assert (POD["securityContext"]["runAsUser"], POD["securityContext"]["runAsGroup"]) == tuple(
        map(int, user)
    )


def test_versions_agree() -> None:
    assert SERVICE["image"] == CONTAINER["image"] == f"assignable:{VERSION}"
    (image,) = load(KUBERNETES / "base" / "kustomization.yaml")["images"]
    assert (image["name"], image["newTag"]) == ("assignable", VERSION)
    assert f'org.opencontainers.image.version="{VERSION}"' in DOCKERFILE
    assert f"assignable:{VERSION} ." in DOCKERFILE


def test_whoever_stops_the_service_waits_for_its_requests() -> None:
    waits = CONTAINER["lifecycle"]["preStop"]["sleep"]["seconds"]
    assert POD["terminationGracePeriodSeconds"] > waits + GRACE_SECONDS
    assert int(SERVICE["stop_grace_period"].removesuffix("s")) > GRACE_SECONDS


def test_a_pod_gets_no_variables_that_read_as_settings() -> None:
    """A Kubernetes service named assignable would give it ASSIGNABLE_PORT=tcp://..."""
    assert POD["enableServiceLinks"] is False


def sized(text: str) -> int:
    number, unit = re.fullmatch(r"(\d+)(m|g|Mi|Gi|k)", text).groups()  # type: ignore[union-attr]
    return int(number) * {"k": 1024, "m": MIB, "Mi": MIB, "g": 1024 * MIB, "Gi": 1024 * MIB}[unit]


def needed(settings: Settings) -> int:
    """The most that a server takes, in bytes, by the formula of docker/README.md."""
    most = max(settings.max_body_bytes, settings.max_inflated_bytes)
    of_a_worker = settings.threads * settings.max_body_bytes + settings.compute_slots * 15 * most
    return 256 * MIB + settings.workers * of_a_worker


def test_memory_is_enough_for_the_largest_bodies() -> None:
    for environment, limit in (
        (
            {entry["name"]: entry["value"] for entry in CONTAINER["env"]},
            CONTAINER["resources"]["limits"]["memory"],
        ),
        (SERVICE["environment"], SERVICE["deploy"]["resources"]["limits"]["memory"]),
    ):
        assert needed(Settings.from_environment(environment)) <= sized(limit)


def test_workers_are_as_many_as_processors() -> None:
    (workers,) = (entry["value"] for entry in CONTAINER["env"] if entry["name"] == "ASSIGNABLE_WORKERS")
    assert workers == CONTAINER["resources"]["limits"]["cpu"]
    assert SERVICE["environment"]["ASSIGNABLE_WORKERS"] == SERVICE["deploy"]["resources"]["limits"]["cpus"]


def directives() -> Iterator[tuple[str, str]]:
    text = (DOCKER / "proxy" / "nginx.conf").read_text()
    yield from re.findall(r"^ +([a-z_]+) ([^;{]+);", text, re.MULTILINE)


def test_the_proxy_agrees_with_the_service() -> None:
    """Bodies as large as the service takes; connections given up before the service does; longer waits than it has."""
    given: dict[str, list[str]] = {}
    for name, value in directives():
        given.setdefault(name, []).append(value)
    chosen = options(Settings())
    limits = [Settings().max_body_bytes, Settings().max_stream_bytes]
    assert [sized(value) for value in given["client_max_body_size"]] == limits
    told = "A body may have {} MiB; one of lines, for /v1/bulk, {} MiB.".format(
        *(size // MIB for size in limits)
    )
    assert told in (DOCKER / "proxy" / "nginx.conf").read_text()
    *_, idle = given["keepalive_timeout"]
    assert int(idle.removesuffix("s")) < chosen["keepalive"]
    (wait,) = given["proxy_read_timeout"]
    assert int(wait.removesuffix("s")) > chosen["timeout"]
    (tmpfs,) = PROXY["tmpfs"]
    assert sized(re.search(r"size=(\w+)", tmpfs)[1]) >= 16 * Settings().max_body_bytes  # type: ignore[index]
    assert PROXY["entrypoint"][3:7] == ["-p", "/tmp", "-c", "/etc/nginx/assignable/nginx.conf"]
