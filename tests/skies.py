"""Small simulated archives for tests and studies: FITS images with chosen noise, sources and instruments."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np
from astropy.io import fits
from astropy.time import Time
from scipy import ndimage

Flux = Callable[[int, float, str], float]  # frame number, time in days, Stokes -> flux


@dataclass(frozen=True)
class Source:
    """A source at an offset from the field's centre in arcsec; `flux` is a number, or a function of frame, day, Stokes."""

    name: str
    east: float
    north: float
    flux: float | Flux = 0.0


@dataclass(frozen=True)
class Sky:
    """One instrument's frames.

    `gain_scatter` is that of the frames' gains; `pointing_pixels` and `pointing_gradient` (per pixel) are how far, on
    each axis, images are off their headers. `per_night` frames follow each other half an hour apart. `noise` is white,
    beam (autocorrelation equal to the beam) or heavy (the same from Student t(4) pixels, and the rms differs from frame to
    frame by a quarter). `noisier`, where it is given, is by how much each frame's noise is larger than `rms`.
    """

    instrument: str = "north array"
    n_frames: int = 40
    size: int = 160
    fwhm_pixels: float = 3.0
    pixel_arcsec: float = 10.0
    frequency_hz: float = 1.4e9
    stokes: str = "I"
    unit: str = "Jy/beam"
    rms: float = 1.0
    noise: str = "beam"
    first_day: float = 51000.0
    last_day: float = 55000.0
    exposure_s: float = 120.0
    ra: float = 150.0
    dec: float = -30.0
    jitter_pixels: float = 0.5
    gain_scatter: float = 0.0
    pointing_pixels: float = 0.0
    pointing_gradient: float = 0.0
    noisier: tuple[float, ...] = ()
    per_night: int = 1
    site: tuple[float, float, float] = (5195675.767, 1891071.326, -3170873.735)
    extra: dict[str, object] = field(default_factory=dict)
    backdrop: Callable[[int], np.ndarray] | None = None  # what lies behind a frame's sources, in units of the rms


def header(sky: Sky, day: float, shift: Sequence[float]) -> fits.Header:
    """A conforming header for one frame."""
    cards = fits.Header()
    centre = (sky.size + 1) / 2
    cards["CTYPE1"], cards["CTYPE2"] = "RA---SIN", "DEC--SIN"
    cards["CRVAL1"], cards["CRVAL2"] = sky.ra, sky.dec
    cards["CRPIX1"], cards["CRPIX2"] = centre + shift[0], centre + shift[1]
    cards["CDELT1"], cards["CDELT2"] = -sky.pixel_arcsec / 3600, sky.pixel_arcsec / 3600
    cards["CUNIT1"] = cards["CUNIT2"] = "deg"
    cards["RADESYS"], cards["BUNIT"], cards["INSTRUME"] = "ICRS", sky.unit, sky.instrument
    cards["DATE-OBS"], cards["TIMESYS"] = Time(day, format="mjd", scale="utc").isot, "UTC"
    cards["XPOSURE"] = sky.exposure_s
    cards["OBSGEO-X"], cards["OBSGEO-Y"], cards["OBSGEO-Z"] = sky.site
    if sky.unit == "Jy/beam":
        cards["FREQ"], cards["STOKES"] = sky.frequency_hz, sky.stokes
        cards["BMAJ"] = cards["BMIN"] = sky.fwhm_pixels * sky.pixel_arcsec / 3600
        cards["BPA"] = 0.0
    else:
        cards["FILTER"], cards["SEEING"] = "R", sky.fwhm_pixels * sky.pixel_arcsec
    for key, value in sky.extra.items():
        cards[key] = value
    return cards


def noise_image(sky: Sky, rng: np.random.Generator) -> np.ndarray:
    """Noise of unit rms."""
    white = rng.standard_normal((sky.size, sky.size))
    if sky.noise == "white":
        return white
    amplitude = 1.0
    if sky.noise == "heavy":
        white = rng.standard_t(4, white.shape) / 2**0.5
        amplitude = float(np.exp(0.25 * rng.standard_normal()))
    sigma = sky.fwhm_pixels / 2.354820045 / 2**0.5  # smoothed with this the autocorrelation is the beam
    smooth = ndimage.gaussian_filter(white, sigma, mode="wrap")
    return amplitude * smooth / (1 / (2 * np.pi**0.5 * sigma))


