"""One root for every error a user can cause, subclassed by who must act; each knows its exit code.

Exit codes: 0 done; 1 internal error; 2 usage or declaration; 3 a source is not there yet; 4 another run
holds the lock; 5 a `stop` finding (or a `warn` under --strict).
"""

import difflib
from collections.abc import Iterable, Sequence
from dataclasses import dataclass


@dataclass(frozen=True)
class Problem:
    """One thing that is wrong: what, where, what was found, what was expected, what to do."""

    what: str
    file: str = ""
    place: str = ""
    found: str = ""
    expected: str = ""
    remedy: str = ""

    def __str__(self) -> str:
        where = ", ".join(part for part in (self.file, self.place) if part)
        lines = [f"{where}: {self.what}" if where else self.what]
        for label, text in (("found", self.found), ("expected", self.expected), ("to do", self.remedy)):
            if text:
                lines.append(f"    {label}: {text}")
        return "\n".join(lines)


class KeelbookError(Exception):
    """Something a user can put right. Carries every problem found, not only the first."""

    exit_code = 2

    def __init__(self, problems: Sequence[Problem] | Problem | str) -> None:
        if isinstance(problems, str):
            problems = [Problem(problems)]
        elif isinstance(problems, Problem):
            problems = [problems]
        self.problems: tuple[Problem, ...] = tuple(problems)
        super().__init__("\n".join(str(problem) for problem in self.problems))


class DeclarationError(KeelbookError):
    """An assembly, rule or schema file, or a command's argument, is not as it must be."""

    exit_code = 2


class SourceMissing(KeelbookError):
    """A declared source file is not there (yet)."""

    exit_code = 3


class LockHeld(KeelbookError):
    """Another run is writing this build folder."""

    exit_code = 4


class StopFindings(KeelbookError):
    """A finding of severity `stop` stands; nothing was published."""

    exit_code = 5


class NotReproduced(KeelbookError):
    """A stored figure differs from its re-performance, or a file from its hash."""

    exit_code = 5


def nearest(name: str, valid: Iterable[str], count: int = 3) -> list[str]:
    """Return the valid names closest to `name`, best first; empty when none is close."""
    by_lower = {candidate.lower(): candidate for candidate in valid}
    return [by_lower[hit] for hit in difflib.get_close_matches(name.lower(), by_lower, n=count, cutoff=0.5)]


def did_you_mean(name: str, valid: Iterable[str]) -> str:
    """Return "did you mean 'x'?" for the closest valid name, or "" when none is close."""
    close = nearest(name, valid, 1)
    return f"did you mean '{close[0]}'?" if close else ""
