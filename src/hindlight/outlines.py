"""The outline of an image on the sky, from header cards: its middle and eight points around it.

Plain zenithal images (which most are) are done together, as arrays; any other image goes through `sky.projection`, one
by one. The two agree to rounding, which the tests hold them to.
"""

from __future__ import annotations

import math
import re
from collections.abc import Callable, Sequence
from functools import lru_cache
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from hindlight.celestial import LARGEST_DEG
from hindlight.facts import NAN, Cards
from hindlight.lightcurve import FloatArray
from hindlight.sky import Projection, projection
from hindlight.systems import BadWcsError, NoCelestialError, System, system_of, to_icrs, unit_vectors

ACROSS = np.array([0.0, -0.5, 0.0, 0.5, 0.5, 0.5, 0.0, -0.5, -0.5])  # the middle, then round from a corner
UP = np.array([0.0, -0.5, -0.5, -0.5, 0.0, 0.5, 0.5, 0.5, 0.0])
GRID = 33
SMALLEST = (
    1e-3  # of the extent that pixels and scale give: an image that is smaller on the sky is far off its projection
)

# Angle from the reference point at a radius in the plane of projection, both in radians (Calabretta & Greisen 2002,
# A&A 395, 1077, 5.1).
ZENITHAL: dict[str, Callable[[FloatArray], FloatArray]] = {
    "TAN": np.arctan,
    "SIN": np.arcsin,
    "ARC": lambda radius: np.where(radius <= np.pi, radius, NAN),
    "STG": lambda radius: 2 * np.arctan(radius / 2),
    "ZEA": lambda radius: 2 * np.arcsin(radius / 2),
}
PAIRS = {
    (f"{lon}-{code}", f"{lat}-{code}"): (code, lon == "GLON")
    for code in ZENITHAL
    for lon, lat in (("RA--", "DEC-"), ("GLON", "GLAT"))
}
SYSTEM_CARDS = ("RADESYS", "RADECSYS", "EQUINOX", "EPOCH")

_UNUSUAL = re.compile(
    r"PV\d+_\d+|[AB]P?_\w+|(CPDIS|CQDIS|DP|DQ)\d.*|D2IM.*|WAT\d.*|PS\d_\d+|AMD.*|PLT.*|(PC|CD)\d{6}"
    r"|(PC|CD)(?![12]_[12]$)(?!([3-9])_\4$)\d+_\d+"
)


class Image(NamedTuple):
    """What is asked about: the cards of an image, its file (for distortions kept in other HDUs), size and date."""

    cards: Cards
    path: str
    width: int
    height: int
    mjd: float


class Outline(NamedTuple):
    """Degrees (9, 2): the middle of an image and eight points around it; arcsec per pixel; radius in degrees.

    The radius is NaN where the points give it; where some of them are off the projection it is given here.
    `system_assumed` tells that the header does not name its celestial system.
    """

    points: FloatArray
    pixel_scale: float
    radius: float
    system_assumed: bool


class _Plain(NamedTuple):
    """A plain zenithal header; `numbers` are CRVAL1, 2, CRPIX1, 2 and the matrix (degrees per pixel) by rows."""

    code: str
    system: System
    assumed: bool
    numbers: tuple[float, ...]


def outlines(images: Sequence[Image]) -> list[Outline | NoCelestialError | BadWcsError]:
    """The outline of each image, or why it has none."""
    found: list[Outline | NoCelestialError | BadWcsError | None] = [None] * len(images)
    groups: dict[tuple[str, System, bool], list[int]] = {}
    numbers: list[tuple[float, ...]] = [()] * len(images)
    cards, plain = None, None
    for i, image in enumerate(images):
        if image.cards is not cards:  # the planes of a cube share their cards
            cards, plain = image.cards, _plain(image.cards)
        if plain is not None:
            groups.setdefault(plain[:3], []).append(i)
            numbers[i] = (*plain.numbers, image.width, image.height)
    for (code, system, assumed), rows in groups.items():
        given = np.array([numbers[i] for i in rows])
        points = _zenithal(code, system, given)
        scale = np.sqrt(np.abs(given[:, 4] * given[:, 7] - given[:, 5] * given[:, 6])) * 3600
        usable = _has_extent(points, scale, np.hypot(given[:, 8], given[:, 9]))
        for i, own, size, usual in zip(rows, points, scale.tolist(), usable, strict=True):
            if usual:
                found[i] = Outline(own, size, NAN, assumed)
    return [_one(image) if own is None else own for image, own in zip(images, found, strict=True)]


