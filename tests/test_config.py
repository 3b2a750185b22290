"""site.toml: every setting, every fault with its line, and the cut-offs of the nights."""

from __future__ import annotations

from datetime import UTC, date, datetime, time, timedelta
from itertools import pairwise
from pathlib import Path
from zoneinfo import ZoneInfo

import pytest
from hypothesis import given
from hypothesis import strategies as st

from audit.config import STORE_VARIABLE, Config, examine, load
from audit.errors import Fault, FilesWrong
from audit.records import (
    SECOND_US,
    Between,
    FileLimits,
    IntakeRule,
    Reading,
    Role,
    StandingRule,
    Windows,
)
from audit.sitefiles.localtime import instant
from audit.sitefiles.settings import Lines

BARE = """\
[site]
name = "Gannet Works"
timezone = "Europe/Oslo"

[[exports]]
name = "dcs"
files = "exports/*.csv"
"""


def write(folder: Path, text: str | bytes) -> Path:
    path = folder / "site.toml"
    path.write_bytes(text.encode() if isinstance(text, str) else text)
    return path


def faults_of(folder: Path, text: str | bytes, env: dict[str, str] | None = None) -> list[Fault]:
    with pytest.raises(FilesWrong) as caught:
        load(write(folder, text), env or {})
    return list(caught.value.faults)


def test_defaults_are_those_of_the_contract(tmp_path: Path) -> None:
    config = load(write(tmp_path, BARE), {})
    assert config.folder == tmp_path
    assert config.timezone == ZoneInfo("Europe/Oslo")
    assert config.store_url == f"sqlite:///{tmp_path}/site.db"
    assert (config.loops_path, config.specs_path) == (
        tmp_path / "loops.csv",
        tmp_path / "specs.csv",
    )
    assert config.windows == Windows(120 * SECOND_US, 3600 * SECOND_US, 60 * SECOND_US)
    assert config.standing == StandingRule(10, 30, None)
    assert config.nightly_at == time(2, 15)
    assert config.intake == IntakeRule(None, "", FileLimits())
    assert config.intake.limits == FileLimits(
        20_000_000_000, 200_000_000_000, 1000, 100_000, 8_192_000, 200, 10_000
    )
    (source,) = config.exports
    assert source.limits == FileLimits()
    assert (source.thousands, source.true_words, source.false_words) == ("", ("true",), ("false",))
    assert (source.format, source.layout, source.time, source.time_format) == (
        "csv",
        "wide",
        "timestamp",
        "iso8601",
    )
    assert (source.timezone, source.quality, source.good) == ("UTC", None, ("Good",))
    assert source.reading == Reading(
        Between.LINEAR,
        Between.HOLD,
        {
            Role.PV: 900 * SECOND_US,
            Role.OUTPUT: 900 * SECOND_US,
            Role.SP: 90_000 * SECOND_US,
            Role.MODE: 90_000 * SECOND_US,
        },
    )


