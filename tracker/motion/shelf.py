"""What was worked out before, kept by a digest of what it was worked out from."""

from __future__ import annotations

import hashlib
from collections import deque
from collections.abc import Callable
from typing import Any, TypeVar

import numpy as np
from numpy.typing import ArrayLike

T = TypeVar("T")


class Shelf:
    """Results of the last three analyses of one recording, for someone who evaluates it again and again.

    A person's split or trim changes one track; all that rests on the other tracks alone is found here again. Taking
    a decision back finds what was there before it. Nothing older is kept, which bounds the memory.
    """

    def __init__(self) -> None:
        self._layers: deque[dict[str, Any]] = deque(
            [{}], maxlen=3
        )  # of one analysis each, the present one first

    def __len__(self) -> int:
        return len(set().union(*self._layers))

    def once(self, what: str, key: str, make: Callable[[], T]) -> T:
        """Give what was made from the same key, or make it; the key must tell all that `make` depends on."""
        full = f"{what} {key}"
        layer = next((layer for layer in self._layers if full in layer), None)
        kept: T = make() if layer is None else layer[full]
        self._layers[0][full] = kept
        return kept

    def turn(self) -> None:
        """Begin another analysis."""
        self._layers.appendleft({})


def digest(*parts: object, arrays: tuple[ArrayLike, ...] = ()) -> str:
    """Digest of plain values, by how they are written, and of arrays, by their bytes.

    Parameters
    ----------
    *parts
        Values whose `repr` tells them apart.
    arrays : tuple of array_like
        In an order and number that the caller fixes.

    Returns
    -------
    digest : str
        The same for the same values alone.
    """
    made = hashlib.blake2b(repr(parts).encode(), digest_size=16)
    for array in arrays:
        values = np.ascontiguousarray(array)
        made.update(repr((values.shape, values.dtype.str)).encode())
        made.update(values.tobytes())
    return made.hexdigest()
