"""The sinusoid search: agreement with a slow reference, recovery, false alarms, aliases, what is not established."""

from __future__ import annotations

import math

import numpy as np
import pytest
from astropy.timeseries import LombScargle as Reference
from scipy.stats import binom

from hindlight import Channel, LightCurve
from hindlight_plugins.lomb_scargle import (
    Grid,
    LombScargle,
    aliases,
    baluev,
    ephemeris,
    exact_power,
    periodogram,
    prepare,
    refine,
    settle,
    true_multiple,
    whitened_products,
    window,
    window_peaks,
)

DAY = 86400.0
SIDEREAL_DAY = 86164.0905
QUICK = LombScargle(max_frequencies=20_000, permutations=19)

TIMES = np.array([0.0, 1, 2, 4, 5, 7, 8, 10])
FLUX = np.array([1.2, 0.8, 1.1, 5.0, 4.4, 0.9, 1.3, 0.7])
ERROR = np.array([0.3, 0.4, 0.3, 0.5, 0.5, 0.4, 0.3, 0.4])


def make_curve(times, flux, error=1.0, exposure=60.0, channel="a", stokes="I") -> LightCurve:
    """A light curve with one error and exposure for all samples unless arrays are given."""
    n = len(times)
    return LightCurve.from_arrays(
        times,
        flux,
        np.broadcast_to(error, n),
        exposure_s=np.broadcast_to(exposure, n),
        channel=Channel(channel, stokes=stokes),
    )


def random_times(rng: np.random.Generator, n: int = 200, span: float = 100 * DAY, start: float = 7e8) -> np.ndarray:
    """Sorted random times."""
    return start + np.sort(rng.uniform(0, span, n))


def sinusoid(times, period: float, amplitude: float = 1.0, epoch: float = 7e8) -> np.ndarray:
    """A sinusoid with a maximum at `epoch`."""
    return amplitude * np.cos(2 * np.pi * (times - epoch) / period)


def test_published_powers():
    """Powers of the reference light curve agree with astropy 8.0.2, LombScargle(t, f, e).power(method='cython')."""
    series = prepare(LightCurve.from_arrays(TIMES, FLUX, ERROR))
    expected = [0.6313981453, 0.2915568724, 0.1556238929]
    np.testing.assert_allclose(exact_power(series, np.array([0.1, 0.2, 0.25])), expected, rtol=1e-9)
    assert series.chi2 == pytest.approx(95.07277, rel=1e-6)


@pytest.mark.parametrize("seed", range(3))
def test_agrees_with_the_slow_reference(seed):
    """Fast and exact powers agree with astropy's direct sums to 1e-9 over decades of unequal samples."""
    rng = np.random.default_rng(seed)
    times = random_times(rng, 300, 1e9)
    curve = make_curve(times, sinusoid(times, 1e6) + rng.normal(size=300), rng.uniform(0.3, 3, 300))
    series, grid = prepare(curve), LombScargle().grid(prepare(curve))
    assert grid.count == 200_000
    some = np.sort(rng.choice(grid.count, 400, replace=False))
    frequency = grid.low + grid.step * some
    slow = Reference(times - times.mean(), curve.flux, curve.flux_err).power(
        frequency, method="cython", assume_regular_frequency=False
    )
    np.testing.assert_allclose(periodogram(series, grid)[some], slow, rtol=0, atol=1e-9)
    np.testing.assert_allclose(exact_power(series, frequency), slow, rtol=0, atol=1e-10)


def test_result_agrees_with_the_reference_at_its_own_period():
    """The power reported is that of astropy's direct sums at the period reported, to 1e-9."""
    rng = np.random.default_rng(4)
    times = random_times(rng)
    curve = make_curve(times, sinusoid(times, 2e5) + rng.normal(size=200))
    values = LombScargle().search([curve])
    slow = Reference(times - times.mean(), curve.flux, curve.flux_err).power(1 / values["period"], method="slow")
    assert values["power"] == pytest.approx(float(slow), abs=1e-9)


