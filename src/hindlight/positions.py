"""Who is measured where: targets read and checked, fields of sky, and the blank positions that serve as controls.

Positions are pinned in a run once they are planned; nothing here reads pixels or measures.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import astropy.table
import astropy.units as u
import numpy as np
from astropy.coordinates import Angle
from astropy.io.registry import IORegistryError
from numpy.typing import NDArray
from scipy.spatial import cKDTree

from hindlight.errors import UsageError
from hindlight.lightcurve import FloatArray, IntArray

BANDS_PER_TURN = 1 << 20  # cells of one declination band: field = band * BANDS_PER_TURN + cell
CANDIDATES_PER_CONTROL = 6
ARCSEC = np.pi / 180 / 3600
ARCSEC_DEG = 1 / 3600

OPTIONAL_UNITS = {
    "pos_err": u.arcsec, "pos_err_major": u.arcsec, "pos_err_minor": u.arcsec, "pos_err_angle": u.deg,
    "pm_ra_cosdec": u.mas / u.yr, "pm_dec": u.mas / u.yr, "ref_epoch": u.yr,
    "period": u.s, "period_err": u.s, "period_dot": u.s / u.s, "period_dot_err": u.s / u.s,
    "epoch": u.d, "epoch_err": u.d, "window": u.s, "epoch_frequency": u.MHz,
    "dm": u.pc / u.cm**3, "dm_err": u.pc / u.cm**3, "distance": u.kpc,
}  # fmt: skip
RANGES = {
    "pos_err": (0, 3.6e5), "pos_err_major": (0, 3.6e5), "pos_err_minor": (0, 3.6e5), "pos_err_angle": (-360, 360),
    "pm_ra_cosdec": (-1e5, 1e5), "pm_dec": (-1e5, 1e5), "ref_epoch": (1800, 2200),
    "period": (1e-3, 1e11), "period_err": (0, 1e11), "period_dot": (-1, 1), "period_dot_err": (0, 1),
    "epoch": (2.3e6, 2.6e6), "epoch_err": (0, 1e5), "window": (0, 1e11), "epoch_frequency": (1, 1e15),
    "dm": (0, 1e5), "dm_err": (0, 1e5), "distance": (0, 1e7),
}  # fmt: skip
DEFAULTS = {"pm_ra_cosdec": 0.0, "pm_dec": 0.0, "ref_epoch": 2000.0, "pos_err": 0.0}


@dataclass(frozen=True, eq=False)
class Targets:
    """The target list: names, ICRS degrees of shape (n,), and the optional columns in their contract units.

    `unused` are the names of other columns of the table.
    """

    names: tuple[str, ...]
    ra: FloatArray
    dec: FloatArray
    optional: Mapping[str, FloatArray]
    unused: tuple[str, ...] = ()

    def __len__(self) -> int:
        return len(self.names)

    @property
    def position_error(self) -> FloatArray:
        """The larger 1-sigma position error in arcsec, 0 where not given; shape (n,)."""
        return np.fmax(self.column("pos_err"), np.nan_to_num(self.column("pos_err_major")))

    @property
    def error_ellipses(self) -> tuple[FloatArray, FloatArray, FloatArray]:
        """1-sigma axes in arcsec and position angle of the first one in degrees, each of shape (n,); circles if not given."""
        major = self.position_error
        minor, angle = self.column("pos_err_minor"), self.column("pos_err_angle")
        given = np.isfinite(minor) & (self.column("pos_err_major") >= self.column("pos_err"))
        return major, np.where(given, minor, major), np.nan_to_num(angle)

    def column(self, name: str) -> FloatArray:
        """An optional column, shape (n,); NaN (or 0 for motions, 2000 for their epoch) where not given."""
        default = DEFAULTS.get(name, np.nan)
        values = self.optional.get(name)
        if values is None:
            return np.full(len(self), default)
        return np.where(np.isfinite(values), values, default)


def read_targets(path: Path, fluxes: bool = False) -> Targets:
    """Read a target list in any format astropy knows by the file's ending; with `fluxes` the column `flux` too.

    Raises `UsageError` naming row and column for anything that is no target list.
    """
    table = _read_table(path)
    missing = [name for name in ("ra", "dec") if name not in table.colnames]
    if missing:
        raise UsageError(
            f"targets {path}: no column {missing[0]!r}; it has {', '.join(table.colnames)}; "
            "name the columns ra and dec (ICRS, degrees or sexagesimal)"
        )
    if len(table) == 0:
        raise UsageError(f"targets {path}: no rows; give at least one position")
    ra = _angles(table["ra"], "ra", u.hourangle, path)
    dec = _angles(table["dec"], "dec", u.deg, path)
    _refuse_bad_positions(ra, dec, path)
    names = _names(table, ra, dec, path)
    optional = {
        name: _quantity(table[name], name, unit, path)
        for name, unit in OPTIONAL_UNITS.items()
        if name in table.colnames
    }
    for name, values in optional.items():
        _refuse_out_of_range(name, values, path)
    if fluxes and "flux" in table.colnames:
        optional["flux"] = _quantity(table["flux"], "flux", table["flux"].unit or u.one, path)
    unused = tuple(name for name in table.colnames if name not in ("name", "ra", "dec", *optional))
    return Targets(names, ra % 360.0, dec, optional, unused)


def _read_table(path: Path) -> astropy.table.Table:
    if not path.is_file():
        raise UsageError(f"targets {path}: no such file; give a table with columns name, ra, dec")
    try:
        if path.suffix.lower() != ".csv":
            return astropy.table.Table.read(path)
        # A byte-order mark is no part of the first column's name, and a name such as 002 is no number.
        text = path.read_text(encoding="utf-8-sig")
        return astropy.table.Table.read(text.splitlines(), format="ascii.csv", converters={"name": str})
    except IORegistryError:  # its text is the table of all formats there are
        known = path.suffix.lower() in (".ecsv", ".fits", ".vot")
        why = (
            f"its content is not that of a {path.suffix} file"
            if known
            else f"the ending {path.suffix!r} names no format"
        )
        raise UsageError(f"targets {path}: {why}; give a table as .ecsv, .csv, .fits or .vot") from None
    except Exception as error:  # noqa: BLE001 - readers raise whatever they like on a broken table
        detail = " ".join(str(error).split())[:200] if path.stat().st_size else "it is empty"
        raise UsageError(
            f"targets {path}: not readable as a table ({detail}); give .ecsv, .csv, .fits or .vot"
        ) from None


def _angles(column: Any, name: str, text_unit: u.UnitBase, path: Path) -> FloatArray:
    """Degrees of a column of numbers (degrees unless it has a unit) or sexagesimal text."""
    if column.dtype.kind in "fiu":
        return _quantity(column, name, u.deg, path)
    values: FloatArray = np.empty(len(column))
    for row, text in enumerate(column):
        try:
            plain = str(text).strip()
            values[row] = float(plain) if _is_number(plain) else Angle(plain, unit=text_unit).deg
        except Exception:  # noqa: BLE001 - astropy raises many kinds for a text that is no angle
            raise UsageError(
                f"targets {path}: row {row + 1}, column {name!r}: {str(text)!r} is no angle; give degrees or sexagesimal text"
            ) from None
    return values


def _is_number(text: str) -> bool:
    try:
        float(text)
    except ValueError:
        return False
    return True


def _quantity(column: Any, name: str, unit: u.UnitBase, path: Path) -> FloatArray:
    try:
        values: Any = np.ma.filled(np.ma.asarray(getattr(column, "value", column), dtype=float), np.nan)
        own = getattr(column, "unit", None)
        return np.asarray(values if own is None else (values * own).to_value(unit), float)
    except (u.UnitConversionError, TypeError, ValueError) as error:
        expected = unit.to_string() or "a pure number"
        raise UsageError(f"targets {path}: column {name!r}: {error}; expected numbers in {expected}") from None


def _refuse_out_of_range(name: str, values: FloatArray, path: Path) -> None:
    """Raise `UsageError` for the first value of an optional column that cannot be meant; NaN means not given."""
    low, high = RANGES[name]
    bad = ~np.isnan(values) & ~((values >= low) & (values <= high))
    if bad.any():
        row = int(np.flatnonzero(bad)[0])
        raise UsageError(
            f"targets {path}: row {row + 1}, column {name!r}: {values[row]:g} is out of range, expected {low:g} to {high:g} "
            f"{OPTIONAL_UNITS[name].to_string()}".rstrip()
        )


def _refuse_bad_positions(ra: FloatArray, dec: FloatArray, path: Path) -> None:
    for name, values, low, high in (("ra", ra, -360.0, 360.0), ("dec", dec, -90.0, 90.0)):
        bad = ~(np.isfinite(values) & (values >= low) & (values <= high))
        if bad.any():
            row = int(np.flatnonzero(bad)[0])
            raise UsageError(
                f"targets {path}: row {row + 1}, column {name!r}: {values[row]} is no position; "
                f"expected degrees from {low:g} to {high:g}"
            )


def _names(table: astropy.table.Table, ra: FloatArray, dec: FloatArray, path: Path) -> tuple[str, ...]:
    if "name" in table.colnames:
        names = [str(value).strip() for value in np.ma.filled(np.ma.asarray(table["name"]), "")]
    else:
        names = [""] * len(table)
    names = [name or position_name(a, d) for name, a, d in zip(names, ra, dec, strict=True)]
    seen: dict[str, int] = {}
    for row, name in enumerate(names):
        if name in seen:
            raise UsageError(
                f"targets {path}: row {row + 1}, column 'name': {name!r} stands in row {seen[name] + 1} already; "
                "give each target a name of its own"
            )
        seen[name] = row
    return tuple(names)


def position_name(ra: float, dec: float) -> str:
    """A name made from a position, JHHMMSS.s+DDMMSS, cut off and not rounded (IAU recommendations on designations)."""
    tenths = int((ra % 360.0) * 2400.0)
    seconds = int(abs(dec) * 3600.0)
    h, rest = divmod(tenths, 36000)
    m, s = divmod(rest, 600)
    sign = "-" if dec < 0 else "+"
    return f"J{h:02d}{m:02d}{s // 10:02d}.{s % 10}{sign}{seconds // 3600:02d}{seconds // 60 % 60:02d}{seconds % 60:02d}"


def separation_deg(a: FloatArray, b: FloatArray) -> FloatArray:
    """Angles in degrees between unit vectors, shapes (n, 3) and (m, 3), as (n, m); exact for small angles."""
    chord = np.sqrt(np.maximum(0.0, ((a[:, None, :] - b[None, :, :]) ** 2).sum(axis=-1)))
    return np.asarray(np.degrees(2 * np.arcsin(np.minimum(1.0, chord / 2))))


def nearest_deg(a: FloatArray, b: FloatArray) -> FloatArray:
    """Angle in degrees from each unit vector of `a` (n, 3) to the nearest of `b` (m, 3); infinite for none. Shape (n,)."""
    if len(a) == 0 or len(b) == 0:
        return np.full(len(a), np.inf)
    chord = np.minimum(cKDTree(b).query(a)[0], 2.0)
    return np.asarray(np.degrees(2 * np.arcsin(chord / 2)))


def within_deg(a: FloatArray, b: FloatArray, radius: float) -> list[list[int]]:
    """For each unit vector of `a` (n, 3) the rows of `b` (m, 3) that lie within an angle in degrees."""
    chord = 2 * np.sin(np.radians(min(radius, 180.0)) / 2)
    return [list(rows) for rows in cKDTree(b).query_ball_point(a, chord)]


def moved(
    ra: FloatArray, dec: FloatArray, pm_ra_cosdec: FloatArray, pm_dec: FloatArray, ref_epoch: FloatArray, year: float
) -> tuple[FloatArray, FloatArray]:
    """Positions in degrees at a Julian year; motions in mas/yr. To first order, good to 1 mas for 1 arcsec/yr in 50 yr."""
    if not (np.any(pm_ra_cosdec) or np.any(pm_dec)) or not np.isfinite(year):
        return ra, dec
    years = year - ref_epoch
    return ra + pm_ra_cosdec * years / 3.6e6 / np.cos(np.radians(dec)), dec + pm_dec * years / 3.6e6


def field_of(ra: FloatArray, dec: FloatArray, size_deg: float) -> IntArray:
    """The field each position lies in: cells of about `size_deg` in bands of declination. Shape (n,)."""
    n_bands = max(1, round(180.0 / size_deg))
    band = np.clip(((dec + 90.0) / 180.0 * n_bands).astype(np.int64), 0, n_bands - 1)
    middle = np.radians((band + 0.5) * 180.0 / n_bands - 90.0)
    cells = np.maximum(1, np.round(360.0 * np.cos(middle) / size_deg)).astype(np.int64)
    cell = np.minimum((ra / 360.0 * cells).astype(np.int64), cells - 1)
    return np.asarray(band * BANDS_PER_TURN + cell, np.int64)


def field_size(radii_deg: FloatArray) -> float:
    """Half a median footprint's side, for frames whose corners lie `radii_deg` from their centres."""
    side = float(np.median(radii_deg)) * 2**0.5
    return float(f"{min(max(side / 2, 1e-4), 60.0):.3g}")


