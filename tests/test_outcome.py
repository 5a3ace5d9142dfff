"""The sentences at the end of a run: what they count, and how they say it."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from hindlight import calibrate, outcome, ranking, verdicts
from hindlight.candidates import Described
from hindlight.conclude import Field, PValues
from hindlight.judge import Judgement
from hindlight.settings import Settings
from hindlight.tails import Extrapolation
from hindlight.wording import from_to, how_many

LABEL = "camera|R|I|3as|adu"


def p_values(empirical: list[float], testable: list[bool] | None = None, **flags: list[bool]) -> PValues:
    """P-values as the controls give them; nothing is short or extrapolated unless it is said."""
    p, none = np.array(empirical), [False] * len(empirical)
    short, extrapolated = (np.array(flags.get(name, none)) for name in ("short", "extrapolated"))
    return PValues(p, p, p, extrapolated, short, np.array(testable or [True] * len(p)), needed=400)


def ranked(n_controls: list[int], n_trials: int = 1) -> Field:
    """A field of targets with so many controls each."""
    n = len(n_controls)
    ranks = tuple(calibrate.Rank(0.5, 0, 0.0, 1, np.empty(0)) for _ in n_controls)
    most = max(n_controls)
    found = Field(0, np.arange(n), n + np.arange(most), np.ones((n, most), bool), n_trials)
    found.ranks = ranking.FieldRanks(ranks, (None,) * n, np.array(n_controls), np.empty(0), ())
    return found


def test_numbers_in_sentences() -> None:
    """One is singular; a range of what is written alike is one number."""
    assert [how_many(n, "target was", "targets were") for n in (0, 1, 2)] == [
        "0 targets were",
        "1 target was",
        "2 targets were",
    ]
    assert [from_to(*ends, ".2f") for ends in ((0.931, 0.934), (0.93, 0.95))] == ["0.93", "0.93 to 0.95"]
    assert from_to(7, 7) == "7"


@pytest.mark.parametrize(
    ("field", "p", "said"),
    [
        (ranked([0, 900]), p_values([np.nan, 0.5]), "1 target has no control and so no p-value"),
        (ranked([0, 0]), p_values([np.nan, np.nan]), "2 targets have no control and so no p-value"),
        (ranked([900]), p_values([0.1], short=[True]), "1 target lies beyond every control"),
        (ranked([900]), p_values([0.1], extrapolated=[True]), "1 p-value is the upper bound of a fitted tail"),
        (ranked([100], 50), p_values([0.1]), "1 target was searched within its position error at 50 places each"),
        (ranked([100, 90], 50), p_values([0.1, 0.1]), "2 targets were searched"),
        (ranked([100, 90], 50), p_values([0.1, 0.1]), "with 90 to 100 controls searched alike"),
        (ranked([90, 90], 50), p_values([0.1, 0.1]), "with 90 controls searched alike"),
    ],
)
def test_plurals_and_ranges(field: Field, p: PValues, said: str) -> None:
    """One target is not 'targets', and equal numbers are no range."""
    assert said in "\n".join(outcome.remarks(p, [field], Settings(), {}))


def test_a_tail_that_does_not_fit_is_said() -> None:
    """In the row's cells and notes and in the last lines; a target without a tail has none in its cells."""
    p = replace(p_values([0.1, 0.5], short=[True, False]), tails={0: Extrapolation(np.nan, 0.7, 50, 0.004)})
    found = ranked([90, 90])
    found.unlike = np.ones(2)
    cells = [outcome.chance_cells(found, index, index, p) for index in range(2)]
    assert [(c["tail_shape"], c["tail_n"], c["tail_fit_p"]) for c in cells[:1]] == [(0.7, 50, 0.004)]
    assert cells[1]["tail_n"] == 0
    assert np.isnan([cells[1]["tail_shape"], cells[1]["tail_fit_p"]]).all()
    said = "the tail of its controls does not fit (p = 0.004) and is not used"
    assert said in outcome.notes(found, 0, 0, p, Settings().controls)
    assert said not in outcome.notes(found, 1, 1, p, Settings().controls)
    assert "1 target has controls whose tail does not fit at p < 0.01" in "\n".join(
        outcome.remarks(p, [found], Settings(), {})
    )


@pytest.mark.parametrize(
    ("n_targets", "n_controls", "said"),
    [
        (20, 98, "clear of sources, of 20 targets and of each other"),
        (320, 35, "of 320 targets and of each other; a shorter list, or one split into runs, leaves room for more"),
        (1, 98, "of 1 target and of each other"),
    ],
)
def test_targets_that_leave_no_room_for_controls_are_named(n_targets: int, n_controls: int, said: str) -> None:
    """They are among what controls keep clear of; where they outnumber the controls that is what to mend."""
    found = ranked([n_controls] * n_targets)
    (line,) = outcome._placing_remarks([found], Settings())
    assert line.endswith(said)
    assert not outcome._placing_remarks([ranked([512] * 3)], Settings())
    (line,) = outcome._placing_remarks([ranked([100, 600])], Settings())
    assert "more were measured" in line


