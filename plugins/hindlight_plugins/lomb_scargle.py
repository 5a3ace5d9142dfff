"""Period search with the generalised Lomb-Scargle periodogram: sinusoids in unevenly sampled fluxes.

It finds variation that is roughly sinusoidal and sampled over several cycles. Narrow pulses, and periods shorter than
about twice the exposure, are not its business. Every channel is searched on its own; the best one speaks.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace

import nifty_ls
import numpy as np
from numpy.typing import NDArray
from scipy import special

from hindlight import Column, Ephemeris, LightCurve, PeriodResult, PeriodSearch, hookimpl, setting, weighted_mean

Array = NDArray[np.float64]
NAN = float("nan")

FEWEST_TIMES = 5  # distinct times: four parameters and one to spare
SAME_PEAK = 0.5  # frequencies closer than this many resolution elements 1/T are one peak
PEAKS = 20  # independent peaks looked at beside the best
WINDOW_PEAKS = 10  # peaks of the spectral window that make aliases
HARMONICS = (0.5, 2.0, 1 / 3, 3.0)
SHAPE_TERMS = 3  # harmonics that describe the shape of a cycle
SPARE_SAMPLES = 8  # samples beyond the terms of a fit, to judge it by
CYCLES_DIFFER_P = 1e-4
ZOOMS = 8  # each narrows the bracket around a peak five times
WALK_TIMES = 16  # time scales of the damped random walk, from the shortest gaps to the whole span
WALK_VARIANCES = np.array([0.0, 0.01, 0.03, 0.1, 0.2, 0.4, 0.7, 1.0, 1.5, 3.0])  # in units of the flux's variance
TIE = 1e-7  # powers closer than this are equal: the lowest frequency is taken, whatever the last bits say
SHUFFLES_AT_ONCE = 11  # bounds the memory their periodograms take
SEED = 20080916  # of the shuffles; fixed, so that an answer repeats


@dataclass(frozen=True)
class LombScargle(PeriodSearch):
    """Generalised Lomb-Scargle search (Zechmeister & Kuerster 2009, A&A 496, 577), one channel at a time.

    Frequencies run from 1/T in steps of 1/(samples_per_peak T) to smearing / (longest exposure), or as far as
    `max_frequencies` reach: `shortest_period` says how far that was.
    """

    columns = (
        Column("score", "minus log10 of how many peaks of this height or more white noise is expected to show in the "
               "search, all channels counted", unusual="high", ucd="stat.value"),
        Column("power", "fraction of chi-square that the sinusoid takes away, 0 to 1", ucd="stat.value"),
        Column("period", "period of the highest peak", unit="s", ucd="time.period"),
        Column("log10_fap", "log10 of the false-alarm probability in white noise, an upper bound",
               ucd="stat.probability"),
        Column("amplitude", "semi-amplitude of the sinusoid before the exposures smeared it (not corrected where the "
               "exposure is unknown)", ucd="phot.flux;src.var.amplitude", flux_power=1),
        Column("cycles", "time from first to last sample in periods", ucd="meta.number"),
        Column("shortest_period", "shortest period searched", unit="s", ucd="time.period;stat.min"),
        Column("window", "how strongly the times of the samples alone repeat with this period, 0 to 1",
               ucd="stat.value"),
        Column("channel", "channel of the highest peak", dtype="str", ucd="meta.id"),
        Column("log10_fap_red", "log10 of the false-alarm probability if the source wanders without a period, as a "
               "damped random walk of the size and time scale that fit best; blank where not asked",
               ucd="stat.probability"),
        Column("permutation_p", "chance that the same fluxes in random order show a peak as high; blank unless all "
               "other tests were passed", ucd="stat.probability"),
        Column("rival_log_odds", "natural logarithm of the odds of the best period against the next one that is no "
               "harmonic of it; blank where none was found or none looked for", ucd="stat.likelihood"),
        Column("verdict", "whether the period is established and why; blank where that was not asked", dtype="str",
               ucd="meta.note"),
    )  # fmt: skip
    samples_per_peak: int = setting(5, "frequencies per resolution element 1/T", minimum=2, maximum=100)
    smearing: float = setting(
        0.6, "highest frequency times longest exposure: beyond it the exposures smear the variation out", minimum=0.01
    )
    max_frequencies: int = setting(200_000, "most frequencies searched in a channel", minimum=10, maximum=50_000_000)
    false_alarm: float = setting(
        1e-3, "false-alarm probability that an established period stays below", minimum=0, maximum=1
    )
    permutations: int = setting(
        99, "random orders of the fluxes, none of which may reach the peak of an established period", minimum=0
    )
    min_cycles: float = setting(3.0, "fewest cycles that an established period was seen for", minimum=1)
    min_odds: float = setting(
        1000.0, "least odds of an established period against every other that is no harmonic of it", minimum=1
    )
    max_window: float = setting(
        0.5, "strength of the times' own periodicity above which no period is established", minimum=0, maximum=1
    )

    def search(self, curves: Sequence[LightCurve]) -> dict[str, float | str]:
        """The declared columns for the best channel; blank where no channel can be searched (see `prepare`)."""
        peak = self._best_peak(curves)
        return _blank() if peak is None else self._values(peak)

    def examine(self, curves: Sequence[LightCurve]) -> PeriodResult:
        """The period with its ephemeris, all others still possible, and whether it is established.

        Ephemerides are those within `min_odds` of the best. Log-odds are -delta chi2 / 2, chi2 divided by its reduced
        value at the best period where that exceeds 1.
        """
        peak = self._best_peak(curves)
        if peak is None:
            return PeriodResult(_blank() | {"verdict": "not established: no channel can be searched"})
        rivals = self._rivals(peak)
        if rivals and rivals[0][1] > peak.power + TIE:  # an alias beyond the frequencies searched
            peak = replace(peak, frequency=rivals[0][0], power=rivals[0][1])
            rivals = self._rivals(peak)
        odds = [(frequency, peak.log_odds(power)) for frequency, power in rivals]
        against = [-o for f, o in odds if not _is_harmonic(f, peak)]
        red = log_fap_red(peak) / math.log(10)
        values = self._values(peak) | {"rival_log_odds": min(against, default=NAN), "log10_fap_red": red}
        reasons = self._doubts(peak, values)
        if not reasons and self.permutations:
            values["permutation_p"] = p = self._permutation_p(peak)
            if p > 1 / (self.permutations + 1):
                reasons = [f"fluxes in random order reach the peak (p = {p:.2g})"]
        values["verdict"] = "not established: " + "; ".join(reasons) if reasons else _praise(values)
        kept = [(peak.frequency, 0.0)] + [(f, o) for f, o in odds if o > -math.log(self.min_odds)]
        ephemerides = tuple(ephemeris(peak.series, f, min(o, 0.0)) for f, o in kept)
        return PeriodResult(values, ephemerides, established=not reasons)

    def grid(self, series: Series) -> Grid | None:
        """The frequencies to search, None where the exposures leave none."""
        low = 1 / series.span
        step = low / self.samples_per_peak
        count = (self._highest_frequency(series) - low) / step + 1
        return None if count < 3 else Grid(low, step, int(min(count, self.max_frequencies)))

    def _highest_frequency(self, series: Series) -> float:
        return self.smearing / series.longest_exposure if series.longest_exposure > 0 else math.inf

    def _best_peak(self, curves: Sequence[LightCurve]) -> Peak | None:
        """The peak of least expected number of false ones, over the channels that can be searched."""
        peaks = []
        for curve in curves:
            series = prepare(curve)
            grid = None if series is None else self.grid(series)
            if series is not None and grid is not None:
                power = periodogram(series, grid)
                at = grid.low + grid.step * settle(series, grid, power)
                peaks.append(Peak(series, grid, power, *refine(series, at, grid.step, grid.low, grid.high)))
        if not peaks:
            return None
        return replace(min(peaks, key=lambda peak: round(peak.log_false_peaks, 6)), channels=len(peaks))

    def _values(self, peak: Peak) -> dict[str, float | str]:
        series, frequency = peak.series, peak.frequency
        return _blank() | {
            "score": -(peak.log_false_peaks + math.log(peak.channels)) / math.log(10),
            "power": peak.power,
            "period": 1 / frequency,
            "log10_fap": peak.log_fap / math.log(10),
            "amplitude": float(np.hypot(*fit(series, frequency)[1:])) * series.scale / smear(series, frequency),
            "cycles": series.span * frequency,
            "shortest_period": 1 / peak.grid.high,
            "window": float(window(series.t, np.array([frequency]))[0]),
            "channel": series.channel,
        }

    def _rivals(self, peak: Peak) -> list[tuple[float, float]]:
        """Frequency and power of every other peak worth a look, highest first: harmonics, aliases, the next peaks."""
        series, grid = peak.series, peak.grid
        highest = max(self._highest_frequency(series), grid.high)
        wanted = [factor * peak.frequency for factor in HARMONICS]
        wanted += aliases(peak.frequency, window_peaks(series, grid))
        wanted += [grid.low + grid.step * k for k in highest_maxima(peak.grid_power, PEAKS)]
        found = [refine(series, f, grid.step, grid.low, highest) for f in wanted if grid.low - grid.step < f <= highest]
        rivals: list[tuple[float, float]] = []
        for frequency, power in sorted(found, key=lambda pair: (-round(pair[1] / TIE), pair[0])):
            known = [peak.frequency, *(f for f, _ in rivals)]
            if min(abs(frequency - f) for f in known) * series.span > SAME_PEAK:
                rivals.append((frequency, power))
        return rivals

    def _doubts(self, peak: Peak, values: dict[str, float | str]) -> list[str]:
        """Each reason why the period is not established, apart from the shuffles."""
        series, frequency = peak.series, peak.frequency
        limit = math.log10(max(self.false_alarm, 1e-300))
        reasons = []
        if float(values["log10_fap"]) > limit:
            reasons.append(f"the false-alarm probability is 1e{values['log10_fap']:.1f}")
        elif float(values["log10_fap_red"]) > limit:
            reasons.append(
                f"a source that wanders without a period does so with chance 1e{values['log10_fap_red']:.1f}"
            )
        if series.span * frequency < self.min_cycles:
            reasons.append(f"only {series.span * frequency:.1f} cycles were seen")
        near = frequency + np.linspace(-SAME_PEAK, SAME_PEAK, 5) / series.span
        if window(series.t, near).max() > self.max_window:
            reasons.append("the times of the samples repeat with this period themselves")
        if multiple := true_multiple(series, frequency):
            reasons.append(
                f"one cycle in {multiple} differs from the others: the true period is a multiple of this one"
            )
        if float(values["rival_log_odds"]) < math.log(self.min_odds):
            reasons.append(f"another period is possible, odds {math.exp(float(values['rival_log_odds'])):.3g} to 1")
        return reasons

    def _permutation_p(self, peak: Peak) -> float:
        """Chance that a source which varies as much, but without period, shows a peak as high on the same grid.

        (r + 1) / (n + 1), from n random orders of the fluxes (each with its error) over the same times.
        """
        rng = np.random.default_rng(SEED)
        to_reach = float(peak.grid_power.max()) - TIE
        reached = 0
        for start in range(0, self.permutations, SHUFFLES_AT_ONCE):
            count = min(SHUFFLES_AT_ONCE, self.permutations - start)
            shuffled = [peak.series.shuffled(rng) for _ in range(count)]
            for series, power in zip(shuffled, periodograms(shuffled, peak.grid), strict=True):
                reached += bool(power[settle(series, peak.grid, power)] >= to_reach)
        return (reached + 1) / (self.permutations + 1)


@dataclass(frozen=True)
class Grid:
    """Evenly spaced frequencies in Hz."""

    low: float
    step: float
    count: int

    @property
    def high(self) -> float:
        """The highest."""
        return self.low + self.step * (self.count - 1)


@dataclass(frozen=True, eq=False)
class Series:
    """One channel made ready: arrays of shape (n,) in order of time.

    t
        Seconds from `middle`, the weighted mean time.
    y, error
        Flux less its weighted mean, and error, both over `scale`, the weighted rms of the flux.
    weight
        1 / error^2, of sum 1.
    exposure
        Seconds, NaN where unknown.
    chi2
        Chi-square of the constant.
    """

    t: Array
    y: Array
    error: Array
    weight: Array
    exposure: Array
    middle: float
    scale: float
    chi2: float
    channel: str

    @property
    def span(self) -> float:
        """Seconds from the first to the last sample."""
        return float(self.t[-1] - self.t[0])

    @property
    def longest_exposure(self) -> float:
        """Seconds, 0 where none is known."""
        return float(np.nanmax(self.exposure, initial=0.0))

    def shuffled(self, rng: np.random.Generator) -> Series:
        """The same fluxes, each with its error, in random order."""
        order = rng.permutation(self.t.size)
        return replace(self, y=self.y[order], error=self.error[order], weight=self.weight[order])


@dataclass(frozen=True, eq=False)
class Peak:
    """A peak of a periodogram, the best of as many channels."""

    series: Series
    grid: Grid
    grid_power: Array
    frequency: float
    power: float
    channels: int = 1

    @property
    def log_false_peaks(self) -> float:
        """Natural logarithm of the number of peaks as high expected from white noise in this channel."""
        return float(np.logaddexp(*self._baluev()))

    @property
    def log_fap(self) -> float:
        """Natural logarithm of the false-alarm probability, 1 - (1 - FAP_1) e^-tau, for the best of all channels."""
        log_single, log_tau = self._baluev()
        single = -math.expm1(log_single) if log_single < 0 else 0.0  # 1 - FAP_1
        log_many = log_tau if log_tau < -20 else math.log(-math.expm1(-math.exp(min(log_tau, 700.0))))
        log_one = float(np.logaddexp(log_single, math.log(single) + log_many)) if single > 0 else 0.0
        if log_one < -20:
            return log_one + math.log(self.channels)
        return math.log(-math.expm1(self.channels * math.log1p(-math.exp(log_one)))) if log_one < -1e-15 else 0.0

    def _baluev(self) -> tuple[float, float]:
        """Natural logarithms of FAP_1 and tau of Baluev 2008 (MNRAS 385, 1279); see `baluev`."""
        series = self.series
        variance = float((series.weight * series.t**2).sum())
        return baluev(self.power, series.t.size, max(self.grid.high, self.frequency), variance)

    def log_odds(self, power: float) -> float:
        """Natural logarithm of the odds of a sinusoid of this power against the best: -delta chi2 / 2, scaled."""
        return -self.series.chi2 * (self.power - power) / 2 / error_scale(self.series, self.power)


def prepare(curve: LightCurve) -> Series | None:
    """A channel made ready; None where it is signed, has too few distinct times or does not vary at all."""
    curve = curve.timed
    if curve.channel.signed or len(curve) < FEWEST_TIMES or np.unique(curve.t_tdb_s).size < FEWEST_TIMES:
        return None
    if curve.flux.max() == curve.flux.min():
        return None
    weight = (curve.flux_err / curve.flux_err.min()) ** -2.0
    weight /= weight.sum()
    start = float(curve.t_tdb_s[0])
    middle = start + float((weight * (curve.t_tdb_s - start)).sum())
    y = curve.flux - weighted_mean(curve.flux, curve.flux_err)[0]
    scale = float((weight * y**2).sum()) ** 0.5
    if not scale > 0:
        return None
    chi2 = float(((y / curve.flux_err) ** 2).sum())
    return Series(
        t=curve.t_tdb_s - middle,
        y=y / scale,
        error=curve.flux_err / scale,
        weight=weight,
        exposure=np.array(curve.exposure_s),
        middle=middle,
        scale=scale,
        chi2=chi2,
        channel=curve.channel.label,
    )


def periodogram(series: Series, grid: Grid) -> Array:
    """Power 1 - chi2(f) / chi2_0 on a grid, shape (count,), by non-uniform fast Fourier transforms on one thread.

    0 where the model is degenerate. Good to about 1e-9 away from such frequencies; `exact_power` is exact.
    """
    return _transform(series.t, series.y, series.error / series.error.min(), grid, fit_mean=True)


def periodograms(series: Sequence[Series], grid: Grid) -> Array:
    """`periodogram` of several series over the same times, shape (len(series), count), in half the time."""
    y = np.stack([one.y for one in series])
    error = np.stack([one.error / one.error.min() for one in series])
    return _transform(series[0].t, y, error, grid, fit_mean=True)


def _transform(t: Array, y: Array, error: Array, grid: Grid, *, fit_mean: bool) -> Array:
    result = nifty_ls.lombscargle(
        t,
        y,
        error,
        fmin=grid.low,
        fmax=grid.high,
        Nf=grid.count,
        fit_mean=fit_mean,
        center_data=fit_mean,
        backend="finufft",
        nthreads=1,
    )
    return np.nan_to_num(result.power, copy=False, nan=0.0, posinf=0.0, neginf=0.0)


def exact_power(series: Series, frequency: Array) -> Array:
    """Power at frequencies of shape (m,), by sums over the samples; shape (m,).

    Zechmeister & Kuerster 2009, eqs 5 and 7 to 15, with cosine and sine rotated to the axes of their covariance; an
    axis along which the model does not vary is left out.
    """
    phase = 2 * np.pi * frequency[:, None] * series.t
    cosine, sine = np.cos(phase), np.sin(phase)
    weight = series.weight
    cosine -= (weight * cosine).sum(axis=1, keepdims=True)
    sine -= (weight * sine).sum(axis=1, keepdims=True)
    cc = (weight * cosine**2).sum(axis=1)
    ss = (weight * sine**2).sum(axis=1)
    cs = (weight * cosine * sine).sum(axis=1)
    weighted = weight * series.y
    yc, ys = (weighted * cosine).sum(axis=1), (weighted * sine).sum(axis=1)
    tilt = 0.5 * np.arctan2(2 * cs, cc - ss)
    c, s = np.cos(tilt), np.sin(tilt)
    power = np.zeros(frequency.size)
    for along, variance in (
        (yc * c + ys * s, cc * c**2 + 2 * cs * c * s + ss * s**2),
        (ys * c - yc * s, cc * s**2 - 2 * cs * c * s + ss * c**2),
    ):
        power += np.divide(along**2, variance, out=np.zeros_like(power), where=variance > 1e-9)
    return np.minimum(power / (weighted * series.y).sum(), 1.0)


def settle(series: Series, grid: Grid, power: Array) -> int:
    """Index of the highest peak, after powers that degenerate frequencies made up have been put right in `power`."""
    while True:
        at = int(np.argmax(power >= power.max() - TIE))
        exact = float(exact_power(series, np.array([grid.low + grid.step * at]))[0])
        if abs(exact - power[at]) <= TIE:
            return at
        power[at] = exact


def refine(series: Series, frequency: float, half_width: float, low: float, high: float) -> tuple[float, float]:
    """Frequency and power of the highest point within `half_width` of a frequency, between `low` and `high`."""
    power = 0.0
    for _ in range(ZOOMS):
        trial = np.clip(frequency + half_width * np.linspace(-1, 1, 11), low, high)
        powers = exact_power(series, trial)
        at = int(np.argmax(powers))
        frequency, power = float(trial[at]), float(powers[at])
        half_width /= 5
    return frequency, power


def baluev(power: float, n: int, f_max: float, variance: float) -> tuple[float, float]:
    """Natural logarithms of FAP_1 and tau for a peak of this power (Baluev 2008, MNRAS 385, 1279).

    FAP_1 = (1-z)^((n-3)/2), tau = gamma W (1-z)^((n-4)/2) sqrt((n-1) z / 2), W = f_max sqrt(4 pi var t),
    gamma = sqrt(2/(n-1)) Gamma((n-1)/2) / Gamma((n-2)/2). `variance` is the weighted variance of the times in s^2.
    """
    log_rest = math.log(max(1 - power, 1e-15))
    log_gamma = 0.5 * math.log(2 / (n - 1)) + float(special.gammaln((n - 1) / 2) - special.gammaln((n - 2) / 2))
    log_height = 0.5 * math.log(max((n - 1) * power / 2, 1e-300))
    return (n - 3) / 2 * log_rest, log_gamma + _log_width(f_max, variance) + (n - 4) / 2 * log_rest + log_height


def _log_width(f_max: float, variance: float) -> float:
    return math.log(f_max) + 0.5 * math.log(4 * math.pi * variance)


def true_multiple(series: Series, frequency: float) -> int:
    """2 or 3 where every second or third cycle differs from the others beyond chance, 0 where none does.

    A narrow pulse has most power at a harmonic of its frequency. A Fourier series of that frequency (three terms) is
    compared with one of its half or third: the terms that only the latter has improve chi-square, scaled by its reduced
    value, more than chance (F test; common practice, no source).
    """
    for multiple in (2, 3):
        orders = np.arange(1, SHAPE_TERMS * multiple + 1)
        shared = orders % multiple == 0
        n_all = 1 + 2 * orders.size
        n_extra = 2 * int((~shared).sum())
        spare = series.t.size - n_all
        if spare < SPARE_SAMPLES:
            return 0
        full = _chi2_of_terms(series, frequency / multiple * orders)
        plain = _chi2_of_terms(series, frequency / multiple * orders[shared])
        ratio = max(plain - full, 0.0) / n_extra / max(full / spare, 1e-300)
        if special.fdtrc(n_extra, spare, ratio) < CYCLES_DIFFER_P:
            return multiple
    return 0


def _chi2_of_terms(series: Series, frequencies: Array) -> float:
    """Chi-square of the best constant with a cosine and a sine of each frequency."""
    phase = 2 * np.pi * np.outer(series.t, frequencies)
    design = np.column_stack([np.ones(series.t.size), np.cos(phase), np.sin(phase)]) / series.error[:, None]
    values = series.y / series.error
    solution = np.linalg.lstsq(design, values, rcond=None)[0]
    return float(((values - design @ solution) ** 2).sum())


def log_fap_red(peak: Peak) -> float:
    """Natural logarithm of the false-alarm probability of a peak among damped random walks, an upper bound.

    Z, the gain in ln likelihood when a sinusoid is added to the walk that fits best (variance and time scale on a
    coarse grid, fitted with and without it), has FAP = W exp(-Z) sqrt(Z) + exp(-Z) (Baluev 2008, for known noise).
    """
    series = peak.series
    gaps = np.diff(series.t)
    shortest = float(np.quantile(gaps[gaps > 0], 0.1))
    tau, variance = np.meshgrid(np.geomspace(shortest, series.span, WALK_TIMES), WALK_VARIANCES)
    phase = 2 * np.pi * peak.frequency * series.t
    columns = np.stack((series.y, np.ones_like(phase), np.cos(phase), np.sin(phase)))
    products, log_det = whitened_products(series, columns, variance.ravel(), tau.ravel())
    with_and_without = [float((_least_squares(products, k) + log_det).min()) for k in (4, 2)]
    z = max((with_and_without[1] - with_and_without[0]) / 2, 1e-300)
    log_width = _log_width(max(peak.grid.high, peak.frequency), float((series.weight * series.t**2).sum()))
    return min(-z + float(np.logaddexp(log_width + 0.5 * math.log(z), 0.0)) + math.log(peak.channels), 0.0)


def whitened_products(series: Series, columns: Array, variance: Array, tau: Array) -> tuple[Array, Array]:
    """Scalar products, shape (g, k, k), of k columns made white for g damped random walks, and log det, shape (g,).

    Columns have shape (k, n). Kelly, Bechtold & Siemiginowska 2009 (ApJ 698, 895), eqs 6 to 12, for walks of mean 0
    seen with the errors of the series.
    """
    state = np.zeros((tau.size, len(columns)))
    spread = variance.copy()
    products = np.zeros((*state.shape, len(columns)))
    log_det = np.zeros(tau.size)
    for i, gap in enumerate(np.append(np.diff(series.t), 0.0)):
        total = spread + series.error[i] ** 2
        surprise = columns[:, i] - state
        products += surprise[:, :, None] * surprise[:, None, :] / total[:, None, None]
        log_det += np.log(total)
        decay = np.exp(-gap / tau)
        share = spread / total
        state = decay[:, None] * (state + share[:, None] * surprise)
        spread = variance + decay**2 * (spread * (1 - share) - variance)
    return products, log_det


def _least_squares(products: Array, k: int) -> Array:
    """Chi-square that the columns 1 to k - 1 leave of column 0, shape (g,), from scalar products (g, k, k)."""
    inverse = np.linalg.pinv(products[:, 1:k, 1:k], rcond=1e-9, hermitian=True)
    cross = products[:, 0, 1:k]
    return products[:, 0, 0] - (cross[:, :, None] * inverse * cross[:, None, :]).sum(axis=(1, 2))


def window(t: Array, frequency: Array) -> Array:
    """Spectral window |sum e^(2 pi i f t)| / n of times at frequencies of shape (m,)."""
    return np.abs(np.exp(2j * np.pi * frequency[:, None] * t).mean(axis=1))


def window_peaks(series: Series, grid: Grid) -> list[float]:
    """Frequencies at which the times themselves repeat most strongly.

    Found as peaks of the periodogram, without a mean, of a source that is always 1 (VanderPlas 2018, ApJS 236, 16,
    section 7).
    """
    ones = np.ones_like(series.t)
    power = _transform(series.t, ones, ones, grid, fit_mean=False)
    return [grid.low + grid.step * k for k in highest_maxima(power, WINDOW_PEAKS)]


def highest_maxima(power: Array, count: int) -> list[int]:
    """Indices of the highest local maxima, ends included; of equal ones the lowest frequencies."""
    padded = np.concatenate(([-np.inf], power, [-np.inf]))
    maxima = np.flatnonzero((padded[1:-1] > padded[:-2]) & (padded[1:-1] >= padded[2:]))
    order = np.argsort(-np.round(power[maxima] / TIE), kind="stable")
    return [int(k) for k in maxima[order[:count]]]


def aliases(frequency: float, sampling: Sequence[float]) -> list[float]:
    """Frequencies that a source of this frequency may be mistaken for: f +- f_w, folded to be positive."""
    return [abs(frequency + sign * other) for other in sampling for sign in (-1, 1)]


def fit(series: Series, frequency: float) -> Array:
    """Offset, cosine and sine coefficients of the weighted least-squares sinusoid, in units of `scale`."""
    phase = 2 * np.pi * frequency * series.t
    model = np.stack((np.ones_like(phase), np.cos(phase), np.sin(phase)))
    weighted = model * series.weight
    matrix = (weighted[:, None] * model).sum(axis=2)  # plain sums: a threaded product would change last bits
    return np.linalg.pinv(matrix, rcond=1e-9, hermitian=True) @ (weighted * series.y).sum(axis=1)


def smear(series: Series, frequency: float) -> float:
    """Factor by which the exposures lower the amplitude: weighted mean of sin(pi f D) / (pi f D), 1 where unknown."""
    return float((series.weight * np.sinc(frequency * np.nan_to_num(series.exposure))).sum())


def error_scale(series: Series, power: float) -> float:
    """Reduced chi-square of a sinusoid of this power, where it exceeds 1: errors are taken to be too small by that."""
    return max(1.0, series.chi2 * (1 - power) / max(1, series.t.size - 4))


def ephemeris(series: Series, frequency: float, log_odds: float) -> Ephemeris:
    """The maximum nearest the weighted mean time, the period, and their covariance.

    From the curvature of chi-square in offset, both coefficients and frequency; errors are scaled up where the
    sinusoid leaves more scatter than they allow.
    """
    offset, cosine, sine = fit(series, frequency)
    phase = math.atan2(sine, cosine)
    epoch = phase / (2 * math.pi * frequency)
    angle = 2 * np.pi * frequency * series.t
    swing = sine * np.cos(angle) - cosine * np.sin(angle)  # model's derivative to its phase angle
    turns = series.t / series.span  # frequency in units of 1/T keeps the matrix well scaled
    slopes = np.stack((np.ones_like(angle), np.cos(angle), np.sin(angle), 2 * np.pi * turns * swing)) / series.error
    matrix = (slopes[:, None] * slopes).sum(axis=2)
    residual = (series.y - offset - cosine * np.cos(angle) - sine * np.sin(angle)) / series.error
    reduced = max(1.0, float((residual**2).sum()) / max(1, angle.size - 4))
    covariance = np.linalg.pinv(matrix, hermitian=True)[1:, 1:] * reduced
    power2 = max(cosine**2 + sine**2, 1e-300)
    to_epoch = np.array([-sine / power2, cosine / power2, -phase / (frequency * series.span)])
    to_epoch /= 2 * math.pi * frequency
    to_period = np.array([0.0, 0.0, -1 / (frequency**2 * series.span)])
    slope = np.stack((to_epoch, to_period))
    (ee, ep), (_, pp) = (slope @ covariance @ slope.T).tolist()
    return Ephemeris(
        epoch_tdb_s=series.middle + epoch,
        period_s=1 / frequency,
        covariance=((ee, ep, NAN), (ep, pp, NAN), (NAN, NAN, NAN)),
        log_odds=log_odds,
    )


def _is_harmonic(frequency: float, peak: Peak) -> bool:
    tolerance = SAME_PEAK / peak.series.span
    return any(abs(frequency - factor * peak.frequency) <= tolerance for factor in HARMONICS)


def _blank() -> dict[str, float | str]:
    return {column.name: "" if column.dtype == "str" else NAN for column in LombScargle.columns}


def _praise(values: dict[str, float | str]) -> str:
    shuffles = "" if math.isnan(float(values["permutation_p"])) else ", never reached by the fluxes in random order"
    return (
        f"established: {float(values['cycles']):.1f} cycles seen, false-alarm probability below "
        f"1e{float(values['log10_fap']):.1f}{shuffles}, every other period that is no harmonic is excluded"
    )


@hookimpl
def register_period_searches() -> list[type[PeriodSearch]]:
    """What this module offers."""
    return [LombScargle]
