"""Companion files: told from images by name, and what mask, weights, noise map and gains do to a measurement."""

from __future__ import annotations

import dataclasses
import os
import tomllib
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from astropy.io import fits
from astropy.time import Time

from hindlight.archive import walk
from hindlight.companions import sort_out
from hindlight.files import FileEntry
from hindlight.headers import SetAsideError
from hindlight.opening import FrameToMeasure
from hindlight.photometry import bright_sources, measure_frame
from hindlight.schema import REASONS, Flag
from hindlight.settings import Companions, Settings, settings_from
from hindlight_plugins.aperture import Aperture
from hindlight_plugins.peak import Peak
from hindlight_plugins.standard_headers import StandardHeaders
from made import header, write

SIZE = 120
SCALE = 10.0  # arcsec
SETTINGS = Settings()


# --- tables of good time


def intervals(path: Path, *spells: tuple[float, float], name: str = "GTI") -> None:
    """A file with a table of good time, seconds from 2001-02-03 TT."""
    columns = [
        fits.Column(key, "D", unit="s", array=np.array(v))
        for key, v in zip(("START", "STOP"), zip(*spells, strict=True), strict=True)
    ]
    table = fits.BinTableHDU.from_columns(columns, name=name)
    table.header["MJDREF"], table.header["TIMESYS"] = 51943.0, "TT"
    fits.HDUList([fits.PrimaryHDU(), table]).writeto(path)


def test_good_time_in_a_file_beside_the_image(tmp_path: Path) -> None:
    """It gives exposure, span and instants of the images of its image's file alone; a block counts before it."""
    for name in ("a", "b", "c"):
        write(tmp_path / f"{name}.fits", EXPTIME=5.0)
    intervals(tmp_path / "a_gti.fits", (100.0, 200.0), (500.0, 700.0))
    intervals(tmp_path / "c_gti.fits", (0.0, 50.0))
    text = '[companions]\ngood_time = "{stem}_gti.fits"\n[[frames]]\npath = "c.fits"\nexposure_s = 40.0\n'
    settings = settings_from(tomllib.loads(text), "s.toml")
    found = walk([str(tmp_path)], [StandardHeaders()], settings)
    assert found.frames["path"].tolist() == ["a.fits", "b.fits", "c.fits"]
    assert found.frames["exposure_s"].tolist() == [300.0, 5.0, 40.0]
    assert found.frames["good_time_file"].tolist() == ["a_gti.fits", "", "c_gti.fits"]
    tt = Time(51943.0 + 400.0 / 86400, format="mjd", scale="tt")
    assert found.frames["middle_mjd_tdb"][0] == pytest.approx(tt.tdb.mjd, abs=1e-8)
    assert "intermittent" in found.frames["assumptions"][0]
    assert [row["reason"] for row in found.rejects] == ["companion", "companion"]
    same = walk(
        [str(tmp_path)], [StandardHeaders()], settings, {**found.frames, "state": np.full(3, "current", object)}
    )
    assert len(same.frames["path"]) == 0


@pytest.mark.parametrize("kind", ["broken", "another name"])
def test_a_good_time_companion_that_cannot_be_used(tmp_path: Path, kind: str) -> None:
    """Its image is set aside, since its exposure is not what the header says."""
    write(tmp_path / "a.fits")
    if kind == "broken":
        (tmp_path / "a_gti.fits").write_bytes(b"nothing")
    else:
        intervals(tmp_path / "a_gti.fits", (0.0, 1.0), name="EVENTS")
    settings = settings_from({"companions": {"good_time": "{stem}_gti.fits"}}, "s.toml")
    found = walk([str(tmp_path)], [StandardHeaders()], settings)
    assert len(found.frames["path"]) == 0
    (row,) = [row for row in found.rejects if row["reason"] == "bad_companion"]
    assert row["path"] == "a.fits"
    assert "a_gti.fits" in row["detail"]


# --- names


def sorted_paths(paths: str, **patterns: str) -> tuple[list[str], dict[str, dict[str, str]], dict[str, str]]:
    """Images, companions and sentences for files named in one string."""
    entries = [FileEntry(path, 100, 5 + i) for i, path in enumerate(paths.split())]
    found = sort_out(entries, Companions(**patterns))
    return [e.path for e in found.images], found.companions, {e.path: text for e, text in found.aside}


