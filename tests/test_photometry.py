"""Forced photometry: agreement with photutils and astropy, flags, and independence of what else is measured."""

from __future__ import annotations

import dataclasses
from dataclasses import dataclass
from pathlib import Path
from typing import ClassVar

import numpy as np
import pytest
from astropy.io import fits
from astropy.wcs import WCS
from photutils.aperture import ApertureStats, CircularAnnulus, CircularAperture

from hindlight.errors import UsageError
from hindlight.fluxes import measure
from hindlight.headers import SetAsideError
from hindlight.opening import FrameToMeasure
from hindlight.photometry import bright_sources, choose_estimator, cutout, measure_frame
from hindlight.pixels import Pixels
from hindlight.plugin import BeamShape, Estimator
from hindlight.schema import Flag
from hindlight.settings import Photometry, Settings, setting
from hindlight_plugins.aperture import Aperture
from hindlight_plugins.peak import Peak
from hindlight_plugins.psf import Psf

SETTINGS = Settings()
ROUND = BeamShape(3.0, 3.0, 0.0)
ESTIMATORS = [Aperture(), Peak(), Psf()]
COLUMNS = ("flux", "flux_err", "background", "rms", "flags")


def random_frame(path: Path, seed: int, fwhm: float = 3.0, kind: type = np.float32) -> tuple[FrameToMeasure, WCS]:
    """A file of noise with a random pointing, rotation, scale and handedness."""
    rng = np.random.default_rng(seed)
    angle, scale, flip = rng.uniform(0, 2 * np.pi), rng.uniform(0.5, 20) / 3600, rng.choice([-1, 1])
    c, s = np.cos(angle), np.sin(angle)
    header = fits.Header()
    header.update({
        "CTYPE1": "RA---SIN", "CTYPE2": "DEC--SIN", "CRVAL1": rng.uniform(0, 360), "CRVAL2": rng.uniform(-80, 80),
        "CRPIX1": rng.uniform(50, 150), "CRPIX2": rng.uniform(50, 150), "CD1_1": flip * scale * c, "CD1_2": -scale * s,
        "CD2_1": flip * scale * s, "CD2_2": scale * c, "RADESYS": "ICRS", "BUNIT": "adu",
    })  # fmt: skip
    image = rng.normal(30, 4, (180, 200))
    fits.PrimaryHDU(image.astype(kind), header).writeto(path)
    width = fwhm * scale * 3600
    return FrameToMeasure(str(path), beam_major=width, beam_minor=width, beam_angle=0.0, unit="adu"), WCS(header)


def places(n: int, seed: int = 0, margin: float = 29.0) -> tuple[np.ndarray, np.ndarray]:
    """Random pixel coordinates in a 180 x 200 image."""
    rng = np.random.default_rng(seed)
    return rng.uniform(margin, 199 - margin, n), rng.uniform(margin, 179 - margin, n)


@pytest.mark.parametrize("seed", range(6))
def test_apertures_agree_with_photutils(tmp_path: Path, seed: int) -> None:
    """On random frames the pixels agree with astropy to 1e-6, flux and background with photutils to 1e-4 sigma."""
    frame, wcs = random_frame(tmp_path / "a.fits", seed)
    x, y = places(40, seed)
    ra, dec = wcs.all_pix2world(x, y, 0)
    got = measure_frame(frame, ra, dec, Aperture(), SETTINGS)
    np.testing.assert_array_equal(got["index"], np.arange(40))
    px, py = wcs.all_world2pix(ra, dec, 0)
    assert np.hypot(got["x"] - px, got["y"] - py).max() < 1e-6
    image = fits.getdata(tmp_path / "a.fits").astype(float)
    circles = CircularAperture(np.column_stack((px, py)), 4.5).to_mask(method="exact")
    total = np.array([circle.multiply(image).sum() for circle in circles])
    settings = SETTINGS.photometry
    middle = np.column_stack((np.rint(px), np.rint(py)))
    ring = CircularAnnulus(middle, settings.annulus_inner * (3 - 1e-6), settings.annulus_outer * (3 + 1e-6))
    stats = ApertureStats(image, ring, sum_method="center")
    assert (np.abs(got["background"] - stats.median) / got["rms"]).max() < 1e-4
    np.testing.assert_allclose(got["rms"], stats.mad_std, rtol=1e-5)
    want = total - stats.median * np.pi * 4.5**2
    assert (np.abs(got["flux"] - want) / got["flux_err"]).max() < 1e-4
    assert (got["flags"] == 0).all()


