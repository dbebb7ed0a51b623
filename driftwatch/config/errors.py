"""What is wrong with a configuration.

ConfigError
    All problems of one file, found in one pass.
"""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(frozen=True, slots=True)
class Problem:
    """One thing that is wrong."""

    key: str  # where, as a person finds it: mode[2] "housing rocking" . band[1] "warning" . low
    came: str  # what stands there
    expected: str  # what would have been right
    remedy: str  # what to do

    def __str__(self) -> str:
        """One line, whatever stands in the file."""
        text = f"{self.key}: got {self.came}; expected {self.expected}; {self.remedy}"
        return "".join(mark if mark.isprintable() else ascii(mark)[1:-1] for mark in text)


class ConfigError(Exception):
    """A configuration that cannot be used.

    Attributes
    ----------
    problems
        Everything that is wrong, in the order of the file's tables; never empty.
    """

    def __init__(self, problems: tuple[Problem, ...]) -> None:
        super().__init__("\n".join(str(problem) for problem in problems))
        self.problems = problems

    def __reduce__(self) -> tuple[type[ConfigError], tuple[tuple[Problem, ...]]]:
        return (ConfigError, (self.problems,))
