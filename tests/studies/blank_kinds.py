"""Blank targets in six kinds of archive: their p-values must be those of chance, also where the sky is not the same all over.

    python tests/studies/blank_kinds.py [--seeds 1 2 3 4] [--targets 100] [--frames 24] [--size 420] [--kinds ...]

Kinds: white noise, noise with the beam's correlation, heavy tails, gains that drift by 30 %, ripples across half of the image
that change from frame to frame, and diffuse emission with confused faint sources in a quarter of it. In the last two all
targets lie where the structure is. Frames come in nights of four. Verdict:
 1. for each kind the numbers of combined p-values (before any tail) up to 0.05 and 0.2, and from 0.8 on, over all seeds, lie
    within the central 99.5 % of sums of beta-binomial draws (the targets of a run share their controls); the smallest may be
    fewer;
 2. for each kind, every column that is ranked, and the combined p-value: all targets against controls by a two-sample
    Kolmogorov-Smirnov test, Holm-corrected over all cells, p > 0.01. For each target three of the controls that serve it are
    drawn, none twice in a run, so that both samples are spread alike over archive and depth; a drawn control's combined
    p-value is that among the controls that would serve it, were it a target. Where most values are equal the test asks only
    whether targets are more extreme;
 3. with controls from anywhere the last two kinds must fail.
Exits non-zero when short.
"""

from __future__ import annotations

import argparse
import sys
import tempfile
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from astropy.table import Table
from scipy import ndimage, stats

sys.path.insert(0, str(Path(__file__).parents[1]))
sys.path.insert(1, str(Path(__file__).parent))
from blanks import holm

import skies
from hindlight import cli, conclude, host, judge, outcome, ranking
from hindlight import settings as settings_module
from hindlight.lifted import COPY
from hindlight.settings import Settings

KINDS = ("white", "beam", "heavy", "drift", "ripple", "diffuse")
UNEVEN = ("ripple", "diffuse")
ANYWHERE = "alike = 1e9\nmost_unlike = 1e9\n"
PARTS = ((0.0, 0.05), (0.0, 0.2), (0.8, 1.0))
DRAWS = 20_000
EACH = 3  # controls drawn for each target
LEAST_P = 0.01
COMBINED = "combined p"
PLUGINS = host.load(host.spec_from(Settings(), [], []))
COLUMNS = judge.full_columns([*PLUGINS.statistics, *PLUGINS.period_searches])


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
    sky = skies.Sky(n_frames=frames, size=size, noise=noise, per_night=4, backdrop=backdrop(kind, size, frames, seed),
                    gain_scatter=0.3 if kind == "drift" else 0.0)  # fmt: skip
    spacing = 7.5 * sky.pixel_arcsec * 2
    places = skies.lattice(4 * targets, spacing)
    if kind in UNEVEN:  # west is left: x grows to the west of the middle where CDELT1 < 0
        places = [p for p in places if p.east < -3 * spacing and (kind == "ripple" or p.north > 3 * spacing)]
    else:
        places = [p for k, p in enumerate(places) if k % 4 == 1]
    skies.write_sky(folder / "frames", sky, [], seed)
    (folder / "targets.csv").write_text(skies.target_text(places[:targets], sky), encoding="utf-8")


@dataclass(frozen=True, eq=False)
class Run:
    """Of a run the targets' p-values before any tail, the controls behind each, and every column of targets and controls.

    `columns` maps names to values of targets and of controls drawn for them, larger more unusual.
    """

    p: np.ndarray
    n_controls: np.ndarray
    columns: dict[str, tuple[np.ndarray, np.ndarray]]


@contextmanager
def watched() -> Iterator[list[conclude.Field]]:
    """The ranked fields of a run while it is done: what its table of controls is made from."""
    fields: list[conclude.Field] = []
    made = outcome.control_columns

    def watching(found: Sequence[conclude.Field], *others: Any) -> Any:
        fields[:] = found
        return made(found, *others)

    outcome.control_columns = watching
    try:
        yield fields
    finally:
        outcome.control_columns = made


def mined(folder: Path, settings: str, periods: bool = True) -> Run:
    """A run of an archive, all work in this process."""
    text = (
        "[controls]\nper_field = 600\nmost_per_field = 600\nfield_size_deg = 50.0\nfewest_alike = 40\nbright_snr = 50.0\n"
        + settings
    )
    (folder / "s.toml").write_text(text, encoding="utf-8")
    with tempfile.TemporaryDirectory(dir=folder) as out, watched() as fields:
        arguments = ["mine", folder / "frames", "--targets", folder / "targets.csv", "--out", Path(out) / "run",
                     "--settings", folder / "s.toml", "-q", "--workers", "1"]  # fmt: skip
        arguments += [] if periods else ["--without", "lomb_scargle"]
        status = cli.run_command([str(a) for a in arguments])
        if status:
            raise SystemExit(f"the run ended with status {status}")
        table = Table.read(Path(out) / "run" / "candidates.ecsv")
        chosen = settings_module.read_settings(Path(out) / "run" / "settings.toml")
    rng = np.random.default_rng(1)
    parts = [samples(found, chosen, rng) for found in fields if len(found.targets)]
    names = {name for part in parts for name in part}
    return Run(
        np.asarray(table["p_empirical"], float), np.asarray(table["n_controls"], int),
        {name: tuple(np.concatenate([part[name][k] for part in parts if name in part]) for k in (0, 1)) for name in names},
    )  # fmt: skip


