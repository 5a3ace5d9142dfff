"""HDUs, planes and units: structure of FITS files against astropy's reader, and the rules for axes."""

from __future__ import annotations

import contextlib
import io
from pathlib import Path

import numpy as np
import pytest
from astropy.io import fits
from hypothesis import given
from hypothesis import strategies as st

from hindlight.facts import FrameFacts, PlaneAxes
from hindlight.headers import SetAsideError, facts_of, fold_unit, planes, read_hdus
from hindlight.plugin import Dialect
from made import cards_of, hdus_of, header, image, write


class Memory:
    """Bytes in memory as a source."""

    def __init__(self, data: bytes) -> None:
        self.data = data

    def read_at(self, offset: int, length: int) -> bytes:
        """Some bytes."""
        return self.data[offset : offset + length]

    def reaches(self, end: int) -> bool:
        """Whether there are so many."""
        return len(self.data) >= end


def reason(data: bytes) -> tuple[str, int, int]:
    """The reason for which bytes are set aside, the HDU named, and how many HDUs came before."""
    good = 0
    try:
        for _ in read_hdus(Memory(data)):
            good += 1
    except SetAsideError as error:
        return error.reason, error.hdu, good
    raise AssertionError("nothing was set aside")


def written(*hdus: object) -> bytes:
    """The bytes of a file of HDUs."""
    stream = io.BytesIO()
    fits.HDUList(list(hdus)).writeto(stream)
    return stream.getvalue()


def many() -> bytes:
    """A file of a primary HDU, two images, a table and a compressed image."""
    scaled = fits.ImageHDU(np.arange(12, dtype=np.int16).reshape(3, 4), header(BLANK=7))
    scaled.header["BSCALE"], scaled.header["BZERO"] = 0.5, 10.0
    table = fits.BinTableHDU.from_columns([fits.Column("a", "J", array=np.arange(700))])
    packed = fits.CompImageHDU(np.arange(600, dtype=np.int16).reshape(20, 30), header(), compression_type="RICE_1")
    return written(fits.PrimaryHDU(), scaled, fits.ImageHDU(np.ones((2, 5, 6), ">f8")), table, packed)


