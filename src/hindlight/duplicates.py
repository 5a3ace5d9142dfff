"""The same exposure found twice, and deep images beside their own snapshots: which frames of a table belong together.

Frames that may be the same exposure are found in the frame table alone, in one sweep over time; their pixels then
decide. Nothing here knows a run folder, a position or a flux: tables in, identifiers and words out; `compare` alone
reads pixels.
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from functools import cache, cached_property, lru_cache
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage
from scipy.sparse import coo_array
from scipy.sparse.csgraph import connected_components

from hindlight.background import MAD_TO_SIGMA
from hindlight.headers import SetAsideError
from hindlight.lightcurve import FloatArray, IntArray
from hindlight.photometry import FrameToMeasure, OpenFrame, open_frame
from hindlight.pixels import Lattice, Windows
from hindlight.settings import Settings
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

WINDOWS = 8  # at most, across and down
WINDOW_FWHM = 2.0  # half width of a window
HALF_WIDTHS = (3, 11)  # pixels
SAMPLES_KEPT = 512  # of at most 34,000 pixels each
SHIFT_TOLERANCE = 0.05  # pixels: grids shifted by a whole number to this accuracy are one grid
FEWEST_PIXELS = 64
AGREEING = 0.98  # of the pixels that say anything must be equal
ROUNDING = 1e-6  # of a value: single against double precision
HALF_STEP = 0.51  # of the step between stored values
NOISE_SHARE = 0.5  # of the noise: more tolerance would make any two images equal
CHANCE = 25.0  # minus the logarithm of the chance that unlike images agree as well
SHARED_NOISE = 0.5  # correlation of the noise, from which on it is one exposure
CLIP_SIGMA = 4.0
SIGNIFICANCE = 5.0
PATTERN_SEED = 20

PAIRS_AT_ONCE = 1 << 20
PAIRS_PER_JOB = 64
MOST_PER_JOB = 4096  # frames of one group are read once a job, so large groups stay together up to here

Columns = Mapping[str, Any]
Mask = NDArray[np.bool_]


# --- from the frame table alone


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

    Same Stokes parameter, band and frequency, pointing (or one within the other), overlapping good time, exposures
    alike. Under another instrument's name size, exposure and instant must be the same too; there, and where there is no
    clock but the same date, only equal pixels will do.
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
        keep = self.new[i] | self.new[j]
        step = np.abs(self.frequency[i] - self.frequency[j])
        keep &= np.isnan(step) | (step <= np.where(self.hdu[i] == self.hdu[j], 0.0, SAME_FREQUENCY))
        cubes = (self.hdu[i] != self.hdu[j]) & (self.planes[i] > 1) & (self.planes[j] > 1)
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


# --- from pixels


@dataclass(frozen=True)
class Likeness:
    """What pixels say of two frames: `word` is equal, noise (the noise is shared) or ''; the noise's correlation."""

    word: str = ""
    correlation: float = float("nan")


@dataclass(frozen=True, eq=False)
class Sample:
    """Pixels of an image in some windows, shape (n, side, side), NaN where there are none.

    `quantum` is the step between stored values, 0 where there is none; `packed` says that packing may have changed them.
    """

    values: FloatArray
    quantum: float = 0.0
    packed: bool = False

    @cached_property
    def flat(self) -> FloatArray:
        """The values without their windows' medians, 0 where there is no value."""
        flat = np.zeros(self.values.shape)
        for window, out in zip(self.values, flat, strict=True):
            there = np.isfinite(window)
            if there.any():
                out[there] = window[there] - np.median(window[there])
        return flat

    @cached_property
    def sigma(self) -> float:
        """1.4826 MAD of the flat values; NaN where there is none."""
        there = np.isfinite(self.values)
        return MAD_TO_SIGMA * float(np.median(np.abs(self.flat[there]))) if there.any() else float("nan")

    def background(self, reach: int) -> Mask:
        """Pixels that belong to no source and no hole: not far from the window's median nor within `reach` of such.

        Wings of sources are in both images; left in, they would pass for shared noise.
        """
        disc = np.hypot(*np.mgrid[-reach : reach + 1, -reach : reach + 1]) <= reach
        far = np.abs(self.flat) >= CLIP_SIGMA * self.sigma
        return np.asarray(~ndimage.binary_dilation(far, disc[None]) & np.isfinite(self.values))


