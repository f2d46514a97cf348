"""Errors of recordings, bench files, results and fields; each is one clear line for the user."""

from __future__ import annotations

from physics.errors import FallriseError


class FileError(FallriseError):
    """Something is wrong with one file or folder.

    Parameters
    ----------
    file : str
        The file or folder.
    problem : str
        What was found, and what to do, in one line.
    """

    def __init__(self, file: str, problem: str) -> None:
        super().__init__(file, problem)
        self.file, self.problem = file, problem

    def __str__(self) -> str:
        return f"{self.file}: {self.problem}"


class RecordingError(FileError):
    """A recording is missing, is none, or gives no frame."""


class ResultError(FileError):
    """A result folder is missing, damaged, or cannot be written."""


class FieldError(FileError):
    """The voltage over time cannot be had, is ambiguous, or two sources disagree."""


class DecisionError(FileError):
    """A person's decision cannot be taken: unknown droplet, verdict or time."""

    exit_status = 2


class BenchError(FallriseError):
    """A bench file is wrong; the message names file, key, what was read and what is allowed.

    Parameters
    ----------
    file : str
        The bench file.
    key : str
        Dotted key, such as ``cell.plate_gap``; empty for the file as a whole.
    found : str
        What was read.
    allowed : str
        What is allowed there.
    """

    exit_status = 2

    def __init__(self, file: str, key: str, found: str, allowed: str) -> None:
        super().__init__(file, key, found, allowed)
        self.file, self.key, self.found, self.allowed = file, key, found, allowed

    def __str__(self) -> str:
        key = f"{self.key}: " if self.key else ""
        return f"{self.file}: {key}read {self.found}; allowed: {self.allowed}"


class UsageError(FallriseError):
    """A command was used wrongly.

    Parameters
    ----------
    problem : str
        What is wrong and what to do, in one line.
    """

    exit_status = 2

    def __init__(self, problem: str) -> None:
        super().__init__(problem)
        self.problem = problem

    def __str__(self) -> str:
        return self.problem
