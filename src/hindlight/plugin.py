"""The plugin contract: what each of the five kinds of plugin declares, is given and returns.

A plugin is a frozen dataclass derived from one of the base classes here; its fields made by `setting()` are its
settings, `columns` declares what it returns. Plugins are found and checked by `host`, called through `fence`.
"""

from __future__ import annotations

import re
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any, ClassVar, Literal

import numpy as np
from numpy.typing import NDArray

from hindlight.facts import Cards, FrameFacts, PlaneAxes
from hindlight.lightcurve import Block, FloatArray, IntArray, LightCurve, Rows
from hindlight.schema import TableColumn

Values = Mapping[str, Any]

UNUSUAL = ("high", "low", "both", None)
ABOUT = ("variation", "presence")


@dataclass(frozen=True)
class Column(TableColumn):
    """One declared result of a plugin.

    unusual
        'high', 'low' or 'both' for a column that is to be calibrated against the controls, `None` for one that only
        informs.
    about
        'variation' for a column that asks whether the flux changes (only these enter `p_value`), 'presence' for one
        that a bright steady source would make unusual.
    flux_power
        The power of flux the column scales with: 1 for a flux, 2 for a variance, 0 for a pure number.
    is_time
        Whether the column is a time on the light curve's axis: it moves with the time origin.

    Raises `ValueError` for any other word: one that is misspelt would be taken for something else in silence.
    """

    unusual: Literal["high", "low", "both"] | None = None
    about: Literal["variation", "presence"] = "variation"
    flux_power: float = 0.0
    is_time: bool = False

    def __post_init__(self) -> None:
        for key, known in (("unusual", UNUSUAL), ("about", ABOUT)):
            if getattr(self, key) not in known:
                words = ", ".join(map(repr, known))
                raise ValueError(f"Column {self.name!r}: {key} must be one of {words}, got {getattr(self, key)!r}")


@dataclass(frozen=True)
class Plugin:
    """What all kinds share. `name` is the class name in snake case unless a class sets it."""

    name: ClassVar[str] = ""
    kind: ClassVar[str] = ""
    columns: ClassVar[tuple[Column, ...]] = ()

    def __init_subclass__(cls, **kwargs: Any) -> None:
        super().__init_subclass__(**kwargs)
        if "name" not in cls.__dict__:
            cls.name = re.sub(r"(?<=[a-z0-9])(?=[A-Z])", "_", cls.__name__).lower()


@dataclass(frozen=True)
class Statistic(Plugin):
    """A number (or several) from one light curve.

    Set `min_points` to the fewest samples that make sense (fewer give blank columns, `compute` is not called),
    `uses_times` to False if the order and times of samples do not matter (then frames without a clock are included),
    `all_channels` to True to be given every channel of the position at once.
    """

    kind: ClassVar[str] = "statistic"
    min_points: ClassVar[int] = 3
    uses_times: ClassVar[bool] = True
    all_channels: ClassVar[bool] = False

    def compute(self, curve: Any) -> Values:
        """The declared columns for one light curve (or for a tuple of them when `all_channels` is true)."""
        raise TypeError(f"statistic {self.name} defines no compute()")

    def compute_block(self, block: Block) -> Mapping[str, NDArray[np.generic]] | None:
        """The declared columns for a whole block, arrays of shape (n_positions,); None leaves it to `compute`.

        Every position of the block has `min_points` samples, and with `uses_times` only samples whose time is known.
        """
        return None


@dataclass(frozen=True)
class RowStatistic(Statistic):
    """A statistic of one channel that is worked out for many light curves at once: it defines `compute_rows` only."""

    def compute_rows(self, rows: Rows) -> Mapping[str, NDArray[np.generic]]:
        """The declared columns, arrays of shape (n_curves,); none may depend on which other rows there are."""
        raise TypeError(f"statistic {self.name} defines no compute_rows()")

    def compute(self, curve: LightCurve) -> Values:
        """The same for one light curve."""
        return {name: values.item() for name, values in self.compute_rows(curve.rows).items()}

    def compute_block(self, block: Block) -> Mapping[str, NDArray[np.generic]] | None:
        """The same for a block."""
        return self.compute_rows(block.rows)


