"""Speed of coding steps as ratios measured in one run. Not a test: nothing fails, the figures are for reading.

    python tests/benchmarks/codes.py

Rates are of the step's own decoding of a batch; beside a plain copy of the same bits, or a reference library.
"""

import statistics
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable
from pathlib import Path

import galois
import numpy as np

from pcaptool.coding.bch import Bch
from pcaptool.coding.bit_order import BitOrder
from pcaptool.coding.chain import Chain
from pcaptool.coding.convolutional import Convolutional
from pcaptool.coding.crc import Crc
from pcaptool.coding.interleave import Interleave
from pcaptool.coding.line_code import LineCode
from pcaptool.coding.proof import compile_proof
from pcaptool.coding.reed_solomon import ReedSolomon
from pcaptool.coding.scramble import Scramble
from pcaptool.coding.step import Batch, Step
from pcaptool.coding.whiten import Whiten
from pcaptool.profile import parse_profile
from pcaptool.simulate import make_plan, simulate

HERE = Path(__file__).parent
PAIRS = 3
RNG = np.random.default_rng(1)


def seconds(work: Callable[[], object]) -> float:
    begun = time.perf_counter()
    work()
    return time.perf_counter() - begun


def pairs(a: Callable[[], object], b: Callable[[], object]) -> float:
    """Median of the ratio of times of a and b, in turn, after one of each that does not count."""
    a(), b()
    return statistics.median(seconds(a) / seconds(b) for _ in range(PAIRS))


def best(work: Callable[[], object]) -> float:
    work()
    return min(seconds(work) for _ in range(PAIRS))


def words(step: Step, k: int, frames: int) -> np.ndarray:
    return step.encode(RNG.integers(0, 2, (frames, k), np.uint8))


def whole_process(name: str, chain: str, octets: int, frames: int, error_rate: float) -> None:
    """A whole audit, every output, against a plain script that decodes all frames at once and only counts."""
    text = (HERE / "strong_codes.toml").read_text(encoding="utf-8").replace("# the chain is put in here", chain)
    plan = {"seed": 4, "start": "2026-03-01T00:00:00Z", "duration": f"{2 * frames} s", "link": [
        {"key": {"unit": 1 + i}, "interval": "20 s", "first": 2 * i, "payload": [octets - 3, octets - 3],
         "bit_error_rate": error_rate} for i in range(10)]}
    with tempfile.TemporaryDirectory() as temporary:
        folder = Path(temporary)
        (folder / "p.toml").write_text(text, encoding="utf-8")
        made = simulate(parse_profile(text.encode(), "p.toml"), make_plan(plan, "benchmark"))
        (folder / "a.pcap").write_bytes(made.captures[0])
        audit = [sys.executable, "-m", "pcaptool", "audit", str(folder / "a.pcap"), "-p", str(folder / "p.toml"), "-o",
                 str(folder / "out"), "-q", "-j", "1"]
        plain = [sys.executable, str(HERE / "plain_codes.py"), name, str(folder / "a.pcap"), str(folder / "plain.csv")]
        ratio = pairs(lambda: subprocess.run(plain, check=True), lambda: subprocess.run(audit, capture_output=True))
    print(f"whole audit, {frames} frames, {name:<8}  {ratio:8.1f} times faster than the plain script")


def moving() -> None:
    """Steps that only move or mask bits, against a plain copy of what they are given."""
    for name, step, k in (
            ("whitening, 9-bit register", Whiten(poly="x^9 + x^5 + 1", seed=0x1FF), 2048),
            ("interleaving, 32 x 64 bits", Interleave(rows=32, columns=64), 2048),
            ("interleaving, 16 x 16 bytes", Interleave(rows=16, columns=16, unit=8), 2048),
            ("interleaving, 12 branches", Interleave(branches=12, delay=2, unit=8), 2048),
            ("bit order", BitOrder(), 2048),
            ("Manchester", LineCode(kind="manchester"), 1024),
            ("differential Manchester", LineCode(kind="differential_manchester"), 1024),
            ("NRZI", LineCode(kind="nrzi"), 2048),
            ("3 out of 6", LineCode(kind="three_of_six"), 1360),
            ("self-synchronising scrambler", Scramble(poly="x^17 + x^12 + 1"), 2048)):
        came = words(step, k, 4096)
        ratio = pairs(lambda came=came: came.copy(), lambda step=step, came=came: step.decode(Batch(came)))
        print(f"{name:<34} {ratio:8.2f} of the rate of a plain copy")


