"""What the page refuses, with the status that the browser gets."""

from __future__ import annotations

import errno
from typing import Any

from physics.errors import FallriseError

FULL = (errno.ENOSPC, errno.EDQUOT)


class RefusedError(FallriseError):
    """A request that cannot be served; never the server's own fault.

    Parameters
    ----------
    status : int
        HTTP status, 400 to 499 or 507.
    message : str
        One line for the person at the page.
    facts : dict, optional
        More for the page: the field with the error, the newer revision.
    """

    def __init__(self, status: int, message: str, facts: dict[str, Any] | None = None) -> None:
        super().__init__(status, message, facts)
        self.status, self.message, self.facts = status, message, facts or {}

    def __str__(self) -> str:
        return self.message


def status_of(error: Exception) -> int:
    """HTTP status that stands for an error of the core or of the system.

    Parameters
    ----------
    error : Exception
        Any error with a message that a person can read.

    Returns
    -------
    status : int
        507 for a full disk, 404 for what is not there, 403 for what may not be touched, 422 otherwise.
    """
    if isinstance(error, RefusedError):
        return error.status
    cause = error if isinstance(error, OSError) else error.__cause__
    if isinstance(cause, OSError):
        if cause.errno in FULL:
            return 507
        if isinstance(cause, FileNotFoundError):
            return 404
        if isinstance(cause, PermissionError):
            return 403
    return 422
