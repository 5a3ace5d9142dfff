"""`hindlight inventory` as a working page, and `mine` with what a user knows: as typed at a terminal."""

from __future__ import annotations

import re
from pathlib import Path

import numpy as np
import pyarrow.parquet as pq
import pytest
from astropy.io import fits
from astropy.table import Table

import skies
from hindlight import cli
from hindlight.schema import ASSUMPTIONS
from hindlight.summary import Coverage, Missing, _counts, settings_to_fill_in, timeline
from made import write

TITLE = "# what headers do not say"


def inventory(capsys: pytest.CaptureFixture[str], folder: Path, settings: Path | None = None) -> str:
    """What the command prints."""
    more = [] if settings is None else ["--settings", str(settings)]
    assert cli.run_command(["inventory", "-q", str(folder), *more]) == 0
    return capsys.readouterr().out


def counts(text: str) -> dict[str, int]:
    """The words taken for granted and how often, as printed."""
    section = text.split("taken for granted")[1].split(TITLE)[0]
    return {word: int(n) for n, word in re.findall(r"^(\d+) +(\w+)", section, re.MULTILINE)}


@pytest.fixture
def archive(tmp_path: Path) -> Path:
    """Two instruments over some years: one silent on nearly everything, one with gaps in every other frame."""
    folder = tmp_path / "archive"
    bare = {"BUNIT": None, "BMAJ": None, "FREQ": None, "STOKES": None, "OBSGEO__X": None, "INSTRUME": "cam [1]"}
    for i in range(6):
        silent = {"EXPTIME": None, "TIMESYS": None} if i % 2 else {}
        write(folder / f"old/a{i}.fits", DATE__OBS=f"19{80 + i}-05-05T00:00:00", EXPTIME=None, **bare)
        write(folder / f"new/b{i}.fits", DATE__OBS=f"{2000 + i}-05-05T00:00:00", **silent)
    write(folder / "new/c.fits", DATE__OBS=None)
    return folder


