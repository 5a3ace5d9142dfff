"""Projections: the lean path against the full astropy WCS, check values from the literature, and refusals."""

from __future__ import annotations

import threading
import warnings
from pathlib import Path

import numpy as np
import pytest
from astropy import units as u
from astropy.coordinates import FK4, SkyCoord
from astropy.io import fits
from astropy.time import Time
from astropy.wcs import WCS, FITSFixedWarning

from hindlight.facts import Cards
from hindlight.sky import Projection, beam_shape, projection
from hindlight.systems import BadWcsError, NoCelestialError, System

SIN = {
    "NAXIS": 2, "NAXIS1": 100, "NAXIS2": 100, "CTYPE1": "RA---SIN", "CTYPE2": "DEC--SIN", "CRVAL1": 30.0,
    "CRVAL2": 40.0, "CRPIX1": 50.0, "CRPIX2": 50.0, "CDELT1": -0.01, "CDELT2": 0.01, "RADESYS": "ICRS",
}  # fmt: skip


def header(base: dict | None = None, **values) -> fits.Header:
    """A header of cards; None removes one."""
    out = fits.Header()
    for key, value in ((SIN if base is None else base) | values).items():
        if value is not None:
            out[key] = value
    return out


def cards(head: fits.Header) -> Cards:
    """The cards of an astropy header."""
    return Cards(head.tostring(endcard=False, padding=False).encode("latin-1"))


def full(head: fits.Header, **kwargs) -> WCS:
    """Astropy's own celestial WCS."""
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", FITSFixedWarning)
        return WCS(head, **kwargs).celestial


def rotated(code: str, style: str, swap: bool, axes: int, rng: np.random.Generator) -> fits.Header:
    """A random header with a given projection, matrix style, order of axes and number of axes."""
    crval = {"CAR": 0.0, "CEA": 0.0, "MER": 0.0}.get(code, rng.uniform(-60, 60))
    angle, scale = np.radians(rng.uniform(-180, 180)), rng.uniform(1e-4, 5e-3)
    lon, lat = (2, 1) if swap else (1, 2)
    values = {"NAXIS": axes, "NAXIS1": 300, "NAXIS2": 260, f"CTYPE{lon}": f"RA---{code}", f"CTYPE{lat}": f"DEC--{code}",
              f"CRVAL{lon}": rng.uniform(0, 360), f"CRVAL{lat}": crval, "CRPIX1": rng.uniform(-50, 350),
              "CRPIX2": rng.uniform(-50, 350), "RADESYS": "ICRS"}  # fmt: skip
    c, s = np.cos(angle), np.sin(angle)
    if style == "crota":
        values |= {f"CDELT{lon}": -scale, f"CDELT{lat}": 1.1 * scale, f"CROTA{lat}": np.degrees(angle)}
    elif style == "pc":
        values |= {"CDELT1": -scale, "CDELT2": scale, "PC1_1": c, "PC1_2": -s, "PC2_1": s, "PC2_2": c}
    else:
        values |= {"CD1_1": -scale * c, "CD1_2": scale * s, "CD2_1": scale * s, "CD2_2": scale * c, "CDELT1": 7.0}
    if axes == 4:
        values |= {"NAXIS3": 1, "NAXIS4": 1, "CTYPE3": "FREQ", "CRVAL3": 1.4e9, "CRPIX3": 1.0, "CDELT3": 1e6,
                   "CTYPE4": "STOKES", "CRVAL4": 1.0, "CRPIX4": 1.0, "CDELT4": 1.0}  # fmt: skip
        if style == "pc":
            values |= {"PC3_3": 1.0, "PC4_4": 1.0, "PC1_3": 0.0}
        if style == "cd":
            values |= {"CD3_3": 1e6, "CD4_4": 1.0}
    return header(values)


