"""Do stated errors cover the truth? Known sources through the whole program, after the run's own calibration.

    python tests/studies/coverage.py [--frames 56] [--size 1024] [--seed 1] [--estimators peak psf aperture]

In every cell of estimator (peak in maps per beam, psf and aperture in counts), noise (white, correlated as the beam,
rms changing threefold from frame to frame) and S/N (0, 5, 20, 100), 2,000 measurements and more of sources at random
places within a pixel: the fractions within 1 and 1.96 calibrated errors of the truth are 68.27 % and 95 % (of a normal
distribution). Frames have gains and pointings of their own; 40 steady sources of S/N 20 to 200 serve as comparisons.
Verdict: no exact binomial test, two-sided, is beyond chance at 5 % over all cells and both fractions after Holm's
correction (S. Holm 1979, Scand. J. Statist. 6, 65). Exits non-zero when short.
"""

from __future__ import annotations

import argparse
import sys
import tempfile
from collections.abc import Sequence
from dataclasses import dataclass, replace
from pathlib import Path

import numpy as np
import pyarrow.parquet as pq
from scipy import ndimage, stats

sys.path.insert(0, str(Path(__file__).parents[1]))
import skies
from hindlight import BeamShape, Estimator, Stamps, cli
from hindlight.settings import Photometry
from hindlight_plugins.aperture import Aperture
from hindlight_plugins.peak import Peak
from hindlight_plugins.psf import Psf

ESTIMATORS: dict[str, Estimator] = {"peak": Peak(), "psf": Psf(), "aperture": Aperture()}
SNRS = (0, 5, 20, 100)
NOISES = ("white", "beam", "changing")
WITHIN = {1.0: 0.682689, 1.96: 0.950004}
WITHOUT = ("lomb_scargle", "bayesian_blocks", "structure_function", "distribution", "duty_cycle", "epoch_activity",
           "welch_stetson", "stetson", "von_neumann", "brightest", "frame_wide", "position")  # fmt: skip
COMPARISONS = 40
TARGETS = 40  # at each S/N; few, so that sources lie in few annuli of controls: in those of targets there are none
FWHM = 3.0
PIXEL = 10.0  # arcsec
SIGNIFICANT = 0.05


@dataclass(frozen=True, eq=False)
class Cell:
    """Pulls (flux - truth) / error of one estimator in one noise at one S/N, shape (n,)."""

    estimator: str
    noise: str
    snr: int
    pull: np.ndarray

    def inside(self, sigmas: float) -> int:
        """How many lie within so many errors."""
        return int((np.abs(self.pull) <= sigmas).sum())

    def p_value(self, sigmas: float) -> float:
        """Of the exact two-sided binomial test."""
        return float(stats.binomtest(self.inside(sigmas), len(self.pull), WITHIN[sigmas]).pvalue)


def holm(p_values: Sequence[float]) -> np.ndarray:
    """Holm's adjusted p-values (S. Holm 1979), in the given order."""
    p = np.asarray(p_values, float)
    order = np.argsort(p, kind="stable")
    stepped = np.minimum(1.0, np.maximum.accumulate(p[order] * np.arange(len(p), 0, -1)))
    adjusted = np.empty(len(p))
    adjusted[order] = stepped
    return adjusted


def weights(estimator: Estimator, beam: BeamShape) -> np.ndarray:
    """What an estimator multiplies each pixel with for a source on a pixel's centre: it is linear."""
    half = int(np.ceil(estimator.radius(beam)))
    size = 2 * half + 1
    n = size * size
    one = np.eye(n).reshape(n, size, size)
    flux, _ = estimator.measure(Stamps(one, np.zeros(n), np.zeros(n), np.ones(n), np.zeros(n), beam))
    return flux.reshape(size, size)


def flux_error(estimator: Estimator, noise: str) -> float:
    """The scatter of the flux in noise of unit rms, that of the background left out."""
    weight = np.pad(weights(estimator, BeamShape(FWHM, FWHM, 0.0)), 12)
    if noise != "beam":
        return float((weight**2).sum() ** 0.5)
    sigma = FWHM / 2.354820045  # white noise smoothed with sigma / sqrt(2) has the beam for its autocorrelation
    correlated = ndimage.gaussian_filter(weight, sigma) * 2 * np.pi * sigma**2
    return float((weight * correlated).sum() ** 0.5)


