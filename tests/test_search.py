"""Targets known to worse than a beam: the places tried, the choice among them, and the whole job."""

import dataclasses

import numpy as np
import pyarrow.parquet as pq
import pytest
from astropy.table import Table
from scipy import stats

import skies
from hindlight import cli, plan
from hindlight.positions import Targets, nearest_deg
from hindlight.schema import FRAMES
from hindlight.search import CENTRE, best_places, places_within
from hindlight.settings import Controls, Search
from hindlight.systems import unit_vectors

SKY = skies.Sky(n_frames=16, size=160, noise="beam")
BEAM = SKY.fwhm_pixels * SKY.pixel_arcsec


def test_places_cover_the_ellipse():
    """As many as a hexagonal lattice has per area, and no point of the ellipse further than its covering radius.

    Density 2 / (sqrt(3) s^2), covering radius s / sqrt(3): J. H. Conway & N. J. A. Sloane 1999, Sphere Packings, Lattices
    and Groups, 3rd ed., ch. 2 sec. 1 (from memory).
    """
    found = places_within(10.0, 4.0, 30.0, 1.0, 2.0, 10_000)
    assert len(found) == pytest.approx(np.pi * 20 * 8 * 2 / 3**0.5, rel=0.03)
    assert (found.east[0], found.north[0], found.node[0]) == (0.0, 0.0, CENTRE)
    assert len(set(found.node.tolist())) == len(found)
    rng = np.random.default_rng(1)
    radius, angle = 0.9 * rng.random(2000) ** 0.5, 2 * np.pi * rng.random(2000)
    along, across = 20 * radius * np.cos(angle), 8 * radius * np.sin(angle)
    turn = np.radians(30.0)  # east of north
    east, north = along * np.sin(turn) + across * np.cos(turn), along * np.cos(turn) - across * np.sin(turn)
    apart = np.hypot(east[:, None] - found.east, north[:, None] - found.north)
    assert apart.min(axis=1).max() <= 1 / 3**0.5 + 1e-9
    assert apart.min(axis=1).max() > 0.5
    assert found.reach == pytest.approx(20.0, abs=0.5)
    furthest = np.hypot(found.east, found.north).argmax()
    assert np.degrees(np.arctan2(found.east[furthest], found.north[furthest])) % 180 == pytest.approx(30.0, abs=3.0)


@pytest.mark.parametrize(("axes", "most"), [((10.0, 4.0), 60), ((300.0, 2.0), 40), ((50.0, 50.0), 7)])
def test_a_bound_keeps_the_innermost_places(axes, most):
    """The first of all places, in order of distance in sigmas; how far they reach is told."""
    whole = places_within(*axes, 70.0, 1.0, 2.0, 10**6)
    cut = places_within(*axes, 70.0, 1.0, 2.0, most)
    assert cut.node.tolist() == whole.node[:most].tolist()
    assert cut.sigmas < whole.sigmas <= 2.0


def test_a_line_is_searched_along_its_length():
    """An ellipse without width still has the places beside its axis, about two spacings wide."""
    found = places_within(50.0, 0.0, 0.0, 1.0, 2.0, 10_000)
    assert np.abs(found.east).max() <= 1.0
    assert found.reach > 98.0
    assert len(found) > 200


def test_one_outburst_is_chosen_before_a_steady_source():
    """Where an excess stands out it is chosen, elsewhere the brightest mean, in whichever channel is furthest out."""
    rng = np.random.default_rng(2)
    excess, mean = rng.normal(3.0, 0.3, (2, 30, 50)), rng.normal(0.0, 1.0, (2, 30, 50))
    mean[0, :3, 7] = 100.0
    excess[1, 0, 20] = 12.0
    excess[0, 1, :] = np.nan
    chosen = best_places(list(excess), list(mean))
    assert chosen[:3].tolist() == [20, 7, 7]
    assert best_places([np.full((3, 4), np.nan)] * 2, [np.full((3, 4), np.nan)] * 2).tolist() == [0, 0, 0]
    order = rng.permutation(30)
    assert best_places(list(excess[:, order]), list(mean[:, order])).tolist() == chosen[order].tolist()


def p_values_of_blanks(choose):
    """p-values of 600 blank ellipses of 30 places among 39 others, in heavy-tailed noise, judged where `choose` says."""
    rng = np.random.default_rng(3)
    found = []
    for _ in range(600):
        flux = rng.standard_t(4, (40, 30, 12))
        highest, mean = flux.max(axis=2), flux.mean(axis=2)
        judged = highest[np.arange(40), choose(highest, mean)]
        found.append((1 + np.count_nonzero(judged[1:] >= judged[0])) / 40)
    return np.array(found)


def test_trials_are_counted_since_controls_are_searched_too():
    """As many p-values up to 0.05 as chance gives, within 99.9 %; to choose at the target only gives far more."""
    low, high = stats.binom.interval(0.999, 600, 0.05)
    below = np.count_nonzero(p_values_of_blanks(lambda excess, mean: best_places([excess], [mean])) <= 0.05)
    assert low <= below <= high

    def at_the_target_only(excess, _mean):
        return np.concatenate(([excess[0].argmax()], np.zeros(39, int)))

    assert np.count_nonzero(p_values_of_blanks(at_the_target_only) <= 0.05) > 5 * high


