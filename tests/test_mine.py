"""The whole job on small archives, as a user runs it."""

import json
from pathlib import Path

import numpy as np
import pyarrow.parquet as pq
import pytest
from astropy import units as u
from astropy.coordinates import EarthLocation, SkyCoord
from astropy.io import fits
from astropy.table import Table
from astropy.time import Time
from astropy.utils import iers

import skies
from hindlight import cli
from hindlight.schema import CANDIDATES, REASONS, STANDINGS

DEMO = Path(__file__).parents[1] / "demo_archive"


def mine(*arguments, status=0):
    """Run `hindlight mine` in this process."""
    assert cli.run_command(["mine", "-q", *[str(a) for a in arguments]]) == status


def candidates(run):
    """The candidate table of a run by name."""
    table = Table.read(run / "candidates.ecsv")
    return {str(row["name"]): row for row in table}


@pytest.fixture(scope="module")
def demo(tmp_path_factory):
    """A run on the committed demonstration archive."""
    run = tmp_path_factory.mktemp("demo") / "run"
    mine(DEMO, "--targets", DEMO / "targets.ecsv", "--out", run)
    return run


def test_demo_finds_what_is_planted(demo):
    """Pulser, variable and flare are the first three rows; nothing blank or steady is called anything else."""
    truth = {str(row["name"]): str(row["kind"]) for row in Table.read(DEMO / "truth.ecsv")}
    table = Table.read(demo / "candidates.ecsv")
    first = {truth[str(row["name"])]: str(row["standing"]) for row in table[:3]}
    assert set(first) == {"pulser", "sinusoid", "flare"}
    assert first["pulser"] in ("periodic", "repeating")
    assert first["sinusoid"] in ("periodic", "variable")
    assert first["flare"] == "single"
    for row in table[3:]:
        if truth[str(row["name"])] == "detector artefact":
            assert str(row["concerns"]).startswith("detector_fixed")
            assert "; position: " in str(row["concerns"])
        else:
            assert row["standing"] in ("unseen", "steady"), row["name"]
    steady = [row["standing"] for row in table if truth[str(row["name"])].endswith("steady")]
    assert set(steady) == {"steady"}


def test_demo_recovers_the_planted_period(demo):
    """The variable's period and its error agree with the truth."""
    truth = {str(row["name"]): row for row in Table.read(DEMO / "truth.ecsv")}
    (name,) = [n for n, row in truth.items() if str(row["kind"]) == "sinusoid"]
    row = candidates(demo)[name]
    assert row["standing"] == "periodic"
    assert abs(row["period"] - truth[name]["period"]) < 5 * row["period_err"]


def test_demo_sets_damaged_files_aside_with_reasons(demo):
    """Every damaged file that the archive's README names is in rejects.ecsv with a fixed word and a sentence."""
    rejects = Table.read(demo / "rejects.ecsv")
    text = (DEMO / "README.md").read_text(encoding="utf-8")
    assert len(rejects) == 7
    for row in rejects:
        assert Path(str(row["path"])).name in text
        assert str(row["reason"]) in REASONS
        assert len(str(row["detail"])) > 10


def test_tables_read_back_alike_in_all_formats(demo):
    """The three candidate tables hold the same rows, with the promised first columns, units and UCDs."""
    ecsv = Table.read(demo / "candidates.ecsv")
    fits = Table.read(demo / "candidates.fits")
    vot = Table.read(demo / "candidates.vot")
    promised = [c.name for c in CANDIDATES]
    for table in (ecsv, fits, vot):
        assert table.colnames[: len(promised)] == promised
        np.testing.assert_array_equal(np.asarray(table["p_value"], float), np.asarray(ecsv["p_value"], float))
        assert table["ra"].unit == "deg"
        assert table["period"].unit == "s"
    assert ecsv["ra"].info.meta["ucd"] == "pos.eq.ra;meta.main"
    assert vot["p_value"].info.meta["ucd"] == "stat.probability"
    assert all(ecsv[name].description for name in ecsv.colnames)
    assert "caution" in ecsv.meta
    assert set(ecsv["standing"]) <= set(STANDINGS)


def test_every_ucd_is_valid():
    """Each UCD in the schema and in the shipped plugins is in the IVOA's list (UCD1+ 1.5, as astropy carries it)."""
    from astropy.io.votable.ucd import check_ucd

    from hindlight import completeness_schema, host, schema

    tables = [v for module in (schema, completeness_schema) for v in vars(module).values() if isinstance(v, tuple)]
    columns = [c for table in tables for c in table if isinstance(c, schema.TableColumn)]
    columns += [c for e in host.load(host.PluginSpec()).loaded for c in e.plugin.columns]
    assert len(columns) > 100
    for column in columns:
        assert not column.ucd or check_ucd(column.ucd, check_controlled_vocabulary=True), (column.name, column.ucd)


