"""Run a profile's worked examples, in both directions."""

import numpy as np

from pcaptool.coding.chain import REASONS
from pcaptool.problem import Problem
from pcaptool.profile.fields import decode_fields, encode_fields, fields_of, kind_of, message_bits
from pcaptool.profile.model import Example, Field, Profile


def check_profile(profile: Profile) -> list[Problem]:
    """Return what the worked examples show to be wrong.

    The air frame of each is decoded and must give the fields; where they make up the whole message,
    they are encoded and must give the air frame.
    """
    problems = []
    for i, example in enumerate(profile.example):
        problems += _check(profile, example, f"example[{i}]")
    return problems


def _raw(field: Field, value: int | float | str) -> int | None:
    """Return the raw value of a field as an example writes it."""
    if isinstance(value, str):
        return next((k for k, name in field.names.items() if name == value), None)
    return round((value - field.offset) / field.scale)


def _check(profile: Profile, example: Example, place: str) -> list[Problem]:
    def wrong(where: str, found: str, expected: str, fix: str) -> Problem:
        return Problem(file=profile.origin, place=f"{place}.{where}", found=found, expected=expected, fix=fix)

    context = {name: np.array([example.wrapper.get(name, 0)], np.int64) for name in profile.chain.needs}
    air = np.unpackbits(np.frombuffer(example.air, np.uint8))[None]
    outcome = profile.chain.decode(air, None, context)
    reason = REASONS[int(outcome.reason[0])]
    if reason:
        return [wrong("air", f"an air frame that is {reason}", "one that decodes",
                      "check the coding steps against the document, and the example")]
    if outcome.wrong_bits[0]:
        return [wrong("air", f"{outcome.wrong_bits[0]} wrong bits", "an air frame without channel errors",
                      "correct the example; it is encoded again bit by bit")]
    message = outcome.message[:, : outcome.length[0]]
    common = decode_fields(profile, message)
    kind = kind_of(profile, common)
    values = decode_fields(profile, message, kind)
    problems = []
    for name, expected in example.gives.items():
        field = next((f for f in fields_of(profile, kind) if f.name == name), None)
        if field is None or name not in values:
            problems.append(wrong(f"gives.{name}", "no such field in this message",
                                  "one of " + ", ".join(values), "name a field of the message"))
            continue
        raw = _raw(field, expected)
        if raw is None:
            problems.append(wrong(f"gives.{name}", repr(expected), "one of " + ", ".join(field.names.values()),
                                  "use a name that the field declares"))
        elif raw != values[name][0]:
            found = values[name][0] * field.scale + field.offset
            problems.append(wrong(f"gives.{name}", f"{found:g} in the air frame", f"{expected}, as the example says",
                                  "check the field's place, width and order"))
    if problems or message_bits(profile, kind) != message.shape[1]:
        return problems
    again = profile.chain.encode(encode_fields(profile, values, kind), context)
    if any(step.cuts and not step.linear for step in profile.coding):      # behind it the line is idle
        again = again[:, : air.shape[1]]
    if not np.array_equal(again, air):
        problems.append(wrong("air", f"{np.packbits(again).tobytes().hex()} when the fields are encoded",
                              example.air.hex(), "fields named _ must be 0 in an example"))
    return problems
