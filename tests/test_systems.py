"""Celestial systems: the rules of headers, and the rotations against astropy and published pairs."""

from __future__ import annotations

import numpy as np
import pytest
from astropy import units as u
from astropy.coordinates import FK4, FK5, ICRS, FK4NoETerms, Galactic, SkyCoord
from astropy.time import Time

from hindlight.facts import Cards
from hindlight.systems import BadWcsError, System, from_icrs, system_of, to_icrs

# B1950 positions of epoch 1979.9 and their J2000 equivalents from a published calibrator handbook.
HANDBOOK = [
    ("00h00m48.4200s -17d43m54.000s", "00h03m21.9969s -17d27m11.781s"),
    ("00h03m22.3357s +38d03m33.430s", "00h05m57.1755s +38d20m15.169s"),
    ("00h36m00.4390s -21d36m33.100s", "00h38m29.9524s -21d20m04.027s"),
    ("17h30m13.5352s -13d02m45.837s", "17h33m02.7058s -13d04m49.546s"),
    ("17h56m55.9320s +23d43m55.800s", "17h59m00.3527s +23d43m46.974s"),
]


def cards(**values: str | float) -> Cards:
    """Cards of the given values."""
    text = ""
    for key, value in values.items():
        shown = f"'{value}'" if isinstance(value, str) else repr(value)
        text += f"{key:8}= {shown}".ljust(80)
    return Cards(text.encode())


def sphere(n: int) -> tuple[np.ndarray, np.ndarray]:
    """Random directions over the whole sphere, poles included."""
    rng = np.random.default_rng(11)
    ra, dec = rng.uniform(0, 360, n), np.degrees(np.arcsin(rng.uniform(-1, 1, n)))
    ra[:2], dec[:2] = 10.0, (90.0, -90.0)
    return ra, dec


@pytest.mark.parametrize(
    ("system", "frame"),
    [
        (System("icrs"), lambda t: ICRS()),
        (System("fk5", 2000.0), lambda t: FK5(equinox="J2000")),
        (System("fk5", 1975.0), lambda t: FK5(equinox="J1975")),
        (System("galactic"), lambda t: Galactic()),
        (System("fk4", 1950.0), lambda t: FK4(equinox="B1950", obstime=t)),
        (System("fk4", 1900.0), lambda t: FK4(equinox="B1900", obstime=t)),
        (System("fk4-no-e", 1950.0), lambda t: FK4NoETerms(equinox="B1950", obstime=t)),
    ],
)
@pytest.mark.parametrize("mjd", [41000.0, 60000.0])
def test_systems_agree_with_astropy(system: System, frame, mjd: float) -> None:
    """The cached matrices and E-terms give what astropy's coordinate frames give, to a microarcsecond."""
    ra, dec = sphere(200)
    lon, lat = from_icrs(ra, dec, system, mjd)
    ours = SkyCoord(lon, lat, unit=u.deg, frame=frame(Time(mjd, format="mjd")))
    theirs = SkyCoord(ra, dec, unit=u.deg).transform_to(ours.frame)
    assert ours.separation(SkyCoord(theirs)).to_value(u.uas).max() < 1.0


@pytest.mark.parametrize("system", [System("icrs"), System("fk5", 1950.0), System("fk4", 1950.0), System("galactic")])
def test_systems_come_back(system: System) -> None:
    """From ICRS and back again is where it began, everywhere on the sphere."""
    ra, dec = sphere(500)
    back_ra, back_dec = to_icrs(*from_icrs(ra, dec, system, 45000.0), system, 45000.0)
    np.testing.assert_allclose(back_dec, dec, atol=2e-8)  # the pole itself is ill-conditioned in latitude
    assert np.abs((back_ra - ra + 180) % 360 - 180)[2:].max() < 1e-11


@pytest.mark.parametrize(("b1950", "j2000"), HANDBOOK)
def test_b1950_positions_of_a_handbook(b1950: str, j2000: str) -> None:
    """Published B1950/J2000 pairs are met to 4 mas when the date of the observation is used, and missed without it."""
    old = SkyCoord(b1950, frame="fk4")
    new = SkyCoord(j2000, frame=FK5(equinox="J2000"))
    lon, lat = np.array([old.ra.deg]), np.array([old.dec.deg])

    def miss(mjd: float) -> float:
        ra, dec = to_icrs(lon, lat, System("fk4", 1950.0), mjd)
        return float(SkyCoord(ra, dec, unit=u.deg).separation(new.icrs).mas[0])

    assert miss(Time("J1979.9").mjd) < 4.0
    assert miss(float("nan")) > 40.0


def test_fk4_at_zero_hours() -> None:
    """B1950 0h 0d is 00h02m33.764s +00d16m42.265s in ICRS (epoch of the position 1950)."""
    ra, dec = to_icrs(np.array([0.0]), np.array([0.0]), System("fk4", 1950.0))
    want = SkyCoord("00h02m33.764s +00d16m42.265s")
    assert SkyCoord(ra, dec, unit=u.deg).separation(want).mas[0] < 15.0


@pytest.mark.parametrize(
    ("header", "system", "assumed"),
    [
        ({"EPOCH": 1950.0}, System("fk4", 1950.0), True),
        ({"EPOCH": 1950.0, "EQUINOX": 2000.0}, System("fk5", 2000.0), True),
        ({"RADECSYS": "FK5", "EPOCH": 1950.0}, System("fk5", 1950.0), False),
        ({}, System("icrs"), True),
        ({"EQUINOX": 2000.0}, System("fk5", 2000.0), True),
        ({"RADESYS": "FK4"}, System("fk4", 1950.0), False),
        ({"RADESYS": "FK4-NO-E"}, System("fk4-no-e", 1950.0), False),
        ({"RADESYS": "FK5"}, System("fk5", 2000.0), False),
        ({"RADESYS": "ICRS", "EQUINOX": 2000.0}, System("icrs"), False),
        ({"EQUINOX": "J2000"}, System("fk5", 2000.0), True),
        ({"EPOCH": 0.0}, System("icrs"), True),
    ],
)
def test_rules_of_radesys_and_equinox(header: dict, system: System, assumed: bool) -> None:
    """RADESYS, EQUINOX and their deprecated names decide the system as FITS 4.0, 8.3 says."""
    assert system_of(cards(**header)) == (system, assumed)


def test_apparent_places_are_refused() -> None:
    """Geocentric apparent coordinates are refused with a sentence."""
    with pytest.raises(BadWcsError, match="apparent"):
        system_of(cards(RADESYS="GAPPT"))
