"""What a user knows of frames, put in the place of what their headers say or leave out.

The `[[frames]]` blocks of the settings are compiled once; a frame then costs a few comparisons, however many blocks
there are. What the keys of a block mean is written in `blocks`; no header is read here beyond the cards that blocks ask for.
"""

from __future__ import annotations

import fnmatch
import glob
import math
import re
from collections.abc import Callable, Mapping, Sequence
from dataclasses import replace
from functools import lru_cache
from typing import Any, NamedTuple

from hindlight.blocks import FrameBlock, Vector
from hindlight.facts import Cards, FrameFacts, Moment, parse_value
from hindlight.headers import fold_unit

REMEMBERED = 4096  # combinations of instrument and cards, and of blocks

# What a fact that is given makes untrue.
OBSOLETE = {
    "instrument_name": ("no_instrument",),
    "time_scale": ("scale_assumed",),
    "date_means": ("start_assumed",),
    "exposure_s": ("plane_exposure", "no_exposure", "span_is_good_time"),
    "good_time_fraction": ("plane_exposure", "span_is_good_time"),
    "site": ("geocentre",),
    "unit": ("no_unit",),
    "beam_arcsec": ("no_beam",),
    "frequency_hz": ("no_frequency",),
    "stokes": ("stokes_assumed",),
    "primary_beam": ("primary_beam_unknown",),
    "response": ("photographic_assumed",),
}
RADIO_UNITS = ("/beam", "Jy/pixel", "Jy/sr")

Given = dict[str, tuple[Any, FrameBlock]]


Span = tuple[tuple[int, float], tuple[int, float]]


class _Test(NamedTuple):
    """What a block asks of path and date: a piece of text that the path must hold, which is quick to see, then the whole

    pattern, and the span of dates; None where it does not ask.
    """

    piece: str
    matches: Callable[[str], object] | None
    span: Span | None

    @classmethod
    def of(cls, block: FrameBlock) -> _Test:
        """The test of one block."""
        if "path" not in block.match:
            return cls("", None, _span(block))
        pattern = block.match["path"]
        pieces = re.split(r"\[!?\]?[^\]]*\]|[*?[]", pattern)
        return cls(max(pieces, key=len), re.compile(fnmatch.translate(pattern)).match, _span(block))


