"""Certificates made for the run: one authority that is trusted, and one that is not."""

from __future__ import annotations

import ssl
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

import pytest
import trustme


@dataclass(frozen=True)
class Certificates:
    server: ssl.SSLContext
    """For `localhost`, signed by the authority in `trusted`."""
    trusted: str
    stranger: str


@pytest.fixture(scope="session")
def certificates(tmp_path_factory: pytest.TempPathFactory) -> Certificates:
    folder: Path = tmp_path_factory.mktemp("certificates")
    paths: Sequence[Path] = (folder / "trusted.pem", folder / "stranger.pem")
    ours, other = trustme.CA(), trustme.CA()
    for authority, path in zip((ours, other), paths, strict=True):
        authority.cert_pem.write_to_path(str(path))
    context = ssl.create_default_context(ssl.Purpose.CLIENT_AUTH)
    ours.issue_cert("localhost").configure_cert(context)
    return Certificates(context, str(paths[0]), str(paths[1]))
