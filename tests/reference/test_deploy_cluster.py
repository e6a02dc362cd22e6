"""The cluster's manifest and document, held against outside tools, real brokers, and the configuration.

Sources of what is right: kubernetes-validate (the schemas of Kubernetes), and a NATS server that maps subjects by the
very configuration that the document shows.
"""

from __future__ import annotations

import re
import subprocess
from pathlib import Path
from typing import Any

import pytest
import yaml
from helpers_brokers import Nats
from helpers_deploy import DEPLOY, TOOL_S_AT_MOST, tool
from nats.js import api
from strandline.config import Config, Feed, parse
from strandline.config_cluster import Partitions

MANIFEST = DEPLOY / "kubernetes" / "cluster.yaml"
DOCUMENT = DEPLOY / "cluster.md"
MEBI, GIBI = 2**20, 2**30
MAX_PAYLOAD = MEBI  # of a NATS server, unless it is configured otherwise (its documentation; from memory)


def objects() -> dict[str, Any]:
    """The manifest's objects by kind."""
    return {found["kind"]: found for found in yaml.safe_load_all(MANIFEST.read_text())}


def pod() -> dict[str, Any]:
    return dict(objects()["StatefulSet"]["spec"]["template"]["spec"])


def container() -> dict[str, Any]:
    (found,) = pod()["containers"]
    return dict(found)


def environ() -> dict[str, str]:
    """The container's variables, with what an instance would find in them."""
    found = {"metadata.name": "strandline-2", "dsn": "postgres://u:p@db.example/telemetry"}
    known: dict[str, str] = {}
    for each in container()["env"]:
        if "value" in each:  # $(NAME) stands for a variable that was named before it
            known[each["name"]] = re.sub(r"\$\((\w+)\)", lambda name: known[name[1]], each["value"])
        else:
            place = each["valueFrom"].get("fieldRef", {}).get("fieldPath") or each["valueFrom"]["secretKeyRef"]["key"]
            known[each["name"]] = found[place]
    return known


def configuration() -> Config:
    return parse(objects()["ConfigMap"]["data"]["strandline.toml"], environ())


def the_feed() -> tuple[Feed, Partitions]:
    (feed,) = configuration().feeds
    assert feed.partitions is not None
    return feed, feed.partitions


def amount(text: str) -> int:
    number, unit = re.fullmatch(r"(\d+)(Mi|Gi)", text).groups()  # type: ignore[union-attr]
    return int(number) * {"Mi": MEBI, "Gi": GIBI}[unit]


def validated(file: Path) -> subprocess.CompletedProcess[str]:
    command = [tool("kubernetes-validate", "pip install kubernetes-validate"), "--strict", str(file)]
    return subprocess.run(command, capture_output=True, text=True, check=False, timeout=TOOL_S_AT_MOST)


def test_the_manifest_is_sound(tmp_path: Path) -> None:
    done = validated(MANIFEST)
    assert done.returncode == 0, done.stdout + done.stderr
    for kind, right, wrong in (
        ("StatefulSet", "podManagementPolicy", "podManagmentPolicy"),
        ("PodDisruptionBudget", "maxUnavailable", "maximumUnavailable"),
    ):
        worse = tmp_path / f"{kind}.yaml"
        worse.write_text(MANIFEST.read_text().replace(right, wrong))
        assert validated(worse).returncode != 0, "a typing error is found"


def test_the_configuration_loads_and_its_places_are_there() -> None:
    config = configuration()
    assert config.cluster is not None and config.cluster.instance == "strandline-2", "named after the pod"
    assert str(config.cluster.address) == "strandline-2.strandline:8600", "as the headless Service has it"
    mounts = {mount["mountPath"]: mount["name"] for mount in container()["volumeMounts"]}
    (claim,) = objects()["StatefulSet"]["spec"]["volumeClaimTemplates"]
    assert mounts[str(config.data_dir)] == claim["metadata"]["name"], "lanes.db comes back with the pod"
    assert config.access.tokens is not None and str(config.access.tokens.parent) in mounts
    assert config.cluster.creds_file is not None and str(Path(config.cluster.creds_file).parent) in mounts
    assert not any(a != b and Path(a).is_relative_to(b) for a in mounts for b in mounts), "no mount inside another"
    assert config.listen.port == container()["ports"][0]["containerPort"]


def test_objects_find_each_other() -> None:
    found = objects()
    labels = found["StatefulSet"]["spec"]["template"]["metadata"]["labels"]
    assert found["StatefulSet"]["spec"]["serviceName"] == found["Service"]["metadata"]["name"]
    assert found["Service"]["spec"]["clusterIP"] == "None" and found["Service"]["spec"]["publishNotReadyAddresses"]
    assert found["Service"]["spec"]["selector"] == labels
    assert found["PodDisruptionBudget"]["spec"]["selector"]["matchLabels"] == labels
    assert found["PodDisruptionBudget"]["spec"]["maxUnavailable"] == 1
    assert found["ConfigMap"]["metadata"]["name"] == pod()["volumes"][0]["configMap"]["name"]


