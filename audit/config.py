"""site.toml -> Config, with every fault at once; the cut-offs of a site's nights.

In: the path of site.toml or of its folder, and the environment. Out: a ``Config`` of checked
values, paths absolute, or ``FilesWrong``.
"""

from __future__ import annotations

import os
import re
from collections.abc import Mapping
from dataclasses import dataclass, field
from datetime import date, datetime, time, timedelta
from pathlib import Path
from urllib.parse import urlsplit
from zoneinfo import ZoneInfo

from audit.errors import Fault, FilesWrong
from audit.records import (
    SECOND_US,
    ExportSource,
    IntakeRule,
    StandingRule,
    Windows,
)
from audit.sitefiles.intake import KEYS as INTAKE_KEYS
from audit.sitefiles.intake import read_intake
from audit.sitefiles.localtime import instant, zone_meant, zone_named
from audit.sitefiles.settings import Section, Sheet, note_unknown
from audit.sitefiles.sources import KEYS as EXPORT_KEYS
from audit.sitefiles.sources import read_sources
from audit.sitefiles.text import LONGEST_WINDOW_S, fingerprint, open_file

FILE_NAME = "site.toml"
STORE_VARIABLE = "LOOPASSAY_STORE_URL"

KNOWN: Mapping[str, tuple[str, ...]] = {
    "site": ("name", "timezone"),
    "store": ("url",),
    "register": ("loops", "specs"),
    "exports": EXPORT_KEYS,
    "intake": INTAKE_KEYS,
    "windows": ("before_s", "after_s", "join_s"),
    "standing": ("steps", "days", "error_u_eu"),
    "nightly": ("at",),
}
"""Every table of site.toml and the settings in it."""

_OF_THE_MACHINE = {"store": ("url",), "intake": ("cores", "scratch")}
"""Settings in which two machines of one site may differ; they alter no result."""

_ABSENT = (
    "--config names the site's folder or its site.toml; `loopassay demo` lays down a site to try"
)
_STORES = "sqlite:///FILE or postgresql+psycopg://USER@HOST/DATABASE"


@dataclass(frozen=True)
class Config:
    """One site's settings, checked.

    ``folder`` and all paths are absolute; ``store_url`` may hold a password and is left out of the
    repr; ``settings_hash`` is the SHA-256 of the settings without those that are the machine's own
    (the store's URL, cores and scratch folder).
    """

    folder: Path
    name: str
    timezone: ZoneInfo
    store_url: str = field(repr=False)
    loops_path: Path
    specs_path: Path
    exports: tuple[ExportSource, ...]
    intake: IntakeRule
    windows: Windows
    standing: StandingRule
    nightly_at: time
    settings_hash: str

    def cutoff(self, night: date) -> datetime:
        """UTC instant at which night ``night`` ends: it covers the stamps before it.

        It is the nightly time of that date in the site's zone; a time that does not exist is moved
        on by the length of the hole, of a repeated one the first counts (PEP 495, fold 0).
        """
        return instant(datetime.combine(night, self.nightly_at), self.timezone)

    def night_after(self, newest: datetime) -> date:
        """The night whose cut-off is the first strictly after ``newest`` (aware).

        Raises ValueError for a time without zone. Where a zone skips a whole day, two nights share
        a cut-off; the earlier is given.
        """
        if newest.tzinfo is None:
            raise ValueError("newest needs a time zone")
        night = newest.astimezone(self.timezone).date() - timedelta(days=2)
        while self.cutoff(night) <= newest:
            night += timedelta(days=1)
        return night


@dataclass(frozen=True)
class Examined:
    """What could be made out of a site.toml, faulty or not.

    ``config`` is None if there is any fault; the rest is what the register can still be looked at
    with: the settings where they are right, else their defaults. ``files_named``: the two paths
    are what the file says, not a stand-in.
    """

    config: Config | None
    faults: tuple[Fault, ...]
    loops_path: Path
    specs_path: Path
    windows: Windows
    timezone: ZoneInfo
    files_named: bool


def load(path: Path, env: Mapping[str, str]) -> Config:
    """The settings at ``path``, a site.toml or its folder. Raises FilesWrong with every fault."""
    examined = examine(path, env)
    if examined.config is None:
        raise FilesWrong(examined.faults)
    return examined.config