def test_the_page(archive: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """Timeline, what was assumed, and what is missing are on the page, in plain letters where it goes to a file."""
    text = inventory(capsys, archive)
    assert text.isascii()
    lines = text.splitlines()
    (axis,) = [i for i, line in enumerate(lines) if line.startswith("frames a year, from 1 (.) to 1 (.)")]
    assert lines[axis + 1].split() == ["1980", "1990", "2000"]
    first = lines[axis + 1].index("1980")
    assert lines[axis + 2][first:] == "......"
    assert lines[axis + 2].startswith("cam [1]")
    assert lines[axis + 3][first:] == " " * 20 + "......  and 1 without a date"
    assert counts(text) == {
        "primary_beam_unknown": 7, "no_beam": 6, "no_exposure": 9, "no_unit": 6, "geocentre": 6, "scale_assumed": 3,
        "no_clock": 1,
    }  # fmt: skip


def test_what_is_missing_can_be_pasted_and_filled_in(
    archive: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    """The printed blocks are valid settings as they are; with values in them every such assumption is gone."""
    text = inventory(capsys, archive)
    pasted = TITLE + text.split(TITLE)[1]
    settings = tmp_path / "s.toml"
    settings.write_text(pasted, encoding="utf-8")
    assert counts(inventory(capsys, archive, settings)) == counts(text)
    values = {
        "site": "[5195675.767, 1891071.326, -3170873.735]", "exposure_s": "60.0", "unit": '"adu"', "beam_arcsec": "90.0",
        "time_scale": '"utc"', "primary_beam": '"corrected"',
    }  # fmt: skip
    filled = re.sub(r'^# (\w+) = ""', lambda m: f"{m[1]} = {values[m[1]]}", pasted, flags=re.MULTILINE)
    assert filled.count("where_missing = true") == 1
    settings.write_text(filled, encoding="utf-8")
    after = inventory(capsys, archive, settings)
    assert counts(after) == {"set_by_user": 13, "no_clock": 1}
    assert TITLE not in after
    # What only some frames lacked is as it was in the others.
    assert re.search(r"north array\S* +7 .* 120 ", after)


def test_a_value_that_was_not_filled_in_is_refused(
    archive: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    """Each line whose sign of comment is taken away without a value is refused by block and key."""
    pasted = inventory(capsys, archive).split(TITLE)[1]
    for line in re.findall(r'^# \w+ = "".*$', pasted, re.MULTILINE):
        (tmp_path / "s.toml").write_text(f"[[frames]]\n{line[2:]}\n", encoding="utf-8")
        assert cli.run_command(["inventory", "-q", str(archive), "--settings", str(tmp_path / "s.toml")]) == 2
        (error,) = capsys.readouterr().err.splitlines()
        assert f"[[frames]] block 1 {line.split()[1]}: expected" in error


def test_the_example_of_a_site_says_how(archive: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """A site left empty is refused with the two ways to give one, and the line shows both."""
    (line,) = re.findall(r"^# site = .*$", inventory(capsys, archive), re.MULTILINE)
    assert line.endswith('as "north hill", or { lat = -30.1, lon = 20.4, height = 1200.0 }')
    (tmp_path / "s.toml").write_text(f"[[frames]]\n{line[2:]}\n", encoding="utf-8")
    assert cli.run_command(["inventory", "-q", str(archive), "--settings", str(tmp_path / "s.toml")]) == 2
    (error,) = capsys.readouterr().err.splitlines()
    assert "site: expected the name of a site of [sites], or [x, y, z] in metres" in error
    assert error.endswith("""got ''; fill it in, as site = "north hill\"""")


@pytest.mark.parametrize(
    ("cards", "example"),
    [
        ({"FILTER": "R", "FREQ": None, "BMAJ": None}, '"adu"'),
        ({}, '"Jy/beam"'),
        ({"FREQ": None, "STOKES": None}, '"adu" or "Jy/beam"'),
    ],
)
def test_the_example_of_a_unit_is_of_the_kind(
    tmp_path: Path, capsys: pytest.CaptureFixture[str], cards: dict[str, object], example: str
) -> None:
    """Counts for a camera, a brightness for an array, both where nothing tells."""
    write(tmp_path / "a/a.fits", BUNIT=None, **cards)
    (line,) = re.findall(r"^# unit = .*$", inventory(capsys, tmp_path / "a"), re.MULTILINE)
    assert line == f'# unit = ""  # all 1 frames: of the pixels, as {example}'


def test_each_word_names_a_file(archive: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """The first by path of the files that a word is said of, for what is set aside too."""
    (archive / "old/empty.fits").write_bytes(b"")
    text = " ".join(inventory(capsys, archive).split())
    for word, path in (("geocentre", "old/a0.fits"), ("scale_assumed", "new/b1.fits"), ("no_clock", "new/c.fits")):
        assert re.search(rf" {word} [^()]*(\([^()]*\)[^()]*)*\(as in {path}\)", text)
    assert re.search(r" empty_file [^()]*\(as in old/empty.fits\)", text)


def test_long_paths_keep_their_end() -> None:
    """What is cut off is the beginning, so that sentence, path and closing bracket fit a cell of the page."""
    words = "; ".join(f"{word}: {sentence}" for word, sentence in ASSUMPTIONS.items())
    for entry in _counts([("deep/" * 40 + "name.fits", words)], ASSUMPTIONS):
        assert entry.meaning.endswith("deep/deep/name.fits)")
        assert "(as in ...ep/deep/" in entry.meaning
        assert len(entry.meaning) <= cli.LONGEST_CELL


def test_years_of_two_digits_are_asked_about(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """The block that is printed moves frames of 1924 by a century and leaves the same instrument's others alone."""
    folder = tmp_path / "a"
    write(folder / "a.fits", DATE__OBS="17/03/24", UT="06:00:00")
    write(folder / "b.fits", DATE__OBS="2023-03-17T06:00:00")
    write(folder / "c.fits", DATE__OBS="18/03/24")
    text = inventory(capsys, folder)
    pasted = text.split(TITLE)[1].split("\n", 1)[1].replace("# clock", "clock")
    assert 'to = "1930-01-01"\nclock_offset_s = 3155760000.0  # 1 of 3 frames' in pasted
    assert re.search(r" 1924-03-17 +2023-03-17 ", text)
    (tmp_path / "s.toml").write_text(pasted, encoding="utf-8")
    after = inventory(capsys, folder, tmp_path / "s.toml")
    assert "clock_offset_s = 3" not in after.split("taken for granted")[1].partition(TITLE)[2]
    assert re.search(r" 1924-03-18 +2024-03-17 ", after)  # a date without a time of day cannot be moved


def test_timelines_fit_their_width() -> None:
    """Years are taken together, by 2, 5, 10..., until the columns fit; no frame is lost."""
    rows = [Coverage("a", {1899: 1, 1950: 2}, 0), Coverage("b", {2004: 3}, 4)]
    for width, step, first in ((200, 1, 1899), (106, 1, 1899), (105, 2, 1898), (20, 10, 1890), (12, 10, 1890)):
        found = timeline(rows, width)
        assert (found.step, found.first) == (step, first)
        assert [(name, sum(n)) for name, n in found.rows] == [("a", 3), ("b", 3)]
        assert len(found.rows[0][1]) <= width
    assert timeline([], 50).rows == ()


def test_nothing_missing_prints_nothing() -> None:
    """No block is made up where headers say everything."""
    assert settings_to_fill_in([]) == ""
    assert settings_to_fill_in([Missing('q"\\', 2, {"unit": 2})]).startswith(
        '[[frames]]\ninstrument = "q\\"\\\\"\n# unit'
    )


# --- mine


@pytest.fixture(scope="module")
def runs(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A small archive without and with companions, mined; gains of 0.5, a noise map of 2 for every frame but two."""
    folder = tmp_path_factory.mktemp("mine")
    sky = skies.Sky(n_frames=10, size=80, jitter_pixels=0.0)
    source = skies.Source("a", 30.0, 20.0, 20.0)
    for name in ("plain", "rich"):
        skies.write_sky(folder / name, sky, [source], seed=1)
    for i in range(10):
        (folder / "rich/rms").mkdir(exist_ok=True)
        size = 79 if i == 4 else 80
        fits.PrimaryHDU(np.full((80, size), 0.5)).writeto(folder / f"rich/frame{i:04d}.pb.fits")
        if i != 3:
            fits.PrimaryHDU(np.full((80, 80), 2.0)).writeto(folder / f"rich/rms/frame{i:04d}.fits")
    (folder / "targets.csv").write_text(skies.target_text([source], sky), encoding="utf-8")
    (folder / "plain.toml").write_text("[controls]\nper_field = 40\n", encoding="utf-8")
    (folder / "rich.toml").write_text(
        '[controls]\nper_field = 40\n[companions]\nprimary_beam = "{stem}.pb.fits"\nrms = "rms/{name}"\n'
        "[sites]\nhill = { lat = -30.0, lon = 20.0, height = 1000.0 }\n"
        '[[frames]]\npath = "frame000?.fits"\nsite = "hill"\n',
        encoding="utf-8",
    )
    for name in ("plain", "rich"):
        mine(folder, name)
    return folder


def mine(folder: Path, name: str, settings: str = "", status: int = 0) -> None:
    """Run the job on one of the archives."""
    command = [
        "mine",
        "-q",
        str(folder / name),
        "--targets",
        str(folder / "targets.csv"),
        "--out",
        str(folder / f"{name}-run"),
    ]
    assert cli.run_command([*command, "--settings", str(folder / (settings or f"{name}.toml"))]) == status


def target_rows(run: Path) -> dict[int, dict[str, float]]:
    """The measurements of the target by frame number (files are in order)."""
    frames = pq.read_table(run / "frames.parquet").to_pydict()
    number = {f: int(path[5:9]) for f, path in zip(frames["id"], frames["path"], strict=True)}
    rows = [row for part in (run / "measurements").rglob("*.parquet") for row in pq.read_table(part).to_pylist()]
    return {number[row["frame"]]: row for row in rows if row["position"] == 0}


def test_companions_change_what_is_measured(runs: Path) -> None:
    """Half the gain doubles the flux; the noise map's 2 stands in the error; a misfit sets its frame aside."""
    plain, rich = target_rows(runs / "plain-run"), target_rows(runs / "rich-run")
    assert sorted(plain) == list(range(10))
    assert sorted(rich) == [i for i in range(10) if i != 4]
    for i, row in rich.items():
        rms = 2.0 if i != 3 else plain[i]["rms"]
        assert row["flux"] == pytest.approx(plain[i]["flux"] / 0.5, rel=1e-9)
        assert row["flux_err"] == pytest.approx(plain[i]["flux_err"] * rms / plain[i]["rms"] / 0.5, rel=1e-9)
        assert (row["gain"], row["rms"]) == (0.5, rms)
        assert row["channel"] == plain[i]["channel"] + "|corrected"
    rejects = Table.read(runs / "rich-run/rejects.ecsv")
    reasons = [str(reason) for reason in rejects["reason"]]
    assert (reasons.count("companion"), reasons.count("bad_companion")) == (19, 1)
    (misfit,) = [row for row in rejects if row["reason"] == "bad_companion"]
    assert (misfit["path"], "frame0004.pb.fits has 79 x 80 pixels, expected 80 x 80" in misfit["detail"]) == (
        "frame0004.fits", True,
    )  # fmt: skip


def test_blocks_are_kept_by_the_run_and_cannot_change(runs: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """The run's own settings.toml continues it; another site for its frames is refused with the difference."""
    frames = pq.read_table(runs / "rich-run/frames.parquet").to_pydict()
    assert all("set_by_user: site (block 1)" in text for text in frames["assumptions"])
    mine(runs, "rich", "rich-run/settings.toml")
    assert len(Table.read(runs / "rich-run/rejects.ecsv")) == 20
    text = (runs / "rich.toml").read_text(encoding="utf-8").replace('site = "hill"', "exposure_s = 3.0")
    (runs / "other.toml").write_text(text, encoding="utf-8")
    mine(runs, "rich", "other.toml", 2)
    assert "[frames] block 1 was" in capsys.readouterr().err


def test_a_wrong_block_is_one_line(runs: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """A misspelt key ends with status 2 and one line with block, key and the nearest valid one."""
    (runs / "bad.toml").write_text('[[frames]]\nunit = "K"\n[[frames]]\nexposure = 3.0\n', encoding="utf-8")
    mine(runs, "plain", "bad.toml", 2)
    (line,) = capsys.readouterr().err.splitlines()
    assert "bad.toml: [[frames]] block 2: no key 'exposure'; did you mean 'exposure_s'?" in line
