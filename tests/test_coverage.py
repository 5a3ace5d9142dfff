"""Stated errors cover the truth, from simulated files to calibrated fluxes: a small version of the study."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from test_estimators import study

STUDY = study("coverage")


def test_a_small_version_of_the_study(tmp_path: Path) -> None:
    """PSF photometry in the noise it is made for and in others; bounds as wide as so few measurements ask."""
    cells = STUDY.cells(tmp_path, "psf", frames=8, size=480, seed=1)
    assert {(cell.noise, cell.snr) for cell in cells} == {(n, s) for n in STUDY.NOISES for s in STUDY.SNRS}
    for cell in cells:
        n = len(cell.pull)
        assert n >= 200
        for sigmas, fraction in STUDY.WITHIN.items():
            allowed = 4 * (fraction * (1 - fraction) / n) ** 0.5 + 0.02  # controls are few: the scale is good to 4 %
            assert abs(cell.inside(sigmas) / n - fraction) < allowed, (cell.noise, cell.snr, sigmas)


def test_the_verdict_can_fail(capsys: pytest.CaptureFixture[str]) -> None:
    """Errors that are a tenth too small or too large, a bias of half an error, or too few measurements."""
    rng = np.random.default_rng(2)
    honest = [STUDY.Cell("psf", "white", snr, rng.standard_normal(2500)) for snr in STUDY.SNRS]
    assert STUDY.verdict(honest) == []
    for spoilt in (1.1 * honest[0].pull, 0.9 * honest[0].pull, honest[0].pull + 0.6, honest[0].pull[:1999]):
        assert STUDY.verdict([STUDY.Cell("psf", "white", 0, spoilt), *honest[1:]]) == ["psf in white noise at S/N 0"]
    assert capsys.readouterr().out.count("short") == 4


def test_holm() -> None:
    """Smallest p times the number of tests, the next times one less, and never falling (S. Holm 1979, section 2)."""
    assert STUDY.holm([0.01, 0.04, 0.03, 0.005]).tolist() == pytest.approx([0.03, 0.06, 0.06, 0.02])


def test_what_fluxes_scatter_by() -> None:
    """Noise-equivalent areas: 2.266 FWHM^2 pixels for a PSF, that of the circle for an aperture; a map's rms for a peak.

    (Horne 1986, PASP 98, 609; Merline & Howell 1995; the first is 4 pi sigma^2.)
    """
    psf, aperture, peak = (STUDY.flux_error(STUDY.ESTIMATORS[n], "white") for n in ("psf", "aperture", "peak"))
    assert psf == pytest.approx((2.2662 * STUDY.FWHM**2) ** 0.5, rel=0.01)
    assert aperture == pytest.approx((np.pi * (1.5 * STUDY.FWHM) ** 2) ** 0.5, rel=0.05)
    assert STUDY.flux_error(STUDY.ESTIMATORS["peak"], "beam") == pytest.approx(1.0, abs=0.01)
    assert 0.5 < peak < 1.0
