"""Made-up sources: how bright a frame sees them, and what they add to light curves."""

from dataclasses import replace

import numpy as np
import pytest

import hidden
from hindlight.injection import (
    PULSES,
    SMOOTH,
    Source,
    brightness,
    fraction_containing,
    fraction_touched,
    injected,
    restricted,
    uniform,
)  # fmt: skip

FRAMES = np.arange(20000)


def test_fractions_of_frames():
    """A window of 60 s once in 1320 s: frames of 120 s that touch it, and that hold all of it."""
    assert fraction_touched(120, 60, 1320) == pytest.approx(0.13636, abs=5e-6)
    assert fraction_containing(120, 60, 1320) == pytest.approx(0.04545, abs=5e-6)
    assert (fraction_touched(2000, 60, 1320), fraction_containing(10, 60, 1320)) == (1.0, 0.0)


def test_frames_touch_pulses_as_often_as_they_should():
    """Pulses of 60 s: the share of random frames lit, lit by all of a pulse, and the mean brightness."""
    t = np.random.default_rng(1).uniform(0, 1e9, 20000)
    source = Source(PULSES, 1320.0, 100.0, 7, duration_s=60.0)
    lit = brightness(source, t, np.full(20000, 120.0), FRAMES)
    assert (lit > 0).mean() == pytest.approx(0.13636, abs=0.01)
    assert (lit > 0.5 - 1e-9).mean() == pytest.approx(0.04545, abs=0.006)
    assert lit.mean() == pytest.approx(60 / 1320, rel=0.06)


def test_a_pulse_that_straddles_an_exposure_counts_with_its_part():
    """An exposure of 100 s around 0: a pulse of 40 s at 0 fills 0.4 of it, one at 50 half as much, one at 80 none."""
    for middle, share in ((0.0, 0.4), (50.0, 0.2), (80.0, 0.0)):
        source = Source(PULSES, 1e6, middle, 1, duration_s=40.0)
        assert brightness(source, np.zeros(1), np.array([100.0]), np.zeros(1, int))[0] == pytest.approx(share)


def test_missing_pulses_and_windows():
    """A fraction of the pulses is not there; those that are lie anywhere in the window, and never outside."""
    n = 20000
    middles = 1000.0 * np.arange(n)
    source = Source(PULSES, 1000.0, 0.0, 3, duration_s=20.0, window_s=100.0, missing=0.3)
    whole = brightness(source, middles, np.full(n, 100.0), FRAMES)
    assert (whole > 0).mean() == pytest.approx(0.7, abs=0.015)
    assert whole[whole > 0] == pytest.approx(0.2)
    instants = brightness(source, middles + 35.0, np.full(n, np.nan), FRAMES)
    assert instants.mean() == pytest.approx(0.7 * 15 / 80, abs=0.01)  # places from 25 to 40 of -40 to 40 hold 35
    outside = brightness(source, middles + 51.0, np.full(n, np.nan), FRAMES)
    assert not outside.any()


def test_many_pulses_in_one_exposure_are_their_mean():
    """An exposure that holds a thousand pulses sees duty cycle times the fraction that is there."""
    source = Source(PULSES, 1.0, 0.0, 3, duration_s=0.1, missing=0.5)
    assert brightness(source, np.zeros(1), np.array([1000.0]), np.zeros(1, int))[0] == pytest.approx(0.05)
    near = Source(PULSES, 20.0, 0.0, 3, duration_s=2.0)
    assert brightness(near, np.zeros(1), np.array([1000.0]), np.zeros(1, int))[0] == pytest.approx(0.1, rel=0.03)


def test_a_smooth_variable_is_averaged():
    """An exposure of half a period around the maximum: (1 + 2 / pi) / 2; a short one sees the peak."""
    source = Source(SMOOTH, 100.0, 30.0, 1)
    seen = brightness(source, np.array([30.0, 30.0, 80.0]), np.array([50.0, 0.0, 0.0]), np.arange(3))
    assert seen == pytest.approx([(1 + 2 / np.pi) / 2, 1.0, 0.0])


