"""Name what can go wrong outside the instruments, by what a person can do about it."""

from dataclasses import dataclass

from pulsetally.drivers.errors import PulsetallyError


@dataclass(frozen=True, slots=True, kw_only=True)
class Mistake:
    """Say what is wrong at one place of a file.

    file, line, column: the place, counted from 1; line 0 where there is no line.
    path: the place in words, such as steps[2].read. problem: what was found and what is
    allowed. remedy: what to write instead.
    """

    file: str
    line: int
    column: int
    path: str
    problem: str
    remedy: str

    def __str__(self) -> str:
        place = f"{self.file}:{self.line}:{self.column}" if self.line else self.file
        path = f" {self.path}" if self.path else ""
        return f"{place}{path}: {self.problem}. To fix it, {self.remedy}."


class InputError(PulsetallyError):
    """A file or an option can't be used as written. Holds every mistake that was found."""

    def __init__(self, mistakes: list[Mistake]) -> None:
        super().__init__("\n".join(str(mistake) for mistake in mistakes))
        self.mistakes = mistakes


class RecipeError(InputError):
    """A recipe can't run as written."""


class BenchError(InputError):
    """A bench file can't be used as written."""


class PlanError(PulsetallyError):
    """A recipe is well written but must not run on this bench.

    problems: one sentence each.
    """

    def __init__(self, problems: list[str]) -> None:
        super().__init__("\n".join(problems))
        self.problems = problems


class LogbookError(PulsetallyError):
    """The logbook can't be read or written."""


class ShotMissing(PulsetallyError):
    """A pulse was fired, or may have been, and no record of it came.

    order: which pulse of the round, from 1.
    """

    def __init__(self, order: int, problem: str) -> None:
        super().__init__(f"pulse {order}: {problem}")
        self.order, self.problem = order, problem


class ContactLost(PulsetallyError):
    """No cell is there, or it is a short: what would be measured means nothing."""


class StopRequested(PulsetallyError):
    """A person or the system asked the run to stop now."""


class OutputsNotConfirmed(PulsetallyError):
    """The outputs could not be read back as off.

    address: the VISA address of the instrument; problem: why.
    """

    def __init__(self, address: str, problem: str) -> None:
        super().__init__(
            f"OUTPUTS NOT CONFIRMED OFF: the function generator at {address} could not be read back"
            f" as off ({problem}). Switch its output off by hand before you touch the cell."
        )
        self.address, self.problem = address, problem
