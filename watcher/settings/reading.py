"""A file or a text into settings, every problem named at once."""

from __future__ import annotations

import os
import tomllib
from collections.abc import Mapping
from pathlib import Path

from pydantic import ValidationError

from watcher.errors import SettingsError
from watcher.settings.across import across
from watcher.settings.telling import all_told
from watcher.settings.whole import Settings


def read(path: Path, environment: Mapping[str, str] | None = None) -> Settings:
    """The configuration in a TOML file. Raises SettingsError with every problem found."""
    try:
        text = path.read_text(encoding="utf-8")
    except OSError as error:
        raise SettingsError(
            [f"{path}: cannot be read ({error.strerror}); `watcher draft FILE` writes one to start from"]
        ) from None
    except UnicodeDecodeError:
        raise SettingsError([f"{path}: is not UTF-8 text"]) from None
    return parse(text, path.resolve().parent, os.environ if environment is None else environment, str(path))


def parse(text: str, folder: Path, environment: Mapping[str, str], name: str = "configuration") -> Settings:
    """The configuration in a TOML text; `folder` is what relative paths start from."""
    try:
        tree = tomllib.loads(text)
    except tomllib.TOMLDecodeError as error:
        raise SettingsError([f"{name}: is not TOML: {error}"]) from None
    for key in ("folder", "environment"):
        if key in tree:
            raise SettingsError([f"{name}: {key}: unknown key"])
    try:
        settings = Settings(**tree, folder=folder, environment=environment)
    except ValidationError as error:
        raise SettingsError([f"{name}: {told}" for told in all_told(error.errors(), tree)]) from None
    problems = across(settings)
    if problems:
        raise SettingsError([f"{name}: {problem}" for problem in problems])
    return settings
