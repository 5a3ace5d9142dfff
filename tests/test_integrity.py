"""Checksums: sound files pass, a changed byte anywhere is said with its HDU and sum, and what is not verified is said.

Good sums are astropy's; files of its own tests, made by others, are read too.
"""

from __future__ import annotations

import gzip
import io
import tracemalloc
from pathlib import Path
from typing import Any

import astropy.io.fits
import numpy as np
import pytest
from astropy.io import fits

from hindlight import integrity
from hindlight.archive import WalkResult, walk
from hindlight.files import open_source
from hindlight.headers import read_hdus
from hindlight.integrity import ALL_ONES, Verdict, Verifier
from hindlight.settings import Settings, settings_from
from hindlight.summary import words_of
from hindlight_plugins.standard_headers import StandardHeaders
from made import header

BLOCK = 2880
SHAPE = (40, 50)
CUBE = {"CTYPE3": "FREQ", "CRVAL3": 1e9, "CDELT3": 1e8, "CRPIX3": 1.0, "FREQ": None}
FOREIGN = Path(astropy.io.fits.__file__).parent
COMPRESSED = FOREIGN / "hdu" / "compressed" / "tests" / "data"


def image(shape: tuple[int, ...] = SHAPE, seed: int = 1, kind: Any = fits.PrimaryHDU, **cards: object) -> Any:
    """An HDU with an image of whole numbers."""
    return kind(np.random.default_rng(seed).normal(0, 99, shape).astype(np.int16), header(**cards))


def written(*hdus: Any, checksum: bool | str = True) -> bytes:
    """The bytes of a file of HDUs, with both sums unless said otherwise."""
    stream = io.BytesIO()
    fits.HDUList(list(hdus)).writeto(stream, checksum=checksum)
    return stream.getvalue()


def flipped(data: bytes, place: int) -> bytes:
    """The same with one bit of a byte changed."""
    return data[:place] + bytes([data[place] ^ 1]) + data[place + 1 :]


def with_value(data: bytes, key: str, text: str) -> bytes:
    """The same with the value of a card replaced, letter by letter."""
    at = data.index(f"{key:<8}=".encode())
    return data[:at] + f"{key:<8}= {text}".encode().ljust(80) + data[at + 80 :]


def walked(folder: Path, files: dict[str, bytes], on: bool = True, **settings: Any) -> WalkResult:
    """A walk over files with checksums verified, or not."""
    for name, data in files.items():
        (folder / name).write_bytes(data)
    chosen = settings_from({"inventory": {"verify_checksums": on}, **settings}, "test")
    return walk([str(folder)], [StandardHeaders()], chosen)


def unverified(found: WalkResult) -> list[bool]:
    """Whether each frame says that its sums were not verified."""
    return ["unverified" in words_of(text) for text in found.frames["assumptions"]]


def said(found: WalkResult) -> list[tuple[int, str, str]]:
    """HDU, reason and detail of what was set aside."""
    return [(row["hdu"], row["reason"], row["detail"]) for row in found.rejects]


def tiles(seed: int = 1) -> bytes:
    """A tile-compressed image with sums of the table that holds it."""
    return written(fits.PrimaryHDU(), image(seed=seed, kind=fits.CompImageHDU))


# --- the sums


def test_example_of_the_standard() -> None:
    """The encoded complement of 868229149 is hcHjjc9ghcEghc9g (FITS 4.0, appendix J.3, from memory).

    With it in the place of sixteen zeros a header that summed to that number sums to negative zero.
    """
    data = bytearray(written(fits.PrimaryHDU()))
    data = bytearray(with_value(with_value(bytes(data), "CHECKSUM", f"'{'0' * 16}'"), "DATASUM", "'0'"))
    words = np.frombuffer(data, ">u4")
    filler = (868229149 - int(words[:-1].sum(dtype=np.uint64))) % ALL_ONES
    data[-4:] = int(filler).to_bytes(4, "big")  # beyond END
    whole = with_value(bytes(data), "CHECKSUM", "'hcHjjc9ghcEghc9g'")
    assert verdicts(whole) == [Verdict()]
    assert verdicts(whole.replace(b"hcHjjc9ghcEghc9g", b"hcHjjc9ghcEghc9h"))[0].fault is not None


def verdicts(data: bytes) -> list[Verdict]:
    """What is said of each HDU of the bytes of a file."""
    sums = Verifier(Plain(data))
    return [sums.verdict(hdu) for hdu in read_hdus(Plain(data))]


