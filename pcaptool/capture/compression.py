"""Open a capture as a stream of bytes, through gzip, bzip2, xz or zstd where it is compressed.

A broken stream gives what can be had from it: where a decompressor fails, and takes with it what it
had in hand, the file is read once more up to there and on in single bytes; no more than one is lost.
"""

import bz2
import io
import lzma
import sys
import zlib
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Any, BinaryIO, Protocol

from pcaptool.problem import CaptureError, Problem

MAGICS = {
    b"\x1f\x8b": "gzip",
    b"BZh": "bzip2",
    b"\xfd7zXZ\x00": "xz",
    b"\x28\xb5\x2f\xfd": "zstd",
}
ZSTD_SKIPPABLE = b"\x2a\x4d\x18"    # behind an octet 50 to 5f: a frame without data, RFC 8878, 3.1.2
CHUNK = 64 << 10                    # compressed bytes taken in at a time
STEP = 256 << 10                    # decompressed bytes given out at a time
LZMA_MEMORY = 256 << 20             # a dictionary larger than that is refused
EXPLODES_AT = 1 << 30               # decompressed bytes from which on the ratio is watched ...
EXPLODES_BY = 1000                  # ... and this ratio is no capture's


class Hash(Protocol):
    """What takes bytes in to hash them, as hashlib's objects do."""

    def update(self, data: bytes | memoryview, /) -> None: ...


class BrokenStream(Exception):
    """A compressed stream that cannot be read on; ``lost``: the decompressor may have had more in hand."""

    def __init__(self, why: str, lost: bool = False) -> None:
        super().__init__(why)
        self.lost = lost


def compression_of(head: bytes) -> str:
    """Return the name of the compression that a file begins with, or an empty string."""
    if head[1:4] == ZSTD_SKIPPABLE and head[0] >> 4 == 5:
        return "zstd"
    return next((name for magic, name in MAGICS.items() if head.startswith(magic)), "")


class _Gzip:
    """zlib's decompressor with the manners of those of bz2, lzma and zstd."""

    def __init__(self) -> None:
        self._inner = zlib.decompressobj(wbits=31)
        self._waiting = memoryview(b"")
        self._full = False

    @property
    def eof(self) -> bool:
        return self._inner.eof

    @property
    def unused_data(self) -> bytes:
        return self._inner.unused_data + self._waiting

    @property
    def needs_input(self) -> bool:
        return not (self._full or self._inner.unconsumed_tail or self._waiting)

    def decompress(self, data: bytes, max_length: int) -> bytes:
        if data:
            self._waiting = memoryview(data)
        given: bytes | memoryview = self._inner.unconsumed_tail
        if not given:               # little at a time when little is asked for: the rest is copied each time
            most = max(max_length, 256)
            given, self._waiting = self._waiting[:most], self._waiting[most:]
        out = self._inner.decompress(given, max_length)
        self._full = len(out) == max_length
        return out


def _decompressor(name: str) -> tuple[Callable[[], Any], tuple[type[Exception], ...]]:
    """Return what makes decompressors, and the errors by which they say that a stream is broken."""
    if name == "gzip":
        return _Gzip, (zlib.error,)
    if name == "bzip2":
        return bz2.BZ2Decompressor, (OSError, ValueError)
    if name == "xz":
        return lambda: lzma.LZMADecompressor(memlimit=LZMA_MEMORY), (lzma.LZMAError,)
    if sys.version_info >= (3, 14):
        from compression import zstd
    else:
        from backports import zstd
    return zstd.ZstdDecompressor, (zstd.ZstdError,)


@dataclass(slots=True)
class _Pace:
    step: int = STEP        # most bytes to give out next


