"""Broken archives: whatever lies in a folder, the walk and the whole job go on, and each thing is said with its word.

Every kind of damage is a file of one archive, beside good frames. The archive is walked, and mined in a process of its
own, whose memory is measured; the good frames' measurements must be those of an archive without the damage.
"""

from __future__ import annotations

import gzip
import json
import os
import re
import socket
import subprocess
import sys
import zlib
from collections.abc import Callable
from pathlib import Path
from typing import Any, NamedTuple

import numpy as np
import pyarrow.parquet as pq
import pytest
from astropy.io import fits
from astropy.table import Table

import skies
from hindlight import cli, files, tasks
from hindlight.archive import WalkResult, walk
from hindlight.errors import UsageError
from hindlight.facts import visible
from hindlight.files import list_files, local_path, open_source, path_text
from hindlight.headers import SetAsideError, read_hdus
from hindlight.schema import ASSUMPTIONS, REASONS, Flag
from hindlight.settings import Inventory, Settings
from hindlight.summary import words_of
from hindlight_plugins.standard_headers import StandardHeaders
from studies import corruption

MEMORY_MB = 1000
SIZE = 64
SKY = skies.Sky(n_frames=10, size=SIZE, instrument="good array")
ODD = skies.Sky(n_frames=1, size=SIZE, instrument="odd array")
BLOCK = 2880
NOISE = skies.noise_image(ODD, np.random.default_rng(3)).astype(np.float32)

Data = bytes | Callable[[], bytes]  # large ones are made when they are written


# --- making files


def head(**cards: object) -> fits.Header:
    """A good header with some cards changed; None leaves one out, `__` stands for `-`."""
    made = skies.header(ODD, 52000.25, (0.0, 0.0))
    for key, value in cards.items():
        name = key.replace("__", "-")
        if value is None:
            made.remove(name)
        else:
            made[name] = value
    return made


def good(data: np.ndarray = NOISE, **cards: object) -> bytes:
    """The bytes of a good file, or of one that differs in a few cards."""
    return corruption.written(fits.PrimaryHDU(data, head(**cards)))


def raw(*cards: str, data: bytes | np.ndarray = NOISE, without: tuple[str, ...] = ()) -> bytes:
    """A file whose cards are put in, letter by letter, in the place of those of the same keyword, or at the end."""
    own = [card.image for card in fits.PrimaryHDU(NOISE, head()).header.cards]
    keys = [card[:8] for card in cards]
    kept = [c for c in own if c[:8] not in keys and c[:8].rstrip() not in without]
    structure = [c for c in cards if c[:8].rstrip() in ("SIMPLE", "BITPIX", "NAXIS") or c.startswith("NAXIS")]
    first = [c for c in kept if c[:8].rstrip() in ("SIMPLE", "BITPIX", "NAXIS", "NAXIS1", "NAXIS2")]
    rest = [c for c in kept if c not in first]
    text = "".join(
        c.ljust(80)[:80] for c in [*first, *structure, *rest, *(c for c in cards if c not in structure), "END"]
    )
    block = text.encode("latin-1")
    pixels = data if isinstance(data, bytes) else data.astype(">f4").tobytes()
    return padded(block, b" ") + padded(pixels, b"\0")


def card(key: str, value: str) -> str:
    """A card of exactly this text as value."""
    return f"{key:<8}= {value:>20}".ljust(80)


def padded(data: bytes, fill: bytes) -> bytes:
    """Up to whole blocks."""
    return data + fill * (-len(data) % BLOCK)


def tiles(header_: fits.Header | None = None, **options: Any) -> bytes:
    """A tile-compressed file."""
    image = (NOISE * 50).astype(np.int16)
    made = fits.CompImageHDU(image, header_ or head(), compression_type="RICE_1", **options)
    return corruption.written(fits.PrimaryHDU(), made)


def with_card(data: bytes, key: str, value: str) -> bytes:
    """The same file with the first card of a keyword replaced."""
    at = data.index(f"{key:<8}=".encode())
    return data[:at] + card(key, value).encode() + data[at + 80 :]


def bomb(gigabytes: int, members: int) -> bytes:
    """A gzip file that unpacks to so much, most of it zeros, and is small itself."""
    first = gzip.compress(raw(card("NAXIS1", "1000000"), card("NAXIS2", str(gigabytes * 250)), data=b""), mtime=0)
    packer = zlib.compressobj(9, zlib.DEFLATED, 31)
    one = b"".join([*(packer.compress(bytes(1 << 20)) for _ in range(16)), packer.flush()])  # 16 MiB of zeros
    return first + one * members


