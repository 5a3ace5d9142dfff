"""What a run will do: frames pinned into batches, controls placed on blank sky."""

import numpy as np
import pytest

from hindlight import plan
from hindlight.duplicates import waiting
from hindlight.errors import UsageError
from hindlight.positions import BlankSky, Targets, field_of, separation_deg
from hindlight.schema import FRAMES
from hindlight.settings import Controls
from hindlight.systems import unit_vectors


def found(paths, archive="a", channel="c"):
    """Frame columns for files as a walk gives them."""
    n = len(paths)
    columns = plan.empty(FRAMES)
    rows = {}
    for name, values in columns.items():
        if name not in ("id", "batch", "state", "duplicate_of", "related_to"):
            rows[name] = np.zeros(n, values.dtype) if values.dtype != object else np.full(n, "", object)
    rows["path"][:] = paths
    rows["archive"][:] = archive
    rows["channel"][:] = channel
    return rows


def keys(paths):
    """What tells these files apart."""
    return {("a", p) for p in paths}


def test_batches_are_given_once_and_only_added_to():
    """Five files in batches of two, then three more: the first batches stay as they were."""
    first = plan.batched(plan.merge_frames(plan.empty(FRAMES), found(list("abcde")), keys("abcde")), 2)
    assert first["batch"].tolist() == [0, 0, 1, 1, 2]
    more = plan.batched(plan.merge_frames(first, found(list("fgh")), keys("abcdefgh")), 2)
    assert more["batch"].tolist() == [0, 0, 1, 1, 2, 3, 3, 4]
    assert more["id"].tolist() == list(range(8))


def test_copies_belong_to_no_batch_until_the_frame_kept_has_changed():
    """A copy is in no batch; when the file of the frame kept changes, the copy waits to be compared again."""
    first = plan.merge_frames(plan.empty(FRAMES), found(list("abc")), keys("abc"))
    first["duplicate_of"][1] = 0
    first = plan.batched(first, 2)
    assert first["batch"].tolist() == [0, -1, 0]
    assert not waiting(first).any()
    second = plan.merge_frames(first, found(["a"]), keys("abc"))
    assert second["duplicate_of"].tolist() == [-1, -1, -1, -1]
    assert waiting(second).tolist() == [False, True, False, True]
    assert plan.batched(second, 2)["batch"].tolist() == [0, 1, 0, 1]


def test_changed_and_vanished_files_are_marked():
    """A changed file's old frames are void and its new ones added; a vanished one's are kept; one that is back counts."""
    first = plan.merge_frames(plan.empty(FRAMES), found(list("abc")), keys("abc"))
    second = plan.merge_frames(first, found(["b"]), keys("ab"))
    assert second["state"].tolist() == ["current", "void", "vanished", "current"]
    assert [row["reason"] for row in plan.lost_frames(second)] == ["changed", "vanished"]
    third = plan.merge_frames(second, found([]), keys("abc"))
    assert third["state"].tolist() == ["current", "void", "current", "current"]


def test_moved_files_keep_their_frames():
    """A file that turns up elsewhere, or whose exact copy is left, is the same frame; a file that is only like it is not."""
    digests = ["p", "q", "q", "r"]
    rows = {**found(list("abcd")), "digest": np.array(digests, object)}
    first = plan.merge_frames(plan.empty(FRAMES), rows, keys("abcd"))
    first["duplicate_of"][2] = 1
    first = plan.batched(first, 2)
    moved = {**found(["e", "f"]), "digest": np.array(["p", "s"], object)}
    second = plan.merge_frames(first, moved, keys("cdef"))
    assert second["path"].tolist() == ["e", "c", "b", "d", "f"]
    assert second["state"].tolist() == ["current", "current", "vanished", "current", "current"]
    assert second["batch"].tolist() == [0, 0, -1, 1, -1]
    assert plan.lost_frames(second) == []
    third = plan.merge_frames(second, found([]), keys("bcdef"))
    assert third["path"].tolist() == second["path"].tolist()
    assert set(third["state"]) == {"current"}


def test_a_name_that_moved_is_refused():
    """A target whose name is in the run at another place is refused, with both places."""
    targets = Targets(("x",), np.array([10.0]), np.array([5.0]), {})
    positions = plan.add_targets(plan.no_positions(), targets, np.array([0]), 1.0)
    assert plan.new_targets(positions, targets).size == 0
    with pytest.raises(UsageError, match="this run has it at 10"):
        plan.new_targets(positions, Targets(("x",), np.array([10.1]), np.array([5.0]), {}))


def sources(ra, snr=20.0):
    """Bright sources on the equator at these right ascensions, beam 36 arcsec."""
    ra = np.asarray(ra, float)
    return plan.BrightSources(ra, np.zeros(len(ra)), np.full(len(ra), snr), np.full(len(ra), 36.0))


def test_noise_peaks_are_no_sources():
    """Only what two frames agree on within a beam is kept away from; with one frame everything is."""
    kept = plan.persistent([sources([1.0, 2.0]), sources([1.002, 3.0]), sources([4.0])])
    assert sorted(kept.ra.tolist()) == [1.0, 1.002]
    assert len(plan.persistent([sources([1.0, 2.0])]).ra) == 2


def test_brighter_sources_are_kept_further_away_from():
    """The radius grows with S/N: a Gaussian of S/N 1000 is below a tenth of the noise only 1.8 beams out, and a beam more."""
    near = sources([0.0], snr=5.0).blank_sky(0.0).radii[0]
    far = sources([0.0], snr=1000.0).blank_sky(0.0).radii[0]
    assert near < far
    assert far == pytest.approx(0.01 * (np.sqrt(np.log2(1e4)) / 2 + 1))


