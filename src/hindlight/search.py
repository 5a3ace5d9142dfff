"""A target whose place is known to worse than a beam: the places that are tried, and which of them is judged.

The same places are tried around control centres, and what chooses among them treats target and controls alike, so
that a rank among the controls' best places counts the trials by itself. Pure numbers: it knows no run and no frame.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from hindlight.calibrate import centre_and_spread
from hindlight.lightcurve import FloatArray, IntArray

HALF = 1 << 20  # nodes of the lattice in one direction; number of a node = (i + HALF) * 2 HALF + j + HALF
CENTRE = HALF * 2 * HALF + HALF
OUTSTANDING = 5.0  # MAD-sigma: about one ellipse in 300 by chance, where maxima follow Gumbel's law


@dataclass(frozen=True, eq=False)
class Places:
    """The places tried within an ellipse, the centre first: numbers of lattice nodes, degrees east and north of it.

    `sigmas` is how far out the last one is, in position errors: less than was asked for where there were too many.
    """

    node: IntArray
    east: FloatArray
    north: FloatArray
    sigmas: float

    def __len__(self) -> int:
        return len(self.node)

    @property
    def reach(self) -> float:
        """Degrees from the centre to the place furthest out."""
        return float(np.hypot(self.east, self.north).max())


def places_within(
    major_deg: float, minor_deg: float, angle_deg: float, spacing_deg: float, sigmas: float, most: int
) -> Places:
    """The nodes of a hexagonal lattice within so many sigmas of its centre, the most probable `most` of them.

    Across an ellipse that is narrower than the lattice, nodes within one spacing of its axis are taken.
    """
    a, b = (max(axis, spacing_deg / sigmas) for axis in (major_deg, minor_deg))
    # No more nodes than `most` can be kept, and those lie within the ellipse of their number: a wider net is no use.
    sigmas = min(sigmas, 1.5 * (most * spacing_deg**2 * 3**0.5 / 2 / (np.pi * a * b)) ** 0.5 + 2 * spacing_deg / b)
    steps = int(2 * sigmas * max(a, b) / (spacing_deg * 3**0.5)) + 2
    i, j = (axis.ravel() for axis in np.mgrid[-2 * steps : 2 * steps + 1, -steps : steps + 1])
    east, north = (i + j / 2) * spacing_deg, j * spacing_deg * 3**0.5 / 2
    angle = np.radians(angle_deg)
    along, across = east * np.sin(angle) + north * np.cos(angle), east * np.cos(angle) - north * np.sin(angle)
    radius = np.hypot(along / a, across / b)
    number = (i + HALF) * 2 * HALF + j + HALF
    order = np.lexsort((number, radius))
    order = order[radius[order] <= sigmas][:most]
    return Places(number[order], east[order], north[order], float(radius[order[-1]]))


def best_places(excess: Sequence[FloatArray], mean: Sequence[FloatArray]) -> IntArray:
    """For each ellipse the place to be judged, shape (n_ellipses,).

    `excess` and `mean` hold, for each channel, the highest excess over the quiet level and the S/N of the mean, shape
    (n_ellipses, n_places), NaN for none. An ellipse whose highest excess stands out among all ellipses is judged there,
    or a steady source in it would hide one that was bright for once; any other where the mean is brightest. No ellipse
    is treated apart from the others, so target and controls stay exchangeable.
    """
    peak, at_peak = _furthest(excess)
    _, at_mean = _furthest(mean)
    return np.where(peak > OUTSTANDING, at_peak, at_mean)


def _furthest(channels: Sequence[FloatArray]) -> tuple[FloatArray, IntArray]:
    """How far each ellipse's highest value lies beyond those of the others, in their MAD, in its best channel; where."""
    beyond, where = [], []
    for values in channels:
        known = np.where(np.isfinite(values), values, -np.inf)
        highest = known.max(axis=1)
        centre, spread = centre_and_spread(highest[:, None])
        beyond.append((highest - centre[0]) / spread[0])
        where.append(known.argmax(axis=1))
    best = np.argmax(beyond, axis=0)
    rows = np.arange(len(best))
    return np.stack(beyond)[best, rows], np.stack(where)[best, rows]