def _has_extent(points: FloatArray, scale: FloatArray, diagonal: FloatArray) -> NDArray[np.bool_]:
    """Whether the points (n, 9, 2) of images lie apart on the sky, for scales in arcsec and diagonals in pixels.

    False where any of them is no place on the sky.
    """
    vectors = unit_vectors(points[..., 0], points[..., 1])
    chord = np.sqrt(((vectors[:, 1:] - vectors[:, :1]) ** 2).sum(axis=-1)).max(axis=1)
    return np.asarray(chord > SMALLEST * np.radians(scale / 3600) * diagonal / 2)


# --- plain zenithal images, together


def _plain(cards: Cards) -> _Plain | None:
    """The header if it is a plain zenithal one without fault, None for the careful way."""
    pair = PAIRS.get((cards.text("CTYPE1"), cards.text("CTYPE2")))
    if pair is None or _any_unusual(tuple(cards)):
        return None
    matrix = _matrix(cards)
    numbers = (*(cards.number(key) for key in ("CRVAL1", "CRVAL2", "CRPIX1", "CRPIX2")), *matrix)
    determinant = numbers[4] * numbers[7] - numbers[5] * numbers[6]
    if not (math.isfinite(sum(numbers)) and determinant != 0.0 and math.isfinite(determinant)):
        return None
    if not (abs(numbers[0]) <= LARGEST_DEG[0] and abs(numbers[1]) < LARGEST_DEG[1]):
        return None
    if not {cards.text("CUNIT1"), cards.text("CUNIT2")} <= {"", "deg"} or cards.get("LONPOLE") not in (
        None,
        180,
        180.0,
    ):
        return None
    try:
        system, assumed = (System("galactic"), False) if pair[1] else _system(*map(cards.card, SYSTEM_CARDS))
    except BadWcsError:
        return None
    return None if system.name.startswith("fk4") else _Plain(pair[0], system, assumed, numbers)


@lru_cache(maxsize=256)  # files of one instrument have the same keywords
def _any_unusual(keys: tuple[str, ...]) -> bool:
    return any(map(_is_unusual, keys))


@lru_cache(maxsize=4096)
def _is_unusual(key: str) -> bool:
    """Whether a keyword asks for more than a plain projection."""
    return _UNUSUAL.fullmatch(key) is not None


@lru_cache(maxsize=64)
def _system(*cards: str) -> tuple[System, bool]:
    return system_of(Cards("".join(cards).encode("latin-1")))


def _matrix(cards: Cards) -> tuple[float, ...]:
    """Degrees per pixel by rows, from CD or from CDELT with PC; NaN where it is neither, or turned by CROTA."""
    if "CD1_1" in cards or "CD2_2" in cards or "CD1_2" in cards or "CD2_1" in cards:
        given = tuple(cards.number(key) if key in cards else 0.0 for key in ("CD1_1", "CD1_2", "CD2_1", "CD2_2"))
        return given if "PC1_1" not in cards and "PC2_2" not in cards else (NAN,) * 4
    x, y = cards.number("CDELT1"), cards.number("CDELT2")
    turned = any(key in cards and cards.number(key) != 0.0 for key in ("CROTA1", "CROTA2"))
    if x == 0.0 or y == 0.0 or turned:
        return (NAN,) * 4
    rows = (("PC1_1", 1.0, x), ("PC1_2", 0.0, x), ("PC2_1", 0.0, y), ("PC2_2", 1.0, y))
    return tuple(scale * (cards.number(key) if key in cards else default) for key, default, scale in rows)


