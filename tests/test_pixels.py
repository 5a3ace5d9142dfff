"""Pixels: every way of storing them gives the same stamps, and what cannot be read says why."""

from __future__ import annotations

import gzip
import mmap
from pathlib import Path

import numpy as np
import pytest
from astropy.io import fits
from hypothesis import given
from hypothesis import strategies as st

from hindlight.headers import SetAsideError
from hindlight.pixels import Lattice, Pixels, PlanePlace, Windows, find_image, read_plane

LIMIT = 100_000_000
RNG = np.random.default_rng(3)
IMAGE = RNG.normal(100.0, 5.0, (90, 120)).astype(np.float32)


def place(path: Path, hdu: int = 0, index: int = 0, axes: tuple[int, int] = (1, 2)) -> PlanePlace:
    """A plane of a file."""
    return PlanePlace(find_image(str(path), hdu, LIMIT), axes, index)


def whole(path: Path, hdu: int = 0, index: int = 0, axes: tuple[int, int] = (1, 2)) -> np.ndarray:
    """All pixels of a plane."""
    return read_plane(place(path, hdu, index, axes), LIMIT).whole()


def slow_stamp(image: np.ndarray, x: int, y: int, lattice: Lattice) -> np.ndarray:
    """The obvious way: pixel by pixel."""
    height, width = image.shape
    return np.array(
        [
            [
                image[y + j, x + i] if 0 <= y + j < height and 0 <= x + i < width else np.nan
                for i in range(-lattice.columns, lattice.columns + 1, lattice.across)
            ]
            for j in range(-lattice.rows, lattice.rows + 1, lattice.down)
        ]
    )


SMALL = st.tuples(*[st.integers(0, 4), st.integers(0, 4), st.integers(1, 3), st.integers(1, 3)])


@given(st.integers(1, 12), st.integers(1, 12), SMALL, st.integers(0, 2**32 - 1))
def test_stamps_are_what_they_should_be(height: int, width: int, size: tuple[int, ...], seed: int) -> None:
    """Whatever the image, position, size and lattice, stamps hold the right pixels and NaN outside."""
    rng = np.random.default_rng(seed)
    image = rng.normal(size=(height, width))
    x, y = rng.integers(-3, width + 3, 5), rng.integers(-3, height + 3, 5)
    down, across = size[2:]
    lattice = Lattice(size[0] * down, size[1] * across, down, across)
    want = [slow_stamp(image, i, j, lattice) for i, j in zip(x, y, strict=True)]
    np.testing.assert_array_equal(Pixels(image).stamps(x, y, lattice), want)


def test_no_positions() -> None:
    """No positions, no stamps."""
    none = np.zeros(0, np.int64)
    assert Pixels(IMAGE).stamps(none, none, Lattice.square(2)).shape == (0, 5, 5)


@pytest.mark.parametrize("kind", [np.uint8, np.int16, np.int32, np.int64, np.float32, np.float64])
def test_every_kind_of_number(tmp_path: Path, kind: type) -> None:
    """Each BITPIX comes out native and exact, in the type that holds it."""
    stored = RNG.integers(0, 200, (30, 40)).astype(kind)
    fits.PrimaryHDU(stored).writeto(tmp_path / "a.fits")
    got = whole(tmp_path / "a.fits")
    np.testing.assert_array_equal(got, stored)
    assert got.dtype == (np.float32 if kind in (np.uint8, np.int16, np.float32) else np.float64)
    assert got.dtype.isnative


def scaled_hdu() -> fits.PrimaryHDU:
    """Stored integers 1, 2, -32768, 4 with a scale, a zero and a blank."""
    hdu = fits.PrimaryHDU(np.array([[1, 2, -32768, 4]], np.int16))
    hdu.header.update({"BSCALE": 0.5, "BZERO": 10.0, "BLANK": -32768})
    return hdu


def test_scale_zero_and_blank(tmp_path: Path) -> None:
    """value = BZERO + BSCALE * stored, and BLANK means no value (FITS 4.0, 4.4.2)."""
    scaled_hdu().writeto(tmp_path / "a.fits")
    # Astropy forgets the keywords when it writes; they are put back into the bytes.
    raw = bytearray((tmp_path / "a.fits").read_bytes())
    if b"BSCALE" not in raw:
        at = raw.find(b"END     ")
        cards = [f"BSCALE  = {0.5:>20}", f"BZERO   = {10.0:>20}", f"BLANK   = {-32768:>20}", "END"]
        raw[at : at + 320] = "".join(card.ljust(80) for card in cards).encode()
    data = raw.find(b"END     ") // 2880 * 2880 + 2880
    raw[data : data + 8] = np.array([1, 2, -32768, 4], ">i2").tobytes()
    (tmp_path / "a.fits").write_bytes(raw)
    np.testing.assert_array_equal(whole(tmp_path / "a.fits"), [[10.5, 11.0, np.nan, 12.0]])


