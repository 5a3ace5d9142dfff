"""A target that varies beyond chance, examined: its period, and every consistency check with what checks may ask for.

A piece of work as those in `tasks` are. Checks measure and see pixels of the run's frames through `FrameImages`.
"""

from __future__ import annotations

from collections.abc import Sequence
from contextlib import suppress
from functools import partial
from typing import Any

import numpy as np

from hindlight import clock, ensemble, host, judge, photometry
from hindlight.candidates import Examined
from hindlight.errors import HindlightError
from hindlight.fence import Fault, blank, call, checked
from hindlight.headers import SetAsideError
from hindlight.lightcurve import Block, FloatArray, IntArray, LightCurve
from hindlight.opening import FrameToMeasure
from hindlight.order import Order, book, frame_facts
from hindlight.plugin import Candidate, Cutout, Finding, Images, PeriodResult
from hindlight.schema import UNUSABLE
from hindlight.store import Columns
from hindlight.systems import unit_vectors
from hindlight.tasks import position_blocks, position_label, target_data

SOURCE_SNR = 20.0  # whole frames are searched for sources once, down to this or what a check asks for
NEAREST_COMPARISONS = 30  # that a consistency check is given
UNREADABLE = (SetAsideError, OSError, ValueError, HindlightError)  # what reading a frame again may end in
FRAME_WIDE = ("shift_x", "shift_y", "fwhm")  # columns of measurements that are the same all over a frame


def examine_target(order: Order, target: int, field_controls: IntArray, above_quiet: dict[str, float]) -> Examined:
    """Periods examined and consistency checked for one target that varies beyond chance.

    `above_quiet` maps channel labels to what counts as bright.
    """
    plugins = host.load(order.plugins)
    curves, rows = target_data(order, target)
    cells: dict[str, Any] = {}
    faults: list[Fault] = []
    chosen: PeriodResult | None = None
    name = curves[0].name if curves else ""
    for plugin in plugins.period_searches:
        given = judge.timed_curves(curves, plugin.min_points)
        if not given:
            continue
        result = call(plugin, partial(_examined, plugin, given), name)
        if isinstance(result, Fault):
            faults.append(result)
            continue
        cells |= {f"{plugin.name}_{key}": value for key, value in result.values.items()}
        if chosen is None or (result.established and not chosen.established):
            chosen = result
    candidate = _candidate(order, target, field_controls, curves, rows, above_quiet, chosen)
    concerns = []
    for check in plugins.checks:
        answer = call(check, partial(_found, check, candidate), name)
        if isinstance(answer, Fault):
            faults.append(answer)
            continue
        cells |= {f"{check.name}_{key}": value for key, value in answer.values.items()}
        cells |= {f"{check.name}_verdict": answer.verdict, f"{check.name}_evidence": answer.evidence}
        if answer.verdict == "fail":
            concerns.append(f"{check.name}: {answer.evidence}")
    return Examined(cells, chosen, tuple(concerns), tuple(faults))


def _examined(plugin: Any, curves: Sequence[LightCurve]) -> PeriodResult:
    result = plugin.examine(curves)
    if not isinstance(result, PeriodResult):
        raise TypeError(f"examine() returned {type(result).__name__}, expected a PeriodResult")
    return PeriodResult(checked(plugin, result.values), tuple(result.ephemerides), bool(result.established))


def _found(check: Any, candidate: Candidate) -> Finding:
    finding = check.check(candidate)
    if not isinstance(finding, Finding) or finding.verdict not in ("pass", "fail", "uninformative"):
        raise TypeError(f"check() returned {finding!r:.80}, expected a Finding with a verdict of the three")
    declared = {column.name: blank(column) for column in check.columns}
    return Finding(finding.verdict, finding.evidence, checked(check, {**declared, **finding.values}))


