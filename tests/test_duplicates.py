"""The same exposure found twice, and deep images beside their snapshots."""

import shutil
import time
from dataclasses import replace

import numpy as np
import pytest
from astropy.io import fits
from astropy.table import Table

import copies
import skies
from hindlight import cli, duplicates, likeness, plan
from hindlight.candidates import ChannelView
from hindlight.lightcurve import LightCurve
from hindlight.likeness import Sample, alike
from hindlight.ranking import Thresholds
from hindlight.schema import FRAMES

DAY = 50000.25


def scene(folder, size=48, seed=5):
    """A scene of innocent frames in a folder."""
    return copies.Scene(folder, "s", DAY, np.random.default_rng(seed), size)


@pytest.mark.parametrize("sky", [copies.CAMERA, copies.ARRAY], ids=["camera", "array"])
@pytest.mark.parametrize("kind", copies.PLANTS)
def test_each_sort_of_copy_is_found(tmp_path, kind, sky):
    """One of the two is kept: the original, which shows all the sky, is not packed and comes first."""
    original = scene(tmp_path / "a").frame(sky, "")
    scene(tmp_path / "a", seed=6).frame(sky, "_next", 121.0)
    (tmp_path / "b").mkdir()
    copy = copies.PLANTS[kind](original, tmp_path / "b" / "copy.fits", np.random.default_rng(7))
    name = copy.name if kind not in ("lossless", "lossy", "extension") else f"{copy.name}[1,0]"
    found, parts, _ = copies.found(tmp_path / "a", tmp_path / "b")
    assert found == {name: "s.fits"}
    assert parts == {}


@pytest.mark.parametrize("kind", copies.SCENES)
def test_frames_that_only_look_alike_are_kept(tmp_path, kind):
    """Nights, bands, Stokes planes, pointings and the rest are no copies, and only a deep image is related."""
    copies.SCENES[kind](scene(tmp_path))
    found, parts, _ = copies.found(tmp_path)
    assert found == {}
    assert parts == ({f"s_snap{k}.fits": "s_deep.fits" for k in range(3)} if kind == "deep" else {})


def test_a_population_with_plants(tmp_path):
    """A small version of the study: nothing missed, nothing false, every snapshot related."""
    population = copies.populate(tmp_path / "a", n_frames=140, n_plants=30, seed=11)
    found, parts, _ = copies.found(tmp_path / "a")
    assert population.missed(found) == []
    assert population.false(found) == []
    assert len(parts) == population.n_deep_parts > 0
    assert len(found) >= 30


def test_copies_without_a_clock(tmp_path):
    """Where only the date is known a copy must have equal pixels; the same data reduced again stay."""
    first = scene(tmp_path).frame(copies.CAMERA, "", DATE__OBS="1994-05-06")
    rng = np.random.default_rng(3)
    shutil.copy(first, tmp_path / "t.fits")
    copies.PLANTS["again"](first, tmp_path / "u.fits", rng)
    copies.PLANTS["cropped"](first, tmp_path / "v.fits", rng)
    assert copies.found(tmp_path)[0] == {"t.fits": "s.fits", "v.fits": "s.fits"}


def test_another_instruments_name_needs_equal_pixels_and_the_same_instant(tmp_path):
    """Correlated noise under another name is no evidence; equal pixels at another instant were never compared."""
    first = scene(tmp_path).frame(copies.CAMERA, "")
    again = copies.PLANTS["again"](first, tmp_path / "t.fits", np.random.default_rng(3))
    assert copies.found(tmp_path)[0] == {"t.fits": "s.fits"}
    fits.setval(again, "INSTRUME", value="renamed camera")
    assert copies.found(tmp_path)[0] == {}
    again.unlink()
    later = copies.PLANTS["edited"](first, tmp_path / "u.fits", np.random.default_rng(3))
    fits.setval(later, "DATE-OBS", value=skies.Time(DAY + 30 * copies.SECOND, format="mjd").isot)
    assert copies.found(tmp_path)[0] == {}
    fits.setval(later, "DATE-OBS", value=skies.Time(DAY, format="mjd").isot)
    assert copies.found(tmp_path)[0] == {"u.fits": "s.fits"}


