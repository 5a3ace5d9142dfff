"""One flux scale and true pointing from the archive's own comparisons, on an archive where the truth is known.

    python tests/studies/flux_scale.py [--frames 60] [--size 400] [--seeds 1 2 3]

Three instruments with 5 % gain scatter, pointing scatter of 0.3 pixel and a gradient of it over the field; 30 steady
sources that can serve as comparisons, and ten targets each at S/N 20 and 200 that are kept out of the fit. Verdict, over
all seeds and instruments: chi-square per degree of freedom of the targets' calibrated fluxes 0.9 to 1.1 at either S/N
(raw, measured where the headers point: at least 1.8 and 20), gains off by less than 0.5 % on the mean, 95 % of shifts
within 0.1 pixel, flux off by less than 2 % at S/N 20. Exits non-zero when short.
"""

from __future__ import annotations

import argparse
import sys
import tempfile
from dataclasses import dataclass, replace
from pathlib import Path

import numpy as np
import pyarrow.parquet as pq

sys.path.insert(0, str(Path(__file__).parents[1]))
import skies
from hindlight import cli

FAINT, BRIGHT = 20.0, 200.0
WITHOUT = ("lomb_scargle", "stetson", "von_neumann", "brightest")


@dataclass(frozen=True, eq=False)
class Result:
    """Of one instrument in one archive.

    `chi2` maps (S/N, 'calibrated' or 'raw') to chi-square per degree of freedom, `bias` S/N to the mean calibrated flux
    over the true one; gains and shifts are found over true, and found minus true in pixels.
    """

    chi2: dict[tuple[float, str], float]
    bias: dict[float, float]
    gains: np.ndarray
    shifts: np.ndarray


def instruments(frames: int, size: int) -> list[skies.Sky]:
    """A fine and a coarse array, and a camera."""
    same = {"n_frames": frames, "size": size, "gain_scatter": 0.05, "pointing_pixels": 0.3, "pointing_gradient": 8e-4}
    return [
        skies.Sky(instrument="coarse array", pixel_arcsec=10.0, fwhm_pixels=3.0, **same),
        skies.Sky(instrument="fine array", pixel_arcsec=6.0, fwhm_pixels=4.0, frequency_hz=3e9, **same),
        skies.Sky(instrument="camera", pixel_arcsec=8.0, fwhm_pixels=3.2, unit="adu", noise="white", **same),
    ]


def sources(rng: np.random.Generator, reach_arcsec: float, apart_arcsec: float) -> list[skies.Source]:
    """30 comparisons of S/N 20 to 200, and ten targets each at S/N 20 and 200, in the arrays' units."""
    flux = [*10 ** rng.uniform(1.3, 2.3, 30), *[FAINT] * 10, *[BRIGHT] * 10]
    names = [f"steady{k}" for k in range(30)] + [f"faint{k}" for k in range(10)] + [f"bright{k}" for k in range(10)]
    places: list[np.ndarray] = []
    while len(places) < len(names):
        place = rng.uniform(-reach_arcsec, reach_arcsec, 2)
        if all(np.hypot(*(place - other)) > apart_arcsec for other in places):
            places.append(place)
    return [skies.Source(name, *place, f) for name, place, f in zip(names, places, flux, strict=True)]


def scaled(sky: skies.Sky, some: list[skies.Source]) -> list[skies.Source]:
    """The same S/N for every instrument: PSF photometry of the camera has a flux error of 1.505 FWHM rms."""
    factor = 1.0 if sky.unit == "Jy/beam" else 2.26618**0.5 * sky.fwhm_pixels
    return [replace(source, flux=source.flux * factor) for source in some]


def mined(folder: Path, settings: str) -> dict[str, dict[str, np.ndarray]]:
    """The run's tables as columns, mined with these settings."""
    (folder / "settings.toml").write_text(
        "[controls]\nper_field = 200\nfield_size_deg = 50.0\nbright_target_snr = 1e9\n" + settings
    )
    run = folder / ("raw" if settings else "run")
    without = [word for name in WITHOUT for word in ("--without", name)]
    arguments = ["mine", folder / "frames", "--targets", folder / "targets.csv", "--out", run,
                 "--settings", folder / "settings.toml", "-q", *without]  # fmt: skip
    status = cli.run_command([str(a) for a in arguments])
    if status:
        raise SystemExit(f"the run ended with status {status}")
    names = ("frames", "positions", "frame_solution", "measurements")
    tables = {n: pq.read_table(run / (n if n == "measurements" else f"{n}.parquet")) for n in names}
    return {n: {c: t[c].to_numpy(zero_copy_only=False) for c in t.column_names} for n, t in tables.items()}


def reduced(flux: np.ndarray, error: np.ndarray, position: np.ndarray) -> float:
    """Chi-square per degree of freedom about each position's own weighted mean."""
    total, freedom = 0.0, 0
    for number in np.unique(position):
        f, w = flux[position == number], error[position == number] ** -2.0
        total += float((w * (f - (w * f).sum() / w.sum()) ** 2).sum())
        freedom += len(f) - 1
    return total / freedom


