"""What varies smoothly is bright in no single frame: its brightest frames against its faintest, and what checks say of it."""

from __future__ import annotations

import dataclasses
import math

import numpy as np
import pytest

from hindlight import Candidate, LightCurve, brightest_and_faintest, contrast, host, motion
from hindlight_plugins.common_mode import FrameWide
from hindlight_plugins.neighbour import Neighbour
from hindlight_plugins.position_check import Position
from planted import FIRST_FRAME, FWHM, GAUSS, SCALE, SMOOTH, Field, add, blank_field, smooth, smooth_neighbour

CHECKS = host.load(host.PluginSpec()).checks
PIXEL = FWHM / 10  # a tenth of a beam


def concerns(candidate: Candidate) -> list[str]:
    """The checks that fail."""
    return [check.name for check in CHECKS if check.check(candidate).verdict == "fail"]


def curve_of(flux: np.ndarray, error: float = 1.0) -> LightCurve:
    """A curve with equal errors."""
    return LightCurve.from_arrays(np.arange(float(len(flux))), flux, np.full(len(flux), error))


def still(seed: int, flux: np.ndarray) -> Field:
    """A radio field without anything but one source of these fluxes."""
    made = Field(seed, 1e5 * np.arange(len(flux)), np.zeros((len(flux), 2)))
    made.source(0.0, 0.0, flux)
    return made


def without_noise(made: Field) -> Field:
    """The same with images of its things alone; their fluxes are of one sigma still."""
    for k in range(made.n):
        image = np.zeros_like(made.image(k))
        for x, y, flux in (thing[:, k] for thing in made.things):
            add(image, x, y, flux)
        made.images[k] = image
    return made


def test_thirds_by_flux() -> None:
    """In order of flux, at most thirty of each third; of ten frames three are too few."""
    high, low = brightest_and_faintest(curve_of(np.array([0, 50, 10, 40, 20, 30, 60, 5, 15, 35, 45, 55.0])))
    assert (high.tolist(), low.tolist()) == ([10, 1, 11, 6], [0, 7, 2, 8])
    high, low = brightest_and_faintest(curve_of(np.arange(300.0)))
    assert (len(high), high[0], high[-1], len(low), low[0], low[-1]) == (30, 200, 299, 30, 0, 99)
    assert [len(rows) for rows in brightest_and_faintest(curve_of(10 * np.arange(11.0)))] == [0, 0]


def test_noise_and_lone_flares_are_not_sorted() -> None:
    """None of 300 blank curves, nor with flares in three frames; a sinusoid of 4 sigma always."""
    rng = np.random.default_rng(1)
    for _ in range(300):
        noise = rng.normal(size=60)
        assert len(brightest_and_faintest(curve_of(noise))[0]) == 0
        assert len(brightest_and_faintest(curve_of(noise + 50.0 * (np.arange(60) % 20 == 3)))[0]) == 0
        assert len(brightest_and_faintest(curve_of(noise + 4.0 * np.sin(np.arange(60))))[0]) == 20


def test_how_much_of_the_difference_is_noise() -> None:
    """As much as noise has of the variance: exact for a normal signal in normal noise."""
    rng = np.random.default_rng(2)
    noise, signal = rng.normal(size=90_000), 2.0 * rng.normal(size=90_000)
    by_flux = np.argsort(noise + signal)
    high, low = by_flux[-30_000:], by_flux[:30_000]
    part = (noise[high].mean() - noise[low].mean()) / ((noise + signal)[high].mean() - (noise + signal)[low].mean())
    assert part == pytest.approx(1 / 5, abs=0.01)