def cube(n_planes: int) -> bytes:
    """Planes of two pixels by two."""
    axes = {"CTYPE3": "TIME", "CRVAL3": 0.0, "CDELT3": 1.0, "CRPIX3": 1.0, "CUNIT3": "s"}
    return good(np.zeros((n_planes, 2, 2), np.float32), **axes)


def many_cards(n: int) -> bytes:
    """A header of very many cards."""
    return raw(*(card(f"K{number:X}", str(number)) for number in range(n)))


def flipped(data: bytes, place: int, to: bytes) -> bytes:
    """The same with some bytes replaced."""
    return data[:place] + to + data[place + len(to) :]


SIP = {"CTYPE1": "RA---TAN-SIP", "CTYPE2": "DEC--TAN-SIP"}
TABLE = fits.TableHDU.from_columns([fits.Column("a", "I4", array=np.arange(3))])
GZIPPED = gzip.compress(good(), mtime=0)
TILES = tiles()
ROWS = TILES.rindex(b"END" + b" " * 77) // BLOCK * BLOCK + BLOCK

# What is wrong with a file: what it is made of, and the word with which it is set aside.
SET_ASIDE: dict[str, tuple[Data, str]] = {
    "header cut.fits": (good()[:1000], "bad_header"),
    "data cut.fits": (good()[:-BLOCK], "truncated"),
    "no bytes.fits": (b"", "empty_file"),
    "text.fits": (b"this is no image\n" * 300, "not_fits"),
    "zeros.fits": (bytes(10 * BLOCK), "not_fits"),
    "999 axes of 1e60.fits": (
        raw(card("NAXIS", "999"), *(card(f"NAXIS{i}", "1" + 60 * "0") for i in range(1, 1000))), "bad_header",
    ),
    "1000 axes.fits": (raw(card("NAXIS", "1000")), "bad_header"),
    "NAXIS negative.fits": (raw(card("NAXIS", "-2")), "bad_header"),
    "NAXIS1 negative.fits": (raw(card("NAXIS1", "-64")), "bad_header"),
    "NAXIS1 missing.fits": (raw(without=("NAXIS1",)), "bad_header"),
    "huge.fits": (raw(card("NAXIS1", "1000000000"), card("NAXIS2", "1000000000")), "truncated"),
    "huger.fits": (raw(card("NAXIS1", "9" * 20), card("NAXIS2", "9" * 20)), "bad_header"),
    "PCOUNT makes up.fits": (
        raw(card("NAXIS1", "1000000000"), card("PCOUNT", "-63999995904"), card("GCOUNT", "1")), "bad_header",
    ),
    "GCOUNT 0.fits": (raw(card("NAXIS1", "1000000000"), card("PCOUNT", "0"), card("GCOUNT", "0")), "bad_header"),
    "BITPIX 7.fits": (raw(card("BITPIX", "7")), "bad_header"),
    "no END.fits": (good().replace(b"END" + b" " * 77, b" " * 80), "bad_header"),
    "END too early.fits": (flipped(good(), 160, b"END".ljust(80)), "bad_header"),
    "END within a card.fits": (good().replace(b"END" + b" " * 77, b" " * 40 + b"END" + b" " * 37), "bad_header"),
    "no coordinates.fits": (corruption.written(fits.PrimaryHDU(NOISE)), "no_wcs"),
    "CD all zero.fits": (good(CDELT1=None, CDELT2=None, CD1_1=0.0, CD2_2=0.0), "bad_wcs"),
    "CD rank one.fits": (good(CDELT1=None, CDELT2=None, CD1_1=1e-3, CD1_2=1e-3, CD2_1=1e-3, CD2_2=1e-3), "bad_wcs"),
    "CRVAL NaN.fits": (raw(card("CRVAL1", "NaN")), "bad_wcs"),
    "CRVAL Inf.fits": (raw(card("CRVAL2", "Infinity")), "bad_wcs"),
    "CDELT 0.fits": (good(CDELT1=0.0), "bad_wcs"),
    "CDELT 1e299.fits": (raw(card("CDELT1", "1E299")), "bad_wcs"),
    "CRPIX 1e30.fits": (raw(card("CRPIX1", "1E30")), "bad_wcs"),
    "CRPIX 1e30 TAN.fits": (good(CTYPE1="RA---TAN", CTYPE2="DEC--TAN", CRPIX1=1e30), "bad_wcs"),
    "RA 1e10.fits": (good(CRVAL1=1e10), "bad_wcs"),
    "Dec 1e10.fits": (good(CRVAL2=1e10), "bad_wcs"),
    "WCSAXES huge.fits": (good(WCSAXES=30000, A_ORDER=2, B_ORDER=2, **SIP), "bad_wcs"),
    "SIP of order 1e6.fits": (good(A_ORDER=1_000_000, B_ORDER=1_000_000, **SIP), "bad_wcs"),
    "look-up table missing.fits": (good(CPDIS1="LOOKUP", CPDIS2="LOOKUP"), "bad_wcs"),
    "unclosed string.fits": (raw("CTYPE1  = 'RA---SIN"), "no_wcs"),
    "BSCALE 0.fits": (raw(card("BSCALE", "0.0")), "bad_header"),
    "BSCALE NaN.fits": (raw(card("BSCALE", "NaN")), "bad_header"),
    "BZERO text.fits": (raw("BZERO   = 'none    '"), "bad_header"),
    "a million planes.fits": (lambda: cube(1_000_000), "too_many_planes"),
    "random groups.fits": (
        raw(card("NAXIS1", "0"), card("NAXIS2", "3"), card("GROUPS", "T"), card("PCOUNT", "1"), card("GCOUNT", "4"),
            data=bytes(64)), "no_image",
    ),
    "image without axes.fits": (corruption.written(fits.PrimaryHDU(), fits.ImageHDU()), "no_image"),
    "ASCII table.fits": (corruption.written(fits.PrimaryHDU(), TABLE), "no_image"),
    "gzip cut short.fits.gz": (GZIPPED[:3000], "bad_compression"),
    "gzip of garbage.fits.gz": (gzip.compress(b"garbage" * 999), "not_fits"),
    "no gzip at all.fits.gz": (b"\x1f\x8b" + b"garbage" * 999, "bad_compression"),
    "gzip of 50 GB.fits.gz": (lambda: bomb(50, 16), "bad_compression"),
    "gzip of 4 GB that goes on.fits.gz": (
        lambda: GZIPPED + gzip.compress(b"x" * BLOCK) + bomb(1, 256), "bad_header",
    ),
    "ZBITPIX 7.fits.fz": (with_card(TILES, "ZBITPIX", "7"), "bad_header"),
    "ZNAXIS1 huge.fits.fz": (with_card(TILES, "ZNAXIS1", "9" * 20), "bad_header"),
    "heap beyond the file.fits.fz": (TILES[:-BLOCK], "truncated"),
}  # fmt: skip

