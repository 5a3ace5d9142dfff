"""More controls for targets beyond all of the first: p-values that hold, budgets, frames, killed and continued runs."""

import shutil
from dataclasses import replace
from types import SimpleNamespace

import numpy as np
import pyarrow.parquet as pq
import pytest
from astropy.table import Table

import sequential
import skies
from hindlight import host, plan, recovered, second_pass, study, tasks
from hindlight.calibrate import Rank
from hindlight.conclude import Field
from hindlight.judge import Judgement
from hindlight.more_controls import GROWTH, Wanted, next_size, passes, sites
from hindlight.order import Order
from hindlight.positions import Targets, first_controls, separation_deg
from hindlight.ranking import FieldRanks
from hindlight.settings import Controls, Ranking, Settings
from hindlight.store import RunFolder
from hindlight.systems import unit_vectors
from test_mine import candidates, mine
from test_plan import sources, squares

FIRST = 40


def test_blank_targets_that_ask_keep_their_p_values():
    """Among pools of 24 to 400 no p-value is too small, at and between the floors; nor are there too many false runs."""
    p, false = sequential.empirical(sequential.Field(), 1000, seed=3)
    for level in (1 / 385, 1 / 200, 1 / 97, 1 / 50, 1 / 25, 0.1, 0.3):
        allowed = 3 * (level * sequential.Field.n_targets / len(p)) ** 0.5  # targets share controls: not independent
        assert (p <= level).mean() <= level + allowed / sequential.Field.n_targets * 2, level
    assert (p < 1 / 97).any()
    assert false <= sequential.Field.level + 3 * (sequential.Field.level / len(p)) ** 0.5


def test_asking_from_anywhere_would_make_p_values_too_small():
    """What the rule is for: if a target went on until its p-value is small it would be so nearly twice as often."""
    field = sequential.Field(n_targets=2, first=10, most=100, level=0.2)
    p, _ = sequential.empirical(field, 150, seed=3, rule=sequential.until_decided)
    assert (p <= sequential.WISHED).mean() > 1.5 * sequential.WISHED


@pytest.mark.parametrize(
    ("pool", "served", "needed", "most", "expected"),
    [
        (64, 64, 179, 8192, 197),  # enough to decide, and a tenth more
        (64, 32, 100, 8192, 220),  # of which half serve
        (64, 64, 10_000, 8192, 64 * GROWTH),
        (64, 64, 10_000, 100, 100),  # the budget
        (100, 100, 99, 8192, 110),  # a pass that is worth it, where rounding leaves next to nothing
        (100, 100, 200, 90, 100),  # a budget that is spent
    ],
)
def test_pools_grow_to_what_decides(pool, served, needed, most, expected):
    """As many as would decide, at most four times as many at a time, within the budget."""
    assert next_size(pool, served, needed, Controls(most_per_field=most)) == expected


def test_more_controls_stand_on_the_lattice_of_the_first():
    """The places left over keep the spacing to controls, also where a target has come from a neighbouring field since."""
    table = squares([0.0] * 12)
    targets = Targets(("x", "y"), np.array([0.02, 359.99]), np.array([0.02, 0.03]), {})
    positions = plan.add_targets(plan.no_positions(), targets, np.arange(1), 0.3)
    number = int(positions["field"][0])
    within = plan.field_frames(table, unit_vectors(targets.ra[:1], targets.dec[:1]))
    chosen = Controls(per_field=40)
    positions = plan.add_controls(positions, number, 0, table, within, 0.03, sources([]), chosen)
    positions = plan.add_targets(positions, targets, np.array([1]), 0.3)
    positions["field"][-1] = number
    positions["round"][-1] = 0
    wanted = Wanted(number, positions["id"][:1], positions["id"][first_controls(positions)], 160)
    ra, dec = sites(positions, wanted, table, within, 0.3)
    assert len(ra) > 160
    kind = positions["kind"]
    new = unit_vectors(ra, dec)
    for other in ("control", "target"):
        there = unit_vectors(positions["ra"][kind == other], positions["dec"][kind == other])
        assert separation_deg(new, there).min() > 0.0299
    control = kind == "control"
    nearest = separation_deg(new, unit_vectors(positions["ra"][control], positions["dec"][control])).min(axis=1)
    assert np.sum(np.abs(nearest - 0.03) < 1e-5) > 40  # next nodes of one lattice


