"""The bytes of a file, unpacked where it is packed, within bounds that no file can make us leave.

Nothing is unpacked to disk, and no name inside an archive is used for anything but messages. What is read grows a
chunk at a time and is looked at while it grows: a line without end, a flood of zeros or a small file that unpacks to
gigabytes ends the reading, not the machine.
"""

from __future__ import annotations

import bz2
import gzip
import hashlib
import io
import lzma
import os
import stat
import struct
import zipfile
import zlib
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Any, BinaryIO

import pyarrow as pa

from .errors import Problems
from .schema import Kind

#: Largest file, packed or not, and largest text that is unpacked from one.
LARGEST_FILE = 1 << 30
#: Longest line, in bytes.
LONGEST_LINE = 1 << 20
#: A file that grows more than this many times when it is unpacked, once past the second, is a trap and no table.
LARGEST_GROWTH, UNSUSPECTED = 100, 64 << 20
#: An archive may list this many files, in a directory of so many bytes.
MOST_MEMBERS, LARGEST_DIRECTORY = 1000, 1 << 20
#: Memory that unpacking xz may ask for (its largest usual setting takes 65 MiB).
XZ_MEMORY = 128 << 20
_CHUNK = 1 << 20
#: Names of an archive that a message repeats.
_SHOWN_MEMBERS = 5

#: First bytes of what is packed text, and its name.
PACKED = {
    b"\x1f\x8b": "gzip",
    **{b"BZh%d1AY&SY" % level: "bzip2" for level in range(1, 10)},
    b"\xfd7zXZ\x00": "xz",
    b"\x28\xb5\x2f\xfd": "zstd",
    b"PK\x03\x04": "zip",
    b"PK\x05\x06": "zip",  # an empty one
}
PARQUET_START = b"PAR1"
#: First bytes of what we do not read, and its name.
BINARY_STARTS = (
    (b"\xd0\xcf\x11\xe0", "a spreadsheet workbook of the old kind"),
    (b"%PDF", "a PDF document"),
    (b"7z\xbc\xaf", "a 7z archive"),
    (b"Rar!", "a RAR archive"),
    (b"SQLite format", "a database"),
    (b"\x89HDF", "an HDF5 file"),
    (b"ARROW1", "an Arrow file"),
    (b"FEA1", "a Feather file"),
)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Source:
    """A file's contents, unpacked.

    Attributes
    ----------
    data : bytes or bytearray
    sha256 : str
        Of the file as it lies on disk, hexadecimal.
    packed : str or None
        ``gzip``, ``bzip2``, ``xz``, ``zstd`` or ``zip``.
    """

    file: str
    data: bytes | bytearray
    sha256: str
    packed: str | None = None

    @property
    def is_parquet(self) -> bool:
        """Whether it is a Parquet file by its first bytes."""
        return self.packed is None and self.data.startswith(PARQUET_START)


class Refused(Exception):
    """A file that is not read further: the code of a reason, and its facts."""

    def __init__(self, code: str, **facts: Any) -> None:
        self.code = code
        self.facts = facts
        super().__init__(code)


def read_source(path: Path, kind: Kind, problems: Problems) -> Source | None:
    """The contents of a regular file, or None with a problem noted.

    At most :data:`LARGEST_FILE` bytes are held of a file, and as many of what it unpacks to.
    """
    name = path.name or str(path)
    try:
        with _opened(path) as file:
            raw, sha256 = _whole(file)
        packed = next((kind_of for start, kind_of in PACKED.items() if raw.startswith(start)), None)
        if packed is None:
            _refuse_other_kinds(raw)
            return Source(file=name, data=raw, sha256=sha256)
        return Source(file=name, data=_unpacked(raw, packed), sha256=sha256, packed=packed)
    except Refused as refused:
        problems.add(refused.code, file=name, kind=kind, **refused.facts)
    except FileNotFoundError:
        problems.add("missing-file", file=name, kind=kind, path=path)
    except (OSError, ValueError) as error:
        reason = getattr(error, "strerror", None) or error
        problems.add("unreadable-file", file=name, kind=kind, reason=reason)
    return None


