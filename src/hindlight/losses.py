"""Flux that sources lose: with the distance from the middle of the image, and by a part of the noise.

flux = gain * brightness * (1 - k d^2) - b * sigma. Smearing over the bandwidth and the time of an integration loses flux
as the square of the distance d in beams, to first order (A. H. Bridle & F. R. Schwab 1999, ASP Conf. 180, 371, from
memory). CLEAN takes about one rms from every source it finds, bright or faint (R. H. Becker, R. L. White & D. J. Helfand
1995, ApJ 450, 559, from memory; J. J. Condon et al. 1998, AJ 115, 1693). Whatever else has these forms is undone alike.
Pure: fluxes of comparisons in, k and b of a channel out, and their use.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Any, Protocol, TypeVar

import numpy as np
from numpy.typing import NDArray
from scipy import sparse, special
from scipy.sparse.linalg import lsqr

from hindlight.lightcurve import FloatArray, IntArray

HUBER = 1.345  # 95 % efficiency for normal errors (P. J. Huber 1981, Robust Statistics)
ROUNDS = 8  # of undoing and fitting again, at most
CLOSE = 0.1  # errors: a round that changes less is the last
CHANCE = 5e-4  # of a loss where there is none, one-sided: that of 3.3 sigma
EDGE_ERROR = 0.1  # k is not told where its error is more than this fraction of the flux at the furthest comparison
NOISE_ERROR = 0.3  # b is not told where its error is larger: a loss of one rms would not stand out
TRACE = 1e-4  # a column of which less is left than this, once gains and brightnesses had their part, is theirs
UNSEEN, SEEN = 3.0, 5.0  # S/N from which a source is cleaned in part, and always
LEAST_LEFT = 0.2  # of the flux: further out the first order says nothing
COLUMNS = ("loss_off_axis", "loss_off_axis_err", "loss_noise", "loss_noise_err", "centre_x", "centre_y", "pixel_deg")

Columns = dict[str, Any]


class Scale(Protocol):
    """What a solution of the gains tells, shapes (n_frames,), (n_frames,) and (n_sources,); NaN where nothing."""

    @property
    def gain(self) -> FloatArray:
        """Of each frame."""

    @property
    def frame_scatter(self) -> FloatArray:
        """Scatter of each frame's sources beyond their errors, as a fraction of the flux."""

    @property
    def brightness(self) -> FloatArray:
        """Of each source."""


AnyScale = TypeVar("AnyScale", bound=Scale)


@dataclass(frozen=True, eq=False)
class Loss:
    """A channel's losses: k per square degree, b in units of the noise, 0 where none is significant.

    Errors are NaN where the comparisons cannot tell. `scatter`, shape (n_frames,), is what the error of k adds to
    fluxes as a fraction; `edge` the distance of the furthest comparison in degrees, NaN where not known.
    """

    scatter: FloatArray
    off_axis: float = 0.0
    off_axis_err: float = float("nan")
    noise: float = 0.0
    noise_err: float = float("nan")
    edge: float = float("nan")

    def said(self, label: str) -> list[str]:
        """What the last lines of a run say of the losses of a channel; nothing where there are none."""
        found = []
        if self.off_axis > 0:
            lost, error = 100 * self.edge**2 * np.array((self.off_axis, self.off_axis_err))
            found.append(
                f"sources of {label} lose flux with the distance from the middle of the image, {lost:.1f} +- {error:.1f} % "
                f"at {self.edge:.3g} degrees: corrected"
            )
        if self.noise > 0:
            found.append(
                f"sources of {label} are too faint by {self.noise:.2f} +- {self.noise_err:.2f} times the noise, as by "
                f"CLEAN: corrected where they are seen"
            )
        return found


def centres(images: Mapping[str, Any]) -> Columns:
    """The middle of each image (0-based pixels) and degrees per pixel, from columns width, height and pixel_scale."""
    return {
        "centre_x": (np.asarray(images["width"], float) - 1.0) / 2.0,
        "centre_y": (np.asarray(images["height"], float) - 1.0) / 2.0,
        "pixel_deg": np.asarray(images["pixel_scale"], float) / 3600.0,
    }


def distance(x: FloatArray, y: FloatArray, centre: Mapping[str, Any]) -> FloatArray:
    """Degrees from the middle of the image; `centre` holds the columns of `centres`, of a shape that fits."""
    return np.asarray(np.hypot(x - centre["centre_x"], y - centre["centre_y"]) * centre["pixel_deg"])


def columns(loss: Loss, centre: Columns) -> Columns:
    """The columns COLUMNS of `schema.FRAME_SOLUTION`, shape (n_frames,)."""
    alike = {name: getattr(loss, name.removeprefix("loss_")) for name in COLUMNS if name.startswith("loss_")}
    return {name: np.full(len(loss.scatter), value) for name, value in alike.items()} | centre


