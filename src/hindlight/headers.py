"""FITS structure and header cards: the HDUs of a file, the planes of an image, one spelling for each unit.

`read_hdus` finds headers and data by their declared sizes without reading any pixel; `planes` says which
two-dimensional images an HDU holds; `facts_of` asks the dialects what a header means. Where the bytes come from is
the business of `files`, what keywords mean that of the dialects.
"""

from __future__ import annotations

import math
import re
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, replace
from functools import cached_property, lru_cache
from typing import NamedTuple, Protocol

from hindlight.facts import CARD, Cards, FrameFacts, PlaneAxes
from hindlight.plugin import Dialect

BLOCK = 2880
FIRST_READ = 4 * BLOCK  # most headers end within it
HEADER_LIMIT = 10_000 * BLOCK
BITPIXES = (8, 16, 32, 64, -32, -64)
MAX_AXES = 99
NOT_INHERITED = ("SIMPLE", "EXTEND", "BSCALE", "BZERO", "BLANK", "CHECKSUM", "DATASUM", "HISTORY", "COMMENT", "")
LARGEST = 1 << 62  # bytes or pixels: no file is larger
IMAGE_EXTENSIONS = ("IMAGE", "IUEIMAGE")
GOOD_TIME = ("GTI", "STDGTI")
GOOD_TIME_LIMIT = 10_000 * BLOCK
TIME_TYPES = ("TIME", "UTC", "TAI", "TT", "TDB", "TCG", "TCB", "UT1", "UT", "GMT", "TDT", "ET", "IAT", "GPS")

_TABLE_CARD = re.compile(rb"(BITPIX|NAXIS\d*|PCOUNT|GCOUNT) *=")
_IMAGE_CARD = re.compile(rb"Z(BITPIX|NAXIS\d*|BLANK) *=")
_CELESTIAL = re.compile(r"(RA--|DEC-|[A-Z]LON|[A-Z]LAT|[A-Z]{2}LN|[A-Z]{2}LT)-...")
_LATITUDE = re.compile(r"DEC-|.LAT|..LT")


class SetAsideError(Exception):
    """A file, HDU or plane that cannot be used: `reason` is a word of `schema.REASONS`, `detail` a sentence."""

    def __init__(self, reason: str, detail: str, hdu: int = -1, plane: int = -1) -> None:
        super().__init__(detail)
        self.reason, self.detail, self.hdu, self.plane = reason, detail, hdu, plane


class Source(Protocol):
    """The bytes of an unpacked FITS file; offsets asked for never go back."""

    def read_at(self, offset: int, length: int) -> bytes:
        """Up to `length` bytes, fewer only where the file ends."""

    def reaches(self, end: int) -> bool:
        """Whether the file holds at least `end` bytes."""


@dataclass(frozen=True, eq=False)
class Hdu:
    """One HDU: its header, and where its data lie.

    index
        0 is the primary HDU.
    cards
        For a tile-compressed image those of the image: ZNAXIS1 and its like have taken the place of the table's.
    data_offset, data_bytes
        In the unpacked file, without padding.
    bitpix, axes
        Of the image; `axes` are the lengths NAXIS1, NAXIS2, ... For a tile-compressed image they are those of the
        image and not of the table that holds it, and `compressed` is true.
    table
        The rows of a table of good-time intervals, or of one that gives the times of planes; no other data are kept.
    bscale, bzero, blank
        value = bzero + bscale * stored; `blank` is the stored integer that means no value, None where there is none.
        Scale and zero point are NaN where the header gives something else than a number.
    """

    index: int
    cards: Cards
    data_offset: int
    data_bytes: int
    bitpix: int
    axes: tuple[int, ...]
    compressed: bool = False
    table: bytes = b""
    bscale: float = 1.0
    bzero: float = 0.0
    blank: int | None = None

    @cached_property
    def is_image(self) -> bool:
        """Whether it holds an image of two dimensions or more with any pixel."""
        extension = self.cards.text("XTENSION")
        return len(self.axes) >= 2 and 0 not in self.axes and (self.compressed or extension in ("", *IMAGE_EXTENSIONS))

    @cached_property
    def time_table(self) -> TimeTable | None:
        """The table that gives the times of an image's planes (an axis of type TIME-TAB or its like), None for none."""
        for axis in range(1, len(self.axes) + 1) if b"-TAB" in self.cards.raw else ():
            kind, _, code = self.cards.text(f"CTYPE{axis}").upper().partition("-")
            if code.strip("-") == "TAB" and kind in TIME_TYPES:
                name, column, index = (self.cards.text(f"PS{axis}_{k}").upper() for k in range(3))
                return TimeTable(axis, name, column, index)
        return None

    @cached_property
    def is_good_time(self) -> bool:
        """Whether it is a table of good-time intervals, of a reasonable size."""
        return self.cards.text("EXTNAME").upper() in GOOD_TIME and self.is_small_table

    @property
    def is_small_table(self) -> bool:
        """Whether it is a binary table small enough to be read with the headers."""
        return self.cards.text("XTENSION") == "BINTABLE" and self.data_bytes <= GOOD_TIME_LIMIT


