"""Sources added to stored images are found as sources added to light curves are: the ground that completeness stands on.

    python tests/studies/linearity.py [--frames 40] [--side 11] [--seeds 1 2 3 4 5 6]

A radio array and a camera look at a field with comparisons, with gains that differ from frame to frame; images are
stored as whole numbers, in steps of a two-hundredth of their noise. The archive is mined with as many controls as its
targets need: among fewer a p-value moves by a half when a single control is passed. Then pulse trains and smooth
variables of 1 to 20 median errors, one at each of side^2 blank targets, are added twice: to the raw fluxes of one copy
of the run, and to the pixels of the images, from which another copy measures everything anew. Both are calibrated,
judged and ranked as ever. Verdict: no flux differs by more than 0.02 of its error, and q < 0.05 is said of the same
targets but for 0.5 % of them, while at least a tenth of the sources is found and a tenth is not. Exits non-zero when
short.
"""

from __future__ import annotations

import argparse
import os
import shutil
import sys
import tempfile
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
from astropy.io import fits
from astropy.table import Table

sys.path.insert(0, str(Path(__file__).parents[1]))
import skies
from hindlight import cli, host, injection, photometry, planted
from hindlight.plugin import BeamShape

APART_FWHM = 18.0  # no source lies in the annulus of another
COMPARISONS = 30
CONTROLS = 2500
STEPS = 200.0  # in which images are stored, to the noise: rounding alone moves a flux by its inverse times 0.4 (rms)
MOST, MOST_CHANGED = 0.02, 0.005
LEVEL = 0.05
ESTIMATORS = host.load(host.PluginSpec()).estimators
WITHOUT = ("lomb_scargle", "bayesian_blocks")  # the two slowest


@dataclass(frozen=True, eq=False)
class Result:
    """Of one archive: differences of fluxes in units of their errors, and the targets' q-values by either way."""

    differences: dict[str, np.ndarray]
    by_curves: np.ndarray
    by_pixels: np.ndarray


def instruments(frames: int, side: int) -> list[skies.Sky]:
    """An array whose maps are scaled to 16 bits, and a camera that counts."""
    size = int((side + 1.5) * APART_FWHM * 3.0)
    same = {"n_frames": frames, "size": size, "gain_scatter": 0.05, "fwhm_pixels": 3.0}
    return [
        skies.Sky(instrument="array", rms=2e-3, extra={"STEP": 2e-3 / STEPS}, **same),
        skies.Sky(instrument="camera", unit="adu", noise="white", rms=30.0, extra={"STEP": 30.0 / STEPS}, **same),
    ]


def store(path: Path, image: np.ndarray, header: fits.Header) -> None:
    """Write an image in steps of the header's STEP as 16-bit numbers."""
    whole = np.rint(image / header["STEP"])
    assert np.abs(whole).max() < 32767, "the image does not fit into 16 bits"
    hdu = fits.PrimaryHDU(whole.astype(np.int16), header)
    hdu.header["BSCALE"] = header["STEP"]
    hdu.writeto(path, overwrite=True)


def simulated(folder: Path, frames: int, side: int, seed: int, controls: int) -> None:
    """Archive, targets and settings."""
    looks = instruments(frames, side)
    rng = np.random.default_rng(seed)
    targets = skies.lattice(side * side, APART_FWHM * 30.0)
    half = APART_FWHM * 15.0  # comparisons stand in the middle between targets
    places = [(s.east + half, s.north + half) for s in targets]
    flux = 10 ** rng.uniform(1.3, 2.0, COMPARISONS)
    chosen = rng.choice(len(places), min(COMPARISONS, len(places)), replace=False)
    for look in looks:
        scale = 1.0 if look.unit == "Jy/beam" else 2.26618**0.5 * look.fwhm_pixels
        steady = [skies.Source(f"c{k}", *places[k], float(f * scale)) for k, f in zip(chosen, flux, strict=False)]
        into = folder / "frames" / look.instrument
        skies.write_sky(into, look, steady, seed)
        for path in into.iterdir():
            image, header = fits.getdata(path, header=True)
            store(path, image, header)
    (folder / "targets.csv").write_text(skies.target_text(targets, looks[0]))
    (folder / "settings.toml").write_text(
        f"[controls]\nper_field = {controls}\nfield_size_deg = 50.0\nbright_target_snr = 1e9\n"
    )


