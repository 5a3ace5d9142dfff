"""Consistency checks in a whole run: what they are given is what was measured, and their answers reach the table."""

from __future__ import annotations

from dataclasses import dataclass, replace
from pathlib import Path

import numpy as np
import pytest
from astropy import units as u
from astropy.coordinates import EarthLocation
from astropy.io import fits
from astropy.table import Table
from astropy.time import Time

import skies
from hindlight import cli, host, store, tasks
from hindlight.examining import FrameImages
from hindlight.lightcurve import LightCurve
from hindlight.order import Order, book
from hindlight.settings import Settings

ASIDE_PIXELS = 20.0
DEFECT = (90.0, 70.0)  # 0-based pixel, on for some years
ON = (52000.0, 53800.0)


@dataclass(frozen=True)
class Run:
    """A run's folder, and what a piece of work is told of it."""

    folder: Path
    order: Order


@pytest.fixture(scope="module")
def dithered(tmp_path_factory: pytest.TempPathFactory) -> Run:
    """A camera with two pointings, six steady stars, a star that flares, and a warm pixel where a target falls."""
    folder = tmp_path_factory.mktemp("dithered")
    camera = skies.Sky(instrument="camera", n_frames=24, size=160, unit="adu", noise="white", jitter_pixels=0.2)
    aside = ASIDE_PIXELS * camera.pixel_arcsec
    middle = (camera.size - 1) / 2
    place = [(-(DEFECT[0] - middle) * camera.pixel_arcsec, (DEFECT[1] - middle) * camera.pixel_arcsec)]
    false = skies.Source("false", *place[0])
    true = skies.Source("true", 150.0, 160.0, lambda number, day, stokes: 30.0 if number % 6 == 2 else 0.0)
    stars = [skies.Source(f"s{k}", *(550 * np.array((np.cos(k), np.sin(k)))), 80.0) for k in range(1, 7)]
    moved = replace(camera, n_frames=16, dec=camera.dec + aside / 3600)
    skies.write_sky(folder / "frames", camera, [true, *stars], 1, "a")
    there = [replace(source, north=source.north - aside) for source in (true, *stars)]
    skies.write_sky(folder / "frames", moved, there, 2, "b")
    peak = 18.0 / (1.133090 * camera.fwhm_pixels**2) * 2.0
    for path in sorted((folder / "frames").glob("*.fits")):
        with fits.open(path, mode="update") as hdus:
            if ON[0] < Time(hdus[0].header["DATE-OBS"]).mjd < ON[1]:
                skies.add_source(hdus[0].data, np.array(DEFECT), peak * 4, camera.fwhm_pixels)
    (folder / "targets.csv").write_text(skies.target_text([false, true], camera), encoding="utf-8")
    (folder / "s.toml").write_text("[controls]\nper_field = 80\n", encoding="utf-8")
    arguments = ["mine", folder / "frames", "--targets", folder / "targets.csv", "--out", folder / "run", "-q",
                 "--settings", folder / "s.toml", "--without", "lomb_scargle"]  # fmt: skip
    assert cli.run_command([str(a) for a in arguments]) == 0
    run = store.RunFolder(folder / "run")
    return Run(folder / "run", Order(str(run.path), Settings(), host.PluginSpec(), run.version()))


def test_a_warm_pixel_carries_the_concern_and_a_star_does_not(dithered: Run) -> None:
    """Both vary beyond chance; the one that is fixed to the detector is named so, with its pixel."""
    table = Table.read(dithered.folder / "candidates.ecsv")
    rows = {str(row["name"]): row for row in table}
    assert {str(row["standing"]) for row in table} <= {"repeating", "variable"}
    assert "detector_fixed:" in rows["false"]["concerns"]
    assert "pixel 90, 70" in rows["false"]["concerns"]
    assert (rows["true"]["concerns"] or "") in ("", np.ma.masked)
    assert rows["true"]["detector_fixed_verdict"] == "pass"
    assert rows["true"]["detector_fixed_n_tested"] > 0
    assert rows["true"]["neighbour_verdict"] == "pass"
    assert len(Table.read(dithered.folder / "plugin_faults.ecsv")) == 0


def curve_and_images(run: Run, target: int) -> tuple[LightCurve, dict, FrameImages]:
    """The light curve of one target, its raw rows, and the frames as its checks see them."""
    curves, rows = tasks.target_data(run.order, target)
    return curves[0], rows, FrameImages(run.order, rows)


def test_other_pixels_are_measured_by_the_same_code(dithered: Run) -> None:
    """At the target's own pixels flux and error are those of its light curve; off the image there are none."""
    curve, rows, images = curve_and_images(dithered, 1)
    x, y = (rows[axis][np.searchsorted(rows["frame"], curve.frame)] for axis in "xy")
    flux, error = images.measure(curve.frame, x, y)
    np.testing.assert_allclose(flux, curve.flux, rtol=1e-9)
    np.testing.assert_allclose(error, curve.flux_err, rtol=1e-9)
    assert np.isnan(images.measure(curve.frame[:3], x[:3] - 500, y[:3])).all()
    assert np.isnan(images.measure(curve.frame[:3], x[:3] * np.nan, y[:3])).all()


def test_the_same_sky_in_other_frames(dithered: Run) -> None:
    """A target's pixel in one frame is carried to its pixel in another, twenty pixels aside."""
    curve, rows, images = curve_and_images(dithered, 1)
    at = np.searchsorted(rows["frame"], curve.frame)
    x, y = rows["x"][at], rows["y"][at]
    order = np.argsort(y)
    to_x, to_y = images.carried(curve.frame, x, y, curve.frame[order])
    np.testing.assert_allclose(to_x, x[order], atol=0.02)
    np.testing.assert_allclose(to_y, y[order], atol=0.02)
    assert np.ptp(y) > ASIDE_PIXELS - 2


def test_sizes_sources_and_sidereal_times(dithered: Run) -> None:
    """Sizes and sources are the images' own, sidereal times those of astropy within a second."""
    curve, _, images = curve_and_images(dithered, 0)
    assert [set(side.tolist()) for side in images.size(curve.frame)] == [{160.0}, {160.0}]
    x, y, snr = images.sources(int(curve.frame[0]), 5.0)
    assert 6 <= len(x) <= 9
    assert (snr > 5).all()
    assert len(y) == len(x)
    frames = book(dithered.order.run, dithered.order.version).frames
    row = [int(np.flatnonzero(frames["id"] == frame)[0]) for frame in curve.frame]
    site = EarthLocation(*(frames[f"site_{axis}"][row[0]] * u.m for axis in "xyz"))
    expected = Time(list(frames["middle_utc"][row]), scale="utc").sidereal_time("mean", site.lon).deg
    apart = (images.sidereal(curve.frame) - expected + 180) % 360 - 180
    assert np.abs(apart).max() < 0.005


def test_unreadable_frames_are_not_known(dithered: Run, monkeypatch: pytest.MonkeyPatch) -> None:
    """A frame that is gone gives no flux, no place and no sources; the others do."""
    curve, rows, images = curve_and_images(dithered, 1)

    def gone(*_args: object) -> None:
        raise FileNotFoundError("gone")

    monkeypatch.setattr(tasks.photometry, "open_frame", gone)
    x, y = rows["x"][:2], rows["y"][:2]
    assert np.isnan(images.measure(curve.frame[:2], x, y)).all()
    assert np.isnan(images.carried(curve.frame[:2], x, y, curve.frame[:2])).all()
    assert len(images.sources(int(curve.frame[0]), 5.0)[0]) == 0
