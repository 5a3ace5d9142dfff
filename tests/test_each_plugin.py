"""Each shipped statistic, period search and check has an outside value, a recovery test and a false-alarm test.

Which ones is written down here, and those that the files about each sort of plugin lack are here. Outside values are a
published one, that of a reference library, or an exact result; "planted" ones are exact by construction of what is found.
"""

from __future__ import annotations

import ast
import itertools
import math
from functools import cache
from pathlib import Path

import numpy as np
import pytest
from scipy import stats

from hindlight import Candidate, LightCurve, host
from hindlight_plugins.across_bands import AcrossBands
from hindlight_plugins.brightest import Brightest
from hindlight_plugins.detector_fixed import DetectorFixed, Ghost
from hindlight_plugins.leakage import Leakage
from hindlight_plugins.neighbour import Neighbour
from hindlight_plugins.point_likeness import PointLikeness, fitted_shape, shape_error
from hindlight_plugins.position_check import linear_motion
from hindlight_plugins.sidelobe import Sidelobe
from hindlight_plugins.structure_function import LAGS, StructureFunction
from planted import FWHM, SCALE, SIDE, Field, blank_field
from test_artefacts import band, in_bands, polarised
from test_checks import shaped

# For each plugin the tests of its outside value, of recovery and of false alarms.
STATISTICS = {
    "mean_flux": "test_statistics:test_reference_values", "chi_square": "test_statistics:test_reference_values",
    "von_neumann": "test_statistics:test_reference_values", "stetson": "test_statistics:test_reference_values",
    "welch_stetson": "test_statistics:test_welch_stetson_of_two_channels",
    "brightest": "test_each_plugin:test_excess_of_a_lone_flare",
    "bayesian_blocks": "test_statistics:test_blocks_are_those_of_astropy",
    "structure_function": "test_each_plugin:test_structure_function_of_a_slope",
    "distribution": "test_statistics:test_robust_measures_and_skewness",
    "duty_cycle": "test_statistics:test_reference_values", "epoch_activity": "test_statistics:test_a_source_switched_on",
}  # fmt: skip
EVERY = ("test_power:test_its_source_stands_out", "test_power:test_noise_does_not_stand_out")
CLEAN = "test_artefacts:test_clean_variables_carry_no_concern"
PLANTED = "test_artefacts:test_what_is_planted_is_named"
TESTS: dict[str, tuple[str, str, str]] = {
    **{name: (test, *EVERY) for name, test in STATISTICS.items()},
    "lomb_scargle": (
        "test_lomb_scargle:test_published_powers", "test_lomb_scargle:test_recovery",
        "test_lomb_scargle:test_false_alarms_keep_their_rate",
    ),
    "across_bands": (
        "test_artefacts:test_spectral_index_reference", "test_artefacts:test_a_flare_in_one_band_only",
        "test_each_plugin:test_true_spectra_are_believed",
    ),
    "detector_fixed": ("test_each_plugin:test_the_pixel_of_a_defect", PLANTED, CLEAN),
    "ghost": ("test_each_plugin:test_the_place_of_a_ghost", PLANTED, CLEAN),
    "frame_wide": ("test_checks:test_binomial_reference", PLANTED, "test_checks:test_heavy_tails_are_no_bad_frames"),
    "leakage": (
        "test_each_plugin:test_the_limit_of_leakage", "test_artefacts:test_leaked_flux_fails_and_true_polarisation_passes",
        "test_each_plugin:test_true_polarisation_is_believed",
    ),
    "moving": ("test_check_noise:test_what_noise_reaches_by_chance", PLANTED, CLEAN),
    "neighbour": ("test_each_plugin:test_the_share_of_a_neighbour", PLANTED, CLEAN),
    "point_likeness": (
        "test_checks:test_shapes_have_their_errors", "test_checks:test_what_is_a_point",
        "test_each_plugin:test_shapes_of_points_are_fair",
    ),
    "position": (
        "test_checks:test_scatter_reference_value", "test_checks:test_a_lone_flare_beside_the_position_fails",
        "test_checks:test_position_p_values_are_fair",
    ),
    "proper_motion": (
        "test_artefacts:test_motion_reference_values", "test_artefacts:test_fast_and_slow_motion",
        "test_each_plugin:test_motions_of_what_is_still_are_fair",
    ),
    "sidelobe": (
        "test_artefacts:test_fisher_reference", PLANTED, "test_each_plugin:test_bright_at_any_sidereal_time_is_no_sidelobe",
    ),
}  # fmt: skip