@dataclass(frozen=True)
class Ephemeris:
    """One possible ephemeris: t_k = epoch + period k + period period_dot k^2 / 2.

    `epoch_tdb_s` is a maximum in seconds from J2000.0 TDB at the barycentre, `covariance` of shape (3, 3) belongs to
    (epoch, period, period_dot) in s, s, s/s; NaN where a term was not fitted. `log_odds` is the natural logarithm of
    the odds against the best one (0 for the best). `window_s` is the width in which pulses arrive, NaN where unknown.
    """

    epoch_tdb_s: float
    period_s: float
    period_dot: float = 0.0
    covariance: tuple[tuple[float, float, float], ...] = ((float("nan"),) * 3,) * 3
    window_s: float = float("nan")
    log_odds: float = 0.0


@dataclass(frozen=True)
class PeriodResult:
    """What a period search returns: its declared columns, its ephemerides (best first), and whether the best one

    is *established*: real beyond chance, not an alias of the sampling, and not matched by an aperiodic source.
    """

    values: Values
    ephemerides: tuple[Ephemeris, ...] = ()
    established: bool = False


@dataclass(frozen=True)
class PeriodSearch(Plugin):
    """A search for a period in the channels of one position; runs only behind the gate, see `Ranking.gate`."""

    kind: ClassVar[str] = "period_search"
    min_points: ClassVar[int] = 8

    def search(self, curves: Sequence[LightCurve]) -> Values:
        """The declared columns: cheap enough for every control that passes the gate."""
        raise TypeError(f"period search {self.name} defines no search()")

    def examine(self, curves: Sequence[LightCurve]) -> PeriodResult:
        """The full answer with ephemerides and their tests: only for targets that vary beyond chance."""
        return PeriodResult(self.search(curves))


@dataclass(frozen=True, eq=False)
class Cutout:
    """Raw pixels around a position in one frame.

    `pixels` has shape (size, size), NaN where blank or outside; `x`, `y` is the position in 0-based pixels of the
    cut-out; `to_sky` of shape (2, 2) turns a pixel offset into (east, north) arcsec; `fwhm` is the beam in pixels, and
    `fwhm_known` whether header, settings or comparisons tell it: it is an assumed one otherwise.
    """

    frame: int
    channel: str
    pixels: FloatArray
    x: float
    y: float
    to_sky: FloatArray
    fwhm: float
    background: float
    rms: float
    fwhm_known: bool = True