def test_unsigned_integers(tmp_path: Path) -> None:
    """16-bit unsigned numbers, stored with BZERO 32768, are exact."""
    stored = np.array([[0, 1, 40000, 65535]], np.uint16)
    fits.PrimaryHDU(stored).writeto(tmp_path / "a.fits")
    np.testing.assert_array_equal(whole(tmp_path / "a.fits"), stored)


def test_blank_of_floating_numbers_is_ignored(tmp_path: Path) -> None:
    """BLANK is illegal with floating-point pixels and means nothing there."""
    fits.PrimaryHDU(IMAGE).writeto(tmp_path / "a.fits")
    raw = (tmp_path / "a.fits").read_bytes()
    at = raw.find(b"END     ")
    cards = f"BLANK   = {int(IMAGE[0, 0]):>20}".ljust(80) + "END".ljust(80)
    (tmp_path / "a.fits").write_bytes(raw[:at] + cards.encode() + raw[at + 160 :])
    np.testing.assert_array_equal(whole(tmp_path / "a.fits"), IMAGE)


def test_plain_files_are_mapped(tmp_path: Path) -> None:
    """Only a mapping of a plain file is made: its pixels are read when they are asked for."""
    fits.PrimaryHDU(IMAGE).writeto(tmp_path / "a.fits")
    pixels = read_plane(place(tmp_path / "a.fits"), LIMIT)
    base = pixels.stored
    while isinstance(base, np.ndarray):
        base = base.base
    assert isinstance(base, memoryview | mmap.mmap)
    assert not pixels.stored.flags.writeable


def test_extensions_and_planes(tmp_path: Path) -> None:
    """A plane of a cube in an extension, with axes of length one around the celestial pair."""
    cube = RNG.normal(size=(3, 2, 20, 30)).astype(np.float32)
    odd = RNG.normal(size=(4, 20, 1, 30, 1)).astype(np.float32)  # FITS axes: 1, x, 1, y, plane
    fits.HDUList([fits.PrimaryHDU(IMAGE), fits.ImageHDU(cube), fits.ImageHDU(odd)]).writeto(tmp_path / "a.fits")
    np.testing.assert_array_equal(whole(tmp_path / "a.fits", 1, 0), cube[0, 0])
    np.testing.assert_array_equal(whole(tmp_path / "a.fits", 1, 3), cube[1, 1])
    np.testing.assert_array_equal(whole(tmp_path / "a.fits", 2, 2, (2, 4)), odd[2, :, 0, :, 0])
    with pytest.raises(SetAsideError, match="no plane 6"):
        whole(tmp_path / "a.fits", 1, 6)


@pytest.mark.parametrize("hdu", [0, 1])
def test_gzip(tmp_path: Path, hdu: int) -> None:
    """A packed file is unpacked, whichever HDU is wanted and although more follow."""
    path = tmp_path / "a.fits.gz"
    fits.HDUList([fits.PrimaryHDU(IMAGE), fits.ImageHDU(IMAGE[::-1]), fits.ImageHDU(IMAGE)]).writeto(path)
    np.testing.assert_array_equal(whole(path, hdu), IMAGE[::-1] if hdu else IMAGE)


def test_gzip_of_several_members(tmp_path: Path) -> None:
    """A gzip file may be several packed one after the other; padding behind them does no harm."""
    fits.PrimaryHDU(IMAGE).writeto(tmp_path / "a.fits")
    raw = (tmp_path / "a.fits").read_bytes()
    packed = tmp_path / "b.fits.gz"
    packed.write_bytes(b"".join(gzip.compress(raw[at : at + 7000]) for at in range(0, len(raw), 7000)) + bytes(100))
    np.testing.assert_array_equal(whole(packed), IMAGE)


def windows_of(shape: tuple[int, int], n: int = 3, half: int = 4) -> Windows:
    """Some windows, one of them at a corner."""
    rng = np.random.default_rng(n)
    ix, iy = rng.integers(0, shape[1], n), rng.integers(0, shape[0], n)
    ix[0] = iy[0] = 0
    return Windows(ix, iy, half)


