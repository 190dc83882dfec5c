"""Open a capture as a stream of bytes, through gzip, bzip2, xz or zstd where it is compressed."""

import bz2
import gzip
import io
import lzma
import sys
from pathlib import Path
from typing import BinaryIO, cast

from pcaptool.problem import CaptureError, Problem

MAGICS = {
    b"\x1f\x8b": "gzip",
    b"BZh": "bzip2",
    b"\xfd7zXZ\x00": "xz",
    b"\x28\xb5\x2f\xfd": "zstd",
}
EXPLODES_AT = 1 << 30       # decompressed bytes from which on the ratio is watched ...
EXPLODES_BY = 1000          # ... and this ratio is no capture's
BROKEN = (EOFError, OSError, lzma.LZMAError, ValueError)


def compression_of(head: bytes) -> str:
    """Return the name of the compression that a file begins with, or an empty string."""
    return next((name for magic, name in MAGICS.items() if head.startswith(magic)), "")


def open_compressed(path: Path, name: str) -> BinaryIO:
    """Open a compressed file for reading what it holds."""
    if name == "gzip":
        return cast(BinaryIO, gzip.open(path, "rb"))
    if name == "bzip2":
        return cast(BinaryIO, bz2.open(path, "rb"))
    if name == "xz":
        return cast(BinaryIO, lzma.open(path, "rb"))
    if sys.version_info >= (3, 14):
        from compression import zstd
    else:
        from backports import zstd
    return cast(BinaryIO, zstd.open(path, "rb"))


def broken_errors() -> tuple[type[Exception], ...]:
    """Return the exceptions by which the decompressors say that a stream is broken or cut."""
    import zlib

    kinds: tuple[type[Exception], ...] = (*BROKEN, zlib.error)
    if sys.version_info >= (3, 14):
        from compression import zstd

        return (*kinds, zstd.ZstdError)
    try:
        from backports import zstd
    except ImportError:
        return kinds
    return (*kinds, zstd.ZstdError)


class Source:
    """The bytes of a capture, from a place on, as one stream that never raises in the middle.

    broken  what ended the stream early, empty while all is well
    """

    def __init__(self, path: Path, at: int = 0) -> None:
        try:
            with open(path, "rb") as file:
                head = file.read(8)
            self.on_disk = path.stat().st_size
        except OSError as error:
            raise CaptureError(Problem(
                file=str(path), place="", found=error.strerror or "an unreadable file", expected="a readable file",
                fix="check the path and the permissions")) from None
        self.compression = compression_of(head)
        self.broken = ""
        self.given = at
        if self.compression:
            self._file: BinaryIO = open_compressed(path, self.compression)
            self._broken = broken_errors()
        else:
            self._file = open(path, "rb", buffering=0)
            self._broken = (OSError,)
            self._file.seek(at)

    def read_into(self, view: memoryview) -> int:
        """Fill as much of the view as there is; return the bytes read, 0 at the end."""
        done = 0
        while done < len(view) and not self.broken:
            try:
                n = cast(io.RawIOBase, self._file).readinto(view[done:]) or 0
            except self._broken as error:
                self.broken = f"{self.compression or 'file'} stream broken: {error}"
                break
            if not n:
                break
            done += n
            if self.compression and self.given + done > max(EXPLODES_AT, EXPLODES_BY * self.on_disk):
                self.broken = f"{self.compression} stream grows more than {EXPLODES_BY} times"
        self.given += done
        return done

    def close(self) -> None:
        self._file.close()
