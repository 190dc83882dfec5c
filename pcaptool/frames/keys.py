"""Keys of links and of gateways: several field values packed into one 64-bit number, and back."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from pcaptool.profile import Profile

MIX = np.uint64(0x9E3779B97F4A7C15)     # 2**64 / golden ratio, Knuth, TAOCP vol. 3, 6.4


@dataclass(frozen=True, slots=True)
class KeyPart:
    """One value of a key: reference as in the profile, its width in bits, and names of values."""

    reference: str
    bits: int
    names: Mapping[int, str]

    @property
    def in_message(self) -> bool:
        return "." not in self.reference


class KeyMaker:
    """Packs key values; keys wider than 63 bits are hashed and their values kept in ``seen``."""

    def __init__(self, profile: Profile, by: Sequence[str]) -> None:
        self.parts = tuple(_part(profile, reference) for reference in by)
        self.packed = sum(p.bits for p in self.parts) <= 63
        self.seen: dict[int, tuple[int, ...]] = {}

    @property
    def needs_message(self) -> bool:
        return any(p.in_message for p in self.parts)

    def make(self, columns: Mapping[str, NDArray[np.int64]], n: int, message: bool = True) -> NDArray[np.uint64]:
        """Return keys uint64 (frame,); ``message`` False leaves the message's parts out (as 0)."""
        key = np.zeros(n, np.uint64)
        values = []
        for part in self.parts:
            value = columns[part.reference] if message or not part.in_message else np.zeros(n, np.int64)
            values.append(value)
            unsigned = value.astype(np.uint64)
            if self.packed:
                mask = np.uint64((1 << part.bits) - 1)
                key = (key << np.uint64(part.bits)) | (unsigned & mask)
            else:
                key = (key ^ unsigned) * MIX
                key ^= key >> np.uint64(29)
        if not self.packed:
            key &= np.uint64(2**63 - 1)
            _, first = np.unique(key, return_index=True)
            for i in first:
                self.seen.setdefault(int(key[i]), tuple(int(v[i]) for v in values))
        return key

    def values(self, key: int, seen: Mapping[int, tuple[int, ...]] | None = None) -> tuple[int, ...]:
        """Return the values that a key was made of."""
        if not self.packed:
            return (self.seen if seen is None else seen)[key]
        out = []
        for part in reversed(self.parts):
            out.append(key & ((1 << part.bits) - 1))
            key >>= part.bits
        return tuple(reversed(out))

    def name(self, values: Sequence[int], message: bool = True) -> str:
        """Return the link's name, the key's values in order, ``/`` between; ? for what is not known."""
        words = []
        for part, value in zip(self.parts, values, strict=True):
            if part.in_message and not message:
                words.append("?")
            elif part.reference.startswith("carrier."):
                words.append(_address(value))
            else:
                words.append(part.names.get(value, str(value)))
        return "/".join(words)


def _part(profile: Profile, reference: str) -> KeyPart:
    if reference.startswith("carrier."):
        return KeyPart(reference, 64, {})
    field = profile.find_field(reference)
    return KeyPart(reference, field.bits, dict(field.names))


def _address(value: int) -> str:
    value &= 2**64 - 1
    if value < 2**32:
        return ".".join(str(value >> s & 255) for s in (24, 16, 8, 0))
    return f"v6-{value:016x}"
