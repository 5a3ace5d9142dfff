"""What is no source carries the right concern, true variables carry none: the checks on simulated fields."""

from __future__ import annotations

import dataclasses
import math

import numpy as np
import pytest
from scipy.stats import chi2, hypergeom, norm

from hindlight import Block, Candidate, Channel, LightCurve, added, host
from hindlight.plugin import ConsistencyCheck
from hindlight_plugins.across_bands import AcrossBands, mean_index, spectral_index
from hindlight_plugins.detector_fixed import DetectorFixed, Ghost
from hindlight_plugins.leakage import Leakage
from hindlight_plugins.moving import Moving, best_track
from hindlight_plugins.point_likeness import PointLikeness
from hindlight_plugins.position_check import CIRCLE_95, ProperMotion, linear_motion
from hindlight_plugins.sidelobe import Sidelobe, fisher
from planted import FIRST_FRAME, PLANTED, Field, blank_field, clean, defect, ghost, moving, short_pulse, sidelobe

CHECKS: tuple[ConsistencyCheck, ...] = host.load(host.PluginSpec()).checks


def concerns(candidate: Candidate) -> list[str]:
    """The checks that fail."""
    return [check.name for check in CHECKS if check.check(candidate).verdict == "fail"]


def bright_ones(make, n: int) -> list[Candidate]:
    """The first n seeds' candidates that are bright at least once."""
    found: list[Candidate] = []
    seed = 5000
    while len(found) < n:
        candidate = make(seed).candidate()
        found += [candidate] if candidate.bright[0].any() else []
        seed += 1
    return found


@pytest.mark.parametrize("name", PLANTED)
def test_what_is_planted_is_named(name: str) -> None:
    """Of three seeds all carry the right concern (100 in tests/studies/checks.py)."""
    make, wanted = PLANTED[name]
    assert [wanted in concerns(candidate) for candidate in bright_ones(make, 3)] == [True] * 3


def test_clean_variables_carry_no_concern() -> None:
    """None of ten true variables, among them some beside steady neighbours and in heavy-tailed noise (1,000 there)."""
    assert [concerns(candidate) for candidate in bright_ones(clean, 10)] == [[]] * 10


def test_short_pulses_in_long_syntheses_carry_no_concern() -> None:
    """A 30 s pulse in an image of 2 min is no point there, and no check takes that for a flaw."""
    for candidate in bright_ones(short_pulse, 4):
        assert concerns(candidate) == []
        assert PointLikeness().check(candidate).verdict == "uninformative"


def test_what_never_dithered_is_not_known() -> None:
    """With one pointing neither a defect nor a ghost can be told; what is not there at all is not suspected."""
    made = blank_field(1, dithered=False, radio=False)
    made.source(0.0, 0.0, np.where(np.arange(made.n) % 10 == 0, 15.0, 0.0))
    finding = DetectorFixed().check(made.candidate())
    assert finding.verdict == "uninformative"
    assert "points elsewhere" in finding.evidence
    assert Ghost().check(made.candidate()).verdict == "pass"
    made = blank_field(1, dithered=False, radio=False)
    made.source(0.0, 0.0, np.where(np.arange(made.n) % 10 == 0, 15.0, 0.0))
    made.source(-2 * made.target[0], -2 * made.target[1], 500.0)
    finding = Ghost().check(made.candidate())
    assert (finding.verdict, finding.values["n_tested"]) == ("uninformative", 0)


def test_a_defect_that_is_mostly_there() -> None:
    """What is bright in most frames and gone where the pointing differs has no bright frames, and is found all the same."""
    made = blank_field(3, dithered=False, radio=False)
    moved = np.arange(made.n) % 4 == 0
    made = Field(3, made.times, np.where(moved[:, None], (12.0, 5.0), (0.0, 0.0)), False)
    made.fixed(made.x[1], made.y[1], 20.0)
    candidate = made.candidate()
    assert not candidate.bright[0].any()
    assert DetectorFixed().check(candidate).verdict == "fail"
    eclipsing = Field(3, made.times, made.pointing, False)
    eclipsing.source(0.0, 0.0, np.where(np.arange(made.n) % 5 == 0, 0.0, 20.0))
    assert DetectorFixed().check(eclipsing.candidate()).verdict == "pass"