def _zenithal(code: str, system: System, numbers: FloatArray) -> FloatArray:
    """ICRS degrees (n, 9, 2) of the points of images with these numbers (n, 10); NaN off the projection."""
    lon, lat, x0, y0, m11, m12, m21, m22, width, height = numbers.T[:, :, None]
    dx = (width + 1) / 2 + width * ACROSS - x0
    dy = (height + 1) / 2 + height * UP - y0
    with np.errstate(invalid="ignore", over="ignore"):  # points off the projection become NaN
        x, y = np.radians(m11 * dx + m12 * dy), np.radians(m21 * dx + m22 * dy)
        radius = np.hypot(x, y)
        angle = ZENITHAL[code](radius)
    stretch = np.sin(angle) / np.where(radius > 0.0, radius, 1.0)
    d = np.radians(lat)
    # Along the reference direction, east of it and north of it: no pole of the projection to go through.
    ahead, aside, above = np.cos(angle), x * stretch, y * stretch
    level = ahead * np.cos(d) - above * np.sin(d)
    found_lon = lon + np.degrees(np.arctan2(aside, level))
    found_lat = np.degrees(np.arctan2(ahead * np.sin(d) + above * np.cos(d), np.hypot(aside, level)))
    ra, dec = to_icrs(found_lon.ravel(), found_lat.ravel(), system)
    return np.stack([ra, dec], axis=-1).reshape(*found_lon.shape, 2)


# --- any other image, alone


def _one(image: Image) -> Outline | NoCelestialError | BadWcsError:
    try:
        found = projection(image.cards, image.path)
        return outline(found, image.width, image.height, image.mjd if found.system.name.startswith("fk4") else None)
    except (NoCelestialError, BadWcsError) as error:
        return error


@lru_cache(maxsize=256)
def outline(found: Projection, width: int, height: int, mjd: float | None) -> Outline:
    """The outline of one image of some pixels; `mjd` is its date where the system needs one.

    Raises `BadWcsError` where the middle of the image is no place on the sky.
    """
    date = NAN if mjd is None else mjd
    x, y = (width - 1) / 2 + width * ACROSS, (height - 1) / 2 + height * UP
    points = np.stack(found.pixel_to_icrs(x, y, date), axis=-1)
    if not np.isfinite(points[0]).all():
        raise BadWcsError("the middle of the image is no place on the sky")
    radius = NAN if np.isfinite(points).all() else _visible_radius(found, width, height, date, points[0])
    diagonal = np.array([math.hypot(width, height)])
    if radius != radius and not _has_extent(points[None], np.array([found.pixel_scale_arcsec]), diagonal)[0]:
        raise BadWcsError("the image is so far from its reference pixel that it shrinks to a point of the sky")
    return Outline(points, found.pixel_scale_arcsec, radius, found.system_assumed)


def _visible_radius(found: Projection, width: int, height: int, mjd: float, middle: FloatArray) -> float:
    """Degrees from the middle to the farthest pixel that is a place on the sky, by a grid and one step of it more."""
    x, y = np.meshgrid(np.linspace(-0.5, width - 0.5, GRID), np.linspace(-0.5, height - 0.5, GRID))
    ra, dec = found.pixel_to_icrs(x.ravel(), y.ravel(), mjd)
    there = np.isfinite(ra) & np.isfinite(dec)
    chord = unit_vectors(ra[there], dec[there]) - unit_vectors(middle[0], middle[1])
    far = np.degrees(2 * np.arcsin(np.minimum(1.0, np.sqrt((chord**2).sum(axis=-1)) / 2)))
    step = found.pixel_scale_arcsec * max(width, height) / (GRID - 1) / 3600
    return min(180.0, float(far.max()) + step)