@pytest.mark.parametrize("seed", range(3))
def test_psf_agrees_with_a_direct_weighted_sum(tmp_path: Path, seed: int) -> None:
    """The PSF flux is sum(P d) / sum(P^2) over the pixels within the radius, to 1e-4 sigma."""
    frame, wcs = random_frame(tmp_path / "a.fits", seed)
    x, y = places(20, seed)
    ra, dec = wcs.all_pix2world(x, y, 0)
    got = measure_frame(frame, ra, dec, Psf(), SETTINGS)
    image = fits.getdata(tmp_path / "a.fits").astype(float)
    j, i = np.indices(image.shape)
    for k in range(20):
        near = np.hypot(i - np.rint(x[k]), j - np.rint(y[k])) <= 4.5
        s = 3.0 / 2.3548200450309493
        profile = np.exp(-((i - x[k]) ** 2 + (j - y[k]) ** 2) / 2 / s**2)[near] / (2 * np.pi * s**2)
        flux = (profile * (image[near] - got["background"][k])).sum() / (profile**2).sum()
        assert abs(flux - got["flux"][k]) < 1e-4 * got["flux_err"][k]


@pytest.mark.parametrize("estimator", ESTIMATORS, ids=lambda e: e.name)
@pytest.mark.parametrize("beam", [ROUND, BeamShape(7.0, 4.0, 0.5)])
def test_same_bytes_whatever_the_batch(estimator: Estimator, beam: BeamShape) -> None:
    """A position's numbers do not depend on what else is measured with it, gaps and edges included."""
    rng = np.random.default_rng(4)
    image = rng.normal(10, 2, (180, 200)).astype(np.float32)
    image[50:60, 70:90] = np.nan
    x, y = places(150, 3, 0.0)
    pixels = Pixels(image)

    def measured(part: slice) -> dict[str, np.ndarray]:
        return measure(pixels, x[part], y[part], beam, estimator, SETTINGS.photometry)

    together = measured(slice(None))
    for size in (1, 7, 100):
        parts = [measured(slice(start, start + size)) for start in range(0, 150, size)]
        for name in COLUMNS:
            joined = np.concatenate([part[name] for part in parts])
            assert joined.tobytes() == together[name].tobytes()


@pytest.mark.parametrize("estimator", ESTIMATORS, ids=lambda e: e.name)
def test_linear_in_the_pixels(estimator: Estimator) -> None:
    """A source added within the inner radius adds its own flux, whatever is there: injection is exact."""
    rng = np.random.default_rng(4)
    image = rng.normal(10, 2, (180, 200))
    y, x = np.indices(image.shape)
    source = 30 * 2.0 ** (-4 * ((x - 100.3) ** 2 + (y - 80.2) ** 2) / 9)
    source[np.hypot(x - 100, y - 80) > 8.5] = 0
    at = np.array([100.3]), np.array([80.2])

    def flux(pixels: np.ndarray) -> float:
        return float(measure(Pixels(pixels), *at, ROUND, estimator, SETTINGS.photometry)["flux"][0])

    assert flux(image + source) - flux(image) == pytest.approx((flux(image + 2 * source) - flux(image)) / 2, rel=1e-9)


def test_only_positions_on_the_image_have_rows(tmp_path: Path) -> None:
    """A position off the image or on the other side of the sky gets no row; one just inside does."""
    frame, wcs = random_frame(tmp_path / "a.fits", 1)
    x, y = np.array([-0.49, -0.51, 100.0, 199.49, 199.51, 20.0, 20.0]), np.array([5.0, 5.0, 90.0, 5, 5, 179.49, 179.51])
    ra, dec = wcs.all_pix2world(x, y, 0)
    ra, dec = np.append(ra, ra[2] + 180), np.append(dec, -dec[2])
    got = measure_frame(frame, ra, dec, Aperture(), SETTINGS)
    assert got["index"].tolist() == [0, 2, 3, 5]
    assert all(len(column) == 4 for column in got.values())


def test_no_position_on_the_image(tmp_path: Path) -> None:
    """Then the columns are empty, and no pixel is read."""
    frame, _ = random_frame(tmp_path / "a.fits", 1)
    got = measure_frame(frame, np.array([10.0]), np.array([-89.9]), Aperture(), SETTINGS)
    assert all(len(column) == 0 for column in got.values())
    assert set(got) == {"index", "x", "y", "shift_x", "shift_y", "fwhm", "gain", "held", *COLUMNS}


