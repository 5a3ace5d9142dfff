"""Are fluxes from photographic plates right? Stars kept out of the response curves, against the truth.

Each plate has an S-shaped curve of its own: another speed, knee and toe. Comparisons span a factor of 100 in flux; they
scatter by 2 % and have a constant noise, which is a tenth of the faintest one's flux. Stars of the same range that have
no part in the fit must come out with a median bias of at most 3 %, no star of more than 8 % (with 30 plates that all show it),
and a chi-square per degree of freedom of 0.8 to 1.25. By the plates' median curve the truth of a bias is read off the
comparisons, which know it no better than so many plates can; the chi-square is then that of each star about its mean.

Run: python tests/studies/plates.py [--repeats N]; exits with 1 where a case falls short.
"""

from __future__ import annotations

import argparse
import sys
from dataclasses import dataclass

import numpy as np

from hindlight.response import solve_responses

NOISE, SCATTER, KEPT_OUT, FEWEST = 0.1, 0.02, 30, 8
BIAS, ANY_STAR, CHI2 = 0.03, 0.08, (0.8, 1.25)


@dataclass(frozen=True)
class Case:
    """Plates and comparisons of a channel, whether fluxes are given, and how far plates are saturated: the knees of their

    curves as powers of ten of the flux, where the faintest comparison has 1.
    """

    plates: int
    comparisons: int
    by_table: bool
    knees: tuple[float, float] = (1.3, 2.3)
    missing: float = 0.0

    @property
    def name(self) -> str:
        """What to print."""
        scale = "table" if self.by_table else "median curve"
        knee = f"knees {10 ** self.knees[0]:.0f} to {10 ** self.knees[1]:.0f}"
        return f"{self.plates} plates, {self.comparisons} stars, {scale}, {knee}, {100 * self.missing:.0f} % missing"


CASES = [
    Case(30, 40, True),
    Case(30, 40, False),
    Case(30, 15, True),
    Case(30, 15, False),
    Case(30, 10, True),
    Case(30, 8, True),
    Case(5, 40, False),
    Case(3, 20, False),
    Case(30, 40, False, (0.5, 1.5)),
    Case(30, 40, False, missing=0.4),
]


def simulated(case: Case, rng: np.random.Generator) -> tuple[np.ndarray, np.ndarray]:
    """True fluxes, shape (n,), and measured ones, (plates, n); the comparisons come first and include both ends."""
    flux = 10 ** rng.uniform(0, 2, case.comparisons + KEPT_OUT)
    flux[:2] = 1.0, 100.0
    n = (case.plates, 1)
    speed, knee, toe = np.exp(0.3 * rng.standard_normal(n)), 10 ** rng.uniform(*case.knees, n), rng.uniform(0.9, 1.3, n)
    true = speed * knee * np.log1p(flux / knee) * (flux / (flux + 1.0)) ** (toe - 1.0)
    return flux, true * (1 + SCATTER * rng.standard_normal(true.shape)) + NOISE * rng.standard_normal(true.shape)


def one(case: Case, seed: int) -> tuple[np.ndarray, np.ndarray]:
    """Relative deviations of the stars kept out, shape (curves, KEPT_OUT), and each one's chi-square per degree of

    freedom, shape (KEPT_OUT,).
    """
    rng = np.random.default_rng(seed)
    true, measured = simulated(case, rng)
    n = case.comparisons
    used = np.where(rng.random((case.plates, n)) < case.missing, np.nan, measured[:, :n])
    given = true[:n] if case.by_table else np.full(n, np.nan)
    found = solve_responses(used, np.full(used.shape, NOISE), given, FEWEST)
    known = np.isfinite(found.brightness)
    order = np.flatnonzero(known)[np.argsort(true[:n][known])]
    read_off = np.exp(np.interp(np.log(true), np.log(true[order]), np.log(found.brightness[order])))
    truth = true[n:] if case.by_table else read_off[n:]
    pairs = [
        curve.applied(row, np.hypot(NOISE, scatter * row))
        for curve, row, scatter in zip(found.curves, measured[:, n:], found.scatter, strict=True)
        if curve is not None
    ]
    flux, error = np.array(pairs).reshape(-1, 2, KEPT_OUT).transpose(1, 0, 2)
    if case.by_table:
        return flux / truth - 1, (((flux - truth) / error) ** 2).mean(axis=0)
    mean = np.average(flux, axis=0, weights=error**-2.0)
    return flux / truth - 1, (((flux - mean) / error) ** 2).sum(axis=0) / (len(flux) - 1)


def main() -> int:
    """Print one line per case and the verdict."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--repeats", type=int, default=20)
    repeats = parser.parse_args().repeats
    short = 0
    for case in CASES:
        runs = [one(case, seed) for seed in range(repeats)]
        curves = sum(len(d) for d, _ in runs)
        if not curves:
            print(f"{case.name}: no plate shows {FEWEST} comparisons")
            continue
        bias = float(np.median(np.concatenate([d.ravel() for d, _ in runs])))
        worst = max(float(np.abs(np.median(d, axis=0)).max()) for d, _ in runs if len(d))
        chi2 = float(np.concatenate([chi2 for _, chi2 in runs]).mean())
        good = (
            abs(bias) <= BIAS
            and CHI2[0] <= chi2 <= CHI2[1]
            and (worst <= ANY_STAR or case.plates < 30 or case.missing > 0)
        )
        short += not good
        print(
            f"{case.name}: {curves} of {case.plates * repeats} curves, median bias {100 * bias:+.2f} %, any star "
            f"{100 * worst:.1f} %, chi-square {chi2:.2f}{'' if good else '  SHORT'}"
        )
    print("falls short" if short else "all within bounds")
    return 1 if short else 0


if __name__ == "__main__":
    sys.exit(main())