class TimeTable(NamedTuple):
    """What an axis of type -TAB names (E. W. Greisen et al. 2006, A&A 446, 747, 6.1): its number, the table's EXTNAME, the

    columns of coordinates and of indices ('' where the indices are 1, 2, ...).
    """

    axis: int
    name: str
    column: str
    indices: str


@dataclass(frozen=True)
class Plane:
    """One two-dimensional image of an HDU.

    `index` counts planes in storage order; `lead` are the indices that pick it from the HDU's data as NumPy has them,
    `data[lead]` being (height, width) after axes of length one between or after the celestial ones are dropped.
    """

    index: int
    axes: PlaneAxes
    lead: tuple[int, ...]
    width: int
    height: int


# --- HDUs


def read_hdus(source: Source) -> Iterator[Hdu]:
    """The HDUs of a file in order, each once its data are known to be there; no pixel is looked at.

    An extension with INHERIT = T has the cards of a primary HDU without data after its own (FITS 4.0, 4.4.2.6).
    Raises `SetAsideError` where the file is broken; HDUs before that place have been given already.
    """
    offset = index = 0
    primary: Cards | None = None
    awaited: set[str] = set()
    while True:
        raw = _read_header(source, offset, index)
        if not raw:
            return
        hdu = _layout(raw, offset, index)
        if index == 0:
            primary = hdu.cards if not hdu.axes else None
        elif primary is not None and hdu.cards.get("INHERIT") is True:
            hdu = replace(hdu, cards=inherited(hdu.cards, primary))
        if hdu.time_table:
            awaited.add(hdu.time_table.name)
        is_awaited = bool(awaited) and hdu.cards.text("EXTNAME").upper() in awaited
        if hdu.is_good_time or (is_awaited and hdu.is_small_table):
            hdu = replace(hdu, table=source.read_at(hdu.data_offset, hdu.data_bytes))
        end = hdu.data_offset + hdu.data_bytes
        if not source.reaches(end):
            raise SetAsideError("truncated", f"HDU {index} should end at byte {end}, the file ends before", index)
        yield hdu
        offset, index = hdu.data_offset + _padded(hdu.data_bytes), index + 1


def inherited(own: Cards, primary: Cards) -> Cards:
    """The cards of an extension, and those of the primary header that it has not."""
    more = (primary.card(key) for key in primary if key not in own and key not in NOT_INHERITED)
    return Cards(own.raw + "".join(more).encode("latin-1"))


