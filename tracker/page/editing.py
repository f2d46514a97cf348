"""A person's decisions from the page: checked against the state that the page showed, kept, evaluated again."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from tracker.page.errors import RefusedError
from tracker.page.library import revision_of
from tracker.page.results import Opened, Results, last_standing

MAX_REASON = 400  # characters
ALLOWED = ("keep", "doubt", "reject", "split", "trim", "join", "reset")


def decide(results: Results, key: str, body: Mapping[str, Any]) -> tuple[Opened, int | None]:
    """Keep a decision.

    Parameters
    ----------
    results : Results
        Open results.
    key : str
        Of the result.
    body : mapping
        ``revision`` that the page showed, ``droplet``, ``verdict``, ``reason``, and ``at``, ``start``, ``end``
        in s or ``other`` as the verdict needs.

    Returns
    -------
    opened, droplet : Opened, int or None
        The result as it is now, and the droplet to look at.

    Raises
    ------
    RefusedError
        409 if the result changed since; nothing is written then. 400 for values of a wrong kind.
    """
    verdict, reason = body.get("verdict"), body.get("reason", "")
    if verdict not in ALLOWED:
        raise RefusedError(400, f"verdict must be one of {', '.join(ALLOWED)}")
    if not isinstance(reason, str) or len(reason) > MAX_REASON:
        raise RefusedError(400, f"reason must be a text of at most {MAX_REASON} characters")
    droplet = _whole(body, "droplet")
    if droplet is None:
        raise RefusedError(400, "droplet must be a whole number")
    times = {name: _time(body, name) for name in ("at", "start", "end")}
    decision = {
        "droplet": droplet,
        "verdict": verdict,
        "reason": reason,
        "other": _whole(body, "other"),
        **times,
    }
    return _apply(results, key, body, lambda _: decision), droplet


def undo(results: Results, key: str, body: Mapping[str, Any]) -> tuple[Opened, int | None]:
    """Take the last decision of a recording that still holds back.

    Parameters
    ----------
    results, key
        As for `decide`.
    body : mapping
        ``revision`` that the page showed.

    Returns
    -------
    opened, droplet : Opened, int or None
        As for `decide`.

    Raises
    ------
    RefusedError
        409 if the result changed since, or nothing is left to take back.
    """
    chosen: list[int] = []

    def last(opened: Opened) -> dict[str, Any]:
        found = last_standing(opened)
        if found is None:
            raise RefusedError(409, "there is no decision to take back")
        chosen.append(found[1])
        return {"droplet": found[1], "verdict": "undo"}

    return _apply(results, key, body, last), chosen[0]


def _apply(results: Results, key: str, body: Mapping[str, Any], make: Any) -> Opened:
    """Compare revisions, decide and evaluate, all under the lock of the result."""
    from tracker.evaluate import decide_and_evaluate

    folder = results.library.folder(key)
    with results.lock(key):
        current = revision_of(folder)
        if body.get("revision") != current:
            text = "This result was changed elsewhere since this page read it; nothing was overwritten."
            raise RefusedError(409, text, {"revision": current})
        decision = make(results.read(key, folder))
        keeper = results.keeper(key)
        with keeper.lock:
            written = decide_and_evaluate(folder, memo=keeper.memo, **decision)
        return results.hold(key, folder, written)


def _whole(body: Mapping[str, Any], name: str) -> int | None:
    value = body.get(name)
    if value is not None and (not isinstance(value, int) or isinstance(value, bool)):
        raise RefusedError(400, f"{name} must be a whole number")
    return value


def _time(body: Mapping[str, Any], name: str) -> float | None:
    value = body.get(name)
    if value is None:
        return None
    if isinstance(value, bool) or not isinstance(value, int | float) or not abs(value) < 1e9:
        raise RefusedError(400, f"{name} must be a time in s")
    return float(value)
