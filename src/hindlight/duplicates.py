"""The same exposure found twice, and deep images beside their own snapshots: which frames of a table belong together.

Frames that may be the same exposure are found in the frame table alone, in one sweep over time; `likeness` says what
their pixels decide. Nothing here knows a run folder or reads a pixel: tables in, identifiers and words out.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.sparse import coo_array
from scipy.sparse.csgraph import connected_components

from hindlight.lightcurve import FloatArray, IntArray
from hindlight.systems import unit_vectors

SECOND = 1.0 / 86400.0
SAME_INSTANT = 1.0  # seconds
SAME_FREQUENCY = 1e-4  # fraction: what rounding in headers makes of one frequency
SAME_POINTING = 0.1  # of the smaller frame's radius
SAME_SIZE = 1.25  # factor between radii up to which a deep image counts as the same field as a snapshot
SAME_EXPOSURE = 1e-3  # fraction
OVERLAP = 0.4  # of the shorter exposure; a header that gives the middle where another gives the start leaves half
DEEPER = 1.5  # an exposure longer by this factor is another image, which may hold the shorter one
SUM_SLACK = 1.1  # the snapshots' exposures may add up to this much more than the deep image's
HELD = 0.5  # of a snapshot's span lies in the deep image's: a header without an end leaves out the gaps
FILLED = 0.5  # of a deep image's exposure, if it holds a single frame: times misread make long exposures overlap short
WIDEST = 0.98  # frames that reach at least this fraction of the widest copy show the same sky

PAIRS_AT_ONCE = 1 << 20
PAIRS_PER_JOB = 64
MOST_PER_JOB = 4096  # frames of one group are read once a job, so large groups stay together up to here

Columns = Mapping[str, Any]
Mask = NDArray[np.bool_]


@dataclass(frozen=True, eq=False)
class Pairs:
    """Pairs of rows of the frame table, shape (n,); `strict` where only equal pixels will do."""

    first: IntArray
    second: IntArray
    strict: Mask

    def __len__(self) -> int:
        return len(self.first)


def counts(frames: Columns) -> Mask:
    """The frames that count: not void, and no copy of another frame."""
    return np.asarray((frames["state"] != "void") & (frames["duplicate_of"] < 0))


def waiting(frames: Columns) -> Mask:
    """The frames that have not been compared yet: they belong to no batch and are no copy."""
    return np.asarray((frames["state"] == "current") & (frames["duplicate_of"] < 0) & (frames["batch"] < 0))


def candidates(frames: Columns) -> Pairs:
    """Pairs of frames that may be one exposure, at least one of each pair waiting.

    Never planes of one image. Same Stokes parameter, band and frequency, pointing (or one within the other), overlapping
    good time, exposures alike. Under another instrument's name size, exposure and instant must be the same too; there, and
    where there is no clock but the same date, only equal pixels will do.
    """
    here = np.flatnonzero((frames["state"] == "current") & (frames["duplicate_of"] < 0))
    low, high = _spans(frames, here)
    known = np.isfinite(low)
    look = _Look(frames, here[known], low[known], high[known])
    found: list[tuple[IntArray, IntArray, Mask]] = []
    for i, j in _touching(_alike(frames, look.rows), look.low, look.high):
        keep = look.may_be_one(i, j)
        i, j = i[keep], j[keep]
        strict = look.is_strict(i, j)
        keep = ~strict | look.match_closely(i, j)
        found.append((look.rows[i[keep]], look.rows[j[keep]], strict[keep]))
    first = np.concatenate([np.empty(0, np.int64), *[f[0] for f in found]])
    second = np.concatenate([np.empty(0, np.int64), *[f[1] for f in found]])
    strict = np.concatenate([np.empty(0, bool), *[f[2] for f in found]])
    first, second = np.minimum(first, second), np.maximum(first, second)
    order = np.lexsort((second, first))
    return Pairs(first[order], second[order], strict[order])


def _spans(frames: Columns, rows: IntArray) -> tuple[FloatArray, FloatArray]:
    """First and last instant of frames (MJD); the whole day where there is no clock, NaN where there is no date."""
    start, middle, end = (np.asarray(frames[f"{n}_mjd_tdb"][rows], float) for n in ("start", "middle", "end"))
    clocked = np.isfinite(frames["middle_tdb_s"][rows])
    day = np.floor(middle)
    low = np.where(clocked, np.where(np.isfinite(start), start, middle), day)
    high = np.where(clocked, np.where(np.isfinite(end), end, middle), day + 1.0)
    return low, np.maximum(low, high)


def _codes(keys: Sequence[Any] | Iterator[Any]) -> IntArray:
    """A number for each different key."""
    seen: dict[Any, int] = {}
    return np.array([seen.setdefault(key, len(seen)) for key in keys], np.int64)


def _alike(frames: Columns, rows: IntArray) -> IntArray:
    """A number for each set of frames of one Stokes parameter, band and frequency (neighbours within a tolerance)."""
    code = _codes(zip(frames["stokes"][rows], frames["band"][rows], strict=True))
    frequency = np.log(np.asarray(frames["frequency_hz"][rows], float))
    order = np.lexsort((frequency, code))
    step = np.diff(frequency[order])
    both_unknown = np.isnan(frequency[order][:-1]) & np.isnan(frequency[order][1:])
    new = (np.diff(code[order]) != 0) | ~((step <= SAME_FREQUENCY) | both_unknown)
    group = np.zeros(len(rows), np.int64)
    group[order[1:]] = np.cumsum(new)
    return group


def _touching(group: IntArray, low: FloatArray, high: FloatArray) -> Iterator[tuple[IntArray, IntArray]]:
    """Pairs of one group whose spans touch, each once, in pieces of bounded size."""
    n = len(group)
    if n < 2:
        return
    slack = SAME_INSTANT * SECOND
    reach = float(high.max() - low.min()) + 1.0 + slack
    order = np.lexsort((low, group))
    begin = (group * reach + (low - low.min()))[order]
    finish = begin + (high - low)[order] + slack
    stop = np.searchsorted(begin, finish, side="right")
    count = np.maximum(stop - np.arange(n) - 1, 0)
    total = np.concatenate([[0], np.cumsum(count)])
    start = 0
    while start < n:
        end = max(start + 1, int(np.searchsorted(total, total[start] + PAIRS_AT_ONCE, side="right")) - 1)
        mine = count[start:end]
        i = np.repeat(np.arange(start, end), mine)
        j = i + 1 + np.arange(len(i)) - np.repeat(total[start:end] - total[start], mine)
        yield order[i], order[j]
        start = end


class _Look:
    """What the pairs of some rows of a frame table have in common, in bulk; `i` and `j` count these rows."""

    def __init__(self, frames: Columns, rows: IntArray, low: FloatArray, high: FloatArray) -> None:
        self.rows, self.low, self.high = rows, low, high
        self.vectors = unit_vectors(np.asarray(frames["centre_ra"][rows]), np.asarray(frames["centre_dec"][rows]))
        self.radius = np.asarray(frames["radius"][rows], float)
        self.exposure = np.asarray(frames["exposure_s"][rows], float)
        self.middle = np.asarray(frames["middle_mjd_tdb"][rows], float)
        self.clocked = np.isfinite(frames["middle_tdb_s"][rows])
        self.frequency = np.log(np.asarray(frames["frequency_hz"][rows], float))
        self.new = waiting(frames)[rows]
        self.instrument = _codes(frames["instrument"][rows])
        self.hdu = _codes(zip(*(frames[name][rows] for name in ("archive", "path", "hdu")), strict=True))
        self.planes = np.bincount(self.hdu)[self.hdu] if len(rows) else np.empty(0, np.int64)
        self.plane = np.asarray(frames["plane"][rows])
        self.width, self.height = np.asarray(frames["width"][rows]), np.asarray(frames["height"][rows])

    def apart(self, i: IntArray, j: IntArray) -> FloatArray:
        """Degrees between centres."""
        chord = np.sqrt(((self.vectors[i] - self.vectors[j]) ** 2).sum(axis=1))
        return np.asarray(np.degrees(2.0 * np.arcsin(np.minimum(1.0, chord / 2.0))))

    def radii(self, i: IntArray, j: IntArray) -> tuple[FloatArray, FloatArray]:
        """The smaller and the larger radius."""
        return np.minimum(self.radius[i], self.radius[j]), np.maximum(self.radius[i], self.radius[j])

    def may_be_one(self, i: IntArray, j: IntArray) -> Mask:
        """Whether pairs whose spans touch may be one exposure."""
        keep = (self.new[i] | self.new[j]) & (self.hdu[i] != self.hdu[j])  # planes of one image were taken one by one
        step = np.abs(self.frequency[i] - self.frequency[j])
        keep &= np.isnan(step) | (step <= SAME_FREQUENCY)
        cubes = (self.planes[i] > 1) & (self.planes[j] > 1)
        keep &= ~cubes | (self.plane[i] == self.plane[j])  # of two cubes, like planes
        longer = np.maximum(self.exposure[i], self.exposure[j])
        keep &= ~(longer > DEEPER * np.minimum(self.exposure[i], self.exposure[j]))
        small, large = self.radii(i, j)
        keep &= self.apart(i, j) <= large - small + SAME_POINTING * small
        shared = np.minimum(self.high[i], self.high[j]) - np.maximum(self.low[i], self.low[j])
        shorter = np.minimum(self.high[i] - self.low[i], self.high[j] - self.low[j])
        instant = np.where(shorter > 0, 0.0, SAME_INSTANT * SECOND)
        return np.asarray(keep & (shared + instant >= OVERLAP * shorter))

    def is_strict(self, i: IntArray, j: IntArray) -> Mask:
        """Whether only equal pixels will do: another instrument's name, or no clock."""
        return np.asarray((self.instrument[i] != self.instrument[j]) | ~(self.clocked[i] & self.clocked[j]))

    def match_closely(self, i: IntArray, j: IntArray) -> Mask:
        """Whether pairs under two instruments' names agree in all else that is copied with a frame."""
        near = np.abs(self.middle[i] - self.middle[j]) <= SAME_INSTANT * SECOND
        longer = np.maximum(self.exposure[i], self.exposure[j])
        alike = ~(np.abs(self.exposure[i] - self.exposure[j]) > SAME_EXPOSURE * longer)
        alike &= np.isnan(self.exposure[i]) == np.isnan(self.exposure[j])
        size = (self.width[i] == self.width[j]) & (self.height[i] == self.height[j])
        small, _ = self.radii(i, j)
        close = near & alike & size & (self.apart(i, j) <= SAME_POINTING * small)
        return np.asarray((self.instrument[i] == self.instrument[j]) | close)