def test_every_setting_arrives(tmp_path: Path) -> None:
    text = r"""
exports = [
  { name = "a", files = "s3://bucket/*.parquet", format = "parquet", layout = "narrow",
    time = "t", time_format = "epoch_ns", tag = "n", value = "v", quality = "q",
    quality_scheme = "opc_ua", uncertain = "good", pv_between = "hold",
    output_between = "linear", silence_s = { pv = 0.5 }, revision = 'r(\d+)' },
  { name = "b", files = "b/*.csv", time_format = "%d.%m.%Y %H:%M", timezone = "America/New_York",
    good = ["OK", ""], delimiter = ";", decimal = ",", thousands = "\u00a0",
    booleans = { true = ["on", " open "], false = ["off"] } },
]
[intake]
cores = 3
scratch = "run/scratch"
largest_file_mb = 5
largest_unpacked_mb = 70
largest_ratio = 40
most_columns = 12
longest_row_kb = 9
longest_text = 30
most_texts = 4
[site]
name = " Gannet Works "
timezone = "UTC"
[store]
url = "sqlite:////srv/kept.db"
[register]
loops = "r/l.csv"
specs = "/r/s.csv"
[windows]
before_s = 0.25
after_s = 600
join_s = 5
[standing]
steps = 6
days = 14
error_u_eu = 0.4
[nightly]
at = "23:59"
"""
    config = load(write(tmp_path, text.replace("\n    ", " ").replace("\n  ", " ")), {})
    assert config.name == "Gannet Works"
    assert config.store_url == "sqlite:////srv/kept.db"
    assert (config.loops_path, config.specs_path) == (tmp_path / "r/l.csv", Path("/r/s.csv"))
    assert config.windows == Windows(250_000, 600 * SECOND_US, 5 * SECOND_US)
    assert config.standing == StandingRule(6, 14, 0.4)
    assert config.nightly_at == time(23, 59)
    first, second = config.exports
    assert (first.quality, first.quality_scheme, first.uncertain_is_good) == ("q", "opc_ua", True)
    assert first.reading.pv_between is Between.HOLD
    assert first.reading.output_between is Between.LINEAR
    assert first.reading.silence_us[Role.PV] == 500_000
    assert first.reading.silence_us[Role.SP] == 90_000 * SECOND_US
    assert (first.time_format, first.revision) == ("epoch_ns", r"r(\d+)")
    assert (second.time_format, second.timezone) == ("%d.%m.%Y %H:%M", "America/New_York")
    assert (second.good, second.delimiter, second.decimal) == (("OK", ""), ";", ",")
    assert second.thousands == "\u00a0"
    assert (second.true_words, second.false_words) == (("on", "open"), ("off",))
    limits = FileLimits(5_000_000, 70_000_000, 40, 12, 9_000, 30, 4)
    assert config.intake == IntakeRule(3, f"{tmp_path}/run/scratch", limits)
    assert first.limits == second.limits == limits


SITE = '[site]\nname = "x"\ntimezone = "UTC"\n'
EXPORT = '[[exports]]\nname = "dcs"\nfiles = "x"\n'


def within(table: str, line: str) -> str:
    """A valid file with one more line, which stands on line 8, in the given table."""
    if table == "exports":
        return f"{SITE}\n{EXPORT}{line}\n"
    return f"{EXPORT}{SITE}[{table}]\n{line}\n"


