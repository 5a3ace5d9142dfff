"""One flux scale and true pointing, from simulated files to the run's tables."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pyarrow.parquet as pq
import pytest
from astropy.io import fits
from astropy.table import Table
from scipy import stats

import skies
from hindlight import cli
from test_estimators import study


def test_a_small_version_of_the_study(tmp_path: Path) -> None:
    """Three instruments, a dozen frames each; the bounds are those of so few frames."""
    results = study("flux_scale").measured(tmp_path, seed=1, frames=12, size=300)
    for snr in (20.0, 200.0):
        assert 0.8 < np.mean([r.chi2[snr, "calibrated"] for r in results]) < 1.25
    assert np.mean([r.chi2[20.0, "raw"] for r in results]) > 1.5
    assert np.mean([r.chi2[200.0, "raw"] for r in results]) > 20
    shifts = np.concatenate([r.shifts for r in results])
    middle = np.median(shifts, axis=0)  # of 36 frames' own pointing: what there is to refer to
    assert np.hypot(*middle) < 0.25
    for result in results:
        assert np.hypot(*(result.shifts - np.median(result.shifts, axis=0)).T).max() < 0.1
        assert np.abs(result.gains - 1).max() < 0.012


@pytest.fixture(scope="module")
def uneven(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A run on an array that has comparisons and a camera that has none, of which the user is told."""
    folder = tmp_path_factory.mktemp("uneven")
    array = skies.Sky(n_frames=10, size=240, gain_scatter=0.05, pointing_pixels=0.4)
    camera = skies.Sky(instrument="camera", n_frames=10, size=240, unit="adu", noise="white")
    target = skies.Source("target", 0.0, 0.0, 30.0)
    rest = [skies.Source(f"s{k}", *(700 * np.array((np.cos(k), np.sin(k)))), 60.0) for k in range(1, 7)]
    skies.write_sky(folder / "frames" / "a", array, [target, *rest], 1)
    skies.write_sky(folder / "frames" / "b", camera, [], 2)
    (folder / "targets.csv").write_text(skies.target_text([target], array), encoding="utf-8")
    known = '[controls]\nper_field = 60\n[[frames]]\npath = "b/*"\nclock_error_s = 0.25\n'
    (folder / "s.toml").write_text(known, encoding="utf-8")
    arguments = ["mine", folder / "frames", "--targets", folder / "targets.csv", "--out", folder / "run",
                 "--settings", folder / "s.toml", "-q", "--without", "lomb_scargle"]  # fmt: skip
    assert cli.run_command([str(a) for a in arguments]) == 0
    return folder


def test_a_channel_without_comparisons_is_said_to_be_raw(uneven: Path) -> None:
    """In the last lines, in frame_solution.parquet and in channels.ecsv."""
    said = (uneven / "run" / "summary.txt").read_text(encoding="utf-8")
    assert "the flux scale of camera|R|I|30as|adu is not tied to comparisons" in said
    assert "the flux scale of north array|1400MHz|I|30as|Jy/beam: 10 of 10 frames tied by up to 6 comparisons" in said
    solution = pq.read_table(uneven / "run" / "frame_solution.parquet").to_pylist()
    verdicts = {(row["channel"].split("|")[0], row["verdict"]) for row in solution}
    assert verdicts == {("north array", "good"), ("camera", "uncalibrated")}
    counted = {
        str(r["channel"]).split("|")[0]: int(r["n_calibrated"]) for r in Table.read(uneven / "run" / "channels.ecsv")
    }
    assert counted == {"north array": 10, "camera": 0}


def test_comparisons_are_positions_of_their_own_kind(uneven: Path) -> None:
    """Six sources, at their places; the target, as bright as they are, is none of them."""
    positions = pq.read_table(uneven / "run" / "positions.parquet").to_pylist()
    chosen = [p for p in positions if p["kind"] == "comparison"]
    assert len(chosen) == 6
    assert len([p for p in positions if p["kind"] == "target"]) == 1
    listed = Table.read(uneven / "run" / "candidates.ecsv")
    assert list(listed["name"]) == ["target"]


def test_comparisons_from_a_table(uneven: Path, tmp_path: Path) -> None:
    """The user's own are used as they are, and a file that is not there is one line, status 2."""
    places = [p for p in pq.read_table(uneven / "run" / "positions.parquet").to_pylist() if p["kind"] == "comparison"]
    Table({"ra": [p["ra"] for p in places][:4], "dec": [p["dec"] for p in places][:4]}).write(tmp_path / "own.csv")
    for name, status in (("own.csv", 0), ("none.csv", 2)):
        (tmp_path / "s.toml").write_text(
            f'[controls]\nper_field = 20\n[comparisons]\ntable = "{tmp_path / name}"\n', encoding="utf-8"
        )
        arguments = ["mine", uneven / "frames", "--targets", uneven / "targets.csv", "--out", tmp_path / f"run{status}",
                     "--settings", tmp_path / "s.toml", "-q", "--without", "lomb_scargle"]  # fmt: skip
        assert cli.run_command([str(a) for a in arguments]) == status
    used = [p for p in pq.read_table(tmp_path / "run0" / "positions.parquet").to_pylist() if p["kind"] == "comparison"]
    assert [p["ra"] for p in used] == [p["ra"] for p in places][:4]
    assert not (tmp_path / "run2" / "frames.parquet").exists()


