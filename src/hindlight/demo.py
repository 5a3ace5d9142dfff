"""Write the demonstration archive: 25 invented years of one patch of sky, with its targets and its truth.

Everything is drawn from one seed and written without clock, path or checksum, so the same bytes come out each time.
Sources are planted in the pixels through each file's own world coordinates; nothing here reads or measures an image.
"""

import gzip
import io
import math
from collections.abc import Sequence
from dataclasses import dataclass
from datetime import datetime, timedelta
from pathlib import Path
from typing import Any

import astropy.units as u
import numpy as np
from astropy.coordinates import EarthLocation, SkyCoord
from astropy.io import fits
from astropy.table import Table
from astropy.time import Time
from astropy.utils import iers
from astropy.wcs import WCS
from numpy.typing import NDArray

Floats = NDArray[np.float64]
Cards = dict[str, Any]  # FITS keyword to value, or to value and comment

SEED = 316
CENTRE_DEG = (93.42, -27.83)
SITE_M, LONGITUDE_DEG = (-3879044.87, 3986542.11, -3111452.80), 134.217
GAIN = 12.0  # electrons per adu
BLANK = -32768
LEVELS_PER_SIGMA = 4.0  # stored levels per noise sigma: what gzip and Rice can pack well

PERIOD_S, FIRST_PULSE_BJD, WINDOW_S, PRESENT = 1743.9182, 2449400.51374, 300.0, 0.65
ACTIVE = (("1995-01-01", "1998-01-01"), ("2003-01-01", "2006-01-01"), ("2012-01-01", "2014-01-01"))
CYCLE_DAYS, MAXIMUM_BJD, AMPLITUDE = 37.42, 2452263.61, 0.45
FLARE_INDEX, FLARE_SNR = 31, 25.0
WARM_PIXEL, WARM_SNR = (126.0, 58.0), 15.0  # 0-based x, y; Nostev lies where it falls when the camera is not dithered
WARM_SPELLS = (("2006-10-01", "2007-04-01"), ("2013-10-01", "2014-04-01"))
DITHER_PIXELS = 35.0
CUT_SHORT, ALL_BLANK = {("quorvlow", 13), ("quorvcam", 47)}, ("quorvcam", 20)


@dataclass(frozen=True)
class Season:
    """One stretch of a year: lone snapshots, runs of many on one night, and time cubes of many planes."""

    year: int
    first_day: int
    last_day: int
    lone: int
    runs: tuple[int, ...] = ()
    cubes: tuple[int, ...] = ()


@dataclass(frozen=True)
class Instrument:
    """What stays the same for all files of one instrument; `sigma` is a typical flux error (Jy, or adu per second)."""

    key: str
    n_pixels: int
    pixel_arcsec: float
    beam: tuple[float, float, float]  # arcsec, arcsec, degrees east of north
    frequency_hz: float  # 0: optical
    exposures_s: tuple[float, ...]
    cadence_s: float
    sigma: float
    projection: str
    radesys: str
    pointing_pixels: float
    rotation_deg: float
    plain_every: int
    gzip_every: int
    seasons: tuple[Season, ...]

    @property
    def is_radio(self) -> bool:
        """Whether pixels are Jy/beam with beam-shaped noise, and not counts with white noise."""
        return self.frequency_hz > 0


@dataclass(frozen=True)
class Source:
    """A planted source: offsets from the centre (arcmin east, north), typical S/N of a frame in each instrument."""

    name: str
    kind: str
    east: float
    north: float
    snr: Sequence[float] = (0.0, 0.0, 0.0)


