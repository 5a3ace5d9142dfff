"""Checksums of HDUs: whether the bytes of a file are those that its CHECKSUM and DATASUM cards were made from.

Both are sums of the HDU's 32-bit words, the most significant byte first, in ones'-complement arithmetic, where a carry
is added at the other end (FITS 4.0, 4.4.2.7 and appendix J; cited from memory). DATASUM is that of the data, padding
included; CHECKSUM is whatever text makes the sum of the whole HDU all ones. Files are read in pieces, forwards.
"""

from __future__ import annotations

import os
import re
from collections.abc import Callable, Iterator, Mapping
from contextlib import AbstractContextManager, contextmanager
from dataclasses import dataclass, field
from typing import NamedTuple

import numpy as np

from hindlight.facts import Cards
from hindlight.headers import BLOCK, Hdu, SetAsideError, Source, read_hdus

ALL_ONES = 0xFFFFFFFF  # negative zero
WORD = 4  # bytes
PIECE = 1 << 20  # bytes that are read at a time, whole words
PLACEHOLDER = "0" * 16  # what CHECKSUM is while the sum is made (FITS 4.0, appendix J); it states nothing yet

_ENCODED = re.compile(r"[0-9A-Za-z]{16}")

Opened = Callable[[str], AbstractContextManager[Source]]


class Verdict(NamedTuple):
    """What the sums of an HDU say: `unverified` where its header has such cards and none was held against the bytes.

    `fault` is why it is set aside, None where nothing is known to be wrong.
    """

    unverified: bool = False
    fault: SetAsideError | None = None


class CompanionSums(NamedTuple):
    """What is wrong with the images of a companion, by HDU, and how many images it has."""

    n_images: int
    faults: Mapping[int, SetAsideError]

    def fault_for(self, hdu: int) -> SetAsideError | None:
        """What is wrong with the image that goes with HDU `hdu`: that of the same number, or the only one."""
        return next(iter(self.faults.values()), None) if self.n_images == 1 else self.faults.get(hdu)