def test_a_star_where_the_pixel_falls_is_no_defect() -> None:
    """With two pointings the same pixel always shows the same sky: a steady star there does not count."""
    made = blank_field(4, dithered=False, radio=False)
    moved = np.arange(made.n) % 3 == 0
    made = Field(4, made.times, np.where(moved[:, None], (12.0, 5.0), (0.0, 0.0)), False)
    made.source(0.0, 0.0, np.where((np.arange(made.n) % 10 == 1) & ~moved, 15.0, 0.0))
    made.source(-12.0, -5.0, 15.0)
    finding = DetectorFixed().check(made.candidate())
    assert finding.values["n_seen"] == 0
    assert finding.verdict == "uninformative"


def test_evidence_gives_numbers() -> None:
    """Each failure says in how many of how many frames, and where or how fast."""
    for make, check, part in (
        (defect, DetectorFixed(), "pixel "),
        (ghost, Ghost(), "across the middle"),
        (moving, Moving(), "arcsec/h"),
        (sidelobe, Sidelobe(), "across the brightest source"),
    ):
        finding = check.check(bright_ones(make, 1)[0])
        assert part in finding.evidence
        assert f" of {finding.values['n_tested']} " in finding.evidence


def test_a_track_is_straight_and_even() -> None:
    """Counterparts on one line at one rate count together; one at another rate does not."""
    lags = np.array([-1800.0, 1800.0, 3600.0])
    limits = np.full(3, 100.0)
    places = [np.array([[-10.0, -5.0]]), np.array([[10.0, 5.0], [40.0, -7.0]]), np.array([[20.0, 10.5]])]
    n, seen, rate = best_track(lags, limits, places, 6.0)
    assert (n, seen) == (3, 3)
    assert rate == pytest.approx(2 * math.hypot(10, 5), rel=0.05)
    places[2] = np.array([[20.0, 30.0]])
    assert best_track(lags, limits, places, 6.0)[:2] == (3, 2)
    assert best_track(lags, limits, [np.empty((0, 2))] * 3, 6.0)[:2] == (3, 0)


def test_frames_that_cannot_show_a_track_do_not_count_against_it():
    """Those in which it would lie on the pixel of the bright frame, or at the rim of what is searched; both may show it."""
    lags, limits = np.array([-3600.0, 3600.0, 7200.0]), np.array([50.0, 50.0, 50.0])
    nowhere, there = np.empty((0, 2)), np.array([[20.0, 0.0]])
    assert best_track(lags, limits, [nowhere, there, nowhere], 6.0)[:2] == (3, 1)
    blind = np.array([[-20.0, 11.0], [90.0, 90.0], [90.0, 90.0]])
    assert best_track(lags, limits, [nowhere, there, nowhere], 6.0, blind)[:2] == (2, 1)
    assert best_track(lags, limits, [-there, there, nowhere], 6.0, blind)[:2] == (3, 2)
    assert best_track(lags, np.array([50.0, 50.0, 45.0]), [nowhere, there, nowhere], 6.0, blind)[:2] == (1, 1)
    assert best_track(lags, np.array([50.0, 50.0, 45.0]), [nowhere, there, 2 * there], 6.0, blind)[:2] == (2, 2)


def test_how_fast_a_point_may_move() -> None:
    """A point of 45 arcsec in 120 s moves by at most 22.5 arcsec a minute; exact."""
    curve = LightCurve.from_arrays(
        np.array([0.0, 180.0, 600.0, 1200.0]), np.array([30.0, 0, 0, 0]), np.ones(4), exposure_s=np.full(4, 120.0)
    )
    alone = in_bands(curve)
    rows, reach = Moving()._near(alone, 0, 0)
    lag = curve.t_tdb_s[rows] - curve.t_tdb_s[0]
    assert rows.tolist() == [1, 2, 3]
    np.testing.assert_allclose(45.0 * reach[:2] / (lag[:2] / 60.0), 22.5)
    assert reach[2] == Moving().radius


