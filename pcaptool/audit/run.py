"""Run an audit: survey the captures, decode their pieces, follow the links, draw up the accounts."""

import tempfile
from collections.abc import Callable, Sequence
from concurrent.futures import Executor, Future
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from pcaptool.audit.accounts import CaptureAccount, check_identity, total_ledger
from pcaptool.audit.executor import beside, processes
from pcaptool.audit.frame_table import FrameTable
from pcaptool.audit.judge import judge
from pcaptool.audit.merge import LAST, Chunk, chunk_of, merge
from pcaptool.audit.naming import short_names
from pcaptool.audit.piece import Job, PieceResult, decode_piece, to_arrow
from pcaptool.audit.pieces import Pieces
from pcaptool.capture import Piece, sha256, survey
from pcaptool.capture.survey import PIECE_BYTES
from pcaptool.frames.stream import StreamDecoder
from pcaptool.frames.table import FrameBatch
from pcaptool.links.follow import FrameSlice, LinkFollower
from pcaptool.links.numbering import Numbering
from pcaptool.links.rows import gap_rows, interval_rows, link_rows
from pcaptool.problem import CaptureError, Problem, UsageError
from pcaptool.profile import Profile

Progress = Callable[[int, int, int], None]      # bytes done, bytes in all, frames so far
WORTH_PROCESSES = 48 << 20                      # bytes of captures below which one process is quicker
SLICE = tuple(name for name in FrameSlice.__dataclass_fields__ if name != "profile")


@dataclass(frozen=True, slots=True, kw_only=True)
class Options:
    """What an audit is asked for besides captures and profiles."""

    begin: int | None = None            # ns; frames before are left out of the tables
    end: int | None = None              # ns; frames from then on are left out
    links: tuple[str, ...] = ()         # names to keep, * and ? allowed; empty: all
    frames: bool = True                 # leave the frame table
    jobs: int = 1                       # processes, this one included; 1: one core does everything
    executor: Executor | None = None    # for the pieces, instead of processes of our own
    progress: Progress | None = None


@dataclass(slots=True)
class AuditResult:
    """The tables of an audit, in memory except for the frame table, which lies in ``folder``."""

    profiles: tuple[Profile, ...]
    links: list[dict[str, object]]
    gaps: list[dict[str, object]]
    intervals: list[dict[str, object]]
    captures: list[dict[str, object]]
    ledger: dict[str, int]
    totals: dict[str, int]
    verdict: str
    notes: list[str]
    problems: list[Problem]
    frames: int
    whole: bool                         # every capture was read to its end without damage
    temporary: "tempfile.TemporaryDirectory[str]" = field(repr=False)

    @property
    def folder(self) -> Path:
        """Where frames.parquet and errors.parquet lie until ``close``."""
        return Path(self.temporary.name)

    def close(self) -> None:
        """Remove the temporary folder."""
        self.temporary.cleanup()


def run_audit(paths: Sequence[Path], profiles: Sequence[Profile], options: Options, near: Path | None = None,
              problems: Sequence[Problem] = ()) -> AuditResult:
    """Audit captures with profiles.

    near  folder in which a temporary folder may hold the frame table; None: the system's
    """
    folder = tempfile.TemporaryDirectory(prefix=".pcaptool-", dir=near)
    run = _Run(paths, tuple(profiles), options, Path(folder.name), list(problems))
    try:
        result = run.result(folder)
    except BaseException:
        folder.cleanup()
        raise
    finally:
        run.close()
    for part in Path(folder.name).glob("*.arrow"):
        part.unlink()
    return result


