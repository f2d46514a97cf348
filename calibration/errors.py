"""Errors of the reference picture and of the scale file."""

from __future__ import annotations

from physics.errors import FallriseError


class CalibrationError(FallriseError, ValueError):
    """Base of all that can go wrong between a picture and a scale.

    Parameters
    ----------
    file : str
        The picture or scale file.
    problem : str
        What was found, and what to do, in one line.
    """

    def __init__(self, file: str, problem: str) -> None:
        super().__init__(file, problem)
        self.file, self.problem = file, problem

    def __str__(self) -> str:
        return f"{self.file}: {self.problem}"


class PatternError(CalibrationError):
    """No reference pattern that can be trusted was found in the picture."""


class ScaleError(CalibrationError):
    """A scale file is missing, damaged or does not fit the recording."""


class QuantityError(FallriseError, ValueError):
    """A quantity that a person typed cannot be used.

    Parameters
    ----------
    text : str
        What was read.
    problem : str
        What is wrong and what is allowed, in one line.
    """

    exit_status = 2

    def __init__(self, text: str, problem: str) -> None:
        super().__init__(text, problem)
        self.text, self.problem = text, problem

    def __str__(self) -> str:
        return f"{self.text!r}: {self.problem}"