# Frames that come out of the walk, with words, and whose pixels are set aside with a reason when they are measured.
NOT_MEASURED: dict[str, tuple[bytes, str]] = {
    "gzip with bad CRC.fits.gz": (flipped(GZIPPED, len(GZIPPED) - 8, b"\0\1\2\3"), "bad_compression"),
    "tiles beyond the heap.fits.fz": (flipped(TILES, ROWS, b"\x7f" * 512), "bad_compression"),
    "tiles of no size.fits.fz": (with_card(TILES, "ZTILE1", "0"), "bad_compression"),
    "tiles of negative size.fits.fz": (with_card(TILES, "ZTILE2", "-5"), "bad_compression"),
    "tiles unknown.fits.fz": (TILES.replace(b"'RICE_1  '", b"'RICE_9  '"), "bad_compression"),
    "more rows than tiles.fits.fz": (with_card(TILES, "ZNAXIS2", "6400"), "bad_compression"),
}

# Frames that are measured, with words that must be among the assumptions and flags that all measurements carry.
MEASURED: dict[str, tuple[Data, tuple[str, ...], int]] = {
    "all NaN.fits": (good(np.full_like(NOISE, np.nan)), (), Flag.BLANKED),
    "all infinite.fits": (good(np.full_like(NOISE, np.inf)), (), Flag.THIN_BACKGROUND),
    "all alike.fits": (good(np.full_like(NOISE, 7.0)), (), Flag.THIN_BACKGROUND),
    "CRVAL2 at the pole of nothing.fits": (good(CRVAL1=-210.0), (), 0),
    "BLANK on floats.fits": (raw(card("BLANK", "0")), (), 0),
    "BSCALE 1e290.fits": (raw(card("BSCALE", "1E290")), (), Flag.THIN_BACKGROUND),
    "tile of 1e9.fits.fz": (with_card(TILES, "ZTILE1", "1000000000"), (), 0),
    "date 0.fits": (good(DATE__OBS="0000-00-00T00:00:00"), ("no_clock",), 0),
    "date that is none.fits": (good(DATE__OBS="2023-02-30T00:00:00"), ("no_clock",), 0),
    "year 9999.fits": (good(DATE__OBS="9999-12-31T00:00:00"), ("implausible_date", "no_clock"), 0),
    "year 1066.fits": (good(DATE__OBS="1066-10-14T00:00:00"), ("implausible_date", "no_clock"), 0),
    "MJD 1e290.fits": (raw(card("MJD-BEG", "1E290"), without=("DATE-OBS",)), ("implausible_date", "no_clock"), 0),
    "ends before it begins.fits": (good(DATE__END="1999-01-01T00:00:00", DATE__BEG="2001-01-01T00:00:00"),
                                   ("implausible_date",), 0),
    "exposure negative.fits": (good(XPOSURE=-5.0), ("no_exposure",), 0),
    "exposure 1e290.fits": (raw(card("XPOSURE", "1E290")), ("implausible_exposure", "no_exposure"), 0),
    "exposure of years.fits": (good(XPOSURE=1e12), ("implausible_exposure", "no_exposure"), 0),
    "BMAJ negative.fits": (good(BMAJ=-0.01), ("no_beam",), 0),
    "BMAJ NaN.fits": (raw(card("BMAJ", "NaN")), ("no_beam",), 0),
    "BMIN nothing.fits": (good(BMIN=1e-30), ("no_beam",), 0),
    "Stokes 77.fits": (good(NOISE[None], CTYPE3="STOKES", CRVAL3=77.0, CDELT3=1.0, CRPIX3=1.0), (), 0),
    "frequency 0.fits": (good(FREQ=0.0), ("no_frequency",), 0),
    "two CRVAL1.fits": (raw(card("CRVAL1", "150.0"), card("CRVAL1", "15.0")), ("repeated_keyword",), 0),
    "100000 cards.fits": (lambda: many_cards(100_000), (), 0),
    "HIERARCH and CONTINUE.fits": (
        raw("HIERARCH odd array temperature = 4.0", "OBSERVER= 'a long&'", "CONTINUE  ' text'", "CONTINUE"), (), 0,
    ),
    "unclosed comment.fits": (raw("OBJECT  = 'it''s"), (), 0),
    "control characters.fits": (raw("INSTRUME= 'odd\x07\x1b[31m \n\t\0\xff'"), (), 0),
    "markup.fits": (raw("INSTRUME= '<b>\"odd\"</b>&amp;[red]'"), (), 0),
    "padding of tapes.fits": (good() + bytes(7 * BLOCK), (), 0),
}  # fmt: skip

