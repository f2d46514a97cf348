"""The base error of the house and the errors of the laws.

Every error that a user can cause descends from `FallriseError`, carries its facts as attributes and
survives a worker process (it pickles). The message is one line: what, which, what to do.
"""

from __future__ import annotations


class FallriseError(Exception):
    """Base of every known failure; `exit_status` is what a command returns for it."""

    exit_status: int = 1


class PhysicsError(FallriseError, ValueError):
    """A law was asked outside the range where it holds, or with an impossible value.

    Parameters
    ----------
    name : str
        The quantity, as the code calls it.
    value : object
        What was given.
    allowed : str
        The allowed range in words and units, such as ``"above 0 m"``.
    """

    def __init__(self, name: str, value: object, allowed: str) -> None:
        super().__init__(name, value, allowed)
        self.name, self.value, self.allowed = name, value, allowed

    def __str__(self) -> str:
        return f"{self.name} = {self.value}: must be {self.allowed}"