@cache
def functions_of(module: str) -> set[str]:
    """The test functions of a file."""
    text = (Path(__file__).parent / f"{module}.py").read_text(encoding="utf-8")
    return {node.name for node in ast.parse(text).body if isinstance(node, ast.FunctionDef)}


def test_every_plugin_has_its_three_tests() -> None:
    """A statistic, period search or check that is added without them fails here."""
    loaded = host.load(host.PluginSpec())
    assert sorted(TESTS) == sorted(p.name for p in (*loaded.statistics, *loaded.period_searches, *loaded.checks))
    for tests in TESTS.values():
        for module, name in (test.split(":") for test in tests):
            assert name in functions_of(module), f"{module}: no {name}"


# --- outside values


def test_excess_of_a_lone_flare() -> None:
    """Over eight samples of one flux the error of the difference is (1 + 1/8)^(1/2) of one sample's; exact."""
    flux = np.full(10, 3.0)
    flux[4], flux[7] = 23.0, 13.0
    values = Brightest().compute(LightCurve.from_arrays(np.arange(10.0), flux, np.full(10, 2.0)))
    error = 2 * math.sqrt(1 + 1 / 8)
    assert values["excess"] == pytest.approx(20 / error)
    assert values["second"] == pytest.approx(10 / error)
    assert values["snr"] == pytest.approx(11.5)


def test_structure_function_of_a_slope() -> None:
    """Two samples in each of four nights, a flux that grows by 2 a day: squares of 2 lag, whose errors add 2 each; exact."""
    days = np.array([0.0, 0.02, 100.0, 100.02, 210.0, 210.02, 330.0, 330.02])
    values = StructureFunction().compute(LightCurve.from_arrays(days * 86400.0, 2 * days, np.ones(8)))
    between = [later - night for night, later in itertools.combinations((0.0, 100.0, 210.0, 330.0), 2)]
    highest = max(edge for edge in LAGS if edge < 330.0)  # the bin of the longest lags, here with all but the shortest
    lags = np.array([lag + shift for lag in between for shift in (-0.02, 0.0, 0.0, 0.02) if lag + shift >= highest])
    assert values["short_lag"] == pytest.approx(0.02)
    assert values["short"] == pytest.approx(4 * 0.02**2 - 2)
    assert values["long_lag"] == pytest.approx(lags.mean())
    assert values["long"] == pytest.approx((4 * lags**2).mean() - 2)
    assert values["rise"] == pytest.approx(math.log10((lags**2).mean() / 0.02**2))


def test_the_pixel_of_a_defect() -> None:
    """Planted: the evidence names the pixel that is warm."""
    made = blank_field(5, radio=False)
    x, y = round(SIDE / 2 + made.target[0]), round(SIDE / 2 + made.target[1])
    made.fixed(x, y, 25.0)
    finding = DetectorFixed().check(made.candidate())
    assert finding.verdict == "fail"
    named = [int(part.strip("(),")) for part in finding.evidence.split("pixel ")[-1].split()[:2]]
    assert np.hypot(named[0] - x, named[1] - y) <= 1.5


def test_the_place_of_a_ghost() -> None:
    """Planted: what follows the star's reflection across the middle is a ghost; a flaring source of the sky there is not."""
    for reflected in (True, False):
        made = blank_field(6, radio=False)
        middle = np.full(2, (SIDE - 1) / 2)
        star = -2 * np.array(made.target)
        made.source(*star, 600.0)
        if reflected:
            made.fixed(2 * middle[0] - made.x - star[0], 2 * middle[1] - made.y - star[1], 18.0)
        else:
            made.source(0.0, 0.0, np.where(np.arange(made.n) % 6 == 0, 18.0, 0.0))
        assert Ghost().check(made.candidate()).verdict == ("fail" if reflected else "pass")


def test_the_share_of_a_neighbour() -> None:
    """Planted: at d beams of a Gaussian beam the candidate shows exp(-4 ln 2 d^2) of what brightens there; exact."""
    made = Field(7, np.arange(40) * 1e5, np.zeros((40, 2)))
    away = 1.2 * FWHM
    made.source(away, 0.0, np.where(np.arange(40) % 8 == 0, 600.0, 0.0))
    finding = Neighbour().check(made.candidate())
    assert finding.verdict == "fail"
    assert finding.values["distance"] == pytest.approx(away * SCALE, rel=0.15)
    assert finding.values["share"] == pytest.approx(math.exp(-4 * math.log(2) * 1.2**2), abs=0.006)