NAMES = ["new\nline", "tab\t", "quote\"'", "<script>alert(1)<script>", "☄️ 😀", "cr\r", "feed\x0c", "esc\x1b[31m",
         " space", "a\\x41", "[red]", "\udcff\udcfe", "\u2028", "-q", "%s{0}", "a,b;c"]  # fmt: skip


def write_odd(folder: Path) -> None:
    """All damaged files of the tables above."""
    folder.mkdir()
    for table in (SET_ASIDE, NOT_MEASURED, MEASURED):
        for name, (data, *_) in table.items():
            (folder / name).write_bytes(data() if callable(data) else data)


def write_names(folder: Path) -> None:
    """A good frame, each of another day, under each difficult name, and a broken one beside it."""
    folder.mkdir()
    for day, name in enumerate(NAMES, 1):
        (folder / f"{name}.fits").write_bytes(good(DATE__OBS=f"2003-05-{day:02d}T01:02:03"))
        (folder / f"{name} broken.fits").write_bytes(b"x")


def write_special(folder: Path) -> None:
    """What is no regular file but called like one."""
    folder.mkdir()
    (folder / "folder.fits").mkdir()
    (folder / "folder.fits/inside.fits").write_bytes(b"")
    os.mkfifo(folder / "pipe.fits")
    (folder / "dangling.fits").symlink_to(folder / "nowhere")
    (folder / "loop.fits").symlink_to(folder / "loop.fits")
    (folder / "up").symlink_to(folder, target_is_directory=True)
    (folder / "device.fits").symlink_to("/dev/zero")
    (folder / "ünlesbar.fits").write_bytes(good())
    (folder / "ünlesbar.fits").chmod(0)
    place = os.getcwd()
    os.chdir(folder)  # the path of a socket may be 100 characters long
    try:
        with socket.socket(socket.AF_UNIX) as made:
            made.bind("socket.fits")
    finally:
        os.chdir(place)


