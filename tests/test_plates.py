"""Photographic plates from header to candidate table: each answers light in its own way, and steady stars are steady."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pyarrow.parquet as pq
import pytest
import skies
from astropy.io import fits
from astropy.table import Table

from hindlight import cli

PLATES = 24
POOR = 5  # plates that show few stars: their first
FLARE = 13
SKY = 0.6  # of the exposure at which the density is half of the highest
FWHM = 4.0
NOISE = 0.03
NORTH = skies.Sky(instrument="scanner", n_frames=PLATES, size=260, fwhm_pixels=FWHM, unit="density", noise="white",
                  extra={"EMULSION": "IIIa J", "FILTER": "GG 385", "PLATENUM": 7})  # fmt: skip


def densities(light: np.ndarray, rng: np.random.Generator, exposure: float) -> np.ndarray:
    """What a plate makes of light: an S-shaped curve of density, of a steepness, depth and speed of its own."""
    steepness, deepest, speed = rng.uniform(1.2, 1.8), rng.uniform(2.5, 4.0), np.exp(0.25 * rng.standard_normal())
    exposed = np.maximum(exposure * speed * (SKY + light), 0.0) ** steepness
    return deepest * exposed / (1.0 + exposed)


def stars() -> list[skies.Source]:
    """Stars that span a factor of 40, a target that is as bright as the middle ones and one that flares."""
    rng = np.random.default_rng(3)
    places = [s for s in skies.lattice(49, 340.0, "star") if np.hypot(s.east, s.north) > 1]
    fluxes = 10 ** rng.uniform(-0.6, 1.0, len(places))
    some = [
        skies.Source(s.name, s.east + 25 * rng.uniform(-1, 1), s.north, f) for s, f in zip(places, fluxes, strict=True)
    ]
    flaring = skies.Source("flaring", 0.0, 0.0, lambda number, *_: 2.5 if number == FLARE else 0.5)
    return [flaring, *some]


def write_plates(folder: Path, sky: skies.Sky, sources: list[skies.Source], seed: int) -> None:
    """Plates as FITS files; the first POOR ones were exposed so shortly that they show a few stars."""
    folder.mkdir(parents=True)
    rng = np.random.default_rng(seed)
    for number, day in enumerate(np.sort(rng.uniform(30000.0, 40000.0, sky.n_frames))):
        light = np.zeros((sky.size, sky.size))
        for source in sources:
            flux = source.flux(number, day, "I") if callable(source.flux) else source.flux
            place = (sky.size - 1) / 2 + np.array((-source.east, source.north)) / sky.pixel_arcsec
            skies.add_source(light, place, flux, FWHM)
        image = densities(light, rng, 0.02 if number < POOR else 1.0) + NOISE * rng.standard_normal(light.shape)
        cards = skies.header(sky, float(day), (0.0, 0.0))
        fits.PrimaryHDU(image.astype(np.float32), cards).writeto(folder / f"plate{number:03d}.fits")


@pytest.fixture(scope="module")
def plates(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A run over plates with one flare; five plates show too few stars for a curve."""
    folder = tmp_path_factory.mktemp("plates")
    sources = stars()
    write_plates(folder / "frames", NORTH, sources, 5)
    (folder / "targets.csv").write_text(skies.target_text([sources[0], *sources[1::4]], NORTH), encoding="utf-8")
    (folder / "s.toml").write_text("[controls]\nper_field = 150\n", encoding="utf-8")
    arguments = ["mine", folder / "frames", "--targets", folder / "targets.csv", "--out", folder / "run",
                 "--settings", folder / "s.toml", "-q", "--without", "lomb_scargle"]  # fmt: skip
    assert cli.run_command([str(a) for a in arguments]) == 0
    return folder
