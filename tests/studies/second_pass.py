"""Blank targets among pools of controls that grow where a target asks: do their p-values hold, and what would a looser rule do?

    python tests/studies/second_pass.py [--runs 6000] [--seed 1]

Eight blank targets share controls with four correlated heavy-tailed statistics; a target that lies beyond all controls gets
more (24 to 400) by the rule of a run. Verdict: at no level, at the floors and between them, are p-values from the controls
too small by more than 3 standard errors (runs are independent, targets of one are not), and no more runs than the false-
discovery level allows have a candidate. For comparison the same where a target asks until its p-value is 0.1. Exits non-zero
when short.
"""

from __future__ import annotations

import argparse
import sys
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).parents[1]))

import sequential

LEVELS = (1 / 385, 1 / 200, 1 / 97, 1 / 80, 1 / 50, 1 / 25, 0.1, 0.2, 0.3)


def excess(p: np.ndarray, level: float) -> tuple[float, float]:
    """How often p is at most a level, over that level; by how many standard errors from run to run it is above 1."""
    per_run = (p <= level).mean(axis=1) / level
    error = max(per_run.std() / len(p) ** 0.5, 1 / (level * p.size))
    return float(per_run.mean()), float((per_run.mean() - 1) / error)


def main() -> int:
    """Run the study."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--runs", type=int, default=6000)
    parser.add_argument("--seed", type=int, default=1)
    options = parser.parse_args()
    short = False
    for level in (0.02, 0.1):
        field = sequential.Field(level=level)
        p, false = sequential.empirical(field, options.runs, options.seed)
        print(f"false-discovery level {level}: {false:.4f} of {options.runs} runs have a candidate")
        short |= false > level + 3 * (level / options.runs) ** 0.5
        for at in LEVELS:
            ratio, sigma = excess(p, at)
            print(f"  p <= {at:.4f}: {ratio:.3f} times as often, {sigma:+.1f} sigma")
            short |= sigma > 3
    field = sequential.Field(n_targets=2, first=10, most=100, level=0.2)
    p, false = sequential.empirical(field, options.runs // 10, options.seed, sequential.until_decided)
    ratio, sigma = excess(p, sequential.WISHED)
    print(f"asking until p is {sequential.WISHED}: {ratio:.3f} times as often, {sigma:+.1f} sigma")
    print("short" if short else "holds")
    return int(short)


if __name__ == "__main__":
    sys.exit(main())
