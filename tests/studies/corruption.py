"""Does any damage to a file do more than set it aside? Random corruptions of good files, walked and measured.

Good files of each sort (floats, scaled integers, gzip, tile-compressed, a cube, several extensions) are damaged: bytes
flipped, blocks overwritten, taken out, doubled or exchanged, the end cut off. Each damaged file goes through the walk,
and its frames through photometry. It may be set aside with a fixed word, or measured; it must not raise anything else,
warn, take more than ten seconds, or come out with facts that are no numbers.

Run: python tests/studies/corruption.py [--cases N] [--seed S]; exits with 1 where a case falls short.
"""

from __future__ import annotations

import argparse
import gzip
import io
import logging
import re
import signal
import sys
import tempfile
import traceback
import warnings
from collections import Counter
from collections.abc import Callable, Iterator, Mapping
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import numpy as np
from astropy.io import fits

from hindlight.archive import WalkResult, walk
from hindlight.files import local_path
from hindlight.headers import SetAsideError
from hindlight.opening import FrameToMeasure
from hindlight.photometry import choose_estimator, measure_frame
from hindlight.schema import REASONS
from hindlight.settings import Settings
from hindlight.summary import words_of
from hindlight.systems import BadWcsError, NoCelestialError
from hindlight_plugins.aperture import Aperture
from hindlight_plugins.peak import Peak
from hindlight_plugins.psf import Psf
from hindlight_plugins.standard_headers import StandardHeaders

LIMIT_S = 10.0
BLOCK = 2880
SIZE = 64
FRAMES_MEASURED = 4
ALWAYS_FINITE = ("pixel_scale", "centre_ra", "centre_dec", "radius", "width", "height")
SAID_WHEN_MISSING = {"middle_tdb_s": "no_clock", "exposure_s": "no_exposure"}
EXCEPTION = re.compile(r"\w+Error: ")  # a sentence made of an exception that nobody thought of


class TookTooLongError(BaseException):
    """A case went over its time; no `except Exception` may take it for a fault of the file."""


def good_files() -> dict[str, bytes]:
    """One good file of each sort, by its name."""
    rng = np.random.default_rng(1)
    noise = rng.normal(100.0, 5.0, (SIZE, SIZE))
    floats = noise.astype(np.float32)
    scaled = fits.PrimaryHDU(noise.astype(np.int16), header(BUNIT="adu", SEEING=90.0, GAIN=2.0))
    scaled.header["BSCALE"], scaled.header["BZERO"] = 0.5, 32768.0
    axes: dict[str, object] = {"CTYPE3": "FREQ", "CRVAL3": 1.4e9, "CDELT3": 1e6, "CRPIX3": 1.0}
    cube = np.stack([floats] * 3)
    turned = header(CDELT1=None, CDELT2=None, CD1_1=-0.008, CD1_2=1e-4, CD2_1=1e-4, CD2_2=0.008)
    bent = header(CTYPE1="RA---TAN-SIP", CTYPE2="DEC--TAN-SIP", A_ORDER=2, B_ORDER=2, A_2_0=1e-6, B_0_2=1e-6)
    several = [fits.PrimaryHDU(), *(fits.ImageHDU(floats, head) for head in (header(), turned, bent))]
    tiles = [
        fits.CompImageHDU(noise.astype(np.int16), header(), compression_type="RICE_1", tile_shape=(16, 64)),
        fits.CompImageHDU(floats, header(), compression_type="GZIP_2", quantize_level=0),
    ]
    smooth = fits.CompImageHDU(noise.astype(np.int32), header(), compression_type="HCOMPRESS_1", tile_shape=(32, 64))
    return {
        "floats.fits": written(fits.PrimaryHDU(floats, header())),
        "scaled.fits": written(scaled),
        "packed.fits.gz": gzip.compress(written(fits.PrimaryHDU(floats, header())), mtime=0),
        "tiles.fits.fz": written(fits.PrimaryHDU(), *tiles),
        "smooth.fits.fz": written(fits.PrimaryHDU(), smooth),
        "cube.fits": written(fits.PrimaryHDU(cube, header(**axes))),
        "several.fits": written(*several),
    }