def differences(head: fits.Header, swap: bool = False) -> tuple[float, float]:
    """The largest difference from astropy over the image: pixels of positions, and arcsec of pixels."""
    ours, theirs = projection(cards(head)), full(head)
    rng = np.random.default_rng(5)
    x, y = rng.uniform(-20, 320, 50), rng.uniform(-20, 280, 50)
    world = theirs.all_pix2world(np.column_stack((x, y)), 0)
    lon, lat = (world[:, 1], world[:, 0]) if swap else (world[:, 0], world[:, 1])
    ra, dec = ours.pixel_to_icrs(x, y)
    on_sky = np.hypot((ra - lon + 180) % 360 - 180, dec - lat) * 3600
    good = np.isfinite(lon)
    px, py = ours.icrs_to_pixel(lon[good], lat[good])
    return float(np.hypot(px - x[good], py - y[good]).max()), float(np.nanmax(on_sky))


@pytest.mark.parametrize("code", ["SIN", "TAN", "ZEA", "ARC", "STG", "CAR", "CEA", "MER", "SFL", "AIT"])
@pytest.mark.parametrize("style", ["crota", "pc", "cd"])
@pytest.mark.parametrize("swap", [False, True])
@pytest.mark.parametrize("axes", [2, 4])
def test_lean_path_agrees_with_the_full_wcs(code: str, style: str, swap: bool, axes: int) -> None:
    """Whatever the projection, matrix, order and number of axes, pixels agree with astropy's WCS to 1e-6."""
    rng = np.random.default_rng(len(code + style) + 10 * swap + axes)
    pixels, arcsec = differences(rotated(code, style, swap, axes, rng), swap)
    assert pixels < 1e-6
    assert arcsec < 1e-6


def sip_header(suffix: str = "-SIP") -> fits.Header:
    """A TAN header with a distortion of a few pixels at the corners."""
    head = header(SIN, CTYPE1="RA---TAN" + suffix, CTYPE2="DEC--TAN" + suffix, NAXIS1=300, NAXIS2=260)
    head.update({"A_ORDER": 2, "B_ORDER": 2, "A_2_0": 2e-5, "A_1_1": -1e-5, "B_0_2": 3e-5, "B_2_0": -1e-5})
    return head


@pytest.mark.parametrize("suffix", ["-SIP", ""])
def test_sip_goes_through_the_full_wcs(suffix: str, capfd: pytest.CaptureFixture[str]) -> None:
    """SIP distortions are applied, named in CTYPE or not, and nothing is printed about them."""
    head = sip_header(suffix)
    ours = projection(cards(head))
    assert capfd.readouterr().err == ""
    theirs = full(sip_header())
    x, y = np.array([0.0, 299.0, 120.5]), np.array([0.0, 259.0, 30.25])
    world = theirs.all_pix2world(np.column_stack((x, y)), 0)
    assert np.abs(theirs.wcs_world2pix(world, 0)[:, 0] - x).max() > 0.5  # the distortion is no trifle
    np.testing.assert_allclose(ours.icrs_to_pixel(world[:, 0], world[:, 1]), (x, y), atol=1e-6)
    np.testing.assert_allclose(np.column_stack(ours.pixel_to_icrs(x, y)), world, atol=1e-10)


def test_points_beyond_a_distortion_are_undefined() -> None:
    """Where the iteration of a distortion does not come back to the same point, the pixel is NaN, not somewhere."""
    head = sip_header()
    head["A_2_0"], head["B_0_2"] = 2e-3, 2e-3
    ours = projection(cards(head))
    x, y = ours.icrs_to_pixel(np.array([30.0, 30.0 + 20.0, 210.0]), np.array([40.0, 30.0, -40.0]))
    np.testing.assert_allclose((x[0], y[0]), (49.0, 49.0), atol=1e-6)
    assert np.isnan(x[1:]).all()
    assert np.isnan(y[1:]).all()