def test_the_limit_of_leakage() -> None:
    """Three times the root mean square of the steady sources' ratios, 0.004 each; exact but for their noise."""
    flares = np.where(np.arange(40) % 10 == 3, 10.0, 0.0)
    for leak in (0.004, 0.02):
        finding = Leakage().check(polarised(np.full(40, 1000.0), flares, leak))
        assert finding.values["limit"] == pytest.approx(3 * leak, rel=0.05)


# --- false alarms


def few(n_found: int, n: int, rate: float) -> bool:
    """Whether so many of n are no more than a rate allows, to one in a thousand."""
    return bool(n_found <= stats.binom.isf(1e-3, n, rate))


def test_true_spectra_are_believed() -> None:
    """Flares in two bands with any spectral index from -3 to 1, each with its noise: hardly one of 300 fails."""
    failed = informative = 0
    for seed in range(300):
        rng = np.random.default_rng([seed, 1])
        flare = np.where(np.arange(40) % 13 == 7, rng.uniform(8, 40), 0.0)
        index = rng.uniform(-3, 1)
        curves = [band(ghz, flare * (ghz / 1.4) ** index + rng.normal(size=40)) for ghz in (1.4, 1.5)]
        verdict = AcrossBands().check(in_bands(*curves)).verdict
        failed += verdict == "fail"
        informative += verdict != "uninformative"
    assert informative > 200
    assert few(failed, 300, AcrossBands().level)


def test_true_polarisation_is_believed() -> None:
    """Flares of a tenth to a half of a bright Stokes I, in V alone, where sources leak 0.4 %: none of 200 fails."""
    for seed in range(200):
        rng = np.random.default_rng([seed, 2])
        flares = np.where(np.arange(40) % 10 == 3, rng.uniform(0.1, 0.5), 0.0)
        size = rng.uniform(200, 2000)
        candidate: Candidate = polarised(size + rng.normal(size=40), size * flares + rng.normal(size=40))
        assert Leakage().check(candidate).verdict == "pass"


def test_shapes_of_points_are_fair() -> None:
    """Without its floor p of round points of the beam's width is hardly ever small: 300 frames, taken three at a time."""
    shapes = np.array([fitted_shape(shaped(k, 25.0, 4.0, 4.0)) for k in range(300)])
    found = [PointLikeness(floor=0.0)._judge(some, np.full(3, shape_error(25.0))) for some in shapes.reshape(-1, 3, 3)]
    p = np.array([finding.values["p"] for finding in found])
    assert few((p < 0.01).sum(), len(p), 0.01)
    assert few((p < 0.1).sum(), len(p), 0.1)
    assert p.min() < 0.2, "a p-value that is never small tests nothing"


def test_motions_of_what_is_still_are_fair() -> None:
    """The chance of a motion is uniform for centroids that only scatter: two degrees of freedom, exact."""
    rng = np.random.default_rng(4)
    p = []
    for _ in range(400):
        error = rng.uniform(0.2, 0.6, 7)
        offsets = error[:, None] * rng.normal(size=(7, 2))
        p.append(math.exp(-linear_motion(np.sort(rng.uniform(0, 1, 7)), offsets, error)[2] / 2))
    assert stats.kstest(p, "uniform").pvalue > 1e-3


def test_bright_at_any_sidereal_time_is_no_sidelobe() -> None:
    """Flares at random in nights of twelve frames: hardly one of 25 comes at the same sidereal times."""
    failed, p = 0, []
    day = np.repeat(np.arange(6), 10)
    times = 86164.0905 * day + 1800.0 * np.tile(np.arange(10), 6)
    for seed in range(25):
        made = Field(seed, times, np.zeros((60, 2)))
        made.source(0.0, 0.0, np.where(np.random.default_rng([seed, 5]).random(60) < 0.12, 15.0, 0.0))
        finding = Sidelobe().check(made.candidate())
        failed += finding.verdict == "fail"
        p.append(finding.values["p_sidereal"])
    assert few(failed, 25, 0.01)
    assert np.isfinite(p).sum() > 20
