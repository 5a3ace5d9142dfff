"""The limits that an unseen target's looks set, in each channel's own unit, and the sentence that says them.

Pure: looks and counts of made-up pulses in, rows out.
"""

from __future__ import annotations

from typing import Any

import numpy as np

from hindlight.completeness import jeffreys
from hindlight.looks import (
    HIGHEST_FLUX,
    Looks,
    duty_limit,
    flux_limit,
    rate_limit,
    seen_fluence,
    surely_seen,
    weights,
)
from hindlight.timing import DAY
from hindlight.wording import how_many

DUTY_CYCLES = (("half", 0.5), ("tenth", 0.1), ("hundredth", 0.01))
COLLECTED = ("adu", "electron", "count")  # `headers.fold_unit` has one spelling for each


def over_all(looks: Looks) -> dict[str, float]:
    """The limits over all channels of completeness_targets.ecsv, in median frame errors of each."""
    surely = duty_limit(weights(looks, HIGHEST_FLUX))
    return {"lowest_duty_limit": surely} | {f"flux_limit_{word}": flux_limit(looks, duty) for word, duty in DUTY_CYCLES}


def by_flux(name: str, looks: Looks, fluxes: list[float]) -> list[dict[str, Any]]:
    """Rows of completeness_limits.ecsv."""
    each = [(flux, weights(looks, flux)) for flux in fluxes]
    return [
        {"name": name, "flux": flux, "looks_effective": float(weight.sum()), "duty_limit": duty_limit(weight)}
        for flux, weight in each
    ]


def in_channel(looks: Looks, number: int, unit: str, cycles: bool, seen: tuple[int, int]) -> dict[str, Any]:
    """A row of completeness_channels.ecsv but for the target's name; `looks` are those of the channel alone.

    `seen` tells how many frames with made-up pulses as bright show them, and how many such frames there are.
    """
    typical = looks.typical[number]
    snr = surely_seen(looks)
    known = np.isfinite(looks.exposure_s) & (looks.exposure_s > 0)
    row: dict[str, Any] = {
        "channel": looks.labels[number], "flux_unit": unit, "n_used": len(looks.look), "n_looks": looks.n,
        "exposure": float(looks.exposure_s[known].sum()) if known.any() else float("nan"), "frame_error": typical,
        "flux": snr * typical, "duty_limit": duty_limit(weights(looks, snr)),
        "fluence": float("nan"), "fluence_unit": "", "rate_limit": float("nan"), "n_made": seen[1], "n_seen": seen[0],
    }  # fmt: skip
    row |= {f"flux_limit_{word}": flux_limit(looks, duty) * typical for word, duty in DUTY_CYCLES}
    what = fluence_unit(unit)
    if known.any() and what:
        collected = unit in COLLECTED
        fluence = snr if collected else snr * float(np.median(looks.exposure_s[known]))
        chance = seen_fluence(looks, fluence, collected)[known]
        row["fluence"], row["fluence_unit"] = fluence * typical, what
        row["rate_limit"] = DAY * rate_limit(chance, looks.exposure_s[known])
    return row | {"sentence": sentence(row, cycles, int(known.sum()))}


def fluence_unit(unit: str) -> str:
    """What a flux in this unit adds up to over time; '' where the unit does not tell."""
    counted, *under = unit.split("/")
    if unit in COLLECTED:
        return unit
    if "s" in under:
        return "/".join([counted, *(word for word in under if word != "s")])
    return f"{unit} s" if counted.endswith("Jy") else ""


def sentence(row: dict[str, Any], cycles: bool, n_known: int) -> str:
    """What no detection says of a target in a channel; `n_known` frames have a known exposure."""
    looks = how_many(row["n_looks"], "cycle", "cycles") if cycles else how_many(row["n_looks"], "epoch", "epochs")
    frames = how_many(row["n_used"], "frame", "frames")
    flux = f"{row['flux']:.3g} {row['flux_unit']}".strip()
    on = "with a pulse in" if cycles else "on throughout"
    limits = [f"{on} less than {row['duty_limit']:.3g} of {looks}"] if row["duty_limit"] < 1 else []
    assumed = [
        "every cycle's pulse lies at random in its window" if cycles else "its flux stays so throughout an epoch"
    ]
    if np.isfinite(row["fluence"]):
        what = f"no pulse of fluence >= {row['fluence']:.3g} {row['fluence_unit']} ({flux} in a frame)"
        exposures = f"sum of exposures {row['exposure']:.4g} s" + (f", of {n_known}" if n_known < row["n_used"] else "")
        if np.isfinite(row["rate_limit"]):
            limits.insert(0, f"rate < {row['rate_limit']:.3g} per day")
            assumed.insert(0, "for the rate, pulses are no longer than an exposure and come at random (Poisson)")
    else:
        what = f"no flux >= {flux}, mean over an exposure,"
        exposures = "exposures not known" if np.isnan(row["exposure"]) else f"sum of exposures {row['exposure']:.4g} s"
    said = f"{what} in {frames} ({exposures}): " + (
        "; ".join([*limits]) + " at 95 %" if limits else "too few for a limit"
    )
    return f"{said}; {_completeness_said(row)}" + (f"; assuming: {'; '.join(assumed)}" if limits else "")


def _completeness_said(row: dict[str, Any]) -> str:
    """How many frames show made-up pulses that are as bright in them."""
    n, k = row["n_made"], row["n_seen"]
    if n == 0:
        return "completeness not known: no made-up pulse is as bright"
    low, high = jeffreys(k, n)
    return f"completeness {k / n:.3g} [{low:.3g}, {high:.3g}] (made-up pulses as bright: {k} of {n} frames show them; Jeffreys)"
