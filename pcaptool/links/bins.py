"""Counts per link and time bin; bins widen as the span grows, so memory stays bounded."""

import numpy as np
from numba import njit
from numpy.typing import NDArray

# Bin widths, ns; each divides the next, and all but the last few divide the day.
SECOND = 1_000_000_000
WIDTHS = tuple(int(s * SECOND) for s in (
    0.001, 0.01, 0.1, 1, 5, 10, 30, 60, 300, 600, 1800, 3600, 7200, 21600, 43200, 86400, 604800, 6048000,
    60480000, 604800000))
MOST_BINS = 300
COUNTS = ("intact", "corrected", "corrupted", "short")


@njit(cache=True, nogil=True)
def tally(
    link: NDArray[np.int64], state: NDArray[np.uint8], headroom: NDArray[np.float32], time: NDArray[np.int64],
    start: int, width: int, counts: NDArray[np.int64], worst: NDArray[np.float32],
) -> None:
    """Count frames by state in counts (link, bin, state); keep the least headroom in worst (link, bin)."""
    for i in range(len(link)):
        if link[i] >= 0:
            b = (time[i] - start) // width
            counts[link[i], b, state[i]] += 1
            if headroom[i] < worst[link[i], b]:
                worst[link[i], b] = headroom[i]


class Bins:
    """Counts of frames by link, time bin and state; bins begin at multiples of their width in UTC."""

    def __init__(self) -> None:
        self.width = WIDTHS[0]
        self.start = 0
        self.end = 0            # ns behind the latest frame counted
        self.counts = np.zeros((0, 0, len(COUNTS)), np.int64)
        self.worst = np.zeros((0, 0), np.float32)

    def add(self, link: NDArray[np.int64], state: NDArray[np.uint8], headroom: NDArray[np.float32],
            time: NDArray[np.int64], links: int) -> None:
        if not len(time):
            return
        self._cover(int(time.min()), int(time.max()))
        self._links(links)
        tally(link, state, headroom, time, self.start, self.width, self.counts, self.worst)

    def _links(self, links: int) -> None:
        missing = links - len(self.counts)
        if missing > 0:
            bins = self.counts.shape[1]
            self.counts = np.concatenate([self.counts, np.zeros((missing, bins, len(COUNTS)), np.int64)])
            self.worst = np.concatenate([self.worst, np.full((missing, bins), np.inf, np.float32)])

    def _cover(self, first: int, last: int) -> None:
        bins = self.counts.shape[1]
        if bins:
            first, last = min(first, self.start), max(last, self.end - 1)
            self.end = max(self.end, last + 1)
        else:
            self.end = last + 1
        width = self.width
        while last // width - first // width + 1 > MOST_BINS and width != WIDTHS[-1]:
            width = WIDTHS[WIDTHS.index(width) + 1]
        start = first // width * width
        wanted = (last - start) // width + 1
        if bins and width == self.width and start == self.start:
            if wanted <= bins:
                return
            wanted = min(2 * wanted, MOST_BINS)     # room for what follows
        counts = np.zeros((len(self.counts), wanted, len(COUNTS)), np.int64)
        worst = np.full((len(self.counts), wanted), np.inf, np.float32)
        into = (self.start + np.arange(bins) * self.width - start) // width
        for old, new in enumerate(into):
            if self.counts[:, old].any():
                counts[:, new] += self.counts[:, old]
                worst[:, new] = np.minimum(worst[:, new], self.worst[:, old])
        self.start, self.width, self.counts, self.worst = start, width, counts, worst
