"""Pixels of one plane of one HDU: stamps around positions, or the whole.

A plain file is mapped and only the stamps' pixels are read, of a remote one the bytes that hold them (`spans`); a gzip
file is unpacked once, with a cap; a tile-compressed image is unpacked around the positions where they are few, else whole,
from a local copy where it is remote. Values are scaled, blanks are NaN, bytes native. Nothing here knows of sky or beams.
"""

from __future__ import annotations

import io
import math
import mmap
import os
import warnings
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from astropy.io import fits
from numpy.lib.stride_tricks import as_strided
from numpy.typing import NDArray

from hindlight import apart, spans, storage
from hindlight.files import GzipStream, PlainSource, open_file, open_source, opened
from hindlight.headers import BLOCK, Hdu, SetAsideError, Source, read_hdus
from hindlight.lightcurve import IntArray

SAMPLE = 256
PIECE = 1 << 20
TILE_REACH = 64  # pixels that a tile typically sticks out beyond the window asked for
SECTIONS_BELOW = 0.25  # windows with their tiles must stay below this fraction of the image to be read one by one

FRAGILE = ("HCOMPRESS_1", "PLIO_1")  # their decoders write where broken bytes tell them to

Floats = NDArray[np.floating[Any]]


@dataclass(frozen=True)
class Lattice:
    """Which pixels of a stamp around its middle one: every `down`-th row and `across`-th column.

    `rows` and `columns`, how far it reaches to each side, are multiples of the steps, so that the middle is among them.
    """

    rows: int
    columns: int
    down: int = 1
    across: int = 1

    @classmethod
    def square(cls, half: int) -> Lattice:
        """Every pixel of a square that reaches `half` pixels to each side."""
        return cls(half, half)

    @property
    def shape(self) -> tuple[int, int]:
        """Of a stamp."""
        return 2 * self.rows // self.down + 1, 2 * self.columns // self.across + 1

    @property
    def offsets(self) -> tuple[IntArray, IntArray]:
        """Of rows and of columns from the middle."""
        return np.arange(-self.rows, self.rows + 1, self.down), np.arange(-self.columns, self.columns + 1, self.across)


@dataclass(frozen=True, eq=False)
class Pixels:
    """One image as it is stored, shape (height, width), and what turns stored numbers into values.

    value = zero + scale * stored; the stored integer `blank` means no value. Values are float32 where that holds every
    stored number (as in astropy), float64 otherwise. `quantum` is the step between values where there is one, as in
    counts, else 0. `masks` are images of the same shape: a pixel is blank where one of them is anything but zero.
    """

    stored: NDArray[Any]
    scale: float = 1.0
    zero: float = 0.0
    blank: int | None = None
    quantum: float = 0.0
    masks: tuple[Mask, ...] = ()

    @property
    def shape(self) -> tuple[int, int]:
        """Height and width."""
        height, width = self.stored.shape
        return height, width

    def whole(self) -> Floats:
        """All values, shape (height, width), NaN where blank."""
        values = self._values(self.stored)
        for mask in self.masks:
            values[mask.bad(mask.pixels.whole())] = np.nan
        return values

    def stamps(self, ix: IntArray, iy: IntArray, lattice: Lattice) -> Floats:
        """Values around pixels (ix, iy), shape (n, *lattice.shape); NaN where blank or outside."""
        values = self._unmasked(ix, iy, lattice)
        for mask in self.masks:
            values[mask.bad(mask.pixels.stamps(ix, iy, lattice))] = np.nan
        return values

    def _unmasked(self, ix: IntArray, iy: IntArray, lattice: Lattice) -> Floats:
        """The same without masks."""
        height, width = self.stored.shape
        rows, columns = lattice.rows, lattice.columns
        last_top, last_left = height - 1 - 2 * rows, width - 1 - 2 * columns
        top, left = iy - rows, ix - columns
        outside = (left < 0) | (top < 0) | (left > last_left) | (top > last_top)
        if last_top < 0 or last_left < 0 or outside.all():
            return self._padded(ix, iy, lattice)
        down, across = self.stored.strides
        windows = as_strided(  # every window of the image on its lattice; `sliding_window_view` takes thrice as long
            self.stored,
            (last_top + 1, last_left + 1, *lattice.shape),
            (down, across, down * lattice.down, across * lattice.across),
            writeable=False,
        )
        if not outside.any():
            return self._values(windows[top, left])
        values = self._values(windows[top.clip(0, last_top), left.clip(0, last_left)])
        values[outside] = self._padded(ix[outside], iy[outside], lattice)
        return values

    def _padded(self, ix: IntArray, iy: IntArray, lattice: Lattice) -> Floats:
        """The same where windows may reach over the edge."""
        height, width = self.stored.shape
        within = ((ix >= 0) & (iy >= 0) & (ix < width) & (iy < height)).all()
        if within and len(ix) * math.prod(lattice.shape) > 4 * self.stored.size:  # a margin costs less than masks
            return self._of_padded_image(ix, iy, lattice)
        down, across = lattice.offsets
        rows, columns = iy[:, None] + down, ix[:, None] + across
        raw = self.stored[rows.clip(0, height - 1)[:, :, None], columns.clip(0, width - 1)[:, None, :]]
        values = self._values(raw)
        gone = ((rows < 0) | (rows >= height))[:, :, None] | ((columns < 0) | (columns >= width))[:, None, :]
        values[gone] = np.nan
        return values

    def _of_padded_image(self, ix: IntArray, iy: IntArray, lattice: Lattice) -> Floats:
        """The same from a copy of the whole image with a margin of NaN."""
        values = self._values(self.stored)
        (height, width), rows, columns = values.shape, lattice.rows, lattice.columns
        image = np.full((height + 2 * rows, width + 2 * columns), np.nan, values.dtype)
        image[rows : rows + height, columns : columns + width] = values
        windows = np.lib.stride_tricks.sliding_window_view(image, (2 * rows + 1, 2 * columns + 1))
        return np.ascontiguousarray(windows[:, :, :: lattice.down, :: lattice.across][iy, ix])

    def _values(self, raw: NDArray[Any]) -> Floats:
        small = raw.dtype.itemsize <= 2 or (raw.dtype.kind == "f" and raw.dtype.itemsize == 4)
        values: Floats = raw.astype(np.float32 if small else np.float64)
        with np.errstate(over="ignore", invalid="ignore"):  # beyond the largest number is infinite, which is no flux
            if self.scale != 1.0:
                values *= self.scale
            if self.zero != 0.0:
                values += self.zero
        if self.blank is not None:
            values[raw == self.blank] = np.nan
        return values


