"""Export files that are bombs, cut short, padded, mutated: refused or read, in little memory.

What a file unpacks to is held against the standard library's own decompressors.
"""

from __future__ import annotations

import bz2
import gzip
import lzma
import random
import struct
import tracemalloc
import zlib
from collections.abc import Callable, Iterator
from hashlib import sha256
from pathlib import Path
from typing import Any

import pytest
import zstandard
from export_files import PACKED
from stored_files import ENDINGS, MIB, content, frames_of, put, refusal, some_text

from audit.errors import ExportRefused
from audit.exports.files import opened
from audit.records import ExportFile, ExportSource, FileLimits


@pytest.mark.parametrize("ending", PACKED)
@pytest.mark.parametrize("at_once", [1, 7, 4096, MIB])
def test_the_content_in_pieces_of_any_size(tmp_path: Path, ending: str, at_once: int) -> None:
    text = some_text(3000 if at_once == 1 else 40_000)
    stored = PACKED[ending](text)
    file, source = put(tmp_path, f"a.csv{ending}", stored)
    assert content(file, source, at_once) == (text, sha256(stored).hexdigest())


@pytest.mark.parametrize("ending", PACKED)
def test_content_of_many_pieces(tmp_path: Path, ending: str) -> None:
    text = some_text(2 * MIB + 17)
    stored = PACKED[ending](text)
    file, source = put(tmp_path, f"a.csv{ending}", stored)
    for at_once in (MIB, MIB + 1, len(text), 8 * MIB):
        assert content(file, source, at_once) == (text, sha256(stored).hexdigest())
    with opened(file, source) as stream:
        stream.read(1000)
        with pytest.raises(ValueError, match="not read to its end"):
            _ = stream.content_hash
        assert stream.finish() == sha256(stored).hexdigest() == stream.content_hash


@pytest.mark.parametrize("ending", ENDINGS)
def test_members_one_after_the_other(tmp_path: Path, ending: str) -> None:
    parts = [some_text(size, seed=size) for size in (1, 70_000, 3, 300_000)]
    stored = frames_of(ending, *parts, b"", b"end")
    file, source = put(tmp_path, f"a.csv{ending}", stored)
    assert content(file, source)[0] == b"".join(parts) + b"end"


def test_padding_that_the_formats_allow(tmp_path: Path) -> None:
    """xz file format 1.1.0, 2.2 (stream padding); of .gz, as the gzip program takes it; RFC 8878,
    3.1.2 (skippable frames)."""
    skipped = struct.pack("<II", 0x184D2A50, 5) + b"12345"
    for name, stored in {
        "a.gz": gzip.compress(b"ab") + bytes(700) + gzip.compress(b"c") + bytes(300_000),
        "a.xz": lzma.compress(b"ab") + bytes(8) + lzma.compress(b"c") + bytes(300_000),
        "a.zst": skipped + frames_of(".zst", b"ab") + skipped + frames_of(".zst", b"c") + skipped,
    }.items():
        assert content(*put(tmp_path, name, stored))[0] == b"abc"


@pytest.mark.parametrize("ending", ENDINGS)
def test_what_is_cut_short_anywhere_is_refused(tmp_path: Path, ending: str) -> None:
    first, last = (frames_of(ending, some_text(5000, seed)) for seed in (1, 2))
    whole = first + last
    ends = {len(first), len(whole)}
    cuts = {*range(1, 24), *range(24, len(whole), 97), *range(len(first) - 4, len(first) + 24)}
    for cut in sorted({*cuts, *range(len(whole) - 24, len(whole))} - ends):
        error = refusal(*put(tmp_path, f"a.csv{ending}", whole[:cut]))
        assert f"cannot be decompressed as its ending {ending} says" in error.reason, cut


@pytest.mark.parametrize("ending", ENDINGS)
@pytest.mark.parametrize("rest", [b"x", b"\0\0\0x", b"trailing garbage " * 40_000])
def test_what_follows_the_end_and_is_no_member(tmp_path: Path, ending: str, rest: bytes) -> None:
    stored = frames_of(ending, b"timestamp,A\n") + rest
    assert "cannot be decompressed" in refusal(*put(tmp_path, f"a{ending}", stored)).reason


@pytest.mark.parametrize("ending", ENDINGS)
def test_an_ending_that_is_not_true(tmp_path: Path, ending: str) -> None:
    for other, pack in PACKED.items():
        if other != ending:
            error = refusal(*put(tmp_path, f"a.csv{ending}", pack(some_text(9000))))
            assert f"its ending {ending} says" in error.reason
    stored = lzma.compress(b"x", format=lzma.FORMAT_ALONE)  # the older .lzma has no checksum
    assert "ending .xz says" in refusal(*put(tmp_path, "b.xz", stored)).reason


@pytest.mark.parametrize("ending", PACKED)
def test_a_file_without_content_is_empty(tmp_path: Path, ending: str) -> None:
    assert refusal(*put(tmp_path, f"a.csv{ending}", PACKED[ending](b""))).reason.endswith("empty")
    assert refusal(*put(tmp_path, f"b.csv{ending}", b"")).reason == "the file is empty"


def packed_in_parts(ending: str, part: bytes, times: int) -> bytes:
    packers: dict[str, Callable[[], Any]] = {
        ".gz": lambda: zlib.compressobj(9, zlib.DEFLATED, 31),
        ".bz2": bz2.BZ2Compressor,
        ".xz": lambda: lzma.LZMACompressor(preset=0),
        ".zst": lambda: zstandard.ZstdCompressor().compressobj(),
    }
    packer = packers[ending]()
    return b"".join([*(packer.compress(part) for _ in range(times)), packer.flush()])


