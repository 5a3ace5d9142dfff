"""Which sources of an archive can serve as comparisons, and where exactly they are.

Candidates are the bright sources of the reference frames that stand alone; centroids in many frames then tell their
places, whether they are points, and which of them come and go. Targets are no comparisons, unless a field has few other
sources, as where a whole catalogue is listed: then they serve each other. Pure: sources and centroids in, positions out.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from hindlight.lightcurve import FloatArray, IntArray
from hindlight.plan import BrightSources, beams
from hindlight.pointing import LEAST_SNR
from hindlight.positions import BlankSky, within_deg
from hindlight.robust import median_of
from hindlight.settings import Comparisons
from hindlight.systems import unit_vectors

FAINTER = 0.1  # a neighbour of so small a part of a source's S/N does not disturb it
POINT_WIDTH = 1.3  # median width over the beam's up to which a source counts as a point
ALIKE = 7  # sources of like brightness on a plate whose widths are compared
SPARE = 2  # so many times more candidates are looked at than comparisons are wanted
OFTEN = 0.5  # of the frames that are deep enough to show it, a steady source is found in at least this fraction
FLAT = 0.1  # of the frames it is found in: one that has a flat top in more of them is saturated, whatever headers say
SURE = 2.0  # a source of so many times the least S/N is expected to be found
ROUNDS = 4

Columns = dict[str, Any]


@dataclass(frozen=True, eq=False)
class Located:
    """Centroids of n candidates in one frame: ICRS offsets in degrees (along ra times cos dec, and dec), S/N, width.

    Shape (n,), NaN where a source was not found or not covered; `flat` says whether its top is cut off.
    """

    east: FloatArray
    north: FloatArray
    snr: FloatArray
    width: FloatArray
    flat: NDArray[np.bool_]


@dataclass(frozen=True, eq=False)
class Candidates:
    """Sources that may serve: ICRS degrees, shape (n,), brightest first; and which of them are at a target, or near one.

    Those at targets come last, and only where there may be too few others.
    """

    ra: FloatArray
    dec: FloatArray
    at_target: NDArray[np.bool_]


def candidates(sources: BrightSources, occupied: FloatArray, known: FloatArray, settings: Comparisons) -> Candidates:
    """The sources that may serve.

    `sources` are all bright ones, each as often as it was found; `occupied` are unit vectors of targets to stay clear
    of, `known` those of comparisons that are there already.
    """
    order = np.argsort(-sources.snr, kind="stable")
    ra, dec, snr, beam = (getattr(sources, name)[order] for name in ("ra", "dec", "snr", "beam"))
    vectors = unit_vectors(ra, dec)
    sky = BlankSky(occupied, np.full(len(occupied), settings.isolation * float(beam.max(initial=0.0)) / 3600.0))
    clear = sky.clear(vectors)
    bright = np.flatnonzero(snr >= settings.min_snr)
    taken = [*known]
    chosen: list[int] = []
    for i in bright[np.argsort(~clear[bright], kind="stable")].tolist():
        if len(chosen) >= SPARE * settings.wanted or (not clear[i] and clear[chosen].sum() >= SPARE * settings.enough):
            break
        same = np.cos(np.radians(beam[i] / 3600.0))
        alone = np.cos(np.radians(settings.isolation * beam[i] / 3600.0))
        cosine = vectors @ vectors[i]
        crowd = (cosine > alone) & (cosine < same) & (snr > FAINTER * snr[i])
        if crowd.any() or (taken and (np.array(taken) @ vectors[i]).max() > same):
            continue
        chosen.append(i)
        taken.append(vectors[i])
    return Candidates(ra[chosen], dec[chosen], ~clear[chosen])


def placed(some: Candidates, found: Sequence[Located], settings: Comparisons) -> tuple[FloatArray, FloatArray]:
    """ICRS degrees of the comparisons among some candidates, shape (n,) twice, brightest first.

    A place is the median over the frames of the centroids less each frame's own shift, the mean shift of all frames
    being zero. Left out are sources that are no points, saturated ones, and those found in too few of the frames
    deep enough for them; those at targets too, unless it takes them to have enough.
    """
    ra, dec = some.ra, some.dec
    if not found or len(ra) == 0:
        return ra[:0], dec[:0]
    east, north, snr, width = (
        np.stack([getattr(f, name) for f in found]) for name in ("east", "north", "snr", "width")
    )
    place_east, place_north = _consistent(east), _consistent(north)
    seen = np.isfinite(snr)
    good = (seen.sum(axis=0) >= 2) & np.isfinite(place_east) & np.isfinite(place_north)
    good &= median_of(width) <= POINT_WIDTH
    good &= np.stack([f.flat for f in found]).sum(axis=0) <= FLAT * seen.sum(axis=0)
    good &= _steady(snr, seen)
    clear = good & ~some.at_target
    alone = clear.sum() >= settings.enough or good.sum() <= settings.fewest
    kept = np.flatnonzero(clear if alone else good)[: settings.wanted]
    return ra[kept] + place_east[kept] / np.cos(np.radians(dec[kept])), dec[kept] + place_north[kept]


def serving(
    positions: Columns, frames: Columns, kinds: Sequence[str], assumed_fwhm_pixels: float, settings: Comparisons
) -> IntArray:
    """The ids of the comparisons, ascending, that serve: those more than a median beam from every position of these kinds.

    A target that is added to a finished run may be a comparison of it. Were it to serve on, gains would take up a part of
    its variation, and it would be among the steady sources that it is held against. In a field that has too few others
    all serve.
    """
    mine = positions["kind"] == "comparison"
    ids, field = positions["id"][mine], positions["field"][mine]
    clear = ~np.isin(ids, list(at_positions(positions, frames, kinds, assumed_fwhm_pixels)))
    n_clear, n_all = (np.bincount(field[which], minlength=field.max(initial=-1) + 1) for which in (clear, clear | True))
    needed = (n_clear < settings.enough) & (n_all > settings.fewest)
    return np.sort(ids[clear | needed[field]])


def at_positions(
    positions: Columns, frames: Columns, kinds: Sequence[str], assumed_fwhm_pixels: float
) -> dict[int, IntArray]:
    """By comparison that lies within a median beam of positions of these kinds the ids of these, ascending."""
    mine, target = (np.flatnonzero(np.isin(positions["kind"], some)) for some in (("comparison",), tuple(kinds)))
    if not len(mine) or not len(target):
        return {}
    beam = float(np.median(beams(frames, np.arange(len(frames["id"])), assumed_fwhm_pixels)))
    near = within_deg(
        unit_vectors(positions["ra"][mine], positions["dec"][mine]),
        unit_vectors(positions["ra"][target], positions["dec"][target]),
        beam,
    )
    ids = positions["id"]
    return {int(ids[row]): np.sort(ids[target[some]]) for row, some in zip(mine, near, strict=True) if some}


def among_alike(snr: FloatArray, width: FloatArray) -> FloatArray:
    """Widths over the median of those of the ALIKE sources nearest in S/N, shape (n,), NaN where there is none.

    A bright star on a plate is a wide one: only among its like does its width tell whether it is a point.
    """
    relative = np.full(len(width), np.nan)
    found = np.flatnonzero(np.isfinite(width) & np.isfinite(snr))
    order = found[np.argsort(-snr[found], kind="stable")]
    for at, source in enumerate(order.tolist()):
        first = min(max(0, at - ALIKE // 2), max(0, len(order) - ALIKE))
        relative[source] = width[source] / np.median(width[order[first : first + ALIKE]])
    return relative


def _steady(snr: FloatArray, seen: NDArray[np.bool_]) -> NDArray[np.bool_]:
    """Which sources are found in most of the frames that are deep enough for them."""
    expected = _relative_depth(snr)[:, None] * median_of(snr) >= SURE * LEAST_SNR
    return np.asarray(seen.sum(axis=0) >= OFTEN * np.maximum(1, (expected | seen).sum(axis=0)))


def _relative_depth(snr: FloatArray) -> FloatArray:
    """How many times deeper than typical each frame is, shape (n_frames,): the median of S/N over the sources' own."""
    return np.nan_to_num(median_of((snr / median_of(snr)).T), nan=0.0)


def _consistent(offset: FloatArray) -> FloatArray:
    """Places of the sources, shape (n,), from offsets (n_frames, n) that share an unknown shift in each frame."""
    place = np.zeros(offset.shape[1])
    for _ in range(ROUNDS):
        shift = median_of((offset - place).T)
        known = np.isfinite(shift)
        if not known.any():
            return np.full(offset.shape[1], np.nan)
        place = median_of(offset - (shift - shift[known].mean())[:, None])
        place = np.where(np.isfinite(place), place, 0.0)
    return np.where(np.isfinite(offset).any(axis=0), place, np.nan)


def sampled_frames(frames: Columns, rows: IntArray, per_channel: int) -> IntArray:
    """The frames in which candidates are located: so many per channel, evenly over time."""
    chosen: list[int] = []
    for label in sorted(set(frames["channel"][rows].tolist())):
        mine = rows[frames["channel"][rows] == label]
        mine = mine[np.argsort(frames["middle_mjd_tdb"][mine], kind="stable")]
        spread = np.linspace(0, len(mine) - 1, min(per_channel, len(mine))).round().astype(int)
        chosen += mine[np.unique(spread)].tolist()
    return np.array(sorted(chosen), np.int64)