def planned(errors, settings, most_controls=40):
    """The position table of targets with these errors in arcsec, in twelve frames with a beam of 36 arcsec."""
    frames = plan.empty(FRAMES)
    usual = {"path": "f", "channel": "c", "state": "current", "beam_major": 36.0, "pixel_scale": 12.0, "radius": 1.42,
             "footprint": "1 -1 1 0 1 1 0 1 359 1 359 0 359 -1 0 -1", "duplicate_of": -1, "related_to": -1}  # fmt: skip
    frames = {
        n: np.full(12, usual.get(n, v.dtype.type(0) if v.dtype != object else ""), v.dtype) for n, v in frames.items()
    }
    n = len(errors)
    targets = Targets(
        tuple(f"t{k}" for k in range(n)), np.linspace(0.0, 0.5, n), np.zeros(n), {"pos_err": np.array(errors)}
    )
    positions = plan.add_targets(plan.no_positions(), targets, np.arange(n), 60.0)
    here = plan.field_frames(frames, unit_vectors(targets.ra, targets.dec))
    groups = plan.sought(positions, targets, positions["id"], 0.01, settings)
    for group in groups:
        positions = plan.add_trials(positions, group)
    for group in groups:
        positions = plan.add_blanks(positions, group, frames, here, 0.02, Controls(), most_controls)
    return positions, groups


def test_only_errors_beyond_a_beam_are_searched():
    """An error of a beam is not searched, nor is any with `sigmas = 0`."""
    positions, groups = planned([36.0, 36.1, 0.0], Search())
    assert [group.targets.tolist() for group in groups] == [[1]]
    assert (positions["search"][:3].tolist(), positions["parent"][:3].tolist()) == ([-1, 1, -1], [-1, 1, -1])
    assert not planned([360.0], dataclasses.replace(Search(), sigmas=0.0))[1]


def test_control_ellipses_are_copies_that_touch_nothing():
    """Each has every place of the targets it serves, at the same offsets, apart from targets' ellipses and each other."""
    positions, groups = planned([72.0, 90.0, 360.0], Search(), 12)
    assert [group.targets.tolist() for group in groups] == [[0, 1], [2]]
    kind, parent = positions["kind"], positions["parent"]
    for group in groups:
        blank = (kind == "blank") & (positions["search"] == group.targets[0])
        middles = np.unique(parent[blank])
        assert len(middles) == 12
        nodes = set().union(*[set(positions["node"][parent == target].tolist()) for target in group.targets])
        for middle in middles:
            mine = parent == middle
            assert set(positions["node"][mine].tolist()) == nodes
            near, far = (unit_vectors(positions["ra"][m], positions["dec"][m]) for m in (mine, (parent >= 0) & ~mine))
            others = (kind[(parent >= 0) & ~mine] != "blank") | (
                positions["search"][(parent >= 0) & ~mine] == group.targets[0]
            )
            assert nearest_deg(near, far[others]).min() > 0.0199
    rounds = positions["round"][(kind == "blank") | (kind == "trial")]
    assert np.bincount(rounds).max() <= plan.ROUND_PLACES
    assert np.bincount(rounds)[0] == 0
    target, blank = (np.flatnonzero((parent == p) & (positions["node"] != CENTRE)) for p in (0, middles[0]))
    assert len(target) == len(places_within(0.02, 0.02, 0.0, 0.005, 2.0, 3000)) - 1
    assert len(blank) > len(target)


@pytest.fixture(scope="module")
def searched(tmp_path_factory):
    """Nine targets known to a beam, one with a pulser elsewhere in its ellipse and a steady source in it too."""
    folder = tmp_path_factory.mktemp("searched")
    at = skies.lattice(9, 5 * BEAM)
    pulser = skies.Source(
        "", at[4].east + 0.9 * BEAM, at[4].north - 1.0 * BEAM, lambda k, _d, _s: 14.0 if k % 8 == 3 else 0.0
    )
    steady = skies.Source("", at[4].east - 1.0 * BEAM, at[4].north, 5.0)
    skies.write_sky(folder / "frames", SKY, [pulser, steady], 4)
    head, *rows = skies.target_text(at, SKY).splitlines()
    lines = [f"{head},pos_err", *[f"{row},{1.01 * BEAM}" for row in rows]]
    (folder / "targets.csv").write_text("\n".join(lines) + "\n", encoding="utf-8")
    (folder / "s.toml").write_text(
        "[controls]\nper_field = 40\nfield_size_deg = 50.0\n[search]\ncontrols = 40\nsigmas = 1.6\n", encoding="utf-8"
    )
    mine(folder, "run", 1)
    return folder, pulser, lines


def mine(folder, run, workers, targets="targets.csv"):
    """Run the job on the module's archive."""
    arguments = ["mine", "-q", folder / "frames", "--targets", folder / targets, "--out", folder / run,
                 "--settings", folder / "s.toml", "--workers", workers]  # fmt: skip
    assert cli.run_command([str(a) for a in arguments]) == 0


