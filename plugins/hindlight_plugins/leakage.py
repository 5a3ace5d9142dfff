"""Is the polarised flux only leaked? Stokes Q, U, V of a candidate against its Stokes I in the same exposures."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import special

from hindlight import Block, Candidate, Column, ConsistencyCheck, Finding, LightCurve, hookimpl, setting

Array = NDArray[np.float64]
Ints = NDArray[np.int64]
NEAR_FREQUENCY = 1.02  # factor within which frequencies are the same
FEWEST_STEADY = 3  # measurements of bright steady sources that show the leakage of a field
SURE = 20.0  # S/N of Stokes I of a steady source whose ratio shows it
OF_FIELD = 3.0  # times the field's own leakage that a position may have


@dataclass(frozen=True)
class Leakage(ConsistencyCheck):
    """Whether a candidate is bright in Stokes Q, U or V only by what leaks of its Stokes I at the same time.

    The limit is three times the root mean square ratio of the steady sources near it (less their noise), at least
    `least`, and `typical` where no bright steady source is known. In a bright polarised frame with Stokes I at least
    `min_snr`, flux within the limit, or beyond it by less than two sigma, is leaked. The check fails if at least the
    fraction `share` of the bright polarised frames is leaked and no frame of Stokes I is bright: the candidate then rests
    on leakage. Where Stokes I varies too it passes, since that is no leakage, and the evidence says what is leaked.
    Uninformative where no polarised frame is bright, or none has Stokes I at the same time.
    """

    columns = (
        Column("n_frames", "bright polarised frames with Stokes I at the same time", dtype="int64",
               ucd="meta.number;obs"),
        Column("n_leaked", "those with no more than may have leaked", dtype="int64", ucd="meta.number;obs"),
        Column("ratio", "median of polarised flux over Stokes I in them", ucd="phys.polarization;arith.ratio"),
        Column("limit", "ratio up to which flux may have leaked", ucd="phys.polarization;arith.ratio"),
        Column("p_constant", "chance that the ratio is the same in all of them, to 5 % of itself",
               ucd="stat.probability"),
    )  # fmt: skip
    least: float = setting(0.01, "least leakage that is allowed for", minimum=0)
    typical: float = setting(0.1, "leakage that is allowed for where no steady source shows it", minimum=0)
    min_snr: float = setting(5.0, "least Stokes I over its error", unit="sigma", minimum=1)
    share: float = setting(0.5, "fraction of the bright polarised frames that makes the check fail", minimum=0)

    def check(self, candidate: Candidate) -> Finding:
        """The finding for one candidate."""
        rows: list[Array] = []
        for curve, bright in zip(candidate.curves, candidate.bright, strict=True):
            if not curve.channel.signed or not bright.any():
                continue
            for intensity in candidate.curves:
                if same_light(curve, intensity):
                    limit = self._limit(candidate, curve, intensity)
                    rows.append(matched(curve, np.flatnonzero(bright), intensity, limit))
        nan = float("nan")
        found = np.concatenate(rows) if rows else np.empty((0, 5))
        values = {"n_frames": len(found), "n_leaked": 0, "ratio": nan, "limit": nan, "p_constant": nan}
        if len(found) == 0:
            return Finding(
                "uninformative", "no bright frame in Stokes Q, U or V with Stokes I at the same time", values
            )
        flux, error, total, total_err, limit_of = found.T
        with np.errstate(divide="ignore", invalid="ignore"):
            ratio = flux / total
            excess = np.abs(flux) - limit_of * total
            leaked = (total >= self.min_snr * total_err) & (excess <= 2 * np.hypot(error, limit_of * total_err))
        share = float(leaked.sum()) / len(found)
        values |= {"n_leaked": int(leaked.sum()), "ratio": float(np.median(ratio)), "limit": float(limit_of.max())}
        values["p_constant"] = constant_ratio(flux, error, total, total_err)
        evidence = (
            f"in {int(leaked.sum())} of {len(found)} bright frames of Stokes Q, U or V the flux is within {limit_of.max():.3f} "
            f"of Stokes I (median ratio {np.median(ratio):+.3f}) and may have leaked"
        )
        varies = any(
            bright.any() and not curve.channel.signed
            for curve, bright in zip(candidate.curves, candidate.bright, strict=True)
        )
        if varies and leaked.any():
            evidence += "; Stokes I is bright by itself, and only that counts"
        rests_on_it = leaked.any() and share >= self.share and not varies
        return Finding("fail" if rests_on_it else "pass", evidence, values)

    def _limit(self, candidate: Candidate, curve: LightCurve, intensity: LightCurve) -> float:
        """The ratio up to which flux may have leaked in a polarised channel."""
        polarised = candidate.comparisons(curve.channel.label, curve.frame)
        total = candidate.comparisons(intensity.channel.label, intensity.frame)
        if polarised is None or total is None:
            return self.typical
        shown = field_leakage(polarised, total)
        return max(self.least, OF_FIELD * shown) if np.isfinite(shown) else self.typical


def same_light(curve: LightCurve, intensity: LightCurve) -> bool:
    """Whether the second channel is the Stokes I of the first."""
    one, two = curve.channel, intensity.channel
    near = not (one.frequency_hz > 0 and two.frequency_hz > 0) or (
        max(one.frequency_hz, two.frequency_hz) <= NEAR_FREQUENCY * min(one.frequency_hz, two.frequency_hz)
    )
    return two.stokes == "I" and one.instrument == two.instrument and one.unit == two.unit and near


def matched(curve: LightCurve, rows: Ints, intensity: LightCurve, limit: float) -> Array:
    """Flux, error, Stokes I, its error and the limit for each row with Stokes I at the same time, shape (n, 5).

    Exposures are the same where their middles lie within a quarter of the shorter one.
    """
    found = []
    for row in rows.tolist():
        lag = np.abs(intensity.t_tdb_s - curve.t_tdb_s[row])
        near = lag <= 0.25 * np.fmin(intensity.exposure_s, curve.exposure_s[row])
        near |= lag == 0
        if near.any():
            at = int(np.argmin(np.where(near, lag, np.inf)))
            found.append((curve.flux[row], curve.flux_err[row], intensity.flux[at], intensity.flux_err[at], limit))
    return np.array(found).reshape(-1, 5)


def field_leakage(polarised: Block, total: Block) -> float:
    """Root mean square of the mean ratios of bright steady sources, their noise taken off; NaN for too few of them.

    Sources are the same rows of both blocks; frames of both are counted all alike.
    """
    ratios, noise = [], []
    for name in polarised.names:
        if name not in total.names:
            continue
        one, two = (block.curve(block.names.index(name)) for block in (polarised, total))
        if len(one) == 0 or len(two) == 0:
            continue
        flux, error = _mean(one)
        light, light_err = _mean(two)
        if light > 0 and light >= SURE * light_err:
            ratios.append(flux / light)
            noise.append(error / light)
    if len(ratios) < FEWEST_STEADY:
        return float("nan")
    return math.sqrt(max(0.0, float(np.mean(np.square(ratios)) - np.mean(np.square(noise)))))


def _mean(curve: LightCurve) -> tuple[float, float]:
    weight = curve.flux_err**-2
    return float((weight * curve.flux).sum() / weight.sum()), float(weight.sum() ** -0.5)


def constant_ratio(flux: Array, error: Array, total: Array, total_err: Array) -> float:
    """Chance that flux = r total with one r, each to 5 % of itself besides its errors; NaN for fewer than two or no I."""
    light = float((total**2 / error**2).sum())
    if len(flux) < 2 or light == 0.0:
        return float("nan")
    ratio = float((flux * total / error**2).sum()) / light
    variance = error**2 + (ratio * total_err) ** 2 + (0.05 * flux) ** 2
    return float(special.chdtrc(len(flux) - 1, float(((flux - ratio * total) ** 2 / variance).sum())))


@hookimpl
def register_consistency_checks() -> list[type[ConsistencyCheck]]:
    """What this module offers."""
    return [Leakage]