def compare(
    frames: Sequence[FrameToMeasure], pairs: Sequence[tuple[int, int]], strict: Sequence[bool], settings: Settings
) -> list[Likeness]:
    """What pixels say of pairs of these frames; nothing where one cannot be read."""

    @cache
    def opened(index: int) -> OpenFrame:
        return open_frame(frames[index], settings)

    @lru_cache(SAMPLES_KEPT)
    def own(index: int, half: int) -> Sample:
        return _sample(opened(index), *_pattern(opened(index), half), half)

    found = []
    for (i, j), equal_only in zip(pairs, strict, strict=True):
        try:
            a, b = (i, j) if _extent(opened(i)) <= _extent(opened(j)) else (j, i)
            half = _half_width(opened(a))
            if _one_grid(opened(a), opened(b)):
                other = own(b, half)
            else:
                other = _mapped(opened(a), opened(b), half, frames[a].mjd, frames[b].mjd)
            per_value, reach = _per_value(opened(a), own(a, half)), _reach(opened(a), half)
            found.append(alike(own(a, half), other, per_value, reach, equal_only))
        except (SetAsideError, OSError, ValueError):
            found.append(Likeness())
    return found


def _extent(frame: OpenFrame) -> float:
    return frame.sky.pixel_scale_arcsec * math.hypot(frame.place.width, frame.place.height)


def _one_grid(a: OpenFrame, b: OpenFrame) -> bool:
    """Whether two images have the same size and the same celestial cards (projections are kept by those)."""
    return a.sky is b.sky and (a.place.width, a.place.height) == (b.place.width, b.place.height)


def _per_value(frame: OpenFrame, sample: Sample) -> float:
    """Pixels of a sample for each independent value of the noise, at least one.

    There is one a beam, or one a window where those are smaller, but not more than beams in the image.
    """
    beam = max(1.0, math.pi * frame.beam.major * frame.beam.minor / (4.0 * math.log(2.0)))
    n_windows, n_pixels = len(sample.values), sample.values.size
    independent = min(max(n_pixels / beam, n_windows), frame.place.width * frame.place.height / beam)
    return n_pixels / max(1.0, independent)


def _reach(frame: OpenFrame, half: int) -> int:
    """How far around a bright pixel its source is taken to reach."""
    return max(1, min(half, round(frame.beam.fwhm)))


