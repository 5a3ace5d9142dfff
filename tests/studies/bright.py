"""Steady sources of every brightness, and one variable, in archives whose calibration is not perfect.

    python tests/studies/bright.py [--seeds 1 2 3] [--targets 200] [--frames 30] [--size 1100]

Each archive has steady targets from S/N 5 to 500 per frame, a target of S/N 100 that varies by 30 %, and 40 sources that
may serve as comparisons. Frames have gain errors of 5 %; in the archives called wild each source has beyond those an error
of its own in every frame, of 3 % (Student t(3)). In those called listed every source is a target, so that they must be
comparisons of each other, and gain errors are 15 %. Verdict: in each of four ranges of brightness the number of steady
targets with p <= 0.05, over all seeds, lies within the central 99 % of what exchangeable targets and residual series give
(beta-binomial), none has q < 0.05 in more than one archive in ten, and in even and listed archives the variable has q <
0.05. With controls of blank sky alone the wild archives must fail, and the listed ones without any comparison. Exits non-
zero when short.
"""

from __future__ import annotations

import argparse
import sys
import tempfile
from dataclasses import dataclass
from itertools import pairwise
from pathlib import Path

import numpy as np
from astropy.table import Table
from scipy import stats

sys.path.insert(0, str(Path(__file__).parents[1]))
import skies
from hindlight import cli

LEVEL = 0.05
EDGES = (5.0, 20.0, 60.0, 200.0, 501.0)
COMPARISONS = 40
PSF_NOISE = 4.5  # flux that has S/N 1 under a Gaussian of 3 pixels in white noise of 1, to a few per cent


@dataclass(frozen=True)
class Archive:
    """What a run made of one archive: p and q of its steady targets by S/N, and q of the variable."""

    snr: np.ndarray
    p: np.ndarray
    q: np.ndarray
    variable_q: float
    nulls: frozenset[str]


KINDS = ("even", "wild", "listed")
ALONE = {
    "even": "bright_target_snr = 1e9\n",
    "wild": "bright_target_snr = 1e9\n",
    "listed": "[comparisons]\nwanted = 0\n",
}


def simulated(folder: Path, seed: int, targets: int, frames: int, size: int, kind: str = "even") -> np.ndarray:
    """Write an archive and its target list; the S/N of its steady targets."""
    wild, others = kind == "wild", 0 if kind == "listed" else COMPARISONS
    rng = np.random.default_rng([seed, KINDS.index(kind)])
    snr = np.geomspace(EDGES[0], EDGES[-1] - 1.0, targets)

    def source(name: str, place: skies.Source, brightness: float, varies: float = 0.0) -> skies.Source:
        own = 0.03 * rng.standard_t(3, frames) / 3**0.5 if wild else np.zeros(frames)
        series = PSF_NOISE * brightness * (1 + own) * (1 + varies * 2**0.5 * np.sin(2.1 * np.arange(frames)))
        return skies.Source(name, place.east, place.north, lambda frame, _day, _stokes: float(series[frame]))

    sky = skies.Sky(n_frames=frames, size=size, noise="white", unit="adu",
                    gain_scatter=0.15 if kind == "listed" else 0.05)  # fmt: skip
    places = skies.lattice(targets + 1 + others, 13 * sky.fwhm_pixels * sky.pixel_arcsec)
    order = rng.permutation(len(places))
    listed = [source(f"t{k}", places[order[k]], snr[k]) for k in range(targets)]
    listed.append(source("variable", places[order[targets]], 100.0, 0.3))
    rest = [source(f"c{k}", places[order[targets + 1 + k]], float(rng.uniform(60, 300))) for k in range(others)]
    skies.write_sky(folder / "frames", sky, [*listed, *rest], seed)
    (folder / "targets.csv").write_text(skies.target_text(listed, sky), encoding="utf-8")
    return snr


def mined(folder: Path, name: str, snr: np.ndarray, settings: str) -> Archive:
    """Mine the archive and read what it says."""
    text = f"[controls]\nper_field = 200\nfield_size_deg = 50.0\n{settings}"
    (folder / f"{name}.toml").write_text(text, encoding="utf-8")
    arguments = ["mine", folder / "frames", "--targets", folder / "targets.csv", "--out", folder / name,
                 "--settings", folder / f"{name}.toml", "-q", "--without", "lomb_scargle"]  # fmt: skip
    status = cli.run_command([str(a) for a in arguments])
    if status:
        raise SystemExit(f"the run ended with status {status}")
    table = Table.read(folder / name / "candidates.ecsv")
    row = {str(target): at for at, target in enumerate(table["name"])}
    steady = [row[f"t{k}"] for k in range(len(snr))]
    p, q = np.asarray(table["p_empirical"], float), np.asarray(table["q_value"], float)
    return Archive(snr, p[steady], q[steady], float(q[row["variable"]]), frozenset(str(n)[:24] for n in table["null"]))


def bounds(n: int) -> tuple[int, int]:
    """The central 99 % of how many of n targets have p <= LEVEL, ranked with COMPARISONS shared series."""
    rank = int(np.floor(LEVEL * (COMPARISONS + 1)))
    low, high = stats.betabinom(n, rank, COMPARISONS + 1 - rank).interval(0.99)
    return int(low), int(high)


def holds(archives: list[Archive], say: bool = True) -> bool:
    """Whether false alarms hold at every brightness."""
    snr, p, q = (np.concatenate([getattr(a, name) for a in archives]) for name in ("snr", "p", "q"))
    good = True
    for low, high in pairwise(EDGES):
        mine = (snr >= low) & (snr < high)
        below, limits = int((p[mine] <= LEVEL).sum()), bounds(int(mine.sum()))
        fine = below <= limits[1]
        good &= fine
        if say:
            print(
                f"   S/N {low:g} to {high:g}: {below} of {mine.sum()} with p <= {LEVEL} (99 %: up to {limits[1]}), "
                f"{int((q[mine] < LEVEL).sum())} with q < {LEVEL}: {'holds' if fine else 'FALLS SHORT'}",
                flush=True,
            )
    false = sum(bool((a.q < LEVEL).any()) for a in archives)
    return good and false <= max(1, len(archives) // 10)


def main() -> int:
    """Run the study; 0 when every line of the verdict holds."""
    parser = argparse.ArgumentParser()
    parser.add_argument("--seeds", type=int, nargs="+", default=[1, 2, 3])
    parser.add_argument("--targets", type=int, default=200)
    parser.add_argument("--frames", type=int, default=30)
    parser.add_argument("--size", type=int, default=1100)
    given = parser.parse_args()
    good = True
    for kind in KINDS:
        fitting, alone = [], []
        for seed in given.seeds:
            with tempfile.TemporaryDirectory() as name:
                folder = Path(name)
                snr = simulated(folder, seed, given.targets, given.frames, given.size, kind)
                fitting.append(mined(folder, "fitting", snr, ""))
                alone.append(mined(folder, "alone", snr, ALONE[kind]))
        print(f"{kind} archives, {len(given.seeds)} of {given.targets} targets:")
        good &= holds(fitting) and (kind == "wild" or all(a.variable_q < LEVEL for a in fitting))
        print("   variables: q " + ", ".join(f"{a.variable_q:.3g}" for a in fitting))
        print("   without comparisons:" if kind == "listed" else "   with blank sky alone:")
        good &= not holds(alone) or kind == "even"
    print("verdict:", "holds" if good else "FALLS SHORT")
    return 0 if good else 1


if __name__ == "__main__":
    sys.exit(main())
