"""Manifests, compose file, unit and proxy: sound by their schemas, and fitting the service."""

from __future__ import annotations

import configparser
import re
import shutil
import subprocess
from pathlib import Path
from typing import Any

import kubernetes_validate
import pytest
import yaml

from service.commands.crew import STOP_S
from service.feedback import ANSWER_S
from service.settings import PREFIX, Settings, load
from tests.house import ROOT

DEPLOY = ROOT / "deploy"
MANIFESTS = sorted((DEPLOY / "kubernetes").glob("*.yaml"))


def documents() -> list[dict[str, Any]]:
    """Every object of every manifest."""
    return [one for path in MANIFESTS for one in yaml.safe_load_all(path.read_text("utf-8"))]


def pods() -> dict[str, dict[str, Any]]:
    """The specification of each kind of pod, by the kind of what makes it."""
    makers = [one for one in documents() if one["kind"] in ("Deployment", "Job")]
    return {one["kind"]: one["spec"]["template"]["spec"] for one in makers}


def settings_of(environment: dict[str, str]) -> Settings:
    """What the service makes of an environment; a misspelt name is refused."""
    return load({name: text for name, text in environment.items() if name.startswith(PREFIX)})


def test_each_manifest_fits_the_schema_of_its_kind() -> None:
    """By the published schemas of the newest release that the checker carries, strictly."""
    newest = kubernetes_validate.latest_version()
    for one in documents():
        kubernetes_validate.validate(one, newest, strict=True)
    kinds = {one["kind"] for one in documents()}
    assert {"Deployment", "PodDisruptionBudget", "Job", "Service", "NetworkPolicy"} <= kinds


def test_the_checker_would_find_a_mistake() -> None:
    """A field of the wrong type or name is refused, so the test above can fail."""
    newest = kubernetes_validate.latest_version()
    (deployment,) = [one for one in documents() if one["kind"] == "Deployment"]
    deployment["spec"]["replica"] = 3
    with pytest.raises(kubernetes_validate.ValidationError):
        kubernetes_validate.validate(deployment, newest, strict=True)


@pytest.mark.parametrize("kind", ["Deployment", "Job"])
def test_a_pod_may_do_as_little_as_it_needs(kind: str) -> None:
    """Not root, no more rights than at its start, nothing written but into empty folders."""
    pod = pods()[kind]
    assert pod["securityContext"]["runAsNonRoot"] is True
    assert pod["securityContext"]["runAsUser"] == 10001
    assert pod["automountServiceAccountToken"] is False
    (container,) = pod["containers"]
    guard = container["securityContext"]
    assert guard["readOnlyRootFilesystem"] is True
    assert guard["allowPrivilegeEscalation"] is False
    assert guard["capabilities"] == {"drop": ["ALL"]}
    assert all("emptyDir" in volume for volume in pod["volumes"])


def test_a_pod_has_time_to_give_its_slices_back() -> None:
    """The wait before the signal and the promised ten seconds fit into the grace of the pod."""
    pod = pods()["Deployment"]
    (container,) = pod["containers"]
    told = container["lifecycle"]["preStop"]["exec"]["command"][-1]
    waits_s = int(re.findall(r"sleep\((\d+)\)", told)[0])
    assert waits_s + 10 <= pod["terminationGracePeriodSeconds"]
    assert STOP_S < 10
    # The balancer hears of it before: a probe that fails twice takes less than the wait.
    probe = container["readinessProbe"]
    assert probe["periodSeconds"] * probe["failureThreshold"] <= waits_s


def test_a_roll_out_leaves_enough_pods() -> None:
    """Nobody is taken away before another one is ready, by us or by whoever drains a node."""
    by_kind = {one["kind"]: one for one in documents()}
    deployment, budget = by_kind["Deployment"]["spec"], by_kind["PodDisruptionBudget"]["spec"]
    assert deployment["strategy"]["rollingUpdate"]["maxUnavailable"] == 0
    assert 1 <= budget["minAvailable"] < deployment["replicas"]
    labels = deployment["template"]["metadata"]["labels"]
    for selected in (deployment["selector"], budget["selector"]):
        assert selected["matchLabels"].items() <= labels.items()
    assert by_kind["Service"]["spec"]["selector"].items() <= labels.items()
    # The job that migrates is nobody's pod: no balancer may send it a bid.
    job = by_kind["Job"]["spec"]["template"]["metadata"]["labels"]
    assert not by_kind["Service"]["spec"]["selector"].items() <= job.items()


