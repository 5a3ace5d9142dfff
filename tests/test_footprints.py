"""Outlines and coverage: arrays against the careful way, and footprints against pixel coordinates."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from hindlight import footprints, outlines
from hindlight.outlines import Image, Outline
from hindlight.sky import projection
from hindlight.systems import BadWcsError, NoCelestialError, unit_vectors
from made import cards_of, header

NAN = float("nan")


def image(width: int = 120, height: int = 80, mjd: float = NAN, **cards: object) -> Image:
    """An image with the plain header and some cards changed."""
    return Image(cards_of(header(**cards)), "", width, height, mjd)


def columns(*images: Image) -> dict[str, np.ndarray]:
    """The footprint columns of images that all have one."""
    found = [own for own in outlines.outlines(images) if isinstance(own, Outline)]
    assert len(found) == len(images)
    return footprints.columns(found)


def careful(one: Image) -> Outline:
    """The outline through `sky.projection`."""
    return outlines.outline.__wrapped__(projection(one.cards), one.width, one.height, None)


def apart(a: np.ndarray, b: np.ndarray) -> float:
    """The largest distance between points in arcsec."""
    return float(np.abs(unit_vectors(*a.T) - unit_vectors(*b.T)).max()) * 206265


@given(
    st.sampled_from(sorted(outlines.ZENITHAL)),
    st.sampled_from([("RA--", "DEC-", "ICRS"), ("RA--", "DEC-", "FK5"), ("GLON", "GLAT", None)]),
    st.floats(0, 360),
    st.floats(-89.9, 89.9),
    st.floats(-3.2, 3.2),
    st.sampled_from(["CDELT", "PC", "CD"]),
    st.floats(1e-4, 0.05),
)
def test_arrays_agree_with_the_careful_way(
    code: str, kind: tuple[str, str, str | None], lon: float, lat: float, turn: float, style: str, scale: float
) -> None:
    """Plain zenithal images done together lie where wcslib puts them, to a microarcsecond."""
    cards: dict[str, object] = {"CTYPE1": f"{kind[0]}-{code}", "CTYPE2": f"{kind[1]}-{code}", "RADESYS": kind[2]}
    cards |= {"CRVAL1": lon, "CRVAL2": lat, "CRPIX1": 33.3, "CRPIX2": -5.0, "CDELT1": -scale, "CDELT2": scale * 1.1}
    c, s = float(np.cos(turn)), float(np.sin(turn))
    if style == "PC":
        cards |= {"PC1_1": c, "PC1_2": s, "PC2_1": -s, "PC2_2": c}
    if style == "CD":
        cards |= {"CDELT1": None, "CDELT2": None}
        cards |= {"CD1_1": -scale * c, "CD1_2": scale * s, "CD2_1": scale * s, "CD2_2": scale * c}
    one = image(**cards)
    assert outlines._plain(one.cards) is not None
    (ours,) = outlines.outlines([one])
    theirs = careful(one)
    assert isinstance(ours, Outline)
    assert apart(ours.points, theirs.points) < 1e-6
    assert ours.pixel_scale == pytest.approx(theirs.pixel_scale, rel=1e-6)
    assert ours.system_assumed == theirs.system_assumed


@pytest.mark.parametrize(
    "cards",
    [
        {"CTYPE1": "RA---CAR", "CTYPE2": "DEC--CAR"},
        {"CTYPE1": "RA---TAN-SIP", "CTYPE2": "DEC--TAN-SIP", "A_ORDER": 2, "A_2_0": 1e-5, "B_ORDER": 2, "B_0_2": 1e-5},
        {"PV2_1": 0.1, "PV2_2": 0.2},
        {"CROTA2": 20.0},
        {"LONPOLE": 170.0},
        {"CRVAL2": 90.0},
        {"RADESYS": "FK4", "EQUINOX": 1950.0},
        {"CTYPE1": "DEC--SIN", "CTYPE2": "RA---SIN"},
        {"CTYPE1": "RA---NCP", "CTYPE2": "DEC--NCP"},
        {"CUNIT1": "arcsec", "CUNIT2": "arcsec", "CDELT1": -36.0, "CDELT2": 36.0, "CRVAL1": 108000.0},
        {"PC1_3": 0.0},
    ],
)
def test_unusual_images_go_the_careful_way(cards: dict[str, object]) -> None:
    """What is more than a plain zenithal projection is left to `sky.projection`."""
    one = image(**cards)
    assert outlines._plain(one.cards) is None
    (ours,) = outlines.outlines([one])
    assert isinstance(ours, Outline)
    np.testing.assert_array_equal(ours.points, careful(one).points)


@pytest.mark.parametrize(
    "cards", [{"LONPOLE": 180.0, "LATPOLE": 40.0}, {"CROTA1": 0.0, "CROTA2": 0.0}, {"CUNIT1": None}]
)
def test_harmless_cards_are_plain(cards: dict[str, object]) -> None:
    """Cards that state what holds anyway make no image unusual."""
    one = image(**cards)
    assert outlines._plain(one.cards) is not None
    (ours,) = outlines.outlines([one])
    assert isinstance(ours, Outline)
    assert apart(ours.points, careful(one).points) < 1e-6


@pytest.mark.parametrize(
    ("cards", "error"),
    [
        ({"CTYPE1": None}, NoCelestialError),
        ({"CRVAL1": None}, BadWcsError),
        ({"CDELT1": 0.0}, BadWcsError),
        ({"CDELT2": None}, BadWcsError),
        ({"RADESYS": "GAPPT"}, BadWcsError),
        ({"CRPIX1": "left"}, BadWcsError),
        ({"PC1_1": 1.0, "PC1_2": 1.0, "PC2_1": 1.0, "PC2_2": 1.0}, BadWcsError),
        ({"CDELT1": 5.0, "CDELT2": 5.0, "CRPIX1": 900.0}, BadWcsError),
    ],
)
def test_unusable_coordinates(cards: dict[str, object], error: type[ValueError]) -> None:
    """Images without usable coordinates are refused one by one; those beside them are not touched."""
    good, bad, again = outlines.outlines([image(), image(**cards), image()])
    assert isinstance(good, Outline)
    assert isinstance(again, Outline)
    assert isinstance(bad, error)


def test_frame_assumed() -> None:
    """A header without RADESYS is said to leave its system to the rules."""
    found = outlines.outlines([image(RADESYS=None), image(), image(RADESYS=None, CTYPE1="GLON-TAN", CTYPE2="GLAT-TAN")])
    assert [own.system_assumed for own in found if isinstance(own, Outline)] == [True, False, False]


def test_date_of_fk4_images() -> None:
    """The outline of an image in FK4 depends on its date, by some tenths of an arcsecond in decades."""
    cards = {"RADESYS": "FK4", "EQUINOX": 1950.0}
    early, late = outlines.outlines([image(mjd=40000.0, **cards), image(mjd=60000.0, **cards)])
    assert isinstance(early, Outline)
    assert isinstance(late, Outline)
    assert 0.01 < apart(early.points, late.points) < 0.5


def test_columns_of_a_small_image() -> None:
    """Centre, radius and scale of an image are those of its pixels; the footprint goes round it."""
    found = columns(image(CRPIX1=60.5, CRPIX2=40.5))
    assert found["centre_ra"][0] == pytest.approx(30.0)
    assert found["centre_dec"][0] == pytest.approx(40.0)
    assert found["radius"][0] == pytest.approx(np.hypot(0.6, 0.4), rel=1e-3)
    assert found["pixel_scale"][0] == pytest.approx(36.0)
    points = np.array(found["footprint"][0].split(), float).reshape(8, 2)
    assert points[:, 1].min() == pytest.approx(39.6, abs=0.01)


def test_image_that_reaches_beyond_the_sky() -> None:
    """An image whose corners are off the projection has a circle that holds all of its sky, and no outline."""
    cards = {"CDELT1": -1.0, "CDELT2": 1.0, "CRPIX1": 75.5, "CRPIX2": 75.5}
    found = columns(image(150, 150, **cards))
    assert found["footprint"].tolist() == [""]
    assert 88.0 < found["radius"][0] < 93.0
    sky = columns(image(360, 180, CTYPE1="RA---AIT", CTYPE2="DEC--AIT", **(cards | {"CRPIX1": 180.5, "CRPIX2": 90.5})))
    assert sky["radius"][0] == pytest.approx(180.0, abs=5.0)
    assert footprints.coverage_matrix(sky, unit_vectors(np.array([210.0]), np.array([-40.0]))).tolist() == [[True]]


@given(
    st.sampled_from(["SIN", "TAN", "ZEA", "CAR", "SFL"]),
    st.floats(0, 360),
    st.floats(-75, 75),
    st.sampled_from([0.001, 0.02, 0.2]),
    st.integers(0, 10**6),
)
def test_covered_is_inside(code: str, ra: float, dec: float, scale: float, seed: int) -> None:
    """A position whose pixel lies in the image is covered; one well outside is not. Images up to 24 degrees wide."""
    lat = 0.0 if code in ("CAR", "SFL") else dec
    cards = {"CTYPE1": f"RA---{code}", "CTYPE2": f"DEC--{code}", "CRVAL1": ra, "CRVAL2": lat, "CDELT1": -scale}
    one = image(**cards, CDELT2=scale, CRPIX1=60.5, CRPIX2=40.5 - (dec / scale if lat == 0.0 else 0.0) * (dec != lat))
    frames = columns(one)
    rng = np.random.default_rng(seed)
    sky = projection(one.cards)
    inside_x, inside_y = rng.uniform(-0.5, 119.5, 200), rng.uniform(-0.5, 79.5, 200)
    points = sky.pixel_to_icrs(inside_x, inside_y)
    assert footprints.coverage_matrix(frames, unit_vectors(*points)).all()
    side = rng.integers(0, 2, 50)
    out_x = np.where(side == 0, -0.5 - 12, 119.5 + 12) * np.ones(50)
    points = np.stack(sky.pixel_to_icrs(out_x, rng.uniform(20, 60, 50)))
    there = np.isfinite(points).all(axis=0)
    covered = footprints.coverage_matrix(frames, unit_vectors(*points[:, there]))
    assert not covered.any()


def test_many_frames_and_positions() -> None:
    """The matrix in pieces is the same as one frame and one position at a time."""
    rng = np.random.default_rng(7)
    frames = columns(*(image(CRVAL1=30 + a, CRVAL2=40 + b) for a, b in rng.normal(size=(40, 2))))
    vectors = unit_vectors(30 + rng.normal(size=60), 40 + rng.normal(size=60))
    whole = footprints.coverage_matrix(frames, vectors)
    assert 0.02 < whole.mean() < 0.9
    for i in range(40):
        alone = {name: values[i : i + 1] for name, values in frames.items()}
        assert footprints.coverage_matrix(alone, vectors)[0].tolist() == whole[i].tolist()
    assert footprints.coverage_matrix(frames, vectors[:0]).shape == (40, 0)


def test_covering() -> None:
    """The frames that contain one position."""
    frames = columns(image(), image(CRVAL1=50.0), image(CRVAL1=29.7))
    assert footprints.covering(frames, 29.5, 40.3).tolist() == [0, 2]
    assert footprints.covering(frames, 200.0, -40.0).tolist() == []