SPECIAL = {"dangling.fits", "device.fits", "folder.fits/inside.fits", "loop.fits", "pipe.fits", "socket.fits"}


@pytest.fixture(scope="module")
def archives(tmp_path_factory: pytest.TempPathFactory) -> tuple[Path, Path]:
    """An archive of good frames alone, and the same with everything broken beside them."""
    clean, mixed = (tmp_path_factory.mktemp(name) for name in ("clean", "mixed"))
    skies.write_sky(clean / "good", SKY, [skies.Source("a", 0.0, 0.0, 8.0)], seed=1)
    (mixed / "good").mkdir()
    for path in sorted((clean / "good").iterdir()):
        data = path.read_bytes()
        (mixed / "good" / path.name).write_bytes(data)
    write_odd(mixed / "odd")
    write_names(mixed / "names")
    write_special(mixed / "special")
    return clean, mixed


@pytest.fixture(scope="module")
def walked(archives: tuple[Path, Path]) -> WalkResult:
    """The walk of the mixed archive."""
    return walk([str(archives[1])], [StandardHeaders()], Settings())


MINE = """
import hashlib, json, pathlib, resource, sys, warnings
warnings.simplefilter("error")
from hindlight import cli
for command in json.loads(sys.argv[1]):
    status = cli.run_command(command)
    tables = b"".join((pathlib.Path(command[-1]) / name).read_bytes() for name in ("rejects.ecsv", "candidates.ecsv"))
    memory = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss // 1024
    print(json.dumps([status, memory, hashlib.sha256(tables).hexdigest()]), flush=True)
"""


class Runs(NamedTuple):
    """A run on good frames alone, one on the mixed archive, which was then continued, and all that was printed.

    `ends` are status, peak memory in MB and a digest of tables of the three commands.
    """

    alone: Path
    mixed: Path
    ends: list[tuple[int, int, str]]
    printed: str


@pytest.fixture(scope="module")
def runs(archives: tuple[Path, Path], tmp_path_factory: pytest.TempPathFactory) -> Runs:
    """Both archives mined, and the mixed one once more, in a process of its own whose memory is measured."""
    folder = tmp_path_factory.mktemp("runs")
    (folder / "t.csv").write_text("name,ra,dec\na,150.0,-30.0\nb,150.03,-30.02\n", encoding="utf-8")
    (folder / "s.toml").write_text("[controls]\nper_field = 20\n", encoding="utf-8")
    rest = ["--targets", str(folder / "t.csv"), "--settings", str(folder / "s.toml"), "--workers", "1", "--out"]
    clean, mixed = (["mine", str(archive), *rest, str(folder / archive.name)] for archive in archives)
    done = subprocess.run(
        [sys.executable, "-c", MINE, json.dumps([clean, mixed, mixed])], capture_output=True, timeout=200, check=False
    )
    printed = (done.stdout + done.stderr).decode("utf-8", "surrogateescape")
    ends = [tuple(json.loads(line)) for line in printed.splitlines() if line.startswith("[")]
    assert len(ends) == 3, printed
    return Runs(Path(clean[-1]), Path(mixed[-1]), ends, printed)


# --- the walk


def test_there_are_many_kinds() -> None:
    """Three score and more kinds of damage."""
    assert len(SET_ASIDE) + len(NOT_MEASURED) + len(MEASURED) + len(SPECIAL) + len(NAMES) > 100


@pytest.mark.parametrize("name", sorted(SET_ASIDE))
def test_set_aside_with_the_right_word(walked: WalkResult, name: str) -> None:
    """A file that cannot be used is a row of the rejects with its reason and a printable sentence."""
    rows = [row for row in walked.rejects if row["path"] == f"odd/{name}"]
    assert [row["reason"] for row in rows] == [SET_ASIDE[name][1]]
    assert rows[0]["detail"].isprintable()
    assert " " in rows[0]["detail"]
    assert not re.search(r"\w+Error", rows[0]["detail"])


@pytest.mark.parametrize("name", sorted([*NOT_MEASURED, *MEASURED]))
def test_frames_with_the_right_words(walked: WalkResult, name: str) -> None:
    """A file that can be used is a frame; what its header lacks or has wrong is said, and then unknown."""
    words = MEASURED[name][1] if name in MEASURED else ()
    (row,) = np.flatnonzero(walked.frames["path"] == f"odd/{name}")
    said = words_of(walked.frames["assumptions"][row])
    assert set(words) <= set(said) <= set(ASSUMPTIONS)
    assert ("implausible_date" in said) == ("implausible_date" in words)
    assert ("implausible_exposure" in said) == ("implausible_exposure" in words)
    assert np.isfinite(walked.frames["middle_tdb_s"][row]) == ("no_clock" not in words)
    assert np.isfinite(walked.frames["exposure_s"][row]) == ("no_exposure" not in words)
    for column in ("pixel_scale", "centre_ra", "centre_dec", "radius"):
        assert np.isfinite(walked.frames[column][row])
    assert walked.frames["instrument"][row].isprintable()