def test_brightness_agrees_with_adding_up_instants():
    """The share of frames lit, their mean and their spread, against a sum over instants with other random numbers."""
    from hindlight.completeness import Cell, _source

    cell = Cell(PULSES, 1.0, 1200.0, 0.1, 2.0, 0.2)
    rng = np.random.default_rng(4)
    t = np.sort(rng.uniform(0, 1e9, 4000))
    mine = brightness(_source(cell, 11), t, np.full(4000, hidden.EXPOSURE_S), np.arange(4000))
    other = hidden.brute(rng, cell, t, 400)
    assert (mine > 0).mean() == pytest.approx((other > 0).mean(), abs=0.03)
    assert mine.mean() == pytest.approx(other.mean(), abs=0.012)
    assert mine.std() == pytest.approx(other.std(), abs=0.015)


def test_draws_do_not_depend_on_company():
    """A source is the same in any selection of frames; frames without a clock get a phase by their identifier."""
    source = Source(PULSES, 500.0, 10.0, 99, duration_s=100.0, window_s=200.0, missing=0.4)
    t = np.random.default_rng(2).uniform(0, 1e6, 300)
    t[::7] = np.nan
    exposure = np.full(300, 90.0)
    whole = brightness(source, t, exposure, FRAMES[:300])
    part = np.arange(0, 300, 3)
    assert np.array_equal(brightness(source, t[part], exposure[part], part), whole[part])
    assert 0 < (whole[::7] > 0).mean() < 1


def test_uniform_numbers():
    """Even over 0 to 1, other for other purposes and keys, without correlation from one counter to the next."""
    u = uniform(5, 0, np.arange(-50000, 50000))
    assert u.min() >= 0
    assert u.max() < 1
    assert np.histogram(u, 20, (0, 1))[0].std() < 150
    assert abs(np.corrcoef(u[1:], u[:-1])[0, 1]) < 0.015
    for other in (uniform(6, 0, np.arange(-50000, 50000)), uniform(5, 1, np.arange(-50000, 50000))):
        assert abs(np.corrcoef(u, other)[0, 1]) < 0.015


def test_fluxes_are_added_as_calibrated():
    """What is added comes out as it was put in, whatever the frame's gain; its error grows as that of a real source."""
    rng = np.random.default_rng(1)
    n = 50
    solution = hidden.solution(n)
    solution["gain"] = rng.uniform(0.5, 2, n)
    solution["error_scale"] = np.full(n, 1.5)
    solution["extra_scatter"] = np.full(n, 0.1)
    raw = rng.standard_normal((3, n))
    calibrated = {"flux": raw / solution["gain"], "flux_err": np.hypot(1.5, 0.1 * raw) / solution["gain"]}
    plain = replace(hidden.block(raw, hidden.times(rng, n)), **calibrated)
    zero = injected(plain, np.arange(3), np.zeros((3, n)), np.arange(3), solution, np.full(n, np.nan))
    flux = rng.uniform(0, 50, (2, n))
    made = injected(plain, np.array([2, 0]), flux, np.arange(2), solution, np.full(n, np.nan))
    assert made.names == ("control 2", "control 0")
    assert made.flux - zero.flux[[2, 0]] == pytest.approx(flux)
    expected = np.hypot(1.5, 0.1 * (raw[[2, 0]] + flux * solution["gain"])) / solution["gain"]
    assert made.flux_err == pytest.approx(expected)


def test_photon_noise_where_the_gain_is_known():
    """With 4 electrons per unit a flux of 100 has a further scatter of 5, which the error holds."""
    n = 20000
    plain = hidden.block(np.zeros((1, n)), np.arange(n) * 1e4)
    made = injected(plain, np.zeros(1, int), np.full((1, n), 100.0), np.array([3]), hidden.solution(n), np.full(n, 4.0))
    assert made.flux.std() == pytest.approx(5.0, rel=0.03)
    assert made.flux.mean() == pytest.approx(100.0, abs=0.15)
    assert made.flux_err == pytest.approx(26**0.5)


def test_what_is_not_measured_stays_so():
    """A frame without a usable flux gets none; a block in some of its frames has these alone."""
    flux = np.zeros((2, 5))
    flux[1, 2] = np.nan
    plain = hidden.block(flux, np.arange(5.0))
    made = injected(plain, np.arange(2), np.ones((2, 5)), np.arange(2), hidden.solution(5), np.full(5, np.nan))
    assert np.isnan(made.flux[1, 2])
    assert np.isfinite(made.flux).sum() == 9
    keep = np.array([True, False, True, False, False])
    assert restricted(made, keep).frame.tolist() == [0, 2]
    assert restricted(made, keep).flux.shape == (2, 2)
    assert not restricted(made, keep).flux.flags.writeable
