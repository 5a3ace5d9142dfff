"""Is it there at neighbouring frequencies? Fluxes of exposures at the same time against any possible spectrum."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import special

from hindlight import Candidate, Column, ConsistencyCheck, Finding, LightCurve, hookimpl, setting

Array = NDArray[np.float64]
DELAY_S = 4.148808e-3  # of 1 GHz per pc/cm3 (Lorimer & Kramer 2005, Handbook of Pulsar Astronomy, eq. 1.6; from memory)
SMALL = 0.1  # part of an exposure that dispersion may move a pulse by
WHOLE = 0.95  # part of the bright exposure that the other one must cover


@dataclass(frozen=True)
class AcrossBands(ConsistencyCheck):
    """Whether frames at other frequencies that cover a bright exposure show a flux that some spectrum allows.

    Flux ~ frequency^alpha with |alpha| up to `steepest`. The other exposure may be longer: all light may have come
    within the bright one, so its mean flux may be smaller in proportion. The check fails where the other flux is too low
    for every such spectrum, below the chance `level` after all pairs are counted. For Stokes I of one instrument in one
    unit per beam or Jansky with known frequencies and exposures; for filters nothing is said, nor where dispersion of up
    to `dm` moves a pulse by more than a tenth of an exposure. Frames that do not overlap (other nights, other pulses) are
    never compared.
    """

    columns = (
        Column("n_pairs", "bright frames and frames at another frequency that cover them and are deep enough to tell",
               dtype="int64", ucd="meta.number;obs"),
        Column("p", "chance of so low a flux in the worst pair, under the steepest spectrum, all pairs counted",
               ucd="stat.probability"),
        Column("index", "mean spectral index of pairs that are bright in both, blank for none", ucd="spect.index"),
        Column("index_err", "its 1-sigma error", ucd="stat.error;spect.index"),
        Column("p_index", "chance that all those pairs have one index, blank for fewer than two",
               ucd="stat.probability"),
    )  # fmt: skip
    steepest: float = setting(4.0, "largest spectral index, either way, that is believed", minimum=0)
    dm: float = setting(1000.0, "largest dispersion measure allowed for", unit="pc/cm3", minimum=0)
    min_snr: float = setting(5.0, "least expected flux over error of a frame that can tell", unit="sigma", minimum=1)
    level: float = setting(1e-5, "the check fails below this chance", minimum=0, maximum=1)

    def check(self, candidate: Candidate) -> Finding:
        """The finding for one candidate."""
        z, indices, shown = [], [], ""
        for first, bright in zip(candidate.curves, candidate.bright, strict=True):
            for second, also in zip(candidate.curves, candidate.bright, strict=True):
                if not comparable(first, second):
                    continue
                for row, other in overlapping(first, np.flatnonzero(bright), second, self.dm):
                    short = self._shortfall(first, row, second, other)
                    if math.isfinite(short):
                        z.append(short)
                        if short == max(z):
                            shown = f"{_ghz(first)} against {_ghz(second)}"
                    if also[other] and first.channel.frequency_hz < second.channel.frequency_hz:
                        indices.append(_index_of(first, row, second, other))
        index, error, p_index = mean_index(np.array(indices).reshape(-1, 2))
        values = {"n_pairs": len(z), "p": float("nan"), "index": index, "index_err": error, "p_index": p_index}
        if not z:
            return Finding(
                "uninformative", "no frame at another frequency that covers a bright one is deep enough to tell", values
            )
        p = -math.expm1(len(z) * math.log1p(-min(float(special.ndtr(-max(z))), 1 - 1e-16)))
        evidence = (
            f"in {len(z)} pairs of frames at one time the flux is at worst {max(z):.1f} sigma too low for a spectral index "
            f"within {self.steepest:g} ({shown}; p = {p:.2g})"
        )
        if math.isfinite(index):
            evidence += f"; where both are bright the index is {index:.2f} +- {error:.2f}"
        return Finding("fail" if p < self.level else "pass", evidence, {**values, "p": p})

    def _shortfall(self, first: LightCurve, row: int, second: LightCurve, other: int) -> float:
        """By how many sigma the second flux is below what the steepest spectrum leaves; NaN where it cannot tell."""
        octave = abs(math.log(first.channel.frequency_hz / second.channel.frequency_hz))
        diluted = min(1.0, float(first.exposure_s[row] / second.exposure_s[other]))
        least = math.exp(-self.steepest * octave) * diluted
        flux, error = _excess(first, row)
        there, there_err = _excess(second, other)
        if least * flux < self.min_snr * there_err:
            return float("nan")
        return (least * flux - there) / math.hypot(least * error, there_err)


def comparable(first: LightCurve, second: LightCurve) -> bool:
    """Whether two channels have fluxes of one kind at different frequencies: Stokes I in one unit that holds Jansky."""
    one, two = first.channel, second.channel
    known = one.frequency_hz > 0 and two.frequency_hz > 0 and one.frequency_hz != two.frequency_hz
    same = one.unit == two.unit and "jy" in one.unit.lower()
    return bool(known and same and one.stokes == two.stokes == "I")


def overlapping(first: LightCurve, rows: NDArray[np.int64], second: LightCurve, dm: float) -> list[tuple[int, int]]:
    """Pairs of a row of the first curve and one of the second whose exposure covers it, whatever the dispersion."""
    ghz = np.array([first.channel.frequency_hz, second.channel.frequency_hz]) / 1e9
    delay = DELAY_S * dm * abs(float(ghz[0] ** -2 - ghz[1] ** -2))
    pairs = []
    for row in rows.tolist():
        start, end = _span(first, row)
        starts, ends = second.t_tdb_s - second.exposure_s / 2, second.t_tdb_s + second.exposure_s / 2
        with np.errstate(invalid="ignore"):
            shared = np.minimum(end, ends) - np.maximum(start, starts)
            covers = (shared >= WHOLE * (end - start)) & (delay <= SMALL * (end - start))
        pairs += [(row, int(other)) for other in np.flatnonzero(covers)]
    return pairs


def _span(curve: LightCurve, row: int) -> tuple[float, float]:
    half = float(curve.exposure_s[row]) / 2
    return float(curve.t_tdb_s[row]) - half, float(curve.t_tdb_s[row]) + half


def _excess(curve: LightCurve, row: int) -> tuple[float, float]:
    """Flux above the quiet level and its error."""
    level, error = curve.quiet_level
    return float(curve.flux[row]) - level, math.hypot(float(curve.flux_err[row]), error)


def _index_of(first: LightCurve, row: int, second: LightCurve, other: int) -> tuple[float, float]:
    frequencies = first.channel.frequency_hz, second.channel.frequency_hz
    return spectral_index(frequencies, *zip(_excess(first, row), _excess(second, other), strict=True))


def spectral_index(
    frequency_hz: tuple[float, float], flux: tuple[float, ...], error: tuple[float, ...]
) -> tuple[float, float]:
    """ln(S1/S2) / ln(nu1/nu2) and its error sqrt((s1/S1)^2 + (s2/S2)^2) / |ln(nu1/nu2)| (propagation of errors).

    NaN where a flux is not positive.
    """
    if min(flux) <= 0:
        return float("nan"), float("nan")
    octave = math.log(frequency_hz[0] / frequency_hz[1])
    return math.log(flux[0] / flux[1]) / octave, math.hypot(error[0] / flux[0], error[1] / flux[1]) / abs(octave)


def mean_index(indices: Array) -> tuple[float, float, float]:
    """Weighted mean of indices and errors, shape (n, 2), its error, and the chance of such a scatter; NaN for too few."""
    known = indices[np.isfinite(indices).all(axis=1)]
    if len(known) == 0:
        return float("nan"), float("nan"), float("nan")
    weight = known[:, 1] ** -2
    mean = float((weight * known[:, 0]).sum() / weight.sum())
    chi2 = float((weight * (known[:, 0] - mean) ** 2).sum())
    p = float(special.chdtrc(len(known) - 1, chi2)) if len(known) > 1 else float("nan")
    return mean, float(weight.sum() ** -0.5), p


def _ghz(curve: LightCurve) -> str:
    return f"{curve.channel.frequency_hz / 1e9:.4g} GHz"


@hookimpl
def register_consistency_checks() -> list[type[ConsistencyCheck]]:
    """What this module offers."""
    return [AcrossBands]