@dataclass
class Verifier:
    """Verifies the HDUs of a file one after the other, all of them in their order.

    `source` is the file, opened a second time, since bytes are only read forwards; None where nothing is verified.
    `companions` are file names and what is wrong with them, by kind.
    """

    source: Source | None = None
    companions: Mapping[str, tuple[str, CompanionSums]] = field(default_factory=dict)
    _begin: int = 0
    _primary: SetAsideError | None = None

    def verdict(self, hdu: Hdu, takes_primary: bool = False) -> Verdict:
        """What the sums say of an HDU; `takes_primary` where it takes cards of the primary header.

        Only images, tables of good time and primary headers without data are read. Raises `SetAsideError` where the
        file cannot be unpacked, or ends before it should.
        """
        begin, self._begin = self._begin, hdu.data_offset + -(-hdu.data_bytes // BLOCK) * BLOCK
        header_only = hdu.index == 0 and not hdu.axes
        if not (hdu.is_image or hdu.is_good_time or header_only):
            return Verdict()
        found = Verdict(unverified="CHECKSUM" in hdu.cards or "DATASUM" in hdu.cards)
        if self.source is not None and found.unverified:
            found = verify(self.source, hdu, begin)
        if header_only:
            self._primary = found.fault
        elif found.fault is None and hdu.is_image:
            found = found._replace(fault=self._fault_elsewhere(hdu.index, takes_primary))
        return found

    def _fault_elsewhere(self, hdu: int, takes_primary: bool) -> SetAsideError | None:
        """Why an image is set aside that is sound itself."""
        if takes_primary and self._primary is not None:
            detail = f"HDU {hdu} takes cards of the primary header, which is damaged: {self._primary.detail}"
            return SetAsideError("checksum", detail, hdu)
        for kind, (name, sums) in self.companions.items():
            if (fault := sums.fault_for(hdu)) is not None:
                return SetAsideError("bad_companion", f"its {kind} companion {name} is damaged: {fault.detail}", hdu)
        return None


@contextmanager
def verifier(wanted: bool, opened: Opened, path: str, companions: Mapping[str, str]) -> Iterator[Verifier]:
    """What verifies the HDUs of the file at `path`, if that is `wanted`; `opened` opens files.

    `companions` are paths by kind. Those that cannot be read are left to be set aside when they are used.
    """
    if not wanted:
        yield Verifier()
        return
    own = {kind: (os.path.basename(name), _companion_sums(opened, name)) for kind, name in companions.items()}
    with opened(path) as source:
        yield Verifier(source, own)


def _companion_sums(opened: Opened, path: str) -> CompanionSums:
    faults: dict[int, SetAsideError] = {}
    n_images = 0
    try:
        with opened(path) as source, opened(path) as again:
            sums = Verifier(again)
            for hdu in read_hdus(source):
                fault = sums.verdict(hdu).fault
                n_images += hdu.is_image
                if hdu.is_image and fault is not None:
                    faults[hdu.index] = fault
    except (SetAsideError, OSError):
        return CompanionSums(0, {})
    return CompanionSums(n_images, faults)


def verify(source: Source, hdu: Hdu, begin: int) -> Verdict:
    """Hold CHECKSUM and DATASUM of an HDU, whose header begins at byte `begin`, against its bytes.

    A card without a value, or of blanks only, states nothing. Raises as `Verifier.verdict`.
    """
    whole, data_only = (_states(hdu.cards, key) for key in ("CHECKSUM", "DATASUM"))
    if not (whole or data_only):
        return Verdict(unverified=True)
    data_end = hdu.data_offset + hdu.data_bytes
    header = _sum(source, begin, hdu.data_offset, hdu.index) if whole else 0
    data = _sum(source, hdu.data_offset, data_end, hdu.index)
    wrong = [_wrong_data(hdu.cards, data) if data_only else "", _wrong_whole(hdu.cards, header + data) if whole else ""]
    said = "; ".join(text for text in wrong if text)
    return Verdict(fault=SetAsideError("checksum", f"HDU {hdu.index}: {said}", hdu.index) if said else None)


def _states(cards: Cards, key: str) -> bool:
    """Whether a card is there and has a value, right or wrong."""
    value = cards.get(key)
    if value is None:
        return bool(cards.card(key)[8:].partition("/")[0].strip(" ="))
    return not isinstance(value, str) or value.strip() not in ("", PLACEHOLDER)


def _wrong_data(cards: Cards, total: int) -> str:
    """What is wrong with DATASUM, '' if nothing is. A whole number is taken too, where the standard has text."""
    text = _shown(cards, "DATASUM")
    if not re.fullmatch(r"[0-9]{1,10}", text) or int(text) > ALL_ONES:
        return f"DATASUM is {text!r}, expected a whole number from 0 to {ALL_ONES}; its data sum to {_folded(total)}"
    if (int(text) - total) % ALL_ONES:
        return f"DATASUM is {text}, its data sum to {_folded(total)}"
    return ""


def _wrong_whole(cards: Cards, total: int) -> str:
    """What is wrong with CHECKSUM, '' if nothing is: by the standard any text will do that gives the right sum."""
    if total % ALL_ONES == 0:
        return ""
    text = _shown(cards, "CHECKSUM")
    sums = f"header and data sum to {_folded(total):#010x}, expected {ALL_ONES:#010x}"
    if _ENCODED.fullmatch(text):
        return f"CHECKSUM is {text!r}, {sums}"
    return f"CHECKSUM is {text!r}, expected 16 letters and digits; {sums}"


def _shown(cards: Cards, key: str) -> str:
    """The value of a card as text; what stands there where it is no value."""
    value = cards.get(key)
    return cards.card(key)[8:].strip(" =") if value is None else str(value).strip()


def _folded(total: int) -> int:
    """A plain sum of words as a ones'-complement one: only nothing but zeros gives zero."""
    return total % ALL_ONES or (ALL_ONES if total else 0)


def _sum(source: Source, start: int, end: int, hdu: int) -> int:
    """The plain sum of the words from byte `start` up to the end of the block in which `end` lies.

    Padding that is not there counts as zeros, as everywhere else. Raises `SetAsideError` (truncated) where the bytes end
    before `end`.
    """
    total, stop = 0, end + -(end - start) % BLOCK
    for at in range(start, stop, PIECE):
        wanted = min(PIECE, stop - at)
        piece = source.read_at(at, wanted)
        if at + len(piece) < min(end, at + wanted):
            raise SetAsideError("truncated", f"HDU {hdu} should end at byte {end}, the file ends before", hdu)
        words = np.frombuffer(piece + bytes(-len(piece) % WORD), dtype=">u4")
        total += int(words.sum(dtype=np.uint64))
    return total
