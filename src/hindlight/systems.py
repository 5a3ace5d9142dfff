"""Celestial coordinate systems: which one a header uses, and the way between it and ICRS.

The rotations are astropy's own, fetched once per system as matrices; only arrays go through them. Nothing here knows
of pixels.
"""

from __future__ import annotations

import re
from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from astropy import units as u
from astropy.coordinates import FK4, FK5, ICRS, CartesianRepresentation, FK4NoETerms, Galactic, SkyCoord
from astropy.time import Time

from hindlight.facts import NAN, Cards
from hindlight.lightcurve import FloatArray


class NoCelestialError(ValueError):
    """The image has no celestial coordinates."""


class BadWcsError(ValueError):
    """The image has celestial coordinates that cannot be used; the text says why."""


@dataclass(frozen=True)
class System:
    """A celestial coordinate system: 'icrs', 'fk5', 'fk4', 'fk4-no-e' or 'galactic'.

    `equinox` is a Julian year for fk5, a Besselian year for fk4; the other systems have none (2000).
    """

    name: str
    equinox: float = 2000.0


def from_icrs(ra: FloatArray, dec: FloatArray, system: System, mjd: float = NAN) -> tuple[FloatArray, FloatArray]:
    """Longitude and latitude (degrees, shape (n,)) in `system` of ICRS positions, for an image of date `mjd`."""
    if system.name == "icrs":
        return ra, dec
    vectors = _turned(_matrix(system, mjd), unit_vectors(ra, dec))
    if system.name == "fk4":
        # The E-terms of aberration are added to the unit vector; only the direction of the sum matters.
        vectors = vectors / np.linalg.norm(vectors, axis=-1, keepdims=True) + _e_terms(system.equinox)
    return _angles(vectors)


def to_icrs(lon: FloatArray, lat: FloatArray, system: System, mjd: float = NAN) -> tuple[FloatArray, FloatArray]:
    """The way back from `from_icrs`."""
    if system.name == "icrs":
        return np.mod(lon, 360.0), lat
    vectors = unit_vectors(lon, lat)
    if system.name == "fk4":
        e = _e_terms(system.equinox)
        along = vectors[..., 0] * e[0] + vectors[..., 1] * e[1] + vectors[..., 2] * e[2]
        # |s d - e| = 1 gives the length s that the observed direction d had before it was normalised.
        vectors = vectors * (along + np.sqrt(along**2 + 1.0 - e @ e))[:, None] - e
    inverse = np.asarray(np.linalg.inv(_matrix(system, mjd)), dtype=np.float64)
    return _angles(_turned(inverse, vectors))


def system_of(cards: Cards) -> tuple[System, bool]:
    """The system of equatorial coordinates by RADESYS and EQUINOX, and whether the header left it to the rules.

    FITS 4.0, 8.3: without RADESYS an equinox before 1984 means FK4, a later one FK5, none ICRS. RADECSYS and EPOCH
    are the deprecated names. Raises `BadWcsError` for apparent places.
    """
    name = (cards.text("RADESYS") or cards.text("RADECSYS")).upper()
    equinox = _equinox(cards, "EQUINOX")
    if equinox != equinox:
        equinox = _equinox(cards, "EPOCH")
    known = equinox == equinox
    if name.startswith("GAPPT"):
        raise BadWcsError("RADESYS is GAPPT: apparent places cannot be compared with a catalogue")
    if name == "ICRS":
        return System("icrs"), False
    if name == "FK5":
        return System("fk5", equinox if known else 2000.0), False
    if name in ("FK4", "FK4-NO-E"):
        return System(name.lower(), equinox if known else 1950.0), False
    if not known:
        return System("icrs"), True
    return System("fk4" if equinox < 1984.0 else "fk5", equinox), True


def _equinox(cards: Cards, key: str) -> float:
    """A year from a number or from text such as 'J2000' or 'B1950.0'; NaN where absent or no possible equinox."""
    if key not in cards:
        return NAN
    value = cards.number(key)
    if value != value:
        match = re.fullmatch(r"[JB]?\s*(\d{4}(?:\.\d*)?)", cards.text(key).upper())
        value = float(match.group(1)) if match else NAN
    return value if 1800.0 <= value <= 2100.0 else NAN


def unit_vectors(lon: FloatArray, lat: FloatArray) -> FloatArray:
    """Unit vectors, shape (n, 3), of directions in degrees."""
    lon, lat = np.radians(lon), np.radians(lat)
    return np.stack((np.cos(lat) * np.cos(lon), np.cos(lat) * np.sin(lon), np.sin(lat)), axis=-1)


def _angles(vectors: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Longitude in [0, 360) and latitude in degrees of vectors of any length."""
    x, y, z = vectors[..., 0], vectors[..., 1], vectors[..., 2]
    return np.mod(np.degrees(np.arctan2(y, x)), 360.0), np.degrees(np.arctan2(z, np.hypot(x, y)))


def _turned(matrix: FloatArray, vectors: FloatArray) -> FloatArray:
    """`matrix` applied to each vector; written out, as a library product's last bits depend on how many there are."""
    x, y, z = vectors[..., 0], vectors[..., 1], vectors[..., 2]
    return np.stack([row[0] * x + row[1] * y + row[2] * z for row in matrix], axis=-1)


def _matrix(system: System, mjd: float) -> FloatArray:
    """Shape (3, 3): ICRS unit vectors to `system`, before E-terms; FK4 turns against it linearly in time."""
    at_start, per_year = _matrices(system)
    if system.name in ("fk5", "galactic"):
        return at_start
    year = system.equinox if mjd != mjd else 2000.0 + (mjd - 51544.5) / 365.25
    return at_start + (year - 1950.0) * per_year


@lru_cache(maxsize=64)
def _matrices(system: System) -> tuple[FloatArray, FloatArray]:
    """The matrix at 1950 and its change per Julian year, as astropy's own frames give them."""
    axes = SkyCoord(CartesianRepresentation(np.eye(3)), frame=ICRS())

    def at(year: float) -> FloatArray:
        if system.name == "galactic":
            frame = Galactic()
        elif system.name == "fk5":
            frame = FK5(equinox=Time(system.equinox, format="jyear"))
        else:
            frame = FK4NoETerms(equinox=Time(system.equinox, format="byear"), obstime=Time(year, format="jyear"))
        return np.asarray(axes.transform_to(frame).cartesian.xyz.value)

    start = at(1950.0)
    return start, (at(2000.0) - start) / 50.0


@lru_cache(maxsize=64)
def _e_terms(equinox: float) -> FloatArray:
    """E-terms of aberration, shape (3,), found from what astropy's FK4 adds to two of the coordinate axes."""
    frame = {"equinox": Time(equinox, format="byear")}
    axes = SkyCoord([0.0, 90.0], [0.0, 0.0], unit=u.deg, frame=FK4NoETerms(**frame))
    (x0, y0, z0), (x1, y1, _) = axes.transform_to(FK4(**frame)).cartesian.xyz.value.T
    # The direction of (1, 0, 0) + e is (1 + ex, ey, ez), that of (0, 1, 0) + e is (ex, 1 + ey, ez), each normalised.
    a, b, c = y0 / x0, z0 / x0, x1 / y1
    ex = c * (1.0 + a) / (1.0 - a * c)
    return np.array([ex, a * (1.0 + ex), b * (1.0 + ex)])
