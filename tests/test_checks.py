"""The shipped consistency checks on simulated frames: what passes, what fails, and where they know nothing."""

from __future__ import annotations

import dataclasses
import math
from collections.abc import Sequence

import numpy as np
import pytest
from scipy.stats import binom, kstest

from hindlight import Block, Candidate, Channel, Cutout, LightCurve
from hindlight_plugins.common_mode import FrameWide, outlier_rate, pulls
from hindlight_plugins.point_likeness import PointLikeness, fitted_shape
from hindlight_plugins.position_check import Position, centroid, centroid_error

RADIO = Channel("radio", unit="Jy/beam")
OPTICAL = Channel("optical", unit="count")
N_FRAMES = 50


def make_curve(snr: np.ndarray, channel: Channel = RADIO, first_frame: int = 100) -> LightCurve:
    """A light curve of unit errors with the given fluxes, frames numbered from `first_frame`."""
    frames = first_frame + np.arange(snr.size)
    return LightCurve.from_arrays(np.arange(snr.size) * 60.0, snr, np.ones(snr.size), channel=channel, frame=frames)


def make_block(z: np.ndarray, frames: np.ndarray, channel: Channel = RADIO) -> Block:
    """Controls with the given fluxes in units of their errors, shape (n_positions, n_frames)."""
    filler = np.zeros_like(z)
    return Block(
        names=tuple(f"control {k}" for k in range(len(z))),
        channel=channel,
        frame=frames,
        t_tdb_s=filler + np.arange(frames.size) * 60.0,
        exposure_s=filler,
        flux=2.0 * z,
        flux_err=np.where(np.isfinite(z), 2.0, np.nan),
        raw_flux=2.0 * z,
        raw_flux_err=filler + 2.0,
        flags=filler.astype(np.int64),
        clock_error_s=np.full(frames.size, np.nan),
    )


def make_candidate(
    curves: Sequence[LightCurve],
    bright: Sequence[np.ndarray],
    z: np.ndarray | None = None,
    cutouts: Sequence[Cutout] = (),
) -> Candidate:
    """A candidate whose controls have `z` in every frame of the first curve, and whose cut-outs are given."""

    def controls(label: str, frames: np.ndarray) -> Block:
        assert label == curves[0].channel.label
        return make_block(np.zeros((0, frames.size)) if z is None else z[:, frames - 100], frames)

    def around(frames: np.ndarray, half_width: float) -> Sequence[Cutout]:
        assert half_width >= 1.5
        return [cutout for cutout in cutouts if cutout.frame in frames]

    n = tuple(np.zeros(len(curve)) for curve in curves)
    return Candidate("target", 10.0, 20.0, tuple(curves), tuple(bright), n, n, None, controls, around)


def flaring(frames: Sequence[int], height: float = 10.0) -> tuple[LightCurve, np.ndarray]:
    """A curve that is bright in some frames, and where."""
    bright = np.isin(np.arange(N_FRAMES), frames)
    return make_curve(np.where(bright, height, 0.0)), bright


# --- everything brightens at once


def test_binomial_reference():
    """The chance of two and of three of thirty beyond 3 sigma is that of scipy.stats.binom.sf: 3.0156e-3, 7.566e-5."""
    z = np.zeros((30, N_FRAMES))
    curve, bright = flaring([7])
    for outliers, expected in ((2, 3.0156e-3), (3, 7.566e-5)):
        z[:outliers, 7] = 5.0
        rate = outlier_rate(z[:, ~bright])  # Gaussian, or one in all the quiet ones, whichever is more
        finding = FrameWide().check(make_candidate([curve], [bright], z))
        assert finding.values["p"] == pytest.approx(binom.sf(outliers - 1, 30, rate))
        assert finding.values["p"] == pytest.approx(expected, rel=2e-4)


def test_quiet_frames_pass():
    """Where the blank positions are as quiet as ever the check passes, whatever the candidate does."""
    rng = np.random.default_rng(1)
    curve, bright = flaring([3, 17, 30])
    finding = FrameWide().check(make_candidate([curve], [bright], rng.normal(size=(200, N_FRAMES))))
    assert finding.verdict == "pass"
    assert finding.values["n_frames"] == 3
    assert finding.values["n_bad"] == 0


def test_a_bad_frame_fails():
    """Where blank positions brighten too, or merely scatter beyond their errors, the check fails with figures."""
    rng = np.random.default_rng(2)
    curve, bright = flaring([17])
    for spoil in (lambda z: z + 4, lambda z: 3 * z, lambda z: z - 4):
        z = rng.normal(size=(200, N_FRAMES))
        z[:, 17] = spoil(z[:, 17])
        finding = FrameWide().check(make_candidate([curve], [bright], z))
        assert finding.verdict == "fail"
        assert finding.values["p"] < 1e-3
        assert "1 of 1 bright frames" in finding.evidence


