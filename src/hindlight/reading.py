"""From header cards to the facts of a frame: what every dialect shares, by the letter of the standard and beyond.

`read_facts` holds what the FITS standard (4.0, 2018) says; a dialect hands it readers of its own for the instant, the
exposure or the beam where headers of its kind have other habits. What is taken for granted is said by a word; nothing
here knows of files or pixels.
"""

from __future__ import annotations

import math
import re
from collections.abc import Callable
from typing import NamedTuple

from hindlight.facts import NAN, Cards, FrameFacts, PlaneAxes
from hindlight.headers import fold_unit
from hindlight.instants import (
    BRACKETED,
    Exposure,
    Observed,
    comment_of,
    read_times,
    stated_exposure,
    stated_instant,
    without_clock,
)
from hindlight.sites import read_place

STOKES = {
    1: "I", 2: "Q", 3: "U", 4: "V", -1: "RR", -2: "LL", -3: "RL", -4: "LR", -5: "XX", -6: "YY", -7: "XY", -8: "YX",
}  # fmt: skip
HERTZ = {"hz": 1.0, "khz": 1e3, "mhz": 1e6, "ghz": 1e9}
FREQUENCIES_HZ = (1e7, 1e12)
RADIO_UNITS = ("/beam", "Jy/pixel", "Jy/sr")
WIDTHS = ("SEEING", "PSFFWHM")
ROUND_BEAM = 1.05
_PIXELS = re.compile(r"\bpix", re.I)


class Beam(NamedTuple):
    """Full widths at half maximum in arcsec (or in pixels), position angle in degrees, what was taken for granted."""

    major: float = NAN
    minor: float = NAN
    angle: float = NAN
    words: tuple[str, ...] = ()
    in_pixels: bool = False


def read_facts(
    cards: Cards,
    axes: PlaneAxes,
    observed: Callable[[Cards], Observed] | None = None,
    exposure: Callable[[Cards], Exposure] | None = None,
    beam: Callable[[Cards], Beam] | None = None,
    primary_beam: str = "unknown",
) -> FrameFacts:
    """The facts of one plane, read by the standard where no other reader is given."""
    unit = fold_unit(cards.text("BUNIT"))
    instrument = cards.text("INSTRUME") or cards.text("TELESCOP")
    stokes, frequency = _stokes(cards, axes), _frequency(cards, axes)
    times, scale = read_times(cards, axes, observed or stated_instant, exposure or stated_exposure)
    place, site, site_words = read_place(cards)
    if place == "elsewhere":
        times = without_clock(times)
    shape = (beam or stated_beam)(cards)
    words = [*times.words, *site_words, *shape.words]
    if "BMAJ" in cards or frequency == frequency or any(text in unit for text in RADIO_UNITS):
        words += ["primary_beam_unknown"] if primary_beam == "unknown" else []
        words += [] if stokes else ["stokes_assumed"]
        words += [] if frequency == frequency else ["no_frequency"]
    words += [] if unit else ["no_unit"]
    words += [] if instrument else ["no_instrument"]
    if "CROTA1" in cards and cards.number("CROTA1") not in (0.0, cards.number("CROTA2")):
        words += ["rotation_doubtful"]
    return FrameFacts(
        instrument=instrument,
        band=cards.text("FILTER"),
        stokes=stokes or "I",
        frequency_hz=frequency,
        unit=unit,
        beam_major=shape.major,
        beam_minor=shape.minor,
        beam_angle=shape.angle,
        beam_in_pixels=shape.in_pixels,
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
        primary_beam=primary_beam,
        assumptions=tuple(words),
    )


def stated_beam(cards: Cards) -> Beam:
    """BMAJ and its like, in degrees, or SEEING in arcsec unless its comment says pixels."""
    major, minor, angle = cards.number("BMAJ"), cards.number("BMIN"), cards.number("BPA")
    if not major > 0:
        key = next((key for key in WIDTHS if cards.number(key) > 0), "")
        width = cards.number(key)  # arcsec by common practice, no source
        return Beam(width, width, 0.0, in_pixels=_PIXELS.search(comment_of(cards, key)) is not None) if key else Beam()
    return beam_of(major, minor, angle)


def beam_of(major: float, minor: float, angle: float) -> Beam:
    """A beam given in degrees, the longer axis first; one that is long but has no angle becomes the circle of its area."""
    words: tuple[str, ...] = ()
    major, minor = major * 3600, minor * 3600
    if not minor > 0:
        minor = major
    if minor > major:
        major, minor, angle, words = minor, major, angle + 90, ("beam_swapped",)
    if angle != angle:
        if major > ROUND_BEAM * minor:
            words = (*words, "beam_angle_assumed")
        major = minor = math.sqrt(major * minor)
        angle = 0.0
    return Beam(major, minor, angle % 180, words)


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
    for key in ("FREQ", "OBSFREQ"):
        value = cards.number(key)
        if value == value:
            unit = BRACKETED.search(comment_of(cards, key))
            return _sane_frequency(value, unit.group(1) if unit else "")
    return NAN


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