def test_what_counts_as_a_trial_is_said() -> None:
    """Targets with a p-value, columns ranked, channels; the columns over all channels are in none."""
    fields = [ranked([9, 9]), ranked([9])]
    for found, keys in zip(fields, ([(LABEL, "a"), ("", "b"), (LABEL, "c")], [("other", "a")]), strict=True):
        assert found.ranks is not None
        found.ranks = replace(found.ranks, keys=tuple(keys))
    (line,) = outcome._trial_remarks(p_values([0.1, np.nan, 0.2]), fields)
    assert line.startswith("counted as trials: 2 targets (q_value), and for each 1 to 3 ranked columns in 2 channels")
    assert not outcome._trial_remarks(p_values([np.nan]), fields)


def test_confusion_has_the_unit_of_the_fluxes(monkeypatch: pytest.MonkeyPatch) -> None:
    """An rms in adu is no number of sigma."""
    found = ranked([3])
    found.judgement = Judgement(1, {(LABEL, "core_mean_err"): np.array([2.0])})
    found.controls = found.targets
    found.thresholds = {LABEL: ranking.Thresholds(5.0, 5.0, 5.0, 2.0, 3, confusion=30.14)}
    (said,) = outcome._confusion_remarks([found], {LABEL: "adu"})
    assert "scatter by 30.1 adu (rms) more than their errors explain" in said
    (said,) = outcome._confusion_remarks([found], {LABEL: ""})
    assert "30.1 of the image (rms)" in said


def test_a_bound_is_printed_beside_the_p_value_of_the_controls() -> None:
    """Marked, with its q-value; where no row shown has one there is no such column."""
    row = {
        "name": "a", "standing": "single", "p_value": 4.08e-5, "p_is_extrapolated": True, "p_empirical": 1 / 99,
        "q_value": 0.000815, "n_detected": 1, "n_used": 370, "peak_snr": 15.9, "first_detected": "2009-04-04T09:38:33.1",
        "period": np.nan,
    }  # fmt: skip
    other = row | {"p_value": 0.2, "p_empirical": 0.2, "p_is_extrapolated": False, "q_value": 0.4, "period": 3.5}
    names, (first, second) = outcome.shown([row, other])
    assert names[2:5] == ["p", "by controls", "q"]
    assert first == ["a", "single", "<4.08e-05", "0.0101", "<0.000815", "1/370", "15.9", "2009-04-04T09:38:33", ""]
    assert second[2:5] == ["0.2", "0.2", "0.4"]
    names, (second,) = outcome.shown([other])
    assert names[2:5] == ["p", "q", "seen/used"]
    assert second == ["a", "single", "0.2", "0.4", "1/370", "15.9", "2009-04-04T09:38:33", "3.5"]


def described(standing: str, *n_used: int) -> Described:
    """A target with so many usable frames in each of its channels."""
    return Described({"standing": standing}, tuple({"channel": LABEL, "n_used": n} for n in n_used))


def test_reasons_of_being_undecided_are_counted_apart() -> None:
    """Uncovered targets are not undecided; those without a control are counted by another sentence."""
    targets = [
        described("uncovered"), described("undecided", 7, 3), described("undecided", 0), described("undecided", 9, 2),
        described("undecided", 9), described("undecided", 9), described("steady", 99),
    ]  # fmt: skip
    p = p_values([np.nan, np.nan, 0.5, 0.1, np.nan, np.nan, 0.5])
    assert outcome.undecided_remarks(targets, [0, 9, 9, 9, 0, 9, 9], p, 8) == [
        "1 target is undecided: beyond every control, and these are too few to decide, by themselves or by their tail; "
        "more controls or fewer targets can ([controls] per_field and most_per_field)",
        "2 targets are undecided: fewer than 8 usable frames in every channel",
        "1 target is undecided: no statistic that can be ranked",
    ]


def test_a_small_position_error_is_no_caution() -> None:
    """Only where the flux lost at 1 sigma is some tenth: exp(-4 ln 2 (d / FWHM)^2) of a Gaussian beam is left."""
    apart = np.zeros(2)
    assert outcome.place_note(ranked([9]), apart, 0.2, 3000, 3.0) == ""
    assert outcome.place_note(ranked([9]), apart, 0.0, 3000, 3.0) == ""
    said = outcome.place_note(ranked([9]), apart, 1.5, 3000, 3.0)
    assert "off by its error of 1.5 arcsec, 50 % of the flux would be lost in a beam of 3 arcsec" in said
    assert "searched at 50 places" in outcome.place_note(ranked([9], 50), apart, 0.2, 3000, 3.0)


def test_the_beam_of_a_channel_is_that_of_most_of_its_frames() -> None:
    """In arcsec; the assumed width, in pixels, for frames whose header has none."""
    frames = {
        "channel": np.array(["a", "b", "a", "a"], object),
        "beam_major": np.array([3.0, np.nan, 5.0, 4.0]), "pixel_scale": np.full(4, 2.0),
    }  # fmt: skip
    width = Settings().photometry.assumed_fwhm_pixels
    assert verdicts._beams(frames, Settings()) == pytest.approx({"a": 4.0, "b": 2.0 * width})
