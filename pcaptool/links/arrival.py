"""How the frames of a link stand to its counter: in turn, late, repeated or a restart; and the gaps.

Frames come in canonical order, batch by batch; all state is in arrays that the caller keeps, so
that two calls equal one. Counters are extended past their modulus as in RFC 3550, A.1, with time as
a second witness: the link's interval (declared, or the median seen) says how far the counter should
have come, which resolves silences longer than the modulus and tells a restart from a loss.
"""

import numpy as np
from numba import njit
from numpy.typing import NDArray

IN_TURN, LATE, REPEATED, RESTART = 1, 2, 3, 4
BY_COUNTER, BY_TIME, UNCERTAIN = 0, 1, 2
RESOLVED = ("counter", "time", "time, uncertain")

# A jump that time cannot judge is a restart past this many frames; RFC 3550, A.1, MAX_DROPOUT.
MAX_DROPOUT = 3000
WAYS = 8                    # datagrams of which one bucket of find_copies knows; a power of two
SAMPLES = 65                # intervals of which the median is taken
LEAST_SAMPLES = 5

# Shares of the interval: how far from its phase a frame may come, from when on it is another link's, how
# much nearer the best link must be, and up to what mean deviation a link is regular enough to tell.
IN_PHASE, OUT_OF_PHASE, DISTINCT, REGULAR = 0.15, 0.3, 0.03, 0.1

# One link's state; all times in ns.
LINK_STATE = np.dtype([
    ("extended", np.int64),     # highest extended counter of this run, -1 before the first frame
    ("time", np.int64),         # order time of that frame
    ("usable_time", np.int64),  # order time of the last usable frame
    ("pending", np.int64),      # corrupted and short frames heard since then
    ("last_gap", np.int64),     # number of the link's latest gap, -1
    ("behind", np.int64),       # counter that would make a second frame in a row behind a restart
    ("interval", np.int64),     # declared or median, 0 while unknown
    ("samples", np.int64),
    ("heard", np.int64), ("intact", np.int64), ("corrected", np.int64), ("unverified", np.int64),
    ("corrupted", np.int64), ("short", np.int64),
    ("repeated", np.int64), ("late", np.int64), ("restarts", np.int64),
    ("bits_corrected", np.int64), ("bits_usable", np.int64),
    ("first_time", np.int64), ("last_time", np.int64), ("longest", np.int64),
    ("off_sum", np.float64), ("off_count", np.int64),   # deviation from the phase, share of the interval
    ("corrupted_runs", np.int64), ("in_run", np.int64),
    ("headroom_sum", np.float64), ("headroom_count", np.int64), ("headroom_worst", np.float64),
])

GAP = np.dtype([
    ("link", np.int64),
    ("before", np.int64), ("after", np.int64),      # extended counters
    ("run", np.int64),
    ("missing", np.int64), ("corrupted", np.int64),
    ("from_order", np.int64), ("to_order", np.int64), ("shift", np.int64),
    ("resolved", np.int64), ("previous", np.int64),  # the link's gap before this one
])


def new_links(n: int, interval: NDArray[np.int64]) -> NDArray[np.void]:
    """Return the states of n links that have heard nothing; interval 0 where none is declared."""
    links = np.zeros(n, LINK_STATE)
    links["extended"] = links["last_gap"] = links["behind"] = -1
    links["first_time"] = links["usable_time"] = np.iinfo(np.int64).min
    links["headroom_worst"] = np.inf
    links["interval"] = interval
    links["samples"] = np.where(interval > 0, SAMPLES, 0)      # a declared interval needs none
    return links