def test_which_copy_is_kept(tmp_path):
    """The widest, then the one with the fewest assumptions, then the one not packed, then the first by path."""
    first = scene(tmp_path).frame(copies.CAMERA, "")
    rng = np.random.default_rng(3)
    assert copies.PLANTS["gzip"](first, tmp_path / "a.fits", rng).name == "a.fits.gz"
    shutil.copy(first, tmp_path / "b.fits")
    assert copies.found(tmp_path)[0] == {"a.fits.gz": "b.fits", "s.fits": "b.fits"}
    fits.delval(tmp_path / "b.fits", "TIMESYS")  # one thing more to be assumed
    assert set(copies.found(tmp_path)[0].values()) == {"s.fits"}
    whole = copies.PLANTS["cropped"](first, tmp_path / "c.fits", rng)
    first.unlink()
    (tmp_path / "b.fits").unlink()
    assert copies.found(tmp_path)[0] == {whole.name: "a.fits.gz"}


def table(n, **columns):
    """A frame table of n frames of one field, an hour apart, that wait to be compared."""
    frames = plan.empty(FRAMES)
    frames = {k: np.zeros(n, v.dtype) if v.dtype != object else np.full(n, "", object) for k, v in frames.items()}
    begin = 50000.0 + np.arange(n) / 24
    frames |= {"id": np.arange(n), "state": np.full(n, "current", object), "radius": np.full(n, 0.5)}
    frames |= {name: np.full(n, -1) for name in ("batch", "duplicate_of", "related_to")}
    frames |= {"exposure_s": np.full(n, 120.0), "frequency_hz": np.full(n, 1.4e9)}
    frames["path"][:] = [f"{k:07d}" for k in range(n)]
    frames |= columns
    begin = columns.get("start_mjd_tdb", begin)
    end = columns.get("end_mjd_tdb", begin + frames["exposure_s"] * copies.SECOND)
    middle = (begin + end) / 2
    return frames | {"start_mjd_tdb": begin, "middle_mjd_tdb": middle, "end_mjd_tdb": end, "middle_tdb_s": middle}


def listed(pairs):
    """Pairs as tuples."""
    return list(zip(pairs.first.tolist(), pairs.second.tolist(), strict=True))


def test_possible_pairs_by_time():
    """Little overlap is none, as is none; a frame that was compared before is paired with new ones only."""
    begin = 50000.0 + np.array([0.0, 100.0, 110.0, 600.0, 640.0, 900.0]) * copies.SECOND
    frames = table(6, start_mjd_tdb=begin)
    assert listed(duplicates.candidates(frames)) == [(1, 2), (3, 4)]
    frames["batch"][[1, 2, 3]] = 0
    assert listed(duplicates.candidates(frames)) == [(3, 4)]


def test_possible_pairs_by_plane_and_frequency():
    """Planes of one cube at different frequencies are not compared; of two cubes like planes are."""
    begin = np.full(8, 50000.0)
    frames = table(8, start_mjd_tdb=begin, frequency_hz=np.tile(1.4e9 * (1 + 1e-6 * np.arange(4)), 2))
    frames["path"][:] = ["a"] * 4 + ["b"] * 4
    frames["plane"][:] = [0, 1, 2, 3] * 2
    assert listed(duplicates.candidates(frames)) == [(k, k + 4) for k in range(4)]
    frames["frequency_hz"][4:] *= 1.01
    assert listed(duplicates.candidates(frames)) == []
    frames["frequency_hz"][:] = np.nan
    assert (0, 4) in listed(duplicates.candidates(frames))


def test_planes_of_one_image_are_no_copies():
    """A cube over time without a clock has planes of one date; only another file may hold the same exposures."""
    frames = table(6) | {"middle_tdb_s": np.full(6, np.nan), "middle_mjd_tdb": np.full(6, 50000.5)}
    frames["path"][:] = "cube"
    frames["plane"][:] = np.arange(6)
    assert listed(duplicates.candidates(frames)) == []
    frames["path"][3:] = "copy of the cube"
    frames["plane"][3:] = np.arange(3)
    frames["plane"][:3] = np.arange(3)
    assert listed(duplicates.candidates(frames)) == [(k, k + 3) for k in range(3)]