def seen_fraction(estimator: Estimator) -> float:
    """The part of a source's flux that the estimator is defined to measure.

    For an aperture that within the circle: its partial pixels act like a PSF wider by the variance of a pixel, 1/12.
    """
    if not isinstance(estimator, Aperture):
        return 1.0
    variance = FWHM**2 / (8 * np.log(2)) + 1 / 12
    return float(-np.expm1(-(estimator.radius(BeamShape(FWHM, FWHM, 0.0)) ** 2) / 2 / variance))


def kind_of_noise(estimator: str, noise: str) -> str:
    """The noise that changes from frame to frame is of the sort that the estimator is meant for."""
    return noise if noise != "changing" else "beam" if estimator == "peak" else "white"


def instrument(estimator: str, noise: str, frames: int, size: int, rng: np.random.Generator) -> skies.Sky:
    """One instrument whose frames have this noise."""
    noisier = tuple(3.0 ** rng.uniform(0, 1, frames)) if noise == "changing" else (1.0,) * frames
    return skies.Sky(
        instrument=noise, n_frames=frames, size=size, fwhm_pixels=FWHM, pixel_arcsec=PIXEL,
        unit="Jy/beam" if estimator == "peak" else "adu", noise=kind_of_noise(estimator, noise), noisier=noisier,
        gain_scatter=0.05, pointing_pixels=0.3,
    )  # fmt: skip


def places(size: int, rng: np.random.Generator) -> np.ndarray:
    """East and north in arcsec, shape (n, 2), at random within pixels, none in another's annulus, in random order."""
    settings = Photometry()
    spacing = np.ceil((settings.annulus_outer + 2.0) * FWHM)
    reach = size / 2 - np.ceil(settings.annulus_outer * FWHM) - 5.0
    line = np.arange(-reach, reach, spacing)
    grid = np.stack(np.meshgrid(line, line), axis=-1).reshape(-1, 2)
    return rng.permutation(grid + rng.uniform(-0.5, 0.5, grid.shape)) * PIXEL


def sources(at: np.ndarray, unit_flux: float, sky: skies.Sky, rng: np.random.Generator) -> list[skies.Source]:
    """The comparisons, and as many targets at each S/N as are wanted or there is room for.

    A target's flux follows the frame's noise, so that its S/N is the same everywhere; a comparison is steady, and its
    S/N that in the noisiest frame.
    """

    def flux(snr: float) -> skies.Flux:
        return lambda number, _day, _stokes: snr * unit_flux * sky.noisier[number]

    steady = 10 ** rng.uniform(np.log10(20), np.log10(200), COMPARISONS) * unit_flux * max(sky.noisier)
    found = [skies.Source(f"steady{k}", *at[k], float(f)) for k, f in enumerate(steady)]
    return found + [
        skies.Source(f"snr{SNRS[k % len(SNRS)]}_{k}", *place, flux(SNRS[k % len(SNRS)]))
        for k, place in enumerate(at[COMPARISONS : COMPARISONS + TARGETS * len(SNRS)])
    ]


def mined(folder: Path, estimator: str) -> dict[str, dict[str, np.ndarray]]:
    """The run's tables as columns."""
    (folder / "settings.toml").write_text(
        f'[controls]\nfield_size_deg = 50.0\nbright_target_snr = 1e9\n[photometry]\nestimator = "{estimator}"\n',
        encoding="utf-8",
    )
    without = [word for name in WITHOUT for word in ("--without", name)]
    arguments = ["mine", folder / "frames", "--targets", folder / "targets.csv", "--out", folder / "run",
                 "--settings", folder / "settings.toml", "-q", *without]  # fmt: skip
    status = cli.run_command([str(a) for a in arguments])
    if status:
        raise SystemExit(f"the run ended with status {status}")
    names = ("frames", "positions", "frame_solution", "measurements")
    tables = {n: pq.read_table(folder / "run" / (n if n == "measurements" else f"{n}.parquet")) for n in names}
    return {n: {c: t[c].to_numpy(zero_copy_only=False) for c in t.column_names} for n, t in tables.items()}


def calibrated(table: dict[str, np.ndarray], solution: dict[str, np.ndarray]) -> tuple[np.ndarray, np.ndarray]:
    """Flux and error as the run's solution says, by its published formula."""
    at = np.searchsorted(solution["frame"], table["frame"])
    gain = solution["gain"][at]
    error = np.hypot(table["flux_err"] * solution["error_scale"][at], solution["extra_scatter"][at] * table["flux"])
    return table["flux"] / gain, error / gain


