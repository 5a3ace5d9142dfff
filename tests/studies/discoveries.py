"""False discoveries over many runs at the level of light curves: blank runs, and runs with true variables among blanks.

    python tests/studies/discoveries.py [--runs 300] [--bank 640000] [--noise heavy] [--seed 1]

Judged by `judge`, matched, ranked and corrected as in a run (`conclude.rank`, `conclude.p_values`), every shipped statistic,
period searches left out. Positions have 40 frames in two channels, at most two missing in each; noise is Student t(4) or
normal with errors that differ from frame to frame by 15 %.

A bank of blank positions is judged once, and dealt out to the runs in random order: 300 blank runs with 2,000 controls use each
position once at most, and are as independent as archives of their own. Runs with variables take more; when the bank is used
up it is shuffled and dealt again. Two runs then share a hundredth of their positions, and who is target and who control is
drawn anew, so that given the bank they are independent but for what was dealt with them. True variables are never used twice.

Verdict:
 1. of blank runs of 100 targets, with as many controls as the program says it needs, and with 512 and their tails, at most
    7.5 % have any candidate (q < 0.05);
 2. of runs of 400 targets, 20 of them true variables, again with as many controls as needed, the share of false ones among
    the candidates (none where there are none) is at most 0.06 on average, and the share of variables found at least 90 % of
    what the oracle finds; with 512 controls and their tails the first of these must hold.

The oracle has the same combination of statistics, ranked in a null so large that it is the true one: its p-value is exact. It
knows the truth, and takes the one threshold t at which the share of false ones is 0.05: the largest t with
380 t / (380 t + 20 power(t)) <= 0.05.

As a check on the study, the smallest p-value of the statistics taken for the p-value must give far too many. Exits non-zero
when short.
"""

from __future__ import annotations

import argparse
import sys
from collections.abc import Callable, Iterator
from dataclasses import dataclass

import numpy as np

from hindlight import calibrate, conclude, host, judge, ranking
from hindlight.lightcurve import Block, Channel, freeze
from hindlight.settings import Settings

LEVEL = Settings().ranking.level
PLUGINS = host.load(host.spec_from(Settings(), [], ["lomb_scargle"]))
COLUMNS = judge.full_columns(PLUGINS.statistics)
AT_ONCE = 500
N_FRAMES = 40
MOST_WITH_ANY, MOST_FALSE, LEAST_POWER = 0.075, 0.06, 0.9
FEW = 512  # controls of a field by default
ORACLE_NULL, ORACLE_TARGETS = 40_000, 2000
DAY = 86400.0

Signal = Callable[[np.random.Generator, np.ndarray], np.ndarray]  # generator and times to fluxes in errors


@dataclass(frozen=True)
class Frames:
    """When the frames of a channel are, and their errors."""

    label: str
    t_s: np.ndarray
    error: np.ndarray