WRONG: list[tuple[str, int | None, str | None, str]] = [
    # text, line, column, words of the message in their order
    ('[site]\ntimezone = "UTC"\n' + EXPORT, 1, "site.name", "missing|below [site]"),
    ('[site]\nname = "x"\n' + EXPORT, 1, "site.timezone", "missing|timezone ="),
    (SITE.replace('"x"', '" "') + EXPORT, 2, "site.name", "'name' is empty"),
    (SITE.replace('"x"', "7") + EXPORT, 2, "site.name", "7 is not a text|in quotes"),
    (SITE.replace("UTC", "Oslo") + EXPORT, 3, "site.timezone", "'Oslo'|did you mean 'Europe/Oslo'"),
    (SITE.replace("UTC", "europe/oslo") + EXPORT, 3, "site.timezone", "mean 'Europe/Oslo'"),
    (SITE.replace("UTC", "../etc/passwd") + EXPORT, 3, "site.timezone", "IANA name"),
    (SITE.replace("UTC", "CEST+2") + EXPORT, 3, "site.timezone", "not a time zone|IANA"),
    (SITE + 'nmae = "x"\n' + EXPORT, 4, "site.nmae", "unknown setting 'nmae'|did you mean 'name'"),
    ("join_s = 3\n" + SITE + EXPORT, 1, "join_s", "unknown|it belongs below [windows]"),
    (SITE + EXPORT + "[windosw]\n", 7, "windosw", "unknown setting|did you mean [windows]"),
    (SITE + EXPORT + "[zebra]\n", 7, "zebra", "unknown setting|known tables: site, store"),
    ("windows = 5\n" + SITE + EXPORT, 1, "windows", "5 is not a table|[windows]"),
    (SITE, None, "exports", "no exports|[[exports]]"),
    ("exports = []\n" + SITE, 1, "exports", "no exports|[[exports]]"),
    (SITE + EXPORT.replace("[[exports]]", "[exports]"), 4, "exports", "not a list|[[exports]]"),
    ("exports = [1]\n" + SITE, 1, "exports", "not a list of tables"),
    (SITE + '[[exports]]\nfiles = "x"\n', 4, "exports.name", "missing|below [[exports]]"),
    (SITE + '[[exports]]\nname = "x"\n', 4, "exports.files", "missing"),
    (SITE + EXPORT + EXPORT.replace('"x"', '"y"'), 8, "exports.name", "'dcs' is already"),
    (SITE + EXPORT + EXPORT.replace("dcs", "b"), 9, "exports.files", "files 'x' is already"),
    (SITE + EXPORT.replace('"x"', '"://x"'), 6, "exports.files", "not a URL"),
    (within("exports", 'format = "xlsx"'), 8, "exports.format", "'xlsx'|allowed: csv, parquet"),
    (within("exports", 'layout = "Wide"'), 8, "exports.layout", "did you mean 'wide'"),
    (within("exports", 'time = ""'), 8, "exports.time", "empty|leave the line out"),
    (within("exports", 'time_format = "ISO 8601"'), 8, "exports.time_format", "mean 'iso8601'"),
    (within("exports", 'time_format = "%Q %Y"'), 8, "exports.time_format", "cannot be used"),
    (within("exports", 'time_format = "%H:%M"'), 8, "exports.time_format", "names no year"),
    (within("exports", 'time_format = "%Y-%m-%d"'), 8, "exports.time_format", "date and hour"),
    (within("exports", 'time_format = "%x %I:%M"'), 8, "exports.time_format", "date and hour"),
    (within("exports", 'timezone = "UCT+1"'), 8, "exports.timezone", "not a time zone"),
    (within("exports", 'layout="narrow"\nvalue = "tag"'), 9, "exports.value", "value and tag are"),
    (within("exports", 'quality_scheme = "opcua"'), 8, "exports.quality_scheme", "mean 'opc_ua'"),
    (within("exports", "good = []"), 8, "exports.good", "not a list of texts"),
    (within("exports", "good = [192]"), 8, "exports.good", "[192] is not a list of texts"),
    (within("exports", 'good = "Good"'), 8, "exports.good", "'Good' is not a list of texts"),
    (within("exports", 'uncertain = "maybe"'), 8, "exports.uncertain", "allowed: bad, good"),
    (within("exports", 'pv_between = "liner"'), 8, "exports.pv_between", "mean 'linear'"),
    (within("exports", 'output_between = "x"'), 8, "exports.output_between", "linear, hold"),
    (within("exports", "silence_s = 900"), 8, "exports.silence_s", "900 is not a table"),
    (within("exports", "silence_s = { ouput = 9 }"), 8, "exports.silence_s.ouput", "mean 'output'"),
    (within("exports", "silence_s = { pv = 0 }"), 8, "exports.silence_s.pv", "over 0"),
    (within("exports", "[exports.silence_s]\nsp = -1"), 9, "exports.silence_s.sp", "-1 is out"),
    (within("exports", "revision = '('"), 8, "exports.revision", "not a regular expression"),
    (within("exports", "revision = '(a)(b)'"), 8, "exports.revision", "2 groups|at most one"),
    (within("exports", 'delimiter = ";;"'), 8, "exports.delimiter", "cannot part cells"),
    (within("exports", 'delimiter = ""'), 8, "exports.delimiter", "cannot part cells"),
    (within("exports", 'delimiter = "\\""'), 8, "exports.delimiter", "cannot part cells"),
    (within("exports", 'decimal = ","'), 8, "exports.decimal", "both delimiter and decimal"),
    (within("exports", 'decimal = "x"'), 8, "exports.decimal", "allowed: ., ,"),
    (within("exports", 'thousands = ".."'), 8, "exports.thousands", "'..' cannot part thousands"),
    (within("exports", 'thousands = "0"'), 8, "exports.thousands", "'0' cannot part thousands"),
    (within("exports", 'thousands = "-"'), 8, "exports.thousands", "'-' cannot part thousands"),
    (within("exports", 'thousands = "\\t"'), 8, "exports.thousands", "cannot part thousands"),
    (within("exports", 'thousands = "."'), 8, "exports.thousands", 'both thousands|may be ","'),
    (within("exports", "thousands = 1"), 8, "exports.thousands", "1 is not a text"),
    (
        within("exports", 'delimiter=";"\ndecimal=","\nthousands=","'),
        10,
        "exports.thousands",
        'both thousands|may be "."',
    ),
    (within("exports", "booleans = true"), 8, "exports.booleans", "true is not a table"),
    (within("exports", "booleans = { yes = [] }"), 8, "exports.booleans.yes", "unknown setting"),
    (within("exports", "booleans = { true = [] }"), 8, "exports.booleans.true", "list of texts"),
    (within("exports", "booleans = { true = [true] }"), 8, "exports.booleans.true", "[True] is"),
    (
        within("exports", '[exports.booleans]\nfalse = ["off", "TRUE"]'),
        9,
        "exports.booleans.false",
        "'TRUE' is also among the words for true|keep one",
    ),
    (
        within("exports", 'booleans = { false = ["0"] }'),
        8,
        "exports.booleans.false",
        "'0' is read as a number|leave it out",
    ),
    (
        within("exports", 'booleans = { false = [" "] }'),
        8,
        "exports.booleans.false",
        "cell without a value|leave it out",
    ),
    (within("exports", 'qality = "q"'), 8, "exports.qality", "mean 'quality'"),
    (
        within("store", 'url = "mysql://me:secret@h/d"'),
        8,
        "store.url",
        "'mysql'|postgresql+psycopg",
    ),
    (within("store", 'url = "postgresql://h/d"'), 8, "store.url", "'postgresql' is no store"),
    (within("store", 'url = "postgresql+psycopg://h"'), 8, "store.url", "names no database"),
    (within("store", 'url = "postgresql+psycopg://h:x/d"'), 8, "store.url", "host or port"),
    (within("store", 'url = "site.db"'), 8, "store.url", "not a URL|sqlite:///FILE"),
    (within("store", 'url = "sqlite://site.db"'), 8, "store.url", "three slashes"),
    (within("store", 'url = "sqlite:///"'), 8, "store.url", "names no file"),
    (within("store", 'url = "sqlite:///:memory:"'), 8, "store.url", "names no file"),
    (within("store", 'url = "sqlite:///a.db?mode=ro"'), 8, "store.url", "takes no options"),
    (within("register", 'loops = ""'), 8, "register.loops", "'loops' is empty"),
    (within("intake", "cores = -1"), 8, "intake.cores", "-1 is not a whole number from 1"),
    (within("intake", "cores = false"), 8, "intake.cores", "false is not a whole number"),
    (within("intake", 'cores = "all"'), 8, "intake.cores", "'all' is not a whole number"),
    (within("intake", "cores = 0.0"), 8, "intake.cores", "0.0 is not a whole number"),
    (within("intake", "scratch = 7"), 8, "intake.scratch", "7 is not a text"),
    (within("intake", "largest_file_mb = 0"), 8, "intake.largest_file_mb", "whole number from 1"),
    (within("intake", "largest_unpacked_mb = 1e3"), 8, "intake.largest_unpacked_mb", "1000.0 is"),
    (within("intake", "largest_ratio = 0"), 8, "intake.largest_ratio", "whole number from 1"),
    (within("intake", "most_columns = -4"), 8, "intake.most_columns", "whole number from 1"),
    (within("intake", "longest_row_kb = 9999999"), 8, "intake.longest_row_kb", "1 to 1000000"),
    (within("intake", "longest_text = true"), 8, "intake.longest_text", "true is not a whole"),
    (within("intake", 'most_texts = "9"'), 8, "intake.most_texts", "'9' is not a whole number"),
    (within("intake", "core = 2"), 8, "intake.core", "unknown setting|mean 'cores'"),
    ("cores = 2\n" + SITE + EXPORT, 1, "cores", "unknown|it belongs below [intake]"),
    (within("windows", "before_s = 0"), 8, "windows.before_s", "0 is out of range|over 0"),
    (within("windows", "after_s = -5.5"), 8, "windows.after_s", "-5.5 is out of range"),
    (within("windows", "after_s = 1e9"), 8, "windows.after_s", "out of range|at most"),
    (within("windows", "join_s = inf"), 8, "windows.join_s", "inf is not a finite number"),
    (within("windows", "join_s = nan"), 8, "windows.join_s", "nan is not a finite number"),
    (within("windows", "join_s = true"), 8, "windows.join_s", "true is not a number"),
    (
        within("windows", 'join_s = "60"'),
        8,
        "windows.join_s",
        "'60' is not a number|without quotes",
    ),
    (within("windows", 'join_s = "1,5"'), 8, "windows.join_s", "decimal comma"),
    (within("windows", "join_s = 1,5"), 8, "11", "is not TOML|decimal comma"),
    (within("standing", "steps = 0"), 8, "standing.steps", "0 is not a whole number from 1"),
    (within("standing", "days = 7.5"), 8, "standing.days", "7.5 is not a whole number"),
    (within("standing", "error_u_eu = 0"), 8, "standing.error_u_eu", "out of range|over 0"),
    (within("standing", 'error_u_eu = "a"'), 8, "standing.error_u_eu", "'a' is not a number"),
    (within("nightly", 'at = "2:15"'), 8, "nightly.at", "'2:15' is not a time of day|02:15"),
    (within("nightly", 'at = "24:00"'), 8, "nightly.at", "'24:00' is not a time of day"),
    (within("nightly", "at = 02:15:00"), 8, "nightly.at", "not a text|in quotes"),
    (within("nightly", "at = 02:15"), 8, "7", "is not TOML|quotes"),
    (SITE + SITE + EXPORT, 4, "6", "is not TOML"),
    (SITE + EXPORT + '[store]\nurl = "', 8, None, "is not TOML"),
]