@dataclass(frozen=True, eq=False)
class Mask:
    """An image that says which pixels of another are bad: those not zero, or for weights those not above zero.

    No number is bad either way.
    """

    pixels: Pixels
    is_weight: bool = False

    def bad(self, values: Floats) -> NDArray[np.bool_]:
        """Which of these values of it mark bad pixels."""
        return np.asarray(~(values > 0) if self.is_weight else values != 0)


@dataclass(frozen=True, eq=False)
class Windows:
    """The square windows of half width `half` around pixels (ix, iy) that will be asked for."""

    ix: IntArray
    iy: IntArray
    half: int


@dataclass(frozen=True, eq=False)
class ImagePlace:
    """An image HDU of a file, gzip-packed or not."""

    path: str
    packed: bool
    hdu: Hdu

    @property
    def in_ranges(self) -> bool:
        """Whether its pixels are read by ranges of bytes: those of a remote file that is neither packed nor compressed."""
        return storage.is_remote(self.path) and not (self.packed or self.hdu.compressed)


@dataclass(frozen=True, eq=False)
class PlanePlace:
    """A plane of an image: `axes` are the FITS numbers of the two celestial axes, `index` counts in storage order.

    Axes stored before or between the celestial ones have length one (`hindlight.headers.planes` refuses others).
    `held` is what has been read of a remote one, where that is to be kept.
    """

    image: ImagePlace
    axes: tuple[int, int]
    index: int = 0
    held: spans.Held | None = None

    @property
    def width(self) -> int:
        """Pixels along the first celestial axis."""
        return self.image.hdu.axes[self.axes[0] - 1]

    @property
    def height(self) -> int:
        """Pixels along the second celestial axis."""
        return self.image.hdu.axes[self.axes[1] - 1]

    @property
    def dtype(self) -> np.dtype[Any]:
        """The type of the stored numbers."""
        return np.dtype({8: ">u1", 16: ">i2", 32: ">i4", 64: ">i8", -32: ">f4", -64: ">f8"}[self.image.hdu.bitpix])

    @property
    def span(self) -> tuple[int, int]:
        """The first byte of its pixels in the unpacked file, and the first one after them."""
        length = self.width * self.height * self.dtype.itemsize
        start = self.image.hdu.data_offset + self.index * length
        return start, start + length

    def keeping(self) -> PlanePlace:
        """The same, what is read of it kept where it is remote: for a plane that is read several times."""
        return replace(self, held=_held(self)) if self.image.in_ranges and self.held is None else self

    @property
    def lead(self) -> tuple[int, ...]:
        """The indices of the plane on the axes stored outside the celestial ones, the slowest first, as in NumPy."""
        outer = self.image.hdu.axes[: self.axes[1] - 1 : -1]
        if self.index >= math.prod(outer):
            raise SetAsideError("no_image", f"there is no plane {self.index}", self.image.hdu.index, self.index)
        return tuple(int(i) for i in np.unravel_index(self.index, outer)) if outer else ()

    def fault(self, reason: str, detail: str) -> SetAsideError:
        """What to raise about this plane."""
        return SetAsideError(reason, detail, self.image.hdu.index, self.index)


