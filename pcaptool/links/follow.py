"""Follow all links through their frames in canonical order, batch by batch."""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from pcaptool.frames.keys import KeyMaker
from pcaptool.frames.table import NO_COUNTER, NO_KEY
from pcaptool.links.arrival import GAP, LINK_STATE, SAMPLES, WAYS, find_copies, follow, new_links
from pcaptool.links.bins import Bins
from pcaptool.links.numbering import Numbering
from pcaptool.profile import Profile

COPY_WINDOW = 1_000_000_000             # ns in which a datagram recorded again is a copy ...
COPY_WINDOW_WITHOUT_IDENT = 1_000_000   # ... and when it has no IP identification
BUCKETS = 1 << 13           # a power of two
NO_GROUP = np.zeros(0, np.int64)
MOST_HOMES = 1 << 32
HOME = 1 << 63                          # marks the key of a link's home: frames of no known link


@dataclass(slots=True)
class FrameSlice:
    """What a link pass needs of some frames of one profile, in canonical order."""

    profile: int
    order: NDArray[np.int64]
    time: NDArray[np.int64]
    slot: NDArray[np.int16]
    digest: NDArray[np.uint64]
    state: NDArray[np.uint8]
    wrong_bits: NDArray[np.int32]
    headroom: NDArray[np.float32]
    air_bits: NDArray[np.int32]
    counter: NDArray[np.int64]
    key: NDArray[np.uint64]
    home: NDArray[np.uint64]
    backhaul: NDArray[np.int64]
    backhaul_key: NDArray[np.uint64]


class Counted:
    """Senders that count: links, or gateways with their datagrams. Grows as new ones appear."""

    def __init__(self) -> None:
        self.states = np.zeros(0, LINK_STATE)
        self.seen = np.zeros((0, 1), np.bool_)
        self.samples = np.zeros((0, SAMPLES), np.int64)
        self.modulo = np.zeros(0, np.int64)
        self.window = np.zeros(0, np.int64)
        self.verifies = np.zeros(0, np.bool_)
        self.run = np.zeros(0, np.int64)
        self.group = np.zeros(0, np.int64)      # links of one group share all of the key but the message's part
        self.gaps = np.zeros(1024, GAP)
        self.n_gaps = 0

    def __len__(self) -> int:
        return len(self.states)

    def grow(self, n: int, modulo: int, window: int, interval: int, verifies: bool) -> None:
        new = n - len(self.states)
        if new <= 0:
            return
        self.states = np.concatenate([self.states, new_links(new, np.full(new, interval, np.int64))])
        slots = max(self.seen.shape[1], window + 1)
        seen = np.zeros((n, slots), np.bool_)
        if slots != self.seen.shape[1] and len(self.seen):
            for link, state in enumerate(self.states[: len(self.seen)]):
                back = np.arange(min(self.seen.shape[1], max(int(state["extended"]) + 1, 0)))
                places = int(state["extended"]) - back
                seen[link, places % slots] = self.seen[link, places % self.seen.shape[1]]
        else:
            seen[: len(self.seen)] = self.seen
        self.seen = seen
        self.samples = np.concatenate([self.samples, np.zeros((new, SAMPLES), np.int64)])
        for name, value in (("modulo", modulo), ("window", window), ("run", 0), ("group", -1)):
            setattr(self, name, np.concatenate([getattr(self, name), np.full(new, value, np.int64)]))
        self.verifies = np.concatenate([self.verifies, np.full(new, verifies)])

    def follow(self, who: NDArray[np.int64], f: FrameSlice, counter: NDArray[np.int64],
               state: NDArray[np.uint8], group: NDArray[np.int64] = NO_GROUP) -> NDArray[np.uint8]:
        """Advance by some frames and return their arrival; ``who`` is changed where a guess was mended."""
        while len(self.gaps) < self.n_gaps + len(who):
            self.gaps = np.concatenate([self.gaps, np.zeros(len(self.gaps), GAP)])
        arrival, self.n_gaps = follow(
            who, counter, state, f.order, f.time, f.wrong_bits, f.headroom, f.air_bits, self.states, self.seen,
            self.samples, self.modulo, self.window, self.verifies, self.gaps, self.n_gaps, self.run, group,
            self.group)
        return arrival


