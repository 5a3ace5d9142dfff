"""Does it move? A thing as bright, a little aside, in the frames before and after those in which a candidate is bright."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage

from hindlight import Candidate, Column, ConsistencyCheck, Cutout, Finding, beam_arcsec, hookimpl, setting

Array = NDArray[np.float64]
Ints = NDArray[np.int64]
SIGMA_OF_FWHM = 0.42466090014400953  # 1 / sqrt(8 ln 2)
HOUR_S = 3600.0
MOST_PEAKS = 6  # of a neighbouring frame that are measured
ALIKE = (0.5, 2.0)
SPARE = 1.0  # sigma above the least S/N that are expected of a counterpart
ON_TRACK = 1.0  # beams: how far from a straight, even track a counterpart may lie
ELSEWHEN = 20  # frames in which the place of a counterpart must be dark: else it is a variable source
FEWEST_SAMPLES = 500  # of blank positions that show the tail of the noise
TAIL = 0.05  # of them are in the tail
PLACES = 2 * 2.8  # independent places in a circle of one beam's radius, in either of the frames that are compared
GONE = 0.5  # the place of a counterpart is never brighter in other frames by this part of what the counterpart adds


@dataclass(frozen=True)
class Moving(ConsistencyCheck):
    """Whether frames of the same channel within `hours` of a bright one show a counterpart aside.

    A counterpart lies between one beam and `radius` beams from the position, is as bright as the candidate within a factor
    of two, and is new: neither in the bright frame nor in twenty others. What smears by more than a beam in an exposure is no
    point, so no counterpart is sought further away than a beam for each exposure time passed. The check fails if such
    counterparts lie on one straight and even track in at least the fraction `share` of the frames that can tell.
    What is seen in one frame only must be too bright for chance, by what fluxes at blank positions of the field reach.
    Uninformative where no frame within `hours` in which the position is dark is deep enough. Objects that leave `radius`
    beams between frames pass. Known objects are not looked up: that would need their ephemerides.
    """

    columns = (
        Column("n_tested", "frames near in time that can tell, for the bright frame with the best track",
               dtype="int64", ucd="meta.number;obs"),
        Column("n_seen", "those with a counterpart on the track", dtype="int64", ucd="meta.number;obs"),
        Column("rate", "motion of the track on the sky, blank without one", unit="arcsec/h", ucd="pos.pm"),
    )  # fmt: skip
    hours: float = setting(24.0, "furthest frames in time, from a bright one", unit="h", minimum=0)
    radius: float = setting(8.0, "furthest counterparts", unit="FWHM", minimum=2)
    max_frames: int = setting(5, "at most so many bright frames, those furthest above the quiet level", minimum=1)
    each: int = setting(4, "frames near in time, for each bright one", minimum=1)
    min_snr: float = setting(6.0, "least flux over error of a counterpart", unit="sigma", minimum=4)
    lone_snr: float = setting(
        7.5, "least flux over error of a counterpart seen in one frame only", unit="sigma", minimum=4
    )
    level: float = setting(
        1e-3, "chance that noise makes a counterpart seen in one frame only, all places counted", minimum=0, maximum=1
    )
    share: float = setting(0.6, "fraction of the frames that makes the check fail", minimum=0, maximum=1)

    def check(self, candidate: Candidate) -> Finding:
        """The finding for one candidate."""
        best = (0, 0, float("nan"))
        for at, curve in enumerate(candidate.curves):
            if curve.channel.signed or len(candidate.fwhm) <= at:
                continue
            rows = np.flatnonzero(candidate.bright[at])
            for row in rows[np.argsort(-curve.above_quiet[rows], kind="stable")][: self.max_frames].tolist():
                best = max(best, self._track(candidate, at, row), key=lambda found: (found[1], found[0]))
        tested, seen, rate = best
        values = {"n_tested": tested, "n_seen": seen, "rate": rate}
        if tested == 0:
            return Finding(
                "uninformative",
                f"no frame within {self.hours:g} h of a bright one, with the position dark, is deep enough to show it "
                "aside",
                values,
            )
        evidence = f"in {seen} of {tested} frames within {self.hours:g} h of a bright one a thing as bright lies aside"
        if seen:
            evidence += f", on a track of {rate:.3g} arcsec/h"
        evidence += f" (sought up to {self.radius:g} beams; known objects were not looked up)"
        return Finding("fail" if seen > 0 and seen >= self.share * tested else "pass", evidence, values)

    def _track(self, candidate: Candidate, at: int, row: int) -> tuple[int, int, float]:
        """Frames that can tell, those with a counterpart on the best track, and its rate, for one bright frame."""
        found = self._best(candidate, at, row, self.min_snr)
        return self._best(candidate, at, row, self._beyond_chance(candidate, at)) if found[1] == 1 else found

    def _beyond_chance(self, candidate: Candidate, at: int) -> float:
        """The flux over error that a counterpart seen in one frame only must have."""
        curve = candidate.curves[at]
        block = candidate.controls(curve.channel.label, curve.frame)
        places = PLACES * self.radius**2 * self.each * min(self.max_frames, int(candidate.bright[at].sum()))
        return max(self.lone_snr, reached_by_chance(pulls_of(block.flux, block.flux_err), self.level / places))

    def _best(self, candidate: Candidate, at: int, row: int, min_snr: float) -> tuple[int, int, float]:
        """The same, with counterparts of at least this flux over error."""
        near, reach = self._near(candidate, at, row)
        if len(near) == 0:
            return 0, 0, float("nan")
        curve = candidate.curves[at]
        frames = np.concatenate((curve.frame[row : row + 1], curve.frame[near]))
        made = {cutout.frame: cutout for cutout in candidate.cutouts(frames, self.radius)}
        bright = made.get(int(curve.frame[row]))
        places, blind = [], []
        lags, limits = [], []
        for other, limit in zip(near.tolist(), reach.tolist(), strict=True):
            cutout = made.get(int(curve.frame[other]))
            if bright is None or cutout is None:
                continue
            lags.append(float(curve.t_tdb_s[other] - curve.t_tdb_s[row]))
            limits.append(limit * beam_arcsec(cutout))
            same_pixel = [axis[at][row] - axis[at][other] for axis in (candidate.x, candidate.y)]
            blind.append(cutout.to_sky @ same_pixel)
            places.append(self._counterparts(candidate, at, row, other, bright, cutout, limit, min_snr))
        if not lags or bright is None:
            return 0, 0, float("nan")
        return best_track(np.array(lags), np.array(limits), places, beam_arcsec(bright), np.array(blind))

    def _near(self, candidate: Candidate, at: int, row: int) -> tuple[Ints, Array]:
        """Rows near in time that are dark and deep enough, and how many beams away a counterpart may lie in each."""
        curve = candidate.curves[at]
        lag = np.abs(curve.t_tdb_s - curve.t_tdb_s[row])
        size = float(curve.flux[row] - curve.quiet_level[0])
        longest = np.maximum(curve.exposure_s, curve.exposure_s[row])
        with np.errstate(divide="ignore", invalid="ignore"):
            reach = np.where(longest > 0, lag / longest, np.inf)
            reach = np.minimum(np.nan_to_num(reach, nan=np.inf), self.radius)
            can = ~candidate.bright[at] & (lag > 0) & (lag <= self.hours * HOUR_S) & (reach > 1.0)
            can &= size >= (self.min_snr + SPARE) * curve.flux_err
        rows = np.flatnonzero(can)
        rows = rows[np.argsort(lag[rows], kind="stable")][: self.each]
        return rows, reach[rows]

    def _counterparts(
        self, candidate: Candidate, at: int, row: int, other: int, bright: Cutout, cutout: Cutout, limit: float,
        min_snr: float,
    ) -> Array:  # fmt: skip
        """(east, north) arcsec of what is as bright in the other frame and not there in the bright one, shape (n, 2)."""
        curve = candidate.curves[at]
        size = float(curve.flux[row] - curve.quiet_level[0])
        offset = peaks_of_difference(bright, cutout, limit)
        n = len(offset)
        if n == 0:
            return np.empty((0, 2))
        frame, back = np.full(n, curve.frame[other]), np.full(n, curve.frame[row])
        x, y = candidate.x[at][other] + offset[:, 0], candidate.y[at][other] + offset[:, 1]
        flux, error = candidate.images.measure(frame, x, y)
        before, _ = candidate.images.measure(back, *candidate.images.carried(frame, x, y, back))
        on_pixel = np.hypot(x - candidate.x[at][row], y - candidate.y[at][row]) <= cutout.fwhm  # a fixed defect
        with np.errstate(invalid="ignore"):
            new = flux - before
            alike = (new >= min_snr * error) & (new >= ALIKE[0] * size) & (new <= ALIKE[1] * size) & ~on_pixel
        for i in np.flatnonzero(alike).tolist():
            alike[i] = self._never_else(candidate, at, other, (float(x[i]), float(y[i])), float(flux[i]))
        return np.asarray(offset[alike] @ cutout.to_sky.T)

    def _never_else(self, candidate: Candidate, at: int, row: int, place: tuple[float, float], flux: float) -> bool:
        """Whether the sky at a pixel of one frame stays near its level in frames all over the light curve."""
        frames = candidate.curves[at].frame
        rows = np.unique(np.linspace(0, len(frames) - 1, min(len(frames), ELSEWHEN)).round().astype(np.int64))
        others = frames[rows[rows != row]]
        x, y = (np.full(len(others), value) for value in place)
        there = candidate.images.carried(np.full(len(others), frames[row]), x, y, others)
        found, _ = candidate.images.measure(others, *there)
        found = found[np.isfinite(found)]
        if len(found) == 0:
            return True
        level = float(np.median(found))
        return bool((found - level < GONE * (flux - level)).all())


def peaks_of_difference(first: Cutout, second: Cutout, limit: float) -> Array:
    """Pixel offsets from the position, shape (n, 2), of the highest places of the second less the first cut-out.

    Both are smoothed with the beam; places lie between one beam and `limit` beams from the position.
    """
    smooth = [_smoothed(cutout) for cutout in (first, second)]
    y, x = np.indices(second.pixels.shape, dtype=float)
    offset = np.stack((x - second.x, y - second.y))
    in_first = np.linalg.inv(first.to_sky) @ second.to_sky @ offset.reshape(2, -1)
    rows, columns = in_first[1] + first.y, in_first[0] + first.x
    before = ndimage.map_coordinates(smooth[0], (rows, columns), order=3, cval=0.0).reshape(x.shape)
    difference = smooth[1] - before
    distance = np.hypot(*offset) / second.fwhm
    side = 2 * max(1, round(second.fwhm / 2)) + 1
    top = (difference == ndimage.maximum_filter(difference, side)) & (difference > 0)
    top &= (distance >= 1.0) & (distance <= limit)
    found = np.argwhere(top)
    found = found[np.argsort(-difference[top], kind="stable")][:MOST_PEAKS]
    return np.stack((found[:, 1] - second.x, found[:, 0] - second.y), axis=1)


def pulls_of(flux: Array, error: Array) -> Array:
    """Fluxes of blank positions less each one's median, over their errors, from matrices with NaN; one long row."""
    known = np.isfinite(flux).any(axis=1)
    flux, error = flux[known], error[known]
    z = (flux - np.nanmedian(flux, axis=1, keepdims=True)) / error if len(flux) else np.empty(0)
    return np.asarray(z[np.isfinite(z)])