def given_out(file: ExportFile, source: ExportSource, at_once: int) -> int:
    with opened(file, source) as stream:
        return sum(len(part) for part in iter(lambda: stream.read(at_once), b""))


@pytest.mark.parametrize("ending", ENDINGS)
@pytest.mark.parametrize("at_once", [4096, 8 * MIB])
def test_an_archive_bomb_is_refused_in_little_memory(
    tmp_path: Path, ending: str, at_once: int
) -> None:
    stored = packed_in_parts(ending, bytes(MIB), 150)
    assert len(stored) < 160_000
    file, source = put(tmp_path, f"a.csv{ending}", stored)
    tracemalloc.start()
    try:
        with pytest.raises(ExportRefused, match="an archive bomb") as caught:
            given_out(file, source, at_once)
        peak = tracemalloc.get_traced_memory()[1]
    finally:
        tracemalloc.stop()
    assert "raise largest_ratio" in caught.value.remedy
    assert peak < 48 * MIB


def test_what_packs_well_is_no_bomb(tmp_path: Path) -> None:
    """Below 64 MB, and below the ratio, a file may repeat itself."""
    stored = packed_in_parts(".zst", bytes(MIB), 60)
    assert len(content(*put(tmp_path, "a.zst", stored))[0]) == 60 * MIB
    stored = some_text(160_000) + bytes(70 * MIB)
    got, _ = content(*put(tmp_path, "b.zst", frames_of(".zst", stored)))
    assert got == stored


def test_limits_of_size(tmp_path: Path) -> None:
    text = some_text(3 * MIB)
    for name, stored, limits, says, raises in (
        ("a.csv", text, FileLimits(largest_file_bytes=3_000_000),
         "holds 3.15 MB, more than the 3 MB allowed", "largest_file_mb"),
        ("b.csv", text, FileLimits(largest_unpacked_bytes=2_000_000), "more than the 2 MB allowed",
         "largest_unpacked_mb"),
        ("a.csv.gz", gzip.compress(text), FileLimits(largest_unpacked_bytes=2_000_000),
         "unpacks to more than the 2 MB allowed", "largest_unpacked_mb"),
        ("b.csv.gz", gzip.compress(text), FileLimits(largest_file_bytes=300_000),
         "more than the 0.3 MB", "largest_file_mb"),
    ):  # fmt: skip
        error = refusal(*put(tmp_path, name, stored, limits=limits))
        assert says in error.reason
        assert f"raise {raises} under [intake]" in error.remedy
    exact = FileLimits(largest_file_bytes=len(text), largest_unpacked_bytes=len(text))
    assert content(*put(tmp_path, "c.csv", text, limits=exact))[0] == text


def test_an_xz_that_asks_for_a_window_of_a_gigabyte(tmp_path: Path) -> None:
    filters = [{"id": lzma.FILTER_LZMA2, "preset": 0, "dict_size": 1 << 20}]
    stored = bytearray(lzma.compress(b"timestamp,A\n", filters=filters))
    # xz file format 1.1.0, 3.1: the block header; 5.3.1: the LZMA2 dictionary size, 36 is 1 GiB
    at = stored.index(b"\x21\x01", 12) + 2
    stored[at] = 36
    header = 4 * (stored[12] + 1)
    crc = zlib.crc32(stored[12 : 12 + header - 4])
    stored[12 + header - 4 : 12 + header] = struct.pack("<I", crc)
    assert lzma.decompress(bytes(stored)) == b"timestamp,A\n"
    assert "Memory usage limit" in refusal(*put(tmp_path, "a.csv.xz", bytes(stored))).reason


def mutations(whole: bytes, count: int, seed: int) -> Iterator[bytes]:
    """Octets changed, taken out, put in, doubled or cut off, a few at a time."""
    drawn = random.Random(seed)
    for _ in range(count):
        octets = bytearray(whole)
        for _ in range(drawn.randint(1, 4)):
            at = drawn.randrange(len(octets) + 1)
            some = drawn.randbytes(drawn.randint(1, 9))
            match drawn.randrange(5):
                case 0:
                    octets[at : at + len(some)] = some
                case 1:
                    del octets[at : at + drawn.randint(1, 99)]
                case 2:
                    octets[at:at] = some
                case 3:
                    octets[at:at] = octets[max(0, at - 200) : at]
                case _:
                    del octets[max(at, 1) :]
        yield bytes(octets)


DECOMPRESSED: dict[str, Callable[[bytes], bytes]] = {
    ".gz": gzip.decompress,
    ".bz2": bz2.decompress,
    ".xz": lzma.decompress,
}


@pytest.mark.parametrize("ending", PACKED)
def test_mutated_files_are_refused_or_read(tmp_path: Path, ending: str) -> None:
    """What is read is also what the standard library makes of it."""
    whole = frames_of(ending, some_text(3000), some_text(2000, 2))
    outcomes = {"read": 0, "refused": 0}
    for stored in mutations(whole, 250, seed=len(ending)):
        file, source = put(tmp_path, f"a.csv{ending}", stored)
        try:
            got, content_hash = content(file, source)
        except ExportRefused:
            outcomes["refused"] += 1
            continue
        outcomes["read"] += 1
        assert content_hash == sha256(stored).hexdigest()
        assert got == DECOMPRESSED.get(ending, lambda _, got=got: got)(stored)
    assert outcomes["refused" if ending else "read"] > 200
