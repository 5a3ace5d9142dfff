"""What looks without a detection say: chances, limits on duty cycle, flux and rate, and the sentence."""

from dataclasses import replace

import numpy as np
import pytest

from hindlight import unseen
from hindlight.looks import (
    Looks,
    by_cycle,
    by_epoch,
    chance_seen,
    duty_limit,
    flux_limit,
    rate_limit,
    seen_fluence,
    surely_seen,
    weights,
)
from hindlight.timing import DAY


@pytest.mark.parametrize(
    ("n", "limit"), [(10, 0.258866), (30, 0.0950339), (100, 0.0295130), (1000, 0.00299125)]
)  # fmt: skip
def test_duty_limit_of_looks_that_miss_nothing(n, limit):
    """The exact one-sided binomial limit, 1 - 0.05^(1/n)."""
    assert duty_limit(np.ones(n)) == pytest.approx(limit, abs=1e-6)


def test_duty_limit_of_looks_that_see_part():
    """Twenty looks of 0.1 and ten of 0.3; and looks that set no limit."""
    assert duty_limit(np.concatenate([np.full(20, 0.1), np.full(10, 0.3)])) == pytest.approx(0.560685, abs=1e-6)
    assert np.isnan(duty_limit(np.full(20, 0.1)))
    assert np.isnan(duty_limit(np.empty(0)))
    assert duty_limit(np.ones(1)) == pytest.approx(0.95)


def test_chance_to_see_a_flux():
    """At a threshold of 5 sigma a flux of 5, 6, 7 sigma is seen with these chances."""
    seen = chance_seen(np.array([5.0, 6.0, 7.0]), np.ones(3), np.full(3, 5.0))
    assert seen == pytest.approx([0.5, 0.8413, 0.9772], abs=5e-5)


def looks(look, channel, share=None):
    """Looks with errors of 1 and thresholds of 5."""
    n = len(look)
    share = np.ones(n) if share is None else share
    return Looks(np.array(look), np.array(channel), np.ones(n), np.full(n, 5.0), share, np.full(n, 100.0))


def test_frames_of_one_look():
    """The best frame counts, in whatever channel, for they show one state of the source; parts of a window add up."""
    assert weights(looks([0, 0, 1], [0, 0, 0]), 5.0) == pytest.approx([0.5, 0.5])
    assert weights(looks([0, 0], [0, 1]), 5.0) == pytest.approx([0.5])
    better = replace(looks([0, 0, 0], [0, 0, 0]), error=np.array([2.0, 1.0, 5.0]))
    assert weights(better, 6.0) == pytest.approx([0.8413], abs=5e-5)
    assert weights(looks([0, 0], [0, 0], np.array([0.2, 0.5])), 50.0) == pytest.approx([0.7])
    assert weights(looks([0, 0], [0, 0], np.array([0.8, 0.5])), 50.0) == pytest.approx([1.0])


def test_flux_limits():
    """A duty cycle of a half is excluded by ten looks only where they see enough of them; by three never."""
    ten = looks(range(10), [0] * 10)
    flux = flux_limit(ten, 0.5)
    assert duty_limit(weights(ten, flux)) == pytest.approx(0.5, abs=1e-6)
    assert duty_limit(weights(ten, flux - 0.1)) > 0.5 or np.isnan(duty_limit(weights(ten, flux - 0.1)))
    assert np.isnan(flux_limit(looks(range(3), [0] * 3), 0.5))


def test_epochs_and_cycles():
    """Frames nearer than the gap are one look, those without a clock are one together; cycles by the nearest pulse."""
    t = np.array([3.0, 0.0, np.nan, 0.2, 3.3, np.nan]) * DAY
    assert by_epoch(t, 0.5).tolist() == [1, 0, 2, 0, 1, 2]
    assert by_epoch(np.full(2, np.nan), 0.5).tolist() == [0, 0]
    assert by_epoch(np.empty(0), 0.5).tolist() == []
    cycle, share = by_cycle(np.array([0.0, 1000.0, 1020.0, 5500.0]), np.full(4, 40.0), 1000.0, 0.0, 60.0)
    assert cycle.tolist() == [0, 1, 1, 2]
    assert share == pytest.approx([40 / 60, 40 / 60, 30 / 60, 0.0])


def test_looks_of_one_channel():
    """Numbered anew, with what belongs to them."""
    both = replace(looks([0, 0, 1, 2], [0, 1, 1, 0]), error=np.arange(4.0))
    second = both.within(1)
    assert (second.look.tolist(), second.error.tolist(), second.n) == ([0, 1], [1.0, 2.0], 2)


