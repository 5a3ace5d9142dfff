"""The mean of all frames of a channel: whether a source too faint for any one of them is there at all."""

from __future__ import annotations

from dataclasses import dataclass
from typing import ClassVar

from hindlight import Column, LightCurve, Statistic, hookimpl, weighted_mean


@dataclass(frozen=True)
class MeanFlux(Statistic):
    """Weighted mean flux over its error; its magnitude where flux may be negative (Stokes Q, U, V)."""

    uses_times: ClassVar[bool] = False
    min_points: ClassVar[int] = 1
    columns = (
        Column("snr", "weighted mean flux over its error, of all usable frames, seen or not", unusual="high",
               about="presence", ucd="stat.snr;stat.mean"),
    )  # fmt: skip

    def compute(self, curve: LightCurve) -> dict[str, float]:
        """The declared column: sum(S / err^2) / sqrt(sum 1 / err^2)."""
        mean, error = weighted_mean(curve.flux, curve.flux_err)
        return {"snr": abs(mean / error) if curve.channel.signed else mean / error}


@hookimpl
def register_statistics() -> list[type[Statistic]]:
    """What this module offers."""
    return [MeanFlux]