def frames(seed: int, n_frames: int = N_FRAMES, labels: str = "ab") -> list[Frames]:
    """Eight frames in each of some epochs over twenty years, both channels at the same times."""
    rng = np.random.default_rng([seed, 1])
    epochs = np.sort(rng.uniform(0, 7300 * DAY, -(-n_frames // 8)))
    t = (epochs[:, None] + 900.0 * np.arange(8)).ravel()[:n_frames]
    return [Frames(label, t, np.exp(0.15 * rng.standard_normal(n_frames))) for label in labels]


def block(rng: np.random.Generator, one: Frames, signal: np.ndarray, noise: str) -> Block:
    """Light curves with these fluxes in errors, shape (n, n_frames)."""
    shape = signal.shape
    z = rng.standard_t(4, shape) / 2**0.5 if noise == "heavy" else rng.standard_normal(shape)
    missing = np.zeros(shape, bool)
    lost = rng.integers(0, 2 * shape[1], (len(signal), 2))  # half of them are beyond the last frame: none is lost
    for column in lost.T:
        rows = np.flatnonzero(column < shape[1])
        missing[rows, column[rows]] = True
    error = np.broadcast_to(one.error, shape)
    flux = error * (z + signal)
    t = np.broadcast_to(one.t_s, shape)
    matrices = [freeze(np.where(missing, np.nan, m)) for m in (t, np.full(shape, 60.0), flux, error, flux, error)]
    names = tuple(f"position {k}" for k in range(len(signal)))
    return Block(names, Channel(one.label), freeze(np.arange(shape[1]), np.int64), *matrices,
                 freeze(np.zeros(shape), np.int64), freeze(np.full(shape[1], np.nan)))  # fmt: skip


def judged(seen: list[Frames], signals: np.ndarray, noise: str, seed: list[int]) -> judge.Judgement:
    """What the statistics say of positions with these fluxes in both channels; only what ranking asks for is kept."""
    parts = []
    for start in range(0, len(signals), AT_ONCE):
        rng = np.random.default_rng([*seed, start])
        part = signals[start : start + AT_ONCE]
        found = judge.judge({one.label: block(rng, one, part, noise) for one in seen}, PLUGINS.statistics)
        if found.faults:
            raise SystemExit(f"a statistic failed: {found.faults[0]}")
        wanted = set(ranking.calibrated_keys(found, COLUMNS, np.arange(found.n), core=True))
        kept = {k: v for k, v in found.values.items() if k in wanted or k[1].startswith("core_")}
        parts.append(judge.Judgement(found.n, kept))
    return judge.joined(parts, [part.n for part in parts], COLUMNS)


def steps_up(rng: np.random.Generator, t: np.ndarray) -> np.ndarray:
    """On for part of the time."""
    return rng.uniform(0.5, 3.0) * (t > rng.choice(t[4:-4]))


def waves(rng: np.random.Generator, t: np.ndarray) -> np.ndarray:
    """A sinusoid of any period from an hour to ten years."""
    period = 10 ** rng.uniform(np.log10(3600.0), np.log10(3.15e8))
    return rng.uniform(0.7, 3.0) * np.sin(2 * np.pi * (t / period + rng.uniform()))


def flares(rng: np.random.Generator, t: np.ndarray) -> np.ndarray:
    """One to eight bright frames."""
    lit = rng.choice(len(t), rng.integers(1, 9), replace=False)
    return rng.uniform(4.0, 14.0) * np.isin(np.arange(len(t)), lit)


VARIABLES: tuple[Signal, ...] = (steps_up, waves, flares)


def variables(n: int, seen: list[Frames], noise: str, seed: int) -> judge.Judgement:
    """True variables of three kinds in turn, every one drawn anew."""
    rng = np.random.default_rng([seed, 3])
    signals = np.stack([VARIABLES[k % len(VARIABLES)](rng, seen[0].t_s) for k in range(n)])
    return judged(seen, signals, noise, [seed, 4])


def ranked(targets: list[judge.Judgement], controls: judge.Judgement) -> conclude.Field:
    """Targets of one field, in their order, ranked as in a run among controls that are in all their frames."""
    n = sum(part.n for part in targets)
    found = conclude.Field(0, np.arange(n), n + np.arange(controls.n), np.ones((n, controls.n), bool))
    found.judgement = judge.joined([*targets, controls], [*(part.n for part in targets), controls.n], COLUMNS)
    conclude.rank(found, PLUGINS, Settings())
    return found


def q_values(found: conclude.Field) -> np.ndarray:
    """The false-discovery rates of the targets."""
    return conclude.p_values(found.ranked.ranks, Settings()).q


def smallest_q(found: conclude.Field) -> np.ndarray:
    """What they would be if the smallest p-value of a target's statistics were taken for its p-value."""
    matrix = ranking.oriented_matrix(found.judgement, found.ranked.keys, COLUMNS, found.controls)
    n = len(found.controls)
    null = np.sort(matrix[found.controls], axis=0)
    rows = matrix[found.targets]
    above = np.stack([n - np.searchsorted(null[:, k], rows[:, k], side="left") for k in range(rows.shape[1])], axis=1)
    return calibrate.false_discovery((above.min(axis=1) + 1) / (n + 1))


def dealt(rng: np.random.Generator, n: int, each: int) -> Iterator[np.ndarray]:
    """Hands of `each` of n positions in random order, none twice before all but a rest have been used."""
    while True:
        order = rng.permutation(n)
        yield from order[: n // each * each].reshape(-1, each)


def blank_runs(bank: judge.Judgement, runs: int, n_targets: int, n_controls: int, seed: int) -> np.ndarray:
    """Whether runs without any source have a candidate, and by the smallest p-value; shape (runs, 2)."""
    hands = dealt(np.random.default_rng([seed, 5]), bank.n, n_targets + n_controls)
    found = np.empty((runs, 2), bool)
    for run, rows in zip(range(runs), hands, strict=False):
        field = ranked([judge.taken(bank, rows[:n_targets])], judge.taken(bank, rows[n_targets:]))
        found[run] = (q_values(field) < LEVEL).any(), (smallest_q(field) < LEVEL).any()
    return found


def mixed_runs(
    bank: judge.Judgement, sources: judge.Judgement, runs: int, n_targets: int, n_true: int, n_controls: int, seed: int
) -> np.ndarray:
    """How many blanks and how many variables are candidates in each run, shape (runs, 2); no variable is used twice."""
    rng = np.random.default_rng([seed, 6])
    order = rng.permutation(sources.n)[: runs * n_true].reshape(runs, n_true)
    n_blank = n_targets - n_true
    found = np.empty((runs, 2), int)
    for run, rows in zip(range(runs), dealt(rng, bank.n, n_blank + n_controls), strict=False):
        targets = [judge.taken(sources, order[run]), judge.taken(bank, rows[:n_blank])]
        candidate = q_values(ranked(targets, judge.taken(bank, rows[n_blank:]))) < LEVEL
        found[run] = candidate[n_true:].sum(), candidate[:n_true].sum()
    return found


def oracle(bank: judge.Judgement, sources: judge.Judgement, n_targets: int, n_true: int) -> tuple[float, float]:
    """The threshold on the exact p-value at which the share of false ones is the level, and the share of variables below."""
    controls = judge.taken(bank, np.arange(min(bank.n, ORACLE_NULL)))
    some = judge.taken(sources, np.arange(min(sources.n, ORACLE_TARGETS)))
    p = np.sort([rank.p_value for rank in ranked([some], controls).ranked.ranks])
    power = np.arange(1, len(p) + 1) / len(p)
    false = (n_targets - n_true) * p
    fine = np.flatnonzero(false <= LEVEL * (false + n_true * power))
    return (float(p[fine[-1]]), float(power[fine[-1]])) if fine.size else (0.0, 0.0)


def blank_verdict(found: np.ndarray, label: str) -> bool:
    """Print a line; whether few enough runs have a candidate."""
    share, smallest = found.mean(axis=0)
    fine = bool(share <= MOST_WITH_ANY)
    print(f"{label}: {found[:, 0].sum()} of {len(found)} blank runs have a candidate ({100 * share:.1f} %, at most "
          f"{100 * MOST_WITH_ANY:g} %): {'holds' if fine else 'FALLS SHORT'}; by the smallest p-value "
          f"{100 * smallest:.0f} % would", flush=True)  # fmt: skip
    if smallest <= MOST_WITH_ANY:
        print("   that should have failed")
    return fine and bool(smallest > MOST_WITH_ANY)


def mixed_verdict(found: np.ndarray, n_true: int, best: tuple[float, float], label: str, powerful: bool = True) -> bool:
    """Print a line; whether candidates are true often enough, and, where `powerful`, variables found often enough."""
    share = found[:, 0] / np.maximum(1, found.sum(axis=1))
    power, (t, most) = float(found[:, 1].mean()) / n_true, best
    wanted = f" (at least {LEAST_POWER:g})" if powerful else ""
    fine = bool(share.mean() <= MOST_FALSE and (power >= LEAST_POWER * most or not powerful))
    print(f"{label}, {len(found)} runs: false-discovery rate {share.mean():.4f} +- {share.std() / len(found) ** 0.5:.4f} "
          f"(at most {MOST_FALSE:g}); power {power:.3f}, the oracle's (p <= {t:.2g}) {most:.3f}, ratio {power / most:.3f}"
          f"{wanted}: {'holds' if fine else 'FALLS SHORT'}", flush=True)  # fmt: skip
    return fine


def main() -> int:
    """Run the study; 0 when every line of the verdict holds."""
    parser = argparse.ArgumentParser()
    parser.add_argument("--runs", type=int, default=300)
    parser.add_argument("--bank", type=int, default=640_000)
    parser.add_argument("--noise", choices=("heavy", "normal"), default="heavy")
    parser.add_argument("--seed", type=int, default=1)
    given = parser.parse_args()
    seen = frames(given.seed)
    bank = judged(seen, np.zeros((given.bank, N_FRAMES)), given.noise, [given.seed, 2])
    print(f"{bank.n} blank positions judged", flush=True)
    good = True
    for n_controls in (calibrate.controls_needed(100, LEVEL), FEW):
        found = blank_runs(bank, given.runs, 100, n_controls, given.seed)
        good &= blank_verdict(found, f"100 targets, {n_controls} controls")
    sources = variables(20 * given.runs, seen, given.noise, given.seed)
    best = oracle(bank, sources, 400, 20)
    for n_controls in (calibrate.controls_needed(400, LEVEL), FEW):
        found = mixed_runs(bank, sources, given.runs, 400, 20, n_controls, given.seed)
        label = f"400 targets, 20 of them variables, {n_controls} controls"
        good &= mixed_verdict(found, 20, best, label, powerful=n_controls != FEW)
    print("verdict:", "holds" if good else "FALLS SHORT")
    return 0 if good else 1


if __name__ == "__main__":
    sys.exit(main())