def test_a_target_listed_after_a_pass_keeps_its_own_values():
    """Positions stand by id in what is judged, whether a target came before the controls of a pass or after them."""
    key = ("", "core_n_used")
    targets, controls, more = np.array([50]), np.array([1, 2]), np.array([10, 11])
    found = Field(0, targets, controls, np.ones((1, 2), bool), judgement=Judgement(3, {key: np.array([1, 2, 50])}))
    deep = Field(-1, targets, np.append(controls, more), np.ones((1, 4), bool))
    session = SimpleNamespace(plugins=host.load(host.PluginSpec()))
    merged = second_pass._merged(session, found, deep, Judgement(2, {key: more}), more)
    np.testing.assert_array_equal(merged.values[key], deep.ids)


def test_who_asks_later_shares_what_is_added():
    """Two sets of targets of one cell get one set of new controls, those of another cell their own."""

    def ask(cell, targets, size):
        want = Wanted(cell, np.array(targets), np.arange(64), size)
        return second_pass.Ask(Field(cell, want.targets, want.pool, np.ones((len(targets), 64), bool)), (0,), want)

    wanted = second_pass._together([ask(7, [3, 5], 100), ask(8, [9], 70), ask(7, [1], 120)])
    assert {cell: (want.targets.tolist(), want.size) for cell, want in wanted.items()} == {
        7: ([1, 3, 5], 120),
        8: ([9], 70),
    }


@pytest.mark.parametrize("most", [0, FIRST])
def test_without_a_budget_nobody_asks(most):
    """None, or one that the first controls fill, switches second passes off."""
    settings = Settings(controls=Controls(per_field=FIRST, most_per_field=most))
    session = SimpleNamespace(order=SimpleNamespace(settings=settings))
    ranks = FieldRanks(
        (Rank(1 / (FIRST + 1), 0, 9.0, 0, np.zeros(FIRST)),) * 9, (None,) * 9, np.full(9, FIRST), np.ones(1), ()
    )
    found = Field(7, np.arange(9), np.arange(9, FIRST + 9), np.ones((9, FIRST), bool), ranks=ranks)
    positions = plan.add_targets(
        plan.no_positions(), Targets(tuple("abcdefghi"), np.zeros(9), np.zeros(9), {}), np.arange(9), 1.0
    )
    assert second_pass._asking(session, positions, [found], {}) == []
    session.order.settings = replace(
        settings, controls=replace(settings.controls, most_per_field=FIRST + 1), ranking=Ranking(level=1e-3)
    )
    assert len(second_pass._asking(session, positions, [found], {})) == 1


def archive(folder):
    """A pulser too faint for single frames, eight blanks, and frames aside that hold controls but not the pulser."""
    pulser = skies.Source("pulser", 0.0, 0.0, lambda k, _d, _s: 9.0 if k % 6 == 0 else 0.0)
    blanks = [s for s in skies.lattice(9, 330.0) if (s.east, s.north) != (0.0, 0.0)]
    look, aside = skies.Sky(n_frames=24), skies.Sky(n_frames=6, ra=150.3)
    skies.write_sky(folder / "frames", look, [pulser], seed=9)
    skies.write_sky(folder / "frames", aside, [], seed=109, prefix="aside")
    (folder / "targets.csv").write_text(skies.target_text([pulser, *blanks], look), encoding="utf-8")
    return folder


