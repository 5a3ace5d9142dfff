"""Photographic plates: the curve that turns each plate's measured fluxes into fluxes, from its comparisons.

A plate answers light by a law of its own, which rises all the same. For every plate of a channel a monotone spline
(J. O. Ramsay 1988, Statistical Science 3, 425, from memory) gives the logarithm of the measured flux from that of the
true one; its coefficients rise, which makes the spline rise, and differences of its slopes are held small (P. H. C.
Eilers and B. D. Marx 1996, Statistical Science 11, 89, from memory), so that it goes on straight where stars are
missing. Curves and brightnesses are found in turn. The true flux is known more precisely than the measured one, so
noise enters where the fit expects it and faint stars do not flatten the curve. Nothing here reads files.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray
from scipy import interpolate, optimize

from hindlight.lightcurve import FloatArray, IntArray, freeze
from hindlight.robust import HUBER, column_scatter, connected, excess_scatter, frame_scatter, median_of, most_variable

PHOTOGRAPHIC = "photographic"
SEEN_SNR = 5.0  # what counts as seen on a plate, target or comparison; common practice, no source
FEWEST_SNR = 3.0  # a star whose typical S/N is lower tells nothing of curves
DEGREE = 3
COEFFICIENTS = 6
SLOPE_CHANGE = 0.3  # by which the logarithmic slope may well change between neighbouring coefficients
LEAST_SLOPE = 0.05  # a plate that is saturated so far tells nothing, but its curve can be inverted
LEAST_SPAN = 0.5  # of the spline in the logarithm of the flux
ROUNDS = 60
CLOSE = 1e-4  # change of a brightness, as a fraction, that ends the search
FIRST_SCATTER = 0.05  # of comparisons about a curve, before it is known
STEPS = 3  # of reweighting and linearising per round
LARGEST_STEP = 1.0
FARTHEST = 5.0  # that a star may be from the range of those known at first, in logarithm
BENT = 0.1  # error of the extrapolated flux over the square of its logarithm beyond the brightest comparison
MOST_BENT = 0.15  # an outburst brighter than all comparisons must still be seen
POINTS = 25  # of a curve as it is kept: 0.1 % from the spline over a factor 100

Known = NDArray[np.bool_]


@dataclass(frozen=True, eq=False)
class Curve:
    """A plate's response: measured fluxes and fluxes, both positive and rising, shape (n,).

    `relative_err` is the 1-sigma error of the curve as a fraction of the flux. Between its points the curve is straight
    in logarithms, below them a line through the origin, above them it keeps its last logarithmic slope, with an error that
    grows.
    """

    measured: FloatArray
    flux: FloatArray
    relative_err: FloatArray

    @property
    def text(self) -> str:
        """The curve as `measured flux relative_err ...`, as it is kept in a table."""
        rows = np.stack((self.measured, self.flux, self.relative_err), axis=1)
        return " ".join(f"{value:.7g}" for value in rows.ravel())

    def applied(self, measured: FloatArray, measured_err: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Flux and 1-sigma error for measured fluxes of shape (n,).

        The error is that of the measured flux times the curve's slope there, and that of the curve.
        """
        log_m, log_s = np.log(self.measured), np.log(self.flux)
        slopes = np.diff(log_s) / np.diff(log_m)
        with np.errstate(invalid="ignore"):
            above = measured > self.measured[0]
        x = np.log(np.where(above, measured, self.measured[0]))
        piece = np.clip(np.searchsorted(log_m, x, side="right") - 1, 0, len(slopes) - 1)
        on_curve = np.exp(log_s[piece] + slopes[piece] * (x - log_m[piece]))
        beyond = np.maximum(np.log(np.abs(on_curve)) - log_s[-1], 0.0)
        curve_err = np.hypot(np.interp(x, log_m, self.relative_err), np.minimum(BENT * beyond**2, MOST_BENT))
        line = self.flux[0] / self.measured[0]
        flux = np.where(above, on_curve, line * measured)
        slope = np.where(above, slopes[piece] * on_curve / np.exp(x), line)
        return flux, np.hypot(measured_err * slope, curve_err * flux)