@pytest.mark.parametrize("method", ["RICE_1", "GZIP_1", "GZIP_2", "HCOMPRESS_1"])
@pytest.mark.parametrize("kind", ["int16", "float32"])
def test_tile_compressed(tmp_path: Path, method: str, kind: str) -> None:
    """Tile-compressed images agree with astropy's reading of them, whole and around positions."""
    image = (IMAGE * 10).astype(kind)
    path = tmp_path / "a.fits.fz"
    tile = (30, 40) if method == "HCOMPRESS_1" else None
    fits.HDUList([fits.PrimaryHDU(), fits.CompImageHDU(image, compression_type=method, tile_shape=tile)]).writeto(path)
    want = fits.getdata(path, 1)
    np.testing.assert_array_equal(whole(path, 1), want)
    np.testing.assert_array_equal(np.abs(want - image).max() < 5, True)
    check_windows(path, want)


def check_windows(path: Path, want: np.ndarray, axes: tuple[int, int] = (1, 2), index: int = 0) -> None:
    """Stamps of an image that is read only around positions are those of the whole."""
    big = PlanePlace(find_image(str(path), 1, LIMIT), axes, index)
    windows = windows_of(want.shape)
    got = read_plane(big, LIMIT, windows).stamps(windows.ix, windows.iy, Lattice.square(windows.half))
    np.testing.assert_array_equal(got, Pixels(want).stamps(windows.ix, windows.iy, Lattice.square(windows.half)))


def test_tiles_around_few_positions(tmp_path: Path) -> None:
    """In a large image only the tiles around few positions are unpacked; stamps are right there."""
    image = RNG.normal(size=(600, 700)).astype(np.float32)
    path = tmp_path / "a.fits.fz"
    fits.HDUList([fits.PrimaryHDU(), fits.CompImageHDU(image, tile_shape=(50, 50))]).writeto(path)
    want = fits.getdata(path, 1)
    check_windows(path, want)
    part = read_plane(place(path, 1), LIMIT, windows_of(image.shape)).whole()
    assert (part == 0).mean() > 0.5  # most of it was not read
    np.testing.assert_array_equal(read_plane(place(path, 1), LIMIT, windows_of(image.shape, 50)).whole(), want)


def test_tile_compressed_scale_and_blank(tmp_path: Path) -> None:
    """Compressed integers are scaled and blanked as plain ones are."""
    stored = np.arange(400, dtype=np.int16).reshape(20, 20)
    stored[3, 4] = -32768
    hdu = fits.CompImageHDU(stored)
    hdu.header["BLANK"] = -32768
    path = tmp_path / "a.fits.fz"
    fits.HDUList([fits.PrimaryHDU(), hdu]).writeto(path)
    raw = path.read_bytes()
    end = raw.find(b"END     ", 2880)
    cards = [f"BSCALE  = {0.5:>20}", f"BZERO   = {10.0:>20}", "END"]
    path.write_bytes(raw[:end] + "".join(card.ljust(80) for card in cards).encode() + raw[end + 240 :])
    want = stored * 0.5 + 10
    want[3, 4] = np.nan
    np.testing.assert_array_equal(whole(path, 1), want)
    windows = windows_of(want.shape)
    got = read_plane(place(path, 1), LIMIT, windows).stamps(windows.ix, windows.iy, Lattice.square(windows.half))
    np.testing.assert_array_equal(got, Pixels(want).stamps(windows.ix, windows.iy, Lattice.square(windows.half)))
    unsigned = tmp_path / "b.fits.fz"
    fits.HDUList([fits.PrimaryHDU(), fits.CompImageHDU(np.array([[0, 40000, 65535]] * 3, np.uint16))]).writeto(unsigned)
    np.testing.assert_array_equal(whole(unsigned, 1)[0], [0, 40000, 65535])


def test_tile_compressed_cube(tmp_path: Path) -> None:
    """A plane of a compressed cube, with a NaN."""
    cube = RNG.normal(size=(2, 1, 300, 300)).astype(np.float32)
    cube[1, 0, 5, 6] = np.nan
    path = tmp_path / "a.fits.fz"
    fits.HDUList([fits.PrimaryHDU(), fits.CompImageHDU(cube, compression_type="GZIP_1", quantize_level=0)]).writeto(
        path
    )
    np.testing.assert_array_equal(whole(path, 1, 1), cube[1, 0])
    check_windows(path, cube[1, 0], index=1)