def test_one_bad_frame_of_many_is_said_but_does_not_fail():
    """A source that is bright in ten frames, one of them bad, passes unless the setting asks for less."""
    rng = np.random.default_rng(3)
    curve, bright = flaring(range(0, 50, 5))
    z = rng.normal(size=(200, N_FRAMES))
    z[:, 5] += 5
    finding = FrameWide().check(make_candidate([curve], [bright], z))
    assert (finding.verdict, finding.values["n_bad"]) == ("pass", 1)
    assert FrameWide(share=0.0).check(make_candidate([curve], [bright], z)).verdict == "fail"


def test_heavy_tails_are_no_bad_frames():
    """In noise with heavy tails everywhere the archive's own rate of outliers counts, not the Gaussian one."""
    rng = np.random.default_rng(4)
    curve, bright = flaring([17, 20])
    verdicts = []
    for _ in range(50):
        z = rng.standard_t(3, size=(200, N_FRAMES))
        verdicts.append(FrameWide().check(make_candidate([curve], [bright], z)).verdict)
    assert verdicts.count("pass") >= 48


def test_noisy_frames_are_said_and_fail_nothing():
    """A frame of three times the noise whose errors tell so is as good as others; in the evidence it stands with figures."""
    rng = np.random.default_rng(6)
    curve, bright = flaring([17])
    z = rng.normal(size=(40, N_FRAMES))

    def controls(label, frames):
        block = make_block(z, frames)
        wide = np.where(np.arange(N_FRAMES) == 17, 3.0, 1.0)
        return dataclasses.replace(block, flux=block.flux * wide, flux_err=block.flux_err * wide)

    candidate = dataclasses.replace(make_candidate([curve], [bright], z), controls=controls)
    finding = FrameWide().check(candidate)
    assert finding.verdict == "pass"
    assert finding.values["noise"] == pytest.approx(3.0)
    assert "3.0 times as noisy" in finding.evidence
    quiet = FrameWide().check(make_candidate([curve], [bright], z))
    assert quiet.values["noise"] == pytest.approx(1.0)
    assert "noisy" not in quiet.evidence


def test_frame_wide_is_uninformative_with_few_controls():
    """With fewer than twenty blank positions in the bright frames, or none, nothing is said."""
    rng = np.random.default_rng(5)
    curve, bright = flaring([17])
    z = rng.normal(size=(40, N_FRAMES))
    z[:30, 17] = np.nan
    for controls in (z, z[:19], z[:0], None):
        finding = FrameWide().check(make_candidate([curve], [bright], controls))
        assert finding.verdict == "uninformative"
        assert math.isnan(finding.values["p"])
    assert FrameWide().check(make_candidate([curve], [~np.isfinite(curve.flux)], z)).verdict == "uninformative"


def test_controls_are_judged_about_their_own_level():
    """Diffuse emission under a control is no outlier; with too few quiet frames its level is taken to be zero."""
    z = np.full((30, N_FRAMES), 8.0)
    block = make_block(z, 100 + np.arange(N_FRAMES))
    quiet = np.arange(N_FRAMES) != 17
    assert np.abs(pulls(block, quiet)).max() == 0
    assert np.abs(pulls(block, np.zeros(N_FRAMES, bool))).min() == 8.0


# --- position


def make_cutout(
    frame: int,
    offset: tuple[float, float] = (0.0, 0.0),
    snr: float = 20.0,
    fwhm: float = 4.0,
    rng: np.random.Generator | None = None,
    scale: float = 2.0,
    correlated: bool = True,
) -> Cutout:
    """A Gaussian source `offset` pixels from the position, in noise smoothed as the beam or white, on a background."""
    half = math.ceil(2.5 * fwhm)
    axis = np.arange(2 * half + 1)
    x, y = np.meshgrid(axis, axis)
    x0, y0 = half + 0.3, half - 0.2
    pixels = snr * np.exp(-4 * math.log(2) * ((x - x0 - offset[0]) ** 2 + (y - y0 - offset[1]) ** 2) / fwhm**2)
    if rng is not None:
        noise = rng.normal(size=pixels.shape)
        if correlated:  # white noise times a Gaussian in the Fourier plane; periodic edges
            # a kernel sqrt(2) narrower than the beam gives noise whose autocorrelation is the beam itself
            squared = np.fft.fftfreq(axis.size)[:, None] ** 2 + np.fft.fftfreq(axis.size) ** 2
            sigma = 0.424661 * fwhm / math.sqrt(2)
            noise = np.fft.ifft2(np.fft.fft2(noise) * np.exp(-2 * (math.pi * sigma) ** 2 * squared)).real
            noise *= 2 * math.sqrt(math.pi) * sigma
        pixels = pixels + noise
    to_sky = np.array([[-scale, 0.0], [0.0, scale]])
    return Cutout(frame, "radio", pixels + 100.0, x0, y0, to_sky, fwhm, 100.0, 1.0)


