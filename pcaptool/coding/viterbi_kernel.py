"""The Viterbi algorithm over many frames side by side.

A state holds the last K - 1 register bits, the newest most significant; a step shifts one in and loses the
least significant. A state's metric and the bits lost on the way to it share one number: the metric in the
high byte, the bits lost in the last eight steps in the low one. Adding a branch's cost and keeping the lesser
of two sums then carries the path along, so the inner loops over frames are plain additions and minima.

No metric is more than (K - 1) n q above the least, since every state can be reached from every other in K - 1
steps that cost at most n q each (n output bits, worth q at most); eight steps add 8 n q. The caller sees to
it that (K + 7) n q < 255.

Source: Viterbi (1967), IEEE Trans. Inf. Theory 13:260-269; Forney (1973), Proc. IEEE 61:268-278.
"""

import numpy as np
from numba import njit
from numpy.typing import NDArray

from pcaptool.coding.bits import word_at
from pcaptool.coding.viterbi_butterfly import LANES, butterfly

TILE = 16               # octets of columns turned at a time, so that the rows written stay in the cache
ANY = -1                # a start or end state that is not known

# Eight bits of every byte, least significant first, as the eight bytes of one number
SPREAD = np.unpackbits(np.arange(256, dtype=np.uint8)[:, None], axis=1, bitorder="little").view(np.uint64)[:, 0].copy()


@njit(cache=True, nogil=True)
def _swap(a: np.uint64, b: np.uint64, shift: np.uint64, mask: np.uint64) -> tuple[np.uint64, np.uint64]:
    """Exchange the bytes of a above the mask with those of b below it."""
    t = ((a >> shift) ^ b) & mask
    return a ^ (t << shift), b ^ t