def jobs(pairs: Pairs) -> list[IntArray]:
    """The pairs cut into pieces of work: those that share frames together, as far as that goes."""
    if not len(pairs):
        return []
    group = _components(pairs.first, pairs.second)
    order = np.lexsort((np.arange(len(pairs)), group))
    ends = np.append(np.flatnonzero(np.diff(group[order])) + 1, len(order))
    cut, start = [], 0
    for end in ends.tolist():
        if end - start >= PAIRS_PER_JOB or end == len(order):
            cut += [order[s : min(s + MOST_PER_JOB, end)] for s in range(start, end, MOST_PER_JOB)]
            start = end
    return cut


def _components(first: IntArray, second: IntArray) -> IntArray:
    """For each pair a number of the group of frames that pairs tie together."""
    rows, index = np.unique(np.concatenate([first, second]), return_inverse=True)
    i, j = index[: len(first)], index[len(first) :]
    graph = coo_array((np.ones(len(i), bool), (i, j)), shape=(len(rows), len(rows)))
    _, labels = connected_components(graph, directed=False)
    return np.asarray(labels[i], np.int64)


def settled(frames: Columns, first: IntArray, second: IntArray) -> IntArray:
    """The column `duplicate_of` once these pairs of rows have been found to be one exposure each.

    Of each group the frame is kept that belongs to a batch already (and may be measured); else the one that shows the
    most sky, with the fewest assumptions, uncompressed, first by path.
    """
    result = np.array(frames["duplicate_of"], np.int64)
    if not len(first):
        return result
    group = _components(first, second)
    new = waiting(frames)
    members: dict[int, set[int]] = {}
    for label, i, j in zip(group.tolist(), first.tolist(), second.tolist(), strict=True):
        members.setdefault(label, set()).update((i, j))
    for rows in members.values():
        kept = _kept(frames, sorted(rows), new)
        for row in rows - {kept}:
            if new[row]:
                result[row] = frames["id"][kept]
    return result


