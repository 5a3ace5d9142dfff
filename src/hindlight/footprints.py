"""Footprints of frames: the columns that hold them, and which positions are inside.

A footprint is eight points: the corners and the middles of the sides, which tell how far a side of a wide image bows
away from the great circle between its corners. What is said to be covered may lie outside by a trace; the pixel
coordinates found when a frame is measured settle it.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from hindlight.lightcurve import FloatArray, IntArray
from hindlight.outlines import Outline
from hindlight.systems import unit_vectors

POINTS = 8
WIDEST_DEG = 80.0  # a wider image is judged by its circle alone: half-spaces no longer bound it
SKEW = 0.3  # a side may bow most elsewhere than in its middle: this part of the bow is allowed beyond it
SLACK = 5e-8  # radians: footprints are written to 1e-6 degree
PAIRS_AT_ONCE = 1 << 22


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
        bow = (across * middles).sum(axis=-1)
        limits[whole] = np.minimum(bow, 0.0) - SKEW * np.abs(bow) - SLACK
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