def test_baluev_reference_values():
    """False-alarm probabilities agree with Baluev 2008, computed by hand and with astropy 8.0.2."""
    log_single, log_tau = baluev(0.3, 60, 2.0, 100**2 / 12)
    fap = 1 - (1 - math.exp(log_single)) * math.exp(-math.exp(log_tau))
    assert math.exp(log_single) == pytest.approx(3.84852e-5, rel=1e-5)
    assert fap == pytest.approx(0.0273076, rel=1e-5)
    rng = np.random.default_rng(42)
    times = np.sort(rng.uniform(0, 100, 60))
    flux = np.sin(2 * np.pi * times / 3.7) + rng.normal(0, 1, 60)
    values = LombScargle(samples_per_peak=10, smearing=2.0).search([make_curve(times, flux, exposure=1.0)])
    assert values["period"] == pytest.approx(3.70272, rel=2e-3)  # theirs is that of a grid
    assert values["power"] == pytest.approx(0.377330, rel=1e-2)
    theirs = Reference(times, flux, np.ones(60)).false_alarm_probability(
        values["power"], maximum_frequency=1 / values["shortest_period"], method="baluev"
    )
    assert 10 ** values["log10_fap"] == pytest.approx(
        float(theirs), rel=1e-3
    )  # its highest frequency is rounded to a grid


def test_score_stays_finite_and_grows_where_probabilities_underflow():
    """A score is carried in logarithms: it tells apart signals whose false-alarm probability is below 1e-300."""
    rng = np.random.default_rng(6)
    times = random_times(rng, 400)
    noise = rng.normal(size=400)
    scores = [QUICK.search([make_curve(times, noise + sinusoid(times, DAY * 3.3, a))])["score"] for a in (0, 10, 100)]
    assert scores[0] < 3 < 300 < scores[1] < scores[2] < math.inf


def test_recovery():
    """Of 40 sinusoids of half the noise's size in 200 samples at least 36 are found at their period."""
    rng = np.random.default_rng(7)
    found = 0
    for _ in range(40):
        period = DAY * 10 ** rng.uniform(0, 1)
        times = random_times(rng)
        values = QUICK.search([make_curve(times, sinusoid(times, period, 0.9) + rng.normal(size=200))])
        found += abs(values["period"] / period - 1) < 0.5 * period / (100 * DAY)
    assert found >= 36


def test_false_alarms_keep_their_rate():
    """Among 250 curves of noise no more fall below a false-alarm probability of 5 % than chance allows (p = 1e-4)."""
    rng = np.random.default_rng(8)
    search = LombScargle(max_frequencies=2000)
    below = 0
    for _ in range(250):
        times = random_times(rng, 60)
        error = rng.uniform(0.5, 2, 60)
        below += search.search([make_curve(times, error * rng.normal(size=60), error)])["log10_fap"] < math.log10(0.05)
    assert 0 < below <= binom.ppf(1 - 1e-4, 250, 0.05)


def test_ephemeris_of_a_sinusoid():
    """Period and epoch of 60 sinusoids lie within their errors as often as Gaussian errors do (p = 1e-4)."""
    rng = np.random.default_rng(9)
    period, epoch = 2.345 * DAY, 7.0e8 + 12345
    inside = np.zeros(2, dtype=int)
    for _ in range(60):
        times = random_times(rng)
        series = prepare(make_curve(times, sinusoid(times, period, 2.0, epoch) + rng.normal(size=200)))
        found = ephemeris(series, refine(series, 1 / period, 1e-7, 1e-7, 1e-3)[0], 0.0)
        cycles = (found.epoch_tdb_s - epoch) / period
        misses = (cycles - round(cycles)) * period, found.period_s - period
        inside += [abs(miss) < found.covariance[k][k] ** 0.5 for k, miss in enumerate(misses)]
    assert (inside >= binom.ppf(1e-4, 60, 0.6827)).all()
    assert (inside <= binom.ppf(1 - 1e-4, 60, 0.6827)).all()


def test_errors_agree_with_published_formulas():
    """Errors of period and phase of even sampling are those of Montgomery & O'Donoghue 1999 (DSSN 13, 28).

    sigma_f = sqrt(6/N) sigma / (pi T a), sigma_phase = sqrt(2/N) sigma / a.
    """
    n, span, period, amplitude = 4000, 1e6, 1e6 / 37.3, 4.0
    times = np.linspace(0, span, n)
    noise = np.random.default_rng(10).normal(size=n)
    series = prepare(make_curve(times, sinusoid(times, period, amplitude, 0.0) + noise))
    found = ephemeris(series, refine(series, 1 / period, 0.2 / span, 1 / span, 1.0)[0], 0.0)
    period_err = (6 / n) ** 0.5 / (math.pi * span * amplitude) * period**2
    assert found.covariance[1][1] ** 0.5 == pytest.approx(period_err, rel=0.05)
    assert found.covariance[0][0] ** 0.5 == pytest.approx((2 / n) ** 0.5 / amplitude * period / 2 / math.pi, rel=0.05)
    assert abs(found.epoch_tdb_s - series.middle) <= period / 2


