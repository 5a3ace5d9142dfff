"""What a plugin does wrong is recorded, and the others go on."""

from dataclasses import dataclass

import numpy as np
import pytest

from hindlight import Column, Statistic
from hindlight.fence import Fault, call, checked, merged
from hindlight.judge import judge
from hindlight.testing import simulated_block


@dataclass(frozen=True)
class Good(Statistic):
    """Counts."""

    columns = (Column("n", "samples", dtype="int64"),)

    def compute(self, curve):
        return {"n": len(curve)}


@dataclass(frozen=True)
class Raises(Good):
    """Raises for one position in three."""

    def compute(self, curve):
        if int(curve.name[-1]) % 3 == 0:
            raise ZeroDivisionError("by\nzero")
        return {"n": 1}


@dataclass(frozen=True)
class Misnames(Good):
    """Returns a column it does not declare."""

    def compute(self, curve):
        return {"m": 1}


@dataclass(frozen=True)
class Scribbles(Good):
    """Writes into its input."""

    def compute(self, curve):
        curve.flux[0] = 0.0
        return {"n": 1}


def test_faults_are_counted_and_the_rest_goes_on():
    """Each bad plugin is blank where it failed and named with line and first position; the good one is untouched."""
    block = simulated_block(6, 20)
    before = block.flux.copy()
    result = judge({"c": block}, [Good(), Misnames(), Raises(), Scribbles()])
    assert result.values["c", "good_n"].tolist() == [int(np.isfinite(row).sum()) for row in block.flux]
    faults = {f.plugin: f for f in merged(result.faults)}
    assert (faults["raises"].count, faults["raises"].fault, faults["raises"].target) == (
        2,
        "ZeroDivisionError",
        "curve 0",
    )
    assert faults["raises"].detail == "by zero"
    assert faults["raises"].line.startswith("test_fence.py:")
    assert (faults["misnames"].count, faults["misnames"].fault) == (6, "wrong_column")
    assert faults["scribbles"].fault == "ValueError"
    assert "good" not in faults
    np.testing.assert_array_equal(block.flux, before)


def test_order_of_calls_does_not_change_the_record():
    """Faults merged in any order give the same rows."""
    rows = [Fault("p", "statistic", f"t{k}", "c", "E", "d", "f.py:1") for k in (3, 1, 2)]
    assert merged(rows) == merged(rows[::-1])
    assert merged(rows)[0].target == "t1"
    assert merged(rows)[0].count == 3


@pytest.mark.parametrize("values", [3, {}, {"n": 1, "x": 2}, {"n": "one"}, {"n": [1, 2]}, {"n": float("nan")}])
def test_wrong_columns_are_refused(values):
    """Not a mapping, a missing, an extra, a textual, a vector or a non-whole value: each is a fault."""
    fault = call(Good(), lambda: checked(Good(), values), "t")
    assert isinstance(fault, Fault)
    assert fault.fault == "wrong_column"