def arguments(folder, run, most, workers=1):
    """The command line of a run with this budget."""
    text = (
        f"[controls]\nper_field = {FIRST}\nmost_per_field = {most}\nfield_size_deg = 50.0\n[flow]\nbatch_frames = 8\n"
    )
    (folder / "s.toml").write_text(text, encoding="utf-8")
    return [folder / "frames", "--targets", folder / "targets.csv", "--out", run, "--settings", folder / "s.toml",
            "--workers", workers]  # fmt: skip


@pytest.fixture(scope="module")
def runs(tmp_path_factory):
    """Such an archive, with a run whose budget was small, the same run with a larger one, and what was there between."""
    folder = archive(tmp_path_factory.mktemp("second"))
    mine(*arguments(folder, folder / "small", 100))
    shutil.copytree(folder / "small", folder / "raised")
    mine(*arguments(folder, folder / "raised", 8192))
    mine(*arguments(folder, folder / "whole", 8192))
    return folder


def test_a_spent_budget_is_said(runs):
    """100 controls cannot decide: the bound of a tail stands in, is marked, and the last lines name the setting."""
    row = candidates(runs / "small")["pulser"]
    assert FIRST < row["n_controls"] <= 100
    assert row["p_is_extrapolated"]
    assert row["p_empirical"] == pytest.approx(1 / (row["n_controls"] + 1))
    said = (runs / "small" / "summary.txt").read_text(encoding="utf-8")
    assert (
        f"for pulser: {row['n_controls']}, where {FIRST} could not decide; [controls] most_per_field is reached" in said
    )
    assert "most_per_field" in (runs / "small" / "log.txt").read_text(encoding="utf-8")


@pytest.mark.parametrize("name", ["raised", "whole"])
def test_a_second_pass_decides(runs, name):
    """With more controls the pulser is a candidate by its rank among them, and blank targets are none."""
    table = candidates(runs / name)
    row = table["pulser"]
    assert row["n_controls"] > 179
    assert not row["p_is_extrapolated"]
    assert row["p_value"] == pytest.approx(1 / (row["n_controls"] + 1))
    assert row["q_value"] < 0.05
    assert row["standing"] == "repeating"
    others = [other for key, other in table.items() if key != "pulser"]
    assert all(other["q_value"] > 0.05 and other["standing"] == "unseen" for other in others)
    assert all(other["n_controls"] <= FIRST for other in others)  # who did not ask is ranked among the first
    said = (runs / name / "summary.txt").read_text(encoding="utf-8")
    assert f"for pulser: {row['n_controls']}, where {FIRST} could not decide; these decide" in said


def test_what_has_been_judged_stays(runs):
    """The flux scale and the thresholds of channels rest on the first controls, which completeness hides sources at too."""
    for name in ("raised", "whole"):
        same = [(runs / run / "frame_solution.parquet").read_bytes() for run in ("small", name)]
        assert same[0] == same[1]
        tables = [Table.read(runs / run / "channels.ecsv") for run in ("small", name)]
        np.testing.assert_array_equal(tables[0]["threshold"], tables[1]["threshold"])
        run = RunFolder(runs / name)
        order = Order(str(run.path), Settings(), host.PluginSpec(), run.version())
        assert tasks.frame_evidence(order, 0).frames["n_controls"].max() == FIRST
        positions = run.positions()
        assert [len(found.ids) for found in study.fields_of(positions)] == [FIRST]


