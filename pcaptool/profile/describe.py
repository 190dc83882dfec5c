"""A profile in words, for a terminal 80 columns wide."""

import textwrap
from collections.abc import Sequence
from dataclasses import fields

from pcaptool.coding import Step
from pcaptool.coding.step import LengthError
from pcaptool.profile.fields import message_bits
from pcaptool.profile.model import Field, Profile, WrapperField

IN_HEX = ("poly", "seed", "generator", "init", "xorout", "value", "parity")


def describe(profile: Profile) -> str:
    """Return the profile's carrier, wrapper, chain in the transmitter's order, message and limits."""
    lines = [*_wrapped(f"{profile.name}: {profile.title}"), *_wrapped("basis: " + profile.basis), ""]
    ports = ", ".join(str(p) for p in profile.carrier.port)
    nets = " in " + ", ".join(profile.carrier.net) if profile.carrier.net else ""
    opening = f", payload begins {profile.carrier.opening.hex(' ')}" if profile.carrier.opening else ""
    lines += [f"carrier   UDP port {ports}{nets}{opening}"]
    w = profile.wrapper
    for title, group in (("wrapper", w.before), ("each", w.each), ("after", w.after)):
        lines += _layout(title, group, "bytes")
    size = "all that is left" if w.frame_bytes is None else f"{w.frame_bytes} bytes"
    carried = {"frame": "", "frames": ", several frames in it", "stream": ", a piece of a stream"}[w.carries]
    soft = f", {w.soft_bits} soft bits" if w.soft_bits else ""
    lines += [f"air frame {size}{carried}{soft}; the gateway forwards {w.forwards}", "",
              "chain, as the transmitter applies it:"]
    for i, step in enumerate(profile.coding):
        lines += textwrap.wrap(_step(step), 80, initial_indent=f"  {i + 1}. ", subsequent_indent=" " * 5)
    lines += [] if profile.coding else ["  none"]
    lines += _rate(profile)
    lines += ["", *_layout("message", profile.message.fields, "bits")]
    for kind in profile.message.kind:
        when = ", ".join(f"{k} = {v}" for k, v in kind.when.items())
        lines += _layout(f"  {kind.name} ({when})", kind.fields, "bits")
    lines += ["", "link by   " + ", ".join(profile.link.by)]
    if profile.counter:
        c = profile.counter
        every = f", every {c.interval}" if c.interval else ""
        lines.append(f"counter   {c.field} modulo {c.modulo}{every}, window {c.window}")
    if profile.backhaul:
        lines.append(f"backhaul  {profile.backhaul.counter} by {', '.join(profile.backhaul.by)}")
    limits = [f"{k} {v:g}" for k, v in dict(profile.limits).items() if v is not None]
    lines.append("limits    " + (", ".join(limits) or "none"))
    return "\n".join(lines)


def _wrapped(text: str) -> list[str]:
    return textwrap.wrap(" ".join(text.split()), 80)


def _step(step: Step) -> str:
    shown = [f"{f.name} = {_value(f.name, getattr(step, f.name))}" for f in fields(step)  # type: ignore[arg-type]
             if getattr(step, f.name) != f.default]
    return step.name + (": " + ", ".join(shown) if shown else "")


def _value(name: str, value: object) -> str:
    if isinstance(value, tuple):
        return ", ".join(_value(name, v) for v in value)
    return f"{value:#x}" if isinstance(value, int) and name in IN_HEX else str(value)


def _layout(title: str, group: Sequence[Field | WrapperField], unit: str) -> list[str]:
    if not group:
        return []
    words = [f"{f.name} {f.bits if unit == 'bits' else f.bits // 8}" for f in group]
    return textwrap.wrap(f"{title:<9} {', '.join(words)} ({unit})", 80, subsequent_indent=" " * 10)


def _rate(profile: Profile) -> list[str]:
    kinds: list[str | None] = [k.name for k in profile.message.kind] or [None]
    sizes = {message_bits(profile, kind) for kind in kinds}
    out = []
    for k in sorted(sizes):
        try:
            n = profile.chain.coded_bits(k)
        except LengthError:
            continue
        out.append(f"  {k} message bits make {n} bits on the air: rate {k / n:.3f}" if n else "")
    return out
