"""Is it enough that controls have a like noise? Blank targets in a primary beam, and around a bright source.

    python tests/studies/matching.py [--seeds 1 2 3 4] [--targets 100] [--frames 24] [--size 420] [--kinds ...]

In the archives called middle and rim the primary beam is not divided out (gains of 1 to 0.15, where measuring stops), and the
faint sources that lie everywhere are imaged by up to a third too bright or too faint, another share in each frame: confusion
varies, in the middle most of all against the noise. Targets lie where the gain is above 0.6, or from 0.2 to 0.5. In the others
rings around one bright source, which varies by factors, fall off with the third power of the distance; targets are near it,
where the rings are up to a hundred times as high as the noise. Phases of the rings are new in each frame (rings), or always
the same (fixed), there with a primary beam not divided out, too, at whose rim blank sky is as noisy as near the source (mixed).
Controls are wherever there is room, which is not much near the source. Verdict for each kind, with controls of a like noise:
no more p-values up to 0.05 and 0.2 than the central 99.5 % of sums of beta-binomial draws. That there are too few of them is
said, and what controls from anywhere would give: around the source that must fail. Exits non-zero when short.
"""

from __future__ import annotations

import argparse
import sys
import tempfile
from pathlib import Path

import numpy as np
from scipy import ndimage

sys.path.insert(0, str(Path(__file__).parent))
sys.path.insert(0, str(Path(__file__).parents[1]))
from blank_kinds import ANYWHERE, mined

import skies

GAINS, RINGS = ("middle", "rim"), ("rings", "fixed", "mixed")
FWHM_PIXELS = 300.0  # of the primary beam
UNCORRECTED = '[[frames]]\nprimary_beam = "uncorrected"\nprimary_beam_fwhm_deg = {:.6f}\n'
RAW = "[comparisons]\nwanted = 0\n"
PARTS = (0.05, 0.2)
DRAWS = 20_000

Run = tuple[np.ndarray, np.ndarray]


def gain(away: np.ndarray) -> np.ndarray:
    """Of the primary beam, so many pixels from the middle."""
    return np.asarray(2.0 ** (-4.0 * (away / FWHM_PIXELS) ** 2))


def confused(away: np.ndarray, frames: int, seed: int) -> skies.Sky:
    """Faint sources under the primary beam, whose images are too bright or too faint in each frame."""
    rng, size = np.random.default_rng([seed, 12]), len(away)
    points = ndimage.gaussian_filter((rng.random(away.shape) < 0.01) * rng.exponential(8.0, away.shape), 1.3)
    sky = 5.0 * points / points.std() * gain(away)
    wander = 1.0 + 0.3 * rng.standard_normal(frames)
    return skies.Sky(n_frames=frames, size=size, noise="beam", jitter_pixels=0.0, backdrop=lambda k: wander[k] * sky)


def ringed(away: np.ndarray, angle: np.ndarray, frames: int, seed: int, fixed: bool) -> skies.Sky:
    """Rings around the middle, their height and phase (unless it is fixed) another in each frame."""
    rng = np.random.default_rng([seed, 13])
    height, phase = 12.0 * np.exp(rng.standard_normal(frames)), rng.uniform(0, 2 * np.pi, (2, frames))
    phase = np.zeros((2, frames)) if fixed else phase
    envelope = (40.0 / np.maximum(away, 15.0)) ** 3

    def rings(number: int) -> np.ndarray:
        waves = 2 * np.pi * away / 9.0 + phase[0, number] + 2 * np.sin(3 * angle + phase[1, number])
        return np.asarray(height[number] * envelope * np.cos(waves))

    return skies.Sky(n_frames=frames, size=len(away), noise="beam", backdrop=rings)