def calibrated(table: dict[str, np.ndarray], solution: dict[str, np.ndarray]) -> tuple[np.ndarray, np.ndarray]:
    """Flux and error as the run's solution says, by its published formula."""
    at = np.searchsorted(solution["frame"], table["frame"])
    gain = solution["gain"][at]
    error = np.hypot(table["flux_err"] * solution["error_scale"][at], solution["extra_scatter"][at] * table["flux"])
    return table["flux"] / gain, error / gain


def measured(folder: Path, seed: int, frames: int, size: int) -> list[Result]:
    """Simulate an archive, mine it with comparisons and without, and compare with the truth."""
    skies_of = instruments(frames, size)
    rng = np.random.default_rng(seed)
    reach = 0.4 * size * min(sky.pixel_arcsec for sky in skies_of)
    some = sources(rng, reach, reach / 5.5)
    truth = {}
    for number, sky in enumerate(skies_of):
        place = folder / "frames" / str(number)
        truth |= {f"{number}/{t.name}": t for t in skies.write_sky(place, sky, scaled(sky, some), 10 * seed + number)}
    listed = [s for s in some if not s.name.startswith("steady")]
    (folder / "targets.csv").write_text(skies.target_text(listed, skies_of[0]), encoding="utf-8")
    run, raw = mined(folder, ""), mined(folder, "[comparisons]\nwanted = 0\n")
    return [_result(run, raw, truth, sky) for sky in skies_of]


def _result(run: dict, raw: dict, truth: dict[str, skies.Truth], sky: skies.Sky) -> Result:
    frames, solution = run["frames"], run["frame_solution"]
    mine = frames["id"][frames["instrument"] == sky.instrument]
    true = [truth[str(frames["path"][np.flatnonzero(frames["id"] == i)[0]])] for i in mine]
    gain = np.array([t.gain for t in true])
    gain /= np.exp(np.log(gain).mean())  # the archive's mean scale is what there is to calibrate to
    at = np.searchsorted(solution["frame"], mine)
    shifts = np.stack((solution["shift_x"][at], solution["shift_y"][at]), axis=1) - [t.shift for t in true]
    scale = float(np.exp(np.mean([np.log(t.gain) for t in true])))
    chi2, bias = {}, {}
    for kind, snr in (("faint", FAINT), ("bright", BRIGHT)):
        for name, tables in (("calibrated", run), ("raw", raw)):
            ids = [
                i for i, n in zip(*(tables["positions"][c] for c in ("id", "name")), strict=True) if n.startswith(kind)
            ]
            rows = np.isin(tables["measurements"]["position"], ids) & np.isin(tables["measurements"]["frame"], mine)
            part = {c: v[rows] for c, v in tables["measurements"].items()}
            flux, error = part["flux"], part["flux_err"]
            if name == "calibrated":
                flux, error = calibrated(part, solution)
                true_flux = scaled(sky, [skies.Source("", 0, 0, snr)])[0].flux * sky.rms * scale
                bias[snr] = float((flux / error**2).sum() / (error**-2.0).sum()) / true_flux
            chi2[snr, name] = reduced(flux, error, part["position"])
    return Result(chi2, bias, solution["gain"][at] / gain, shifts)


def shortfalls(results: list[Result]) -> list[str]:
    """What the verdict asks and is not so."""
    short = []
    for (snr, name), least, most in (
        ((FAINT, "calibrated"), 0.9, 1.1), ((BRIGHT, "calibrated"), 0.9, 1.1),
        ((FAINT, "raw"), 1.8, np.inf), ((BRIGHT, "raw"), 20.0, np.inf),
    ):  # fmt: skip
        value = float(np.mean([r.chi2[snr, name] for r in results]))
        print(f"chi-square per degree of freedom, S/N {snr:g}, {name}: {value:.3f}")
        short += [f"{name} at S/N {snr:g}: {value:.3f}"] * (not least <= value <= most)
    gain = max(abs(float(np.mean(r.gains)) - 1) for r in results)
    near = float(np.mean(np.hypot(*np.concatenate([r.shifts for r in results]).T) < 0.1))
    bias = max(abs(r.bias[FAINT] - 1) for r in results)
    print(
        f"gains: mean off by at most {100 * gain:.3f} %, scatter {np.std(np.concatenate([r.gains for r in results])):.4f}"
    )
    print(f"shifts within 0.1 pixel: {100 * near:.1f} %; flux off at S/N 20 by at most {100 * bias:.2f} %")
    short += [f"gain bias {gain:.4f}"] * (gain >= 0.005)
    short += [f"shifts {near:.3f}"] * (near < 0.95)
    short += [f"flux bias {bias:.4f}"] * (bias >= 0.02)
    return short


def main() -> int:
    """Run the study; 0 when every line of the verdict holds."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--frames", type=int, default=60)
    parser.add_argument("--size", type=int, default=400)
    parser.add_argument("--seeds", type=int, nargs="+", default=[1, 2, 3])
    given = parser.parse_args()
    results = []
    for seed in given.seeds:
        with tempfile.TemporaryDirectory() as name:
            results += measured(Path(name), seed, given.frames, given.size)
    short = shortfalls(results)
    print("short: " + "; ".join(short) if short else "all lines hold")
    return 1 if short else 0


if __name__ == "__main__":
    sys.exit(main())
