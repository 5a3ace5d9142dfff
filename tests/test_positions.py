"""Targets read and refused, fields, and where controls stand."""

import astropy.units as u
import numpy as np
import pytest
from astropy.coordinates import SkyCoord
from astropy.table import Table
from hypothesis import given
from hypothesis import strategies as st

from hindlight import positions
from hindlight.errors import UsageError
from hindlight.systems import unit_vectors


def write(path, text):
    """A target file with this text."""
    path.write_text(text, encoding="utf-8")
    return path


def test_degrees_and_sexagesimal_text_agree(tmp_path):
    """Sexagesimal text (hours for ra) gives the same position as degrees."""
    a = positions.read_targets(write(tmp_path / "a.csv", "name,ra,dec\nx,83.633083,22.0145\n"))
    b = positions.read_targets(write(tmp_path / "b.csv", "name,ra,dec\nx,05:34:31.93992,+22:00:52.2\n"))
    assert b.ra == pytest.approx(a.ra, abs=1e-6)
    assert b.dec == pytest.approx(a.dec, abs=1e-6)


@pytest.mark.parametrize("ending", [".ecsv", ".fits", ".vot", ".csv"])
def test_every_format_is_read(tmp_path, ending):
    """The four formats named in the README give the same targets, with units turned into degrees."""
    table = Table({"name": ["a", "b"], "ra": [10.0, 20.0] * u.deg, "dec": [-5.0, 5.0] * u.deg})
    path = tmp_path / f"t{ending}"
    table.write(path, format={".csv": "ascii.csv", ".ecsv": "ascii.ecsv", ".vot": "votable"}.get(ending))
    found = positions.read_targets(path)
    assert found.names == ("a", "b")
    assert found.ra.tolist() == [10.0, 20.0]


def test_radians_and_hours_are_converted(tmp_path):
    """A column with a unit of its own is taken in that unit."""
    path = tmp_path / "t.ecsv"
    Table({"name": ["a"], "ra": [1.0] * u.rad, "dec": [0.5] * u.rad, "period": [2.0] * u.min}).write(path)
    found = positions.read_targets(path)
    assert found.ra[0] == pytest.approx(np.degrees(1.0))
    assert found.column("period")[0] == pytest.approx(120.0)


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("name,ra\nx,1\n", "no column 'dec'"),
        ("name,ra,dec\nx,1,2\nx,3,4\n", "row 2, column 'name': 'x' stands in row 1"),
        ("name,ra,dec\nx,1,95\n", "row 1, column 'dec'"),
        ("name,ra,dec\nx,1,2\ny,,4\n", "row 2, column 'ra'"),
        ("name,ra,dec\nx,twelve,4\n", "'twelve' is no angle"),
        ("name,ra,dec\n", "no rows"),
        ("name,ra,dec,period\nx,1,2,-3\n", "row 1, column 'period': -3 is out of range"),
        ("name,ra,dec,epoch\nx,1,2,52000\n", "column 'epoch': 52000 is out of range"),
        ("name,ra,dec,ref_epoch\nx,1,2,51544\n", "column 'ref_epoch'"),
    ],
)
def test_mistakes_name_row_and_column(tmp_path, text, words):
    """What is wrong with a target list is said with row and column."""
    with pytest.raises(UsageError, match=words):
        positions.read_targets(write(tmp_path / "t.csv", text))


def test_names_are_text_whatever_they_look_like(tmp_path):
    """A byte-order mark is no part of a column's name, and 002 and 1e5 are names."""
    path = tmp_path / "t.csv"
    path.write_bytes("name,ra,dec\n002,1,2\n1e5,3,4\n".encode("utf-8-sig"))
    assert positions.read_targets(path).names == ("002", "1e5")


