"""Forced photometry: what is at given positions, or given pixels, of a frame.

The frame's shift and the width of its sources come from known ones, where there are some; fluxes are measured by
`fluxes`. Times, channels and light curves are the business of others.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from hindlight import growth
from hindlight.background import annulus_of
from hindlight.detection import detect_bright
from hindlight.errors import UsageError
from hindlight.facts import NAN
from hindlight.fluxes import Columns, Noise, half_width_of, measure, nearest, no_fluxes, reach
from hindlight.headers import fold_unit
from hindlight.lightcurve import FloatArray, IntArray
from hindlight.opening import FrameToMeasure, OpenFrame, open_frame
from hindlight.pixels import Lattice, Pixels, Windows
from hindlight.plugin import BeamShape, Estimator
from hindlight.pointing import FEWEST, Centroids, Pointing, centroids, pointing, stamp_half
from hindlight.schema import Flag
from hindlight.settings import Settings
from hindlight.systems import unit_vectors

WIDTH_STEPS = 6  # at most, from the assumed width to that of the sources
WIDTH_STEP = (0.5, 2.0)  # factors
WIDTH_CLOSE = 0.02
PER_BEAM = "/beam"


def choose_estimator(
    estimators: Sequence[Estimator], unit: str, setting: str = "auto", beam_known: bool = True
) -> Estimator:
    """The estimator that is set by name, or for 'auto' the one that claims the unit.

    One that needs the beam is passed over where the beam is not known; a unit that nobody claims goes to the estimator
    that claims no unit (''). Raises `UsageError` for a name that no estimator has, or where there is none at all.
    """
    names = sorted(estimator.name for estimator in estimators)
    if setting != "auto":
        for estimator in estimators:
            if estimator.name == setting:
                return estimator
        raise UsageError(f"[photometry] estimator: no estimator {setting!r}; there are auto, {', '.join(names)}")
    ordered = sorted(estimators, key=lambda estimator: estimator.name)
    for wanted in (fold_unit(unit), ""):
        for estimator in ordered:
            if wanted in estimator.units and (beam_known or not estimator.needs_beam):
                return estimator
    if not ordered:
        raise UsageError("no estimator plugin is installed; fluxes cannot be measured")
    return ordered[0]


def measure_frame(
    frame: FrameToMeasure, ra: FloatArray, dec: FloatArray, estimator: Estimator, settings: Settings,
    anchors: tuple[FloatArray, FloatArray] | None = None,
) -> Columns:  # fmt: skip
    """Measure ICRS positions (degrees, shape (n,)) in a frame.

    `anchors` are ICRS positions of known sources: where they are in the image tells how far it is off its header, and
    the positions are measured that far away from where the header puts them. Where the header gives no width the
    anchors' own is used, if they tell it. Returns columns of shape (m,) for the m positions on the image: `index` among
    the n, `x`, `y` (0-based pixels), `shift_x`, `shift_y` (at the middle of the image, NaN where the anchors do not
    tell), `fwhm` (pixels), `gain` of the primary beam, `held` (the fraction of a point source's light that is counted, NaN
    where the anchors do not tell), and those of `measure`, flux and error divided by the gain.
    Raises `SetAsideError`, `OSError`, or `ValueError` from an unusable projection.
    """
    return measure_opened(open_frame(frame, settings), frame, ra, dec, estimator, settings, anchors)


def measure_opened(
    opened: OpenFrame, frame: FrameToMeasure, ra: FloatArray, dec: FloatArray, estimator: Estimator, settings: Settings,
    anchors: tuple[FloatArray, FloatArray] | None = None,
) -> Columns:  # fmt: skip
    """`measure_frame` for a frame that has been opened."""
    if anchors is not None and len(anchors[0]):
        opened = _with_own_width(frame, opened.unpacked_once(), *anchors)
    x, y = opened.sky.icrs_to_pixel(ra, dec, frame.mjd)
    shift = _shift(frame, opened, anchors) if anchors is not None else None
    if shift is not None:
        x, y = shift.moved(x, y)
    index = _inside(opened, x, y)
    x, y = x[index], y[index]
    offset = (NAN, NAN) if shift is None else shift.offset.tolist()
    place = {"index": index, "x": x, "y": y, "fwhm": np.full(len(index), opened.beam.fwhm)}
    place |= {f"shift_{axis}": np.full(len(index), value) for axis, value in zip("xy", offset, strict=True)}
    if len(index) == 0:
        return {**place, "gain": np.empty(0), "held": np.empty(0), **no_fluxes()}
    found = _measured(frame, opened, x, y, estimator, settings)
    held = _held(frame, opened, anchors, shift, estimator, settings) if anchors is not None else NAN
    found["held"] = np.full(len(index), held)
    _correct(found, opened, frame, x, y, settings.photometry.primary_beam_floor)
    return {**place, **found}


def _measured(
    frame: FrameToMeasure, opened: OpenFrame, x: FloatArray, y: FloatArray, estimator: Estimator, settings: Settings
) -> Columns:
    """The columns of `measure` at pixels of a frame, in flux per point where the unit is per beam."""
    lattice = annulus_of(opened.beam, settings.photometry).lattice
    half = max(lattice.rows, lattice.columns, half_width_of(estimator, opened.beam))
    windows = Windows(nearest(x), nearest(y), half)
    noise = Noise(opened.companion("rms", windows), opened.companion("weight", windows))
    found = measure(
        opened.pixels(windows), x, y, opened.beam, estimator, settings.photometry, frame.electrons_per_unit,
        frame.saturation, noise,
    )  # fmt: skip
    if estimator.sums and fold_unit(frame.unit).endswith(PER_BEAM):
        # Summed pixels of a map per beam count each point of it once a beam: the flux is the sum over the beam's area.
        area = math.pi * opened.beam.major * opened.beam.minor / (4.0 * math.log(2.0))
        found["flux"] /= area
        found["flux_err"] /= area
    return found


def measure_pixels(
    frame: FrameToMeasure, x: FloatArray, y: FloatArray, estimator: Estimator, settings: Settings, fwhm: float = NAN
) -> Columns:
    """Measure 0-based pixels, shape (n,), of a frame; `fwhm` is its beam's width in pixels if the header gives none.

    Returns `x`, `y`, `gain` and the columns of `measure`, flux and error divided by the gain; pixels off the image have
    neither flux nor error. Raises as `measure_frame` does.
    """
    opened = open_frame(frame, settings)
    if not frame.beam_major > 0.0 and fwhm > 0.0:
        opened = replace(opened, beam=BeamShape(fwhm, fwhm, 0.0))
    inside = _inside(opened, x, y)
    found = _measured(frame, opened, x[inside], y[inside], estimator, settings) if len(inside) else no_fluxes()
    _correct(found, opened, frame, x[inside], y[inside], settings.photometry.primary_beam_floor)
    columns: Columns = {"x": x, "y": y}
    for name, values in found.items():
        columns[name] = np.full(len(x), int(Flag.EDGE) if name == "flags" else NAN).astype(values.dtype)
        columns[name][inside] = values
    return columns


def _inside(opened: OpenFrame, x: FloatArray, y: FloatArray) -> IntArray:
    """Which of some pixel coordinates lie on the image."""
    width, height = opened.place.width, opened.place.height
    return np.flatnonzero((x >= -0.5) & (y >= -0.5) & (x < width - 0.5) & (y < height - 0.5))


def _centroids(
    frame: FrameToMeasure, opened: OpenFrame, ra: FloatArray, dec: FloatArray
) -> tuple[IntArray, FloatArray, FloatArray, Centroids]:
    """Centroids of the sources on the image: which they are, where the header puts them (pixels), and their centroids."""
    x, y = opened.sky.icrs_to_pixel(ra, dec, frame.mjd)
    index = _inside(opened, x, y)
    x, y = x[index], y[index]
    windows = Windows(nearest(x), nearest(y), stamp_half(opened.beam))
    return index, x, y, centroids(opened.pixels(windows), x, y, opened.beam)


def _with_own_width(frame: FrameToMeasure, opened: OpenFrame, ra: FloatArray, dec: FloatArray) -> OpenFrame:
    """The frame with the width of the sources at these places as its beam, where its header gives none.

    It is the median width, found from the assumed one by steps; where fewer than three stand out, the assumed one stays.
    """
    if frame.beam_major > 0.0:
        return opened
    for _ in range(WIDTH_STEPS):
        width = _centroids(frame, opened, ra, dec)[3].width
        if np.isfinite(width).sum() < FEWEST:
            break
        factor = float(np.clip(np.nanmedian(width), *WIDTH_STEP))
        fwhm = max(1.0, factor * opened.beam.fwhm)
        opened = replace(opened, beam=BeamShape(fwhm, fwhm, 0.0))
        if abs(factor - 1.0) < WIDTH_CLOSE:
            break
    return opened


def _shift(frame: FrameToMeasure, opened: OpenFrame, anchors: tuple[FloatArray, FloatArray]) -> Pointing | None:
    """How far the image is off its header, None where the anchors do not tell."""
    if len(anchors[0]) < FEWEST:
        return None
    index, x, y, found = _centroids(frame, opened, *anchors)
    if len(index) < FEWEST:
        return None
    return pointing(found, x, y, (opened.place.height, opened.place.width), opened.beam)


def _held(
    frame: FrameToMeasure, opened: OpenFrame, anchors: tuple[FloatArray, FloatArray], shift: Pointing | None,
    estimator: Estimator, settings: Settings,
) -> float:  # fmt: skip
    """The fraction of a point source's light that an estimator of sums counts, NaN where the anchors do not tell."""
    if not estimator.sums or len(anchors[0]) < FEWEST:
        return NAN
    x, y = opened.sky.icrs_to_pixel(anchors[0], anchors[1], frame.mjd)
    if shift is not None:
        x, y = shift.moved(x, y)
    brightest = _inside(opened, x, y)[: growth.WANTED]
    x, y = x[brightest], y[brightest]
    whole = growth.AllLight(settings.photometry.annulus_inner)
    lattice = annulus_of(opened.beam, settings.photometry).lattice
    half = max(lattice.rows, lattice.columns, half_width_of(whole, opened.beam))
    pixels = opened.pixels(Windows(nearest(x), nearest(y), half))
    counted, light = (
        measure(pixels, x, y, opened.beam, by, settings.photometry, saturation=frame.saturation)
        for by in (estimator, whole)
    )
    return growth.fraction_held(counted, light)