@dataclass(frozen=True, eq=False)
class BlankSky:
    """What controls of one field must keep clear of: unit vectors (n, 3) and the radius in degrees of each, (n,)."""

    vectors: FloatArray
    radii: FloatArray

    def clear(self, vectors: FloatArray) -> NDArray[np.bool_]:
        """Which of the positions (m, 3) lie outside every radius; shape (m,)."""
        free = np.ones(len(vectors), dtype=bool)
        for start in range(0, len(self.vectors), 256):
            part = slice(start, start + 256)
            free &= (separation_deg(vectors, self.vectors[part]) > self.radii[part]).all(axis=1)
        return free


def control_grid(
    centre_ra: float, centre_dec: float, extent_deg: float, spacing_deg: float, wanted: int, field: int
) -> tuple[FloatArray, FloatArray]:
    """Places where controls of a field may stand: a hexagonal lattice around its centre, in seeded random order.

    No two are nearer than `spacing_deg`; the lattice reaches as far as several times the number wanted needs, but not
    beyond `extent_deg`. Returns degrees, shape (n,).
    """
    enough = spacing_deg * (CANDIDATES_PER_CONTROL * max(wanted, 1) * 3**0.5 / 2 / np.pi) ** 0.5
    reach = min(extent_deg, enough)
    steps = int(reach / spacing_deg) + 2
    i, j = np.mgrid[-2 * steps : 2 * steps + 1, -2 * steps : 2 * steps + 1]
    rng = np.random.default_rng([field, 1])
    shift = rng.random(2)
    x = (i + j / 2 + shift[0]).ravel() * spacing_deg
    y = (j * 3**0.5 / 2 + shift[1]).ravel() * spacing_deg
    inside = np.hypot(x, y) <= reach
    order = rng.permutation(int(inside.sum()))
    return from_tangent(centre_ra, centre_dec, x[inside][order], y[inside][order])