def test_a_clear_sinusoid_is_established():
    """A sinusoid sampled at random over many cycles is established, with one ephemeris and a sentence."""
    rng = np.random.default_rng(12)
    times = random_times(rng)
    result = QUICK.examine([make_curve(times, 5 + sinusoid(times, 3 * DAY, 1.5) + rng.normal(size=200))])
    assert result.established
    assert result.values["verdict"].startswith("established: 33")
    assert result.values["permutation_p"] == pytest.approx(1 / 20)
    assert result.values["rival_log_odds"] > math.log(1000)
    assert result.ephemerides[0].period_s == result.values["period"] == pytest.approx(3 * DAY, rel=2e-3)
    assert result.ephemerides[0].log_odds == 0
    cycles = (result.ephemerides[0].epoch_tdb_s - 7e8) / result.values["period"]
    assert abs(cycles - round(cycles)) < 0.1


def test_search_and_examination_agree():
    """The examination gives the columns of the search, completed."""
    rng = np.random.default_rng(13)
    times = random_times(rng)
    curve = make_curve(times, sinusoid(times, 3 * DAY, 1.5) + rng.normal(size=200))
    quick, full = QUICK.search([curve]), QUICK.examine([curve]).values
    completed = {"log10_fap_red", "permutation_p", "rival_log_odds", "verdict"}
    assert quick.keys() == full.keys() == {column.name for column in LombScargle.columns}
    assert {k: v for k, v in quick.items() if k not in completed} == {
        k: v for k, v in full.items() if k not in completed
    }


def test_noise_is_not_established():
    """Of 15 curves of white noise none is established; the sentence says why."""
    rng = np.random.default_rng(14)
    for _ in range(15):
        result = QUICK.examine([make_curve(random_times(rng), rng.normal(size=200))])
        assert not result.established
        assert "false-alarm probability" in result.values["verdict"]


@pytest.mark.parametrize("length", [1, 5, 30, 80])
def test_a_lone_flare_is_not_established(length):
    """A source that was bright once, for one sample or for many in a row, has no period."""
    rng = np.random.default_rng(15)
    for start in (0, 40, 100):
        flux = rng.normal(size=200)
        flux[start : start + length] += 10
        assert not QUICK.examine([make_curve(random_times(rng), flux)]).established


def test_a_few_flares_at_random_are_not_established():
    """Ten flares at random times are no period."""
    rng = np.random.default_rng(16)
    for _ in range(10):
        flux = rng.normal(size=200)
        flux[rng.choice(200, 10, replace=False)] += 20
        assert not QUICK.examine([make_curve(random_times(rng), flux)]).established


def test_a_slow_drift_is_not_established():
    """A trend, or two cycles, is no period."""
    rng = np.random.default_rng(17)
    times = random_times(rng)
    for signal in ((times - 7e8) / (10 * DAY), sinusoid(times, 50 * DAY, 5)):
        result = QUICK.examine([make_curve(times, signal + rng.normal(size=200))])
        assert not result.established
        assert "cycles" in result.values["verdict"]


def wander(rng: np.random.Generator, times: np.ndarray, tau: float) -> np.ndarray:
    """A damped random walk of unit variance."""
    flux = rng.normal(size=times.size)
    for i, gap in enumerate(np.diff(times)):
        decay = math.exp(-gap / tau)
        flux[i + 1] = decay * flux[i] + math.sqrt(1 - decay**2) * flux[i + 1]
    return flux


@pytest.mark.parametrize("tau_days", [1, 5, 30])
def test_wandering_sources_are_not_established(tau_days):
    """Of 16 sources that wander without a period at most one passes for periodic, though white noise is ruled out."""
    rng = np.random.default_rng(18)
    passed, red = 0, 0
    for _ in range(16):
        times = random_times(rng)
        result = QUICK.examine([make_curve(times, 5 * wander(rng, times, tau_days * DAY) + rng.normal(size=200))])
        passed += result.established
        red += result.values["log10_fap"] < -3 < result.values["log10_fap_red"]
    assert passed <= 1
    assert red >= 5


