"""Times of a cube's planes by a table: an axis of type TIME-TAB (or UTC-TAB and their like).

The table follows the image in its file; where it cannot be used planes have no time of their own, and say so.
"""

from __future__ import annotations

import warnings

import numpy as np
from astropy.io import fits

from hindlight.headers import BLOCK, Hdu, TimeTable
from hindlight.instants import SECONDS
from hindlight.lightcurve import FloatArray


def plane_times(image: Hdu, table: Hdu) -> tuple[float, ...]:
    """Coordinates in the axis' unit of the pixels along an image's time axis; () where the table does not give them.

    The coordinate of pixel p is looked up at psi = CRVAL + CDELT (p - CRPIX), linearly between the table's entries, and NaN
    beyond them (E. W. Greisen et al. 2006, A&A 446, 747, 6.1, for one axis alone).
    """
    named = image.time_table
    if named is None or table.cards.text("EXTNAME").upper() != named.name:
        return ()
    try:
        listed, index, unit = _columns(table, named)
    except Exception:  # noqa: BLE001 - what astropy may raise for a broken table is of any kind; the planes then have no time
        return ()
    if len(listed) == 0 or len(index) != len(listed) or not np.isfinite(index).all():
        return ()
    order = np.argsort(index, kind="stable")
    cards, i = image.cards, named.axis
    value, step, pixel = (cards.number(f"{stem}{i}") for stem in ("CRVAL", "CDELT", "CRPIX"))
    value, step, pixel = np.nan_to_num(value), 1.0 if step != step else step, np.nan_to_num(pixel)
    psi = value + step * (np.arange(1, image.axes[i - 1] + 1) - pixel)
    found = np.interp(psi, index[order], listed[order], np.nan, np.nan)
    own = SECONDS.get(cards.text(f"CUNIT{i}") or cards.text("TIMEUNIT") or "s", np.nan)
    return tuple((found * (SECONDS.get(unit, np.nan) / own if unit else 1.0)).tolist())


def _columns(table: Hdu, named: TimeTable) -> tuple[FloatArray, FloatArray, str]:
    """Coordinates, their indices, and their unit, out of the one row (or, as some write it, one row each)."""
    header = table.cards.raw + b"END".ljust(80)
    padded = [part.ljust(-(-len(part) // BLOCK) * BLOCK, fill) for part, fill in ((header, b" "), (table.table, b"\0"))]
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        made = fits.BinTableHDU.fromstring(b"".join(padded))
        listed = np.ravel(np.asarray(made.data[named.column], float))
        index = (
            np.ravel(np.asarray(made.data[named.indices], float)) if named.indices else np.arange(1.0, len(listed) + 1)
        )
    return listed, index, made.columns[named.column].unit or ""
