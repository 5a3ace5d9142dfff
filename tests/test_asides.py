"""What was asked for and is of no use is said, with what may have been meant; what is of use is not mentioned."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import pytest

import skies
from hindlight import asides, blocks, cli, host, reading
from hindlight.positions import read_targets
from hindlight.settings import Settings, settings_from
from hindlight.store import RunFolder

NORTH = {"instrument": "north*", "site": [5195675.767, 1891071.326, -3170873.735]}


def read(*entries: dict[str, Any]) -> tuple[blocks.FrameBlock, ...]:
    """Blocks of settings."""
    return blocks.read_blocks(entries, {}, "t")


def listed(tmp_path: Path, header: str) -> tuple[str, ...]:
    """What is said of a target list with these columns."""
    row = ",".join("1" for _ in header.split(","))
    (tmp_path / "t.csv").write_text(f"{header}\n{row}\n", encoding="utf-8")
    return asides.unused_columns("target list", read_targets(tmp_path / "t.csv"))


def test_a_block_that_fits_no_frame_is_named() -> None:
    """By number and conditions; blocks of which a fact was used, or had no place, or that have none, are not."""
    given = read(
        {"instrument": "A", "unit": "adu"}, {"instrument": "DOMCAM", "path": "x/*", "unit": "adu"},
        {"band": "R", "where_missing": True}, {"instrument": "B"}, {"instrument": "C", "site": NORTH["site"]},
    )  # fmt: skip
    words = ["no_beam: w; set_by_user: unit (block 1)", "set_without_effect: site (block 5)", ""]
    said = asides.idle_blocks(given, words)
    assert len(said) == 2
    assert said[0].startswith('[[frames]] block 2 (instrument = "DOMCAM", path = "x/*") fits no usable frame')
    assert said[1].startswith("[[frames]] block 3 (all frames) is used for no frame: none fits it, or headers")


def test_a_block_whose_facts_later_ones_give_may_fit() -> None:
    """It is not said to fit nothing where that is not known."""
    said = asides.idle_blocks(
        read({"instrument": "A", "unit": "adu"}, {"unit": "mJy"}), ["set_by_user: unit (block 2)"]
    )
    assert len(said) == 1
    assert "block 1" in said[0]
    assert "later blocks say all" in said[0]


@pytest.mark.parametrize(
    ("header", "words"),
    [
        ("name,ra,dec,pos_er", "columns not used: pos_er (did you mean pos_err?)"),
        ("Name,ra,dec", "Name (did you mean name?)"),
        ("name,ra,dec,mag,pmRA", "pmRA (did you mean pm_ra_cosdec?), mag"),
        ("ra,dec," + ",".join(f"zz{k}" for k in range(10)), "zz6, zz7 and 2 more"),
    ],
)
def test_columns_that_nobody_reads_are_named(tmp_path: Path, header: str, words: str) -> None:
    """Near names first, each with the one that may be meant."""
    (said,) = listed(tmp_path, header)
    assert said.endswith(words)


def test_columns_that_are_read_are_not(tmp_path: Path) -> None:
    """Nor is the flux of comparisons."""
    assert listed(tmp_path, "name,ra,dec,pos_err,dm") == ()
    (tmp_path / "c.csv").write_text("ra,dec,flux\n1,2,3\n", encoding="utf-8")
    assert read_targets(tmp_path / "c.csv", fluxes=True).unused == ()


def test_targets_at_one_place_are_named(tmp_path: Path) -> None:
    """Across ra = 0 too; an arcsecond and more apart they are two."""
    rows = ["a,359.9999,5", "b,0,5", "c,0.0001,5", "d,10,5", "e,10,5.0005"]
    (tmp_path / "t.csv").write_text("name,ra,dec\n" + "\n".join(rows) + "\n", encoding="utf-8")
    (said,) = asides.same_places(read_targets(tmp_path / "t.csv"))
    assert said == "targets at one place (within 1 arcsec): a, b, c; each counts as a trial in every q-value"
    assert asides.same_places(None) == ()


def test_bounds_of_frequencies_are_those_of_headers() -> None:
    """One number would not be believed in a header and taken from the settings."""
    assert blocks.FREQUENCIES_HZ == reading.FREQUENCIES_HZ


@pytest.fixture(scope="module")
def folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A small archive, a target list with a misspelt column, settings with a block that fits and one that does not."""
    where = tmp_path_factory.mktemp("asides")
    skies.write_sky(where / "frames", skies.Sky(n_frames=10, size=80), [], seed=1)
    (where / "t.csv").write_text("name,ra,dec,pos_er\na,150.0,-30.0,1\nb,150.005,-30.0,1\n", encoding="utf-8")
    (where / "s.toml").write_text(
        '[controls]\nper_field = 40\n[[frames]]\ninstrument = "north*"\nband = "L"\n'
        '[[frames]]\ninstrument = "DOMCAM"\nunit = "adu"\n',
        encoding="utf-8",
    )
    return where