def reached_by_chance(z: Array, chance: float) -> float:
    """What noise like `z`, shape (n,), exceeds with this chance, from a tail fitted to its highest twentieth; 0 for few.

    Generalised Pareto by probability-weighted moments (Hosking & Wallis 1987, Technometrics 29, 339; their k is minus the
    shape), its shape not below zero: exponential where the tail is no heavier.
    """
    if len(z) < FEWEST_SAMPLES or chance <= 0:
        return 0.0
    m = int(TAIL * len(z))
    highest = np.sort(z)[-m - 1 :]
    excess = highest[1:] - highest[0]
    mean = float(excess.mean())
    weighted = float(((m - np.arange(m) - 0.65) / m * excess).mean())  # by 1 - F, plotting positions (i - 0.35) / m
    shape, scale = 2.0 - mean / (mean - 2 * weighted), 2 * mean * weighted / (mean - 2 * weighted)
    rarer = math.log(m / len(z) / chance)
    if not shape > 0.0:
        return float(highest[0]) + mean * rarer
    return float(highest[0]) + scale / shape * math.expm1(shape * rarer)


def _smoothed(cutout: Cutout) -> Array:
    data = np.nan_to_num(cutout.pixels - cutout.background, posinf=0.0, neginf=0.0)
    return np.asarray(ndimage.gaussian_filter(data, SIGMA_OF_FWHM * cutout.fwhm))


