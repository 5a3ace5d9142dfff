"""Blank targets in six kinds of archive: their p-values must be those of chance, also where the sky is not the same all over.

    python tests/studies/blank_kinds.py [--seeds 1 2 3 4] [--targets 100] [--frames 24] [--size 420] [--kinds ...]

Kinds: white noise, noise with the beam's correlation, heavy tails, gains that drift by 30 %, ripples across half of the image
that change from frame to frame, and diffuse emission with confused faint sources in a quarter of it. In the last two all
targets lie where the structure is. Verdict for each kind: the numbers of combined p-values (before any tail) up to 0.05 and
0.2, and from 0.8 on, over all seeds, lie within the central 99.5 % of sums of beta-binomial draws (the targets of a run share
their controls); the smallest may be fewer. With controls from anywhere the last two kinds must fail. Exits non-zero when short.
"""

from __future__ import annotations

import argparse
import sys
import tempfile
from collections.abc import Callable
from pathlib import Path

import numpy as np
from astropy.table import Table
from scipy import ndimage

sys.path.insert(0, str(Path(__file__).parents[1]))
import skies
from hindlight import cli

KINDS = ("white", "beam", "heavy", "drift", "ripple", "diffuse")
UNEVEN = ("ripple", "diffuse")
ANYWHERE = "alike = 1e9\n"
PARTS = ((0.0, 0.05), (0.0, 0.2), (0.8, 1.0))
DRAWS = 20_000


def backdrop(kind: str, size: int, frames: int, seed: int) -> Callable[[int], np.ndarray] | None:
    """What lies behind the noise: ripples in the western half, or emission and faint sources in a corner."""
    rng = np.random.default_rng([seed, 11])
    x, y = np.meshgrid(np.arange(size), np.arange(size))
    if kind == "ripple":
        phase = rng.uniform(0, 2 * np.pi, frames)
        envelope = 4.0 * np.clip((x - size / 2) / (0.1 * size), 0.0, 1.0)
        return lambda number: envelope * np.sin(2 * np.pi * (x + 0.4 * y) / 21.0 + phase[number])
    if kind == "diffuse":
        clouds = ndimage.gaussian_filter(rng.standard_normal((size, size)), 7.0, mode="wrap")
        points = ndimage.gaussian_filter((rng.random((size, size)) < 0.01) * rng.exponential(8.0, (size, size)), 1.3)
        sky = (6.0 * clouds / clouds.std() + 3.0 * points / points.std()) * ((x > size / 2) & (y > size / 2))
        wander = 0.05 * rng.standard_normal(frames)  # the emission is not imaged equally well each time
        return lambda number: (1.0 + wander[number]) * sky
    return None


def archive(folder: Path, kind: str, seed: int, targets: int, frames: int, size: int) -> None:
    """Write an archive of a kind, and its target list."""
    noise = kind if kind in ("white", "beam", "heavy") else "beam"
    sky = skies.Sky(n_frames=frames, size=size, noise=noise, backdrop=backdrop(kind, size, frames, seed),
                    gain_scatter=0.3 if kind == "drift" else 0.0)  # fmt: skip
    spacing = 7.5 * sky.pixel_arcsec * 2
    places = skies.lattice(4 * targets, spacing)
    if kind in UNEVEN:  # west is left: x grows to the west of the middle where CDELT1 < 0
        places = [p for p in places if p.east < -3 * spacing and (kind == "ripple" or p.north > 3 * spacing)]
    else:
        places = [p for k, p in enumerate(places) if k % 4 == 1]
    skies.write_sky(folder / "frames", sky, [], seed)
    (folder / "targets.csv").write_text(skies.target_text(places[:targets], sky), encoding="utf-8")


def p_values(folder: Path, settings: str) -> tuple[np.ndarray, np.ndarray]:
    """The empirical p-values of a run, and the number of controls behind each."""
    text = f"[controls]\nper_field = 600\nfield_size_deg = 50.0\nfewest_alike = 40\nbright_snr = 50.0\n{settings}"
    (folder / "s.toml").write_text(text, encoding="utf-8")
    with tempfile.TemporaryDirectory(dir=folder) as out:
        arguments = ["mine", folder / "frames", "--targets", folder / "targets.csv", "--out", Path(out) / "run",
                     "--settings", folder / "s.toml", "-q", "--without", "lomb_scargle"]  # fmt: skip
        status = cli.run_command([str(a) for a in arguments])
        if status:
            raise SystemExit(f"the run ended with status {status}")
        table = Table.read(Path(out) / "run" / "candidates.ecsv")
    return np.asarray(table["p_empirical"], float), np.asarray(table["n_controls"], int)


def holds(runs: list[tuple[np.ndarray, np.ndarray]], label: str, say: bool = True) -> bool:
    """Whether the p-values of these runs are those of chance."""
    rng = np.random.default_rng(1)
    good, said = True, []
    for low, high in PARTS:
        seen = sum(int(((p >= low) & (p <= high)).sum()) for p, _ in runs)
        draws = np.zeros(DRAWS)
        for p, n in runs:
            typical = int(np.median(n))
            first, last = np.ceil(low * (typical + 1)), np.floor(high * (typical + 1))
            ranks = max(1, int(last - max(first, 1) + 1))
            draws += rng.binomial(len(p), rng.beta(ranks, max(1, typical + 1 - ranks), DRAWS))
        least, most = np.quantile(draws, (0.0025, 0.9975))
        fine = seen <= most and (seen >= least or high == PARTS[0][1])
        good &= bool(fine)
        said.append(f"{seen} in {low:g} to {high:g} ({least:.0f} to {most:.0f}){'' if fine else ' FALLS SHORT'}")
    if say:
        n = sum(len(p) for p, _ in runs)
        print(f"{label}: of {n} p-values {', '.join(said)}; {int(np.median(runs[0][1]))} controls each", flush=True)
    return good


def main() -> int:
    """Run the study; 0 when every line of the verdict holds."""
    parser = argparse.ArgumentParser()
    parser.add_argument("--seeds", type=int, nargs="+", default=[1, 2, 3, 4])
    parser.add_argument("--targets", type=int, default=100)
    parser.add_argument("--frames", type=int, default=24)
    parser.add_argument("--size", type=int, default=420)
    parser.add_argument("--kinds", nargs="+", default=list(KINDS), choices=KINDS)
    given = parser.parse_args()
    good = True
    for kind in given.kinds:
        alike, anywhere = [], []
        for seed in given.seeds:
            with tempfile.TemporaryDirectory() as name:
                archive(Path(name), kind, seed, given.targets, given.frames, given.size)
                alike.append(p_values(Path(name), ""))
                if kind in UNEVEN:
                    anywhere.append(p_values(Path(name), ANYWHERE))
        good &= holds(alike, kind)
        if kind in UNEVEN and holds(anywhere, f"{kind}, controls from anywhere"):
            print("   that should have failed")
            good = False
    print("verdict:", "holds" if good else "FALLS SHORT")
    return 0 if good else 1


if __name__ == "__main__":
    sys.exit(main())
