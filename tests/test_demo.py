"""The demonstration archive: the committed folder is what the code writes, and its pixels hold what its truth says.

Fluxes are read here straight from the pixels with scipy and astropy, by none of the package's own photometry.
"""

import gzip
import re
import warnings
import zlib
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pytest
from astropy.coordinates import EarthLocation, SkyCoord
from astropy.io import fits
from astropy.table import Table
from astropy.time import Time
from astropy.wcs import WCS
from scipy.ndimage import map_coordinates

from hindlight.demo import write_demo

ARCHIVE = Path(__file__).parents[1] / "demo_archive"
INSTRUMENTS = ("quorvlow", "quorvmid", "quorvcam")
FLUX_COLUMNS = dict(zip(INSTRUMENTS, ("flux_low", "flux_mid", "rate_camera"), strict=True))


@dataclass(frozen=True)
class Plane:
    """One image: where it came from, its pixels and, for each row of the truth, the flux and S/N read there."""

    path: str
    index: int
    header: fits.Header
    pixels: np.ndarray
    x: np.ndarray
    y: np.ndarray
    flux: np.ndarray
    snr: np.ndarray

    @property
    def instrument(self) -> str:
        """Folder of the instrument."""
        return self.path.partition("/")[0]

    @property
    def is_stokes_v(self) -> bool:
        """Whether nothing should show."""
        return self.instrument == "quorvmid" and self.index == 1

    @property
    def is_dithered(self) -> bool:
        """Whether the camera was moved aside."""
        return self.header["CRPIX1"] < self.header["NAXIS1"] / 2


def image_of(path: Path) -> tuple[fits.Header, np.ndarray]:
    """Header and float pixels (n_planes, n, n) of a file's one image."""
    with warnings.catch_warnings(), fits.open(path) as hdus:
        warnings.simplefilter("ignore", fits.verify.VerifyWarning)  # the damaged ones
        hdu = hdus[1] if path.suffix == ".fz" else hdus[0]
        header = hdu.header.copy()
        data = np.asarray(hdu.data, dtype=float)
    return header, data.reshape(-1, *data.shape[-2:])


def psf_flux(pixels: np.ndarray, x: float, y: float, fwhm: float) -> float:
    """Sum under a Gaussian of the FWHM (pixels), weighted by it, over a median background; NaN off the image."""
    column, row = round(x), round(y)
    cut = pixels[max(row - 5, 0) : row + 6, max(column - 5, 0) : column + 6]
    if cut.shape != (11, 11):
        return np.nan
    dy, dx = np.mgrid[-5:6, -5:6]
    psf = np.exp(-4 * np.log(2) * ((dx + column - x) ** 2 + (dy + row - y) ** 2) / fwhm**2)
    return float(np.sum(psf * (cut - np.median(pixels))) / np.sum(psf**2) * 1.1330900 * fwhm**2)


def plane_of(path: str, index: int, header: fits.Header, pixels: np.ndarray, sky: SkyCoord) -> Plane:
    """Read every position in one image."""
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")  # wcslib tells what it derived from the dates
        x, y = (np.asarray(axis) for axis in WCS(header).celestial.world_to_pixel(sky))
    sigma = 1.4826 * np.median(np.abs(pixels - np.median(pixels)))
    if "SEEING" in header:
        fwhm = header["SEEING"] / 10
        flux = np.array([psf_flux(pixels, *at, fwhm) for at in zip(x, y, strict=True)])
        return Plane(path, index, header, pixels, x, y, flux, flux / (sigma * np.sqrt(2.2662) * fwhm))
    flux = map_coordinates(pixels, [y, x], order=3, mode="constant", cval=np.nan)
    return Plane(path, index, header, pixels, x, y, flux, flux / sigma)


@pytest.fixture(scope="module")
def truth() -> Table:
    """What was planted."""
    return Table.read(ARCHIVE / "truth.ecsv")


@pytest.fixture(scope="module")
def damaged() -> dict[str, str]:
    """Files the README calls damaged, with their fault."""
    return dict(re.findall(r"^- `(\S+)`: (.+)$", (ARCHIVE / "README.md").read_text(), re.MULTILINE))


@pytest.fixture(scope="module")
def planes(truth: Table, damaged: dict[str, str]) -> list[Plane]:
    """Every sound image of the archive, read at every position of the truth."""
    sky = SkyCoord(truth["ra"], truth["dec"])
    found = []
    for file in sorted(ARCHIVE.glob("*/*/*")):
        path = file.relative_to(ARCHIVE).as_posix()
        if path not in damaged:
            header, data = image_of(file)
            found += [plane_of(path, i, header, pixels, sky) for i, pixels in enumerate(data)]
    return found