class Knowledge:
    """Compiled blocks; false where there are none."""

    def __init__(self, blocks: Sequence[FrameBlock], sites: Mapping[str, Vector]) -> None:
        """`sites` are the places that blocks may name."""
        self._blocks, self._sites = tuple(blocks), dict(sites)
        self._tests = [_Test.of(block) for block in blocks]
        self._keywords = tuple(sorted({key for block in blocks for key in block.match.get("header", {})}))
        self._renaming = {index for index, block in enumerate(blocks) if "instrument_name" in block.facts}
        self._by_header = lru_cache(REMEMBERED)(self._matching_header)
        self._given = lru_cache(REMEMBERED)(self._merged)

    def __bool__(self) -> bool:
        return bool(self._blocks)

    def applied(self, cards: Cards, path: str, facts: FrameFacts) -> FrameFacts:
        """The facts of a frame with what the blocks say; `path` is relative to the archive.

        Its assumptions lose the words that are no longer true and gain set_by_user, with facts and blocks.
        """
        texts = tuple(cards.card(key) for key in self._keywords)
        matching = self._matching((facts.instrument,), texts, path, facts)
        if self._renaming.intersection(matching):
            name = self._given(matching)[0].get("instrument_name")
            if name is not None and name[0] != facts.instrument:
                matching = self._matching((facts.instrument, name[0]), texts, path, facts)
        return self._with(facts, matching) if matching else facts

    def _matching(
        self, names: tuple[str, ...], texts: tuple[str, ...], path: str, facts: FrameFacts
    ) -> tuple[int, ...]:
        """The blocks that speak of a frame: `names` its instrument's in the header and, if another, by a block."""
        date = _date(facts)
        found = []
        for index in self._by_header(names, texts):
            piece, matches, span = self._tests[index]
            if piece in path and (matches is None or matches(path)) and (span is None or _within(date, span)):
                found.append(index)
        return tuple(found)

    def _matching_header(self, names: tuple[str, ...], texts: tuple[str, ...]) -> tuple[int, ...]:
        """Blocks that instrument and cards leave open."""
        cards = dict(zip(self._keywords, texts, strict=True))
        return tuple(
            index
            for index, block in enumerate(self._blocks)
            if any(fnmatch.fnmatchcase(name.lower(), block.match.get("instrument", "*").lower()) for name in names)
            and all(_card_is(cards[key], wanted) for key, wanted in block.match.get("header", {}).items())
        )

    def _merged(self, matching: tuple[int, ...]) -> tuple[Given, Given]:
        """The facts of these blocks, of later blocks where several give one: those that hold before the header, and

        those that hold where it is silent.
        """
        always: Given = {}
        silent: Given = {}
        for index in matching:
            block = self._blocks[index]
            given = {key: (self._value(key, value), block) for key, value in block.facts.items()}
            (silent if block.where_missing else always).update(given)
        return always, silent

    def _value(self, key: str, value: Any) -> Any:
        if key == "site" and isinstance(value, str):
            return self._sites[value]
        return fold_unit(value) if key == "unit" else value

    def _with(self, facts: FrameFacts, matching: tuple[int, ...]) -> FrameFacts:
        always, silent = self._given(matching)
        lacking = {key: entry for key, entry in silent.items() if _is_missing(key, facts)}
        given = _latest(lacking, always)
        if not given:
            return facts
        changed = {key: value for key, (value, _) in given.items()}
        idle = {key for key in changed if _has_no_place(key, changed, facts)}
        used = {key: value for key, value in changed.items() if key not in idle}
        new = _changes(facts, used)
        gone = {word for key in used for word in OBSOLETE.get(key, ())}
        words = [word for word in facts.assumptions if word not in gone]
        words += [word for word in _opened(facts, new) if word not in words]
        for word, keys in (("set_by_user", [k for k in given if k in used]), ("set_without_effect", sorted(idle))):
            if keys:
                words.append(f"{word}: {_listed(keys, given)}")
        return replace(facts, **{**new, "assumptions": tuple(words)})


def block_for(instrument: str) -> dict[str, str]:
    """The key that matches frames of one instrument and no other."""
    return {"instrument": glob.escape(instrument)}


# --- matching


def _card_is(card: str, wanted: str | float | bool) -> bool:
    """Whether a card of 80 characters, '' for none, has the wanted value, or a text that fits the pattern."""
    if card[8:10] != "= ":
        return False
    value = parse_value(card[10:])
    if isinstance(wanted, str):
        return isinstance(value, str) and fnmatch.fnmatchcase(value.strip(), wanted)
    return isinstance(value, bool) == isinstance(wanted, bool) and not isinstance(value, str) and value == wanted


def _span(block: FrameBlock) -> Span | None:
    """From when to when, as day and seconds; None for a block that does not say."""
    if "from" not in block.match and "to" not in block.match:
        return None
    start, end = (Moment.from_iso(block.match.get(key, "")) for key in ("from", "to"))
    return (start.mjd, start.seconds) if start else (-(10**9), 0.0), (end.mjd, end.seconds) if end else (10**9, 0.0)


def _date(facts: FrameFacts) -> tuple[int, float] | None:
    moment = facts.start or facts.middle or facts.end
    return (moment.mjd, moment.seconds) if moment else None


def _within(date: tuple[int, float] | None, span: Span) -> bool:
    return date is not None and span[0] <= date < span[1]


# --- facts


def _latest(first: Given, second: Given) -> Given:
    """Both together; of two values for one fact that of the later block."""
    keys = dict.fromkeys([*first, *second])
    return {
        key: max((given[key] for given in (first, second) if key in given), key=lambda entry: entry[1].number)
        for key in keys
    }


