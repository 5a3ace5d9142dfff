"""The small version of tests/studies/discoveries.py: how many candidates among blanks, and of true variables, are false."""

import numpy as np
import pytest
from scipy import stats

from hindlight import calibrate
from test_estimators import study

STUDY = study("discoveries")
RUNS, N_TARGETS, N_TRUE = 100, 20, 4


@pytest.fixture(scope="module")
def seen():
    """Sixteen frames in one channel."""
    return STUDY.frames(7, n_frames=16, labels="a")


@pytest.fixture(scope="module")
def bank(seen):
    """Blank positions in heavy-tailed noise."""
    return STUDY.judged(seen, np.zeros((6000, 16)), "heavy", [7, 2])


def test_blank_runs_seldom_have_a_candidate(bank):
    """Not more of 100 blank runs than 5 % allow (binomial, 1e-3); the smallest p-value of many statistics fails by far."""
    found = STUDY.blank_runs(bank, RUNS, N_TARGETS, calibrate.controls_needed(N_TARGETS, STUDY.LEVEL), 7)
    most = stats.binom.isf(1e-3, RUNS, STUDY.LEVEL)
    assert found[:, 0].sum() <= most
    assert found[:, 1].sum() > 1.5 * most


def test_false_discoveries_and_power_among_true_variables(seen, bank):
    """Of the candidates on average 5 % are false at most (three of its errors more); little less is found than could be."""
    sources = STUDY.variables(N_TRUE * RUNS, seen, "heavy", 7)
    controls = calibrate.controls_needed(N_TARGETS, STUDY.LEVEL)
    found = STUDY.mixed_runs(bank, sources, RUNS, N_TARGETS, N_TRUE, controls, 7)
    share = found[:, 0] / np.maximum(1, found.sum(axis=1))
    assert share.mean() <= STUDY.LEVEL + 3 * share.std() / RUNS**0.5
    _, power = STUDY.oracle(bank, sources, N_TARGETS, N_TRUE)
    assert found[:, 1].mean() / N_TRUE >= 0.8 * power
    assert 0.2 < power < 0.9, "sources that are always or never found tell nothing"