@dataclass(frozen=True)
class Look:
    """One file: when it was taken and under which conditions."""

    instrument: Instrument
    index: int
    start: datetime
    exposure_s: float
    rms: tuple[float, ...]  # per plane along time, image units
    sky_adu: float
    psf_arcsec: tuple[float, float, float]  # FWHM, FWHM, degrees east of north
    transparency: float
    shift: tuple[float, float]  # pixels by which the field centre is off the detector's middle
    rotation_deg: float

    @property
    def is_dithered(self) -> bool:
        """Whether the camera was moved aside."""
        return not self.instrument.is_radio and self.shift[0] < 0

    @property
    def is_time_cube(self) -> bool:
        """Whether the file holds several times."""
        return len(self.rms) > 1

    @property
    def is_warm(self) -> bool:
        """Whether the camera's warm spot was on."""
        return not self.instrument.is_radio and within(self.start, WARM_SPELLS)

    @property
    def flux_error(self) -> Floats:
        """Flux error (n_planes,) of a point source: the rms, or that of a PSF-weighted sum, sigma sqrt(4 pi) s."""
        spread = 1.0 if self.instrument.is_radio else math.sqrt(math.pi / (2 * math.log(2))) * self.psf_pixels
        return np.array(self.rms) * spread

    @property
    def psf_pixels(self) -> float:
        """FWHM of the point-spread function in pixels."""
        return self.psf_arcsec[0] / self.instrument.pixel_arcsec

    @property
    def path(self) -> str:
        """File name inside the folder; the suffix says how it is packed."""
        kind, number = self.instrument, self.index + 1
        suffix = "" if number % kind.plain_every == 0 else ".gz" if number % kind.gzip_every == 0 else ".fz"
        return f"{kind.key}/{self.start.year}/{kind.key}_{self.start:%Y%m%dT%H%M%S}.fits{suffix}"


# The scenario reads best as rows, several to a line.
# fmt: off
LOW = Instrument(
    "quorvlow", n_pixels=128, pixel_arcsec=15.0, beam=(45.0, 45.0, 0.0), frequency_hz=154e6, exposures_s=(120.0,),
    cadence_s=152.0, sigma=0.030, projection="SIN", radesys="ICRS", pointing_pixels=1.0, rotation_deg=0.0,
    plain_every=14, gzip_every=1, seasons=(
        Season(1994, 70, 160, 5), Season(1995, 40, 120, 4, (14,)), Season(1996, 90, 200, 5, (), (8, 6)),
        Season(1997, 60, 130, 4, (12,), (7,)), Season(2000, 200, 280, 4, (), (8,)), Season(2001, 30, 110, 5, (6,)),
        Season(2003, 100, 200, 4, (), (10,)), Season(2004, 150, 240, 4, (6,)), Season(2006, 60, 150, 4, (), (6,))),
)
MID = Instrument(
    "quorvmid", n_pixels=144, pixel_arcsec=10.0, beam=(32.0, 28.0, 25.0), frequency_hz=1.41e9, exposures_s=(180.0,),
    cadence_s=204.0, sigma=0.0015, projection="TAN", radesys="FK5", pointing_pixels=0.7, rotation_deg=2.0,
    plain_every=30, gzip_every=2, seasons=(
        Season(2004, 180, 260, 4, (12,)), Season(2005, 30, 90, 4), Season(2008, 100, 200, 4, (6,)),
        Season(2009, 60, 140, 3), Season(2012, 200, 290, 4, (14,)), Season(2013, 20, 80, 3),
        Season(2016, 90, 170, 4, (7,)), Season(2019, 40, 130, 3, (5,))),
)
CAMERA = Instrument(
    "quorvcam", n_pixels=144, pixel_arcsec=10.0, beam=(30.0, 30.0, 0.0), frequency_hz=0.0,
    exposures_s=(45.0,), cadence_s=75.0, sigma=1.1, projection="TAN", radesys="ICRS",
    pointing_pixels=1.0, rotation_deg=0.0, plain_every=35, gzip_every=1, seasons=tuple(
        Season(year, 315, 395, lone, runs) for year, lone, runs in (
        (2001, 6, (5,)), (2002, 6, ()), (2003, 5, (5,)), (2004, 5, ()), (2006, 6, (4,)), (2007, 6, (4,)),
        (2010, 6, ()), (2011, 6, (6,)), (2013, 6, ()), (2014, 6, (5,)), (2017, 5, ()), (2018, 6, (7,)))),
)
INSTRUMENTS = (LOW, MID, CAMERA)