def squares(centres):
    """The table of frames 0.6 deg wide, their middles on the equator at these right ascensions."""
    frames = found(["f"] * len(centres))
    for k, ra in enumerate(centres):
        west, east = (ra - 0.3) % 360, (ra + 0.3) % 360  # corners and middles of sides
        frames["footprint"][k] = f"{east} -0.3 {east} 0 {east} 0.3 {ra} 0.3 {west} 0.3 {west} 0 {west} -0.3 {ra} -0.3"
        frames["centre_ra"][k] = ra
    frames["radius"][:] = 0.43
    return plan.merge_frames(plan.empty(FRAMES), frames, keys("f"))


def with_controls(table, targets, wanted, spacing=0.03):
    """The position table with these targets, in fields of 0.3 degrees, and controls for each field."""
    positions = plan.add_targets(plan.no_positions(), targets, np.arange(len(targets)), 0.3)
    for number in plan.fields_without_controls(positions):
        mine = positions["field"] == number
        within = plan.field_frames(table, unit_vectors(positions["ra"][mine], positions["dec"][mine]))
        settings = Controls(per_field=wanted)
        positions = plan.add_controls(positions, number, 0, table, within, spacing, sources([]), settings)
    return positions


def fields(positions, kind):
    """How many fields hold positions of this kind."""
    return len(set(positions["field"][positions["kind"] == kind].tolist()))


def test_fields_in_the_same_frames_share_their_controls():
    """Where controls fill the frames, targets of four cells have one set; in frames of their own they have their own."""
    corners = np.array([0.12, 359.88, 0.12, 359.88]), np.array([0.12, 0.12, -0.12, -0.12])
    names = ("a", "b", "c", "d")
    together = with_controls(squares([0.0] * 12), Targets(names, *corners, {}), wanted=600)
    assert len(set(field_of(*corners, 0.3).tolist())) == 4
    assert fields(together, "target") == fields(together, "control") == 1
    assert 300 < (together["kind"] == "control").sum() <= 600

    ra = np.array([0.12, 359.88, 5.0])
    apart = with_controls(squares([0.0] * 12 + [5.0] * 12), Targets(names[:3], ra, np.zeros(3), {}), wanted=600)
    assert fields(apart, "target") == fields(apart, "control") == 2


def test_fields_that_hold_their_controls_keep_their_own():
    """Where the wanted number fits around each target, those of the next cell are further away and do not serve."""
    ra = np.array([0.2, 359.8])
    got = with_controls(squares([0.0] * 12), Targets(("a", "b"), ra, np.zeros(2), {}), wanted=12)
    assert fields(got, "target") == fields(got, "control") == 2


def test_half_covered_targets_do_not_take_controls_of_other_frames():
    """A target in frames that the neighbour's controls are not in has controls of its own."""
    ra = np.array([0.12, 359.5])
    got = with_controls(squares([0.0] * 12 + [359.6] * 12), Targets(("a", "b"), ra, np.zeros(2), {}), wanted=600)
    assert fields(got, "target") == fields(got, "control") == 2


def test_controls_stand_clear_of_targets_sources_and_each_other():
    """Every control keeps the spacing to targets and controls, its radius to sources, and lies in the frames."""
    table = squares([0.0] * 12)
    targets = Targets(("x", "y"), np.array([0.05, 359.9]), np.array([0.0, 0.1]), {})
    positions = plan.add_targets(plan.no_positions(), targets, np.arange(2), 30.0)
    within = plan.field_frames(table, unit_vectors(targets.ra, targets.dec))
    assert len(within.rows) == 12
    bright = sources([0.1])
    number = int(positions["field"][0])
    got = plan.add_controls(positions, number, 0, table, within, 0.03, bright, Controls(per_field=60))
    control = got["kind"] == "control"
    assert 40 <= control.sum() <= 60
    vectors = unit_vectors(got["ra"][control], got["dec"][control])
    apart = separation_deg(vectors, vectors) + np.eye(len(vectors))
    assert apart.min() > 0.0299
    assert separation_deg(vectors, unit_vectors(targets.ra, targets.dec)).min() > 0.0299
    assert bright.blank_sky(0.015).clear(vectors).all()
    assert BlankSky(unit_vectors(np.zeros(1), np.zeros(1)), np.array([0.45])).clear(vectors).sum() == 0


def test_frames_that_are_gone_are_no_reference_frames():
    """They show no bright source, and blank sky would be looked for without; where no other is left they are taken."""
    table = squares([0.0] * 4)
    table["exposure_s"][:] = (10.0, 60.0, 60.0, 10.0)
    table["state"][:] = ["current", "vanished", "current", "current"]
    assert plan.reference_frames(table, np.arange(4), 8).tolist() == [2]
    table["state"][:] = "vanished"
    assert plan.reference_frames(table, np.arange(4), 8).tolist() == [1, 2]


def test_controls_stand_around_a_crowd_of_targets():
    """Where targets fill the middle of the field, the lattice goes on beyond them until as many places as wanted are free."""
    table = squares([0.0] * 4)
    side = np.linspace(-0.06, 0.06, 25)
    ra, dec = (axis.ravel() for axis in np.meshgrid(side % 360.0, side))
    targets = Targets(tuple(f"t{k}" for k in range(len(ra))), ra, dec, {})
    positions = plan.add_targets(plan.no_positions(), targets, np.arange(len(ra)), 50.0)
    within = plan.field_frames(table, unit_vectors(ra, dec))
    number = int(positions["field"][0])
    positions = plan.add_controls(positions, number, 0, table, within, 0.02, sources([]), Controls(per_field=5))
    assert (positions["kind"] == "control").sum() == 5
