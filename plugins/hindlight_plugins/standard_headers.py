"""Headers that keep to the FITS standard (4.0, 2018) and its paper on time (Rots et al. 2015, A&A 574, A36).

Times are trusted in the order DATE-BEG and DATE-END, DATE-AVG, DATE-OBS, each also as MJD; nothing is read from
history, and from comments only what one says about its own card. Where a header leaves something open the frame is
still given, with a word for what was taken for granted.
"""

from __future__ import annotations

import math
import re
from dataclasses import dataclass, replace
from functools import lru_cache
from typing import NamedTuple

from astropy.coordinates import EarthLocation

from hindlight import Cards, Dialect, FrameFacts, Moment, PlaneAxes, fold_unit, hookimpl

NAN = float("nan")
SCALES = {
    "UTC": "utc", "UT": "utc", "GMT": "utc", "UT1": "ut1", "TAI": "tai", "IAT": "tai", "GPS": "tai",
    "TT": "tt", "TDT": "tt", "ET": "tt", "TDB": "tdb", "TCG": "tcg", "TCB": "tcb",
}  # fmt: skip
GPS_BEHIND_TAI_S = 19.0
SECONDS = {"s": 1.0, "min": 60.0, "h": 3600.0, "d": 86400.0, "a": 31557600.0, "yr": 31557600.0}
STOKES = {
    1: "I", 2: "Q", 3: "U", 4: "V", -1: "RR", -2: "LL", -3: "RL", -4: "LR", -5: "XX", -6: "YY", -7: "XY", -8: "YX",
}  # fmt: skip
HERTZ = {"hz": 1.0, "khz": 1e3, "mhz": 1e6, "ghz": 1e9}
FREQUENCIES_HZ = (1e7, 1e12)
RADIO_UNITS = ("/beam", "Jy/pixel", "Jy/sr")
EARTH_RADII_M = (6.33e6, 6.40e6)
PLAUSIBLE_MJD = (15020, 88069)  # 1900 to 2100: an offset that leads elsewhere was not meant from MJD 0
DISAGREE_S = 1.0

_COMMENT = re.compile(r"(?:\s*'(?:[^']|'')*')?[^/]*/(.*)")
_MIDDLE = re.compile(r"\bmid(dle|point|time|exp\w*)?\b|\bcent(er|re) of (the )?(exp|obs|int)|\b(mean|average) ")
_UNIT = re.compile(r"\[\s*([^\]]*?)\s*\]")


class Times(NamedTuple):
    """The instants of a frame in one time scale, and what was taken for granted."""

    start: Moment | None = None
    middle: Moment | None = None
    end: Moment | None = None
    exposure_s: float = NAN
    span_s: float = NAN
    words: tuple[str, ...] = ()


@dataclass(frozen=True)
class StandardHeaders(Dialect):
    """Reads any header by the letter of the standard; other dialects are asked before it."""

    order = 100

    def recognises(self, cards: Cards) -> bool:
        """Whether the header can be read: always, since what the standard does not define is left blank."""
        return True

    def read(self, cards: Cards, axes: PlaneAxes) -> FrameFacts:
        """The facts of one plane."""
        unit = fold_unit(cards.text("BUNIT"))
        instrument = cards.text("INSTRUME") or cards.text("TELESCOP")
        stokes, frequency = _stokes(cards, axes), _frequency(cards, axes)
        times, scale = _times_and_scale(cards, axes)
        place, site = _place(cards)
        if place == "elsewhere":
            times = _without_clock(times)
        major, minor, angle = _beam(cards)
        words = [*times.words]
        if "BMAJ" in cards or frequency == frequency or any(text in unit for text in RADIO_UNITS):
            words += ["primary_beam_unknown"]
            words += [] if stokes else ["stokes_assumed"]
            words += [] if frequency == frequency else ["no_frequency"]
        words += [] if unit else ["no_unit"]
        words += [] if instrument else ["no_instrument"]
        return FrameFacts(
            instrument=instrument,
            band=cards.text("FILTER"),
            stokes=stokes or "I",
            frequency_hz=frequency,
            unit=unit,
            beam_major=major,
            beam_minor=minor,
            beam_angle=angle,
            start=times.start,
            middle=times.middle,
            end=times.end,
            scale=scale,
            exposure_s=times.exposure_s,
            span_s=times.span_s,
            barycentric=place == "barycentre",
            site=site,
            saturation=cards.number("SATURATE"),
            electrons_per_unit=_electrons_per_unit(cards, unit, times.exposure_s),
            depth=cards.first_number("RMS", "NOISE"),
            assumptions=tuple(words),
        )


