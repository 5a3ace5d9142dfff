"""The `[[frames]]` blocks of the settings: read, refused with block and key, and written so that they are read again."""

from __future__ import annotations

import re
import tomllib
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from astropy import units as u
from astropy.coordinates import EarthLocation

from hindlight.blocks import FACTS, MATCH, from_geodetic, read_blocks
from hindlight.errors import UsageError
from hindlight.settings import Settings, read_settings, render, settings_from

EVERYTHING = """
[sites]
"old dome" = { lat = -30.0, lon = 20.0, height = 1000.0 }
hill = [5195675.767, 1891071.326, -3170873.735]

[[frames]]
path = "plates/*"
instrument = "CAM ?"
header = { OBSERVER = "J*", NAXIS1 = 512, "DATE-OBS" = "19*", SIMPLE = true }
from = 1990-01-01
to = "1995-01-01T12:00:00"
where_missing = true
site = "old dome"
beam_arcsec = [45, 30.0, 190]

[[frames]]
site = { lat = 10.0, lon = 20.0 }
clock_offset_s = -3
stokes = "xx"
"""


def test_blocks_survive_being_written_and_read(tmp_path: Path) -> None:
    """Every kind of value comes back from the text a run keeps, dates and inner tables too."""
    (tmp_path / "a.toml").write_text(EVERYTHING, encoding="utf-8")
    first = read_settings(tmp_path / "a.toml")
    (tmp_path / "b.toml").write_text(render(first), encoding="utf-8")
    assert read_settings(tmp_path / "b.toml") == first
    one, two = first.frames
    assert one.match == {
        "path": "plates/*", "instrument": "CAM ?", "from": "1990-01-01", "to": "1995-01-01T12:00:00",
        "header": {"OBSERVER": "J*", "NAXIS1": 512, "DATE-OBS": "19*", "SIMPLE": True},
    }  # fmt: skip
    assert (one.where_missing, one.facts) == (True, {"site": "old dome", "beam_arcsec": (45.0, 30.0, 10.0)})
    assert (two.facts["clock_offset_s"], two.facts["stokes"], two.match) == (-3.0, "XX", {})


def test_what_is_printed_as_an_example_can_be_used() -> None:
    """The commented block of `hindlight settings` is a valid block once its signs of comment are gone."""
    lines = render(Settings()).splitlines()
    start = lines.index("# [[frames]]")
    keys = [f"# {key} = " for key in (*MATCH, *FACTS, "where_missing")]
    block = [line[2:] for line in lines[start + 1 :] if line.startswith(tuple(keys))]
    assert len(block) == len(keys)
    content = tomllib.loads("[[frames]]\n" + "\n".join(block))
    (read,) = read_blocks(content["frames"], {"north hill": (6.4e6, 0.0, 0.0)}, "test")
    assert set(read.facts) == set(FACTS)


def test_the_example_of_the_readme_is_read() -> None:
    """The settings that README.md shows are valid."""
    text = (Path(__file__).parents[1] / "README.md").read_text(encoding="utf-8")
    (shown,) = re.findall(r"```toml\n(.*?)```", text, re.DOTALL)
    settings = settings_from(tomllib.loads(shown), "README.md")
    assert (len(settings.frames), settings.companions.rms) == (2, "noise/{name}")
    named = set(re.findall(r"`?\b([a-z_]+)\b", text.split("### Telling it")[1].split("### What a run holds")[0]))
    assert {*MATCH, *FACTS, "where_missing"} <= named


def test_a_run_cannot_change_blocks() -> None:
    """Blocks and companions are among what touches measured values."""
    before, after = ({"frames": [{"unit": unit}], "companions": {}} for unit in ("adu", "K"))
    assert settings_from(before, "t").measuring() != settings_from(after, "t").measuring()
    assert settings_from(before, "t").measuring()["frames"] == {"block 1": {"unit": "adu"}}


@pytest.mark.parametrize(
    ("latitude", "longitude", "height"),
    [(-30.0, 20.0, 1000.0), (0.0, 0.0, 0.0), (89.9, -170.0, -100.0), (51, 359, 5e3)],
)
def test_geodetic_places_agree_with_astropy(latitude: float, longitude: float, height: float) -> None:
    """Degrees and height above WGS 84 become the metres that astropy gives."""
    place = EarthLocation.from_geodetic(longitude * u.deg, latitude * u.deg, height * u.m)
    np.testing.assert_allclose(
        from_geodetic(latitude, longitude, height), [c.to_value("m") for c in (place.x, place.y, place.z)], atol=1e-4
    )