def test_what_is_no_regular_file(walked: WalkResult) -> None:
    """Pipes, sockets, devices and broken links are unreadable; a folder with such a name is a folder."""
    rows = {row["path"].removeprefix("special/"): row["reason"] for row in walked.rejects}
    assert {name: rows.get(name) for name in SPECIAL} == {
        name: "empty_file" if name == "folder.fits/inside.fits" else "unreadable" for name in SPECIAL
    }
    if os.geteuid() != 0:  # root may read anything
        assert rows["ünlesbar.fits"] == "unreadable"


def test_nothing_is_lost(walked: WalkResult, archives: tuple[Path, Path]) -> None:
    """Every file with an ending of FITS is a frame or a reject."""
    said = {row["path"] for row in walked.rejects} | set(walked.frames["path"])
    assert {entry.path for entry in list_files(str(archives[1]))} == said
    assert {row["reason"] for row in walked.rejects} <= set(REASONS)


def test_names_lead_back_to_their_files(walked: WalkResult, archives: tuple[Path, Path]) -> None:
    """Any name is text that a table can hold, and the way back from it is the file."""
    paths = [path for path in walked.frames["path"] if path.startswith("names/")]
    assert len(paths) == len(set(paths)) == len(NAMES)
    found = {os.path.relpath(local_path(str(archives[1]), path), archives[1] / "names") for path in paths}
    assert found == {f"{name}.fits" for name in NAMES}
    for path in paths:
        path.encode("utf-8")


@pytest.mark.parametrize(
    ("name", "text"),
    [("a\nb\t", "a\nb\\x09"), ("\udcff", "\\xff"), ("a\\b", "a\\b"), ("a\\x41\r", "a\\x5cx41\\x0d"), ("é", "é"),
     ("\\xff", "\\x5cxff"), ("\u2028", "\\xe2\\x80\\xa8")],
)  # fmt: skip
def test_names_as_text(name: str, text: str) -> None:
    """What no table can hold is written as bytes; no two names are the same text."""
    assert path_text(name) == text
    assert local_path(text) == name
    assert local_path("a", text) == os.path.join("a", name)


# --- the whole job


def test_the_run_goes_on(runs: Runs) -> None:
    """Mining everything at once ends well, in little memory, without a warning or a control character on the way."""
    assert [status for status, _, _ in runs.ends] == [0, 0, 0], runs.printed
    assert runs.ends[-1][1] < MEMORY_MB
    assert "Traceback" not in runs.printed
    assert "Warning" not in runs.printed
    assert visible(runs.printed.replace("\n", "")) == runs.printed.replace("\n", "")


def test_rejects_of_the_run(runs: Runs, walked: WalkResult) -> None:
    """Reasons are those of the walk and, for what only the pixels tell, of measuring; every name reads back."""
    table = Table.read(runs.mixed / "rejects.ecsv")
    rows = {(str(row["path"]), int(row["hdu"])): str(row["reason"]) for row in table}
    copies = {place for place, reason in rows.items() if reason == "duplicate_of"}
    assert {path.split("/")[0] for path, _ in copies} <= {"odd", "special"}  # many share pixels and date
    rows = {place: reason for place, reason in rows.items() if place not in copies}
    expected = {(row["path"], row["hdu"]): row["reason"] for row in walked.rejects}
    for name, (_, reason) in NOT_MEASURED.items():
        hdu = 1 if name.endswith(".fz") else 0
        expected[f"odd/{name}", hdu] = reason
    assert rows == expected
    for row in table:
        assert str(row["detail"]).isprintable()


def target_rows(run: Path) -> dict[tuple[str, str], dict[str, Any]]:
    """Measurements of targets by path and name."""
    frames = pq.read_table(run / "frames.parquet")
    path = dict(zip(frames["id"].to_pylist(), frames["path"].to_pylist(), strict=True))
    positions = pq.read_table(run / "positions.parquet")
    name = dict(zip(positions["id"].to_pylist(), positions["name"].to_pylist(), strict=True))
    found = {}
    for part in sorted((run / "measurements").rglob("*.parquet")):
        for row in pq.read_table(part).to_pylist():
            if name[row["position"]]:
                values = {key: row[key] for key in row if key not in ("position", "frame")}
                found[path[row["frame"]], name[row["position"]]] = values
    return found