@lru_cache(maxsize=16384)
def curve_from(text: str) -> Curve:
    """The curve that was kept as `Curve.text`."""
    measured, flux, relative_err = np.array(text.split(), float).reshape(-1, 3).T
    return Curve(freeze(measured), freeze(flux), freeze(relative_err))


@dataclass(frozen=True, eq=False)
class Responses:
    """A channel's curves, one per plate, None where comparisons are too few.

    `scatter` (of measured fluxes beyond their errors, as a fraction), `n_comparisons` (those seen) and `by_table` (whether
    given fluxes fix the scale of the curve) have shape (n_frames,), `brightness` (on the channel's scale, NaN where
    unknown) shape (n_sources,).
    """

    curves: tuple[Curve | None, ...]
    scatter: FloatArray
    n_comparisons: IntArray
    brightness: FloatArray
    by_table: Known


def solve_responses(flux: FloatArray, flux_err: FloatArray, given: FloatArray, fewest: int) -> Responses:
    """Curves of plates from measured fluxes of shape (n_frames, n_sources), NaN where there is none.

    A plate needs `fewest` comparisons that are seen in it; those that are not serve too, by what is measured there.
    `given` are known fluxes of the sources, NaN where there is none: where they are enough for a plate's curve they fix
    the scale of it and of the plates that share stars with it; else the median curve of these plates is a straight line
    of slope one. Sources that vary are left out.
    """
    known = np.isfinite(flux) & np.isfinite(flux_err) & (flux_err > 0)
    snr = median_of(np.where(known, flux / np.where(known, flux_err, 1.0), np.nan))
    known &= np.nan_to_num(snr) >= FEWEST_SNR
    seen = known & (np.where(known, flux, 0.0) >= SEEN_SNR * np.where(known, flux_err, 1.0))
    given = np.where(given > 0, given, np.nan)
    curves: list[Curve | None] = [None] * len(flux)
    scatter, brightness = np.full(len(flux), np.nan), np.full(flux.shape[1], np.nan)
    counts, by_table = seen.sum(axis=1).astype(np.int64), np.zeros(len(flux), bool)
    for frames, sources in _parts(known, seen, np.isfinite(given), fewest):
        part = np.ix_(frames, sources)
        stars = _Stars(flux[part], flux_err[part], known[part], seen[part])
        fit = _without_variables(stars, np.log(given[sources]), fewest)
        brightness[sources] = np.exp(fit.x)
        used = fit.used(fewest)
        for row, frame in enumerate(frames.tolist()):
            if used[row].any():
                curves[frame] = fit.curve(row)
                scatter[frame], by_table[frame] = fit.scatter[row], fit.by_table
    curved = np.isfinite(scatter)
    if by_table[curved].all():  # no scale but that of the given fluxes
        brightness = np.where(np.isfinite(brightness), brightness, given)
    return Responses(tuple(curves), scatter, counts, brightness, by_table)


def faintest_seen(flux: FloatArray, flux_err: FloatArray, brightness: FloatArray) -> FloatArray:
    """Brightness of the faintest comparison seen in each plate, shape (n_frames,); NaN where none is seen."""
    with np.errstate(invalid="ignore"):
        seen = (flux >= SEEN_SNR * flux_err) & np.isfinite(brightness)
    faintest = np.where(seen, brightness, np.inf).min(axis=1, initial=np.inf)
    return np.where(np.isfinite(faintest), faintest, np.nan)


def _parts(known: Known, seen: Known, given: Known, fewest: int) -> list[tuple[IntArray, IntArray]]:
    """Frames and sources of each connected part of the plates that have enough comparisons."""
    known = known.copy()
    while True:
        before = int(known.sum())
        known &= (((known & seen).sum(axis=0) >= 2) | given)[None, :]
        known &= ((known & seen).sum(axis=1) >= fewest)[:, None]
        if int(known.sum()) == before:
            break
    if not known.any():
        return []
    label = connected(known)
    of_frame, of_source = label[: len(known)], label[len(known) :]
    frames, sources = known.any(axis=1), known.any(axis=0)
    return [
        (np.flatnonzero(frames & (of_frame == number)), np.flatnonzero(sources & (of_source == number)))
        for number in np.unique(of_frame[frames])
    ]


