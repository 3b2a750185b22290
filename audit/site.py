"""A site's folder -> its settings and register, with every fault of all its files at once."""

from __future__ import annotations

import os
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path

from audit import config, register
from audit.config import Config
from audit.errors import FilesWrong
from audit.register import Register


@dataclass(frozen=True)
class Site:
    """One site as its files say it is."""

    config: Config
    register: Register


def open_site(path: Path, env: Mapping[str, str]) -> Site:
    """The site whose site.toml, or folder, is ``path``.

    Raises FilesWrong with the faults of site.toml, loops.csv and specs.csv together. Where the
    first cannot say what the others are called, they are looked for under their default names; one
    that is not there is then no fault of its own.
    """
    settings = config.examine(path, env)
    found, faults = register.examine(
        settings.loops_path, settings.specs_path, settings.windows, settings.timezone
    )
    if settings.config is None:
        paths = (settings.loops_path, settings.specs_path)
        absent = {p.name for p in paths if not settings.files_named and not os.path.exists(p)}
        raise FilesWrong([*settings.faults, *(f for f in faults if f.file not in absent)])
    if faults:
        raise FilesWrong(faults)
    return Site(settings.config, found)
