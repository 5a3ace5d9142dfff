"""What an archive holds, in a few rows: frames by channel and year, targets covered, what was set aside or assumed.

Also what is missing, and the settings that would supply it. Only counts and medians of the frame table; printing them is
the command line's business.
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from hindlight.blocks import FACTS, WHERE_MISSING, block_lines
from hindlight.facts import NAN
from hindlight.footprints import coverage_matrix
from hindlight.knowledge import block_for
from hindlight.lightcurve import FloatArray
from hindlight.schema import ASSUMPTIONS, REASONS
from hindlight.systems import unit_vectors

UNIX_EPOCH_MJD = 40587
SUPPLIED_BY = {
    "no_instrument": "instrument_name",
    "geocentre": "site",
    "scale_assumed": "time_scale",
    "start_assumed": "date_means",
    "no_exposure": "exposure_s",
    "span_is_good_time": "good_time_fraction",
    "no_unit": "unit",
    "no_beam": "beam_arcsec",
    "no_frequency": "frequency_hz",
    "stokes_assumed": "stokes",
    "primary_beam_unknown": "primary_beam",
    "photographic_assumed": "response",
    "primary_beam_apparent": "primary_beam_fwhm_deg",
    "century_assumed": "clock_offset_s",
}  # a word of an assumption -> the key of a block that ends it
LONGEST_PATH = 50
CENTURY = "clock_offset_s"
CENTURY_S = 3155760000.0  # 36525 days: from a date of 1900 to 1929 to the same one a century later, from March 1900 on
CENTURY_BLOCK = {"to": "1930-01-01"}  # an offset is no fact that a header lacks: only a date tells these frames
UNIT_EXAMPLES = {"optical": '"adu"', "radio": '"Jy/beam"', "": '"adu" or "Jy/beam"'}
SITE_EXAMPLE = '"north hill", or { lat = -30.1, lon = 20.4, height = 1200.0 }'


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
    """How often a fixed word occurs, and what it means, with the first file by path that it is said of."""

    word: str
    count: int
    meaning: str


@dataclass(frozen=True)
class Coverage:
    """How many frames of an instrument there are in each calendar year, and how many without a date."""

    instrument: str
    years: Mapping[int, int]
    undated: int


@dataclass(frozen=True)
class Missing:
    """What the headers of an instrument's frames do not say: for each key of a `[[frames]]` block how many lack it.

    `kind` is 'radio', 'optical', or '' where nothing tells.
    """

    instrument: str
    n_frames: int
    lacking: Mapping[str, int]
    kind: str = ""


@dataclass(frozen=True)
class Timeline:
    """Frames by instrument in columns of `step` years, the first of which begins with the year `first`."""

    first: int
    step: int
    rows: tuple[tuple[str, tuple[int, ...]], ...]


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
    coverage: tuple[Coverage, ...] = ()
    missing: tuple[Missing, ...] = ()
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
    assumed = zip(frames["path"], frames["assumptions"], strict=True)
    return Summary(
        n_frames=len(labels),
        channels=tuple(sorted(channels, key=lambda c: (c.instrument, c.channel))),
        targets=_targets(frames, rows_of, target_names, np.asarray(ra, float), np.asarray(dec, float)),
        rejects=_counts(((str(row["path"]), str(row["reason"])) for row in rejects), REASONS),
        assumptions=_counts(assumed, ASSUMPTIONS),
        coverage=_coverage(frames),
        missing=_missing(frames),
    )


def words_of(assumptions: str) -> list[str]:
    """The words in a frame's `assumptions`, without their sentences."""
    return [part.partition(":")[0].strip() for part in assumptions.split(";") if part.strip()]


def _by_instrument(frames: Mapping[str, Any]) -> dict[str, NDArray[np.int64]]:
    names = np.asarray(frames["instrument"], dtype=object)
    return {name: np.flatnonzero(names == name) for name in sorted(set(names.tolist()))}


def _coverage(frames: Mapping[str, Any]) -> tuple[Coverage, ...]:
    found = []
    for name, rows in _by_instrument(frames).items():
        mjd = _finite(frames["middle_mjd_tdb"][rows])
        days = (np.floor(mjd) - UNIX_EPOCH_MJD).astype("timedelta64[D]")
        years = (np.datetime64(0, "D") + days).astype("datetime64[Y]").astype(int) + 1970
        found.append(Coverage(name, dict(sorted(Counter(years.tolist()).items())), len(rows) - len(mjd)))
    return tuple(found)


