"""Messages through the chain, through a channel, over a backhaul, into captures, with the truth beside."""

from dataclasses import dataclass, field
from ipaddress import ip_network
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from pcaptool.problem import Problem, UsageError
from pcaptool.profile import Profile, encode_fields, fields_of
from pcaptool.simulate import channel
from pcaptool.simulate.packets import Packet, foreign_packet, pcap_bytes, udp_packet, write_capture
from pcaptool.simulate.plan import LinkPlan, Plan
from pcaptool.table import Column, csv_text

TRUTH = (
    Column("link", "string", "", "values of the profile's link key, / between"),
    Column("sequence", "int64", "", "frames that the link sent before, repeats not counted"),
    Column("counter", "int64", "", "the counter field; empty when the profile has none"),
    Column("sent", "timestamp", "UTC", "when the frame was sent"),
    Column("captured", "timestamp", "UTC", "when its datagram was captured; empty when lost"),
    Column("fate", "string", "", "captured | lost_air | lost_backhaul"),
    Column("capture", "int64", "", "which capture file, from 0; empty when lost"),
    Column("packet", "int64", "", "position of the packet in its capture, from 0; empty when lost"),
    Column("slot", "int64", "", "position among the frames of the datagram"),
    Column("repeated", "bool", "", "the same frame sent again"),
    Column("late", "bool", "", "delivered after later frames"),
    Column("restart", "bool", "", "the first frame after a restart"),
    Column("cut", "bool", "", "the snap length cut its packet"),
    Column("wrong_bits", "int64", "bit", "bits that the channel flipped"),
    Column("positions", "string", "", "their positions on the air, blanks between"),
)


@dataclass(slots=True)
class Frame:
    """One transmission and what became of it; times in ns."""

    link: str
    gateway: int
    sequence: int
    counter: int | None
    sent: int
    arrives: int
    air: bytes
    wrong: tuple[int, ...]
    context: dict[str, int]
    fate: str = "captured"
    repeated: bool = False
    late: bool = False
    restart: bool = False
    cut: bool = False
    capture: int | None = None
    packet: int | None = None
    slot: int = 0


@dataclass(slots=True)
class Simulation:
    """Captures and the truth of every frame."""

    captures: list[bytes]
    frames: list[Frame] = field(default_factory=list)

    def truth(self) -> str:
        """Return the truth as CSV, in order of sending."""
        rows = []
        for f in self.frames:
            heard = f.fate == "captured"
            rows.append({"link": f.link, "sequence": f.sequence, "counter": f.counter, "sent": f.sent,
                         "captured": f.arrives if heard else None, "fate": f.fate, "capture": f.capture,
                         "packet": f.packet, "slot": f.slot if heard else None, "repeated": f.repeated,
                         "late": f.late, "restart": f.restart, "cut": f.cut, "wrong_bits": len(f.wrong),
                         "positions": " ".join(str(p) for p in f.wrong)})
        return csv_text(TRUTH, rows)

    def write(self, path: str | Path) -> list[Path]:
        """Write the captures, numbered when there are several, and NAME.truth.csv; return all paths."""
        out = Path(path)
        stem = out.name.split(".")[0]
        suffix = out.name[len(stem) :] or ".pcap"
        many = len(self.captures) > 1
        names = [out.with_name(f"{stem}-{i + 1:02d}{suffix}" if many else stem + suffix)
                 for i in range(len(self.captures))]
        for name, data in zip(names, self.captures, strict=True):
            write_capture(name, data)
        truth = out.with_name(f"{stem}.truth.csv")
        truth.write_bytes(self.truth().encode())
        return [*names, truth]


def simulate(profile: Profile, plan: Plan) -> Simulation:
    """Simulate a plan; the same profile and plan give the same bytes."""
    frames: list[Frame] = []
    for index, link in enumerate(plan.link):
        frames += _transmit(profile, plan, link, index)
    captures = _deliver(profile, plan, frames)
    frames.sort(key=lambda f: (f.sent, f.link, f.repeated))
    return Simulation(captures, frames)