# --- time


def _times_and_scale(cards: Cards, axes: PlaneAxes) -> tuple[Times, str]:
    """The instants and their astropy time scale; instants without a clock where the scale is none we know."""
    times = _plane_times(cards, axes) if axes.time_axis else _header_times(cards)
    stated = axes.time_axis if axes.time_axis not in ("", "TIME") else cards.text("TIMESYS")
    name = stated.upper().partition("(")[0].strip()  # the standard allows a realization, as in TT(TAI)
    if name not in SCALES and name:
        return _without_clock(times), "utc"
    if not name and "no_clock" not in times.words:
        times = times._replace(words=(*times.words, "scale_assumed"))
    if name == "GPS":
        start, middle, end = (m and m.plus(GPS_BEHIND_TAI_S) for m in times[:3])
        times = times._replace(start=start, middle=middle, end=end)
    return times, SCALES[name or "UTC"]


def _header_times(cards: Cards) -> Times:
    """What the header says of the whole HDU, by order of trust; the first instant with a time of day counts."""
    exposure, span = _durations(cards)
    start = _instant(cards, "DATE-BEG", "MJD-BEG") or _relative(cards, "TSTART")
    end = _instant(cards, "DATE-END", "MJD-END") or _relative(cards, "TSTOP")
    middle = _instant(cards, "DATE-AVG", "MJD-AVG")
    if _has_clock(start) or _has_clock(end):
        known_start, known_end = (m if _has_clock(m) else None for m in (start, end))
        return Times(known_start, None, known_end, exposure, span)
    if _has_clock(middle):
        return Times(None, middle, None, exposure, span)
    observed = _instant(cards, "DATE-OBS", "MJD-OBS")
    if _has_clock(observed):
        return _observed_times(cards, observed, exposure, span)
    return _without_clock(Times(start or middle or observed or end, None, None, exposure, span))


def _observed_times(cards: Cards, instant: Moment | None, exposure: float, span: float) -> Times:
    """DATE-OBS or MJD-OBS: the start of the exposure unless the card's comment says otherwise (FITS 4.0, 9.5)."""
    other = cards.moment("MJD-OBS")
    key = "MJD-OBS" if instant == other else "DATE-OBS"
    comment = _comment(cards, key).lower()
    if re.search(r"\b(start|begin)", comment):
        return Times(instant, None, None, exposure, span)
    if _MIDDLE.search(comment):
        return Times(None, instant, None, exposure, span)
    if re.search(r"\bend\b", comment):
        return Times(None, None, instant, exposure, span)
    words: tuple[str, ...] = ()
    if instant and other and abs(_difference_s(instant, other)) > DISAGREE_S:
        words = ("start_assumed",)  # the two can only mean different instants of the exposure
    return Times(instant, None, None, exposure, span, words)


def _plane_times(cards: Cards, axes: PlaneAxes) -> Times:
    """The instant of one plane on a time axis: its pixel is centred on its world coordinate.

    Without a usable coordinate, unit or reference the plane has no clock: planes are never spread over the file's span.
    """
    axis = axes.time_axis
    value = axes.values.get(axis, NAN)
    unit = SECONDS.get(axes.units.get(axis, "") or cards.text("TIMEUNIT") or "s", NAN)
    middle = _after_reference(cards, value * unit)
    exposure, _ = _durations(cards)
    step = abs(axes.steps.get(axis, NAN) * unit) or NAN
    words: tuple[str, ...] = ()
    if step == step and not exposure <= step:
        exposure, words = step, ("plane_exposure",)  # what the header states is longer: that of all planes together
    if middle is None:
        return _without_clock(Times(_header_times(cards).start, None, None, exposure, step, words))
    return Times(None, middle, None, exposure, step, words)