def archive(folder: Path, kind: str, seed: int, targets: int, frames: int, size: int) -> str:
    """Write an archive of a kind and its target list; the settings that it needs."""
    x, y = np.meshgrid(*[np.arange(size) - (size - 1) / 2] * 2)
    middle = np.hypot(x, y)
    sky = ringed(middle, np.arctan2(y, x), frames, seed, kind != "rings")
    if kind in GAINS:
        sky = confused(middle, frames, seed)
    places = skies.lattice((size // 10) ** 2, 10.0 * sky.pixel_arcsec)
    away = np.array([np.hypot(p.east, p.north) / sky.pixel_arcsec for p in places])
    near, far = {"middle": (0, 130), "rim": (150, 230)}.get(kind, (15, 60))
    within = np.flatnonzero((away > near) & (away < far))
    chosen = np.sort(np.random.default_rng(seed).permutation(within)[:targets])
    skies.write_sky(folder / "frames", sky, [], seed)
    (folder / "targets.csv").write_text(skies.target_text([places[k] for k in chosen], sky), encoding="utf-8")
    return RAW + ("" if kind in ("rings", "fixed") else UNCORRECTED.format(FWHM_PIXELS * sky.pixel_arcsec / 3600))


def p_values(folder: Path, settings: str) -> Run:
    """The targets' p-values of a run of the archive, and the number of controls behind each."""
    run = mined(folder, settings, periods=False)
    return run.p, run.n_controls


def counts(runs: list[Run], high: float) -> tuple[int, int, int]:
    """How many p-values are up to `high`, and the bounds of chance; the targets of a run share their controls."""
    rng, draws, seen = np.random.default_rng(1), np.zeros(DRAWS), 0
    for p, n in runs:
        seen += int((p <= high).sum())
        typical = int(np.median(n))
        rank = max(1, int(high * (typical + 1)))
        draws += rng.binomial(len(p), rng.beta(rank, max(1, typical + 1 - rank), DRAWS))
    least, most = np.quantile(draws, (0.0025, 0.9975))
    return seen, int(least), int(most)


def holds(runs: list[Run], label: str, say: bool = True) -> tuple[bool, bool]:
    """Whether the p-values are not too small, and whether they are not too large either."""
    found = [counts(runs, high) for high in PARTS]
    small, large = all(n <= most for n, _, most in found), all(n >= least for n, least, _ in found)
    if say:
        told = ", ".join(
            f"{n} up to {high:g} ({least} to {most})" for high, (n, least, most) in zip(PARTS, found, strict=True)
        )
        words = "" if small and large else "; TOO SMALL" if not small else "; too cautious"
        typical = int(np.median(np.concatenate([n for _, n in runs])))
        print(f"{label}: of {sum(len(p) for p, _ in runs)} p-values {told}; {typical} controls each{words}", flush=True)
    return small, large


def main() -> int:
    """Run the study; 0 when every line of the verdict holds."""
    parser = argparse.ArgumentParser()
    parser.add_argument("--seeds", type=int, nargs="+", default=[1, 2, 3, 4])
    parser.add_argument("--targets", type=int, default=100)
    parser.add_argument("--frames", type=int, default=24)
    parser.add_argument("--size", type=int, default=420)
    parser.add_argument("--kinds", nargs="+", default=[*GAINS, *RINGS], choices=[*GAINS, *RINGS])
    given = parser.parse_args()
    good = True
    for kind in given.kinds:
        alike, anywhere = [], []
        for seed in given.seeds:
            with tempfile.TemporaryDirectory() as name:
                settings = archive(Path(name), kind, seed, given.targets, given.frames, given.size)
                alike.append(p_values(Path(name), settings))
                anywhere.append(p_values(Path(name), ANYWHERE + settings))
        good &= holds(alike, kind)[0]
        if holds(anywhere, f"   {kind}, controls from anywhere")[0] and kind in RINGS:
            print("   that should have failed")
            good = False
    print("verdict:", "holds" if good else "FALLS SHORT")
    return 0 if good else 1


if __name__ == "__main__":
    sys.exit(main())