def _transmit(profile: Profile, plan: Plan, link: LinkPlan, index: int) -> list[Frame]:
    """Return the transmissions of one link with their channel errors."""
    rng = np.random.default_rng([plan.seed, index])
    n = int((plan.duration - link.first) / link.interval)
    ideal = link.first + np.arange(n) * link.interval
    offset = ideal + rng.uniform(-link.jitter, link.jitter, n) * link.interval / 2 + link.jitter * link.interval
    sent = plan.start_ns + (offset * 1e6).astype(np.int64) * 1000
    count, restarts = _counters(link, ideal)
    repeated = rng.random(n) < link.repeat
    which = np.sort(np.concatenate([np.arange(n), np.flatnonzero(repeated)]))
    again = np.concatenate([[False], which[1:] == which[:-1]])
    sent_at = sent[which] + again * int(0.3 * link.interval * 1e9)
    lost = channel.losses(rng, len(which), link.loss, link.loss_burst)
    for begin, end in link.outage:
        lost |= (ideal[which] >= begin) & (ideal[which] < end)
    late = (rng.random(len(which)) < link.late) & ~again & ~lost
    arrives = sent_at + 2_000_000 + late * int((link.late_places + 0.5) * link.interval * 1e9)
    kinds = link.kinds or tuple(k.name for k in profile.message.kind)
    air: list[bytes] = [b""] * len(which)
    wrong: list[tuple[int, ...]] = [()] * len(which)
    context = {name: np.full(n, link.key.get(f"wrapper.{name}", 0), np.int64) for name in profile.chain.needs}
    for k, kind in enumerate(kinds or (None,)):
        mine = np.arange(k, n, max(len(kinds), 1))
        coded = profile.chain.encode(_messages(profile, link, rng, count[mine], kind),
                                     {name: v[mine] for name, v in context.items()})
        rows = np.flatnonzero(np.isin(which, mine))
        bits = coded[np.searchsorted(mine, which[rows])]
        errors = _errors(rng, link, ideal[which[rows]], bits.shape[1]) & ~lost[rows][:, None]
        packed = np.packbits(bits ^ errors, axis=1)
        for j, row in enumerate(rows):
            air[row] = packed[j].tobytes()
            wrong[row] = tuple(int(p) for p in np.flatnonzero(errors[j]))
    name, gateway = _name(profile, link), link.key.get(_gateway_field(profile), 0)
    modulo = profile.counter.modulo if profile.counter else 0
    wrapper_values = {k.removeprefix("wrapper."): v for k, v in link.key.items() if k.startswith("wrapper.")}
    if profile.counter and profile.counter.field.startswith("wrapper."):
        field_name = profile.counter.field.removeprefix("wrapper.")
        extra = [{field_name: int(count[i] % modulo)} for i in which]
    else:
        extra = [{} for _ in which]
    return [Frame(name, gateway, int(which[j]), int(count[which[j]] % modulo) if modulo else None, int(sent_at[j]),
                  int(arrives[j]), air[j], wrong[j], wrapper_values | extra[j], "lost_air" if lost[j] else "captured",
                  bool(again[j]), bool(late[j]), bool(restarts[which[j]] and not again[j]))
            for j in range(len(which))]


def _counters(link: LinkPlan, ideal: NDArray[np.float64]) -> tuple[NDArray[np.int64], NDArray[np.bool_]]:
    """Return (unbounded counter of every frame, which are the first after a restart)."""
    count = link.first_counter + np.arange(len(ideal))
    restarts = np.zeros(len(ideal), np.bool_)
    for moment in link.restart_at:
        first = int(np.searchsorted(ideal, moment))
        if first < len(ideal):
            count[first:] = np.arange(len(ideal) - first)
            restarts[first] = True
    return count, restarts


