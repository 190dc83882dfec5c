"""Captures to datagrams: records are read, classified, put together of fragments, and accounted for."""

from collections.abc import Iterator, Sequence
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from pcaptool.capture import headers
from pcaptool.capture.datagrams import ENTRIES, Account, Datagrams, OpenFragment
from pcaptool.capture.fragments import Reassembly
from pcaptool.capture.headers import Headers, classify
from pcaptool.capture.inside import Packet, Room, datagrams_of, joined, look_into
from pcaptool.capture.records import BLOCK, Block, Piece, read_records
from pcaptool.capture.walkers import BATCH_RECORDS, Records

STEP_BACK = 1_000_000_000   # ns by which a clock must go back to be noted
MOST_SHIFT = 1 << 62        # ns; order stays below 2**63 even where a file is all steps
ONES = np.ones(BATCH_RECORDS, np.int64)


class DatagramReader:
    """Iterates over the UDP datagrams of a capture, or a piece of one, in bounded batches.

    ``account`` is complete after the last batch: its entries and the ``records`` of all datagrams and
    of its open fragments add up to its records. Of a whole capture given by its path, only fragments
    of datagrams that are not whole at the end stay open; of a Piece also those that may belong to
    datagrams begun before it, see pcaptool.capture.fragments.
    """

    def __init__(self, what: Piece | Path | str, batch_bytes: int = BLOCK) -> None:
        self.piece = what if isinstance(what, Piece) else Piece(Path(what))
        self.batch_bytes = batch_bytes
        self.account = Account()
        self.begin_time: int | None = None      # ns, of the first record and the last one read
        self.end_time: int | None = None
        self._alone = not isinstance(what, Piece)
        self._packet = self.piece.first_packet
        self._reassembly = Reassembly()
        self._reasons: dict[str, int] = {}
        self._links: dict[int, int] = {}
        self._entries = np.zeros(len(ENTRIES), np.int64)

    def __iter__(self) -> Iterator[Datagrams]:
        """Yield the batches, once; raises CaptureError when the file is no capture."""
        records = Records()
        for block in read_records(self.piece, self.account, records, self.batch_bytes):
            yield self._batch(block, records)
        self._give_up()
        account = self.account
        account.open_fragments = self._reassembly.left()
        account.entries = dict(zip(ENTRIES, self._entries.tolist(), strict=True))
        account.reasons = dict(sorted(self._reasons.items()))
        account.link_types = dict(sorted(self._links.items()))

    def _batch(self, block: Block, r: Records) -> Datagrams:
        n, account = block.count, self.account
        link, time = r.link[:n], r.time[:n]
        low, high = int(time.min()), int(time.max())
        account.first_time = low if account.first_time is None else min(account.first_time, low)
        account.last_time = high if account.last_time is None else max(account.last_time, high)
        if self.begin_time is None:
            self.begin_time = int(time[0])
            self._reassembly.begin = None if self._alone else self.begin_time
        order = self._order(time)
        account.records += n
        self._count_links(link)
        h = classify(block.buffer, r.start[:n], r.held[:n], r.size[:n], link)
        self._count(h, link)
        packet = np.arange(self._packet, self._packet + n)
        self._packet += n
        batch = datagrams_of(block.buffer, h, packet, ONES[:n], time, order)
        return self._with_special(batch, block, h, r, order) if len(h.special) else batch

    def _with_special(self, batch: Datagrams, block: Block, h: Headers, r: Records, order: NDArray[np.int64]
                      ) -> Datagrams:
        """Return the batch with the datagrams of special packets put in."""
        first, which = self._packet - block.count, h.special[:, 0]
        packets = [Packet(first + i, int(r.time[i]), int(order[i]), int(r.start[i]), int(r.held[i]), int(r.size[i]),
                          int(r.link[i])) for i in which.tolist()]
        special = h.special.copy()
        special[:, 0] = np.arange(len(packets))
        room = Room(block.buffer, block.end)
        self._reassembly.expire(int(order[which[0]]))
        inside = look_into(packets, special, (), self._reassembly, room)
        for packet, verdict, reason in inside.others:
            self._entries[verdict] += packet.records
            if reason:
                self._note(reason, packet.records)
        self._give_up()
        return joined(room.buffer, [batch, *inside.datagrams]) if inside.datagrams else batch

    def _give_up(self) -> None:
        """Enter the fragments that timed out."""
        self._entries[ENTRIES.index("fragment_incomplete")] += len(self._reassembly.given_up)
        self._reassembly.given_up.clear()

    def _note(self, reason: str, records: int) -> None:
        self._reasons[reason] = self._reasons.get(reason, 0) + records

    def _count_links(self, link: NDArray[np.int32]) -> None:
        kinds = [int(link[0])] if (link == link[0]).all() else np.unique(link).tolist()
        for kind in kinds:
            self._links[kind] = self._links.get(kind, 0) + (len(link) if len(kinds) == 1 else int((link == kind).sum()))

    def _count(self, h: Headers, link: NDArray[np.int32]) -> None:
        counts = np.bincount(h.verdict, minlength=len(ENTRIES))[: len(ENTRIES)]
        self._entries += counts
        if not counts[headers.UNREADABLE]:
            return
        bad = h.verdict == headers.UNREADABLE
        reasons, link = h.reason[bad], link[bad]
        for code in np.unique(reasons).tolist():
            hit = reasons == code
            if code == headers.LINK_TYPE:
                for kind in np.unique(link[hit]).tolist():
                    self._note(f"link type {kind}", int((link[hit] == kind).sum()))
            else:
                self._note(headers.REASONS[code], int(hit.sum()))

    def _order(self, time: NDArray[np.int64]) -> NDArray[np.int64]:
        """Return times made monotone over backward clock steps; note the steps."""
        account, n = self.account, len(time)
        before = time[0] if self.end_time is None else self.end_time
        self.end_time = int(time[-1])
        steps = np.flatnonzero(np.diff(time, prepend=before) < -STEP_BACK).tolist()
        if not steps:
            return time + account.order_shift if account.order_shift else time
        shifts = [account.order_shift]
        for i in steps:
            earlier, later = int(time[i - 1] if i else before), int(time[i])
            account.steps.append((self._packet + i, earlier, later))
            shifts.append(min(shifts[-1] + earlier - later, MOST_SHIFT))
        account.order_shift = shifts[-1]
        shift: NDArray[np.int64] = np.repeat(np.array(shifts, np.int64), np.diff([0, *steps, n]))
        return time + shift