def test_centroid_of_a_clean_source():
    """Without noise the centroid is exact, wherever the source lies within the pixel."""
    for offset in ((0.0, 0.0), (0.37, -0.81), (-2.0, 1.5)):
        np.testing.assert_allclose(centroid(make_cutout(0, offset)), offset, atol=1e-6)


def test_centroid_beside_blank_pixels():
    """Blank pixels are left out; where too few are left, or no source is there, no centroid is given."""
    cutout = make_cutout(0, (0.5, 0.5))
    cutout.pixels[:, :9] = np.nan
    np.testing.assert_allclose(centroid(cutout), (0.5, 0.5), atol=1e-6)
    cutout.pixels[:] = np.nan
    assert centroid(cutout) is None
    empty = make_cutout(0, snr=0.0)
    assert centroid(empty) is None


def test_centroid_of_a_negative_source():
    """In channels whose flux may be negative the centroid of a hole is found, elsewhere not."""
    cutout = make_cutout(0, (0.5, -0.5), snr=-20.0)
    np.testing.assert_allclose(centroid(cutout, signed=True), (0.5, -0.5), atol=1e-6)
    assert centroid(cutout) is None


@pytest.mark.parametrize(("correlated", "lowest"), [(True, 0.82), (False, 0.92)])
def test_errors_of_centroids(correlated, lowest):
    """Centroids scatter as stated in white noise, and up to a sixth less in noise correlated as the beam is."""
    rng = np.random.default_rng(6)
    fwhm, peak = 4.0, 20.0
    # the S/N of a peak in correlated noise is peak/rms, of a matched filter in white noise peak * sqrt(sum beam^2)
    snr = peak if correlated else peak * math.sqrt(math.pi) * 0.424661 * fwhm
    shifts = np.array(
        [centroid(make_cutout(0, snr=peak, fwhm=fwhm, rng=rng, correlated=correlated)) for _ in range(400)]
    )
    assert lowest < shifts.std() / centroid_error(fwhm, snr) < 1.08
    assert centroid_error(45.0, 10.0) == pytest.approx(1.911 * math.sqrt(2), rel=1e-3)  # 45 arcsec at S/N 10, exact


def simulated(offsets: np.ndarray, rng: np.random.Generator, snr: float = 20.0, correlated: bool = True) -> Candidate:
    """A candidate bright in as many frames as offsets (pixels) are given, with its cut-outs."""
    curve = make_curve(np.where(np.arange(N_FRAMES) < len(offsets), snr, 0.0))
    peak = snr if correlated else snr / (math.sqrt(math.pi) * 0.424661 * 4.0)
    cutouts = [
        make_cutout(100 + k, tuple(offset), peak, rng=rng, correlated=correlated) for k, offset in enumerate(offsets)
    ]
    return make_candidate([curve], [curve.flux > 0], cutouts=cutouts)


def test_a_source_in_its_place_passes():
    """Centroids that scatter by their errors about the position pass, and their p is nowhere near the limit."""
    rng = np.random.default_rng(7)
    for n in (1, 2, 10):
        finding = Position().check(simulated(np.zeros((n, 2)), rng))
        assert finding.verdict == "pass"
        assert finding.values["n_frames"] == n
        assert finding.values["offset"] < 1.5
        assert math.isnan(finding.values["chi2_scatter"]) == (n == 1)


def test_a_lone_flare_beside_the_position_fails():
    """A single flare half a beam away fails on its offset, told in arcsec and beams."""
    finding = Position().check(simulated(np.array([[2.0, 0.0]]), np.random.default_rng(8)))
    assert finding.verdict == "fail"
    assert finding.values["offset"] == pytest.approx(4.0, abs=1.0)  # 2 pixels of 2 arcsec
    assert "arcsec (0.5" in finding.evidence or "arcsec (0.4" in finding.evidence
    assert "1 bright frame " in finding.evidence


