"""Headers of radio images made by aperture synthesis, as imaging programs have written them since the 1980s.

The beam may stand only in the text of HISTORY or COMMENT cards, one line for each time the image was cleaned: the last
counts, in degrees unless it says arcsec. Frequency and Stokes parameter are axes of length one. The date is often that
of the first day of a run of days, without a time of day: such a frame has no clock.
"""

from __future__ import annotations

import re
from dataclasses import dataclass

from hindlight import (
    Beam,
    Cards,
    Dialect,
    FrameFacts,
    PlaneAxes,
    beam_of,
    comment_of,
    has_old_times,
    hookimpl,
    read_facts,
    separate_clock,
    spoken_exposure,
    stated_beam,
)

RADIO_AXES = ("FREQ", "STOKES")

_NUMBER = r"([+-]?(?:\d+\.?\d*|\.\d+)(?:[EeDd][+-]?\d+)?)"
_BEAM = re.compile(
    rf"\bBMAJ\s*=\s*{_NUMBER}\s*(arcsec|asec|\"|'')?[^=]*?\bBMIN\s*=\s*{_NUMBER}[^=]*?\bBPA\s*=\s*{_NUMBER}", re.I
)
_NIGHT = re.compile(r"\bnight|\bevening", re.I)
_NOT_CORRECTED = re.compile(
    r"\b(not|no|without|un)\b.{0,20}primary[- ]beam corr|\bnot corrected for (the )?primary", re.I
)
_CORRECTED = re.compile(r"primary[- ]beam corrected|\bcorrected for (the )?primary[- ]beam", re.I)


@dataclass(frozen=True)
class SynthesisHeaders(Dialect):
    """Reads radio images with a beam in their history, or with frequency or Stokes axes and a date of the old kind."""

    order = 20

    def recognises(self, cards: Cards) -> bool:
        """Whether the beam stands in text alone, or a radio image has a date that the standard cannot read."""
        if not _is_radio(cards) or _dated_by_night(cards):
            return False
        if "BMAJ" not in cards and b"BMAJ" in cards.raw.upper() and _beam_in_text(cards) is not None:
            return True
        return has_old_times(cards)

    def read(self, cards: Cards, axes: PlaneAxes) -> FrameFacts:
        """The facts of one plane."""
        return read_facts(cards, axes, separate_clock, spoken_exposure, _beam, _primary_beam(cards))


def _is_radio(cards: Cards) -> bool:
    """Whether an axis or the unit is one of radio images."""
    return (
        cards.text("CTYPE3").startswith(RADIO_AXES)
        or cards.text("CTYPE4").startswith(RADIO_AXES)
        or ("BEAM" in cards.text("BUNIT").upper())
    )


def _dated_by_night(cards: Cards) -> bool:
    """Whether a date beside its time of day is that of the night: `plate_headers` knows which day is meant."""
    return has_old_times(cards) and ("NIGHT" in cards or _NIGHT.search(comment_of(cards, "DATE-OBS")) is not None)


def _beam(cards: Cards) -> Beam:
    """The beam by its cards, else by the last line of text that gives one."""
    found = None if "BMAJ" in cards else _beam_in_text(cards)
    return found or stated_beam(cards)


def _beam_in_text(cards: Cards) -> Beam | None:
    lines = _BEAM.findall("\n".join(cards.all_of("HISTORY", "COMMENT")))
    if not lines:
        return None
    *numbers, unit = (lines[-1][i] for i in (0, 2, 3, 1))
    major, minor, angle = (float(number.upper().replace("D", "E")) for number in numbers)
    if not major > 0:
        return None
    scale = 3600.0 if unit else 1.0
    beam = beam_of(major / scale, minor / scale, angle)
    return beam._replace(words=("beam_from_history", *beam.words))


def _primary_beam(cards: Cards) -> str:
    """What the text says of the primary beam; nothing is concluded from the names of programs."""
    if b"rimary" not in cards.raw and b"RIMARY" not in cards.raw:
        return "unknown"
    text = " ".join(cards.all_of("HISTORY", "COMMENT"))
    if _NOT_CORRECTED.search(text):
        return "uncorrected"
    return "corrected" if _CORRECTED.search(text) else "unknown"


@hookimpl
def register_dialects() -> list[type[Dialect]]:
    """The one dialect of this module."""
    return [SynthesisHeaders]