SOURCES = (
    Source("Bivrul", "steady", 0.24, 3.71, (8.0, 10.0, 9.0)), Source("Cavlost", "blank", -7.14, 0.89),
    Source("Dulvert", "blank", 5.69, 0.65), Source("Erpost", "sinusoid", -4.10, 2.45, (0.0, 0.0, 16.0)),
    Source("Fonvarl", "blank", -0.23, -1.74), Source("Grunvet", "faint steady", -0.66, 6.95, (0.0, 1.2, 0.0)),
    Source("Hosbrin", "blank", -4.74, -7.62), Source("Imvarn", "steady", 5.03, 6.68, (0.0, 7.0, 7.2)),
    Source("Jurlop", "blank", 7.02, 4.04), Source("Kelvost", "pulser", 2.55, -0.10, (30.0, 46.0, 0.0)),
    Source("Lumdrak", "blank", 6.03, -3.39), Source("Mirpell", "blank", -6.99, 4.35),
    Source("Nostev", "detector artefact", -6.25, -2.25), Source("Orblun", "steady", -2.79, -5.10, (12.0, 0.0, 0.0)),
    Source("Pravlun", "blank", -0.32, -7.71), Source("Quosel", "flare", 3.82, 3.08),
    Source("Rindolp", "blank", 6.78, -6.77), Source("Selvutt", "blank", -4.10, 5.89),
    Source("Tovrun", "steady", 2.33, -3.79, (0.0, 0.0, 11.0)), Source("Vashkul", "blank", -3.41, -0.85),
    *(Source(f"field {number:02}", "field", east, north, snr) for number, (east, north, *snr) in enumerate((
        (-5.19, 8.78, 0.0, 0.0, 8.0), (-0.38, 10.01, 0.0, 9.0, 10.0), (3.69, 9.62, 0.0, 0.0, 7.5),
        (6.57, -9.94, 0.0, 0.0, 9.5), (6.91, 9.38, 0.0, 8.0, 9.0), (-6.85, -9.98, 0.0, 10.0, 8.5),
        (-2.75, -10.17, 0.0, 7.0, 7.0), (1.52, -10.19, 0.0, 0.0, 10.0), (3.81, -8.07, 0.0, 7.5, 8.0),
        (-7.12, -5.71, 0.0, 9.5, 9.0), (13.10, 2.40, 9.0, 0.0, 0.0), (-12.90, -1.20, 11.0, 0.0, 0.0),
        (12.40, -11.80, 8.0, 0.0, 0.0), (-3.10, 13.40, 10.0, 0.0, 0.0), (-12.20, 11.90, 7.5, 0.0, 0.0)), 1)),
)
# fmt: on
NAMES = tuple(source.name for source in SOURCES)


def write_demo(folder: Path, seed: int = SEED) -> None:
    """Write images, damaged files, `targets.ecsv`, `truth.ecsv` and `README.md` into a folder, made if absent.

    Files of the same name are overwritten, others left alone.
    """
    looks = [look for instrument in INSTRUMENTS for look in schedule(instrument, seed)]
    fluxes = light_curves(looks, seed)
    for look, flux in zip(looks, fluxes, strict=True):
        put(folder, look.path, encode(look, flux, seed))
    for path, content, _ in damaged_files():
        put(folder, path, content)
    targets, truth = tables(looks, fluxes)
    targets.write(folder / "targets.ecsv", overwrite=True)
    truth.write(folder / "truth.ecsv", overwrite=True)
    put(folder, "README.md", story(looks, len(targets)).encode())


def put(folder: Path, path: str, content: bytes) -> None:
    """Write one file below the folder."""
    (folder / path).parent.mkdir(parents=True, exist_ok=True)
    (folder / path).write_bytes(content)


def within(when: datetime, spells: tuple[tuple[str, str], ...]) -> bool:
    """Whether a time lies in one of the spells, each from one ISO date up to another."""
    return any(first <= when.isoformat() < last for first, last in spells)


# When each file was taken, and how it went


def schedule(instrument: Instrument, seed: int) -> list[Look]:
    """All looks of one instrument in order of time."""
    rng = np.random.default_rng((seed, INSTRUMENTS.index(instrument)))
    planned = []
    for season in instrument.seasons:
        groups = [(n, 1) for n in (1,) * season.lone + season.runs] + [(1, n) for n in season.cubes]
        nights = rng.choice(np.arange(season.first_day, season.last_day), len(groups), replace=False)
        for night, (n_files, n_planes) in zip(nights, groups, strict=True):
            first = first_start(instrument, datetime(season.year, 1, 1) + timedelta(int(night) - 1), rng)
            planned += [(first + timedelta(seconds=i * instrument.cadence_s), n_planes) for i in range(n_files)]
    return [conditions(instrument, i, *plan, rng) for i, plan in enumerate(sorted(planned))]


def first_start(instrument: Instrument, day: datetime, rng: np.random.Generator) -> datetime:
    """A start in the dark for the camera, within three hours of the field's transit for the arrays."""
    if instrument.is_radio:
        sidereal_deg = 99.9678 + 0.98564736629 * (day - datetime(2000, 1, 1)).days  # Greenwich, 0h UT
        hours = (CENTRE_DEG[0] - LONGITUDE_DEG - sidereal_deg) % 360 / 15.0411 + rng.uniform(-3, 3)
    else:
        hours = 24 - LONGITUDE_DEG / 15 + rng.uniform(-2, 2)
    return day + timedelta(seconds=round(hours * 3600))


