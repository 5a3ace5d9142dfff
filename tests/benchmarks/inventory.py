"""How fast frames are inventoried, against the plain way: `fits.getheader` and `WCS(header)` for each file.

Writes distinct files with headers of 70 or so cards into a temporary folder, times both ways in turns within one run,
checks that both found the same, prints files per second and the ratio, and fails below the goal. So it does where the
dialects, asked in turn, take more than their share of the time; beside it stands what the share is for the same headers
with the date in the old form and the time of day in a card of its own. Time is that of the processor, so that other work
on the machine does not count; all files are in the page cache.

    python tests/benchmarks/inventory.py [files] [rounds]
"""

from __future__ import annotations

import math
import sys
import tempfile
import time
import warnings
from datetime import datetime, timedelta
from pathlib import Path

import numpy as np
from astropy.io import fits
from astropy.wcs import WCS

from hindlight import archive, clock, host
from hindlight.facts import Cards, PlaneAxes, parse_value
from hindlight.files import open_source
from hindlight.headers import facts_of, read_hdus
from hindlight.outlines import outline
from hindlight.settings import Settings

GOAL = 12.0
SHARE_GOAL = 0.20
SIZE = 32


def write_files(folder: Path, n_files: int) -> None:
    """Distinct pointings, dates and conditions, in subfolders by year; three kinds of header by turns."""
    rng = np.random.default_rng(1)
    for i in range(n_files):
        start = datetime(1990, 1, 1) + timedelta(seconds=float(rng.uniform(0, 30 * 365.25 * 86400)))
        header = fits.Header()
        header["OBJECT"] = (f"field {i % 37}", "name of the field")
        header["DATE-OBS"] = (start.isoformat(timespec="milliseconds"), "start of the exposure")
        header["TIMESYS"] = ("UTC", "time scale")
        header["EXPTIME"] = (float(rng.choice([30.0, 60.0, 120.0])), "[s] exposure time")
        header["INSTRUME"] = (f"instrument {i % 3}", "name of the instrument")
        for axis, value in zip("XYZ", (5195675.767, 1891071.326, -3170873.735), strict=True):
            header[f"OBSGEO-{axis}"] = (value, "[m] place of the instrument")
        add_coordinates(header, i, rng)
        header["BUNIT"] = ("adu" if i % 3 == 0 else "Jy/beam", "unit of the pixels")
        if i % 3:
            header["BMAJ"], header["BMIN"], header["BPA"] = 0.01, 0.008, 30.0
            header["FREQ"] = (154e6 if i % 3 == 1 else 1.4e9, "[Hz] frequency")
        else:
            header["FILTER"], header["SEEING"], header["GAIN"] = "r", round(rng.uniform(20, 40), 2), 2.0
        for number in range(28):  # what instruments write beside: temperatures, voltages, software
            header[f"TEMP{number}"] = (round(float(rng.normal(20, 3)), 3), "[C] temperature of a sensor")
        for number in range(5):
            header["HISTORY"] = f"step {number} of the reduction was done with default values"
        path = folder / f"{start:%Y}" / f"frame{i:05d}.fits"
        path.parent.mkdir(exist_ok=True)
        fits.PrimaryHDU(rng.normal(size=(SIZE, SIZE)).astype(np.float32), header).writeto(path)


def add_coordinates(header: fits.Header, i: int, rng: np.random.Generator) -> None:
    """The celestial cards: SIN by CDELT, TAN by PC and CDELT, or TAN by CD, all pointed elsewhere."""
    kind = i % 3
    code = "TAN" if kind != 1 else "SIN"
    header["RADESYS"] = ("FK5" if kind == 2 else "ICRS", "celestial frame")
    if kind == 2:
        header["EQUINOX"] = 2000.0
    turn = math.radians(rng.normal(0, 3))
    for axis, (ctype, value) in enumerate((("RA---", rng.uniform(0, 360)), ("DEC--", rng.uniform(-80, 80))), 1):
        header[f"CTYPE{axis}"] = (ctype + code, "type of the axis")
        header[f"CUNIT{axis}"] = ("deg", "unit of the axis")
        header[f"CRVAL{axis}"] = (round(value, 8), "[deg] at the reference pixel")
        header[f"CRPIX{axis}"] = (round(16.5 + rng.normal(), 3), "reference pixel")
    matrix = np.array([[math.cos(turn), math.sin(turn)], [-math.sin(turn), math.cos(turn)]])
    for axis in (1, 2):
        if kind != 0:
            header[f"CDELT{axis}"] = (-0.002 if axis == 1 else 0.002, "[deg] step")
        if kind != 1:
            for other in (1, 2):
                stem, scale = ("PC", 1.0) if kind == 2 else ("CD", -0.002 if axis == 1 else 0.002)
                header[f"{stem}{axis}_{other}"] = round(scale * matrix[axis - 1, other - 1], 9)