def at(truth: Table, name: str) -> int:
    """Row of a source."""
    return list(truth["name"]).index(name)


def listed(truth: Table, name: str) -> dict[tuple[str, int], float]:
    """Bright frames of a source according to the truth: (path, plane) to S/N."""
    text = truth["bright_frames"][at(truth, name)]
    return {(path, int(plane)): float(snr) for path, plane, snr in re.findall(r"(\S+)\[(\d+)\] ([\d.]+)", text)}


def unpacked(content: bytes) -> bytes:
    """What a gzip stream holds, as far as it goes."""
    return zlib.decompressobj(31).decompress(content)


def test_the_committed_folder_is_what_the_code_writes(tmp_path: Path) -> None:
    """Nobody can change the archive without the code, or the code without the archive."""
    write_demo(tmp_path)
    files = {file.relative_to(ARCHIVE) for file in ARCHIVE.rglob("*") if file.is_file()}
    assert files == {file.relative_to(tmp_path) for file in tmp_path.rglob("*") if file.is_file()}
    for file in sorted(files):
        committed, fresh = (ARCHIVE / file).read_bytes(), (tmp_path / file).read_bytes()
        if committed != fresh and file.suffix == ".gz":  # another build of zlib packs the same bytes differently
            shorter, longer = sorted((unpacked(committed), unpacked(fresh)), key=len)
            assert longer.startswith(shorter), file
            assert shorter == longer or file.as_posix() in (ARCHIVE / "README.md").read_text(), file
        else:
            assert committed == fresh, file


def test_the_archive_is_small_and_packed_in_three_ways() -> None:
    """A clone stays light, and every way of packing that the program reads is met."""
    files = [file for file in ARCHIVE.rglob("*") if file.is_file()]
    assert sum(file.stat().st_size for file in files) <= 6e6
    assert {".fits", ".gz", ".fz"} <= {file.suffix for file in files}


def test_nothing_in_a_file_tells_when_it_was_written() -> None:
    """No clock and no checksum reaches the files, so a second run gives the same bytes."""
    for file in ARCHIVE.glob("*/*/*.gz"):
        assert file.read_bytes()[3:8] == bytes(5), file  # no name flag, no time (RFC 1952, section 2.3)
    for file in ARCHIVE.glob("*/*/*"):
        content = unpacked(file.read_bytes()) if file.suffix == ".gz" else file.read_bytes()
        assert not re.search(rb"DATE    =|CHECKSUM=|DATASUM =", content), file


def test_headers_say_who_when_where_and_how_sharp(planes: list[Plane]) -> None:
    """Every sound frame can be placed on the sky, in time and on the Earth, and has a beam or a seeing."""
    for plane in planes:
        header = plane.header
        for key in ("TELESCOP", "INSTRUME", "OBJECT", "DATE-OBS", "DATE-BEG", "BUNIT", "RADESYS"):
            assert header[key], (plane.path, key)
        assert header["TIMESYS"] == "UTC"
        assert ("DATE-END" in header and header["XPOSURE"] in (120, 180)) or 30 <= header["EXPTIME"] <= 60
        site = EarthLocation.from_geocentric(*(header[f"OBSGEO-{axis}"] for axis in "XYZ"), unit="m")
        assert abs(site.height.to_value("m")) < 9000
        assert header["BMAJ"] >= header["BMIN"] if "BMAJ" in header else header["SEEING"] > 20
    assert {plane.header["RADESYS"] for plane in planes} == {"ICRS", "FK5"}
    assert {plane.header.get("CTYPE3") for plane in planes} == {"FREQ", "TIME", "STOKES", None}
    assert {plane.header["CTYPE1"] for plane in planes} == {"RA---SIN", "RA---TAN"}


def test_the_time_axis_of_a_cube_agrees_with_its_dates(planes: list[Plane]) -> None:
    """A cube's planes can be dated from its TIME axis alone, and follow each other from DATE-BEG to DATE-END."""
    cubes = [plane for plane in planes if plane.header.get("CTYPE3") == "TIME"]
    assert cubes
    for header in (plane.header for plane in cubes):
        first_middle = Time(header["MJDREF"], header["CRVAL3"] / 86400, format="mjd", scale="utc")
        begin, end = Time(header["DATE-BEG"], scale="utc"), Time(header["DATE-END"], scale="utc")
        assert (first_middle - begin).sec == pytest.approx(header["XPOSURE"] / 2, abs=1e-3)
        assert (end - begin).sec == pytest.approx(header["NAXIS3"] * header["CDELT3"], abs=1e-3)
        assert header["CUNIT3"] == "s"
        assert 6 <= header["NAXIS3"] <= 10


