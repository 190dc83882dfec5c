"""Messages of a link: the values of their fields, and their bits."""

from collections.abc import Mapping

import numpy as np
from numpy.typing import NDArray

from pcaptool.profile import Field, Profile, WrapperField, encode_fields, fields_of
from pcaptool.simulate.plan import Generator, LinkPlan

Raw = NDArray[np.int64]


def bounds(field: Field | WrapperField) -> tuple[int, int]:
    """Return the least and the greatest raw value that a field holds, within what int64 holds."""
    if field.signed:
        return -(1 << (field.bits - 1)), (1 << (field.bits - 1)) - 1
    return 0, (1 << min(field.bits, 63)) - 1


def raw_value(field: Field | WrapperField, value: float | str) -> int:
    """Return the raw value of one in the field's unit, or of a name; KeyError for a name it has not."""
    if isinstance(value, str):
        return {name: number for number, name in field.names.items()}[value]
    return round((value - field.offset) / field.scale)


def moving(rng: np.random.Generator, field: Field | WrapperField, seconds: NDArray[np.float64],
           duration: float, plan: Generator | None) -> Raw:
    """Return raw values of a field: int64 (frame,).

    seconds   float64 (frame,)  since the start
    plan      None: a slow walk, or any of the field's names
    """
    n, (low, high) = len(seconds), bounds(field)
    if plan is None and field.names:
        return rng.choice(np.array(sorted(field.names), np.int64), n)
    if plan is None:
        way = (rng.integers(-1, 2, n) * max(high // 400, 1)).cumsum()
        around: Raw = np.clip((low + high) // 2 + way, low, high)
        return around
    if plan.constant is not None:
        return np.full(n, raw_value(field, plan.constant), np.int64)
    if plan.choice is not None:
        return rng.choice(np.array([raw_value(field, v) for v in plan.choice], np.int64), n)
    if plan.ramp is not None:
        begin, end = plan.ramp
        over = plan.over or duration
        values = begin + (end - begin) * (seconds % over / over)
    else:
        walk = plan.walk if plan.walk is not None else 0.0
        ends = sorted((low * field.scale + field.offset, high * field.scale + field.offset))
        least = ends[0] if plan.low is None else plan.low
        most = ends[1] if plan.high is None else plan.high
        step = abs(field.scale) if plan.step is None else plan.step
        values = walk + rng.uniform(-1, 1, n).cumsum() * step
        width = most - least
        values = least + np.abs((values - least + width) % (2 * width or 1) - width)    # thrown back
    raw: Raw = np.clip(np.rint((values - field.offset) / field.scale), low, high).astype(np.int64)
    return raw


def field_values(profile: Profile, link: LinkPlan, kind: str | None, rng: np.random.Generator, counter: Raw,
                 seconds: NDArray[np.float64], duration: float) -> dict[str, Raw]:
    """Return the raw values of all fields of messages of one kind: name -> int64 (frame,).

    counter  int64 (frame,)    counter of each message, below its modulus
    seconds  float64 (frame,)  when each is sent
    """
    fixed = {name: value for k in profile.message.kind if k.name == kind for name, value in k.when.items()}
    values: dict[str, Raw] = {}
    for f in fields_of(profile, kind):
        if f.name.startswith("_"):
            continue
        if f.name in fixed or f.must_be is not None:
            value = fixed[f.name] if f.name in fixed else int(f.must_be or 0)
            values[f.name] = np.full(len(counter), value, np.int64)
        elif profile.counter and f.name == profile.counter.field:
            values[f.name] = counter
        elif f.name in link.key:
            values[f.name] = np.full(len(counter), link.key[f.name], np.int64)
        else:
            values[f.name] = moving(rng, f, seconds, duration, link.fields.get(f.name))
    return values


def message_bits(profile: Profile, kind: str | None, values: Mapping[str, Raw], payload: NDArray[np.uint8]
                 ) -> NDArray[np.uint8]:
    """Return messages: uint8 (frame, bit); payload uint8 (frame, octet) stands behind their fields."""
    given = values or {"_": np.zeros(len(payload), np.int64)}
    return np.concatenate([encode_fields(profile, given, kind), np.unpackbits(payload, axis=1)], axis=1)
