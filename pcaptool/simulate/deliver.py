"""Gateways put the frames they heard into datagrams, a backhaul loses some, a capture records the rest."""

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from pcaptool.problem import Problem, UsageError
from pcaptool.profile import Profile, WrapperField
from pcaptool.simulate import channel
from pcaptool.simulate.address import gateway_address, server_address
from pcaptool.simulate.foreign import foreign_packets
from pcaptool.simulate.messages import bounds
from pcaptool.simulate.plan import Plan
from pcaptool.simulate.transmit import BACKHAUL, CAPTURED, FOREIGN, LOST_BACKHAUL, Sent, generator
from pcaptool.simulate.writer import HEADERS, LONGEST, Pieces, copy_pieces, pcap_bytes, put_field, udp_packets

Ints = NDArray[np.int64]


def deliver(profile: Profile, plan: Plan, sent: Sent) -> list[bytes]:
    """Return the capture files, and enter in ``sent`` what became of every frame."""
    heard = np.flatnonzero(sent.fate == CAPTURED)
    heard = heard[np.lexsort((heard, sent.arrives[heard]))]
    datagram = _groups(profile, plan, sent, heard)
    order = np.argsort(datagram, kind="stable")
    heard, datagram = heard[order], datagram[order]
    first = np.flatnonzero(np.diff(datagram, prepend=-1))
    slot = np.arange(len(heard)) - np.repeat(first, np.diff(first, append=len(heard)))
    time = np.maximum.reduceat(sent.arrives[heard], first) if len(first) else first
    gateway = sent.gateway[heard[first]]
    number = np.zeros(len(first), np.int64)         # of the datagram among its gateway's
    kept = np.ones(len(first), np.bool_)
    for g in np.unique(gateway):
        rows = np.flatnonzero(gateway == g)
        number[rows] = np.arange(len(rows))
        kept[rows] = ~_lost_datagrams(plan, int(g), time[rows])
    sent.slot[heard], sent.arrives[heard] = slot, time[datagram]
    sent.fate[heard[~kept[datagram]]] = LOST_BACKHAUL
    alive = kept[datagram]
    heard, slot = heard[alive], slot[alive]
    again = (kept.cumsum() - 1)[datagram[alive]]    # the datagrams that are captured, numbered anew
    ours, air_at = _packets(profile, sent, heard, again, gateway[kept], number[kept])
    return _capture(plan, sent, heard, again, ours, time[kept], air_at)


def _groups(profile: Profile, plan: Plan, sent: Sent, heard: Ints) -> Ints:
    """Return the datagram of every heard frame, numbered in order of time: int64 (frame,).

    A gateway puts frames together that agree in all fields that stand once in a datagram.
    """
    if plan.per_datagram == 1 or not len(heard):
        return np.arange(len(heard))
    w = profile.wrapper
    once = [f.name for f in (*w.before, *w.after)]
    deciding = _deciding(profile) & set(once) & set(sent.wrapper)
    shared = [sent.wrapper[name][heard] for name in sorted(deciding)]
    if w.frame_bytes in once:
        shared.append(sent.air_bytes[heard])
    keys = np.stack([sent.gateway[heard], *shared], axis=1)
    queue = np.unique(keys, axis=0, return_inverse=True)[1].reshape(-1)
    by_queue = np.argsort(queue, kind="stable")
    start = np.flatnonzero(np.diff(queue[by_queue], prepend=-1))
    place = np.arange(len(heard)) - np.repeat(start, np.diff(start, append=len(heard)))
    opens = np.zeros(len(heard), np.int64)
    opens[by_queue] = place % plan.per_datagram == 0
    group = np.empty(len(heard), np.int64)
    group[by_queue] = opens[by_queue].cumsum() - 1
    last = np.zeros(int(group.max()) + 1, np.int64)
    np.maximum.at(last, group, np.arange(len(heard)))               # sent off with its last frame
    rank = np.empty_like(last)
    rank[np.argsort(last)] = np.arange(len(last))
    return rank[group]


def _deciding(profile: Profile) -> set[str]:
    """Return wrapper fields that must be true of every frame of a datagram."""
    names = {r.removeprefix("wrapper.") for r in profile.link.by if r.startswith("wrapper.")}
    names |= set(profile.chain.needs)
    if profile.counter and profile.counter.field.startswith("wrapper."):
        names.add(profile.counter.field.removeprefix("wrapper."))
    return names


def _lost_datagrams(plan: Plan, gateway: int, time: Ints) -> NDArray[np.bool_]:
    """Return which datagrams of a gateway get lost on the backhaul: bool (datagram,)."""
    b = plan.backhaul_of(gateway)
    out = channel.lost(generator(plan, BACKHAUL, gateway), len(time), b.loss, b.loss_burst)
    seconds = (time - plan.start_ns) / 1e9
    for begin, end in b.outage:
        out |= (seconds >= begin) & (seconds < end)
    return out


