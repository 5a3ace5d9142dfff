"""Blank targets ranked among pools of controls that grow, without an archive: for the tests and the study of second passes."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from hindlight import calibrate, conclude, more_controls
from hindlight.settings import Settings, settings_from

WISHED = 0.1
Rule = Callable[[calibrate.Rank, bool], bool]  # rank, whether it lies beyond all and cannot decide -> whether it asks


def as_built(_rank: calibrate.Rank, short: bool) -> bool:
    """The rule in force: a target asks only where it lies beyond all its controls."""
    return short


def until_decided(rank: calibrate.Rank, _short: bool) -> bool:
    """A wrong rule: a target asks wherever it stands, until its p-value is 0.1."""
    return rank.p_value > WISHED


@dataclass(frozen=True)
class Field:
    """Targets of one field: so many, with controls from `first` to `most`, and `columns` statistics of equal correlation."""

    n_targets: int = 8
    first: int = 24
    most: int = 400
    columns: int = 4
    correlation: float = 0.5
    level: float = 0.02

    def settings(self) -> Settings:
        """Those of a run with such a field."""
        controls = {"per_field": self.first, "most_per_field": self.most}
        return settings_from({"controls": controls, "ranking": {"level": self.level}}, "test")

    def values(self, rng: np.random.Generator, n: int) -> np.ndarray:
        """Heavy-tailed statistics of n positions, shape (n, columns): Student t(4), as blank as each other."""
        common = rng.standard_normal((n, 1))
        own = rng.standard_normal((n, self.columns))
        normal = self.correlation**0.5 * common + (1 - self.correlation) ** 0.5 * own
        return normal / np.sqrt(rng.chisquare(4, (n, 1)) / 4)


def run(field: Field, rng: np.random.Generator, rule: Rule = as_built) -> conclude.PValues:
    """P-values of one run in which every target is blank, with passes as a run takes them."""
    settings = field.settings()
    targets, controls = field.values(rng, field.n_targets), field.values(rng, field.most)
    pools = np.full(field.n_targets, field.first)
    ranks = [calibrate.rank(calibrate.null_from(controls[: field.first]), row) for row in targets]
    while True:
        p = conclude.p_values(ranks, settings)
        asks = [i for i in range(field.n_targets) if pools[i] < field.most and rule(ranks[i], bool(p.short[i]))]
        if not asks:
            return p
        for i in asks:
            pools[i] = more_controls.next_size(pools[i], pools[i], p.needed, settings.controls)
            ranks[i] = calibrate.rank(calibrate.null_from(controls[: pools[i]]), targets[i])


def empirical(field: Field, runs: int, seed: int, rule: Rule = as_built) -> tuple[np.ndarray, float]:
    """P-values from controls alone, shape (runs, n_targets), and the fraction of runs with any q below the level."""
    found, false = [], 0
    for k in range(runs):
        p = run(field, np.random.default_rng([seed, k]), rule)
        found.append(p.empirical)
        false += bool((p.q < field.level).any())
    return np.array(found), false / runs
