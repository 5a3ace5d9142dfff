"""Does the light come from where the candidate is? Centroids of its bright frames against its position."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import optimize, special

from hindlight import Candidate, Column, ConsistencyCheck, Cutout, Finding, hookimpl, setting

Array = NDArray[np.float64]
SIGMA_OF_FWHM = 0.42466090014400953  # 1 / sqrt(8 ln 2)
CIRCLE_95 = 2.4477468306808166  # radius that holds 95 % of a two-dimensional Gaussian, in sigma
FEWEST_PIXELS = 6
SMALLEST_RADIUS = 1.5  # pixels


@dataclass(frozen=True)
class Position(ConsistencyCheck):
    """Whether the centroids of the bright frames agree with the target's position and with each other.

    Frames in which the target has less than `min_snr` carry no position. One frame tests the offset only; where no
    frame has a centroid the check is uninformative. Pulses much shorter than an aperture synthesis may leave sidelobes
    that are not the beam's: their centre is right all the same.
    """

    columns = (
        Column("offset", "distance of the mean centroid of the bright frames from the target's position",
               unit="arcsec", ucd="pos.angDistance"),
        Column("chi2_scatter", "chi-square of the centroids about their mean, 2 (n - 1) degrees of freedom; blank for "
               "one frame", ucd="stat.fit.chi2"),
        Column("p", "chance of an offset or a scatter as large, both tests counted", ucd="stat.probability"),
        Column("n_frames", "bright frames with a centroid", dtype="int64", ucd="meta.number;obs"),
    )  # fmt: skip
    min_snr: float = setting(5.0, "least flux over error of a frame whose centroid counts", unit="sigma", minimum=3)
    max_frames: int = setting(30, "at most so many frames, those of highest flux over error", minimum=1)
    floor: float = setting(0.05, "systematic error of a centroid, and of the frames' mean", unit="FWHM", minimum=0)
    target_err: float = setting(0.0, "1-sigma error of the target positions, per axis", unit="arcsec", minimum=0)
    half_width: float = setting(2.5, "half width of the cut-outs", unit="FWHM", minimum=1.5)
    level: float = setting(1e-4, "the check fails below this chance", minimum=0, maximum=1)

    def check(self, candidate: Candidate) -> Finding:
        """The finding for one candidate."""
        bright = self._bright_frames(candidate)
        rows = []
        for cutout in candidate.cutouts(np.array(list(bright), dtype=np.int64), self.half_width) if bright else ():
            snr, signed = bright[cutout.frame]
            shift = centroid(cutout, signed=signed)
            if shift is not None:
                fwhm = cutout.fwhm * abs(float(np.linalg.det(cutout.to_sky))) ** 0.5
                rows.append((*(cutout.to_sky @ shift), centroid_error(fwhm, snr), fwhm))
        if not rows:
            values = {"offset": float("nan"), "chi2_scatter": float("nan"), "p": float("nan"), "n_frames": 0}
            return Finding("uninformative", f"no bright frame of {self.min_snr:g} sigma has a centroid", values)
        east, north, error, fwhm = np.array(rows).T
        known_to = math.hypot(self.target_err, candidate.place_err)
        return self._judge(np.stack((east, north), axis=1), error, fwhm, known_to)

    def _bright_frames(self, candidate: Candidate) -> dict[int, tuple[float, bool]]:
        """Signal to noise, and whether it may be negative, of each bright frame that carries a position, best first."""
        found = []
        for curve, bright in zip(candidate.curves, candidate.bright, strict=True):
            snr = curve.flux / curve.flux_err
            snr = np.abs(snr) if curve.channel.signed else snr
            good = bright & (snr >= self.min_snr)
            signed = curve.channel.signed
            found += [(-float(s), int(f), signed) for s, f in zip(snr[good], curve.frame[good], strict=True)]
        return {frame: (-negative, signed) for negative, frame, signed in sorted(found)[: self.max_frames]}

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
        both = -math.expm1(len(p) * math.log1p(-min(*p, 1 - 1e-16)))
        values = {"offset": distance, "chi2_scatter": scatter, "p": both, "n_frames": n}
        return Finding("fail" if both < self.level else "pass", f"{evidence} (p = {both:.2g})", values)


def centroid(cutout: Cutout, *, signed: bool = False) -> Array | None:
    """Offset (x, y) in pixels of the source from the position; None where no source fits within one FWHM.

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
    return np.array([x0, y0]) if result.success and amplitude > 0 and moved <= reach else None


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
    return [Position]
