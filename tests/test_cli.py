"""The command line as a newcomer meets it: each mistake ends with its status and one line that says how to mend it."""

import shutil
import subprocess
import sys
from pathlib import Path

import pytest

import skies
from hindlight import cli

TEXT = "name,ra,dec\na,150.0,-30.0\n"


@pytest.fixture(scope="module")
def archive(tmp_path_factory):
    """A tiny archive of one instrument, a target list, and a run made of them."""
    folder = tmp_path_factory.mktemp("cli")
    skies.write_sky(folder / "frames", skies.Sky(n_frames=10, size=80), [], seed=1)
    (folder / "targets.csv").write_text(TEXT, encoding="utf-8")
    (folder / "s.toml").write_text("[controls]\nper_field = 40\n", encoding="utf-8")
    command = ["mine", str(folder / "frames"), "--targets", str(folder / "targets.csv"), "--out", str(folder / "run")]
    assert cli.run_command([*command, "--settings", str(folder / "s.toml"), "-q"]) == 0
    return folder


def ends(capsys, arguments, status, *words):
    """The command ends with this status and one line on standard error that holds these words."""
    quiet = ["-q"] if arguments[0] == "mine" else []
    assert cli.run_command([str(a) for a in [*arguments, *quiet]]) == status
    lines = capsys.readouterr().err.splitlines()
    assert len(lines) == 1, lines
    for word in words:
        assert word in lines[0]


def test_no_such_folder(archive, tmp_path, capsys):
    """An archive folder that does not exist is named."""
    arguments = ["mine", tmp_path / "none", "--targets", archive / "targets.csv", "--out", tmp_path / "r"]
    ends(capsys, arguments, 2, "none", "folder")
    assert not (tmp_path / "r").exists()


def test_empty_folder_and_no_fits(archive, tmp_path, capsys):
    """A folder without FITS files ends with status 3 and leaves no run behind."""
    (tmp_path / "empty").mkdir()
    arguments = ["mine", tmp_path / "empty", "--targets", archive / "targets.csv", "--out", tmp_path / "r"]
    ends(capsys, arguments, 3, "no usable FITS image", "give a folder")
    (tmp_path / "empty" / "notes.txt").write_text("nothing", encoding="utf-8")
    (tmp_path / "empty" / "text.fits").write_text("nothing", encoding="utf-8")
    ends(capsys, arguments, 3, "1 files or HDUs were set aside")
    assert not (tmp_path / "r").exists()


def test_inventory_without_an_image(tmp_path, capsys):
    """No FITS file at all, and files that are all set aside: status 3; what was set aside is printed all the same."""
    ends(capsys, ["inventory", tmp_path, "-q"], 3, "no FITS file found")
    (tmp_path / "text.fits").write_text("nothing", encoding="utf-8")
    assert cli.run_command(["inventory", str(tmp_path), "-q"]) == 3
    said = capsys.readouterr()
    assert "not_fits" in said.out
    assert said.err.startswith("hindlight: archive ")
    assert "no usable FITS image found" in said.err


@pytest.mark.parametrize(
    ("name", "text", "words"),
    [
        ("t.dat", TEXT, "t.dat: the ending '.dat' names no format; give a table as .ecsv"),
        ("t.vot", TEXT, "t.vot: its content is not that of a .vot file; give"),
        ("t.csv", "", "t.csv: not readable as a table (it is empty)"),
    ],
)
def test_target_lists_in_no_known_format(archive, tmp_path, capsys, name, text, words):
    """The line is the program's own, without a library's list of formats."""
    (tmp_path / name).write_text(text, encoding="utf-8")
    assert cli.run_command(["inventory", str(archive / "frames"), "--targets", str(tmp_path / name)]) == 2
    said = capsys.readouterr().err
    assert words in said
    assert len(said) < 160 + len(str(tmp_path))


@pytest.mark.parametrize(
    ("text", "words"),
    [("name,ra\na,1\n", "no column 'dec'"), ("name,ra,dec\na,1,2\na,3,4\n", "'a' stands in row 1")],
    ids=["no-dec", "name-twice"],
)
def test_bad_target_lists(archive, tmp_path, capsys, text, words):
    """A target list without dec, and one with a name twice, are refused before the archive is read."""
    (tmp_path / "t.csv").write_text(text, encoding="utf-8")
    ends(capsys, ["mine", archive / "frames", "--targets", tmp_path / "t.csv", "--out", tmp_path / "r"], 2, words)


def test_misspelt_setting(archive, tmp_path, capsys):
    """A misspelt setting is refused with the nearest valid one."""
    (tmp_path / "s.toml").write_text("[detection]\nfalse_alarm = 0.1\n", encoding="utf-8")
    command = ["mine", archive / "frames", "--targets", archive / "targets.csv", "--out", tmp_path / "r"]
    ends(capsys, [*command, "--settings", tmp_path / "s.toml"], 2, "did you mean 'false_alarms'")


def test_plugin_that_does_not_import(archive, tmp_path, capsys):
    """A plugin file that does not import is named with what it raised."""
    (tmp_path / "p.py").write_text("import nothing_of_this_name\n", encoding="utf-8")
    command = ["mine", archive / "frames", "--targets", archive / "targets.csv", "--out", tmp_path / "r"]
    ends(capsys, [*command, "--plugin", tmp_path / "p.py"], 2, "p.py", "ModuleNotFoundError")


def test_output_folder_of_another_archive(archive, tmp_path, capsys):
    """A run is not continued with another archive."""
    shutil.copytree(archive / "frames", tmp_path / "other")
    command = ["mine", tmp_path / "other", "--targets", archive / "targets.csv", "--out", archive / "run"]
    ends(capsys, command, 2, "was made from archive", "another --out")