def arguments(folder: Path, run: Path) -> list[str]:
    """Of `mine`."""
    return ["mine", str(folder / "frames"), "--targets", str(folder / "t.csv"), "--out", str(run)]


def test_both_commands_say_it(folder: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """`inventory` and `mine` name block and column; a run that is continued, and reads no header again, the same."""
    settings = ["--settings", str(folder / "s.toml")]
    inventory = ["inventory", str(folder / "frames"), "--targets", str(folder / "t.csv"), *settings]
    for command in (inventory, *[[*arguments(folder, tmp_path / "run"), *settings]] * 2):
        assert cli.run_command(command) == 0
        said = capsys.readouterr().out
        assert '[[frames]] block 2 (instrument = "DOMCAM") fits no usable frame' in said
        assert "block 1" not in said
        assert "target list: columns not used: pos_er (did you mean pos_err?)" in said


def test_a_run_that_is_continued_says_what_holds_unasked(
    folder: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    """Its own settings, a target that the list has no longer, a file that is gone; on a new run nothing of this."""
    (tmp_path / "frames").mkdir()
    for path in (folder / "frames").iterdir():
        (tmp_path / "frames" / path.name).write_bytes(path.read_bytes())
    (tmp_path / "t.csv").write_bytes((folder / "t.csv").read_bytes())
    words = ("settings: none were given", "not in this one", "vanished", "completeness tables")
    command = arguments(tmp_path, tmp_path / "run")
    assert cli.run_command([*command, "--settings", str(folder / "s.toml")]) == 0
    assert not any(word in capsys.readouterr().out for word in words)
    (tmp_path / "t.csv").write_text("name,ra,dec\nb,150.005,-30.0\n", encoding="utf-8")
    next((tmp_path / "frames").iterdir()).unlink()
    assert cli.run_command(command) == 0
    said = capsys.readouterr().out
    assert f"those of the run hold ({tmp_path}/run/settings.toml: [controls], [[frames]])" in said
    assert (
        "1 target of an earlier list is not in this one (a): still in the tables, and counted in every q-value" in said
    )
    assert "set aside: 1 vanished (rejects.ecsv)" in said
    assert "completeness" not in said


def test_defaults_of_a_run_are_not_worth_a_line(tmp_path: Path) -> None:
    """Where the run has no settings of its own nothing is borrowed; a plugin's setting is."""
    run = RunFolder(tmp_path)
    for settings in (Settings(), settings_from({"plugin": {"ghost": {}}}, "t")):
        assert asides.borrowed_settings(run, settings, host.load(host.spec_from(settings))) == ()
    settings = settings_from({"plugin": {"ghost": {"min_snr": 9.0}}}, "t")
    (said,) = asides.borrowed_settings(run, settings, host.load(host.spec_from(settings)))
    assert said.endswith("settings.toml: [plugin.ghost])")


def test_many_targets_that_are_gone_are_counted(tmp_path: Path) -> None:
    """A few are named."""
    (tmp_path / "t.csv").write_text("name,ra,dec\nt0,1,1\n", encoding="utf-8")
    names = np.array([f"t{k}" for k in range(12)] + [""], dtype=object)
    positions = {"name": names, "kind": np.array(["target"] * 12 + ["control"], dtype=object)}
    (said,) = asides.earlier_targets(positions, read_targets(tmp_path / "t.csv"))
    assert said.startswith("11 targets of earlier lists are not in this one (t1, ")
    assert "t8 and 3 more)" in said