class _Run:
    def __init__(self, paths: Sequence[Path], profiles: tuple[Profile, ...], options: Options, scratch: Path,
                 problems: list[Problem]) -> None:
        self.options, self.profiles, self.scratch, self.problems = options, profiles, scratch, problems
        names = short_names(paths)
        total = sum(p.stat().st_size for p in paths if p.is_file())
        self.total_bytes = total
        self.own = options.executor is None
        large = total >= WORTH_PROCESSES
        many = large and options.jobs > 1
        self.executor: Executor | None = options.executor or (processes(options.jobs - 1) if many else None)
        self.captures: list[CaptureAccount] = []
        self.notes: list[str] = []
        self.hashing = beside(options.jobs)
        digests = {path: self.hashing.submit(sha256, path) for path in paths}
        begun: dict[Path, list[tuple[Job, Future[PieceResult] | None]]] = {path: [] for path in paths}

        def begin(piece: Piece) -> None:
            """Submit a piece, but leave the first to this process, which is free when all are found."""
            mine = begun[piece.path]
            job = Job(piece, profiles, scratch, f"{paths.index(piece.path)}-{len(mine)}")
            leave = self.own and not mine and piece.path == paths[0]
            mine.append((job, None if leave or not self.executor else self.executor.submit(decode_piece, job)))

        for path in paths:
            try:
                found = survey(path, PIECE_BYTES if large else None, found=begin)
            except CaptureError as error:
                self.problems += error.problems
                continue
            self.captures.append(CaptureAccount(names[path], found, digests[path]))
        self.captures.sort(key=lambda c: c.rank_key)
        pending = [(index, job, future) for index, capture in enumerate(self.captures)
                   for job, future in begun[capture.survey.path]]
        self.pieces = Pieces(self.captures, pending, profiles, scratch, self.problems, self._progress)

    def _progress(self, done: int, frames: int) -> None:
        if self.options.progress:
            self.options.progress(done, self.total_bytes, frames)

    def close(self) -> None:
        self.hashing.shutdown(cancel_futures=True)
        if self.own and self.executor:
            self.executor.shutdown(cancel_futures=True)

    def result(self, folder: "tempfile.TemporaryDirectory[str]") -> AuditResult:
        follower = LinkFollower(self.profiles)
        folder_of_table = self.scratch if self.options.frames else None
        table = FrameTable(folder_of_table, self.profiles, [c.name for c in self.captures], self.options.jobs)
        hashed: list[dict[int, tuple[int, ...]]] = [{} for _ in self.profiles]
        outside = 0
        for index in range(len(self.profiles)):
            known: Numbering | None = None
            stream = StreamDecoder(self.profiles[index]) if self.profiles[index].wrapper.carries == "stream" else None
            if stream:
                known = Numbering() if follower.makers[index].needs_message else None
            elif follower.makers[index].needs_message:      # a damaged key is judged by all that were usable
                known = Numbering()
                while self.pieces.bound != LAST:
                    self.pieces.take_over()
                for source in self.pieces.sources:
                    if source.part.profile == index:
                        known.number(source.part.usable_keys)
            for chunk in merge(index, self.pieces):
                for source in self.pieces.sources:
                    hashed[source.part.profile] |= source.part.hashed
                chunk = self._without_copies(index, chunk, follower)
                if stream:
                    follower.count_datagrams(_slice(index, chunk))
                    made = stream.add(chunk.columns)
                    hashed[index] |= stream.maker.link.seen
                    if made is None:
                        continue
                    chunk = self._frames_of(stream, *made)
                outside += self._follow(index, chunk, follower, known, table, hashed)
            if stream:
                made = stream.rest()
                hashed[index] |= stream.maker.link.seen
                if made is not None:
                    outside += self._follow(index, self._frames_of(stream, *made), follower, known, table, hashed)
                if stream.breaks:
                    self.notes.append(f"profile {self.profiles[index].name}: missing datagrams broke streams "
                                      f"{stream.breaks} times; what stood across a break is lost")
        while self.pieces.bound != LAST:                    # of captures in which no profile found a frame
            self.pieces.take_over()
        table.close()
        return self._report(follower, hashed, table, folder, outside)

    def _frames_of(self, stream: StreamDecoder, frames: FrameBatch, capture: NDArray[np.int32]) -> Chunk:
        return chunk_of(to_arrow(frames, stream.profile, stream.maker), capture, frames.error_frame,
                        frames.error_position)

    def _without_copies(self, profile: int, chunk: Chunk, follower: LinkFollower) -> Chunk:
        copies = follower.copies(_slice(profile, chunk))
        if copies.any():
            which, records = chunk.columns["capture"][copies], chunk.columns["records"][copies]
            for index in np.unique(which):
                self.captures[int(index)].copied(int(records[which == index].sum()))
            chunk = chunk.take(np.flatnonzero(~copies))
        return chunk

    def _follow(self, profile: int, chunk: Chunk, follower: LinkFollower, known: Numbering | None,
                table: FrameTable, hashed: list[dict[int, tuple[int, ...]]]) -> int:
        outside = 0
        if self.options.begin is not None or self.options.end is not None:
            time = chunk.columns["time"]
            inside = np.ones(len(time), np.bool_)
            if self.options.begin is not None:
                inside &= time >= self.options.begin
            if self.options.end is not None:
                inside &= time < self.options.end
            outside = int((~inside).sum())
            if outside:
                chunk = chunk.take(np.flatnonzero(inside))
        who, arrival = follower.add(_slice(profile, chunk), known)
        names = follower.names(hashed)
        if self.options.links:
            keep = np.flatnonzero(self._wanted(names)[who])
            chunk, who, arrival = chunk.take(keep), who[keep], arrival[keep]
        table.add(profile, chunk, who, arrival, names)
        return outside

    def _wanted(self, names: Sequence[str]) -> NDArray[np.bool_]:
        from fnmatch import fnmatchcase

        patterns = self.options.links
        return np.array([not patterns or any(fnmatchcase(n, p) for p in patterns) for n in names], np.bool_)

    def _report(self, follower: LinkFollower, hashed: list[dict[int, tuple[int, ...]]], table: FrameTable,
                folder: "tempfile.TemporaryDirectory[str]", outside: int) -> AuditResult:
        names = follower.names(hashed)
        wanted = self._wanted(names)
        if self.options.links and not wanted.any():
            raise UsageError(Problem(
                file="--link", place="", found=", ".join(self.options.links),
                expected="one of " + (", ".join(sorted(names)[:20]) or "no link: no frame was found"),
                fix="name a link as the table of links does, or use * and ?"))
        dropped = [(c.first_time or 0, c.last_time or 0) for c in self.captures if c.drops]
        gaps = gap_rows(follower, names, dropped)
        links = link_rows(follower, names, gaps)
        judge(links, {p.name: p for p in self.profiles})
        intervals = interval_rows(follower, names, gaps)
        keep = {n for n, w in zip(names, wanted, strict=True) if w}
        links, gaps.rows, intervals = ([r for r in rows if r["link"] in keep]
                                       for rows in (links, gaps.rows, intervals))
        for capture in self.captures:
            check_identity(capture)
        ledger = total_ledger(self.captures)
        notes = [note for c in self.captures for note in c.notes()] + self.notes
        if outside:
            notes.append(f"{outside} frames lie outside the time asked for; they are in the ledger, not in the tables")
        for profile in self.profiles:
            if profile.wrapper.forwards == "good":
                notes.append(f"profile {profile.name}: the gateway does not forward frames whose check failed; "
                             "corrupted frames count as lost here")
        totals = {name: sum(int(row[name] or 0) for row in links) for name in (   # type: ignore[call-overload]
            "heard", "intact", "corrected", "unverified", "corrupted", "short", "repeated", "late", "restarts",
            "lost", "lost_air", "lost_backhaul", "lost_undecided", "sent", "bits_corrected", "gaps")}
        over = any(str(row["verdict"]).startswith("over limit") for row in links)
        limits = any(row["verdict"] == "within limits" for row in links)
        verdict = "limit exceeded" if over else "within limits" if limits else "no limits" if links else "no frames"
        whole = not self.problems and all(c.whole for c in self.captures)
        return AuditResult(self.profiles, links, gaps.rows, intervals, [c.row() for c in self.captures], ledger,
                           {"links": len(links), **totals}, verdict, notes, self.problems, table.rows, whole,
                           folder)


def _slice(profile: int, chunk: Chunk) -> FrameSlice:
    key = chunk.columns["key"]      # stands for columns that the profile has no use for
    return FrameSlice(profile, **{name: chunk.columns.get(name, key) for name in SLICE})


