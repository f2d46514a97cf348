"""Cut-outs of sightings that may hold two droplets, kept from the pass until the tracks tell where both would be."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, field, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from tracker.records import Flag, IntArray
from tracker.seeing.background import Pictures
from tracker.seeing.detect import cut_squares, windows_of
from tracker.seeing.fit import Windows
from tracker.seeing.learn import Eyes
from tracker.seeing.look import Columns, oddness, pair_reach

_ODD = 3.0  # deviations of a width or slant: one sharp spot in some hundred shows as much
_MOST = 30_000  # cut-outs of a recording: some 13 MB for spots of 1.7 px in 8 bits


@dataclass(frozen=True, slots=True)
class Sheet:
    """Cut-outs of one batch of pictures."""

    eyes: Eyes
    left: IntArray  # (M,) px of the region that is looked at
    top: IntArray  # (M,) px
    raw: NDArray[Any]  # (M, k, k) grey values as in the picture


@dataclass(frozen=True, slots=True)
class Cutouts:
    """Cut-outs of some of the sightings of a recording."""

    number: IntArray  # (N,) of each sighting, counted through all sheets; -1 for none
    sheets: tuple[Sheet, ...]
    corner: tuple[int, int]  # px, of the region within the picture

    def take(self, rows: NDArray[Any]) -> Cutouts:
        """Give those of the chosen sightings."""
        return replace(self, number=self.number[rows])

    def by_light(self, number: IntArray) -> Iterator[tuple[Eyes, IntArray, Windows]]:
        """Windows of the chosen cut-outs in px of the picture, one group an illumination, and which they are."""
        first = np.cumsum([0, *(len(s.left) for s in self.sheets)])
        sheet = np.searchsorted(first, number, side="right") - 1
        eyes = {id(s.eyes): s.eyes for s in self.sheets}
        owner = np.array([list(eyes).index(id(s.eyes)) for s in self.sheets], np.int64)
        for i, e in enumerate(eyes.values()):
            which = np.flatnonzero(owner[sheet] == i)
            which = which[np.argsort(number[which], kind="stable")]
            if len(which):
                yield e, which, self._windows(e, [(s, number[which][sheet[which] == s] - first[s])
                                                  for s in np.unique(sheet[which])])  # fmt: skip

    def _windows(self, eyes: Eyes, chosen: list[tuple[int, IntArray]]) -> Windows:
        """Windows of the chosen rows of sheets."""
        left, top, raw = (
            np.concatenate([getattr(self.sheets[s], name)[rows] for s, rows in chosen])
            for name in ("left", "top", "raw")
        )
        windows = windows_of(
            left, top, raw, background=eyes.background, full_scale=eyes.camera.full_scale
        )  # fmt: skip
        return replace(windows, left=left + self.corner[0], top=top + self.corner[1])


@dataclass(slots=True)
class Album:
    """Cut-outs that are kept while a recording is read."""

    sheets: list[Sheet] = field(default_factory=list)
    count: int = 0

    def keep(self, eyes: Eyes, pictures: Pictures, numbers: IntArray, columns: Columns) -> IntArray:
        """Keep what may be two droplets; the number of each sighting's cut-out, -1 for none.

        Parameters
        ----------
        eyes : Eyes
        pictures : list of n ndarray
            A batch.
        numbers : ndarray of shape (n,)
            Their frame numbers, increasing.
        columns : dict
            What `look` saw in them.

        Returns
        -------
        number : ndarray of shape (N,)
        """
        number = np.full(len(columns["frame"]), -1)
        odd = oddness(columns["strain"]) > _ODD
        odd |= (columns["flags"] & int(Flag.CROWDED | Flag.MERGED)) != 0
        rows = np.flatnonzero(odd)[: _MOST - self.count]
        if len(rows) == 0:
            return number
        at = np.searchsorted(numbers, columns["frame"][rows]), columns["x"][rows], columns["y"][rows]
        self.sheets.append(Sheet(eyes, *cut_squares(pictures, at, reach=pair_reach(eyes))))
        number[rows] = self.count + np.arange(len(rows))
        self.count += len(rows)
        return number

    def cutouts(self, number: IntArray, corner: tuple[int, int]) -> Cutouts:
        """All that was kept, for sightings with these numbers."""
        return Cutouts(number, tuple(self.sheets), corner)