def locate(
    frame: FrameToMeasure, ra: FloatArray, dec: FloatArray, settings: Settings
) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray, NDArray[np.bool_]]:
    """Where sources near ICRS positions (degrees, shape (n,)) are in a frame: ICRS degrees, S/N, width over the beam's,

    and whether its top is flat. NaN for a source that does not stand out, is saturated or not on the image. Raises as
    `measure_frame` does.
    """
    opened = _with_own_width(frame, open_frame(frame, settings).unpacked_once(), ra, dec)
    index, x, y, found = _centroids(frame, opened, ra, dec)
    there = np.full((4, len(ra)), np.nan)
    there[0, index], there[1, index] = opened.sky.pixel_to_icrs(x + found.dx, y + found.dy, frame.mjd)
    there[2, index], there[3, index] = found.snr, found.width
    there[:, index[found.highest >= frame.saturation]] = np.nan
    there[:2, ~np.isfinite(there[2])] = np.nan
    flat = np.zeros(len(ra), bool)
    flat[index] = found.flat & np.isfinite(there[2, index])
    return there[0], there[1], there[2], there[3], flat


def _correct(
    found: Columns, opened: OpenFrame, frame: FrameToMeasure, x: FloatArray, y: FloatArray, floor: float
) -> None:
    """Apply the primary beam's gain to flux and error, and add it to the columns; 1 where none is to be applied.

    Where it is below the floor or no number there is no flux.
    """
    found["gain"] = np.ones(len(x))
    if frame.primary_beam != "uncorrected":
        return
    gain = found["gain"] = _gain(opened, frame, x, y)
    low = ~((gain >= floor) & (gain > 0.0))
    found["flags"][low] |= Flag.LOW_GAIN
    gain = np.where(low, np.nan, gain)
    found["flux"] /= gain
    found["flux_err"] /= gain