def measure_one(image: np.ndarray, x: float, y: float, **kwargs: float) -> dict[str, float]:
    """One position with the aperture estimator."""
    found = measure(Pixels(image), np.array([x]), np.array([y]), ROUND, Aperture(), SETTINGS.photometry, **kwargs)
    return {name: column[0] for name, column in found.items()}


def sky(seed: int = 5) -> np.ndarray:
    """A noisy image."""
    return np.random.default_rng(seed).normal(100, 5, (180, 200)).astype(np.float32)


def test_edge() -> None:
    """An aperture that reaches over the edge has no flux; a cut annulus has one, with the flag below one half."""
    got = measure_one(sky(), 3.9, 90.0)
    assert np.isnan(got["flux"])
    assert np.isnan(got["flux_err"])
    assert np.isfinite(got["rms"])
    assert got["flags"] == Flag.EDGE
    assert measure_one(sky(), 4.1, 90.0)["flags"] == 0
    corner = measure_one(sky(), 4.1, 4.1)
    assert np.isfinite(corner["flux"])
    assert corner["flags"] == Flag.THIN_BACKGROUND


def test_blanked() -> None:
    """A blank pixel that carries weight takes the flux away, one beyond the aperture does not."""
    image = sky()
    image[90, 104] = np.nan
    got = measure_one(image, 100.0, 90.0)
    assert np.isnan(got["flux"])
    assert got["flags"] == Flag.BLANKED
    assert measure_one(image, 99.0, 90.0)["flags"] == 0
    image[:, :3] = np.nan
    both = measure_one(image, 3.0, 90.0)
    assert both["flags"] == Flag.BLANKED | Flag.EDGE


def test_saturated() -> None:
    """A saturated pixel in the aperture is flagged, its flux still told; one beyond is not."""
    image = sky()
    image[90, 102] = 60000
    got = measure_one(image, 100.0, 90.0, saturation=50000.0)
    assert got["flags"] & Flag.SATURATED
    assert np.isfinite(got["flux"])
    assert not measure_one(image, 93.0, 90.0, saturation=50000.0)["flags"] & Flag.SATURATED
    assert not measure_one(image, 100.0, 90.0)["flags"] & Flag.SATURATED


def test_thin_background() -> None:
    """Padding with zeros all around leaves no noise to measure against."""
    image = np.zeros((180, 200), np.float32)
    image[85:96, 95:106] = sky()[85:96, 95:106]
    got = measure_one(image, 100.0, 90.0)
    assert np.isnan(got["flux"])
    assert got["flags"] & Flag.THIN_BACKGROUND
    image = np.full((180, 200), np.nan, np.float32)
    image[85:96, 95:106] = 100
    assert measure_one(image, 100.0, 90.0)["flags"] & Flag.THIN_BACKGROUND


def test_neighbour() -> None:
    """A brighter source within the inner radius is flagged; a fainter one, or one in the annulus, is not."""
    image = sky()
    y, x = np.indices(image.shape)

    def star(cx: float, cy: float, peak: float) -> np.ndarray:
        return peak * 2.0 ** (-4 * ((x - cx) ** 2 + (y - cy) ** 2) / 9)

    assert measure_one(image + star(107, 90, 200), 100.0, 90.0)["flags"] == Flag.NEIGHBOUR
    both = image + star(107, 90, 200) + star(100, 90, 400)
    assert measure_one(both, 100.0, 90.0)["flags"] == 0
    assert measure_one(both, 107.0, 90.0)["flags"] == Flag.NEIGHBOUR
    assert measure_one(image + star(115, 90, 200), 100.0, 90.0)["flags"] == 0


def test_infinite_pixels_give_no_flux() -> None:
    """An infinite pixel is no flux and no warning."""
    image = sky()
    image[90, 100] = np.inf
    assert np.isnan(measure_one(image, 100.0, 90.0)["flux"])
    image[80:100, 80:88] = -np.inf
    assert np.isfinite(measure_one(image, 105.0, 90.0)["background"])
    image[:, :] = np.inf
    assert np.isnan(measure_one(image, 105.0, 90.0)["flux"])