def test_the_sweep_is_fast_and_agrees_with_every_pair():
    """The pairs of 300 frames are those of the plain double loop; 20,000 frames take a fraction of a second."""
    rng = np.random.default_rng(4)
    begin = 50000.0 + np.sort(rng.uniform(0, 0.1, 300))
    frames = table(300, start_mjd_tdb=begin, exposure_s=rng.choice([100.0, 120.0, 200.0], 300))
    frames["stokes"][:] = rng.choice(["I", "V"], 300)
    low, high = frames["start_mjd_tdb"], frames["end_mjd_tdb"]
    expected = [
        (i, j)
        for i in range(300)
        for j in range(i + 1, 300)
        if frames["stokes"][i] == frames["stokes"][j]
        and max(frames["exposure_s"][[i, j]]) <= 1.5 * min(frames["exposure_s"][[i, j]])
        and min(high[i], high[j]) - max(low[i], low[j]) >= 0.4 * min(high[i] - low[i], high[j] - low[j])
    ]
    assert listed(duplicates.candidates(frames)) == expected
    assert len(expected) > 100
    many = table(20000)
    began = time.perf_counter()
    assert len(duplicates.candidates(many)) == 0
    assert (duplicates.related(many) == -1).all()
    assert time.perf_counter() - began < 2.0


def view(flux, deep_err, bright_at=()):
    """A channel of 16 samples of error 1 with a deep image (frame 100) of the first ten; detected at 5 sigma."""
    values = np.full(16, flux)
    values[list(bright_at)] += 20.0
    curve = LightCurve.from_arrays(np.arange(16.0), values, np.ones(16))
    deep = LightCurve.from_arrays(np.zeros(1), np.array([flux + 0.1]), np.array([deep_err]), frame=np.array([100]))
    within = np.where(np.arange(16) < 10, 100, -1)
    return ChannelView(curve, 16, 0, Thresholds(5.0, 5.0, 4.0, 2.0, 100), deep, within)


def test_the_quiet_level_is_the_more_precise_one():
    """The deep image's where its error is smaller and none of its own snapshots is bright, else the snapshots'."""
    assert view(1.0, 0.1).quiet_level == pytest.approx((1.1, 0.1))
    assert view(1.0, 0.3).quiet_level == pytest.approx((1.0, 0.25))  # 1 / sqrt(16)
    assert view(1.0, 0.1, bright_at=[3]).quiet_level[0] == pytest.approx(1.0)
    assert view(1.0, 0.1, bright_at=[12]).quiet_level == pytest.approx((1.1, 0.1))


def test_a_source_seen_in_the_deep_image_alone_is_seen():
    """Too faint for the snapshots' mean at the controls' threshold, but far above the deep image's noise."""
    assert not view(0.5, 0.3).seen
    assert view(0.5, 0.1).seen


def test_deep_images_within_deeper_ones():
    """Six snapshots, two nights, one sum of all: each belongs to the shortest that holds it, and at last to the sum."""
    hour = 1 / 24
    begin = 50000.0 + np.array([0, 1, 2, 24, 25, 26, 0, 24, 0]) * hour
    end = 50000.0 + np.array([1, 2, 3, 25, 26, 27, 3, 27, 27]) * hour
    exposure = np.array([3600.0] * 6 + [10800.0] * 2 + [21600.0])
    frames = table(9, start_mjd_tdb=begin, end_mjd_tdb=end, exposure_s=exposure)
    frames["related_to"] = duplicates.related(frames)
    assert frames["related_to"].tolist() == [6, 6, 6, 7, 7, 7, 8, 8, -1]
    assert duplicates.deepest(frames).tolist() == [8] * 8 + [-1]
    frames["radius"][8] = 1.0  # a mosaic that is much wider is another field
    assert duplicates.related(frames).tolist() == [6, 6, 6, 7, 7, 7, -1, -1, -1]


def test_a_long_exposure_beside_a_short_one_is_no_deep_image():
    """A single short frame within a long one's stated span fills too little of it; half of it would do."""
    begin = np.array([50000.0, 50000.001])
    frames = table(2, start_mjd_tdb=begin, exposure_s=np.array([600.0, 60.0]))
    assert duplicates.related(frames).tolist() == [-1, -1]
    frames = table(2, start_mjd_tdb=begin, exposure_s=np.array([600.0, 360.0]))
    assert duplicates.related(frames).tolist() == [-1, 0]
    frames["channel"][1] = "other"
    assert duplicates.related(frames).tolist() == [-1, -1]


