"""Forced photometry: stamps to fluxes, at given pixels of an image or at given positions of a frame.

Local background and noise come from `background`, the flux from an estimator plugin; flags say what is wrong with a
measurement. Times, channels and light curves are the business of others.
"""

from __future__ import annotations

import math
import os
from collections.abc import Iterator, Mapping, Sequence
from contextlib import contextmanager
from dataclasses import dataclass, field, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from hindlight import growth
from hindlight.archive import MEGABYTE
from hindlight.background import (
    TOLERANCE,
    Annulus,
    Background,
    annulus_of,
    keep_freed_memory,
    local_background,
    median_and_mad,
)
from hindlight.detection import detect_bright
from hindlight.errors import UsageError
from hindlight.facts import NAN
from hindlight.headers import SetAsideError, fold_unit
from hindlight.lightcurve import FloatArray, IntArray
from hindlight.pixels import (
    Floats,
    ImagePlace,
    Lattice,
    Mask,
    Pixels,
    PlanePlace,
    Windows,
    find_image,
    images_of,
    read_plane,
)
from hindlight.plugin import BeamShape, Estimator, Stamps
from hindlight.pointing import FEWEST, Centroids, Pointing, centroids, pointing, stamp_half
from hindlight.schema import Flag
from hindlight.settings import Photometry, Settings
from hindlight.sky import Projection, beam_shape, projection
from hindlight.systems import unit_vectors

AT_A_TIME = 128  # positions: their stamps stay in the processor's cache
WIDTH_STEPS = 6  # at most, from the assumed width to that of the sources
WIDTH_STEP = (0.5, 2.0)  # factors
WIDTH_CLOSE = 0.02
NEIGHBOUR_SNR = 5.0  # a neighbour must stand this far above the background to be flagged

PER_BEAM = "/beam"

Columns = dict[str, NDArray[Any]]


@dataclass(frozen=True)
class FrameToMeasure:
    """What photometry needs to know of a frame.

    Beam in arcsec and degrees east of north, NaN where unknown; `mjd` NaN where there is no date; `electrons_per_unit`
    and `saturation` in the unit of the pixels, NaN where unknown. `companions` are files by kind, see
    `settings.Companions`; one with gains, or else a Gaussian of `primary_beam_fwhm_deg` about the reference pixel, is
    applied where `primary_beam` is "uncorrected". With `negative` stars are darker than the sky: pixels, and with them
    `saturation`, are meant with the other sign.
    """

    path: str
    hdu: int = 0
    plane: int = 0
    mjd: float = NAN
    beam_major: float = NAN
    beam_minor: float = NAN
    beam_angle: float = NAN
    unit: str = ""
    electrons_per_unit: float = NAN
    saturation: float = NAN
    primary_beam: str = "unknown"
    primary_beam_fwhm_deg: float = NAN
    negative: bool = False
    companions: Mapping[str, str] = field(default_factory=dict)


@dataclass(frozen=True, eq=False)
class OpenFrame:
    """A frame whose header has been read: where its pixels and those of its companions are, its projection, its beam in

    pixels. Where it is a `negative` its pixels have the other sign, so that stars are brighter than the sky.
    """

    place: PlanePlace
    sky: Projection
    beam: BeamShape
    unpacked_limit: int
    companions: Mapping[str, PlanePlace] = field(default_factory=dict)
    negative: bool = False
    unpacked: Pixels | None = None

    def unpacked_once(self) -> OpenFrame:
        """The same with its pixels in memory if they are packed or compressed: for a frame that is read several times."""
        if self.place.image.packed or self.place.image.hdu.compressed:
            return replace(self, unpacked=read_plane(self.place, self.unpacked_limit))
        return self

    def pixels(self, windows: Windows | None = None) -> Pixels:
        """Its pixels, blank where a companion says so; see `pixels.read_plane`."""
        own = self.unpacked or read_plane(self.place, self.unpacked_limit, windows)
        if self.negative:
            own = replace(own, scale=-own.scale, zero=-own.zero)
        read = {kind: self.companion(kind, windows) for kind in ("mask", "weight")}
        masks = tuple(Mask(found, kind == "weight") for kind, found in read.items() if found is not None)
        return replace(own, masks=masks) if masks else own

    def companion(self, kind: str, windows: Windows | None = None) -> Pixels | None:
        """The pixels of a companion, None where there is none."""
        place = self.companions.get(kind)
        if place is None:
            return None
        with _blamed_on(place.image.path, kind):
            return read_plane(place, self.unpacked_limit, windows)


