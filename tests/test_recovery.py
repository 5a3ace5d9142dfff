"""`hindlight completeness` and `plugins --power` on a small archive: tables, their bytes, what is said, and mistakes."""

import re
import shutil
from pathlib import Path
from types import SimpleNamespace

import numpy as np
import pytest
from astropy.table import Table

import skies
from hindlight import Column, Statistic, cli, completeness, planted, powers, recovered, recovery, report_card, trials
from hindlight import study as study_module
from hindlight.judge import Judgement
from hindlight.order import book
from hindlight.store import RunFolder
from hindlight.study import Asked
from test_estimators import study

GRID = """[completeness]
per_cell = 6
fluxes = [2.0, 60.0]
pulse_periods = [1200.0]
duty_cycles = [0.3]
smooth_periods = [864000.0]
pixels = 6
"""
RUN = "[controls]\nper_field = 60\n[ranking]\nlevel = 0.2\n"
RADIO = skies.Sky(n_frames=14, size=90, first_day=50000.0, last_day=53000.0)
OPTICAL = skies.Sky(
    "old camera", n_frames=14, size=90, unit="adu", noise="white", rms=40.0, exposure_s=600.0, first_day=44000.0,
    last_day=46500.0, extra={"GAIN": 3.0},
)  # fmt: skip


@pytest.fixture(scope="module")
def archive(tmp_path_factory):
    """Two instruments in two decades each, blank targets, a finished run, and a settings file with a small grid."""
    folder = tmp_path_factory.mktemp("recovery")
    blank = skies.lattice(4, 150.0)
    for number, sky in enumerate((RADIO, OPTICAL)):
        skies.write_sky(folder / "frames", sky, [], number + 1, prefix=f"i{number}-")
    (folder / "targets.csv").write_text(skies.target_text(blank, RADIO), encoding="utf-8")
    (folder / "s.toml").write_text(RUN, encoding="utf-8")
    (folder / "grid.toml").write_text(GRID, encoding="utf-8")
    command = ["mine", folder / "frames", "--targets", folder / "targets.csv", "--out", folder / "run",
               "--settings", folder / "s.toml", "--workers", 1, "-q"]  # fmt: skip
    assert cli.run_command([str(a) for a in command]) == 0
    return folder


@pytest.fixture(scope="module")
def report(archive):
    """What the command makes of the run."""
    return recovery.recover(Asked(archive / "run", archive / "grid.toml", workers=1), cli._Silent())


def test_subsets_and_cells(report):
    """A row for each cell in all frames, each instrument, each of its decades; every source is counted."""
    table = report.table
    assert sorted(set(table["subset"])) == [
        "all", "north array", "north array 1990s", "north array 2000s", "old camera", "old camera 1970s",
        "old camera 1980s",
    ]  # fmt: skip
    assert len(table) == 7 * 5
    assert set(table["n_injected"]) == {6}
    frames = {str(row["subset"]): int(row["n_frames"]) for row in table}
    assert frames["all"] == 28
    assert frames["north array 1990s"] + frames["north array 2000s"] == 14
    assert set(table["kind"]) == {"nothing", "pulses", "smooth"}


def test_bright_smooth_sources_are_found_where_frames_are_enough(report):
    """60 sigma: always in all frames and in each instrument; a decade of fewer than 8 frames decides nothing."""
    table = report.table
    bright = table[(table["kind"] == "smooth") & (table["flux"] == 60.0)]
    for row in bright:
        expected = 6 if row["median_used"] >= 8 else 0
        assert row["n_recovered"] == expected, row
        assert row["n_seen"] == 6
    assert (bright["median_used"] < 8).any(), "no subset is too small: the test shows less than it says"
    faint = table[(table["kind"] == "nothing")]
    assert (faint["median_snr"] == 0).all()
    assert faint["n_recovered"].sum() <= 4


