"""Dockerfile, compose file and unit: linted, and held to what they promise."""

from __future__ import annotations

import json
import re
import subprocess
import sys
from pathlib import Path
from typing import Any

import pytest
import yaml
from peers.http_receiver import Reply, receiver

from watcher.settings import read

FOLDER = Path(__file__).parents[2] / "docker"
DOCKERFILE = (FOLDER / "Dockerfile").read_text()
COMPOSE: dict[str, Any] = yaml.safe_load((FOLDER / "compose.yaml").read_text())
UNIT = (FOLDER / "watcher.service").read_text()


def test_hadolint_finds_nothing_in_the_dockerfile() -> None:
    """The real linter, from its package in the test environment."""
    linter = Path(sys.executable).parent / "hadolint"
    found = subprocess.run(
        [linter, "-f", "json", FOLDER / "Dockerfile"], check=False, capture_output=True, text=True, timeout=60
    )

    assert (found.returncode, json.loads(found.stdout)) == (0, [])


def test_the_image_has_two_stages_on_one_base_and_does_not_run_as_root() -> None:
    """What the first stage needs to build stays out of the second."""
    final = DOCKERFILE.rsplit("\nFROM ", 1)[1]

    assert re.findall(r"^FROM (\S+)", DOCKERFILE, re.MULTILINE) == ["${BASE}", "${BASE}"]
    assert re.findall(r"^USER (\d+):(\d+)", final, re.MULTILINE) == [("10001", "10001")]
    assert final.index("\nUSER ") > final.index("\nRUN ")
    assert "pip" not in final


@pytest.mark.parametrize(("status", "code"), [(200, 0), (401, 0), (503, 1), (None, 1)])
def test_the_health_check_tells_alive_from_dead(status: int | None, code: int) -> None:
    """The very program of the Dockerfile: any answer below 500 is alive, no answer is not."""
    (command,) = re.findall(r"HEALTHCHECK .*?CMD (\[.*?\])$", DOCKERFILE, re.DOTALL | re.MULTILINE)
    _, _, program = json.loads(command)
    with receiver() as peer:
        peer.answer = lambda _: Reply(status or 200)
        port = peer.url.rsplit(":", 1)[1].split("/")[0] if status else "1"
        done = subprocess.run(
            [sys.executable, "-c", program.replace("8750", port)], check=False, capture_output=True, timeout=30
        )

    assert done.returncode == code
    assert "'/healthz'" in program


def test_what_the_dockerfile_copies_is_in_the_context() -> None:
    """The ignore file lets through just that, and it exists."""
    let_through = re.findall(r"^!(\S+)", (FOLDER / "Dockerfile.dockerignore").read_text(), re.MULTILINE)
    copied = {name for line in re.findall(r"^COPY (?!--)(.*) \S+$", DOCKERFILE, re.MULTILINE) for name in line.split()}

    assert copied == set(let_through)
    assert all((FOLDER.parent / name).exists() for name in copied)


def test_compose_mounts_only_what_exists_and_publishes_on_the_loopback_only() -> None:
    """Files of the repository, declared volumes and secrets."""
    for service in COMPOSE["services"].values():
        for mount in service.get("volumes", []):
            source = mount.split(":")[0]
            assert (FOLDER / source).is_file() if source.startswith(".") else source in COMPOSE["volumes"]
        assert set(service.get("secrets", [])) <= set(COMPOSE["secrets"])
        assert set(service.get("networks", [])) <= set(COMPOSE["networks"])
        assert all(port.startswith("127.0.0.1:") for port in service.get("ports", []))
        assert service["cap_drop"] == ["ALL"]
        assert "no-new-privileges:true" in service["security_opt"]


def test_watcher_runs_read_only_as_the_user_of_the_image() -> None:
    """Nothing but the ledger's volume and /tmp can be written."""
    service = COMPOSE["services"]["watcher"]

    assert (service["read_only"], service["user"]) == (True, "10001:10001")
    assert [mount for mount in service["volumes"] if not mount.endswith(":ro")] == ["ledger:/var/lib/watcher"]
    assert (FOLDER.parent / "docker" / service["build"]["context"] / service["build"]["dockerfile"]).is_file()


def test_the_configuration_of_the_compose_file_is_valid() -> None:
    """Read by the program's own settings; the secret it names is mounted, its columns are those of the table."""
    settings = read(FOLDER / "watcher.toml", {})
    (source,) = settings.source
    table = (FOLDER / "postgres" / "tables.sh").read_text()
    mapped = [name for name in source.columns.model_dump().values() if name is not None]

    assert settings.ledger_url() == "sqlite:////var/lib/watcher/watcher.db"
    assert source.url_file == "/run/secrets/labels_url"
    assert "labels_url" in COMPOSE["services"]["watcher"]["secrets"]
    assert f"CREATE TABLE {source.table} " in table
    assert all(re.search(rf"^    {name} ", table, re.MULTILINE) for name in [*mapped, *settings.promise[0].slices])


def test_no_password_stands_in_a_file() -> None:
    """Secrets come from files that are made on the spot."""
    for path in FOLDER.rglob("*"):
        if path.is_file() and path.suffix != ".md":
            assert not re.search(r"(?i)(password|secret|token)\s*[:=]\s*['\"]?[A-Za-z0-9+/]{12,}", path.read_text()), (
                path
            )


def _analyze(*arguments: str) -> subprocess.CompletedProcess[str]:
    return subprocess.run(["systemd-analyze", *arguments], check=False, capture_output=True, text=True, timeout=60)


@pytest.mark.peer("systemd")
def test_systemd_finds_nothing_in_the_unit(tmp_path: Path) -> None:
    """`systemd-analyze verify`, with a program that is there on this machine."""
    unit = tmp_path / "watcher.service"
    unit.write_text(UNIT.replace("/opt/watcher/bin/watcher", "/bin/true"))
    found = _analyze("verify", "--man=no", str(unit))

    assert (found.returncode, found.stderr) == (0, "")


@pytest.mark.peer("systemd")
def test_the_unit_is_as_hardened_as_the_readme_says() -> None:
    """`systemd-analyze security --offline`; the figure of the README."""
    found = _analyze("security", "--offline=true", "--threshold=20", str(FOLDER / "watcher.service"))
    (noted,) = re.findall(r"rates the exposure ([\d.]+) of 10", (FOLDER / "README.md").read_text())
    (measured,) = re.findall(r"Overall exposure level for watcher.service: ([\d.]+)", found.stdout)

    assert found.returncode == 0
    assert measured == noted


def test_the_unit_gives_the_daemon_its_thirty_seconds_and_does_not_restart_a_wrong_configuration() -> None:
    """SIGTERM ends within 30 s; exit 2 is for people."""
    assert re.findall(r"^TimeoutStopSec=(\d+)$", UNIT, re.MULTILINE) == ["35"]
    assert re.findall(r"^RestartPreventExitStatus=(.*)$", UNIT, re.MULTILINE) == ["2"]
    assert re.findall(r"^ExecReload=/bin/kill -(\w+) ", UNIT, re.MULTILINE) == ["HUP"]
