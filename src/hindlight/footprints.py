"""Where on the sky an image lies: its outline, and which positions are inside.

An outline is eight points: the corners and the middles of the sides, which tell how far a side of a wide image bows
away from the great circle between its corners. What is said to be covered may lie outside by a trace; the pixel
coordinates found when a frame is measured settle it.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from functools import lru_cache
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from hindlight.facts import NAN
from hindlight.lightcurve import FloatArray, IntArray
from hindlight.sky import Projection
from hindlight.systems import BadWcsError, unit_vectors

POINTS = 8
_ACROSS = np.array([0.0, -0.5, 0.0, 0.5, 0.5, 0.5, 0.0, -0.5, -0.5])  # the middle, then round from a corner
_UP = np.array([0.0, -0.5, -0.5, -0.5, 0.0, 0.5, 0.5, 0.5, 0.0])
WIDEST_DEG = 80.0  # a wider image is judged by its circle alone: half-spaces no longer bound it
SLACK = 5e-8  # radians: footprints are written to 1e-6 degree
GRID = 33
PAIRS_AT_ONCE = 1 << 22


class Outline(NamedTuple):
    """Degrees (9, 2): the middle of an image and eight points around it; arcsec per pixel; radius in degrees.

    The radius is NaN where the points give it; where some of them are off the projection it is given here.
    """

    points: FloatArray
    pixel_scale: float
    radius: float


def outline(projection: Projection, width: int, height: int, mjd: float) -> Outline:
    """The outline of an image of some pixels; `mjd` is its date, NaN where unknown (only FK4 needs it).

    Raises `BadWcsError` where the middle of the image is no place on the sky.
    """
    return _outline(projection, width, height, mjd if projection.system.name.startswith("fk4") else None)


@lru_cache(maxsize=4096)
def _outline(projection: Projection, width: int, height: int, mjd: float | None) -> Outline:
    date = NAN if mjd is None else mjd
    x, y = (width - 1) / 2 + width * _ACROSS, (height - 1) / 2 + height * _UP
    points = np.empty((POINTS + 1, 2))
    points[:, 0], points[:, 1] = projection.pixel_to_icrs(x, y, date)
    if math.isfinite(points.sum()):
        return Outline(points, projection.pixel_scale_arcsec, NAN)
    if not np.isfinite(points[0]).all():
        raise BadWcsError("the middle of the image is no place on the sky")
    grid_x, grid_y = np.meshgrid(np.linspace(-0.5, width - 0.5, GRID), np.linspace(-0.5, height - 0.5, GRID))
    ra, dec = projection.pixel_to_icrs(grid_x.ravel(), grid_y.ravel(), date)
    there = np.isfinite(ra) & np.isfinite(dec)
    step = projection.pixel_scale_arcsec * max(width, height) / (GRID - 1) / 3600
    far = _angle_deg(unit_vectors(ra[there], dec[there]), unit_vectors(points[:1, 0], points[:1, 1]))
    radius = min(180.0, float(far.max()) + step)
    return Outline(points, projection.pixel_scale_arcsec, radius)


def columns(outlines: Sequence[Outline]) -> dict[str, NDArray[Any]]:
    """The columns pixel_scale, centre_ra, centre_dec, radius and footprint of some frames.

    The footprint is '' where some point is off the projection or the image is wider than 160 degrees.
    """
    points = np.array([o.points for o in outlines], dtype=float).reshape(-1, POINTS + 1, 2)
    vectors = unit_vectors(points[..., 0], points[..., 1])
    radius = np.array([o.radius for o in outlines], dtype=float)
    radius = np.where(np.isfinite(radius), radius, _angle_deg(vectors[:, 1:], vectors[:, :1]).max(axis=1, initial=0.0))
    whole = np.isfinite(points).all(axis=(1, 2)) & (radius < WIDEST_DEG)
    template = " ".join(["%.6f"] * 2 * POINTS)
    text = [
        template % tuple(row) if ok else ""
        for row, ok in zip(points[:, 1:].reshape(-1, 16).tolist(), whole, strict=True)
    ]
    return {
        "pixel_scale": np.array([o.pixel_scale for o in outlines], dtype=float),
        "centre_ra": points[:, 0, 0],
        "centre_dec": points[:, 0, 1],
        "radius": radius,
        "footprint": np.array(text, dtype=object),
    }


def coverage_matrix(frames: Mapping[str, Any], vectors: FloatArray) -> NDArray[np.bool_]:
    """Which frames cover which positions, shape (n_frames, n_positions).

    `frames` holds the columns footprint, centre_ra, centre_dec and radius; `vectors` (n_positions, 3) are unit vectors
    in ICRS.
    """
    centres = unit_vectors(np.asarray(frames["centre_ra"], float), np.asarray(frames["centre_dec"], float))
    # A chord and not a cosine: the cosine of a small angle has lost its digits.
    chord = (2 * np.sin(np.radians(np.minimum(frames["radius"], 180.0)) / 2) + SLACK) ** 2
    covered = np.zeros((len(centres), len(vectors)), dtype=bool)
    n_rows = max(1, PAIRS_AT_ONCE // max(1, len(vectors)))
    for start in range(0, len(centres), n_rows):
        part = slice(start, start + n_rows)
        near = _square_distance(centres[part], vectors) <= chord[part, None]
        rows = np.flatnonzero(near.any(axis=1))
        normals, limits = _sides(frames["footprint"][part][rows], centres[part][rows])
        of_row = np.full(len(near), -1)
        of_row[rows] = np.arange(len(rows))
        row, position = np.nonzero(near)
        inside = np.ones(len(row), dtype=bool)
        for side in range(4):
            n, v = normals[of_row[row], side], vectors[position]
            inside &= n[:, 0] * v[:, 0] + n[:, 1] * v[:, 1] + n[:, 2] * v[:, 2] >= limits[of_row[row], side]
        covered[start + row, position] = inside
    return covered


def covering(frames: Mapping[str, Any], ra: float, dec: float) -> IntArray:
    """The rows of frames whose footprints contain a position in ICRS degrees."""
    return np.flatnonzero(coverage_matrix(frames, unit_vectors(np.array([ra]), np.array([dec])))[:, 0])


def _sides(footprints: Sequence[str], centres: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Inward normals (n, 4, 3) of the great circles through the corners, and how far (n, 4) a side bows beyond them."""
    whole = np.array([bool(text) for text in footprints], dtype=bool)
    normals, limits = np.zeros((len(whole), 4, 3)), np.full((len(whole), 4), -1.0)
    if whole.any():
        numbers = np.array(" ".join(text for text in footprints if text).split(), dtype=float)
        points = numbers.reshape(-1, POINTS, 2)
        vectors = unit_vectors(points[..., 0], points[..., 1])
        corners, middles = vectors[:, 0::2], vectors[:, 1::2]
        across = np.cross(corners, np.roll(corners, -1, axis=1))
        length = np.linalg.norm(across, axis=-1, keepdims=True)
        across /= np.where(length > 0, length, 1.0)
        inward = np.sign((across * centres[whole][:, None]).sum(axis=-1))
        across *= inward[..., None]
        normals[whole] = across
        limits[whole] = np.minimum((across * middles).sum(axis=-1), 0.0) - SLACK
    return normals, limits


def _square_distance(a: FloatArray, b: FloatArray) -> FloatArray:
    """Squared chords (n, m) between unit vectors (n, 3) and (m, 3)."""
    total = np.zeros((len(a), len(b)))
    for axis in range(3):
        total += (a[:, None, axis] - b[None, :, axis]) ** 2
    return total


def _angle_deg(a: FloatArray, b: FloatArray) -> FloatArray:
    """Angles in degrees between unit vectors that broadcast against each other, exact when small."""
    return np.asarray(np.degrees(2 * np.arcsin(np.minimum(1.0, np.sqrt(((a - b) ** 2).sum(axis=-1)) / 2))))