def timeline(coverage: Sequence[Coverage], columns: int) -> Timeline:
    """The coverage in at most so many columns (ten or more), of 1, 2, 5, 10, 20... years as fits."""
    years = [year for row in coverage for year in row.years]
    if not years:
        return Timeline(0, 1, ())
    steps = (base * 10**power for power in range(5) for base in (1, 2, 5))
    step = next(s for s in steps if max(years) // s - min(years) // s < max(10, columns))
    first = min(years) // step
    rows = []
    for row in coverage:
        counts = [0] * (max(years) // step - first + 1)
        for year, count in row.years.items():
            counts[year // step - first] += count
        rows.append((row.instrument, tuple(counts)))
    return Timeline(first * step, step, tuple(rows))


def _missing(frames: Mapping[str, Any]) -> tuple[Missing, ...]:
    """What a block of settings could supply, instruments with the most frames first."""
    found = []
    for name, rows in _by_instrument(frames).items():
        lacking: Counter[str] = Counter()
        for text, count in Counter(frames["assumptions"][rows]).items():
            lacking.update(dict.fromkeys(_keys_for(text), count))
        if lacking:
            keys = {key: lacking[key] for key in FACTS if key in lacking}
            found.append(Missing(name, len(rows), keys, _kind(frames, rows)))
    return tuple(sorted(found, key=lambda row: (-row.n_frames, row.instrument)))


def _keys_for(assumptions: str) -> set[str]:
    """Keys of a block that would end assumptions of a frame; no offset of a clock that is set, or that is not there."""
    words = words_of(assumptions)
    keys = {SUPPLIED_BY[word] for word in words if word in SUPPLIED_BY}
    given = next((part for part in assumptions.split(";") if part.strip().startswith("set_by_user")), "")
    return keys - ({CENTURY} if "no_clock" in words or CENTURY in given else set())


def _kind(frames: Mapping[str, Any], rows: NDArray[np.int64]) -> str:
    """Whether an instrument's frames are of radio or of light, '' where no column tells."""
    if np.isfinite(frames["frequency_hz"][rows]).any():
        return "radio"
    counts = np.isfinite(np.asarray(frames["electrons_per_unit"][rows], float)).any()
    seen = counts or any(frames["band"][rows]) or any(frames["response"][rows] == "photographic")
    return "optical" if seen else ""


def settings_to_fill_in(missing: Sequence[Missing]) -> str:
    """The `[[frames]]` blocks that would supply what is missing, as TOML in which every value is a comment to complete.

    What only some frames of an instrument lack goes into a block of its own that leaves the others as they are.
    """
    lines: list[str] = []
    for row in missing:
        plain = [key for key in row.lacking if key != CENTURY]
        everywhere = [key for key in plain if row.lacking[key] == row.n_frames]
        for keys, more in (
            (everywhere, {}),
            ([k for k in plain if k not in everywhere], {WHERE_MISSING: True}),
            ([k for k in row.lacking if k == CENTURY], CENTURY_BLOCK),
        ):
            if keys:
                lines += ["", *block_lines({**block_for(row.instrument), **more})]
                lines += [_to_fill_in(key, row) for key in keys]
    return "\n".join(lines[1:]) + "\n" if lines else ""


def _to_fill_in(key: str, row: Missing) -> str:
    few = row.lacking[key] < row.n_frames
    count = f"{row.lacking[key]} of {row.n_frames} frames" if few else f"all {row.n_frames} frames"
    if key == CENTURY:
        return f"# {key} = {CENTURY_S}  # {count}: where years of two digits, 00 to 29, mean 20YY; 0.0 where they mean 19YY"
    example = {"unit": UNIT_EXAMPLES[row.kind], "site": SITE_EXAMPLE}.get(key, FACTS[key].example)
    return f'# {key} = ""  # {count}: {FACTS[key].doc}, as {example}'


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


def _counts(found: Iterable[tuple[str, str]], meanings: Mapping[str, str]) -> tuple[Count, ...]:
    """Words counted, given paths with their words, most frequent first; each with the first path that has it."""
    texts: dict[str, tuple[int, str]] = {}  # few, though frames are many
    for path, text in found:
        count, least = texts.get(text, (0, path))
        texts[text] = count + 1, min(least, path)
    counted: Counter[str] = Counter()
    first: dict[str, str] = {}
    for text, (count, path) in texts.items():
        for word in dict.fromkeys(words_of(text)):
            counted[word] += count
            first[word] = min(first.get(word, path), path)
    ordered = sorted(counted.items(), key=lambda item: (-item[1], item[0]))
    return tuple(
        Count(word, n, f"{meanings.get(word, '')} (as in {_end_of(first[word])})".strip()) for word, n in ordered
    )


def _end_of(path: str) -> str:
    """A path, without its beginning where it is too long for a table."""
    return path if len(path) <= LONGEST_PATH else "..." + path[3 - LONGEST_PATH :]


def _finite(values: FloatArray) -> FloatArray:
    return np.asarray(values[np.isfinite(values)])


def _median(values: FloatArray) -> float:
    finite = _finite(values)
    return float(np.median(finite)) if len(finite) else NAN