class _HeadersOnly:
    """A source that is not asked whether data are there: reading them will tell, and a gzip file stays packed."""

    def __init__(self, source: Source) -> None:
        self.read_at = source.read_at

    def reaches(self, end: int) -> bool:
        return True


def find_image(path: str, hdu: int, unpacked_limit: int) -> ImagePlace:
    """The image HDU with this index, by reading headers up to it.

    `unpacked_limit`, in bytes, bounds what a gzip file may unpack to. Raises `OSError`, and `SetAsideError` where the
    file is broken or has no such image.
    """
    for found in _images(path, unpacked_limit):
        if found.hdu.index == hdu:
            return found
    raise SetAsideError("no_image", f"the file has no image in HDU {hdu}", hdu)


def images_of(path: str, unpacked_limit: int) -> list[ImagePlace]:
    """Every image HDU of a file. Raises as `find_image`."""
    return list(_images(path, unpacked_limit))


def _images(path: str, unpacked_limit: int) -> Iterator[ImagePlace]:
    with open_source(path, unpacked_limit) as source:
        packed = not isinstance(source, PlainSource)
        for found in read_hdus(_HeadersOnly(source) if packed else source):
            if found.is_image:
                yield ImagePlace(path, packed, found)


def read_plane(place: PlanePlace, unpacked_limit: int, windows: Windows | None = None) -> Pixels:
    """The pixels of a plane.

    Only the pixels within `windows` need be right, all of them where it is None. A mapped file stays mapped as long as
    the result lives. Raises `OSError` and `SetAsideError`; `unpacked_limit` is in bytes.
    """
    hdu, lead = place.image.hdu, place.lead
    buffer: Any
    if hdu.compressed:
        return _unpack_tiles(place, lead, unpacked_limit, windows)
    start, end = place.span
    if place.image.packed:
        buffer, at = _unpacked(place, start, end, unpacked_limit), 0
    elif place.image.in_ranges:
        buffer, at = _ranges(place, windows), 0
    else:
        buffer, at = _mapped(place, end), start
    stored = np.frombuffer(buffer, place.dtype, place.width * place.height, at)
    return _scaled(stored.reshape(place.height, place.width), hdu)


def _scaled(stored: NDArray[Any], hdu: Hdu) -> Pixels:
    """Pixels with the HDU's scale. Whether floating-point pixels are counts is told by some in the middle."""
    quantum = abs(hdu.bscale)
    if stored.dtype.kind == "f" and (hdu.compressed or not _holds_counts(stored)):
        quantum = 0.0
    return Pixels(stored, hdu.bscale, hdu.bzero, hdu.blank, quantum)


