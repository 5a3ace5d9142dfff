"""Flux lost off axis and to the noise: found in comparisons, given back to targets."""

from __future__ import annotations

from functools import partial
from pathlib import Path

import numpy as np
import pytest

from hindlight import losses
from hindlight.ensemble import IMAGE_COLUMNS, calibrated, solve_gains, solved
from hindlight.settings import Comparisons
from test_estimators import study

STUDY = study("losses")
EDGE = STUDY.EDGE


def test_planted_losses_are_found() -> None:
    """20 dithered channels of 30 comparisons and 60 frames: within 3 errors, and errors neither too small nor too large."""
    pulls = np.array([STUDY.pulls(seed, off_axis=0.1 / EDGE**2, noise=1.0) for seed in range(20)])
    assert np.isfinite(pulls).all()  # both are applied in all of them
    assert np.abs(pulls).max() < 3.0
    assert (np.abs(pulls.mean(axis=0)) < 0.67).all()  # 3 / sqrt(20)
    assert ((pulls.std(axis=0) > 0.6) & (pulls.std(axis=0) < 1.5)).all()


def test_gains_no_longer_follow_the_losses() -> None:
    """With both losses planted the gains are as good as without any, and sources scatter no more than they do."""
    made = STUDY.table(1, off_axis=0.1 / EDGE**2, noise=1.0)
    before = solve_gains(made.flux, made.error)
    found, _ = losses.fitted(made.flux, made.error, made.degrees, solve_gains)
    off, off_before = (np.std(np.log(some.gain / made.gain)) for some in (found, before))
    assert off < 0.5 * off_before
    assert found.common_scatter < 0.5 * before.common_scatter
    assert found.common_scatter == pytest.approx(0.01, abs=0.004)


def test_no_loss_is_found_where_there_is_none() -> None:
    """In at most two of 40 channels."""
    assert sum(STUDY.applied(seed) for seed in range(40)) <= 2


def test_a_gain_with_the_distance_is_no_loss() -> None:
    """Sources that are brighter off axis are left as they are."""
    assert not STUDY.applied(3, off_axis=-0.1 / EDGE**2)


def rows_of(made, wide: int = 1001) -> dict[str, np.ndarray]:
    """A simulated channel as rows of measurements; the middle of the images is at pixel 500, a pixel is 3.6 arcsec."""
    frame, source = np.nonzero(np.isfinite(made.flux))
    at = {"x": 500.0 + 1000 * made.degrees[frame, source], "y": np.full(len(frame), 500.0)}
    return {
        "frame": frame, "position": source, "flux": made.flux[frame, source], "flux_err": made.error[frame, source], **at
    }  # fmt: skip


def solved_of(made) -> tuple[dict[str, np.ndarray], tuple[str, ...]]:
    """The solution of a simulated channel."""
    n = len(made.flux)
    known = {"frame": np.arange(n), "pull": np.ones(n), "n_controls": np.full(n, 200)}
    known |= {name: np.full(n, np.nan) for name in IMAGE_COLUMNS}
    images = {"width": np.full(n, 1001), "height": np.full(n, 1001), "pixel_scale": np.full(n, 3.6)}
    images["response"] = np.full(n, "linear", object)
    return solved(np.arange(n), np.full(n, "c", object), [known], [rows_of(made)], Comparisons(), images)


def test_one_centre_for_all_frames_tells_nothing_off_axis() -> None:
    """k cannot be told, which the table says, and fluxes are those of the gains alone, byte for byte."""
    made = STUDY.table(4, off_axis=0.1 / EDGE**2, dither=0.0)
    table, said = solved_of(made)
    assert np.isnan(table["loss_off_axis_err"]).all()
    assert not table["loss_off_axis"].any()
    assert not any("lose flux" in line for line in said)
    gains = solve_gains(made.flux, made.error)
    rows = rows_of(made)
    flux, error, _ = calibrated(rows, table)
    assert flux.tobytes() == (rows["flux"] / gains.gain[rows["frame"]]).tobytes()
    extra = np.hypot(gains.frame_scatter, gains.gain_err / gains.gain)[rows["frame"]]
    want = np.hypot(rows["flux_err"], extra * rows["flux"]) / gains.gain[rows["frame"]]
    assert error.tobytes() == want.tobytes()


def test_noise_that_scales_with_the_gain_tells_nothing_of_clean() -> None:
    """b sigma is then a part of the gain: it cannot be told, and nothing is done."""
    made = STUDY.table(5, noise=1.0, noise_scatter=0.0, gain_scatter=0.0)
    _, found = losses.fitted(made.flux, made.error, made.degrees, partial(solve_gains, fewest=3))
    assert (found.noise, np.isnan(found.noise_err)) == (0.0, True)


def test_use() -> None:
    """(flux + b sigma) / (1 - k d^2), S/N 4 half of b, blank sky none; errors carry that of b; no flux stays none."""
    rows = {"x": np.array([10.0, 10, 10, 10, 10]), "y": np.array([0.0, 30, 0, 0, 0]),
            "flux": np.array([100.0, 100, 8, 1, np.nan]), "flux_err": np.array([2.0, 2, 2, 2, 2])}  # fmt: skip
    alike = {"loss_off_axis": 1.0, "loss_off_axis_err": 0.1, "loss_noise": 0.5, "loss_noise_err": 0.3,
             "centre_x": 10.0, "centre_y": 0.0, "pixel_deg": 0.01}  # fmt: skip
    flux, sigma = losses.undone(rows, rows["flux_err"], {name: np.full(5, v) for name, v in alike.items()})
    np.testing.assert_allclose(flux, [101, 101 / 0.91, 8.5, 1, np.nan])
    np.testing.assert_allclose(sigma, [2 * 1.09**0.5, 2 * 1.09**0.5 / 0.91, 2 * 1.0225**0.5, 2, 2])


def test_what_is_said() -> None:
    """One line for each loss that is corrected, none where there is none."""
    both = losses.Loss(np.zeros(1), 0.5, 0.1, 1.04, 0.1, 0.4)
    off_axis, noise = both.said("array|I")
    assert "8.0 +- 1.6 % at 0.4 degrees: corrected" in off_axis
    assert "too faint by 1.04 +- 0.10 times the noise" in noise
    assert losses.Loss(np.zeros(1), 0.0, 0.1, 0.0, 0.1, 0.4).said("array|I") == []


def test_from_files_to_fluxes(tmp_path: Path) -> None:
    """Dithered images that lose 10 % at 0.25 degrees and one rms: sources kept out of the fit get their flux back."""
    run = STUDY.mined(tmp_path, seed=1)
    said = (tmp_path / "run" / "summary.txt").read_text(encoding="utf-8")
    assert "lose flux with the distance" in said
    corrected, raw = STUDY.fluxes_over_truth(run)
    assert abs(corrected.mean() - raw.mean()) > 0.01
    assert corrected.std() < 0.5 * raw.std()
