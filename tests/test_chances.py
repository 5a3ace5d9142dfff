"""The chance that a source like a target would have been found: like is compared with like."""

from dataclasses import fields, replace

import numpy as np
import pytest

from hindlight.chances import Made, Seen, chance
from hindlight.completeness import NOTHING, Cell, jeffreys
from hindlight.injection import PULSES, SMOOTH

FLUXES = (4.0, 16.0)
CELLS = (
    Cell(NOTHING, 0.0),
    *(Cell(PULSES, flux, period, duty, 2.0, 0.2) for period in (100.0, 1e4) for duty in (0.03, 0.3) for flux in FLUXES),
    *(Cell(SMOOTH, flux, 1e5) for flux in FLUXES),
)
N = 20


def sources(found, share, dilution, used=100.0):
    """N sources of each cell: the n-th cell's are found and seen in these shares; highest S/N is `dilution` of the flux."""
    cell = np.repeat(np.arange(len(CELLS)), N)
    flux = np.array([c.flux for c in CELLS])[cell]
    hit = np.concatenate([np.arange(N) < round(N * f) for f in found]).astype(float)
    peak = np.maximum(1.0, np.asarray(dilution)[cell] * flux)
    return Made(cell, hit, np.full(len(cell), used), peak, np.asarray(share)[cell])


# of:  nothing, (100 s, 0.03) x2, (100 s, 0.3) x2, (1e4 s, 0.03) x2, (1e4 s, 0.3) x2, smooth x2
FOUND = [0.0, 0.1, 0.6, 0.2, 0.7, 0.3, 0.8, 0.4, 0.9, 0.5, 1.0]
SHARE = [0.0, 0.0, 0.1, 0.2, 0.3, 0.0, 0.1, 0.2, 0.3, 0.7, 0.9]
DILUTION = [1.0, 0.5, 0.5, 0.5, 0.5, 1.0, 1.0, 1.0, 1.0, 1.0, 1.0]
MADE = {"all": sources(FOUND, SHARE, DILUTION)}
TARGET = Seen("repeating", 4.0, 0.2, float("nan"), {"all": 100})


def told(**changed):
    """The columns for a target that differs from TARGET."""
    return chance(replace(TARGET, **changed), MADE, CELLS, N)


def test_the_highest_measured_signal_is_compared_not_the_pulse():
    """A pulse that fills half an exposure has half its flux there: 4 sigma measured is the middle of 2 and 8."""
    row = told(peak=4.0, share=0.25, period=100.0)
    assert (row["like_period"], row["like_duty_cycle"]) == (100.0, 0.3)
    assert row["found_probability"] == pytest.approx((0.2 + 0.7) / 2)
    assert (row["found_low"], row["found_high"]) == pytest.approx(jeffreys(9, 20))
    assert row["like_sources"] == N
    assert told(peak=8.0, share=0.25, period=1e4)["found_probability"] == pytest.approx((0.4 + 0.9) / 2)


def test_kind_and_duty_cycle_are_the_nearest():
    """By the standing, then by the share of frames that show it, then by the period."""
    assert told(share=0.05, period=1e4)["like_duty_cycle"] == 0.03
    alike = {"all": sources(FOUND, [0.0, 0.0, 0.0, *[0.2] * 2, 0.0, 0.0, *[0.2] * 2, 0.7, 0.9], DILUTION)}
    for period in (100.0, 1e4):
        assert chance(replace(TARGET, period=period), alike, CELLS, N)["like_period"] == period
    row = told(standing="variable", peak=8.0, share=0.8)
    assert row["like_kind"] == "smooth"
    assert row["found_probability"] == pytest.approx(0.75)
    assert np.isnan(row["like_duty_cycle"])
    assert told(standing="periodic", peak=8.0, share=0.85)["like_kind"] == "smooth"
    assert told(standing="periodic", peak=8.0, share=0.2)["like_kind"] == "pulses"


def test_what_is_fainter_than_the_grid_lies_between_it_and_nothing():
    """Where no source is the highest S/N is 1 here, and none is found."""
    row = told(peak=2**0.5, share=0.1, period=100.0)
    assert row["like_duty_cycle"] == 0.3
    assert row["found_probability"] == pytest.approx(0.1)


@pytest.mark.parametrize(
    "changed",
    [
        {"standing": "steady"}, {"peak": 100.0}, {"peak": 0.9}, {"peak": float("nan")}, {"share": 0.9},
        {"standing": "variable", "share": 0.1}, {"used": {"all": 300}}, {"used": {"all": 0}}, {"used": {}},
        {"standing": "uncovered"},
    ],
)  # fmt: skip
def test_nothing_is_like_it(changed):
    """Steady, brighter or fainter than the grid, seen in far more or fewer frames, with other frames: no chance is told."""
    assert np.isnan(told(**changed)["found_probability"])
    assert told(**changed)["like_kind"] == ""
    assert np.isfinite(told()["found_probability"])


def test_sources_have_as_many_frames():
    """Half of the sources have 10 frames, half 200: a target is compared with those that have as many as it."""
    few, many = sources([0.0] * 11, SHARE, DILUTION, 10.0), sources([1.0] * 11, SHARE, DILUTION, 200.0)
    both = Made(*(np.concatenate([getattr(few, f.name), getattr(many, f.name)]) for f in fields(Made)))
    for n_used, expected in ((11, 0.0), (180, 1.0)):
        row = chance(replace(TARGET, used={"all": n_used}), {"all": both}, CELLS, 2 * N)
        assert row["found_probability"] == expected
        assert row["like_frames"] == pytest.approx(n_used, rel=0.25)
    assert np.isnan(chance(replace(TARGET, used={"all": 45}), {"all": both}, CELLS, 2 * N)["found_probability"])


def test_the_subset_with_most_sources_like_it_counts_unless_it_lacks_the_frames():
    """In all frames few sources have as many; in those of one instrument all have, and the target has no others."""
    lone = MADE["all"].taken(np.arange(len(MADE["all"].cell)) % 10 == 0)
    own = sources([1.0] * 11, SHARE, DILUTION)
    made = {"all": lone, "deep": own}
    row = chance(replace(TARGET, used={"all": 100, "deep": 100}), made, CELLS, N)
    assert (row["like_subset"], row["found_probability"]) == ("deep", 1.0)
    assert np.isnan(chance(replace(TARGET, used={"all": 200, "deep": 100}), made, CELLS, N)["found_probability"])
