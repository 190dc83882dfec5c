"""What can go wrong, told so that the reader can act: where, found, expected, fix."""

from dataclasses import dataclass


@dataclass(frozen=True, slots=True, kw_only=True)
class Problem:
    """One thing that is wrong with an input.

    place  key path in a profile (``coding[1].k``), byte offset or packet in a capture
    """

    file: str
    place: str
    found: str
    expected: str
    fix: str

    def __str__(self) -> str:
        where = f"{self.file}: {self.place}" if self.place else self.file
        return f"{where}: found {self.found}, expected {self.expected}\n  fix: {self.fix}"


class PcaptoolError(Exception):
    """Base of every error that pcaptool raises on purpose; ``problems`` says what and where."""

    def __init__(self, *problems: Problem) -> None:
        super().__init__("\n".join(str(problem) for problem in problems))
        self.problems = problems


class ProfileError(PcaptoolError):
    """A profile is wrong; its author must act."""


class CaptureError(PcaptoolError):
    """A capture cannot be read at all."""


class UsageError(PcaptoolError):
    """The call is wrong: an option, a name, a path; the caller must act."""
