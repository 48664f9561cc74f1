"""The few exceptions of the project, each carrying what is wrong and where."""

from collections.abc import Sequence
from dataclasses import dataclass


@dataclass(frozen=True)
class Problem:
    """One thing that is wrong with an input.

    Attributes
    ----------
    place
        File, line, label or setting, as the user would name it.
    found
        What stands there.
    expected
        What should stand there.
    """

    place: str
    found: str
    expected: str

    def __str__(self) -> str:
        return f"{self.place}: found {self.found}; expected {self.expected}"


class IdentkitError(Exception):
    """Base of every error that identkit raises on purpose."""


class InputError(IdentkitError):
    """An input file, label or setting is wrong; carries every problem found.

    Parameters
    ----------
    problems
        One or more problems; the message is one sentence per problem.
    """

    def __init__(self, problems: Problem | Sequence[Problem]) -> None:
        self.problems = (problems,) if isinstance(problems, Problem) else tuple(problems)
        super().__init__("\n".join(str(problem) for problem in self.problems))


class MissingStageError(IdentkitError):
    """A stage was asked for before the stage it depends on has run."""

    def __init__(self, needed: str, asked_by: str) -> None:
        self.needed = needed
        super().__init__(f"{asked_by} needs the results of {needed}: run the {needed} stage first")


class InfeasibleError(IdentkitError):
    """A bound that was asked for does not exist; carries the frequency that decides.

    Parameters
    ----------
    message
        One sentence saying which requirements contradict each other.
    frequency
        Hz, where they do.
    """

    def __init__(self, message: str, frequency: float | None = None) -> None:
        self.frequency = frequency
        super().__init__(message)