def test_whitening_agrees_with_the_full_covariance():
    """Scalar products and determinant of the recursion are those of the dense covariance matrix, ties included."""
    rng = np.random.default_rng(32)
    times = np.sort(rng.integers(0, 60, 40)) * 1000.0
    series = prepare(make_curve(times, rng.normal(size=40), rng.uniform(0.5, 2, 40)))
    columns = np.stack((series.y, np.ones(40), np.sin(series.t / 5000)))
    variance, tau = np.array([0.0, 0.3, 2.0]), np.array([3000.0, 1000.0, 1e5])
    products, log_det = whitened_products(series, columns, variance, tau)
    for k in range(3):
        apart = np.abs(series.t[:, None] - series.t)
        covariance = variance[k] * np.exp(-apart / tau[k]) + np.diag(series.error**2)
        np.testing.assert_allclose(products[k], columns @ np.linalg.solve(covariance, columns.T), rtol=1e-9, atol=1e-9)
        assert log_det[k] == pytest.approx(np.linalg.slogdet(covariance)[1])


def test_a_daily_effect_is_not_established():
    """A flux that follows the hour of the night, with samples at nearly the same hour each night, is the times' own."""
    rng = np.random.default_rng(19)
    times = 7e8 + np.arange(200) * DAY + rng.normal(0, 0.06 * DAY, 200)
    result = QUICK.examine([make_curve(times, 30 * np.sin(2 * np.pi * times / DAY) + rng.normal(size=200))])
    assert not result.established
    assert "themselves" in result.values["verdict"] or "another period" in result.values["verdict"]
    assert result.values["window"] > 0.5 or result.values["rival_log_odds"] < math.log(1000)


def test_alias_frequencies():
    """Aliases of 1320 s by one and two cycles a sidereal day are the exact values of 1/P = |1/1320 +- k/86164.0905|."""
    found = 1 / np.array(aliases(1 / 1320, [1 / SIDEREAL_DAY, 2 / SIDEREAL_DAY]))
    np.testing.assert_allclose(np.sort(found), [1280.759, 1300.083, 1340.536, 1361.722], atol=5e-4)


def test_window_peaks_of_nightly_samples():
    """Samples at one hour angle make peaks of the spectral window at multiples of one cycle a sidereal day."""
    rng = np.random.default_rng(20)
    times = 7e8 + np.sort(rng.choice(400, 200, replace=False)) * SIDEREAL_DAY + rng.normal(0, 900, 200)
    series = prepare(make_curve(times, rng.normal(size=200), exposure=3600.0))
    peaks = np.array(window_peaks(series, LombScargle().grid(series))) * SIDEREAL_DAY
    for k in (1, 2, 3):
        assert np.abs(peaks - k).min() < 0.01
    assert window(series.t, np.array([1 / SIDEREAL_DAY]))[0] > 0.99


def test_nightly_samples_leave_the_aliases_possible():
    """With one sample a night at one hour angle all aliases of 1320 s by sidereal days stay in the list: no claim."""
    rng = np.random.default_rng(21)
    times = 7e8 + np.arange(120) * SIDEREAL_DAY + rng.normal(0, 20, 120)
    curve = make_curve(times, sinusoid(times, 1320.0, 3) + rng.normal(size=120), exposure=60.0)
    result = LombScargle(max_frequencies=60_000).examine([curve])
    periods = np.array([entry.period_s for entry in result.ephemerides])
    odds = [entry.log_odds for entry in result.ephemerides]
    assert not result.established
    assert "another period" in result.values["verdict"]
    assert odds == sorted(odds, reverse=True)
    assert odds[0] == 0
    cycles_per_day = SIDEREAL_DAY / periods
    assert np.abs((cycles_per_day - SIDEREAL_DAY / 1320 + 0.5) % 1 - 0.5).min() < 0.02
    assert len(periods) > 5


def test_an_alias_beyond_the_grid_can_win():
    """A period shorter than the frequencies searched reach is found as an alias of the peak that they show."""
    rng = np.random.default_rng(22)
    times = 7e8 + np.arange(200) * SIDEREAL_DAY + rng.normal(0, 3000, 200)
    curve = make_curve(times, sinusoid(times, 0.4 * SIDEREAL_DAY, 5) + rng.normal(size=200), exposure=60.0)
    search = LombScargle(max_frequencies=2000, permutations=0)  # up to 2 cycles a sidereal day
    assert search.search([curve])["period"] > 0.45 * SIDEREAL_DAY
    result = search.examine([curve])
    assert result.values["period"] == pytest.approx(0.4 * SIDEREAL_DAY, rel=1e-3)
    assert result.values["power"] > search.search([curve])["power"]