def test_dark_frames_near_in_time_are_needed_for_motion() -> None:
    """Where the next frames are days away nothing is said of motion."""
    made = moving(5001)
    made.times = made.times[0] + np.arange(made.n) * 3 * 86400.0
    finding = Moving().check(made.candidate())
    assert finding.verdict == "uninformative"
    assert "ephemer" not in finding.evidence


def test_sidereal_times_that_come_back() -> None:
    """Bright at one sidereal time on every day fails; at any time, or all day, it does not."""
    made = blank_field(7, dithered=False, radio=True)
    made.things.clear()
    n_days, each = 8, 12
    day = np.repeat(np.arange(n_days), each)
    made = Field(7, 86164.0905 * day + 1800.0 * np.tile(np.arange(each), n_days), np.zeros((n_days * each, 2)))
    always = np.tile(np.arange(each), n_days) == 5
    rng = np.random.default_rng(7)
    for bright, verdict in ((always, "fail"), (rng.permutation(always), "pass")):
        made.things.clear()
        made.images.clear()
        made.source(0.0, 0.0, np.where(bright, 15.0, 0.0))
        finding = Sidelobe().check(made.candidate())
        assert finding.verdict == verdict
        assert finding.values["n_tested"] == 0
    optical = dataclasses.replace(made.candidate().curves[0], channel=Channel("camera", unit="adu"))
    assert Sidelobe().check(dataclasses.replace(made.candidate(), curves=(optical,))).verdict == "uninformative"


def test_fisher_reference() -> None:
    """The exact test is the tail of the hypergeometric distribution (scipy.stats.hypergeom.sf)."""
    for both, first, second, n in ((3, 5, 4, 30), (0, 5, 4, 30), (8, 8, 8, 96), (2, 30, 2, 31)):
        assert fisher(both, first, second, n) == pytest.approx(hypergeom.sf(both - 1, n, first, second))
    assert fisher(5, 10, 5, 50) == pytest.approx(1.18937e-4, rel=1e-5)  # scipy 1.17: hypergeom.sf(4, 50, 10, 5)
    assert fisher(4, 10, 5, 50) == pytest.approx(4.08352e-3, rel=1e-5)


def test_motion_reference_values() -> None:
    """Delta chi-square of a motion equals the difference of both fits; radii of 95, 99 and 99.73 % are chi's of two."""
    rng = np.random.default_rng(8)
    times, error = np.arange(6.0), rng.uniform(0.3, 1.0, 6)
    offsets = rng.normal(size=(6, 2)) + times[:, None] * np.array((0.5, -0.2))
    rate, _, delta, left = linear_motion(times, offsets, error)
    weight = 1 / error
    still = moved = 0.0
    for axis in range(2):
        mean = np.average(offsets[:, axis], weights=weight**2)
        still += (((offsets[:, axis] - mean) * weight) ** 2).sum()
        slope, start = np.polyfit(times, offsets[:, axis], 1, w=weight)
        moved += (((offsets[:, axis] - start - slope * times) * weight) ** 2).sum()
        assert rate[axis] == pytest.approx(slope)
    assert (delta, left) == (pytest.approx(still - moved), pytest.approx(moved))
    assert pytest.approx(CIRCLE_95) == chi2.isf(0.05, 2) ** 0.5
    np.testing.assert_allclose(chi2.isf([0.05, 0.01, 2 * norm.sf(3)], 2) ** 0.5, [2.4477, 3.0349, 3.4394], atol=5e-5)


@pytest.mark.parametrize(("years", "verdict"), [(0.1, "fail"), (8.0, "pass")])
def test_fast_and_slow_motion(years: float, verdict: str) -> None:
    """The same motion across a beam fails within weeks and is information over years."""
    made = Field(9, np.linspace(0, years * 31557600.0, 40), np.zeros((40, 2)))
    track = np.linspace(-1.2, 1.2, 40)
    bright = np.arange(40) % 5 == 2
    made.fixed(made.x + track, made.y, np.where(bright, 40.0, 0.0))
    finding = ProperMotion().check(made.candidate())
    assert finding.verdict == verdict
    assert finding.values["p"] < 1e-4
    assert finding.values["ra_cosdec"] == pytest.approx(-2.4 * 2.0 / years, rel=0.15)  # east is towards -x
    still = Field(9, made.times, made.pointing)
    still.source(0.0, 0.0, np.where(bright, 40.0, 0.0))
    assert ProperMotion().check(still.candidate()).verdict == "pass"
    assert ProperMotion(max_frames=3, min_snr=60).check(still.candidate()).verdict == "uninformative"


