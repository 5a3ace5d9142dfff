"""What a header says of its celestial axes: which they are, in what projection and system, and whether that can be used.

Cards in, a `Celestial` or a refusal out; wcslib is not asked here.
"""

from __future__ import annotations

import math
import re
from dataclasses import dataclass
from functools import lru_cache

from hindlight.facts import CARD, Cards
from hindlight.systems import BadWcsError, NoCelestialError, System, system_of

ZENITHAL_CODES = {"SIN", "TAN", "ARC", "ZEA", "STG", "NCP", "TPV", "ZPN", "AZP", "SZP", "TNX", "ZPX", "DSS"}
LONGITUDES = {"RA": "DEC", "GLON": "GLAT"}
REFUSED_LONGITUDES = {"ELON": "ecliptic", "HLON": "heliographic", "SLON": "supergalactic"}
CTYPES = {i: f"CTYPE{i}" for i in range(1, 10)}

LARGEST_DEG = (720.0, 90.0)  # longitudes are written from -180 or 0 on, with a turn to spare; latitudes end at the pole

_MATRIX = re.compile(r"(PC|CD)\d_\d")
_QUOTED = re.compile(r"= *'(?:[^']|'')*'")
_OF_AXES = re.compile(r"(CTYPE|CRPIX|CRVAL|CDELT|CROTA|CUNIT|PV|PC|CD)(\d)(_(\d+))?")


@dataclass(frozen=True)
class Celestial:
    """The pair of celestial axes of a header.

    axes
        Their FITS numbers (1-based) in storage order; `swapped` where latitude is stored first.
    code, suffix
        Of the projection in CTYPE: 'TAN' and '-SIP' of 'RA---TAN-SIP'.
    system, assumed
        See `system_of`.
    size
        Pixels along the two axes, 0 where the cards do not say.
    reference
        The 0-based pixel to which scale and beam refer: CRPIX for zenithal projections, where the plane is that of the
        aperture; the middle of the image for others.
    """

    axes: tuple[int, int]
    code: str
    suffix: str
    swapped: bool
    system: System
    assumed: bool
    size: tuple[int, int]
    reference: tuple[float, float]


def find_celestial(cards: Cards) -> Celestial:
    """The celestial axes of a header, checked: one longitude, its latitude, one projection, reference values and scale.

    Raises `NoCelestialError` or `BadWcsError` with a sentence.
    """
    types = {i: cards.text(key) for i, key in CTYPES.items() if key in cards}
    names = {i: text[:4].rstrip("-") if text[4:5] in ("", "-") else text for i, text in types.items()}
    for i, name in names.items():
        if name in REFUSED_LONGITUDES:
            raise BadWcsError(f"CTYPE{i} is {types[i]!r}: {REFUSED_LONGITUDES[name]} coordinates are not supported")
    lon = [i for i, name in names.items() if name in LONGITUDES and types[i][4:5] == "-"]
    lat = [i for i, name in names.items() if name in LONGITUDES.values() and types[i][4:5] == "-"]
    if len(lon) != 1 or len(lat) != 1:
        shown = ", ".join(repr(text) for text in types.values() if text) or "no CTYPE"
        raise NoCelestialError(f"no pair of projected celestial axes such as RA---SIN and DEC--SIN: {shown}")
    i, j = lon[0], lat[0]
    code, suffix = types[i][5:8], types[i][8:]
    if LONGITUDES[names[i]] != names[j] or types[j][5:8] != code:
        raise BadWcsError(f"CTYPE{i} is {types[i]!r} but CTYPE{j} is {types[j]!r}: they are no pair")
    axes = (min(i, j), max(i, j))
    _check_numbers(cards, axes)
    for axis, most in zip((i, j), LARGEST_DEG, strict=True):
        value = cards.number(f"CRVAL{axis}")
        if cards.text(f"CUNIT{axis}") in ("", "deg") and abs(value) > most:
            raise BadWcsError(f"CRVAL{axis} is {value:g}, which is no {'longitude' if axis == i else 'latitude'}")
    system, assumed = (System("galactic"), False) if names[i] == "GLON" else system_of(cards)
    size = _size(cards, axes)
    return Celestial(axes, code, suffix, i > j, system, assumed, size, _reference(cards, axes, code, size))


def _check_numbers(cards: Cards, axes: tuple[int, int]) -> None:
    """Refuse what FITS lets default in silence (a reference value of 0, a scale of 1 degree) and cannot be meant."""
    for i in axes:
        for stem in ("CRVAL", "CRPIX"):
            if not math.isfinite(cards.number(f"{stem}{i}")):
                raise BadWcsError(f"{stem}{i} is missing or no number")
    matrix = [key for key in cards if key[:2] in ("PC", "CD") and _MATRIX.fullmatch(key)]
    other = [k for k in matrix if (int(k[2]) in axes) != (int(k[4]) in axes) and cards.number(k) != 0.0]
    if other:
        raise BadWcsError(f"{other[0]} mixes a celestial axis with another one")
    if not any(key[:2] == "CD" for key in matrix):
        for i in axes:
            scale = cards.number(f"CDELT{i}")
            if scale == 0.0 or not (math.isfinite(scale) or any(k[:3] == f"PC{i}" for k in matrix)):
                raise BadWcsError(
                    f"CDELT{i} is {'zero' if scale == 0.0 else 'missing or no number'}, without a CD matrix"
                )


def two_axes(cards: Cards, axes: tuple[int, int]) -> str:
    """The celestial cards with their axes renumbered 1 and 2; what belongs to other axes is left out."""
    number = {str(axes[0]): "1", str(axes[1]): "2"}
    out = []
    for key in cards:
        text = cards.card(key)
        of_axes = _of_axes(key)
        if of_axes is None:
            out += [text] if key in ("LONPOLE", "LATPOLE") else []
            continue
        stem, first, second = of_axes
        if first not in number or (stem in ("PC", "CD") and second not in number):
            continue
        tail = "" if second is None else "_" + (number[second] if stem in ("PC", "CD") else second)
        quoted = _QUOTED.match(text[8:])  # wcslib leaves out a card with more than a comment behind its text
        value = quoted.group() if quoted else text[8:]
        out.append((f"{stem}{number[first]}{tail}".ljust(8) + value).ljust(CARD))
    return "".join(out)


@lru_cache(maxsize=4096)
def _of_axes(key: str) -> tuple[str, str, str | None] | None:
    """Stem and numbers of a keyword that belongs to an axis ('CTYPE1') or to two ('CD1_2'), None for any other."""
    match = _OF_AXES.fullmatch(key)
    return (match[1], match[2], match[4]) if match else None


def _size(cards: Cards, axes: tuple[int, int]) -> tuple[int, int]:
    stem = "ZNAXIS" if cards.get("ZIMAGE") is True else "NAXIS"  # of a tile-compressed image, not of its table
    return cards.integer(f"{stem}{axes[0]}"), cards.integer(f"{stem}{axes[1]}")


def _reference(cards: Cards, axes: tuple[int, int], code: str, size: tuple[int, int]) -> tuple[float, float]:
    if code not in ZENITHAL_CODES and min(size) > 0:
        return (size[0] - 1) / 2.0, (size[1] - 1) / 2.0
    return cards.number(f"CRPIX{axes[0]}") - 1.0, cards.number(f"CRPIX{axes[1]}") - 1.0