GOOD: dict[str, Any] = {"unit": "adu"}


@pytest.mark.parametrize(
    ("block", "words"),
    [
        ({"exposure": 3.0}, ["no key 'exposure'", "did you mean 'exposure_s'"]),
        ({"instrumnt": "a"}, ["did you mean 'instrument'"]),
        ({"exposure_s": "long"}, ["exposure_s: expected a positive number", "'long'"]),
        ({"exposure_s": True}, ["expected a positive number"]),
        ({"exposure_s": 0.0}, ["expected a positive number"]),
        ({"exposure_s": float("nan")}, ["expected a positive number"]),
        ({"clock_error_s": -1.0}, ["expected a positive number"]),
        ({"frequency_hz": 1400}, ["block 2 frequency_hz: expected a frequency in Hz, 1e7 to 1e12, got 1400"]),
        (
            {"primary_beam_fwhm_deg": 1.0, "primary_beam_at_hz": 1.4},
            ["primary_beam_at_hz: expected a frequency in Hz, 1e7 to 1e12, got 1.4"],
        ),
        ({"good_time_fraction": 1.2}, ["expected a fraction above 0, at most 1"]),
        ({"date_means": "beginning"}, ["one of start, middle, end"]),
        ({"time_scale": "gmt"}, ["one of utc"]),
        ({"stokes": "R"}, ["one of I, Q"]),
        ({"primary_beam": "yes"}, ["one of corrected, uncorrected"]),
        ({"primary_beam": "corrected", "primary_beam_fwhm_deg": 1.0}, ["primary_beam_fwhm_deg: not used"]),
        ({"primary_beam_at_hz": 1e9}, ["primary_beam_at_hz", "give primary_beam_fwhm_deg"]),
        ({"unit": ""}, ["unit: expected text"]),
        ({"beam_arcsec": [30.0, 45.0, 0.0]}, ["major not below minor"]),
        ({"beam_arcsec": [30.0, 45.0]}, ["[major, minor, angle]"]),
        ({"site": "hil"}, ["no place 'hil' in [sites]", "did you mean 'hill'"]),
        ({"site": [1.0, 2.0, 3.0]}, ["site: expected [x, y, z] in metres"]),
        ({"site": {"lat": 95.0, "lon": 3.0}}, ["{ lat = , lon = , height = }"]),
        ({"site": {"latitude": 5.0, "lon": 3.0}}, ["{ lat = , lon = , height = }"]),
        ({"header": "J*"}, ["a table of keywords"]),
        ({"header": {"OBSERVER NAME": "J"}}, ["FITS keywords", "'OBSERVER NAME'"]),
        ({"header": {"A": [1]}}, ["a table of keywords"]),
        ({"from": "last year"}, ["a date such as 1994-07-01"]),
        ({"from": "1995-01-01", "to": "1995-01-01"}, ["to: expected a date after from"]),
        ({"path": 3}, ["path: expected a pattern"]),
        ({"where_missing": "yes"}, ["true or false"]),
    ],
)
def test_a_wrong_block_is_named(block: dict[str, Any], words: list[str]) -> None:
    """What is wrong with a block is said in one line with its number, the key, and what was expected."""
    with pytest.raises(UsageError) as raised:
        settings_from({"sites": {"hill": [6.4e6, 0, 0]}, "frames": [GOOD, block]}, "s.toml")
    text = str(raised.value)
    assert text.startswith("s.toml: [[frames]] block 2")
    assert "\n" not in text
    for word in words:
        assert word in text


def test_blocks_of_the_wrong_kind() -> None:
    """[frames] for [[frames]] is told."""
    with pytest.raises(UsageError, match=r"each headed \[\[frames\]\]"):
        settings_from({"frames": {"unit": "adu"}}, "s.toml")


@pytest.mark.parametrize(
    "pattern", ["{stem}.fits", "{name}", "rms.fits", "{stem}{name}", "{stem}.txt", "/a/{name}", "{x}/{name}"]
)
def test_companion_patterns_that_name_no_companion(pattern: str) -> None:
    """A pattern that gives the image itself, every image the same file, or no FITS file is refused."""
    with pytest.raises(UsageError, match=r"\[companions\] rms: expected a file name"):
        settings_from({"companions": {"rms": pattern}}, "s.toml")