def test_no_patterns_leave_every_file_an_image() -> None:
    """Without patterns nothing is a companion, whatever its name."""
    assert sorted_paths("a.fits a.rms.fits") == (["a.fits", "a.rms.fits"], {}, {})


@pytest.mark.parametrize(
    ("paths", "pattern", "owner"),
    [
        ("n/a.fits n/a.rms.fits", "{stem}.rms.fits", {"n/a.fits": "n/a.rms.fits"}),
        ("a.fits.gz a.rms.fits", "{stem}.rms.fits", {"a.fits.gz": "a.rms.fits"}),
        ("a.fits a.rms.fits.fz", "{stem}.rms.fits", {"a.fits": "a.rms.fits.fz"}),
        ("n/a.fits n/noise/a.fits m/a.fits", "noise/{name}", {"n/a.fits": "n/noise/a.fits"}),
        ("n/a.fits noise/a.fits", "../noise/{name}", {"n/a.fits": "noise/a.fits"}),
        ("a.fits.gz noise/a.fits", "noise/{name}", {"a.fits.gz": "noise/a.fits"}),
        ("a.fits rms_a.fits rms_b.fits", "rms_{name}", {"a.fits": "rms_a.fits"}),
    ],
)
def test_names(paths: str, pattern: str, owner: dict[str, str]) -> None:
    """A pattern finds the companion beside the image, packed or not, and no companion stays an image."""
    images, companions, aside = sorted_paths(paths, rms=pattern)
    assert companions == {image: {"rms": path} for image, path in owner.items()}
    assert set(owner) <= set(images)
    assert set(images) | set(aside) == set(paths.split())
    for image, path in owner.items():
        assert aside[path] == f"the noise map of {image}"
    for path in set(aside) - set(owner.values()):
        assert aside[path] == "named as noise map, its image is not there"


def test_walk_skips_companions_and_notices_new_ones(tmp_path: Path) -> None:
    """Companions are rows of the rejects, not frames; an image is read again once a companion comes or changes."""
    write(tmp_path / "a.fits")
    write(tmp_path / "b.fits")
    write(tmp_path / "a.mask.fits")
    write(tmp_path / "a.gain.fits")
    settings = settings_from({"companions": {"mask": "{stem}.mask.fits", "primary_beam": "{stem}.gain.fits"}}, "test")
    found = walk([str(tmp_path)], [StandardHeaders()], settings)
    assert found.frames["path"].tolist() == ["a.fits", "b.fits"]
    assert found.frames["mask_file"].tolist() == ["a.mask.fits", ""]
    assert found.frames["primary_beam"].tolist() == ["uncorrected", "unknown"]
    assert ["primary_beam_unknown" in text for text in found.frames["assumptions"]] == [False, True]
    assert [(r["path"], r["reason"], r["detail"]) for r in found.rejects] == [
        ("a.gain.fits", "companion", "the primary-beam gains of a.fits"),
        ("a.mask.fits", "companion", "the mask of a.fits"),
    ]
    assert found.rejects[0]["reason"] in REASONS
    known = found.frames | {"state": np.full(2, "current", object)}
    again = walk([str(tmp_path)], [StandardHeaders()], settings, known)
    assert (len(again.frames["path"]), len(again.rejects)) == (0, 2)
    write(tmp_path / "b.mask.fits")
    os.utime(tmp_path / "b.mask.fits", ns=(1, 1))
    assert walk([str(tmp_path)], [StandardHeaders()], settings, known).frames["path"].tolist() == ["b.fits"]
    os.utime(tmp_path / "a.mask.fits", ns=(2**61, 2**61))
    assert walk([str(tmp_path)], [StandardHeaders()], settings, known).frames["path"].tolist() == ["a.fits", "b.fits"]


def test_gains_are_not_applied_twice(tmp_path: Path) -> None:
    """A frame that a block calls corrected keeps its fluxes, and says that the companion is not used."""
    write(tmp_path / "a.fits")
    write(tmp_path / "a.gain.fits")
    settings = settings_from(
        {"companions": {"primary_beam": "{stem}.gain.fits"}, "frames": [{"primary_beam": "corrected"}]}, "test"
    )
    found = walk([str(tmp_path)], [StandardHeaders()], settings)
    assert found.frames["primary_beam"][0] == "corrected"
    assert "gains_not_applied: " in found.frames["assumptions"][0]