class Images:
    """What a check may ask of the frames beyond the target itself, by frame identifiers.

    Arrays have shape (n,), pixels are 0-based, NaN stands for what is not known. This class knows nothing; a run gives
    one that reads its frames.
    """

    def size(self, frames: IntArray) -> tuple[FloatArray, FloatArray]:
        """Pixels along x and y."""
        return _unknown(frames), _unknown(frames)

    def sidereal(self, frames: IntArray) -> FloatArray:
        """Local sidereal time in degrees at the middle of the good time; NaN without a clock or a site."""
        return _unknown(frames)

    def measure(self, frames: IntArray, x: FloatArray, y: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Calibrated flux and error at one pixel of each frame, by the code that makes the light curves."""
        return _unknown(frames), _unknown(frames)

    def carried(
        self, frames: IntArray, x: FloatArray, y: FloatArray, others: IntArray
    ) -> tuple[FloatArray, FloatArray]:
        """The pixel of `others` that shows the sky which pixel (x, y) of `frames` shows; it may lie outside the image."""
        return _unknown(frames), _unknown(frames)

    def sources(self, frame: int, snr: float) -> tuple[FloatArray, FloatArray, FloatArray]:
        """x, y (whole pixels) and S/N of the pixel of the sources of one frame that are brighter than `snr`, (m,) each."""
        return np.empty(0), np.empty(0), np.empty(0)


def _unknown(frames: IntArray) -> FloatArray:
    return np.full(len(frames), np.nan)


def no_comparisons(channel: str, frames: IntArray) -> Block | None:
    """For where no comparisons are known."""
    return None


@dataclass(frozen=True, eq=False)
class Candidate:
    """What a consistency check is given: a target that varies beyond chance.

    curves
        Its light curves, one per channel.
    bright
        For each curve a mask of shape (n,): the samples that stand above the quiet level beyond chance.
    x, y
        For each curve the 0-based pixel coordinates, shape (n,).
    ephemeris
        The best one, or None.
    controls
        Called with a channel label and frame identifiers (m,): the blank positions of the field in those frames.
    cutouts
        Called with frame identifiers and a half width in beams: raw pixels around the target.
    place_err
        1-sigma error per axis of a place that was searched for, arcsec; 0 where it was given.
    fwhm
        For each curve the width of the beam in pixels that was used, shape (n,); empty where nobody has said it.
    images
        What else there is in the frames; see `Images`.
    comparisons
        Called like `controls`: steady sources near the target in those frames; None where there are none.
    """

    name: str
    ra: float
    dec: float
    curves: tuple[LightCurve, ...]
    bright: tuple[NDArray[np.bool_], ...]
    x: tuple[FloatArray, ...]
    y: tuple[FloatArray, ...]
    ephemeris: Ephemeris | None
    controls: Callable[[str, IntArray], Block]
    cutouts: Callable[[IntArray, float], Sequence[Cutout]]
    place_err: float = 0.0
    fwhm: tuple[FloatArray, ...] = ()
    images: Images = field(default_factory=Images)
    comparisons: Callable[[str, IntArray], Block | None] = no_comparisons


@dataclass(frozen=True)
class Finding:
    """A check's answer: pass, fail or uninformative, a sentence of evidence, and its declared columns."""

    verdict: Literal["pass", "fail", "uninformative"]
    evidence: str
    values: Values = field(default_factory=dict)


@dataclass(frozen=True)
class ConsistencyCheck(Plugin):
    """A question that a real source must answer well; a failure becomes a concern and never erases a standing."""

    kind: ClassVar[str] = "consistency_check"

    def check(self, candidate: Candidate) -> Finding:
        """The finding for one candidate."""
        raise TypeError(f"consistency check {self.name} defines no check()")


@dataclass(frozen=True)
class BeamShape:
    """A Gaussian beam or point-spread function in pixels: full widths at half maximum, and the angle of the

    major axis from the +x axis of the image towards +y, in radians.
    """

    major: float
    minor: float
    angle: float

    @property
    def fwhm(self) -> float:
        """Geometric mean of the two widths."""
        return float((self.major * self.minor) ** 0.5)


@dataclass(frozen=True, eq=False)
class Stamps:
    """What an estimator is given: the pixels around all positions of a frame, local background taken off.

    pixels
        Shape (n, size, size), size odd; NaN where blank or outside the image. The position lies at
        (size // 2 + dx, size // 2 + dy), with dx, dy of shape (n,) within half a pixel.
    rms, background_err
        Local noise per pixel and the error of the local background, shape (n,).
    electrons_per_unit
        NaN where unknown.
    """

    pixels: NDArray[np.floating[Any]]
    dx: FloatArray
    dy: FloatArray
    rms: FloatArray
    background_err: FloatArray
    beam: BeamShape
    electrons_per_unit: float = float("nan")


@dataclass(frozen=True)
class Estimator(Plugin):
    """Stamps to fluxes. It must be linear in the pixels: that is what makes injection into light curves exact.

    `units` lists the folded units (see `hindlight.fold_unit`) for which it is the default; with `needs_beam` it is not
    where beam or seeing are only assumed. With `correlated` it takes the noise as correlated over a beam, so that
    `background_err` counts the annulus' beams instead of its pixels. With `sums` its flux is a sum over pixels, which is
    divided by the beam's area where the unit is per beam.
    """

    kind: ClassVar[str] = "estimator"
    units: ClassVar[tuple[str, ...]] = ()
    needs_beam: ClassVar[bool] = False
    correlated: ClassVar[bool] = False
    sums: ClassVar[bool] = False

    def radius(self, beam: BeamShape) -> float:
        """How far from the position, in pixels, the estimator needs pixels."""
        raise TypeError(f"estimator {self.name} defines no radius()")

    def measure(self, stamps: Stamps) -> tuple[FloatArray, FloatArray]:
        """Flux and 1-sigma error, each of shape (n,); NaN where a pixel that carries weight is NaN."""
        raise TypeError(f"estimator {self.name} defines no measure()")


@dataclass(frozen=True)
class Dialect(Plugin):
    """A way of writing headers. Dialects are asked in order of `order`, then name; the first that recognises a header

    reads it.
    """

    kind: ClassVar[str] = "dialect"
    order: ClassVar[int] = 50

    def recognises(self, cards: Cards) -> bool:
        """Whether this dialect reads headers like this one."""
        raise TypeError(f"dialect {self.name} defines no recognises()")

    def read(self, cards: Cards, axes: PlaneAxes) -> FrameFacts:
        """The facts of one plane; each thing taken for granted is named in its `assumptions`."""
        raise TypeError(f"dialect {self.name} defines no read()")
