"""Completeness of an archive of two fields that share no instrument: each is asked about the field it has looked at."""

import numpy as np
import pytest

import skies
from hindlight import cli, completeness, hiding, powers, recovery, study
from hindlight.judge import Judgement
from hindlight.order import book
from hindlight.study import Asked, FieldControls

GRID = """[completeness]
per_cell = 8
fluxes = [2.0, 60.0]
pulse_periods = [1200.0]
duty_cycles = [0.3]
smooth_periods = [864000.0]
pixels = 0
"""
RUN = "[controls]\nper_field = 60\n[ranking]\nlevel = 0.2\n"
DEEP = skies.Sky("deep", n_frames=30, size=90, ra=150.0, first_day=50000.0, last_day=51000.0)
SHALLOW = skies.Sky("shallow", n_frames=10, size=90, ra=152.0, first_day=50000.0, last_day=51000.0)
ELSEWHERE = skies.Sky("elsewhere", n_frames=9, size=90, ra=155.0, first_day=50000.0, last_day=51000.0)


@pytest.fixture(scope="module")
def archive(tmp_path_factory):
    """A field of 30 frames by one instrument, one of 10 by another, two blank targets in each; and a third unasked field."""
    folder = tmp_path_factory.mktemp("two")
    lines = ["name,ra,dec"]
    for number, sky in enumerate((DEEP, SHALLOW, ELSEWHERE)):
        skies.write_sky(folder / "frames", sky, [], number + 1, prefix=f"{sky.instrument}-")
        if sky is not ELSEWHERE:
            blank = skies.lattice(2, 150.0, sky.instrument)
            lines += skies.target_text(blank, sky).splitlines()[1:]
    (folder / "targets.csv").write_text("\n".join(lines) + "\n", encoding="utf-8")
    (folder / "s.toml").write_text(RUN, encoding="utf-8")
    (folder / "grid.toml").write_text(GRID, encoding="utf-8")
    command = ["mine", folder / "frames", "--targets", folder / "targets.csv", "--out", folder / "run",
               "--settings", folder / "s.toml", "--workers", 1, "-q"]  # fmt: skip
    assert cli.run_command([str(a) for a in command]) == 0
    return folder


@pytest.fixture(scope="module")
def report(archive):
    """What `completeness` makes of the run."""
    return recovery.recover(Asked(archive / "run", archive / "grid.toml", workers=1), cli._Silent())


def test_an_instrument_is_asked_about_the_targets_it_has_looked_at(report):
    """All its sources lie where it has frames: those that are bright and smooth are found, all of them."""
    table = report.table
    assert set(table["subset"]) == {"all", "deep", "deep 1990s", "shallow", "shallow 1990s"}
    for name, fields, targets, frames in (("deep", 1, 2, 30), ("shallow", 1, 2, 10), ("all", 2, 4, None)):
        mine = table[table["subset"] == name]
        assert set(mine["n_fields"]) == {fields}
        assert set(mine["n_targets"]) == {targets}
        assert set(mine["n_injected"]) == {8}
        bright = mine[(mine["kind"] == "smooth") & (mine["flux"] == 60.0)]
        assert bright["n_recovered"].tolist() == bright["n_injected"].tolist()
        if frames:
            assert (mine["median_used"] == frames).all()


def test_what_a_subset_has_not_looked_at_is_said(report):
    """Which subsets tell of some fields only, and which of none."""
    said = "\n".join(report.remarks)
    assert "deep (1 of 2 fields, 2 targets)" in said
    assert "no target has frames, and controls with as many, in elsewhere, elsewhere 1990s: left out" in said
    assert "in 5 subsets of frames" in said


def test_a_target_is_compared_with_sources_in_as_many_frames(report):
    """An unseen target of either field with faint sources in that field, though both are among all frames."""
    assert len(report.targets) == 4
    for row in report.targets:
        assert row["like_frames"] == (30 if row["name"].startswith("deep") else 10)
        assert 3 <= row["like_sources"] <= 8
        assert row["found_low"] <= row["found_probability"] <= row["found_high"]
        assert 0 < row["found_probability"] < 1


def test_what_was_measured_of_sources_is_in_the_table(report):
    """Errors have 5 % of the flux in them where no comparison ties the scale: 60 sigma are 60 / (1 + 3^2)^(1/2) in a frame.

    It is seen in most frames, what is not there in none.
    """
    bright = report.table[(report.table["kind"] == "smooth") & (report.table["flux"] == 60.0)]
    assert np.asarray(bright["median_peak"]) == pytest.approx(60 / 10**0.5, rel=0.05)
    assert np.all(np.asarray(bright["median_detected"]) > 0.6 * np.asarray(bright["median_used"]))
    nothing = report.table[report.table["kind"] == "nothing"]
    assert np.all((np.asarray(nothing["median_peak"]) > 0.5) & (np.asarray(nothing["median_peak"]) < 5))
    assert not np.asarray(nothing["median_detected"]).any()


def test_report_cards_of_two_fields(archive, capsys):
    """Power is told, too, and with periods searched nothing breaks."""
    cards, _ = powers.report_cards(Asked(archive / "run", archive / "grid.toml", workers=1), cli._Silent())
    assert next(card for card in cards if card.plugin == "chi_square").power["smooth"] > 0.4
    searching = archive / "searching.toml"
    searching.write_text(GRID.replace("per_cell = 8", "per_cell = 1") + "period_search = true\n", encoding="utf-8")
    assert cli.run_command(["completeness", str(archive / "run"), "--settings", str(searching), "-q"]) == 0


def test_fields_in_the_same_frames_are_one_for_report_cards(archive):
    """Two halves of a field are put together again; fields in other frames are not."""
    _, order, _ = study.opened(Asked(archive / "run"))
    tables = book(order.run, order.version)
    apart = study.fields_of(tables.positions)
    assert [(f.number, len(f.targets)) for f in study.together(apart, tables.frames, 0.8)] == [
        (f.number, 2) for f in apart
    ]
    first = apart[0]
    halves = [
        FieldControls(
            9 - k, first.ids[k::2], first.vectors[k::2], first.targets[1 - k : 2 - k], first.target_ids[1 - k : 2 - k]
        )
        for k in (0, 1)
    ]
    one, other = study.together([*halves, apart[1]], tables.frames, 0.8)
    assert one.number == 9
    assert one.ids.tolist() == first.ids.tolist()
    assert np.array_equal(one.vectors, first.vectors)
    assert (one.targets, one.target_ids.tolist()) == (first.targets, first.target_ids.tolist())
    assert other.ids.tolist() == apart[1].ids.tolist()


def test_each_target_counts_once():
    """A target with two controls like it gives each a half; one without a frame, or without a control like it, none."""
    null = completeness.Null(
        np.arange(3), np.ones((3, 3), bool), Judgement(3, {("a", "core_n_used"): np.array([10, 9, 2])}), {}
    )
    found = FieldControls(7, np.arange(3), np.zeros((3, 3)), ("t", "none", "most"), np.arange(3))
    used = {"t": {"a": 10}, "none": {"a": 0}, "most": {"a": 99}}
    assert hiding.like_targets(found, used, null, 0.9).tolist() == [0.5, 0.5, 0.0]
    at = hiding.places([found], used, {7: null}, 0.9)
    assert (at.ids.tolist(), at.n_fields, at.n_targets) == ([0, 1], 1, 1)
    assert hiding.places([found], {}, {7: null}, 0.9).n_fields == 0
