"""Split the missing frames of each gap: heard corrupted, lost on the air, on the backhaul, undecided.

A gateway's own datagram counter shows how many datagrams the IP backhaul lost, but not whose. Gaps
and backhaul losses of one gateway that overlap in time form a cluster. With M frames missing in the
cluster's gaps and B datagrams missing on the backhaul, a gap of m frames lost at least
max(0, B - (M - m)) and at most min(m, B) of them on the backhaul; where the bounds meet, the answer
is decided, and what lies between them is undecided. When B reaches M, all are explained by the
backhaul. Where a datagram may hold several frames, or a piece of a stream, a missing one may have
taken any number with it: then the gaps of the cluster stay undecided. Without a backhaul counter
nothing can be told, and where the capture itself dropped packets, or may have, a backhaul loss may
be the capture's own.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray


@dataclass(slots=True)
class Split:
    """Lost frames of each gap by where they were lost: int64 (gap,) each."""

    air: NDArray[np.int64]
    backhaul: NDArray[np.int64]
    undecided: NDArray[np.int64]


def clusters(begin: NDArray[np.int64], end: NDArray[np.int64]) -> NDArray[np.int64]:
    """Number the groups of closed time intervals that overlap, directly or through others.

    begin must be ascending; intervals that only touch do not overlap.
    """
    reach = np.maximum.accumulate(end)
    fresh = np.ones(len(begin), np.bool_)
    fresh[1:] = begin[1:] >= reach[:-1]
    return np.cumsum(fresh) - 1


def split_losses(
    gateway: NDArray[np.int64], begin: NDArray[np.int64], end: NDArray[np.int64], lost: NDArray[np.int64],
    event_gateway: NDArray[np.int64], event_begin: NDArray[np.int64], event_end: NDArray[np.int64],
    event_lost: NDArray[np.int64], event_dropped: NDArray[np.bool_], several: NDArray[np.bool_],
) -> Split:
    """Return the split of every gap's lost frames.

    gateway        int64 (gap,)  -1: its datagrams carry no backhaul counter
    begin, end     int64 (gap,)  order time of the usable frames around the gap, ns
    lost           int64 (gap,)  missing frames that no corrupted frame explains
    several        bool (gap,)   a datagram of its gateway may hold several frames
    event_*        (event,)      losses seen in the backhaul counters; dropped: the capture dropped packets
    """
    out = Split(np.zeros_like(lost), np.zeros_like(lost), lost.copy())
    for which in np.unique(gateway[gateway >= 0]):
        mine = np.flatnonzero(gateway == which)
        events = np.flatnonzero(event_gateway == which)
        begins = np.concatenate([begin[mine], event_begin[events]])
        ends = np.concatenate([end[mine], event_end[events]])
        order = np.argsort(begins, kind="stable")
        cluster = np.empty(len(order), np.int64)
        cluster[order] = clusters(begins[order], ends[order])
        own, theirs = cluster[: len(mine)], cluster[len(mine) :]
        size = int(cluster.max()) + 1
        missing = np.bincount(own, lost[mine], size).astype(np.int64)[own]
        backhaul = np.bincount(theirs, event_lost[events], size).astype(np.int64)[own]
        dropped = np.bincount(theirs, event_dropped[events], size)[own] > 0
        m, any_number = lost[mine], several[mine] & (backhaul > 0)
        upper = np.where(any_number, m, np.minimum(m, backhaul))
        lower = np.where(backhaul >= missing, m, np.maximum(0, backhaul - (missing - m)))
        lower[any_number] = 0
        out.air[mine] = m - upper
        out.backhaul[mine] = np.where(dropped, 0, lower)
        out.undecided[mine] = m - out.air[mine] - out.backhaul[mine]
    return out