def test_measurements_agree_with_the_frame_table(demo):
    """Every part's frames, channels and positions are those pinned, and no wall-clock time is in a table."""
    frames = pq.read_table(demo / "frames.parquet").to_pydict()
    positions = pq.read_table(demo / "positions.parquet").to_pydict()
    channel_of = dict(zip(frames["id"], frames["channel"], strict=True))
    parts = sorted((demo / "measurements").rglob("*.parquet"))
    assert len(parts) == max(frames["batch"]) + 1
    for part in parts:
        rows = pq.read_table(part).to_pydict()
        assert all(channel_of[f] == c for f, c in zip(rows["frame"], rows["channel"], strict=True))
        assert set(rows["position"]) <= set(positions["id"])
        json.loads(pq.read_schema(part).metadata[b"rejects"])


def test_measured_times_agree_with_astropy(demo):
    """Times of measurements equal astropy's own barycentric correction to a microsecond, at every instrument."""
    frames = pq.read_table(demo / "frames.parquet").to_pydict()
    positions = pq.read_table(demo / "positions.parquet").to_pydict()
    part = sorted((demo / "measurements").rglob("*.parquet"))[-1]
    rows = pq.read_table(part).to_pydict()
    with iers.conf.set_temp("auto_download", False), iers.conf.set_temp("auto_max_age", None):
        for row in range(0, len(rows["flux"]), 701):
            frame, where = frames["id"].index(rows["frame"][row]), positions["id"].index(rows["position"][row])
            site = EarthLocation.from_geocentric(*(frames[f"site_{a}"][frame] * u.m for a in "xyz"))
            t = Time(2451545.0, frames["middle_tdb_s"][frame] / 86400, format="jd", scale="tdb", location=site)
            sky = SkyCoord(positions["ra"][where] * u.deg, positions["dec"][where] * u.deg)
            expected = frames["middle_tdb_s"][frame] + t.light_travel_time(sky, ephemeris="builtin").to_value("s")
            assert abs(rows["t_tdb_s"][row] - expected) < 1e-6
            assert abs(rows["bjd_tdb"][row] - (2451545.0 + expected / 86400)) < 1e-9


def small(tmp_path, n_frames=24, size=100, per_field=130, batch=6, most=0, **sky):
    """A small archive with a flare, a steady source and blanks; its folder. With `most` there are second passes."""
    flare = skies.Source("flare", 200.0, 0.0, lambda k, _d, _s: 20.0 if k == 7 else 0.0)
    steady = skies.Source("steady", -200.0, 0.0, 8.0)
    blanks = skies.lattice(4, 200.0)
    look = skies.Sky(n_frames=n_frames, size=size, **sky)
    skies.write_sky(tmp_path / "frames", look, [flare, steady], seed=3)
    (tmp_path / "targets.csv").write_text(skies.target_text([flare, steady, *blanks], look), encoding="utf-8")
    settings = f"[controls]\nper_field = {per_field}\nmost_per_field = {most}\n[flow]\nbatch_frames = {batch}\n"
    (tmp_path / "s.toml").write_text(settings, encoding="utf-8")
    return tmp_path


def arguments(folder, run):
    """The command line for such an archive."""
    return [folder / "frames", "--targets", folder / "targets.csv", "--out", run, "--settings", folder / "s.toml"]


def test_without_controls_nothing_is_said_of_variation(tmp_path, capsys):
    """A flare without a single control to rank it against is undecided, and the last lines say so."""
    folder = small(tmp_path)
    (folder / "s.toml").write_text("[controls]\nper_field = 0\n", encoding="utf-8")
    assert cli.run_command(["mine", *map(str, arguments(folder, tmp_path / "run"))]) == 0
    assert {str(row["standing"]) for row in candidates(tmp_path / "run").values()} == {"undecided"}
    assert "have no control and so no p-value" in capsys.readouterr().out


def test_errors_that_are_not_the_scatter_are_scaled(tmp_path, capsys):
    """Correlated noise under an estimator for white noise: errors are scaled up, and the run says by how much."""
    look = skies.Sky(n_frames=12, size=110, unit="adu", noise="beam")
    skies.write_sky(tmp_path / "frames", look, [], seed=4)
    (tmp_path / "targets.csv").write_text(skies.target_text(skies.lattice(4, 250), look), encoding="utf-8")
    command = ["mine", tmp_path / "frames", "--targets", tmp_path / "targets.csv", "--out", tmp_path / "run"]
    assert cli.run_command([str(a) for a in command]) == 0
    said = capsys.readouterr().out
    assert "errors of north array|R|I|30as|adu were scaled to the scatter of blank sky in 12 of 12 frames" in said
    assert "are not the scatter of blank sky" not in said
    solution = pq.read_table(tmp_path / "run" / "frame_solution.parquet")
    assert np.median(solution["error_scale"].to_numpy()) == pytest.approx(2.4, rel=0.25)


