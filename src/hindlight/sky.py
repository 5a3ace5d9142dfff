"""Between sky and pixels: the projection of one image, from its header cards alone.

Plain headers go through wcslib on the celestial cards only, cached by those cards' bytes; anything unusual (SIP,
look-up tables, TPV, legacy keywords) goes through the full `astropy.wcs.WCS`. Coordinates outside this module are ICRS.
Nothing here reads pixels or knows what a frame is for.
"""

from __future__ import annotations

import math
import re
import threading
import warnings
from collections.abc import Iterator
from contextlib import ExitStack, contextmanager
from dataclasses import dataclass, field
from functools import cached_property, lru_cache
from typing import Any, Protocol

import numpy as np
from astropy.io import fits
from astropy.wcs import WCS, NoConvergence, Wcsprm

from hindlight.celestial import Celestial, find_celestial, two_axes
from hindlight.facts import NAN, Cards
from hindlight.lightcurve import FloatArray
from hindlight.plugin import BeamShape
from hindlight.storage import readable
from hindlight.systems import BadWcsError, NoCelestialError, System, from_icrs, to_icrs

__all__ = ["BadWcsError", "NoCelestialError", "Projection", "System", "beam_shape", "projection"]

LEAN_CODES = {"SIN", "TAN", "ARC", "ZEA", "STG", "CAR", "CEA", "MER", "SFL", "AIT", "MOL", "NCP", "GLS"}
LEGACY_CODES = {"NCP", "GLS"}
TOUCHING_CODES = {"SIN", "TAN", "ARC", "ZEA", "STG"}  # without parameters: scale 1 at the reference, where they touch
TURNING_CODES = {"CAR", "CEA", "MER"}  # 360 degrees of native longitude are one constant step of pixels
MOST = {"WCSAXES": 99, "A_ORDER": 9, "B_ORDER": 9, "AP_ORDER": 9, "BP_ORDER": 9}  # more would only fill the memory
LARGEST_STEP_ARCSEC = 3600.0  # from pixel to pixel, for the plane to be as good as the sky
ROUND_TRIP_PIXELS = 0.01  # an inverted distortion that comes back further off than this has not converged

_PLAIN = re.compile(
    r"(CTYPE|CRPIX|CRVAL|CDELT|CROTA|CUNIT|Z?NAXIS)\d|(PC|CD|PV)\d_\d+|LONPOLE|LATPOLE|RADEC?SYS|EQUINOX|EPOCH|ZIMAGE"
)
_ODD = re.compile(r"[AB]P?_ORDER|(CPDIS|CQDIS|DP|DQ)\d|D2IM.*|WAT\d_\d+|(PC|CD)\d{6}|AMDX.*|PLTRAH")
_TABLE = re.compile(r"(CPDIS|CQDIS|D2IMDIS)\d")
_FIVE_POINTS = np.array([[0.5, 0.0], [-0.5, 0.0], [0.0, 0.5], [0.0, -0.5], [0.0, 0.0]])  # right, left, up, down, middle


class _Engine(Protocol):
    """What turns world coordinates (n, 2), in axis order, into 0-based pixels (n, 2) and back; NaN where undefined."""

    def to_pixel(self, world: FloatArray) -> FloatArray: ...

    def to_world(self, pixel: FloatArray) -> FloatArray: ...


