"""Are flux errors right? Pulls (flux - truth) / error of every estimator in the noise it is meant for.

Sources of known flux, at random places within a pixel and far from each other, are put into simulated images and
measured as the program does. In each case 10,000 pulls must have |mean| <= 0.05 and a standard deviation of 0.97-1.03.

Run: python tests/studies/pulls.py [--measurements N]; exits with 1 where a case falls short.
"""

from __future__ import annotations

import argparse
import sys
from dataclasses import dataclass

import numpy as np

from hindlight.fluxes import measure
from hindlight.pixels import Pixels
from hindlight.plugin import BeamShape, Estimator
from hindlight.settings import Photometry
from hindlight_plugins.aperture import Aperture
from hindlight_plugins.peak import Peak
from hindlight_plugins.psf import Psf

MEAN, SPREAD = 0.05, (0.97, 1.03)
SIZE = 1024
SKY = 2000.0  # electrons per pixel where photons are counted; the median of counts lies 1/6 below their mean
SETTINGS = Photometry()
ROUND, LONG = BeamShape(3.0, 3.0, 0.0), BeamShape(5.0, 3.2, 0.6)


@dataclass(frozen=True)
class Case:
    """An estimator, its beam, and the noise: 'white', 'beam' (autocorrelation of the beam), 'smoothed' (white noise

    convolved with the beam) or 'photons' (counts of sky and source, gain known).
    """

    estimator: Estimator
    beam: BeamShape
    noise: str


CASES = [
    Case(Peak(), LONG, "beam"),
    Case(Peak(), LONG, "smoothed"),
    Case(Psf(), ROUND, "white"),
    Case(Psf(), LONG, "white"),
    Case(Psf(), ROUND, "photons"),
    Case(Aperture(), ROUND, "white"),
    Case(Aperture(), ROUND, "photons"),
]


def gaussian(beam: BeamShape, dx: np.ndarray, dy: np.ndarray) -> np.ndarray:
    """The beam, 1 at its middle."""
    c, s = np.cos(beam.angle), np.sin(beam.angle)
    along, across = (c * dx + s * dy) / beam.major, (c * dy - s * dx) / beam.minor
    return 2.0 ** (-4 * (along**2 + across**2))


def smooth(white: np.ndarray, beam: BeamShape, narrower: float) -> np.ndarray:
    """White noise convolved with the beam made narrower by a factor, scaled to unit variance; edges wrap around."""
    offset = np.fft.fftfreq(SIZE, 1 / SIZE)
    kernel = gaussian(beam, offset * narrower, offset[:, None] * narrower)
    kernel /= np.sqrt((kernel**2).sum())
    return np.fft.irfft2(np.fft.rfft2(white) * np.fft.rfft2(kernel), s=white.shape)


def places(beam: BeamShape, rng: np.random.Generator) -> tuple[np.ndarray, np.ndarray]:
    """Positions so far apart that none lies in another's annulus, at random within their pixels."""
    spacing = int(np.ceil((SETTINGS.annulus_outer + 3.5) * beam.fwhm))
    reach = int(np.ceil(SETTINGS.annulus_outer * beam.fwhm)) + 2
    grid = np.arange(reach, SIZE - reach, spacing, dtype=float)
    x, y = (axis.ravel() for axis in np.meshgrid(grid, grid))
    return x + rng.uniform(-0.5, 0.5, x.size), y + rng.uniform(-0.5, 0.5, y.size)


def total_flux(case: Case, snr: float) -> float:
    """The source's flux (peak or total) that gives about this S/N for unit noise per pixel."""
    if isinstance(case.estimator, Peak):
        return snr
    pixels = 2.266 * case.beam.major * case.beam.minor
    if isinstance(case.estimator, Aperture):
        pixels = np.pi * case.estimator.radius(case.beam) ** 2
    if case.noise != "photons":
        return float(snr * pixels**0.5)
    sky = pixels * SKY
    return float(snr**2 / 2 + snr * (snr**2 / 4 + sky) ** 0.5)


def seen_flux(case: Case, flux: float) -> float:
    """The part of the flux that the estimator is defined to measure.

    For an aperture that within the circle: its partial pixels act like a PSF wider by the variance of a pixel, 1/12.
    """
    if not isinstance(case.estimator, Aperture):
        return flux
    variance = case.beam.fwhm**2 / (8 * np.log(2)) + 1 / 12
    return float(flux * -np.expm1(-(case.estimator.radius(case.beam) ** 2) / 2 / variance))


def simulate(case: Case, flux: float, rng: np.random.Generator) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """An image with sources at x, y on a background of 7 (or the sky)."""
    x, y = places(case.beam, rng)
    sources = np.zeros((SIZE, SIZE))
    half = int(np.ceil(3.5 * case.beam.major))
    offset = np.arange(-half, half + 1)
    for px, py in zip(x, y, strict=True):
        i, j = round(px), round(py)
        profile = gaussian(case.beam, i + offset - px, (j + offset - py)[:, None])
        if not isinstance(case.estimator, Peak):
            profile = profile / (2.0 * np.pi * case.beam.major * case.beam.minor / (8 * np.log(2)))
        sources[j - half : j + half + 1, i - half : i + half + 1] += flux * profile
    if case.noise == "photons":
        return rng.poisson(sources + SKY).astype(np.float32), x, y
    white = rng.standard_normal((SIZE, SIZE))
    if case.noise != "white":
        white = smooth(white, case.beam, 2**0.5 if case.noise == "beam" else 1.0)
    return (white + sources + 7.0).astype(np.float32), x, y


def pulls(case: Case, snr: float, wanted: int, seed: int = 1) -> np.ndarray:
    """At least `wanted` pulls, shape (n,)."""
    rng = np.random.default_rng([seed, int(snr), CASES.index(case)])
    flux = total_flux(case, snr)
    truth = seen_flux(case, flux)
    gain = 1.0 if case.noise == "photons" else float("nan")
    found: list[np.ndarray] = []
    while sum(map(len, found)) < wanted:
        image, x, y = simulate(case, flux, rng)
        got = measure(Pixels(image), x, y, case.beam, case.estimator, SETTINGS, gain)
        found.append((got["flux"] - truth) / got["flux_err"])
    return np.concatenate(found)[:wanted]


def main() -> int:
    """Print every case; 1 where one falls short."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--measurements", type=int, default=10_000)
    wanted = parser.parse_args().measurements
    short = 0
    print("estimator  beam px    noise     S/N    mean     sd")
    for case in CASES:
        for snr in (0, 5, 50):
            pull = pulls(case, snr, wanted)
            mean, spread = pull.mean(), pull.std(ddof=1)
            good = abs(mean) <= MEAN and SPREAD[0] <= spread <= SPREAD[1]
            short += not good
            beam = f"{case.beam.major:g} x {case.beam.minor:g}"
            print(f"{case.estimator.name:9}  {beam:9}  {case.noise:8}  {snr:3d}  {mean:+.4f}  {spread:.4f}"
                  f"{'' if good else '  short'}")  # fmt: skip
    print(f"{wanted} measurements a case: " + (f"{short} cases fall short" if short else "all errors are right"))
    return 1 if short else 0


if __name__ == "__main__":
    sys.exit(main())