def _packets(profile: Profile, sent: Sent, heard: Ints, datagram: Ints, gateway: Ints, number: Ints
             ) -> tuple[Pieces, Ints]:
    """Return (packets of some datagrams, where in its packet each air frame begins).

    heard            rows of the frames, by datagram and slot
    datagram         int64 (frame,)     datagram of each
    gateway, number  int64 (datagram,)  its gateway, and how many that sent before
    """
    w, n = profile.wrapper, len(gateway)
    before, each, after = (sum(f.bytes for f in group) for group in (w.before, w.each, w.after))
    air = sent.air_bytes[heard]
    count = np.bincount(datagram, minlength=n)
    size = before + after + np.bincount(datagram, each + air, n).astype(np.int64)
    if len(size) and size.max() > LONGEST:
        raise UsageError(Problem(
            file=profile.origin, place="per_datagram", found=f"a datagram of {size.max()} bytes",
            expected=f"at most {LONGEST}", fix="put fewer frames together"))
    start = size.cumsum() - size
    first = count.cumsum() - count                          # frame that opens each datagram
    inner = (each + air).cumsum() - (each + air)
    at = start[datagram] + before + inner - inner[first[datagram]]
    buffer = np.zeros(int(size.sum()), np.uint8)
    copy_pieces(buffer, at + each, sent.air, sent.air_start[heard], air)
    made: dict[str, Ints] = {}                              # of every frame of ours
    if profile.backhaul:
        made[profile.backhaul.counter.removeprefix("wrapper.")] = (number % profile.backhaul.modulo)[datagram]
    if isinstance(w.frames, str):
        made[w.frames] = count[datagram]
    if isinstance(w.frame_bytes, str):
        made[w.frame_bytes] = air - w.frame_bytes_plus
        _check_size(profile, w.frame_bytes, made[w.frame_bytes])
    made |= {name: v[heard] for name, v in sent.wrapper.items() if name not in made}

    def put(fields: Sequence[WrapperField], place: Ints, rows: Ints) -> None:
        for f in fields:
            value = made[f.name][rows] if f.must_be is None else np.full(len(rows), f.must_be, np.int64)
            put_field(buffer, place, value, f.bytes, f.order or w.order)
            place = place + f.bytes

    put(w.before, start, first)
    put(w.each, at, np.arange(len(heard)))
    put(w.after, start + size - after, first)
    source = np.zeros(n, np.int64)
    for g in np.unique(gateway):
        source[gateway == g] = gateway_address(profile, int(g))
    packets = udp_packets(Pieces(buffer, start, size), source, np.full(n, server_address(profile)),
                          np.full(n, profile.carrier.port[0]), number + 1)
    return packets, at + each - start[datagram] + HEADERS


def _check_size(profile: Profile, name: str, size: Ints) -> None:
    low, high = bounds(profile.wrapper_fields[name])
    if len(size) and not low <= size.min() <= size.max() <= high:
        raise UsageError(Problem(
            file=profile.origin, place=f"wrapper.{name}",
            found=f"air frames for which it is {size.min()} to {size.max()}", expected=f"{low} to {high}",
            fix=f"give {name} more bytes, or set frame_bytes_plus"))


def _capture(plan: Plan, sent: Sent, heard: Ints, datagram: Ints, ours: Pieces, time: Ints, air_at: Ints
             ) -> list[bytes]:
    """Return the capture files of our packets and others; enter file, packet and cut of every frame."""
    rng = generator(plan, FOREIGN)
    unit = 1 if plan.nanoseconds else 1000
    moments = plan.start_ns + np.sort(rng.integers(0, max(round(plan.duration * 1e9), 1), plan.foreign))
    theirs = foreign_packets(rng, plan.foreign)
    times = np.concatenate([time, moments - moments % unit])
    everything = Pieces(np.concatenate([ours.buffer, theirs.buffer]),
                        np.concatenate([ours.start, theirs.start + len(ours.buffer)]),
                        np.concatenate([ours.size, theirs.size]))
    order = np.argsort(times, kind="stable")
    files, span = plan.capture_files
    file = np.clip((times - plan.start_ns) // span, 0, files - 1)
    place = np.empty(len(times), np.int64)
    out = []
    for number in range(files):
        rows = order[file[order] == number]
        place[rows] = np.arange(len(rows))
        packets = Pieces(everything.buffer, everything.start[rows], everything.size[rows])
        out.append(pcap_bytes(packets, times[rows], snap_length=plan.snap_length,
                              nanoseconds=plan.nanoseconds, byte_order=plan.byte_order))
    sent.capture[heard], sent.packet[heard] = file[datagram], place[datagram]
    air, snap = sent.air_bytes[heard], plan.snap_length
    sent.held[heard] = np.clip(snap - air_at, 0, air) if snap else air
    sent.cut[heard] = bool(snap) & (ours.size[datagram] > snap)
    return out


def wrapper_holds_many(profile: Profile) -> bool:
    """Return whether datagrams of a profile can hold several air frames."""
    w = profile.wrapper
    return w.frame_bytes is not None and (bool(w.frames) or bool(w.each) or isinstance(w.frame_bytes, int))