def test_tpv_and_old_scamp_headers() -> None:
    """Polynomials in PV cards are applied under the code TPV and under the code TAN of older headers alike."""
    pv = {"PV1_0": 0.0, "PV1_1": 1.0, "PV1_4": 0.02, "PV1_5": 0.01, "PV2_0": 0.0, "PV2_1": 1.0, "PV2_4": -0.03}
    cd = {"CDELT1": None, "CDELT2": None, "CD1_1": -0.001, "CD1_2": 0.0, "CD2_1": 0.0, "CD2_2": 0.001}
    tpv = header(SIN, CTYPE1="RA---TPV", CTYPE2="DEC--TPV", **cd, **pv)
    old = header(SIN, CTYPE1="RA---TAN", CTYPE2="DEC--TAN", **cd, **pv)
    for head in (tpv, old):
        pixels, arcsec = differences(head)
        assert pixels < 1e-6
        assert arcsec < 1e-6
    ours = projection(cards(tpv)).pixel_to_icrs(np.array([0.0]), np.array([0.0]))
    plain = projection(cards(header(SIN, CTYPE1="RA---TAN", CTYPE2="DEC--TAN", **cd)))
    assert abs(ours[0][0] - plain.pixel_to_icrs(np.zeros(1), np.zeros(1))[0][0]) > 2e-5


def test_look_up_tables_are_read_from_the_file(tmp_path: Path) -> None:
    """A distortion kept as an image in another HDU is applied when the file is given, refused when it is not."""
    head = header(SIN, CTYPE1="RA---TAN", CTYPE2="DEC--TAN")
    hdus = fits.HDUList([fits.PrimaryHDU(np.zeros((100, 100), np.float32), head)])
    for axis, shift in ((1, 1.5), (2, -0.5)):
        hdus[0].header[f"CPDIS{axis}"] = "LOOKUP"
        for record in (f"EXTVER: {axis}", "NAXES: 2", "AXIS.1: 1", "AXIS.2: 2"):
            hdus[0].header.append((f"DP{axis}", record))
        table = fits.ImageHDU(np.full((2, 2), shift, np.float32), name="WCSDVARR", ver=axis)
        values = {"CRPIX": 1.0, "CRVAL": 1.0, "CDELT": 99.0}
        table.header.update({f"{key}{i}": value for key, value in values.items() for i in (1, 2)})
        hdus.append(table)
    path = tmp_path / "table.fits"
    hdus.writeto(path)
    head = fits.getheader(path)
    plain = projection(cards(header(SIN, CTYPE1="RA---TAN", CTYPE2="DEC--TAN")))
    ours = projection(cards(head), str(path))
    ra, dec = plain.pixel_to_icrs(np.array([40.0]), np.array([60.0]))
    np.testing.assert_allclose(np.ravel(ours.icrs_to_pixel(ra, dec)), (38.5, 60.5), atol=1e-5)
    with pytest.raises(BadWcsError, match="look-up table"):
        projection(cards(head))


@pytest.mark.parametrize(
    ("changes", "ra", "dec"),
    [
        ({"CROTA2": 0.0}, 29.86926764, 40.09992672),
        ({"CROTA2": 30.0}, 29.82158244, 40.03646583),
        ({"CTYPE1": "RA---NCP", "CTYPE2": "DEC--NCP"}, 29.86926804, 40.09971915),
        ({"CTYPE1": "RA---GLS", "CTYPE2": "DEC--GLS"}, 29.86926761, 40.1),
    ],
)
def test_check_values(changes: dict, ra: float, dec: float) -> None:
    """Pixel (60, 60) of a plain, a rotated and two legacy projections (Calabretta & Greisen 2002, 6.1)."""
    got = projection(cards(header(**changes))).pixel_to_icrs(np.array([59.0]), np.array([59.0]))
    np.testing.assert_allclose(np.ravel(got), (ra, dec), atol=6e-9)


