"""What is said about a target: counts, looks, brightenings, standing, and the order of the candidate table.

Pure: light curves, thresholds and p-values in, rows out. It reads nothing and writes nothing.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from hindlight.calibrate import extra_scatter, runs, upper_bound
from hindlight.fence import Fault
from hindlight.lightcurve import FloatArray, IntArray, LightCurve, weighted_mean
from hindlight.plugin import PeriodResult
from hindlight.ranking import Thresholds
from hindlight.settings import Detection
from hindlight.timing import DAY, J2000_JD, in_window, lookback

STILL_POSSIBLE = 1000.0  # ephemerides with odds no worse than one to this are still possible
FAINT_PULSE_SIGMA = 3.0
MOST_BRIGHT = 0.5  # brightenings that fill more of the samples than this are no separate brightenings

Mask = NDArray[np.bool_]


@dataclass(frozen=True)
class SeenOnly:
    """Photographic frames that tell only whether the target is seen: how many, in how many it is, and the median flux of

    the faintest comparison seen in each, NaN where none is known.
    """

    n_frames: int = 0
    n_seen: int = 0
    limit: float = float("nan")


@dataclass(frozen=True, eq=False)
class ChannelView:
    """One channel of a target: its curve, how many frames cover it, how many of them are calibrated, and its thresholds.

    `deep` are its fluxes in deep images made of frames of the curve, and `within` the deep image that each sample of
    the curve belongs to, -1 for none; None where the channel has no deep image. `seen_only` tells of frames that give no
    flux, which are not in the curve.
    """

    curve: LightCurve
    n_frames: int
    n_calibrated: int
    thresholds: Thresholds
    deep: LightCurve | None = None
    within: IntArray | None = None
    seen_only: SeenOnly = SeenOnly()

    @property
    def snr(self) -> FloatArray:
        """Flux over its error, absolute where the flux is signed; shape (n,)."""
        snr = self.curve.flux / self.curve.flux_err
        return np.abs(snr) if self.curve.channel.signed else snr

    @property
    def detected(self) -> Mask:
        """Samples above the channel's threshold."""
        return np.asarray(self.snr > self.thresholds.detected)

    @property
    def bright(self) -> Mask:
        """Samples that stand above the quiet level beyond chance."""
        if len(self.curve) < 2:
            return np.zeros(len(self.curve), dtype=bool)
        excess = self.curve.above_quiet
        excess = np.abs(excess) if self.curve.channel.signed else excess
        return np.asarray(excess > self.thresholds.above_quiet)

    @property
    def seen(self) -> bool:
        """Seen in a frame or in the mean."""
        if len(self.curve) == 0 or self.seen_only.n_seen:
            return self.seen_only.n_seen > 0
        mean, error = weighted_mean(self.curve.flux, self.curve.flux_err)
        in_mean = (abs(mean) if self.curve.channel.signed else mean) > self.thresholds.mean * error
        return bool(in_mean or self.detected.any() or self.seen_deep)

    @property
    def deep_mean(self) -> tuple[float, float]:
        """Weighted mean flux of the deep images and its error, NaN where there are none."""
        return _mean(self.deep)

    @property
    def seen_deep(self) -> bool:
        """Seen in the deep images together; what one of many frames must exceed is more than enough for them."""
        flux, error = self.deep_mean
        return bool((abs(flux) if self.curve.channel.signed else flux) > self.thresholds.detected * error)

    @property
    def quiet_level(self) -> tuple[float, float]:
        """The flux when the source is not bright, from snapshots or from deep images, whichever is more precise.

        A deep image that holds a bright snapshot shows the brightening too and is left out.
        """
        own = self.curve.quiet_level
        if self.deep is None or self.within is None:
            return own
        quiet = _mean(self.deep.select(~np.isin(self.deep.frame, self.within[self.bright])))
        return own if own[1] <= quiet[1] or np.isnan(quiet[1]) else quiet

    @property
    def quiet_otherwise(self) -> bool:
        """Whether the samples that are not bright scatter no more than blank sky does.

        A source that pulses has faint pulses too, which are not bright by themselves: they are left out as well.
        """
        rest = ~self.bright
        if not self.curve.channel.signed:
            rest &= self.curve.above_quiet <= FAINT_PULSE_SIGMA
        if rest.sum() < 3:
            return False
        flux, error = self.curve.flux[rest], self.curve.flux_err[rest]
        mean, _ = weighted_mean(flux, error)
        reduced = float((((flux - mean) / error) ** 2).sum()) / (int(rest.sum()) - 1)
        return bool(reduced <= self.thresholds.reduced and self.bright.mean() <= MOST_BRIGHT)


def _mean(curve: LightCurve | None) -> tuple[float, float]:
    return (float("nan"), float("nan")) if curve is None else weighted_mean(curve.flux, curve.flux_err)


@dataclass(frozen=True, eq=False)
class View:
    """A target in all its channels; `utc` gives a frame's time as text, `label` its file, HDU and plane."""

    name: str
    channels: tuple[ChannelView, ...]
    utc: Callable[[int], str]
    label: Callable[[int], str]


