"""A plan against its profile: every problem between the two, told in one run."""

import math
from collections.abc import Iterator, Sequence
from difflib import get_close_matches

from pcaptool.coding.step import LengthError
from pcaptool.problem import Problem
from pcaptool.profile import Field, Profile, WrapperField, fields_of, message_bits
from pcaptool.simulate.address import home
from pcaptool.simulate.deliver import wrapper_holds_many
from pcaptool.simulate.messages import bounds, raw_value
from pcaptool.simulate.plan import Generator, LinkPlan, Plan
from pcaptool.simulate.transmit import gateway_field, gateway_of, link_name

MOST_FRAMES = 5_000_000             # all of them are held in memory, about 1.5 kB each


def plan_problems(profile: Profile, plan: Plan, origin: str) -> list[Problem]:
    """Return what is wrong with a plan for a profile; origin is what the problems call its file."""
    def made(place: str, found: str, expected: str, fix: str) -> Problem:
        return Problem(file=origin, place=place, found=found, expected=expected, fix=fix)

    problems: list[Problem] = []
    for key in ("carries", "soft_bits"):
        value = getattr(profile.wrapper, key)
        if value in ("stream", "signed-8", "signed-4"):
            return [Problem(file=profile.origin, place=f"wrapper.{key}", found=repr(value),
                            expected="air frames of hard bits, each with whole frames in it",
                            fix="simulate with a profile without it; neither is simulated")]
    if home(profile) is None:
        problems.append(Problem(file=profile.origin, place="carrier.net", found="IPv6 networks only",
                                expected="an IPv4 network", fix="add one; simulated packets are IPv4"))
    if plan.per_datagram > 1 and not wrapper_holds_many(profile):
        problems.append(made("per_datagram", str(plan.per_datagram),
                             f"1: datagrams of {profile.name} hold one air frame", "leave it out"))
    if isinstance(profile.wrapper.frames, int) and plan.per_datagram != profile.wrapper.frames:
        problems.append(made("per_datagram", str(plan.per_datagram),
                             f"{profile.wrapper.frames}, as {profile.name} says in wrapper.frames",
                             f"set per_datagram = {profile.wrapper.frames}"))
    number = sum(min(plan.duration / k.interval, math.inf if k.frames is None else k.frames)
                 for k in plan.link)
    if number > MOST_FRAMES:
        problems.append(made("duration", f"{number:.3g} frames in all", f"at most {MOST_FRAMES:,}",
                             "simulate a shorter time, fewer links or longer intervals"))
    end = plan.start_ns / 1e9 + plan.duration + max(k.interval * (k.late_places + 2) for k in plan.link)
    if end >= 2**32:
        problems.append(made("duration", "an end after 2106-02-07",
                             "an earlier one: captures hold 32-bit seconds", "set start or duration lower"))
    problems += [made(f"backhaul[{i}].gateway", f"gateway {b.gateway} a second time", "one entry for each",
                      "put the two together") for i, b in enumerate(plan.backhaul)
                 if b.gateway in [other.gateway for other in plan.backhaul[:i]]]
    problems += [made(f"backhaul[{i}].{f}", *rest) for i, b in enumerate(plan.backhaul)
                 for f, *rest in (*_loss(b.loss, b.loss_burst), *_windows("outage", b.outage))]
    for i, link in enumerate(plan.link):
        problems += [made(f"link[{i}].{place}", *rest) for place, *rest in _link(profile, link)]
    if problems:
        return problems
    names: dict[tuple[int, str], int] = {}
    for i, link in enumerate(plan.link):
        name = link_name(profile, link)
        other = names.setdefault((gateway_of(profile, link), name), i)
        if other != i:
            problems.append(made(f"link[{i}].key", f"link {name}, which link[{other}] is too",
                                 "a key of its own", "change " + " or ".join(profile.link.by)))
    return problems


Found = Iterator[tuple[str, str, str, str]]     # place, found, expected, fix


def _link(profile: Profile, link: LinkPlan) -> Found:
    wrapper = {f"wrapper.{name}": f for name, f in profile.wrapper_fields.items()}
    known: dict[str, Field | WrapperField] = {**profile.message_fields, **wrapper}
    names = [k.name for k in profile.message.kind]
    made = _made_by_us(profile)
    for place, given in (("key", link.key), ("fields", link.fields)):
        for name in given:
            if name not in known:
                near = get_close_matches(name, known, 1)
                yield (f"{place}.{name}", f"no field {name!r}",
                       "one of " + ", ".join(n for n in known if n not in made),
                       f"write {near[0]}" if near else "name a field of the profile")
            elif name in made:
                yield f"{place}.{name}", name, "a field that the plan decides", f"remove it; {made[name]}"
    for name, value in link.key.items():
        if name in known and name not in made:
            yield from _fits(f"key.{name}", known[name], value)
    for name, plan in link.fields.items():
        if name in link.key:
            yield f"fields.{name}", f"{name}, which key has too", "one of the two", "remove one"
        elif name in known and name not in made:
            yield from _generator(f"fields.{name}", known[name], plan)
    field = gateway_field(profile)
    if field:
        if link.gateway is not None and link.key.get(f"wrapper.{field}", link.gateway) != link.gateway:
            yield "gateway", str(link.gateway), f"{link.key[f'wrapper.{field}']}, as key says", "remove one"
        yield from _fits("gateway", profile.wrapper_fields[field], gateway_of(profile, link))
    for i, kind in enumerate(link.kinds):
        if kind not in names:
            near = get_close_matches(kind, names, 1)
            yield (f"kinds[{i}]", repr(kind),
                   "one of " + ", ".join(names) if names else "none: the profile has no kinds",
                   f"write {near[0]}" if near else "name a kind of the profile")
    if set(link.kinds) <= set(names):
        yield from _lengths(profile, link, names)
    modulo = profile.counter.modulo if profile.counter else 0
    counters = [("first_counter", link.first_counter),
                *((f"restart[{i}].to", r.to) for i, r in enumerate(link.restart))]
    for place, value in counters:
        if modulo and value >= modulo:
            yield place, str(value), f"less than {modulo}, the counter's modulus", "give a lower one"
    yield from _windows("outage", link.outage)
    yield from _windows("periodic.during", link.periodic.during if link.periodic else ())
    if link.periodic and link.periodic.every * link.bit_rate < 1:
        yield ("periodic.every", f"{link.periodic.every:g} s", f"at least one bit, {1 / link.bit_rate:g} s",
               "give a longer time, or bit_error_rate instead")
    yield from _loss(link.loss, link.loss_burst)


