"""The decoded pieces of all captures, taken over in canonical order as they are needed.

While later pieces are still being decoded, frames of earlier ones can be merged already: the survey
told the least time in each piece, and nothing in a piece is ordered before that.
"""

from collections.abc import Callable, Sequence
from concurrent.futures import Future
from pathlib import Path

from pcaptool.audit.accounts import CAPTURE_SHIFT, CaptureAccount
from pcaptool.audit.merge import EARLIEST, LAST, Source
from pcaptool.audit.piece import Job, PieceResult, decode_piece
from pcaptool.capture import OpenFragment
from pcaptool.problem import CaptureError, Problem
from pcaptool.profile import Profile


class Pieces:
    """Pieces still pending, and the sources of those taken over.

    A piece that has no future, or one that has not begun, is decoded here.
    """

    def __init__(self, captures: Sequence[CaptureAccount],
                 pending: Sequence[tuple[int, Job, Future[PieceResult] | None]], profiles: tuple[Profile, ...],
                 scratch: Path, problems: list[Problem], progress: Callable[[int, int], None]) -> None:
        self.sources: list[Source] = []
        self._captures, self._profiles, self._scratch, self._problems = captures, profiles, scratch, problems
        self._progress = progress
        self._early: dict[int, PieceResult] = {}
        self._pending = list(pending)
        self._next = self._shift = self._frames = self._bytes = 0
        bound, bounds = LAST, [LAST]
        for _, job, _ in reversed(self._pending):
            least = job.piece.least_time if job.piece else None
            bound = min(bound, EARLIEST if least is None else least)
            bounds.append(bound)
        self._bounds = bounds[::-1]

    @property
    def bound(self) -> int:
        """No frame of a pending piece is ordered before this; LAST when none is pending."""
        return self._bounds[self._next]

    def take_over(self) -> list[Source]:
        """Wait for the next piece and return its sources; more of them where fragments cross pieces."""
        fresh, left = self._one()
        if left:            # what they complete lies in this piece or behind: nothing so late is merged yet
            while self._next < len(self._pending):
                more, more_left = self._one()
                fresh += more
                left += more_left
            fresh += self._fragments(left)
        self.sources += fresh
        return fresh

    def _one(self) -> tuple[list[Source], list[OpenFragment]]:
        index = self._pending[self._next][0]
        capture, rank = self._captures[index], self._next
        self._next += 1
        try:
            result = self._result(rank)
        except CaptureError as error:       # it changed or went since it was surveyed
            self._problems += error.problems
            return [], []
        self._shift = capture.add(result, self._shift)
        self._frames += sum(part.frames for part in result.parts)
        self._bytes += capture.survey.size // len(capture.survey.pieces)
        self._progress(self._bytes, self._frames)
        sources = [Source(part, index, rank, capture.shifts[-1]) for part in result.parts]
        return sources, capture.open_fragments(result, index)

    def _result(self, rank: int) -> PieceResult:
        """Return the result of a piece; decode pieces that nobody has begun, the last first, rather than wait."""
        _, job, future = self._pending[rank]
        if rank in self._early:
            return self._early.pop(rank)
        if future is None or future.cancel():
            return decode_piece(job)
        last = len(self._pending)
        while not future.done() and last > rank + 1:
            last -= 1
            _, other, others = self._pending[last]
            if last not in self._early and others is not None and others.cancel():
                self._early[last] = decode_piece(other)
        return future.result()

    def _fragments(self, left: list[OpenFragment]) -> list[Source]:
        """Decode datagrams whose fragments lie in several pieces, and account for each fragment."""
        left.sort(key=lambda f: (f.order, f.packet))
        result = decode_piece(Job(None, self._profiles, self._scratch, "fragments", tuple(left)))
        for entry, fragments in result.fragments.items():
            for fragment in fragments:
                self._captures[fragment.packet >> CAPTURE_SHIFT].entries[entry] += 1
        return [Source(part, -1, -1, 0) for part in result.parts]
