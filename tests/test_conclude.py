"""P-values of a whole run: where the controls decide, where their tail does, and where nothing can."""

from __future__ import annotations

import numpy as np
import pytest

from hindlight import calibrate, conclude
from hindlight.settings import Settings


def ranks(controls: np.ndarray, targets: list[float]) -> list[calibrate.Rank]:
    """Targets ranked among these controls by one statistic."""
    null = calibrate.null_from(controls[:, None])
    return [calibrate.rank(null, np.array([value])) for value in targets]


@pytest.fixture
def controls() -> np.ndarray:
    """A hundred blank positions."""
    return np.random.default_rng(21).standard_normal(100)


def test_a_target_that_neither_controls_nor_tail_decide_is_not_testable(controls: np.ndarray) -> None:
    """Just beyond a hundred controls, one of ten targets: 10 / 101 and its tail bound leave it open, not steady."""
    found = conclude.p_values(ranks(controls, [controls.max() + 0.01, *[0.0] * 9]), Settings())
    assert found.short[0]
    assert found.q[0] >= 0.05
    np.testing.assert_array_equal(found.testable, [False, *[True] * 9])


def test_a_target_that_its_tail_decides_is_testable(controls: np.ndarray) -> None:
    """The same target far out is below the level by its tail."""
    found = conclude.p_values(ranks(controls, [controls.max() + 30.0, *[0.0] * 9]), Settings())
    assert found.extrapolated[0]
    assert found.q[0] < 0.05
    assert found.testable.all()


def test_a_target_within_its_controls_is_testable_however_few_they_are() -> None:
    """Of three controls one is as far out: nothing speaks for the target. Beyond all three nothing can be said."""
    found = conclude.p_values(ranks(np.array([1.0, 2.0, 3.0]), [2.5, 3.5, np.nan]), Settings())
    np.testing.assert_array_equal(found.testable, [True, False, False])


def test_a_tail_that_does_not_fit_decides_nothing(controls: np.ndarray) -> None:
    """With sources among the controls (a jump in their tail) p stays that of the rank, and what the fit says is kept."""
    jump = np.concatenate(
        [np.repeat(controls, 4)[:392] + 0.01 * np.random.default_rng(3).standard_normal(392), [20.0] * 8]
    )
    found = conclude.p_values(ranks(jump, [1e5, *[0.0] * 99]), Settings())
    assert found.short[0]
    assert found.tails[0].rejected
    assert not found.extrapolated[0]
    assert found.p[0] == pytest.approx(1 / 401)
    assert not found.testable[0]


def test_what_a_tail_says_is_kept_of_who_asked(controls: np.ndarray) -> None:
    """Of targets that are short alone; too few controls for a tail leave nothing to keep."""
    found = conclude.p_values(ranks(controls, [30.0, *[0.0] * 9]), Settings())
    assert list(found.tails) == [0]
    assert found.tails[0].n == 25
    assert found.p[0] == found.tails[0].bound
    assert not conclude.p_values(ranks(controls[:20], [30.0, 0.0]), Settings()).tails