def reed_solomon() -> None:
    step = ReedSolomon(n=255, k=223)
    frames = 4000
    air = words(step, 223 * 8, frames)
    octets = np.packbits(air, axis=1)
    proof = compile_proof(Chain((step,)), 255, [0, 1, 2, 3])
    assert proof is not None
    start = np.arange(frames) * 255
    rate = octets.nbytes / best(lambda: proof.run(octets.reshape(-1), start)) / 1e9
    print(f"RS(255,223), undamaged words proven {rate:7.2f} GB/s")
    other = galois.ReedSolomon(255, 223, field=galois.GF(2**8, irreducible_poly=0x11D, primitive_element=2), c=0)
    few = octets[:200].copy()
    for row in few:
        row[RNG.choice(255, 8, replace=False)] ^= 0x5A
    bits = np.unpackbits(few, axis=1)
    ratio = pairs(lambda: other.decode(few), lambda: step.decode(Batch(bits)))
    print(f"RS(255,223), eight errors a word   {ratio:8.1f} times faster than galois")


def viterbi() -> None:
    step = Convolutional(constraint_length=7, generators=("171", "133"))
    frames, k = 4096, 1024
    air = words(step, k, frames)
    air ^= (RNG.random(air.shape) < 0.03).astype(np.uint8)
    doubt = RNG.integers(0, 200, air.shape).astype(np.uint8)
    for name, batch in (("hard", Batch(air)), ("soft", Batch(air, doubt))):
        rate = frames * k / best(lambda batch=batch: step.decode(batch)) / 1e6
        print(f"Viterbi, K = 7, rate 1/2, {name}      {rate:8.0f} Mbit/s of data")


def grows(title: str, unit: str, points: list[tuple[int, float]]) -> None:
    """A plot in text: straight when the time is linear."""
    most = max(t for _, t in points)
    print(f"\n{title}")
    for x, t in points:
        print(f"{x:>8} {unit:<10} {t * 1e6:9.2f} us {'#' * max(round(40 * t / most), 1)}")


def linear() -> None:
    """Time per frame against its length and its errors."""
    k7 = Convolutional(constraint_length=7, generators=("171", "133"))
    points = []
    for k in (1000, 2000, 4000, 8000, 16000):
        air = words(k7, k, 384)
        points.append((k, best(lambda air=air: k7.decode(Batch(air))) / 384))
    grows("Viterbi, K = 7: time per frame", "data bits", points)
    points = []
    for symbols in (64, 128, 256, 512, 1023):
        step = ReedSolomon(m=10, n=symbols, k=symbols - 32)
        air = words(step, (symbols - 32) * 10, 400)
        air[:, 5] ^= 1
        points.append((symbols, best(lambda step=step, air=air: step.decode(Batch(air))) / 400))
    grows("Reed-Solomon over GF(1024), 32 check symbols, one error: time per codeword", "symbols", points)
    step, points = ReedSolomon(n=255, k=223), []
    clean = words(step, 223 * 8, 1000)
    for errors in (1, 4, 8, 12, 16):
        air = clean.copy()
        for row in air:
            row[RNG.choice(255, errors, replace=False) * 8] ^= 1
        points.append((errors, best(lambda air=air: step.decode(Batch(air))) / 1000))
    grows("RS(255,223): time per codeword", "errors", points)
    code, points = Bch(m=10, t=16), []
    clean = words(code, code.data_bits(1023), 1000)
    for errors in (1, 4, 8, 12, 16):
        air = clean.copy()
        for row in air:
            row[RNG.choice(1023, errors, replace=False)] ^= 1
        points.append((errors, best(lambda air=air: code.decode(Batch(air))) / 1000))
    grows("BCH(1023,863): time per codeword", "errors", points)
    chain, points = Chain((Crc(standard="ccsds"), LineCode(kind="manchester"))), []
    for octets in (64, 128, 256, 512, 1024):
        air = chain.encode(RNG.integers(0, 2, (2000, octets * 8), np.uint8))
        points.append((octets, best(lambda air=air: chain.decode(air)) / 2000))
    grows("CRC and Manchester: time per frame", "octets", points)


def main() -> None:
    whole_process("rs", '[[coding]]\nstep = "reed_solomon"\nn = 255\nk = 223', 221, 50_000, 0.00005)
    whole_process("viterbi", '[[coding]]\nstep = "convolutional"\nconstraint_length = 7\ngenerators = ["171", "133"]\n'
                  '[[coding]]\nstep = "pad"\nbits = 4', 126, 25_000, 0.01)
    moving()
    reed_solomon()
    viterbi()
    linear()


if __name__ == "__main__":
    main()