def test_a_stop_has_its_time_and_nobody_waits_for_another_to_start() -> None:
    config = configuration()
    assert pod()["terminationGracePeriodSeconds"] >= config.drain_at_most_ns / 1e9 + 30
    spec = objects()["StatefulSet"]["spec"]
    assert spec["podManagementPolicy"] == "Parallel" and spec["replicas"] >= 2
    assert config.cluster is not None and spec["minReadySeconds"] > config.cluster.lease_ns / 1e9


def test_memory_and_volume_have_room_for_all_partitions() -> None:
    """The last instance that is left owns them all."""
    feed, partitions = the_feed()
    each = 24 * feed.held_events_at_most + partitions.in_flight_at_most * MAX_PAYLOAD
    needed = partitions.count * each + feed.decoded_bytes_at_most + 256 * MEBI
    assert needed < amount(container()["resources"]["limits"]["memory"])
    disk = partitions.count * (feed.journal.at_most_bytes + feed.lanes_at_most_bytes)
    claim = objects()["StatefulSet"]["spec"]["volumeClaimTemplates"][0]["spec"]
    assert disk + GIBI < amount(claim["resources"]["requests"]["storage"])


def test_probes_ask_what_needs_no_token() -> None:
    paths = {probe: container()[probe]["httpGet"]["path"] for probe in ("startupProbe", "livenessProbe")}
    assert set(paths.values()) == {"/health/live"}, "a store that is down does not make it unhealthy"
    assert container()["readinessProbe"]["httpGet"] == {"path": "/health/ready", "port": "strandline"}


def test_the_pod_has_no_rights_that_it_does_not_need() -> None:
    assert pod()["securityContext"]["runAsNonRoot"] and pod()["securityContext"]["runAsUser"] > 0
    assert not pod()["automountServiceAccountToken"]
    context = container()["securityContext"]
    assert context["readOnlyRootFilesystem"] and not context["allowPrivilegeEscalation"]
    assert context["capabilities"] == {"drop": ["ALL"]}
    secrets = [volume["secret"] for volume in pod()["volumes"] if "secret" in volume]
    assert len(secrets) == 2 and all(secret["defaultMode"] == 0o440 for secret in secrets)


def test_the_image_brings_what_its_sinks_and_the_brokers_need() -> None:
    text = (DEPLOY / "container" / "Containerfile").read_text()
    extras = set(re.search(r"'\.\[(.*?)\]'", text)[1].split(","))  # type: ignore[index]
    assert extras >= {"nats", *(sink.kind for sink in the_feed()[0].sinks)}


# ---- the document --------------------------------------------------------------------------------------------------


def mapping() -> str:
    """The servers' account as the document shows it."""
    (accounts,) = re.findall(r"^(accounts \{.*?^\})$", DOCUMENT.read_text(), re.MULTILINE | re.DOTALL)
    return str(accounts)


async def test_the_servers_map_a_source_to_one_of_the_partitions_always(tmp_path: Path) -> None:
    """By the document's own lines: what they map to is what `partitions` of the document reads."""
    (block,) = re.findall(r"^```toml\n(.*?)^```", DOCUMENT.read_text(), re.MULTILINE | re.DOTALL)
    partitions = parse(block, {}).feeds[0].partitions
    assert partitions is not None and f"partition({partitions.count},1)" in mapping()
    stations = [f"weir-{number}" for number in range(100)]
    with Nats(tmp_path, mapping(), synced=False) as server:
        strandline = await server.client(user="strandline", password="change-me-too")
        stream = strandline.jetstream()
        subjects = [re.sub(r"\{partition\}.*", ">", partitions.subject)]
        await stream.add_stream(api.StreamConfig(name=partitions.stream, subjects=subjects))
        producer = await server.client(user="producer", password="change-me")
        for station in stations * 2:
            await producer.jetstream().publish(f"feed.{station}", b"{}")
        found: dict[str, list[int]] = {}
        for number in range(partitions.count):
            info = await stream.stream_info(partitions.stream, subjects_filter=partitions.subject_of(number))
            for subject, messages in (info.state.subjects or {}).items():
                found.setdefault(subject.split(".")[2], []).append(messages)
        await producer.close()
        await strandline.close()
    assert found == {station: [2] for station in stations}, "each station in one partition, whenever it was published"


@pytest.mark.parametrize("key", ["time", "source", "id", "content_type", "decoded_bytes_at_most", "nesting_at_most"])
def test_the_document_names_what_cannot_change_while_events_are_held(key: str) -> None:
    section = DOCUMENT.read_text().partition("## What cannot change while events are held")[2].partition("\n## ")[0]
    assert f"`{key}`" in section
