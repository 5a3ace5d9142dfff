"""Headers that keep to the FITS standard (4.0, 2018) and its paper on time (Rots et al. 2015, A&A 574, A36).

Times are trusted in the order DATE-BEG and DATE-END, DATE-AVG, DATE-OBS, each also as MJD; nothing is read from
history, and from comments only what one says about its own card. Where a header leaves something open the frame is
still given, with a word for what was taken for granted.
"""

from __future__ import annotations

from dataclasses import dataclass

from hindlight import Cards, Dialect, FrameFacts, PlaneAxes, hookimpl, read_facts


@dataclass(frozen=True)
class StandardHeaders(Dialect):
    """Reads any header by the letter of the standard; other dialects are asked before it."""

    order = 100

    def recognises(self, cards: Cards) -> bool:
        """Whether the header can be read: always, since what the standard does not define is left blank."""
        return True

    def read(self, cards: Cards, axes: PlaneAxes) -> FrameFacts:
        """The facts of one plane."""
        return read_facts(cards, axes)


@hookimpl
def register_dialects() -> list[type[Dialect]]:
    """The one dialect of this module."""
    return [StandardHeaders]