def test_other_hemisphere_is_undefined() -> None:
    """A position that the projection cannot show is NaN, and a pixel off the sphere is too."""
    sin = projection(cards(header()))
    x, y = sin.icrs_to_pixel(np.array([30.0, 210.0]), np.array([40.0, -40.0]))
    np.testing.assert_allclose((x[0], y[0]), (49.0, 49.0))
    assert np.isnan((x[1], y[1])).all()
    assert np.isnan(sin.pixel_to_icrs(np.array([1e6]), np.array([0.0]))).all()


def test_no_positions() -> None:
    """Empty arrays come back empty."""
    for head in (header(), sip_header()):
        x, y = projection(cards(head)).icrs_to_pixel(np.zeros(0), np.zeros(0))
        assert x.size == y.size == 0


def test_cylindrical_image_far_from_its_reference() -> None:
    """An image 200 degrees of longitude from its reference value is found there, not one turn away."""
    head = header(SIN, CTYPE1="RA---CAR", CTYPE2="DEC--CAR", CRVAL1=0.0, CRVAL2=0.0, CRPIX1=20050.0)
    ours = projection(cards(head))
    ra, dec = ours.pixel_to_icrs(np.array([10.0]), np.array([20.0]))
    np.testing.assert_allclose(np.ravel(ours.icrs_to_pixel(ra, dec)), (10.0, 20.0), atol=1e-6)


def test_fk4_image_uses_its_own_date() -> None:
    """A B1950 image of 1985 puts an ICRS position where astropy's FK4 with that date puts it."""
    head = header(RADESYS=None, EPOCH=1950.0, CDELT1=-1e-4, CDELT2=1e-4)
    mjd = Time("1985-03-01").mjd
    ours = projection(cards(head))
    assert (ours.system, ours.system_assumed) == (System("fk4", 1950.0), True)
    sky = SkyCoord(30.72, 40.24, unit=u.deg)
    old = sky.transform_to(FK4(equinox="B1950", obstime=Time(mjd, format="mjd")))
    want = full(head).wcs_world2pix([[old.ra.deg, old.dec.deg]], 0)[0]
    got = ours.icrs_to_pixel(np.array([sky.ra.deg]), np.array([sky.dec.deg]), mjd)
    np.testing.assert_allclose(np.ravel(got), want, atol=1e-6)
    late = ours.icrs_to_pixel(np.array([sky.ra.deg]), np.array([sky.dec.deg]))
    assert 0.05 < np.hypot(late[0] - got[0], late[1] - got[1])[0] < 1.0  # the equinox as date: 0.15" off
    back = ours.pixel_to_icrs(*got, mjd)
    np.testing.assert_allclose(np.ravel(back), (sky.ra.deg, sky.dec.deg), atol=1e-10)


def test_galactic_image() -> None:
    """An image in galactic coordinates takes ICRS positions."""
    head = header(CTYPE1="GLON-CAR", CTYPE2="GLAT-CAR", CRVAL1=30.0, CRVAL2=0.0, RADESYS=None)
    ours = projection(cards(head))
    assert (ours.system, ours.system_assumed) == (System("galactic"), False)
    sky = SkyCoord(30.1, 0.2, unit=u.deg, frame="galactic").icrs
    want = full(head).wcs_world2pix([[30.1, 0.2]], 0)[0]
    np.testing.assert_allclose(np.ravel(ours.icrs_to_pixel(np.array([sky.ra.deg]), np.array([sky.dec.deg]))), want)


def test_celestial_axes_need_not_come_first() -> None:
    """In an image stored as frequency, RA, Dec the celestial axes are the second and third."""
    head = fits.Header()
    values = {"NAXIS": 3, "NAXIS1": 4, "NAXIS2": 100, "NAXIS3": 80, "CTYPE1": "FREQ", "CRVAL1": 1e9, "CRPIX1": 1.0,
              "CDELT1": 1e6, "CTYPE2": "RA---SIN", "CTYPE3": "DEC--SIN", "CRVAL2": 30.0, "CRVAL3": 40.0,
              "CRPIX2": 50.0, "CRPIX3": 40.0, "CDELT2": -0.01, "CDELT3": 0.01}  # fmt: skip
    head.update(values)
    ours = projection(cards(head))
    assert ours.axes == (2, 3)
    assert ours.size == (100, 80)
    want = full(head).wcs_world2pix([[30.1, 40.1]], 0)[0]
    np.testing.assert_allclose(np.ravel(ours.icrs_to_pixel(np.array([30.1]), np.array([40.1]))), want, atol=1e-6)