# --- measurements


@pytest.fixture
def made(tmp_path: Path) -> tuple[FrameToMeasure, np.ndarray]:
    """A frame of white noise about 100 with some sources, and its pixels."""
    rng = np.random.default_rng(3)
    y, x = np.mgrid[:SIZE, :SIZE]
    image = rng.normal(100.0, 1.0, (SIZE, SIZE)).astype(np.float32)
    for px, py in ((60.0, 60.0), (45.3, 70.8)):
        image += (50 * 2.0 ** (-4 * ((x - px) ** 2 + (y - py) ** 2) / 9.0)).astype(np.float32)
    return frame(tmp_path / "a.fits", image), image


def cards() -> fits.Header:
    """The header of the frame: its reference pixel is (60, 60), 0-based."""
    return header(
        CTYPE1="RA---SIN", CTYPE2="DEC--SIN", CRPIX1=61.0, CRPIX2=61.0, CRVAL1=30.0, CRVAL2=40.0,
        CDELT1=-SCALE / 3600, CDELT2=SCALE / 3600,
    )  # fmt: skip


def frame(path: Path, image: np.ndarray) -> FrameToMeasure:
    """A file of these pixels."""
    fits.PrimaryHDU(image, cards()).writeto(path)
    return FrameToMeasure(str(path), beam_major=30.0, beam_minor=30.0, beam_angle=0.0, unit="Jy/beam", mjd=50000.0)


def with_companion(
    made: FrameToMeasure, kind: str, pixels: np.ndarray, state: str = "uncorrected", name: str = "companion.fits"
) -> FrameToMeasure:
    """The same frame with a companion of these pixels, whose header says nothing."""
    path = Path(made.path).parent / name
    fits.PrimaryHDU(pixels).writeto(path)
    return dataclasses.replace(made, companions={**made.companions, kind: str(path)}, primary_beam=state)


def measured(it: FrameToMeasure, estimator: Any = None, **photometry: float) -> dict[str, np.ndarray]:
    """Measurements on and near the sources: at pixels (60, 60), (45.3, 70.8) and (70.4, 50.2)."""
    x, y = np.array([60.0, 45.3, 70.4]), np.array([60.0, 70.8, 50.2])
    # The inverse of an orthographic (SIN) projection, written out: the offsets are direction cosines.
    east, north = -np.radians((x - 60) * SCALE / 3600), np.radians((y - 60) * SCALE / 3600)
    along = np.sqrt(1 - east**2 - north**2)
    d0 = np.radians(40.0)
    dec = np.degrees(np.arcsin(north * np.cos(d0) + along * np.sin(d0)))
    ra = 30.0 + np.degrees(np.arctan2(east, along * np.cos(d0) - north * np.sin(d0)))
    settings = settings_from({"photometry": photometry}, "test")
    found = measure_frame(it, ra, dec, estimator or Peak(), settings)
    np.testing.assert_allclose(found["x"], x, atol=1e-6)
    return found


def test_a_mask_is_the_same_as_blank_pixels(made: tuple[FrameToMeasure, np.ndarray], tmp_path: Path) -> None:
    """Masked pixels change every column just as NaN in their place: near the source no flux, in the annulus a thinner one."""
    it, image = made
    rng = np.random.default_rng(5)
    mask = (rng.uniform(size=image.shape) < 0.05).astype(np.int16) * 4
    mask[58:63, 58:63], mask[68:74, 43:48], mask[61, 60] = 0, 0, 1
    blanked = np.where(mask != 0, np.nan, image).astype(np.float32)
    want = measured(frame(tmp_path / "blanked.fits", blanked))
    got = measured(with_companion(it, "mask", mask))
    for name, values in want.items():
        np.testing.assert_array_equal(got[name], values, err_msg=name)
    assert got["flags"][0] == Flag.BLANKED
    assert np.isnan(got["flux"][0])
    assert np.isfinite(got["flux"][1])
    assert got["background"][1] != measured(it)["background"][1]


def test_a_mask_hides_bright_pixels_from_the_search(made: tuple[FrameToMeasure, np.ndarray]) -> None:
    """What is masked is no bright source to keep clear of."""
    it, image = made
    mask = np.zeros(image.shape, np.uint8)
    mask[50:70, 50:70] = 1
    assert len(bright_sources(it, 10.0, SETTINGS)[0]) == 2
    assert len(bright_sources(with_companion(it, "mask", mask), 10.0, SETTINGS)[0]) == 1