@pytest.mark.parametrize(("text", "line", "column", "words"), WRONG)
def test_each_fault(
    tmp_path: Path, text: str, line: int | None, column: str | None, words: str
) -> None:
    (fault,) = faults_of(tmp_path, text)
    assert fault.file == "site.toml"
    assert fault.line == line
    if column is not None:
        assert fault.column == column
    message = str(fault)
    at = -1
    for word in words.split("|"):
        at = message.find(word, at + 1)
        assert at >= 0, f"{word!r} is not, in order, in {message!r}"
    assert "secret" not in message


def test_bytes_that_are_no_text(tmp_path: Path) -> None:
    bad = BARE.replace("Gannet", "Måke").encode("latin-1")
    (fault,) = faults_of(tmp_path, bad)
    assert (fault.line, "0xE5 is not UTF-8" in fault.problem) == (2, True)
    (fault,) = faults_of(tmp_path, BARE.encode("utf-16"))
    assert "UTF-16" in fault.problem
    (fault,) = faults_of(tmp_path, BARE.replace("csv", "c\0sv"))
    assert (fault.line, "NUL" in fault.problem) == (7, True)


def test_many_faults_come_in_one_message_in_the_order_of_the_file(tmp_path: Path) -> None:
    text = BARE + 'formt = "csv"\ndelimiter = ""\n[windows]\nafter_s = 0\n[nightly]\nat = "x"\n'
    found = faults_of(tmp_path, text.replace("Oslo", "Olso"))
    assert [fault.line for fault in found] == [3, 8, 9, 11, 13]


