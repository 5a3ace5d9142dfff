"""What `completeness` prints: in eighty columns, with intervals, and the flux found in half of the cases."""

import numpy as np
import pytest
from astropy.table import Table

from hindlight import layout
from hindlight.completeness import grid, half_flux, jeffreys
from hindlight.settings import Completeness


def table_of(found, subsets=(("all", ""), ("deep", ""), ("deep 1990s", "1990s"))):
    """completeness.ecsv of the default grid; `found` gives how many of 40 sources are recovered in a subset's cell."""
    rows = []
    for name, decade in subsets:
        for cell in grid(Completeness()):
            k = found(name, cell)
            low, high = jeffreys(k, 40)
            rows.append((name, decade, 210, 4, cell.kind, cell.flux, cell.period_s, cell.duty_cycle, cell.window,
                         cell.missing, 40, k, k / 40, low, high))  # fmt: skip
    names = ("subset decade n_frames n_targets kind flux period duty_cycle window missing n_injected n_recovered completeness "
             "completeness_low completeness_high")  # fmt: skip
    return Table(rows=rows, names=names.split())


def width(names, rows):
    """Of a printed table: the columns' widths and two blanks between them."""
    return sum(max(len(row[i]) for row in (names, *rows)) + 2 for i in range(len(names))) - 2


def test_eighty_columns_with_intervals():
    """Each kind has a line of per cents and one of intervals, of all frames only; the defaults fit a terminal."""
    names, rows = layout.by_kind(table_of(lambda name, cell: 31 if name == "all" and cell.kind != "nothing" else 0))
    assert names == ("kind", "period (s)", "duty cycle", "2", "3.4", "5.9", "10.2", "17.5", "30")
    assert len(rows) == 2 * 8
    assert rows[0] == ("pulses", "1200", "0.03", *["78"] * 6)
    assert rows[1] == ("", "", "", *["63-88"] * 6)
    full = layout.by_kind(table_of(lambda _name, _cell: 40))
    assert full[1][1][3:] == ("94-100",) * 6
    assert width(*full) <= 80
    assert layout.false_alarms(table_of(lambda _n, cell: 2 if cell.kind == "nothing" else 0)).startswith(
        "where no source is: 2 of 40 found (1"
    )


def test_half_found_by_instrument_and_kind():
    """All frames and each instrument have a row, decades none; periods count together."""

    def found(name, cell):
        if name == "deep":
            return 40 if cell.kind == "smooth" else 0
        return 40 if cell.flux >= 5.9 and cell.period_s != 18000.0 else 0

    names, rows = layout.half_found(table_of(found))
    assert names == ("frames of", "n", "targets", "pulses 0.03", "pulses 0.1", "pulses 0.3", "smooth")
    assert [row[0] for row in rows] == ["all", "deep"]
    assert rows[0] == ("all", "210", "4", "5.9", "5.9", "5.9", "4.5")
    assert rows[1] == ("deep", "210", "4", "> 30", "> 30", "> 30", "< 2")
    assert width(names, rows) <= 80


@pytest.mark.parametrize(
    ("share", "expected"),
    [
        ([0.0, 1.0, 1.0], 10**0.5), ([0.0, 0.5, 1.0], 10.0), ([0.0, 0.25, 0.75], 10**1.5), ([0.6, 1.0, 1.0], -np.inf),
        ([0.5, 1.0, 1.0], 1.0), ([0.0, 0.1, 0.4], np.inf), ([0.0, 0.8, 0.4], 10 ** (0.5 / 0.8)),
    ],
)  # fmt: skip
def test_flux_found_in_half_of_the_cases(share, expected):
    """Linear in the logarithm of the flux; beyond the grid on either side; the first crossing."""
    assert half_flux(np.array([1.0, 10.0, 100.0]), np.array(share)) == pytest.approx(expected)
    assert np.isnan(half_flux(np.empty(0), np.empty(0)))
