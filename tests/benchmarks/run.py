"""Speed and memory as ratios measured in one run. Not a test: nothing fails, the figures are for reading.

    python tests/benchmarks/run.py [--frames 1000000] [--folder DIR]

Commands are run in turn (A B A B), each figure is the median of the pairs' ratios; machines drift, so no
seconds are promised anywhere. Captures are simulated with the profile merrowdale, the same every time.
"""

import argparse
import os
import statistics
import subprocess
import sys
import tempfile
import time
import zlib
from collections.abc import Callable
from pathlib import Path

import numpy as np

from pcaptool.simulate import make_plan, simulate

HERE = Path(__file__).parent
PAIRS = 3


def make(folder: Path, name: str, frames: int, **link: object) -> Path:
    """Simulate a capture of so many frames of ten links, unless it is there already."""
    path = folder / f"{name}-{frames}.pcap"
    if not path.exists():
        links = [{"gateway": 1 + i % 2, "key": {"unit": 1 + i}, "interval": "20 s", "first": 2 * i, "kinds": ["level"],
                  **link} for i in range(10)]
        plan = {"seed": 9, "start": "2026-03-01T00:00:00Z", "duration": f"{2 * frames} s", "link": links}
        path.write_bytes(simulate("merrowdale", make_plan(plan, "benchmark")).captures[0])
    return path


def seconds(command: list[str]) -> float:
    begun = time.perf_counter()
    subprocess.run(command, stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL, check=False)
    return time.perf_counter() - begun


def peak_mib(command: list[str]) -> float:
    """Peak resident memory of a command and its children, MiB."""
    code = "import resource, subprocess, sys; subprocess.run(sys.argv[1:], stdout=-3, stderr=-3); " \
           "print(resource.getrusage(resource.RUSAGE_CHILDREN).ru_maxrss)"
    done = subprocess.run([sys.executable, "-c", code, *command], capture_output=True, text=True, check=True)
    return int(done.stdout) / 1024


def pairs(a: Callable[[], float], b: Callable[[], float]) -> float:
    """Median of a / b over runs in turn, after one of each that does not count."""
    a(), b()
    return statistics.median(a() / b() for _ in range(PAIRS))


def audit(path: Path, out: Path, *options: str) -> list[str]:
    return [sys.executable, "-m", "pcaptool", "audit", str(path), "-p", "merrowdale", "-o", str(out), "-q", *options]


def whole_process(path: Path, folder: Path) -> None:
    plain = [sys.executable, str(HERE / "plain_script.py"), str(path), str(folder / "plain.csv")]
    ratio = pairs(lambda: seconds(plain), lambda: seconds(audit(path, folder / "out")))
    print(f"whole process, every output, against the plain script     {ratio:8.1f} times faster")
    ratio = pairs(lambda: seconds(audit(path, folder / "out")), lambda: seconds(["cat", str(path)]))
    print(f"whole process, every output, against reading the file     {ratio:8.1f} times slower")
    ratio = pairs(lambda: seconds(audit(path, folder / "out", "-j", "1")),
                  lambda: seconds(audit(path, folder / "out", "-j", "2")))
    print(f"two jobs against one                                      {ratio:8.2f} times faster")


def core(normal: Path, dirty: Path) -> None:
    """Capture to frame table in this process, one core, after imports."""
    from pcaptool.audit.piece import Job, decode_piece
    from pcaptool.capture import Piece
    from pcaptool.frames.decode import FrameDecoder
    from pcaptool.profile import load_profile

    profile = load_profile("merrowdale")
    with tempfile.TemporaryDirectory() as scratch:
        decoders = [FrameDecoder(profile)]

        def run(path: Path) -> float:
            begun = time.perf_counter()
            decode_piece(Job(Piece(path), (profile,), Path(scratch), "x"), decoders)
            return time.perf_counter() - begun

        def read(path: Path) -> float:
            begun = time.perf_counter()
            with open(path, "rb", buffering=0) as file:
                buffer = bytearray(8 << 20)
                while file.readinto(buffer):
                    pass
            return time.perf_counter() - begun

        print(f"core, against reading the file                            "
              f"{pairs(lambda: run(normal), lambda: read(normal)):8.1f} times slower")
        print(f"core, a wrong bit in every frame, against normal          "
              f"{pairs(lambda: run(dirty), lambda: run(normal)):8.2f} times slower")


def crc_rate() -> None:
    from pcaptool.coding.crc import STANDARDS, crc

    rng = np.random.default_rng(1)
    large = rng.bytes(64 << 20)
    for width, n in ((50, 1_000_000), (1500, 40_000)):
        data = rng.integers(0, 256, (n, width), np.uint8)
        sizes = np.full(n, width)
        for name in ("ccsds", "ieee-802-3", "ecma-182"):
            def ours(data: np.ndarray = data, sizes: np.ndarray = sizes, name: str = name) -> float:
                begun = time.perf_counter()
                crc(data, sizes, STANDARDS[name])
                return data.nbytes / (time.perf_counter() - begun)

            def theirs() -> float:
                begun = time.perf_counter()
                zlib.crc32(large)
                return len(large) / (time.perf_counter() - begun)

            print(f"CRC of {width:>4}-byte frames, {name:<11} over zlib.crc32      {pairs(ours, theirs):12.2f}")


def start_up(folder: Path) -> None:
    small = make(folder, "small", 10_000)
    python = lambda: seconds([sys.executable, "-c", "pass"])     # noqa: E731
    ratio = pairs(lambda: seconds([sys.executable, "-m", "pcaptool", "--help"]), python)
    print(f"--help, against a bare interpreter                        {ratio:8.1f} times slower")
    ratio = pairs(lambda: seconds(audit(small, folder / "out")), python)
    print(f"a capture of 1 MB, against a bare interpreter             {ratio:8.1f} times slower")


def memory(folder: Path, frames: int) -> None:
    one, four = (peak_mib(audit(make(folder, "normal", n, bit_error_rate=0.0001), folder / "out"))
                 for n in (frames, 4 * frames))
    print(f"peak memory, capture four times as long                   {four / one:8.2f} times "
          f"({one:.0f} and {four:.0f} MiB)")


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--frames", type=int, default=1_000_000)
    parser.add_argument("--folder", type=Path, help="where captures are kept from run to run")
    given = parser.parse_args()
    with tempfile.TemporaryDirectory() as temporary:
        folder = given.folder or Path(temporary)
        folder.mkdir(parents=True, exist_ok=True)
        normal = make(folder, "normal", given.frames, bit_error_rate=0.0001)
        dirty = make(folder, "dirty", given.frames, bit_error_rate=0.008)
        print(f"{given.frames} frames, {normal.stat().st_size / 1e6:.0f} MB, {os.cpu_count()} cores")
        whole_process(normal, folder)
        core(normal, dirty)
        crc_rate()
        start_up(folder)
        memory(folder, given.frames)


if __name__ == "__main__":
    main()