def test_a_setting_that_has_no_use_in_the_layout_is_no_fault(tmp_path: Path) -> None:
    """Contract: tag, value and quality may stand in a wide export; they say nothing there."""
    text = within("exports", 'tag = "tag"\nvalue = "value"\nquality = "quality"')
    (source,) = load(write(tmp_path, text), {}).exports
    assert source.quality is None
    text = within("exports", 'format = "parquet"\ndecimal = ","')
    assert load(write(tmp_path, text), {}).exports[0].format == "parquet"


def test_all_cores_are_meant_by_nought_as_by_nothing(tmp_path: Path) -> None:
    config = load(write(tmp_path, BARE + '[intake]\ncores = 0\nscratch = ""\n'), {})
    assert config.intake == IntakeRule()
    text = BARE + '[intake]\nscratch = "/fast/disk"\n'
    assert load(write(tmp_path, text), {}).intake.scratch == "/fast/disk"


@pytest.mark.parametrize("mark", [",", " ", "'", "\u00a0", "\u202f", "’", "_"])
def test_marks_of_thousands_that_are_in_use(tmp_path: Path, mark: str) -> None:
    """SI Brochure 5.4.4 has a space; the others are usual in one country or another, no source."""
    (source,) = load(write(tmp_path, BARE + f'thousands = "{mark}"\n'), {}).exports
    assert source.thousands == mark


