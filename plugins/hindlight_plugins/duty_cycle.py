"""How often and how long a source is bright: the share of bright samples and their longest run."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, ClassVar

import numpy as np
from numpy.typing import NDArray
from scipy import special

from hindlight import Column, Rows, RowStatistic, Statistic, hookimpl, setting


@dataclass(frozen=True)
class DutyCycle(RowStatistic):
    """Samples further above the quiet level than `sigma`; of either sign where flux may be negative (Stokes Q, U, V).

    A run is bright as often as one looked: what happened between its samples is not known.
    """

    min_points: ClassVar[int] = 3
    columns = (
        Column("fraction", "share of samples that are bright", ucd="stat.value;arith.ratio"),
        Column("by_chance", "how many samples would be bright in Gaussian noise", ucd="meta.number"),
        Column("surprise", "minus log10 of the chance that at least as many are bright in Gaussian noise, at most 300; 0 "
               "where none is", unusual="high", ucd="stat.probability"),
        Column("longest", "most bright samples in a row", dtype="int64", ucd="meta.number;obs"),
        Column("longest_s", "time from the first to the last of them, the longest of equal runs; NaN where none is "
               "bright", unit="s", ucd="time.duration"),
    )  # fmt: skip
    sigma: float = setting(4.0, "what counts as bright, in sigma above the quiet level", minimum=0)

    def compute_rows(self, rows: Rows) -> Mapping[str, NDArray[Any]]:
        """The declared columns."""
        above = np.abs(rows.above_quiet) if rows.channel.signed else rows.above_quiet
        bright = above > self.sigma
        at = np.broadcast_to(np.arange(bright.shape[1]), bright.shape)
        run = at - np.maximum.accumulate(np.where(bright, -1, at), axis=1)  # length of the run that a sample ends
        longest = run.max(axis=1)
        began = np.take_along_axis(rows.t_tdb_s, at - np.maximum(run - 1, 0), axis=1)
        lasted = np.where(bright & (run == longest[:, None]), rows.t_tdb_s - began, -1.0).max(axis=1)
        rate = min(1.0, (2 if rows.channel.signed else 1) * float(special.ndtr(-self.sigma)))
        n_bright = bright.sum(axis=1)
        chance = np.where(n_bright > 0, special.betainc(np.maximum(n_bright, 1), rows.n - n_bright + 1, rate), 1.0)
        return {
            "fraction": n_bright / rows.n,
            "by_chance": rows.n * rate,
            "surprise": np.abs(np.log10(np.maximum(chance, 1e-300))),
            "longest": longest,
            "longest_s": np.where(longest > 0, lasted, np.nan),
        }


@hookimpl
def register_statistics() -> list[type[Statistic]]:
    """What this module offers."""
    return [DutyCycle]