def _kept(frames: Columns, rows: Sequence[int], new: Mask) -> int:
    widest = WIDEST * max(float(frames["radius"][row]) for row in rows)

    def rank(row: int) -> tuple[Any, ...]:
        assumed = str(frames["assumptions"][row])
        packed = str(frames["path"][row]).lower().endswith((".gz", ".fz"))
        place = tuple(frames[name][row] for name in ("archive", "path", "hdu", "plane"))
        return (
            bool(new[row]),
            frames["radius"][row] < widest,
            len(assumed.split(";")) if assumed else 0,
            packed,
            place,
        )

    return min(rows, key=rank)


def related(frames: Columns) -> IntArray:
    """The column `related_to`: for each frame the id of the shortest deep image that holds it, -1 where there is none.

    Same channel and field; the deep image's span holds the frame's, its exposure is longer by half or more, the
    exposures of the frames it holds add up to no more than its own, and there are several or they fill half of it.
    """
    result = np.full(len(frames["id"]), -1, np.int64)
    here = counts(frames) & np.isfinite(frames["middle_tdb_s"]) & (frames["exposure_s"] > 0)
    rows = np.flatnonzero(here)
    low, high = _spans(frames, rows)
    look = _Look(frames, rows, low, high)
    found: list[tuple[IntArray, IntArray]] = []
    for i, j in _touching(_codes(frames["channel"][rows]), low, high):
        deep, part = np.where(look.exposure[i] >= look.exposure[j], (i, j), (j, i))
        keep = _holds(look, deep, part)
        found.append((deep[keep], part[keep]))
    if not found:
        return result
    deep, part = (np.concatenate(side) for side in zip(*found, strict=True))
    nearest = np.lexsort((deep, (high - low)[deep], part))
    part, first = np.unique(part[nearest], return_index=True)
    deep = deep[nearest][first]
    share = np.bincount(deep, weights=look.exposure[part], minlength=len(rows))[deep] / look.exposure[deep]
    fits = (share <= SUM_SLACK) & ((np.bincount(deep, minlength=len(rows))[deep] > 1) | (share >= FILLED))
    result[rows[part[fits]]] = frames["id"][rows[deep[fits]]]
    return result