def _is_missing(key: str, facts: FrameFacts) -> bool:
    """Whether the header does not say this."""
    if key == "site":
        return facts.site is None and not facts.barycentric
    if key == "primary_beam":
        return facts.primary_beam == "unknown"
    if key in ("response", "negative"):
        return getattr(facts, key) == getattr(FrameFacts, key) or any(
            w in facts.assumptions for w in OBSOLETE.get(key, ())
        )
    name = {
        "instrument_name": "instrument", "beam_arcsec": "beam_major", "good_time_fraction": "exposure_s",
    }.get(key, key)  # fmt: skip
    if key in ("time_scale", "date_means", "stokes"):
        return any(word in facts.assumptions for word in OBSOLETE[key])
    value = getattr(facts, name, math.nan)
    return value == "" or value != value


def _has_no_place(key: str, given: Mapping[str, Any], facts: FrameFacts) -> bool:
    """Whether a fact cannot be used: a site for barycentric times, a clock's offset without a clock, ..."""
    moments = _moments(facts)
    if key == "site":
        return facts.barycentric
    if key == "date_means":
        return len(moments) != 1
    if key in ("time_scale", "clock_offset_s", "clock_error_s"):
        return not any(moment.has_clock for moment in moments.values())
    if key == "primary_beam_at_hz" and not given.get("frequency_hz", facts.frequency_hz) > 0:
        return True
    return key.startswith("primary_beam_") and given.get("primary_beam", facts.primary_beam) != "uncorrected"


def _moments(facts: FrameFacts) -> dict[str, Moment]:
    named = {"start": facts.start, "middle": facts.middle, "end": facts.end}
    return {name: moment for name, moment in named.items() if moment is not None}


def _changes(facts: FrameFacts, given: Mapping[str, Any]) -> dict[str, Any]:
    """The fields of `FrameFacts` that change where these keys are given."""
    new: dict[str, Any] = {}
    moments = _moments(facts)
    if "date_means" in given:
        moments = dict.fromkeys([given["date_means"]], *moments.values())
    if "clock_offset_s" in given:
        offset = given["clock_offset_s"]
        moments = {name: m.plus(offset) if m.has_clock else m for name, m in moments.items()}
    if "date_means" in given or "clock_offset_s" in given:
        new |= {name: moments.get(name) for name in ("start", "middle", "end")}
    for key, value in given.items():
        if key == "beam_arcsec":
            major, minor, angle = value if isinstance(value, tuple) else (value, value, 0.0)
            new |= {"beam_major": major, "beam_minor": minor, "beam_angle": angle}
        elif key not in ("date_means", "clock_offset_s", "primary_beam_at_hz"):
            new[{"instrument_name": "instrument", "time_scale": "scale"}.get(key, key)] = value
    if "primary_beam_fwhm_deg" in given and "primary_beam_at_hz" in given:
        frequency = given.get("frequency_hz", facts.frequency_hz)
        new["primary_beam_fwhm_deg"] *= given["primary_beam_at_hz"] / frequency
    if "exposure_s" in given and "good_time_fraction" in given:
        # Both together say how long the frame took.
        new["good_time_fraction"] = math.nan
        if facts.span_s != facts.span_s:
            new["span_s"] = given["exposure_s"] / given["good_time_fraction"]
    return new


def _opened(facts: FrameFacts, new: Mapping[str, Any]) -> list[str]:
    """What a radio unit that is new leaves open."""
    if not any(text in new.get("unit", "") for text in RADIO_UNITS):
        return []
    frequency = new.get("frequency_hz", facts.frequency_hz)
    words = ["primary_beam_unknown"] if new.get("primary_beam", facts.primary_beam) == "unknown" else []
    return [*words, "no_frequency"] if frequency != frequency else words


def _listed(keys: Sequence[str], given: Given) -> str:
    """Facts by block: 'exposure_s, site (block 2), unit (block 3)'."""
    by_block: dict[int, list[str]] = {}
    for key in sorted(keys):
        by_block.setdefault(given[key][1].number, []).append(key)
    return ", ".join(f"{', '.join(names)} (block {number})" for number, names in sorted(by_block.items()))
