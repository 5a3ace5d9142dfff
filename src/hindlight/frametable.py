"""What the headers of many frames say, as columns of the frame table: times, outlines and beams, worked out all at once.

Frames without usable coordinates become rows of the rejects.
"""

from __future__ import annotations

import hashlib
from collections.abc import Mapping, Sequence
from functools import lru_cache
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from hindlight import clock, footprints
from hindlight.facts import NAN, FrameFacts, Moment, visible
from hindlight.fence import one_line
from hindlight.files import FileEntry, local_path
from hindlight.headers import Hdu, Plane, SetAsideError
from hindlight.lightcurve import FloatArray
from hindlight.outlines import Image, Outline, outlines
from hindlight.schema import ASSUMPTIONS
from hindlight.settings import COMPANION_KINDS, Settings
from hindlight.systems import NoCelestialError

LONGEST_EXPOSURE_S = 100 * clock.DAY_S
BEAM_PIXELS = (0.5, 100.0)  # a stated width outside it is no width of a point source in this image
ARCSEC_PIXELS = (1.5, 100.0)  # what a width stated in arcsec must be, where degrees were expected
GOOD_FRACTION = 0.999  # less good time than this in the span is said to be intermittent

Columns = dict[str, NDArray[Any]]
Row = dict[str, Any]


class Found(NamedTuple):
    """One frame, as its header and the dialect describe it."""

    archive: str
    entry: FileEntry
    hdu: Hdu
    plane: Plane
    dialect: str
    facts: FrameFacts
    companions: Mapping[str, str]  # kind -> path


def columns_of(found: Sequence[Found], settings: Settings, rejects: list[Row]) -> Columns:
    """The columns of some frames; those without usable coordinates become rejects."""
    words: list[list[str]] = [list(f.facts.assumptions) for f in found]
    times = _times(found, settings, words)
    usable, kept = _outlines(found, times["middle_mjd_tdb"], words, rejects)
    columns = {name: values[kept] for name, values in (times | _plain(found)).items()}
    columns |= footprints.columns(usable)
    in_pixels = np.array([found[i].facts.beam_in_pixels for i in kept], dtype=bool)
    _beams(columns, in_pixels, settings, [words[i] for i in kept])
    columns["assumptions"] = _text([_sentences(tuple(dict.fromkeys(words[i]))) for i in kept])
    return columns


def reject(archive: str, entry: FileEntry, error: SetAsideError, hdu: int = -1) -> Row:
    """The row of the rejects for a file, or for an HDU of it, that is set aside."""
    place = {"path": entry.path, "hdu": hdu, "plane": error.plane, "archive": archive}
    return {**place, "reason": error.reason, "detail": visible(one_line(error.detail))}


def _text(values: Sequence[str]) -> NDArray[Any]:
    return np.array(values, dtype=object)


def _plain(found: Sequence[Found]) -> Columns:
    """What only has to be copied."""
    facts = [f.facts for f in found]
    numbers = (
        "frequency_hz", "beam_major", "beam_minor", "beam_angle", "depth", "saturation", "electrons_per_unit",
        "primary_beam_fwhm_deg", "clock_error_s",
    )  # fmt: skip
    columns: Columns = {name: np.array([getattr(f, name) for f in facts], dtype=float) for name in numbers}
    columns |= {
        name: _text([visible(getattr(f, name)) for f in facts])
        for name in ("instrument", "band", "stokes", "unit", "primary_beam", "response")
    }
    frequency = columns["frequency_hz"]
    columns["frequency_hz"] = np.where((frequency > 0) & np.isfinite(frequency), frequency, NAN)
    columns |= {name: np.array([getattr(f, name) for f in facts], dtype=bool) for name in ("barycentric", "negative")}
    columns["archive"] = _text([f.archive for f in found])
    columns["path"] = _text([f.entry.path for f in found])
    for kind in COMPANION_KINDS:
        columns[f"{kind}_file"] = _text([f.companions.get(kind, "") for f in found])
    columns["dialect"] = _text([f.dialect for f in found])
    columns["digest"] = _text([_digest(f.hdu, f.entry.size) for f in found])
    integers = {
        "hdu": [f.hdu.index for f in found],
        "plane": [f.plane.index for f in found],
        "size": [f.entry.size for f in found],
        "modified_ns": [f.entry.modified_ns for f in found],
        "width": [f.plane.width for f in found],
        "height": [f.plane.height for f in found],
    }
    return columns | {name: np.array(values, dtype=np.int64) for name, values in integers.items()}