class Plain:
    """Bytes in memory as a source, with the longest stretch that was asked for at once."""

    def __init__(self, data: bytes) -> None:
        self.data, self.longest, self.asked = data, 0, 0

    def read_at(self, offset: int, length: int) -> bytes:
        """Up to so many bytes; never backwards."""
        assert offset >= self.asked
        self.asked, self.longest = offset, max(self.longest, length)
        return self.data[offset : offset + length]

    def reaches(self, end: int) -> bool:
        """Whether they go so far."""
        return len(self.data) >= end


def test_carries_are_added_at_the_other_end(monkeypatch: pytest.MonkeyPatch) -> None:
    """The sum over small pieces of a large image is astropy's, whose words carry many times."""
    values = np.full((60, 72), 2**31 - 5, np.int32)
    values[3] = -7
    data = written(fits.PrimaryHDU(values, header()))
    monkeypatch.setattr(integrity, "PIECE", 1000)
    assert verdicts(data) == [Verdict()]
    assert verdicts(flipped(data, len(data) - 1))[0].fault is not None


@pytest.mark.parametrize(
    "name",
    ["tests/data/checksum.fits", *(f"hdu/compressed/tests/data/m13{kind}.fits" for kind in ("", "_rice", "_gzip"))],
)
def test_files_that_others_made(name: str) -> None:
    """Plain and tile-compressed files that came with sums are sound; with one bit of their data changed they are not."""
    data = (FOREIGN / name).read_bytes()
    found = verdicts(data)
    assert not any(v.fault or v.unverified for v in found)
    last = [hdu for hdu in read_hdus(Plain(data)) if hdu.is_image][-1]
    (wrong,) = [v.fault.detail for v in verdicts(flipped(data, last.data_offset + 9)) if v.fault]
    assert wrong.startswith(f"HDU {last.index}: DATASUM is {last.cards.text('DATASUM')}, its data sum to ")


def test_a_foreign_file_that_is_wrong() -> None:
    """A file made to have wrong sums is told as astropy tells it, HDU by HDU."""
    path = FOREIGN / "tests" / "data" / "checksum_false.fits"
    sums, found = Verifier(Plain(path.read_bytes())), []
    for hdu in read_hdus(Plain(path.read_bytes())):
        found.append((bool(sums.verdict(hdu).fault), hdu.is_image or not hdu.index))
    with fits.open(path) as theirs:
        expected = [hdu.verify_datasum() == 0 or hdu.verify_checksum() == 0 for hdu in theirs]
    assert any(expected)
    assert [mine for mine, wanted in found if wanted] == [
        bad for bad, (_, wanted) in zip(expected, found, strict=True) if wanted
    ]


@pytest.mark.parametrize(
    ("key", "text", "expected"),
    [
        ("DATASUM", "''", ""),  # blanks: undefined (FITS 4.0, 4.4.2.7)
        ("DATASUM", "'      '", ""),
        ("DATASUM", "", ""),
        ("CHECKSUM", "''", ""),
        ("CHECKSUM", "'0000000000000000'", ""),
        ("CHECKSUM", "/ to come", ""),
        ("CHECKSUM", "'0'", "CHECKSUM is '0', expected 16 letters and digits; header and data sum to 0x"),
        ("CHECKSUM", "'hcHjjc9g\xffcEghc9g'", "CHECKSUM is 'hcHjjc9g"),
        ("CHECKSUM", "'no end", 'CHECKSUM is "\'no end", expected 16 letters'),
        ("CHECKSUM", "'hcHjjc9ghcEghc9g'", "CHECKSUM is 'hcHjjc9ghcEghc9g', header and data sum to 0x"),
        ("DATASUM", "'none'", "DATASUM is 'none', expected a whole number from 0 to 4294967295; its data sum to "),
        ("DATASUM", "'4294967296'", "DATASUM is '4294967296', expected a whole number"),
        ("DATASUM", "-1", "DATASUM is '-1', expected a whole number"),
        ("DATASUM", "12", "DATASUM is 12, its data sum to "),
        ("DATASUM", "T", "DATASUM is 'True', expected a whole number"),
    ],
)
def test_values_of_the_cards(key: str, text: str, expected: str) -> None:
    """A card that states nothing leaves the header unverified; one with another value is wrong, and says how."""
    data = written(image(), checksum="datasum")
    if key == "CHECKSUM":
        data = data.replace(b"DATASUM ", b"CHECKSUM")
    (found,) = verdicts(with_value(data, key, text))
    assert found.unverified == (not expected)
    assert (found.fault is not None) == bool(expected)
    if found.fault is not None:
        assert found.fault.detail.startswith(f"HDU 0: {expected}")