def best_track(
    lags: Array, limits: Array, places: list[Array], width: float, blind: Array | None = None
) -> tuple[int, int, float]:
    """Frames a track can be seen in, frames in which it is, and its rate (arcsec/h): of the track seen most often.

    `lags` (s) and `limits` (arcsec) have shape (n,), `places` n arrays (m, 2) of counterparts' offsets in arcsec. `blind`,
    shape (n, 2), is where in each frame a counterpart would lie on the pixel of the bright one, and is not told from a defect
    of the detector.
    """
    best = (len(lags), 0, float("nan"))
    for lag, found in zip(lags.tolist(), places, strict=True):
        for place in found:
            speed = place / lag
            expected = lags[:, None] * speed
            far = np.hypot(*expected.T)
            seen = [
                len(some) > 0 and float(np.hypot(*(some - where).T).min()) <= ON_TRACK * width
                for some, where in zip(places, expected, strict=True)
            ]
            can_tell = far <= limits - ON_TRACK * width  # further out some are sought in vain
            if blind is not None:
                can_tell &= np.hypot(*(expected - blind).T) > (1.0 + ON_TRACK) * width
            shown = np.array(seen) & (far >= width) & (far <= limits)
            n = int(shown.sum())
            if n > best[1]:
                best = (int((shown | (can_tell & (far >= width))).sum()), n, math.hypot(*speed) * HOUR_S)
    return best


@hookimpl
def register_consistency_checks() -> list[type[ConsistencyCheck]]:
    """What this module offers."""
    return [Moving]
