"""Draw up the rows of links, gaps and intervals from what the link pass has counted."""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from pcaptool.capture import natural
from pcaptool.links.arrival import RESOLVED
from pcaptool.links.follow import LinkFollower
from pcaptool.links.losses import Split, split_losses
from pcaptool.links.rates import effective_count, rate_interval

Row = dict[str, object]
MOST_PLACED = 5_000_000     # lost frames that are put in time bins one by one


@dataclass(slots=True)
class Gaps:
    """The gaps that hold missing frames, as arrays and as rows."""

    link: NDArray[np.int64]
    missing: NDArray[np.int64]
    corrupted: NDArray[np.int64]
    split: Split
    begin: NDArray[np.int64]        # ns, recorded time
    end: NDArray[np.int64]
    rows: list[Row]

    @property
    def lost(self) -> NDArray[np.int64]:
        return self.missing - self.corrupted


def gap_rows(follower: LinkFollower, names: Sequence[str], dropped: Sequence[tuple[int, int]]) -> Gaps:
    """Return the gaps of all links, with their losses split.

    dropped  (first, last) ns of captures that dropped packets themselves
    """
    links = follower.links
    gaps = links.gaps[: links.n_gaps]
    gaps = gaps[gaps["missing"] > 0]
    corrupted = np.minimum(gaps["corrupted"], gaps["missing"])
    lost = gaps["missing"] - corrupted
    gateway = np.full(len(gaps), -1, np.int64)
    if len(follower.link_gateway):
        known = gaps["link"] < len(follower.link_gateway)
        gateway[known] = follower.link_gateway[gaps["link"][known]]
    several = np.array([follower.profiles[p].wrapper.several for p, _ in follower.identity], np.bool_)
    events = follower.gateways.gaps[: follower.gateways.n_gaps]
    events = events[events["missing"] > 0]
    in_drops = np.zeros(len(events), np.bool_)
    for first, last in dropped:
        begin, end = events["from_order"] - events["shift"], events["to_order"] - events["shift"]
        in_drops |= (end >= first) & (begin <= last)
    split = split_losses(gateway, gaps["from_order"], gaps["to_order"], lost, events["link"], events["from_order"],
                         events["to_order"], events["missing"], in_drops,
                         several[gaps["link"]] if len(gaps) else np.zeros(0, np.bool_))
    begin, end = gaps["from_order"] - gaps["shift"], gaps["to_order"] - gaps["shift"]
    place = np.empty(len(names), np.int64)
    place[sorted(range(len(names)), key=lambda i: natural(names[i]))] = np.arange(len(names))
    order = np.lexsort((gaps["from_order"], place[gaps["link"]]))
    modulo = links.modulo[gaps["link"]] if len(gaps) else np.zeros(0, np.int64)
    columns: dict[str, list[object]] = {
        "link": [names[k] for k in gaps["link"][order].tolist()],
        "counter_before": (gaps["before"] % modulo)[order].tolist(),
        "counter_after": (gaps["after"] % modulo)[order].tolist(),
        "missing": gaps["missing"][order].tolist(), "corrupted": corrupted[order].tolist(),
        "lost": lost[order].tolist(), "lost_air": split.air[order].tolist(),
        "lost_backhaul": split.backhaul[order].tolist(), "lost_undecided": split.undecided[order].tolist(),
        "from": begin[order].tolist(), "to": end[order].tolist(),
        "resolved_by": [RESOLVED[k] for k in gaps["resolved"][order].tolist()],
    }
    rows: list[Row] = [dict(zip(columns, values, strict=True)) for values in zip(*columns.values(), strict=True)]
    return Gaps(gaps["link"], gaps["missing"], corrupted, split, begin, end, rows)