@njit(cache=True, nogil=True)
def _median(values: NDArray[np.int64], n: int) -> int:
    return int(np.sort(values[:n])[n // 2])


@njit(cache=True, nogil=True)
def extend(counter: int, extended: int, modulo: int, elapsed: int, interval: int, window: int,
           regular: bool) -> tuple[int, int, int]:
    """Return (advance, verdict, resolved) of a counter value against the highest one so far.

    advance   frames past ``extended``; 0 or less: behind it
    verdict   IN_TURN, LATE (perhaps repeated) or RESTART
    regular   the link keeps its interval, so that a jump back over the counter's end which time does
              not explain is a restart, however short it is
    """
    delta = (counter - extended) % modulo           # 0 .. modulo - 1
    back = (modulo - delta) % modulo                # how far behind, if behind
    if interval > 0:
        expected = elapsed / interval
        turns = max(0, int(np.round((expected - delta) / modulo)))
        advance = delta + turns * modulo
        if advance == 0:
            return 0, LATE, BY_COUNTER
        if back <= window and (advance - expected) > (expected + back):
            return -back, LATE, BY_COUNTER
        jumps_back = counter < extended % modulo
        if advance > 2 * expected + (2 if regular and jumps_back else window):
            return advance, RESTART, BY_TIME
        if turns == 0 and 2 * expected < modulo:
            return advance, IN_TURN, BY_COUNTER
        return advance, IN_TURN, UNCERTAIN if expected > 20 * modulo else BY_TIME
    if back <= window:
        return -back, LATE, BY_COUNTER
    if 2 * delta >= modulo or delta > MAX_DROPOUT:
        return delta, RESTART, BY_COUNTER
    return delta, IN_TURN, BY_COUNTER


@njit(cache=True, nogil=True)
def whose(
    claimed: int, group: int, order: int, links: NDArray[np.void], link_group: NDArray[np.int64]
) -> int:
    """Return the link that a damaged frame of a group most likely belongs to.

    claimed  the link that its damaged key names, or the group's home for frames of no known link
    The damaged key is believed unless the frame comes out of phase with that link and in phase with
    one other of the group, clearly nearer than any third: a whole number of intervals after its latest
    usable frame. Links that send irregularly cannot be told in that way.
    """
    best, best_off, second_off = -1, 1.0, 1.0
    claimed_off = 1.0
    for i in range(len(link_group)):
        if link_group[i] != group or links[i].interval <= 0 or links[i].extended < 0:
            continue
        mean_off = links[i].off_sum / max(links[i].off_count, 1)
        if i != claimed and mean_off > REGULAR:
            second_off = 0.0
            continue
        passed = (order - links[i].time) / links[i].interval
        off = abs(passed - max(np.round(passed), 1.0))
        if i == claimed:
            claimed_off = off
        if off < best_off:
            best, best_off, second_off = i, off, best_off
        elif off < second_off:
            second_off = off
    if claimed_off <= OUT_OF_PHASE or best < 0:
        return claimed
    return best if best_off <= IN_PHASE and second_off - best_off > DISTINCT else claimed


@njit(cache=True, nogil=True)
def follow(
    link: NDArray[np.int64], counter: NDArray[np.int64], state: NDArray[np.uint8], order: NDArray[np.int64],
    time: NDArray[np.int64], wrong_bits: NDArray[np.int32], headroom: NDArray[np.float32],
    air_bits: NDArray[np.int32],
    links: NDArray[np.void], seen: NDArray[np.bool_], samples: NDArray[np.int64],
    modulo: NDArray[np.int64], window: NDArray[np.int64], verifies: NDArray[np.bool_], gaps: NDArray[np.void],
    n_gaps: int, run: NDArray[np.int64], group: NDArray[np.int64], link_group: NDArray[np.int64],
) -> tuple[NDArray[np.uint8], int]:
    """Advance the links by a batch of frames; return (arrival uint8 (frame,), gaps so far).

    link     int64 (frame,)   -1: a frame to pass over; changed where ``whose`` knows better
    links    LINK_STATE (link,)      changed
    seen     bool (link, slot)       the last extended counters that came, by counter % slots; changed
    samples  int64 (link, SAMPLES)   intervals seen; changed
    modulo, window, verifies  (link,) of the link's profile
    gaps     GAP (gap,)  filled from n_gaps on; must have room for one more gap per frame
    run      int64 (link,)  number of the run; changed
    group    int64 (frame,) or empty: links among which a damaged frame of that group may belong
    link_group  int64 (link,)  group of every link
    """
    arrival = np.zeros(len(link), np.uint8)
    slots = seen.shape[1]
    for i in range(len(link)):
        who = link[i]
        if who < 0:
            continue
        if state[i] >= 2 and len(group):
            who = link[i] = whose(who, group[i], order[i], links, link_group)
        at = links[who]
        at.heard += 1
        if at.first_time == np.iinfo(np.int64).min:
            at.first_time = time[i]
        at.last_time = time[i]
        if state[i] >= 2:
            at.pending += 1
            if state[i] == 2:
                at.corrupted += 1
                if not at.in_run:
                    at.corrupted_runs += 1
                    at.in_run = 1
            else:
                at.short += 1
            continue
        at.in_run = 0
        at.bits_usable += air_bits[i]
        if state[i] == 0:
            at.intact += 1
        else:
            at.corrected += 1
            at.bits_corrected += wrong_bits[i]
            if not verifies[who]:
                at.unverified += 1
        if not np.isnan(headroom[i]):
            at.headroom_sum += headroom[i]
            at.headroom_count += 1
            at.headroom_worst = min(at.headroom_worst, headroom[i])
        if at.usable_time != np.iinfo(np.int64).min:
            at.longest = max(at.longest, order[i] - at.usable_time)
        at.usable_time = order[i]
        if counter[i] < 0 or modulo[who] == 0:
            at.pending = 0
            continue
        if at.extended < 0:
            arrival[i] = IN_TURN
            at.extended = counter[i]
            at.time = order[i]
            at.pending = 0
            seen[who, at.extended % slots] = True
            continue
        elapsed = max(order[i] - at.time, 0)
        advance, verdict, resolved = extend(
            counter[i], at.extended, modulo[who], elapsed, at.interval, window[who],
            at.off_count >= LEAST_SAMPLES and at.off_sum <= REGULAR * at.off_count)
        if verdict == LATE and counter[i] == at.behind and elapsed > at.interval > 0:
            verdict = RESTART           # two in a row behind: the count began again within the window
        at.behind = -1
        if verdict == LATE:
            place = at.extended + advance
            at.behind = (counter[i] + 1) % modulo[who]
            if place < 0 or seen[who, place % slots]:
                arrival[i] = REPEATED
                at.repeated += 1
                continue
            arrival[i] = LATE
            at.late += 1
            seen[who, place % slots] = True
            g = at.last_gap
            while g >= 0 and gaps[g].run == run[who] and gaps[g].after > place:
                if gaps[g].before < place:
                    gaps[g].missing -= 1
                    break
                g = gaps[g].previous
            continue
        if verdict == RESTART:
            arrival[i] = RESTART
            at.restarts += 1
            run[who] += 1
            for k in range(slots):
                seen[who, k] = False
            at.extended = counter[i]
            at.time = order[i]
            at.pending = 0
            seen[who, at.extended % slots] = True
            continue
        arrival[i] = IN_TURN
        if at.interval > 0:
            at.off_sum += min(abs(elapsed / at.interval - advance), 0.5)
            at.off_count += 1
        if advance == 1 and at.samples < SAMPLES and elapsed > 0:
            samples[who, at.samples] = elapsed
            at.samples += 1
            if at.samples >= LEAST_SAMPLES:
                at.interval = _median(samples[who], at.samples)
        if advance > 1:
            gap = gaps[n_gaps]
            gap.link = who
            gap.before = at.extended
            gap.after = at.extended + advance
            gap.run = run[who]
            gap.missing = advance - 1
            gap.corrupted = min(at.pending, advance - 1)
            gap.from_order = at.time
            gap.to_order = order[i]
            gap.shift = order[i] - time[i]
            gap.resolved = resolved
            gap.previous = at.last_gap
            at.last_gap = n_gaps
            n_gaps += 1
        for k in range(min(advance - 1, slots)):
            seen[who, (at.extended + 1 + k) % slots] = False
        if advance - 1 > slots:
            for k in range(slots):
                seen[who, k] = False
        at.extended += advance
        at.time = order[i]
        at.pending = 0
        seen[who, at.extended % slots] = True
    return arrival, n_gaps


@njit(cache=True, nogil=True)
def find_copies(
    digest: NDArray[np.uint64], slot: NDArray[np.int16], order: NDArray[np.int64],
    table: NDArray[np.uint64], table_time: NDArray[np.int64], turn: NDArray[np.int64], last: NDArray[np.bool_],
    window: int, window_without_ident: int,
) -> NDArray[np.bool_]:
    """Return which frames lie in a datagram that was recorded before, within the window.

    The same addresses, ports, IP identification and bytes make the same datagram. A radio repeat is
    forwarded in a new datagram with an identification of its own; where there is none, only copies
    within the much shorter window_without_ident (ns) count.
    table, table_time  (WAYS * bucket,)  digests seen lately, and when; changed. Frames come by time, so
                       the oldest of a bucket is replaced by going round it
    turn               int64 (bucket,)   way to replace next; changed
    last               bool (1,)         verdict on the datagram of the frame before; changed
    """
    copies = np.zeros(len(digest), np.bool_)
    buckets = np.uint64(len(turn) - 1)
    for i in range(len(digest)):
        if slot[i] > 0:
            copies[i] = last[0]
            continue
        d = digest[i]
        bucket = (d >> np.uint64(20)) & buckets
        first = bucket * np.uint64(WAYS)
        found = False
        for w in range(WAYS):
            at = first + np.uint64(w)
            if table[at] == d:
                span = window if d & np.uint64(1) else window_without_ident
                found = found or abs(order[i] - table_time[at]) <= span
        if not found:
            at = first + np.uint64(turn[bucket])
            table[at] = d
            table_time[at] = order[i]
            turn[bucket] = (turn[bucket] + 1) % WAYS
        copies[i] = last[0] = found
    return copies