def undone(rows: Mapping[str, Any], sigma: FloatArray, solution: Mapping[str, Any]) -> tuple[FloatArray, FloatArray]:
    """Fluxes and errors without the losses, for raw rows of shape (n,) and what COLUMNS say of each one's frame.

    What a source lost to the noise is given back where it is seen: not below S/N 3, wholly from S/N 5.
    """
    flux: FloatArray = rows["flux"]
    if (solution["loss_noise"] > 0).any():
        with np.errstate(invalid="ignore", divide="ignore"):
            seen = np.where(solution["loss_noise"] > 0, np.nan_to_num(ramp(flux / sigma)), 0.0)
        flux = flux + np.where(seen > 0, solution["loss_noise"] * sigma * seen, 0.0)
        sigma = sigma * np.hypot(1.0, np.nan_to_num(solution["loss_noise_err"]) * seen)
    if (solution["loss_off_axis"] > 0).any():
        left = what_is_left(distance(rows["x"], rows["y"], solution), solution["loss_off_axis"])
        flux, sigma = flux / left, sigma / left
    return flux, sigma


def ramp(snr: FloatArray) -> FloatArray:
    """To which part a source of this S/N is cleaned: 0 up to S/N 3, 1 from S/N 5."""
    return np.asarray(np.clip((snr - UNSEEN) / (SEEN - UNSEEN), 0.0, 1.0))


def what_is_left(degrees: FloatArray, off_axis: FloatArray | float) -> FloatArray:
    """1 - k d^2, 1 where the distance is not known."""
    return np.asarray(np.maximum(LEAST_LEFT, 1.0 - off_axis * np.nan_to_num(degrees) ** 2))


def fitted(
    flux: FloatArray, flux_err: FloatArray, degrees: FloatArray, solve: Callable[[FloatArray, FloatArray], AnyScale]
) -> tuple[AnyScale, Loss]:
    """The gains that `solve` finds of fluxes without losses, and the losses, from shapes (n_frames, n_sources).

    NaN for no flux; `degrees` are the distances from the middle of the image, NaN where not known. Gains, brightnesses
    and losses are fitted together: what gains and brightnesses can take up is no loss. A loss counts where it is positive
    beyond chance, by the t distribution with as many degrees of freedom as there are sources, less one.
    """
    gains = solve(flux, flux_err)
    expected = gains.gain[:, None] * gains.brightness
    with np.errstate(invalid="ignore", divide="ignore"):
        seen = np.nan_to_num(ramp(np.where(np.isfinite(expected), expected, flux) / flux_err))
    data = _Data(flux, flux_err, degrees, seen)
    applied = np.zeros(2)
    found = _estimate(data, gains, applied)
    for _ in range(ROUNDS):
        if (np.abs(found.value - applied) <= CLOSE * np.nan_to_num(found.error)).all():
            break
        applied = found.value
        gains = solve(*data.without(applied))
        found = _estimate(data, gains, applied)
    (k, b), (k_err, b_err) = applied.tolist(), found.error.tolist()
    return gains, Loss(found.scatter, k, k_err, b, b_err, found.edge)


