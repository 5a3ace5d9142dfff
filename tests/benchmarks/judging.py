"""How long do the statistics take, each by itself and all of them, at positions of demonstration coverage?

Simulated blocks of 174 positions in four channels of 121, 103, 73 and 73 frames in epochs over thirty years, 5 % of the
measurements missing. Processor time of `judge.judge` with each shipped statistic alone, less that with none, per
thousand light curves (of one channel, but of all four for a statistic over all channels); then of all together per
position. Period searches are left out. Verdict: 10,000 positions are judged in a minute of one core.

Run: python tests/benchmarks/judging.py [--positions 174] [--rounds 3]
"""

from __future__ import annotations

import argparse
import sys
import time
from collections.abc import Sequence
from dataclasses import replace

import numpy as np

from hindlight import Block, Channel, Statistic, host, judge
from hindlight.lightcurve import freeze
from hindlight.settings import Settings

FRAMES = {"a": 121, "b": 103, "c": 73, "d": 73}
YEARS_S = 30 * 31557600.0
GOAL_MS = 6.0


def block(label: str, n_frames: int, n_positions: int, seed: int) -> Block:
    """White noise in epochs of some ten frames within some hours."""
    rng = np.random.default_rng([seed, n_frames])
    epoch = np.sort(rng.uniform(0, YEARS_S, n_frames // 10 + 1))
    times = np.sort(rng.choice(epoch, n_frames) + rng.uniform(0, 3e4, n_frames))
    shape = (n_positions, n_frames)
    gaps = rng.random(shape) < 0.05
    err = rng.uniform(0.8, 1.2, shape)
    flux = 3.0 + err * rng.standard_normal(shape)
    t = np.broadcast_to(times, shape) + rng.uniform(0, 5, (n_positions, 1))
    matrices = [freeze(np.where(gaps, np.nan, m)) for m in (t, np.full(shape, 60.0), flux, err, flux, err)]
    names = tuple(f"position {k}" for k in range(n_positions))
    frame = freeze(np.arange(n_frames), np.int64)
    flags = freeze(np.zeros(shape), np.int64)
    return Block(names, Channel(label), frame, *matrices, flags, freeze(np.full(n_frames, np.nan)))


def seconds(blocks: dict[str, Block], statistics: Sequence[Statistic], rounds: int) -> float:
    """Processor time of judging, the least of some rounds; blocks are made anew each time, since they keep what is asked."""
    taken = []
    for _ in range(rounds):
        fresh = {label: replace(each) for label, each in blocks.items()}
        start = time.process_time()
        found = judge.judge(fresh, statistics)
        taken.append(time.process_time() - start)
        if found.faults:
            raise SystemExit(f"{found.faults[0]}")
    return min(taken)


def main() -> int:
    """Print the table; 0 when the goal is met."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--positions", type=int, default=174)
    parser.add_argument("--rounds", type=int, default=3)
    given = parser.parse_args()
    blocks = {label: block(label, n, given.positions, 1) for label, n in FRAMES.items()}
    shipped = host.load(host.spec_from(Settings(), [], [])).statistics
    bare = seconds(blocks, [], given.rounds)
    print(f"{'core alone':20} {1e6 * bare / given.positions / len(blocks):8.0f} ms per thousand light curves")
    for statistic in shipped:
        curves = given.positions * (1 if statistic.all_channels else len(blocks))
        taken = seconds(blocks, [statistic], given.rounds) - bare
        print(f"{statistic.name:20} {1e6 * taken / curves:8.0f}")
    each = 1e3 * seconds(blocks, shipped, given.rounds) / given.positions
    print(f"all together {each:.2f} ms per position, {60e3 / each:.0f} positions in a minute")
    if each > GOAL_MS:
        print(f"short: more than {GOAL_MS} ms")
    return 1 if each > GOAL_MS else 0


if __name__ == "__main__":
    sys.exit(main())