def _gain(opened: OpenFrame, frame: FrameToMeasure, x: FloatArray, y: FloatArray) -> FloatArray:
    """The primary beam's gain at pixels of a frame, 1 where it is not known."""
    gains = opened.companion("primary_beam", Windows(nearest(x), nearest(y), 1))
    if gains is not None:
        return _between_pixels(gains, x, y)
    if not frame.primary_beam_fwhm_deg > 0:
        return np.ones(len(x))
    column, row = opened.sky.reference
    sky = opened.sky.pixel_to_icrs(np.append(x, column), np.append(y, row), frame.mjd)
    *places, axis = unit_vectors(*sky)
    chord = np.linalg.norm(np.array(places) - axis, axis=1)
    distance = np.degrees(2.0 * np.arcsin(np.minimum(1.0, chord / 2.0)))
    return np.asarray(2.0 ** (-4.0 * (distance / frame.primary_beam_fwhm_deg) ** 2))


def _between_pixels(pixels: Pixels, x: FloatArray, y: FloatArray) -> FloatArray:
    """Values at pixel coordinates, bilinear; of the nearest pixel where one of the four around is missing."""
    ix, iy = nearest(x), nearest(y)
    stamps = pixels.stamps(ix, iy, Lattice.square(1)).astype(float)
    dx, dy = x - ix, y - iy
    across = np.where(dx < 0, 0, 2)
    down = np.where(dy < 0, 0, 2)
    every, u, v = np.arange(len(x)), np.abs(dx), np.abs(dy)
    middle = stamps[:, 1, 1]
    value = (1 - v) * ((1 - u) * middle + u * stamps[every, 1, across])
    value += v * ((1 - u) * stamps[every, down, 1] + u * stamps[every, down, across])
    return np.asarray(np.where(np.isfinite(value), value, middle))