# --- the fit of one part


@dataclass(frozen=True, eq=False)
class _Stars:
    """Measured fluxes of comparisons and their errors, whether they serve, and whether they are seen, shape

    (n_frames, n_sources).
    """

    flux: FloatArray
    flux_err: FloatArray
    known: Known
    seen: Known

    def without(self, source: int) -> _Stars:
        """The same where one source no longer serves."""
        known = self.known.copy()
        known[:, source] = False
        return replace(self, known=known)


@dataclass(eq=False)
class _Fit:
    """Curves and brightnesses while they are found.

    `x`, the logarithms of the true fluxes (NaN where not
    yet known), and `fixed`, whether they are given, shape (n_sources,). `coefficients` and their `covariance` are those
    of each plate's spline, `scatter` is about it; `taken` is the part of a residual's variance that the fit has taken up.
    """

    stars: _Stars
    x: FloatArray
    fixed: Known
    bounds: tuple[float, float]
    spline: _Spline
    coefficients: FloatArray
    covariance: FloatArray
    scatter: FloatArray
    taken: FloatArray

    @classmethod
    def begun(cls, stars: _Stars, x: FloatArray, fixed: Known) -> _Fit:
        """A fit of which only brightnesses are known, and not all of them."""
        n = len(stars.flux)
        spline = _Spline.over(x[np.isfinite(x)])
        covariance = np.zeros((n, COEFFICIENTS, COEFFICIENTS))
        coefficients = np.full((n, COEFFICIENTS), np.nan)
        bounds = spline.low - FARTHEST, spline.high + FARTHEST
        return cls(
            stars,
            x,
            fixed,
            bounds,
            spline,
            coefficients,
            covariance,
            np.full(n, FIRST_SCATTER),
            np.zeros(stars.flux.shape),
        )

    @property
    def by_table(self) -> bool:
        return bool(self.fixed.any())

    def used(self, fewest: int) -> Known:
        """Which fluxes serve: of sources of known brightness, in plates that have enough of them."""
        usable = self.stars.known & np.isfinite(self.x)
        return np.asarray(usable & ((usable & self.stars.seen).sum(axis=1) >= fewest)[:, None])

    def curve(self, row: int) -> Curve:
        """The curve of a plate over the range of the comparisons seen in it."""
        mine = self.x[self.stars.known[row] & self.stars.seen[row] & np.isfinite(self.x)]
        low, high = float(mine.min()), float(mine.max())
        x = np.linspace(low, max(high, low + 0.01), POINTS)
        basis, slopes = self.spline.basis(x), self.spline.basis(x, 1)
        variance = np.einsum("pi,ij,pj->p", basis, self.covariance[row], basis)
        slope = np.maximum(slopes @ self.coefficients[row], LEAST_SLOPE)
        return Curve(np.exp(basis @ self.coefficients[row]), np.exp(x), np.sqrt(variance) / slope)


@dataclass(frozen=True, eq=False)
class _Spline:
    """Cubic splines between two ends with evenly spaced knots; beyond the ends they go on straight."""

    low: float
    high: float

    @classmethod
    def over(cls, x: FloatArray) -> _Spline:
        low, high = float(x.min()), float(x.max())
        more = max(0.0, LEAST_SPAN - (high - low)) / 2.0
        return cls(low - more, high + more)

    @property
    def knots(self) -> FloatArray:
        inner = np.linspace(self.low, self.high, COEFFICIENTS - DEGREE + 1)
        return np.concatenate((np.full(DEGREE, self.low), inner, np.full(DEGREE, self.high)))

    @property
    def places(self) -> FloatArray:
        """Where the coefficients stand: a spline whose coefficients are these is the identity (Greville)."""
        return np.array([self.knots[i + 1 : i + DEGREE + 1].mean() for i in range(COEFFICIENTS)])

    def basis(self, x: FloatArray, derivative: int = 0) -> FloatArray:
        """What each coefficient adds to the spline, or to its slope, at x; shape (n, COEFFICIENTS)."""
        spline = interpolate.BSpline(self.knots, np.eye(COEFFICIENTS), DEGREE)
        inside = np.clip(x, self.low, self.high)
        slope = np.asarray(spline(inside, 1))
        return slope if derivative else np.asarray(spline(inside)) + slope * (x - inside)[:, None]


