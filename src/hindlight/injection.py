"""Made-up sources and what they add to light curves: what an archive could have shown is found by hiding them in it.

Pure: no files, no decisions. A source is a pulse train or a smooth variable; its brightness in a frame is the mean over
the exposure's good time, so that a pulse that straddles an exposure counts with the part that is covered. Photometry
is linear, so a flux that is added to a raw light curve is the flux of a source that had been in the pixels. Every draw
is a function of the source's own key and of what it is drawn for (a pulse, a frame), never of what was drawn before:
the same source is the same in whatever frames, pieces of work and processes it is looked at.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from hindlight.lightcurve import Block, FloatArray, IntArray
from hindlight.store import Columns

PULSES, SMOOTH = "pulses", "smooth"
MOST_PULSES = 64  # an exposure that holds more of them sees their mean
JITTER, MISSING, CLOCKLESS, PHOTONS = range(4)  # what is drawn


@dataclass(frozen=True)
class Source:
    """A source of peak brightness 1.

    kind
        PULSES: every `period_s` seconds a pulse of constant brightness, `duration_s` long, that lies anywhere in a window
        of `window_s` (or at its middle where that is no longer than the pulse); a fraction `missing` of them is not there.
        SMOOTH: (1 + cos(2 pi (t - start) / period)) / 2.
    start_s
        Middle of a window, or a maximum: seconds from J2000.0 TDB at the barycentre.
    key
        What all its draws are made from.
    """

    kind: str
    period_s: float
    start_s: float
    key: int
    duration_s: float = 0.0
    window_s: float = 0.0
    missing: float = 0.0


def uniform(key: int, purpose: int, counter: IntArray) -> FloatArray:
    """Numbers from 0 to below 1, one for each counter: the mixing function of splitmix64.

    Steele, Lea & Flood 2014 (Proc. OOPSLA, 453), fig. 17; constants from memory.
    """
    x = np.asarray(counter).astype(np.int64).view(np.uint64)
    start = np.array([(key * 0x9E3779B97F4A7C15 + purpose * 0xD1B54A32D192ED03) % 2**64], np.uint64)
    for add in (start, _mixed(start)):
        x = _mixed(x * np.uint64(0x9E3779B97F4A7C15) + add)
    return np.asarray((x >> np.uint64(11)).astype(float) * 2.0**-53)


def _mixed(x: NDArray[np.uint64]) -> NDArray[np.uint64]:
    x = (x ^ (x >> np.uint64(30))) * np.uint64(0xBF58476D1CE4E5B9)
    x = (x ^ (x >> np.uint64(27))) * np.uint64(0x94D049BB133111EB)
    return np.asarray(x ^ (x >> np.uint64(31)))


def brightness(source: Source, t_s: FloatArray, exposure_s: FloatArray, frame: IntArray) -> FloatArray:
    """Mean brightness over exposures of shape (n,), from 0 to 1.

    `t_s` are the middles of good time at the barycentre; a frame without a clock (NaN) falls at any phase, by its
    identifier. An exposure that is not known (NaN) is taken as an instant.
    """
    anywhere = source.start_s + source.period_s * uniform(source.key, CLOCKLESS, frame)
    since = np.where(np.isfinite(t_s), t_s, anywhere) - source.start_s
    exposure = np.nan_to_num(exposure_s)
    if source.kind == SMOOTH:
        phase = 2 * np.pi * since / source.period_s
        return np.asarray((1 + np.sinc(exposure / source.period_s) * np.cos(phase)) / 2)
    return _pulses_in(source, since, exposure)


def _pulses_in(source: Source, since: FloatArray, exposure: FloatArray) -> FloatArray:
    """The mean brightness of a pulse train over exposures, `since` seconds from the middle of its first window."""
    play = max(0.0, source.window_s - source.duration_s)  # how far the place of a pulse is open
    reach = (exposure + source.duration_s + play) / 2
    first = np.ceil((since - reach) / source.period_s).astype(np.int64)
    last = np.floor((since + reach) / source.period_s).astype(np.int64)
    many = last - first >= MOST_PULSES
    lit = np.zeros(since.shape)
    for step in range(int(np.max(last - first, initial=-1, where=~many)) + 1):
        pulse = first + step
        there = (pulse <= last) & ~many & (uniform(source.key, MISSING, pulse) >= source.missing)
        away = pulse * source.period_s + play * (uniform(source.key, JITTER, pulse) - 0.5) - since
        lit += np.where(there, _covered(away, exposure, source.duration_s), 0.0)
    lit[many] = source.duration_s / source.period_s * (1 - source.missing)
    return np.minimum(lit, 1.0)


def _covered(away: FloatArray, exposure: FloatArray, duration: float) -> FloatArray:
    """The share of exposures that a pulse fills whose middle is `away` from theirs; of an instant all or nothing."""
    overlap = np.minimum(exposure / 2, away + duration / 2) - np.maximum(-exposure / 2, away - duration / 2)
    inside = (np.abs(away) <= duration / 2).astype(float)
    return np.where(exposure > 0, np.maximum(overlap, 0.0) / np.where(exposure > 0, exposure, 1.0), inside)


def fraction_touched(exposure_s: float, width_s: float, period_s: float) -> float:
    """The fraction of frames that overlap a pulse (or window) of some width once in a period: (D + w) / P, at most 1."""
    return min(1.0, (exposure_s + width_s) / period_s)


def fraction_containing(exposure_s: float, width_s: float, period_s: float) -> float:
    """The fraction of frames that hold all of it: (D - w) / P, at least 0."""
    return min(1.0, max(0.0, exposure_s - width_s) / period_s)


def injected(
    block: Block, rows: IntArray, flux: FloatArray, keys: IntArray, solution: Columns, electrons: FloatArray
) -> Block:
    """The light curves of some rows of a block with sources added: shape (n, n_frames), n the length of `rows`.

    `flux` (n, n_frames) is the calibrated flux of each source in each frame. It is added on that scale, where it is as much
    as production makes of it: gains, losses and response curves are undone there. `electrons` (n_frames,) are electrons
    per raw unit: where they are known the source's own photon noise is drawn (by `keys`, shape (n,)) and enters the error,
    as for a sum of pixels, variance = flux / electrons. What a frame does not measure stays NaN.
    """
    at = np.searchsorted(solution["frame"], block.frame)
    gain, scale, extra = (solution[name][at] for name in ("gain", "error_scale", "extra_scatter"))
    more = flux * gain
    variance = np.where(np.isfinite(electrons), np.maximum(more, 0.0) / electrons, 0.0)
    photons = np.zeros_like(more)
    if np.any(variance > 0):
        photons = np.sqrt(variance) * np.stack([_normal(int(key), block.frame) for key in keys])
    before, before_err = block.flux[rows], block.flux_err[rows]
    total = before + flux + photons / gain
    own = np.maximum(before_err**2 - (extra * before) ** 2, 0.0)
    total_err = np.sqrt(own + variance * (scale / gain) ** 2 + (extra * total) ** 2)
    lost = np.isnan(before)
    matrices = {
        "t_tdb_s": block.t_tdb_s[rows], "exposure_s": block.exposure_s[rows], "flags": block.flags[rows],
        "flux": np.where(lost, np.nan, total), "flux_err": np.where(lost, np.nan, total_err),
        "raw_flux": block.raw_flux[rows] + more + photons,
        "raw_flux_err": np.sqrt(block.raw_flux_err[rows] ** 2 + variance),
    }  # fmt: skip
    return replace(block, names=tuple(block.names[row] for row in rows), **_sealed(matrices))


def _sealed(matrices: dict[str, NDArray[Any]]) -> dict[str, Any]:
    """The same, read-only as all arrays of light curves are."""
    for values in matrices.values():
        values.flags.writeable = False
    return matrices


def _normal(key: int, frame: IntArray) -> FloatArray:
    """Standard normal numbers, one for each frame: Box & Muller 1958 (Ann. Math. Stat. 29, 610)."""
    radius = np.sqrt(-2 * np.log1p(-uniform(key, PHOTONS, frame)))
    return np.asarray(radius * np.cos(2 * np.pi * uniform(key, PHOTONS + 1, frame)))


def restricted(block: Block, keep: NDArray[np.bool_]) -> Block:
    """A block in some of its frames, `keep` of shape (n_frames,)."""
    matrices = ("t_tdb_s", "exposure_s", "flux", "flux_err", "raw_flux", "raw_flux_err", "flags")
    kept = _sealed({name: getattr(block, name)[:, keep] for name in matrices})
    return replace(block, frame=block.frame[keep], clock_error_s=block.clock_error_s[keep], **kept)