def test_a_number_is_as_good_as_text() -> None:
    """A DATASUM that is written as a number counts; so does one card beside another that states nothing."""
    data = written(image(), checksum="datasum")
    (hdu,) = read_hdus(Plain(data))
    assert verdicts(with_value(data, "DATASUM", hdu.cards.text("DATASUM"))) == [Verdict()]
    data = with_value(written(image()), "CHECKSUM", "''")
    assert verdicts(data) == [Verdict()]


# --- the walk


@pytest.mark.parametrize(
    "name", ["a.fits", "a.fits.gz", "cube.fits", "tiles.fits.fz", "several.fits", "datasum.fits", "bare.fits"]
)
def test_sound_files(tmp_path: Path, name: str) -> None:
    """Sound frames say `unverified` only if their headers have sums and these were not verified."""
    data = {
        "a.fits": written(image()),
        "a.fits.gz": gzip.compress(written(image())),
        "cube.fits": written(image((3, *SHAPE), **CUBE)),
        "tiles.fits.fz": tiles(),
        "several.fits": written(fits.PrimaryHDU(), image(kind=fits.ImageHDU), image(seed=2, kind=fits.ImageHDU)),
        "datasum.fits": written(image(), checksum="datasum"),
        "bare.fits": written(image(), checksum=False),
    }[name]
    n = {"cube.fits": 3, "several.fits": 2}.get(name, 1)
    on, off = (walked(tmp_path, {name: data}, on) for on in (True, False))
    assert (on.rejects, off.rejects) == ([], [])
    assert (unverified(on), unverified(off)) == ([False] * n, [name != "bare.fits"] * n)


def test_off_by_default(tmp_path: Path) -> None:
    """Without the setting a damaged file is a frame, and says that nobody looked."""
    (tmp_path / "a.fits").write_bytes(flipped(written(image()), 2 * BLOCK + 500))
    found = walk([str(tmp_path)], [StandardHeaders()], Settings())
    assert (unverified(found), found.rejects) == ([True], [])


def test_a_changed_pixel(tmp_path: Path) -> None:
    """It is wrong by both sums, with what was expected and got; the file beside it is a frame."""
    data = written(image())
    (hdu,) = read_hdus(Plain(data))
    place = hdu.data_offset + 1001
    bad = flipped(data, place)
    found = walked(tmp_path, {"a.fits": bad, "b.fits": data})
    total = int(np.frombuffer(bad[hdu.data_offset :], ">u4").sum(dtype=np.uint64)) % ALL_ONES
    ((number, reason, detail),) = said(found)
    assert (number, reason) == (0, "checksum")
    assert f"HDU 0: DATASUM is {hdu.cards.text('DATASUM')}, its data sum to {total}; CHECKSUM is '" in detail
    step = int(bad[place] - data[place]) << 8 * (3 - place % 4)  # only one bit of one word differs
    assert detail.endswith(f"header and data sum to {(ALL_ONES + step) % ALL_ONES:#010x}, expected 0xffffffff")
    assert found.frames["path"].tolist() == ["b.fits"]


def test_changed_padding(tmp_path: Path) -> None:
    """What fills the last block belongs to the data."""
    data = written(image())
    (hdu,) = read_hdus(Plain(data))
    assert hdu.data_offset + hdu.data_bytes < len(data) - 1
    found = walked(tmp_path, {"a.fits": flipped(data, len(data) - 1)})
    assert [row[:2] for row in said(found)] == [(0, "checksum")]


def test_a_changed_header(tmp_path: Path) -> None:
    """It is wrong by the sum of the whole HDU only, and not told where there is none of these."""
    bad = written(image()).replace(b"EXPTIME =                120.0", b"EXPTIME =                180.0")
    ((number, reason, detail),) = said(walked(tmp_path, {"a.fits": bad}))
    assert (number, reason) == (0, "checksum")
    assert detail.startswith("HDU 0: CHECKSUM is '")
    bad = written(image(), checksum="datasum").replace(b"              120.0", b"              180.0")
    found = walked(tmp_path, {"a.fits": bad})
    assert (found.rejects, found.frames["exposure_s"].tolist()) == ([], [180.0])