def test_hdus_lie_where_astropy_finds_them() -> None:
    """Offsets, sizes and shapes of images, tables and compressed images are those of astropy."""
    data = many()
    ours = list(read_hdus(Memory(data)))
    with fits.open(io.BytesIO(data), disable_image_compression=True) as theirs:
        assert [hdu.data_offset for hdu in ours] == [hdu.fileinfo()["datLoc"] for hdu in theirs]
        assert [-(-hdu.data_bytes // 2880) * 2880 for hdu in ours] == [hdu.fileinfo()["datSpan"] for hdu in theirs]
    assert [hdu.is_image for hdu in ours] == [False, True, True, False, True]
    assert [hdu.axes for hdu in ours if hdu.is_image] == [(4, 3), (6, 5, 2), (30, 20)]
    assert [hdu.bitpix for hdu in ours if hdu.is_image] == [16, -64, 16]
    assert [hdu.compressed for hdu in ours] == [False, False, False, False, True]


def test_scaling() -> None:
    """Scale, zero point and the stored value that means none; a blank in a floating-point image means nothing."""
    scaled = list(read_hdus(Memory(many())))[1]
    assert (scaled.bscale, scaled.bzero, scaled.blank) == (0.5, 10.0, 7)
    data = written(fits.PrimaryHDU(np.ones((3, 4), np.float32), header(BLANKS=7)))
    floats = next(read_hdus(Memory(data.replace(b"BLANKS  =", b"BLANK   ="))))
    assert (floats.bscale, floats.bzero, floats.blank) == (1.0, 0.0, None)


def test_compressed_image_has_the_cards_of_the_image() -> None:
    """A tile-compressed image is described as the image that it holds, not as the table."""
    packed = list(read_hdus(Memory(many())))[4]
    assert [packed.cards.get(key) for key in ("NAXIS", "NAXIS1", "NAXIS2", "BITPIX")] == [2, 30, 20, 16]
    assert packed.cards.text("BUNIT") == "Jy/beam"


def test_random_groups_are_no_image(tmp_path: Path) -> None:
    """Visibilities written as random groups have data, and no image."""
    groups = fits.GroupData(np.ones((4, 1, 1, 1, 3), np.float32), parnames=["UU"], pardata=[np.ones(4)], bitpix=-32)
    fits.GroupsHDU(groups).writeto(tmp_path / "a.fits")
    (hdu,) = hdus_of(tmp_path / "a.fits")
    assert not hdu.is_image
    assert hdu.data_bytes == 4 * 4 * 4


def test_long_header() -> None:
    """A header longer than the first read is read to its end."""
    head = header()
    for number in range(900):
        head[f"KEY{number}"] = number
    data = written(fits.PrimaryHDU(np.ones((3, 4), np.float32), head), fits.ImageHDU(np.ones((5, 4)), header()))
    first, second = read_hdus(Memory(data))
    assert first.cards.integer("KEY899") == 899
    assert second.axes == (4, 5)


def test_zeros_after_the_last_hdu_are_padding() -> None:
    """Blank bytes at the end, as tapes leave them, are nothing."""
    assert len(list(read_hdus(Memory(many() + bytes(28800))))) == 5


def test_data_without_padding_are_whole() -> None:
    """A file that ends with its data, without the last block's padding, has lost nothing."""
    data = written(fits.PrimaryHDU(np.ones((3, 4), np.float32), header()))
    first = next(read_hdus(Memory(data)))
    assert len(list(read_hdus(Memory(data[: first.data_offset + 48])))) == 1


@pytest.mark.parametrize(
    ("data", "expected"),
    [
        (b"", ("empty_file", -1, 0)),
        (b"not a FITS file at all", ("not_fits", -1, 0)),
        (bytes(2880), ("not_fits", -1, 0)),
        (b"SIMPLE  =                    T".ljust(2880), ("bad_header", 0, 0)),
        (b"SIMPLE  =                    T".ljust(80) + b"END".ljust(2800), ("bad_header", 0, 0)),
        (many()[:-2880], ("truncated", 4, 4)),
        (many()[: 2880 + 1000], ("bad_header", 1, 1)),
        (many() + b"left over from another file", ("bad_header", 5, 5)),
    ],
)
def test_broken_files(data: bytes, expected: tuple[str, int, int]) -> None:
    """What is wrong with a file is said with the HDU, after the good ones before it were given."""
    assert reason(data) == expected


@pytest.mark.parametrize(
    ("key", "value"), [("BITPIX", 17), ("NAXIS", "two"), ("NAXIS1", -4), ("NAXIS2", 3.5), ("GCOUNT", -1)]
)
def test_impossible_structure(key: str, value: object) -> None:
    """A header whose structure is impossible cannot be parsed."""
    head = fits.PrimaryHDU(np.ones((3, 4), np.float32), header()).header
    text = head.tostring(padding=False)
    card = fits.Card(key, value).image
    at = next((i for i in range(0, len(text), 80) if text[i : i + 8].rstrip() == key), 400)
    data = (text[:at] + card + text[at + 80 * (key != "GCOUNT") :]).encode().ljust(5760) + bytes(2880)
    assert reason(data)[0] == "bad_header"


@given(st.binary(max_size=6000))
def test_no_bytes_are_an_error(tail: bytes) -> None:
    """Whatever follows a good beginning, files are read or set aside, and nothing else is raised."""
    with contextlib.suppress(SetAsideError):
        list(read_hdus(Memory(b"SIMPLE  =                    T".ljust(80) + tail)))


# --- planes


def test_plain_image_is_one_plane() -> None:
    """An image of two axes is its only plane."""
    (plane,) = planes(image((12, 16)))
    assert (plane.index, plane.lead, plane.width, plane.height) == (0, (), 16, 12)
    assert plane.axes == PlaneAxes()


def test_axes_of_length_one() -> None:
    """Frequency and Stokes axes of length one tell what the plane is."""
    cards = {"CTYPE3": "FREQ", "CRVAL3": 1.4e9, "CDELT3": 1e6, "CRPIX3": 1.0, "CUNIT3": "Hz", "CTYPE4": "STOKES"}
    (plane,) = planes(image((1, 1, 12, 16), **cards, CRVAL4=4.0, CDELT4=1.0, CRPIX4=1.0))
    assert plane.lead == (0, 0)
    assert plane.axes.values == {"FREQ": 1.4e9, "STOKES": 4.0}
    assert plane.axes.units == {"FREQ": "Hz", "STOKES": ""}
    assert plane.axes.time_axis == ""


def test_axes_that_only_the_coordinates_have() -> None:
    """WCSAXES may exceed NAXIS: the coordinates then have axes that the data have not (FITS 4.0, 8.2)."""
    (plane,) = planes(image((12, 16), WCSAXES=3, CTYPE3="FREQ", CRVAL3=8e8, CDELT3=1e6, CRPIX3=1.0))
    assert plane.lead == ()
    assert plane.axes.values == {"FREQ": 8e8}


def test_cube_over_frequency_and_stokes() -> None:
    """Planes are counted in storage order, each with its own coordinates, and `lead` picks them as NumPy does."""
    cards = {"CTYPE3": "FREQ", "CRVAL3": 1e9, "CDELT3": 1e6, "CRPIX3": 2.0, "CTYPE4": "STOKES", "CRVAL4": 1.0}
    found = planes(image((2, 3, 12, 16), **cards, CDELT4=1.0, CRPIX4=1.0))
    data = np.arange(2 * 3 * 12 * 16).reshape(2, 3, 12, 16)
    assert [plane.index for plane in found] == [0, 1, 2, 3, 4, 5]
    assert [plane.axes.values["FREQ"] for plane in found] == [0.999e9, 1e9, 1.001e9] * 2
    assert [plane.axes.values["STOKES"] for plane in found] == [1.0] * 3 + [2.0] * 3
    for plane in found:
        assert data[plane.lead].ravel()[0] == plane.index * 12 * 16


def test_cube_over_time() -> None:
    """A longer axis of time gives each plane its own."""
    found = planes(image((4, 12, 16), CTYPE3="UTC", CRVAL3=5.0, CDELT3=10.0, CRPIX3=1.0, CUNIT3="s"))
    assert [plane.axes.values["UTC"] for plane in found] == [5.0, 15.0, 25.0, 35.0]
    assert {plane.axes.time_axis for plane in found} == {"UTC"}


@pytest.mark.parametrize("cards", [{}, {"CRVAL3": 5.0}, {"CRVAL3": 5.0, "CDELT3": 0.0}, {"CTYPE3": "TIME-TAB"}])
def test_time_axis_without_coordinates(cards: dict[str, object]) -> None:
    """Planes along a time axis without usable coordinates have none: they are never spread over the span."""
    found = planes(image((4, 12, 16), **({"CTYPE3": "TIME"} | cards)))
    assert [plane.axes.values for plane in found] == [{}] * 4
    assert {plane.axes.time_axis for plane in found} == {"TIME"}


def test_step_through_the_matrix() -> None:
    """The step of an axis is CD, or CDELT times PC."""
    cards: dict[str, object] = {"CTYPE3": "FREQ", "CRVAL3": 1e9, "CRPIX3": 1.0, "CDELT1": None, "CDELT2": None}
    linear = {"CD1_1": -0.01, "CD2_2": 0.01, "CD3_3": 2e6}
    assert planes(image((2, 12, 16), **cards, **linear))[1].axes.values["FREQ"] == 1.002e9
    assert planes(image((2, 12, 16), **cards, CDELT3=1e6, PC3_3=3.0))[1].axes.values["FREQ"] == 1.003e9


def test_celestial_axes_after_one_of_length_one() -> None:
    """The celestial pair may stand anywhere, as long as nothing longer is stored inside it."""
    cards = {"CTYPE1": "STOKES", "CRVAL1": 1.0, "CDELT1": 1.0, "CTYPE2": "RA---SIN", "CTYPE3": "DEC--SIN"}
    (plane,) = planes(image((12, 16, 1), **cards))
    assert (plane.width, plane.height, plane.lead) == (16, 12, ())


@pytest.mark.parametrize(
    ("shape", "cards", "why"),
    [
        ((12, 16), {"CTYPE1": None, "CTYPE2": None}, "no_wcs"),
        ((12, 16), {"CTYPE1": "LINEAR", "CTYPE2": "LINEAR"}, "no_wcs"),
        ((12, 16), {"CTYPE2": "RA---SIN"}, "no_wcs"),
        ((12, 16), {"CTYPE2": "FREQ", "CTYPE3": "DEC--SIN", "WCSAXES": 3}, "no_wcs"),
        ((3, 12, 16), {}, "unknown_axis"),
        ((3, 12, 16), {"CTYPE3": "VRAD", "CRVAL3": 0.0, "CDELT3": 1.0}, "unknown_axis"),
        ((3, 12, 16), {"CTYPE3": "FREQ", "CRVAL3": 1e9}, "unknown_axis"),
        ((3, 12, 16), {"CTYPE3": "FREQ-LOG", "CRVAL3": 1e9, "CDELT3": 1e6}, "unknown_axis"),
        ((3, 12, 16), {"CTYPE3": "STOKES", "CDELT3": 1.0}, "unknown_axis"),
        ((12, 16, 2), {"CTYPE1": "FREQ", "CTYPE2": "RA---SIN", "CTYPE3": "DEC--SIN"}, "unknown_axis"),
    ],
)
def test_axes_that_are_refused(shape: tuple[int, ...], cards: dict[str, object], why: str) -> None:
    """No celestial pair, an axis that is none of the known kinds, or one whose planes could not be told apart."""
    with pytest.raises(SetAsideError) as caught:
        planes(image(shape, **cards))
    assert caught.value.reason == why
    assert len(caught.value.detail) > 20


def test_planes_of_a_file(tmp_path: Path) -> None:
    """What planes say of a written cube is what astropy reads from it."""
    cards = {"CTYPE3": "FREQ", "CRVAL3": 1e9, "CDELT3": 1e6, "CRPIX3": 1.0}
    path = write(tmp_path / "a.fits", (3, 12, 16), **cards)
    (hdu,) = hdus_of(path)
    with fits.open(path) as theirs:
        world = theirs[0].header
        for plane in planes(hdu):
            assert theirs[0].data[plane.lead].shape == (plane.height, plane.width)
            assert plane.axes.values["FREQ"] == world["CRVAL3"] + plane.index * world["CDELT3"]


# --- dialects


class First(Dialect):
    """Reads headers that have a MARK."""

    def recognises(self, cards):
        """Whether there is a MARK."""
        return "MARK" in cards

    def read(self, cards, axes):
        """Only the instrument."""
        return FrameFacts(instrument=cards.text("MARK"))


class Second(First):
    """Reads any header."""

    def recognises(self, cards):
        """Always."""
        return True


def test_dialects_are_asked_in_order() -> None:
    """The first dialect that recognises a header reads it; none may."""
    marked, plain = cards_of(header(MARK="x")), cards_of(header())
    assert facts_of(marked, PlaneAxes(), [First(), Second()]) == ("first", FrameFacts(instrument="x"))
    assert facts_of(plain, PlaneAxes(), [First(), Second()]) == ("second", FrameFacts())
    assert facts_of(plain, PlaneAxes(), [First()]) is None


# --- units


@pytest.mark.parametrize(
    ("text", "folded"),
    [
        ("JY/BEAM", "Jy/beam"), ("Jy beam-1", "Jy/beam"), ("JY/BM", "Jy/beam"), ("beam-1 Jy", "Jy/beam"),
        ("JY / BEAM", "Jy/beam"), ("Jy.beam^-1", "Jy/beam"), ("Jy*beam**(-1)", "Jy/beam"), (" Jy/beam ", "Jy/beam"),
        ("mJy/beam", "mJy/beam"), ("mjy/beam", "mJy/beam"), ("uJy/beam", "uJy/beam"), ("\xb5Jy/beam", "uJy/beam"),
        ("MJY/BEAM", "MJY/BEAM"), ("JY/PIXEL", "Jy/pixel"), ("Jy/pix", "Jy/pixel"), ("JY/SR", "Jy/sr"),
        ("MJy/sr", "MJy/sr"), ("MJY/SR", "MJy/sr"), ("Jy", "Jy"), ("K", "K"), ("Kelvin", "K"), ("mK", "mK"),
        ("COUNTS", "count"), ("ct", "count"), ("counts/s", "count/s"), ("ADU", "adu"), ("DN", "adu"),
        ("DN/s", "adu/s"), ("ELECTRONS", "electron"), ("E-/S", "electron/s"), ("electron s-1", "electron/s"),
        ("", ""), ("mag", "mag"), ("10**-3 Jy", "10**-3 Jy"), ("W.U.", "W.U."),
    ],
)  # fmt: skip
def test_units_have_one_spelling(text: str, folded: str) -> None:
    """Spellings met in archives are one unit; what is ambiguous or unknown stays as it is."""
    assert fold_unit(text) == folded


@given(st.text(max_size=20))
def test_folding_is_final(text: str) -> None:
    """A folded unit folds to itself, and no text is an error."""
    assert fold_unit(fold_unit(text)) == fold_unit(text)
