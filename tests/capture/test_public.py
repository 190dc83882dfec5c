"""What the capture layer offers is what is meant."""

import pcaptool.capture


def test_the_public_names():
    assert pcaptool.capture.__all__ == [
        "ENTRIES", "Account", "Damage", "DatagramReader", "Datagrams", "OpenFragment", "Piece", "Survey",
        "find_captures", "join_fragments", "natural", "read_datagrams", "sha256", "survey", "udp_checksum_ok",
    ]
    assert all(hasattr(pcaptool.capture, name) for name in pcaptool.capture.__all__)