def header(**changes: object) -> fits.Header:
    """A conforming header with some cards changed; None leaves one out."""
    cards: dict[str, object] = {
        "CTYPE1": "RA---SIN", "CTYPE2": "DEC--SIN", "CRVAL1": 30.0, "CRVAL2": 40.0, "CRPIX1": 32.5, "CRPIX2": 32.5,
        "CDELT1": -0.008, "CDELT2": 0.008, "CUNIT1": "deg", "CUNIT2": "deg", "RADESYS": "ICRS",
        "DATE-OBS": "1988-03-17T06:00:00", "TIMESYS": "UTC", "EXPTIME": 120.0, "INSTRUME": "north array",
        "OBSGEO-X": 5195675.767, "OBSGEO-Y": 1891071.326, "OBSGEO-Z": -3170873.735,
        "BUNIT": "Jy/beam", "BMAJ": 0.03, "BMIN": 0.024, "BPA": 30.0, "FREQ": 154e6, "STOKES": "I",
    }  # fmt: skip
    made = fits.Header()
    for key, value in (cards | changes).items():
        if value is not None:
            made[key] = value
    return made


def written(*hdus: Any) -> bytes:
    """The bytes of a file of HDUs."""
    stream = io.BytesIO()
    fits.HDUList(list(hdus)).writeto(stream)
    return stream.getvalue()


# --- damage


def flip(data: bytearray, rng: np.random.Generator) -> None:
    """Some single bytes become others, most of them within a header."""
    reach = len(data) if rng.random() < 0.3 else min(len(data), 2 * BLOCK)
    for _ in range(int(rng.integers(1, 12))):
        data[int(rng.integers(reach))] = int(rng.integers(256))


