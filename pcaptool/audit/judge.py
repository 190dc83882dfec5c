"""Hold links against the limits of their profile."""

from collections.abc import Mapping, Sequence

from pcaptool.profile import Profile


def judge(links: Sequence[dict[str, object]], profiles: Mapping[str, Profile]) -> None:
    """Set the verdict of every link; a home of corrupted frames has none of its own."""
    for row in links:
        if "?" in str(row["link"]).split("/"):
            row["verdict"] = "frames of no known link"
            continue
        limits = profiles[str(row["profile"])].limits
        over = []
        for key, name in (("lost_percent", "lost"), ("corrupted_percent", "corrupted")):
            limit, value = getattr(limits, key), row[key]
            if limit is not None and isinstance(value, float) and value > limit:
                over.append(f"{name} {value:.3g} % > {limit:g} %")
        if limits.headroom is not None and isinstance(row["headroom_mean"], float):
            mean = row["headroom_mean"]
            if mean < limits.headroom:
                over.append(f"mean headroom {mean:.2f} < {limits.headroom:g}")
        none = limits.lost_percent is None and limits.corrupted_percent is None and limits.headroom is None
        row["verdict"] = "over limit: " + ", ".join(over) if over else "no limits" if none else "within limits"
