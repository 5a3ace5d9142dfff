"""FITS headers and files made for tests: a small conforming image that each test changes where it must."""

from __future__ import annotations

from pathlib import Path

import numpy as np
from astropy.io import fits

from hindlight.facts import Cards
from hindlight.files import open_source
from hindlight.headers import Hdu, read_hdus

SITE = (5195675.767, 1891071.326, -3170873.735)
PLAIN: dict[str, object] = {
    "CTYPE1": "RA---SIN", "CTYPE2": "DEC--SIN", "CRVAL1": 30.0, "CRVAL2": 40.0, "CRPIX1": 8.5, "CRPIX2": 6.5,
    "CDELT1": -0.01, "CDELT2": 0.01, "CUNIT1": "deg", "CUNIT2": "deg", "RADESYS": "ICRS",
    "DATE-OBS": "1988-03-17T06:00:00", "TIMESYS": "UTC", "EXPTIME": 120.0, "INSTRUME": "north array",
    "OBSGEO-X": SITE[0], "OBSGEO-Y": SITE[1], "OBSGEO-Z": SITE[2],
    "BUNIT": "Jy/beam", "BMAJ": 0.03, "BMIN": 0.02, "BPA": 30.0, "FREQ": 154e6, "STOKES": "I",
}  # fmt: skip


def header(**cards: object) -> fits.Header:
    """The plain header with some cards changed; None leaves one out, and `__` in a name stands for `-`."""
    out = fits.Header()
    for key, value in (PLAIN | {key.replace("__", "-"): value for key, value in cards.items()}).items():
        if value is not None:
            out[key] = value
    return out


def cards_of(head: fits.Header) -> Cards:
    """The cards of an astropy header."""
    return Cards(head.tostring(endcard=False, padding=False).encode("latin-1"))


def write(path: Path, shape: tuple[int, ...] = (12, 16), **cards: object) -> Path:
    """A file with one image of a NumPy shape; its folder is made."""
    path.parent.mkdir(parents=True, exist_ok=True)
    data = np.arange(np.prod(shape), dtype=np.float32).reshape(shape)
    fits.PrimaryHDU(data, header(**cards)).writeto(path)
    return path


def hdus_of(path: Path, limit: int = 10**9) -> list[Hdu]:
    """Every HDU of a file."""
    with open_source(str(path), limit) as source:
        return list(read_hdus(source))


def image(shape: tuple[int, ...], **cards: object) -> Hdu:
    """An image HDU of a NumPy shape, by its header alone."""
    return Hdu(0, cards_of(header(**cards)), 2880, 4 * int(np.prod(shape)), -32, shape[::-1])
