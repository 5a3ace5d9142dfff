"""Listing and unpacking: links, loops and odd files; gzip without unpacking more than is needed."""

from __future__ import annotations

import gzip
import itertools
import os
import random
from pathlib import Path

import numpy as np
import pytest
from astropy.io import fits
from hypothesis import given
from hypothesis import strategies as st

from hindlight.errors import UsageError
from hindlight.files import GzipSource, list_files, open_source
from hindlight.headers import SetAsideError
from made import hdus_of, header, write

NOISE = random.Random(1).randbytes(300_000)  # does not compress, so that a gzip file is as long as what it holds


def paths(folder: Path) -> list[str]:
    """The paths that a folder lists."""
    return [entry.path for entry in list_files(str(folder))]


def touch(path: Path, data: bytes = b"x") -> Path:
    """A small file; its folder is made."""
    path.parent.mkdir(parents=True, exist_ok=True)
    path.write_bytes(data)
    return path


def zipped(path: Path, data: bytes) -> Path:
    """A gzip file of some bytes."""
    return touch(path, gzip.compress(data, mtime=0))


def test_endings(tmp_path: Path) -> None:
    """All endings of FITS files, in any case and packed or not, hidden or deep; nothing else; in order of paths."""
    wanted = [
        ".hidden/a.fits",
        "B.FITS",
        "a/b/c/d.fts",
        "a/b.fit",
        "c.fits.gz",
        "d.FIT.GZ",
        "e.fts.gz",
        "f.fits.fz",
        "z.fit.fz",
    ]
    for name in [*wanted, "a.txt", "fits", "a.fits.bak", "b.gz", "c.fits.bz2"]:
        touch(tmp_path / name)
    assert paths(tmp_path) == sorted(wanted)


def test_sizes_and_times(tmp_path: Path) -> None:
    """Entries tell size and modification time."""
    path = touch(tmp_path / "a.fits", b"12345")
    os.utime(path, ns=(5, 1234567890123456789))
    (entry,) = list_files(str(tmp_path))
    assert (entry.path, entry.size, entry.modified_ns, entry.fault) == ("a.fits", 5, 1234567890123456789, "")


def test_links_and_loops(tmp_path: Path) -> None:
    """Links are followed, each folder is entered once, and a loop of links ends."""
    touch(tmp_path / "elsewhere/deep/a.fits")
    archive = tmp_path / "archive"
    touch(archive / "b.fits")
    (archive / "linked").symlink_to(tmp_path / "elsewhere", target_is_directory=True)
    (tmp_path / "elsewhere/up").symlink_to(archive, target_is_directory=True)
    (archive / "self").symlink_to(archive / "self")
    (archive / "c.fits").symlink_to(archive / "b.fits")
    assert paths(archive) == ["b.fits", "c.fits", "linked/deep/a.fits"]


def test_archives_that_overlap(tmp_path: Path) -> None:
    """A folder that lies within two archives is listed for the first."""
    touch(tmp_path / "a/b/c.fits")
    visited: set[tuple[int, int]] = set()
    assert len(list_files(str(tmp_path / "a/b"), visited)) == 1
    assert list_files(str(tmp_path), visited) == []


def test_what_cannot_be_read_is_named(tmp_path: Path) -> None:
    """Broken links, pipes and folders without permission are entries with a fault."""
    (tmp_path / "broken.fits").symlink_to(tmp_path / "nowhere")
    os.mkfifo(tmp_path / "pipe.fits")
    faults = {entry.path: entry.fault for entry in list_files(str(tmp_path))}
    assert "No such file" in faults["broken.fits"]
    assert faults["pipe.fits"] == "not a regular file"