def digits(data: bytearray, rng: np.random.Generator) -> None:
    """Some characters of the values on cards become digits, signs and exponents: numbers that parse and are wrong."""
    for _ in range(int(rng.integers(1, 6))):
        card = int(rng.integers(min(len(data), 2 * BLOCK) // 80)) * 80
        place = card + 10 + int(rng.integers(20))
        if place < len(data):
            data[place] = int(rng.choice(np.frombuffer(b"0123456789-.EeDT ", np.uint8)))


def overwrite(data: bytearray, rng: np.random.Generator) -> None:
    """A stretch becomes zeros, ones or noise."""
    start, stop = stretch(data, rng)
    fill = int(rng.integers(3))
    data[start:stop] = rng.bytes(stop - start) if fill == 2 else bytes([(0, 255)[fill]]) * (stop - start)


def truncate(data: bytearray, rng: np.random.Generator) -> None:
    """The end is cut off."""
    del data[int(rng.integers(len(data))) :]


def take_out(data: bytearray, rng: np.random.Generator) -> None:
    """A stretch is missing."""
    start, stop = stretch(data, rng)
    del data[start:stop]


def double(data: bytearray, rng: np.random.Generator) -> None:
    """A stretch stands twice."""
    start, stop = stretch(data, rng)
    data[stop:stop] = data[start:stop]


def exchange(data: bytearray, rng: np.random.Generator) -> None:
    """Two blocks have changed places."""
    unit = int(rng.choice([80, BLOCK]))
    first, second = (int(rng.integers(max(1, len(data) // unit))) * unit for _ in range(2))
    one, other = bytes(data[first : first + unit]), bytes(data[second : second + unit])
    if len(one) == len(other):
        data[first : first + unit], data[second : second + unit] = other, one


def stretch(data: bytearray, rng: np.random.Generator) -> tuple[int, int]:
    """A place in the file: a card, some bytes or a block."""
    length = int(rng.choice([1, 7, 80, 512, BLOCK]))
    start = int(rng.integers(max(1, len(data) - length)))
    if length in (80, BLOCK) and rng.random() < 0.7:
        start -= start % length
    if rng.random() < 0.5:
        start = min(start, start % (2 * BLOCK))
    return start, min(len(data), start + length)


DAMAGE: tuple[Callable[[bytearray, np.random.Generator], None], ...] = (
    flip, digits, digits, overwrite, truncate, take_out, double, exchange,
)  # fmt: skip


# --- one case


@contextmanager
def limited(seconds: float) -> Iterator[None]:
    """Raise `TookTooLongError` when the time is over."""

    def over(_number: int, _frame: Any) -> None:
        raise TookTooLongError

    before = signal.signal(signal.SIGALRM, over)
    signal.setitimer(signal.ITIMER_REAL, seconds)
    try:
        yield
    finally:
        signal.setitimer(signal.ITIMER_REAL, 0.0)
        signal.signal(signal.SIGALRM, before)


def examine(folder: Path, seconds: float = LIMIT_S) -> tuple[Counter[str], list[str]]:
    """What became of the one file of a folder, counted by word, and what should not have happened."""
    seen: Counter[str] = Counter()
    wrong: list[str] = []
    with warnings.catch_warnings(record=True) as warned, listening() as heard:
        warnings.simplefilter("always")
        try:
            with limited(seconds):
                found = walk([str(folder)], [StandardHeaders()], Settings())
                wrong += bad_rows(found)
                seen.update(row["reason"] for row in found.rejects)
                for row in range(min(FRAMES_MEASURED, len(found.frames["path"]))):
                    seen[measured(found.frames, row)] += 1
        except TookTooLongError:
            wrong.append(f"took more than {seconds:g} s")
        except Exception as error:  # noqa: BLE001 - anything at all is what is looked for
            where = traceback.extract_tb(error.__traceback__)[-1]
            wrong.append(f"{type(error).__name__}: {error} ({Path(where.filename).name}:{where.lineno})")
    wrong += [f"warning: {w.message} ({Path(w.filename).name}:{w.lineno})" for w in warned]
    return seen, wrong + heard


@contextmanager
def listening() -> Iterator[list[str]]:
    """What astropy would print by its own log."""
    heard: list[str] = []
    log = logging.getLogger("astropy")
    before = log.handlers
    listener = logging.Handler()
    listener.emit = lambda record: heard.append(f"log: {record.getMessage()}")  # type: ignore[method-assign]
    log.handlers = [listener]
    try:
        yield heard
    finally:
        log.handlers = before


def bad_rows(found: WalkResult) -> list[str]:
    """Facts that are no numbers where they must be, or are missing without a word; rejects without a known reason."""
    wrong = []
    for name in ALWAYS_FINITE:
        values = found.frames[name].astype(float)
        if not np.isfinite(values).all():
            wrong.append(f"{name} is {values}")
    if not (found.frames["pixel_scale"] > 0).all() or not (found.frames["radius"] > 0).all():
        wrong.append("a scale or radius is not positive")
    for row, text in enumerate(found.frames["assumptions"]):
        words = words_of(text)
        for name, word in SAID_WHEN_MISSING.items():
            if not np.isfinite(found.frames[name][row]) and word not in words:
                wrong.append(f"{name} is missing without the word {word}")
    for row in found.rejects:
        if row["reason"] not in REASONS or not row["detail"].isprintable() or EXCEPTION.search(row["detail"]):
            wrong.append(f"set aside as {row['reason']}: {row['detail']!r}")
    return wrong


def measured(frames: Mapping[str, Any], row: int) -> str:
    """A frame measured at a few places: what came of it."""
    names = ("hdu", "plane", "beam_major", "beam_minor", "beam_angle", "unit", "electrons_per_unit", "saturation")
    frame = FrameToMeasure(
        path=local_path(frames["archive"][row], frames["path"][row]), mjd=float(frames["middle_mjd_tdb"][row]),
        **{name: frames[name][row].item() if name != "unit" else frames[name][row] for name in names},
    )  # fmt: skip
    ra = frames["centre_ra"][row] + np.array([0.0, 0.05, 0.4])
    dec = np.clip(frames["centre_dec"][row] + np.array([0.0, 0.03, 0.0]), -90.0, 90.0)
    estimator = choose_estimator([Peak(), Psf(), Aperture()], frame.unit, beam_known=frame.beam_major > 0)
    try:
        columns = measure_frame(frame, ra, dec, estimator, Settings())
    except SetAsideError as error:
        return f"not measured: {error.reason}"
    except (BadWcsError, NoCelestialError):
        return "not measured: coordinates"
    return "measured" if np.isfinite(columns["flux"]).any() else "measured, no flux"


def study(cases: int, seed: int, folder: Path) -> tuple[Counter[str], list[str]]:
    """So many damaged files: outcomes by sort of file, and every case that fell short."""
    files = list(good_files().items())
    outcomes: Counter[str] = Counter()
    short = []
    for case in range(cases):
        rng = np.random.default_rng([seed, case])
        name, good = files[case % len(files)]
        data = bytearray(good)
        how = DAMAGE[int(rng.integers(len(DAMAGE)))]
        how(data, rng)
        path = folder / name
        path.write_bytes(data)
        seen, wrong = examine(folder)
        path.unlink()
        outcomes.update(seen)
        short += [f"case {case} ({name}, {how.__name__}): {text}" for text in wrong]
    return outcomes, short


def main() -> int:
    """Run the study, print counts and verdict; 1 where any case fell short."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--cases", type=int, default=2000)
    parser.add_argument("--seed", type=int, default=1)
    given = parser.parse_args()
    with tempfile.TemporaryDirectory() as name:
        outcomes, short = study(given.cases, given.seed, Path(name))
    for word, count in sorted(outcomes.items(), key=lambda item: -item[1]):
        print(f"{count:6d}  {word}")
    for text in short:
        print(text)
    print(f"{given.cases} damaged files, {len(short)} fell short: {'FAILED' if short else 'passed'}")
    return 1 if short else 0


if __name__ == "__main__":
    sys.exit(main())
