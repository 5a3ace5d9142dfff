"""Did everything brighten at once? Blank positions of the field in the very frames in which a candidate is bright."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import special

from hindlight import (
    Block,
    Candidate,
    Column,
    ConsistencyCheck,
    Finding,
    LightCurve,
    brightest_and_faintest,
    hookimpl,
    setting,
)

Array = NDArray[np.float64]
OUTLIER = 3.0  # sigma
GAUSSIAN_RATE = 0.0026997960632601866  # of |z| > 3
NOISY = 2.0  # times the channel's median noise (common practice, no source)
FEWEST_QUIET_FRAMES = 3  # fewer give no level of a control, nor a rate of outliers


@dataclass(frozen=True)
class FrameWide(ConsistencyCheck):
    """Whether the frames in which the candidate is bright are bad as a whole.

    A bright frame is bad when more blank positions stand more than three sigma from their own level, either way, than
    such positions do in the other frames of the channel. The check fails when at least the fraction `share` of the
    bright frames is bad, and is uninformative where no bright frame holds enough controls. Where no frame of a channel is
    bright and it varies all over, its brightest frames are looked at.

    How noisy those frames are is told and fails nothing: errors grow with the noise, so that what stands out in a noisy
    frame does so all the same; and where errors do not tell the noise, blank positions stray.
    """

    columns = (
        Column("p", "chance that blank positions stray as much in the worst bright frame, all bright frames counted",
               ucd="stat.probability"),
        Column("n_frames", "bright frames with enough blank positions to tell", dtype="int64", ucd="meta.number;obs"),
        Column("n_bad", "those that are bad as a whole", dtype="int64", ucd="meta.number;obs"),
        Column("noise", "median noise of those frames at blank positions over that of the channel's frames",
               ucd="stat.error;arith.ratio"),
    )  # fmt: skip
    min_controls: int = setting(20, "fewest blank positions in a frame that can tell", minimum=1)
    level: float = setting(1e-3, "chance below which a frame is bad, all bright frames counted", minimum=0, maximum=1)
    share: float = setting(
        0.5, "fraction of the bright frames that must be bad for the check to fail", minimum=0, maximum=1
    )

    def check(self, candidate: Candidate) -> Finding:
        """The finding for one candidate."""
        curves = zip(candidate.curves, candidate.bright, strict=True)
        found = [
            self._frames(candidate, curve, mask) for curve, bright in curves if (mask := looked_at(curve, bright)).any()
        ]
        p, median, fraction, noise = (
            np.concatenate([frames[k] for frames in found]) if found else np.empty(0) for k in range(4)
        )
        n = p.size
        if n == 0:
            return Finding(
                "uninformative",
                f"no bright frame holds {self.min_controls} blank positions",
                {"p": float("nan"), "n_frames": 0, "n_bad": 0, "noise": float("nan")},
            )
        after_trials = -np.expm1(n * np.log1p(-np.minimum(p, 1 - 1e-16)))
        bad = after_trials < self.level
        worst = int(np.argmin(after_trials))
        level = float(np.median(noise))
        values = {"p": float(after_trials[worst]), "n_frames": n, "n_bad": int(bad.sum()), "noise": level}
        word = "bright" if any(bright.any() for bright in candidate.bright) else "brightest"
        evidence = (
            f"{int(bad.sum())} of {n} {word} frames are bad as a whole; in the worst one the blank positions have "
            f"median {median[worst]:+.1f} sigma and {100 * fraction[worst]:.1f} % of them are beyond 3 sigma "
            f"(p = {after_trials[worst]:.2g})"
        )
        if level > NOISY:
            evidence += (
                f"; these frames are {level:.1f} times as noisy as the channel's others, and so are their errors"
            )
        return Finding("fail" if bad.any() and bad.sum() >= self.share * n else "pass", evidence, values)

    def _frames(self, candidate: Candidate, curve: LightCurve, bright: NDArray[np.bool_]) -> tuple[Array, ...]:
        """For each bright frame of a channel with enough controls: p, median z, fraction beyond three sigma, noise."""
        block = candidate.controls(curve.channel.label, curve.frame)
        is_bright = np.isin(block.frame, curve.frame[bright])
        z = pulls(block, ~is_bright)
        rate = outlier_rate(z[:, ~is_bright])
        z = z[:, is_bright]
        n = np.isfinite(z).sum(axis=0)
        enough = n >= self.min_controls
        noise = relative_noise(block)[is_bright][enough]
        z, n = z[:, enough], n[enough]
        beyond = (np.abs(z) > OUTLIER).sum(axis=0)
        p = np.where(beyond > 0, special.bdtrc(beyond - 1, n, rate), 1.0)
        median = np.array([float(np.median(column[np.isfinite(column)])) for column in z.T])
        return p, median, beyond / np.maximum(n, 1), noise


def looked_at(curve: LightCurve, bright: NDArray[np.bool_]) -> NDArray[np.bool_]:
    """Bright frames of a curve; where there are none the brightest third of one that varies all over."""
    return bright if bright.any() else np.isin(np.arange(len(curve)), brightest_and_faintest(curve)[0])


def relative_noise(block: Block) -> Array:
    """Each frame's median error at blank positions over the median of the frames, shape (n_frames,); NaN where unknown."""
    known = np.isfinite(block.flux_err)
    noise = np.array([np.median(e[k]) if k.any() else np.nan for e, k in zip(block.flux_err.T, known.T, strict=True)])
    seen = noise[np.isfinite(noise)]
    return noise / np.median(seen) if seen.size else noise


def pulls(block: Block, quiet: NDArray[np.bool_]) -> Array:
    """Flux of each control less its own level over its error, shape (n_positions, n_frames), NaN where absent.

    `quiet`, shape (n_frames,), marks the frames whose median is the level; where a control has fewer than three of
    them its level is taken to be 0, as that of a blank position.
    """
    level = np.zeros(len(block))
    for row, flux in enumerate(block.flux[:, quiet]):
        known = flux[np.isfinite(flux)]
        if known.size >= FEWEST_QUIET_FRAMES:
            level[row] = np.median(known)
    return (block.flux - level[:, None]) / block.flux_err


def outlier_rate(z: Array) -> float:
    """The fraction of |z| > 3 among finite elements, not below that of Gaussian noise.

    In heavy-tailed noise the Gaussian rate would call every frame bad.
    """
    n = int(np.isfinite(z).sum())
    return max(GAUSSIAN_RATE, (int((np.abs(z) > OUTLIER).sum()) + 1) / (n + 1)) if n > 0 else GAUSSIAN_RATE


@hookimpl
def register_consistency_checks() -> list[type[ConsistencyCheck]]:
    """What this module offers."""
    return [FrameWide]
