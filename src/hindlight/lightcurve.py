"""Light curves: what a statistic is given.

`LightCurve` is one position in one channel; `Block` holds many positions over the same frames as matrices, `Rows` many
light curves each in order of time. All arrays are read-only. Nothing here reads files or decides anything.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, fields, replace
from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

QUIET_CLIP_SIGMA = 3.0
QUIET_ROUNDS = 5


@dataclass(frozen=True)
class Channel:
    """What makes fluxes comparable; a position has one light curve per channel.

    `frequency_hz` and `beam_arcsec` are NaN where the headers do not give them. `label` is the key used in every table.
    """

    label: str
    instrument: str = ""
    band: str = ""
    stokes: str = "I"
    frequency_hz: float = float("nan")
    beam_arcsec: float = float("nan")
    unit: str = ""

    @property
    def signed(self) -> bool:
        """Whether the flux may truly be negative, as Stokes Q, U and V may: such channels are judged two-sided."""
        return self.stokes in ("Q", "U", "V")


def freeze(array: NDArray[Any], dtype: Any = np.float64) -> Any:
    """A read-only, contiguous copy of `array` with the given type."""
    frozen = np.array(array, dtype=dtype, order="C", copy=True)
    frozen.flags.writeable = False
    return frozen


@dataclass(frozen=True, eq=False)
class LightCurve:
    """The usable measurements of one position in one channel, in order of time.

    Every array has shape (n,): only measurements with finite flux and a positive, finite error are here.

    t_tdb_s
        Middle of the exposure's good time, seconds from J2000.0 TDB at the Solar-System barycentre; NaN (at the end)
        where the frame has no clock. A plugin whose `uses_times` is true never sees such samples.
    exposure_s
        Good time in seconds; NaN where unknown.
    flux, flux_err
        Calibrated flux and its 1-sigma error in the channel's unit; may be negative.
    raw_flux, raw_flux_err
        The same before the frame's gain and error scale.
    frame
        Frame identifiers; flags, see `hindlight.Flag`.
    clock_error_s
        1-sigma error of the frame's clock in seconds; NaN where nobody has stated one.
    """

    name: str
    channel: Channel
    t_tdb_s: FloatArray
    exposure_s: FloatArray
    flux: FloatArray
    flux_err: FloatArray
    raw_flux: FloatArray
    raw_flux_err: FloatArray
    frame: IntArray
    flags: IntArray
    clock_error_s: FloatArray

    @classmethod
    def from_arrays(
        cls,
        t_tdb_s: NDArray[Any],
        flux: NDArray[Any],
        flux_err: NDArray[Any],
        *,
        exposure_s: NDArray[Any] | None = None,
        name: str = "",
        channel: Channel | None = None,
        frame: NDArray[Any] | None = None,
        flags: NDArray[Any] | None = None,
        raw_flux: NDArray[Any] | None = None,
        raw_flux_err: NDArray[Any] | None = None,
        clock_error_s: NDArray[Any] | None = None,
    ) -> LightCurve:
        """A light curve of plain arrays of shape (n,): unusable samples dropped, the rest put in order of time."""
        flux = np.asarray(flux, float)
        flux_err = np.asarray(flux_err, float)
        t_tdb_s = np.asarray(t_tdb_s, float)
        n = flux.size
        frame = np.arange(n) if frame is None else np.asarray(frame)
        good = np.isfinite(flux) & np.isfinite(flux_err) & (flux_err > 0)
        order = np.lexsort((frame, t_tdb_s))
        order = order[good[order]]

        def pick(array: NDArray[Any] | None, default: NDArray[Any], dtype: type) -> Any:
            return freeze((default if array is None else np.asarray(array))[order], dtype)

        return cls(
            name=name,
            channel=channel or Channel(label=""),
            t_tdb_s=pick(t_tdb_s, t_tdb_s, np.float64),
            exposure_s=pick(exposure_s, np.full(n, np.nan), np.float64),
            flux=pick(flux, flux, np.float64),
            flux_err=pick(flux_err, flux_err, np.float64),
            raw_flux=pick(raw_flux, flux, np.float64),
            raw_flux_err=pick(raw_flux_err, flux_err, np.float64),
            frame=pick(frame, frame, np.int64),
            flags=pick(flags, np.zeros(n), np.int64),
            clock_error_s=pick(clock_error_s, np.full(n, np.nan), np.float64),
        )

    def __len__(self) -> int:
        return int(self.flux.size)

    def select(self, keep: NDArray[np.bool_]) -> LightCurve:
        """The samples where `keep`, shape (n,), is true."""
        arrays: dict[str, Any] = {
            f.name: freeze(value[keep], value.dtype.type)
            for f in fields(self)
            if isinstance(value := getattr(self, f.name), np.ndarray)
        }
        return LightCurve(name=self.name, channel=self.channel, **arrays)

    @cached_property
    def timed(self) -> LightCurve:
        """The samples whose time is known."""
        known = np.isfinite(self.t_tdb_s)
        return self if bool(known.all()) else self.select(known)

    @cached_property
    def rows(self) -> Rows:
        """This light curve alone as `Rows`."""
        return Rows.of((self,))

    @cached_property
    def quiet_level(self) -> tuple[float, float]:
        """The flux when the source is not bright, and its 1-sigma error; see `quiet_level`."""
        return quiet_level(self.flux, self.flux_err)

    @cached_property
    def above_quiet(self) -> FloatArray:
        """Excess over the quiet level in units of its own error, shape (n,).

        The error of the difference is hypot(flux_err, error of the quiet level).
        """
        level, error = self.quiet_level
        return (self.flux - level) / np.hypot(self.flux_err, error)


@dataclass(frozen=True, eq=False)
class Block:
    """Many positions over the same frames in one channel: what `compute_block` of a statistic is given.

    Matrices have shape (n_positions, n_frames), NaN where a position has no usable measurement in a frame; `names` has
    n_positions entries, `frame` and `clock_error_s` have shape (n_frames,). Frames are in order of their identifier; times
    differ from position to position by the barycentric correction, so a row is *not* always in order of time.
    """

    names: tuple[str, ...]
    channel: Channel
    frame: IntArray
    t_tdb_s: FloatArray
    exposure_s: FloatArray
    flux: FloatArray
    flux_err: FloatArray
    raw_flux: FloatArray
    raw_flux_err: FloatArray
    flags: IntArray
    clock_error_s: FloatArray

    def __len__(self) -> int:
        return len(self.names)

    def curve(self, row: int) -> LightCurve:
        """The light curve of one row."""
        return LightCurve.from_arrays(
            self.t_tdb_s[row],
            self.flux[row],
            self.flux_err[row],
            exposure_s=self.exposure_s[row],
            name=self.names[row],
            channel=self.channel,
            frame=self.frame,
            flags=self.flags[row],
            raw_flux=self.raw_flux[row],
            raw_flux_err=self.raw_flux_err[row],
            clock_error_s=self.clock_error_s,
        )

    def curves(self) -> Iterator[LightCurve]:
        """The light curves of all rows, in order."""
        return iter(self._curves)

    @cached_property
    def _curves(self) -> tuple[LightCurve, ...]:
        """Kept, since every statistic asks for them."""
        return tuple(self.curve(row) for row in range(len(self.names)))

    @cached_property
    def rows(self) -> Rows:
        """The light curves of all rows as matrices in order of time."""
        return Rows.of(self._curves)

    def select(self, keep: NDArray[np.bool_], timed: bool = False) -> Block:
        """The positions where `keep`, shape (n_positions,), is true; if `timed` without samples whose time is unknown."""
        arrays: dict[str, Any] = {
            f.name: value[keep]
            for f in fields(self)
            if isinstance(value := getattr(self, f.name), np.ndarray) and value.ndim == 2
        }
        if timed:
            arrays["flux"] = np.where(np.isnan(arrays["t_tdb_s"]), np.nan, arrays["flux"])
        frozen = {name: freeze(value, value.dtype.type) for name, value in arrays.items()}
        return replace(self, names=tuple(n for n, kept in zip(self.names, keep, strict=True) if kept), **frozen)


@dataclass(frozen=True, eq=False)
class Rows:
    """Many light curves of one channel as matrices of shape (n_curves, n_most): what statistics of many at once work on.

    Each row holds a light curve's samples in order of time, then NaN up to the longest one's length. What a row gives
    must not depend on the others, to the last digit: sums go through `sums`, which adds in order, so that the width of
    the matrix changes nothing.

    n
        How many samples each row has, shape (n_curves,).
    t_tdb_s, exposure_s, flux, flux_err
        See `LightCurve`.
    """

    curves: tuple[LightCurve, ...]
    channel: Channel
    n: IntArray
    t_tdb_s: FloatArray
    exposure_s: FloatArray
    flux: FloatArray
    flux_err: FloatArray

    @classmethod
    def of(cls, curves: tuple[LightCurve, ...]) -> Rows:
        """Light curves of one channel, at least one, as rows."""
        n = np.array([len(curve) for curve in curves], np.int64)
        used = np.arange(n.max(initial=0)) < n[:, None]

        def matrix(name: str) -> FloatArray:
            filled = np.full(used.shape, np.nan)
            filled[used] = np.concatenate([getattr(curve, name) for curve in curves])
            filled.flags.writeable = False
            return filled

        names = ("t_tdb_s", "exposure_s", "flux", "flux_err")
        return cls(curves, curves[0].channel, freeze(n, np.int64), **{name: matrix(name) for name in names})

    def __len__(self) -> int:
        return len(self.curves)

    @cached_property
    def used(self) -> NDArray[np.bool_]:
        """Where there is a sample, shape (n_curves, n_most)."""
        return np.asarray(np.arange(self.flux.shape[1]) < self.n[:, None])

    @cached_property
    def weight(self) -> FloatArray:
        """Inverse variance of each sample, 0 where there is none; shape (n_curves, n_most)."""
        return np.asarray(np.where(self.used, self.flux_err, np.inf) ** -2.0)

    @cached_property
    def weighted_mean(self) -> FloatArray:
        """Inverse-variance weighted mean flux, shape (n_curves,); NaN for no samples."""
        weight, flux = self.sums(self.weight), self.sums(self.weight * np.where(self.used, self.flux, 0))
        return np.asarray(np.divide(flux, weight, out=np.full(len(self), np.nan), where=weight > 0))

    @cached_property
    def quiet_level(self) -> tuple[FloatArray, FloatArray]:
        """The flux when each source is not bright and its 1-sigma error, shapes (n_curves,); see `quiet_level`."""
        level, error = np.array([curve.quiet_level for curve in self.curves]).T
        return level, error

    @cached_property
    def above_quiet(self) -> FloatArray:
        """Excess over the quiet level in units of its own error, shape (n_curves, n_most), NaN where no sample is."""
        level, error = self.quiet_level
        return np.asarray((self.flux - level[:, None]) / np.hypot(self.flux_err, error[:, None]))

    @staticmethod
    def sums(values: FloatArray) -> FloatArray:
        """Sum over each row's samples, shape (n_curves,), of values that are 0 where there is none."""
        return np.asarray(np.cumsum(values, axis=1)[:, -1]) if values.shape[1] else np.zeros(len(values))

    def groups(self, first: NDArray[np.bool_]) -> tuple[IntArray, FloatArray, FloatArray]:
        """Consecutive samples as groups that begin where `first`, shape (n_curves, n_most), is true.

        Gives each sample's group, shape (n_curves, n_most), and for each group the sum of the inverse variances (0 for
        none) and the weighted mean flux (NaN for none), shapes (n_curves, n_groups), `n_groups` of the row with most.
        """
        first = first & self.used
        group: IntArray = np.maximum(np.cumsum(first, axis=1, dtype=np.int64) - 1, 0)
        shape = (len(self), int(group.max(initial=0)) + 1)
        place = (group + np.arange(len(self))[:, None] * shape[1]).ravel()
        offset = np.where(self.used, self.flux - self.weighted_mean[:, None], 0)
        weight = np.bincount(place, self.weight.ravel(), shape[0] * shape[1]).reshape(shape)
        flux = np.bincount(place, (self.weight * offset).ravel(), shape[0] * shape[1]).reshape(shape)
        mean = np.divide(flux, weight, out=np.full(shape, np.nan), where=weight > 0) + self.weighted_mean[:, None]
        return group, np.asarray(weight), np.asarray(mean)