def _opened(path: Path) -> BinaryIO:
    """The file, open, if it is a regular one; a pipe that nobody writes to must not make us wait."""

    mode = path.stat().st_mode
    if stat.S_ISREG(mode):
        flags = os.O_RDONLY | getattr(os, "O_NONBLOCK", 0) | getattr(os, "O_BINARY", 0)
        file = os.fdopen(os.open(path, flags), "rb")
        # what was a file a moment ago may be something else now
        mode = os.fstat(file.fileno()).st_mode
        if stat.S_ISREG(mode):
            return file
        file.close()
    raise Refused("not-a-file", what="a folder" if stat.S_ISDIR(mode) else "a pipe, socket or device")


def _whole(file: BinaryIO) -> tuple[bytearray, str]:
    """All bytes of a file and their sha256; text is watched while it comes in."""
    if (size := os.fstat(file.fileno()).st_size) > LARGEST_FILE:
        raise _too_large(in_units(size))
    digest = hashlib.sha256()
    watch: Callable[[bytes], None] | None = None
    data = bytearray()
    while chunk := file.read(_CHUNK):
        if not data:
            packed = chunk.startswith((*PACKED, PARQUET_START))
            watch = None if packed else _Watch(chunk)
        if watch is not None:
            watch(chunk)
        digest.update(chunk)
        data += chunk
        if len(data) > LARGEST_FILE:  # it grew while it was read
            raise _too_large()
    return data, digest.hexdigest()


def _too_large(size: str | None = None, packed: str = "") -> Refused:
    limit = in_units(LARGEST_FILE)
    return Refused("file-too-large", size=size or f"more than {limit}", limit=limit, packed=packed)


class _Watch:
    """Looks at text as it comes in, a chunk at a time: no endless line, no zero bytes where none belong."""

    def __init__(self, first: bytes) -> None:
        head = first[:4096]
        # UTF-16 and UTF-32 hold zero bytes; what else does is no text
        self.zeros_belong = head.startswith((b"\xff\xfe", b"\xfe\xff", b"\0\0\xfe\xff")) or _alternating(head)
        self.line = 1
        self.length = 0

    def __call__(self, chunk: bytes) -> None:
        if not self.zeros_belong and b"\0" in chunk:
            raise Refused("binary-file", what="binary data")
        last = max(chunk.rfind(b"\n"), chunk.rfind(b"\r"))
        first = len(chunk) if last < 0 else min(at for at in (chunk.find(b"\n"), chunk.find(b"\r")) if at >= 0)
        # lines inside a chunk are shorter than it, and a chunk is no longer than a line may be
        if self.length + first > LONGEST_LINE:
            raise Refused("line-too-long", line=self.line, limit=LONGEST_LINE)
        self.length = self.length + len(chunk) if last < 0 else len(chunk) - last - 1
        self.line += max(chunk.count(b"\n"), chunk.count(b"\r"))


def _alternating(head: bytes) -> bool:
    """Whether zero bytes stand at every other place, as in UTF-16 text of plain letters and digits."""
    zeros = [head[0::2].count(0), head[1::2].count(0)]
    return min(zeros) == 0 and max(zeros) > len(head) // 4


def _unpacked(raw: bytearray, packed: str) -> bytearray:
    """What a packed file holds; text of one table, watched like a plain file and for its growth."""
    data = bytearray()
    watch: Callable[[bytes], None] | None = None
    try:
        for chunk in _chunks(raw, packed):
            if not data:
                _refuse_other_kinds(chunk)
                inner = next((name for start, name in PACKED.items() if chunk.startswith(start)), None)
                inner = inner or ("Parquet" if chunk.startswith(PARQUET_START) else None)
                if inner is not None:
                    raise Refused("binary-file", what=f"{inner} inside {packed}")
                watch = _Watch(chunk)
            if watch is not None:
                watch(chunk)
            data += chunk
            if len(data) > LARGEST_FILE:
                raise _too_large(packed=" when it is unpacked")
            if len(data) > UNSUSPECTED and len(data) > LARGEST_GROWTH * len(raw):
                raise Refused(
                    "grows-too-much", size=in_units(len(raw)), unpacked=in_units(len(data)), limit=LARGEST_GROWTH
                )
    except (OSError, lzma.LZMAError, zipfile.BadZipFile, NotImplementedError, zlib.error) as error:
        raise _damaged(packed, str(error) or "it is not whole") from None
    except EOFError:
        raise _damaged(packed, "it ends early") from None
    except (ValueError, RuntimeError, LookupError, ArithmeticError, struct.error):
        # what the standard library says where an archive points outside itself
        raise _damaged(packed, "its parts do not fit together") from None
    return data