def test_good_frames_are_measured_as_if_alone(runs: Runs) -> None:
    """Not a digit of a good frame's measurements changes because broken files lie beside it."""
    alone, beside = target_rows(runs.alone), target_rows(runs.mixed)
    mine_ = {key: row for key, row in beside.items() if key[0].startswith("good/")}
    assert len(alone) == 2 * SKY.n_frames
    assert repr(mine_) == repr(alone)


def test_odd_frames_are_measured_with_flags(runs: Runs) -> None:
    """Pixels that hold nothing give no flux and say why; other odd frames give the flux that their pixels hold."""
    rows = target_rows(runs.mixed)
    plain = rows["names/a,b;c.fits", "a"]["flux"]
    table = Table.read(runs.mixed / "rejects.ecsv")
    copies = {str(row["path"]) for row in table if row["reason"] == "duplicate_of"}
    for name, (_, _, flags) in MEASURED.items():
        if f"odd/{name}" in copies:
            assert not flags, name  # what has the plain pixels is one exposure with the plain frame
            continue
        row = rows[f"odd/{name}", "a"]
        assert np.isfinite(row["flux"]) == (flags == 0), name
        assert row["flags"] & flags == flags, name
    for name in ("year 9999.fits", "exposure 1e290.fits", "100000 cards.fits", "BLANK on floats.fits"):
        assert f"odd/{name}" in copies or rows[f"odd/{name}", "a"]["flux"] == plain
    for name in NAMES:
        assert rows[path_text(f"names/{name}.fits"), "a"]["flux"] == plain


def test_names_through_every_table(runs: Runs) -> None:
    """Difficult names are in the frame table, and the candidate table reads back in all three formats."""
    paths = set(pq.read_table(runs.mixed / "frames.parquet")["path"].to_pylist())
    assert {path_text(f"names/{name}.fits") for name in NAMES} <= paths
    frames = [{str(row["peak_frame"]) for row in Table.read(runs.mixed / f"candidates.{e}")} for e in ("ecsv", "vot")]
    assert frames[0] == frames[1]
    assert len(Table.read(runs.mixed / "candidates.fits")) == 2


def test_a_finished_run_is_continued(runs: Runs) -> None:
    """The same command again reads its own tables, difficult names and all, and ends with the same."""
    assert runs.ends[2][2] == runs.ends[1][2] != runs.ends[0][2]


def test_inventory_of_it_all(archives: tuple[Path, Path], capsys: pytest.CaptureFixture[str]) -> None:
    """The inventory prints no control character, although instruments are named with some."""
    assert cli.run_command(["inventory", str(archives[1]), "-q"]) == 0
    printed = capsys.readouterr().out
    assert "odd\\x07\\x1b[31m" in printed
    assert visible(printed.replace("\n", "")) == printed.replace("\n", "")


# --- files that change