def test_targets_lie_apart_inside_every_frame(truth: Table, planes: list[Plane]) -> None:
    """No target is blended with another source, cut off by an edge, or covered by some frames only."""
    targets = truth[truth["kind"] != "field"]
    assert list(Table.read(ARCHIVE / "targets.ecsv")["name"]) == list(targets["name"])
    sky, field = (SkyCoord(rows["ra"], rows["dec"]) for rows in (targets, truth[truth["kind"] == "field"]))
    for i, position in enumerate(sky):
        assert np.all(np.delete(position.separation(sky).arcsec, i) >= 4 * 45)
        beam = np.where(truth["flux_low"][truth["kind"] == "field"] > 0, 45, 30)
        assert np.all(position.separation(field).arcsec >= 6 * beam)
    for plane in planes:
        for axis in (plane.x, plane.y):
            assert np.all((axis[: len(targets)] > 8) & (axis[: len(targets)] < len(plane.pixels) - 9)), plane.path


@pytest.mark.parametrize("instrument", INSTRUMENTS)
def test_steady_sources_have_the_planted_flux(instrument: str, truth: Table, planes: list[Plane]) -> None:
    """Positions, point-spread functions and scales are right: the mean flux over all frames is the planted one."""
    looks = [plane for plane in planes if plane.instrument == instrument and not plane.is_stokes_v]
    exposure = np.array([[plane.header.get("EXPTIME", 1.0)] for plane in looks])
    flux = np.array([plane.flux for plane in looks]) / exposure
    snr = np.array([plane.snr for plane in looks])
    for row, planted in enumerate(truth[FLUX_COLUMNS[instrument]]):
        seen = np.isfinite(flux[:, row])
        if seen.sum() > 20 and truth["kind"][row] in ("steady", "faint steady", "field", "blank"):
            error = np.std(flux[seen, row]) / np.sqrt(seen.sum())
            assert np.mean(flux[seen, row]) == pytest.approx(planted, rel=0.04, abs=4 * error), truth["name"][row]
            assert np.max(snr[seen, row]) < 22, truth["name"][row]  # planted below 20, and noise


def test_the_pulser_is_bright_where_listed_and_nowhere_else(truth: Table, planes: list[Plane]) -> None:
    """Its frames are few, on many nights, of both arrays, one at least in a time cube, and never in Stokes V."""
    row, bright = at(truth, "Kelvost"), listed(truth, "Kelvost")
    for plane in planes:
        expected = bright.get((plane.path, plane.index), 0.0)
        assert abs(plane.snr[row] - expected) < 5 + 0.1 * expected, plane.path
    assert 8 <= len(bright) <= 15
    assert sum(12 <= snr <= 30 for snr in bright.values()) >= 8
    assert len({path.split("_")[1][:8] for path, _ in bright}) >= 5
    assert {path[:8] for path, _ in bright} == {"quorvlow", "quorvmid"}
    assert any(index > 0 for _, index in bright)


def test_the_pulses_keep_time_at_the_barycentre(truth: Table, planes: list[Plane]) -> None:
    """Folding the bright frames' middles with the true period puts all of them in one window."""
    star, bright = truth[at(truth, "Kelvost")], listed(truth, "Kelvost")
    sky = SkyCoord(star["ra"], star["dec"], unit="deg")
    for plane in planes:
        if (plane.path, plane.index) in bright:
            header, step = plane.header, plane.header["XPOSURE"]
            site = EarthLocation.from_geocentric(*(header[f"OBSGEO-{axis}"] for axis in "XYZ"), unit="m")
            begin = Time(header["DATE-BEG"], scale="utc", location=site)
            middle = begin.tdb + begin.light_travel_time(sky, ephemeris="builtin")
            seconds = (middle.jd - star["epoch_bjd_tdb"]) * 86400 + (plane.index + 0.5) * step
            late = (seconds + star["period"] / 2) % star["period"] - star["period"] / 2
            assert abs(late) <= star["window"] / 2 + 50 + step / 2, plane.path


def test_the_flare_is_one_frame(truth: Table, planes: list[Plane]) -> None:
    """One frame of Stokes I is bright at the flare's position; its Stokes V and all others are not."""
    row, bright = at(truth, "Quosel"), listed(truth, "Quosel")
    assert len(bright) == 1
    for plane in planes:
        if (plane.path, plane.index) in bright:
            assert 21 < plane.snr[row] < 29
        else:
            assert abs(plane.snr[row]) < 5, plane.path