def test_a_wandering_source_fails_on_its_scatter():
    """Flares that come from all around the position fail, though their mean is in the right place."""
    around = np.array([[1.5, 0.0], [-1.5, 0.0], [0.0, 1.5], [0.0, -1.5], [1.0, 1.0], [-1.0, -1.0]])
    finding = Position().check(simulated(around, np.random.default_rng(9)))
    assert finding.verdict == "fail"
    assert finding.values["offset"] < 1.0
    assert finding.values["chi2_scatter"] > 60
    assert "scatter about the mean" in finding.evidence


def test_a_common_small_offset_is_forgiven():
    """Twenty frames that share an offset of a twentieth of a beam are within the systematic floor."""
    offsets = np.full((20, 2), 0.05 * 4.0 / math.sqrt(2))
    assert Position().check(simulated(offsets, np.random.default_rng(10), snr=200.0)).verdict == "pass"
    assert Position(floor=0.0).check(simulated(offsets, np.random.default_rng(10), snr=200.0)).verdict == "fail"


def test_an_uncertain_target_is_forgiven():
    """An offset within the stated error of the target positions is none."""
    candidate = simulated(np.full((5, 2), 1.0), np.random.default_rng(11))
    assert Position().check(candidate).verdict == "fail"
    assert Position(target_err=2.0).check(candidate).verdict == "pass"


def test_scatter_reference_value():
    """The scatter of four published-style offsets has chi-square 5.952716 for 6 degrees of freedom (scipy 1.17)."""
    offsets = np.array([[0.3, -0.1], [-0.5, 0.3], [0.2, -0.6], [0.4, 0.2]])
    finding = Position(floor=0.0)._judge(offsets, np.array([0.4, 0.4, 0.5, 0.3]), np.full(4, 10.0))
    assert finding.values["chi2_scatter"] == pytest.approx(5.952716, rel=1e-6)
    assert finding.verdict == "pass"


def test_position_p_values_are_fair():
    """Without a floor p is uniform in white noise (Kolmogorov-Smirnov, p > 1e-3), and larger in correlated noise."""
    rng = np.random.default_rng(12)
    white, correlated = (
        [Position(floor=0.0).check(simulated(np.zeros((3, 2)), rng, 20.0, kind)).values["p"] for _ in range(200)]
        for kind in (False, True)
    )
    assert kstest(white, "uniform").pvalue > 1e-3
    assert kstest(correlated, "uniform", alternative="greater").pvalue > 1e-3


def test_position_is_uninformative_without_positions():
    """Faint flares, cut-outs without a source and missing cut-outs say nothing."""
    rng = np.random.default_rng(13)
    curve = make_curve(np.where(np.arange(N_FRAMES) < 3, 4.5, 0.0))
    faint = make_candidate([curve], [curve.flux > 0], cutouts=[make_cutout(100 + k, rng=rng) for k in range(3)])
    bright, mask = flaring([0, 1])
    nothing = make_candidate([bright], [mask], cutouts=[make_cutout(100, snr=0.0)])
    missing = make_candidate([bright], [mask])
    for candidate in (faint, nothing, missing):
        finding = Position().check(candidate)
        assert finding.verdict == "uninformative"
        assert finding.values["n_frames"] == 0


def test_only_the_best_frames_are_asked_for():
    """At most `max_frames` cut-outs are read, those of highest signal to noise, over all channels."""
    asked = []
    snr = 0.05 * np.arange(N_FRAMES) + 5
    curve = make_curve(snr)
    other = make_curve(snr + 0.02, OPTICAL, first_frame=500)
    candidate = make_candidate([curve, other], [snr > 0, snr > 0])
    object.__setattr__(candidate, "cutouts", lambda frames, half_width: asked.extend(frames) or [])
    Position(max_frames=4).check(candidate)
    assert asked == [549, 149, 548, 148]


def test_findings_hold_the_declared_columns():
    """Whatever the verdict, a finding has each declared column and no other."""
    rng = np.random.default_rng(14)
    curve, bright = flaring([7])
    for z in (None, rng.normal(size=(40, N_FRAMES))):
        values = FrameWide().check(make_candidate([curve], [bright], z)).values
        assert list(values) == [column.name for column in FrameWide.columns]
    for offsets in (np.zeros((0, 2)), np.zeros((1, 2)), np.zeros((3, 2))):
        values = Position().check(simulated(offsets, rng)).values
        assert list(values) == [column.name for column in Position.columns]


# --- point-likeness

CAMERA = Channel("camera", unit="adu")