@pytest.mark.parametrize("code", ["CAR", "TAN-SIP"])
def test_tile_compressed_headers(tmp_path: Path, code: str) -> None:
    """The header of the table that holds a compressed image gives the image's projection and size."""
    head = sip_header() if code == "TAN-SIP" else header(CTYPE1="RA---CAR", CTYPE2="DEC--CAR", CRVAL2=0.0)
    path = tmp_path / "a.fits.fz"
    image = fits.CompImageHDU(np.zeros((80, 90), np.float32), head)
    fits.HDUList([fits.PrimaryHDU(), image]).writeto(path)
    with fits.open(path, disable_image_compression=True) as hdus:
        ours = projection(cards(hdus[1].header))
    assert ours.size == (90, 80)
    want = full(image.header).all_pix2world([[3.0, 70.0]], 0)
    np.testing.assert_allclose(np.column_stack(ours.pixel_to_icrs(np.array([3.0]), np.array([70.0]))), want, atol=1e-9)


@pytest.mark.parametrize(
    ("changes", "error", "words"),
    [
        ({"CTYPE1": None, "CTYPE2": None}, NoCelestialError, "no CTYPE"),
        ({"CTYPE1": "LINEAR", "CTYPE2": "LINEAR"}, NoCelestialError, "LINEAR"),
        ({"CTYPE2": "RA---SIN"}, NoCelestialError, "no pair"),
        ({"CTYPE2": "GLAT-SIN"}, BadWcsError, "no pair"),
        ({"CTYPE2": "DEC--TAN"}, BadWcsError, "no pair"),
        ({"CTYPE1": "ELON-SIN", "CTYPE2": "ELAT-SIN"}, BadWcsError, "ecliptic"),
        ({"CRVAL1": None}, BadWcsError, "CRVAL1 is missing"),
        ({"CRVAL2": "40"}, BadWcsError, "CRVAL2 is missing or no number"),
        ({"CRPIX2": None}, BadWcsError, "CRPIX2"),
        ({"CDELT1": 0.0}, BadWcsError, "CDELT1 is zero"),
        ({"CDELT1": None, "CDELT2": None}, BadWcsError, "CDELT1 is missing"),
        ({"CD1_1": 1e-3, "CD1_2": 1e-3, "CD2_1": 1e-3, "CD2_2": 1e-3}, BadWcsError, "singular"),
        ({"PC1_3": 0.5, "CTYPE3": "FREQ"}, BadWcsError, "mixes"),
        ({"CTYPE1": "RA---XXX", "CTYPE2": "DEC--XXX"}, BadWcsError, "wcslib"),
        ({"CRVAL2": 95.0}, BadWcsError, "no latitude"),
        ({"CTYPE1": "RA---TAB", "CTYPE2": "DEC--TAB"}, BadWcsError, "TAB"),
        ({"RADESYS": "GAPPT"}, BadWcsError, "apparent"),
        ({"CTYPE1": "RA---TPV", "CTYPE2": "DEC--TPV", "PV1_1": 1.0, "PV2_1": 1.0}, BadWcsError, "TPV needs a CD"),
    ],
)
def test_refusals(changes: dict, error: type[ValueError], words: str) -> None:
    """Coordinates that are absent or unusable are refused with a sentence that says why."""
    with pytest.raises(error, match=words):
        projection(cards(header(**changes)))