def test_what_is_said(report):
    """The last lines say what recovery means, what was left out, and what pixels have shown."""
    said = "\n".join(report.remarks)
    for words in ("recovered means: p below", "period searches are left out", "proved on", "upper bound", "Stokes Q"):
        assert words in said
    assert report.table.meta["p_value_bar"] > 0
    assert sorted(report.table.meta["median_frame_error"].values()) == pytest.approx([1.0, 40 * 4.3], rel=0.25)


def test_unseen_targets_have_limits(report):
    """Epochs are independent looks: the limit of a source that none could miss is that of so many looks."""
    unseen = report.targets[report.targets["standing"] == "unseen"]
    assert len(unseen) >= 3
    for row in unseen:
        assert row["n_looks"] == row["n_used"] == 28
        assert row["lowest_duty_limit"] == pytest.approx(1 - 0.05 ** (1 / 28), abs=1e-6)
        assert 1 < row["flux_limit_half"] < row["flux_limit_tenth"] or np.isnan(row["flux_limit_tenth"])
        mine = report.limits[report.limits["name"] == row["name"]]
        assert mine["flux"].tolist() == [2.0, 60.0]
        assert mine["duty_limit"][1] == pytest.approx(row["lowest_duty_limit"])
    seen = report.targets[report.targets["standing"] != "unseen"]
    assert np.isnan(np.asarray(seen["lowest_duty_limit"], float)).all()


def test_unseen_targets_have_limits_in_each_channel(report):
    """In the channel's own unit, of its own frames: a steady source is seen in fewer of them than of all channels' looks."""
    targets = {str(row["name"]): row for row in report.targets}
    assert len(report.channels) == 2 * (report.targets["standing"] == "unseen").sum()
    for row in report.channels:
        radio = "north" in row["channel"]
        assert row["flux_unit"] == ("Jy/beam" if radio else "adu")
        assert row["fluence_unit"] == ("Jy/beam s" if radio else "adu")
        assert row["frame_error"] == pytest.approx(1.0 if radio else 40 * 4.3, rel=0.3)
        assert (row["n_used"], row["n_looks"]) == (14, 14)
        exposure = RADIO.exposure_s if radio else OPTICAL.exposure_s
        assert row["exposure"] == pytest.approx(14 * exposure)
        assert row["duty_limit"] == pytest.approx((1 - 0.05 ** (1 / 14)) / 0.977, rel=0.05)
        assert row["rate_limit"] == pytest.approx(86400 * 2.9957 / (14 * exposure) / 0.977, rel=0.05)
        assert row["flux_limit_half"] > targets[str(row["name"])]["flux_limit_half"] * row["frame_error"]
        assert str(row["sentence"]).startswith("no pulse of fluence >= ")


def test_known_ephemeris_makes_looks_cycles(archive, tmp_path):
    """With a period of 100 days there are at most as many looks as cycles, and only frames in the window count."""
    text = (archive / "targets.csv").read_text(encoding="utf-8").splitlines()
    lines = [text[0] + ",period,epoch,window", *[line + ",8640000,2451545.0,4320000" for line in text[1:]]]
    (tmp_path / "t.csv").write_text("\n".join(lines) + "\n", encoding="utf-8")
    from hindlight.positions import read_targets

    targets = read_targets(tmp_path / "t.csv")
    _, order, _ = study_module.opened(Asked(archive / "run"))
    positions = book(order.run, order.version).positions
    ids = positions["id"][positions["kind"] == "target"]
    channels = Table.read(archive / "run" / "channels.ecsv")
    limits = dict.fromkeys({str(c) for c in channels["channel"]}, (5.0, 0.0))
    given = recovered._ephemeris(targets, targets.names[0])
    (looks, cycles), = trials.looks_of(order, ids[:1], [limits], [given])  # fmt: skip
    assert cycles
    assert looks.n < 28
    assert 0 < (looks.share > 0).sum() < 28
    assert looks.share.max() == pytest.approx(600 / 4320000, rel=1e-6)