def samples(
    found: conclude.Field, chosen: Settings, rng: np.random.Generator
) -> dict[str, tuple[np.ndarray, np.ndarray]]:
    """Every ranked column of a field's targets and of controls drawn for them; and their combined p-values, negative."""
    targets, controls = found.rows(found.targets), found.rows(found.controls)
    serving, _ = ranking.matched(found.judgement, targets, controls, found.serving, chosen.controls)
    drawn = np.array(draw(serving, found.controls % COPY, rng), int)
    keys = found.ranked.keys
    matrix = ranking.oriented_matrix(found.judgement, keys, COLUMNS, controls)
    own = {f"{full}": (matrix[targets, k], matrix[controls[drawn], k]) for k, (_, full) in enumerate(keys)}
    others = found.controls % COPY
    apart = others[drawn][:, None] != others[None, :]
    would, _ = ranking.matched(found.judgement, controls[drawn], controls, apart, chosen.controls)
    ranks = ranking.rank_field(found.judgement, COLUMNS, controls[drawn], controls, would, found.group_size).ranks
    p = [np.array([-rank.p_value for rank in some]) for some in (found.ranked.ranks, ranks)]
    return own | {COMBINED: (p[0], p[1])}


def draw(serving: np.ndarray, owner: np.ndarray, rng: np.random.Generator) -> list[int]:
    """For each target `EACH` of the controls that serve it, none drawn before nor a copy of one that was."""
    left, chosen = np.ones(len(owner), bool), []
    for row in rng.permutation(np.repeat(np.arange(len(serving)), EACH)):
        can = np.flatnonzero(serving[row] & left)
        if can.size:
            chosen.append(int(rng.choice(can)))
            left &= owner != owner[chosen[-1]]
    return chosen


def likeness(runs: list[Run]) -> dict[str, float]:
    """The p-value of each column over all runs: targets against controls."""
    found = {}
    for name in sorted({name for run in runs for name in run.columns}):
        ours, theirs = (np.concatenate([run.columns[name][k] for run in runs if name in run.columns]) for k in (0, 1))
        many_equal = name != COMBINED and np.unique(theirs).size < theirs.size / 2
        asked = "less" if many_equal else "two-sided"
        found[name] = float(stats.ks_2samp(ours, theirs, alternative=asked, method="asymp").pvalue)
    return found


def holds(runs: list[Run], label: str, say: bool = True) -> bool:
    """Whether the p-values of these runs are those of chance."""
    rng = np.random.default_rng(1)
    good, said = True, []
    for low, high in PARTS:
        seen = sum(int(((run.p >= low) & (run.p <= high)).sum()) for run in runs)
        draws = np.zeros(DRAWS)
        for run in runs:
            typical = int(np.median(run.n_controls))
            first, last = np.ceil(low * (typical + 1)), np.floor(high * (typical + 1))
            ranks = max(1, int(last - max(first, 1) + 1))
            draws += rng.binomial(len(run.p), rng.beta(ranks, max(1, typical + 1 - ranks), DRAWS))
        least, most = np.quantile(draws, (0.0025, 0.9975))
        fine = seen <= most and (seen >= least or high == PARTS[0][1])
        good &= bool(fine)
        said.append(f"{seen} in {low:g} to {high:g} ({least:.0f} to {most:.0f}){'' if fine else ' FALLS SHORT'}")
    if say:
        n = sum(len(run.p) for run in runs)
        print(
            f"{label}: of {n} p-values {', '.join(said)}; {int(np.median(runs[0].n_controls))} controls each",
            flush=True,
        )
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
    good, cells = True, {}
    for kind in given.kinds:
        alike, anywhere = [], []
        for seed in given.seeds:
            with tempfile.TemporaryDirectory() as name:
                archive(Path(name), kind, seed, given.targets, given.frames, given.size)
                alike.append(mined(Path(name), ""))
                if kind in UNEVEN:
                    anywhere.append(mined(Path(name), ANYWHERE))
        good &= holds(alike, kind)
        cells |= {(kind, column): p for column, p in likeness(alike).items()}
        if kind in UNEVEN:
            good &= fails(anywhere, kind)
    good &= all_alike(cells)
    print("verdict:", "holds" if good else "FALLS SHORT")
    return 0 if good else 1


def fails(runs: list[Run], kind: str) -> bool:
    """Whether a kind falls short with controls from anywhere, by its columns; the count of small p-values is shown beside."""
    holds(runs, f"{kind}, controls from anywhere")
    p = likeness(runs)
    adjusted = holm(np.array(list(p.values())))
    print(
        f"   {(adjusted <= LEAST_P).sum()} of {len(p)} columns differ as well, {COMBINED} {p[COMBINED]:.2g}", flush=True
    )
    if not (adjusted <= LEAST_P).any():
        print("   that should have failed")
        return False
    return True


def all_alike(cells: dict[tuple[str, str], float]) -> bool:
    """Print the table of p-values of kinds and columns; whether none of them is small, all of them counted."""
    kinds, columns = (list(dict.fromkeys(key[k] for key in cells)) for k in (0, 1))
    print(f"\n{'targets against controls, p':32}" + "".join(f"{kind:>9}" for kind in kinds))
    for column in columns:
        print(f"{column:32}" + "".join(f"{cells.get((kind, column), np.nan):9.3f}" for kind in kinds))
    adjusted = dict(zip(cells, holm(np.array(list(cells.values()))), strict=True))
    kind, column = min(adjusted, key=adjusted.get)
    fine = adjusted[kind, column] > LEAST_P
    print(f"of {len(cells)} cells the smallest, Holm-corrected, is {adjusted[kind, column]:.3f} ({kind}, {column}): "
          f"{'holds' if fine else 'FALLS SHORT'}")  # fmt: skip
    return bool(fine)


if __name__ == "__main__":
    sys.exit(main())
