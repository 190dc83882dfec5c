"""What an engineer writes for strong codes with public libraries: the anchor of the benchmarks.

    python plain_codes.py rs|viterbi CAPTURE OUT.csv

The second version, after a profile of the first: dpkt takes the packets apart, then all frames are decoded at
once, Reed-Solomon by galois, the convolutional code by numpy across frames and states. It counts per link.
"""

import csv
import sys
from collections import defaultdict

import crcmod
import dpkt
import galois
import numpy as np

CRC = crcmod.mkCrcFun(0x11021, initCrc=0xFFFF, rev=False, xorOut=0)


def air_frames(capture: str) -> np.ndarray:
    frames = []
    with open(capture, "rb") as file:
        for _, data in dpkt.pcap.Reader(file):
            ip = dpkt.ethernet.Ethernet(data).data
            if isinstance(ip, dpkt.ip.IP) and isinstance(ip.data, dpkt.udp.UDP) and ip.data.dport == 47399:
                frames.append(ip.data.data[3:])
    return np.frombuffer(b"".join(frames), np.uint8).reshape(len(frames), -1)


def reed_solomon(air: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Return (messages, whether given up, whether changed)."""
    code = galois.ReedSolomon(255, 223, field=galois.GF(2**8, irreducible_poly=0x11D, primitive_element=2), c=0)
    message, errors = code.decode(air, errors=True)
    return np.asarray(message), errors < 0, errors > 0


def viterbi(air: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    bits = np.unpackbits(air, axis=1)
    steps = bits.shape[1] // 2
    states = np.arange(64)
    before = np.stack([states << 1 & 63, states << 1 & 63 | 1])
    register = np.stack([states << 1, states << 1 | 1])
    out = [np.array([[bin(int(r) & g).count("1") & 1 for r in row] for row in register]) for g in (0o171, 0o133)]
    messages, wrong = [], []
    for first in range(0, len(bits), 2048):
        part = bits[first : first + 2048]
        metric = np.full((len(part), 64), 1000, np.int32)
        metric[:, 0] = 0
        chosen = np.zeros((steps, len(part), 64), np.uint8)
        for t in range(steps):
            r0, r1 = part[:, 2 * t, None], part[:, 2 * t + 1, None]
            ways = [metric[:, before[k]] + (out[0][k] != r0) + (out[1][k] != r1) for k in (0, 1)]
            chosen[t] = ways[1] < ways[0]
            metric = np.minimum(*ways)
        state, data = np.zeros(len(part), np.int64), np.zeros((len(part), steps), np.uint8)
        rows = np.arange(len(part))
        for t in range(steps - 1, -1, -1):
            data[:, t] = state >> 5
            state = before[chosen[t, rows, state], state]
        messages.append(np.packbits(data[:, : (steps - 6) // 8 * 8], axis=1))
        wrong.append(metric[:, 0])
    return np.concatenate(messages), np.zeros(len(bits), bool), np.concatenate(wrong) > 0


def main(code: str, capture: str, out: str) -> None:
    message, failed, changed = {"rs": reed_solomon, "viterbi": viterbi}[code](air_frames(capture))
    links: dict[int, list[int]] = defaultdict(lambda: [0, 0, 0, 0])
    for row, lost, mended in zip(message, failed, changed, strict=True):
        link = links[int(row[0])]
        link[0] += 1
        bad = lost or CRC(row[:-2].tobytes()) != int(row[-2]) << 8 | int(row[-1])
        link[3 if bad else 2 if mended else 1] += 1
    with open(out, "w", newline="") as file:
        writer = csv.writer(file)
        writer.writerow(["unit", "heard", "intact", "corrected", "corrupted"])
        writer.writerows([key, *links[key]] for key in sorted(links))


if __name__ == "__main__":
    main(*sys.argv[1:4])
