"""What stands out in the recordings of a term: droplets in doubt, and voltages in question."""

from __future__ import annotations

import re
from collections import Counter, defaultdict
from collections.abc import Mapping, Sequence

from tracker.keeping.store import Result
from tracker.showing.report import reason_counts

_FIELD_WORDS = re.compile(r"\b(field|voltage|lamp|log|clock)\b", re.IGNORECASE)
_NUMBER = re.compile(r"[-+]?\d[\d.e+-]*")
_DOUBTFUL, _NAMES = 10, 5  # most recordings that are told one by one, and most that are named for one warning


def doubtful(results: Mapping[str, Result]) -> list[str]:
    """Say which recordings should be looked at.

    Parameters
    ----------
    results : mapping of str to Result
        By the recording's path.

    Returns
    -------
    findings : list of str
        Recordings with a warning about the field, those with the same one together; then recordings of whose droplets
        (rejected tracks apart) more than half are in doubt.
    """
    warned: defaultdict[str, list[tuple[str, str]]] = defaultdict(list)
    doubted = []
    for name, result in results.items():
        for text in result.recording.get("warnings", []):
            if _FIELD_WORDS.search(text):
                warned[_NUMBER.sub("#", text)].append((name, text))
        counts = Counter(result.droplets["verdict"])
        if counts["doubt"] > counts["keep"]:
            doubted.append((counts["doubt"], _doubt_words(name, result, counts)))
    doubted.sort(key=lambda row: -row[0])
    more = [f"In {len(doubted) - _DOUBTFUL} more recordings most droplets are in doubt."]
    return [
        *map(_warning_words, warned.values()),
        *(words for _, words in doubted[:_DOUBTFUL]),
        *(more if len(doubted) > _DOUBTFUL else ()),
    ]


def _doubt_words(name: str, result: Result, counts: Counter[str]) -> str:
    """Say how many droplets are in doubt and what stands most often against them."""
    reasons = reason_counts(result.droplets[result.droplets["verdict"] == "doubt"]).most_common(2)
    why = ", ".join(f"{code} {count} times" for code, count in reasons)
    measured = counts["doubt"] + counts["keep"]
    return f"{name}: {counts['doubt']} of {measured} droplets that were measured are in doubt ({why or 'no reason'})."


def _warning_words(members: Sequence[tuple[str, str]]) -> str:
    """Tell one warning with the recordings that carry it; numbers are those of the first."""
    names = ", ".join(name for name, _ in members[:_NAMES])
    more = f" and {len(members) - _NAMES} more" if len(members) > _NAMES else ""
    alike = len({text for _, text in members}) == 1
    return f"{names}{more}: {members[0][1]}{'' if alike else ' (numbers of the first)'}."
