"""One link: what it sends, the damage on the air, and when its gateway hears it."""

from dataclasses import dataclass
from ipaddress import ip_address

import numpy as np
from numpy.typing import NDArray

from pcaptool.profile import Profile, WrapperField
from pcaptool.simulate import channel
from pcaptool.simulate.address import gateway_address, server_address
from pcaptool.simulate.messages import bounds, field_values, message_bits, moving
from pcaptool.simulate.plan import DAY, LinkPlan, Plan
from pcaptool.simulate.writer import copy_pieces

Ints = NDArray[np.int64]
Flags = NDArray[np.bool_]

CAPTURED, LOST_AIR, LOST_BACKHAUL = 0, 1, 2
FATES = ("captured", "lost_air", "lost_backhaul")
LATENCY = 2_000_000         # from the last bit on the air to the capture, ns
LEVEL = (-82.0, 3.0)        # mean and spread of a received level, dBm

# What a random draw is for: settings of one kind leave the draws of the others as they are.
TIMES, VALUES, LENGTHS, ERRORS, LOSSES, REPEATS, LATE, WRAPPER, BACKHAUL, FOREIGN = range(10)


def generator(plan: Plan, purpose: int, who: int = 0) -> np.random.Generator:
    """Return the random numbers of a purpose, for a link or a gateway."""
    return np.random.default_rng([plan.seed, purpose, who])