@dataclass(frozen=True, eq=False)
class Projection:
    """The way from ICRS to 0-based pixels of one image and back.

    axes
        FITS numbers (1-based) of the two celestial axes in storage order: x runs along the first of them.
    system, system_assumed
        Of the header's coordinates, and whether the header leaves it to the rules of FITS 4.0, 8.3.
    size
        Pixels along x and y, 0 where the cards do not say.
    reference
        The 0-based pixel to which scale and beam refer, see `Celestial`.
    scale_matrix
        `jacobian` at the reference pixel, None where it has to be found from the sky around it.
    """

    axes: tuple[int, int]
    system: System
    system_assumed: bool
    size: tuple[int, int]
    reference: tuple[float, float]
    engine: _Engine = field(repr=False)
    swapped: bool = False
    scale_matrix: FloatArray | None = None

    def icrs_to_pixel(self, ra: FloatArray, dec: FloatArray, mjd: float = NAN) -> tuple[FloatArray, FloatArray]:
        """0-based pixel coordinates of positions in degrees, shape (n,); NaN where the projection is undefined.

        `mjd` is the date of the image: FK4 rotates, so its own date is needed (NaN takes the equinox instead).
        """
        lon, lat = from_icrs(np.asarray(ra, float), np.asarray(dec, float), self.system, mjd)
        world = np.column_stack((lat, lon) if self.swapped else (lon, lat))
        with _as_bad_wcs():
            pixel = self.engine.to_pixel(world) if len(world) else world
        return np.ascontiguousarray(pixel[:, 0]), np.ascontiguousarray(pixel[:, 1])

    def pixel_to_icrs(self, x: FloatArray, y: FloatArray, mjd: float = NAN) -> tuple[FloatArray, FloatArray]:
        """ICRS degrees of 0-based pixel coordinates, shape (n,); NaN where the projection is undefined."""
        pixel = np.column_stack((np.asarray(x, float), np.asarray(y, float)))
        return to_icrs(*self._own(pixel), self.system, mjd)

    @cached_property
    def pixel_scale_arcsec(self) -> float:
        """Square root of the area of a pixel at the reference pixel."""
        (a, b), (c, d) = self.reference_jacobian
        return float(abs(a * d - b * c) ** 0.5)

    @cached_property
    def reference_jacobian(self) -> FloatArray:
        """`jacobian` at the reference pixel, which is what `beam_shape` wants."""
        return self.jacobian(*self.reference) if self.scale_matrix is None else self.scale_matrix

    def jacobian(self, x: float, y: float) -> FloatArray:
        """Shape (2, 2): a pixel offset (dx, dy) to (east, north) arcsec of the header's *own* system, as beams use."""
        return _tangent_map(*self._own(_FIVE_POINTS + np.array((x, y))))

    def jacobian_icrs(self, x: float, y: float, mjd: float = NAN) -> FloatArray:
        """Shape (2, 2): a pixel offset (dx, dy) to ICRS (east, north) arcsec."""
        return _tangent_map(*to_icrs(*self._own(_FIVE_POINTS + np.array((x, y))), self.system, mjd))

    def _own(self, pixel: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Longitude and latitude in the header's own system of pixels (n, 2)."""
        with _as_bad_wcs():
            world = self.engine.to_world(pixel) if len(pixel) else pixel
        first, second = (1, 0) if self.swapped else (0, 1)
        return world[:, first], world[:, second]


def projection(cards: Cards, path: str = "") -> Projection:
    """The projection that header cards describe.

    `path` is the local file itself, needed only for look-up-table distortions, which live in other HDUs. Raises
    `NoCelestialError` or `BadWcsError` with a sentence.
    """
    kinds = {key: kind for key in cards if (kind := _kind(key))}
    with _as_bad_wcs():
        if "odd" not in kinds.values():
            lean = _lean("".join([cards.card(key) for key in kinds]))
            if lean is not None:
                return lean
        return _full(cards.raw, path if _has_tables(cards) else "")


def beam_shape(major: float, minor: float, angle: float, jacobian: FloatArray) -> BeamShape:
    """A beam in pixels from full widths in arcsec and the position angle of its major axis (degrees east of north).

    `jacobian` is `Projection.jacobian` where the beam refers to: the second-moment matrix goes through its inverse.
    """
    (a, b), (c, d) = jacobian.tolist()
    det = a * d - b * c
    s, t = math.sin(math.radians(angle)), math.cos(math.radians(angle))
    # The half axes (east, north) = major (s, t) and minor (t, -s), in pixels; their outer products add up.
    along = ((d * s - b * t) * major / det, (a * t - c * s) * major / det)
    across = ((d * t + b * s) * minor / det, (-a * s - c * t) * minor / det)
    xx, yy = along[0] ** 2 + across[0] ** 2, along[1] ** 2 + across[1] ** 2
    xy = along[0] * along[1] + across[0] * across[1]
    middle, spread = (xx + yy) / 2.0, math.hypot((xx - yy) / 2.0, xy)
    turn = math.atan2(2.0 * xy, xx - yy) / 2.0 if spread > 1e-9 * middle else 0.0
    return BeamShape((middle + spread) ** 0.5, (middle - spread) ** 0.5, turn)


# --- reading the cards


@lru_cache(maxsize=4096)
def _kind(key: str) -> str:
    """Whether a keyword matters to the projection: 'plain', 'odd' (full WCS needed) or ''."""
    if _PLAIN.fullmatch(key):
        return "plain"
    return "odd" if _ODD.fullmatch(key) else ""


@lru_cache(maxsize=256)
def _lean(key: str) -> Projection | None:
    """The projection through wcslib on the celestial cards; None where they need the full WCS."""
    cards = Cards(key.encode("latin-1"))
    found = find_celestial(cards)
    odd_unit = any(cards.text(f"CUNIT{i}") not in ("", "deg") for i in found.axes)
    has_pv = any(k.startswith((f"PV{found.axes[0]}_", f"PV{found.axes[1]}_")) for k in cards)
    if found.code not in LEAN_CODES or found.suffix or odd_unit or (found.code == "TAN" and has_pv):
        return None
    text = two_axes(cards, found.axes)
    with warnings.catch_warnings():
        warnings.simplefilter("error")  # wcslib leaves a card out with a warning, and takes a default in its place
        prm = Wcsprm(header=text.encode("latin-1"), relax=True)
    if found.code in LEGACY_CODES:
        prm.fix()  # they become SIN and SFL
    prm.set()
    turn = None
    if found.code in TURNING_CODES:
        turn = _turn(prm, found.swapped)
        prm.bounds_check(False, True)  # else pixels over 180 degrees from the reference value have no sky
    scale_matrix = None if has_pv else _scale_matrix(prm, found)
    return _finished(found, _WcslibEngine(prm, turn, found.reference), scale_matrix)


@lru_cache(maxsize=64)
def _full(raw: bytes, path: str) -> Projection:
    """The projection through `astropy.wcs.WCS` with every distortion it knows."""
    cards = Cards(raw)
    found = find_celestial(cards)
    if found.code == "TAB":
        raise BadWcsError(f"CTYPE{found.axes[0]} is a table of coordinates (-TAB), which is not supported")
    tables = _has_tables(cards)
    if tables and not path:
        raise BadWcsError(
            "the distortion is a look-up table in another HDU, and there is no local file to read it from"
        )
    for key, most in MOST.items():
        if cards.number(key) > most:
            raise BadWcsError(f"{key} is {cards.number(key):g}, more than {most}")
    with warnings.catch_warnings(), ExitStack() as stack:
        warnings.simplefilter("ignore")  # FITSFixedWarning and card warnings: what cannot be used raises below
        hdus = stack.enter_context(_tables_of(path)) if tables else None
        header = fits.Header.fromstring(raw.decode("latin-1"))
        for i in found.axes if "A_ORDER" in header else ():
            suffix = cards.text(f"CTYPE{i}")[8:]
            if suffix not in ("", "-SIP"):
                raise BadWcsError(f"CTYPE{i} ends in {suffix!r}, and there are SIP coefficients")
            if not suffix:  # astropy applies such coefficients too, but complains on standard error
                header[f"CTYPE{i}"] = cards.text(f"CTYPE{i}") + "-SIP"
        try:
            wcs = WCS(header, fobj=hdus).celestial
        except OSError as error:
            raise _unread(error) from error
        wcs.wcs.set()
    if found.code == "TPV" and not any(key.startswith("CD") for key in cards if key[2:3].isdigit()):
        # wcslib would apply the polynomial before CDELT, where nobody means it.
        raise BadWcsError("TPV needs a CD matrix, and there is none")
    if wcs.naxis != 2:
        raise BadWcsError("the two celestial axes cannot be separated from the others")
    return _finished(found, _AstropyEngine(wcs))


@contextmanager
def _tables_of(path: str) -> Iterator[Any]:
    """The HDUs of a file, for the tables of a distortion; of a remote one the bytes of these tables are read."""
    with ExitStack() as stack:
        try:
            hdus = stack.enter_context(fits.open(stack.enter_context(readable(path))))
        except OSError as error:
            raise _unread(error) from error
        yield hdus


def _unread(error: OSError) -> BadWcsError:
    return BadWcsError(f"the distortion's look-up table cannot be read: {error}")


def _has_tables(cards: Cards) -> bool:
    return any(_TABLE.fullmatch(key) for key in cards)


def _finished(found: Celestial, engine: _Engine, scale_matrix: FloatArray | None = None) -> Projection:
    """The projection, if its scale is finite and positive at the reference pixel."""
    result = Projection(
        found.axes, found.system, found.assumed, found.size, found.reference, engine, found.swapped, scale_matrix
    )
    scale = result.pixel_scale_arcsec
    if not (math.isfinite(scale) and scale > 0.0):
        raise BadWcsError("the projection is undefined or singular at the image's reference pixel")
    return result


class _as_bad_wcs:  # noqa: N801 - a context manager, written like a function where it is used
    """Turn what wcslib and astropy raise on bad cards into `BadWcsError`; one line of theirs says what is wrong."""

    def __enter__(self) -> None:
        return None

    def __exit__(self, kind: object, error: BaseException | None, trace: object) -> None:
        if isinstance(error, Exception) and not isinstance(error, BadWcsError | NoCelestialError):
            lines = [line for line in str(error).splitlines() if line and not line.startswith("ERROR")]
            said = " ".join(lines) if isinstance(error, Warning) else (lines or [str(error)])[-1]
            raise BadWcsError(f"wcslib refuses the coordinates: {said.rstrip('.')}") from error


def _scale_matrix(prm: Wcsprm, found: Celestial) -> FloatArray | None:
    """The jacobian at the reference pixel of a zenithal projection, whose plane touches the sky there.

    In that plane x is east and y north if the native longitude of the pole is 180 degrees (M. R. Calabretta &
    E. W. Greisen 2002, 2.2 and 5.1), so that the matrix of the header is all there is; None for anything else.
    """
    if found.code not in TOUCHING_CODES or prm.lonpole != 180.0:
        return None
    matrix: FloatArray = prm.get_pc() * (prm.get_cdelt()[:, None] * 3600.0)
    if not np.abs(matrix).max() < LARGEST_STEP_ARCSEC:
        return None
    return matrix[::-1] if found.swapped else matrix


# --- the two engines


def _turn(prm: Wcsprm, swapped: bool) -> FloatArray:
    """The step in pixels, shape (2,), that 360 degrees of native longitude make."""
    matrix = prm.get_pc() * prm.get_cdelt()[:, None]
    return np.linalg.solve(matrix, np.array([0.0, 360.0] if swapped else [360.0, 0.0]))


@dataclass(frozen=True, eq=False)
class _WcslibEngine:
    """Plain projections, straight through wcslib.

    `turn` is set for cylindrical projections: an image may lie more than 180 degrees from its reference value, and
    wcslib then gives the pixel one turn away; the one nearest the image's middle is wanted.
    """

    prm: Wcsprm
    turn: FloatArray | None
    middle: tuple[float, float]
    lock: Any = field(default_factory=threading.Lock)  # a Wcsprm is changed for a moment while it is used

    def to_pixel(self, world: FloatArray) -> FloatArray:
        with self.lock:
            pixel: FloatArray = self.prm.s2p(world, 0)["pixcrd"]
        if self.turn is not None:
            turns = np.rint((np.array(self.middle) - pixel) @ self.turn / (self.turn @ self.turn))
            pixel = np.where(turns[:, None] != 0.0, pixel + turns[:, None] * self.turn, pixel)
        return pixel

    def to_world(self, pixel: FloatArray) -> FloatArray:
        with self.lock:
            world: FloatArray = self.prm.p2s(pixel, 0)["world"]
        return world


@dataclass(frozen=True, eq=False)
class _AstropyEngine:
    """Distorted projections, through astropy's full WCS."""

    wcs: WCS
    lock: Any = field(default_factory=threading.Lock)

    def to_pixel(self, world: FloatArray) -> FloatArray:
        """Invert the distortion by iteration; NaN where it does not come back to the same point."""
        with self.lock:
            linear = np.asarray(self.wcs.wcs_world2pix(world, 0))
            if not self.wcs.has_distortion:
                return linear
            pixel = np.full_like(linear, np.nan)
            near = np.isfinite(linear).all(axis=1)
            if near.any():
                pixel[near] = self._invert(world[near])
        return pixel

    def _invert(self, world: FloatArray) -> FloatArray:
        with np.errstate(all="ignore"):  # a distortion far outside the image may overflow; such points become NaN
            try:
                pixel = np.asarray(self.wcs.all_world2pix(world, 0, quiet=True))
            except NoConvergence as error:  # pragma: no cover - quiet=True returns the best solution instead
                pixel = np.asarray(error.best_solution)
            undistorted = self.wcs.pix2foc(pixel, 0)
            wanted = self.wcs.wcs_world2pix(world, 0)
            off = np.abs(np.asarray(undistorted) - wanted).max(axis=1)
        return np.where((off < ROUND_TRIP_PIXELS)[:, None], pixel, np.nan)

    def to_world(self, pixel: FloatArray) -> FloatArray:
        with self.lock:
            return np.asarray(self.wcs.all_pix2world(pixel, 0))


def _tangent_map(lon: FloatArray, lat: FloatArray) -> FloatArray:
    """The (east, north) arcsec per pixel from the sky at `_FIVE_POINTS`; in plain numbers, which is fast for so few."""
    points = []
    for a, d in zip(np.radians(lon).tolist(), np.radians(lat).tolist(), strict=True):
        points.append((math.cos(d) * math.cos(a), math.cos(d) * math.sin(a), math.sin(d)))
    a, d = math.radians(lon[4]), math.radians(lat[4])
    east = (-math.sin(a), math.cos(a), 0.0)
    north = (-math.sin(d) * math.cos(a), -math.sin(d) * math.sin(a), math.cos(d))
    right, left, up, down, _ = points
    steps = [[p - m for p, m in zip(*pair, strict=True)] for pair in ((right, left), (up, down))]
    rows = [[sum(c * s for c, s in zip(axis, step, strict=True)) for step in steps] for axis in (east, north)]
    return np.array(rows) * (180.0 / math.pi * 3600.0)
