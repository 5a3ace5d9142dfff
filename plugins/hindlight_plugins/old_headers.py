"""Headers of the years before four-digit dates: `DD/MM/YY`, and the time of day in a card of its own.

The two-digit year is always 19YY; whether the time is that of the start, the middle or the end it does not say. The
time of day is in UT, UTC, TIME-OBS, UTSTART or one of their like, as text, in hours or in seconds. Celestial cards of
that time (EPOCH, RADECSYS, CROTA2) are read for every header alike.
"""

from __future__ import annotations

from dataclasses import dataclass

from hindlight import (
    Cards,
    Dialect,
    FrameFacts,
    PlaneAxes,
    has_old_times,
    hookimpl,
    read_facts,
    separate_clock,
    spoken_exposure,
)


@dataclass(frozen=True)
class OldHeaders(Dialect):
    """Reads headers whose date is in no standard form or whose time of day stands apart."""

    order = 40

    def recognises(self, cards: Cards) -> bool:
        """Whether DATE-OBS alone does not give the instant, but more of the header might."""
        return has_old_times(cards)

    def read(self, cards: Cards, axes: PlaneAxes) -> FrameFacts:
        """The facts of one plane."""
        return read_facts(cards, axes, separate_clock, spoken_exposure)


@hookimpl
def register_dialects() -> list[type[Dialect]]:
    """The one dialect of this module."""
    return [OldHeaders]
