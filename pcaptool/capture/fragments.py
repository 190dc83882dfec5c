"""Put IP fragments together again: RFC 791, 3.2, and RFC 8200, 4.5.

Where fragments overlap, the bytes that came first stay. A datagram that is not whole after 30
seconds, or when too many are open, is given up.
"""

from collections.abc import Iterator
from dataclasses import dataclass, field

from pcaptool.capture.datagrams import OpenFragment

TIME_OUT = 30_000_000_000       # ns
MOST_OPEN = 4096
Key = tuple[int, bytes, bytes, int]


@dataclass(slots=True)
class Whole:
    """A reassembled IP payload, with the fragments that made it in the order they came."""

    key: Key
    fragments: list[OpenFragment]
    payload: bytes


@dataclass(slots=True)
class _Open:
    fragments: list[OpenFragment] = field(default_factory=list)
    size: int = -1              # of the whole payload, once the last fragment came
    first_order: int = 0


class Reassembly:
    """Open datagrams; ``given_up`` collects the fragments of those that timed out."""

    def __init__(self) -> None:
        self._open: dict[Key, _Open] = {}
        self.given_up: list[OpenFragment] = []

    def add(self, fragment: OpenFragment) -> Whole | None:
        """Take a fragment in; return its datagram when that is whole now."""
        entry = self._open.get(fragment.key)
        if entry and fragment.order - entry.first_order > TIME_OUT:
            self.given_up += self._open.pop(fragment.key).fragments
            entry = None
        if entry is None:
            if len(self._open) >= MOST_OPEN:
                oldest = next(iter(self._open))
                self.given_up += self._open.pop(oldest).fragments
            entry = self._open[fragment.key] = _Open(first_order=fragment.order)
        entry.fragments.append(fragment)
        if not fragment.more and entry.size < 0:
            entry.size = fragment.offset + len(fragment.payload)
        if entry.size < 0 or not _covered(entry):
            return None
        del self._open[fragment.key]
        payload = bytearray(entry.size)
        for piece in reversed(entry.fragments):         # so that what came first is written last
            room = max(entry.size - piece.offset, 0)
            payload[piece.offset : piece.offset + len(piece.payload[:room])] = piece.payload[:room]
        return Whole(fragment.key, entry.fragments, bytes(payload))

    def left(self) -> Iterator[OpenFragment]:
        """Yield the fragments of all datagrams still open, in the order they came."""
        every = [f for entry in self._open.values() for f in entry.fragments]
        return iter(sorted(every, key=lambda f: (f.order, f.packet)))


def _covered(entry: _Open) -> bool:
    reach = 0
    for offset, end in sorted((f.offset, f.offset + len(f.payload)) for f in entry.fragments):
        if offset > reach:
            return False
        reach = max(reach, end)
    return reach >= entry.size
