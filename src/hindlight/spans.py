"""Which bytes of a remote image are read, and those that have been.

Every request costs a wait and every byte its time. Windows are read row by row; what lies less than `GAP` bytes apart is
read in one request, with what is between. So of a usual image a window is one span of whole rows, overlapping windows
are one band, and only in images whose rows are longer than `GAP` is a window a request for each row.
"""

from __future__ import annotations

from contextlib import closing

import numpy as np

from hindlight.lightcurve import IntArray
from hindlight.storage import RemoteFile

GAP = 1 << 18  # what 20 ms of waiting would carry at 13 MB/s: common practice, no source


def of_windows(shape: tuple[int, int], ix: IntArray, iy: IntArray, half: int) -> IntArray:
    """The pixels of windows, counted along the rows of an image of this shape: starts and ends, shape (n, 2)."""
    height, width = shape
    rows = (iy[:, None] + np.arange(-half, half + 1)).ravel()
    left, right = (np.repeat(np.clip(ix + side, 0, width), 2 * half + 1) for side in (-half, half + 1))
    there = (rows >= 0) & (rows < height) & (right > left)
    return np.stack([rows * width + left, rows * width + right], axis=1)[there].astype(np.int64)


def merged(spans: IntArray, gap: int = 0) -> IntArray:
    """Spans in order, those joined that overlap or are at most `gap` apart; shape (m, 2)."""
    spans = spans[np.argsort(spans[:, 0], kind="stable")]
    reach = np.maximum.accumulate(spans[:, 1])
    first = np.flatnonzero(np.append(True, spans[1:, 0] > reach[:-1] + gap))[: len(spans)]
    last = np.append(first[1:], len(spans))[: len(first)] - 1
    return np.stack([spans[first, 0], reach[last]], axis=1)


class Held:
    """The bytes of a remote file from `start` on, of which those that were asked for are there; the others are zero.

    What is there is not read again. Memory is taken for what is there only, as far as the system has it so.
    """

    def __init__(self, path: str, start: int, length: int) -> None:
        self.bytes = np.zeros(length, np.uint8)
        self._path, self._start = path, start
        self._there = np.zeros((0, 2), np.int64)

    def fill(self, spans: IntArray) -> None:
        """Read what is missing of some spans of bytes, counted from `start`. Raises `StorageError`."""
        missing = self._missing(merged(spans))
        if len(missing) == 0:
            return
        wanted = merged(missing, GAP)
        with closing(RemoteFile(self._path)) as file:
            pieces = file.ranges(*((wanted + self._start).T.tolist()))
        for (start, end), piece in zip(wanted.tolist(), pieces, strict=True):
            self.bytes[start:end] = np.frombuffer(piece, np.uint8)
        self._there = merged(np.concatenate([self._there, wanted]))

    def _missing(self, spans: IntArray) -> IntArray:
        """Those of some merged spans that are not there as a whole."""
        at = np.searchsorted(self._there[:, 0], spans[:, 0], side="right") - 1
        return spans[np.append(self._there[:, 1], -1)[at] < spans[:, 1]]  # `at` is -1 where none begins before