def test_folder_that_cannot_be_listed(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """A folder that the system will not list is an entry with a fault, and the rest is listed."""
    touch(tmp_path / "a.fits")
    (tmp_path / "locked").mkdir()
    scandir = os.scandir

    def refuse(path: Path) -> object:
        if Path(path).name == "locked":
            raise PermissionError(13, "Permission denied")
        return scandir(path)

    monkeypatch.setattr(os, "scandir", refuse)
    entries = {entry.path: entry.fault for entry in list_files(str(tmp_path))}
    assert entries == {"a.fits": "", "locked": "the folder cannot be listed: Permission denied"}


def test_no_such_archive(tmp_path: Path) -> None:
    """An archive that is no folder is an error of the command."""
    with pytest.raises(UsageError, match="no such folder"):
        list_files(str(tmp_path / "nothing"))
    with pytest.raises(UsageError, match="no such folder"):
        list_files(str(touch(tmp_path / "a.fits")))


@given(
    st.lists(st.tuples(st.integers(0, 90_000), st.integers(0, 90_000)), max_size=8), st.booleans(), st.integers(1, 3)
)
def test_gzip_reads_as_the_bytes_it_holds(
    tmp_path_factory: pytest.TempPathFactory, steps: list[tuple[int, int]], noisy: bool, members: int
) -> None:
    """Reading forwards gives the same bytes as unpacking the whole, also over several members."""
    data = NOISE if noisy else bytes(300_000)
    cuts = [len(data) * i // members for i in range(members + 1)]
    packed = b"".join(gzip.compress(data[a:b], 1, mtime=0) for a, b in itertools.pairwise(cuts))
    path = touch(tmp_path_factory.mktemp("z") / "a.gz", packed + bytes(10))
    offset = 0
    with open_source(str(path), 10**6) as source:
        assert isinstance(source, GzipSource)
        for skip, length in steps:
            offset += skip
            assert source.read_at(offset, length) == data[offset : offset + length]
            offset += length


def test_gzip_unpacks_no_pixel(tmp_path: Path) -> None:
    """Where the trailer says that the file ends with the first HDU, its data stay packed."""
    plain = write(tmp_path / "a.fits", (200, 300)).read_bytes()
    path = zipped(tmp_path / "a.fits.gz", plain[:2880] + NOISE[:240_480])
    with open_source(str(path), 10**9) as source:
        assert isinstance(source, GzipSource)
        source.read_at(0, 2880)
        assert source.reaches(2880 + 240_000)
        assert source.read_at(2880 + 241_920, 2880) == b""
        assert source.stream.packed_at < 100_000


def test_gzip_with_further_hdus(tmp_path: Path) -> None:
    """A gzip file of several HDUs is unpacked up to the last header."""

    images = [fits.ImageHDU(np.ones((50, 60)), header()) for _ in range(3)]
    fits.HDUList([fits.PrimaryHDU(), *images]).writeto(tmp_path / "a.fits")
    path = zipped(tmp_path / "b.fits.gz", (tmp_path / "a.fits").read_bytes())
    assert [hdu.axes for hdu in hdus_of(path)] == [(), (60, 50), (60, 50), (60, 50)]


def test_gzip_is_told_by_its_bytes(tmp_path: Path) -> None:
    """A plain file named .gz and a packed one named .fits are read as what they are."""
    data = write(tmp_path / "a.fits").read_bytes()
    assert len(hdus_of(touch(tmp_path / "plain.fits.gz", data))) == 1
    assert len(hdus_of(zipped(tmp_path / "packed.fits", data))) == 1


@pytest.mark.parametrize("cut", [20, 1000, 200_000])
def test_gzip_cut_short(tmp_path: Path, cut: int) -> None:
    """A gzip file that ends in the middle is broken."""
    head = write(tmp_path / "a.fits", (200, 300)).read_bytes()[:2880]
    whole = zipped(tmp_path / "b.fits.gz", head + NOISE[:240_480]).read_bytes()
    with pytest.raises(SetAsideError) as caught:
        hdus_of(touch(tmp_path / "c.fits.gz", whole[:cut]))
    assert caught.value.reason == "bad_compression"


def test_gzip_with_a_flipped_byte(tmp_path: Path) -> None:
    """Packed bytes that make no sense are broken compression, not another kind of fault."""
    data = bytearray(zipped(tmp_path / "a.gz", write(tmp_path / "a.fits").read_bytes()).read_bytes())
    data[12:40] = b"\xff" * 28
    with pytest.raises(SetAsideError) as caught:
        hdus_of(touch(tmp_path / "b.fits.gz", bytes(data)))
    assert caught.value.reason == "bad_compression"


@pytest.mark.parametrize("longer", [0, 2880])
def test_gzip_bomb(tmp_path: Path, longer: int) -> None:
    """A file that says or shows that it unpacks to more than the limit is refused before it does."""
    head = write(tmp_path / "a.fits", (2000, 3000)).read_bytes()[:2880]
    path = zipped(tmp_path / "b.fits.gz", head + bytes(24_001_920 + longer))
    with pytest.raises(SetAsideError, match="limit of 5 MB"):
        hdus_of(path, 5_000_000)
    assert len(hdus_of(path, 50_000_000)) == 1
