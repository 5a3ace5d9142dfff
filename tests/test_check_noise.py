"""What heavy-tailed noise, and sources that are never dark, do to the checks: nothing that they would name."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats

from hindlight import LightCurve, added_part
from hindlight_plugins.detector_fixed import DetectorFixed, Ghost
from hindlight_plugins.moving import Moving, pulls_of, reached_by_chance
from hindlight_plugins.point_likeness import PointLikeness
from hindlight_plugins.position_check import Position, centroid
from planted import Field, ghost
from test_checks import make_cutout

CHANCE = 1e-6


@pytest.mark.parametrize(
    ("kind", "low", "high"),
    [
        (stats.expon(), 0.95, 1.1),
        (stats.genpareto(0.25), 0.85, 1.15),
        (stats.norm(), 1.0, 1.6),  # lighter than exponential: never understated
        (stats.uniform(), 1.0, 2.0),
    ],
    ids=["exponential", "Pareto", "normal", "uniform"],
)
def test_what_noise_reaches_by_chance(kind, low: float, high: float) -> None:
    """Beside scipy's own quantiles, from 20,000 evenly spread values."""
    z = kind.ppf((np.arange(20_000) + 0.5) / 20_000)
    assert low <= reached_by_chance(z, CHANCE) / kind.isf(CHANCE) <= high


def test_few_blank_positions_tell_no_tail() -> None:
    """Then the fixed limit stands; positions without a flux, and none at all, are no samples."""
    assert reached_by_chance(np.arange(400.0), CHANCE) == 0.0
    flux = np.array([[1.0, 2.0, np.nan], [np.nan] * 3])
    assert pulls_of(flux, np.full((2, 3), 0.5)).tolist() == [-1.0, 1.0]
    assert pulls_of(np.empty((0, 3)), np.empty((0, 3))).size == 0


def lone_counterpart(controls_heavy: bool) -> Field:
    """A flare, and in the next frame something of 9 sigma some beams aside: a body that moves, if noise cannot do that."""
    times = np.arange(40) * 1800.0 + np.arange(40) // 2 * 86400.0 * 3
    made = Field(3, times, np.zeros((40, 2)))
    made.heavy = controls_heavy  # of blank positions; images are made first, in quiet noise
    made.source(0.0, 0.0, 12.0 * (np.arange(40) == 10))
    made.source(12.0, 5.0, 9.5 * (np.arange(40) == 11))
    made.heavy, heavy = False, controls_heavy
    for k in range(made.n):
        made.image(k)
    made.heavy = heavy
    return made


@pytest.mark.parametrize(("heavy", "verdict"), [(False, "fail"), (True, "pass")])
def test_a_lone_counterpart_must_be_beyond_the_noise_of_its_field(heavy: bool, verdict: str) -> None:
    """Of 9 sigma it is a moving body where blank positions are Gaussian, and chance where they have heavy tails."""
    assert Moving().check(lone_counterpart(heavy).candidate()).verdict == verdict


def test_a_stray_pixel_beside_a_source_leaves_no_centroid() -> None:
    """A pixel of 12 sigma two pixels aside would draw it by a pixel; a beam a tenth too wide does not matter."""
    cutout = make_cutout(1, snr=10.0, rng=np.random.default_rng(2), correlated=False)
    assert np.hypot(*centroid(cutout)) < 0.5
    cutout.pixels[round(cutout.y), round(cutout.x) + 2] += 12.0
    assert centroid(cutout) is None
    wide = make_cutout(1, (0.4, 0.2), snr=50.0, fwhm=4.4, rng=np.random.default_rng(3), correlated=False)
    object.__setattr__(wide, "fwhm", 4.0)
    assert np.hypot(*(centroid(wide) - (0.4, 0.2))) < 0.15


def test_part_of_a_flux_above_the_quiet_level() -> None:
    """One where the quiet level is zero, a third where two thirds are always there, none below it."""
    flux = np.array([10.0, 10, 10, 10, 10, 10, 15, 5])
    part = added_part(LightCurve.from_arrays(np.arange(8.0), flux, np.ones(8)))
    assert part == pytest.approx([0, 0, 0, 0, 0, 0, 1 / 3, 0], abs=0.02)
    assert added_part(LightCurve.from_arrays(np.arange(8.0), flux * 0, np.ones(8))).tolist() == [1.0] * 8


@pytest.mark.parametrize("radio", [True, False])
def test_a_source_that_is_never_dark_stays_in_its_place(radio: bool) -> None:
    """What is taken off beside a steady source is most of it; the rest has the errors of its own signal to noise."""
    n = 40
    wave = 14.0 + 6.0 * np.sin(2 * np.pi * np.arange(n) / 13.0)
    found, n_frames, n_shapes = [], 0, 0
    for seed in range(30):
        made = Field(seed, np.arange(n) * 1e5, 0.5 * np.random.default_rng(seed).normal(size=(n, 2)), radio)
        made.source(0.0, 0.0, wave)
        candidate = made.candidate()
        place, shape = Position(floor=0.0).check(candidate), PointLikeness().check(candidate)
        found.append(place.values["p"])
        assert shape.verdict != "fail"
        n_frames, n_shapes = n_frames + place.values["n_frames"], n_shapes + shape.values["n_frames"]
    assert n_shapes < n_frames / 2  # what is added is seldom of the 8 sigma that show a shape
    p = np.array(found)
    p = p[np.isfinite(p)]
    assert len(p) > 20
    assert (p < 0.01).sum() <= stats.binom.isf(1e-3, len(p), 0.01)


@pytest.mark.parametrize("sky", [True, False], ids=["variable of the sky", "warm pixel"])
def test_a_variable_where_the_pixel_falls_is_no_defect(sky: bool) -> None:
    """Another variable at the pixel of a bright frame, in a frame that points elsewhere: its flares at other pixels tell."""
    n = 40
    pointing = np.array([(0.0, 0.0), (15.0, 4.0), (-9.0, 13.0)])[np.arange(n) % 3]
    made = Field(4, np.arange(n) * 1e5, pointing, False)
    made.source(0.0, 0.0, np.where(np.arange(n) == 12, 15.0, 0.0))
    if sky:
        made.source(-15.0, -4.0, np.where(np.isin(np.arange(n), (13, 11, 20, 30, 33)), 15.0, 0.0))
    else:
        made.fixed(made.x[12], made.y[12], np.where(np.arange(n) == 13, 15.0, 0.0))
    finding = DetectorFixed().check(made.candidate())
    assert (finding.verdict, finding.values["n_seen"]) == (("pass", 0) if sky else ("fail", 1))


def test_a_ghost_upon_stars_is_told_by_the_frames_that_have_it_on_dark_sky() -> None:
    """In ten of fifteen frames this ghost falls upon brighter stars: those cannot tell, in all others it is seen."""
    finding = Ghost().check(ghost(80031).candidate())
    assert finding.verdict == "fail"
    assert finding.values["n_seen"] == finding.values["n_tested"] == 5