def from_tangent(
    ra0: float | FloatArray, dec0: float | FloatArray, xi: NDArray[np.floating[Any]], eta: NDArray[np.floating[Any]]
) -> tuple[FloatArray, FloatArray]:
    """Gnomonic plane (degrees east and north of a centre) to ICRS degrees (Calabretta & Greisen 2002, eq. 54)."""
    x, y, d0 = np.radians(xi), np.radians(eta), np.radians(dec0)
    denominator = np.cos(d0) - y * np.sin(d0)
    ra = ra0 + np.degrees(np.arctan2(x, denominator))
    dec = np.degrees(np.arctan2(np.sin(d0) + y * np.cos(d0), np.hypot(x, denominator)))
    return np.asarray(ra % 360.0), np.asarray(dec)


def first_controls(positions: Mapping[str, Any]) -> NDArray[np.bool_]:
    """Which rows of a position table are controls that every target of their field has, not those of a second pass."""
    return np.asarray((positions["kind"] == "control") & (positions["added_for"] < 0))


def serves(target_frames: NDArray[np.bool_], control_frames: NDArray[np.bool_], share: float) -> NDArray[np.bool_]:
    """Which controls are in at least a fraction `share` of each target's frames.

    Coverage matrices have shapes (n_frames, n_targets) and (n_frames, n_controls); the answer (n_targets, n_controls).
    """
    common = target_frames.astype(np.float32).T @ control_frames.astype(np.float32)
    wanted = target_frames.sum(axis=0)[:, None]
    return np.asarray((common >= share * wanted) & (wanted > 0))
