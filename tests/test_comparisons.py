"""Which sources serve as comparisons and where they are."""

from __future__ import annotations

import numpy as np
import pytest

from hindlight.comparisons import Candidates, Located, at_positions, candidates, placed, sampled_frames, serving
from hindlight.plan import BrightSources
from hindlight.settings import Comparisons
from hindlight.systems import unit_vectors

BEAM = 30.0  # arcsec
SETTINGS = Comparisons(wanted=3)
NOBODY = np.zeros((0, 3))


def sources(east_beams: list[float], snr: list[float]) -> BrightSources:
    """Sources in a row along right ascension at the equator."""
    n = len(snr)
    return BrightSources(10 + np.array(east_beams) * BEAM / 3600, np.zeros(n), np.array(snr), np.full(n, BEAM))


def test_the_bright_that_stand_alone() -> None:
    """Brightest first; not the faint, not those with a neighbour, not one found twice, those near a target last."""
    found = sources([0, 10, 20, 22, 40, 40.2, 50, 60], [30, 100, 60, 50, 80, 70, 10, 90])
    target = unit_vectors(np.array([10 + 61 * BEAM / 3600]), np.array([0.0]))
    some = candidates(found, target, NOBODY, SETTINGS)
    np.testing.assert_allclose((some.ra - 10) * 3600 / BEAM, [10, 40, 0, 60])
    assert some.at_target.tolist() == [False, False, False, True]


def test_a_faint_neighbour_does_no_harm_and_a_known_one_is_not_taken_again() -> None:
    """A tenth of the S/N is little; what another field has already is left alone."""
    found = sources([0, 2, 30], [200, 15, 100])
    known = unit_vectors(np.array([10 + 30 * BEAM / 3600]), np.array([0.0]))
    some = candidates(found, NOBODY, known, SETTINGS)
    np.testing.assert_allclose((some.ra - 10) * 3600 / BEAM, [0])


def at(ra: np.ndarray, dec: np.ndarray, of_targets: int = 0) -> Candidates:
    """Candidates at these places, the last few at targets."""
    return Candidates(ra, dec, np.arange(len(ra)) >= len(ra) - of_targets)


def located(seed: int, frames: int = 40, n: int = 6) -> tuple[np.ndarray, list[Located]]:
    """Offsets that the candidates truly have, and centroids in frames that are each shifted; S/N 100, 90, 80..."""
    rng = np.random.default_rng(seed)
    true = rng.normal(0, 1e-3, (2, n))
    made = []
    shifts = rng.normal(0, 2e-3, (frames, 2))
    shifts -= shifts.mean(axis=0)
    for k in range(frames):
        offset = true + shifts[k][:, None] + rng.normal(0, 1e-4, (2, n))
        made.append(Located(*offset, 100.0 - 10 * np.arange(n) + rng.normal(0, 1, n), np.ones(n), np.zeros(n, bool)))
    return true, made


def test_places_are_common_to_all_frames() -> None:
    """Each frame has its own shift, of which the places are free; missing sources do not move the others."""
    true, found = located(1)
    for k, frame in enumerate(found):
        frame.east[k % 6] = frame.north[k % 6] = frame.snr[k % 6] = np.nan
    ra, dec = placed(at(np.full(6, 20.0), np.full(6, 60.0)), found, Comparisons(wanted=6))
    np.testing.assert_allclose((ra - 20) * np.cos(np.radians(60)), true[0], atol=1e-4)
    np.testing.assert_allclose(dec - 60, true[1], atol=1e-4)


def test_what_is_no_point_or_comes_and_goes_is_left_out() -> None:
    """An extended source, one seen in a quarter of the frames, one seen once; the brightest of the rest are taken."""
    _, found = located(2)
    for k, frame in enumerate(found):
        frame.width[0] = 1.8
        for source, seen in ((1, k % 4 == 0), (2, k == 7)):
            if not seen:
                frame.east[source] = frame.north[source] = frame.snr[source] = np.nan
    ra, _ = placed(at(np.arange(6) * 1.0, np.zeros(6)), found, Comparisons(wanted=2))
    np.testing.assert_allclose(ra, [3, 4], atol=0.01)


