"""Controls made as bright as a target: what is added to them, and that steady bright sources are then no candidates."""

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from astropy.table import Table

from hindlight import calibrate, host
from hindlight.conclude import Field, rank
from hindlight.judge import Judgement
from hindlight.lifted import COPY, Lift, copies, group_size, lifted, originals, over_all, residuals
from hindlight.lightcurve import Block, Channel, freeze
from hindlight.settings import Controls, Settings
from test_estimators import study

CHANNEL = Channel(label="camera|R|I|3as|adu", unit="adu")


def block(flux: np.ndarray, error: float, extra: float = 0.0) -> Block:
    """Rows of positions over frames 10, 11, ...; errors hold a scatter of `extra` times the flux."""
    total = np.hypot(error, extra * flux)
    shape = flux.shape
    return Block(
        names=tuple(f"p{k}" for k in range(len(flux))), channel=CHANNEL, frame=10 + np.arange(shape[1]),
        t_tdb_s=np.broadcast_to(np.arange(shape[1]) * 60.0, shape), exposure_s=np.ones(shape), flux=freeze(flux),
        flux_err=freeze(total), raw_flux=freeze(2.0 * flux), raw_flux_err=np.full(shape, 2.0 * error),
        flags=np.zeros(shape, np.int64), clock_error_s=np.full(shape[1], np.nan),
    )  # fmt: skip


def solution(n: int, extra: float) -> dict[str, np.ndarray]:
    """Frames of gain 2 whose comparisons scatter by `extra` more than their errors."""
    return {
        "frame": 10 + np.arange(n), "gain": np.full(n, 2.0), "error_scale": np.ones(n),
        "extra_scatter": np.full(n, extra), "verdict": np.full(n, "good", object),
    }  # fmt: skip


def comparisons(seed: int, extra: float, error: float, n: int = 30, frames: int = 200) -> Block:
    """Sources of flux 1000 that calibration leaves `extra` of, as residuals of a fit to n sources are."""
    rng = np.random.default_rng(seed)
    own = rng.normal(0.0, extra, (n, frames))
    own -= own.mean(axis=0)
    return block(1000.0 * (1 + own) + rng.normal(0.0, error, (n, frames)), error, extra)


@pytest.mark.parametrize("error", [1.0, 30.0, 60.0])
def test_residuals_are_what_calibration_leaves(error: float) -> None:
    """Their scatter is that of the calibration, 3 %, also where a comparison's own noise is as large or twice that."""
    left = residuals(comparisons(1, 0.03, error), solution(200, 0.03))
    assert left is not None
    assert np.std(left.values) == pytest.approx(0.03, rel=0.04)
    assert np.isfinite(left.values).all()


def test_gaps_are_filled_and_variable_sources_left_out() -> None:
    """From the next source that has one; a source that varies by half is none of them."""
    given = comparisons(2, 0.03, 1.0)
    flux = given.flux.copy()
    flux[3, 40:60] = np.nan
    flux[5] *= 1 + 0.5 * np.sin(np.arange(200))
    left = residuals(block(flux, 1.0, 0.03), solution(200, 0.03))
    assert left is not None
    assert left.values.shape == (29, 200)
    np.testing.assert_array_equal(left.values[3, 40:60], left.values[4, 40:60])


def test_no_target_is_held_against_itself() -> None:
    """Copies made with the residuals of a source serve all targets but those that it is; sources left out are not counted."""
    given = comparisons(2, 0.03, 1.0)
    flux = given.flux.copy()
    flux[4] *= 1 + 0.5 * (np.arange(200) % 2)  # varies by itself, and is left out
    whose = [np.array([100 + k, 200 + k]) if k in (3, 5) else np.empty(0, np.int64) for k in range(30)]
    left = residuals(replace(given, flux=freeze(flux)), solution(200, 0.03), whose)
    assert left is not None
    assert len(left.values) == len(left.whose) == 29
    left = over_all(left, 10 + np.arange(200), solution(200, 0.03))
    made = copies(np.arange(1000, 1058), 3)
    rows = left.row_of(made)
    np.testing.assert_array_equal(
        left.foreign(np.array([103, 205, 104, 7]), made), [rows != 3, rows != 4, rows >= 0, rows >= 0]
    )
    blank = block(np.zeros((58, 200)), 1.0)
    ids = np.concatenate((np.arange(1000, 1058), made))
    risen = lifted(blank, np.arange(1000, 1058), ids, 100.0, left).flux[58:]
    np.testing.assert_allclose(risen, 100.0 * (1 + left.values[rows]))


