"""Look over a capture before it is decoded: its hash, its first time, and pieces to decode apart."""

import hashlib
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from pcaptool.capture.datagrams import Account
from pcaptool.capture.read import Piece, read_records
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


def sha256(path: Path) -> str:
    """Return the SHA-256 of a file in hex; the interpreter lock is free meanwhile."""
    with open(path, "rb") as file:
        return hashlib.file_digest(file, "sha256").hexdigest()


def survey(path: Path, piece_bytes: int | None = PIECE_BYTES) -> Survey:
    """Survey a capture; raises CaptureError when it is none.

    piece_bytes  a plain pcap file larger than this is cut at records about so many bytes apart, so
                 that its pieces can be decoded at once; None: never
    """
    account, records = Account(), Records()
    size = path.stat().st_size if path.exists() else 0
    pieces, first_time, packets, last_cut, first_packet = [], None, 0, 0, 0
    cuttable = piece_bytes is not None and size > piece_bytes
    for _, base, n in read_records(Piece(path), account, records):
        if first_time is None:
            first_time = int(records.time[0])
        if not cuttable or account.compression or not account.format.startswith("pcap,"):
            break
        assert piece_bytes is not None
        begins = base + records.start[:n] - HEADER
        while int(begins[-1]) >= last_cut + piece_bytes:
            i = int(np.searchsorted(begins, last_cut + piece_bytes))
            pieces.append(Piece(path, last_cut, int(begins[i]), first_packet))
            last_cut, first_packet = int(begins[i]), packets + i
        packets += n
    pieces.append(Piece(path, last_cut, first_packet=first_packet))
    return Survey(path, size, pieces, first_time)