def cells(folder: Path, estimator: str, frames: int, size: int, seed: int) -> list[Cell]:
    """Simulate an archive of three instruments, mine it, and compare with the truth."""
    rng = np.random.default_rng([seed, list(ESTIMATORS).index(estimator)])
    at = places(size, rng)
    known, truth = {}, {}
    for number, noise in enumerate(NOISES):
        sky = instrument(estimator, noise, frames, size, rng)
        unit = flux_error(ESTIMATORS[estimator], sky.noise) / seen_fraction(ESTIMATORS[estimator])
        some = sources(at, unit, sky, rng)
        done = skies.write_sky(folder / "frames" / str(number), sky, some, 100 * seed + number)
        scale = np.exp(np.mean([np.log(t.gain) for t in done]))  # the archive's mean scale is what there is to go by
        true = seen_fraction(ESTIMATORS[estimator]) * unit * scale * np.array(sky.noisier)
        known |= {f"{number}/{t.name}": (noise, float(f)) for t, f in zip(done, true, strict=True)}
        truth[noise] = sky
    listed = [replace(s, flux=0.0) for s in some if s.name.startswith("snr")]
    (folder / "targets.csv").write_text(skies.target_text(listed, truth["white"]), encoding="utf-8")
    return compared(mined(folder, estimator), known, estimator)


def compared(run: dict[str, dict[str, np.ndarray]], known: dict[str, tuple[str, float]], estimator: str) -> list[Cell]:
    """Pulls of the targets; `known` maps a frame's path to its noise and the calibrated flux of a target of S/N 1."""
    rows, frames, positions = run["measurements"], run["frames"], run["positions"]
    snr_of = {
        i: int(name[3:].partition("_")[0])
        for i, name, kind in zip(*(positions[c] for c in ("id", "name", "kind")), strict=True)
        if kind == "target"
    }
    of_frame = {i: known[path] for i, path in zip(frames["id"], frames["path"], strict=True)}
    flux, error = calibrated(rows, run["frame_solution"])
    snr = np.array([snr_of.get(i, -1) for i in rows["position"]])
    noise = np.array([of_frame[i][0] for i in rows["frame"]])
    pull = (flux - snr * np.array([of_frame[i][1] for i in rows["frame"]])) / error
    good = np.isfinite(pull)
    return [Cell(estimator, n, s, pull[good & (snr == s) & (noise == n)]) for n in NOISES for s in SNRS]


def verdict(found: Sequence[Cell], least: int = 2000) -> list[str]:
    """Print every cell; what the verdict asks and is not so."""
    adjusted = holm([cell.p_value(sigmas) for cell in found for sigmas in WITHIN]).reshape(-1, len(WITHIN))
    short = []
    print("estimator  noise     S/N      n    mean      sd   within 1   within 1.96   Holm's p")
    for cell, p in zip(found, adjusted, strict=True):
        n, pull = len(cell.pull), cell.pull
        bad = bool(p.min() <= SIGNIFICANT or n < least)
        first, second = (100 * cell.inside(sigmas) / n for sigmas in WITHIN)
        print(f"{cell.estimator:9}  {cell.noise:8}  {cell.snr:3d}  {n:5d}  {pull.mean():+.3f}   {pull.std():.3f}   "
              f"{first:6.2f} %      {second:6.2f} %   {p[0]:.3f} {p[1]:.3f}{'  short' if bad else ''}")  # fmt: skip
        short += [f"{cell.estimator} in {cell.noise} noise at S/N {cell.snr}"] * bad
    return short


def main() -> int:
    """Run the study; 0 when every line of the verdict holds."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--frames", type=int, default=56)
    parser.add_argument("--size", type=int, default=1024)
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--estimators", nargs="+", default=list(ESTIMATORS), choices=list(ESTIMATORS))
    given = parser.parse_args()
    found: list[Cell] = []
    for estimator in given.estimators:
        with tempfile.TemporaryDirectory() as name:
            found += cells(Path(name), estimator, given.frames, given.size, given.seed)
    short = verdict(found)
    print("short: " + "; ".join(short) if short else "errors cover the truth in every cell")
    return 1 if short else 0


if __name__ == "__main__":
    sys.exit(main())