def test_same_bytes_with_two_workers(archive, tmp_path):
    """The tables do not depend on who did the work."""
    names = [
        f"completeness{which}{ending}"
        for which in ("", "_targets", "_limits", "_channels")
        for ending in (".ecsv", ".vot")
    ]
    made = []
    for workers in ("1", "2"):
        command = ["completeness", str(archive / "run"), "--settings", str(archive / "grid.toml"), "--workers", workers]
        assert cli.run_command([*command, "-q"]) == 0
        made.append([(archive / "run" / name).read_bytes() for name in [*names, "completeness.txt"]])
    assert made[0] == made[1]


def test_tables_of_the_run_as_it_was_are_said_to_be_so(archive, tmp_path, capsys):
    """Not while the run is what they were made of; after a target came, and until they are made again, always."""
    shutil.copytree(archive / "run", tmp_path / "run")
    targets = tmp_path / "t.csv"
    targets.write_bytes((archive / "targets.csv").read_bytes())
    mine = ["mine", archive / "frames", "--targets", targets, "--out", tmp_path / "run", "--workers", "1"]
    again = ["completeness", tmp_path / "run", "--settings", archive / "grid.toml", "--workers", "1", "-q"]

    def said(command):
        assert cli.run_command([str(a) for a in command]) == 0
        return "completeness tables are of the run as it was" in capsys.readouterr().out

    said(again)
    assert not said(mine)
    with targets.open("a", encoding="utf-8") as stream:
        stream.write("later,150.0,-30.01\n")
    assert said(mine)
    assert said(mine)
    said(again)
    assert not said(mine)


def test_sources_added_to_pixels(archive):
    """Radio and optical frames as stored: the flux rises by what is added to light curves; so do floats, exactly."""
    _, order, _ = study_module.opened(Asked(archive / "run"))
    tables = book(order.run, order.version)
    controls = tables.positions["id"][tables.positions["kind"] == "control"]
    proofs = [trials.plant_in_frame(order, int(frame), controls) for frame in tables.frames["id"][::4]]
    assert {str(u) for u in tables.frames["unit"][::4]} == {"Jy/beam", "adu"}
    assert all(isinstance(proof, planted.Proof) for proof in proofs)
    for proof in proofs:
        assert abs(proof.linear) < 1e-6
        assert abs(proof.beyond_rounding) < 0.02
        assert abs(proof.difference) < 0.02
        assert 0.995 < proof.counted < 1.0001


def test_a_small_version_of_the_study_of_linearity(tmp_path):
    """Sources in stored pixels and in light curves: fluxes agree, and so do q-values, some of which are small."""
    linearity = study("linearity")
    result = linearity.measured(tmp_path, frames=12, side=4, seed=5, controls=400)
    assert len(result.differences) == 2
    for differ in result.differences.values():
        assert 1e-6 < np.abs(differ).max() < linearity.MOST
    moved = np.abs(np.log(result.by_pixels / result.by_curves))
    assert np.median(moved) < 0.02
    assert (moved > 0.2).sum() <= 1  # a control more or less at the smallest ranks moves p by columns over controls
    assert 2 <= (result.by_curves < linearity.LEVEL).sum() <= 14


def test_a_frame_that_is_gone_proves_nothing(archive, tmp_path, monkeypatch):
    """A file that is no longer there is left out of the proof, and that is said."""
    _, order, _ = study_module.opened(Asked(archive / "run"))
    tables = book(order.run, order.version)
    controls = tables.positions["id"][tables.positions["kind"] == "control"]

    def gone(*_args):
        raise FileNotFoundError("gone")

    monkeypatch.setattr(trials, "check_unchanged", gone)
    assert trials.plant_in_frame(order, int(tables.frames["id"][0]), controls) is None
    assert "no frame could be measured" in recovered.proof_remarks([None])[0]
    assert recovered.proof_remarks([planted.Proof(0.1, 0.01, 1e-9, 1.0), None])[0].startswith("proved on 1")
    assert recovered.proof_remarks([planted.Proof(0.1, 0.05, 1e-9, 1.0)])[0].startswith("NOT proved")