def mined(folder: Path, run: Path) -> None:
    """Mine the archive into a run."""
    without = [word for name in WITHOUT for word in ("--without", name)]
    arguments = ["mine", folder / "frames", "--targets", folder / "targets.csv", "--out", run,
                 "--settings", folder / "settings.toml", "-q", *without]  # fmt: skip
    status = cli.run_command([str(a) for a in arguments])
    if status:
        raise SystemExit(f"the run ended with status {status}")


def columns(path: Path) -> dict[str, np.ndarray]:
    """A table of a run."""
    table = pq.read_table(path)
    return {name: table[name].to_numpy(zero_copy_only=False) for name in table.column_names}


def rows_of(run: Path) -> dict[str, np.ndarray]:
    """The measurements of targets, in order of position and frame."""
    positions, table = columns(run / "positions.parquet"), columns(run / "measurements")
    order = np.lexsort((table["frame"], table["position"]))
    kept = order[np.isin(table["position"][order], positions["id"][positions["kind"] == "target"])]
    return {name: values[kept] for name, values in table.items()}


def drawn(rows: dict[str, np.ndarray], solution: dict[str, np.ndarray], seed: int) -> np.ndarray:
    """What each raw flux rises by: a source of its own at each target, as bright in median errors in either channel."""
    rng = np.random.default_rng(seed + 1000)
    gain = solution["gain"][np.searchsorted(solution["frame"], rows["frame"])]
    more = np.zeros(len(gain))
    units = {c: float(np.nanmedian(rows["flux_err"][rows["channel"] == c])) for c in np.unique(rows["channel"])}
    for position in np.unique(rows["position"]):
        here = rows["position"] == position
        peak = 20 ** rng.uniform(0, 1)
        if rng.random() < 0.5:
            period = 10 ** rng.uniform(3, 5)
            source = injection.Source(injection.PULSES, period, rng.uniform(0, period), int(position), 0.1 * period)
        else:
            source = injection.Source(injection.SMOOTH, 10 ** rng.uniform(4, 7), rng.uniform(0, 1e7), int(position))
        shape = injection.brightness(source, rows["t_tdb_s"][here], rows["exposure_s"][here], rows["frame"][here])
        unit = np.array([units[c] for c in rows["channel"][here]])
        more[here] = peak * shape * unit * gain[here]
    return more


def add_to_curves(run: Path, rows: dict[str, np.ndarray], more: np.ndarray) -> None:
    """Raise the raw fluxes of a run's parts."""
    risen = dict(zip(zip(rows["position"].tolist(), rows["frame"].tolist(), strict=True), more.tolist(), strict=True))
    for part in (run / "measurements").rglob("*.parquet"):
        table = pq.read_table(part)
        keys = zip(table["position"].to_pylist(), table["frame"].to_pylist(), strict=True)
        flux = table["flux"].to_numpy() + [risen.get(key, 0.0) for key in keys]
        at = table.schema.get_field_index("flux")
        table = table.set_column(at, table.schema.field("flux"), pa.array(flux))
        pq.write_table(table, part, write_page_checksum=True)