def read_datagrams(what: Piece | Path | str, batch_bytes: int = BLOCK) -> DatagramReader:
    """Return the UDP datagrams of a capture, batch by batch; see DatagramReader and Datagrams.

    batch_bytes  read at a time; bounds the memory, has no effect on what is read
    Raises CaptureError on iteration when the file is no capture.
    """
    return DatagramReader(what, batch_bytes)


def join_fragments(fragments: Sequence[OpenFragment]) -> tuple[Datagrams, dict[str, list[OpenFragment]]]:
    """Reassemble fragments left open at the ends of pieces, given in canonical order.

    Returns (datagrams, fragments by ledger entry); those of a datagram stand under ``frames``, one
    datagram's behind the other's, until a profile has or has not claimed it.
    """
    reassembly, room = Reassembly(), Room(np.empty(1 << 16, np.uint8), 0)
    inside = look_into([], np.zeros((0, 5), np.int64), fragments, reassembly, room)
    entries: dict[str, list[OpenFragment]] = {"frames": []}
    for packet in sorted(inside.claimed, key=lambda p: p.packet):
        entries["frames"] += packet.fragments
    for packet, verdict, _ in inside.others:
        entries.setdefault(ENTRIES[verdict], []).extend(packet.fragments)
    entries["fragment_incomplete"] = [*reassembly.given_up, *reassembly.left()]
    none = np.zeros(0, np.int64)
    nothing = classify(room.buffer, none, none, none, none.astype(np.int32))
    empty = datagrams_of(room.buffer, nothing, none, none, none, none)
    return joined(room.buffer, [empty, *inside.datagrams]), entries