@pytest.mark.parametrize("estimator", [Peak(), Aperture()])
def test_gains_divide_flux_and_error(made: tuple[FrameToMeasure, np.ndarray], estimator: Any) -> None:
    """A gain that changes linearly over the image divides flux and error by its value at the position itself."""
    it, image = made
    y, x = np.mgrid[: image.shape[0], : image.shape[1]]
    plain = measured(it, estimator)
    got = measured(with_companion(it, "primary_beam", 0.2 + 0.004 * x + 0.001 * y), estimator)
    gain = 0.2 + 0.004 * got["x"] + 0.001 * got["y"]
    np.testing.assert_allclose(got["gain"], gain, rtol=1e-9)
    np.testing.assert_allclose(got["flux"], plain["flux"] / gain, rtol=1e-9)
    np.testing.assert_allclose(got["flux_err"], plain["flux_err"] / gain, rtol=1e-9)
    np.testing.assert_array_equal(got["rms"], plain["rms"])
    assert (plain["gain"] == 1).all()


def test_gains_below_the_floor_are_not_used(made: tuple[FrameToMeasure, np.ndarray]) -> None:
    """Where the gain is below the floor, zero or no number there is no flux, and a flag."""
    it, image = made
    gains = np.full(image.shape, 0.5, np.float32)
    gains[55:65, 55:65], gains[45:55, 65:75] = 0.14, np.nan
    got = measured(with_companion(it, "primary_beam", gains))
    assert np.isnan(got["flux"]).tolist() == [True, False, True]
    assert got["flags"].tolist() == [Flag.LOW_GAIN, 0, Flag.LOW_GAIN]
    assert got["gain"][0] == pytest.approx(0.14)
    lower = measured(
        dataclasses.replace(with_companion(it, "primary_beam", gains, name="b.fits")), primary_beam_floor=0.1
    )
    assert lower["flux"][0] == pytest.approx(measured(it)["flux"][0] / 0.14)
    gains[:] = 0.0
    none = measured(with_companion(it, "primary_beam", gains, name="c.fits"), primary_beam_floor=0.0)
    assert (none["flags"] & Flag.LOW_GAIN).all()


@pytest.mark.parametrize("state", ["corrected", "unknown"])
def test_gains_wait_for_an_uncorrected_frame(made: tuple[FrameToMeasure, np.ndarray], state: str) -> None:
    """Neither a gain file nor a Gaussian touches frames that are corrected, or of which nothing is known."""
    it, image = made
    got = measured(with_companion(it, "primary_beam", np.full(image.shape, 0.5), state))
    np.testing.assert_array_equal(got["flux"], measured(it)["flux"])
    got = measured(dataclasses.replace(it, primary_beam=state, primary_beam_fwhm_deg=0.01))
    np.testing.assert_array_equal(got["flux"], measured(it)["flux"])


@pytest.mark.parametrize(
    ("fraction", "gain"), [(0.25, 0.8408964), (0.5, 0.5), (0.0, 1.0)]
)  # the Gaussian by its definition: 2^(-4 f^2) at f of its full width at half maximum
def test_a_gaussian_primary_beam(tmp_path: Path, fraction: float, gain: float) -> None:
    """A source so far north of the reference pixel, as a fraction of the width, is dimmed by the stated gain."""
    it = frame(tmp_path / "a.fits", np.random.default_rng(1).normal(0, 1, (SIZE, SIZE)))
    ra, dec = np.array([30.0]), np.array([40.0 + fraction * 0.1])
    plain = measure_frame(it, ra, dec, Peak(), SETTINGS)
    it = dataclasses.replace(it, primary_beam="uncorrected", primary_beam_fwhm_deg=0.1)
    got = measure_frame(it, ra, dec, Peak(), SETTINGS)
    assert got["gain"][0] == pytest.approx(gain, rel=1e-6)
    assert got["flux"][0] == pytest.approx(plain["flux"][0] / gain, rel=1e-6)