def test_with_period_search(archive, tmp_path):
    """Asked for, periods are searched of the sources that pass the gate, and nothing is said of their being left out."""
    text = GRID.replace("per_cell = 6", "per_cell = 1").replace("pixels = 6", "pixels = 0")
    (tmp_path / "g.toml").write_text(text + "period_search = true\n", encoding="utf-8")
    report = recovery.recover(Asked(archive / "run", tmp_path / "g.toml", workers=1), cli._Silent())
    assert report.table.meta["period_search"] is True
    assert "left out" not in "\n".join(report.remarks)
    assert "not proved on pixels: none asked" in report.remarks


def test_a_grid_without_pulse_trains(archive, tmp_path):
    """Smooth variables alone: targets are compared with these, and nothing warns."""
    text = GRID.replace("duty_cycles = [0.3]", "duty_cycles = []").replace("pixels = 6", "pixels = 0")
    (tmp_path / "g.toml").write_text(text, encoding="utf-8")
    report = recovery.recover(Asked(archive / "run", tmp_path / "g.toml", workers=1), cli._Silent())
    assert set(report.table["kind"]) == {"nothing", "smooth"}
    assert "smooth" in set(report.targets["like_kind"]) <= {"smooth", ""}


def test_report_cards(archive, capsys):
    """Each statistic's power by itself, at the rate that some sixty controls can tell."""
    cards, said = powers.report_cards(Asked(archive / "run", archive / "grid.toml", workers=1), cli._Silent())
    assert {"brightest", "chi_square", "mean_flux"} <= {card.plugin for card in cards}
    assert "NOT 0.001: that takes 999 controls" in said[0]
    power = {card.plugin: card.power for card in cards}
    assert power["chi_square"]["smooth"] >= 0.5
    assert power["chi_square"]["nothing"] <= 0.5
    assert all(card.cost_s > 0 for card in cards)
    assert "of 12 sources of kind 'pulses' and of 12 sources of kind 'smooth', over all fluxes of the grid" in said[1]
    n_controls = int(re.search(r"'nothing': the share of (\d+) controls without a source", said[1]).group(1))
    assert n_controls >= 40
    assert power["chi_square"]["nothing"] * n_controls == pytest.approx(
        round(power["chi_square"]["nothing"] * n_controls)
    )
    assert 0 < power["chi_square"]["nothing"] < 0.1
    half = {card.plugin: card.half for card in cards}
    assert 2 < half["chi_square"]["smooth"] < 60
    assert "mean_flux: asks whether a source is there" in said[2]
    assert {card.plugin for card in cards if card.only_here is None} == {"mean_flux"}
    silent = [name for name, of in power.items() if not any(share for kind, share in of.items() if kind != "nothing")]
    assert [line.partition(" ")[0] for line in said[3:-1]] == silent
    assert cli.run_command(["plugins", "--power", str(archive / "none")]) == 2


def test_report_cards_take_controls_of_second_passes():
    """A field's later controls are among those that sources are ranked among there, and not in completeness."""
    positions = {
        "id": np.arange(4), "kind": np.array(["target", "control", "control", "control"], object),
        "search": np.full(4, -1), "field": np.zeros(4, int), "added_for": np.array([-1, -1, -1, 0]),
        "ra": np.full(4, 10.0), "dec": np.arange(4.0), "name": np.array(["a", "", "", ""], object),
    }  # fmt: skip
    assert study_module.fields_of(positions)[0].ids.tolist() == [1, 2]
    found = study_module.fields_of(positions, every_control=True)[0]
    assert found.ids.tolist() == [1, 2, 3]
    assert (found.targets, found.target_ids.tolist(), len(found.vectors)) == (("a",), [0], 3)