def shaped(frame: int, snr: float, major: float, minor: float, angle: float = 0.5, fwhm: float = 4.0) -> Cutout:
    """A Gaussian with these widths (pixels) in white noise, as bright as gives `snr` with an optimal filter."""
    rng = np.random.default_rng(1000 * frame + 1)
    half = math.ceil(2.5 * fwhm)
    axis = np.arange(2 * half + 1)
    x, y = np.meshgrid(axis - half - 0.3, axis - half + 0.2)
    along, across = x * math.cos(angle) + y * math.sin(angle), y * math.cos(angle) - x * math.sin(angle)
    shape = np.exp(-4 * math.log(2) * ((along / major) ** 2 + (across / minor) ** 2))
    pixels = 100.0 + snr * shape / np.sqrt((shape**2).sum()) + rng.normal(size=shape.shape)
    return Cutout(frame, "camera", pixels, half + 0.3, half - 0.2, np.diag([-1.0, 1.0]), fwhm, 100.0, 1.0)


def of_shape(cutouts: Sequence[Cutout], snr: float = 30.0, channel: Channel = CAMERA) -> Candidate:
    """A candidate whose bright frames are these cut-outs."""
    curve = make_curve(np.full(len(cutouts), snr), channel)
    return make_candidate([curve], [curve.flux > 0], cutouts=cutouts)


def test_shapes_have_their_errors() -> None:
    """Each number of a shape has an error of 1 / snr, and no bias."""
    found = np.array([fitted_shape(shaped(k, 30.0, 4.0, 4.0)) for k in range(300)])
    np.testing.assert_allclose(found.std(axis=0) * 30, 1.0, atol=0.15)
    np.testing.assert_allclose(found.mean(axis=0) * 30, 0.0, atol=0.25)
    found = np.array([fitted_shape(shaped(k, 300.0, 6.0, 3.0, 0.5)) for k in range(10)])
    half = 0.5 * math.log(2.0)
    expected = [math.log(math.sqrt(18.0) / 4.0), half * math.cos(1.0), half * math.sin(1.0)]
    np.testing.assert_allclose(found.mean(axis=0), expected, atol=0.01)


@pytest.mark.parametrize(
    ("major", "minor", "verdict"),
    [
        (4.0, 4.0, "pass"), (4.4, 4.0, "pass"), (3.6, 3.6, "pass"), (9.0, 9.0, "pass"),  # wide and round: a bright star
        (1.0, 1.0, "fail"), (1.5, 1.5, "fail"), (16.0, 2.0, "fail"), (12.0, 4.0, "fail"),
    ],
)  # fmt: skip
def test_what_is_a_point(major: float, minor: float, verdict: str) -> None:
    """Dust and cosmic rays are narrower than a star of this frame, scratches and trails longer."""
    finding = PointLikeness().check(of_shape([shaped(100 + k, 30.0, major, minor) for k in range(2)]))
    assert finding.verdict == verdict
    assert finding.values["n_frames"] == 2
    assert "2 bright frames" in finding.evidence


@pytest.mark.parametrize(("spoiled", "verdict"), [(0, "pass"), (5, "pass"), (8, "fail"), (20, "fail")])
def test_a_bad_column_in_one_pointing_of_many(spoiled: int, verdict: str) -> None:
    """In a quarter of twenty bright frames, where a true source is long, it is told and does not fail; in more it does."""
    finding = PointLikeness().check(
        of_shape([shaped(100 + k, 30.0, *((16.0, 2.0) if k < spoiled else (4.0, 4.0))) for k in range(20)])
    )
    assert finding.verdict == verdict
    assert ("without the worst 5 frames p = " in finding.evidence) == (spoiled == 5)
    assert (finding.values["p"] < 1e-4) == (spoiled > 0)


def test_where_shapes_say_nothing() -> None:
    """Faint frames, a beam of less than two pixels or one that is only assumed, and synthesised images."""
    narrow = [shaped(100, 30.0, 1.0, 1.0)]
    assert PointLikeness().check(of_shape(narrow)).verdict == "fail"
    assert PointLikeness().check(of_shape(narrow, snr=6.0)).verdict == "uninformative"
    synthesised = PointLikeness().check(of_shape(narrow, channel=RADIO))
    assert synthesised.verdict == "uninformative"
    assert "part of an image" in synthesised.evidence
    assumed = [dataclasses.replace(narrow[0], fwhm_known=False)]
    undersampled = [shaped(100, 30.0, 1.0, 1.0, fwhm=1.8)]
    for cutouts in (assumed, undersampled):
        finding = PointLikeness().check(of_shape(cutouts))
        assert finding.verdict == "uninformative"
        assert "1 with a beam" in finding.evidence