def test_a_noise_map_sets_the_error(made: tuple[FrameToMeasure, np.ndarray]) -> None:
    """The error is in proportion to the noise: with the map's 3 at the position it is 3 over the local noise times as large."""
    it, image = made
    noise = np.full(image.shape, 9.0, np.float32)
    noise[60, 60], noise[71, 45], noise[50, 70] = 3.0, 5.0, np.nan
    plain, got = measured(it), measured(with_companion(it, "rms", noise))
    np.testing.assert_array_equal(got["rms"], [3.0, 5.0, np.nan])
    np.testing.assert_array_equal(np.isnan(got["flux"]), [False, False, True])
    np.testing.assert_array_equal(got["flux"][:2], plain["flux"][:2])
    np.testing.assert_allclose(
        got["flux_err"][:2], plain["flux_err"][:2] * got["rms"][:2] / plain["rms"][:2], rtol=1e-9
    )


def test_weights_blank_and_scale_the_error(made: tuple[FrameToMeasure, np.ndarray]) -> None:
    """A quarter of the weight around it doubles a position's error, whatever the weights' unit; weight zero is blank."""
    it, image = made
    weight = np.full(image.shape, 80.0, np.float32)
    weight[58:63, 58:63] = 20.0
    plain, got = measured(it), measured(with_companion(it, "weight", weight))
    np.testing.assert_allclose(got["flux_err"][0], 2 * plain["flux_err"][0], rtol=1e-9)
    np.testing.assert_array_equal(got["flux"], plain["flux"])
    weight[71, 46] = 0.0
    got = measured(with_companion(it, "weight", weight, name="b.fits"))
    assert got["flags"].tolist() == [0, Flag.BLANKED, 0]
    assert np.isnan(got["flux"][1])


def test_companions_of_other_containers(made: tuple[FrameToMeasure, np.ndarray]) -> None:
    """A tile-compressed companion in another HDU, and one plane for all planes of a cube, are found."""
    it, image = made
    folder = Path(it.path).parent
    gains = np.full(image.shape, 0.5, np.float32)
    packed = fits.HDUList([fits.PrimaryHDU(), fits.CompImageHDU(gains, compression_type="GZIP_1", quantize_level=0)])
    packed.writeto(folder / "packed.fits.fz")
    it = dataclasses.replace(
        it, primary_beam="uncorrected", companions={"primary_beam": str(folder / "packed.fits.fz")}
    )
    assert measured(it)["gain"].tolist() == [0.5, 0.5, 0.5]
    cube_cards = cards()
    cube_cards["CTYPE3"], cube_cards["CRVAL3"], cube_cards["CDELT3"], cube_cards["CRPIX3"] = "FREQ", 1e9, 1e6, 1.0
    fits.PrimaryHDU(np.stack([image, image]), cube_cards).writeto(folder / "cube.fits")
    flat = gains[None]
    flat[0, 60, 60] = 0.25
    fits.PrimaryHDU(np.stack([gains, gains / 2])).writeto(folder / "two.fits")
    fits.PrimaryHDU(flat).writeto(folder / "one.fits")
    for name, wanted in (("one", 0.25), ("two", 0.125)):
        second = dataclasses.replace(
            it, path=str(folder / "cube.fits"), plane=1, companions={"primary_beam": str(folder / f"{name}.fits")}
        )
        assert measured(second)["gain"][0] == pytest.approx(wanted)


@pytest.mark.parametrize("kind", ["weight", "rms", "mask", "primary_beam"])
def test_a_companion_that_does_not_fit(made: tuple[FrameToMeasure, np.ndarray], kind: str) -> None:
    """A companion of another shape, cut short or no FITS sets the frame aside with a sentence that names it."""
    it, image = made
    with pytest.raises(SetAsideError, match=rf"its {kind} companion companion\.fits has 120 x 119 pixels") as raised:
        measured(with_companion(it, kind, image[:-1]))
    assert raised.value.reason == "bad_companion"
    path = Path(it.path).parent / "companion.fits"
    fits.PrimaryHDU(image).writeto(path, overwrite=True)
    path.write_bytes(path.read_bytes()[:20000])
    broken = dataclasses.replace(it, companions={kind: str(path)}, primary_beam="uncorrected")
    with pytest.raises(SetAsideError, match=r"companion\.fits cannot be used: HDU 0 should end"):
        measured(broken)
    path.write_bytes(b"nothing")
    with pytest.raises(SetAsideError, match=r"companion\.fits cannot be used: the file begins"):
        measured(broken)