def test_added_light_leaves_steady_sources_out() -> None:
    """Beside a steady source only the excess is left, and how much brighter that was; alone nothing changes."""
    made = Field(10, np.arange(20) * 1e5, np.zeros((20, 2)))
    made.source(0.0, 0.0, np.where(np.arange(20) == 3, 20.0, 0.0))
    made.source(4.0, 0.0, 40.0)
    quiet = [*made.cutouts(FIRST_FRAME + np.arange(5, 15), 2.5)]
    (bright,) = made.cutouts([FIRST_FRAME + 3], 2.5)
    light, height = added(bright, quiet)
    assert height == pytest.approx(2.0, rel=0.2)
    aside = round(light.y), round(light.x + 4)
    assert abs(light.pixels[aside]) < 5.0 < 30.0 < bright.pixels[aside]
    assert added(bright, []) == (bright, 0.0)


# --- between bands


def band(ghz: float, flux: np.ndarray, unit: str = "Jy/beam", lag: float = 0.0, exposure: float = 120.0) -> LightCurve:
    """A curve of unit errors at a frequency."""
    n = len(flux)
    channel = Channel(f"{ghz} GHz", "array", stokes="I", frequency_hz=ghz * 1e9, unit=unit)
    return LightCurve.from_arrays(
        np.arange(n) * 3600.0 + lag, flux, np.ones(n), exposure_s=np.full(n, exposure), channel=channel,
        frame=np.arange(n) + int(1000 * ghz),
    )  # fmt: skip


def in_bands(*curves: LightCurve) -> Candidate:
    """A candidate of light curves alone."""
    nothing = tuple(np.zeros(len(curve)) for curve in curves)
    return Candidate(
        "target", 10.0, 20.0, curves, tuple(curve.above_quiet > 6 for curve in curves), nothing, nothing, None,
        lambda label, frames: None, lambda frames, half_width: [],
    )  # fmt: skip


def test_spectral_index_reference() -> None:
    """Errors by propagation; indices -1.0 +- 0.2 and -1.6 +- 0.2 differ by z = 2.1213, p = 0.0339."""
    index, error = spectral_index((1.4e9, 2.8e9), (20.0, 10.0), (2.0, 0.5))
    assert (index, error) == (pytest.approx(-1.0), pytest.approx(math.hypot(0.1, 0.05) / math.log(2)))
    mean, err, p = mean_index(np.array([[-1.0, 0.2], [-1.6, 0.2]]))
    assert (mean, err) == (pytest.approx(-1.3), pytest.approx(0.2 / 2**0.5))
    assert p == pytest.approx(0.0339, abs=5e-5)
    assert 2 * norm.sf(2.1213) == pytest.approx(p, abs=1e-5)


def test_a_flare_in_one_band_only() -> None:
    """No spectrum leaves nothing at 1.5 GHz of what is bright at 1.4 GHz in the same two minutes."""
    flux = np.where(np.arange(40) == 7, 30.0, 0.0)
    finding = AcrossBands().check(in_bands(band(1.4, flux), band(1.5, 0 * flux)))
    assert finding.verdict == "fail"
    assert "1.4 GHz against 1.5 GHz" in finding.evidence
    both = AcrossBands().check(in_bands(band(1.4, flux), band(1.5, flux * (1.5 / 1.4) ** -2)))
    assert both.verdict == "pass"
    assert both.values["index"] == pytest.approx(-2.0, abs=0.01)
    steep = AcrossBands().check(in_bands(band(1.4, flux), band(4.0, 0 * flux)))
    assert steep.verdict == "uninformative"  # 30 (4/1.4)^-4 is half a sigma


