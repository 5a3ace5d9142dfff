"""Copies planted among frames that only look like copies: are all found, and nothing else?

    python tests/studies/duplicates.py [--frames 10000] [--plants 200] [--seed 1]

The frames are small and innocent: nights of one field, consecutive exposures, simultaneous bands, frequencies, Stokes
planes, pointings and twin cameras, frames without a clock, blanks, deep images with their snapshots. Copies of each
sort are planted among them. Verdict: none missed, none false, each snapshot related to its deep image, and the sweep
over the frame table takes less than two seconds. Exits non-zero when short.
"""

from __future__ import annotations

import argparse
import sys
import tempfile
import time
from pathlib import Path

sys.path.insert(0, str(Path(__file__).parents[1]))
import copies
from hindlight import duplicates

SWEEP_S = 2.0


def main() -> int:
    """Run the study and print its verdict."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--frames", type=int, default=10000)
    parser.add_argument("--plants", type=int, default=200)
    parser.add_argument("--seed", type=int, default=1)
    given = parser.parse_args()
    with tempfile.TemporaryDirectory() as folder:
        top = Path(folder) / "archive"
        population = copies.populate(top, given.frames, given.plants, given.seed)
        began = time.perf_counter()
        found, parts, frames = copies.found(top)
        took = time.perf_counter() - began
    frames["batch"][:] = frames["duplicate_of"][:] = -1
    began = time.perf_counter()
    pairs = duplicates.candidates(frames)
    duplicates.related(frames)
    sweep = time.perf_counter() - began
    missed, false = population.missed(found), population.false(found)
    print(f"{len(frames['id'])} frames, {given.plants} of them planted; headers and pixels took {took:.1f} s")
    print(f"possible pairs {len(pairs)}, found in the frame table in {sweep:.2f} s (at most {SWEEP_S:g} s)")
    print(f"missed {len(missed)}, false {len(false)}; {len(parts)} of {population.n_deep_parts} snapshots related")
    for line in [*missed, *false][:20]:
        print(f"   {line}")
    good = not missed and not false and len(parts) == population.n_deep_parts and sweep < SWEEP_S
    print("verdict:", "holds" if good else "FALLS SHORT")
    return 0 if good else 1


if __name__ == "__main__":
    sys.exit(main())
