"""A beam-shaped source added to the pixels of a frame, measured as any position: the proof that adding to light curves is fair.

In memory; no file is written. An image that was deconvolved is only touched afterwards: what deconvolution would have made
of the source is not known here.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from hindlight.headers import fold_unit
from hindlight.lightcurve import FloatArray
from hindlight.opening import FrameToMeasure, OpenFrame, open_frame
from hindlight.photometry import PER_BEAM, measure_opened
from hindlight.pixels import Lattice, Pixels, read_plane
from hindlight.plugin import BeamShape, Estimator, Stamps
from hindlight.settings import Settings

REACH_FWHM = 4.0  # a Gaussian is 2e-19 of its peak there
PLANTED_SNR = 10.0
LOG16 = 4.0 * math.log(2.0)


@dataclass(frozen=True)
class Proof:
    """What one source added to pixels shows, differences in units of the flux error.

    difference
        What the flux rose by in the frame as it is stored, less what it rises by in a light curve.
    beyond_rounding
        The same, had the source itself been rounded to the steps that the frame is stored in.
    linear
        Flux of stamp and source together less those of each, in floating-point numbers.
    counted
        The fraction of the source that the estimator counts.
    """

    difference: float
    beyond_rounding: float
    linear: float
    counted: float


def plant(
    frame: FrameToMeasure, ra: FloatArray, dec: FloatArray, estimator: Estimator, settings: Settings,
    anchors: tuple[FloatArray, FloatArray], seed: int,
) -> Proof | None:  # fmt: skip
    """Add a source of ten times the error at one ICRS position (degrees, shape (1,)); None where that has no flux.

    `anchors` as in `photometry.measure_frame`, which says what is raised. Where the detector's gain is known the source
    has photon noise, drawn from `seed`.
    """
    opened = open_frame(frame, settings)
    opened = replace(opened, unpacked=read_plane(opened.place, opened.unpacked_limit))
    before = measure_opened(opened, frame, ra, dec, estimator, settings, anchors)
    if len(before["flux"]) == 0 or not np.isfinite(before["flux"][0]):
        return None
    one = {name: float(values[0]) for name, values in before.items()}
    beam = opened.beam if frame.beam_major > 0 else BeamShape(one["fwhm"], one["fwhm"], 0.0)
    area = math.pi * beam.major * beam.minor / LOG16
    per_beam = fold_unit(frame.unit).endswith(PER_BEAM)
    total = PLANTED_SNR * one["flux_err"] * one["gain"]  # as the pixels hold it
    light = light_of(beam, one["x"], one["y"], total if per_beam or not estimator.sums else total / area)
    own_scale = one["gain"] * (area if estimator.sums and per_beam else 1.0)
    counted = reading(estimator, light, one, beam) / own_scale * one["gain"] / total
    if math.isfinite(frame.electrons_per_unit):
        photons = np.random.default_rng(seed).poisson(light * frame.electrons_per_unit)
        light = photons / frame.electrons_per_unit
    assert opened.unpacked is not None
    changed, rounded = _with(opened.unpacked, light, one)
    after = measure_opened(replace(opened, unpacked=changed), frame, ra, dec, estimator, settings, anchors)
    added, stored = (reading(estimator, square, one, beam) / own_scale for square in (light, rounded))
    rise = float(after["flux"][0]) - one["flux"]
    stamp = _stamp(opened, one, light.shape[0] // 2)
    both = reading(estimator, stamp + light, one, beam) - reading(estimator, stamp, one, beam)
    error = one["flux_err"]
    return Proof(
        (rise - added) / error,
        (rise - stored) / error,
        (both / own_scale - added) / error,
        counted,
    )


def light_of(beam: BeamShape, x: float, y: float, peak: float) -> FloatArray:
    """A Gaussian at (x, y), on a square of pixels around the nearest one."""
    half = math.ceil(REACH_FWHM * max(beam.major, beam.minor))
    row, column = np.mgrid[-half : half + 1, -half : half + 1]
    dx, dy = column - (x - math.floor(x + 0.5)), row - (y - math.floor(y + 0.5))
    c, s = math.cos(beam.angle), math.sin(beam.angle)
    along, across = c * dx + s * dy, c * dy - s * dx
    return np.asarray(peak * np.exp(-LOG16 * ((along / beam.major) ** 2 + (across / beam.minor) ** 2)))


def _with(pixels: Pixels, light: FloatArray, one: dict[str, float]) -> tuple[Pixels, FloatArray]:
    """An image with light added around a position as it would be stored, and the light as rounded to its steps."""
    stored, rounded = pixels.stored.copy(), light.copy()
    half = light.shape[0] // 2
    left, top = math.floor(one["x"] + 0.5) - half, math.floor(one["y"] + 0.5) - half
    height, width = stored.shape
    rows = slice(max(0, top), min(height, top + len(light)))
    columns = slice(max(0, left), min(width, left + len(light)))
    here = (slice(rows.start - top, rows.stop - top), slice(columns.start - left, columns.stop - left))
    raw = stored[rows, columns]
    steps = light[here] / pixels.scale
    if pixels.quantum > 0:
        steps = np.rint(steps)
        rounded[here] = steps * pixels.scale
    stored[rows, columns] = _stored(pixels, raw, raw.astype(float) + steps)
    return replace(pixels, stored=stored), rounded


def _stored(pixels: Pixels, raw: NDArray[Any], numbers: FloatArray) -> NDArray[Any]:
    """Numbers as the image's type holds them, clipped to its range; blanks stay what they were."""
    if raw.dtype.kind in "iu":
        limits = np.iinfo(raw.dtype)
        numbers = np.clip(numbers, limits.min, limits.max)
    numbers = numbers if pixels.blank is None else np.where(raw == pixels.blank, raw, numbers)
    return numbers.astype(raw.dtype)


def _stamp(opened: OpenFrame, one: dict[str, float], half: int) -> FloatArray:
    """The frame's own pixels around a position, local background taken off; zero where there are none."""
    ix, iy = (np.array([math.floor(one[axis] + 0.5)]) for axis in "xy")
    stamp = opened.pixels().stamps(ix, iy, Lattice.square(half))[0].astype(float) - one["background"]
    return np.where(np.isfinite(stamp), stamp, 0.0)


def reading(estimator: Estimator, square: FloatArray, one: dict[str, float], beam: BeamShape) -> float:
    """What the estimator makes of a square of pixels around a position, with nothing else."""
    half, need = square.shape[0] // 2, max(1, math.ceil(estimator.radius(beam)))
    pixels = np.pad(square, max(0, need - half))
    middle = pixels.shape[0] // 2
    pixels = pixels[middle - need : middle + need + 1, middle - need : middle + need + 1]
    offset = [np.array([one[axis] - math.floor(one[axis] + 0.5)]) for axis in "xy"]
    noise = np.array([one["rms"]])
    flux, _ = estimator.measure(Stamps(pixels[None], offset[0], offset[1], noise, np.zeros(1), beam))
    return float(flux[0])