def test_the_sinusoid_follows_its_period(truth: Table, planes: list[Plane]) -> None:
    """A straight-line fit of counts per second to the true cosine gives mean and amplitude back."""
    star, row = truth[at(truth, "Erpost")], at(truth, "Erpost")
    camera = [plane for plane in planes if plane.instrument == "quorvcam"]
    days = Time([plane.header["DATE-BEG"] for plane in camera], scale="utc").jd - star["epoch_bjd_tdb"]
    rate = np.array([plane.flux[row] / plane.header["EXPTIME"] for plane in camera])
    slope, mean = np.polyfit(np.cos(2 * np.pi * days * 86400 / star["period"]), rate, 1)
    assert mean == pytest.approx(star["rate_camera"], rel=0.05)
    assert slope / mean == pytest.approx(star["amplitude"], abs=0.04)


def test_the_artefact_stays_on_its_pixel_and_leaves_the_sky(truth: Table, planes: list[Plane]) -> None:
    """The warm spot sits at one pixel while on; it meets the target's position in undithered frames only."""
    row, bright = at(truth, "Nostev"), listed(truth, "Nostev")
    camera = [plane for plane in planes if plane.instrument == "quorvcam"]
    assert 8 <= len(bright) <= 12
    warm_when_dithered = 0
    for plane in camera:
        spot = psf_flux(plane.pixels, 126, 58, plane.header["SEEING"] / 10) * plane.snr[row] / plane.flux[row]
        warm_when_dithered += plane.is_dithered and spot > 10
        if (plane.path, 0) in bright:
            assert not plane.is_dithered
            assert spot > 10, plane.path
            assert np.hypot(plane.x[row] - 126, plane.y[row] - 58) < 4
        else:
            assert plane.snr[row] < 5, plane.path
    assert 3 <= warm_when_dithered <= 8
    undithered = [plane for plane in camera if not plane.is_dithered]
    assert len(undithered) == pytest.approx(len(camera) * 2 / 3, abs=2)
    assert np.mean([plane.x[row] for plane in undithered]) == pytest.approx(126, abs=0.4)
    assert np.mean([plane.y[row] for plane in undithered]) == pytest.approx(58, abs=0.4)


@pytest.mark.parametrize("instrument", ["quorvlow", "quorvmid"])
def test_the_noise_of_the_arrays_looks_like_their_beam(instrument: str, planes: list[Plane]) -> None:
    """Neighbouring pixels are correlated as the beam says, and the rms differs from frame to frame."""
    quiet = [
        plane for plane in planes if plane.instrument == instrument and (plane.is_stokes_v or instrument == "quorvlow")
    ]
    beam = np.sqrt(quiet[0].header["BMAJ"] * quiet[0].header["BMIN"]) / quiet[0].header["CDELT2"]
    for lag in (1, 2):
        pairs = [np.mean(p.pixels[:, lag:] * p.pixels[:, :-lag]) / np.mean(p.pixels**2) for p in quiet]
        assert np.mean(pairs) == pytest.approx(2 ** (-4 * (lag / beam) ** 2), abs=0.05)
    rms = np.array([np.std(plane.pixels) for plane in quiet])
    assert 0.1 < np.std(rms) / np.mean(rms) < 0.4


def test_damaged_files_are_damaged_as_told(damaged: dict[str, str]) -> None:
    """Each fault a reader has to survive is there, in its instrument's folder."""
    faults = {fault: ARCHIVE / path for path, fault in damaged.items() if fault != "cut short"}
    assert faults["zero bytes"].stat().st_size == 0
    assert not faults["text"].read_bytes().startswith(b"SIMPLE")
    content = faults["a header without END"].read_bytes()
    assert content.startswith(b"SIMPLE")
    assert all(content[i : i + 8] != b"END     " for i in range(0, len(content), 80))
    assert "CTYPE1" not in image_of(faults["an image without sky axes"])[0]
    with fits.open(faults["a table and no image"]) as hdus:
        assert [hdu.is_image and hdu.data is not None for hdu in hdus] == [False, False]
    assert np.all(np.isnan(image_of(faults["whole, all blank"])[1]))
    cut = {Path(path).suffix: ARCHIVE / path for path, fault in damaged.items() if fault == "cut short"}
    with pytest.raises(EOFError):
        gzip.decompress(cut[".gz"].read_bytes())
    assert cut[".fits"].stat().st_size % 2880 != 0
    assert len(damaged) == 8
    assert {path.partition("/")[0] for path in damaged} == set(INSTRUMENTS)