def test_limits_of_each_frame(uneven: Path, tmp_path: Path) -> None:
    """k-sigma limits are threshold times error; the bound on the flux leaves 5 % of its truncated normal above it."""
    run, out = uneven / "run", tmp_path / "curve.ecsv"
    assert cli.run_command(["lightcurve", str(run), "target", "--out", str(out), "-q"]) == 0
    curve = Table.read(out)
    rows = {str(row["channel"]): row for row in Table.read(run / "channels.ecsv")}
    for row in curve:
        of_channel = rows[str(row["channel"])]
        stated = 0.25 if str(row["channel"]).startswith("camera") else np.nan
        assert row["clock_error_s"] == pytest.approx(stated, nan_ok=True)
        assert row["limit_sigma"] == pytest.approx(of_channel["threshold"] * row["flux_err"])
        above = of_channel["threshold_above_quiet"] * np.hypot(row["flux_err"], of_channel["quiet_level_err"])
        assert row["limit_above_quiet"] == pytest.approx(above)
        error = np.hypot(row["flux_err"], of_channel["confusion_rms"])
        rest = stats.truncnorm.sf((row["limit_bayes"] - row["flux"]) / error, -row["flux"] / error, np.inf)
        assert rest == pytest.approx(0.05, rel=1e-6)


def test_seeing_that_the_header_does_not_give(tmp_path: Path) -> None:
    """Widths come from the comparisons, frame by frame; a flux in an aperture that follows them does not vary with them."""
    target = skies.Source("target", 0.0, 0.0, 400.0)
    rest = [skies.Source(f"s{k}", *(700 * np.array((np.cos(k), np.sin(k)))), 900.0) for k in range(1, 7)]
    widths = {2.5: "a", 4.0: "b", 6.0: "c"}
    for width, name in widths.items():
        sky = skies.Sky(instrument="camera", n_frames=4, size=240, unit="adu", noise="white", fwhm_pixels=width)
        skies.write_sky(tmp_path / "frames", sky, [target, *rest], int(10 * width), prefix=name)
    for path in (tmp_path / "frames").iterdir():
        fits.delval(path, "SEEING")
    (tmp_path / "targets.csv").write_text(skies.target_text([target], sky), encoding="utf-8")
    (tmp_path / "s.toml").write_text("[controls]\nper_field = 40\n", encoding="utf-8")
    arguments = ["mine", tmp_path / "frames", "--targets", tmp_path / "targets.csv", "--out", tmp_path / "run",
                 "--settings", tmp_path / "s.toml", "-q", "--without", "lomb_scargle"]  # fmt: skip
    assert cli.run_command([str(a) for a in arguments]) == 0
    frames = pq.read_table(tmp_path / "run" / "frames.parquet").to_pydict()
    solution = pq.read_table(tmp_path / "run" / "frame_solution.parquet").to_pydict()
    path = dict(zip(frames["id"], frames["path"], strict=True))
    true = {name: width for width, name in widths.items()}
    for frame, found, verdict in zip(solution["frame"], solution["fwhm"], solution["verdict"], strict=True):
        assert found == pytest.approx(true[path[frame][0]], rel=0.05)
        assert verdict == "good"
    assert np.ptp(np.log(solution["gain"])) < 0.05


def test_saturated_stars_do_not_tie_the_scale(tmp_path: Path) -> None:
    """No header states a level, most stars are cut off at one, and the seeing changes: gains are right all the same.

    With those stars among the comparisons they would be the majority, and gains off by up to 20 %.
    """
    rng = np.random.default_rng(1)
    grid = np.stack(np.meshgrid(*[np.linspace(-850, 850, 6)] * 2), axis=-1).reshape(-1, 2)
    flux = rng.permutation([*np.geomspace(3500, 12000, 26), *np.geomspace(300, 1200, 10)])
    stars = [skies.Source(f"s{k}", *place, float(f)) for k, (place, f) in enumerate(zip(grid, flux, strict=True))]
    true = {}
    for k, width in enumerate(rng.uniform(2.6, 3.8, 10)):
        sky = skies.Sky(instrument="camera", n_frames=1, size=240, unit="adu", noise="white", fwhm_pixels=float(width),
                        gain_scatter=0.05, first_day=51000.0 + k, last_day=51000.5 + k)  # fmt: skip
        true |= {t.name: t.gain for t in skies.write_sky(tmp_path / "frames", sky, stars, k + 1, prefix=f"f{k}_")}
    for path in (tmp_path / "frames").iterdir():
        with fits.open(path, mode="update") as hdus:
            hdus[0].data = np.minimum(hdus[0].data, 200.0)
    (tmp_path / "targets.csv").write_text(skies.target_text([skies.Source("t", 170.0, 0.0)], sky), encoding="utf-8")
    (tmp_path / "s.toml").write_text("[controls]\nper_field = 40\n", encoding="utf-8")
    arguments = ["mine", tmp_path / "frames", "--targets", tmp_path / "targets.csv", "--out", tmp_path / "run",
                 "--settings", tmp_path / "s.toml", "-q", "--without", "lomb_scargle"]  # fmt: skip
    assert cli.run_command([str(a) for a in arguments]) == 0
    frames = pq.read_table(tmp_path / "run" / "frames.parquet").to_pydict()
    solution = pq.read_table(tmp_path / "run" / "frame_solution.parquet").to_pydict()
    gain = [true[frames["path"][frames["id"].index(frame)]] for frame in solution["frame"]]
    off = np.log(solution["gain"]) - np.log(gain)
    assert np.abs(off - off.mean()).max() < 0.02