def conditions(instrument: Instrument, index: int, start: datetime, n_planes: int, rng: np.random.Generator) -> Look:
    """What one look met: noise, seeing, transparency and pointing."""
    radio, exposure_s = instrument.is_radio, float(rng.choice(instrument.exposures_s))
    sky_adu = 0.0 if radio else 32.0 * exposure_s * math.exp(np.clip(rng.normal(0, 0.12), -0.25, 0.25))
    scatter = np.exp(np.clip(rng.normal(0, 0.2, n_planes), -0.35, 0.35))
    rms = instrument.sigma * scatter if radio else np.full(n_planes, math.sqrt(sky_adu / GAIN))
    x, y = rng.normal(0, instrument.pointing_pixels, 2)
    if not radio:
        x += (DITHER_PIXELS - 1) / 2 - DITHER_PIXELS * (index % 3 == 2)
    seeing = instrument.beam[0] if radio else round(rng.uniform(27.0, 33.0), 2)
    psf = instrument.beam if radio else (seeing, seeing, 0.0)
    transparency = 1.0 if radio else float(rng.uniform(0.985, 1.015))
    shift, turn = (round(x, 3), round(y, 3)), round(rng.normal(0, instrument.rotation_deg), 3)
    return Look(instrument, index, start, exposure_s, tuple(rms.tolist()), sky_adu, psf, transparency, shift, turn)


# What each source showed


def light_curves(looks: list[Look], seed: int) -> list[Floats]:
    """True flux of every source in every look: arrays (n_planes, n_sources), Jy or adu in the whole exposure."""
    fluxes = []
    for look, start_s in zip(looks, plane_starts_s(looks), strict=True):
        instrument, which = look.instrument, INSTRUMENTS.index(look.instrument)
        per_sigma = instrument.sigma * (1.0 if instrument.is_radio else look.exposure_s * look.transparency)
        flux = np.tile([source.snr[which] * per_sigma for source in SOURCES], (len(start_s), 1))
        middle_days = (start_s + look.exposure_s / 2) / 86400 + 2451545.0 - MAXIMUM_BJD
        flux[:, NAMES.index("Erpost")] *= 1 + AMPLITUDE * np.cos(2 * np.pi * middle_days / CYCLE_DAYS)
        on = [pulse_mean(look, float(start), seed) for start in start_s]
        flux[:, NAMES.index("Kelvost")] *= on
        if (instrument.key, look.index) == ("quorvmid", FLARE_INDEX):
            flux[:, NAMES.index("Quosel")] = FLARE_SNR * look.rms[0]
        fluxes.append(flux)
    return fluxes


def plane_starts_s(looks: list[Look]) -> list[Floats]:
    """When each plane starts, at the barycentre: seconds TDB from J2000.0, arrays (n_planes,)."""
    starts = [look.start + timedelta(seconds=i * look.exposure_s) for look in looks for i in range(len(look.rms))]
    with iers.conf.set_temp("auto_download", False):
        times = Time(starts, scale="utc", location=EarthLocation.from_geocentric(*SITE_M, unit="m"))
        travel = times.light_travel_time(SkyCoord(*CENTRE_DEG, unit="deg"), "barycentric", ephemeris="builtin")
        tdb = times.tdb
    seconds = ((tdb.jd1 - 2451545.0) + tdb.jd2 + travel.to_value(u.day)) * 86400
    return np.split(seconds, np.cumsum([len(look.rms) for look in looks])[:-1])


def pulse_mean(look: Look, start_s: float, seed: int) -> float:
    """The pulser's mean over an exposure, in typical peaks: pulse height times the share of time it was on."""
    if not within(look.start, ACTIVE):
        return 0.0
    first_s = (FIRST_PULSE_BJD - 2451545.0) * 86400
    cycle = round((start_s + look.exposure_s / 2 - first_s) / PERIOD_S)
    total = 0.0
    for k in range(cycle - 1, cycle + 2):
        rng = np.random.default_rng((seed, len(INSTRUMENTS), k))
        present, late, width = rng.random() < PRESENT, rng.uniform(-0.5, 0.5) * WINDOW_S, rng.uniform(40.0, 100.0)
        height = 70.0 / width * rng.uniform(0.75, 1.35)
        begin = first_s + k * PERIOD_S + late - width / 2
        overlap = min(start_s + look.exposure_s, begin + width) - max(start_s, begin)
        total += height * present * max(overlap, 0.0) / look.exposure_s
    return total


