"""Is it a sidelobe of the brightest source? Two signs of it in synthesised images, neither of which needs the array.

The response of an array to a point is even, since visibilities at (u, v) and (-u, -v) are complex conjugates: a sidelobe
comes with its like across its source. And it turns with the sky: it comes back at the same sidereal time.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import special

from hindlight import Candidate, Column, ConsistencyCheck, Finding, hookimpl, setting

Array = NDArray[np.float64]
Ints = NDArray[np.int64]
PER_BEAM = "/beam"
SIDEREAL_DAY_S = 86164.0905
FEWEST_DAYS = 3
QUIET_FRAMES = 3  # in which the sky across is looked at
ALIKE = (0.5, 2.0)
SPARE = 1.0  # sigma above the least S/N that are expected of what is to be seen
LOBE_OUTSIDE = 2.0  # beams: nearer to the candidate than this a source is the candidate


@dataclass(frozen=True)
class Sidelobe(ConsistencyCheck):
    """Whether the bright frames show the candidate's like across the brightest source, or come at one sidereal time.

    *Across*: the place as far on the other side of the brightest source is as bright in the same frame and dark in quiet
    ones; as negative counts too, since errors of phase give odd patterns and errors of amplitude even ones (Ekers 1999,
    ASP Conf. 180, 321). It fails if at least the fraction `share` of the bright frames that can tell shows it.

    *Sidereal time*: of days with bright and quiet frames, on at least three of which frames were bright, frames at a
    sidereal time at which another day has a bright one are bright, and others are not; fails below the chance `level`
    (exact test of Fisher).

    For synthesised images (a unit per beam) in one plane; uninformative where the brightest source is not `brighter`
    times the candidate, the place across is off the image, and days do not repeat sidereal times. Sidelobes of sources
    outside the image are found only by their sidereal time. A source that truly comes back each sidereal day fails.
    """

    columns = (
        Column("n_tested", "bright frames in which the place across the brightest source can tell", dtype="int64",
               ucd="meta.number;obs"),
        Column("n_across", "those in which it is as bright, or as negative", dtype="int64", ucd="meta.number;obs"),
        Column("p_sidereal", "chance that bright frames come at the same sidereal times", ucd="stat.probability"),
        Column("n_days", "days with bright and quiet frames and a known sidereal time", dtype="int64",
               ucd="meta.number"),
    )  # fmt: skip
    max_frames: int = setting(10, "at most so many bright frames, those furthest above the quiet level", minimum=1)
    brighter: float = setting(3.0, "least S/N of the brightest source, in terms of the candidate's", minimum=1)
    min_snr: float = setting(5.0, "least flux over error of what is seen across", unit="sigma", minimum=3)
    share: float = setting(0.5, "fraction of the bright frames that makes the check fail", minimum=0, maximum=1)
    window: float = setting(1.0, "sidereal times nearer than this are the same", unit="deg", minimum=0)
    level: float = setting(1e-5, "sidereal times fail below this chance", minimum=0, maximum=1)
    often: float = setting(
        0.8, "fraction of the frames at such times that must be bright, and of bright ones at such times", minimum=0
    )

    def check(self, candidate: Candidate) -> Finding:
        """The finding for one candidate."""
        tested = across = n_days = 0
        p = float("nan")
        regular = False
        for at, curve in enumerate(candidate.curves):
            if not curve.channel.unit.lower().endswith(PER_BEAM) or not candidate.bright[at].any():
                continue
            some = self._across(candidate, at)
            tested, across = tested + some[0], across + some[1]
            days, chance, clear = self._sidereal(candidate, at)
            n_days = max(n_days, days)
            p = chance if not p <= chance else p
            regular |= clear and chance < self.level
        values = {"n_tested": tested, "n_across": across, "p_sidereal": p, "n_days": n_days}
        if tested == 0 and not np.isfinite(p):
            return Finding(
                "uninformative",
                "no synthesised frame has a brighter source with a place across it that can tell, and no days repeat "
                "sidereal times",
                values,
            )
        symmetric = across > 0 and across >= self.share * tested
        said = [f"in {across} of {tested} bright frames the place across the brightest source is as bright"]
        if np.isfinite(p):
            said.append(f"bright frames of {n_days} days come at the same sidereal times with chance {p:.2g}")
        return Finding("fail" if symmetric or regular else "pass", "; ".join(said), values)

    def _across(self, candidate: Candidate, at: int) -> tuple[int, int]:
        """Bright frames that can tell, and those that show as bright a thing across the brightest source."""
        curve = candidate.curves[at]
        rows = np.flatnonzero(candidate.bright[at])
        rows = rows[np.argsort(-np.abs(curve.above_quiet[rows]), kind="stable")][: self.max_frames]
        place = np.array([self._opposite(candidate, at, int(row)) for row in rows]).reshape(-1, 2)
        known = np.isfinite(place[:, 0])
        rows, place = rows[known], place[known]
        flux, error = candidate.images.measure(curve.frame[rows], place[:, 0], place[:, 1])
        size = np.abs(curve.flux[rows] - curve.quiet_level[0])
        quiet = self._when_quiet(candidate, at, rows, place)
        with np.errstate(invalid="ignore"):
            above = np.abs(flux - quiet)
            can = (size >= (self.min_snr + SPARE) * error) & np.isfinite(flux) & np.isfinite(quiet)
            hit = can & (above >= self.min_snr * error) & (above >= ALIKE[0] * size) & (above <= ALIKE[1] * size)
        return int(can.sum()), int(hit.sum())

    def _opposite(self, candidate: Candidate, at: int, row: int) -> tuple[float, float]:
        """The pixel as far on the other side of the brightest source of a frame; NaN where none is bright enough."""
        curve = candidate.curves[at]
        own = abs(float(curve.flux[row] / curve.flux_err[row]))
        x, y, snr = candidate.images.sources(int(curve.frame[row]), self.brighter * own)
        here = candidate.x[at][row], candidate.y[at][row]
        fwhm = float(candidate.fwhm[at][row]) if len(candidate.fwhm) > at else 1.0
        other = np.flatnonzero(np.hypot(x - here[0], y - here[1]) > LOBE_OUTSIDE * fwhm)
        if len(other) == 0:
            return float("nan"), float("nan")
        top = other[np.argmax(snr[other])]
        return 2 * float(x[top]) - here[0], 2 * float(y[top]) - here[1]

    def _when_quiet(self, candidate: Candidate, at: int, rows: Ints, place: Array) -> Array:
        """Median flux at the sky of each place in the quiet frames nearest in time, NaN where there is none."""
        curve = candidate.curves[at]
        quiet = np.flatnonzero(~candidate.bright[at])
        level = np.full(len(rows), np.nan)
        for i, row in enumerate(rows.tolist()):
            lag = np.abs(curve.t_tdb_s[quiet] - curve.t_tdb_s[row])
            near = curve.frame[quiet[np.argsort(lag, kind="stable")][:QUIET_FRAMES]]
            x, y = (np.full(len(near), value) for value in place[i])
            same = candidate.images.carried(np.full(len(near), curve.frame[row]), x, y, near)
            flux, _ = candidate.images.measure(near, *same)
            if np.isfinite(flux).any():
                level[i] = np.nanmedian(flux)
        return level

    def _sidereal(self, candidate: Candidate, at: int) -> tuple[int, float, bool]:
        """Days that count, the chance (NaN for none), and whether bright frames come at those times and no others."""
        curve, bright = candidate.curves[at], candidate.bright[at]
        degrees = candidate.images.sidereal(curve.frame)
        known = np.isfinite(degrees) & np.isfinite(curve.t_tdb_s)
        degrees, bright = degrees[known], bright[known]
        day = np.round(curve.t_tdb_s[known] / SIDEREAL_DAY_S - degrees / 360.0).astype(np.int64)
        mixed = [d for d in np.unique(day[bright]).tolist() if not bright[day == d].all()]
        if len(mixed) < FEWEST_DAYS:
            return len(mixed), float("nan"), False
        counted = np.isin(day, mixed)
        due = np.zeros(len(day), bool)
        for d in mixed:
            mine, others = day == d, bright & (day != d)
            apart = np.abs((degrees[mine][:, None] - degrees[others] + 180.0) % 360.0 - 180.0)
            due[mine] = (apart <= self.window).any(axis=1)
        both, n_due = int((bright & due & counted).sum()), int((due & counted).sum())
        n_bright, n = int((bright & counted).sum()), int(counted.sum())
        if n_due == 0 or n_due == n:
            return len(mixed), float("nan"), False
        clear = both >= self.often * n_due and both >= self.often * n_bright
        return len(mixed), fisher(both, n_due, n_bright, n), clear


def fisher(both: int, first: int, second: int, n: int) -> float:
    """Chance that of n things `first` and `second` with a property have at least `both` in common (hypergeometric)."""
    k = np.arange(both, min(first, second) + 1)
    logarithm = _choose(first, k) + _choose(n - first, second - k) - _choose(n, np.array([second]))
    return min(1.0, float(np.exp(logarithm).sum()))


def _choose(n: int, k: Ints) -> Array:
    """Logarithms of binomial coefficients, -inf for impossible ones."""
    possible = (k >= 0) & (k <= n)
    inside = np.clip(k, 0, n)
    found = special.gammaln(n + 1) - special.gammaln(inside + 1) - special.gammaln(n - inside + 1)
    return np.where(possible, found, -np.inf)


@hookimpl
def register_consistency_checks() -> list[type[ConsistencyCheck]]:
    """What this module offers."""
    return [Sidelobe]