@dataclass(slots=True)
class Sent:
    """Transmissions, one row each; times in ns.

    link, gateway    int64  position of the link in the plan; number of its gateway
    sequence         int64  frames that the link sent before, repeats not counted
    counter          int64  below its modulus; -1 without one
    sent, arrives    int64  first bit on the air; whole datagram at the capture
    fate             uint8  CAPTURED, LOST_AIR or LOST_BACKHAUL
    kind             int64  message kind of the profile, -1 for none
    air              uint8 (byte,)   air frames as heard, one behind the other, last bits 0 to a whole byte
    air_start, air_bits  int64       where in it, and bits of each
    error_frame, error_position  int64 (error,)  row and bit position on the air of every wrong bit
    values           field -> int64 raw values; present  field -> bool, which messages have it
    wrapper          wrapper field -> int64 raw values that the transmission decides
    capture, packet, slot, held  int64  capture file, packet in it, place in the datagram, bytes of the air
                                 frame that the snap length left; -1 when not captured
    """

    link: Ints
    gateway: Ints
    sequence: Ints
    counter: Ints
    sent: Ints
    arrives: Ints
    fate: NDArray[np.uint8]
    kind: Ints
    repeated: Flags
    late: Flags
    restart: Flags
    cut: Flags
    air: NDArray[np.uint8]
    air_start: Ints
    air_bits: Ints
    error_frame: Ints
    error_position: Ints
    values: dict[str, Ints]
    present: dict[str, Flags]
    wrapper: dict[str, Ints]
    capture: Ints
    packet: Ints
    slot: Ints
    held: Ints

    def __len__(self) -> int:
        return len(self.link)

    @property
    def air_bytes(self) -> Ints:
        """Bytes of each air frame."""
        return -(-self.air_bits // 8)


ROWS = ("link", "gateway", "sequence", "counter", "sent", "arrives", "fate", "kind", "repeated", "late",
        "restart", "cut", "air_bits", "capture", "packet", "slot", "held")


def join(parts: list[Sent]) -> Sent:
    """Return the transmissions of all links in order of sending."""
    rows = {name: np.concatenate([getattr(p, name) for p in parts]) for name in ROWS}
    first = np.cumsum([0, *(len(p) for p in parts)])
    base = np.cumsum([0, *(len(p.air) for p in parts)])
    air_start = np.concatenate([p.air_start + b for p, b in zip(parts, base, strict=False)])
    order = np.lexsort((rows["repeated"], rows["link"], rows["sent"]))
    place = np.empty_like(order)
    place[order] = np.arange(len(order))
    frame = place[np.concatenate([p.error_frame + f for p, f in zip(parts, first, strict=False)])]
    position = np.concatenate([p.error_position for p in parts])
    by_frame = np.lexsort((position, frame))
    tables: list[dict[str, NDArray[np.generic]]] = []
    for table, absent in (("values", np.int64), ("present", np.bool_), ("wrapper", np.int64)):
        names = dict.fromkeys(name for p in parts for name in getattr(p, table))
        tables.append({name: np.concatenate([
            getattr(p, table).get(name, np.zeros(len(p), absent)) for p in parts])[order] for name in names})
    return Sent(**{name: v[order] for name, v in rows.items()}, air=np.concatenate([p.air for p in parts]),
                air_start=air_start[order], error_frame=frame[by_frame], error_position=position[by_frame],
                values=tables[0], present=tables[1], wrapper=tables[2])     # type: ignore[arg-type]


def transmit(profile: Profile, plan: Plan, index: int) -> Sent:
    """Return the transmissions of a link of the plan, repeats behind what they repeat."""
    link = plan.link[index]
    ideal, moment = _times(plan, link, index)
    n = len(ideal)
    total, restart = _counters(link, ideal)
    modulo = profile.counter.modulo if profile.counter else 0
    counter = total % modulo if modulo else np.full(n, -1, np.int64)
    wrapper = _wrapper(profile, plan, index, counter, ideal)
    air, air_bits, kind, values, present = _encode(profile, plan, index, counter, ideal, wrapper)
    if profile.counter and "." not in profile.counter.field:
        counter = np.where(present.get(profile.counter.field, False), counter, -1)

    again = np.zeros(n, np.bool_)
    again[channel.independent(generator(plan, REPEATS, index), n, link.repeat)] = True
    which = np.sort(np.concatenate([np.arange(n), np.flatnonzero(again)]))
    repeated = np.append(False, which[1:] == which[:-1])[: len(which)]
    gap = np.diff(moment, append=moment[-1:] + round(link.interval * 1e9))
    sent = moment[which] + repeated * (gap[which] // 4)
    sent -= sent % 1000

    dead = channel.lost(generator(plan, LOSSES, index), len(which), link.loss, link.loss_burst)
    for begin, end in link.outage:
        dead |= (ideal[which] >= begin) & (ideal[which] < end)
    bits = air_bits[which]
    flat = _errors(plan, index, (sent - plan.start_ns) / 1e9, sent, bits)
    behind = bits.cumsum()
    frame = np.searchsorted(behind, flat, side="right")
    position = flat - (behind - bits)[frame]
    heard = ~dead[frame]
    frame, position = frame[heard], position[heard]

    size = -(-bits // 8)
    start = size.cumsum() - size
    octets = np.zeros(int(size.sum()), np.uint8)
    clean = -(-air_bits // 8)
    copy_pieces(octets, start, air, (clean.cumsum() - clean)[which], size)
    np.bitwise_xor.at(octets, start[frame] + position // 8, (0x80 >> position % 8).astype(np.uint8))

    unit = 1 if plan.nanoseconds else 1000
    arrives = sent + (bits / link.bit_rate * 1e9).astype(np.int64) + LATENCY
    late, arrives = _late(plan, index, arrives, dead, repeated | again[which])
    gateway = np.full(len(which), gateway_of(profile, link), np.int64)
    unknown = np.full(len(which), -1, np.int64)
    return Sent(
        np.full(len(which), index, np.int64), gateway, which, counter[which], sent, arrives - arrives % unit,
        np.where(dead, LOST_AIR, CAPTURED).astype(np.uint8), kind[which],
        repeated, late, restart[which] & ~repeated,
        np.zeros(len(which), np.bool_), octets, start, bits, frame, position,
        {name: v[which] for name, v in values.items()}, {name: v[which] for name, v in present.items()},
        {name: v[which] for name, v in wrapper.items()},
        unknown, unknown.copy(), unknown.copy(), unknown.copy())


def _times(plan: Plan, link: LinkPlan, index: int) -> tuple[NDArray[np.float64], Ints]:
    """Return when frames are due, s after the start, and when they are sent, ns since 1970."""
    duration, first, interval = (round(v * 1e9) for v in (plan.duration, link.first, link.interval))
    n = max(-(-(duration - first) // max(interval, 1)), 0)
    n = n if link.frames is None else min(n, link.frames)
    due = first + np.arange(n) * interval
    wait = generator(plan, TIMES, index).random(n) * (link.jitter * interval)
    return due / 1e9, plan.start_ns + due + wait.astype(np.int64)


def _counters(link: LinkPlan, ideal: NDArray[np.float64]) -> tuple[Ints, Flags]:
    """Return (counter of every frame without its modulus, which are the first after a restart)."""
    count = link.first_counter + np.arange(len(ideal))
    restart = np.zeros(len(ideal), np.bool_)
    for event in sorted(link.restart, key=lambda e: e.at):
        first = int(np.searchsorted(ideal, event.at))
        if first < len(ideal):
            count[first:] = event.to + np.arange(len(ideal) - first)
            restart[first] = True
    return count, restart


def gateway_field(profile: Profile) -> str | None:
    """Return the wrapper field that tells gateways apart, None when there is none."""
    by = (*profile.backhaul.by, *profile.link.by) if profile.backhaul else profile.link.by
    return next((r.removeprefix("wrapper.") for r in by if r.startswith("wrapper.")), None)


def gateway_of(profile: Profile, link: LinkPlan) -> int:
    """Return the number of a link's gateway: as given, as its key says, or 1."""
    if link.gateway is not None:
        return link.gateway
    return link.key.get(f"wrapper.{gateway_field(profile)}", 1)


def link_name(profile: Profile, link: LinkPlan) -> str:
    """Return the link's name: the values of the profile's key, with / between."""
    words = []
    for reference in profile.link.by:
        if reference == "carrier.source":
            words.append(str(ip_address(gateway_address(profile, gateway_of(profile, link)))))
        elif reference == "carrier.destination":
            words.append(str(ip_address(server_address(profile))))
        else:
            value = link.key.get(reference, 0)
            if reference == f"wrapper.{gateway_field(profile)}":
                value = gateway_of(profile, link)
            words.append(profile.find_field(reference).names.get(value, str(value)))
    return "/".join(words)


def _wrapper(profile: Profile, plan: Plan, index: int, counter: Ints, ideal: NDArray[np.float64]
             ) -> dict[str, Ints]:
    """Return the wrapper fields that a transmission decides: name -> int64 (frame,)."""
    link, rng, out = plan.link[index], generator(plan, WRAPPER, index), {}
    made = {profile.wrapper.frames, profile.wrapper.frame_bytes,
            profile.backhaul.counter.removeprefix("wrapper.") if profile.backhaul else None}
    for name, f in profile.wrapper_fields.items():
        given = link.fields.get(f"wrapper.{name}")
        if name in made or f.must_be is not None:
            continue
        if profile.counter and profile.counter.field == f"wrapper.{name}":
            out[name] = counter
        elif name == gateway_field(profile):
            out[name] = np.full(len(ideal), gateway_of(profile, link), np.int64)
        elif f"wrapper.{name}" in link.key:
            out[name] = np.full(len(ideal), link.key[f"wrapper.{name}"], np.int64)
        elif given is not None:
            out[name] = moving(rng, f, ideal, plan.duration, given)
        else:
            out[name] = _unplanned(profile, f, rng, len(ideal))
    return out


def _unplanned(profile: Profile, f: WrapperField, rng: np.random.Generator, n: int) -> Ints:
    """Return values for a wrapper field that the plan says nothing of: a level, what a step needs, or 0."""
    low, high = bounds(f)
    if f.unit == "dBm":
        return np.clip(np.rint((rng.normal(*LEVEL, n) - f.offset) / f.scale), low, high).astype(np.int64)
    if f.name in profile.chain.needs:
        return rng.integers(low, high, n, endpoint=True)
    return np.zeros(n, np.int64)


def _encode(profile: Profile, plan: Plan, index: int, counter: Ints, ideal: NDArray[np.float64],
            wrapper: dict[str, Ints]
            ) -> tuple[NDArray[np.uint8], Ints, Ints, dict[str, Ints], dict[str, Flags]]:
    """Return (undamaged air frames in a row, bits of each, kind, field values, which are present)."""
    link, n = plan.link[index], len(ideal)
    rng = generator(plan, VALUES, index)
    names = [k.name for k in profile.message.kind]
    kinds: list[str | None] = list(link.kinds or names) or [None]
    kind = np.array([names.index(k) if k else -1 for k in kinds], np.int64)[np.arange(n) % len(kinds)]
    low, high = link.payload
    octets = generator(plan, LENGTHS, index).integers(low, high, n, endpoint=True)
    values: dict[str, Ints] = {}
    present: dict[str, Flags] = {}
    bits = np.zeros(n, np.int64)
    packed: list[tuple[Ints, NDArray[np.uint8]]] = []
    for number in np.unique(kind):
        name = names[number] if number >= 0 else None
        rows = np.flatnonzero(kind == number)
        own = field_values(profile, link, name, rng, counter[rows], ideal[rows], plan.duration)
        for f, v in own.items():
            values.setdefault(f, np.zeros(n, np.int64))[rows] = v
            present.setdefault(f, np.zeros(n, np.bool_))[rows] = True
        for length in np.unique(octets[rows]):
            some = np.flatnonzero(octets[rows] == length)
            payload = rng.integers(0, 256, (len(some), length), np.uint8)
            message = message_bits(profile, name, {f: v[some] for f, v in own.items()}, payload)
            where = rows[some]
            coded = profile.chain.encode(message, {w: wrapper[w][where] for w in profile.chain.needs})
            bits[where] = coded.shape[1]
            packed.append((where, np.packbits(coded, axis=1)))
    size = -(-bits // 8)
    start = size.cumsum() - size
    air = np.zeros(int(size.sum()), np.uint8)
    for where, rows_of_octets in packed:
        air[start[where][:, None] + np.arange(rows_of_octets.shape[1])] = rows_of_octets
    return air, bits, kind, values, present


def _errors(plan: Plan, index: int, seconds: NDArray[np.float64], sent: Ints, bits: Ints
            ) -> channel.Positions:
    """Return the wrong bits of a link: positions in the stream of all its air bits."""
    link, rng = plan.link[index], generator(plan, ERRORS, index)
    rate = np.full(len(bits), link.bit_error_rate)
    if link.bit_error_rate_by_time:
        moment, level = zip(*sorted(link.bit_error_rate_by_time), strict=True)
        rate = np.minimum(rate + np.interp((sent / 1e9) % DAY, moment, level, period=DAY), 1.0)
    found = [channel.independent_by_frame(rng, bits, rate)]
    if link.burst:
        b = link.burst
        found.append(channel.bursts(rng, bits, b.to_bad, b.to_good, b.wrong, b.wrong_in_good, fresh=b.fresh))
    if link.periodic:
        p = link.periodic
        runs = np.full(len(bits), not p.during)
        for begin, end in p.during:
            runs |= (seconds >= begin) & (seconds < end)
        hit = channel.periodic(rng, bits, sent - plan.start_ns, link.bit_rate, p.every, p.bits, p.wrong)
        found.append(hit[runs[np.searchsorted(bits.cumsum(), hit, side="right")]])
    return np.unique(np.concatenate(found)) if len(found) > 1 else found[0]


def _late(plan: Plan, index: int, arrives: Ints, dead: Flags, spared: Flags) -> tuple[Flags, Ints]:
    """Return (which frames a later one overtakes, when all arrive): late ones so many places later."""
    link, n = plan.link[index], len(arrives)
    late = np.zeros(n, np.bool_)
    late[channel.independent(generator(plan, LATE, index), n, link.late)] = True
    late &= ~dead & ~spared
    prompt = np.flatnonzero(~dead & ~late)
    behind = np.searchsorted(prompt, np.flatnonzero(late))          # prompt frames before a late one
    late[np.flatnonzero(late)[behind >= len(prompt)]] = False       # nothing follows: it is in turn
    rows = np.flatnonzero(late)
    behind = behind[behind < len(prompt)]
    target = np.minimum(behind + link.late_places - 1, len(prompt) - 1)
    room = np.diff(arrives[prompt], append=arrives[prompt][-1:] + round(link.interval * 1e9))
    out = arrives.copy()
    out[rows] = (arrives[prompt] + room // 4)[target]
    return late, out