def test_two_comparisons_tell_nothing() -> None:
    """Nor do frames that are not tied to any."""
    assert residuals(comparisons(3, 0.03, 1.0, n=2), solution(200, 0.03)) is None
    raw = solution(200, 0.03) | {"verdict": np.full(200, "uncalibrated", object)}
    assert residuals(comparisons(3, 0.03, 1.0), raw) is None


def test_copies_are_blank_sky_and_a_steady_source() -> None:
    """Flux and error gain the level with its residuals, raw fluxes by the gain; the same whoever is asked for together."""
    rng = np.random.default_rng(4)
    blank = block(rng.normal(0.0, 1.0, (5, 200)), 1.0)
    left = residuals(comparisons(5, 0.03, 1.0), solution(200, 0.03))
    base = np.array([2, 4, 7, 8, 9])
    ids = np.concatenate([base, copies(base, 3)])
    made = lifted(blank, base, ids, 100.0, left)
    np.testing.assert_array_equal(made.flux[:5], blank.flux)
    np.testing.assert_array_equal(made.flux_err[:5], blank.flux_err)
    added = made.flux[5:] - np.tile(blank.flux, (3, 1))
    assert added.mean() == pytest.approx(100.0, rel=0.01)
    np.testing.assert_allclose(made.flux_err[5:], np.hypot(1.0, 0.03 * added))
    np.testing.assert_allclose(made.raw_flux[5:], np.tile(blank.raw_flux, (3, 1)) + 2.0 * added)
    for control in range(5):
        assert len(np.unique(np.round(added[control::5], 6), axis=0)) == 3  # each copy with another comparison
    some = np.array([7, 4 + COPY, 7 + 3 * COPY])
    again = lifted(blank, base, some, 100.0, left)
    np.testing.assert_array_equal(again.flux, made.flux[np.searchsorted(ids, some)])
    assert originals(some).tolist() == [4, 7]
    np.testing.assert_array_equal(lifted(blank, base, ids, 100.0, None).flux[5:10], blank.flux)


def test_only_copies_that_serve_are_counted_as_alike() -> None:
    """Of a hundred controls thirty are as noisy as the target: with ten comparisons, six of their sixty copies are alike."""
    controls = copies(np.arange(1, 101), 2)
    depth = np.concatenate(([1.0], np.tile(np.where(np.arange(100) < 30, 1.0, 2.0), 2)))
    found = Field(-5, np.array([0]), controls, np.ones((1, 200), bool), lift=Lift({"c": 50.0}, 1.0, 10))
    core = {
        "n_used": 20,
        "snr_max": 3.0,
        "excess_max": 3.0,
        "mean_snr": 0.0,
        "mean": 0.0,
        "mean_err": 0.2,
        "reduced": 1.0,
    }
    values = {("c", f"core_{name}"): np.full(201, value) for name, value in core.items()}
    chi_square = np.concatenate(([9.0], np.random.default_rng(9).uniform(0.5, 1.5, 200)))
    found.judgement = Judgement(201, {**values, ("c", "core_depth"): depth, ("c", "chi_square_reduced"): chi_square})
    settings = replace(Settings(), controls=Controls(fewest_alike=20))
    rank(found, host.load(host.spec_from(settings)), settings)
    assert found.ranked.n_controls[0] == 60
    assert found.group_size == pytest.approx(6.0)
    assert found.ranked.ranks[0].p_value == pytest.approx(6 / 66)


