"""Longest unbroken run of bright measurements."""

from dataclasses import dataclass

import numpy as np

from hindlight import Column, Statistic, hookimpl, setting


@dataclass(frozen=True)
class LongestRun(Statistic):
    columns = (Column("length", "Most bright measurements in a row", unusual="high"),)
    threshold: float = setting(5.0, "What counts as bright, in sigma above the quiet level", minimum=0)

    def compute(self, curve):
        hit = curve.above_quiet > self.threshold
        edges = np.flatnonzero(np.diff(np.concatenate(([0], hit, [0]))))
        return {"length": int(np.max(edges[1::2] - edges[::2], initial=0))}


@hookimpl
def register_statistics():
    return [LongestRun]