def test_a_second_pass_is_over_their_frames_only(runs):
    """Frames that do not hold who asked are not measured again; every new control is for one who asked."""
    folder = RunFolder(runs / "whole")
    frames, positions = folder.frames(), folder.positions()
    aside = frames["id"][np.char.startswith(frames["path"].astype(str), "aside")]
    added = passes(positions, int(positions["field"][0]))
    assert len(added) == 2
    assert len(added[0]) == (GROWTH - 1) * FIRST > len(added[1])  # as many as are allowed, then enough to decide
    rounds = sorted((runs / "whole" / "measurements").iterdir())
    measured = [np.concatenate([pq.read_table(path)["frame"] for path in sorted(part.iterdir())]) for part in rounds]
    assert len(aside) == 6
    assert np.isin(measured[0], aside).any()
    rows_of = np.unique(pq.read_table(runs / "whole" / "controls.parquet")["id"], return_counts=True)
    np.testing.assert_array_equal(rows_of[0], positions["id"][positions["kind"] == "control"])
    assert set(rows_of[1].tolist()) == {1}
    asked = set(positions["added_for"][np.isin(positions["id"], np.concatenate(added))].tolist())
    assert asked == set(positions["id"][positions["name"] == "pulser"].tolist())
    assert not any(np.isin(some, aside).any() for some in measured[1:])


def test_killed_in_a_second_pass_and_continued(runs, monkeypatch):
    """Stopped while it measures more controls a second time, and continued: the same tables; again: nothing is measured."""
    done = []

    def measure(order, piece, work=tasks.measure_piece):
        if piece.round == 2 and done:
            raise RuntimeError("power failure")
        done.extend([piece] * (piece.round == 2))
        return work(order, piece)

    run = runs / "killed"
    with monkeypatch.context() as patch:
        patch.setattr(tasks, "measure_piece", measure)
        mine(*arguments(runs, run, 8192), status=1)
    assert len(list((run / "measurements" / "round-002").iterdir())) == 1
    assert not (run / "candidates.ecsv").exists()
    mine(*arguments(runs, run, 8192))
    parts = {path: path.stat().st_mtime_ns for path in (run / "measurements").rglob("*.parquet")}
    mine(*arguments(runs, run, 8192))
    assert parts == {path: path.stat().st_mtime_ns for path in (run / "measurements").rglob("*.parquet")}
    for name in ("candidates.ecsv", "controls.parquet", "positions.parquet", "summary.txt"):
        assert (run / name).read_bytes() == (runs / "whole" / name).read_bytes(), name


def test_frames_that_are_gone_hold_no_more_controls(tmp_path):
    """Where a third of a target's frames are not there any more, none is measured that could not serve; that is said."""
    pulser = skies.Source("pulser", 0.0, 0.0, lambda k, _d, _s: 9.0 if k % 6 == 0 else 0.0)
    look = skies.Sky(n_frames=24)
    skies.write_sky(tmp_path / "frames", look, [pulser], seed=9)
    (tmp_path / "targets.csv").write_text(skies.target_text([pulser], look), encoding="utf-8")
    run = tmp_path / "run"
    words = [tmp_path / "frames", "--targets", tmp_path / "targets.csv", "--out", run, "--settings", tmp_path / "s.toml",
             "--workers", 1, "--without", "lomb_scargle"]  # fmt: skip
    text = "[controls]\nper_field = 10\nmost_per_field = {}\nfield_size_deg = 50.0\n"
    (tmp_path / "s.toml").write_text(text.format(0), encoding="utf-8")
    mine(*words)
    for number in range(8):
        (tmp_path / "frames" / f"frame{number:04d}.fits").unlink()
    (tmp_path / "s.toml").write_text(text.format(8192), encoding="utf-8")
    mine(*words)
    assert len(list((run / "measurements").iterdir())) == 1
    said = (run / "summary.txt").read_text(encoding="utf-8")
    assert f"for pulser: 10, where 10 could not decide; {second_pass.GONE}" in said


def test_too_few_controls_are_said_to_be_those_of_completeness():
    """Made-up sources have the first controls only: that none is found says nothing of a run that would add some."""

    def said(most):
        settings = Settings(controls=Controls(per_field=20, most_per_field=most))
        asked = SimpleNamespace(settings=settings, bars=SimpleNamespace(empirical=0.01, final=0.01))
        return recovered._control_remarks(asked, np.full(3, 1 / 21), False)[0]

    assert said(20).endswith("no tail can be fitted to fewer than 40: however bright, they are not found")
    assert "(a second pass), and may find it" in said(21)