def _holds_counts(stored: NDArray[Any]) -> bool:
    """Whether some pixels in the middle of a floating-point image are whole numbers, more than two different ones."""
    middle = stored[stored.shape[0] // 2]
    if float(middle[len(middle) // 2]) % 1.0 != 0.0 and math.isfinite(middle[len(middle) // 2]):
        return False  # the usual case, at little cost
    finite = middle[:SAMPLE][np.isfinite(middle[:SAMPLE])]
    return bool((finite == np.rint(finite)).all()) and len(np.unique(finite)) > 2


def _ranges(place: PlanePlace, windows: Windows | None) -> NDArray[np.uint8]:
    """The bytes of a plane in a remote file, right within the windows and where `_holds_counts` looks; else zero."""
    held = place.held or _held(place)
    shape = (place.height, place.width)
    if windows is None:
        wanted = np.array([[0, place.width * place.height]])
    else:
        middle = place.height // 2 * place.width
        looked_at = [[middle, middle + min(SAMPLE, place.width)], np.array([0, 1]) + middle + place.width // 2]
        wanted = np.concatenate([spans.of_windows(shape, windows.ix, windows.iy, windows.half), looked_at])
    held.fill(wanted * place.dtype.itemsize)
    return held.bytes


def _held(place: PlanePlace) -> spans.Held:
    """A plane of a remote file, of which nothing is there yet."""
    start, end = place.span
    return spans.Held(place.image.path, start, end - start)


def _mapped(place: PlanePlace, end: int) -> mmap.mmap:
    """The first `end` bytes of a file as a read-only mapping, which goes away with the arrays that use it."""
    descriptor = open_file(place.image.path)
    try:
        if os.fstat(descriptor).st_size < end:
            raise _truncated(place, end)
        return mmap.mmap(descriptor, end, access=mmap.ACCESS_READ)
    finally:
        os.close(descriptor)


def _unpacked(place: PlanePlace, start: int, end: int, limit: int) -> bytearray:
    """Bytes of an unpacked gzip file."""
    if end > limit:
        raise place.fault("bad_compression", "the gzip file unpacks to more than the limit")
    kept, done = bytearray(), 0
    with opened(place.image.path) as file:
        stream = GzipStream(file, PIECE)
        try:
            while done < end:
                piece = stream.piece(4 * PIECE)
                if not piece:
                    raise _truncated(place, end)
                kept += piece[max(0, start - done) : max(0, end - done)]
                done += len(piece)
        except SetAsideError as error:
            raise place.fault(error.reason, error.detail) from error
    return kept


def _truncated(place: PlanePlace, end: int) -> SetAsideError:
    return place.fault("truncated", f"the pixels should end at byte {end}, the file ends before")


def _unpack_tiles(place: PlanePlace, lead: tuple[int, ...], limit: int, windows: Windows | None) -> Pixels:
    """A tile-compressed plane through astropy."""
    hdu = place.image.hdu
    if place.width * place.height * abs(hdu.bitpix) // 8 > limit:
        raise place.fault("bad_compression", "the image unpacks to more than the limit")
    with _tiles(place, limit) as target:
        try:
            if hdu.cards.text("ZCMPTYPE") in FRAGILE:
                stored = apart.call(_decoded, target, place, lead, windows)
            else:
                stored = _decoded(target, place, lead, windows)
        except Exception as error:  # on broken bytes the decoders raise whatever they like
            detail = " ".join(str(error).split())
            raise place.fault("bad_compression", f"the tiles cannot be unpacked: {detail}") from error
    return _scaled(stored, hdu)


@contextmanager
def _tiles(place: PlanePlace, limit: int) -> Iterator[Any]:
    """A path, or bytes in memory, from which astropy reads a file up to the end of this HDU."""
    hdu = place.image.hdu
    end = hdu.data_offset + hdu.data_bytes
    if place.image.packed:  # a tile-compressed file inside a gzip file
        yield io.BytesIO(_unpacked(place, 0, end, limit))
    elif storage.is_remote(place.image.path):
        if end > limit:
            raise place.fault("bad_compression", "the file is larger than what a file may unpack to")
        with storage.fetched(place.image.path, -(-end // BLOCK) * BLOCK) as path:
            yield path
    else:
        yield place.image.path


def _decoded(target: Any, place: PlanePlace, lead: tuple[int, ...], windows: Windows | None) -> NDArray[Any]:
    """The stored numbers of a plane, unpacked by astropy from a path or from bytes in memory."""
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")  # about cards; pixels that cannot be unpacked raise
        with fits.open(target, do_not_scale_image_data=True, uint=False) as hdus:
            return _sections(hdus[place.image.hdu.index].section, place, lead, windows)


def _sections(section: Any, plane: PlanePlace, lead: tuple[int, ...], windows: Windows | None) -> NDArray[Any]:
    """The plane, or an image of its shape that holds its pixels within the windows."""
    rest = section.shape[len(lead) :]
    # After the leading axes come the rows; of the others only the columns' axis may be longer than one.
    across = next((i for i, length in enumerate(rest) if i > 0 and length == plane.width), 1)

    def read(rows: slice, columns: slice) -> NDArray[Any]:
        where = [rows, *(columns if i == across else slice(None) for i in range(1, len(rest)))]
        values = np.asarray(section[(*lead, *where)])
        return values.reshape(_length(rows, plane.height), _length(columns, plane.width))

    whole = slice(None), slice(None)
    if windows is None:
        return read(*whole)
    reach = 2 * (windows.half + TILE_REACH) + 1
    if len(windows.ix) * reach**2 > SECTIONS_BELOW * plane.width * plane.height:
        return read(*whole)
    image: NDArray[Any] | None = None
    for x, y in zip(windows.ix.tolist(), windows.iy.tolist(), strict=True):
        rows = slice(max(0, y - windows.half), min(plane.height, y + windows.half + 1))
        columns = slice(max(0, x - windows.half), min(plane.width, x + windows.half + 1))
        values = read(rows, columns)
        if image is None:
            image = np.zeros((plane.height, plane.width), values.dtype)
        image[rows, columns] = values
    return read(*whole) if image is None else image


def _length(part: slice, full: int) -> int:
    return full if part.stop is None else part.stop - part.start
