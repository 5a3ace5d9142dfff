"""The standing of a target that varies beyond chance: one brightening, several, or a number that nobody can tell."""

import numpy as np
import pytest

from hindlight.candidates import ChannelView, View, standing
from hindlight.lightcurve import LightCurve
from hindlight.ranking import Thresholds
from hindlight.settings import Detection

DAY = 86400.0


def view(bright: list[int], timeless: list[int]) -> View:
    """Sixteen samples of error 1, a day apart, some of them 20 sigma bright and some without a time."""
    t = DAY * np.arange(16.0)
    t[timeless] = np.nan
    flux = np.zeros(16)
    flux[bright] = 20.0
    order = np.argsort(t, kind="stable")  # those without a time last
    curve = LightCurve.from_arrays(t[order], flux[order], np.ones(16))
    channel = ChannelView(curve, 16, 0, Thresholds(5.0, 5.0, 4.0, 2.0, 100))
    return View("a", (channel,), utc=str, label=str)


@pytest.mark.parametrize(
    ("bright", "timeless", "word"),
    [
        ([3], [], "single"),
        ([3], [3], "single"),
        ([3], list(range(16)), "single"),
        ([3, 9], [], "repeating"),
        ([3, 9, 11], [11], "repeating"),
        ([3, 9], [9], "variable"),
        ([3, 9], [3, 5, 9], "variable"),
        ([3, 5, 9, 12], list(range(16)), "variable"),
    ],
)
def test_samples_without_a_time_are_no_separate_brightenings(bright: list[int], timeless: list[int], word: str) -> None:
    """Two bright ones may be of one brightening; those with times are told as ever."""
    assert standing(view(bright, timeless), True, False, Detection()) == word
