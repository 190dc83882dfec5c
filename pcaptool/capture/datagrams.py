"""The table of datagrams that the capture layer hands on, and the entries of the ledger."""

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

# Every record of a capture lands in exactly one of these entries.
ENTRIES = (
    "frames",               # claimed by a profile
    "other_udp",            # UDP that no profile claims
    "other_ip",             # IP, but not UDP
    "not_ip",               # no IP packet
    "cut",                  # the snap length took what was needed to tell
    "fragment_incomplete",  # IP fragments whose datagram never became whole
    "duplicate_capture",    # the same datagram recorded twice
    "unreadable",           # malformed, or a link type that is not known
)


@dataclass(slots=True)
class Datagrams:
    """A bounded batch of UDP datagrams, one row each, in recorded order.

    buffer       uint8 (byte,)          holds the payloads; reused: valid until the next batch
    packet       int64 (datagram,)      position of the record in its capture, from 0 (the record that
                                        completed it, for a reassembled one)
    records      int32 (datagram,)      records that carried it: 1, or its number of fragments
    time         int64 (datagram,)      ns since 1970-01-01T00:00:00Z
    order        int64 (datagram,)      time made monotone over backward clock steps, ns
    start        int64 (datagram,)      first payload byte in ``buffer``
    held         int32 (datagram,)      payload bytes in ``buffer``
    size         int32 (datagram,)      payload bytes that were sent; more than held: cut by snap length
    source_port, destination_port       uint16 (datagram,)
    source, destination                 uint64 (datagram, 2)  address, high and low half; IPv4 in low
    version      uint8 (datagram,)      IP version, 4 or 6
    ident        int32 (datagram,)      IPv4 identification, -1 when there is none
    checksum     uint16 (datagram,)     UDP checksum as sent, 0 when absent
    """

    buffer: NDArray[np.uint8]
    packet: NDArray[np.int64]
    records: NDArray[np.int32]
    time: NDArray[np.int64]
    order: NDArray[np.int64]
    start: NDArray[np.int64]
    held: NDArray[np.int32]
    size: NDArray[np.int32]
    source_port: NDArray[np.uint16]
    destination_port: NDArray[np.uint16]
    source: NDArray[np.uint64]
    destination: NDArray[np.uint64]
    version: NDArray[np.uint8]
    ident: NDArray[np.int32]
    checksum: NDArray[np.uint16]

    def __len__(self) -> int:
        return len(self.packet)


@dataclass(slots=True)
class Damage:
    """A stretch of a capture that holds no record."""

    offset: int     # byte offset in the (uncompressed) capture
    skipped: int    # bytes
    reason: str     # "record length 4294967295 at ..." and the like


@dataclass(slots=True)
class Account:
    """What the capture layer saw, beside the datagrams; complete after the last batch.

    ``entries`` counts all records that are not UDP datagrams; whoever claims datagrams adds
    ``frames`` and ``other_udp``. Then the entries add up to ``records``.
    """

    format: str = ""                 # "pcap, little endian, us" ...
    compression: str = ""            # "", "gzip" ...
    records: int = 0
    entries: dict[str, int] = field(default_factory=lambda: dict.fromkeys(ENTRIES, 0))
    reasons: dict[str, int] = field(default_factory=dict)   # unreadable and noted, by reason
    damage: list[Damage] = field(default_factory=list)
    damaged_bytes: int = 0
    first_time: int | None = None    # ns, of any record
    last_time: int | None = None
    resolution: str = ""             # "us", "ns", ... of the time stamps
    link_types: dict[int, int] = field(default_factory=dict)   # link type -> records
    snap_length: int = 0
    drops: int | None = None         # packets the capture itself dropped; None: not known
    steps: list[tuple[int, int, int]] = field(default_factory=list)  # clock went back: packet, from, to
    order_shift: int = 0             # ns added to time to give order, at the end
    open_fragments: list["OpenFragment"] = field(default_factory=list)
    size: int = 0                    # bytes read: record_bytes + other_bytes + damaged_bytes
    record_bytes: int = 0            # of records or packet blocks, their headers included
    other_bytes: int = 0             # of file headers and blocks that hold no packet


@dataclass(slots=True)
class OpenFragment:
    """An IP fragment whose datagram was not whole at the end of a piece of a capture."""

    packet: int
    time: int
    order: int
    key: tuple[int, bytes, bytes, int]   # version, source, destination, identification
    offset: int                          # bytes
    more: bool
    payload: bytes
    protocol: int = 17                   # what the IP header, or the fragment header, says comes next
