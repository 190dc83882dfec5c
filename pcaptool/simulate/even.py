"""A plan from a few figures: some links that differ in nothing but their keys."""

from collections.abc import Mapping
from dataclasses import replace
from typing import Any

from pcaptool.problem import Problem, UsageError
from pcaptool.profile import Profile
from pcaptool.simulate.load import make_plan
from pcaptool.simulate.messages import bounds
from pcaptool.simulate.plan import Plan
from pcaptool.simulate.transmit import gateway_field


def even_plan(profile: Profile, *, links: int, frames: int, interval: float, link: Mapping[str, Any],
              rest: Mapping[str, Any]) -> Plan:
    """Return a plan for links that send in turn, spread over the interval.

    frames    that each link sends, repeats not counted
    interval  s from one frame of a link to the next
    link      keys of every link, as in a plan; rest: keys of the plan itself
    Gateways 1 and 2 hear them in turn where the key has more to it than the gateway; transmitters are
    numbered from 1. Raises UsageError.
    """
    most = _most(profile)
    if links > most:
        raise UsageError(Problem(
            file="options", place="links", found=str(links), fix=f"give {most} or fewer",
            expected=f"at most {most}, what {' and '.join(profile.link.by)} can tell apart"))
    each = [{"key": key, "gateway": gateway, "interval": interval, "first": interval * i / links,
             "frames": frames, **link} for i in range(links) for key, gateway in [_key(profile, i)]]
    whole = {"duration": interval * (frames + 1), **rest}
    try:
        make_plan({**whole, "link": each[:1]}, "options")       # one link, so that a problem is told once
    except UsageError as error:
        told = (replace(p, place=p.place.removeprefix("link[0].")) for p in error.problems)
        raise UsageError(*told) from None
    return make_plan({**whole, "link": each}, "options")


def _own(profile: Profile) -> list[str]:
    """Return the parts of the link key that a transmitter has to itself."""
    gateways = {f"wrapper.{gateway_field(profile)}", "carrier.source", "carrier.destination"}
    when = {name for k in profile.message.kind for name in k.when}
    return [r for r in profile.link.by
            if r not in gateways | when and profile.find_field(r).must_be is None]


def _most(profile: Profile) -> int:
    """Return how many transmitters the key can tell apart, numbered as in ``_key``."""
    field = gateway_field(profile)
    highest = [bounds(profile.find_field(r))[1] for r in _own(profile)]
    return min(highest or [bounds(profile.wrapper_fields[field])[1] if field else 65_535])


def _key(profile: Profile, i: int) -> tuple[dict[str, int], int]:
    """Return (key, gateway) of transmitter i."""
    own = _own(profile)
    return dict.fromkeys(own, i + 1), 1 + i % 2 if own else 1 + i
