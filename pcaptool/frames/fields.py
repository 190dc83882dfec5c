"""Where the fields of a message lie, and their values for many frames at once.

The bits of all fields that a profile names are laid out in 64-bit words, each field least
significant bit first and never across two words. The proof of undamaged frames fills such words
directly; decoded messages are gathered into the same words, so both paths read fields alike.
"""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from pcaptool.coding.step import Bits
from pcaptool.profile import Field, Profile, bit_positions


@dataclass(frozen=True, slots=True)
class Place:
    """One field of one message kind."""

    field: Field
    kind: int          # index of the message kind, -1 for fields that every message has
    word: int          # 64-bit word that holds it
    shift: int         # its least significant bit there
    last: int          # highest message bit that it uses: the message must be longer


class Layout:
    """The places of all fields of a profile's messages."""

    def __init__(self, profile: Profile) -> None:
        self.places: list[Place] = []
        wanted: list[int] = []
        message = profile.message
        common = self._lay(message.fields, -1, 0, message.order, wanted)
        for index, kind in enumerate(message.kind):
            self._lay(kind.fields, index, common, message.order, wanted)
        self.wanted = wanted
        self.words = -(-len(wanted) // 64)
        names = list(dict.fromkeys(p.field.name for p in self.places))
        self.by_name = {name: [p for p in self.places if p.field.name == name] for name in names}

    def _lay(self, fields: Sequence[Field], kind: int, offset: int, order: str, wanted: list[int]) -> int:
        for field in fields:
            if not field.name.startswith("_"):
                at = bit_positions(field.order or order, offset, field.bits)
                room = -len(wanted) % 64
                if room < field.bits:
                    wanted.extend([-1] * room)
                self.places.append(Place(field, kind, len(wanted) // 64, len(wanted) % 64, max(at)))
                wanted.extend(reversed(at))
            offset += field.bits
        return offset

    def gather(self, message: Bits, rows: NDArray[np.int64] | None = None) -> NDArray[np.uint64]:
        """Return the field words of decoded messages: uint64 (frame, word)."""
        n, width = message.shape
        positions = np.array(self.wanted, np.int64)
        there = (positions >= 0) & (positions < width)
        taken = np.zeros((n, self.words * 64), np.uint8)
        taken[:, np.flatnonzero(there)] = message[:, positions[there]]
        packed = np.packbits(taken, axis=1, bitorder="little")
        return packed.view("<u8").astype(np.uint64, copy=False)


def value_of(words: NDArray[np.uint64], place: Place) -> NDArray[np.int64]:
    """Return a field's raw values, sign applied: int64 (frame,)."""
    bits = place.field.bits
    value = words[:, place.word] >> np.uint64(place.shift)
    if bits < 64:
        value = value & np.uint64((1 << bits) - 1)
    signed = value.astype(np.int64)
    if place.field.signed and bits < 64:
        half = np.int64(1 << (bits - 1))
        signed = (signed ^ half) - half
    return signed
