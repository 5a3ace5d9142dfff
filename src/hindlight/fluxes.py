"""Fluxes at pixels of one image: local background and noise, then the estimator plugin; flags say what is wrong.

Pixels in, columns out; nothing here knows of sky, frames or files.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from hindlight.background import (
    TOLERANCE,
    Annulus,
    Background,
    annulus_of,
    keep_freed_memory,
    local_background,
    median_and_mad,
)
from hindlight.facts import NAN
from hindlight.lightcurve import FloatArray, IntArray
from hindlight.pixels import Floats, Lattice, Pixels
from hindlight.plugin import BeamShape, Estimator, Stamps
from hindlight.schema import Flag
from hindlight.settings import Photometry

AT_A_TIME = 128  # positions: their stamps stay in the processor's cache
NEIGHBOUR_SNR = 5.0  # a neighbour must stand this far above the background to be flagged

Columns = dict[str, NDArray[Any]]


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
        return no_fluxes()
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
    ix, iy = nearest(x), nearest(y)
    annulus = annulus_of(beam, settings)
    lattice = annulus.lattice
    wide = pixels.stamps(ix, iy, lattice)
    local = local_background(wide, annulus, pixels.quantum)
    beam_pixels = math.pi * beam.major * beam.minor / (4.0 * math.log(2.0)) / (lattice.down * lattice.across)
    raw = _small_stamps(pixels, ix, iy, half_width_of(estimator, beam), wide, lattice)
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


def no_fluxes() -> Columns:
    """The columns of `measure` for no positions."""
    return {name: np.empty(0) for name in ("flux", "flux_err", "background", "rms")} | {"flags": np.empty(0, np.int64)}


def nearest(coordinate: FloatArray) -> IntArray:
    """The pixels that hold 0-based pixel coordinates."""
    return np.floor(coordinate + 0.5).astype(np.int64)


def half_width_of(estimator: Estimator, beam: BeamShape) -> int:
    """Of the stamps that hold every pixel which reaches into the estimator's radius, wherever in a pixel they centre."""
    return reach(estimator.radius(beam))


def reach(radius: float) -> int:
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
