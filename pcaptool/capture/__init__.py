"""Captures to datagrams: pcap, pcapng, compression, link types, IP, fragments, UDP, ledger."""

from pcaptool.capture.checksum import udp_checksum_ok
from pcaptool.capture.datagrams import ENTRIES, Account, Damage, Datagrams, OpenFragment
from pcaptool.capture.find import find_captures, natural
from pcaptool.capture.read import DatagramReader, join_fragments, read_datagrams
from pcaptool.capture.records import Piece
from pcaptool.capture.survey import Survey, sha256, survey

__all__ = [
    "ENTRIES", "Account", "Damage", "DatagramReader", "Datagrams", "OpenFragment", "Piece", "Survey",
    "find_captures", "join_fragments", "natural", "read_datagrams", "sha256", "survey", "udp_checksum_ok",
]