def test_rate_limit():
    """Of frames that see every pulse, -ln(0.05) = 2.995732 over their exposures; of those that see half, twice as much."""
    assert rate_limit(np.ones(10), np.full(10, 60.0)) == pytest.approx(2.995732 / 600)
    assert rate_limit(np.full(10, 0.5), np.full(10, 60.0)) == pytest.approx(2.995732 / 300)
    assert rate_limit(np.array([1.0, np.nan]), np.array([60.0, np.nan])) == pytest.approx(2.995732 / 60)
    assert np.isnan(rate_limit(np.full(2, np.nan), np.full(2, np.nan)))


def test_a_pulse_within_an_exposure():
    """A fluence of 700 over 100 s is a flux of 7: seen with a chance of 0.9772 above 5 sigma; counts do not care."""
    frames = replace(looks(range(3), [0] * 3), exposure_s=np.array([100.0, 200.0, np.nan]))
    seen = seen_fluence(frames, 700.0, collected=False)
    assert seen[:2] == pytest.approx([0.9772, 0.0668], abs=5e-5)
    assert np.isnan(seen[2])
    assert seen_fluence(frames, 7.0, collected=True)[:2] == pytest.approx([0.9772, 0.9772], abs=5e-5)


@pytest.mark.parametrize(
    ("unit", "expected"),
    [("Jy/beam", "Jy/beam s"), ("mJy", "mJy s"), ("adu", "adu"), ("count/s", "count"), ("density", ""), ("", "")],
)
def test_units_of_fluence(unit, expected):
    """Counts are added up already, a flux density takes seconds, what is not known stays unsaid."""
    assert unseen.fluence_unit(unit) == expected


def unseen_in(unit, exposure=100.0, n=30, cycles=False, error=1.0):
    """The row of a channel with a typical error of 0.5 units, thresholds of 5 sigma."""
    frames = replace(looks(range(n), [0] * n), exposure_s=np.full(n, exposure), labels=("north",), typical=(0.5,))
    frames = replace(frames, error=np.full(n, error))
    return unseen.in_channel(frames, 0, unit, cycles, (39, 40))


def test_limits_in_the_unit_of_a_channel():
    """Seven sigma are 3.5 units, over 100 s a fluence of 350; thirty frames of 100 s see 97.72 % of such pulses."""
    row = unseen_in("Jy/beam")
    assert surely_seen(looks(range(3), [0] * 3)) == 7.0
    assert (row["flux"], row["fluence"], row["fluence_unit"]) == (3.5, 350.0, "Jy/beam s")
    assert row["exposure"] == 3000.0
    assert row["rate_limit"] == pytest.approx(2.995732 * DAY / (3000 * 0.97725), rel=1e-4)
    assert row["duty_limit"] == pytest.approx((1 - 0.05 ** (1 / 30)) / 0.97725, rel=1e-4)
    assert row["flux_limit_half"] == pytest.approx(0.5 * flux_limit(looks(range(30), [0] * 30), 0.5))
    said = row["sentence"]
    for words in (
        "no pulse of fluence >= 350 Jy/beam s (3.5 Jy/beam in a frame) in 30 frames (sum of exposures 3000 s)",
        "rate < 88.3 per day", "on throughout less than 0.0972 of 30 epochs at 95 %",
        "completeness 0.975 [0.889, 0.997] (made-up pulses as bright: 39 of 40 frames show them; Jeffreys)",
        "come at random (Poisson)",
    ):  # fmt: skip
        assert words in said, said


def test_what_is_not_known_is_not_said():
    """Without exposures no fluence and no rate; nor of a unit that tells nothing; of looks that see little no limit."""
    for row in (unseen_in("Jy/beam", np.nan), unseen_in("density")):
        assert np.isnan(row["fluence"])
        assert np.isnan(row["rate_limit"])
        assert row["sentence"].startswith("no flux >= 3.5 ")
        assert "per day" not in row["sentence"]
        assert "on throughout less than 0.0972 of 30 epochs" in row["sentence"]
    assert "exposures not known" in unseen_in("Jy/beam", np.nan)["sentence"]
    assert "too few for a limit" in unseen_in("density", n=3, error=3.0)["sentence"]
    assert "with a pulse in less than 0.0972 of 30 cycles" in unseen_in("Jy/beam", cycles=True)["sentence"]
    assert unseen_in("adu")["fluence"] == 3.5