def test_the_settings_of_the_manifests_are_settings() -> None:
    """Names and values are those that the service reads, and the ports are those named."""
    by_kind = {one["kind"]: one for one in documents()}
    given = {**by_kind["ConfigMap"]["data"], **by_kind["Secret"]["stringData"]}
    settings = settings_of(given)
    assert (settings.workers, settings.log_format) == (2, "json")
    (container,) = pods()["Deployment"]["containers"]
    ports = {port["name"]: port["containerPort"] for port in container["ports"]}
    assert ports == {"http": settings.port, "metrics": settings.metrics_port}


def test_the_compose_file_fits_the_service() -> None:
    """Its settings are settings, it migrates first, writes nothing and stops in good time."""
    services = yaml.safe_load((DEPLOY / "compose.yml").read_text("utf-8"))["services"]
    for name in ("bidkeel", "migrate"):
        one = services[name]
        password = "${BIDKEEL_DB_PASSWORD:?set a password}"
        given = {k: v.replace(password, "invented") for k, v in one["environment"].items()}
        assert settings_of(given).workers == 2
        assert (one["read_only"], one["cap_drop"]) == (True, ["ALL"])
    serving = services["bidkeel"]
    assert serving["depends_on"]["migrate"] == {"condition": "service_completed_successfully"}
    assert int(serving["stop_grace_period"].removesuffix("s")) > 10
    assert all(port.startswith("127.0.0.1:") for port in serving["ports"])
    # What it does not say has the healthcheck and the user of the image.
    assert not {"user", "healthcheck", "privileged"} & set(serving)


def test_the_unit_stops_in_order_and_is_shut_in() -> None:
    """SIGTERM first, time enough after it; systemd's own check finds nothing where there is one."""
    unit = configparser.ConfigParser(strict=False, interpolation=None)
    unit.optionxform = str  # type: ignore[assignment, method-assign]
    path = DEPLOY / "systemd" / "bidkeel.service"
    unit.read(path)
    service = unit["Service"]
    assert (service["KillSignal"], service["KillMode"]) == ("SIGTERM", "mixed")
    assert int(service["TimeoutStopSec"]) > 10
    assert (service["User"], service["NoNewPrivileges"]) == ("bidkeel", "yes")
    assert service["ProtectSystem"] == "strict"
    tool = shutil.which("systemd-analyze")
    if tool:
        done = subprocess.run([tool, "verify", str(path)], capture_output=True, text=True)
        # The command is installed where the service will run, not here.
        left = [line for line in done.stderr.splitlines() if "is not executable" not in line]
        assert left == []


def test_the_proxy_fits_the_limits_of_the_service() -> None:
    """Bodies and waits are no smaller than the service's, and bids are not sent twice."""
    text = (DEPLOY / "nginx" / "bidkeel.conf").read_text("utf-8")
    assert text.count("{") == text.count("}")
    body = int(re.findall(r"client_max_body_size (\d+)m;", text)[0]) * 2**20
    assert body > load({}).batch_bytes_max
    waits = dict(re.findall(r"location (\S+) \{[^}]*?proxy_read_timeout (\d+)s;", text))
    assert int(waits["/v1/"]) > ANSWER_S
    assert int(waits["/v1/bids"]) * 1000 > load({}).deadline_ms_max
    assert "non_idempotent" not in text
    assert "TLSv1.2 TLSv1.3" in text
    assert re.search(r"location / \{\s*return 404;", text)


def test_examples_hold_no_secret() -> None:
    """What looks like a password in an example says that it is to be changed."""
    (secret,) = [one for one in documents() if one["kind"] == "Secret"]
    assert all("change-me" in text for text in secret["stringData"].values())
    assert Path(DEPLOY / "kubernetes" / "secret-example.yaml") in MANIFESTS