def _half_width(frame: OpenFrame) -> int:
    """Of the windows: some beams, but at least two windows must fit side by side."""
    low, high = HALF_WIDTHS
    wanted = min(high, max(low, round(WINDOW_FWHM * frame.beam.fwhm)))
    return max(1, min(wanted, (min(frame.place.width, frame.place.height) // 2 - 1) // 2))


def _pattern(frame: OpenFrame, half: int) -> tuple[IntArray, IntArray]:
    """Middles of windows spread over an image: always the same ones for an image of that size."""
    jitter = np.random.default_rng(PATTERN_SEED).random((2, WINDOWS))
    side = 2 * half + 1

    def middles(length: int, share: FloatArray) -> IntArray:
        n = min(WINDOWS, max(1, length // side))
        free = max(0.0, length / n - side)
        return np.asarray(np.floor(np.arange(n) * length / n + share[:n] * free) + half, np.int64)

    x, y = np.meshgrid(middles(frame.place.width, jitter[0]), middles(frame.place.height, jitter[1]))
    return x.ravel(), y.ravel()


def _sample(frame: OpenFrame, ix: IntArray, iy: IntArray, half: int) -> Sample:
    """Windows around pixels of a frame."""
    pixels = frame.pixels(Windows(ix, iy, half))
    values = pixels.stamps(ix, iy, Lattice.square(half)).astype(float)
    return Sample(values, pixels.quantum, frame.place.image.hdu.compressed)


def _mapped(a: OpenFrame, b: OpenFrame, half: int, mjd_a: float, mjd_b: float) -> Sample:
    """The second image where the first one's windows lie, on the first one's pixels.

    As they are stored where the grids differ by a whole number of pixels, interpolated linearly elsewhere.
    """
    ix, iy = _pattern(a, half)
    x, y = b.sky.icrs_to_pixel(*a.sky.pixel_to_icrs(ix.astype(float), iy.astype(float), mjd_a), mjd_b)
    if not (np.isfinite(x).all() and np.isfinite(y).all()):
        raise ValueError("the one image lies beyond the other's projection")
    shift = np.array([x - ix, y - iy])
    whole = np.rint(np.median(shift, axis=1))
    if np.abs(shift - whole[:, None]).max() <= SHIFT_TOLERANCE:
        return _sample(b, ix + int(whole[0]), iy + int(whole[1]), half)
    offset = np.arange(-half, half + 1)
    columns = np.broadcast_to(ix[:, None, None] + offset, (len(ix), len(offset), len(offset)))
    rows = np.broadcast_to(iy[:, None, None] + offset[:, None], columns.shape)
    sky = a.sky.pixel_to_icrs(columns.ravel().astype(float), rows.ravel().astype(float), mjd_a)
    px, py = (np.nan_to_num(p, nan=-1e6).clip(-1e6, 1e9) for p in b.sky.icrs_to_pixel(*sky, mjd_b))
    jx, jy = (np.floor(p + 0.5).astype(np.int64) for p in (px, py))
    reach = math.ceil(half * 1.5 * a.sky.pixel_scale_arcsec / b.sky.pixel_scale_arcsec) + 2
    pixels = b.pixels(Windows(np.rint(x).astype(np.int64), np.rint(y).astype(np.int64), reach))
    near = pixels.stamps(jx, jy, Lattice.square(1)).astype(float)
    values = np.einsum("nij,ni,nj->n", near, _linear(py - jy), _linear(px - jx))
    return Sample(values.reshape(columns.shape), 0.0, b.place.image.hdu.compressed)


def _linear(offset: FloatArray) -> FloatArray:
    """Weights (n, 3) of the pixels before, at and after the nearest one, for offsets within half a pixel."""
    return np.stack([np.maximum(-offset, 0.0), 1.0 - np.abs(offset), np.maximum(offset, 0.0)], axis=1)


def alike(a: Sample, b: Sample, per_value: float, reach: int = 1, equal_only: bool = False) -> Likeness:
    """What two samples of the same places say of their images.

    `per_value` of their pixels have one independent value of the noise; sources reach `reach` pixels.

    Equal: nearly all pixels that are not the background's commonest value agree within the step of storing, and unlike
    images would not. Noise: what is left without local level and without sources is correlated beyond chance.
    """
    if _equal(a, b, per_value):
        return Likeness("equal", 1.0)
    if equal_only:
        return Likeness()
    clean = a.background(reach) & b.background(reach)
    independent = np.count_nonzero(clean) / per_value
    if independent <= 4.0 or np.count_nonzero(clean) < FEWEST_PIXELS:
        return Likeness()
    if min(np.std(a.flat[clean]), np.std(b.flat[clean])) == 0.0:
        return Likeness()
    rho = float(np.corrcoef(a.flat[clean], b.flat[clean])[0, 1])
    beyond = math.atanh(min(rho, 1.0 - 1e-12)) * math.sqrt(independent - 3.0)  # R. A. Fisher 1921
    return Likeness("noise" if rho > SHARED_NOISE and beyond > SIGNIFICANCE else "", rho)


def _equal(a: Sample, b: Sample, per_value: float) -> bool:
    """Whether the pixels that say anything are the same, and would not be by chance."""
    good = np.isfinite(a.values) & np.isfinite(b.values)
    if np.count_nonzero(good) < FEWEST_PIXELS:
        return False
    x, y = a.values[good], b.values[good]
    telling = (x != np.median(x)) | (y != np.median(y))
    x, y = x[telling], y[telling]
    most = NOISE_SHARE * min(a.sigma, b.sigma)
    tolerance = most if a.packed or b.packed else min(HALF_STEP * max(a.quantum, b.quantum), most)

    def agreement(other: FloatArray) -> float:
        return float(np.mean(np.abs(x - other) <= tolerance + ROUNDING * np.abs(x)))

    if len(x) < FEWEST_PIXELS or agreement(y) < AGREEING:
        return False
    by_chance = max(agreement(np.random.default_rng(PATTERN_SEED).permutation(y)), 1.0 / len(y))
    return -math.log(by_chance) * len(x) / per_value > CHANCE