def test_only_what_varies_is_left() -> None:
    """Beside a steady source: the light is both, what is added is the variable alone, on the light curve's flux scale."""
    wave = 10.0 + 8.0 * np.sin(np.arange(40))
    made = still(3, wave)
    made.source(2 * FWHM, 0.0, 60.0)
    candidate = without_noise(made).candidate()
    curve = candidate.curves[0]
    doubled = dataclasses.replace(curve, raw_flux=curve.flux * 1.6, raw_flux_err=curve.flux_err * 1.6)
    high, low = brightest_and_faintest(curve)
    change = curve.flux[high].mean() - curve.flux[low].mean()
    for one, scale in ((curve, 1.0), (doubled, 1 / 1.6)):
        found = contrast(dataclasses.replace(candidate, curves=(one,)), 0, 3.0)
        here, aside = (round(found.added.y), round(found.added.x)), round(found.added.x + 2 * FWHM)
        assert found.added.pixels[here] == pytest.approx(scale * change, rel=0.03)
        assert abs(found.added.pixels[here[0], aside]) < 0.05 * change
        assert found.light.pixels[here[0], aside] == pytest.approx(60.0 * scale, rel=0.03)
        assert found.n == 26
        error = math.hypot(*(np.sum(curve.flux_err[rows] ** 2) ** 0.5 / 13 for rows in (high, low)))
        assert found.snr == pytest.approx(change / error)
        assert found.light.rms == pytest.approx(
            scale * float(np.sum(made.depth[curve.frame[np.concatenate((high, low))] - FIRST_FRAME] ** 2) ** 0.5) / 26
        )


def test_contrast_needs_frames_that_can_be_read() -> None:
    """None without cut-outs, and none where nothing varies all over."""
    candidate = still(3, 10.0 + 8.0 * np.sin(np.arange(40))).candidate()
    assert contrast(dataclasses.replace(candidate, cutouts=lambda frames, half_width: []), 0, 2.5) is None
    assert contrast(still(3, np.zeros(40)).candidate(), 0, 2.5) is None


@pytest.mark.parametrize("moves", [True, False], ids=["moves", "is added to"])
def test_motion_by_least_squares(moves: bool) -> None:
    """Planted: a source half a beam away moves east by two tenths of a beam, or a point at the position is added to it."""
    n, away, change = 40, FWHM / 2, 6.0
    odd = np.arange(n) % 2 == 1
    made = still(4, np.where(odd & (not moves), change, 0.0))
    # east is towards -x: a source west of the position comes nearer by going east
    made.fixed(made.x + away + np.where(odd & moves, -PIXEL, PIXEL * moves), made.y, 60.0)
    found = contrast(without_noise(made).candidate(), 0, 2.5)
    fitted = motion(found, -away * SCALE, 0.0, 0.05)
    added = found.added.pixels[round(found.added.y), round(found.added.x)]
    if moves:
        exact = 60.0 * (math.exp(-GAUSS * (away - PIXEL) ** 2) - math.exp(-GAUSS * (away + PIXEL) ** 2))
        assert added == pytest.approx(exact, rel=0.02)
        assert fitted.shift == (pytest.approx(2 * PIXEL * SCALE, rel=0.1), pytest.approx(0.0, abs=0.02))
        assert fitted.moved == pytest.approx(exact, rel=0.1)
        assert abs(fitted.there) < 0.2 * exact
        assert fitted.delta_chi2 > 100
    else:
        assert fitted.there == pytest.approx(change, rel=0.1)
        assert abs(fitted.moved) < 0.1 * change
        assert fitted.delta_chi2 < 0
    assert (
        motion(dataclasses.replace(found, added=dataclasses.replace(found.added, pixels=-found.added.pixels)), 1, 0, 0)
        is None
    )


def unlit(made: Field) -> Candidate:
    """The candidate of a run whose threshold no frame exceeds."""
    candidate = made.candidate()
    return dataclasses.replace(candidate, bright=(np.zeros(len(candidate.curves[0]), bool),))


@pytest.mark.parametrize("name", SMOOTH)
def test_what_varies_smoothly_aside_is_named(name: str) -> None:
    """Three seeds that are bright once, or never, carry the right concern (100 in tests/studies/checks.py)."""
    make, wanted = SMOOTH[name]
    assert [wanted in concerns(make(seed).candidate()) for seed in range(7000, 7003)] == [True] * 3