def test_jobs_hold_every_pair_once_and_groups_together():
    """Cut into pieces, every pair is there once, and a small group of frames is in one piece."""
    rng = np.random.default_rng(8)
    first = np.repeat(np.arange(0, 900, 3), 3)
    second = first + np.tile([1, 2, 1], 300)
    first = np.where(np.tile([0, 0, 1], 300) == 1, first + 2, first)
    shuffled = rng.permutation(900)
    pairs = duplicates.Pairs(first[shuffled], second[shuffled], np.zeros(900, bool))
    pieces = duplicates.jobs(pairs)
    assert sorted(np.concatenate(pieces).tolist()) == list(range(900))
    assert len(pieces) > 5
    home = {}
    for number, piece in enumerate(pieces):
        for pair in piece.tolist():
            assert home.setdefault(int(pairs.first[pair]) // 3, number) == number


def noise(seed, shape=(16, 12, 12)):
    """Noise of sigma 10."""
    return 10.0 * np.random.default_rng(seed).standard_normal(shape)


def test_evidence_of_pixels():
    """Half-shared noise is one exposure, a third is not; equal pixels are told from correlated ones."""
    common, a, b = noise(1), noise(2), noise(3)
    assert alike(Sample(common), Sample(common), 1.0).word == "equal"
    assert alike(Sample(common), Sample(common + 0.5 * a), 1.0).word == "noise"
    shared = alike(Sample(common + 0.8 * a), Sample(common + 0.8 * b), 1.0)
    assert shared.word == "noise"
    # Variances 1 and 0.64: the correlation of common + 0.8 a with common + 0.8 b is 1 / 1.64.
    assert shared.correlation == pytest.approx(1 / 1.64, abs=0.05)
    assert alike(Sample(common + 1.5 * a), Sample(common + 1.5 * b), 1.0).word == ""
    assert alike(Sample(a), Sample(b), 1.0).word == ""
    assert alike(Sample(common[:4]), Sample((common + 0.8 * a)[:4]), 100.0).word == ""  # too few independent pixels


def test_bright_sources_are_no_evidence():
    """The same bright sources and the same gradient in both images do not make their noise one."""
    y, x = np.mgrid[:12, :12]
    star = 500.0 * np.exp(-((x - 5.0) ** 2 + (y - 6.0) ** 2) / 4)  # FWHM 3.3 pixels
    level = np.linspace(0, 1000, 16)[:, None, None]
    assert alike(Sample(noise(1) + star + level), Sample(noise(2) + star + level), 12.6, 3).word == ""
    assert alike(Sample(noise(1) + star + level), Sample(noise(1) + star + 0.3 * noise(2)), 12.6, 3).word == "noise"


def test_whole_numbers_and_rough_steps():
    """Counts are equal when they are equal, not when both are coarse; a rough step of storing is no evidence."""
    a, b = np.rint(noise(1) / 10), np.rint(noise(2) / 10)
    assert alike(Sample(a, 1.0), Sample(a, 1.0), 1.0).word == "equal"
    assert alike(Sample(a, 1.0), Sample(b, 1.0), 1.0).word == ""
    assert alike(Sample(noise(1) / 100, 1.0), Sample(np.rint(noise(2) / 100), 1.0), 1.0).word == ""
    stored = np.rint(noise(1) / 2) * 2
    assert alike(Sample(noise(1)), Sample(stored, 2.0), 1.0).word == "equal"
    nothing = np.zeros((16, 12, 12))
    assert alike(Sample(nothing), Sample(nothing), 1.0) == likeness.Likeness()
    gone = np.where(np.arange(12) < 11, np.nan, noise(1))
    assert alike(Sample(gone[:2]), Sample(gone[:2]), 1.0) == likeness.Likeness()


# --- the whole job


def small(folder, n_frames=12, seed=3, **sky):
    """A small archive with a flare, a steady source and blanks; the command line for it, without --out."""
    flare = skies.Source("flare", 200.0, 0.0, lambda k, _d, _s: 20.0 if k == 7 else 0.0)
    steady = skies.Source("steady", -200.0, 0.0, 8.0)
    look = skies.Sky(n_frames=n_frames, size=72, **sky)
    skies.write_sky(folder / "frames", look, [flare, steady], seed)
    targets = skies.target_text([flare, steady, *skies.lattice(4, 180.0)], look)
    (folder / "targets.csv").write_text(targets, encoding="utf-8")
    (folder / "s.toml").write_text("[controls]\nper_field = 30\n[flow]\nbatch_frames = 6\n", encoding="utf-8")
    return [folder / "frames", "--targets", folder / "targets.csv", "--settings", folder / "s.toml"]


def mine(*arguments, status=0):
    """Run `hindlight mine` in this process, without the period search, which would take most of the time."""
    assert cli.run_command(["mine", "-q", "--without", "lomb_scargle", *[str(a) for a in arguments]]) == status


def test_every_frame_twice_gives_the_same_table(tmp_path):
    """With a copy of each frame the candidates are what they are without; each copy is named; nothing is compared twice."""
    line = small(tmp_path)
    mine(*line, "--out", tmp_path / "once")
    (tmp_path / "more").mkdir()
    kinds = ["same", "gzip", "lossless", "scaled", "edited"]
    for number, path in enumerate(sorted((tmp_path / "frames").iterdir())):
        copies.PLANTS[kinds[number % 5]](path, tmp_path / "more" / path.name, np.random.default_rng(0))
    mine(*line[:1], tmp_path / "more", *line[1:], "--out", tmp_path / "twice")
    once, twice = (Table.read(tmp_path / run / "candidates.ecsv") for run in ("once", "twice"))
    assert once.colnames == twice.colnames
    for name in once.colnames:
        np.testing.assert_array_equal(np.asarray(once[name]), np.asarray(twice[name]), err_msg=name)
    rejects = Table.read(tmp_path / "twice" / "rejects.ecsv")
    assert len(rejects) == 12
    assert set(rejects["reason"]) == {"duplicate_of"}
    for row in rejects:
        name = str(row["path"]).removesuffix(".gz").removesuffix(".fz")
        assert f"{name}[0,0] in {tmp_path / 'frames'}" in str(row["detail"])
    last = (tmp_path / "twice" / "summary.txt").read_text(encoding="utf-8")
    assert "12 frames, " in last
    assert "duplicates: 12 frames" in last
    before = {p: p.read_bytes() for p in (tmp_path / "twice").glob("*.*") if p.name != "log.txt"}
    mine(*line[:1], tmp_path / "more", *line[1:], "--out", tmp_path / "twice")
    assert before == {p: p.read_bytes() for p in before}
    log = (tmp_path / "twice" / "log.txt").read_text(encoding="utf-8")
    assert log.count("duplicates: 12 of 12 possible pairs") == 1


def test_copies_that_come_later_give_way_and_take_over(tmp_path):
    """A measured frame is kept however good a later copy is; when its file changes the copy is measured instead."""
    line = small(tmp_path, n_frames=10)
    run = tmp_path / "run"
    mine(*line, "--out", run)
    parts = {p: p.read_bytes() for p in (run / "measurements").rglob("*.parquet")}
    first = sorted((tmp_path / "frames").iterdir())[0]
    shutil.copy(first, tmp_path / "frames" / "a_earlier_name.fits")
    mine(*line, "--out", run)
    (row,) = Table.read(run / "rejects.ecsv")
    assert (row["path"], row["reason"]) == ("a_earlier_name.fits", "duplicate_of")
    assert parts == {p: p.read_bytes() for p in (run / "measurements").rglob("*.parquet")}
    fresh = scene(tmp_path / "aside", size=72, seed=77).frame(skies.Sky(), "", 9e5)
    shutil.copy(fresh, first)
    mine(*line, "--out", run)
    (row,) = Table.read(run / "rejects.ecsv")
    assert (row["path"], row["reason"]) == (first.name, "changed")
    counted = Table.read(run / "candidates.ecsv")["n_frames"]
    assert set(counted) == {11}


def test_a_run_killed_while_it_compares_goes_on(tmp_path, monkeypatch):
    """What the walk found is kept; the continued run compares, and ends as one never stopped."""
    line = small(tmp_path, n_frames=8)
    for path in sorted((tmp_path / "frames").iterdir()):
        shutil.copy(path, path.with_name("copy_of_" + path.name))
    mine(*line, "--out", tmp_path / "whole")
    with monkeypatch.context() as patch:
        patch.setattr(likeness, "compare", lambda *_: (_ for _ in ()).throw(KeyboardInterrupt()))
        mine(*line, "--out", tmp_path / "broken", status=130)
    assert (tmp_path / "broken" / "frames.parquet").is_file()
    mine(*line, "--out", tmp_path / "broken")
    for name in ("candidates.ecsv", "rejects.ecsv", "frames.parquet", "channels.ecsv"):
        assert (tmp_path / "broken" / name).read_bytes() == (tmp_path / "whole" / name).read_bytes(), name


def deep_archive(tmp_path, flare):
    """Snapshots one after the other and the deep image of them all, beside later frames; `flare` is the flux in one."""
    sky = skies.Sky(n_frames=0, size=72, exposure_s=120.0)
    line = small(tmp_path, n_frames=0, exposure_s=120.0)
    rng = np.random.default_rng(9)
    y, x = np.mgrid[:72, :72]
    images = []
    for number in range(16):
        image = sky.rms * skies.noise_image(sky, rng)
        for east, flux in ((-200.0, 3.0), (200.0, flare if number == 4 else 0.0)):
            px, py = 35.5 - east / sky.pixel_arcsec, 35.5
            image += flux * np.exp(-4 * np.log(2) * ((x - px) ** 2 + (y - py) ** 2) / sky.fwhm_pixels**2)
        images.append(image)
        when = DAY + (121.0 * number if number < 10 else 86400.0 * number) * copies.SECOND
        copies.write(tmp_path / "frames" / f"f{number:02d}.fits", sky, when, image)
    long = replace(sky, exposure_s=1200.0)
    copies.write(tmp_path / "frames" / "deep.fits", long, DAY, np.mean(images[:10], axis=0))
    return line


@pytest.mark.parametrize("flare", [0.0, 30.0])
def test_a_deep_image_counts_for_the_quiet_level_alone(tmp_path, flare):
    """It is in no light curve that is judged and in no count; its flux is told by itself, and it sets the quiet level.

    Where one of its snapshots is bright the deep image shows that too, and is no measure of the quiet level.
    """
    line = deep_archive(tmp_path, flare)
    mine(*line, "--out", tmp_path / "run")
    rows = {str(row["name"]): row for row in Table.read(tmp_path / "run" / "channels.ecsv")}
    assert {(row["n_frames"], row["n_used"], row["n_deep"]) for row in rows.values()} == {(16, 16, 1)}
    steady, blank = rows["steady"], rows["flare"]
    assert abs(steady["deep_flux"] - 3.0) < 5 * steady["deep_flux_err"]
    # Ten snapshots make the deep image: its error is theirs over the root of ten.
    frame_error = steady["flux_mean_err"] * 16**0.5
    assert steady["deep_flux_err"] == pytest.approx(frame_error / 10**0.5, rel=0.15)
    assert abs(blank["deep_flux"] - flare / 10) < 5 * blank["deep_flux_err"]
    assert abs(blank["quiet_level"]) < 5 * blank["quiet_level_err"]
    last = (tmp_path / "run" / "summary.txt").read_text(encoding="utf-8")
    assert "related: 1 deep image holds 10 of the other frames" in last
    assert (tmp_path / "run" / "rejects.ecsv").read_text(encoding="utf-8").count("duplicate_of") == 0
    curve = tmp_path / "flare.ecsv"
    assert cli.run_command(["lightcurve", "-q", str(tmp_path / "run"), "flare", "--out", str(curve)]) == 0
    measured = Table.read(curve)
    assert len(measured) == 17
    assert [str(path) for path in measured["path"][measured["deep"]]] == ["deep.fits[0,0]"]


def test_inventory_says_how_many_may_be_copies(tmp_path, capsys):
    """Headers alone tell pairs that may be one exposure, not which are."""
    original = scene(tmp_path).frame(copies.CAMERA, "")
    scene(tmp_path).frame(copies.CAMERA, "_other")
    shutil.copy(original, tmp_path / "t.fits")
    copies.SCENES["deep"](replace(scene(tmp_path), name="u"))
    assert cli.run_command(["inventory", "-q", str(tmp_path)]) == 0
    text = capsys.readouterr().out
    assert "possible duplicates: 3 pairs, compared when mined" in text
    assert "deep images that hold other frames: 1" in text
