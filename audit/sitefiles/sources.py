"""``[[exports]]`` of site.toml -> export sources: how each kind of export is to be read.

In: the opened sheet. Out: ``ExportSource``s; faults are noted in the sheet, and the value in the
source is then the default.
"""

from __future__ import annotations

import re
import warnings
from collections.abc import Mapping, Sequence
from datetime import UTC, datetime
from pathlib import Path

from audit.records import SECOND_US, Between, ExportSource, FileLimits, Reading, Role
from audit.sitefiles.localtime import zone_meant, zone_named
from audit.sitefiles.marks import read_marks
from audit.sitefiles.settings import Section, Sheet, shown
from audit.sitefiles.text import meant

KEYS = (
    "name",
    "files",
    "format",
    "layout",
    "time",
    "time_format",
    "timezone",
    "tag",
    "value",
    "quality",
    "quality_scheme",
    "good",
    "uncertain",
    "pv_between",
    "output_between",
    "silence_s",
    "revision",
    "delimiter",
    "decimal",
    "thousands",
    "booleans",
)
TIME_WORDS = ("iso8601", "epoch_s", "epoch_ms", "epoch_us", "epoch_ns")
LONGEST_SILENCE_S = 366 * 86_400.0

_PROBE = datetime(2024, 7, 25, 21, 43, 56, tzinfo=UTC)
_YEAR = re.compile(r"(?<!%)(?:%%)*%[YyGcx]")


def read_sources(sheet: Sheet, folder: Path, limits: FileLimits) -> tuple[ExportSource, ...]:
    """Every ``[[exports]]`` table, checked; faults are noted in the sheet. All share the limits."""
    tables = sheet.data.get("exports")
    if tables is None or tables == []:
        sheet.wrong(("exports",), "no exports are named", "add a table [[exports]] with its files")
        return ()
    if not isinstance(tables, list) or not all(isinstance(each, Mapping) for each in tables):
        sheet.wrong(("exports",), "exports is not a list of tables", "write it as [[exports]]")
        return ()
    sections = [sheet.section(("exports", at), table, KEYS) for at, table in enumerate(tables)]
    sources = [_source(section, folder, limits) for section in sections]
    for what in ("name", "files"):
        _note_repeated(sections, [getattr(source, what) for source in sources], what)
    return tuple(sources)


def _note_repeated(sections: Sequence[Section], values: Sequence[str], what: str) -> None:
    for at, value in enumerate(values):
        if value and value in values[:at]:
            problem = f"{what} '{value}' is already that of an earlier [[exports]]"
            sections[at].wrong(what, problem, f"give each [[exports]] {what} of its own")


def _source(section: Section, folder: Path, limits: FileLimits) -> ExportSource:
    layout = section.word("layout", ("wide", "narrow"), "wide")
    kind = section.word("format", ("csv", "parquet"), "csv")
    marks = read_marks(section, kind)
    time = section.text("time", "timestamp")
    tag, value = section.text("tag", "tag"), section.text("value", "value")
    quality = section.text("quality", "", blank=True) or None
    if layout == "narrow":
        _note_shared_column(section, {"time": time, "tag": tag, "value": value, "quality": quality})
    return ExportSource(
        name=section.text("name"),
        files=_files(section),
        folder=str(folder),
        format=kind,
        layout=layout,
        time=time,
        time_format=_time_format(section),
        timezone=_timezone(section),
        tag=tag,
        value=value,
        quality=quality if layout == "narrow" else None,
        quality_scheme=section.word("quality_scheme", ("words", "opc_da", "opc_ua"), "words"),
        good=section.texts("good", ("Good",)),
        uncertain_is_good=section.word("uncertain", ("bad", "good"), "bad") == "good",
        reading=_reading(section),
        revision=_revision(section),
        delimiter=marks.delimiter,
        decimal=marks.decimal,
        thousands=marks.thousands,
        true_words=marks.true_words,
        false_words=marks.false_words,
        limits=limits,
    )


def _note_shared_column(section: Section, columns: dict[str, str | None]) -> None:
    seen: dict[str, str] = {}
    for key, column in columns.items():
        if column is None:
            continue
        if column in seen:
            problem = f"{key} and {seen[column]} are both column '{column}'"
            section.wrong(key, problem, "name the column of each")
        seen.setdefault(column, key)


def _files(section: Section) -> str:
    files = section.text("files")
    scheme, mark, rest = files.partition("://")
    if mark and not (re.fullmatch(r"[A-Za-z][A-Za-z0-9+.:-]*", scheme) and rest):
        section.wrong("files", f"{shown(files)} is not a URL", "scheme://place/path, or a path")
    return files


def _time_format(section: Section) -> str:
    text = section.text("time_format", "iso8601")
    if text in TIME_WORDS:
        return text
    if "%" not in text:
        remedy = meant(text, TIME_WORDS) + ", or a pattern such as %Y-%m-%d %H:%M:%S"
        section.wrong("time_format", f"'{text}' is not a time format", remedy)
    elif problem := _pattern_problem(text):
        remedy = "a strptime pattern with year to hour, such as %d.%m.%Y %H:%M:%S"
        section.wrong("time_format", f"pattern '{text}' {problem}", remedy)
    else:
        return text
    return "iso8601"


def _pattern_problem(pattern: str) -> str | None:
    """Why a strptime pattern cannot tell when a sample was taken; None if it can."""
    if not _YEAR.search(pattern):
        return "names no year"
    try:
        read = datetime.strptime(_PROBE.strftime(pattern), pattern).replace(tzinfo=UTC)
    except (ValueError, re.error) as failure:
        return f"cannot be used: {failure}"
    if read.replace(minute=0, second=0) != _PROBE.replace(minute=0, second=0):
        return "does not give date and hour of a stamp"
    return None


def _timezone(section: Section) -> str:
    name = section.text("timezone", "UTC")
    if zone_named(name) is None:
        section.wrong("timezone", f"'{name}' is not a time zone", zone_meant(name))
        return "UTC"
    return name


def _reading(section: Section) -> Reading:
    default = Reading()
    words = [str(word) for word in Between]
    silence = section.section("silence_s", [str(role) for role in Role])
    silence_us = {
        role: round(silence.number(role, usual / SECOND_US, LONGEST_SILENCE_S) * SECOND_US)
        for role, usual in default.silence_us.items()
    }
    return Reading(
        pv_between=Between(section.word("pv_between", words, default.pv_between)),
        output_between=Between(section.word("output_between", words, default.output_between)),
        silence_us=silence_us,
    )


def _revision(section: Section) -> str:
    text = section.text("revision", "", blank=True)
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            groups = re.compile(text).groups
    except (re.error, OverflowError, RecursionError) as failure:
        problem = f"{shown(text)} is not a regular expression: {failure}"
        section.wrong("revision", problem, r"for example '_r(\d+)\.' finds the 2 of day_r2.csv")
        return ""
    if groups > 1:
        problem = f"{shown(text)} has {groups} groups"
        section.wrong("revision", problem, "leave at most one (group); (?:...) does not count")
    return text