def _streams(file: BinaryIO, name: str, pace: _Pace) -> Iterator[bytes]:
    """Yield what the streams in a file hold, one behind the other; raises BrokenStream."""
    make, errors = _decompressor(name)
    data = file.read(CHUNK)
    while data:
        stream = make()
        while not stream.eof:
            if stream.needs_input and not data and not (data := file.read(CHUNK)):
                raise BrokenStream(f"{name} stream ends early")
            try:
                out = stream.decompress(data, max_length=pace.step)
            except errors as error:
                raise BrokenStream(f"{name} stream broken: {error}", lost=True) from None
            data = b""
            if out:
                yield out
        data = stream.unused_data.lstrip(b"\0")         # padding between streams and behind them
        while not data and (data := file.read(CHUNK)):
            data = data.lstrip(b"\0")
        if 0 < len(data) < 8:
            data += file.read(8)
        if data and compression_of(data) != name:
            raise BrokenStream(f"bytes behind the end of the {name} stream")


def decompressed(path: Path, file: BinaryIO, name: str) -> Iterator[bytes]:
    """Yield what a compressed file holds; raises BrokenStream behind the last byte to be had."""
    good = 0
    try:
        for chunk in _streams(file, name, _Pace()):
            good += len(chunk)
            yield chunk
        return
    except BrokenStream as error:
        broken = error
    if broken.lost:
        pace = _Pace(STEP if good else 1)
        with open(path, "rb", buffering=0) as again:
            try:
                for chunk in _streams(again, name, pace):
                    if pace.step == 1:
                        yield chunk
                    else:                               # the same steps give the same chunks
                        good -= len(chunk)
                        pace.step = STEP if good else 1
            except BrokenStream:
                pass
    raise broken


class _Tee(io.RawIOBase):
    """A file whose bytes go into a hash as they are read."""

    def __init__(self, file: BinaryIO, hash: Hash) -> None:
        self._inner, self._hash = file, hash

    def read(self, size: int = -1, /) -> bytes:
        data = self._inner.read(size)
        self._hash.update(data)
        return data


class Source:
    """The bytes of a capture, from a place on, as one stream that never raises in the middle.

    at      offset to begin at; 0 when the file is compressed
    hash    takes in the bytes as they are on disk, if given
    broken  what ended the stream early, empty while all is well
    Raises CaptureError when the file cannot be opened.
    """

    def __init__(self, path: Path, at: int = 0, hash: Hash | None = None) -> None:
        try:
            if path.exists() and not path.is_file():
                raise OSError(0, "a folder" if path.is_dir() else "no regular file")
            self._file: BinaryIO = open(path, "rb", buffering=0)
            self.on_disk = path.stat().st_size
            head = self._file.read(8)
        except OSError as error:
            raise CaptureError(Problem(
                file=str(path), place="", found=error.strerror or "an unreadable file", expected="a readable file",
                fix="check the path and the permissions")) from None
        self._file.seek(at)
        self._hash = hash
        self.compression = compression_of(head)
        self.broken = ""
        self.given = 0
        self._chunk = memoryview(b"")
        tee: Any = _Tee(self._file, hash) if hash else self._file
        self._chunks = decompressed(path, tee, self.compression) if self.compression else None

    def read_into(self, view: memoryview) -> int:
        """Fill as much of the view as there is; return the bytes read, 0 at the end."""
        done = 0
        while done < len(view) and not self.broken:
            try:
                n = self._read_some(view[done:])
            except BrokenStream as error:
                self.broken = str(error)
                break
            except OSError as error:
                self.broken = f"file unreadable: {error.strerror}"
                break
            if not n:
                break
            done += n
        self.given += done
        if self.compression and self.given > max(EXPLODES_AT, EXPLODES_BY * self.on_disk):
            self.broken = f"{self.compression} stream grows more than {EXPLODES_BY} times"
        return done

    def _read_some(self, view: memoryview) -> int:
        if self._chunks is None:
            n: int = self._file.readinto(view) or 0     # type: ignore[attr-defined]
            if self._hash:
                self._hash.update(view[:n])
            return n
        if not self._chunk:
            self._chunk = memoryview(next(self._chunks, b""))
        n = min(len(view), len(self._chunk))
        view[:n] = self._chunk[:n]
        self._chunk = self._chunk[n:]
        return n

    def drain(self) -> None:
        """Read what is left of the file into the hash."""
        if self._hash:
            while data := self._file.read(2 << 20):
                self._hash.update(data)

    def close(self) -> None:
        self._file.close()