def test_copies_scatter_as_errors_say_where_comparisons_do_not_tell() -> None:
    """In frames that are not tied, and in those that show no comparison: else a target would vary beside its copies."""
    known = solution(200, 0.03)
    known["verdict"][150:] = "uncalibrated"
    known["extra_scatter"][100:] = 0.07
    some = comparisons(8, 0.03, 1.0)
    seen = block(some.flux[:, :180], 1.0, 0.03)  # the last twenty show none
    left = residuals(seen, known)
    assert left is not None
    whole = over_all(left, known["frame"], known)
    np.testing.assert_array_equal(whole.values[:, :150], left.values[:, :150])
    assert np.std(whole.values[:, 150:]) == pytest.approx(0.07, rel=0.05)
    assert np.abs(np.corrcoef(whole.values[:, 150:])[np.triu_indices(len(whole.values), 1)]).max() < 0.6
    blank = block(np.zeros((3, 200)), 1.0)
    made = lifted(blank, np.arange(3), copies(np.arange(3), 5), 1000.0, whole)
    pulls = (made.flux[:, 150:] - 1000.0) / made.flux_err[:, 150:]
    assert np.std(pulls) == pytest.approx(1.0, rel=0.1)
    some_frames = over_all(left, known["frame"][170:], known)
    np.testing.assert_array_equal(some_frames.values, whole.values[:, 170:])


def test_rank_among_groups_that_are_alike() -> None:
    """Of 20 groups of ten equal controls the target is beyond all with chance 1/21, and never less by their number."""
    rng = np.random.default_rng(6)
    p = []
    for _ in range(2000):
        groups = np.repeat(rng.standard_normal((20, 1)), 10, axis=0)
        p.append(calibrate.rank(calibrate.null_from(groups), rng.standard_normal(1), weight=10.0).p_value)
    assert min(p) == pytest.approx(10 / 210)
    assert np.mean(np.array(p) <= 10 / 210) == pytest.approx(1 / 21, abs=3 * (1 / 21 / 2000) ** 0.5)
    with_one = calibrate.rank(calibrate.null_from(groups), np.array([9.0])).p_value
    assert with_one == pytest.approx(1 / 201)


@pytest.mark.parametrize(("controls", "each", "sources"), [(5, 8, 8), (40, 2, 8), (40, 10, 40)])
@pytest.mark.parametrize("share", [0.0, 0.05, 0.2, 0.5, 0.9, 1.0])
def test_a_target_is_beyond_all_copies_no_more_often_than_stated(
    controls: int, each: int, sources: int, share: float
) -> None:
    """Values of a control and a comparison's added, in heavy tails, the copies made as `lifted` does it: exact where all
    are alike, on the safe side elsewhere.
    """
    rng, trials = np.random.default_rng(7), 8000
    ids = copies(np.arange(100, 100 + controls), each)
    blank, left = rng.standard_t(3, (trials, controls + 1)), rng.standard_t(3, (trials, sources + 1))
    sky, wander = (1 - share) ** 0.5 * blank, share**0.5 * left
    made = sky[:, ids % COPY - 100] + wander[:, (ids + ids // COPY) % COPY % sources]
    beyond = np.mean(sky[:, -1] + wander[:, -1] > made.max(axis=1))
    size = group_size(share, each, len(ids), sources)
    stated = size / (len(ids) + size)
    noise = 3 * (stated / trials) ** 0.5
    assert beyond <= stated + noise
    if share in (0.0, 1.0):
        assert beyond >= stated - noise


@pytest.mark.parametrize("kind", ["wild", "listed"])
def test_a_small_version_of_the_study(tmp_path: Path, kind: str) -> None:
    """Steady sources are candidates among blank sky where calibration errors are wild, or large and nothing tells them.

    They are not among copies, also where all of them are targets that serve each other as comparisons.
    """
    bright = study("bright")
    snr = bright.simulated(tmp_path, 3, targets=60, frames=20, size=520, kind=kind)
    blank = bright.mined(tmp_path, "blank", snr, bright.ALONE[kind])
    lit = bright.mined(tmp_path, "lifted", snr, "")
    assert blank.nulls == {"blank sky"}
    assert lit.nulls == {"blank sky and the residu"}
    assert (blank.q < 0.05).sum() >= 5
    assert not (lit.q < 0.05).any()
    said = {
        name: {str(n) for n in Table.read(tmp_path / name / "candidates.ecsv")["notes"]} for name in ("blank", "lifted")
    }
    assert any("comparisons do not tie the frames" in note for note in said["blank"]) == (kind == "listed")
    assert any("since its field has too few others" in note for note in said["lifted"]) == (kind == "listed")
