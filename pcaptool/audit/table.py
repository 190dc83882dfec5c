"""The table of captures: its documented columns."""

from pcaptool.capture import ENTRIES
from pcaptool.table import Column

MEANINGS = {
    "frames": "records claimed by a profile",
    "other_udp": "records of UDP that no profile claims",
    "other_ip": "records of IP, but not UDP",
    "not_ip": "records without an IP packet",
    "cut": "records of which the snap length took what was needed to tell",
    "fragment_incomplete": "IP fragments whose datagram never became whole",
    "duplicate_capture": "records of a datagram that was recorded twice",
    "unreadable": "records that are malformed, or of an unknown link type",
}
CAPTURES = (
    Column("capture", "string", "", "file name, as found below the folder that holds all captures"),
    Column("size", "int64", "byte", "size of the file"),
    Column("sha256", "string", "", "SHA-256 of the file"),
    Column("format", "string", "", "format, byte order and resolution"),
    Column("compression", "string", "", "gzip, bzip2, xz, zstd; empty when none"),
    Column("first_time", "timestamp", "UTC", "time of the first record"),
    Column("last_time", "timestamp", "UTC", "time of the last record"),
    Column("records", "int64", "", "records; the entries that follow add up to it"),
    *(Column(name, "int64", "", MEANINGS[name]) for name in ENTRIES),
    Column("damaged_bytes", "int64", "byte", "bytes that are no record at all"),
    Column("damage", "string", "", "where they are, and why"),
    Column("drops", "int64", "", "packets that the capture itself dropped; missing when it cannot tell"),
    Column("clock_steps", "int64", "", "times the clock went back by more than a second"),
    Column("bad_udp_checksums", "int64", "", "claimed datagrams whose UDP checksum does not hold (offload does that)"),
    Column("reasons", "string", "", "what was unreadable or noteworthy, with counts"),
)
