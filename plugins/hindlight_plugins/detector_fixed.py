"""Is it fixed to the detector, or a ghost? The pixels of a candidate's bright frames in frames that point elsewhere.

Both checks need pointings that differ by more than 1.5 beams: what stays on one pixel cannot be told from the sky else.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from hindlight import Candidate, Column, ConsistencyCheck, Finding, LightCurve, hookimpl, setting

Array = NDArray[np.float64]
Ints = NDArray[np.int64]
ALIKE = 0.5  # what has at least this part of the candidate's flux is as bright
GHOST_ALIKE = (0.4, 2.5)  # a ghost's flux in other frames over that in the bright one
SPARE = 1.0  # sigma above the least S/N that are expected of what is to be seen
ELSEWHERE = 1.5  # beams: nearer by, a bright candidate would be seen at its old pixel by its own wing
ELSEWHEN = 20  # frames that show what is usually there
DROP = 5.0  # sigma below the quiet level at which something is gone
MOST_STARS = 3  # brightest sources across the middle of the image that are tried as the ghost's origin


@dataclass(frozen=True, eq=False)
class Pairs:
    """Bright frames of one channel, each with some frames in which the target lies more than 1.5 beams away.

    `bright` and `other` are rows of the curve, `flux` is what the target is above its quiet level, `error` that of its
    flux in the other frame; all of shape (n,).
    """

    curve: LightCurve
    x: Array
    y: Array
    bright: Ints
    other: Ints
    flux: Array
    error: Array


def lit(candidate: Candidate, at: int, most: int) -> tuple[Ints, float]:
    """Rows of up to `most` frames in which curve number `at` is bright, brightest first, and its level when it is dark.

    What is there in most frames and gone in some has no bright ones: then all but those count.
    """
    curve, bright = candidate.curves[at], candidate.bright[at]
    level = curve.quiet_level[0]
    dropped = curve.above_quiet < -DROP
    if not bright.any() and dropped.any():
        bright, level = ~dropped, float(np.median(curve.flux[dropped]))
    rows = np.flatnonzero(bright)
    excess = np.abs(curve.flux[rows] - level) / curve.flux_err[rows]
    return rows[np.argsort(-excess, kind="stable")][:most], level


def dithered_pairs(candidate: Candidate, at: int, most: int, each: int) -> Pairs | None:
    """Of curve number `at`, for up to `most` bright frames the `each` nearest in time that point elsewhere."""
    curve, x, y = candidate.curves[at], candidate.x[at], candidate.y[at]
    rows, level = lit(candidate, at, most)
    if len(candidate.fwhm) <= at or len(rows) == 0:
        return None
    fwhm = candidate.fwhm[at]
    bright, other = [], []
    for row in rows.tolist():
        apart = np.hypot(x - x[row], y - y[row]) > ELSEWHERE * np.maximum(fwhm, fwhm[row])
        elsewhere = np.flatnonzero(apart)
        lag = np.abs(curve.t_tdb_s[elsewhere] - curve.t_tdb_s[row])
        chosen = elsewhere[np.argsort(lag, kind="stable")][:each]
        bright += [row] * len(chosen)
        other += chosen.tolist()
    first, second = np.array(bright, np.int64), np.array(other, np.int64)
    flux = curve.flux[first] - level
    return Pairs(curve, x, y, first, second, flux, curve.flux_err[second])


def seen_there(
    candidate: Candidate, pairs: Pairs, x: Array, y: Array, min_snr: float, alike: tuple[float, float]
) -> tuple[NDArray[np.bool_], NDArray[np.bool_]]:
    """Which pairs can tell, and in which of them the other frame shows as bright a thing at its pixel (x, y).

    It does not count where the bright frame shows that sky as bright: that is another source. Where the bright frame does
    not show it the median of frames all over the curve decides. Nor does it count where that sky is as bright in some frame
    that has it at other pixels: that is another variable. A pair whose place holds a source of the sky cannot tell.
    """
    frame, other = pairs.curve.frame[pairs.bright], pairs.curve.frame[pairs.other]
    deep = np.abs(pairs.flux) >= (min_snr + SPARE) * pairs.error
    can = np.flatnonzero(deep & np.isfinite(x) & np.isfinite(y))
    tells, seen = np.zeros(len(x), bool), np.zeros(len(x), bool)
    sign, size = np.sign(pairs.flux[can]), np.abs(pairs.flux[can])
    flux, error = candidate.images.measure(other[can], x[can], y[can])
    with np.errstate(invalid="ignore"):
        hit = (sign * flux >= min_snr * error) & (sign * flux >= alike[0] * size) & (sign * flux <= alike[1] * size)
    back = candidate.images.carried(other[can], x[can], y[can], frame[can])
    same_sky, _ = candidate.images.measure(frame[can], *back)
    for i in np.flatnonzero(hit & ~np.isfinite(same_sky)).tolist():
        same_sky[i] = usual_flux(candidate, pairs.curve, int(other[can[i]]), float(x[can[i]]), float(y[can[i]]))
    with np.errstate(invalid="ignore"):
        is_source = sign * same_sky >= ALIKE * np.abs(flux)
    for i in np.flatnonzero(hit & ~is_source).tolist():
        place = (int(other[can[i]]), float(x[can[i]]), float(y[can[i]]))
        is_source[i] = shines_elsewhere(candidate, pairs.curve, place, float(flux[i]), min_snr)
    with np.errstate(invalid="ignore"):
        hidden = ~hit & (sign * same_sky >= min_snr * error) & (sign * same_sky >= alike[0] * size)
    tells[can] = np.isfinite(flux) & ~hidden & (~hit | (np.isfinite(same_sky) & ~is_source))
    seen[can] = hit & np.isfinite(same_sky) & ~is_source
    return tells, seen


def shines_elsewhere(
    candidate: Candidate, curve: LightCurve, place: tuple[int, float, float], flux: float, min_snr: float
) -> bool:
    """Whether the sky at a place (frame, x, y) is half as bright, or as negative, in a frame that has it at other pixels."""
    frame, x, y = place
    rows = np.unique(np.linspace(0, len(curve) - 1, min(len(curve), ELSEWHEN)).round().astype(np.int64))
    others = curve.frame[rows]
    there = candidate.images.carried(*(np.full(len(others), value) for value in place), others)
    width = float(np.median(np.concatenate(candidate.fwhm)))
    apart = (np.hypot(there[0] - x, there[1] - y) > ELSEWHERE * width) & (others != frame)
    found, error = candidate.images.measure(others[apart], there[0][apart], there[1][apart])
    with np.errstate(invalid="ignore"):
        found = np.sign(flux) * found
        return bool(((found >= ALIKE * abs(flux)) & (found >= min_snr * error)).any())


def usual_flux(candidate: Candidate, curve: LightCurve, frame: int, x: float, y: float) -> float:
    """Median flux, in frames all over a curve, of the sky at a pixel of one frame; NaN where none shows it."""
    rows = np.unique(np.linspace(0, len(curve) - 1, min(len(curve), ELSEWHEN)).round().astype(np.int64))
    others = curve.frame[rows]
    others = others[others != frame]
    here = (np.full(len(others), frame), np.full(len(others), x), np.full(len(others), y))
    flux, _ = candidate.images.measure(others, *candidate.images.carried(*here, others))
    flux = flux[np.isfinite(flux)]
    return float(np.median(flux)) if len(flux) else float("nan")


@dataclass(frozen=True)
class DetectorFixed(ConsistencyCheck):
    """Whether the pixel of a bright frame is as bright in frames that point elsewhere.

    It fails if at least the fraction `share` of those frames shows it. They are the ones nearest in time, so that what
    comes and goes with the seasons is found. Uninformative where pointings never differ by more than 1.5 beams, or where
    frames that do are not deep enough. A defect of one frame only (a cosmic ray) passes.
    """

    columns = (
        Column("n_tested", "pairs of a bright frame and one that points elsewhere which can tell", dtype="int64",
               ucd="meta.number;obs"),
        Column("n_seen", "those in which the same pixel is as bright, and the sky there is not in the bright frame",
               dtype="int64", ucd="meta.number;obs"),
    )  # fmt: skip
    max_frames: int = setting(10, "at most so many bright frames, those furthest above the quiet level", minimum=1)
    each: int = setting(3, "frames that point elsewhere, for each bright one", minimum=1)
    min_snr: float = setting(4.5, "least flux over error of what is seen", unit="sigma", minimum=3)
    share: float = setting(0.3, "fraction of the pairs that makes the check fail", minimum=0, maximum=1)

    def check(self, candidate: Candidate) -> Finding:
        """The finding for one candidate."""
        tested = seen = 0
        where = ""
        for at in range(len(candidate.curves)):
            pairs = dithered_pairs(candidate, at, self.max_frames, self.each)
            if pairs is None or len(pairs.bright) == 0:
                continue
            x, y = pairs.x[pairs.bright], pairs.y[pairs.bright]
            tells, hit = seen_there(candidate, pairs, x, y, self.min_snr, (ALIKE, np.inf))
            tested, seen = tested + int(tells.sum()), seen + int(hit.sum())
            if hit.any() and not where:
                where = f" (pixel {np.median(x[hit]):.0f}, {np.median(y[hit]):.0f} of {pairs.curve.channel.label})"
        values = {"n_tested": tested, "n_seen": seen}
        if tested == 0:
            return Finding(
                "uninformative",
                "no frame that is deep enough points elsewhere by more than 1.5 beams",
                values,
            )
        evidence = f"in {seen} of {tested} frames that point elsewhere the pixel of a bright frame is as bright{where}"
        return Finding("fail" if seen > 0 and seen >= self.share * tested else "pass", evidence, values)


@dataclass(frozen=True)
class Ghost(ConsistencyCheck):
    """Whether a candidate is the reflection of a bright source across the middle of the image.

    Of each bright frame the sources near the place across the middle that are at least `brighter` times as
    high as the candidate are tried: in frames that point elsewhere the reflection moves the other way. It fails if at least
    the fraction `share` of those shows it, for one source. Passes where no such source is there; uninformative where there
    is one and pointings never differ by more than 1.5 beams. Ghosts that are not reflected at a point are not found.
    """

    columns = (
        Column("n_tested", "pairs of a bright frame and one that points elsewhere which can tell, for the source that "
               "fits best", dtype="int64", ucd="meta.number;obs"),
        Column("n_seen", "those that show the reflection where it must be", dtype="int64", ucd="meta.number;obs"),
        Column("n_sources", "bright frames with a brighter source across the middle", dtype="int64",
               ucd="meta.number;obs"),
    )  # fmt: skip
    max_frames: int = setting(5, "at most so many bright frames, those furthest above the quiet level", minimum=1)
    each: int = setting(3, "frames that point elsewhere, for each bright one", minimum=1)
    brighter: float = setting(5.0, "least height of the source, in terms of the candidate's", minimum=1)
    off_centre: float = setting(
        0.05, "how far the axis may be off the middle of the image, as a fraction of its side", minimum=0, maximum=0.5
    )
    min_snr: float = setting(4.5, "least flux over error of what is seen", unit="sigma", minimum=3)
    share: float = setting(0.5, "fraction of the pairs that makes the check fail", minimum=0, maximum=1)

    def check(self, candidate: Candidate) -> Finding:
        """The finding for one candidate."""
        n_sources = n_bright = 0
        best = (0, 0)
        sized = True
        for at, curve in enumerate(candidate.curves):
            rows, _ = lit(candidate, at, self.max_frames)
            sized &= bool(np.isfinite(candidate.images.size(curve.frame[rows])).all())
            stars = {int(row): self._across(candidate, at, int(row)) for row in rows}
            n_bright += len(rows)
            n_sources += sum(len(found) > 0 for found in stars.values())
            pairs = dithered_pairs(candidate, at, self.max_frames, self.each)
            if pairs is None or len(pairs.bright) == 0:
                continue
            for rank in range(MOST_STARS):
                best = max(best, self._tried(candidate, pairs, stars, rank), key=lambda pair: (pair[1], pair[0]))
        tested, seen = best
        values = {"n_tested": tested, "n_seen": seen, "n_sources": n_sources}
        if n_bright == 0 or not sized:
            return Finding("uninformative", "no frame is bright, or the size of the images is not known", values)
        if n_sources == 0:
            return Finding("pass", "no brighter source lies across the middle of the image in any bright frame", values)
        if tested == 0:
            return Finding(
                "uninformative",
                f"a brighter source lies across the middle of the image in {n_sources} bright frames, and no frame that "
                "is deep enough points elsewhere by more than 1.5 beams",
                values,
            )
        evidence = (
            f"a brighter source lies across the middle of the image in {n_sources} of {n_bright} bright frames; in "
            f"{seen} of {tested} frames that point elsewhere its reflection is seen where it moves to"
        )
        return Finding("fail" if seen > 0 and seen >= self.share * tested else "pass", evidence, values)

    def _across(self, candidate: Candidate, at: int, row: int) -> Array:
        """x, y of the brightest sources near the place across the middle, shape (n, 2), brightest first."""
        curve = candidate.curves[at]
        frame = int(curve.frame[row])
        width, height = (float(size[0]) for size in candidate.images.size(curve.frame[row : row + 1]))
        if not np.isfinite(width):
            return np.empty((0, 2))
        x, y, height_snr = candidate.images.sources(frame, self.brighter * _height(candidate, curve, row))
        off = np.hypot(x - (width - 1 - candidate.x[at][row]), y - (height - 1 - candidate.y[at][row]))
        # The source is no reflection of itself, and the axis' distance from the middle counts twice.
        itself = np.hypot(x - candidate.x[at][row], y - candidate.y[at][row]) <= 2 * _width(candidate, at, row)
        near = np.flatnonzero((off <= 2 * self.off_centre * min(width, height)) & ~itself)
        near = near[np.argsort(-height_snr[near], kind="stable")][:MOST_STARS]
        return np.stack((x[near], y[near]), axis=1)

    def _tried(self, candidate: Candidate, pairs: Pairs, stars: dict[int, Array], rank: int) -> tuple[int, int]:
        """How many pairs can tell, and how many show the reflection of each bright frame's source number `rank`."""
        star = np.full((len(pairs.bright), 2), np.nan)
        for i, row in enumerate(pairs.bright.tolist()):
            if rank < len(stars[row]):
                star[i] = stars[row][rank]
        have = np.isfinite(star[:, 0])
        frame, other = pairs.curve.frame[pairs.bright], pairs.curve.frame[pairs.other]
        there = np.full((2, len(have)), np.nan)
        there[:, have] = candidate.images.carried(frame[have], star[have, 0], star[have, 1], other[have])
        x = pairs.x[pairs.bright] + star[:, 0] - there[0]
        y = pairs.y[pairs.bright] + star[:, 1] - there[1]
        tells, hit = seen_there(candidate, pairs, x, y, self.min_snr, GHOST_ALIKE)
        return int(tells.sum()), int(hit.sum())


def _height(candidate: Candidate, curve: LightCurve, row: int) -> float:
    """The candidate's highest pixel within a beam over the noise of a pixel; its flux over error without a cut-out."""
    for cutout in candidate.cutouts(curve.frame[row : row + 1], 1.0):
        y, x = np.indices(cutout.pixels.shape)
        near = np.hypot(x - cutout.x, y - cutout.y) <= cutout.fwhm
        found = np.abs(cutout.pixels - cutout.background)[near]
        if np.isfinite(found).any() and cutout.rms > 0:
            return float(np.nanmax(found)) / cutout.rms
    return abs(float(curve.flux[row] / curve.flux_err[row]))


def _width(candidate: Candidate, at: int, row: int) -> float:
    return float(candidate.fwhm[at][row]) if len(candidate.fwhm) > at else 0.0


@hookimpl
def register_consistency_checks() -> list[type[ConsistencyCheck]]:
    """What this module offers."""
    return [DetectorFixed, Ghost]