def test_every_way_of_storing_gives_the_same_fluxes(tmp_path: Path) -> None:
    """Plain, gzip and tile-compressed copies of one image are measured alike, bit for bit."""
    frame, wcs = random_frame(tmp_path / "a.fits", 2)
    with fits.open(tmp_path / "a.fits") as hdus:
        image, header = hdus[0].data.copy(), hdus[0].header
    fits.PrimaryHDU(image, header).writeto(tmp_path / "a.fits.gz")
    tiles = fits.CompImageHDU(image, header, compression_type="GZIP_1", quantize_level=0)
    fits.HDUList([fits.PrimaryHDU(), tiles]).writeto(tmp_path / "a.fits.fz")
    ra, dec = wcs.all_pix2world(*places(30), 0)
    want = measure_frame(frame, ra, dec, Psf(), SETTINGS)
    for path, hdu in (("a.fits.gz", 0), ("a.fits.fz", 1)):
        other = dataclasses.replace(frame, path=str(tmp_path / path), hdu=hdu)
        got = measure_frame(other, ra, dec, Psf(), SETTINGS)
        for name in want:
            assert got[name].tobytes() == want[name].tobytes(), name


@pytest.mark.parametrize("seed", [3, 4, 5, 6])
def test_beam_from_the_frame(tmp_path: Path, seed: int) -> None:
    """An elliptical beam lies in the pixels as the frame's rotation says; an unknown one is assumed round."""
    frame, wcs = random_frame(tmp_path / "a.fits", seed, fwhm=6.0)
    ra, dec = wcs.all_pix2world([100.0], [90.0], 0)
    # A source that is the beam itself: peak reading gives its peak only if shape and angle are right.
    long = dataclasses.replace(frame, beam_minor=frame.beam_major / 2, beam_angle=35.0, unit="Jy/beam")
    y, x = np.indices((180, 200))
    lon, lat = wcs.all_pix2world(x.ravel(), y.ravel(), 0)
    north = (lat - dec[0]) * 3600
    east = ((lon - ra[0] + 180) % 360 - 180) * 3600 * np.cos(np.radians(dec[0]))
    pa = np.radians(35.0)
    along, across = east * np.sin(pa) + north * np.cos(pa), east * np.cos(pa) - north * np.sin(pa)
    shape = 2.0 ** (-4 * ((along / long.beam_major) ** 2 + (across / long.beam_minor) ** 2))
    noise = np.random.default_rng(1).normal(0, 1e-3, x.shape)
    with fits.open(tmp_path / "a.fits", mode="update") as hdus:
        hdus[0].data[:] = 5.0 * shape.reshape(x.shape) + noise
    found = measure_frame(long, ra, dec, Peak(), SETTINGS)
    assert found["flux"][0] == pytest.approx(5.0, rel=2e-3)
    unknown = FrameToMeasure(frame.path, unit="adu")
    assert np.isfinite(measure_frame(unknown, ra, dec, Aperture(), SETTINGS)["flux"][0])


def test_faults_are_told(tmp_path: Path) -> None:
    """A file that is gone, an HDU or plane that is not there, and coordinates that cannot be used raise."""
    frame, _ = random_frame(tmp_path / "a.fits", 1)
    where = np.array([1.0]), np.array([1.0])
    with pytest.raises(FileNotFoundError):
        measure_frame(FrameToMeasure(str(tmp_path / "none.fits")), *where, Aperture(), SETTINGS)
    with pytest.raises(SetAsideError):
        measure_frame(dataclasses.replace(frame, hdu=3), *where, Aperture(), SETTINGS)
    fits.PrimaryHDU(sky()).writeto(tmp_path / "b.fits")
    with pytest.raises(ValueError, match="celestial"):
        measure_frame(FrameToMeasure(str(tmp_path / "b.fits")), *where, Aperture(), SETTINGS)


@pytest.mark.parametrize(
    ("unit", "name"),
    [("Jy/beam", "peak"), ("mJy beam-1", "peak"), ("K", "peak"), ("ADU", "psf"), ("counts", "psf"), ("electron", "psf"),
     ("", "aperture"), ("Jy/pixel", "aperture"), ("furlong", "aperture")],
)  # fmt: skip
def test_the_unit_chooses_the_estimator(unit: str, name: str) -> None:
    """Per-beam maps are read at the peak, counts fitted with the PSF, anything else summed in an aperture."""
    assert choose_estimator(ESTIMATORS, unit).name == name
    assert choose_estimator(ESTIMATORS[::-1], unit, "auto").name == name
    expected = "aperture" if name == "psf" else name
    assert choose_estimator(ESTIMATORS, unit, beam_known=False).name == expected


