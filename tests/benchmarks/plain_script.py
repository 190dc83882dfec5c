"""What an engineer writes in an afternoon with dpkt and crcmod: the anchor of the benchmarks.

    python plain_script.py CAPTURE OUT.csv

One frame at a time: dpkt takes the packet apart, a table of 4096 entries decodes each Hamming word, crcmod
checks the message. It counts per link and nothing else; it knows the merrowdale wrapper and code by heart.
"""

import csv
import struct
import sys
from collections import defaultdict

import crcmod
import dpkt

ROWS, COLUMNS, DATA = 10, 12, (3, 5, 6, 7, 9, 10, 11, 12)
CRC = crcmod.mkCrcFun(0x11021, initCrc=0xFFFF, rev=False, xorOut=0)


def hamming_table() -> list[tuple[int, int]]:
    table = []
    for word in range(4096):
        bits = [0] + [word >> (12 - i) & 1 for i in range(1, 13)]
        syndrome = 0
        for i in range(1, 13):
            syndrome ^= i * bits[i]
        if 1 <= syndrome <= 12:
            bits[syndrome] ^= 1
        value = 0
        for i in DATA:
            value = value << 1 | bits[i]
        table.append((value, 0 if syndrome == 0 else 1 if syndrome <= 12 else 2))
    return table


def pn9(n: int) -> int:
    bits = [1] * 9
    while len(bits) < n:
        bits.append(bits[-4] ^ bits[-9])
    value = 0
    for bit in bits[:n]:
        value = value << 1 | bit
    return value


def main(capture: str, out: str) -> None:
    table, mask = hamming_table(), pn9(120)
    links: dict[tuple[int, int], list[int]] = defaultdict(lambda: [0, 0, 0, 0])
    with open(capture, "rb") as file:
        for _, data in dpkt.pcap.Reader(file):
            try:
                ip = dpkt.ethernet.Ethernet(data).data
            except dpkt.UnpackError:
                continue
            if not isinstance(ip, dpkt.ip.IP) or not isinstance(ip.data, dpkt.udp.UDP) or ip.data.dport != 47310:
                continue
            payload = ip.data.data
            mark, gateway, _, _, size = struct.unpack(">HBHbB", payload[:7])
            if mark != 0x4D57 or size != 15:
                continue
            text = format(int.from_bytes(payload[7:22], "big") ^ mask, "0120b")
            words = [table[int(text[row::ROWS], 2)] for row in range(ROWS)]
            message = bytes(value for value, _ in words)
            kinds = [kind for _, kind in words]
            bad = 2 in kinds or CRC(message[:8]) != message[8] << 8 | message[9]
            link = links[gateway, message[0]]
            link[0] += 1
            link[3 if bad else 2 if 1 in kinds else 1] += 1
    with open(out, "w", newline="") as file:
        writer = csv.writer(file)
        writer.writerow(["gateway", "unit", "heard", "intact", "corrected", "corrupted"])
        for key in sorted(links):
            writer.writerow([*key, *links[key]])


if __name__ == "__main__":
    main(*sys.argv[1:3])
