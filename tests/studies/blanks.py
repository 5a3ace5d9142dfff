"""Blank positions in heavy-tailed, beam-correlated noise with one pulser and one variable among them.

    python tests/studies/blanks.py [--blanks 400] [--pool 8400] [--frames 40] [--size 640] [--seeds 1 2 3]

For each seed an archive is simulated and mined through the command line. Verdict: the pulser and the 30 % variable at
S/N 30 have q < 0.05, at most 1 % of the blanks do, and for every calibrated column the blanks agree with the pool of
controls by a two-sample Kolmogorov-Smirnov test, Holm-corrected p > 0.01. Exits non-zero when short.
"""

from __future__ import annotations

import argparse
import sys
import tempfile
from pathlib import Path

import numpy as np
import pyarrow.parquet as pq
from astropy.table import Table
from scipy import stats

sys.path.insert(0, str(Path(__file__).parents[1]))
import skies
from hindlight import cli

LEVEL = 0.05


def holm(p_values: np.ndarray) -> np.ndarray:
    """Holm's step-down adjusted p-values (Holm 1979, Scand. J. Stat. 6, 65)."""
    order = np.argsort(p_values)
    steps = p_values[order] * (len(p_values) - np.arange(len(p_values)))
    adjusted = np.empty(len(p_values))
    adjusted[order] = np.minimum(1.0, np.maximum.accumulate(steps))
    return adjusted


def planted(size: int, pixel: float) -> list[skies.Source]:
    """A pulser bright in one frame of eight, and a sinusoid of 30 % about S/N 30, clear of the lattice of blanks."""
    edge = 0.4 * size * pixel
    pulser = skies.Source("pulser", -edge, edge, lambda k, _day, _s: 12.0 if k % 8 == 3 else 0.0)
    wave = skies.Source("wave", edge, -edge, lambda _k, day, _s: 30.0 * (1 + 0.3 * np.sin(2 * np.pi * day / 17.3)))
    return [pulser, wave]


def run_once(
    folder: Path, seed: int, blanks: int, pool: int, frames: int, size: int
) -> tuple[Table, dict[str, np.ndarray]]:
    """Simulate, mine, and return the candidate table and the controls' columns."""
    sky = skies.Sky(n_frames=frames, size=size, noise="heavy")
    sources = planted(size, sky.pixel_arcsec)
    places = skies.lattice(blanks, 0.65 * size * sky.pixel_arcsec / np.ceil(blanks**0.5))
    skies.write_sky(folder / "frames", sky, sources, seed)
    (folder / "targets.csv").write_text(skies.target_text([*sources, *places], sky), encoding="utf-8")
    (folder / "s.toml").write_text(f"[controls]\nper_field = {pool}\nfield_size_deg = 50.0\n", encoding="utf-8")
    arguments = ["mine", folder / "frames", "--targets", folder / "targets.csv", "--out", folder / "run",
                 "--settings", folder / "s.toml", "--workers", 2, "-q"]  # fmt: skip
    status = cli.run_command([str(a) for a in arguments])
    if status:
        raise SystemExit(f"the run ended with status {status}")
    controls = pq.read_table(folder / "run" / "controls.parquet").to_pydict()
    return Table.read(folder / "run" / "candidates.ecsv"), {k: np.array(v, float) for k, v in controls.items()}


def uniformity(table: Table, controls: dict[str, np.ndarray]) -> dict[str, float]:
    """Two-sample p-value of each calibrated column, blanks against controls; NaN (not searched) left out of both."""
    blank = np.array([str(name).startswith("blank") for name in table["name"]])
    found = {}
    for name in controls:
        if name in ("id", "field", "copy", "p_value"):
            continue
        a, b = np.asarray(table[name][blank], float), controls[name]
        a, b = a[np.isfinite(a)], b[np.isfinite(b)]
        if min(a.size, b.size) > 20:
            found[name] = float(stats.ks_2samp(a, b).pvalue)
    return found


def main() -> int:
    """Run the study; 0 when every line of the verdict holds."""
    parser = argparse.ArgumentParser()
    parser.add_argument("--blanks", type=int, default=400)
    parser.add_argument("--pool", type=int, default=8400)
    parser.add_argument("--frames", type=int, default=40)
    parser.add_argument("--size", type=int, default=640)
    parser.add_argument("--seeds", type=int, nargs="+", default=[1, 2, 3])
    given = parser.parse_args()
    good = True
    for seed in given.seeds:
        with tempfile.TemporaryDirectory() as folder:
            table, controls = run_once(Path(folder), seed, given.blanks, given.pool, given.frames, given.size)
        q = {str(row["name"]): float(row["q_value"]) for row in table}
        false = sum(value < LEVEL for name, value in q.items() if name.startswith("blank"))
        ks = uniformity(table, controls)
        adjusted = dict(zip(ks, holm(np.array(list(ks.values()))), strict=True))
        worst = min(adjusted, key=adjusted.get)
        ok = q["pulser"] < LEVEL and q["wave"] < LEVEL and false <= 0.01 * given.blanks and adjusted[worst] > 0.01
        good &= ok
        standing = {str(row["name"]): str(row["standing"]) for row in table}
        print(
            f"seed {seed}: controls {len(controls['id'])}, q pulser {q['pulser']:.2g} ({standing['pulser']}), "
            f"q wave {q['wave']:.2g} ({standing['wave']}), blanks below {LEVEL}: {false} of {given.blanks}, "
            f"smallest Holm p {adjusted[worst]:.3f} ({worst}): {'holds' if ok else 'FALLS SHORT'}",
            flush=True,
        )
        print("   two-sample p: " + ", ".join(f"{k} {v:.3f}" for k, v in sorted(ks.items())))
    print("verdict:", "holds" if good else "FALLS SHORT")
    return 0 if good else 1


if __name__ == "__main__":
    sys.exit(main())
