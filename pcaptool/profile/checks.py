"""Checks across the keys of a profile, and across profiles."""

from collections import Counter as Tally
from collections.abc import Iterator, Sequence
from difflib import get_close_matches
from ipaddress import ip_network

from pcaptool.coding.step import LengthError
from pcaptool.problem import Problem
from pcaptool.profile.fields import message_bits
from pcaptool.profile.model import Profile, WrapperField

MOST_MORE = 1 << 17     # bits of message behind the fields for which a chain is tried
CARRIER = ("carrier.source", "carrier.destination")


def cross_checks(profile: Profile) -> tuple[Profile, list[Problem]]:
    """Return the profile with its defaults filled in, and all problems between its keys."""
    problems = [*_names(profile), *_wrapper(profile), *_references(profile), *_kinds(profile), *_nets(profile),
                *_needs(profile)]
    if problems:
        return profile, problems
    problems += [*_counters(profile), *_lengths(profile)]
    changes: dict[str, object] = {}
    if profile.counter and not profile.counter.modulo:
        bits = profile.find_field(profile.counter.field).bits
        changes["counter"] = profile.counter.model_copy(update={"modulo": 1 << min(bits, 62)})
    if profile.backhaul and not profile.backhaul.modulo:
        bits = profile.find_field(profile.backhaul.counter).bits
        changes["backhaul"] = profile.backhaul.model_copy(update={"modulo": 1 << min(bits, 62)})
    return profile.model_copy(update=changes), problems


def _problem(profile: Profile, place: str, found: str, expected: str, fix: str) -> Problem:
    return Problem(file=profile.origin, place=place, found=found, expected=expected, fix=fix)


def _names(profile: Profile) -> Iterator[Problem]:
    w = profile.wrapper
    names = Tally(f.name for f in (*w.before, *w.each, *w.after))
    for name, count in names.items():
        if count > 1:
            yield _problem(profile, "wrapper", f"{count} fields named {name}", "names that differ", "rename one")
    common = [f.name for f in profile.message.fields if not f.name.startswith("_")]
    for place, fields in [("message", common)] + [
            (f"message.kind[{i}]", common + [f.name for f in k.fields if not f.name.startswith("_")])
            for i, k in enumerate(profile.message.kind)]:
        for name, count in Tally(fields).items():
            if count > 1:
                yield _problem(profile, f"{place}.fields", f"{count} fields named {name}", "names that differ",
                               "rename one")