def test_output_folder_with_other_files(archive, tmp_path, capsys):
    """A folder that holds something else is not taken for a run."""
    (tmp_path / "r").mkdir()
    (tmp_path / "r" / "thesis.tex").write_text("years", encoding="utf-8")
    command = ["mine", archive / "frames", "--targets", archive / "targets.csv", "--out", tmp_path / "r"]
    ends(capsys, command, 2, "holds other files")


def test_settings_that_touch_measurements(archive, tmp_path, capsys):
    """A changed setting that touches measured values is refused, with the difference named."""
    (tmp_path / "s.toml").write_text(
        "[photometry]\nannulus_inner = 4.0\n[controls]\nper_field = 40\n", encoding="utf-8"
    )
    command = ["mine", archive / "frames", "--targets", archive / "targets.csv", "--out", archive / "run"]
    ends(capsys, [*command, "--settings", tmp_path / "s.toml"], 2, "annulus_inner was 3.0 and is now 4.0")


def test_target_that_no_frame_covers(archive, tmp_path, capsys):
    """Targets elsewhere on the sky end with status 3."""
    (tmp_path / "t.csv").write_text("name,ra,dec\na,10,10\n", encoding="utf-8")
    command = ["mine", archive / "frames", "--targets", tmp_path / "t.csv", "--out", tmp_path / "r"]
    ends(capsys, command, 3, "no target is covered")


@pytest.mark.parametrize(
    ("arguments", "words"),
    [
        (["lightcurve", "RUN", "b"], "no target 'b'"),
        (["lightcurve", "RUN", "a", "--out", "x.doc"], "unknown ending"),
        (["lightcurve", "nowhere", "a"], "no run here"),
        (["mine", "x"], "Missing option"),
        (["minne"], "No such command"),
    ],
)
def test_other_slips(archive, capsys, arguments, words):
    """Slips in the other commands are one line too."""
    ends(capsys, [archive / "run" if a == "RUN" else a for a in arguments], 2, words)


def test_lightcurve_in_every_format(archive, tmp_path):
    """The light curve is written in each format and read back with the same fluxes."""
    from astropy.table import Table

    for ending, form in ((".ecsv", "ascii.ecsv"), (".fits", "fits"), (".vot", "votable"), (".csv", "ascii.csv")):
        path = tmp_path / f"l{ending}"
        assert cli.run_command(["lightcurve", str(archive / "run"), "a", "--out", str(path), "-q"]) == 0
        table = Table.read(path, format=form)
        assert len(table) == 10
        assert {"flux", "raw_flux", "bjd_tdb", "detected"} <= set(table.colnames)
    assert cli.run_command(["lightcurve", str(archive / "run"), "a", "--out", str(tmp_path / "l.parquet"), "-q"]) == 0


def test_parquet_is_read_as_the_readme_says(archive, tmp_path):
    """Without pandas, by pyarrow."""
    import pyarrow.parquet as pq
    from astropy.table import Table

    path = tmp_path / "lc.parquet"
    assert cli.run_command(["lightcurve", str(archive / "run"), "a", "--out", str(path), "-q"]) == 0
    curve = Table(pq.read_table(path).to_pydict())
    assert len(curve) == 10
    assert curve["flux"].dtype == float


def test_the_light_curve_of_a_target_that_no_frame_covers(archive, tmp_path, capsys):
    """Its table has no rows, which is said; also where the target came to a run that this process has read before."""
    shutil.copytree(archive / "run", tmp_path / "run")
    assert cli.run_command(["lightcurve", str(tmp_path / "run"), "a"]) == 0
    assert "no rows" not in capsys.readouterr().err
    (tmp_path / "t.csv").write_text(TEXT + "far,10,10\n", encoding="utf-8")
    command = ["mine", str(archive / "frames"), "--targets", str(tmp_path / "t.csv"), "--out", str(tmp_path / "run")]
    assert cli.run_command([*command, "-q"]) == 0
    assert cli.run_command(["lightcurve", str(tmp_path / "run"), "far"]) == 0
    assert "no frame of the run covers far: the table has no rows" in capsys.readouterr().err


def test_settings_printed_are_read_back(tmp_path, capsys):
    """What `hindlight settings` prints is a settings file."""
    from hindlight.settings import Settings, read_settings

    assert cli.run_command(["settings"]) == 0
    path = tmp_path / "s.toml"
    path.write_text(capsys.readouterr().out, encoding="utf-8")
    assert read_settings(path).controls == Settings().controls


@pytest.mark.parametrize("command", sorted(cli.cli.commands))
def test_every_command_has_help(command, capsys):
    """--help ends with status 0 and says what the command does."""
    assert cli.run_command([command, "--help"]) == 0
    assert cli.cli.commands[command].help.split(".")[0].split()[0] in capsys.readouterr().out


def test_a_second_process_is_refused_while_the_first_works(archive):
    """Two processes in one run folder: the second is told host and process of the first, with status 2."""
    from hindlight.store import RunFolder

    command = [sys.executable, "-m", "hindlight", "mine", str(archive / "frames"), "--targets",
               str(archive / "targets.csv"), "--out", str(archive / "run")]  # fmt: skip
    with RunFolder(Path(archive / "run")).locked():
        done = subprocess.run(command, capture_output=True, text=True, check=False)
    assert done.returncode == 2
    assert "in use by host" in done.stderr
    done = subprocess.run(command, capture_output=True, text=True, check=False)
    assert done.returncode == 0