def test_smooth_variables_carry_no_concern() -> None:
    """None of eight, and those that are bright in no frame are looked at all the same."""
    assert [concerns(smooth(seed).candidate()) for seed in range(7000, 7006)] == [[]] * 6
    for seed in (7006, 7007):
        candidate = unlit(smooth(seed))
        assert concerns(candidate) == []
        finding = Position().check(candidate)
        assert finding.verdict == "pass"
        assert "the brightest of 32 frames have more" in finding.evidence
        assert Neighbour().check(candidate).verdict == "pass"


def test_a_neighbour_that_is_never_bright() -> None:
    """Where no frame of the target is bright the light that varies is found half a beam, and a whole one, away."""
    for seed in (7010, 7011, 7012):
        finding = Position().check(unlit(smooth_neighbour(seed)))
        assert finding.verdict == "fail"
        assert finding.values["n_frames"] == 32
        assert finding.values["offset"] > 0.3 * FWHM * SCALE
    wave = 10.0 * np.sin(1e5 * np.arange(48))
    made = still(5, np.zeros(48))
    made.source(FWHM, 0.0, (12.0 + 5.0 * wave / 10) / math.exp(-GAUSS * FWHM**2))
    finding = Neighbour().check(unlit(made))
    assert (finding.verdict, finding.values["n_frames"]) == ("fail", 10)
    assert finding.values["distance"] == pytest.approx(FWHM * SCALE, rel=0.15)


def test_evidence_of_a_source_that_wanders() -> None:
    """Half a beam away, frames off by a tenth of a beam: how far, by how much it moves and what that does here."""
    rng = np.random.default_rng(6)
    made = blank_field(6, radio=True)
    off = 0.1 * FWHM * rng.normal(size=(2, made.n))
    made.fixed(made.x + FWHM / 2 + off[0], made.y + off[1], 60.0)
    finding = Position().check(made.candidate())
    assert finding.verdict == "fail"
    assert finding.values["offset"] == pytest.approx(FWHM / 2 * SCALE, rel=0.1)
    assert (
        "beams) from the position; between the faintest and the brightest of 32 frames it moves by 0.2"
        in finding.evidence
    )
    nearer = Position(off=0.8).check(made.candidate())
    assert nearer.verdict != "fail"


def beside(seed: int, flux: np.ndarray, steady: float, off_by: float) -> Field:
    """A variable half a beam from a steady source, in frames that are off their headers by so many beams."""
    made = blank_field(seed, radio=bool(seed % 2))
    off = off_by * FWHM * np.random.default_rng(seed).normal(size=(2, made.n))
    made.fixed(made.x + off[0], made.y + off[1], flux)
    made.fixed(made.x + FWHM / 2 + off[0], made.y + off[1], steady)
    return made


WAVE, PULSES = 12.0 + 12.0 * np.sin(1.3 * np.arange(48)), np.arange(48) % 9 == 1


@pytest.mark.parametrize(("flux", "off_by"), [(WAVE, 0.02), (14.0 * PULSES, 0.02), (25.0 * PULSES, 0.05)])
def test_a_variable_beside_a_steady_source_passes(flux: np.ndarray, off_by: float) -> None:
    """Beside a steady source of 80 sigma whose motion alone would make the position vary."""
    for seed in range(4):
        assert Position().check(beside(seed, flux, 80.0, off_by).candidate()).verdict == "pass"


def test_light_that_is_clearly_added_is_not_laid_on_motion() -> None:
    """Where no frame is bright and the steady source's motion is about as much: a point at the position is not missed."""
    for seed in range(4):
        assert Position().check(unlit(beside(seed, WAVE, 130.0, 0.05))).verdict != "fail"


def test_frames_that_brighten_with_everything_in_them() -> None:
    """Where no frame is bright the brightest ones are looked at: blank positions that rise with them fail the check."""
    wave = 4.0 * np.sin(0.7 * np.arange(60))
    made = still(7, 12.0 + wave)
    candidate = unlit(made)
    quiet = FrameWide().check(candidate)
    assert (quiet.verdict, quiet.values["n_frames"]) == ("pass", 20)
    assert "of 20 brightest frames" in quiet.evidence
    made.controls_raised = np.where(wave > 2.0, 5.0, 0.0)
    assert FrameWide().check(candidate).verdict == "fail"