def _candidate(
    order: Order, target: int, controls: IntArray, curves: Sequence[LightCurve], rows: Columns,
    above_quiet: dict[str, float], period: PeriodResult | None,
) -> Candidate:  # fmt: skip
    tables = book(order.run, order.version)
    at = int(np.searchsorted(tables.positions["id"], target))
    bright, xs, ys, widths = [], [], [], []
    for curve in curves:
        excess = np.abs(curve.above_quiet) if curve.channel.signed else curve.above_quiet
        bright.append(np.asarray(excess > above_quiet.get(curve.channel.label, np.inf)))
        where = {int(frame): i for i, frame in enumerate(rows["frame"])}
        index = np.array([where[int(frame)] for frame in curve.frame], np.int64)
        xs.append(rows["x"][index])
        ys.append(rows["y"][index])
        widths.append(rows["fwhm"][index])

    def blank_sky(channel: str, frames: IntArray) -> Any:
        found = position_blocks(order, controls, np.asarray(frames))["blocks"]
        return found[channel]

    def comparisons(channel: str, frames: IntArray) -> Block | None:
        near = _nearest_comparisons(tables.positions, at)
        blocks: dict[str, Block] = position_blocks(order, near, np.asarray(frames))["blocks"] if len(near) else {}
        return blocks.get(channel)

    def cutouts(frames: IntArray, half_width: float) -> list[Cutout]:
        return [made for frame in frames if (made := _cutout(order, rows, int(frame), half_width)) is not None]

    ephemeris = period.ephemerides[0] if period and period.established and period.ephemerides else None
    return Candidate(
        name=position_label(tables.positions, at), ra=float(tables.positions["ra"][at]),
        dec=float(tables.positions["dec"][at]), curves=tuple(curves), bright=tuple(bright), x=tuple(xs), y=tuple(ys),
        ephemeris=ephemeris, controls=blank_sky, cutouts=cutouts, place_err=float(tables.positions["place_err"][at]),
        fwhm=tuple(widths), images=FrameImages(order, rows), comparisons=comparisons,
    )  # fmt: skip


def _nearest_comparisons(positions: Columns, row: int) -> IntArray:
    """Ids of the comparisons nearest to a position, ascending."""
    steady = np.flatnonzero(positions["kind"] == "comparison")
    vectors = unit_vectors(positions["ra"][steady], positions["dec"][steady])
    here = unit_vectors(positions["ra"][row : row + 1], positions["dec"][row : row + 1])[0]
    nearest = np.argsort(-(vectors @ here), kind="stable")[:NEAREST_COMPARISONS]
    return np.sort(positions["id"][steady[nearest]])