def _padded(n_bytes: int) -> int:
    return -(-n_bytes // BLOCK) * BLOCK


def _read_header(source: Source, offset: int, index: int) -> bytes:
    """The cards of the header at `offset`, END not included; b'' where no HDU follows."""
    raw = source.read_at(offset, FIRST_READ)
    if index == 0:
        if not raw:
            raise SetAsideError("empty_file", "the file has no bytes")
        if raw[:9] != b"SIMPLE  =":
            raise SetAsideError("not_fits", f"the file begins with {raw[:9]!r}, not with SIMPLE")
    elif raw[:9] != b"XTENSION=":
        if raw.strip(b"\0 "):
            raise SetAsideError("bad_header", f"what follows HDU {index - 1} is no extension", index)
        return b""  # nothing, or padding beyond the last block
    end = _end_card(raw, 0)
    while end < 0:
        more = source.read_at(offset + len(raw), max(FIRST_READ, len(raw)))
        if not more or len(raw) > HEADER_LIMIT:
            raise SetAsideError("bad_header", f"the header of HDU {index} has no END", index)
        done = len(raw) // CARD * CARD
        raw += more
        end = _end_card(raw, done)
    return raw[:end]


def _end_card(raw: bytes, start: int) -> int:
    """Offset of the END card at or after `start`, -1 where there is none."""
    found = raw.find(b"END     ", start)
    while found >= 0 and found % CARD:
        found = raw.find(b"END     ", found + 1)
    return found


def _layout(raw: bytes, offset: int, index: int) -> Hdu:
    """Where the data of a header are and what shape they have (FITS 4.0, 4.4.1 and 10.1)."""
    cards = Cards(raw)
    bitpix, axes = _shape(cards, "", index)
    elements = math.prod(axes) if axes else 0
    random_groups = bool(axes) and axes[0] == 0 and cards.get("GROUPS") is True
    if random_groups:
        elements = math.prod(axes[1:])
    groups, parameters = cards.integer("GCOUNT", 1), cards.integer("PCOUNT")
    if parameters < 0 or groups < 0 or (groups == 0 and not random_groups):
        raise SetAsideError("bad_header", f"PCOUNT or GCOUNT of HDU {index} is too small", index)
    size = abs(bitpix) // 8 * groups * (parameters + elements)
    if size > LARGEST:
        raise SetAsideError("bad_header", f"the data of HDU {index} would be larger than any file", index)
    compressed = cards.get("ZIMAGE") is True and cards.text("XTENSION") == "BINTABLE"
    if compressed:
        bitpix, axes = _shape(cards, "Z", index)
        cards = _image_cards(raw)
    blank = cards.get("BLANK")
    return Hdu(
        index=index,
        cards=cards,
        data_offset=offset + _padded(len(raw) + CARD),
        data_bytes=size,
        bitpix=bitpix,
        axes=axes,
        compressed=compressed,
        bscale=_scaling(cards, "BSCALE", 1.0),
        bzero=_scaling(cards, "BZERO", 0.0),
        blank=blank if isinstance(blank, int) and not isinstance(blank, bool) and bitpix > 0 else None,
    )


def _scaling(cards: Cards, key: str, default: float) -> float:
    """The number on a card, `default` where the card is absent or left empty, NaN for anything else."""
    if key not in cards:
        return default
    left_empty = cards.card(key)[8:].partition("/")[0].strip(" =") == ""
    return default if left_empty else cards.number(key)


def _image_cards(raw: bytes) -> Cards:
    """The cards of a tile-compressed image without those of the table that holds it."""
    every = [raw[i : i + CARD] for i in range(0, len(raw) - CARD + 1, CARD)]
    kept = [card for card in every if not _TABLE_CARD.match(card)]
    return Cards(b"".join(card[1:8] + b" " + card[8:] if _IMAGE_CARD.match(card) else card for card in kept))


def _shape(cards: Cards, prefix: str, index: int) -> tuple[int, tuple[int, ...]]:
    """BITPIX and the lengths of the axes, of the HDU itself or with prefix Z of the image within."""
    bitpix, count = cards.integer(f"{prefix}BITPIX"), cards.integer(f"{prefix}NAXIS", -1)
    if bitpix not in BITPIXES or not 0 <= count <= 999:
        raise SetAsideError("bad_header", f"{prefix}BITPIX or {prefix}NAXIS of HDU {index} is missing or wrong", index)
    axes = tuple(cards.integer(f"{prefix}NAXIS{i}", -1) for i in range(1, count + 1))
    if min(axes, default=0) < 0:
        raise SetAsideError("bad_header", f"{prefix}NAXIS{axes.index(min(axes)) + 1} of HDU {index} is wrong", index)
    if math.prod(max(1, length) for length in axes) > LARGEST:
        raise SetAsideError("bad_header", f"the axes of HDU {index} are longer than those of any image", index)
    return bitpix, axes


# --- planes


@dataclass(frozen=True)
class _Axis:
    """An axis beside the celestial ones: its type without algorithm, length and linear world coordinates.

    `value` belongs to its first pixel; it is NaN where the header gives no linear coordinates.
    """

    number: int
    kind: str
    length: int
    value: float
    step: float
    unit: str
    listed: tuple[float, ...] = ()  # coordinates of its pixels, where a table gives them


def planes(hdu: Hdu, most: int | None = None, times: Sequence[float] = ()) -> list[Plane]:
    """The planes of an image in storage order, with the world coordinates of each on the other axes.

    `times` are the coordinates on the axis of `Hdu.time_table`, one for each of its pixels.

    Raises `SetAsideError`: no_wcs without a celestial pair of axes, unknown_axis where a longer axis is neither time,
    frequency nor Stokes with usable coordinates, or is stored inside the celestial ones, bad_header where the stored
    numbers cannot be scaled, too_many_planes beyond `most`.
    """
    _check_scaling(hdu)
    cards, n_data = hdu.cards, len(hdu.axes)
    count = max(n_data, min(cards.integer("WCSAXES") or _highest_axis(cards, n_data), MAX_AXES))
    types = [cards.text(f"CTYPE{i}").upper() for i in range(1, count + 1)]
    celestial = [i for i, text in enumerate(types) if _CELESTIAL.match(text)]
    if len(celestial) != 2 or sum(bool(_LATITUDE.match(types[i])) for i in celestial) != 1 or celestial[1] >= n_data:
        shown = ", ".join(filter(None, types)) or "none"
        raise SetAsideError("no_wcs", f"no pair of celestial axes among the types of axes: {shown}", hdu.index)
    first, second = celestial
    lengths = hdu.axes + (1,) * (count - n_data)
    others = [_axis(cards, i + 1, types[i], lengths[i]) for i in range(count) if i not in celestial]
    if hdu.time_table and len(times) == lengths[hdu.time_table.axis - 1]:
        others = [replace(a, listed=tuple(times)) if a.number == hdu.time_table.axis else a for a in others]
    for axis in others:
        _refuse_unknown(axis, second + 1, hdu.index)
    outer = lengths[second + 1 : n_data]
    if most is not None and math.prod(outer) > most:
        raise SetAsideError(
            "too_many_planes", f"{math.prod(outer)} planes are more than the limit of {most}", hdu.index
        )
    found = []
    for index in range(math.prod(outer)):
        place = _unravel(index, outer)
        axes = _plane_axes(others, {second + 2 + k: p for k, p in enumerate(place)})
        found.append(Plane(index, axes, place[::-1], lengths[first], lengths[second]))
    return found


def _highest_axis(cards: Cards, n_data: int) -> int:
    """The last axis that has a type: without WCSAXES there are as many (FITS 4.0, 8.2)."""
    count = n_data
    while f"CTYPE{count + 1}" in cards:
        count += 1
    return count


def _check_scaling(hdu: Hdu) -> None:
    """Refuse a scale that makes all pixels alike, or none at all."""
    for key, value, wrong in (("BSCALE", hdu.bscale, hdu.bscale == 0.0), ("BZERO", hdu.bzero, False)):
        if wrong or not math.isfinite(value):
            text = hdu.cards.card(key)[9:30].strip()
            raise SetAsideError("bad_header", f"{key} is {text!r}: the pixels cannot be scaled", hdu.index)


def _axis(cards: Cards, number: int, ctype: str, length: int) -> _Axis:
    kind, _, code = ctype.partition("-")
    code = code.strip("- ")
    step = cards.number(f"CD{number}_{number}")
    if step != step:
        scale = cards.number(f"PC{number}_{number}")
        step = cards.number(f"CDELT{number}") * (1.0 if scale != scale else scale)
    reference, pixel = cards.number(f"CRVAL{number}"), cards.number(f"CRPIX{number}")
    if length == 1 and step != step:
        step = 0.0
    value = reference + (1.0 - (0.0 if pixel != pixel else pixel)) * step
    if code not in ("", "LSR", "BAR", "OBS", "HEL", "TOP") or (length > 1 and step == 0.0):
        value = math.nan  # a table, a non-linear algorithm, or no step
    return _Axis(number, kind.strip(), length, value, step, cards.text(f"CUNIT{number}"))


def _refuse_unknown(axis: _Axis, last_celestial: int, hdu: int) -> None:
    if axis.length == 1:
        return
    name = f"axis {axis.number} ({axis.kind or 'no type'}, {axis.length} pixels)"
    if axis.number < last_celestial:
        raise SetAsideError("unknown_axis", f"{name} is stored inside the celestial axes", hdu)
    if axis.kind not in ("FREQ", "STOKES", *TIME_TYPES):
        raise SetAsideError("unknown_axis", f"{name} is neither time, frequency nor Stokes", hdu)
    if axis.kind not in TIME_TYPES and not math.isfinite(axis.value):
        # Planes of unknown frequency or Stokes parameter would mix in one channel; an unknown time does no such harm.
        raise SetAsideError("unknown_axis", f"{name} has no usable linear coordinates", hdu)


def _unravel(index: int, lengths: Sequence[int]) -> tuple[int, ...]:
    """The 0-based pixel on each axis, the fastest axis first."""
    place = []
    for length in lengths:
        index, rest = divmod(index, length)
        place.append(rest)
    return tuple(place)


def _plane_axes(others: Sequence[_Axis], place: dict[int, int]) -> PlaneAxes:
    """World coordinates of a plane at the 0-based pixels `place`, by axis number."""
    values, steps, units, time_axis = {}, {}, {}, ""
    for axis in others:
        if axis.kind in TIME_TYPES and axis.length > 1 and not time_axis:
            time_axis = axis.kind
        if axis.listed:
            values[axis.kind], units[axis.kind] = axis.listed[place.get(axis.number, 0)], axis.unit
        elif axis.kind and axis.kind not in values and math.isfinite(axis.value):
            values[axis.kind] = axis.value + place.get(axis.number, 0) * axis.step
            steps[axis.kind], units[axis.kind] = axis.step, axis.unit
    return PlaneAxes(values, steps, units, time_axis)


def facts_of(
    cards: Cards, axes: PlaneAxes, dialects: Sequence[Dialect], forced: bool = False
) -> tuple[str, FrameFacts] | None:
    """The first dialect that recognises the header, and what it reads there; None where none does.

    With `forced` the first one reads it, whether it recognises the header or not.
    """
    for dialect in dialects:
        if forced or dialect.recognises(cards):
            return dialect.name, dialect.read(cards, axes)
    return None


# --- units

_WORDS = {
    "beam": "beam", "bm": "beam", "beams": "beam", "pixel": "pixel", "pix": "pixel", "pixels": "pixel", "sr": "sr",
    "s": "s", "sec": "s", "second": "s", "seconds": "s",
    "count": "count", "counts": "count", "ct": "count", "cts": "count",
    "adu": "adu", "dn": "adu", "electron": "electron", "electrons": "electron", "elec": "electron", "e": "electron",
    "kelvin": "K", "jansky": "Jy",
}  # fmt: skip
_PREFIXED = {"Jy": "Jy", "mJy": "mJy", "uJy": "uJy", "kJy": "kJy", "nJy": "nJy", "K": "K", "mK": "mK", "uK": "uK"}
_FACTOR = re.compile(r"([A-Za-z]+)(?:\^?\(?(-1)\)?)?")


@lru_cache(maxsize=1024)
def fold_unit(text: str) -> str:
    """One spelling for each unit: 'JY/BEAM', 'Jy beam-1' and 'beam-1 Jy' are 'Jy/beam', 'DN' is 'adu'.

    What is not understood comes back as it is, without outer blanks: a unit of its own, for relative photometry. So
    does 'MJY/BEAM', where capitals leave open whether milli or mega is meant.
    """
    plain = " ".join(text.replace("\xb5", "u").split())
    spelled = re.sub(r"\b[eE]-(?!1)", "electron", plain.replace("**", "^"))
    over: list[str] = []
    under: list[str] = []
    for number, part in enumerate(spelled.split("/")):
        for word in re.split(r"[\s.*]+", part.strip(" ()")) if part.strip(" ()") else ():
            match = _FACTOR.fullmatch(word)
            base = _base(match.group(1), plain) if match else ""
            if match is None or not base:
                return plain
            (under if (number > 0) != (match.group(2) is not None) else over).append(base)
    if len(over) != 1 or len(under) > 2:
        return plain
    return "/".join([over[0], *sorted(under)])


def _base(word: str, whole: str) -> str:
    """The one spelling of a unit's name, '' where it is unknown or ambiguous."""
    if word in _PREFIXED:
        return _PREFIXED[word]
    if word.lower() in _WORDS:
        return _WORDS[word.lower()]
    if word.upper() == "MJY":
        # Mega is usual for a surface brightness, and the small letter of 'mjy' can only be milli.
        milli, mega = word[0] == "m", word == "MJy" or whole.upper().endswith(("SR", "SR-1", "SR^-1"))
        return "mJy" if milli else "MJy" if mega else ""
    return {"JY": "Jy", "UJY": "uJy", "KJY": "kJy", "NJY": "nJy", "K": "K"}.get(word.upper(), "")
