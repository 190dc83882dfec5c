"""Look over a capture before it is decoded: format, first time, hash, and pieces to decode apart."""

import hashlib
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from pcaptool.capture.datagrams import Account
from pcaptool.capture.records import Piece, read_records
from pcaptool.capture.walk import HEADER
from pcaptool.capture.walkers import Records

PIECE_BYTES = 64 << 20


@dataclass(slots=True)
class Survey:
    """What is known of a capture before decoding."""

    path: Path
    size: int                   # bytes on disk
    pieces: list[Piece]
    first_time: int | None      # ns, of the first record
    format: str = ""            # "pcap, little endian, us", "pcapng, little endian" ...
    compression: str = ""       # "", "gzip" ...
    sha256: str = ""            # hex, of the file as on disk; empty unless asked for


def sha256(path: Path) -> str:
    """Return the SHA-256 of a file in hex; the interpreter lock is free meanwhile."""
    with open(path, "rb") as file:
        return hashlib.file_digest(file, "sha256").hexdigest()


def survey(path: Path, piece_bytes: int | None = PIECE_BYTES, hashed: bool = False,
           found: Callable[[Piece], None] = lambda piece: None) -> Survey:
    """Survey a capture; raises CaptureError when it is none.

    piece_bytes  a plain pcap file is walked and cut at records about so many bytes apart, so that its
                 pieces can be decoded at once, and the least time in each is told; None: neither
    hashed       also its SHA-256, in the same pass; without it, and without pieces to cut, no more
                 than the beginning is read
    found        told of every piece as soon as it is cut, so that its decoding can begin
    """
    digest = hashlib.sha256() if hashed else None
    account, records = Account(), Records()
    size = path.stat().st_size if path.is_file() else 0
    pieces: list[Piece] = []
    first_time, least_time = None, None
    packets = last_cut = first_packet = 0
    walked = False              # to the end, so that the least time is known
    for block in read_records(Piece(path), account, records, hash=digest):
        if first_time is None:
            first_time = int(records.time[0])
        cuttable = piece_bytes is not None and not account.compression and account.format.startswith("pcap,")
        if not cuttable and not digest:
            break
        begins = block.base + records.start[: block.count] - HEADER
        done = 0                # records of the block that lie in pieces cut already
        while cuttable and int(begins[-1]) >= last_cut + (piece_bytes or 0):
            i = int(np.searchsorted(begins, last_cut + (piece_bytes or 0)))
            least_time = _least(least_time, records.time[done:i])
            pieces.append(Piece(path, last_cut, int(begins[i]), first_packet, least_time))
            found(pieces[-1])
            last_cut, first_packet, least_time, done = int(begins[i]), packets + i, None, i
        least_time = _least(least_time, records.time[done : block.count])
        packets += block.count
    else:
        walked = piece_bytes is not None and account.format.startswith("pcap,") and not account.compression
    pieces.append(Piece(path, last_cut, first_packet=first_packet, least_time=least_time if walked else None))
    found(pieces[-1])
    return Survey(path, size, pieces, first_time, account.format, account.compression,
                  digest.hexdigest() if digest else "")


def _least(least: int | None, times: NDArray[np.int64]) -> int | None:
    if not len(times):
        return least
    return int(times.min()) if least is None else min(least, int(times.min()))
