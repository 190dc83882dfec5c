"""The frame table: its documented columns and the batches that carry it through the program."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from pcaptool.table import Column

STATES = ("intact", "corrected", "corrupted", "short")
INTACT, CORRECTED, CORRUPTED, STATE_SHORT = range(4)
ARRIVALS = ("", "in turn", "late", "repeated", "restart")

FRAMES = (
    Column("capture", "label", "", "file name of the capture, as found", True),
    Column("packet", "int64", "", "position of the packet in its capture, from 0; the last fragment's, if any", True),
    Column("slot", "int16", "", "position of the frame among the frames of its datagram, from 0", True),
    Column("time", "timestamp", "UTC", "when the packet was recorded", True),
    Column("profile", "label", "", "profile that claimed the datagram", True),
    Column("link", "label", "", "values of the profile's link key; ? where a corrupted frame cannot tell", True),
    Column("counter", "int64", "", "the counter field; missing unless the message is usable"),
    Column("state", "label", "", "intact | corrected | corrupted | short", True),
    Column("arrival", "label", "", "in turn | late | repeated | restart; missing unless usable and counted"),
    Column("reason", "label", "", "why not usable: short | check_failed | uncorrectable | miscorrected | bad_field"),
    Column("verified", "bool", "", "an independent check confirms a corrected frame; missing unless corrected"),
    Column("wrong_bits", "int32", "bit", "channel errors, by encoding again; missing unless usable"),
    Column("headroom", "float", "", "1 - errors / t of the worst codeword; missing where nothing corrects"),
    Column("air_bits", "int32", "bit", "bits received of the air frame", True),
)
ERRORS = (
    Column("frame", "int64", "", "row of the frame table, from 0", True),
    Column("position", "int32", "bit", "wrong bit's position on the air, from 0", True),
)

NO_COUNTER = np.int64(-1)
NO_KEY = np.uint64(2**64 - 1)


@dataclass(slots=True)
class FrameBatch:
    """Frames of one profile in recorded order, as the decoder leaves them.

    packet, time, order   int64 (frame,)    as in Datagrams
    slot      int16 (frame,)    frame in its datagram
    records   int32 (frame,)    capture records of its datagram, on slot 0; else 0
    digest    uint64 (frame,)   hash of the datagram with its addresses; bit 0 set: has an IP identification
    state, reason  uint8 (frame,)
    wrong_bits     int32 (frame,)    -1 unless usable
    headroom       float32 (frame,)  NaN where nothing corrects
    air_bits       int32 (frame,)
    counter   int64 (frame,)    NO_COUNTER unless usable and present
    key       uint64 (frame,)   the link key, packed or hashed; NO_KEY when a part is missing
    home      uint64 (frame,)   the part of the key that needs no message
    backhaul  int64 (frame,)    the backhaul counter, NO_COUNTER when there is none
    backhaul_key  uint64 (frame,)
    fields    name -> int64 (frame,)  raw values; "wrapper.NAME" and message names
    present   name -> bool (frame,)   where a message field exists; absent: in every usable frame
    error_frame  int64 (error,) row in this batch; error_position int32 (error,)
    air       pieces of a stream, one bytes object a row, or None where rows are frames
    checksum_bad int        datagrams whose UDP checksum does not hold
    """

    packet: NDArray[np.int64]
    time: NDArray[np.int64]
    order: NDArray[np.int64]
    slot: NDArray[np.int16]
    records: NDArray[np.int32]
    digest: NDArray[np.uint64]
    state: NDArray[np.uint8]
    reason: NDArray[np.uint8]
    wrong_bits: NDArray[np.int32]
    headroom: NDArray[np.float32]
    air_bits: NDArray[np.int32]
    counter: NDArray[np.int64]
    key: NDArray[np.uint64]
    home: NDArray[np.uint64]
    backhaul: NDArray[np.int64]
    backhaul_key: NDArray[np.uint64]
    fields: dict[str, NDArray[np.int64]]
    present: dict[str, NDArray[np.bool_]]
    error_frame: NDArray[np.int64]
    error_position: NDArray[np.int32]
    checksum_bad: int = 0
    air: list[bytes] | None = None

    def __len__(self) -> int:
        return len(self.packet)