def _damaged(packed: str, reason: str) -> Refused:
    return Refused("damaged-file", what=f"a file packed with {packed}", reason=reason)


def _chunks(raw: bytearray, packed: str) -> Iterator[bytes]:
    match packed:
        case "gzip":
            yield from _pieces(gzip.GzipFile(fileobj=io.BytesIO(raw)))
        case "bzip2":
            yield from _pieces(bz2.BZ2File(io.BytesIO(raw)))
        case "zstd":
            yield from _pieces(pa.CompressedInputStream(pa.BufferReader(raw), "zstd"))
        case "xz":
            yield from _xz_pieces(raw)
        case _:
            yield from _zip_pieces(raw)


def _pieces(stream: Any) -> Iterator[bytes]:
    while piece := stream.read(_CHUNK):
        yield piece


def _xz_pieces(raw: bytearray) -> Iterator[bytes]:
    rest = bytes(raw)
    while rest:
        unpack = lzma.LZMADecompressor(format=lzma.FORMAT_XZ, memlimit=XZ_MEMORY)
        while not unpack.eof:
            # it keeps what it was given and has not used
            piece = unpack.decompress(rest, max_length=_CHUNK)
            rest = b""
            if not piece and unpack.needs_input:
                raise EOFError
            if piece:
                yield piece
        # streams may follow each other, with zero bytes between
        rest = unpack.unused_data.lstrip(b"\0")


def _zip_pieces(raw: bytearray) -> Iterator[bytes]:
    """The one file of an archive; folders and what some systems add beside it do not count."""
    _refuse_long_directory(raw)
    with zipfile.ZipFile(io.BytesIO(raw)) as archive:
        entries = archive.infolist()
        names = {entry.filename for entry in entries}
        if "[Content_Types].xml" in names or "mimetype" in names:
            raise Refused("binary-file", what="a spreadsheet workbook")
        files = [
            entry
            for entry in entries
            if not entry.is_dir() and not entry.filename.startswith("__MACOSX/") and entry.filename != ".DS_Store"
        ]
        if len(files) != 1:
            shown = ", ".join(repr(entry.filename[:60]) for entry in files[:_SHOWN_MEMBERS])
            more = ", ..." if len(files) > _SHOWN_MEMBERS else ""
            raise Refused("many-members", count=len(files), names=f" ({shown}{more})" if files else "")
        if files[0].flag_bits & 1:
            raise _damaged("zip", "it asks for a password")
        with archive.open(files[0]) as member:
            yield from _pieces(member)


def _refuse_long_directory(raw: bytearray) -> None:
    """An archive may list millions of files; its last record says how many before they are read."""
    at = raw.rfind(b"PK\x05\x06", max(0, len(raw) - 65_557))
    if at < 0 or len(raw) - at < 22:
        raise zipfile.BadZipFile("it has no directory; it may have been cut off")
    _, _, _, _, count, size, _, _ = struct.unpack("<4s4H2LH", raw[at : at + 22])
    if count > MOST_MEMBERS or size > LARGEST_DIRECTORY:
        raise Refused("many-members", count=f"{count:,} or more", names="")


def _refuse_other_kinds(start: bytes | bytearray) -> None:
    what = next((name for magic, name in BINARY_STARTS if start.startswith(magic)), None)
    if what is None and start[257:262] == b"ustar":
        what = "a tar archive"
    if what is not None:
        raise Refused("binary-file", what=what)


def in_units(size: int) -> str:
    """A number of bytes as a person says it.

    >>> in_units(900), in_units(70_000), in_units(1 << 30)
    ('900 bytes', '68 KiB', '1 GiB')
    """
    for unit, scale in (("GiB", 1 << 30), ("MiB", 1 << 20), ("KiB", 1 << 10)):
        if size >= scale:
            return f"{size / scale:.2g} {unit}" if size < 10 * scale else f"{size // scale:,} {unit}"
    return f"{size:,} bytes"