@dataclass(frozen=True)
class Examined:
    """What the searches and checks say of one target: table cells by full column name, the chosen result, concerns."""

    cells: Mapping[str, Any]
    period: PeriodResult | None
    concerns: tuple[str, ...]
    faults: tuple[Fault, ...]


@dataclass(frozen=True)
class Described:
    """What the tables say of one target from its light curves: its core cells, and a row for each channel."""

    cells: Mapping[str, Any]
    channels: tuple[Mapping[str, Any], ...]


def epochs(times_s: FloatArray, gap_days: float) -> int:
    """How many groups the times (in seconds, NaN ignored) fall into, apart by more than the gap."""
    known = np.sort(times_s[np.isfinite(times_s)])
    return 0 if known.size == 0 else 1 + int(np.count_nonzero(np.diff(known) > gap_days * DAY))


def brightenings(view: View, gap_days: float) -> int:
    """How many separate times the target is known to have been bright: epochs, or runs of bright samples in one, if more.

    Samples without a time are in no order and tell of none.
    """
    times = [c.curve.t_tdb_s[c.bright] for c in view.channels]
    in_runs = [runs(c.bright[np.isfinite(c.curve.t_tdb_s)]) for c in view.channels if not c.curve.channel.signed]
    return max([epochs(np.concatenate(times), gap_days) if times else 0, *in_runs], default=0)


def _timeless(view: View) -> int:
    """How many bright samples have no time."""
    return sum(int((c.bright & ~np.isfinite(c.curve.t_tdb_s)).sum()) for c in view.channels)


def standing(view: View, beyond_chance: bool, established: bool, detection: Detection, testable: bool = True) -> str:
    """The verdict in one word; see `hindlight.schema.STANDINGS`. Not `testable`: the controls could not decide."""
    used = [len(c.curve) for c in view.channels]
    if not any(used):
        return "undecided" if any(c.seen_only.n_frames for c in view.channels) else "uncovered"
    if max(used) < detection.min_frames or not testable:
        return "undecided"
    if not beyond_chance:
        return "steady" if any(c.seen for c in view.channels) else "unseen"
    if established:
        return "periodic"
    lit = [c for c in view.channels if c.bright.any()]
    if not lit or not all(c.quiet_otherwise for c in lit):
        return "variable"
    known = brightenings(view, detection.epoch_gap_days)
    if known > 1:
        return "repeating"
    return "single" if known + _timeless(view) <= 1 else "variable"


def counts(view: View, detection: Detection) -> dict[str, Any]:
    """The columns of the candidate table that count frames and looks and name the first and last."""
    samples = _all_samples(view)
    detected = samples["detected"]
    peak = int(np.argmax(samples["snr"])) if len(detected) else -1
    row: dict[str, Any] = {
        "n_frames": sum(c.n_frames for c in view.channels),
        "n_used": len(detected),
        "n_detected": int(detected.sum()),
        "n_epochs": epochs(samples["t"], detection.epoch_gap_days),
        "peak_snr": float(samples["snr"][peak]) if peak >= 0 else float("nan"),
        "peak_frame": view.label(int(samples["frame"][peak])) if peak >= 0 else "",
    }
    return row | _first_and_last(view, samples)


def _all_samples(view: View) -> dict[str, Any]:
    """The samples of all channels together in order of time, untimed ones last."""
    parts: dict[str, list[Any]] = {
        "t": [],
        "snr": [],
        "detected": [],
        "frame": [],
        "limit": [],
        "flux": [],
        "channel": [],
    }
    for index, c in enumerate(view.channels):
        for name, values in (
            ("t", c.curve.t_tdb_s), ("snr", c.snr), ("detected", c.detected), ("frame", c.curve.frame),
            ("limit", c.thresholds.detected * c.curve.flux_err), ("flux", np.abs(c.curve.flux)),
            ("channel", np.full(len(c.curve), index)),
        ):  # fmt: skip
            parts[name].append(values)
    joined = {name: np.concatenate(values) if values else np.empty(0) for name, values in parts.items()}
    order = np.lexsort((joined["frame"], joined["t"]))
    joined = {name: values[order] for name, values in joined.items()}
    joined["detected"] = joined["detected"].astype(bool)
    return joined


def _first_and_last(view: View, samples: Mapping[str, Any]) -> dict[str, str]:
    """Times of the first and last detection, and of the nearest non-detections that would have shown either."""
    row = dict.fromkeys(("first_detected", "last_detected", "quiet_before", "quiet_after"), "")
    hits = np.flatnonzero(samples["detected"] & np.isfinite(samples["t"]))
    if hits.size == 0:
        return row
    first, last = int(hits[0]), int(hits[-1])
    row["first_detected"] = view.utc(int(samples["frame"][first]))
    row["last_detected"] = view.utc(int(samples["frame"][last]))
    for name, edge, side in (
        ("quiet_before", first, slice(None, first)), ("quiet_after", last, slice(last + 1, None))
    ):  # fmt: skip
        constrains = (samples["limit"] < samples["flux"][edge]) & (samples["channel"] == samples["channel"][edge])
        quiet = np.flatnonzero((constrains & ~samples["detected"] & np.isfinite(samples["t"]))[side])
        if quiet.size:
            at = int(quiet[-1]) if name == "quiet_before" else last + 1 + int(quiet[0])
            row[name] = view.utc(int(samples["frame"][at]))
    return row