@dataclass(frozen=True, eq=False)
class Noise:
    """Where the noise per pixel is taken from: a map of it, else that of the annulus scaled with the weights, if any.

    Weights are inverse variances up to a factor, which cancels.
    """

    rms: Pixels | None = None
    weight: Pixels | None = None

    def at(self, ix: IntArray, iy: IntArray, local: FloatArray, annulus: Annulus) -> FloatArray:
        """The noise at pixels (ix, iy), whose annulus has the noise `local`; NaN where it is no positive number."""
        here = Lattice.square(0)
        if self.rms is not None:
            rms = self.rms.stamps(ix, iy, here)[:, 0, 0].astype(float)
            return np.where((rms > 0) & np.isfinite(rms) & np.isfinite(local), rms, np.nan)
        if self.weight is None:
            return local
        around = self.weight.stamps(ix, iy, annulus.lattice).reshape(len(ix), -1)[:, annulus.index]
        around = np.where(around > 0, around, np.nan)  # other pixels are blank, and not in the local noise
        level, _, _ = median_and_mad(around)
        weight = self.weight.stamps(ix, iy, here)[:, 0, 0].astype(float)
        weight[~(weight > 0)] = np.nan
        return np.asarray(local * np.sqrt(level / weight))


OWN_NOISE = Noise()


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
        return {**place, "gain": np.empty(0), "held": np.empty(0), **_nothing()}
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
    half = max(lattice.rows, lattice.columns, _half_width(estimator, opened.beam))
    windows = Windows(_nearest(x), _nearest(y), half)
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
    found = _measured(frame, opened, x[inside], y[inside], estimator, settings) if len(inside) else _nothing()
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
    windows = Windows(_nearest(x), _nearest(y), stamp_half(opened.beam))
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
    half = max(lattice.rows, lattice.columns, _half_width(whole, opened.beam))
    pixels = opened.pixels(Windows(_nearest(x), _nearest(y), half))
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
    gains = opened.companion("primary_beam", Windows(_nearest(x), _nearest(y), 1))
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
    ix, iy = _nearest(x), _nearest(y)
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
    half = _reach(half_width * opened.beam.fwhm)
    ix, iy = _nearest(np.array([x])), _nearest(np.array([y]))
    stamp = opened.pixels(Windows(ix, iy, half)).stamps(ix, iy, Lattice.square(half))[0].astype(float)
    to_sky = opened.sky.jacobian_icrs(x, y, frame.mjd)
    return FrameCutout(stamp, x - float(ix[0]) + half, y - float(iy[0]) + half, to_sky, opened.beam.fwhm)


def open_frame(frame: FrameToMeasure, settings: Settings) -> OpenFrame:
    """Read a frame's header. Raises as `measure_frame` does."""
    limit = settings.inventory.unpacked_limit_mb * MEGABYTE
    image = find_image(frame.path, frame.hdu, limit)
    sky = projection(image.hdu.cards, frame.path)
    place = PlanePlace(image, sky.axes, frame.plane)
    companions = {kind: companion_place(place, path, kind, limit) for kind, path in frame.companions.items()}
    return OpenFrame(place, sky, _beam(frame, sky, settings.photometry), limit, companions, frame.negative)


def companion_place(image: PlanePlace, path: str, kind: str, unpacked_limit: int) -> PlanePlace:
    """Where the pixels of a companion are that belong to a plane of an image.

    They are in the HDU of the same number, or in the only image of the file; the companion has the same planes, or one
    for all of them. Raises `SetAsideError` where its shape is another, and as `find_image`.
    """
    with _blamed_on(path, kind):
        found = _companion_image(path, image.image.hdu.index, unpacked_limit)
    axes, size = found.hdu.axes, (image.width, image.height)
    if axes == image.image.hdu.axes:
        return PlanePlace(found, image.axes, image.index)
    flat = [(number, length) for number, length in enumerate(axes, 1) if length > 1]
    if tuple(length for _, length in flat) != size:
        shown, wanted = (" x ".join(map(str, lengths)) or "no" for lengths in (axes, size))
        name = os.path.basename(path)
        raise image.fault("bad_companion", f"its {kind} companion {name} has {shown} pixels, expected {wanted}")
    return PlanePlace(found, (flat[0][0], flat[1][0]))