def test_what_only_one_finds_is_counted_among_those_of_p_value():
    """One that asks about presence finds a source too, and takes it from nobody; the flux of half is by kind."""
    cells = [
        completeness.Cell("nothing", 0.0),
        *(completeness.Cell("smooth", flux, 100.0) for flux in (2.0, 2.0, 8.0, 8.0)),
    ]
    ranked, there = Column("x", "a number", unusual="high"), Column("x", "a number", unusual="high", about="presence")
    asked = [card_plugin("keen", ranked), card_plugin("present", there), card_plugin("slow", ranked)]
    hit = np.array([[0, 1, 0], [0, 1, 0], [1, 1, 0], [1, 1, 1], [1, 1, 1]], bool)
    false = np.array([[0, 1, 0]] * 3 + [[1, 0, 0]], bool)
    keen, present, slow = report_card.cards(asked, hit, cells, false, [1.0, 2.0, 3.0])
    assert (keen.only_here, present.only_here, slow.only_here) == (1, None, 0)
    assert keen.power == {"nothing": 0.25, "smooth": 0.75}
    assert present.power["nothing"] == 0.75
    assert keen.half["smooth"] == 2.0
    assert present.half["smooth"] == -np.inf
    assert slow.half["smooth"] == pytest.approx(4.0)
    assert report_card.hits(np.array([[0.02, 0.001]]), np.array([0.01]), 1e-3).tolist() == [[False, True]]


def card_plugin(name, *columns, whole=False, fewest=3):
    """A statistic that only declares."""
    members = {"name": name, "columns": columns, "all_channels": whole, "min_points": fewest}
    return type(name, (Statistic,), members | {"compute": lambda self, curve: {}})()


def test_a_statistic_that_finds_nothing_says_why():
    """Nothing to rank, no value anywhere, no pairs of channels, or nothing far enough out: four reasons."""
    ranked = Column("x", "a number", unusual="high")
    asked = [
        card_plugin("plain", Column("x", "a number")), card_plugin("short", ranked, fewest=9),
        card_plugin("pairs", ranked, whole=True), card_plugin("dull", ranked), card_plugin("keen", ranked),
    ]  # fmt: skip
    values = {
        ("a", f"{name}_x"): np.full(3, value) for name, value in (("short", np.nan), ("dull", 1.0), ("keen", 1.0))
    }
    values["a", "keen_word"] = np.array(["", "yes", ""], object)  # not ranked, and no number
    empty = report_card.blank(asked, [Judgement(3, values | {("", "pairs_x"): np.full(3, np.nan)})])
    assert empty == {"plain", "short", "pairs"}
    power = {plugin.name: {"nothing": 0.1, "smooth": float(plugin.name == "keen")} for plugin in asked}
    said = report_card.silence_said(asked, power, empty)
    assert [line.partition(" finds nothing: ")[0] for line in said] == ["plain", "short", "pairs", "dull"]
    for line, words in zip(
        said, ("none of its", "at least 9", "several channels", "further out than chance"), strict=True
    ):
        assert words in line


def test_the_two_bars_are_explained():
    """Where the controls' own bar is not that of the tails, one sentence says why there are two; else there is none."""
    for final, n in ((0.0188, 2), (0.0125, 1)):
        study = SimpleNamespace(bars=completeness.Bars(0.0125, final))
        said = recovered._control_remarks(study, np.full(4, 1 / 60), False)
        assert len(said) == n
        assert "p below 0.0125 is needed" in said[0]
    study = SimpleNamespace(bars=completeness.Bars(0.0125, 0.0188))
    assert "where a tail is fitted" in recovered._control_remarks(study, np.full(4, 1 / 60), False)[1]
    assert "0.0188" in recovered._control_remarks(study, np.full(4, 1 / 60), False)[1]
    assert recovered._control_remarks(study, np.full(4, 1e-3), False) == []


def test_the_rate_of_power_is_that_of_the_controls():
    """With enough controls the rate asked for, with fewer for some sources what all of them can tell."""
    assert powers._rate_said(np.array([1 / 1000, 1 / 5000])) == "power at a false-alarm rate of 0.001"
    assert "rate of 0.001 to 0.00195, NOT 0.001" in powers._rate_said(np.array([1 / 512, 1 / 5000]))
    assert "some have 511" in powers._rate_said(np.array([1 / 512, 1 / 5000]))


