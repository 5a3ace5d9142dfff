"""Was this position ever bright before? The public interface for plugins and notebooks.

Everything a plugin needs is here and in `hindlight.testing`; other modules are the program's own.
"""

from hindlight.facts import Cards, FrameFacts, Moment, PlaneAxes
from hindlight.headers import fold_unit
from hindlight.hookspecs import hookimpl
from hindlight.lightcurve import Block, Channel, LightCurve, quiet_level, weighted_mean
from hindlight.plugin import (
    BeamShape,
    Candidate,
    Column,
    ConsistencyCheck,
    Cutout,
    Dialect,
    Ephemeris,
    Estimator,
    Finding,
    PeriodResult,
    PeriodSearch,
    Stamps,
    Statistic,
)
from hindlight.schema import ASSUMPTIONS, Flag
from hindlight.settings import setting

__version__ = "0.1.0"

__all__ = [
    "ASSUMPTIONS",
    "BeamShape",
    "Block",
    "Candidate",
    "Cards",
    "Channel",
    "Column",
    "ConsistencyCheck",
    "Cutout",
    "Dialect",
    "Ephemeris",
    "Estimator",
    "Finding",
    "Flag",
    "FrameFacts",
    "LightCurve",
    "Moment",
    "PeriodResult",
    "PeriodSearch",
    "PlaneAxes",
    "Stamps",
    "Statistic",
    "fold_unit",
    "hookimpl",
    "quiet_level",
    "setting",
    "weighted_mean",
]