def test_an_estimator_can_be_set() -> None:
    """By name, whatever the unit; a name that is none is refused with the names there are."""
    assert choose_estimator(ESTIMATORS, "Jy/beam", "aperture").name == "aperture"
    with pytest.raises(UsageError, match="no estimator 'pearl'; there are auto, aperture, peak, psf"):
        choose_estimator(ESTIMATORS, "Jy/beam", "pearl")
    with pytest.raises(UsageError, match="no estimator plugin"):
        choose_estimator([], "Jy")
    assert choose_estimator([Psf()], "furlong", beam_known=False).name == "psf"


@dataclass(frozen=True)
class Wrong(Estimator):
    """An estimator with a flux too few."""

    units: ClassVar[tuple[str, ...]] = ("x",)
    reach: float = setting(1.0, "radius")

    def radius(self, beam):
        """As set."""
        return self.reach

    def measure(self, stamps):
        """One value too few."""
        return stamps.rms[1:], stamps.rms


def test_a_wrong_estimator_is_named() -> None:
    """Fluxes of the wrong shape are an error that names the plugin."""
    with pytest.raises(TypeError, match=r"estimator wrong returned shapes \(1,\) and \(2,\)"):
        measure(Pixels(sky()), np.array([50.0, 60]), np.array([50.0, 60]), ROUND, Wrong(), Photometry())


def test_bright_sources(tmp_path: Path) -> None:
    """Sources above the limit are found where they are, and nothing else is, in noise that changes over the image."""
    frame, wcs = random_frame(tmp_path / "a.fits", 7, fwhm=4.0)
    y, x = np.indices((180, 200))
    rng = np.random.default_rng(3)
    image = rng.normal(0, 1, x.shape) * np.where(x < 100, 1.0, 5.0) + 20
    true = [(40.0, 50.0, 12.0), (150.0, 120.0, 60.0), (70.0, 150.0, 3.0)]
    for cx, cy, peak in true:
        image += peak * 2.0 ** (-4 * ((x - cx) ** 2 + (y - cy) ** 2) / 16)
    image[:20] = np.nan
    image[20:24] = 0.0
    with fits.open(tmp_path / "a.fits", mode="update") as hdus:
        hdus[0].data[:] = image
    ra, dec, snr, beam = bright_sources(frame, 6.0, SETTINGS)
    assert beam == pytest.approx(frame.beam_major, rel=1e-6)
    px, py = wcs.all_world2pix(ra, dec, 0)
    order = np.argsort(px)
    np.testing.assert_allclose(px[order], [40, 150], atol=1.5)
    np.testing.assert_allclose(py[order], [50, 120], atol=1.5)
    assert (snr > 6).all()


def test_no_bright_sources(tmp_path: Path) -> None:
    """None found is empty arrays."""
    frame, _ = random_frame(tmp_path / "a.fits", 7)
    ra, dec, snr, _ = bright_sources(frame, 20.0, SETTINGS)
    assert len(ra) == len(dec) == len(snr) == 0


def test_cutout(tmp_path: Path) -> None:
    """Raw pixels around a position, NaN beyond the edge, with the way to the sky."""
    frame, wcs = random_frame(tmp_path / "a.fits", 8)
    image = fits.getdata(tmp_path / "a.fits")
    made = cutout(frame, 100.3, 90.2, 2.0, SETTINGS)
    assert made.pixels.shape == (13, 13)
    np.testing.assert_array_equal(made.pixels, image[84:97, 94:107])
    assert (made.x, made.y) == (pytest.approx(6.3), pytest.approx(6.2))
    assert made.fwhm == pytest.approx(3.0, rel=1e-6)
    (ra0, ra1), (dec0, dec1) = wcs.all_pix2world([100.3, 101.3], [90.2, 90.2], 0)
    east, north = made.to_sky @ [1.0, 0.0]
    assert east == pytest.approx((ra1 - ra0) * 3600 * np.cos(np.radians(dec0)), rel=1e-3)
    assert north == pytest.approx((dec1 - dec0) * 3600, rel=1e-3)
    assert np.isnan(cutout(frame, 0.0, 90.0, 2.0, SETTINGS).pixels[:, :6]).all()
