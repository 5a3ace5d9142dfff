"""Completeness by sources hidden at controls agrees with sources that are targets of archives simulated otherwise.

    python tests/studies/completeness.py [--archives 150] [--controls 150] [--frames 40] [--level 0.05] [--seed 1]

So many archives (light curves in Gaussian noise) hide one source of each cell at a control, by the code of the command;
ten times as many, simulated independently, have targets with such sources, whose brightness is a sum over instants with
random numbers of its own, among four blank targets, and are judged and ranked as a run does it. Verdict: in no cell do
the two shares found differ by Fisher's exact test, Holm-corrected p > 0.01, and at least half of the cells are neither
always nor never found. Exits non-zero when short.
"""

from __future__ import annotations

import argparse
import sys
import time
from pathlib import Path

import numpy as np
from scipy import stats

sys.path.insert(0, str(Path(__file__).parents[1]))
from blanks import holm

import hidden
from hindlight.completeness import NOTHING, Cell, jeffreys
from hindlight.injection import PULSES, SMOOTH

TIMES_AS_MANY = 10
CELLS = (
    Cell(NOTHING, 0.0, 1.0),
    *(Cell(PULSES, flux, period, 0.1, 2.0, 0.2) for period in (1200.0, 18000.0) for flux in (4.0, 8.0, 16.0)),
    *(Cell(PULSES, flux, 600.0, 0.03, 1.0, 0.0) for flux in (10.0, 20.0)),
    *(Cell(SMOOTH, flux, 8.64e6) for flux in (1.5, 2.5)),
)


def main() -> int:
    """Run the study; 0 where it passes."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    for name, default in (("archives", 150), ("controls", 150), ("frames", 40), ("seed", 1)):
        parser.add_argument(f"--{name}", type=int, default=default)
    parser.add_argument("--level", type=float, default=0.05)
    asked = parser.parse_args()
    common = (CELLS, asked.controls, asked.frames, asked.level)
    start = time.perf_counter()
    seeds = range(asked.seed * 10**6, asked.seed * 10**6 + TIMES_AS_MANY * asked.archives)
    hid = np.stack([hidden.by_injection(seed, *common)[:, 0] for seed in seeds[: asked.archives]])
    made = np.stack([hidden.by_simulation(seed, *common) for seed in seeds])
    p = np.empty(len(CELLS))
    for number, cell in enumerate(CELLS):
        a, b = int(hid[:, number].sum()), int(made[:, number].sum())
        p[number] = stats.fisher_exact([[a, len(hid) - a], [b, len(made) - b]]).pvalue
        low, high = jeffreys(a, len(hid))
        print(
            f"{cell.kind:8} flux {cell.flux:5.1f} period {cell.period_s:9.0f} s: hidden {a / len(hid):.3f} "
            f"({low:.3f} to {high:.3f}), simulated {b / len(made):.3f}, p = {p[number]:.3f}"
        )
    open_cells = int(((made.mean(axis=0) > 0.02) & (made.mean(axis=0) < 0.98)).sum())
    passed = holm(p).min() > 0.01 and 2 * open_cells >= len(CELLS)
    print(
        f"{len(hid)} and {len(made)} archives in {time.perf_counter() - start:.0f} s: smallest Holm-corrected p "
        f"{holm(p).min():.3f}, {open_cells} of {len(CELLS)} cells neither always nor never found"
    )
    print("verdict:", "pass" if passed else "SHORT")
    return 0 if passed else 1


if __name__ == "__main__":
    sys.exit(main())