def weighted_mean(flux: FloatArray, flux_err: FloatArray) -> tuple[float, float]:
    """Inverse-variance weighted mean and its 1-sigma error; NaN, NaN for no samples."""
    if flux.size == 0:
        return float("nan"), float("nan")
    weight = 1.0 / flux_err**2
    total = float(weight.sum())
    return float((weight * flux).sum()) / total, total**-0.5


def _median(values: FloatArray) -> float:
    """The median of finite values, shape (n,), to the last bit that of `np.median`, in a third of the time; n > 0."""
    half = values.size // 2
    if values.size % 2:
        return float(np.partition(values, half)[half])
    ordered = np.partition(values, (half - 1, half))
    return float(ordered[half - 1] + ordered[half]) / 2.0


def quiet_level(flux: FloatArray, flux_err: FloatArray) -> tuple[float, float]:
    """The flux of a position when it is not bright, with its 1-sigma error.

    A weighted mean after samples further than three of their own (scaled) errors from the running level have been set
    aside, started from the median so that up to half of the samples may be bright. The error carries the scatter of
    the samples kept, where that exceeds their errors. `flux` and `flux_err` have shape (n,), finite, errors positive;
    NaN, NaN for no samples. Clipped means are common practice, no source.
    """
    if flux.size < 3:
        return weighted_mean(flux, flux_err)
    level = _median(flux)
    spread = _median(np.abs(flux - level) / flux_err) * 1.482602
    scale = max(1.0, spread)
    keep = np.ones(flux.size, dtype=bool)
    for _ in range(QUIET_ROUNDS):
        before = keep
        keep = np.abs(flux - level) <= QUIET_CLIP_SIGMA * scale * flux_err
        if keep.sum() < 2:
            return weighted_mean(flux, flux_err)
        level, error = weighted_mean(flux[keep], flux_err[keep])
        if np.array_equal(keep, before):
            break
    residual = (flux[keep] - level) / flux_err[keep]
    excess = float((residual**2).sum()) / max(1, int(keep.sum()) - 1)
    return level, error * max(1.0, excess) ** 0.5
