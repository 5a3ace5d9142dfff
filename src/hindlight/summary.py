"""What an archive holds, in a few rows: frames by channel, targets covered, what was set aside or taken for granted.

Only counts and medians of the frame table; printing them is the command line's business.
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from hindlight.facts import NAN
from hindlight.footprints import coverage_matrix
from hindlight.lightcurve import FloatArray
from hindlight.schema import ASSUMPTIONS, REASONS
from hindlight.systems import unit_vectors


@dataclass(frozen=True)
class ChannelSummary:
    """The frames of one channel.

    `first` and `last` are ISO 8601 UTC of the earliest and latest middle, '' where no frame has a date; medians and
    ranges leave out frames that do not state the quantity and are NaN where none does. Beams in arcsec, `depth` (noise
    per pixel as the headers state it) in `unit`.
    """

    instrument: str
    channel: str
    n_frames: int
    first: str
    last: str
    exposure_s: float
    beam_min: float
    beam_max: float
    depth: float
    unit: str


@dataclass(frozen=True)
class TargetSummary:
    """How many frames cover a target, and in how many channels."""

    name: str
    n_frames: int
    n_channels: int


@dataclass(frozen=True)
class Count:
    """How often a fixed word occurs, and what it means."""

    word: str
    count: int
    meaning: str


@dataclass(frozen=True)
class Summary:
    """What an archive holds: channels in order of instrument and label, targets as given, words most frequent first.

    `possible_duplicates` are pairs of frames, `deep_images` frames that hold others.
    """

    n_frames: int
    channels: tuple[ChannelSummary, ...]
    targets: tuple[TargetSummary, ...]
    rejects: tuple[Count, ...]
    assumptions: tuple[Count, ...]
    possible_duplicates: int = 0
    deep_images: int = 0


def summarise(
    frames: Mapping[str, Any],
    rejects: Sequence[Mapping[str, Any]],
    target_names: Sequence[str] = (),
    ra: FloatArray | Sequence[float] = (),
    dec: FloatArray | Sequence[float] = (),
) -> Summary:
    """The summary of a frame table (with channels) and its rejects; targets at ICRS degrees of shape (n,)."""
    labels = np.asarray(frames["channel"], dtype=object)
    rows_of = {label: np.flatnonzero(labels == label) for label in sorted(set(labels.tolist()))}
    channels = [_channel(frames, label, rows) for label, rows in rows_of.items()]
    words = Counter(word for text in frames["assumptions"] for word in words_of(text))
    return Summary(
        n_frames=len(labels),
        channels=tuple(sorted(channels, key=lambda c: (c.instrument, c.channel))),
        targets=_targets(frames, rows_of, target_names, np.asarray(ra, float), np.asarray(dec, float)),
        rejects=_counts(Counter(str(row["reason"]) for row in rejects), REASONS),
        assumptions=_counts(words, ASSUMPTIONS),
    )


def words_of(assumptions: str) -> list[str]:
    """The words in a frame's `assumptions`, without their sentences."""
    return [part.partition(":")[0].strip() for part in assumptions.split(";") if part.strip()]


def _channel(frames: Mapping[str, Any], label: str, rows: NDArray[np.int64]) -> ChannelSummary:
    dated = rows[np.isfinite(frames["middle_mjd_tdb"][rows])]
    order = dated[np.argsort(frames["middle_mjd_tdb"][dated], kind="stable")]
    beams = np.concatenate([_finite(frames["beam_minor"][rows]), _finite(frames["beam_major"][rows])])
    return ChannelSummary(
        instrument=str(frames["instrument"][rows[0]]),
        channel=label,
        n_frames=len(rows),
        first=str(frames["middle_utc"][order[0]]) if len(order) else "",
        last=str(frames["middle_utc"][order[-1]]) if len(order) else "",
        exposure_s=_median(frames["exposure_s"][rows]),
        beam_min=float(beams.min(initial=np.inf)) if len(beams) else NAN,
        beam_max=float(beams.max(initial=0.0)) if len(beams) else NAN,
        depth=_median(frames["depth"][rows]),
        unit=str(frames["unit"][rows[0]]),
    )


def _targets(
    frames: Mapping[str, Any],
    rows_of: Mapping[str, NDArray[np.int64]],
    names: Sequence[str],
    ra: FloatArray,
    dec: FloatArray,
) -> tuple[TargetSummary, ...]:
    if not len(names):
        return ()
    covered = coverage_matrix(frames, unit_vectors(ra, dec))
    n_channels = np.sum([covered[rows].any(axis=0) for rows in rows_of.values()], axis=0, initial=0, dtype=int)
    counts = zip(names, covered.sum(axis=0).tolist(), np.broadcast_to(n_channels, len(names)).tolist(), strict=True)
    return tuple(TargetSummary(name, n, channels) for name, n, channels in counts)


def _counts(found: Counter[str], meanings: Mapping[str, str]) -> tuple[Count, ...]:
    ordered = sorted(found.items(), key=lambda item: (-item[1], item[0]))
    return tuple(Count(word, count, meanings.get(word, "")) for word, count in ordered)


def _finite(values: FloatArray) -> FloatArray:
    return np.asarray(values[np.isfinite(values)])


def _median(values: FloatArray) -> float:
    finite = _finite(values)
    return float(np.median(finite)) if len(finite) else NAN