def link_rows(follower: LinkFollower, names: Sequence[str], gaps: Gaps) -> list[Row]:
    """Return one row per link, in natural order of names."""
    n = len(names)

    def per_link(values: NDArray[np.int64]) -> NDArray[np.int64]:
        return np.bincount(gaps.link, values, n).astype(np.int64) if n else np.zeros(0, np.int64)

    lost, air = per_link(gaps.lost), per_link(gaps.split.air)
    backhaul, undecided = per_link(gaps.split.backhaul), per_link(gaps.split.undecided)
    count, lossy = per_link(np.ones_like(gaps.link)), per_link((gaps.lost > 0).astype(np.int64))
    rows: list[Row] = []
    for i in sorted(range(n), key=lambda i: natural(names[i])):
        s = follower.links.states[i]
        if not s["heard"]:
            continue
        counted = s["extended"] >= 0
        usable = int(s["intact"] + s["corrected"])
        sent = usable - int(s["repeated"]) + int(s["corrupted"]) + int(s["short"]) + int(lost[i])
        corrupted = int(s["corrupted"])
        low, high = rate_interval(corrupted, sent, int(s["corrupted_runs"]))
        lost_low, lost_high = rate_interval(int(lost[i]), sent, int(lossy[i]))
        rows.append({
            "link": names[i], "profile": follower.profiles[follower.identity[i][0]].name,
            **{name: int(s[name]) for name in ("heard", "intact", "corrected", "unverified", "corrupted", "short")},
            **{name: int(s[name]) if counted else None for name in ("repeated", "late", "restarts")},
            "lost": int(lost[i]) if counted else None, "lost_air": int(air[i]) if counted else None,
            "lost_backhaul": int(backhaul[i]) if counted else None,
            "lost_undecided": int(undecided[i]) if counted else None, "sent": sent,
            "corrupted_percent": 100 * corrupted / sent if sent else None,
            "corrupted_low": 100 * low if sent else None, "corrupted_high": 100 * high if sent else None,
            "lost_percent": 100 * int(lost[i]) / sent if counted and sent else None,
            "lost_low": 100 * lost_low if counted and sent else None,
            "lost_high": 100 * lost_high if counted and sent else None,
            "lost_effective_count": effective_count(sent, int(lost[i]), int(lossy[i])) if counted and sent else None,
            "bits_corrected": int(s["bits_corrected"]),
            "bit_error_rate": int(s["bits_corrected"]) / int(s["bits_usable"]) if s["bits_usable"] else None,
            "headroom_worst": float(s["headroom_worst"]) if s["headroom_count"] else None,
            "headroom_mean": float(s["headroom_sum"] / s["headroom_count"]) if s["headroom_count"] else None,
            "gaps": int(count[i]) if counted else None,
            "longest_gap_s": int(s["longest"]) / 1e9 if usable > 1 else None,
            "interval_s": int(s["interval"]) / 1e9 if s["interval"] > 0 else None,
            "first_time": int(s["first_time"]) if s["heard"] else None,
            "last_time": int(s["last_time"]) if s["heard"] else None, "verdict": "",
        })
    return rows


def interval_rows(follower: LinkFollower, names: Sequence[str], gaps: Gaps) -> list[Row]:
    """Return one row per link and time bin in which something was heard or lost."""
    bins = follower.bins
    n, width, many = len(names), bins.width, bins.counts.shape[1]
    lost = np.zeros((n, many), np.int64)
    total = int(gaps.lost.sum())
    if many and total:
        if total <= MOST_PLACED:
            which = np.repeat(np.arange(len(gaps.lost)), gaps.lost)
            first = np.cumsum(gaps.lost) - gaps.lost
            number = np.arange(total) - first[which] + 1
            span = (gaps.end - gaps.begin)[which]
            due = gaps.begin[which] + (span * (number / (gaps.lost[which] + 1))).astype(np.int64)
            place, link, weight = (due - bins.start) // width, gaps.link[which], np.ones(total, np.int64)
        else:
            place, link, weight = (gaps.end - bins.start) // width, gaps.link, gaps.lost
        np.add.at(lost, (link, np.clip(place, 0, many - 1)), weight)
    rows: list[Row] = []
    for i in sorted(range(min(n, len(bins.counts))), key=lambda i: natural(names[i])):
        for b in np.flatnonzero(bins.counts[i].any(axis=1) | (lost[i] > 0)):
            intact, corrected, corrupted, short = (int(v) for v in bins.counts[i, b])
            start = bins.start + int(b) * width
            worst = float(bins.worst[i, b])
            rows.append({"link": names[i], "from": start, "to": start + width, "intact": intact,
                         "corrected": corrected, "corrupted": corrupted, "short": short, "lost": int(lost[i, b]),
                         "headroom_worst": worst if worst <= 1 else None})
    return rows