def _wrapper(profile: Profile) -> Iterator[Problem]:
    w = profile.wrapper
    for key in ("frames", "frame_bytes"):
        value = getattr(w, key)
        allowed = [f.name for f in (*w.before, *(w.each if key == "frame_bytes" else ()))]
        if isinstance(value, str):
            field = profile.wrapper_fields.get(value)
            if value not in allowed:
                yield _problem(profile, f"wrapper.{key}", repr(value), "one of " + (", ".join(allowed) or "no field"),
                               "name a field that stands before the air frames, or give a number")
            elif field and field.signed:
                yield _problem(profile, f"wrapper.{key}", f"{value}, which is signed", "an unsigned field",
                               f"drop signed from {value}")
        elif value is not None and value < 1:
            yield _problem(profile, f"wrapper.{key}", str(value), "at least 1", "give the true number")
    groups = (("before", w.before), ("each", w.each), ("after", w.after))
    for where, fields in groups:
        for i, f in enumerate(fields):
            top = 1 << (8 * f.bytes)
            if f.must_be is not None and not (-top // 2 if f.signed else 0) <= f.must_be < top:
                yield _problem(profile, f"wrapper.{where}[{i}].must_be", hex(f.must_be),
                               f"a value that fits in {f.bytes} bytes", "set bytes or must_be right")
    cutting = [step.name for step in profile.coding if step.cuts]
    if w.carries != "frame" and not cutting:
        yield _problem(profile, "wrapper.carries", f'"{w.carries}", and no step that finds frames',
                       "bit_stuffing, or sync with every, in the chain", "add the step, or leave carries out")
    if w.carries == "stream" and (w.each or w.frames is not None):
        yield _problem(profile, "wrapper.carries", '"stream" with several air frames in a datagram',
                       "one piece of the stream in each", "leave each and frames out")
    if w.stream_by and w.carries != "stream":
        yield _problem(profile, "wrapper.stream_by", 'given with carries = "' + w.carries + '"', 'carries = "stream"',
                       "leave stream_by out")
    if w.each and w.frames is None and w.frame_bytes is None:
        yield _problem(profile, "wrapper.each", "fields before every frame, and no size of a frame",
                       "frame_bytes or frames", "say how long an air frame is")


def _references(profile: Profile) -> Iterator[Problem]:
    references = [(f"link.by[{i}]", r) for i, r in enumerate(profile.link.by)]
    if profile.counter:
        references.append(("counter.field", profile.counter.field))
    if profile.backhaul:
        references.append(("backhaul.counter", profile.backhaul.counter))
        references += [(f"backhaul.by[{i}]", r) for i, r in enumerate(profile.backhaul.by)]
    references += [(f"wrapper.stream_by[{i}]", r) for i, r in enumerate(profile.wrapper.stream_by)]
    for place, reference in references:
        known = [*profile.message_fields, *(f"wrapper.{n}" for n in profile.wrapper_fields)]
        if place.startswith(("link", "backhaul.by", "wrapper")):
            known += CARRIER
        if place.startswith(("backhaul", "wrapper")):
            known = [k for k in known if "." in k]
        if reference not in known:
            near = get_close_matches(reference, known, 1)
            yield _problem(profile, place, repr(reference), "one of " + ", ".join(known),
                           f"write {near[0]}" if near else "name a field of the wrapper or the message")


def _kinds(profile: Profile) -> Iterator[Problem]:
    common = {f.name: f for f in profile.message.fields}
    seen: dict[tuple[tuple[str, int], ...], str] = {}
    for i, kind in enumerate(profile.message.kind):
        for name, value in kind.when.items():
            field = common.get(name)
            if field is None:
                yield _problem(profile, f"message.kind[{i}].when.{name}", f"{name}, no common field",
                               "one of " + ", ".join(n for n in common if not n.startswith("_")),
                               "kinds are told by fields that every message has")
            elif not 0 <= value < 1 << field.bits:
                yield _problem(profile, f"message.kind[{i}].when.{name}", str(value),
                               f"a value of {field.bits} bits", "set the value right")
        key = tuple(sorted(kind.when.items()))
        if key in seen:
            yield _problem(profile, f"message.kind[{i}].when", f"the same values as kind {seen[key]}",
                           "values that tell the kinds apart", "change one of them")
        seen[key] = kind.name


def _nets(profile: Profile) -> Iterator[Problem]:
    for i, text in enumerate(profile.carrier.net):
        try:
            ip_network(text)
        except ValueError as error:
            yield _problem(profile, f"carrier.net[{i}]", repr(text), "a network such as 10.61.0.0/16",
                           f"mend it ({error})")


def _needs(profile: Profile) -> Iterator[Problem]:
    for i, step in enumerate(profile.coding):
        for name in step.needs:
            if name not in profile.wrapper_fields:
                yield _problem(profile, f"coding[{i}]", f"wrapper.{name}",
                               "one of " + (", ".join(f"wrapper.{n}" for n in profile.wrapper_fields) or "no field"),
                               "name a wrapper field")


def _counters(profile: Profile) -> Iterator[Problem]:
    for place, item, reference in (
            ("counter", profile.counter, profile.counter.field if profile.counter else ""),
            ("backhaul", profile.backhaul, profile.backhaul.counter if profile.backhaul else "")):
        if item is None:
            continue
        field = profile.find_field(reference)
        if item.modulo > 1 << field.bits:
            yield _problem(profile, f"{place}.modulo", str(item.modulo), f"at most {1 << field.bits} "
                           f"({reference} has {field.bits} bits)", f"set modulo = {1 << field.bits}")
        if field.signed:
            yield _problem(profile, f"{place}.{'field' if place == 'counter' else 'counter'}",
                           f"{reference}, which is signed", "an unsigned field", f"drop signed from {reference}")
    if profile.counter:
        modulo = profile.counter.modulo or 1 << profile.find_field(profile.counter.field).bits
        if profile.counter.window * 2 > modulo:
            yield _problem(profile, "counter.window", str(profile.counter.window), f"at most half of {modulo}",
                           f"set window = {max(modulo // 4, 1)}")


def _lengths(profile: Profile) -> Iterator[Problem]:
    """Check that air frames of a fixed size can be undone, and hold the fields."""
    size = profile.wrapper.frame_bytes
    if not isinstance(size, int) or profile.wrapper.carries != "frame":
        yield from _some_length(profile)
        return
    try:
        k = profile.chain.data_bits(size * profile.wrapper.bits_per_byte)
    except LengthError as error:
        yield _problem(profile, "wrapper.frame_bytes", f"{size} bytes of air frame", "a size that the chain can undo",
                       f"check the sizes of the steps ({error})")
        return
    need = message_bits(profile)
    if need > k:
        yield _problem(profile, "message.fields", f"fields of {need} bits", f"at most {k} bits, what the chain leaves",
                       "shorten the fields, or set the frame size right")


def _some_length(profile: Profile) -> Iterator[Problem]:
    """Check that the steps fit each other for some length of message that holds the fields."""
    need, why = message_bits(profile), ""
    for k in range(max(need, 1), need + MOST_MORE):
        try:
            profile.chain.coded_bits(k)
            return
        except LengthError as error:
            why = why or f"{k} message bits: {error}"
    yield _problem(profile, "coding", f"steps that fit no message of {need} to {need + MOST_MORE - 1} bits",
                   "lengths that fit each other", f"check sizes and order of the steps ({why})")


def conflicts(profiles: Sequence[Profile]) -> list[Problem]:
    """Return pairs of profiles that claim the same datagrams and that nothing tells apart."""
    problems = []
    for i, a in enumerate(profiles):
        for b in profiles[i + 1 :]:
            ports = sorted(set(a.carrier.port) & set(b.carrier.port))
            if ports and _nets_meet(a, b) and not _told_apart(a, b):
                problems.append(Problem(
                    file=b.origin, place="carrier.port", found=f"port {ports[0]}, which profile {a.name} claims too",
                    expected="another port, net, opening, or a fixed wrapper value that differs",
                    fix="tell the two apart, or audit with one of them"))
    return problems


def _nets_meet(a: Profile, b: Profile) -> bool:
    if not a.carrier.net or not b.carrier.net:
        return True
    nets = [(ip_network(x), ip_network(y)) for x in a.carrier.net for y in b.carrier.net]
    return any(x.version == y.version and x.overlaps(y) for x, y in nets)


def _front(profile: Profile) -> dict[int, int]:
    """Return the payload bytes that are fixed by opening and wrapper: offset -> byte."""
    fixed = dict(enumerate(profile.carrier.opening))
    offset = 0
    for field in profile.wrapper.before:
        if field.must_be is not None:
            fixed |= {offset + j: byte for j, byte in enumerate(_bytes(profile, field))}
        offset += field.bytes
    return fixed


def _bytes(profile: Profile, field: WrapperField) -> bytes:
    value = (field.must_be or 0) & ((1 << field.bits) - 1)
    return value.to_bytes(field.bytes, field.order or profile.wrapper.order)


def _told_apart(a: Profile, b: Profile) -> bool:
    first, second = _front(a), _front(b)
    return any(first[at] != second[at] for at in first.keys() & second.keys())
