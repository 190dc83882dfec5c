"""Field values to message bits and back, by the plain rule; the frame layer has its own fast way."""

from collections.abc import Mapping

import numpy as np
from numpy.typing import NDArray

from pcaptool.profile.model import Field, Profile, bit_positions

Values = Mapping[str, NDArray[np.int64]]


def fields_of(profile: Profile, kind: str | None = None) -> tuple[Field, ...]:
    """Return the fields of a message in order, those of a kind behind the common ones."""
    chosen = [k for k in profile.message.kind if k.name == kind]
    if kind is not None and not chosen:
        raise KeyError(kind)
    return (*profile.message.fields, *(chosen[0].fields if chosen else ()))


def message_bits(profile: Profile, kind: str | None = None) -> int:
    """Return the bits that a message's fields take."""
    return sum(f.bits for f in fields_of(profile, kind))


def encode_fields(profile: Profile, values: Values, kind: str | None = None) -> NDArray[np.uint8]:
    """Return messages of raw field values: uint8 (frame, bit).

    values  name -> int64 (frame,); missing ones are their must_be, the kind's when, or 0
    """
    fixed = {name: value for k in profile.message.kind if k.name == kind for name, value in k.when.items()}
    n = len(next(iter(values.values()))) if values else 1
    fields = fields_of(profile, kind)
    bits = np.zeros((n, sum(f.bits for f in fields)), np.uint8)
    offset = 0
    for field in fields:
        default = field.must_be if field.must_be is not None else fixed.get(field.name, 0)
        value = np.asarray(values.get(field.name, np.full(n, default)), np.int64).astype(np.uint64)
        places = bit_positions(field.order or profile.message.order, offset, field.bits)
        for j, place in enumerate(places):
            bits[:, place] = (value >> np.uint64(field.bits - 1 - j)) & np.uint64(1)
        offset += field.bits
    return bits


def decode_fields(profile: Profile, bits: NDArray[np.uint8], kind: str | None = None) -> dict[str, NDArray[np.int64]]:
    """Return raw values of the fields that lie within messages: name -> int64 (frame,)."""
    out = {}
    offset = 0
    for field in fields_of(profile, kind):
        places = bit_positions(field.order or profile.message.order, offset, field.bits)
        offset += field.bits
        if field.name.startswith("_") or max(places) >= bits.shape[1]:
            continue
        value = np.zeros(len(bits), np.uint64)
        for place in places:
            value = value << np.uint64(1) | bits[:, place]
        signed = value.astype(np.int64)
        if field.signed and field.bits < 64:
            half = np.int64(1 << (field.bits - 1))
            signed = (signed ^ half) - half
        out[field.name] = signed
    return out


def kind_of(profile: Profile, values: Values) -> str | None:
    """Return the kind of a single message by its common fields, None when no kind fits."""
    for kind in profile.message.kind:
        if all(name in values and int(values[name][0]) == value for name, value in kind.when.items()):
            return kind.name
    return None