def _companion_image(path: str, hdu: int, unpacked_limit: int) -> ImagePlace:
    images = images_of(path, unpacked_limit)
    same = [found for found in images if found.hdu.index == hdu]
    if not same and len(images) != 1:
        raise SetAsideError("bad_companion", f"it has {len(images)} images, none of them in HDU {hdu}", hdu)
    return (same or images)[0]


@contextmanager
def _blamed_on(path: str, kind: str) -> Iterator[None]:
    """What cannot be read here is the companion's fault."""
    try:
        yield
    except (SetAsideError, OSError) as error:
        detail = (error.strerror if isinstance(error, OSError) else None) or str(error)
        name = os.path.basename(path)
        raise SetAsideError("bad_companion", f"its {kind} companion {name} cannot be used: {detail}") from error


def _beam(frame: FrameToMeasure, sky: Projection, settings: Photometry) -> BeamShape:
    """The frame's beam in pixels; a round one of the assumed width where it is unknown."""
    if not frame.beam_major > 0.0:
        return BeamShape(settings.assumed_fwhm_pixels, settings.assumed_fwhm_pixels, 0.0)
    minor = frame.beam_minor if frame.beam_minor > 0.0 else frame.beam_major
    angle = frame.beam_angle if math.isfinite(frame.beam_angle) else 0.0
    return beam_shape(frame.beam_major, minor, angle, sky.reference_jacobian)


def measure(
    pixels: Pixels,
    x: FloatArray,
    y: FloatArray,
    beam: BeamShape,
    estimator: Estimator,
    settings: Photometry,
    electrons_per_unit: float = NAN,
    saturation: float = NAN,
    noise: Noise = OWN_NOISE,
) -> Columns:
    """Measure 0-based pixel coordinates, shape (n,), of an image.

    Returns `flux`, `flux_err`, `background` (per pixel), `rms` (per pixel) in the pixels' unit, and `flags` (bits of
    `schema.Flag`), each of shape (n,). Flux and error are NaN where pixels that carry weight are blank or outside, or
    where the annulus holds fewer than 20 pixels or no noise. `noise` may give noise other than that of the annulus.
    """
    if len(x) == 0:
        return _nothing()
    keep_freed_memory()

    def measured(x: FloatArray, y: FloatArray) -> Columns:
        return _measure_some(pixels, x, y, beam, estimator, settings, electrons_per_unit, saturation, noise)

    if len(x) <= AT_A_TIME:
        return measured(x, y)
    order = np.argsort(y, kind="stable")  # what lies together in the file is read together
    parts = [order[start : start + AT_A_TIME] for start in range(0, len(x), AT_A_TIME)]
    found = [measured(x[part], y[part]) for part in parts]
    back = np.argsort(order)
    return {name: np.concatenate([part[name] for part in found])[back] for name in found[0]}


def _measure_some(
    pixels: Pixels,
    x: FloatArray,
    y: FloatArray,
    beam: BeamShape,
    estimator: Estimator,
    settings: Photometry,
    electrons_per_unit: float,
    saturation: float,
    noise: Noise,
) -> Columns:
    """`measure` for as many positions as fit into the processor's cache together."""
    ix, iy = _nearest(x), _nearest(y)
    annulus = annulus_of(beam, settings)
    lattice = annulus.lattice
    wide = pixels.stamps(ix, iy, lattice)
    local = local_background(wide, annulus, pixels.quantum)
    beam_pixels = math.pi * beam.major * beam.minor / (4.0 * math.log(2.0)) / (lattice.down * lattice.across)
    raw = _small_stamps(pixels, ix, iy, _half_width(estimator, beam), wide, lattice)
    with np.errstate(invalid="ignore"):  # infinite pixels may make NaN, never a warning
        signal = raw - local.level[:, None, None]
    rms = noise.at(ix, iy, local.rms, annulus)
    background_err = local.error(rms, beam_pixels if estimator.correlated else 1.0)
    stamps = Stamps(signal, x - ix, y - iy, rms, background_err, beam, electrons_per_unit)
    flux, flux_err = _estimate(estimator, stamps)
    flags = np.where((2 * local.used < len(annulus.index)) | np.isnan(local.rms), int(Flag.THIN_BACKGROUND), 0)
    flags[_has_neighbour(local)] |= Flag.NEIGHBOUR
    if saturation == saturation:
        flags[_saturated(raw, saturation, estimator.radius(beam))] |= Flag.SATURATED
    _flag_gaps(flags, np.isnan(flux), pixels.shape, ix, iy, raw)
    bad = ~(np.isfinite(flux) & np.isfinite(flux_err))
    flux[bad] = flux_err[bad] = np.nan
    return {"flux": flux, "flux_err": flux_err, "background": local.level, "rms": rms, "flags": flags}


