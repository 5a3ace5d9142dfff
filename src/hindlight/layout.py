"""Completeness as rows of text that fit a terminal. Pure: a table in, words out; `cli` prints them."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np

from hindlight.completeness import NOTHING, half_flux, jeffreys
from hindlight.trials import ALL

Rows = list[tuple[str, ...]]
KIND = ("kind", "period (s)", "duty cycle")


def by_kind(table: Any) -> tuple[tuple[str, ...], Rows]:
    """Completeness in all frames: names of columns, and for each kind of source two rows, in per cent and its interval."""
    mine = table[(table["subset"] == ALL) & (table["kind"] != NOTHING)]
    fluxes = sorted({float(flux) for flux in mine["flux"]})
    kinds: dict[tuple[str, ...], dict[float, tuple[str, str]]] = {}
    for row in mine:
        key = (str(row["kind"]), *(short(row[name]) for name in ("period", "duty_cycle", "window", "missing")))
        low, high = round(100 * row["completeness_low"]), round(100 * row["completeness_high"])
        kinds.setdefault(key, {})[float(row["flux"])] = f"{round(100 * row['completeness'])}", f"{low}-{high}"
    rows = []
    for (kind, period, duty, *_), cells in kinds.items():
        for line, head in enumerate(((kind, period, duty), ("", "", ""))):
            rows.append((*head, *(cells[flux][line] if flux in cells else "" for flux in fluxes)))
    return (*KIND, *(short(flux) for flux in fluxes)), rows


def false_alarms(table: Any) -> str:
    """What was found where no source is."""
    mine = table[(table["subset"] == ALL) & (table["kind"] == NOTHING)]
    k, n = int(mine["n_recovered"].sum()), int(mine["n_injected"].sum())
    low, high = jeffreys(k, n)
    return f"where no source is: {k} of {n} found ({100 * low:.2g}-{100 * high:.2g} %)"


def half_found(table: Any) -> tuple[tuple[str, ...], Rows]:
    """The flux found in half of the cases, by kind and duty cycle, in all frames and in those of each instrument."""
    kinds: list[tuple[str, str]] = []
    rows: dict[str, dict[tuple[str, str], list[tuple[float, int, int]]]] = {}
    about: dict[str, tuple[str, str]] = {}
    for row in table[(table["kind"] != NOTHING) & (table["decade"] == "")]:
        name, kind = str(row["subset"]), (str(row["kind"]), short(row["duty_cycle"]))
        about[name] = str(row["n_frames"]), str(row["n_targets"])
        if kind not in kinds:
            kinds.append(kind)
        cell = float(row["flux"]), int(row["n_recovered"]), int(row["n_injected"])
        rows.setdefault(name, {}).setdefault(kind, []).append(cell)
    names = ("frames of", "n", "targets", *(f"{kind} {duty}".strip() for kind, duty in kinds))
    return names, [(name, *about[name], *(half(of.get(kind, [])) for kind in kinds)) for name, of in rows.items()]


def half(cells: list[tuple[float, int, int]]) -> str:
    """The flux found in half of the cases from (flux, found, sources) of cells, those of one flux together."""
    fluxes = sorted({flux for flux, _, _ in cells})
    found, n = (np.array([sum(c[i] for c in cells if c[0] == flux) for flux in fluxes], float) for i in (1, 2))
    return half_text(half_flux(np.array(fluxes), found / np.maximum(n, 1)), fluxes)


def half_text(flux: float, fluxes: Sequence[float]) -> str:
    """A flux found in half of the cases among those of a grid, ascending; infinite where it is beyond them."""
    if not fluxes or np.isnan(flux):
        return ""
    if np.isinf(flux):
        return f"> {short(fluxes[-1])}" if flux > 0 else f"< {short(fluxes[0])}"
    return f"{flux:.2g}"


def short(value: Any) -> str:
    """Three digits, '' for NaN; whole numbers below a million in full."""
    value = float(value)
    if not np.isfinite(value):
        return ""
    return f"{value:.0f}" if value == round(value) and abs(value) < 1e6 else f"{value:.3g}"