@dataclass(frozen=True, eq=False)
class _Data:
    """Raw fluxes, their errors, distances, and to which part each source is cleaned, (n_frames, n_sources)."""

    flux: FloatArray
    error: FloatArray
    degrees: FloatArray
    seen: FloatArray

    def without(self, loss: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Fluxes and errors without a loss (k, b)."""
        left = what_is_left(self.degrees, loss[0])
        return (self.flux + loss[1] * self.error * self.seen) / left, self.error / left


@dataclass(frozen=True, eq=False)
class _Estimate:
    """k and b, 0 where not significant; their errors, NaN where not told; see `Loss` for the others."""

    value: FloatArray
    error: FloatArray
    scatter: FloatArray
    edge: float


def _estimate(data: _Data, gains: Scale, applied: FloatArray) -> _Estimate:
    """Losses from what is left of the fluxes once gains, brightnesses and the loss `applied` are taken off."""
    flux, error = data.without(applied)
    model = gains.gain[:, None] * gains.brightness
    known = np.isfinite(flux) & np.isfinite(model) & (error > 0)
    known &= data.seen == 1.0  # whether fainter ones were cleaned is anyone's guess
    nothing = _Estimate(np.zeros(2), np.full(2, np.nan), np.zeros(len(flux)), float("nan"))
    if not known.any():
        return nothing
    frame, source = np.nonzero(known)
    degrees, model, flux, error = (np.nan_to_num(values[known]) for values in (data.degrees, model, flux, error))
    loses = np.stack((-(degrees**2) / what_is_left(degrees, applied[0]), -error / model))
    residual = flux / model - 1.0
    total = np.hypot(error / model, gains.frame_scatter[frame])
    huber = np.minimum(1.0, HUBER / np.maximum(np.abs(residual / total), 1e-300))
    weight = np.sqrt(huber) / total
    free = _free(np.concatenate((loses, residual[None])) * weight, weight, frame, source)
    edge = float(degrees.max())
    rest = free[2] + applied @ free[:2]  # as if nothing had been applied
    hidden = float(huber.mean() / np.mean(huber == 1.0))
    lines = _Lines(free[:2], rest, frame, source, _spread_kept(weight, frame, source), hidden)
    value, error = _chosen(lines, np.linalg.norm(loses * weight, axis=1), edge)
    scatter = np.zeros(len(data.flux))
    if np.isfinite(error[0]):
        n = np.maximum(1, np.bincount(frame, minlength=len(scatter)))
        scatter = error[0] * np.sqrt(np.bincount(frame, (free[0] / weight) ** 2, minlength=len(scatter)) / n)
    return _Estimate(value, error, scatter, edge)


@dataclass(frozen=True, eq=False)
class _Lines:
    """Weighted lines of the fit: what each loss takes (2, n), what it is to explain (n,), whose they are, (n,).

    `spread_kept` is the part of the variance of each line that the effects of its frame and source leave, `hidden` by how
    much too small an error is that comes from residuals with Huber's weights (P. J. Huber 1981, section 7.6, from memory).
    """

    loses: FloatArray
    rest: FloatArray
    frame: IntArray
    source: IntArray
    spread_kept: FloatArray
    hidden: float


def _spread_kept(weight: FloatArray, frame: IntArray, source: IntArray) -> FloatArray:
    """1 - leverage: a line that decides on its frame's gain alone has no residual, whatever its error."""
    square = weight**2
    leverage = square / np.bincount(frame, square)[frame] + square / np.bincount(source, square)[source]
    return np.asarray(np.maximum(0.1, 1.0 - leverage))


def effects(
    weight: FloatArray, frame: IntArray, source: IntArray, shape: tuple[int, int]
) -> tuple[sparse.csr_matrix, FloatArray]:
    """Weighted least squares of one effect per frame and one per source: the matrix, and by what to divide its solution.

    Its columns have one size: `lsqr` needs a tenth of the steps. `shape` is (n_frames, n_sources).
    """
    rows = np.arange(len(frame))
    column = np.concatenate((frame, shape[0] + source))
    both = np.concatenate((weight, weight))
    size = np.sqrt(np.bincount(column, both**2, minlength=sum(shape)))
    size[size == 0] = 1.0
    matrix = sparse.csr_matrix(
        (both / size[column], (np.concatenate((rows, rows)), column)), shape=(len(rows), sum(shape))
    )
    return matrix, size


def _free(values: FloatArray, weight: FloatArray, frame: IntArray, source: IntArray) -> FloatArray:
    """What is left of weighted values, shape (m, n), once each frame and each source has taken up what it can."""
    matrix, _ = effects(weight, frame, source, (int(frame.max()) + 1, int(source.max()) + 1))
    return np.stack([some - matrix @ lsqr(matrix, some, atol=1e-12, btol=1e-12)[0] for some in values])


def _chosen(lines: _Lines, size: FloatArray, edge: float) -> tuple[FloatArray, FloatArray]:
    """k and b where they are significant, else 0, and the errors of those that can be told, else NaN.

    `size` is that of the losses' weighted columns before the effects had their part.
    """
    told = np.linalg.norm(lines.loses, axis=1) > TRACE * size
    largest = np.array((EDGE_ERROR / edge**2 if edge > 0 else 1.0, NOISE_ERROR))
    value, error = _solved(lines, told)
    while (error[told] > largest[told]).any():
        told[np.nanargmax(error / largest)] = False
        value, error = _solved(lines, told)
    told_error, kept = error, told.copy()
    sigmas = -float(special.stdtrit(max(1, len(np.unique(lines.source)) - 1), CHANCE))
    while (value[kept] <= sigmas * error[kept]).any():
        kept[np.nanargmin(value / error)] = False
        value, error = _solved(lines, kept)
    return value, np.where(kept, error, told_error)


def _solved(lines: _Lines, which: NDArray[np.bool_]) -> tuple[FloatArray, FloatArray]:
    """Least squares for some of the losses: values, 0 for the others, and errors, NaN for the others.

    Errors are those of the weights or, if larger, of the scatter from source to source or from frame to frame, since
    what is wrong with one source is wrong in many frames (K.-Y. Liang & S. L. Zeger 1986, Biometrika 73, 13). Either
    comes from residuals, which are smaller than errors (`spread_kept`).
    """
    value, error = np.zeros(2), np.full(2, np.nan)
    if not which.any():
        return value, error
    scale = np.linalg.norm(lines.loses[which], axis=1)
    some = lines.loses[which] / scale[:, None]
    inverse = np.linalg.pinv(some @ some.T, hermitian=True)
    best = inverse @ (some @ lines.rest)
    score = some * (lines.rest - best @ some)
    variance = np.diag(inverse)
    for group in (lines.frame, lines.source):
        n = len(np.unique(group))
        sums = np.stack([np.bincount(group, values) for values in score])
        spread = inverse @ (sums @ sums.T) @ inverse
        variance = np.maximum(variance, np.diag(spread) * lines.hidden**2 * n / max(1, n - 1))
    value[which], error[which] = best / scale, np.sqrt(variance / (some**2 @ lines.spread_kept)) / scale
    return value, error