def _durations(cards: Cards) -> tuple[float, float]:
    """Good time, and time from start to end, in seconds."""
    unit = SECONDS.get(cards.text("TIMEUNIT") or "s", NAN)
    exposure = cards.number("XPOSURE") * unit
    if not exposure > 0:
        exposure = cards.first_number("EXPTIME", "EXPOSURE")
    span = cards.number("TELAPSE") * unit
    return exposure if exposure > 0 else NAN, span if span > 0 else NAN


def _instant(cards: Cards, *keys: str) -> Moment | None:
    """The first of several keywords that gives a date and time of day, else the first that gives a date."""
    dated = None
    for key in keys:
        moment = cards.moment(key) if key in cards else None
        if moment is not None and moment.has_clock:
            return moment
        dated = dated or moment
    return dated


def _relative(cards: Cards, key: str) -> Moment | None:
    """An instant that is given as an offset from the header's time reference."""
    if key not in cards:
        return None
    return _after_reference(cards, cards.number(key) * SECONDS.get(cards.text("TIMEUNIT") or "s", NAN))


def _after_reference(cards: Cards, seconds: float) -> Moment | None:
    """The header's time reference, MJD 0 where it has none, and so many seconds; None where that is no likely date."""
    offset = cards.number("TIMEOFFS") * SECONDS.get(cards.text("TIMEUNIT") or "s", NAN)
    seconds += 0.0 if offset != offset else offset
    reference = _reference(cards)
    if not math.isfinite(seconds) or not reference.has_clock:
        return None
    moment = reference.plus(seconds)
    return moment if PLAUSIBLE_MJD[0] <= moment.mjd < PLAUSIBLE_MJD[1] else None


