"""The few files that pages load: a fixed list, read once; nothing is looked up on disk by a name from outside."""

from __future__ import annotations

import hashlib
import subprocess
import sys
import threading
from dataclasses import dataclass
from pathlib import Path
from typing import Final

from fastapi import APIRouter, Request
from starlette.responses import Response

from watcher.web.problems import Refused
from watcher.web.security import refusal

FOLDER: Final = Path(__file__).parent / "static"
TYPES: Final = {
    ".css": "text/css; charset=utf-8",
    ".js": "text/javascript; charset=utf-8",
    ".svg": "image/svg+xml",
}
VEGA: Final = "vega.js"
_BUNDLE: Final = "import sys, vl_convert; sys.stdout.write(vl_convert.javascript_bundle(vl_version='6.4'))"
_PATIENCE: Final = 120.0


@dataclass(frozen=True, slots=True)
class File:
    """One file with its type and a name for its content."""

    content: bytes
    media_type: str
    tag: str


def _file(content: bytes, suffix: str) -> File:
    return File(content, TYPES[suffix], hashlib.sha256(content).hexdigest()[:16])


class Files:
    """The static files by name; the chart library is taken from the installed renderer by a child, once."""

    def __init__(self) -> None:
        found = sorted(path for path in FOLDER.iterdir() if path.suffix in TYPES)
        self._files = {path.name: _file(path.read_bytes(), path.suffix) for path in found}
        self._lock = threading.Lock()

    def assets(self) -> dict[str, str]:
        """Name -> address that changes with the content."""
        made = {name: f"/static/{name}?v={file.tag}" for name, file in self._files.items()}
        return {**made, VEGA: f"/static/{VEGA}"}

    def get(self, name: str) -> File | None:
        """A file; None when there is none of that name, or the chart library cannot be had."""
        if name == VEGA and VEGA not in self._files:
            with self._lock:
                if VEGA not in self._files:
                    bundle = _vega()
                    if bundle is None:
                        return None
                    self._files[VEGA] = _file(bundle, ".js")
        return self._files.get(name)


def _vega() -> bytes | None:
    # In a child: the library would take 200 MiB of this process for good.
    command = [sys.executable, "-c", _BUNDLE]
    try:
        done = subprocess.run(command, capture_output=True, timeout=_PATIENCE, check=True)
    except (OSError, subprocess.SubprocessError):
        return None
    return done.stdout or None


def router(files: Files) -> APIRouter:
    """/static/NAME and /favicon.svg."""
    made = APIRouter(include_in_schema=False)

    @made.get("/static/{name:path}")
    def static(request: Request, name: str) -> Response:
        file = files.get(name)
        if file is None:
            refusal(request.scope, "no-such-file", 404)
            raise Refused(404, "no-such-file", "There is no such file.")
        tag = f'"{file.tag}"'
        fixed = request.query_params.get("v") == file.tag
        headers = {"ETag": tag, "Cache-Control": "max-age=31536000, immutable" if fixed else "no-cache"}
        if tag in request.headers.get("if-none-match", ""):
            return Response(status_code=304, headers=headers)
        return Response(file.content, headers=headers, media_type=file.media_type)

    @made.get("/favicon.ico")
    def icon(request: Request) -> Response:
        return static(request, "favicon.svg")

    return made