def test_the_environment_names_the_store(tmp_path: Path) -> None:
    path = write(tmp_path, BARE)
    postgres = "postgresql+psycopg://me@/loops?host=/run/sockets"
    assert load(path, {STORE_VARIABLE: postgres}).store_url == postgres
    assert load(path, {STORE_VARIABLE: "sqlite:///b.db"}).store_url == f"sqlite:///{tmp_path}/b.db"
    assert load(path, {STORE_VARIABLE: " "}).store_url == f"sqlite:///{tmp_path}/site.db"
    (fault,) = faults_of(tmp_path, BARE, {STORE_VARIABLE: "oracle://me:secret@h/d"})
    assert STORE_VARIABLE in str(fault)
    assert "secret" not in str(fault)
    assert "secret" not in repr(load(path, {STORE_VARIABLE: "postgresql+psycopg://a:secret@h/d"}))


def test_the_settings_hash_follows_content_only(tmp_path: Path) -> None:
    def hashed(text: str | bytes) -> str:
        return load(write(tmp_path, text), {}).settings_hash

    plain = hashed(BARE)
    assert len(plain) == 64
    assert hashed(BARE.replace("\n", "\r\n")) == plain
    assert hashed(b"\xef\xbb\xbf" + BARE.encode()) == plain
    assert hashed(BARE + '[store]\nurl = "sqlite:///elsewhere.db"\n') == plain
    assert hashed(BARE + "# a remark\n") == plain
    assert hashed(BARE + '[intake]\ncores = 3\nscratch = "there"\n') == plain
    assert hashed(BARE + "[intake]\nmost_columns = 3\n") != plain
    assert hashed(BARE.replace("Gannet", "Tern")) != plain
    assert hashed(BARE + "[windows]\nafter_s = 3601\n") != plain


def test_a_faulty_file_still_gives_what_the_register_needs(tmp_path: Path) -> None:
    text = BARE + '[register]\nloops = "l.csv"\n[windows]\nafter_s = 60\njoin_s = 0\n'
    found = examine(write(tmp_path, text), {})
    assert found.config is None
    assert found.loops_path == tmp_path / "l.csv"
    assert found.timezone.key == "Europe/Oslo"
    assert found.windows == Windows(120 * SECOND_US, 60 * SECOND_US, 60 * SECOND_US)


def test_lines_are_found_past_long_texts_lists_and_comments() -> None:
    text = '''\
# [a] b = 1
[a]
long = """
[b]
c = 1 """
"quoted key" = 'x # [' # "
list = [ # [
  "]", [1, 2],
  { d = 1 },
]
x.y = 1
[[t]]
k = 1
[t.sub]
k = 1
[[t]]
k = { inner = "{" }
'''
    lines = Lines(text)
    assert lines.of("a") == 2
    assert lines.of("a", "long") == 3
    assert lines.of("a", "quoted key") == 6
    assert lines.of("a", "list") == 7
    assert lines.of("a", "x", "y") == 11
    assert lines.of("t", 0, "k") == 13
    assert lines.of("t", 0, "sub", "k") == 15
    assert lines.of("t", 1, "k", "inner") == 17
    assert lines.of("t", 1, "missing") == 16
    assert lines.of("b") is None


@given(st.lists(st.sampled_from(list("[]{}\"'#=.\\ \nab\t")), max_size=60).map("".join))
def test_finding_lines_never_fails_on_any_text(text: str) -> None:
    line = Lines(text).of("a")
    assert line is None or 1 <= line <= text.count("\n") + 1


# --- nights ---------------------------------------------------------------------------------


def site(tmp_path: Path, zone: str, at: str = "02:15") -> Config:
    text = BARE.replace("Europe/Oslo", zone) + f'[nightly]\nat = "{at}"\n'
    return load(write(tmp_path, text), {})


def test_local_times_of_the_clock_changes_against_check_values_a17(tmp_path: Path) -> None:
    """IANA time zone data (RFC 3339, PEP 495), Europe/Paris in 2024.

    27 October 02:30 comes twice, first at 00:30Z; that local day is 25 h long; 31 March 02:30 does
    not exist, the round trip gives 03:30+02:00.
    """
    paris = ZoneInfo("Europe/Paris")
    twice = datetime.fromisoformat("2024-10-27T02:30")
    hole = datetime.fromisoformat("2024-03-31T02:30")
    assert instant(twice, paris) == datetime(2024, 10, 27, 0, 30, tzinfo=UTC)
    assert instant(hole, paris).astimezone(paris).isoformat() == "2024-03-31T03:30:00+02:00"
    config = site(tmp_path, "Europe/Paris", "00:00")
    day = config.cutoff(date(2024, 10, 28)) - config.cutoff(date(2024, 10, 27))
    assert day == timedelta(hours=25)