def test_a_pulser_is_found_where_it_is(searched):
    """Within half a beam, bright in both its frames, beyond chance and with no concern; nothing is said of the others."""
    folder, pulser, _ = searched
    table = Table.read(folder / "run" / "candidates.ecsv")
    first, others = table[0], table[1:]
    assert first["name"] == "blank004"
    assert first["standing"] == "repeating"
    assert first["q_value"] < 0.5
    east = (first["found_ra"] - SKY.ra) * np.cos(np.radians(first["dec"])) * 3600
    assert np.hypot(east - pulser.east, (first["found_dec"] - SKY.dec) * 3600 - pulser.north) < 0.5 * BEAM
    assert first["p_empirical"] == pytest.approx(1 / (first["n_controls"] + 1))
    assert not first["concerns"]
    assert "places up to" in first["notes"]
    assert set(table["n_trials"]) == {len(places_within(1.01, 1.01, 0.0, 0.5, 1.6, 3000))}
    n = int(table["n_controls"].min())
    low, high = stats.betabinom(len(others), n // 10, n + 1 - n // 10).interval(0.999)
    assert low <= np.count_nonzero(others["p_empirical"] <= (n // 10) / (n + 1)) <= high
    assert "9 targets were searched" in (folder / "run" / "summary.txt").read_text(encoding="utf-8")


def test_the_light_curve_is_that_of_the_place_found(searched):
    """What `lightcurve` writes has the peak of the row, which the stated place does not have."""
    folder, _, _ = searched
    row = Table.read(folder / "run" / "candidates.ecsv")[0]
    assert cli.run_command(["lightcurve", str(folder / "run"), "blank004", "--out", str(folder / "curve.ecsv")]) == 0
    curve = Table.read(folder / "curve.ecsv")
    assert np.max(curve["flux"] / curve["flux_err"]) == pytest.approx(row["peak_snr"])
    assert row["peak_snr"] > 8


def test_any_number_of_workers_and_extension_give_the_same(searched):
    """The same bytes with two workers; a target more leaves every part there is, and the pulser at its place."""
    folder, _, lines = searched
    before = (folder / "run" / "candidates.ecsv").read_bytes()
    mine(folder, "again", 2)
    assert (folder / "again" / "candidates.ecsv").read_bytes() == before
    parts = {path: path.stat().st_mtime_ns for path in (folder / "again" / "measurements").rglob("*.parquet")}
    known = pq.read_table(folder / "again" / "positions.parquet")
    (folder / "more.csv").write_text(
        "\n".join([*lines, f"late,{SKY.ra},{SKY.dec - 0.2},{1.2 * BEAM}"]) + "\n", encoding="utf-8"
    )
    mine(folder, "again", 1, "more.csv")
    assert pq.read_table(folder / "again" / "positions.parquet").slice(0, known.num_rows).equals(known)
    assert all(path.stat().st_mtime_ns == time for path, time in parts.items())
    table = Table.read(folder / "again" / "candidates.ecsv")
    assert len(table) == 10
    old = Table.read(folder / "run" / "candidates.ecsv")
    assert (table[0]["name"], table[0]["found_ra"]) == (old[0]["name"], old[0]["found_ra"])
    assert np.isfinite(table["found_ra"][table["name"] == "late"][0])


def test_a_bright_target_that_was_searched_is_judged_among_bright_copies(tmp_path):
    """A steady source at its stated place, known to a beam, in frames with comparisons: steady, by a null of its own."""
    sky = skies.Sky(n_frames=12, size=260, noise="beam", gain_scatter=0.05)
    star = skies.Source("star", 0.0, 0.0, 30.0)
    rest = [skies.Source(f"s{k}", *(25 * BEAM * np.array((np.cos(k), np.sin(k)))), 80.0) for k in range(1, 7)]
    skies.write_sky(tmp_path / "frames", sky, [star, *rest], 5)
    head, row = skies.target_text([star], sky).splitlines()
    (tmp_path / "targets.csv").write_text(f"{head},pos_err\n{row},{1.01 * BEAM}\n", encoding="utf-8")
    (tmp_path / "s.toml").write_text(
        "[controls]\nper_field = 40\n[search]\ncontrols = 40\nsigmas = 1.6\n", encoding="utf-8"
    )
    mine(tmp_path, "run", 1)
    (found,) = Table.read(tmp_path / "run" / "candidates.ecsv")
    assert found["null"].startswith("blank sky and the residuals of comparisons")
    assert found["standing"] == "steady"
    assert (found["found_ra"], found["found_dec"]) == (found["ra"], found["dec"])
    controls = pq.read_table(tmp_path / "run" / "controls.parquet").to_pydict()
    plain = {n for n, copy in zip(controls["field"], controls["copy"], strict=True) if copy == 0}
    lifted = {n for n, copy in zip(controls["field"], controls["copy"], strict=True) if copy > 0}
    assert lifted
    assert not plain & lifted
