"""The trellis of a convolutional code: its branches and its distance spectrum."""

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray


def branch_outputs(generators: Sequence[int], inverted: Sequence[int]) -> NDArray[np.uint8]:
    """Return the output bits of the branches into a state: uint8 (2, state), bit b of generator b.

    A register of K bits, the newest most significant, gives the parity of the bits that a generator taps. The
    branch into state s on which bit ``lost`` leaves the register has the register 2 s + lost.
    """
    states = 1 << (max(generators).bit_length() - 1)
    out = np.zeros((2, states), np.uint8)
    for lost in (0, 1):
        for s in range(states):
            register = s << 1 | lost
            for b, (g, flip) in enumerate(zip(generators, inverted, strict=True)):
                out[lost, s] |= ((register & g).bit_count() & 1 ^ flip) << b
    return out


def distance_spectrum(
    generators: Sequence[int], puncture: Sequence[str], most: int
) -> tuple[list[int], list[int]]:
    """Return (paths a_d, their information weight c_d) for every weight d from 0 to ``most``.

    Paths leave the zero state with a 1 and come back to it for the first time; of a punctured code they are
    counted from every step of the pattern. Source: Viterbi (1971), IEEE Trans. Commun. 19:751-772.
    """
    outputs = branch_outputs(generators, [0] * len(generators))
    states = outputs.shape[1]
    half, period = states // 2, len(puncture[0])
    a, c = [0] * (most + 1), [0] * (most + 1)
    for phase in range(period):
        paths = np.zeros((states, most + 1), object)
        ones = np.zeros((states, most + 1), object)
        paths[0, 0] = 1
        for step in range(phase, phase + 64 * states):
            sent = sum(1 << b for b, row in enumerate(puncture) if row[step % period] == "1")
            weight = np.array([[int(o & sent).bit_count() for o in row] for row in outputs])
            new_paths, new_ones = np.zeros_like(paths), np.zeros_like(ones)
            for s in range(states):
                entered = int(s >= half)            # the newest bit
                if step == phase and not entered:
                    continue
                for lost in (0, 1):
                    before, w = (s << 1) & (states - 1) | lost, weight[lost, s]
                    new_paths[s, w:] += paths[before, : most + 1 - w]
                    new_ones[s, w:] += ones[before, : most + 1 - w] + entered * paths[before, : most + 1 - w]
            for d in range(most + 1):
                a[d] += new_paths[0, d]
                c[d] += new_ones[0, d]
            new_paths[0] = new_ones[0] = 0
            paths, ones = new_paths, new_ones
            if not paths.any():
                break
    return a, c


def free_distance(generators: Sequence[int], puncture: Sequence[str]) -> int:
    """Return the least weight of a path that leaves the zero state and comes back; 0 where none does.

    The lightest path into every state, step by step, from every step of the puncture pattern.
    """
    outputs = branch_outputs(generators, [0] * len(generators))
    states = np.arange(outputs.shape[1])
    half, period, far = len(states) // 2, len(puncture[0]), 1 << 30
    before = [(states << 1) & (len(states) - 1) | lost for lost in (0, 1)]
    ones = np.array([byte.bit_count() for byte in range(256)])
    sent = [sum(1 << b for b, row in enumerate(puncture) if row[j] == "1") for j in range(period)]
    weight = [ones[outputs & mask] for mask in sent]
    least = far
    for phase in range(period):
        lightest = np.full(len(states), far)
        lightest[half] = weight[phase][0, half]
        for step in range(phase + 1, phase + 1 + 64 * period * len(generators) * len(states).bit_length()):
            w = weight[step % period]
            lightest = np.minimum(lightest[before[0]] + w[0], lightest[before[1]] + w[1])
            least, lightest[0] = min(least, int(lightest[0])), far
            if lightest.min() >= least:
                break
    return least if least < far else 0