def _made_by_us(profile: Profile) -> dict[str, str]:
    """Return fields whose values follow from the rest, and from what."""
    w = profile.wrapper
    made = {f"wrapper.{name}": "its value is fixed" for name, f in profile.wrapper_fields.items()
            if f.must_be is not None}
    made |= {f"wrapper.{name}": "it follows from the air frames" for name in (w.frames, w.frame_bytes)
             if isinstance(name, str)}
    made |= {name: "its value is fixed" for name, f in profile.message_fields.items()
             if f.must_be is not None}
    made |= {name: "choose with kinds" for k in profile.message.kind for name in k.when}
    if profile.backhaul:
        made[profile.backhaul.counter] = "the gateway counts"
    if profile.counter:
        made[profile.counter.field] = "the link counts, from first_counter"
    return made


def _fits(place: str, field: Field | WrapperField, value: int) -> Found:
    low, high = bounds(field)
    if not low <= value <= high:
        yield place, str(value), f"{low} to {high}, what {field.bits} bits hold", "give a value that fits"


def _generator(place: str, field: Field | WrapperField, plan: Generator) -> Found:
    numbers: list[float] = [*(plan.ramp or ()), *([] if plan.walk is None else [plan.walk])]
    for value in ([] if plan.constant is None else [plan.constant]) + list(plan.choice or ()):
        if not isinstance(value, str):
            numbers.append(value)
        elif value not in field.names.values():
            near = get_close_matches(value, field.names.values(), 1)
            yield (place, repr(value),
                   "one of " + ", ".join(field.names.values()) if field.names else "a number",
                   f"write {near[0]}" if near else "use a name that the field declares")
    low, high = bounds(field)
    ends = sorted((low * field.scale + field.offset, high * field.scale + field.offset))
    for number in numbers:
        if not low <= raw_value(field, number) <= high:
            unit = f" {field.unit}" if field.unit else ""
            yield (place, f"{number:g}", f"{ends[0]:g} to {ends[1]:g}{unit}, what the field holds",
                   "give a value that fits")
    if plan.low is not None and plan.high is not None and plan.high <= plan.low:
        yield place, f"low {plan.low:g}, high {plan.high:g}", "low below high", "set the two right"


def _fitting(profile: Profile, bits: int) -> int | None:
    """Return the least octets behind a message's fields with which the chain can encode it."""
    for octets in range(4097):
        try:
            profile.chain.coded_bits(bits + 8 * octets)
            return octets
        except LengthError:
            continue
    return None


def _lengths(profile: Profile, link: LinkPlan, names: list[str]) -> Found:
    """Check that the chain makes air frames of the messages, of the size that the wrapper says."""
    low, high = link.payload
    if high < low:
        yield "payload", f"{low} to {high} octets", "the least number first", f"write [{high}, {low}]"
        return
    for kind in link.kinds or names or (None,):
        for octets in range(low, high + 1):
            bits = message_bits(profile, kind) + 8 * octets
            what = f"messages{f' of kind {kind}' if kind else ''} of {bits} bits"
            try:
                air = -(-profile.chain.coded_bits(bits) // 8)
            except LengthError as error:
                fit = _fitting(profile, message_bits(profile, kind))
                yield ("payload", what, f"a length that the chain can encode ({error})",
                       f"set payload = [{fit}, {fit}]" if fit is not None else "set payload or kinds to fit")
                return
            size = profile.wrapper.frame_bytes
            if isinstance(size, int) and air != size:
                yield ("payload", f"{what}, {air} bytes on the air",
                       f"{size} bytes, as wrapper.frame_bytes says", "set payload or kinds to fit")
                return
    known = {f.name for kind in link.kinds or names or (None,) for f in fields_of(profile, kind)}
    for name in link.key:
        if not name.startswith("wrapper.") and name in profile.message_fields and name not in known:
            yield (f"key.{name}", f"{name}, in no message that is sent", "a field of the kinds sent",
                   "change kinds")


def _windows(place: str, windows: Sequence[tuple[float, float]]) -> Found:
    for i, (begin, end) in enumerate(windows):
        if end <= begin:
            yield (f"{place}[{i}]", f"{begin:g} to {end:g} s", "an end after its beginning",
                   "set the two right")


def _loss(rate: float, mean_run: float | None) -> Found:
    if mean_run is not None and 0 < rate < 1 and rate / (1 - rate) > mean_run:
        yield ("loss", f"{rate:g} in runs of {mean_run:g}", "runs long enough: at least loss / (1 - loss)",
               f"set loss_burst to {rate / (1 - rate):.3g} or more")