def _without_variables(stars: _Stars, given: FloatArray, fewest: int) -> _Fit:
    """The fit without the sources that vary."""
    while True:
        fit = _fitted(stars, given, fewest)
        used = fit.used(fewest)
        if not used.any():
            return fit
        residual, error = _relative(fit, used)
        # Few comparisons hide what one of them does in the scatter about the curve: what counts is the excess over that.
        total = np.hypot(error, fit.scatter[:, None])
        scatter = np.array([column_scatter(residual[:, s], total[:, s], used[:, s]) for s in range(used.shape[1])])
        worst = most_variable(residual, total, used, np.hypot(scatter, float(np.median(fit.scatter))), 0.0)
        if worst is None:
            return fit
        stars = stars.without(worst)


def _fitted(stars: _Stars, given: FloatArray, fewest: int) -> _Fit:
    """Curves and brightnesses in turn, until neither changes; `given` are logarithms, NaN where there is none."""
    fixed = np.isfinite(given)
    if not ((stars.known & stars.seen & fixed).sum(axis=1) >= fewest).any():
        fixed = np.zeros(len(given), bool)
    fit = _Fit.begun(stars, np.where(fixed, given, np.nan) if fixed.any() else _first_brightness(stars), fixed)
    if not fit.used(fewest).any():  # what is left where sources vary
        fit.x = np.where(fixed, fit.x, np.nan)
        return fit
    for _ in range(ROUNDS):
        before = fit.x
        _fit_curves(fit, fewest)
        _fit_brightness(fit)
        if not fixed.any():
            fit.x = _straightened(fit, fewest)
        same = np.isfinite(before) == np.isfinite(fit.x)
        if same.all() and np.nanmax(np.abs(fit.x - before), initial=0.0) < CLOSE:
            break
    _fit_curves(fit, fewest)
    return fit


def _first_brightness(stars: _Stars) -> FloatArray:
    """Logarithms of the brightness as if all curves were parallel."""
    positive = stars.known & (stars.flux > 0)
    logs = np.where(positive, np.log(np.where(positive, stars.flux, 1.0)), np.nan)
    x = median_of(logs)
    for _ in range(5):
        offset = median_of(logs - x, axis=1)
        x = median_of(logs - offset[:, None])
    return x


def _fit_curves(fit: _Fit, fewest: int) -> None:
    """Each plate's curve at the brightnesses as they are."""
    fit.spline = _Spline.over(fit.x[np.isfinite(fit.x)])
    basis = fit.spline.basis(np.nan_to_num(fit.x, nan=fit.spline.low))
    counts = fit.used(fewest).sum(axis=0)
    # What a source's own flux adds to its brightness makes residuals smaller.
    share = np.where(fit.fixed | (counts < 2), 0.0, 1.0 / np.maximum(counts, 2))
    used = fit.used(fewest)
    for row, mine in enumerate(used):
        if mine.any():
            _fit_curve(fit, row, basis[mine], mine, share[mine])
    residual, error = _relative(fit, used)
    residual = residual / np.sqrt(1.0 - fit.taken)
    common = excess_scatter(residual[used], error[used])
    for row, mine in enumerate(used):
        fit.scatter[row] = frame_scatter(residual[row], error[row], mine, common) if mine.any() else common


