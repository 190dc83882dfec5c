"""Take the shipped profiles that fit: carrier, opening bytes, wrapper, and checks that hold."""

from collections.abc import Sequence
from itertools import islice
from pathlib import Path

import numpy as np

from pcaptool.capture import read_datagrams
from pcaptool.frames.decode import FrameDecoder
from pcaptool.frames.table import CORRUPTED
from pcaptool.problem import CaptureError, Problem, UsageError
from pcaptool.profile import Profile, conflicts, load_profile, shipped_profiles

BATCHES = 8             # looked at in each capture
LEAST_USABLE = 0.5      # share of frames that must come through the checks


def choose_profiles(paths: Sequence[Path]) -> list[Profile]:
    """Return the shipped profiles that fit some of the captures, best first.

    Of profiles that claim the same datagrams, only the one with most usable frames is kept. Raises
    UsageError when none fits.
    """
    profiles = [load_profile(path) for path in shipped_profiles().values()]
    decoders = [FrameDecoder(p) for p in profiles]
    heard = np.zeros(len(profiles), np.int64)
    usable = np.zeros(len(profiles), np.int64)
    for path in paths:
        try:
            for batch in islice(read_datagrams(path), BATCHES):
                for i, decoder in enumerate(decoders):
                    frames, _ = decoder.decode(batch, np.zeros(len(batch), np.bool_))
                    heard[i] += len(frames)
                    usable[i] += int((frames.state < CORRUPTED).sum())
        except CaptureError:
            continue
    fit = [i for i in np.argsort(-usable, kind="stable") if usable[i] and usable[i] >= LEAST_USABLE * heard[i]]
    chosen: list[Profile] = []
    for i in fit:
        if not conflicts([*chosen, profiles[i]]):
            chosen.append(profiles[i])
    if not chosen:
        raise UsageError(Problem(
            file="profiles", place="", found="no shipped profile that fits these captures",
            expected="one of " + ", ".join(p.name for p in profiles), fix="write a profile and give it by --profile"))
    return chosen