def examine(path: Path, env: Mapping[str, str]) -> Examined:
    """As ``load``, but gives the faults back together with what is usable of the settings."""
    path = Path(os.path.abspath(path))
    path = path / FILE_NAME if os.path.isdir(path) else path
    sheet, folder = Sheet(open_file(path, _ABSENT)), path.parent
    note_unknown(sheet, KNOWN)
    tables = {name: _table(sheet, name) for name in KNOWN if name != "exports"}
    name, zone = _site(tables["site"], sheet.readable)
    register = tables["register"]
    intake = read_intake(tables["intake"], sheet, folder)
    config = Config(
        folder=folder,
        name=name,
        timezone=zone,
        store_url=_store_url(sheet, tables["store"], folder, env),
        loops_path=folder / register.text("loops", "loops.csv"),
        specs_path=folder / register.text("specs", "specs.csv"),
        exports=read_sources(sheet, folder, intake.limits) if sheet.readable else (),
        intake=intake,
        windows=_windows(tables["windows"]),
        standing=_standing(tables["standing"]),
        nightly_at=_nightly_at(tables["nightly"]),
        settings_hash=_settings_hash(sheet.data),
    )
    faults = tuple(sorted(sheet.faults, key=lambda fault: fault.line or 0))
    return Examined(
        config=None if faults else config,
        faults=faults,
        loops_path=config.loops_path,
        specs_path=config.specs_path,
        windows=config.windows,
        timezone=zone,
        files_named=sheet.readable and sheet.sound("register"),
    )


def _table(sheet: Sheet, name: str) -> Section:
    return sheet.section((name,), sheet.data.get(name, {}), KNOWN[name])


def _site(section: Section, readable: bool) -> tuple[str, ZoneInfo]:
    utc = ZoneInfo("UTC")
    if not readable:
        return "", utc
    name, zone_name = section.text("name"), section.text("timezone")
    zone = zone_named(zone_name)
    if zone is None and zone_name:
        section.wrong("timezone", f"'{zone_name}' is not a time zone", zone_meant(zone_name))
    return name.strip(), zone or utc


def _store_url(sheet: Sheet, section: Section, folder: Path, env: Mapping[str, str]) -> str:
    """The store's URL, a SQLite file made absolute. No fault repeats it: it may hold a password."""
    url, problem = _resolved(section.text("url", "sqlite:///site.db"), folder)
    if problem:
        section.wrong("url", problem, _STORES)
    if over := env.get(STORE_VARIABLE, "").strip():
        url, problem = _resolved(over, folder)
        if problem:
            sheet.faults.append(Fault(f"environment variable {STORE_VARIABLE}", problem, _STORES))
    return url


def _resolved(url: str, folder: Path) -> tuple[str, str | None]:
    """The URL with an absolute SQLite path, or what is wrong with it."""
    scheme, mark, rest = url.partition("://")
    if not mark:
        return url, "is not a URL"
    if scheme == "postgresql+psycopg":
        return url, _postgresql_problem(url)
    if scheme != "sqlite":
        return url, f"'{scheme}' is no store this program can use"
    file = rest.removeprefix("/")
    if not rest.startswith("/"):
        return url, "a SQLite URL has three slashes before the file, four before an absolute path"
    if file in ("", ":memory:") or file.endswith("/"):
        return url, "names no file to keep the store in"
    place = (folder / file).as_posix()
    if "?" in place:
        return url, "a SQLite store takes no options, and its path no question mark"
    return f"sqlite:///{place}", None


def _postgresql_problem(url: str) -> str | None:
    try:
        parts = urlsplit(url)
        named = parts.path.strip("/") and (parts.port is None or parts.port > 0)
    except ValueError:
        return "has a host or port that cannot be read"
    return None if named else "names no database"


def _windows(section: Section) -> Windows:
    seconds = [
        section.number(key, usual, LONGEST_WINDOW_S)
        for key, usual in (("before_s", 120.0), ("after_s", 3600.0), ("join_s", 60.0))
    ]
    return Windows(*(max(1, round(each * SECOND_US)) for each in seconds))


def _standing(section: Section) -> StandingRule:
    default = StandingRule()
    blank = "error_u_eu" not in section or section.is_blank("error_u_eu")
    return StandingRule(
        steps=section.whole("steps", default.steps, 1000),
        days=section.whole("days", default.days, 3660),
        error_u_eu=None if blank else section.number("error_u_eu", 1.0, 1e12),
    )


def _nightly_at(section: Section) -> time:
    text = section.text("at", "02:15")
    if re.fullmatch(r"([01][0-9]|2[0-3]):[0-5][0-9]", text):
        return time.fromisoformat(text)
    section.wrong("at", f"'{text}' is not a time of day", 'hours and minutes, such as "02:15"')
    return time(2, 15)


def _settings_hash(data: Mapping[str, object]) -> str:
    kept = dict(data)
    for table, keys in _OF_THE_MACHINE.items():
        held = data.get(table)
        if isinstance(held, Mapping):
            kept[table] = {key: value for key, value in held.items() if key not in keys}
    return fingerprint({key: value for key, value in kept.items() if value != {}})