def add_to_pixels(folder: Path, run: Path, rows: dict[str, np.ndarray], more: np.ndarray) -> None:
    """Add beam-shaped sources that the estimator reads as these fluxes to the images, which stay files of the same time."""
    frames = columns(run / "frames.parquet")
    for number, name in zip(frames["id"], frames["path"], strict=True):
        path = folder / "frames" / name
        image, header = fits.getdata(path, header=True)
        image = image.astype(float)
        estimator = photometry.choose_estimator(ESTIMATORS, header["BUNIT"])
        here = np.flatnonzero((rows["frame"] == number) & (more > 0))
        for row in here:
            place = {name: float(rows[name][row]) for name in ("x", "y", "rms")}
            fwhm = float(rows["fwhm"][row])
            beam = BeamShape(fwhm, fwhm, 0.0)
            light = planted.light_of(beam, place["x"], place["y"], 1.0)
            light *= more[row] / planted.reading(estimator, light, place, beam)
            half = len(light) // 2
            left, top = (int(np.floor(place[axis] + 0.5)) - half for axis in "xy")
            image[top : top + len(light), left : left + len(light)] += light
        status = path.stat()
        store(path, image, header)
        assert path.stat().st_size == status.st_size
        os.utime(path, ns=(status.st_atime_ns, status.st_mtime_ns))
    shutil.rmtree(run / "measurements")


def measured(folder: Path, frames: int, side: int, seed: int, controls: int = CONTROLS) -> Result:
    """Simulate an archive and add the same sources either way."""
    simulated(folder, frames, side, seed, controls)
    plain, curves, pixels = (folder / name for name in ("plain", "curves", "pixels"))
    mined(folder, plain)
    rows = rows_of(plain)
    more = drawn(rows, columns(plain / "frame_solution.parquet"), seed)
    for run in (curves, pixels):
        shutil.copytree(plain, run)
    add_to_curves(curves, rows, more)
    mined(folder, curves)
    add_to_pixels(folder, pixels, rows, more)
    mined(folder, pixels)
    a, b = rows_of(curves), rows_of(pixels)
    differ = (b["flux"] - a["flux"]) / a["flux_err"]
    good = np.isfinite(differ)
    by_channel = {str(c): differ[good & (a["channel"] == c)] for c in np.unique(a["channel"])}
    found = []
    for run in (curves, pixels):
        candidates = Table.read(run / "candidates.ecsv")
        candidates.sort("name")
        found.append(np.asarray(candidates["q_value"]))
    return Result(by_channel, *found)


def shortfalls(results: list[Result]) -> list[str]:
    """What the verdict asks and is not so."""
    short = []
    for channel in results[0].differences:
        differ = np.concatenate([result.differences[channel] for result in results])
        rms, worst = float(np.sqrt(np.mean(differ**2))), float(np.abs(differ).max())
        print(
            f"{channel}: {len(differ)} fluxes differ by {rms:.4f} sigma (rms), mean {differ.mean():+.5f}, at most {worst:.4f}"
        )
        short += [f"{channel}: {worst:.4f}"] * (worst > MOST)
    curves, pixels = (np.concatenate([getattr(r, name) for r in results]) for name in ("by_curves", "by_pixels"))
    differ = (curves < LEVEL) != (pixels < LEVEL)
    changed, share = float(np.mean(differ)), float(np.mean(curves < LEVEL))
    print(f"{len(curves)} sources, {share:.1%} found in light curves; {differ.sum()} differ in pixels")
    for pair in zip(curves[differ], pixels[differ], strict=True):
        print("   q {:.4f} in light curves, {:.4f} in pixels".format(*pair))
    short += [f"{changed:.2%} differ"] * (changed > MOST_CHANGED)
    short += [f"{share:.0%} found says little"] * (not 0.1 <= share <= 0.9)
    return short


def main() -> int:
    """Run the study; 0 when every line of the verdict holds."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--frames", type=int, default=40)
    parser.add_argument("--side", type=int, default=11)
    parser.add_argument("--seeds", type=int, nargs="+", default=[1, 2, 3, 4, 5, 6])
    given = parser.parse_args()
    results = []
    for seed in given.seeds:
        with tempfile.TemporaryDirectory() as name:
            results.append(measured(Path(name), given.frames, given.side, seed))
    short = shortfalls(results)
    print("short: " + "; ".join(short) if short else "all lines hold")
    return 1 if short else 0


if __name__ == "__main__":
    sys.exit(main())
