"""Is it a neighbour that varies? What brightens beside a candidate in the frames in which it is bright."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from hindlight import (
    Candidate,
    Column,
    ConsistencyCheck,
    Finding,
    beam_arcsec,
    brightest_and_faintest,
    hookimpl,
    mean_at,
    setting,
)

Array = NDArray[np.float64]
Ints = NDArray[np.int64]
STEPS = 4  # of the grid on which cut-outs are added, for each beam
INSIDE = 0.7  # beams: what brightens nearer than this is the candidate (its place is `position`'s business)


@dataclass(frozen=True)
class Neighbour(ConsistencyCheck):
    """Whether something within `radius` beams brightens `stronger` times more than the candidate in the same frames.

    The place is that of the highest excess of the bright over the quiet frames' mean; its flux is measured in each frame.
    The check fails if it brightens that much, significantly, in at least the fraction `share` of the bright frames.
    Where no frame of a channel is bright and it varies all over, its brightest frames are set against its faintest.
    Uninformative without cut-outs of both sorts of frames of one channel. Neighbours nearer than 0.7 beams are blended
    with the candidate: `position` tells of them.
    """

    columns = (
        Column("n_frames", "bright, or brightest, frames in which the neighbour's place was measured", dtype="int64",
               ucd="meta.number;obs"),
        Column("n_brighter", "those in which it brightens more than the candidate", dtype="int64",
               ucd="meta.number;obs"),
        Column("distance", "of the neighbour from the position, blank for none", unit="arcsec", ucd="pos.angDistance"),
        Column("share", "the candidate's brightening over the neighbour's, blank for none", ucd="stat.value"),
    )  # fmt: skip
    radius: float = setting(3.0, "furthest neighbours", unit="FWHM", minimum=1)
    stronger: float = setting(2.0, "least brightening, in terms of the candidate's", minimum=1)
    min_snr: float = setting(5.0, "least brightening over its error", unit="sigma", minimum=3)
    max_frames: int = setting(10, "at most so many bright, and quiet, frames of a channel", minimum=2)
    share: float = setting(0.8, "fraction of the bright frames that makes the check fail", minimum=0, maximum=1)

    def check(self, candidate: Candidate) -> Finding:
        """The finding for one candidate."""
        n = n_brighter = 0
        distance, parts = float("nan"), []
        for at in range(len(candidate.curves)):
            found = self._channel(candidate, at)
            if found is None:
                continue
            ratio, brighter, away = found
            n, n_brighter = n + len(ratio), n_brighter + int(brighter.sum())
            if brighter.any():
                distance = away
                parts += ratio[brighter].tolist()
        part = float(np.median(parts)) if parts else float("nan")
        values = {"n_frames": n, "n_brighter": n_brighter, "distance": distance, "share": part}
        if n == 0:
            return Finding(
                "uninformative", "no channel has readable bright and quiet frames, or varies all over", values
            )
        evidence = f"something within {self.radius:g} beams brightens more in {n_brighter} of {n} bright frames"
        if parts:
            evidence += f": {distance:.3g} arcsec away, of which the candidate shows {100 * part:.0f} %"
        return Finding("fail" if n_brighter > 0 and n_brighter >= self.share * n else "pass", evidence, values)

    def _channel(self, candidate: Candidate, at: int) -> tuple[Array, NDArray[np.bool_], float] | None:
        """Candidate's over neighbour's brightening and whether that is stronger, per bright frame; its distance."""
        curve = candidate.curves[at]
        rows, quiet, dark = self._both_sorts(candidate, at)
        if len(rows) == 0 or len(quiet) == 0:
            return None
        size = curve.flux[rows] - dark
        place = self._place(candidate, curve.frame[rows], curve.frame[quiet], float(np.sign(np.median(size))))
        if place is None:
            return None
        offset, to_pixels = place
        aside = {frame: jacobian @ offset for frame, jacobian in to_pixels.items()}
        there = [self._measured(candidate, at, some, aside) for some in (rows, quiet)]
        if not np.isfinite(there[1][0]).any():
            return None
        level = float(np.nanmedian(there[1][0]))
        flux, error = there[0]
        known = np.isfinite(flux)
        rise = np.sign(size[known]) * (flux[known] - level)
        own = np.abs(size[known])
        brighter = (rise >= self.min_snr * error[known]) & (rise >= self.stronger * own)
        return own / np.where(rise > 0, rise, np.nan), brighter, float(np.hypot(*offset))

    def _both_sorts(self, candidate: Candidate, at: int) -> tuple[Ints, Ints, float]:
        """Rows of the brightest bright frames and of quiet ones near in time, and the flux of the quiet ones.

        Without bright frames the brightest and the faintest ones of what varies all over, none where it does not.
        """
        curve, bright = candidate.curves[at], candidate.bright[at]
        rows, quiet, level = np.flatnonzero(bright), np.flatnonzero(~bright), curve.quiet_level[0]
        if len(rows) == 0:
            rows, quiet = brightest_and_faintest(curve)
            level = float(np.mean(curve.flux[quiet])) if len(quiet) else level
            return rows[-self.max_frames :], quiet[: self.max_frames], level
        rows = rows[np.argsort(-np.abs(curve.above_quiet[rows]), kind="stable")][: self.max_frames]
        quiet = quiet[np.argsort(np.abs(curve.t_tdb_s[quiet] - curve.t_tdb_s[rows[0]]), kind="stable")]
        return rows, quiet[: self.max_frames], level

    def _place(
        self, candidate: Candidate, bright: Ints, quiet: Ints, sign: float
    ) -> tuple[Array, dict[int, Array]] | None:
        """Where most is added in bright frames, (east, north) arcsec, and each frame's way from arcsec to pixels."""
        cutouts = [list(candidate.cutouts(frames, self.radius + 0.5)) for frames in (bright, quiet)]
        if not cutouts[0] or not cutouts[1]:
            return None
        width = float(np.median([beam_arcsec(cutout) for cutout in cutouts[0]]))
        steps = np.arange(-int(self.radius * STEPS), int(self.radius * STEPS) + 1) * width / STEPS
        grid = np.stack([axis.ravel() for axis in np.meshgrid(steps, steps)])
        difference = sign * (mean_at(cutouts[0], grid) - mean_at(cutouts[1], grid))
        far = np.hypot(*grid) / width
        around = (far >= INSIDE) & (far <= self.radius)
        if not np.isfinite(difference[around]).any():
            return None
        top = int(np.nanargmax(np.where(around, difference, np.nan)))
        return grid[:, top], {c.frame: np.asarray(np.linalg.inv(c.to_sky), float) for some in cutouts for c in some}

    def _measured(self, candidate: Candidate, at: int, rows: Ints, aside: dict[int, Array]) -> tuple[Array, Array]:
        """Flux and error that far aside in each frame, NaN where its cut-out could not be read."""
        curve = candidate.curves[at]
        off = np.array([aside.get(int(frame), np.full(2, np.nan)) for frame in curve.frame[rows]])
        flux, error = np.full(len(rows), np.nan), np.full(len(rows), np.nan)
        known = np.isfinite(off[:, 0])
        mine = rows[known]
        x, y = candidate.x[at][mine] + off[known, 0], candidate.y[at][mine] + off[known, 1]
        flux[known], error[known] = candidate.images.measure(curve.frame[mine], x, y)
        return flux, error


@hookimpl
def register_consistency_checks() -> list[type[ConsistencyCheck]]:
    """What this module offers."""
    return [Neighbour]