@pytest.mark.parametrize("name", ["a.fits.gz", "cube.fits", "tiles.fits.fz"])
def test_damage_in_other_containers(tmp_path: Path, name: str) -> None:
    """One row for an HDU whatever holds it: gzip (packed after the damage), all planes of a cube, tiles."""
    data = {"a.fits.gz": written(image()), "cube.fits": written(image((3, *SHAPE), **CUBE)), "tiles.fits.fz": tiles()}[
        name
    ]
    last = [hdu for hdu in read_hdus(Plain(data)) if hdu.is_image][-1]
    bad = flipped(data, last.data_offset + last.data_bytes - 3)
    found = walked(tmp_path, {name: gzip.compress(bad) if name.endswith("gz") else bad})
    assert [(number, reason) for number, reason, _ in said(found)] == [(last.index, "checksum")]
    assert len(found.frames["path"]) == 0


def test_sums_of_the_image_within_are_not_looked_at(tmp_path: Path) -> None:
    """ZHECKSUM and ZDATASUM are those of an image before it was compressed: nothing is said of them."""
    packed = image(kind=fits.CompImageHDU, DATASUM="12", CHECKSUM="hcHjjc9ghcEghc9g")
    data = written(fits.PrimaryHDU(), packed, checksum=False)
    assert b"ZDATASUM= '12" in data
    assert b"ZHECKSUM= 'hcHj" in data
    found = walked(tmp_path, {"a.fits.fz": data})
    assert (unverified(found), found.rejects) == ([False], [])


def test_one_of_several(tmp_path: Path) -> None:
    """Of a file with one damaged image the others are frames; a damaged table of something else is not looked at."""
    table = fits.BinTableHDU.from_columns([fits.Column("a", "J", array=np.arange(9))])
    images = [image(seed=seed, kind=fits.ImageHDU) for seed in (1, 2, 3)]
    data = written(fits.PrimaryHDU(), images[0], table, *images[1:])
    layout = list(read_hdus(Plain(data)))
    bad = flipped(flipped(data, layout[3].data_offset), layout[2].data_offset)
    found = walked(tmp_path, {"a.fits": bad})
    assert found.frames["hdu"].tolist() == [1, 4]
    assert [(number, reason) for number, reason, _ in said(found)] == [(3, "checksum")]


def test_a_table_of_good_time(tmp_path: Path) -> None:
    """Damaged, it is set aside and does not count."""
    columns = [fits.Column(key, "D", array=np.array(v), unit="s") for key, v in (("START", [0.0]), ("STOP", [60.0]))]
    table = fits.BinTableHDU.from_columns(columns, name="GTI", header=fits.Header({"MJDREFI": 47237, "TIMEUNIT": "s"}))
    data = written(image(DATE__END="1988-03-17T06:02:00"), table)
    place = list(read_hdus(Plain(data)))[1].data_offset + 8
    sound, bad = walked(tmp_path, {"a.fits": data}), walked(tmp_path, {"a.fits": flipped(data, place + 7)})
    assert [(number, reason) for number, reason, _ in said(bad)] == [(1, "checksum")]
    assert (sound.frames["exposure_s"][0], bad.frames["exposure_s"][0]) == (60.0, 120.0)


@pytest.mark.parametrize("inherit", [None, True, False])
def test_a_primary_header_that_others_need(tmp_path: Path, inherit: bool | None) -> None:
    """Damaged, it takes the images with it that have their date from there, and no others."""
    primary = fits.PrimaryHDU(header=fits.Header({"DATE-OBS": "1988-03-17T06:00:00", "OBJECT": "field 7"}))
    needs = image(kind=fits.ImageHDU, DATE__OBS=None, INHERIT=inherit)
    data = written(primary, needs, image(seed=2, kind=fits.ImageHDU))
    found = walked(tmp_path, {"a.fits": data.replace(b"field 7", b"field 8")})
    first, *more = said(found)
    assert first[:2] == (0, "checksum")
    if inherit is False:
        assert (more, found.frames["hdu"].tolist()) == ([], [1, 2])
        return
    assert [row[:2] for row in more] == [(1, "checksum")]
    assert more[0][2].startswith("HDU 1 takes cards of the primary header, which is damaged: HDU 0: CHECKSUM is '")
    assert found.frames["hdu"].tolist() == [2]


def test_cut_short_is_truncated(tmp_path: Path) -> None:
    """A file that ends too early is that, and no wrong sum; without the last padding it is sound."""
    data = written(image((40, 51)))
    (hdu,) = read_hdus(Plain(data))
    end = hdu.data_offset + hdu.data_bytes
    assert end < len(data)
    found = walked(tmp_path, {"a.fits": data[: end - 1], "b.fits": data[:end]})
    assert [row[:2] for row in said(found)] == [(0, "truncated")]
    assert (found.frames["path"].tolist(), unverified(found)) == (["b.fits"], [False])