def test_pixel_scale_and_jacobian() -> None:
    """A pixel of 36 by 36 arcsec, east to the left; the ICRS directions differ from FK4's by the turn of the pole."""
    ours = projection(cards(header(RADESYS="FK4")))
    assert ours.pixel_scale_arcsec == pytest.approx(36.0, rel=1e-6)
    np.testing.assert_allclose(ours.reference_jacobian, [[-36.0, 0.0], [0.0, 36.0]], atol=1e-5)
    turned = ours.jacobian_icrs(*ours.reference, 45000.0)
    assert np.linalg.det(turned) == pytest.approx(-(36.0**2), rel=1e-5)
    assert 0.05 < abs(turned[0, 1]) < 0.3


@pytest.mark.parametrize("code", ["SIN", "TAN", "ZEA", "ARC", "STG", "NCP"])
@pytest.mark.parametrize("style", ["crota", "pc", "cd"])
@pytest.mark.parametrize("swap", [False, True])
@pytest.mark.parametrize("where", ["anywhere", "turned", "pole"])
def test_jacobian_at_the_reference_pixel(code: str, style: str, swap: bool, where: str) -> None:
    """It is what the sky around that pixel says, and taken from the matrix alone only where that says it all."""
    head = rotated(code, style, swap, 2, np.random.default_rng(len(code + style)))
    if where == "turned":
        head["LONPOLE"] = 150.0
    elif where == "pole":
        head[f"CRVAL{1 if swap else 2}"] = 90.0
    ours = projection(cards(head))
    from_sky = ours.jacobian(*ours.reference)
    np.testing.assert_allclose(ours.reference_jacobian, from_sky, atol=1e-5 * ours.pixel_scale_arcsec)
    assert (ours.scale_matrix is not None) == (where == "anywhere" and code != "NCP")


def test_jacobian_at_the_pole() -> None:
    """Near a pole east and north are still right: a pixel step goes where the projection says."""
    ours = projection(cards(header(CRVAL2=89.99)))
    jacobian = ours.jacobian(60.0, 51.0)
    assert abs(np.linalg.det(jacobian)) == pytest.approx(36.0**2, rel=1e-5)


@pytest.mark.parametrize("pa", [0.0, 30.0, 100.0])
def test_beam_in_pixels(pa: float) -> None:
    """East to the left, a beam at position angle pa has its major axis at 90 + pa degrees from +x."""
    ours = projection(cards(header()))
    beam = beam_shape(180.0, 108.0, pa, ours.reference_jacobian)
    assert beam.major == pytest.approx(5.0, rel=1e-6)
    assert beam.minor == pytest.approx(3.0, rel=1e-6)
    assert (np.degrees(beam.angle) - 90 - pa + 90) % 180 - 90 == pytest.approx(0.0, abs=1e-6)


def test_round_beam_has_no_angle() -> None:
    """A round beam in square pixels is given angle 0."""
    beam = beam_shape(108.0, 108.0, 77.0, projection(cards(header())).reference_jacobian)
    assert beam.angle == 0.0


def test_same_cards_same_projection() -> None:
    """Headers that differ only in other cards share one projection; no state grows without bound."""
    first = projection(cards(header(OBJECT="one")))
    assert projection(cards(header(OBJECT="two"))) is first


def test_many_threads_share_a_projection() -> None:
    """One projection used by several threads at once gives each its own answer."""
    ours: Projection = projection(cards(header()))
    ra = np.linspace(29.5, 30.5, 2000)
    want = ours.icrs_to_pixel(ra, np.full(2000, 40.0))[0]
    wrong: list[int] = []

    def work() -> None:
        for _ in range(50):
            part = slice(0, 1000 + len(wrong))
            wrong.extend([1] * (not np.array_equal(ours.icrs_to_pixel(ra[part], np.full(1000, 40.0))[0], want[part])))

    threads = [threading.Thread(target=work) for _ in range(4)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    assert not wrong
