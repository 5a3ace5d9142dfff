"""Which frames share a channel: the key of comparable fluxes.

Frames of one instrument, band, Stokes parameter, unit, response and state of the primary beam are split by frequency
and then by beam into classes of limited span. Classes that a run has already are kept and joined, so that an extended
run keeps its labels. Frames without a frequency or a beam never share a class with frames that have one.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from hindlight.lightcurve import Channel, FloatArray, IntArray
from hindlight.settings import Channels

GROUP = ("instrument", "band", "stokes", "unit")
CORRECTED = "corrected"
LINEAR = "linear"  # is not said in labels


@dataclass(frozen=True)
class _Span:
    """The range of a quantity within a class; NaN, NaN for frames that do not have it."""

    low: float
    high: float

    def holds(self, value: float, factor: float) -> bool:
        """Whether the range, stretched to the value, still spans no more than `factor`."""
        if math.isnan(self.low) or math.isnan(value):
            return math.isnan(self.low) and math.isnan(value)
        return max(self.high, value) <= min(self.low, value) * factor

    def with_value(self, value: float) -> _Span:
        """The range stretched to the value."""
        return _Span(min(self.low, value), max(self.high, value))


def assign(frames: Mapping[str, Any], known: Mapping[str, Any], settings: Channels) -> NDArray[np.object_]:
    """The channel label of each new frame, shape (n,).

    `frames` are columns of the frame table, `known` the same of the frames a run has already, with `channel`. A new
    frame joins the known channel that holds it within the tolerances; the rest are grouped among themselves.
    """
    labels = np.full(len(frames["instrument"]), "", dtype=object)
    taken = set(known["channel"].tolist()) if len(known.get("channel", ())) else set()
    old = _rows_by_group(known) if taken else {}
    for group, rows in sorted(_rows_by_group(frames).items()):
        frequency, beam = frames["frequency_hz"][rows], _beam(frames)[rows]
        joined = _join(frequency, beam, _classes(known, old[group]) if group in old else {}, settings)
        labels[rows] = joined
        left = np.flatnonzero(joined == "")
        for members in _grouped(frequency[left], beam[left], settings):
            mine = left[members]
            label = _label(group, float(np.median(frequency[mine])), float(np.median(beam[mine])), taken)
            taken.add(label)
            labels[rows[mine]] = label
    return labels


def channels_of(frames: Mapping[str, Any]) -> dict[str, Channel]:
    """The channels of a frame table by label, in order of labels; frequency and beam are medians of their frames."""
    if len(frames["channel"]) == 0:
        return {}
    order = np.argsort(frames["channel"].astype(str), kind="stable")
    labels, starts = np.unique(frames["channel"].astype(str)[order], return_index=True)
    beam = _beam(frames)
    channels = {}
    for label, rows in zip(labels.tolist(), np.split(order, starts[1:]), strict=True):
        instrument, band, stokes, unit = (str(frames[name][rows[0]]) for name in GROUP)
        frequency, width = float(np.median(frames["frequency_hz"][rows])), float(np.median(beam[rows]))
        channels[label] = Channel(label, instrument, band, stokes, frequency, width, unit)
    return channels


def _beam(frames: Mapping[str, Any]) -> FloatArray:
    return np.asarray(np.sqrt(frames["beam_major"] * frames["beam_minor"]))


def _rows_by_group(frames: Mapping[str, Any]) -> dict[tuple[str, ...], IntArray]:
    rows: dict[tuple[str, ...], list[int]] = {}
    responses = ["" if name == LINEAR else name for name in frames["response"].tolist()]
    for row, key in enumerate(zip(*(frames[name] for name in GROUP), responses, _on_sky(frames), strict=True)):
        rows.setdefault(key, []).append(row)
    return {key: np.array(found) for key, found in rows.items()}


def _on_sky(frames: Mapping[str, Any]) -> list[str]:
    """CORRECTED for each frame whose fluxes are free of the primary beam, by its header or by a gain that is applied."""
    states = frames["primary_beam"]
    gains = np.isfinite(frames["primary_beam_fwhm_deg"]) | (frames["primary_beam_file"] != "")
    free = (states == CORRECTED) | ((states == "uncorrected") & gains)
    return [CORRECTED if yes else "" for yes in free.tolist()]


def _classes(known: Mapping[str, Any], rows: IntArray) -> dict[str, tuple[_Span, _Span]]:
    """The ranges of frequency and beam of the known channels of one group."""
    beam = _beam(known)
    found = {}
    for label in sorted(set(known["channel"][rows].tolist())):
        mine = rows[known["channel"][rows] == label]
        found[label] = (_span(known["frequency_hz"][mine]), _span(beam[mine]))
    return found


def _span(values: FloatArray) -> _Span:
    return _Span(float(np.min(values)), float(np.max(values)))


def _join(
    frequency: FloatArray, beam: FloatArray, classes: dict[str, tuple[_Span, _Span]], settings: Channels
) -> NDArray[np.object_]:
    """The known channel that each frame belongs to, '' where none holds it; of several the nearest in beam."""
    labels = np.full(len(frequency), "", dtype=object)
    if not classes:
        return labels
    for row in np.lexsort((beam, frequency)):  # an order of their own: the answer must not depend on file names
        f, b = float(frequency[row]), float(beam[row])
        fits = [
            (_distance(spans[0], f) + _distance(spans[1], b), label)
            for label, spans in classes.items()
            if spans[0].holds(f, 1 + settings.frequency_tolerance) and spans[1].holds(b, settings.beam_tolerance)
        ]
        if fits:
            label = min(fits)[1]
            labels[row] = label
            classes[label] = (classes[label][0].with_value(f), classes[label][1].with_value(b))
    return labels


def _distance(span: _Span, value: float) -> float:
    """How far, in logarithm, a value lies from the middle of a range; 0 where there is none."""
    return 0.0 if math.isnan(value) else abs(math.log(value) - 0.5 * math.log(span.low * span.high))


def _grouped(frequency: FloatArray, beam: FloatArray, settings: Channels) -> list[IntArray]:
    """Members of each class: by frequency, and within by beam."""
    return [
        rows[inner]
        for rows in _runs(frequency, 1 + settings.frequency_tolerance)
        for inner in _runs(beam[rows], settings.beam_tolerance)
    ]


def _runs(values: FloatArray, factor: float) -> list[IntArray]:
    """Rows in classes of sorted values, each spanning at most `factor` from its first; those of NaN come last."""
    order = np.argsort(values, kind="stable")
    ordered = values[order]
    edges, start = [], 0
    n_finite = int(np.count_nonzero(np.isfinite(ordered)))
    while start < n_finite:
        stop = int(np.searchsorted(ordered[:n_finite], ordered[start] * factor, side="right"))
        edges.append((start, max(stop, start + 1)))
        start = edges[-1][1]
    if n_finite < len(ordered):
        edges.append((n_finite, len(ordered)))
    return [order[a:b] for a, b in edges]


def _label(group: Sequence[str], frequency: float, beam: float, taken: set[str]) -> str:
    """A label such as `camera|r|I|1.2as|adu`, with a number where it would be that of another channel."""
    instrument, band, stokes, unit, *more = (_plain(text) for text in group)
    megahertz = "" if math.isnan(frequency) else f"{_rounded(frequency / 1e6, 3)}MHz"
    width = "" if math.isnan(beam) else f"{_rounded(beam, 2)}as"
    label = "|".join(part for part in (instrument, band, megahertz, stokes, width, unit, *more) if part)
    number = 2
    unique = label
    while unique in taken:
        unique, number = f"{label}|{number}", number + 1
    return unique


def _plain(text: str) -> str:
    """Text that cannot be taken for two parts of a label."""
    return " ".join("".join(c if c.isprintable() and c != "|" else " " for c in text).split())


def _rounded(value: float, digits: int) -> str:
    """A number to some significant digits, never in powers of ten."""
    return np.format_float_positional(value, precision=digits, fractional=False, trim="-")