def _fit_curve(fit: _Fit, row: int, basis: FloatArray, mine: Known, share: FloatArray) -> None:
    """One plate's coefficients, their covariance and the scatter about the curve; Gauss-Newton with Huber's weights."""
    value, error = fit.stars.flux[row, mine], fit.stars.flux_err[row, mine]
    places = fit.spline.places
    smooth = np.diff(np.diff(np.eye(COEFFICIENTS), axis=0) / np.diff(places)[:, None], axis=0) / SLOPE_CHANGE
    least = LEAST_SLOPE * np.concatenate(([0.0], np.cumsum(np.diff(places))))
    now = fit.coefficients[row]
    if not np.isfinite(now).all():
        positive = value > 0
        logs = np.log(value[positive]) - (basis @ places)[positive]
        now = places + (np.median(logs) if positive.any() else 0.0)
    scatter = fit.scatter[row]
    rising = np.tril(np.ones((COEFFICIENTS, COEFFICIENTS)))
    for _ in range(STEPS):
        model = np.exp(basis @ now)
        relative, sigma = value / model - 1.0, error / model
        total = np.hypot(sigma, scatter)
        weight = _weight(relative, total)
        wanted = basis @ now + np.clip(relative, -LARGEST_STEP, LARGEST_STEP)
        matrix = np.concatenate((np.sqrt(weight)[:, None] * basis, smooth))
        goal = np.concatenate((np.sqrt(weight) * wanted, np.zeros(len(smooth))))
        base = least + now.min() - 10.0
        rest = optimize.nnls(matrix @ rising, goal - matrix @ base)[0]
        now = base + rising @ rest
    covariance = np.linalg.inv((weight[:, None] * basis).T @ basis + smooth.T @ smooth)
    leverage = weight * np.einsum("si,ij,sj->s", basis, covariance, basis)
    fit.coefficients[row], fit.covariance[row] = now, covariance
    fit.taken[row, mine] = np.clip(leverage + share, 0.0, 0.9)


def _fit_brightness(fit: _Fit) -> None:
    """Brightness of the sources whose flux is not given, from the curves as they are."""
    solved = np.asarray(np.isfinite(fit.coefficients).all(axis=1))
    flux, flux_err, known = fit.stars.flux, fit.stars.flux_err, fit.stars.known & solved[:, None]
    free = known.any(axis=0) & ~fit.fixed
    if not free.any():
        return
    start = np.where(np.isfinite(fit.x), fit.x, (fit.spline.low + fit.spline.high) / 2.0)
    x = start.copy()
    coefficients = np.where(solved[:, None], fit.coefficients, 0.0)
    for _ in range(STEPS):
        model = np.exp(coefficients @ fit.spline.basis(x).T)
        slope = coefficients @ fit.spline.basis(x, 1).T
        relative = np.where(known, flux / model - 1.0, 0.0)
        total = np.where(known, np.hypot(flux_err / model, fit.scatter[:, None]), 1.0)
        weight = np.where(known, _weight(relative, total), 0.0)
        pull = np.clip(relative, -LARGEST_STEP, LARGEST_STEP)
        bottom = (weight * slope**2).sum(axis=0)
        step = (weight * slope * pull).sum(axis=0) / np.where(bottom > 0, bottom, 1.0)
        x = np.clip(x + np.where(free, np.clip(step, -LARGEST_STEP, LARGEST_STEP), 0.0), *fit.bounds)
    fit.x = np.where(free, x, fit.x)


def _weight(residual: FloatArray, error: FloatArray) -> FloatArray:
    """Of a residual in least squares, by Huber."""
    return np.asarray(np.minimum(1.0, HUBER / np.maximum(np.abs(residual) / error, 1e-300)) / error**2)


def _straightened(fit: _Fit, fewest: int) -> FloatArray:
    """The brightnesses after the change of scale that makes the median curve a straight line of slope one.

    A measured flux tells a brightness only up to such a change, which is the same for all plates.
    """
    solved = np.asarray(fit.used(fewest).any(axis=1))
    middle = np.median(fit.coefficients[solved], axis=0)
    x = fit.spline.basis(np.nan_to_num(fit.x, nan=fit.spline.low)) @ middle
    return np.where(np.isfinite(fit.x), x, np.nan)


def _relative(fit: _Fit, used: Known) -> tuple[FloatArray, FloatArray]:
    """Residuals and errors as fractions of the model, shape (n_frames, n_sources), NaN where not used."""
    x = np.nan_to_num(fit.x, nan=fit.spline.low)
    with np.errstate(invalid="ignore"):
        model = np.where(used, np.exp(np.nan_to_num(fit.coefficients) @ fit.spline.basis(x).T), np.nan)
    return fit.stars.flux / model - 1.0, fit.stars.flux_err / model
