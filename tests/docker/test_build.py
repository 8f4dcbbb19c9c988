"""The image, really built and run: on a root file system made here, so that no image registry is needed."""

from __future__ import annotations

import json
import os
import shutil
import subprocess
import sys
import tarfile
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import pytest

ROOT = Path(__file__).parents[2]
MIRROR = ("apt-get", "indextargets", "--format", "$(REPO_URI)")
OUTSIDE = ("./dev", "./proc", "./sys")

pytestmark = [pytest.mark.long, pytest.mark.peer("buildah")]


def _run(*command: str | Path, check: bool = True) -> subprocess.CompletedProcess[str]:
    environment = {**os.environ, "STORAGE_DRIVER": "vfs", "BUILDAH_ISOLATION": "chroot"}
    done = subprocess.run(command, check=False, capture_output=True, text=True, env=environment, timeout=1500)
    assert done.returncode == 0 or not check, f"{command}: {done.stdout[-2000:]}{done.stderr[-2000:]}"
    return done


@dataclass(frozen=True)
class Image:
    """The image built from docker/Dockerfile, and a container of it."""

    store: tuple[str | Path, ...]
    container: str

    def run(self, *command: str, check: bool = True) -> subprocess.CompletedProcess[str]:
        return _run(*self.store, "run", self.container, "--", *command, check=check)

    def config(self) -> Any:
        return json.loads(_run(*self.store, "inspect", "--type", "image", "localhost/watcher").stdout)["Docker"][
            "config"
        ]


@pytest.fixture(scope="module")
def image(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Image]:
    folder = tmp_path_factory.mktemp("image")
    try:
        yield _built(folder)
    finally:
        # Some gigabytes: not for pytest to keep until later.
        shutil.rmtree(folder, ignore_errors=True)


def _built(folder: Path) -> Image:
    wheels = folder / "wheels"
    _run(sys.executable, "-m", "pip", "wheel", "--quiet", "--wheel-dir", wheels, ROOT, "hatchling")
    for own in wheels.glob("promise_watcher*"):
        own.unlink()
    _base(folder)
    store: Sequence[str | Path] = ("buildah", "--root", folder / "store", "--runroot", folder / "run")
    _run(*store, "build", "--tag", "localhost/base", "--file", folder / "Base", folder)
    _run(
        *store,
        "build",
        "--build-arg=BASE=localhost/base",
        f"--volume={wheels}:/wheels:ro",
        f"--ignorefile={ROOT / 'docker' / 'Dockerfile.dockerignore'}",
        "--format=docker",  # the other format has no health check
        "--tag=localhost/watcher",
        f"--file={ROOT / 'docker' / 'Dockerfile'}",
        ROOT,
    )
    return Image(tuple(store), _run(*store, "from", "localhost/watcher").stdout.strip())


def _base(folder: Path) -> None:
    """A minimal Debian with Python, and an installer that takes packages from /wheels only."""
    mirror = sorted({line for line in _run(*MIRROR).stdout.split() if "security" not in line})[0]
    packages = "--include=python3-minimal,python3-venv,ca-certificates"
    _run("debootstrap", "--variant=minbase", packages, "bookworm", folder / "root", mirror)
    (folder / "root" / "etc" / "pip.conf").write_text("[global]\nno-index = true\nfind-links = /wheels\n")
    with tarfile.open(folder / "root.tar", "w") as archive:
        archive.add(folder / "root", ".", filter=lambda each: None if each.name.startswith(OUTSIDE) else each)
    shutil.rmtree(folder / "root")
    (folder / "Base").write_text("FROM scratch\nADD root.tar /\n")


def test_the_program_runs_in_the_image_as_user_10001(image: Image) -> None:
    """`watcher bounds` prints its interval; the user is not root."""
    shown = image.run("watcher", "bounds", "--labels", "6000", "--errors", "126", "--risk", "0.001").stdout

    assert image.run("id", "--user").stdout.strip() == "10001"
    assert "126 errors" in shown


def test_only_the_ledgers_folder_can_be_written(image: Image) -> None:
    """Not the program, not its configuration."""
    assert image.run("touch", "/var/lib/watcher/x").returncode == 0
    for place in ("/etc/watcher/x", "/opt/watcher/x", "/x"):
        assert image.run("touch", place, check=False).returncode != 0


def test_the_second_stage_has_no_sources(image: Image) -> None:
    """What the first stage built from is not in the image."""
    assert image.run("ls", "/source", check=False).returncode != 0


def test_time_zones_and_certificate_authorities_are_there(image: Image) -> None:
    """A promise names its zone, a webhook is verified against the machine's authorities."""
    program = (
        "import ssl, zoneinfo; zoneinfo.ZoneInfo('Pacific/Auckland'); "
        "print(ssl.create_default_context().cert_store_stats()['x509_ca'])"
    )

    assert int(image.run("python3", "-c", program).stdout) > 50


def test_the_image_says_how_it_is_run(image: Image) -> None:
    """User, command, volume, stop signal and health check."""
    config = image.config()

    assert (config["User"], config["Entrypoint"]) == ("10001:10001", ["watcher"])
    assert config["Cmd"] == ["run", "/etc/watcher/watcher.toml"]
    assert list(config["Volumes"]) == ["/var/lib/watcher"]
    assert config["StopSignal"] == "SIGTERM"
    assert config["Healthcheck"]["Test"][0] == "CMD"
