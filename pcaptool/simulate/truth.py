"""The truth of every frame as a table: what was sent, what became of it, and which bits were flipped."""

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from pcaptool.profile import Field, Profile
from pcaptool.simulate.transmit import CAPTURED, FATES, Sent
from pcaptool.table import Column

TRUTH = (
    Column("link", "label", "", "values of the profile's link key, / between"),
    Column("gateway", "int64", "", "number of the gateway that the link is heard at"),
    Column("sequence", "int64", "", "frames that the link sent before, repeats and restarts not counted"),
    Column("counter", "int64", "", "the counter field as sent; empty when the message has none"),
    Column("sent", "timestamp", "UTC", "when its first bit was sent"),
    Column("captured", "timestamp", "UTC", "when its datagram was captured; empty when lost"),
    Column("fate", "label", "", "captured | lost_air | lost_backhaul"),
    Column("capture", "int64", "", "which capture file, from 0 in order of time; empty when lost"),
    Column("packet", "int64", "", "position of the packet in its capture, from 0; empty when lost"),
    Column("slot", "int64", "", "position among the frames of the datagram, from 0; empty when lost"),
    Column("repeated", "bool", "", "the same frame sent again"),
    Column("late", "bool", "", "forwarded after later frames"),
    Column("restart", "bool", "", "the first frame after a restart"),
    Column("cut", "bool", "", "the snap length cut its packet"),
    Column("expected", "label", "", "intact: no bit flipped | damaged: some were | "
                                    "cut: bytes of it not captured; empty when lost"),
    Column("air_bits", "int64", "bit", "bits of the air frame"),
    Column("held_bytes", "int64", "byte", "bytes of the air frame in the capture; empty when lost"),
    Column("wrong_bits", "int64", "bit", "bits that the channel flipped; 0 where nothing was heard"),
    Column("positions", "string", "", "their positions on the air, from 0, ; between"),
)
KIND = "kind_of_message"


def field_column(name: str) -> str:
    """Return the column of a message field; none hides a column of the table itself."""
    return f"message.{name}" if name in {c.name for c in TRUTH} or name == KIND else name


def truth_columns(profile: Profile) -> tuple[Column, ...]:
    """Return the columns of the truth for a profile: TRUTH, the kind of message, its fields in units."""
    kind = (Column(KIND, "label", "", "kind of message"),) if profile.message.kind else ()
    return (*TRUTH, *kind, *(_column(name, f) for name, f in profile.message_fields.items()))


def _column(name: str, field: Field) -> Column:
    dtype = "label" if field.names else "float64" if field.scale != 1 or field.offset else "int64"
    meaning = f"message field {name}; empty where the kind has none"
    return Column(field_column(name), dtype, field.unit, meaning)


def truth_table(profile: Profile, sent: Sent, links: list[str], some: slice) -> dict[str, list[object]]:
    """Return the truth of some transmissions by column, in order of sending.

    links  names of the plan's links
    None is missing; times are ns since 1970.
    """
    heard, held = sent.fate[some] == CAPTURED, sent.held[some]
    first, last = np.searchsorted(sent.error_frame, [some.start, min(some.stop, len(sent))])
    wrong = np.bincount(sent.error_frame[first:last] - some.start, minlength=len(heard))
    behind = wrong.cumsum().tolist()
    position = sent.error_position[first:last].tolist()
    state = np.where(held < sent.air_bytes[some], 2, np.where(wrong > 0, 1, 0))
    counter, kind = sent.counter[some], sent.kind[some]
    columns: dict[str, list[object]] = {
        "link": [links[i] for i in sent.link[some].tolist()], "gateway": sent.gateway[some].tolist(),
        "sequence": sent.sequence[some].tolist(), "counter": _some(counter, counter >= 0),
        "sent": sent.sent[some].tolist(), "captured": _some(sent.arrives[some], heard),
        "fate": [FATES[i] for i in sent.fate[some].tolist()], "capture": _some(sent.capture[some], heard),
        "packet": _some(sent.packet[some], heard), "slot": _some(sent.slot[some], heard),
        "repeated": sent.repeated[some].tolist(), "late": sent.late[some].tolist(),
        "restart": sent.restart[some].tolist(), "cut": sent.cut[some].tolist(),
        "expected": _some(state, heard, ("intact", "damaged", "cut")),
        "air_bits": sent.air_bits[some].tolist(), "held_bytes": _some(held, heard),
        "wrong_bits": wrong.tolist(),
        "positions": [";".join(map(str, position[b - w : b])) if w else ""
                      for b, w in zip(behind, wrong.tolist(), strict=True)],
    }
    if profile.message.kind:
        columns[KIND] = _some(kind, kind >= 0, [k.name for k in profile.message.kind])
    for name, field in profile.message_fields.items():
        columns[field_column(name)] = _field(sent, name, field, some)
    return columns


def _some(values: NDArray[np.int64], there: NDArray[np.bool_], words: Sequence[str] = ()) -> list[object]:
    """Return values, or the words that they number, None where they are not there."""
    return [(words[v] if words else v) if t else None
            for v, t in zip(values.tolist(), there.tolist(), strict=True)]


def _field(sent: Sent, name: str, field: Field, some: slice) -> list[object]:
    if name not in sent.values:
        return [None] * len(sent.link[some])
    raw, there = sent.values[name][some], sent.present[name][some]
    if field.names:
        return [field.names.get(v, str(v)) if t else None
                for v, t in zip(raw.tolist(), there.tolist(), strict=True)]
    if field.scale != 1 or field.offset:
        scaled = (raw * field.scale + field.offset).tolist()
        return [float(f"{v:.12g}") if t else None for v, t in zip(scaled, there.tolist(), strict=True)]
    return _some(raw, there)