def test_saturated_sources_are_left_out() -> None:
    """Flat tops in a third of the frames, whether or not headers state a level; one frame in forty is chance."""
    _, found = located(4)
    for k, frame in enumerate(found):
        frame.flat[0] = k % 3 == 0
        frame.flat[1] = k == 5
    ra, _ = placed(at(np.arange(6) * 1.0, np.zeros(6)), found, Comparisons(wanted=2))
    np.testing.assert_allclose(ra, [1, 2], atol=0.01)


def test_shallow_frames_do_not_make_a_source_inconstant() -> None:
    """Half of the frames show only the brightest: the faint ones are judged by the others."""
    _, found = located(3)
    for frame in found[::2]:
        frame.snr[:] /= 9.0
        for values in (frame.east, frame.north, frame.snr):
            values[2:] = np.nan
    assert len(placed(at(np.arange(6) * 1.0, np.zeros(6)), found, Comparisons(wanted=6))[0]) == 6


@pytest.mark.parametrize(("of_targets", "enough", "kept"), [(2, 4, 4), (3, 4, 6), (3, 3, 3), (6, 4, 6), (0, 9, 6)])
def test_targets_serve_each_other_where_little_else_does(of_targets: int, enough: int, kept: int) -> None:
    """Only where the others are not enough, and not where all together could tie no frame without one of them."""
    _, found = located(5)
    some = at(np.arange(6) * 1.0, np.zeros(6), of_targets)
    ra, _ = placed(some, found, Comparisons(enough=enough))
    np.testing.assert_allclose(ra, np.arange(kept), atol=0.01)
    ra, _ = placed(some, found, Comparisons(enough=enough, fewest=6))
    np.testing.assert_allclose(ra, np.arange(6 - of_targets), atol=0.01)


def test_candidates_at_targets_are_looked_at_where_there_may_be_too_few_others() -> None:
    """Twice as many as are enough are sure to leave enough."""
    found = sources([0, 10, 20, 30], [60, 50, 40, 30])
    target = unit_vectors(np.array([10.0]), np.array([0.0]))
    for enough, n in ((2, 4), (3, 4)):
        some = candidates(found, target, NOBODY, Comparisons(enough=enough))
        assert (len(some.ra), int(some.at_target.sum())) == (n, 1)
    more = sources([0, 10, 20, 30, 40], [60, 50, 40, 30, 20])
    assert not candidates(more, target, NOBODY, Comparisons(enough=2)).at_target.any()


def test_who_serves_when_a_comparison_becomes_a_target() -> None:
    """It serves no more where its field has enough others; else all of the field serve, and it is known whose they are."""
    frames = {"id": np.arange(2), "beam_major": np.full(2, BEAM), "pixel_scale": np.full(2, 10.0)}
    ra = np.concatenate((10 + np.arange(7) * 0.1, [10.0 + BEAM / 3600 / 3, 10.0, 10.3, 10.6]))
    kind = np.array(["comparison"] * 7 + ["target"] * 4, object)
    field = np.array([0, 0, 0, 1, 1, 1, 1, 0, 0, 1, 1])
    positions = {"id": 20 + np.arange(11), "kind": kind, "ra": ra, "dec": np.zeros(11), "field": field}
    own = at_positions(positions, frames, ("target",), 3.0)
    assert {source: some.tolist() for source, some in own.items()} == {20: [27, 28], 23: [29], 26: [30]}
    for enough, served in ((2, [21, 22, 24, 25]), (3, [21, 22, 23, 24, 25, 26])):
        assert serving(positions, frames, ("target",), 3.0, Comparisons(enough=enough)).tolist() == served


def test_nothing_to_choose_from() -> None:
    """No candidates, or no frame."""
    assert len(placed(at(np.empty(0), np.empty(0)), [], SETTINGS)[0]) == 0
    assert len(candidates(sources([], []), NOBODY, NOBODY, SETTINGS).ra) == 0


def test_frames_are_spread_over_time() -> None:
    """So many of each channel, first and last among them."""
    frames = {"channel": np.array(["a"] * 10 + ["b"] * 2, object), "middle_mjd_tdb": np.r_[np.arange(10)[::-1], 3, 4]}
    rows = sampled_frames(frames, np.arange(12), 3)
    assert rows.tolist() == pytest.approx([0, 5, 9, 10, 11]) or rows.tolist() == [0, 4, 9, 10, 11]