def _reference(cards: Cards) -> Moment:
    """MJDREF before JDREF before DATEREF; the first two may be split into whole days and a fraction."""
    for stem, zero in (("MJDREF", 0.0), ("JDREF", 2400000.5)):
        whole, part = cards.number(f"{stem}I"), cards.number(f"{stem}F")
        if whole == whole:
            rest = Moment.from_mjd((0.0 if part != part else part) - zero % 1)
            return replace(rest, mjd=rest.mjd + int(whole - zero // 1))
        if cards.number(stem) == cards.number(stem):
            return Moment.from_mjd(cards.number(stem) - zero)
    date = cards.moment("DATEREF")
    return replace(date, has_clock=True) if date else Moment(0, 0.0)


def _without_clock(times: Times) -> Times:
    """The same with no more than a date."""
    start, middle, end = (m and Moment(m.mjd, 0.0, has_clock=False) for m in times[:3])
    words = dict.fromkeys((*times.words, "no_clock"))
    return Times(start, middle, end, times.exposure_s, times.span_s, tuple(words))


def _has_clock(moment: Moment | None) -> bool:
    return moment is not None and moment.has_clock


def _difference_s(first: Moment, second: Moment) -> float:
    return (first.mjd - second.mjd) * 86400.0 + first.seconds - second.seconds


# --- the rest


def _place(cards: Cards) -> tuple[str, tuple[float, float, float] | None]:
    """Where the times hold ('site', 'barycentre' or 'elsewhere'), and the site in ITRF metres if it is known."""
    name = cards.text("TREFPOS").upper() or "TOPOCENTER"
    if name.startswith("BARYCENT"):
        return "barycentre", None
    if name.startswith("GEOCENT"):
        return "site", (0.0, 0.0, 0.0)
    return ("site" if name.startswith("TOPOCENT") else "elsewhere"), _site(cards)


def _site(cards: Cards) -> tuple[float, float, float] | None:
    """OBSGEO-X, -Y, -Z or OBSGEO-B, -L, -H, if that is a place on the ground."""
    x, y, z = cards.number("OBSGEO-X"), cards.number("OBSGEO-Y"), cards.number("OBSGEO-Z")
    if EARTH_RADII_M[0] < math.sqrt(x * x + y * y + z * z) < EARTH_RADII_M[1]:
        return (x, y, z)
    latitude, longitude, height = (cards.number(f"OBSGEO-{axis}") for axis in "BLH")
    if abs(latitude) <= 90 and abs(longitude) <= 360 and -500 < height < 10_000:
        return _from_geodetic(latitude, longitude, height)
    return None


@lru_cache(maxsize=256)
def _from_geodetic(latitude: float, longitude: float, height: float) -> tuple[float, float, float]:
    place = EarthLocation.from_geodetic(longitude, latitude, height)
    x, y, z = (float(axis.to_value("m")) for axis in (place.x, place.y, place.z))
    return x, y, z


def _beam(cards: Cards) -> tuple[float, float, float]:
    """Full widths at half maximum in arcsec and position angle in degrees: BMAJ and its like, or SEEING."""
    major, minor, angle = cards.number("BMAJ") * 3600, cards.number("BMIN") * 3600, cards.number("BPA")
    if not major > 0:
        width = cards.first_number("SEEING", "PSFFWHM")  # arcsec by common practice, no source
        return (width, width, 0.0) if width > 0 else (NAN, NAN, NAN)
    if not minor > 0:
        minor = major
    if minor > major:
        major, minor, angle = minor, major, angle + 90
    if angle != angle:
        # An elongated beam without an angle: the circle of the same area.
        major = minor = math.sqrt(major * minor)
        angle = 0.0
    return major, minor, angle % 180


def _stokes(cards: Cards, axes: PlaneAxes) -> str:
    """The Stokes parameter by the axis' code or the keyword, '' where there is none."""
    if "STOKES" in axes.values:
        code = round(axes.values["STOKES"])
        return STOKES.get(code, str(code))
    text = cards.text("STOKES").upper()
    return text if text in STOKES.values() else ""


def _frequency(cards: Cards, axes: PlaneAxes) -> float:
    """Hz by the axis or the keyword, NaN where there is none or it cannot be one."""
    if "FREQ" in axes.values:
        return _sane_frequency(axes.values["FREQ"], axes.units["FREQ"])
    key = next((key for key in ("FREQ", "OBSFREQ") if cards.number(key) == cards.number(key)), "")
    unit = _UNIT.search(_comment(cards, key)) if key else None
    return _sane_frequency(cards.number(key), unit.group(1) if unit else "")


def _sane_frequency(value: float, unit: str) -> float:
    hertz = value * HERTZ.get(unit.lower() or "hz", NAN)
    return hertz if FREQUENCIES_HZ[0] <= hertz <= FREQUENCIES_HZ[1] else NAN


def _electrons_per_unit(cards: Cards, unit: str, exposure_s: float) -> float:
    """Electrons for one unit of the pixels: GAIN (or EGAIN) for counts, times the exposure for a rate."""
    counted, _, per = unit.partition("/")
    if counted not in ("electron", "adu", "count"):
        return NAN
    gain = 1.0 if counted == "electron" else cards.first_number("EGAIN", "GAIN")
    electrons = gain * {"": 1.0, "s": exposure_s}.get(per, NAN)
    return electrons if electrons > 0 else NAN


def _comment(cards: Cards, key: str) -> str:
    """The comment of a card, '' where there is none."""
    match = _COMMENT.match(cards.card(key)[10:])
    return match.group(1).strip() if match else ""


@hookimpl
def register_dialects() -> list[type[Dialect]]:
    """The one dialect of this module."""
    return [StandardHeaders]
