"""Times of a cube's planes by a table that follows the image."""

from __future__ import annotations

import warnings
from pathlib import Path

import numpy as np
import pytest
from astropy.io import fits
from astropy.time import Time
from astropy.wcs import WCS, FITSFixedWarning

from hindlight.archive import walk
from hindlight.settings import Settings
from hindlight_plugins.standard_headers import StandardHeaders
from made import header

TIMES = np.array([10.0, 75.0, 300.0, 310.0])
CARDS = {
    "CTYPE3": "TIME-TAB", "CUNIT3": "s", "CRVAL3": 1.0, "CRPIX3": 1.0, "CDELT3": 1.0, "PS3_0": "WHEN", "PS3_1": "SECONDS",
    "PV3_1": 1, "PV3_2": 1, "PV3_3": 1, "MJDREF": 51943.0, "TIMESYS": "TT", "EXPTIME": 8.0, "DATE__OBS": "2001-02-03T00:00:00",
}  # fmt: skip


def cube(folder: Path, columns: list[fits.Column], name: str = "WHEN", **cards: object) -> Path:
    """A cube of four planes and a table behind it."""
    data = np.arange(4 * 12 * 16, dtype=np.float32).reshape(4, 12, 16)
    head = header(**({**CARDS, **cards}))
    table = fits.BinTableHDU.from_columns(columns, name=name)
    fits.HDUList([fits.PrimaryHDU(data, head), table]).writeto(folder / "cube.fits")
    return folder / "cube.fits"


def one_row(values: np.ndarray, name: str = "SECONDS", unit: str = "s") -> fits.Column:
    """A column whose only row holds all values, as the standard has it."""
    return fits.Column(name, f"{len(values)}D", dim=f"(1,{len(values)})", unit=unit, array=values.reshape(1, -1, 1))


def middles(folder: Path) -> np.ndarray:
    """Seconds after the reference of the planes that a walk finds, in order; NaN without a clock."""
    found = walk([str(folder)], [StandardHeaders()], Settings())
    assert found.frames["plane"].tolist() == [0, 1, 2, 3]
    reference = Time(51943.0, format="mjd", scale="tt").tdb
    clock = np.array(["no_clock" not in text for text in found.frames["assumptions"]])
    seconds = (found.frames["middle_mjd_tdb"] - reference.mjd) * 86400
    return np.where(clock, seconds, np.nan)


def test_planes_have_the_times_of_the_table(tmp_path: Path) -> None:
    """As wcslib looks them up (C. Calabretta's library, in astropy), to a millisecond; exposures stay the header's."""
    path = cube(tmp_path, [one_row(TIMES)])
    np.testing.assert_allclose(middles(tmp_path), TIMES, atol=1e-3)
    with fits.open(path) as hdus, warnings.catch_warnings():
        warnings.simplefilter("ignore", FITSFixedWarning)  # it says what it adds to the header
        wcs = WCS(hdus[0].header, hdus)
        looked_up = wcs.all_pix2world(np.column_stack((np.zeros((4, 2)), np.arange(4.0))), 0)[:, 2]
    np.testing.assert_allclose(middles(tmp_path), looked_up, atol=1e-3)
    found = walk([str(tmp_path)], [StandardHeaders()], Settings())
    assert found.frames["exposure_s"].tolist() == [8.0] * 4


@pytest.mark.parametrize("step", [1, -1])
def test_indices_and_units_of_the_table(tmp_path: Path, step: int) -> None:
    """Coordinates are looked up by the column of indices, rising or falling, between its entries too, in the table's unit."""
    index = np.array([2.0, 4.0, 6.0, 10.0])
    columns = [one_row(TIMES[::step] / 60, unit="min"), one_row(index[::step], "PLACE", "")]
    cube(tmp_path, columns, PS3_2="PLACE", CRVAL3=2.0, CDELT3=2.0)
    np.testing.assert_allclose(middles(tmp_path), [10.0, 75.0, 300.0, 305.0], atol=1e-3)


def test_one_row_for_each_plane(tmp_path: Path) -> None:
    """Some write the column the other way round."""
    cube(tmp_path, [fits.Column("SECONDS", "D", unit="s", array=TIMES)])
    np.testing.assert_allclose(middles(tmp_path), TIMES, atol=1e-3)


@pytest.mark.parametrize(
    ("column", "name"),
    [
        (one_row(TIMES, "OTHER"), "WHEN"),
        (one_row(TIMES), "ELSE"),
        (fits.Column("SECONDS", "4A", array=["a", "b"]), "WHEN"),
    ],
)
def test_a_table_that_does_not_tell(tmp_path: Path, column: fits.Column, name: str) -> None:
    """Planes without a time of their own are refused for timing, and measured."""
    cube(tmp_path, [column], name)
    assert np.isnan(middles(tmp_path)).all()


def test_planes_beyond_the_table(tmp_path: Path) -> None:
    """Three entries for four planes: the last has no time; nothing is made up for it."""
    cube(tmp_path, [one_row(TIMES[:3])])
    found = middles(tmp_path)
    np.testing.assert_allclose(found[:3], TIMES[:3], atol=1e-3)
    assert np.isnan(found[3])