def test_a_harmonic_does_not_stand_in_the_way():
    """A signal with a strong first overtone is established, whichever of the two periods is the best."""
    rng = np.random.default_rng(23)
    times = random_times(rng, 300)
    signal = sinusoid(times, 4 * DAY, 2.0) + sinusoid(times, 2 * DAY, 1.9)
    result = QUICK.examine([make_curve(times, signal + rng.normal(size=300))])
    assert result.established
    ratio = result.values["period"] / DAY
    assert min(abs(ratio - 4), abs(ratio - 2)) < 0.01


@pytest.mark.parametrize("seed", range(4))
def test_half_the_period_of_a_pulser_is_not_established(seed):
    """A pulse of an eighth of the period has most power at a harmonic, which is never claimed for its period."""
    rng = np.random.default_rng(seed)
    times = random_times(rng, 150)
    period = 7.3 * 3600
    pulses = 9.0 * ((times - 7e8) / period % 1.0 < 0.12)
    result = LombScargle(max_frequencies=200_000, permutations=19).examine(
        [make_curve(times, pulses + rng.normal(size=150))]
    )
    found = float(result.values["period"])
    assert not result.established or found == pytest.approx(period, rel=1e-3)


def test_cycles_that_differ_are_told_from_cycles_that_do_not():
    """One cycle in two or three unlike the others is found, a sinusoid or a plain pulse is not; chance keeps its rate."""
    rng = np.random.default_rng(7)
    times = random_times(rng, 200)
    cycle = (times - 7e8) / (3 * DAY)
    shape = np.cos(2 * np.pi * cycle)
    frequency = 1 / (3 * DAY)
    noise = rng.normal(size=200)
    for multiple in (2, 3):
        curve = make_curve(times, 4 * shape * np.where(np.floor(cycle) % multiple == 0, 2, 1) + noise)
        assert true_multiple(prepare(curve), frequency) > 0
    assert true_multiple(prepare(make_curve(times, 8 * shape + noise)), frequency) == 0
    assert true_multiple(prepare(make_curve(times, 8.0 * (cycle % 1 < 0.3) + noise)), frequency) == 0
    wrong = [true_multiple(prepare(make_curve(times, shape + rng.normal(size=200))), frequency) for _ in range(200)]
    assert np.count_nonzero(wrong) <= 2


def test_exposure_smearing_is_undone():
    """The amplitude is that before an exposure of half a period took it down by sin(pi/2)/(pi/2) = 0.6366 (exact)."""
    rng = np.random.default_rng(24)
    period, exposure = 1320.0, 660.0
    times = random_times(rng, 400, 10 * DAY)
    smeared = sinusoid(times, period, 10 * 2 / np.pi)
    values = LombScargle().search([make_curve(times, smeared + rng.normal(0, 0.1, 400), 0.1, exposure)])
    assert values["period"] == pytest.approx(period, rel=1e-3)
    assert values["amplitude"] == pytest.approx(10, rel=0.01)
    assert values["shortest_period"] == pytest.approx(exposure / 0.6, rel=1e-3)
    unknown = LombScargle().search([make_curve(times, smeared + rng.normal(0, 0.1, 400), 0.1, np.nan)])
    assert unknown["amplitude"] == pytest.approx(20 / np.pi, rel=0.01)


def test_the_longest_exposure_limits_the_search():
    """No period shorter than its exposure over 0.6 is searched; where that leaves nothing the columns are blank."""
    times = np.arange(50) * 100.0
    noise = np.random.default_rng(25).normal(size=50)
    exposures = np.where(np.arange(50) == 3, 600.0, 10.0)
    assert QUICK.search([make_curve(times, noise, exposure=exposures)])["shortest_period"] >= 1000.0
    assert math.isnan(QUICK.search([make_curve(times, noise, exposure=5000.0)])["score"])


def test_channels_are_searched_apart():
    """The best channel speaks, its chance counts the channels searched, and signed Stokes channels are left out."""
    rng = np.random.default_rng(26)
    times = random_times(rng)
    good = make_curve(times, sinusoid(times, 3 * DAY, 1.0) + rng.normal(size=200), channel="good")
    noise = make_curve(times, rng.normal(size=200), channel="noise")
    signed = make_curve(times, sinusoid(times, 5 * DAY, 9.0) + rng.normal(size=200), channel="v", stokes="V")
    alone, both = QUICK.search([good]), QUICK.search([noise, good, signed])
    assert both["channel"] == "good"
    assert both["period"] == alone["period"]
    assert both["score"] == pytest.approx(alone["score"] - math.log10(2))
    assert both["log10_fap"] == pytest.approx(alone["log10_fap"] + math.log10(2), abs=1e-6)
    assert math.isnan(QUICK.search([signed])["score"])