class FrameImages(Images):
    """The frames of a run, for checks; what cannot be read is not known. `rows` are those of the target."""

    def __init__(self, order: Order, rows: Columns) -> None:
        self.order = order
        self.tables = book(order.run, order.version)
        found, first = np.unique(rows["frame"], return_index=True)
        self.own = {int(frame): {n: rows[n][i] for n in FRAME_WIDE} for frame, i in zip(found, first, strict=True)}
        self.found: dict[int, tuple[float, FloatArray]] = {}  # sources of frames, and down to which S/N

    def size(self, frames: IntArray) -> tuple[FloatArray, FloatArray]:
        """Pixels along x and y."""
        at = self._rows(frames)
        return self.tables.frames["width"][at].astype(float), self.tables.frames["height"][at].astype(float)

    def sidereal(self, frames: IntArray) -> FloatArray:
        """Local sidereal time in degrees."""
        table, at = self.tables.frames, self._rows(frames)
        middle = np.where(table["barycentric"][at], np.nan, table["middle_tdb_s"][at])
        return clock.sidereal_deg(middle, np.stack([table[f"site_{axis}"][at] for axis in "xyz"], axis=1))

    def measure(self, frames: IntArray, x: FloatArray, y: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Calibrated flux and error at one pixel of each frame."""
        flux, error = np.full(len(frames), np.nan), np.full(len(frames), np.nan)
        for frame, mine in _by_frame(frames):
            with suppress(*UNREADABLE):
                flux[mine], error[mine] = self._measured(frame, x[mine], y[mine])
        return flux, error

    def carried(
        self, frames: IntArray, x: FloatArray, y: FloatArray, others: IntArray
    ) -> tuple[FloatArray, FloatArray]:
        """The pixel of `others` with the same sky, by the headers and each frame's shift at its middle."""
        ra, dec, to_x, to_y = np.full((4, len(frames)), np.nan)
        for frame, mine in _by_frame(frames):
            with suppress(*UNREADABLE):
                dx, dy = self._shift(frame)
                ra[mine], dec[mine] = photometry.to_sky(
                    self._facts(frame), x[mine] - dx, y[mine] - dy, self.order.settings
                )
        for frame, mine in _by_frame(others):
            with suppress(*UNREADABLE):
                dx, dy = self._shift(frame)
                there = photometry.to_pixels(self._facts(frame), ra[mine], dec[mine], self.order.settings)
                to_x[mine], to_y[mine] = there[0] + dx, there[1] + dy
        return to_x, to_y

    def sources(self, frame: int, snr: float) -> tuple[FloatArray, FloatArray, FloatArray]:
        """x, y and S/N of the sources of one frame."""
        if frame not in self.found or self.found[frame][0] > snr:
            least = min(snr, SOURCE_SNR)
            self.found[frame] = least, np.empty((3, 0))
            with suppress(*UNREADABLE):
                found = photometry.bright_pixels(self._facts(frame), least, self.order.settings)
                self.found[frame] = least, np.stack(found)
        x, y, height = self.found[frame][1]
        above = height > snr
        return x[above], y[above], height[above]

    def _rows(self, frames: IntArray) -> IntArray:
        return np.array([self.tables.row_of_frame[int(frame)] for frame in frames], np.int64)

    def _facts(self, frame: int) -> FrameToMeasure:
        return frame_facts(self.tables.frames, self.tables.row_of_frame[frame])

    def _shift(self, frame: int) -> FloatArray:
        own = self.own.get(frame)
        return np.zeros(2) if own is None else np.nan_to_num([float(own["shift_x"]), float(own["shift_y"])])

    def _measured(self, frame: int, x: FloatArray, y: FloatArray) -> tuple[FloatArray, FloatArray]:
        facts, own, settings = self._facts(frame), self.own.get(frame), self.order.settings
        estimators = host.load(self.order.plugins).estimators
        estimator = photometry.choose_estimator(
            estimators, facts.unit, settings.photometry.estimator, facts.beam_major > 0
        )
        fwhm = float("nan") if own is None else float(own["fwhm"])
        found = photometry.measure_pixels(facts, x, y, estimator, settings, fwhm)
        found["frame"] = np.full(len(x), frame)
        flux, error, bad = ensemble.calibrated(found, self.tables.solution)
        lost = bad | ((found["flags"] & int(UNUSABLE)) != 0)
        return np.where(lost, np.nan, flux), np.where(lost, np.nan, error)


def _by_frame(frames: IntArray) -> list[tuple[int, IntArray]]:
    """Each frame with the places it stands at."""
    return [(int(frame), np.flatnonzero(frames == frame)) for frame in np.unique(frames)]


def _cutout(order: Order, rows: Columns, frame: int, half_width: float) -> Cutout | None:
    """Raw pixels around a measured position; None where the file is no longer readable."""
    tables = book(order.run, order.version)
    row = tables.row_of_frame[frame]
    at = int(np.flatnonzero(rows["frame"] == frame)[0])
    try:
        made = photometry.cutout(
            frame_facts(tables.frames, row), float(rows["x"][at]), float(rows["y"][at]), half_width, order.settings
        )
    except UNREADABLE:
        return None
    fwhm = float(rows["fwhm"][at])  # that of the comparisons where the header gives none
    known = float(tables.frames["beam_major"][row]) > 0 or fwhm != order.settings.photometry.assumed_fwhm_pixels
    return Cutout(
        frame=frame, channel=str(tables.frames["channel"][row]), pixels=made.pixels, x=made.x, y=made.y,
        to_sky=made.to_sky, fwhm=fwhm, background=float(rows["background"][at]), rms=float(rows["rms"][at]),
        fwhm_known=known,
    )  # fmt: skip
