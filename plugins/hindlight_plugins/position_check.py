"""Does the light come from where the candidate is, and does it stay there?

Centroids of its bright frames; where few are bright, of what its brightest frames have more than its faintest.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import optimize, special

from hindlight import (
    Candidate,
    Column,
    ConsistencyCheck,
    Contrast,
    Cutout,
    Finding,
    added,
    added_part,
    beam_arcsec,
    contrast,
    hookimpl,
    motion,
    quiet_cutouts,
    setting,
)

Array = NDArray[np.float64]
SIGMA_OF_FWHM = 0.42466090014400953  # 1 / sqrt(8 ln 2)
CIRCLE_95 = 2.4477468306808166  # radius that holds 95 % of a two-dimensional Gaussian, in sigma
FEWEST_PIXELS = 6
SMALLEST_RADIUS = 1.5  # pixels
MISMATCH = 0.05  # of the height: by how much beams differ from Gaussians of the stated width
SPOILED = 2.5  # reduced chi-square beyond which something else is in the fitted pixels: of white noise 1 in 20,000
LEFT_OVER = 0.05  # beams by which a steady source as bright as the candidate shifts a centroid once it is taken off
FEW_FRAMES = 5  # bright ones with a centroid: with fewer the brightest frames are set against the faintest as well
MOST_OF, SOME = 0.5, 3  # of the bright frames, or so many, must have centroids, or light moves rather than is added
LARGEST = 0.5  # part of what varies at the position that motion must explain
JULIAN_YEAR_S = 31557600.0
FEWEST_TIMES = 3


@dataclass(frozen=True)
class Position(ConsistencyCheck):
    """Whether the centroids of the bright frames agree with the target's position and with each other.

    Frames in which the target has less than `min_snr` carry no position. One frame tests the offset only. Pulses much
    shorter than an aperture synthesis may leave sidelobes that are not the beam's: their centre is right all the same.

    Where fewer than five frames have a centroid and a channel varies all over, the light that the brightest third of its
    frames has more than the faintest third must lie at the position. The check fails too where the mean light is a source
    `off` beams or more from the position that moves from frame to frame, as pointing errors do it, or brightens as a
    whole, which explains at least half of what varies here, and better than a point at the position does; unless half of
    the bright frames, or three, have centroids and tell to `off` beams where the light is that they add. Uninformative
    where there is neither.
    """

    columns = (
        Column("offset", "distance from the target's position of the mean centroid of the bright frames, of what the "
               "brightest frames have more than the faintest, or of the source that moves",
               unit="arcsec", ucd="pos.angDistance"),
        Column("chi2_scatter", "chi-square of the centroids about their mean, 2 (n - 1) degrees of freedom; blank for "
               "one frame, and for frames that were added up", ucd="stat.fit.chi2"),
        Column("p", "chance of an offset, a scatter or a motion as large, all tests counted", ucd="stat.probability"),
        Column("n_frames", "bright frames with a centroid, or frames that were added up", dtype="int64",
               ucd="meta.number;obs"),
    )  # fmt: skip
    min_snr: float = setting(5.0, "least flux over error of a frame whose centroid counts", unit="sigma", minimum=3)
    max_frames: int = setting(30, "at most so many frames, those of highest flux over error", minimum=1)
    floor: float = setting(0.05, "systematic error of a centroid, and of the frames' mean", unit="FWHM", minimum=0)
    target_err: float = setting(0.0, "1-sigma error of the target positions, per axis", unit="arcsec", minimum=0)
    half_width: float = setting(2.5, "half width of the cut-outs", unit="FWHM", minimum=1.5)
    level: float = setting(1e-4, "the check fails below this chance", minimum=0, maximum=1)
    off: float = setting(0.3, "least distance of a source whose motion is told", unit="FWHM", minimum=0.1)

    def check(self, candidate: Candidate) -> Finding:
        """The finding for one candidate."""
        rows = bright_centroids(candidate, self.min_snr, self.max_frames, self.half_width)
        tried, rows = len(rows), rows[np.isfinite(rows[:, 1])]
        known_to = math.hypot(self.target_err, candidate.place_err)
        found, may_move = [], True
        if len(rows):
            _, east, north, error, fwhm = rows.T
            known = float((error**-2).sum() ** -0.5) <= self.off * float(np.mean(fwhm))
            may_move = not known or len(rows) < min(MOST_OF * tried, SOME)
            found.append(self._judge(np.stack((east, north), axis=1), error, fwhm, known_to))
        if len(rows) < FEW_FRAMES:
            stacks = [contrast(candidate, at, self.half_width) for at in range(len(candidate.curves))]
            found += [said for stack in stacks if stack for said in self._all_over(stack, known_to, may_move)]
        if not found:
            values = {"offset": float("nan"), "chi2_scatter": float("nan"), "p": float("nan"), "n_frames": 0}
            why = f"no bright frame of {self.min_snr:g} sigma has a centroid, nor has what varies all over"
            return Finding("uninformative", why, values)
        worst = min(found, key=lambda said: float(said.values["p"]))
        p = _after_trials(float(worst.values["p"]), len(found))
        return Finding(
            "fail" if p < self.level else "pass", f"{worst.evidence} (p = {p:.2g})", {**worst.values, "p": p}
        )

    def _all_over(self, stack: Contrast, known_to: float, may_move: bool) -> list[Finding]:
        """What is said of the brightest against the faintest frames of a channel: where the light is that is added, and

        if `may_move` whether a source aside moves.
        """
        if stack.snr < self.min_snr:
            return []
        fwhm = beam_arcsec(stack.added)
        error = centroid_error(fwhm, stack.snr)
        found = [said] if may_move and (said := self._moved(stack, error, known_to)) else []
        shift = centroid(stack.added)
        if shift is not None:
            distance = math.hypot(*(stack.added.to_sky @ shift))
            variance = error**2 + (self.floor * fwhm) ** 2 + known_to**2
            evidence = (
                f"what the brightest of {stack.n} frames have more than the faintest lies {distance:.3g} arcsec "
                f"({distance / fwhm:.2f} beams) from the position, expected within {CIRCLE_95 * variance**0.5:.3g} arcsec "
                "at 95 %"
            )
            found.append(_finding(evidence, distance, math.exp(-(distance**2) / variance / 2), stack.n))
        return found

    def _moved(self, stack: Contrast, error: float, known_to: float) -> Finding | None:
        """What is said of a source aside that moves between the frames; None where there is none, or light is added here.

        Both its distance and its motion must be beyond chance.
        """
        fwhm = beam_arcsec(stack.light)
        shift = centroid(stack.light)
        if shift is None:
            return None
        east, north = stack.light.to_sky @ shift
        distance = math.hypot(east, north)
        found = motion(stack, east, north, MISMATCH) if distance >= self.off * fwhm else None
        if found is None:
            return None
        change = found.moved + found.there
        if found.moved < LARGEST * change:
            return None
        variance = error**2 + (self.floor * fwhm) ** 2 + known_to**2
        p = max(math.exp(-(distance**2) / variance / 2), math.exp(-max(found.delta_chi2, 0.0) / 2))
        level = float(stack.light.pixels[round(stack.light.y), round(stack.light.x)])
        evidence = (
            f"a source lies {distance:.3g} arcsec ({distance / fwhm:.2f} beams) from the position; between the faintest "
            f"and the brightest of {stack.n} frames it moves by {math.hypot(*found.shift) / fwhm:.2f} beams and brightens "
            f"by {100 * found.scaled:.0f} %, which changes the flux here by {100 * found.moved / level:.0f} %; what varies "
            f"here is {100 * change / level:.0f} %"
        )
        return _finding(evidence, distance, p, stack.n)

    def _judge(self, offsets: Array, error: Array, fwhm: Array, known_to: float = 0.0) -> Finding:
        """The finding from offsets of shape (n, 2), their errors per axis and beams, shape (n,), all in arcsec.

        chi2 = |mean|^2 / err_mean^2 with 2 degrees of freedom, and sum |offset - mean|^2 / err^2 with 2 (n-1): the sum
        of both is the chi-square against the target's position. The floor and the target's error `known_to` are common
        to all frames, so the mean is never better known than by them.
        """
        n = error.size
        floor = self.floor * fwhm
        weight = 1 / (error**2 + floor**2)
        mean = (weight[:, None] * offsets).sum(axis=0) / weight.sum()
        distance = math.hypot(*mean)
        beam = float((weight * fwhm).sum() / weight.sum())
        variance = float(1 / weight.sum()) + ((self.floor * beam) ** 2 if n > 1 else 0.0) + known_to**2
        within = CIRCLE_95 * variance**0.5
        p = [math.exp(-(distance**2) / variance / 2)]
        frames = "1 bright frame" if n == 1 else f"{n} bright frames"
        evidence = (
            f"the centroid of {frames} lies {distance:.3g} arcsec ({distance / beam:.2f} beams) from the position, "
            f"expected within {within:.3g} arcsec at 95 %"
        )
        scatter = float("nan")
        if n > 1:
            scatter = float((weight[:, None] * (offsets - mean) ** 2).sum())
            p.append(float(special.chdtrc(2 * (n - 1), scatter)))
            evidence += f"; scatter about the mean: chi-square {scatter:.1f} for {2 * (n - 1)} degrees of freedom"
        return _finding(evidence, distance, _after_trials(min(p), len(p)), n, scatter)


def _finding(evidence: str, distance: float, p: float, n: int, scatter: float = float("nan")) -> Finding:
    """One answer of several, whose verdict is still to come."""
    return Finding("pass", evidence, {"offset": distance, "chi2_scatter": scatter, "p": p, "n_frames": n})


def _after_trials(p: float, n: int) -> float:
    """The chance that the least of n values is p or less."""
    return -math.expm1(n * math.log1p(-min(p, 1 - 1e-16)))


@dataclass(frozen=True)
class ProperMotion(ConsistencyCheck):
    """Whether the centroids of the bright frames move: a straight line in time against one place.

    Needs at least three times. A motion that a straight line describes and that is significant within a year is of a
    body of the Solar System: the check fails. Over longer spans a motion is information, that of a near star. Where
    centroids scatter beyond a straight line, or there are too few, the check is uninformative; `position` judges scatter.
    """

    columns = (
        Column("ra_cosdec", "motion of the centroids along ra times cos dec", unit="arcsec/yr",
               ucd="pos.pm;pos.eq.ra"),
        Column("dec", "motion of the centroids along dec", unit="arcsec/yr", ucd="pos.pm;pos.eq.dec"),
        Column("err", "1-sigma error of either", unit="arcsec/yr", ucd="stat.error;pos.pm"),
        Column("delta_chi2", "chi-square that the motion explains, 2 degrees of freedom", ucd="stat.fit.chi2"),
        Column("p", "chance of so large a motion", ucd="stat.probability"),
        Column("span", "from the first to the last centroid", unit="yr", ucd="time.interval"),
        Column("n_frames", "bright frames with a centroid and a time", dtype="int64", ucd="meta.number;obs"),
    )  # fmt: skip
    min_snr: float = setting(5.0, "least flux over error of a frame whose centroid counts", unit="sigma", minimum=3)
    max_frames: int = setting(30, "at most so many frames, those of highest flux over error", minimum=3)
    floor: float = setting(0.05, "systematic error of a centroid", unit="FWHM", minimum=0)
    half_width: float = setting(2.5, "half width of the cut-outs", unit="FWHM", minimum=1.5)
    level: float = setting(1e-4, "a motion, or a scatter, is significant below this chance", minimum=0, maximum=1)
    within: float = setting(1.0, "spans up to this are those of a body of the Solar System", unit="yr", minimum=0)

    def check(self, candidate: Candidate) -> Finding:
        """The finding for one candidate."""
        times = {int(f): float(t) for c in candidate.curves for f, t in zip(c.frame, c.t_tdb_s, strict=True)}
        rows = bright_centroids(candidate, self.min_snr, self.max_frames, self.half_width)
        rows = rows[np.isfinite(rows[:, 1])]
        years = np.array([times[int(frame)] / JULIAN_YEAR_S for frame in rows[:, 0]])
        rows, years = rows[np.isfinite(years)], years[np.isfinite(years)]
        nan = float("nan")
        names = ("ra_cosdec", "dec", "err", "delta_chi2", "p", "span")
        if len(np.unique(years)) < FEWEST_TIMES:
            values = {**dict.fromkeys(names, nan), "n_frames": len(rows)}
            return Finding("uninformative", "fewer than three bright frames have a centroid and a time", values)
        error = np.hypot(rows[:, 3], self.floor * rows[:, 4])
        rate, rate_err, delta, left = linear_motion(years, rows[:, 1:3], error)
        span = float(np.ptp(years))
        p = math.exp(-delta / 2)
        numbers = (float(rate[0]), float(rate[1]), rate_err, delta, p, span)
        values = {**dict(zip(names, numbers, strict=True)), "n_frames": len(rows)}
        evidence = (
            f"the centroids of {len(rows)} bright frames move by {rate[0]:.3g}, {rate[1]:.3g} +- {rate_err:.2g} arcsec/yr "
            f"(east, north) over {span:.3g} years (p = {p:.2g})"
        )
        freedom = 2 * (len(rows) - 2)
        if p < self.level and float(special.chdtrc(freedom, left)) < self.level:
            evidence += f", but scatter about it: chi-square {left:.1f} for {freedom} degrees of freedom"
            return Finding("uninformative", evidence, values)
        return Finding("fail" if p < self.level and span <= self.within else "pass", evidence, values)


def linear_motion(times: Array, offsets: Array, error: Array) -> tuple[Array, float, float, float]:
    """Rate (2,) of offsets (n, 2) by weighted least squares, its error, what it takes off chi-square, and what is left.

    A straight line against a constant, both axes with one error: 2 degrees of freedom, and 2 (n - 2) left.
    """
    weight = error**-2
    late = times - np.average(times, weights=weight)
    about = offsets - np.average(offsets, axis=0, weights=weight)
    lever = float((weight * late**2).sum())
    rate = (weight * late) @ about / lever
    left = float((weight[:, None] * (about - late[:, None] * rate) ** 2).sum())
    return rate, lever**-0.5, lever * float(rate @ rate), left


def bright_centroids(candidate: Candidate, min_snr: float, most: int, half_width: float) -> Array:
    """Frame, centroid east and north of the position, its error per axis and the beam in arcsec: shape (n, 5).

    NaN stands for the centroid of a frame that has none. Of the bright frames of at least `min_snr`, at most `most`, those
    of highest flux over error first. Beside a steady source it is the centroid of the light that is added to the quiet
    frames, which must be that bright by itself: of a source that is never dark it is a part.
    """
    found = []
    for at, (curve, bright) in enumerate(zip(candidate.curves, candidate.bright, strict=True)):
        snr = curve.flux / curve.flux_err
        snr = np.abs(snr) if curve.channel.signed else snr
        part = added_part(curve)
        good = np.flatnonzero(bright & (snr >= min_snr))
        found += [(-float(snr[row]), int(curve.frame[row]), at, float(part[row])) for row in good]
    best = {frame: (-negative, at, part) for negative, frame, at, part in sorted(found)[:most]}
    quiet = {at: quiet_cutouts(candidate, at, half_width) for at in {at for _, at, _ in best.values()}}
    rows = []
    for cutout in candidate.cutouts(np.array(list(best), dtype=np.int64), half_width) if best else ():
        height, at, part = best[cutout.frame]
        light, crowd = added(cutout, quiet[at])
        if crowd > 0.0:
            height *= part
        shift = centroid(light, signed=candidate.curves[at].channel.signed)
        if height >= min_snr:
            fwhm = beam_arcsec(cutout)
            error = math.hypot(centroid_error(fwhm, height), LEFT_OVER * crowd * fwhm)
            place = (math.nan, math.nan) if shift is None else cutout.to_sky @ shift
            rows.append((cutout.frame, *place, error, fwhm))
    return np.array(rows, float).reshape(-1, 5)


def centroid(cutout: Cutout, *, signed: bool = False) -> Array | None:
    """Offset (x, y) in pixels of the source from the position; None where no source fits within one FWHM.

    Nor is there one where the light is not the beam's: a stray pixel beside a source draws the fit by many of its errors,
    as heavy-tailed noise does now and then, and leaves residuals that no noise explains.
    Least squares of a Gaussian with the beam's width over the pixels within one FWHM of the highest pixel that lies
    itself within one FWHM of the position; the lowest is taken where the flux may be negative (`signed`) and its
    magnitude is greater.
    """
    size_y, size_x = cutout.pixels.shape
    x, y = np.meshgrid(np.arange(size_x) - cutout.x, np.arange(size_y) - cutout.y)
    data = cutout.pixels - cutout.background
    reach = max(cutout.fwhm, SMALLEST_RADIUS)
    near = np.isfinite(data) & (np.hypot(x, y) <= reach)
    if not near.any():
        return None
    sign = -1.0 if signed and -np.min(data[near]) > np.max(data[near]) else 1.0
    top = np.unravel_index(np.argmax(np.where(near, sign * data, -np.inf)), data.shape)
    used = np.isfinite(data) & (np.hypot(x - x[top], y - y[top]) <= reach)
    height = float(data[top])
    if used.sum() < FEWEST_PIXELS or sign * height <= 0:
        return None
    px, py, values = x[used], y[used], data[used] / height
    narrow = 4 * math.log(2) / cutout.fwhm**2

    def residual(parameters: Array) -> Array:
        amplitude, x0, y0 = parameters
        return np.asarray(amplitude * np.exp(-narrow * ((px - x0) ** 2 + (py - y0) ** 2)) - values)

    result = optimize.least_squares(residual, [1.0, x[top], y[top]], method="lm", max_nfev=200)
    amplitude, x0, y0 = result.x
    moved = math.hypot(x0 - x[top], y0 - y[top])
    noise = math.hypot(cutout.rms / height, MISMATCH * amplitude)
    spoiled = float(np.square(result.fun).sum()) > SPOILED * (used.sum() - 3) * noise**2
    return np.array([x0, y0]) if result.success and amplitude > 0 and moved <= reach and not spoiled else None


def centroid_error(fwhm: float, snr: float) -> float:
    """1-sigma error of `centroid` per axis, in the unit of `fwhm`: sqrt(2) 0.424661 fwhm / snr.

    Exact for white noise, with the signal to noise of an optimal filter (Condon 1997, PASP 109, 166, eqs 20 and 21,
    for a shape that is known). In noise correlated as the beam is, least squares has 4/3 in place of sqrt(2) for the
    signal to noise of the peak: there the error is stated 6 % too large.
    """
    return math.sqrt(2.0) * SIGMA_OF_FWHM * fwhm / snr


@hookimpl
def register_consistency_checks() -> list[type[ConsistencyCheck]]:
    """What this module offers."""
    return [Position, ProperMotion]