def bright_sources(
    frame: FrameToMeasure, snr: float, settings: Settings
) -> tuple[FloatArray, FloatArray, FloatArray, float]:
    """Sources brighter than `snr` in a whole frame: ICRS degrees and S/N, shape (n,), and the beam's width in arcsec.

    Raises as `measure_frame` does.
    """
    opened = open_frame(frame, settings)
    x, y, found = detect_bright(opened.pixels().whole(), opened.beam, snr)
    ra, dec = opened.sky.pixel_to_icrs(x, y, frame.mjd)
    known = np.isfinite(ra)
    return ra[known], dec[known], found[known], opened.beam.major * opened.sky.pixel_scale_arcsec


def bright_pixels(frame: FrameToMeasure, snr: float, settings: Settings) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Sources brighter than `snr` in a whole frame: 0-based x, y of whole pixels and S/N, shape (n,).

    Raises as `measure_frame` does.
    """
    opened = open_frame(frame, settings)
    return detect_bright(opened.pixels().whole(), opened.beam, snr)


def to_sky(frame: FrameToMeasure, x: FloatArray, y: FloatArray, settings: Settings) -> tuple[FloatArray, FloatArray]:
    """ICRS degrees of 0-based pixels of a frame by its header, shape (n,). Raises as `measure_frame` does."""
    return open_frame(frame, settings).sky.pixel_to_icrs(x, y, frame.mjd)


def to_pixels(
    frame: FrameToMeasure, ra: FloatArray, dec: FloatArray, settings: Settings
) -> tuple[FloatArray, FloatArray]:
    """0-based pixels of ICRS degrees in a frame by its header, shape (n,). Raises as `measure_frame` does."""
    return open_frame(frame, settings).sky.icrs_to_pixel(ra, dec, frame.mjd)


@dataclass(frozen=True, eq=False)
class FrameCutout:
    """Raw pixels around a position: shape (size, size), the position at (x, y) in them, 0-based.

    `to_sky` of shape (2, 2) turns a pixel offset into ICRS (east, north) arcsec; `fwhm` is the beam in pixels.
    """

    pixels: FloatArray
    x: float
    y: float
    to_sky: FloatArray
    fwhm: float


def cutout(frame: FrameToMeasure, x: float, y: float, half_width: float, settings: Settings) -> FrameCutout:
    """A square around 0-based pixel coordinates of a frame, reaching `half_width` beams to each side.

    NaN where blank or outside. Raises as `measure_frame` does.
    """
    opened = open_frame(frame, settings)
    half = reach(half_width * opened.beam.fwhm)
    ix, iy = nearest(np.array([x])), nearest(np.array([y]))
    stamp = opened.pixels(Windows(ix, iy, half)).stamps(ix, iy, Lattice.square(half))[0].astype(float)
    to_sky = opened.sky.jacobian_icrs(x, y, frame.mjd)
    return FrameCutout(stamp, x - float(ix[0]) + half, y - float(iy[0]) + half, to_sky, opened.beam.fwhm)