def _messages(profile: Profile, link: LinkPlan, rng: np.random.Generator, count: NDArray[np.int64],
              kind: str | None) -> NDArray[np.uint8]:
    """Return messages with the link's key, its counter, and slowly moving measurements."""
    fixed = {n: v for k in profile.message.kind if k.name == kind for n, v in k.when.items()}
    values: dict[str, NDArray[np.int64]] = {}
    for f in fields_of(profile, kind):
        if f.name.startswith("_") or f.name in fixed or f.must_be is not None:
            continue
        if profile.counter and f.name == profile.counter.field:
            values[f.name] = count % profile.counter.modulo
        elif f.name in link.key:
            values[f.name] = np.full(len(count), link.key[f.name], np.int64)
        elif f.names:
            values[f.name] = rng.choice(sorted(f.names), len(count)).astype(np.int64)
        else:
            low, high = (-(1 << (f.bits - 1)), (1 << (f.bits - 1)) - 1) if f.signed else (0, (1 << min(f.bits, 62)) - 1)
            walk = rng.integers(-1, 2, len(count)).cumsum() * max(high // 400, 1)
            values[f.name] = np.clip((low + high) // 2 + walk, low, high)
    if not values:
        values["_"] = np.zeros(len(count), np.int64)
    return encode_fields(profile, values, kind)


def _errors(rng: np.random.Generator, link: LinkPlan, ideal: NDArray[np.float64], bits: int) -> NDArray[np.bool_]:
    rate = np.full(len(ideal), link.bit_error_rate)
    for weak in link.weak:
        rate[(ideal >= weak.begin) & (ideal < weak.end)] = weak.bit_error_rate
    errors = channel.independent_errors(rng, len(ideal), bits, rate)
    if link.burst:
        b = link.burst
        errors |= channel.burst_errors(rng, len(ideal), bits, b.to_bad, b.to_good, b.wrong)
    if link.periodic:
        p = link.periodic
        runs = rng.random(len(ideal)) < p.share
        errors |= channel.periodic_bursts(rng, len(ideal), bits, p.period, p.length, p.wrong) & runs[:, None]
    return errors


def _gateway_field(profile: Profile) -> str:
    by = profile.backhaul.by if profile.backhaul else profile.link.by
    return next((r for r in by if r.startswith("wrapper.")), "")


def _name(profile: Profile, link: LinkPlan) -> str:
    words = []
    for reference in profile.link.by:
        value = link.key.get(reference, 0)
        names = {} if reference.startswith("carrier.") else profile.find_field(reference).names
        words.append(names.get(value, str(value)))
    return "/".join(words)


def _deliver(profile: Profile, plan: Plan, frames: list[Frame]) -> list[bytes]:
    """Put the frames that gateways heard into datagrams, lose some, and capture the rest."""
    heard = sorted((f for f in frames if f.fate == "captured"), key=lambda f: (f.arrives, f.link, f.sequence))
    packets: list[tuple[int, bytes, list[Frame]]] = []
    numbers: dict[int, int] = {}
    rngs: dict[int, np.random.Generator] = {}
    waiting: dict[int, list[Frame]] = {}
    for f in heard:
        group = waiting.setdefault(f.gateway, [])
        group.append(f)
        if len(group) >= plan.per_datagram:
            _send(profile, plan, group, numbers, rngs, packets)
            waiting[f.gateway] = []
    for group in waiting.values():
        if group:
            _send(profile, plan, group, numbers, rngs, packets)
    rng = np.random.default_rng([plan.seed, 1 << 20])
    moments = np.sort(rng.uniform(0, plan.duration, plan.foreign))
    for k, moment in enumerate(moments):
        packets.append((plan.start_ns + int(moment * 1e6) * 1000, foreign_packet(rng, k), []))
    packets.sort(key=lambda p: p[0])
    span = int(plan.duration * 1e9) // plan.parts
    files: list[list[Packet]] = [[] for _ in range(plan.parts)]
    for time, data, group in packets:
        which = min(max((time - plan.start_ns) // span, 0), plan.parts - 1)
        for f in group:
            f.capture, f.packet, f.arrives = which, len(files[which]), time
            f.cut = bool(plan.snap_length) and len(data) > plan.snap_length
        files[which].append(Packet(time, data))
    return [pcap_bytes(f, plan.snap_length, plan.nanoseconds) for f in files]


def _send(profile: Profile, plan: Plan, group: list[Frame], numbers: dict[int, int],
          rngs: dict[int, np.random.Generator], packets: list[tuple[int, bytes, list[Frame]]]) -> None:
    """Make one datagram of a gateway, lost on the backhaul or captured."""
    gateway = group[0].gateway
    rng = rngs.setdefault(gateway, np.random.default_rng([plan.seed, 1 << 21, gateway]))
    number = numbers[gateway] = numbers.get(gateway, -1) + 1
    payload = _datagram(profile, group, number, rng)
    rate = plan.backhaul_loss.get(str(gateway), plan.backhaul_loss.get("*", 0.0))
    for slot, f in enumerate(group):
        f.slot = slot
    if rng.random() < rate:
        for f in group:
            f.fate = "lost_backhaul"
        return
    net = ip_network(profile.carrier.net[0]) if profile.carrier.net else ip_network("10.61.0.0/16")
    base = int(net.network_address) if net.version == 4 else 0x0A3D0000
    port = profile.carrier.port[0]
    data = udp_packet(payload, base + 10 + gateway % 200, base + 1, port, port, (number + 1) & 0xFFFF)
    packets.append((group[-1].arrives, data, list(group)))


def _datagram(profile: Profile, group: list[Frame], number: int, rng: np.random.Generator) -> bytes:
    w = profile.wrapper
    counter = profile.backhaul.counter.removeprefix("wrapper.") if profile.backhaul else ""
    out = bytearray()
    level = int(rng.normal(-82, 3))

    def put(fields: tuple, f: Frame) -> None:   # type: ignore[type-arg]
        for field_ in fields:
            top = 1 << (8 * field_.bytes)
            if field_.must_be is not None:
                value = field_.must_be
            elif field_.name == counter:
                value = number
            elif field_.name == w.frame_bytes:
                value = len(f.air) - w.frame_bytes_plus
            elif field_.name == w.frames:
                value = len(group)
            elif field_.name in f.context:
                value = f.context[field_.name]
            else:
                value = level if field_.signed else 0
            if field_.name == w.frame_bytes and value >= top:
                raise UsageError(Problem(file=profile.origin, place=f"wrapper.{field_.name}", found=f"{value}",
                                         expected=f"less than {top}", fix="give the size field more bytes"))
            out.extend((value % top).to_bytes(field_.bytes, field_.order or w.order))

    put(w.before, group[0])
    for f in group:
        put(w.each, f)
        out.extend(f.air)
    put(w.after, group[-1])
    return bytes(out)
