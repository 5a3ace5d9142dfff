"""Is the light a point? Shapes of a candidate in its bright frames against the beam or seeing of each frame.

What spoils plates and detectors is seldom shaped like a star: dust, cosmic rays and hot pixels are narrower, scratches
and trails are longer.
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
    Cutout,
    Finding,
    LightCurve,
    added,
    added_part,
    hookimpl,
    quiet_cutouts,
    setting,
)

Array = NDArray[np.float64]
SIGMA_OF_FWHM = 0.42466090014400953  # 1 / sqrt(8 ln 2)
PER_BEAM = "/beam"
REACH = 1.5  # FWHM from the position within which pixels are fitted
MOST = 2.5  # natural logarithm of the widest, and the narrowest, shape over the beam
NUMBERS = 3  # that describe a shape
A_QUARTER = 4  # one bright frame of so many may be spoiled, by a bad column where one pointing puts the source
LEFT_OVER = 0.1  # by which a steady source as bright as the candidate changes a shape once it is taken off


@dataclass(frozen=True)
class PointLikeness(ConsistencyCheck):
    """Whether the bright frames show a point: a Gaussian with free widths and angle, against the frame's own width.

    A source that is round and wide does not count against it, since bright stars on plates are that. It fails only if the
    shapes are no points without the worst quarter of the frames either: a bad column in one of many pointings spoils the
    shape of a true source there. It says nothing
    where images are synthesised (a unit per beam: a source that was on for a part of the time is no point there), where
    the beam is narrower than `min_fwhm` pixels or only assumed, and below `min_snr`.
    """

    columns = (
        Column("width", "width over the beam's, geometric mean of both axes, median over the bright frames",
               ucd="phys.angSize;arith.ratio"),
        Column("axis_ratio", "longer over shorter axis of the mean shape of the bright frames",
               ucd="phys.angSize;arith.ratio"),
        Column("chi2", "chi-square of the shapes about that of the beam, 3 degrees of freedom per frame; what is wide "
               "and round counts as the beam", ucd="stat.fit.chi2"),
        Column("p", "chance of such shapes", ucd="stat.probability"),
        Column("n_frames", "bright frames with a shape", dtype="int64", ucd="meta.number;obs"),
    )  # fmt: skip
    min_snr: float = setting(8.0, "least flux over error of a frame whose shape counts", unit="sigma", minimum=5)
    min_fwhm: float = setting(2.0, "least width of beam or seeing that shows a shape", unit="pixel", minimum=1.5)
    max_frames: int = setting(30, "at most so many frames, those of highest flux over error", minimum=1)
    floor: float = setting(
        0.15, "by how much beams truly differ from round ones of the stated width, 1 sigma", minimum=0, maximum=1
    )
    half_width: float = setting(2.5, "half width of the cut-outs", unit="FWHM", minimum=1.5)
    level: float = setting(1e-4, "the check fails below this chance", minimum=0, maximum=1)

    def check(self, candidate: Candidate) -> Finding:
        """The finding for one candidate."""
        usable = [c for c in candidate.curves if not c.channel.signed and not c.channel.unit.endswith(PER_BEAM)]
        if not usable:
            return _nothing(
                "every channel is synthesised: a source that was on for a part of an image is no point there"
            )
        bright = self._bright_frames(candidate)
        quiet = {at: quiet_cutouts(candidate, at, self.half_width) for at in {at for _, at, _ in bright.values()}}
        shapes, errors, blurred = [], [], 0
        for cutout in candidate.cutouts(np.array(list(bright), dtype=np.int64), self.half_width) if bright else ():
            if not cutout.fwhm_known or cutout.fwhm < self.min_fwhm:
                blurred += 1
                continue
            snr, at, part = bright[cutout.frame]
            light, crowd = added(cutout, quiet[at])
            if crowd > 0.0:
                snr *= part
            shape = fitted_shape(light) if snr >= self.min_snr else None
            if shape is not None:
                shapes.append(shape)
                errors.append(math.hypot(shape_error(snr), LEFT_OVER * crowd))
        if not shapes:
            why = f", {blurred} with a beam that is only assumed or below {self.min_fwhm:g} pixels" if blurred else ""
            return _nothing(f"{len(bright)} bright frames of {self.min_snr:g} sigma{why}: none shows a shape")
        return self._judge(np.array(shapes), np.array(errors))

    def _bright_frames(self, candidate: Candidate) -> dict[int, tuple[float, int, float]]:
        """Of each bright frame that may show a shape signal to noise, number of its curve and added part, best first."""
        found = []
        for at, (curve, bright) in enumerate(zip(candidate.curves, candidate.bright, strict=True)):
            if curve.channel.signed or curve.channel.unit.endswith(PER_BEAM):
                continue
            snr = _raw_snr(curve)
            part = added_part(curve)
            good = np.flatnonzero(bright & (snr >= self.min_snr))
            found += [(-float(snr[row]), int(curve.frame[row]), at, float(part[row])) for row in good]
        return {frame: (-negative, at, part) for negative, frame, at, part in sorted(found)[: self.max_frames]}

    def _judge(self, shapes: Array, errors: Array) -> Finding:
        """The finding from shapes of shape (n, 3), see `fitted_shape`, and their errors of shape (n,)."""
        counted = shapes.copy()
        counted[:, 0] = np.minimum(shapes[:, 0], 0.0)  # what is wide and round is no flaw
        each = np.sort((counted**2 / (errors**2 + self.floor**2)[:, None]).sum(axis=1))
        chi2, worst = float(each.sum()), len(each) // A_QUARTER
        p = float(special.chdtrc(NUMBERS * len(each), chi2))
        p_rest = float(special.chdtrc(NUMBERS * (len(each) - worst), float(each[: len(each) - worst].sum())))
        width = math.exp(float(np.median(shapes[:, 0])))
        mean = np.average(shapes[:, 1:], axis=0, weights=1 / (errors**2 + self.floor**2))
        ratio = math.exp(2 * math.hypot(*mean))
        frames = "1 bright frame" if len(shapes) == 1 else f"{len(shapes)} bright frames"
        evidence = (
            f"in {frames} the source is {width:.2f} times as wide as the beam and its axes are as {ratio:.2f} to 1: "
            f"chi-square {chi2:.1f} for {NUMBERS * len(shapes)} degrees of freedom (p = {p:.2g})"
        )
        fails = p < self.level and p_rest < self.level
        if p < self.level and not fails:
            evidence += f"; without the worst {worst} frames p = {p_rest:.2g}, and these are taken to be spoiled"
        values = {"width": width, "axis_ratio": ratio, "chi2": chi2, "p": p, "n_frames": len(shapes)}
        return Finding("fail" if fails else "pass", evidence, values)


def _nothing(evidence: str) -> Finding:
    nan = float("nan")
    return Finding("uninformative", evidence, {"width": nan, "axis_ratio": nan, "chi2": nan, "p": nan, "n_frames": 0})


def _raw_snr(curve: LightCurve) -> Array:
    """Signal to noise by the pixels alone: the error of the flux scale does not blur a shape."""
    return np.asarray(curve.raw_flux / curve.raw_flux_err)


def fitted_shape(cutout: Cutout) -> Array | None:
    """Shape (u, e1, e2) of the source at the position; None where none can be fitted.

    The covariance of the fitted Gaussian is that of the beam times exp(2 [[u + e1, e2], [e2, u - e1]]): exp(u) is the
    width over the beam's, exp(2 hypot(e1, e2)) the longer over the shorter axis.
    """
    size_y, size_x = cutout.pixels.shape
    x, y = np.meshgrid(np.arange(size_x) - cutout.x, np.arange(size_y) - cutout.y)
    data = cutout.pixels - cutout.background
    used = np.isfinite(data) & (np.hypot(x, y) <= REACH * cutout.fwhm)
    near = used & (np.hypot(x, y) <= cutout.fwhm)
    if used.sum() < 4 * (NUMBERS + 3) or not near.any():
        return None
    top = np.unravel_index(np.argmax(np.where(near, data, -np.inf)), data.shape)
    height = float(data[top])
    if height <= 0:
        return None
    px, py, values = x[used], y[used], data[used] / height
    variance = (SIGMA_OF_FWHM * cutout.fwhm) ** 2

    def residual(parameters: Array) -> Array:
        amplitude, x0, y0, u, e1, e2 = parameters
        a, b, c = _inverse(u, e1, e2)
        dx, dy = px - x0, py - y0
        return np.asarray(amplitude * np.exp(-(a * dx**2 + 2 * b * dx * dy + c * dy**2) / (2 * variance)) - values)

    limits = np.array([1e3, cutout.fwhm, cutout.fwhm, MOST, MOST, MOST])
    start = np.array([1.0, np.clip(x[top], -0.9, 0.9), np.clip(y[top], -0.9, 0.9), 0.0, 0.0, 0.0])
    result = optimize.least_squares(
        residual, start, bounds=(np.concatenate(([0.0], -limits[1:])), limits), max_nfev=200
    )
    return np.asarray(result.x[3:]) if result.success and result.x[0] > 0 else None


def _inverse(u: float, e1: float, e2: float) -> tuple[float, float, float]:
    """The elements xx, xy, yy of exp(-2 [[u + e1, e2], [e2, u - e1]])."""
    e = math.hypot(e1, e2)
    common = math.exp(-2 * u)
    along = common * math.cosh(2 * e)
    across = common * (math.sinh(2 * e) / e if e > 0 else 2.0)
    return along - across * e1, -across * e2, along + across * e1


def shape_error(snr: float) -> float:
    """1-sigma error of each number of a shape: 1 / snr.

    In white noise each axis has a relative error of sqrt(2) / snr, with the signal to noise of an optimal filter (Condon
    1997, PASP 109, 166, eq. 21); u, e1 and e2 are half of the sum or difference of two such logarithms.
    """
    return 1.0 / snr


@hookimpl
def register_consistency_checks() -> list[type[ConsistencyCheck]]:
    """What this module offers."""
    return [PointLikeness]