def test_a_new_plugin_gets_a_report_card(archive):
    """A plugin that the run was judged without is asked for its power, but is no part of the run's completeness."""
    stranger = Path(__file__).parent / "third_party" / "stranger_plugin" / "longest_run.py"
    asked = Asked(archive / "run", archive / "grid.toml", plugins=(stranger,), workers=1)
    cards, _ = powers.report_cards(asked, cli._Silent())
    assert "longest_run" in {card.plugin for card in cards}
    assert "longest_run" not in {entry.plugin.name for entry in study_module.opened(asked)[2].loaded}


def test_too_few_controls_say_so(tmp_path):
    """Ten controls have no tail and cannot reach the level: the last lines say that nothing could have been found."""
    skies.write_sky(tmp_path / "frames", skies.Sky(n_frames=10, size=80), [], seed=1)
    (tmp_path / "t.csv").write_text("name,ra,dec\na,150.0,-30.0\n", encoding="utf-8")
    for wanted, status in ((10, 0), (0, 3)):
        (tmp_path / "s.toml").write_text(f"[controls]\nper_field = {wanted}\n", encoding="utf-8")
        run = tmp_path / f"run{wanted}"
        command = ["mine", tmp_path / "frames", "--targets", tmp_path / "t.csv", "--out", run, "-q",
                   "--settings", tmp_path / "s.toml"]  # fmt: skip
        assert cli.run_command([str(a) for a in command]) == 0
        (tmp_path / "g.toml").write_text(GRID.replace("pixels = 6", "pixels = 0"), encoding="utf-8")
        command = ["completeness", str(run), "--settings", str(tmp_path / "g.toml"), "-q"]
        assert cli.run_command(command) == status
    said = (tmp_path / "run10" / "completeness.txt").read_text(encoding="utf-8")
    assert "too few controls for 30 of 30 sources" in said
    assert "at 10 controls of 1 field, measured as often as targets\n" in said
    assert not Table.read(tmp_path / "run10" / "completeness.ecsv")["n_recovered"].any()


def test_mistakes_end_with_one_line(archive, tmp_path, capsys):
    """No run, a run that was stopped, and a settings file with a wrong list: status 2 and one line."""
    grid = tmp_path / "g.toml"
    grid.write_text('[completeness]\nfluxes = ["much"]\n', encoding="utf-8")
    stopped = RunFolder(tmp_path / "stopped")
    (tmp_path / "stopped").mkdir()
    for name in ("positions.parquet", "frame_solution.parquet", "frames.parquet"):
        stopped.file(name).write_bytes((archive / "run" / name).read_bytes())
    for arguments, words in (
        ([tmp_path / "none"], "no run here"),
        ([tmp_path / "stopped"], "stopped before it was judged"),
        ([archive / "run", "--settings", grid], "expected a list of numbers"),
        ([archive / "run", "--targets", tmp_path / "no.csv"], "no.csv"),
    ):
        assert cli.run_command([str(a) for a in ["completeness", *arguments, "-q"]]) == 2
        lines = capsys.readouterr().err.splitlines()
        assert len(lines) == 1, lines
        assert words in lines[0]
    assert cli.run_command(["plugins", "--power", "x", "--check", "y"]) == 2


def test_an_error_inside_leaves_its_traceback_in_the_log(archive, tmp_path, monkeypatch, capsys):
    """Both commands say that it is there, and it is."""
    shutil.copytree(archive / "run", tmp_path / "run")

    def broken(*_args, **_kwargs):
        raise ZeroDivisionError("planted")

    for module in (recovery, powers):
        monkeypatch.setattr(module, "study_of", broken)
    for command in (["completeness", tmp_path / "run"], ["plugins", "--power", tmp_path / "run"]):
        (tmp_path / "run" / "log.txt").unlink(missing_ok=True)
        assert cli.run_command([str(a) for a in [*command, "-q"]]) == 1
        assert "the traceback is in the run's log.txt" in capsys.readouterr().err
        said = (tmp_path / "run" / "log.txt").read_text(encoding="utf-8")
        assert "Traceback" in said
        assert "ZeroDivisionError: planted" in said
