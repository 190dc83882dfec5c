"""The account of every capture: where each of its records went, and the check that they add up."""

from collections import Counter
from collections.abc import Sequence
from concurrent.futures import Future

from pcaptool.audit.piece import PieceResult
from pcaptool.capture import ENTRIES, Damage, OpenFragment, Survey, natural
from pcaptool.capture.read import MOST_SHIFT, STEP_BACK

CAPTURE_SHIFT = 40      # packets of fragments that cross pieces carry their capture above this bit


class LedgerError(AssertionError):
    """Ledger entries that do not add up to the records of a capture: an error of the program."""


class CaptureAccount:
    """What became of one capture, gathered from its pieces in order."""

    def __init__(self, name: str, survey: Survey, digest: "Future[str]") -> None:
        self.name, self.survey, self._digest = name, survey, digest
        self.entries = dict.fromkeys(ENTRIES, 0)
        self.records = self.damaged_bytes = self.checksum_bad = 0
        self.format = self.compression = ""
        self.first_time: int | None = None
        self.last_time: int | None = None
        self.drops: int | None = None
        self.damage: list[Damage] = []
        self.steps: list[tuple[int, int, int]] = []
        self.reasons: Counter[str] = Counter()
        self.shifts: list[int] = []
        self._previous: int | None = None

    @property
    def rank_key(self) -> tuple[object, ...]:
        """Canonical order of captures: by first time, then by name."""
        first = self.survey.first_time
        return (first is None, first or 0, natural(self.name))

    @property
    def whole(self) -> bool:
        return not self.damage

    def add(self, piece: PieceResult, shift: int) -> int:
        """Take in the next piece; return the time shift for what follows.

        shift  ns added to order so far, by backward clock steps in earlier pieces and captures
        """
        account = piece.account
        before = self._previous
        if before is not None and account.first_time is not None:
            back = before - piece.begin_time
            if back > STEP_BACK:
                self.steps.append((piece.first_packet, before, piece.begin_time))
                shift = min(shift + back, MOST_SHIFT)
        self.shifts.append(shift)
        self._previous = piece.end_time if account.records else self._previous
        self.records += account.records
        for name, count in account.entries.items():
            self.entries[name] += count
        self.entries["frames"] += piece.claimed
        self.entries["cut"] += piece.cut
        self.entries["other_udp"] += piece.udp - piece.claimed - piece.cut
        self.damaged_bytes += account.damaged_bytes
        self.damage += account.damage
        self.checksum_bad += piece.checksum_bad
        self.format, self.compression = account.format, account.compression
        self.drops = account.drops
        self.steps += account.steps
        self.reasons.update(account.reasons)
        times = [t for t in (self.first_time, account.first_time) if t is not None]
        self.first_time = min(times) if times else None
        times = [t for t in (self.last_time, account.last_time) if t is not None]
        self.last_time = max(times) if times else None
        return min(shift + account.order_shift, MOST_SHIFT)

    def open_fragments(self, piece: PieceResult, index: int) -> list[OpenFragment]:
        """Return the piece's open fragments, marked with the capture, their order shifted."""
        for fragment in piece.account.open_fragments:
            fragment.packet |= index << CAPTURE_SHIFT
            fragment.order = min(fragment.order + self.shifts[-1], 2**63 - 2)
        return piece.account.open_fragments

    def copied(self, records: int) -> None:
        """Move records of copies from ``frames`` to ``duplicate_capture``."""
        self.entries["frames"] -= records
        self.entries["duplicate_capture"] += records

    def row(self) -> dict[str, object]:
        """Return the row of captures.csv."""
        damage = "; ".join(f"{d.skipped} bytes at {d.offset}: {d.reason}" for d in self.damage)
        return {
            "capture": self.name, "size": self.survey.size, "sha256": self._digest.result(), "format": self.format,
            "compression": self.compression, "first_time": self.first_time, "last_time": self.last_time,
            "records": self.records, **self.entries, "damaged_bytes": self.damaged_bytes, "damage": damage,
            "drops": self.drops, "clock_steps": len(self.steps), "bad_udp_checksums": self.checksum_bad,
            "reasons": "; ".join(f"{reason}: {count}" for reason, count in sorted(self.reasons.items())),
        }

    def notes(self) -> list[str]:
        """Return what a reader of the report must know about this capture."""
        notes = []
        if self.damage:
            notes.append(f"{self.name}: {self.damaged_bytes} bytes in {len(self.damage)} places are no record; "
                         "what lies behind them was read")
        if self.steps:
            packet, before, after = self.steps[0]
            notes.append(f"{self.name}: the clock went back {len(self.steps)} times, first at packet {packet} by "
                         f"{(before - after) / 1e9:.3f} s; frames keep their recorded order")
        if self.drops:
            notes.append(f"{self.name}: the capture itself dropped {self.drops} packets; losses on the backhaul "
                         "stay undecided")
        if self.entries["cut"]:
            notes.append(f"{self.name}: {self.entries['cut']} records were cut too short to tell whose they are")
        return notes


def check_identity(capture: CaptureAccount) -> None:
    """Raise LedgerError unless the entries add up to the records."""
    total = sum(capture.entries.values())
    if total != capture.records or min(capture.entries.values()) < 0:
        raise LedgerError(f"{capture.name}: the ledger's entries add up to {total}, the capture has "
                          f"{capture.records} records: {capture.entries}; please report this")


def total_ledger(captures: Sequence[CaptureAccount]) -> dict[str, int]:
    """Return the entries, records and damaged bytes of all captures together."""
    ledger = {name: sum(c.entries[name] for c in captures) for name in ENTRIES}
    ledger["records"] = sum(c.records for c in captures)
    if sum(ledger[name] for name in ENTRIES) != ledger["records"]:
        raise LedgerError(f"the ledger does not add up: {ledger}; please report this")
    ledger["damaged_bytes"] = sum(c.damaged_bytes for c in captures)
    return ledger