def test_sums_of_a_map_per_beam_are_fluxes(tmp_path):
    """A source of 100 Jy/beam is 100 by every estimator: sums of pixels are divided by the beam's area."""
    look = skies.Sky(n_frames=10, size=110)
    source = skies.Source("s", 0.0, 0.0, 100.0)
    skies.write_sky(tmp_path / "frames", look, [source], seed=8)
    (tmp_path / "targets.csv").write_text(skies.target_text([source], look), encoding="utf-8")
    for name in ("peak", "psf", "aperture"):
        (tmp_path / "s.toml").write_text(f'[photometry]\nestimator = "{name}"\n', encoding="utf-8")
        mine(*arguments(tmp_path, tmp_path / name))
        (row,) = Table.read(tmp_path / name / "channels.ecsv")
        assert row["flux_mean"] == pytest.approx(100.0, rel=0.03)


def test_the_run_folder_is_no_part_of_the_archive(tmp_path):
    """A run inside its own archive does not find its own tables."""
    folder = small(tmp_path)
    run = folder / "frames" / "run"
    for _ in range(2):
        mine(*arguments(folder, run))
        assert len(Table.read(run / "rejects.ecsv")) == 0


def test_names_with_markup_and_mended_target_lists(tmp_path, capsys):
    """Names that look like terminal markup are printed as they are; a list in hours is refused and can be mended."""
    folder = small(tmp_path)
    (folder / "targets.csv").write_text("name,ra,dec\n[/x],10.0,-30.0\n", encoding="utf-8")
    mine(*arguments(folder, tmp_path / "run"), status=3)
    assert "degrees are wanted, not hours" in capsys.readouterr().err
    (folder / "targets.csv").write_text("name,ra,dec\n[/x],150.0,-30.0\n", encoding="utf-8")
    assert cli.run_command(["mine", *map(str, arguments(folder, tmp_path / "run"))]) == 0
    assert "[/x]" in capsys.readouterr().out


def test_a_steady_source_at_two_frequencies_and_in_circular_polarisation_is_steady(tmp_path):
    """Two frequencies with two beams, Stokes I and V: four channels, one steady source, no variation."""
    source = [skies.Source("steady", 0.0, 0.0, lambda _k, _d, stokes: 15.0 if stokes == "I" else 0.0)]
    for n, (frequency, fwhm, stokes) in enumerate([(1.4e9, 3.0, "I"), (1.4e9, 3.0, "V"), (8e8, 5.0, "I")]):
        look = skies.Sky(n_frames=16, size=120, frequency_hz=frequency, fwhm_pixels=fwhm, stokes=stokes)
        skies.write_sky(tmp_path / "frames", look, source, seed=n, prefix=f"f{n}_")
    (tmp_path / "targets.csv").write_text(skies.target_text([*source, *skies.lattice(3, 250)], look), encoding="utf-8")
    mine(tmp_path / "frames", "--targets", tmp_path / "targets.csv", "--out", tmp_path / "run")
    row = candidates(tmp_path / "run")["steady"]
    assert row["standing"] == "steady"
    channels = Table.read(tmp_path / "run" / "channels.ecsv")
    mine_ = channels[channels["name"] == "steady"]
    assert len(mine_) == 3
    seen = {str(r["channel"]): int(r["n_detected"]) for r in mine_}
    assert [n for c, n in sorted(seen.items()) if "|V|" in c] == [0]
    assert all(n == 16 for c, n in seen.items() if "|I|" in c)


def raise_to(path, snr):
    """Add a beam-shaped source to an image so that its central pixel reads exactly `snr`."""
    with fits.open(path, mode="update") as hdus:
        image = hdus[0].data
        centre = image.shape[0] // 2
        y, x = np.mgrid[: image.shape[0], : image.shape[1]]
        shape = np.exp(-4 * np.log(2) * ((x - centre) ** 2 + (y - centre) ** 2) / 9.0)
        image += ((snr - image[centre, centre]) * shape).astype(np.float32)


def test_a_source_seen_only_in_the_mean_is_steady_and_four_frames_are_too_few(tmp_path):
    """Over ten sigma in the mean and never three in a frame is steady, not unseen; four frames leave it undecided."""
    look = skies.Sky(n_frames=64, size=101, jitter_pixels=0.0)
    skies.write_sky(tmp_path / "frames", look, [], seed=12)
    rng = np.random.default_rng(5)
    paths = sorted((tmp_path / "frames").iterdir())
    for path in paths:
        raise_to(path, rng.uniform(0.5, 2.4))
    faint = skies.Source("faint", 0.0, 0.0)
    (tmp_path / "targets.csv").write_text(skies.target_text([faint, *skies.lattice(4, 300)], look), encoding="utf-8")
    mine(tmp_path / "frames", "--targets", tmp_path / "targets.csv", "--out", tmp_path / "run")
    row = candidates(tmp_path / "run")["faint"]
    (channel,) = [r for r in Table.read(tmp_path / "run" / "channels.ecsv") if r["name"] == "faint"]
    assert channel["flux_mean"] / channel["flux_mean_err"] > 10
    assert row["peak_snr"] < 3
    assert row["standing"] == "steady"
    for path in paths[4:]:
        path.unlink()
    mine(tmp_path / "frames", "--targets", tmp_path / "targets.csv", "--out", tmp_path / "few")
    assert candidates(tmp_path / "few")["faint"]["standing"] == "undecided"