class LinkFollower:
    """The link pass: copies out, links numbered, arrivals and gaps found, time bins filled."""

    def __init__(self, profiles: Sequence[Profile]) -> None:
        self.profiles = profiles
        self.makers = [KeyMaker(p, p.link.by) for p in profiles]
        self.links = Counted()
        self.gateways = Counted()
        self.bins = Bins()
        self.numbering = [Numbering() for _ in profiles]        # per profile: key -> row of link_of
        self.link_of: list[NDArray[np.int64]] = [np.zeros(0, np.int64) for _ in profiles]
        self.identity: list[tuple[int, int]] = []               # link -> (profile, key or HOME | home key)
        self.homes = [Numbering() for _ in profiles]
        self.gateway_numbering = [Numbering() for _ in profiles]
        self.gateway_of: list[NDArray[np.int64]] = [np.zeros(0, np.int64) for _ in profiles]
        self.link_gateway = np.zeros(0, np.int64)               # the gateway that a link was last heard by
        self._table = np.zeros(BUCKETS * WAYS, np.uint64)
        self._table_time = np.full(BUCKETS * WAYS, np.iinfo(np.int64).min // 2, np.int64)
        self._turn = np.zeros(BUCKETS, np.int64)
        self._last = np.zeros(1, np.bool_)

    def copies(self, f: FrameSlice) -> NDArray[np.bool_]:
        """Return which frames lie in a datagram that was recorded before."""
        return find_copies(f.digest, f.slot, f.order, self._table, self._table_time, self._turn, self._last,
                           COPY_WINDOW, COPY_WINDOW_WITHOUT_IDENT)

    def add(self, f: FrameSlice, known: Numbering | None) -> tuple[NDArray[np.int64], NDArray[np.uint8]]:
        """Follow some frames without copies; return (link number, arrival) of each.

        known  keys with a usable frame anywhere in the audit, where a link's key needs the message
        """
        profile = self.profiles[f.profile]
        who, home = self._number(f, known)
        counter = np.where(home, NO_COUNTER, f.counter) if home.any() else f.counter
        group = NO_GROUP
        if known is not None:
            group = self.homes[f.profile].number(f.home) + f.profile * MOST_HOMES
            sure = (f.state < 2) & ~home
            self.links.group[who[sure]] = group[sure]
        arrival = self.links.follow(who, f, counter, f.state, group)
        if profile.backhaul:
            gateway = self._gateway(f)
            if profile.wrapper.carries != "stream":
                self._count(f, gateway)
            self._heard_by(who, gateway)
        self.bins.add(who, f.state, f.headroom, f.time, len(self.links))
        return who, arrival

    def _number(self, f: FrameSlice, known: Numbering | None) -> tuple[NDArray[np.int64], NDArray[np.bool_]]:
        """Return (link of every frame, whether that is only the home of frames of no known link)."""
        profile = self.profiles[f.profile]
        key = f.key
        if known is not None:
            lost = (f.state >= 2) & ((key == NO_KEY) | (known.find(key) < 0))
            key = np.where(lost, f.home | np.uint64(HOME), key)
        key = np.where(key == NO_KEY, f.home | np.uint64(HOME), key)
        home = (key & np.uint64(HOME)) != 0
        counter = profile.counter
        rows = self._rows(f.profile, key, self.numbering, self.link_of, self.links,
                          counter.modulo if counter else 0, counter.window if counter else 16,
                          (counter.interval_ns or 0) if counter else 0, profile.chain.checks)
        while len(self.identity) < len(self.links):
            self.identity.append((f.profile, self.numbering[f.profile].keys[
                int(np.flatnonzero(self.link_of[f.profile] == len(self.identity))[0])]))
        return rows, home

    def _rows(self, profile: int, key: NDArray[np.uint64], numbering: list[Numbering],
              row_of: list[NDArray[np.int64]], counted: Counted, modulo: int, window: int, interval: int,
              verifies: bool) -> NDArray[np.int64]:
        numbers = numbering[profile].number(key)
        new = len(numbering[profile]) - len(row_of[profile])
        if new:
            first = len(counted)
            row_of[profile] = np.concatenate([row_of[profile], np.arange(first, first + new)])
            counted.grow(first + new, modulo, window, interval, verifies)
        return row_of[profile][numbers]

    def count_datagrams(self, f: FrameSlice) -> None:
        """Follow the gateways' own counters through datagrams that are pieces of streams."""
        if self.profiles[f.profile].backhaul:
            self._count(f, self._gateway(f))

    def _gateway(self, f: FrameSlice) -> NDArray[np.int64]:
        """Return the row of every frame's gateway."""
        backhaul = self.profiles[f.profile].backhaul
        assert backhaul is not None
        return self._rows(f.profile, f.backhaul_key, self.gateway_numbering, self.gateway_of, self.gateways,
                          backhaul.modulo, 16, 0, True)

    def _count(self, f: FrameSlice, gateway: NDArray[np.int64]) -> None:
        self.gateways.follow(np.where(f.slot == 0, gateway, -1), f, f.backhaul, np.zeros(len(gateway), np.uint8))

    def _heard_by(self, who: NDArray[np.int64], gateway: NDArray[np.int64]) -> None:
        if len(self.link_gateway) < len(self.links):
            fresh = np.full(len(self.links), -1, np.int64)
            fresh[: len(self.link_gateway)] = self.link_gateway
            self.link_gateway = fresh
        self.link_gateway[who] = gateway

    def names(self, seen: Sequence[dict[int, tuple[int, ...]]]) -> list[str]:
        """Return the links' names by number; ``seen`` has the values of hashed keys, per profile."""
        names = []
        for profile, key in self.identity:
            maker = self.makers[profile]
            names.append(maker.name(maker.values(key & ~HOME, seen[profile]), message=not key & HOME))
        twice = {n for n in names if names.count(n) > 1} if len(set(names)) < len(names) else set()
        return [f"{self.profiles[p].name}:{n}" if n in twice else n
                for n, (p, _) in zip(names, self.identity, strict=True)]