def _nothing() -> Columns:
    """The columns of `measure` for no positions."""
    return {name: np.empty(0) for name in ("flux", "flux_err", "background", "rms")} | {"flags": np.empty(0, np.int64)}


def _nearest(coordinate: FloatArray) -> IntArray:
    return np.floor(coordinate + 0.5).astype(np.int64)


def _half_width(estimator: Estimator, beam: BeamShape) -> int:
    """Of the stamps that hold every pixel which reaches into the estimator's radius, wherever in a pixel they centre."""
    return _reach(estimator.radius(beam))


def _reach(radius: float) -> int:
    """Whole pixels that a radius reaches to, which must not hang on the last digits of the beam."""
    return max(1, math.ceil(radius - TOLERANCE))


def _small_stamps(pixels: Pixels, ix: IntArray, iy: IntArray, half: int, wide: Floats, lattice: Lattice) -> Floats:
    """Stamps for the estimator, from the middle of those for the annulus where these hold every pixel."""
    rows, columns = lattice.rows, lattice.columns
    if lattice.down * lattice.across > 1 or half > min(rows, columns):
        return pixels.stamps(ix, iy, Lattice.square(half))
    return wide[:, rows - half : rows + half + 1, columns - half : columns + half + 1]


def _estimate(estimator: Estimator, stamps: Stamps) -> tuple[FloatArray, FloatArray]:
    """What the estimator finds, checked for shape and made writable."""
    with np.errstate(invalid="ignore", over="ignore"):  # as above
        flux, flux_err = estimator.measure(stamps)
    flux, flux_err = np.array(flux, float), np.array(flux_err, float)
    if flux.shape != stamps.dx.shape or flux_err.shape != stamps.dx.shape:
        shapes = f"{flux.shape} and {flux_err.shape}"
        raise TypeError(f"estimator {estimator.name} returned shapes {shapes}, expected {stamps.dx.shape} twice")
    return flux, flux_err


def _saturated(raw: Floats, saturation: float, radius: float) -> NDArray[np.bool_]:
    """Whether any pixel of stamps (n, size, size) that reaches within `radius` of the position is saturated."""
    half = raw.shape[1] // 2
    offset = np.arange(-half, half + 1, dtype=float) ** 2
    near = np.sqrt(offset[:, None] + offset) <= radius + 0.5
    return np.asarray((raw[:, near] >= saturation).any(axis=1))


def _has_neighbour(local: Background) -> NDArray[np.bool_]:
    """Whether the highest pixel from a beam's width out to the annulus stands out, and above those nearer.

    They are looked for on the annulus' lattice.
    """
    stands_out = local.around > local.level + NEIGHBOUR_SNR * local.rms
    return np.asarray(stands_out & ~(local.around <= local.core))


def _flag_gaps(
    flags: NDArray[np.int64], lost: NDArray[np.bool_], shape: tuple[int, int], ix: IntArray, iy: IntArray, raw: Floats
) -> None:
    """Add EDGE and BLANKED to the flags of positions whose flux is lost to missing pixels of their stamps."""
    rows = np.flatnonzero(lost)
    if len(rows) == 0:
        return
    half = raw.shape[1] // 2
    offset = np.arange(-half, half + 1)
    columns, lines = ix[rows, None] + offset, iy[rows, None] + offset
    inside = ((lines >= 0) & (lines < shape[0]))[:, :, None] & ((columns >= 0) & (columns < shape[1]))[:, None, :]
    flags[rows] |= np.where(inside.all(axis=(1, 2)), 0, int(Flag.EDGE))
    flags[rows] |= np.where((inside & np.isnan(raw[rows])).any(axis=(1, 2)), int(Flag.BLANKED), 0)