@dataclass(frozen=True)
class Truth:
    """What was done to one frame: its gain, and its shift at the middle of the image in pixels."""

    name: str
    gain: float
    shift: tuple[float, float]


def write_sky(folder: Path, sky: Sky, sources: Sequence[Source], seed: int, prefix: str = "frame") -> list[Truth]:
    """Write the frames of one instrument into a folder."""
    folder.mkdir(parents=True, exist_ok=True)
    rng = np.random.default_rng(seed)
    nights = np.sort(rng.uniform(sky.first_day, sky.last_day, -(-sky.n_frames // sky.per_night)))
    days = (nights[:, None] + np.arange(sky.per_night) / 48).ravel()[: sky.n_frames]
    middle = (sky.size - 1) / 2
    done = []
    for number, day in enumerate(days):
        jitter = sky.jitter_pixels * rng.standard_normal(2)
        image = sky.rms * noise_image(sky, rng)
        if sky.noisier:
            image *= sky.noisier[number]
        if sky.backdrop is not None:
            image += sky.rms * sky.backdrop(number)
        gain, shift, gradient = 1.0, np.zeros(2), np.zeros((2, 2))
        if sky.gain_scatter or sky.pointing_pixels:
            gain = 1.0 + sky.gain_scatter * rng.standard_normal()
            shift = sky.pointing_pixels * rng.standard_normal(2)
            gradient = sky.pointing_gradient * rng.standard_normal((2, 2))
        for source in sources:
            flux = source.flux(number, float(day), sky.stokes) if callable(source.flux) else source.flux
            place = np.array((-source.east, source.north)) / sky.pixel_arcsec + jitter
            place = place + shift + gradient @ place
            scale = 1.0 if sky.unit == "Jy/beam" else 1 / (1.133090 * sky.fwhm_pixels**2)
            add_source(image, middle + place, sky.rms * gain * flux * scale, sky.fwhm_pixels)
        name = f"{prefix}{number:04d}.fits"
        hdu = fits.PrimaryHDU(image.astype(np.float32), header(sky, float(day), jitter))
        hdu.writeto(folder / name, overwrite=True)
        done.append(Truth(name, gain, (float(shift[0]), float(shift[1]))))
    return done


def add_source(image: np.ndarray, place: np.ndarray, peak: float, fwhm: float) -> None:
    """Add a round Gaussian at 0-based (x, y)."""
    reach = int(np.ceil(6 * fwhm))
    left, top = (max(0, int(c) - reach) for c in place)
    patch = image[top : max(0, int(place[1]) + reach + 1), left : max(0, int(place[0]) + reach + 1)]
    y, x = np.mgrid[: patch.shape[0], : patch.shape[1]]
    patch += peak * np.exp(-4 * np.log(2) * ((x + left - place[0]) ** 2 + (y + top - place[1]) ** 2) / fwhm**2)


def target_text(sources: Sequence[Source], sky: Sky) -> str:
    """The target list of these sources as CSV; offsets are on the tangent (SIN) plane."""
    lines = ["name,ra,dec"]
    for source in sources:
        xi, eta = np.radians(source.east / 3600), np.radians(source.north / 3600)
        d0 = np.radians(sky.dec)
        z = np.sqrt(1 - xi**2 - eta**2)
        dec = np.degrees(np.arcsin(eta * np.cos(d0) + z * np.sin(d0)))
        ra = sky.ra + np.degrees(np.arctan2(xi, z * np.cos(d0) - eta * np.sin(d0)))
        lines.append(f"{source.name},{ra:.9f},{dec:.9f}")
    return "\n".join(lines) + "\n"


def lattice(n: int, spacing_arcsec: float, name: str = "blank") -> list[Source]:
    """`n` blank places on a square lattice around the centre."""
    side = int(np.ceil(n**0.5))
    offsets = (np.arange(side) - (side - 1) / 2) * spacing_arcsec
    places = [(float(e), float(d)) for d in offsets for e in offsets][:n]
    return [Source(f"{name}{k:03d}", e, d) for k, (e, d) in enumerate(places)]