@pytest.mark.parametrize(
    "other",
    [
        {"lag": 1800.0},  # another pulse
        {"lag": 60.0},  # half of the exposure
        {"exposure": 1200.0},  # the light of two minutes in twenty
        {"unit": "adu"},
    ],
)
def test_what_is_not_simultaneous_is_not_compared(other: dict) -> None:
    """Frames that do not cover the bright one, dilute it, or have other units say nothing."""
    flux = np.where(np.arange(40) == 7, 30.0, 0.0)
    finding = AcrossBands().check(in_bands(band(1.4, flux), band(1.5, 0 * flux, **other)))
    assert finding.verdict == "uninformative"
    assert finding.values["n_pairs"] == 0


def test_dispersion_may_move_a_pulse() -> None:
    """At 150 MHz a pulse may come minutes apart at neighbouring frequencies: nothing is said."""
    flux = np.where(np.arange(40) == 7, 30.0, 0.0)
    low = in_bands(band(0.15, flux), band(0.17, 0 * flux))
    assert AcrossBands().check(low).verdict == "uninformative"
    assert AcrossBands(dm=10.0).check(low).verdict == "fail"


# --- leakage


def polarised(total: np.ndarray, circular: np.ndarray, leak: float | None = 0.004) -> Candidate:
    """A candidate with Stokes I and V at the same times, and eight steady sources with a leakage of that size."""
    channels = [Channel(stokes, "array", stokes=stokes, frequency_hz=1.4e9, unit="Jy/beam") for stokes in "IV"]
    n = len(total)
    curves = tuple(
        LightCurve.from_arrays(np.arange(n) * 3600.0, flux, np.ones(n), exposure_s=np.full(n, 120.0), channel=channel)
        for flux, channel in zip((total, circular), channels, strict=True)
    )
    ratio = 0.0 if leak is None else leak * np.array([1, -1, 1, -1, 1, -1, 1, -1.0])

    def steady(label: str, frames: np.ndarray) -> Block | None:
        if leak is None:
            return None
        flux = np.outer(100.0 * (ratio if label == "V" else np.ones(8)), np.ones(len(frames)))
        return Block(
            tuple(f"steady {k}" for k in range(8)), channels["IV".index(label)], frames, 0 * flux, 0 * flux, flux,
            0 * flux + 0.1, flux, 0 * flux + 0.1, (0 * flux).astype(np.int64), np.full(len(frames), np.nan),
        )  # fmt: skip

    return dataclasses.replace(
        in_bands(*curves),
        bright=tuple(np.abs(c.above_quiet) > 6 if c.channel.signed else c.above_quiet > 6 for c in curves),
        comparisons=steady,
    )


def test_leaked_flux_fails_and_true_polarisation_passes() -> None:
    """Stokes V of 1 % of a steady bright I is leaked where the field leaks 0.4 %; of 10 % it is not."""
    flares = np.where(np.arange(40) % 10 == 3, 1.0, 0.0)
    steady = np.full(40, 1000.0)
    finding = Leakage().check(polarised(steady, 10.0 * flares))
    assert finding.verdict == "fail"
    assert finding.values["limit"] == pytest.approx(0.012, abs=5e-4)
    assert finding.values["n_leaked"] == 4
    assert finding.values["p_constant"] > 0.5
    assert Leakage().check(polarised(steady, 100.0 * flares)).verdict == "pass"
    assert Leakage().check(polarised(steady, 80.0 * flares, leak=None)).verdict == "fail"


def test_a_flare_that_leaks_stays_a_flare() -> None:
    """Where Stokes I flares too the candidate does not rest on what has leaked, and that is said."""
    flares = np.where(np.arange(40) % 10 == 3, 1.0, 0.0)
    finding = Leakage().check(polarised(1000 * flares, 10.0 * flares))
    assert (finding.verdict, finding.values["n_leaked"]) == ("pass", 4)
    assert "only that counts" in finding.evidence
    dark = Leakage().check(polarised(np.zeros(40), 10.0 * flares))
    assert (dark.verdict, dark.values["n_leaked"]) == ("pass", 0)
    assert Leakage().check(in_bands(band(1.4, 10.0 * flares))).verdict == "uninformative"