CUTOFFS = [
    # IANA time zone data: 2024-03-31 02:00 +1 -> 03:00 +2, 2024-10-27 03:00 +2 -> 02:00 +1
    ("Europe/Oslo", "2024-03-30", "2024-03-30T01:15Z"),
    ("Europe/Oslo", "2024-03-31", "2024-03-31T01:15Z"),  # does not exist: 03:15+02:00
    ("Europe/Oslo", "2024-04-01", "2024-04-01T00:15Z"),
    ("Europe/Oslo", "2024-10-27", "2024-10-27T00:15Z"),  # twice: the first
    ("Europe/Oslo", "2024-10-28", "2024-10-28T01:15Z"),
    # 2024-03-10 02:00 -5 -> 03:00 -4, 2024-11-03 02:00 -4 -> 01:00 -5 (02:15 is after it)
    ("America/New_York", "2024-03-10", "2024-03-10T07:15Z"),
    ("America/New_York", "2024-03-11", "2024-03-11T06:15Z"),
    ("America/New_York", "2024-11-03", "2024-11-03T07:15Z"),
    # half an hour: 2024-10-06 02:00 +10:30 -> 02:30 +11, 2024-04-07 02:00 +11 -> 01:30 +10:30
    ("Australia/Lord_Howe", "2024-10-06", "2024-10-05T15:45Z"),  # 02:45+11:00
    ("Australia/Lord_Howe", "2024-10-07", "2024-10-06T15:15Z"),
    ("Australia/Lord_Howe", "2024-04-07", "2024-04-06T15:45Z"),
    ("UTC", "2024-03-31", "2024-03-31T02:15Z"),
]


@pytest.mark.parametrize(("zone", "night", "expected"), CUTOFFS)
def test_cutoff(tmp_path: Path, zone: str, night: str, expected: str) -> None:
    found = site(tmp_path, zone).cutoff(date.fromisoformat(night))
    assert found == datetime.fromisoformat(expected)
    assert found.utcoffset() == timedelta(0)


ZONES = ("Europe/Oslo", "America/New_York", "Australia/Lord_Howe", "UTC", "Asia/Kathmandu")


@pytest.mark.parametrize("zone", ZONES)
@pytest.mark.parametrize("at", ["00:00", "01:45", "02:15", "23:59"])
def test_night_after_is_the_first_cutoff_strictly_after(tmp_path: Path, zone: str, at: str) -> None:
    """Over a whole year: at each cut-off itself, a microsecond before, and between two."""
    config = site(tmp_path, zone, at)
    nights = [date(2024, 1, 1) + timedelta(days=n) for n in range(367)]
    tick = timedelta(microseconds=1)
    for night, following in pairwise(nights):
        cutoff = config.cutoff(night)
        assert cutoff < config.cutoff(following)
        assert config.night_after(cutoff - tick) == night
        assert config.night_after(cutoff) == following
        assert config.night_after(cutoff + timedelta(hours=20)) == following


def test_night_after_wants_an_instant_and_takes_any_offset(tmp_path: Path) -> None:
    config = site(tmp_path, "Europe/Oslo")
    stamp = datetime(2024, 7, 1, 20, 0, tzinfo=ZoneInfo("America/New_York"))
    assert config.night_after(stamp) == config.night_after(stamp.astimezone(UTC))
    with pytest.raises(ValueError, match="time zone"):
        config.night_after(stamp.replace(tzinfo=None))


def test_a_skipped_day_shares_its_cutoff_and_the_earlier_night_is_given(tmp_path: Path) -> None:
    """IANA time zone data: Pacific/Apia had no 30 December 2011 (-10 -> +14)."""
    config = site(tmp_path, "Pacific/Apia")
    shared = datetime(2011, 12, 30, 12, 15, tzinfo=UTC)
    assert config.cutoff(date(2011, 12, 30)) == config.cutoff(date(2011, 12, 31)) == shared
    assert config.night_after(shared - timedelta(seconds=1)) == date(2011, 12, 30)
    assert config.night_after(shared) == date(2012, 1, 1)
