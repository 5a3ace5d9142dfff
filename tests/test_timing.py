"""Phases and windows of a given ephemeris, and the chance that detections fall into its windows."""

import numpy as np
import pytest

from hindlight.timing import from_nearest_pulse, in_window, lookback

UNKNOWN = np.full(4, np.nan)


def test_chance_of_hits_is_fishers() -> None:
    """Eight cups, four of them with milk first, four named (R. A. Fisher 1935, The Design of Experiments, ch. 2)."""
    inside = np.arange(8) < 4
    assert lookback(inside, inside) == pytest.approx(1 / 70)
    three = np.array([1, 1, 1, 0, 1, 0, 0, 0], bool)
    assert lookback(inside, three) == pytest.approx(17 / 70)
    assert lookback(inside, ~inside) == pytest.approx(1.0)
    assert np.isnan(lookback(np.zeros(0, bool), np.zeros(0, bool)))
    inside, detected = np.arange(50) < 10, np.arange(50) < 5
    assert lookback(inside, detected) == pytest.approx(1.18937e-4, rel=1e-5)  # scipy 1.17: hypergeom.sf(4, 50, 10, 5)
    assert lookback(inside, np.roll(detected, -1)) == pytest.approx(4.08352e-3, rel=1e-5)


def test_nearest_pulse_of_a_changing_period() -> None:
    """t_k = P k + P Pdot k^2 / 2, exact at the pulses themselves, some thousands of cycles out."""
    k = np.array([-40_000, -1, 0, 3, 12_345, 90_000])
    period, dot = 1318.2, 3e-8
    pulses = period * k + 0.5 * period * dot * k**2
    for late in (-600.0, 0.0, 17.5):
        assert from_nearest_pulse(pulses + late, period, dot) == pytest.approx(np.full(6, late), abs=1e-6)


def test_exposures_that_reach_into_a_window() -> None:
    """Half the window and half the exposure from the pulse; a clock known to 10 s adds 20, one of unknown error nothing."""
    t = np.array([0.0, 79.0, 81.0, 95.0])
    sixty = np.full(4, 60.0)
    assert in_window(t, sixty, UNKNOWN, 1000.0, 0.0, 100.0).tolist() == [True, True, False, False]
    assert in_window(t, sixty, np.full(4, 10.0), 1000.0, 0.0, 100.0).tolist() == [True] * 4
    assert in_window(t + 5000.0, UNKNOWN, UNKNOWN, 1000.0, 0.0, 100.0).tolist() == [True, False, False, False]