@njit(cache=True, nogil=True)
def _turn(rows: NDArray[np.uint8], first: int, lanes: int, turned: NDArray[np.uint64]) -> None:
    """Lay rows of bytes side by side: byte [column, lane] of ``turned``, uint64 (columns, LANES / 8).

    Eight rows at a time, 8 by 8 bytes by three exchanges. Source: Warren, Hacker's Delight, 2nd edition, 7-3.
    """
    columns = rows.shape[1]
    flat = turned.view(np.uint8).reshape(turned.shape[0] * LANES)
    m1, m2, m3 = np.uint64(0x00FF00FF00FF00FF), np.uint64(0x0000FFFF0000FFFF), np.uint64(0x00000000FFFFFFFF)
    s1, s2, s3 = np.uint64(8), np.uint64(16), np.uint64(32)
    whole = columns // 8
    for begin in range(0, whole, TILE):
        for g in range((lanes + 7) // 8):
            f = first + 8 * g
            end = f + min(8, lanes - 8 * g) - 1     # the last lanes of a part repeat its last row
            q0, q1, q2, q3 = rows[f], rows[min(f + 1, end)], rows[min(f + 2, end)], rows[min(f + 3, end)]
            q4, q5, q6, q7 = (rows[min(f + 4, end)], rows[min(f + 5, end)], rows[min(f + 6, end)],
                              rows[min(f + 7, end)])
            for t in range(begin, min(begin + TILE, whole)):
                c = np.uint64(8 * t)
                r0, r1, r2, r3 = word_at(q0, c), word_at(q1, c), word_at(q2, c), word_at(q3, c)
                r4, r5, r6, r7 = word_at(q4, c), word_at(q5, c), word_at(q6, c), word_at(q7, c)
                x = ((r0 >> s3) ^ r4) & m3
                r0, r4 = r0 ^ (x << s3), r4 ^ x
                x = ((r1 >> s3) ^ r5) & m3
                r1, r5 = r1 ^ (x << s3), r5 ^ x
                x = ((r2 >> s3) ^ r6) & m3
                r2, r6 = r2 ^ (x << s3), r6 ^ x
                x = ((r3 >> s3) ^ r7) & m3
                r3, r7 = r3 ^ (x << s3), r7 ^ x
                x = ((r0 >> s2) ^ r2) & m2
                r0, r2 = r0 ^ (x << s2), r2 ^ x
                x = ((r1 >> s2) ^ r3) & m2
                r1, r3 = r1 ^ (x << s2), r3 ^ x
                x = ((r4 >> s2) ^ r6) & m2
                r4, r6 = r4 ^ (x << s2), r6 ^ x
                x = ((r5 >> s2) ^ r7) & m2
                r5, r7 = r5 ^ (x << s2), r7 ^ x
                x = ((r0 >> s1) ^ r1) & m1
                r0, r1 = r0 ^ (x << s1), r1 ^ x
                x = ((r2 >> s1) ^ r3) & m1
                r2, r3 = r2 ^ (x << s1), r3 ^ x
                x = ((r4 >> s1) ^ r5) & m1
                r4, r5 = r4 ^ (x << s1), r5 ^ x
                x = ((r6 >> s1) ^ r7) & m1
                r6, r7 = r6 ^ (x << s1), r7 ^ x
                j = 8 * t
                turned[j, g], turned[j + 1, g], turned[j + 2, g], turned[j + 3, g] = r0, r1, r2, r3
                turned[j + 4, g], turned[j + 5, g], turned[j + 6, g], turned[j + 7, g] = r4, r5, r6, r7
    for column in range(8 * whole, columns):
        for k in range(lanes):
            flat[column * LANES + k] = rows[first + k, column]


@njit(cache=True, nogil=True)
def _branches(bits: NDArray[np.uint8], weight: NDArray[np.uint8], where: NDArray[np.int64],
              branch: NDArray[np.uint16]) -> None:
    """Fill the costs of the 2^n outputs of a step, in the high byte: uint16 (output * LANES + lane,).

    bits, weight  uint8 (column * LANES + lane,)
    where         int64 (n,)  column of every output bit, -1: not sent
    """
    low = np.uint16(0x100)
    size = 1
    for f in range(LANES):
        branch[f] = 0
    for b in range(len(where)):                     # output bit b doubles the table: without it, and with it
        at = np.uint64(max(where[b], 0) * LANES)
        for p in range(size):
            off, on = np.uint64(p * LANES), np.uint64((p + size) * LANES)
            if where[b] < 0:
                for f in range(LANES):
                    g = np.uint64(f)
                    branch[on + g] = branch[off + g]
            elif len(weight):
                for f in range(LANES):
                    g = np.uint64(f)
                    worth = np.uint16(np.uint16(weight[at + g]) << np.uint16(8))
                    one = np.uint16(worth * np.uint16(bits[at + g]))
                    before = branch[off + g]
                    branch[on + g] = np.uint16(before + np.uint16(worth - one))
                    branch[off + g] = np.uint16(before + one)
            else:
                for f in range(LANES):
                    g = np.uint64(f)
                    one = np.uint16(np.uint16(bits[at + g]) << np.uint16(8))
                    before = branch[off + g]
                    branch[on + g] = np.uint16(before + (one ^ low))
                    branch[off + g] = np.uint16(before + one)
        size *= 2


@njit(cache=True, nogil=True)
def _advance(metric: NDArray[np.uint16], row_of: NDArray[np.uint64], branch: NDArray[np.uint16],
             outputs: NDArray[np.uint64], mark: np.uint16) -> None:
    """Take one step in place: every state's metric becomes the lesser of its two ways.

    States j and j + half come from 2j and 2j + 1, and are written where those stood.
    row_of   uint64 (state,)    where the state's lanes begin in ``metric``, before the step
    outputs  uint64 (2, state)  where the costs of the two branches into a state begin in ``branch``
    """
    half = len(row_of) // 2
    for j in range(half):
        butterfly(metric, row_of[2 * j], row_of[2 * j + 1], branch, outputs[0, j], outputs[1, j], outputs[0, j + half],
                  outputs[1, j + half], mark)   # type: ignore[call-arg]


@njit(cache=True, nogil=True)
def _keep(metric: NDArray[np.uint16], row_of: NDArray[np.uint64], path: NDArray[np.uint8], least: NDArray[np.uint16],
          total: NDArray[np.int64]) -> None:
    """Move the path bits out of the metrics and take the least metric off all.

    path  uint8 (state * LANES + lane,)
    """
    high = np.uint16(0xFF00)
    for f in range(LANES):
        least[f] = metric[f]
    for s in range(1, len(row_of)):
        row = np.uint64(s * LANES)
        for f in range(LANES):
            x, y = least[f], metric[row + np.uint64(f)]
            least[f] = x if x < y else y
    for f in range(LANES):
        least[f] = least[f] & high
        total[f] += least[f] >> np.uint16(8)
    for s in range(len(row_of)):
        row, to = row_of[s], np.uint64(s * LANES)
        for f in range(LANES):
            g = np.uint64(f)
            value = metric[row + g]
            path[to + g] = np.uint8(value)
            metric[row + g] = np.uint16((value & high) - least[f])


@njit(cache=True, nogil=True)
def _rotations(states: int, memory: int) -> NDArray[np.uint64]:
    """Return where the lanes of every state begin after t steps, t < memory: uint64 (t, state).

    Each step moves a state's row as it rotates the state left by one bit.
    """
    out = np.empty((memory, states), np.uint64)
    for t in range(memory):
        for s in range(states):
            out[t, s] = LANES * ((s << t | s >> (memory - t)) & (states - 1))
    return out


@njit(cache=True, nogil=True)
def viterbi(
    bits: NDArray[np.uint8], weight: NDArray[np.uint8], where: NDArray[np.int64], n: int, states: int,
    outputs: NDArray[np.uint8], start: NDArray[np.int64], end: NDArray[np.int64], far: int,
    spread: NDArray[np.uint64],
) -> tuple[NDArray[np.uint8], NDArray[np.int64], NDArray[np.int64]]:
    """Return (register inputs of the most likely path uint8 (frame, step), its cost, its start state).

    bits     uint8 (frame, sent bit)  hard decisions
    weight   uint8, the same shape: what a decision is worth, 0 an erasure; or no rows: 1
    where    int64 (step * n,)  column of every output bit, -1: not sent
    outputs  uint8 (2, state)  output bits of the branch into a state when a 0 and when a 1 is lost, bit b of
             generator b
    start, end  int64 (frame,)  states, or ANY
    far      metric of start states that cannot be: (K - 1) n q + 1
    The memory is that of ``states`` bytes for each eight steps of LANES frames.
    """
    frames, steps = bits.shape[0], len(where) // n
    octets = -(-steps // 8)
    lead = 8 * octets - steps                       # the first octet is not full: as if zeros had been lost before
    memory = 0
    while 1 << memory < states:
        memory += 1
    turned = np.zeros((bits.shape[1], LANES // 8), np.uint64)
    turned_weight = np.zeros((weight.shape[1], LANES // 8), np.uint64)
    received = turned.view(np.uint8).reshape(turned.shape[0] * LANES)
    worth = turned_weight.view(np.uint8).reshape(turned_weight.shape[0] * LANES)
    branch, metric = np.zeros(LANES << n, np.uint16), np.zeros(states * LANES, np.uint16)
    rows = _rotations(states, memory)
    cost_of = np.empty((2, states), np.uint64)
    for lost in range(2):
        for s in range(states):
            cost_of[lost, s] = LANES * outputs[lost, s]
    path = np.zeros((octets, states * LANES), np.uint8)
    least, total = np.zeros(LANES, np.uint16), np.zeros(LANES, np.int64)
    at, last = np.zeros(LANES, np.int64), np.zeros(LANES, np.int64)
    inputs = np.zeros((LANES, octets + 2), np.uint64)   # 8 bits a number; bit i of octet j was lost in step 8j + i
    flat = inputs.view(np.uint8).reshape(LANES, 8 * (octets + 2))
    out = np.empty((frames, steps), np.uint8)
    cost, begun = np.zeros(frames, np.int64), np.zeros(frames, np.int64)
    for first in range(0, frames, LANES):
        lanes = min(LANES, frames - first)
        _turn(bits, first, lanes, turned)
        if len(weight):
            _turn(weight, first, lanes, turned_weight)
        total[:] = 0
        for s in range(states):
            for f in range(lanes):
                wrong = start[first + f] != ANY and start[first + f] != s
                metric[s * LANES + f] = np.uint16(far << 8) if wrong else np.uint16(0)
        for step in range(steps):
            place = (step + lead) & 7
            _branches(received, worth, where[step * n : (step + 1) * n], branch)
            _advance(metric, rows[step % memory], branch, cost_of, np.uint16(1 << place))
            if place == 7:
                _keep(metric, rows[(step + 1) % memory], path[(step + lead) >> 3], least, total)
        row_of = rows[steps % memory]
        for f in range(lanes):                      # the end state
            best = end[first + f]
            if best == ANY:
                best = np.int64(0)
                for s in range(states):
                    if metric[row_of[s] + np.uint64(f)] < metric[row_of[best] + np.uint64(f)]:
                        best = np.int64(s)
            at[f] = last[f] = best
            cost[first + f] = total[f] + (metric[row_of[best] + np.uint64(f)] >> np.uint16(8))
        for octet in range(octets - 1, -1, -1):
            for f in range(lanes):
                gone = np.int64(path[octet, at[f] * LANES + f])
                inputs[f, octet] = spread[gone]
                at[f] = (gone | at[f] << 8) & (states - 1)
        # A bit lost in a step was put in ``memory`` steps before; the bits in the end state were never lost.
        for f in range(lanes):
            for k in range(memory):
                flat[f, 8 * octets + k] = np.uint8(last[f] >> k & 1)
            row = flat[f]
            for step in range(steps):
                out[first + f, step] = row[step + memory + lead]
            for k in range(memory):
                begun[first + f] |= np.int64(row[lead + k]) << k
    return out, cost, begun
