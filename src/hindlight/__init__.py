"""Was this position ever bright before? The public interface for plugins and notebooks.

Everything a plugin needs is here and in `hindlight.testing`; other modules are the program's own.
"""

from hindlight.contrasts import Contrast, Motion, brightest_and_faintest, contrast, motion
from hindlight.cutouts import added, added_part, beam_arcsec, mean_at, quiet_cutouts
from hindlight.dates import between, greenwich_sidereal_s, read_angle, read_clock, read_date
from hindlight.facts import Cards, FrameFacts, Moment, PlaneAxes
from hindlight.headers import fold_unit
from hindlight.hookspecs import hookimpl
from hindlight.instants import (
    Observed,
    comment_of,
    has_old_times,
    julian_instant,
    separate_clock,
    spoken_exposure,
    stated_exposure,
    stated_instant,
)
from hindlight.lightcurve import Block, Channel, LightCurve, Rows, quiet_level, weighted_mean
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
    Images,
    PeriodResult,
    PeriodSearch,
    RowStatistic,
    Stamps,
    Statistic,
)
from hindlight.reading import Beam, beam_of, read_facts, stated_beam
from hindlight.schema import ASSUMPTIONS, Flag
from hindlight.settings import setting
from hindlight.sites import east_longitude, east_or_west, sidereal_clock

__version__ = "0.1.0"

__all__ = [
    "ASSUMPTIONS",
    "Beam",
    "BeamShape",
    "Block",
    "Candidate",
    "Cards",
    "Channel",
    "Column",
    "ConsistencyCheck",
    "Contrast",
    "Cutout",
    "Dialect",
    "Ephemeris",
    "Estimator",
    "Finding",
    "Flag",
    "FrameFacts",
    "Images",
    "LightCurve",
    "Moment",
    "Motion",
    "Observed",
    "PeriodResult",
    "PeriodSearch",
    "PlaneAxes",
    "RowStatistic",
    "Rows",
    "Stamps",
    "Statistic",
    "added",
    "added_part",
    "beam_arcsec",
    "beam_of",
    "between",
    "brightest_and_faintest",
    "comment_of",
    "contrast",
    "east_longitude",
    "east_or_west",
    "fold_unit",
    "greenwich_sidereal_s",
    "has_old_times",
    "hookimpl",
    "julian_instant",
    "mean_at",
    "motion",
    "quiet_cutouts",
    "quiet_level",
    "read_angle",
    "read_clock",
    "read_date",
    "read_facts",
    "separate_clock",
    "setting",
    "sidereal_clock",
    "spoken_exposure",
    "stated_beam",
    "stated_exposure",
    "stated_instant",
    "weighted_mean",
]