# Pixels


def encode(look: Look, flux: Floats, seed: int) -> bytes:
    """The bytes of one file: header and scaled integers, packed as its name says, cut short if it is one of those."""
    kind, rng = look.instrument, np.random.default_rng((seed, INSTRUMENTS.index(look.instrument), 1 + look.index))
    wcs = WCS(fits.Header(pointing_cards(look)))
    xy = np.array(wcs.world_to_pixel(source_positions())).T
    if kind is MID:
        flux = np.concatenate([flux, 0 * flux])  # Stokes I, and V in which nothing shows
    rms = np.resize(look.rms, len(flux))
    planes = np.array([picture(look, f, xy, wcs, s, rng) for f, s in zip(flux, rms, strict=True)])
    bscale, bzero = float(f"{rms.mean() / LEVELS_PER_SIGMA:.3e}"), float(round(look.sky_adu))
    stored = np.clip(np.rint((planes - bzero) / bscale), -32767, 32767).astype(np.int16)
    if (kind.key, look.index) == ALL_BLANK:
        stored[:] = BLANK
    content = packed(look, stored, {"BSCALE": bscale, "BZERO": bzero, "BLANK": BLANK})
    return content[: len(content) * 3 // 5] if (kind.key, look.index) in CUT_SHORT else content


def source_positions() -> SkyCoord:
    """ICRS positions (n_sources,), rounded to what the target list says."""
    north = CENTRE_DEG[1] + np.array([source.north for source in SOURCES]) / 60
    east = CENTRE_DEG[0] + np.array([source.east for source in SOURCES]) / 60 / np.cos(np.radians(north))
    return SkyCoord(np.round(east, 6), np.round(north, 6), unit="deg")


def picture(look: Look, flux: Floats, xy: Floats, wcs: WCS, rms: float, rng: np.random.Generator) -> Floats:
    """One plane (n_pixels, n_pixels): sources at their pixels `xy` (n_sources, 2), the warm spot, the sky and noise."""
    n, cd, beam = look.instrument.n_pixels, wcs.pixel_scale_matrix * 3600, look.psf_arcsec
    x, y = np.arange(n, dtype=float)[None, :], np.arange(n, dtype=float)[:, None]
    unit = 1.0 if look.instrument.is_radio else 4 * math.log(2) / (math.pi * look.psf_pixels**2)  # peak of a flux of 1
    shapes = [(amount, at) for amount, at in zip(flux, xy, strict=True) if amount]
    if look.is_warm:
        shapes.append((WARM_SNR * look.flux_error[0], WARM_PIXEL))
    model = np.zeros((n, n))
    for amount, at in shapes:
        model += amount * unit * gaussian(x - at[0], y - at[1], cd, beam)
    white = rng.standard_normal((n, n))
    if not look.instrument.is_radio:
        return look.sky_adu + model + white * np.sqrt(rms**2 + model / GAIN)
    wrapped = np.fft.fftfreq(n, 1 / n)
    kernel = gaussian(wrapped[None, :], wrapped[:, None], cd * math.sqrt(2), beam)  # its autocorrelation is the beam
    noise = np.fft.ifft2(np.fft.fft2(white) * np.fft.fft2(kernel)).real
    return np.asarray(model + noise * rms / math.sqrt(np.sum(kernel**2)), dtype=float)


def gaussian(dx: NDArray[Any], dy: NDArray[Any], cd: Floats, beam: tuple[float, float, float]) -> Floats:
    """Gaussian of peak 1 at pixel offsets; `cd` turns pixels to arcsec east and north, `beam` is FWHM, FWHM, angle."""
    east, north = cd[0, 0] * dx + cd[0, 1] * dy, cd[1, 0] * dx + cd[1, 1] * dy
    sin, cos = math.sin(math.radians(beam[2])), math.cos(math.radians(beam[2]))
    along, across = east * sin + north * cos, east * cos - north * sin
    return np.asarray(np.exp(-4 * math.log(2) * ((along / beam[0]) ** 2 + (across / beam[1]) ** 2)), dtype=float)


# Headers and files


def pointing_cards(look: Look) -> Cards:
    """The celestial axes: SIN by CDELT, TAN by PC and CDELT in FK5, or TAN by a CD matrix."""
    kind, pixel, turn = look.instrument, look.instrument.pixel_arcsec / 3600, math.radians(look.rotation_deg)
    cards: Cards = {"RADESYS": kind.radesys} | ({"EQUINOX": 2000.0} if kind is MID else {})
    centre = SkyCoord(*CENTRE_DEG, unit="deg").transform_to(kind.radesys.lower())
    for axis, ctype, value, shift in ((1, "RA--", centre.ra.deg, 0), (2, "DEC-", centre.dec.deg, 1)):
        cards |= {f"CTYPE{axis}": f"{ctype}-{kind.projection}", f"CUNIT{axis}": "deg", f"CRVAL{axis}": round(value, 8)}
        cards[f"CRPIX{axis}"] = round((kind.n_pixels + 1) / 2 + look.shift[shift], 3)
    if kind is CAMERA:
        return cards | {"CD1_1": -round(pixel, 10), "CD1_2": 0.0, "CD2_1": 0.0, "CD2_2": round(pixel, 10)}
    cards |= {"CDELT1": -round(pixel, 10), "CDELT2": round(pixel, 10)}
    sin, cos = round(math.sin(turn), 10), round(math.cos(turn), 10)
    return cards | ({"PC1_1": cos, "PC1_2": sin, "PC2_1": -sin, "PC2_2": cos} if kind is MID else {})


def extra_axes(look: Look) -> list[tuple[str, int, float, float, str]]:
    """Axes beyond the sky, in FITS order: type, length, value at pixel 1, step, unit."""
    if look.instrument is CAMERA:
        return []
    if look.instrument is MID:
        return [("STOKES", 2, 1.0, 3.0, ""), ("FREQ", 1, look.instrument.frequency_hz, 6.4e7, "Hz")]
    midnight = datetime.combine(look.start, datetime.min.time())
    middle_s = (look.start - midnight).total_seconds() + look.exposure_s / 2
    time = [("TIME", len(look.rms), middle_s, look.exposure_s, "s")] if look.is_time_cube else []
    return [*time, ("FREQ", 1, look.instrument.frequency_hz, 8e6, "Hz"), ("STOKES", 1, 1.0, 1.0, "")]


def described(look: Look) -> Cards:
    """Who looked at what, from where and when, in which unit, and how sharp the picture is."""
    kind, span = look.instrument, timedelta(seconds=look.exposure_s * len(look.rms))
    start, end = (time.isoformat(timespec="milliseconds") for time in (look.start, look.start + span))
    cards: Cards = {"TELESCOP": ("Vessandrick", "invented, as is all that follows"), "INSTRUME": kind.key.upper()}
    cards |= {"OBJECT": "Quenfield", "BUNIT": "Jy/beam" if kind.is_radio else "adu", "TIMESYS": "UTC"}
    cards |= {"DATE-OBS": (start, "start"), "DATE-BEG": start}
    cards |= {f"OBSGEO-{axis}": (metres, "[m]") for axis, metres in zip("XYZ", SITE_M, strict=True)}
    if kind is CAMERA:
        cards |= {"EXPTIME": (look.exposure_s, "[s]"), "FILTER": "R", "GAIN": (GAIN, "[electron/adu]")}
        return cards | {"SATURATE": (60000.0, "[adu]"), "SEEING": (look.psf_arcsec[0], "[arcsec] FWHM")}
    cards |= {"DATE-END": end, "XPOSURE": (look.exposure_s, "[s] in each plane" if look.is_time_cube else "[s]")}
    if look.is_time_cube:
        cards |= {"MJDREF": (float((look.start - datetime(1858, 11, 17)).days), "[d] zero of the time axis")}
    major, minor, angle = kind.beam
    return cards | {"BMAJ": (major / 3600, "[deg]"), "BMIN": (minor / 3600, "[deg]"), "BPA": (angle, "[deg]")}


def packed(look: Look, stored: NDArray[np.int16], scale: Cards) -> bytes:
    """A plain, gzipped or tile-compressed FITS file of the stored planes (n_planes, n_pixels, n_pixels)."""
    lengths, cards = [look.instrument.n_pixels] * 2, described(look) | pointing_cards(look)
    for axis, (ctype, length, value, step, unit) in enumerate(extra_axes(look), 3):
        lengths.append(length)
        cards |= {f"CTYPE{axis}": ctype, f"CRPIX{axis}": 1.0, f"CRVAL{axis}": value, f"CDELT{axis}": step}
        cards |= {f"CUNIT{axis}": unit} if unit else {}
    if not look.path.endswith(".fz"):
        plain = plain_fits(lengths, scale | cards, stored)
        return gzip.compress(plain, 9, mtime=0) if look.path.endswith(".gz") else plain
    tiles = (1,) * (len(lengths) - 2) + (16, lengths[0])
    hdu = fits.CompImageHDU(stored.reshape(lengths[::-1]), compression_type="RICE_1", tile_shape=tiles)
    hdu.header.update(cards | scale)
    return written(fits.PrimaryHDU(), hdu)


def plain_fits(lengths: list[int], cards: Cards, stored: NDArray[np.int16]) -> bytes:
    """A 16-bit image with the integers as they stand, which astropy would want to rescale."""
    header = fits.Header([("SIMPLE", True, "FITS 4.0"), ("BITPIX", 16), ("NAXIS", len(lengths))])
    header.update({f"NAXIS{axis}": length for axis, length in enumerate(lengths, 1)} | cards)
    data = stored.astype(">i2").tobytes()
    return bytes(header.tostring().encode("ascii")) + data + bytes(-len(data) % 2880)


def written(*hdus: object) -> bytes:
    """What astropy writes for these HDUs."""
    buffer = io.BytesIO()
    fits.HDUList(list(hdus)).writeto(buffer)
    return buffer.getvalue()


def damaged_files() -> list[tuple[str, bytes, str]]:
    """Path, content and fault of files without a usable image, beside the looks that are cut short or blank."""
    screen: Cards = {"INSTRUME": "QUORVCAM", "DATE-OBS": "2004-01-11T10:15:00.000", "OBJECT": "dome screen"}
    gains = fits.BinTableHDU.from_columns([fits.Column("GAIN", "E", array=np.linspace(0.9, 1.1, 8))], name="GAINS")
    endless = plain_fits([128, 128], {"INSTRUME": "QUORVLOW"}, np.zeros(0, np.int16)).replace(b"END", b"   ")
    flat, lost = np.full(1024, 512, np.int16), b"This frame did not survive the move of the archive.\n"
    return [
        ("quorvlow/1997/quorvlow_19970402T101200.fits", b"", "zero bytes"),
        ("quorvlow/2001/quorvlow_20010219T094000.fits", endless, "a header without END"),
        ("quorvmid/2008/quorvmid_20080503T073000.fits", lost, "text"),
        ("quorvmid/2012/quorvmid_2012_gains.fits", written(fits.PrimaryHDU(), gains), "a table and no image"),
        (
            "quorvcam/2004/quorvcam_20040111T101500.fits",
            plain_fits([32, 32], screen, flat),
            "an image without sky axes",
        ),
    ]


# Targets, truth and story


def bright_frames(name: str, looks: list[Look], fluxes: list[Floats]) -> str:
    """Frames that show a transient or the artefact at 5 sigma or more: 'path[plane] snr', joined by semicolons."""
    shown = []
    for look, flux in zip(looks, fluxes, strict=True):
        snr = flux[:, NAMES.index(name)] / look.flux_error
        if name == "Nostev" and look.is_warm and not look.is_dithered:
            snr = np.full(1, WARM_SNR)
        shown += [f"{look.path}[{plane}] {snr[plane]:.1f}" for plane in np.flatnonzero(snr >= 5)]
    return "; ".join(shown)


def tables(looks: list[Look], fluxes: list[Floats]) -> tuple[Table, Table]:
    """The target list, which gives nothing away, and the truth, which has field sources too."""
    at, nan = source_positions(), math.nan
    truth = Table({"name": NAMES, "kind": [source.kind for source in SOURCES], "ra": at.ra, "dec": at.dec})
    for which, (column, unit) in enumerate((("flux_low", "Jy"), ("flux_mid", "Jy"), ("rate_camera", "adu/s"))):
        truth[column] = [round(source.snr[which] * INSTRUMENTS[which].sigma, 6) for source in SOURCES] * u.Unit(unit)
    planted = {
        "Kelvost": (PERIOD_S, FIRST_PULSE_BJD, WINDOW_S, round(1 - PRESENT, 3), nan),
        "Erpost": (CYCLE_DAYS * 86400, MAXIMUM_BJD, nan, nan, AMPLITUDE),
    }
    columns = {"period": "s", "epoch_bjd_tdb": "d", "window": "s", "missing": "", "amplitude": ""}
    values = np.array([planted.get(name, (nan,) * len(columns)) for name in NAMES]).T
    for (column, unit), value in zip(columns.items(), values, strict=True):
        truth[column] = value * u.Unit(unit) if unit else value
    truth["active"] = ["; ".join(map("/".join, ACTIVE)) if name == "Kelvost" else "" for name in NAMES]
    passing = {"Kelvost", "Quosel", "Nostev"}
    truth["bright_frames"] = [bright_frames(name, looks, fluxes) if name in passing else "" for name in NAMES]
    truth["what"] = [WHAT[source.kind] for source in SOURCES]
    return truth[[source.kind != "field" for source in SOURCES]]["name", "ra", "dec"], truth


def story(looks: list[Look], n_targets: int) -> str:
    """The text of README.md."""
    damage = [(path, wrong) for path, _, wrong in damaged_files()]
    damage += [(look.path, "cut short") for look in looks if (look.instrument.key, look.index) in CUT_SHORT]
    damage += [(look.path, "whole, all blank") for look in looks if (look.instrument.key, look.index) == ALL_BLANK]
    return README.format(
        n_files=len(looks) - len(CUT_SHORT),
        n_frames=sum(len(look.rms) * (1 + (look.instrument is MID)) for look in looks) - len(CUT_SHORT),
        n_damaged=len(damage) - 1,
        n_targets=n_targets,
        active=", ".join(f"{first[:4]}-{int(last[:4]) - 1}" for first, last in ACTIVE),
        damage="\n".join(f"- `{path}`: {wrong}" for path, wrong in sorted(damage)),
    )


WHAT = {
    "pulser": "Pulses of 40 to 100 s, anywhere in a window centred on each multiple of the period, many missing, whole "
    "years off; seen by both arrays, absent from Stokes V; the fluxes are typical heights of a pulse.",
    "sinusoid": "A star whose brightness follows a sine, in the camera only; the epoch is a maximum.",
    "flare": "Bright in one frame of quorvmid, quiet otherwise.",
    "steady": "Constant where its flux is not zero.",
    "faint steady": "Constant, too faint for single frames, seen in the mean.",
    "detector artefact": "No source: a warm spot of the camera falls here in undithered frames of two seasons.",
    "blank": "Nothing.",
    "field": "A constant source which is no target.",
}

README = """\
# The demonstration archive

Twenty-five invented years of one field, written by `hindlight demo` from a seed: {n_files} readable files with
{n_frames} frames (one of them blank), and {n_damaged} damaged files. No such observatory, instrument or source exists,
nothing here was ever observed, and no conclusion about the sky follows from it. It shows what the program does, not how
well it does on your data.

| folder | what | years |
| --- | --- | --- |
| `quorvlow` | array at 154 MHz, snapshots of 120 s, some runs stored as cubes over time | 1994-2006 |
| `quorvmid` | array at 1.41 GHz, snapshots of 180 s, Stokes I and V in one file, half tile-compressed | 2004-2019 |
| `quorvcam` | camera, exposures of 45 s, a third of the frames dithered by 35 pixels | 2001-2019 |

`targets.ecsv` lists {n_targets} positions under names that say nothing. `truth.ecsv` says what was planted at each, and
where the field's other sources are. **Reading on spoils the puzzle.**

- Kelvost sends radio pulses every 1743.9182 s at the barycentre, each somewhere in a window of 300 s, a third of them
  missing, only in {active}. `bright_frames` in the truth lists the frames they reached.
- Erpost varies by 45 % in 37.42 days, in the camera. Quosel flared once, in one frame at 1.41 GHz.
- Nostev is an artefact: a warm spot at pixel 126, 58 (from 0) of the camera, on in two seasons. The dithered frames of
  those seasons show it elsewhere on the sky.
- Bivrul, Imvarn, Orblun and Tovrun are steady; so is Grunvet, at about 1.2 sigma a frame. All others are blank.

Noise in the arrays' images has the beam as its autocorrelation, and the rms differs from frame to frame; the camera's
is white, with the shot noise of the sources. The arrays' fluxes are peaks in Jy/beam; the camera's are sums in adu
under a Gaussian of FWHM `SEEING`, and follow the transparency of the night within 1.5 %. There is no primary beam.

Damaged on purpose:

{damage}
"""
