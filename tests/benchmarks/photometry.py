"""How fast is photometry, header to flux, against the plain way and against copying the same pixels?

Plain: for each file `fits.getdata`, `WCS(header)`, photutils' exact circular aperture and sigma-clipped annulus. Ours:
`measure_frame` with the aperture estimator and the same radii. Copy: a memory-mapped gather of the same stamps into a
native array. One process, 16 different 2048 x 2048 float32 files, medians over rounds in which the three take turns.

Run: python tests/benchmarks/photometry.py [--fwhm PIXELS] [--rounds N] [--positions N ...]
"""

from __future__ import annotations

import argparse
import os
import statistics
import sys
import tempfile
import time
import warnings
from collections.abc import Callable
from pathlib import Path

import numpy as np
import photutils
from astropy.io import fits
from astropy.stats import SigmaClip
from astropy.wcs import WCS, FITSFixedWarning
from numpy.lib.stride_tricks import sliding_window_view
from photutils.aperture import ApertureStats, CircularAnnulus, CircularAperture

from hindlight import sky
from hindlight.opening import FrameToMeasure
from hindlight.photometry import measure_frame
from hindlight.settings import Settings
from hindlight_plugins.aperture import Aperture

SIZE, FILES, SCALE_ARCSEC = 2048, 16, 2.0
SETTINGS = Settings()
GOALS = {10: 15.0, 100: 20.0, 1000: 25.0}
GOAL_1000_FAST_PHOTUTILS = 6.0  # photutils 3.1 and newer measure apertures in compiled batches
COPY_GOAL = 2.0  # at 100 positions, times copying the stamps


def write_files(folder: Path) -> list[Path]:
    """Images of white noise, each with its own pointing and rotation."""
    rng = np.random.default_rng(1)
    paths = []
    for number in range(FILES):
        angle = np.radians(rng.uniform(-30, 30))
        c, s, d = np.cos(angle), np.sin(angle), SCALE_ARCSEC / 3600
        header = fits.Header()
        header.update({
            "CTYPE1": "RA---TAN", "CTYPE2": "DEC--TAN", "CRVAL1": 150 + rng.uniform(-0.01, 0.01),
            "CRVAL2": 2 + rng.uniform(-0.01, 0.01), "CRPIX1": 1024.5, "CRPIX2": 1024.5, "CD1_1": -d * c, "CD1_2": d * s,
            "CD2_1": d * s, "CD2_2": d * c, "RADESYS": "ICRS", "BUNIT": "adu", "MJD-OBS": 51943.25,
            "EXPTIME": 30.0,
        })  # fmt: skip
        for card in range(60):
            header[f"INFO{card}"] = (card, "what instruments write into headers")
        path = folder / f"{number:02d}.fits"
        fits.PrimaryHDU(rng.normal(100, 5, (SIZE, SIZE)).astype(np.float32), header).writeto(path)
        paths.append(path)
    return paths


def positions(n: int) -> tuple[np.ndarray, np.ndarray]:
    """Positions that lie on every image, with room for the annulus."""
    rng = np.random.default_rng(n)
    reach = (SIZE / 2**0.5 / 2 - 120) * SCALE_ARCSEC / 3600
    x, y = rng.uniform(-reach, reach, (2, n))
    return 150 + x / np.cos(np.radians(2)), 2 + y


def plain(path: Path, ra: np.ndarray, dec: np.ndarray, fwhm: float) -> np.ndarray:
    """What most people write."""
    data, header = fits.getdata(path, header=True)
    x, y = WCS(header).all_world2pix(ra, dec, 0)
    where = np.column_stack((x, y))
    photometry = SETTINGS.photometry
    circle = CircularAperture(where, 1.5 * fwhm)
    ring = CircularAnnulus(where, photometry.annulus_inner * fwhm, photometry.annulus_outer * fwhm)
    background = ApertureStats(data, ring, sigma_clip=SigmaClip(3.0))
    level, rms = background.median, background.std
    total = circle.do_photometry(data, method="exact")[0]
    return np.stack((total - level * circle.area, rms * circle.area**0.5))