def _digest(hdu: Hdu, size: int) -> str:
    return hashlib.blake2b(hdu.cards.raw + size.to_bytes(8, "little"), digest_size=12).hexdigest()


@lru_cache(maxsize=1024)
def _sentences(words: tuple[str, ...]) -> str:
    return "; ".join(f"{word}: {ASSUMPTIONS[word]}" if word in ASSUMPTIONS else word for word in words)


def _times(found: Sequence[Found], settings: Settings, words: Sequence[list[str]]) -> Columns:
    """Instants in TDB, durations and sites; adds a word for each thing taken for granted."""
    facts = [f.facts for f in found]
    has_clock = [_has_clock(f) for f in facts]
    sites = np.array([_site(f, settings) for f in facts], dtype=float).reshape(-1, 3)
    scales = [f.scale for f in facts]

    def instants(name: str) -> FloatArray:
        moments = [getattr(f, name) if known else None for f, known in zip(facts, has_clock, strict=True)]
        return clock.to_tdb(moments, scales, sites)

    start, middle, end = (instants(name) for name in ("start", "middle", "end"))
    exposure = np.array([f.exposure_s for f in facts], dtype=float)
    reversed_ends, stretched = end < start, end - start > LONGEST_EXPOSURE_S
    end = np.where(reversed_ends | stretched, NAN, end)
    span = np.where(end >= start, end - start, np.array([f.span_s for f in facts], dtype=float))
    stated = np.isfinite(exposure)
    exposure, span = np.where(stated, exposure, span), np.where(np.isfinite(span), span, exposure)
    fraction = np.array([f.good_time_fraction for f in facts], dtype=float)
    exposure, stated = np.where(np.isfinite(fraction), fraction * span, exposure), stated | np.isfinite(fraction)
    broken = exposure < GOOD_FRACTION * span
    half = np.nan_to_num(span) / 2
    middle = _first(middle, start + half, end - half)
    clocked = np.isfinite(middle)
    days = np.array([_day(f) for f in facts], dtype=float)
    homeless = clocked & np.isnan(sites[:, 0]) & ~np.array([f.barycentric for f in facts], dtype=bool)
    for rows, word in (
        (reversed_ends, "implausible_date"),
        (stretched, "implausible_exposure"),
        (~clocked, "no_clock"),
        (~stated & np.isfinite(exposure), "span_is_good_time"),
        (~np.isfinite(exposure), "no_exposure"),
        (homeless, "geocentre"),
        (broken, "intermittent"),
    ):
        for i in np.flatnonzero(rows).tolist():
            words[i].append(word)
    start, end = _first(start, middle - span / 2), _first(end, middle + span / 2)
    return {
        "start_mjd_tdb": clock.mjd(start),
        "middle_mjd_tdb": np.where(clocked, clock.mjd(middle), days + 0.5),
        "end_mjd_tdb": clock.mjd(end),
        "middle_tdb_s": middle,
        "middle_utc": _text([t or d for t, d in zip(clock.iso_utc(middle), clock.iso_date(days), strict=True)]),
        "exposure_s": exposure,
        "span_s": span,
        "site_x": sites[:, 0],
        "site_y": sites[:, 1],
        "site_z": sites[:, 2],
    }


def _first(*choices: FloatArray) -> FloatArray:
    """Element by element the first choice that is finite."""
    result = choices[0]
    for choice in choices[1:]:
        result = np.where(np.isfinite(result), result, choice)
    return result