def describe(
    view: View,
    given: Mapping[str, float],
    decided: tuple[bool, bool],
    examined: Examined | None,
    detection: Detection,
) -> Described:
    """The cells of one target that need its light curves.

    `given` is the ephemeris of the target list, NaN for none; `decided` says whether the target varies beyond chance,
    and whether the controls could decide that.
    """
    period = examined.period if examined is not None else None
    if period is not None and not (period.established and period.ephemerides):
        period = None
    cells = counts(view, detection) | _period_cells(period)
    cells["name"] = view.name
    cells["standing"] = standing(view, decided[0], period is not None, detection, decided[1])
    cells["concerns"] = "; ".join(examined.concerns) if examined is not None else ""
    cells["lookback_p"] = _lookback_p(view, given)
    return Described(cells, tuple(channel_row(view, c) for c in view.channels))


def _period_cells(period: PeriodResult | None) -> dict[str, Any]:
    """The columns of an established period."""
    if period is None:
        return {"cycle_counts_left": 0}
    best = period.ephemerides[0]
    errors = [best.covariance[i][i] ** 0.5 for i in range(3)]
    return {
        "period": best.period_s,
        "period_err": errors[1],
        "period_dot": best.period_dot if np.isfinite(errors[2]) else float("nan"),
        "period_dot_err": errors[2],
        "epoch": J2000_JD + best.epoch_tdb_s / DAY,
        "cycle_counts_left": sum(e.log_odds > -np.log(STILL_POSSIBLE) for e in period.ephemerides),
    }


def _lookback_p(view: View, given: Mapping[str, float]) -> float:
    """See `hindlight.timing.lookback`; NaN where the target list gives no ephemeris."""
    if not np.isfinite([given["period"], given["epoch"]]).all():
        return float("nan")
    inside, detected = [np.empty(0, bool)], [np.empty(0, bool)]
    for c in view.channels:
        known = np.isfinite(c.curve.t_tdb_s)
        t = c.curve.t_tdb_s[known] - (given["epoch"] - J2000_JD) * DAY
        dot, window = float(np.nan_to_num(given["period_dot"])), float(np.nan_to_num(given["window"]))
        exposure, clock = c.curve.exposure_s[known], c.curve.clock_error_s[known]
        inside.append(in_window(t, exposure, clock, given["period"], dot, window))
        detected.append(c.detected[known])
    return lookback(np.concatenate(inside), np.concatenate(detected))


def channel_row(view: View, c: ChannelView) -> dict[str, Any]:
    """One row of channels.ecsv."""
    curve = c.curve
    mean, error = weighted_mean(curve.flux, curve.flux_err)
    quiet, quiet_err = c.quiet_level
    deep, deep_err = c.deep_mean
    typical = float(np.median(curve.flux_err)) if len(curve) else float("nan")
    level = 0.0 if curve.channel.signed else c.thresholds.level
    return {
        "name": view.name,
        "channel": curve.channel.label,
        "flux_unit": curve.channel.unit,
        "n_frames": c.n_frames,
        "n_used": len(curve),
        "n_detected": int(c.detected.sum()),
        "n_calibrated": c.n_calibrated,
        "threshold": c.thresholds.detected,
        "threshold_above_quiet": c.thresholds.above_quiet,
        "threshold_mean": c.thresholds.mean,
        "n_controls": c.thresholds.n_controls,
        "quiet_level": quiet,
        "quiet_level_err": quiet_err,
        "flux_mean": mean,
        "flux_mean_err": error,
        "scatter": extra_scatter(curve.flux, curve.flux_err),
        "blank_level": level,
        "limit_sigma": c.thresholds.detected * typical - level,
        "confusion_rms": c.thresholds.confusion,
        "limit_bayes": (
            float("nan")
            if curve.channel.signed
            else upper_bound(mean - level, float(np.hypot(error, c.thresholds.confusion)))
        ),
        "limit_above_quiet": c.thresholds.above_quiet * float(np.hypot(typical, curve.quiet_level[1])),
        "n_deep": 0 if c.deep is None else len(c.deep),
        "deep_flux": deep,
        "deep_flux_err": deep_err,
        "n_seen_only": c.seen_only.n_frames,
        "n_seen": c.seen_only.n_seen,
        "seen_limit": c.seen_only.limit,
    }


def order(rows: Sequence[Mapping[str, Any]]) -> list[int]:
    """Best first: rows without concerns, then by p-value, then by how far beyond the controls, then by name."""

    def key(index: int) -> tuple[Any, ...]:
        row = rows[index]
        known = bool(np.isfinite(row["p_value"]))
        beyond = row["beyond_controls"]
        return (
            bool(row["concerns"]),
            not known,
            row["p_value"] if known else 1.0,
            -beyond if np.isfinite(beyond) else np.inf,
            row["name"],
        )

    return sorted(range(len(rows)), key=key)