def ours(path: Path, ra: np.ndarray, dec: np.ndarray, fwhm: float) -> np.ndarray:
    """The same through the program's own way."""
    width = fwhm * SCALE_ARCSEC
    frame = FrameToMeasure(str(path), beam_major=width, beam_minor=width, beam_angle=0.0, unit="adu")
    found = measure_frame(frame, ra, dec, Aperture(), SETTINGS)
    return np.stack((found["flux"], found["flux_err"]))


def copier(fwhm: float, n: int) -> Callable[..., np.ndarray]:
    """Copying the stamps that hold the annulus; where they are is given for nothing."""
    half = int(np.ceil(SETTINGS.photometry.annulus_outer * fwhm))
    rng = np.random.default_rng(n)
    ix, iy = rng.integers(half, SIZE - half, (2, n))

    def copy(path: Path, ra: np.ndarray, dec: np.ndarray, fwhm: float) -> np.ndarray:
        offset = os.path.getsize(path) // 2880 * 2880 - -(-SIZE * SIZE * 4 // 2880) * 2880
        image = np.memmap(path, ">f4", "r", offset, (SIZE, SIZE))
        windows = sliding_window_view(np.asarray(image), (2 * half + 1, 2 * half + 1))
        return windows[iy - half, ix - half].astype(np.float32)

    return copy


def timed(ways: dict[str, Callable[..., np.ndarray]], paths: list[Path], n: int, fwhm: float, rounds: int) -> dict:
    """Median seconds a frame for each way, taking turns."""
    ra, dec = positions(n)
    spent: dict[str, list[float]] = {name: [] for name in ways}
    for turn in range(rounds + 1):
        for name, way in ways.items():
            sky._lean.cache_clear()  # each round meets each header for the first time, as a run does
            start = time.perf_counter()
            for path in paths:
                way(path, ra, dec, fwhm)
            if turn:  # the first round warms the page cache
                spent[name].append((time.perf_counter() - start) / len(paths))
    return {name: statistics.median(values) for name, values in spent.items()}


def agreement(path: Path, fwhm: float) -> float:
    """The largest difference between plain and ours in sigma; clipping and subsampling leave a few tenths."""
    ra, dec = positions(100)
    a, b = plain(path, ra, dec, fwhm), ours(path, ra, dec, fwhm)
    return float(np.abs((a[0] - b[0]) / b[1]).max())


def main() -> int:
    """Print the figures; 1 where a goal is missed."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--fwhm", type=float, default=5.0, help="width of beam or seeing in pixels")
    parser.add_argument("--rounds", type=int, default=5)
    parser.add_argument("--positions", type=int, nargs="*", choices=sorted(GOALS), default=sorted(GOALS))
    given = parser.parse_args()
    warnings.simplefilter("ignore", FITSFixedWarning)
    missed = []
    with tempfile.TemporaryDirectory() as name:
        paths = write_files(Path(name))
        print(f"photutils {photutils.__version__}, FWHM {given.fwhm} px, {FILES} files of {SIZE} x {SIZE} float32")
        print(f"plain and ours differ by at most {agreement(paths[0], given.fwhm):.2f} sigma")
        print("positions    plain ms     ours ms     copy ms   ours 1/s   plain/ours (goal)   ours/copy")
        for n in given.positions:
            goal = GOALS[n]
            if n == 1000 and tuple(map(int, photutils.__version__.split(".")[:2])) >= (3, 1):
                goal = GOAL_1000_FAST_PHOTUTILS
            took = timed(
                {"plain": plain, "ours": ours, "copy": copier(given.fwhm, n)}, paths, n, given.fwhm, given.rounds
            )
            ratio, copies = took["plain"] / took["ours"], took["ours"] / took["copy"]
            shown = "  ".join(f"{took[way] * 1e3:10.2f}" for way in ("plain", "ours", "copy"))
            print(f"{n:9d}  {shown} {n / took['ours']:10.0f}   {ratio:10.1f} ({goal:.0f})   {copies:9.2f}")
            missed += [f"{n} positions: {ratio:.1f} < {goal:.0f}"] * (ratio < goal)
            missed += [f"{n} positions: {copies:.2f} > {COPY_GOAL} copies"] * (n == 100 and copies > COPY_GOAL)
    print("goals missed: " + "; ".join(missed) if missed else "all goals reached")
    return 1 if missed else 0


if __name__ == "__main__":
    sys.exit(main())
