"""Tables of good-time intervals: the exposure and span they give to the images of their file.

Such a table has columns START and STOP, on the reference of time in its own header. Nothing here reads files.
"""

from __future__ import annotations

import re
from dataclasses import replace

import numpy as np

from hindlight.facts import NAN, Cards, FrameFacts
from hindlight.instants import GPS_BEHIND_TAI_S, REFERENCES, SCALES, SECONDS, after_reference
from hindlight.lightcurve import FloatArray

WIDTHS = {
    "L": 1, "X": 1, "B": 1, "I": 2, "J": 4, "K": 8, "A": 1, "E": 4, "D": 8, "C": 8, "M": 16, "P": 8, "Q": 16,
}  # fmt: skip
NUMBERS = {"I": ">i2", "J": ">i4", "K": ">i8", "E": ">f4", "D": ">f8"}
OF_EXPOSURE = ("coadds", "exposure_doubtful")

_FORM = re.compile(r"(\d*)([LXBIJKAEDCMPQ])")


def with_good_time(facts: FrameFacts, cards: Cards, rows: bytes) -> FrameFacts:
    """The facts with exposure, span and start by a table, given its header and rows.

    The exposure is the sum of the intervals, the span goes from the first start to the last stop. Where the table has
    no reference of time the instants stay those of the image. A table that cannot be read changes nothing.
    """
    start, stop = _column(cards, rows, "START"), _column(cards, rows, "STOP")
    good = stop > start
    if not good.any():
        return facts
    begin, end = float(start[good].min()), float(stop[good].max())
    words = tuple(word for word in facts.assumptions if word not in OF_EXPOSURE)
    timed = replace(
        facts, exposure_s=float((stop - start)[good].sum()), span_s=end - begin, assumptions=words, end=None
    )
    name = cards.text("TIMESYS").upper().partition("(")[0].strip() or "UTC"
    moment = after_reference(cards, begin) if any(key in cards for key in REFERENCES) else None
    if moment is None or name not in SCALES:
        return timed if facts.start or facts.middle else replace(timed, end=facts.end)
    words = tuple(word for word in words if word not in ("no_clock", "start_assumed", "scale_assumed"))
    return replace(
        timed,
        start=moment.plus(GPS_BEHIND_TAI_S if name == "GPS" else 0.0),
        middle=None,
        scale=SCALES[name],
        assumptions=words if "TIMESYS" in cards else (*words, "scale_assumed"),
    )


def _column(cards: Cards, rows: bytes, name: str) -> FloatArray:
    """A column of single numbers in seconds, NaN in rows or tables where there is none."""
    width, count, offset = cards.integer("NAXIS1"), cards.integer("NAXIS2"), 0
    blank = np.full(max(count, 1), NAN)
    for i in range(1, cards.integer("TFIELDS") + 1):
        match = _FORM.match(cards.text(f"TFORM{i}").upper())
        if match is None:
            return blank
        repeat, kind = int(match.group(1) or 1), match.group(2)
        if cards.text(f"TTYPE{i}").upper() == name:
            end = offset + WIDTHS[kind]
            if kind not in NUMBERS or repeat != 1 or count < 1 or width < end or len(rows) < width * count:
                return blank
            layout = np.dtype({"names": ["x"], "formats": [NUMBERS[kind]], "offsets": [offset], "itemsize": width})
            values = np.frombuffer(rows, layout, count)["x"].astype(np.float64)
            scale, zero = cards.number(f"TSCAL{i}"), cards.number(f"TZERO{i}")
            values = values * (1.0 if scale != scale else scale) + (0.0 if zero != zero else zero)
            unit = cards.text(f"TUNIT{i}") or cards.text("TIMEUNIT") or "s"
            return np.asarray(values * SECONDS.get(unit, NAN))
        offset += (repeat + 7) // 8 if kind == "X" else repeat * WIDTHS[kind]
    return blank