def _has_clock(facts: FrameFacts) -> bool:
    return "no_clock" not in facts.assumptions and all(m.has_clock for m in _moments(facts))


def _moments(facts: FrameFacts) -> list[Moment]:
    return [moment for moment in (facts.start, facts.middle, facts.end) if moment is not None]


def _day(facts: FrameFacts) -> float:
    """The MJD of the day, NaN where there is no date."""
    moments = _moments(facts)
    return float(moments[0].mjd) if moments else NAN


def _site(facts: FrameFacts, settings: Settings) -> tuple[float, float, float]:
    if facts.barycentric:
        return (NAN, NAN, NAN)
    return facts.site or settings.sites.get(facts.instrument, (NAN, NAN, NAN))


def _outlines(
    found: Sequence[Found], mjd: FloatArray, words: Sequence[list[str]], rejects: list[Row]
) -> tuple[list[Outline], list[int]]:
    """The outline of each frame with usable coordinates, and which frames those are."""
    images = [
        Image(f.hdu.cards, local_path(f.archive, f.entry.path), f.plane.width, f.plane.height, date)
        for f, date in zip(found, mjd.tolist(), strict=True)
    ]
    kept: list[int] = []
    usable: list[Outline] = []
    refused = None
    for i, own in enumerate(outlines(images)):
        if isinstance(own, Outline):
            usable.append(own)
            kept.append(i)
            if own.system_assumed:
                words[i].append("frame_assumed")
        elif found[i].hdu is not refused:  # one row for all planes of a cube
            refused = found[i].hdu
            reason = "no_wcs" if isinstance(own, NoCelestialError) else "bad_wcs"
            rejects.append(reject(found[i].archive, found[i].entry, SetAsideError(reason, str(own)), refused.index))
    return usable, kept


def _beams(columns: Columns, in_pixels: NDArray[np.bool_], settings: Settings, words: Sequence[list[str]]) -> None:
    """Fill in widths from the settings where the header gives none, or one that cannot be a width in this image."""
    for name in ("beam_major", "beam_minor"):
        columns[name] = np.where(in_pixels, columns[name] * columns["pixel_scale"], columns[name])
    _read_as_arcsec(columns, settings, words)
    ratio = columns["beam_major"] / columns["pixel_scale"]
    good = _within(ratio, BEAM_PIXELS)
    good &= columns["beam_minor"] >= BEAM_PIXELS[0] * columns["pixel_scale"]
    good &= columns["beam_minor"] <= columns["beam_major"]
    for i in np.flatnonzero(~good).tolist():
        if any(word.startswith("set_by_user") and "beam_arcsec" in word for word in words[i]):
            continue  # taken at the user's word, as the widths in the settings are
        width = settings.photometry.fwhm_arcsec.get(columns["instrument"][i], NAN)
        words[i].append("no_beam" if np.isnan(width) else "beam_from_settings")
        columns["beam_major"][i] = columns["beam_minor"][i] = width
        columns["beam_angle"][i] = 0.0 if width == width else NAN


def _read_as_arcsec(columns: Columns, settings: Settings, words: Sequence[list[str]]) -> None:
    """A word for each beam that is too wide in degrees but fits in arcsec, and the change of unit if that is wanted."""
    ratio = columns["beam_major"] / columns["pixel_scale"]
    wrong = (ratio > BEAM_PIXELS[1]) & _within(ratio / 3600.0, ARCSEC_PIXELS)
    for i in np.flatnonzero(wrong).tolist():
        words[i].append("beam_unit")
    if settings.inventory.bmaj_in_arcsec:
        for name in ("beam_major", "beam_minor"):
            columns[name] = np.where(wrong, columns[name] / 3600.0, columns[name])


def _within(values: FloatArray, bounds: tuple[float, float]) -> NDArray[np.bool_]:
    return np.asarray((values >= bounds[0]) & (values <= bounds[1]))