def _holds(look: _Look, deep: IntArray, part: IntArray) -> Mask:
    """Whether the one is a deep image of the other."""
    keep = look.exposure[deep] >= DEEPER * look.exposure[part]
    shared = np.minimum(look.high[deep], look.high[part]) - np.maximum(look.low[deep], look.low[part])
    keep &= shared + SAME_INSTANT * SECOND >= HELD * (look.high[part] - look.low[part])
    small, large = look.radii(deep, part)
    return np.asarray(keep & (large <= SAME_SIZE * small) & (look.apart(deep, part) <= SAME_POINTING * small))


def deepest(frames: Columns) -> IntArray:
    """For each frame the id of the deepest image that holds it, through any between; -1 where there is none."""
    row_of = {int(frame): row for row, frame in enumerate(frames["id"].tolist())}
    result = np.array(frames["related_to"], np.int64)
    for row in np.flatnonzero(result >= 0).tolist():
        above = int(frames["related_to"][row_of[int(result[row])]])
        while above >= 0:
            result[row] = above
            above = int(frames["related_to"][row_of[above]])
    return result


def rejects(frames: Columns) -> list[dict[str, Any]]:
    """Rows of `schema.REJECTS` for copies, each naming the frame that is kept."""
    row_of = {int(frame): row for row, frame in enumerate(frames["id"].tolist())}
    rows = []
    for row in np.flatnonzero((frames["duplicate_of"] >= 0) & (frames["state"] != "void")).tolist():
        kept = row_of[int(frames["duplicate_of"][row])]
        where = f"{frames['path'][kept]}[{frames['hdu'][kept]},{frames['plane'][kept]}]"
        if frames["archive"][kept] != frames["archive"][row]:
            where += f" in {frames['archive'][kept]}"
        place = {"path": str(frames["path"][row]), "hdu": int(frames["hdu"][row]), "plane": int(frames["plane"][row])}
        detail = f"the same exposure as {where}, which is kept: it counts once"
        rows.append({**place, "reason": "duplicate_of", "detail": detail, "archive": str(frames["archive"][row])})
    return rows