def test_tile_compressed_inside_gzip(tmp_path: Path) -> None:
    """A tile-compressed file that was packed once more is read too, under the same limit."""
    inner = tmp_path / "a.fits.fz"
    fits.HDUList([fits.PrimaryHDU(), fits.CompImageHDU(IMAGE)]).writeto(inner)
    outer = tmp_path / "a.fits.fz.gz"
    outer.write_bytes(gzip.compress(inner.read_bytes()))
    np.testing.assert_array_equal(whole(outer, 1), fits.getdata(inner, 1))


def test_limit_on_unpacking(tmp_path: Path) -> None:
    """What would unpack to more than the limit is refused before it is unpacked."""
    packed, tiles = tmp_path / "a.fits.gz", tmp_path / "b.fits.fz"
    fits.PrimaryHDU(IMAGE).writeto(packed)
    fits.HDUList([fits.PrimaryHDU(), fits.CompImageHDU(IMAGE)]).writeto(tiles)
    for path, hdu in ((packed, 0), (tiles, 1)):
        where = place(path, hdu)
        with pytest.raises(SetAsideError, match="limit") as caught:
            read_plane(where, 20_000)
        assert caught.value.reason == "bad_compression"


def test_broken_files_say_so(tmp_path: Path) -> None:
    """Truncated and damaged files are set aside with a reason, not an exception from some library."""
    plain, packed, tiles = tmp_path / "a.fits", tmp_path / "a.fits.gz", tmp_path / "a.fits.fz"
    fits.PrimaryHDU(IMAGE).writeto(plain)
    fits.PrimaryHDU(IMAGE).writeto(packed)
    fits.HDUList([fits.PrimaryHDU(), fits.CompImageHDU(IMAGE, compression_type="GZIP_1")]).writeto(tiles)
    places = place(plain), place(packed), place(tiles, 1)
    plain.write_bytes(plain.read_bytes()[:20_000])
    packed.write_bytes(packed.read_bytes()[:20_000])
    raw = bytearray(tiles.read_bytes())
    raw[-20_000:] = bytes(20_000)
    tiles.write_bytes(raw)
    for where, reason in zip(places, ("truncated", "bad_compression", "bad_compression"), strict=True):
        with pytest.raises(SetAsideError) as caught:
            read_plane(where, LIMIT)
        assert caught.value.reason == reason


def test_damaged_gzip(tmp_path: Path) -> None:
    """A flipped byte in the middle of a gzip file is found."""
    path = tmp_path / "a.fits.gz"
    fits.PrimaryHDU(RNG.normal(size=(200, 200))).writeto(path)
    where = place(path)
    raw = bytearray(path.read_bytes())
    raw[len(raw) // 2 : len(raw) // 2 + 2000] = b"\xff" * 2000
    path.write_bytes(raw)
    with pytest.raises(SetAsideError) as caught:
        read_plane(where, LIMIT)
    assert caught.value.reason == "bad_compression"


def test_no_such_image(tmp_path: Path) -> None:
    """An HDU that is not there, or holds no image, is refused."""
    fits.HDUList([fits.PrimaryHDU(), fits.ImageHDU(IMAGE)]).writeto(tmp_path / "a.fits")
    for hdu in (0, 2):
        with pytest.raises(SetAsideError, match=f"no image in HDU {hdu}"):
            find_image(str(tmp_path / "a.fits"), hdu, LIMIT)


def test_counts_are_recognised(tmp_path: Path) -> None:
    """Whole numbers have a quantum however they are stored; other pixels, padding and lossy tiles have none."""
    counts = RNG.poisson(5.0, (40, 50))
    images = {"int": (counts.astype(np.int16), 1.0), "float": (counts.astype(np.float32), 1.0), "real": (IMAGE, 0.0),
              "zeros": (np.zeros((40, 50), np.float32), 0.0)}  # fmt: skip
    for name, (image, quantum) in images.items():
        fits.PrimaryHDU(image).writeto(tmp_path / f"{name}.fits")
        assert read_plane(place(tmp_path / f"{name}.fits"), LIMIT).quantum == quantum
    blank = counts.astype(np.float64)
    blank[:, 20:30] = np.nan
    fits.PrimaryHDU(blank).writeto(tmp_path / "blank.fits")
    assert read_plane(place(tmp_path / "blank.fits"), LIMIT).quantum == 1.0
    fits.HDUList([fits.PrimaryHDU(), fits.CompImageHDU(IMAGE)]).writeto(tmp_path / "a.fits.fz")
    assert read_plane(place(tmp_path / "a.fits.fz", 1), LIMIT).quantum == 0.0