def test_gzip_that_says_too_much(tmp_path: Path) -> None:
    """A file whose last bytes tell the right size, but which holds less, is truncated or broken, and no wrong sum."""
    data = written(image((40, 51)))
    size = len(data).to_bytes(4, "little")
    short = gzip.compress(data[: 2 * BLOCK])[:-4] + size
    ended = gzip.compress(data[: 2 * BLOCK]) + bytes(4) + size
    broken = bytearray(gzip.compress(data))
    broken[len(broken) // 2] ^= 0xFF
    found = walked(tmp_path, {"a.fits.gz": short, "b.fits.gz": bytes(broken), "c.fits.gz": ended})
    assert [(row["path"], row["reason"]) for row in found.rejects] == [
        ("a.fits.gz", "bad_compression"), ("b.fits.gz", "bad_compression"), ("c.fits.gz", "truncated"),
    ]  # fmt: skip
    assert len(found.frames["path"]) == 0


def test_limit_of_unpacking(tmp_path: Path) -> None:
    """Verifying goes no further than a gzip file may unpack to."""
    data = written(image((700, 900)))
    limits = {most: {"inventory": {"verify_checksums": True, "unpacked_limit_mb": most}} for most in (1, 3)}
    (tmp_path / "a.fits.gz").write_bytes(gzip.compress(data))
    reasons = [
        [row["reason"] for row in walk([str(tmp_path)], [StandardHeaders()], settings_from(chosen, "test")).rejects]
        for chosen in limits.values()
    ]
    assert reasons == [["bad_compression"], []]


@pytest.mark.parametrize("packed", [False, True])
def test_memory(tmp_path: Path, packed: bool) -> None:
    """An image of 40 MB is verified in pieces, packed or not."""
    data = written(fits.PrimaryHDU(np.arange(10_000_000, dtype=np.int32).reshape(2500, 4000), header()))
    path = tmp_path / "a.fits"
    path.write_bytes(gzip.compress(data, 1) if packed else data)
    del data
    with open_source(str(path), 10**9) as source, open_source(str(path), 10**9) as again:
        sums = Verifier(again)
        tracemalloc.start()
        assert [sums.verdict(hdu) for hdu in read_hdus(source)] == [Verdict()]
        peak = tracemalloc.get_traced_memory()[1]
        tracemalloc.stop()
    assert peak < 8_000_000


# --- companions, continued runs


def test_companions(tmp_path: Path) -> None:
    """A damaged companion sets aside the image in the HDU it belongs to; one that has no sums, or is broken, none."""
    noise = [image(seed=seed, kind=fits.ImageHDU) for seed in (7, 8)]
    data = written(fits.PrimaryHDU(), *noise)
    place = list(read_hdus(Plain(data)))[2].data_offset
    two = written(fits.PrimaryHDU(), *(image(seed=seed, kind=fits.ImageHDU) for seed in (1, 2)))
    single = written(image(seed=9))
    files = {
        "a.fits": two, "a.rms.fits": flipped(data, place),
        "b.fits": two, "b.rms.fits": data,
        "c.fits": written(image(seed=3)), "c.rms.fits": flipped(single, len(single) - BLOCK),
        "d.fits": written(image(seed=4)), "d.rms.fits": written(image(), checksum=False),
        "e.fits": written(image(seed=5)), "e.rms.fits": b"SIMPLE",
    }  # fmt: skip
    on, off = (walked(tmp_path, files, on, companions={"rms": "{stem}.rms.fits"}) for on in (True, False))
    rows = [row for row in on.rejects if row["reason"] != "companion"]
    assert [(row["path"], row["hdu"], row["reason"]) for row in rows] == [
        ("a.fits", 2, "bad_companion"), ("c.fits", 0, "bad_companion"),
    ]  # fmt: skip
    assert rows[0]["detail"].startswith("its rms companion a.rms.fits is damaged: HDU 2: DATASUM is ")
    where = list(zip(on.frames["path"].tolist(), on.frames["hdu"].tolist(), strict=True))
    assert where == [("a.fits", 1), ("b.fits", 1), ("b.fits", 2), ("d.fits", 0), ("e.fits", 0)]
    assert {row["reason"] for row in off.rejects} == {"companion"}


def test_a_run_keeps_the_setting() -> None:
    """It decides which frames are measured, so a run cannot change it; runs from before it was there had it off."""
    on = settings_from({"inventory": {"verify_checksums": True}}, "test").measuring()["inventory"]
    assert (on["verify_checksums"], Settings().measuring()["inventory"]["verify_checksums"]) == (True, False)