def test_a_wrong_unit_is_refused(tmp_path):
    """A period in degrees is no period."""
    path = tmp_path / "t.ecsv"
    Table({"name": ["a"], "ra": [1.0], "dec": [0.5], "period": [2.0] * u.deg}).write(path)
    with pytest.raises(UsageError, match="'period'"):
        positions.read_targets(path)


def test_names_are_made_from_positions(tmp_path):
    """Without names the designation is cut off, not rounded (IAU recommendations for designations)."""
    found = positions.read_targets(write(tmp_path / "t.csv", "ra,dec\n12:34:56.78,-01:02:03.9\n"))
    assert found.names == ("J123456.7-010203",)


@given(st.floats(0, 359.999), st.floats(-89.9, 89.9), st.floats(-1, 1), st.floats(-1, 1))
def test_tangent_plane_agrees_with_astropy(ra, dec, x, y):
    """Offsets on the tangent plane give the same place as astropy's spherical offset to the plane's own accuracy."""
    a, d = positions.from_tangent(ra, dec, np.array([x]), np.array([y]))
    centre, place = SkyCoord(ra * u.deg, dec * u.deg), SkyCoord(a * u.deg, d * u.deg)
    rho = np.degrees(np.arctan(np.radians(np.hypot(x, y))))
    assert centre.separation(place).deg[0] == pytest.approx(rho, abs=1e-9)


def test_separation_agrees_with_astropy():
    """Angles between unit vectors equal astropy's, from milliarcseconds to the antipode."""
    ra, dec = np.array([10.0, 10.0, 10.0, 190.0]), np.array([20.0, 20.0 + 1e-6, 21.0, -20.0])
    vectors = unit_vectors(ra, dec)
    sky = SkyCoord(ra * u.deg, dec * u.deg)
    expected = [[a.separation(b).deg for b in sky] for a in sky]
    np.testing.assert_allclose(positions.separation_deg(vectors, vectors), expected, atol=1e-7)


@pytest.mark.parametrize("dec", [-89.5, -30.0, 0.0, 60.0, 89.9])
def test_grid_points_keep_their_distance(dec):
    """No two places for controls are nearer than the spacing, anywhere on the sky, and the order is repeatable."""
    ra, d = positions.control_grid(5.0, dec, 1.0, 0.02, 300, 12)
    vectors = unit_vectors(ra, d)
    apart = positions.separation_deg(vectors, vectors) + 10 * np.eye(len(ra))
    assert apart.min() > 0.02 * 0.999
    assert len(ra) > 300
    again = positions.control_grid(5.0, dec, 1.0, 0.02, 300, 12)
    np.testing.assert_array_equal(ra, again[0])


@given(st.floats(0, 359.99), st.floats(-90, 90), st.floats(0.01, 30))
def test_fields_are_small_cells(ra, dec, size):
    """A position and one a thousandth of a field away nearly always share a field, one ten fields away never does."""
    here = positions.field_of(np.array([ra]), np.array([dec]), size)
    far = positions.field_of(np.array([ra]), np.array([dec - np.sign(dec or 1) * min(10 * size, 85)]), size)
    assert here.dtype == np.int64
    assert here[0] != far[0] or 10 * size > 85


def test_motion_is_applied():
    """Ten mas a year for 35 years is 0.35 arcsec, in right ascension divided by cos(dec) (exact)."""
    one = np.ones(1)
    ra, dec = positions.moved(100 * one, 60 * one, 10 * one, -10 * one, 2000 * one, 2035.0)
    assert (ra[0] - 100) * 3600 * 0.5 == pytest.approx(0.35, rel=1e-6)
    assert (dec[0] - 60) * 3600 == pytest.approx(-0.35, rel=1e-6)


def test_serving_counts_shared_frames():
    """A control in nine of ten of a target's frames serves it at 0.9, one in eight does not."""
    target = np.ones((10, 1), bool)
    controls = np.ones((10, 2), bool)
    controls[0, :] = False
    controls[1, 1] = False
    assert positions.serves(target, controls, 0.9).tolist() == [[True, False]]