def plain_way(paths: list[Path]) -> list[tuple[str, float, float]]:
    """Date and centre of each file (in its own frame) by astropy's ordinary means."""
    found = []
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")  # astropy says for each file what it would add to the header
        for path in paths:
            header = fits.getheader(path)
            wcs = WCS(header)
            ra, dec = wcs.wcs_pix2world([[(SIZE - 1) / 2, (SIZE - 1) / 2]], 0)[0]
            found.append((header["DATE-OBS"], float(ra), float(dec)))
    return found


def forget() -> None:
    """Empty the caches, so that every round reads each file as if for the first time."""
    for cached in (parse_value, outline):
        cached.cache_clear()


def with_old_date(cards: Cards) -> Cards:
    """The same header as it would have been written before 1998."""
    date, clock_of_day = cards.text("DATE-OBS").split("T")
    year, month, day = date.split("-")
    old = f"DATE-OBS= '{day}/{month}/{year[2:]}'", f"UT      = '{clock_of_day}' / start of the exposure"
    place = cards.raw.find(b"DATE-OBS")
    return Cards(cards.raw[:place] + "".join(f"{card:<80}" for card in old).encode() + cards.raw[place + 80 :])


def dialects_s(headers: list[Cards], dialects: tuple[object, ...]) -> float:
    """The time that the dialects take to read all headers, each as if for the first time."""
    forget()
    fresh = [Cards(cards.raw) for cards in headers]
    started = time.process_time()
    for cards in fresh:
        facts_of(cards, PlaneAxes(), dialects)
    return time.process_time() - started


def headers_of(paths: list[Path]) -> list[Cards]:
    """The cards of the first HDU of each file."""
    found = []
    for path in paths:
        with open_source(str(path), 10**9) as source:
            found.append(next(read_hdus(source)).cards)
    return found


def main() -> int:
    """Measure, print, compare; 1 where the goal is missed or the two disagree."""
    n_files = int(sys.argv[1]) if len(sys.argv) > 1 else 400
    rounds = int(sys.argv[2]) if len(sys.argv) > 2 else 5
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        write_files(folder, n_files)
        paths = sorted(folder.rglob("*.fits"))
        cards = len(fits.getheader(paths[0]).cards)
        plain_s, walk_s, shares = [], [], []
        dialects = host.load(host.spec_from(Settings())).dialects
        headers = headers_of(paths)
        old_headers = [with_old_date(cards) for cards in headers]
        for _ in range(rounds + 1):  # the first round warms up imports and the page cache
            started = time.process_time()
            plain = plain_way(paths)
            plain_s.append(time.process_time() - started)
            forget()
            started = time.process_time()
            frames = archive.walk([name], dialects, Settings()).frames
            walk_s.append(time.process_time() - started)
            new_s, old_s = dialects_s(headers, dialects), dialects_s(old_headers, dialects)
            shares.append((new_s / walk_s[-1], old_s / (walk_s[-1] - new_s + old_s)))
    worst = compare(plain, frames)
    walked_s = sorted(walk_s[1:])[rounds // 2]
    share, old_share = (sorted(kind)[rounds // 2] for kind in zip(*shares[1:], strict=True))
    ratios = sorted(p / w for p, w in zip(plain_s[1:], walk_s[1:], strict=True))
    ratio = ratios[len(ratios) // 2]
    print(f"{n_files} files of {cards} cards, {rounds} rounds, medians")
    print(f"getheader + WCS   {n_files / sorted(plain_s[1:])[rounds // 2]:8.0f} files/s")
    print(f"inventory         {n_files / walked_s:8.0f} files/s")
    print(f"ratio             {ratio:8.1f}   (goal {GOAL:g}; rounds {ratios[0]:.1f} to {ratios[-1]:.1f})")
    print(f"dialects' share   {share:8.0%}   (goal below {SHARE_GOAL:.0%}; with old dates {old_share:.0%})")
    print(f"centres agree to  {worst:8.1e} arcsec, dates to the millisecond")
    return 0 if ratio >= GOAL and worst < 1e-6 and share < SHARE_GOAL else 1


def compare(plain: list[tuple[str, float, float]], frames: dict[str, np.ndarray]) -> float:
    """The largest distance between centres in arcsec (FK5 ones left out); raises where dates differ."""
    assert len(plain) == len(frames["path"])
    starts = frames["middle_tdb_s"] - frames["span_s"] / 2
    shown = clock.iso_utc(starts)
    assert [date for date, _, _ in plain] == shown, "dates differ"
    ours = frames["frequency_hz"] != 1.4e9
    ra = np.array([row[1] for row in plain])[ours]
    dec = np.array([row[2] for row in plain])[ours]
    east = (ra - frames["centre_ra"][ours]) * np.cos(np.radians(dec))
    return float(np.hypot(east, dec - frames["centre_dec"][ours]).max()) * 3600


if __name__ == "__main__":
    raise SystemExit(main())