def test_regular_samples_make_up_no_peak():
    """At multiples of the sampling rate, where the model is degenerate, no power is invented."""
    rng = np.random.default_rng(27)
    times = np.arange(100) * 60.0
    series = prepare(make_curve(times, rng.normal(size=100)))
    grid = Grid(1 / 5940, 1 / 29700, 4000)
    power = periodogram(series, grid)
    at = settle(series, grid, power)
    frequency = grid.low + grid.step * np.arange(4000)
    exact = exact_power(series, frequency)
    assert np.isfinite(power).all()
    assert power[at] == pytest.approx(exact.max(), abs=1e-6)
    assert at == np.flatnonzero(exact > exact.max() - 1e-7)[0]
    assert frequency[at] <= 0.5 / 60 + grid.step


def test_scale_and_time_shift():
    """Larger fluxes scale the amplitude alone; a shift of the time origin moves nothing but the epochs."""
    rng = np.random.default_rng(28)
    times = random_times(rng)
    flux = sinusoid(times, 3 * DAY, 1.0) + rng.normal(size=200)
    plain = QUICK.examine([make_curve(times, flux)])
    scaled = QUICK.examine([make_curve(times, 1000 * flux, 1000.0)])
    moved = QUICK.examine([make_curve(times - 5e8, flux)])
    for name, value in plain.values.items():
        if isinstance(value, str):
            assert scaled.values[name] == moved.values[name] == value
        else:
            assert scaled.values[name] == pytest.approx(value * (1000 if name == "amplitude" else 1), rel=1e-6)
            assert moved.values[name] == pytest.approx(value, rel=1e-6)
    assert moved.ephemerides[0].epoch_tdb_s == pytest.approx(plain.ephemerides[0].epoch_tdb_s - 5e8, abs=1.0)


def test_the_same_answer_twice():
    """Shuffles use a fixed seed: an examination repeats to the last bit."""
    rng = np.random.default_rng(29)
    times = random_times(rng)
    curve = make_curve(times, sinusoid(times, 3 * DAY, 1.0) + rng.normal(size=200))
    assert repr(QUICK.examine([curve])) == repr(QUICK.examine([curve]))


AWKWARD = {
    "shortest": (np.arange(8) * 1e4, np.array([1.0, 2, 1, 3, 1, 2, 5, 1]), 1.0),
    "equal": (np.arange(20) * 1e4, np.full(20, 3.3), np.linspace(0.1, 1, 20)),
    "one time": (np.full(20, 5e8), np.arange(20.0), 1.0),
    "four times": (np.repeat(np.arange(4) * 1e5, 5), np.arange(20.0), 1.0),
    "ties": (np.repeat(np.arange(10) * 1e5, 2), np.arange(20.0) % 7, 1.0),
    "two clusters": (np.concatenate((np.arange(10), 1e9 + np.arange(10))) * 1.0, np.arange(20.0) % 3, 1.0),
    "regular": (np.arange(40) * DAY, np.arange(40.0) % 2, 1.0),
    "huge outlier": (np.arange(20) * 1e4, np.where(np.arange(20) == 4, 1e12, 1.0), 1.0),
    "negative": (np.arange(20) * 1e4, -np.arange(20.0), 1.0),
    "wide errors": (np.arange(20) ** 2 * 1e4, np.arange(20.0) % 5, np.geomspace(0.01, 1, 20)),
    "no noise": (np.arange(20) ** 1.5 * 1e4, np.cos(np.arange(20) ** 1.5), 1.0),
    "no clock": (np.full(20, np.nan), np.arange(20.0), 1.0),
}


@pytest.mark.parametrize("rows", AWKWARD.values(), ids=AWKWARD)
@pytest.mark.parametrize("exposure", [60.0, 0.0, np.nan])
def test_awkward_curves(rows, exposure):
    """No awkward light curve raises or warns; what cannot be searched is blank and not established."""
    times, flux, error = rows
    search = LombScargle(max_frequencies=3000, permutations=3)
    result = search.examine([make_curve(times, flux, error, exposure)])
    assert result.values["verdict"]
    assert not result.established or math.isfinite(result.ephemerides[0].period_s)
    for column in LombScargle.columns:
        assert isinstance(result.values[column.name], str if column.dtype == "str" else float)


def test_nothing_to_search():
    """Without curves every column is blank."""
    assert math.isnan(QUICK.search([])["score"])
    assert not QUICK.examine([]).established
