"""How strong a profile's chain is, for each length of message that it is known to send."""

import textwrap
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from pcaptool.coding.chain import Chain
from pcaptool.coding.step import LengthError, Step
from pcaptool.coding.strength import NOTHING, Strength
from pcaptool.profile.fields import message_bits
from pcaptool.profile.model import Profile

SLAB = 512              # unit frames pushed through the chain at a time
LARGEST = 1 << 14       # bits of an air frame up to which bursts are traced


@dataclass(frozen=True, slots=True)
class ChainStrength:
    """The strength of a chain for one length of message.

    steps     (step, its strength), in the transmitter's order
    accepted  share of random air frames that the chain lets pass, fixed fields of the message included
    exact     that is exact, not an estimate
    burst     longest burst on the air that is surely corrected; None: not computed
    """

    message_bits: int
    air_bits: int
    steps: tuple[tuple[Step, Strength], ...]
    accepted: float
    exact: bool
    burst: int | None

    @property
    def rate(self) -> float:
        return self.message_bits / self.air_bits


def strengths(profile: Profile) -> list[ChainStrength]:
    """Return the strength for the fixed size of air frames, or for the examples' and the fields' sizes."""
    chain, w = profile.chain, profile.wrapper
    sizes: list[int] = []
    if isinstance(w.frame_bytes, int) and w.carries == "frame":
        sizes = [chain.data_bits(w.frame_bytes * w.bits_per_byte)]
    else:
        context = {name: np.zeros(1, np.int64) for name in chain.needs}
        for example in profile.example:
            own = context | {name: np.array([v]) for name, v in example.wrapper.items() if name in context}
            air = np.unpackbits(np.frombuffer(example.air, np.uint8))[None]
            sizes.append(int(chain.decode(air, None, own).length[0]))
        kinds: list[str | None] = [k.name for k in profile.message.kind] or [None]
        if not sizes:
            sizes = [message_bits(profile, kind) for kind in kinds]
    out = []
    for k in sorted(set(sizes)):
        try:
            out.append(chain_strength(chain, k, fixed_bits(profile, k)))
        except LengthError:
            continue
    return out


def fixed_bits(profile: Profile, k: int) -> int:
    """Return the message bits whose value every frame of k bits must have."""
    bits = last = 0
    for field in profile.message.fields:
        last += field.bits
        bits += field.bits if field.must_be is not None and last <= k else 0
    return bits


def chain_strength(chain: Chain, k: int, fixed: int = 0) -> ChainStrength:
    """Return the strength of a chain for messages of k bits, ``fixed`` of which have one value only.

    Raises LengthError when the chain makes no air frame of such a message.
    """
    accepted, exact, steps, n = 2.0**-fixed, True, [], k
    for step in chain.steps:
        strength = step.strength(n)
        steps.append((step, strength))
        accepted *= strength.accepted
        exact &= strength.exact and not step.cuts
        n = step.coded_bits(n)
    return ChainStrength(k, n, tuple(steps), accepted, exact, _burst(chain, k))


def _burst(chain: Chain, k: int) -> int | None:
    """Trace the bits of the air to the codewords of the outermost code."""
    codes = [i for i, step in enumerate(chain.steps) if step.role == "code"]
    if not codes:
        return 0
    at = max(codes)
    outer = chain.steps[at + 1 :]
    sizes = [k]
    for step in chain.steps:
        sizes.append(step.coded_bits(sizes[-1]))
    words = chain.steps[at].codewords(sizes[at + 1])
    if words is None or not words.corrects or sizes[-1] > LARGEST or not all(s.linear for s in outer):
        return None
    place = _places(outer, sizes[-1])
    return None if place is None else words.longest_burst(place)


def _places(outer: tuple[Step, ...], n: int) -> NDArray[np.int64] | None:
    """Return the bit inside that each bit on the air carries, -1: none; None where one carries several."""
    context = {name: np.zeros(SLAB + 1, np.int64) for step in outer for name in step.needs}
    place = np.full(n, -1, np.int64)
    for first in range(0, n, SLAB):
        count = min(SLAB, n - first)
        bits = np.zeros((count + 1, n), np.uint8)
        bits[np.arange(count) + 1, first + np.arange(count)] = 1
        for step in reversed(outer):
            bits = step.strip(bits, {name: v[: count + 1] for name, v in context.items()})[0]
        changed = bits[1:] ^ bits[0]
        if (changed.sum(axis=1) > 1).any():
            return None
        row, column = np.nonzero(changed)
        place[first + row] = column
    return place


def describe_strength(profile: Profile) -> tuple[list[str], list[str]]:
    """Return (lines of text, warnings), lines of at most 80 columns."""
    lines: list[str] = []
    warnings: list[str] = []
    for s in strengths(profile):
        lines.append(f"  {s.message_bits} message bits become {s.air_bits} on the air, rate {s.rate:.3f}")
        for i, (step, strength) in enumerate(s.steps):
            if strength == NOTHING:
                continue
            lines += textwrap.wrap(strength.text, 78, initial_indent=f"    {step.name:<14}",
                                   subsequent_indent=" " * 18)
            if strength.warning:
                warnings.append(f"coding[{i}]: {strength.warning}")
        if s.burst is None:
            lines.append("    bursts        not computed for this chain")
        elif s.burst:
            bits = "1 bit" if s.burst == 1 else f"{s.burst} bits"
            lines.append(f"    bursts        of up to {bits} on the air are surely corrected")
        about = "" if s.exact else "about "
        lines.append(f"    random words  {about}{s.accepted:.2g} of them would be accepted")
    return lines, list(dict.fromkeys(warnings))