def test_file_that_vanishes_after_listing(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """A file that is gone when it is opened is unreadable."""
    (tmp_path / "a.fits").write_bytes(good())
    listed = list_files(str(tmp_path))
    (tmp_path / "a.fits").unlink()
    monkeypatch.setattr("hindlight.archive.list_files", lambda *_: listed)
    (row,) = walk([str(tmp_path)], [StandardHeaders()], Settings()).rejects
    assert (row["reason"], row["detail"]) == ("unreadable", "the system says: No such file or directory")


def test_file_that_becomes_a_pipe(tmp_path: Path) -> None:
    """A pipe in the place of a file does not make anyone wait."""
    os.mkfifo(tmp_path / "a.fits")
    with pytest.raises(SetAsideError, match="not a regular file"), open_source(str(tmp_path / "a.fits"), 10**6):
        pass


def test_file_that_grows_or_goes_before_it_is_measured(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Frames of files that change after the walk are set aside as changed or vanished, and measured by the next run."""
    folder = tmp_path / "archive"
    skies.write_sky(folder, SKY, [], seed=2)
    measure = tasks.measure_piece

    def meanwhile(*arguments: Any) -> Any:
        with (folder / "frame0003.fits").open("ab") as stream:
            stream.write(bytes(BLOCK))
        (folder / "frame0005.fits").unlink()
        return measure(*arguments)

    (tmp_path / "t.csv").write_text("name,ra,dec\na,150.0,-30.0\n", encoding="utf-8")
    (tmp_path / "s.toml").write_text("[controls]\nper_field = 20\n", encoding="utf-8")
    command = ["mine", str(folder), "--targets", str(tmp_path / "t.csv"), "--out", str(tmp_path / "run"), "-q"]
    command += ["--settings", str(tmp_path / "s.toml")]
    monkeypatch.setattr(tasks, "measure_piece", meanwhile)
    assert cli.run_command(command) == 0
    reasons = {str(row["path"]): str(row["reason"]) for row in Table.read(tmp_path / "run/rejects.ecsv")}
    assert reasons == {"frame0003.fits": "changed", "frame0005.fits": "vanished"}
    monkeypatch.undo()
    assert cli.run_command(command) == 0
    assert ("frame0003.fits", "a") in target_rows(tmp_path / "run")


def test_file_that_is_rewritten_while_it_is_read(tmp_path: Path) -> None:
    """A file of the same size and another time has changed; a time rounded by the file system has not."""
    path = tmp_path / "a.fits"
    path.write_bytes(good())
    status = path.stat()
    files.check_unchanged(str(path), status.st_size, status.st_mtime_ns - 1_999_999_999)
    for size, time in ((status.st_size - 1, status.st_mtime_ns), (status.st_size, status.st_mtime_ns - 2_000_000_001)):
        with pytest.raises(SetAsideError, match="changed"):
            files.check_unchanged(str(path), size, time)


# --- time and memory


def test_many_small_gzip_members(tmp_path: Path) -> None:
    """A gzip file of very many members is unpacked in a time that grows with its size, not with its square."""
    data = good()
    packed = b"".join(gzip.compress(data[i : i + 40], 1, mtime=0) for i in range(0, len(data), 40))
    empty = gzip.compress(b"", 1, mtime=0) * 20_000
    (tmp_path / "a.fits.gz").write_bytes(packed + empty)
    with corruption.limited(5.0), open_source(str(tmp_path / "a.fits.gz"), 10**9) as source:
        assert [hdu.axes for hdu in read_hdus(source)] == [(SIZE, SIZE)]


def test_long_reads_of_gzip(tmp_path: Path) -> None:
    """A long header of a gzip file is read in a time that grows with its length."""
    (tmp_path / "a.fits.gz").write_bytes(gzip.compress(many_cards(150_000), 1, mtime=0))
    with corruption.limited(5.0), open_source(str(tmp_path / "a.fits.gz"), 10**9) as source:
        (hdu,) = read_hdus(source)
    assert hdu.cards.integer("K3E7") == 999


def test_planes_limit_is_a_setting(tmp_path: Path) -> None:
    """A cube of as many planes as the setting allows is frames; one more is set aside."""
    (tmp_path / "a.fits").write_bytes(cube(50))
    for most, frames in ((50, 50), (49, 0)):
        found = walk([str(tmp_path)], [StandardHeaders()], Settings(inventory=Inventory(planes_limit=most)))
        assert len(found.frames["path"]) == frames
        assert [row["reason"] for row in found.rejects] == ["too_many_planes"] * (frames == 0)


def test_what_is_held_makes_no_difference(archives: tuple[Path, Path], monkeypatch: pytest.MonkeyPatch) -> None:
    """How many headers are held in memory at once changes nothing."""
    whole = walk([str(archives[0])], [StandardHeaders()], Settings())
    monkeypatch.setattr("hindlight.archive.HELD_AT_ONCE", 1)
    part = walk([str(archives[0])], [StandardHeaders()], Settings())
    for name, values in whole.frames.items():
        assert repr(values.tolist()) == repr(part.frames[name].tolist()), name


def test_folder_names(tmp_path: Path) -> None:
    """An archive folder may have any name too; one that does not exist is an error of the command."""
    folder = tmp_path / "an \udcff\n archive"
    folder.mkdir()
    (folder / "a.fits").write_bytes(good())
    found = walk([path_text(str(folder))], [StandardHeaders()], Settings())
    assert found.frames["archive"].tolist() == [path_text(str(folder))]
    with pytest.raises(UsageError, match="no such folder"):
        walk([path_text(str(tmp_path / "\udcfe"))], [StandardHeaders()], Settings())


def test_a_hundred_random_corruptions(tmp_path: Path) -> None:
    """The study of random corruptions, in small."""
    outcomes, short = corruption.study(120, 7, tmp_path)
    assert short == []
    assert outcomes["measured"] > 20
    assert sum(outcomes.values()) - outcomes["measured"] > 20
