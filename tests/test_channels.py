"""Channels: what is comparable shares one, what is not never does, and an extended run keeps its labels."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from hindlight.channels import assign, channels_of
from hindlight.settings import Channels

NAN = float("nan")
SETTINGS = Channels()
NONE: dict[str, np.ndarray] = {}


def frames(*rows: tuple[object, ...]) -> dict[str, np.ndarray]:
    """Columns of frames given as (instrument, band, stokes, unit, frequency, beam)."""
    names = ("instrument", "band", "stokes", "unit", "frequency_hz", "beam_major")
    columns = {
        name: np.array([row[i] for row in rows], dtype=object if i < 4 else float) for i, name in enumerate(names)
    }
    columns["beam_minor"] = columns["beam_major"]
    columns["primary_beam"] = np.full(len(rows), "unknown", dtype=object)
    columns["response"] = np.full(len(rows), "linear", dtype=object)
    columns["primary_beam_file"] = np.full(len(rows), "", dtype=object)
    columns["primary_beam_fwhm_deg"] = np.full(len(rows), NAN)
    return columns


def radio(*pairs: tuple[float, float]) -> dict[str, np.ndarray]:
    """Frames of one radio instrument at frequencies (MHz) with beams (arcsec)."""
    return frames(*(("array", "", "I", "Jy/beam", megahertz * 1e6, beam) for megahertz, beam in pairs))


def labelled(columns: dict[str, np.ndarray], known: dict[str, np.ndarray] = NONE) -> dict[str, np.ndarray]:
    """The same with channels."""
    return columns | {"channel": assign(columns, known, SETTINGS)}


def joined(*tables: dict[str, np.ndarray]) -> dict[str, np.ndarray]:
    """Tables one after the other."""
    return {name: np.concatenate([table[name] for table in tables]) for name in tables[0]}


def test_labels_for_people() -> None:
    """A label holds instrument, band, frequency, Stokes, beam and unit, as far as they are known."""
    columns = frames(
        ("array", "", "I", "Jy/beam", 154.24e6, 45.2),
        ("camera", "r", "I", "adu", NAN, 1.23),
        ("camera", "", "I", "", NAN, NAN),
        ("dish", "", "V", "Jy/beam", 22.235e9, 1234.0),
    )
    assert assign(columns, NONE, SETTINGS).tolist() == [
        "array|154MHz|I|45as|Jy/beam",
        "camera|r|I|1.2as|adu",
        "camera|I",
        "dish|22200MHz|V|1200as|Jy/beam",
    ]


def test_each_part_of_the_key_separates() -> None:
    """Another instrument, band, Stokes parameter or unit is another channel."""
    base = ("array", "a", "I", "Jy/beam", 1.4e9, 10.0)
    others = [(*base[:i], "other", *base[i + 1 :]) for i in range(4)]
    assert len(set(assign(frames(base, base, *others), NONE, SETTINGS))) == 5


def test_frequencies_and_beams_that_are_near() -> None:
    """A class spans at most 2 % in frequency and a factor of 1.5 in beam."""
    columns = radio((1000, 10), (1019, 14), (1021, 10), (1000, 15.1), (2000, 10))
    labels = assign(columns, NONE, SETTINGS)
    assert labels[0] == labels[1]
    assert len(set(labels.tolist())) == 4


def test_frames_without_a_beam_stay_apart() -> None:
    """Frames without a beam or without a frequency never share a channel with frames that have one."""
    labels = assign(radio((1000, 10), (1000, NAN), (NAN, 10), (NAN, NAN), (1000, NAN)), NONE, SETTINGS)
    assert len(set(labels.tolist())) == 4
    assert labels[1] == labels[4]


def test_equal_labels_are_numbered() -> None:
    """Two channels whose rounded values coincide have labels of their own."""
    columns = frames(("a|b", "", "I", "adu", NAN, 1.0), ("a b", "", "I", "adu", NAN, 1.0))
    assert sorted(assign(columns, NONE, SETTINGS)) == ["a b|I|1as|adu", "a b|I|1as|adu|2"]


def test_order_of_files_does_not_matter() -> None:
    """The same frames in another order have the same channels."""
    rng = np.random.default_rng(2)
    columns = radio(*zip(rng.uniform(900, 1100, 60), rng.uniform(5, 30, 60), strict=True))
    labels = assign(columns, NONE, SETTINGS)
    turned = rng.permutation(60)
    assert assign({name: values[turned] for name, values in columns.items()}, NONE, SETTINGS).tolist() == (
        labels[turned].tolist()
    )


@given(st.lists(st.tuples(st.floats(100, 130), st.floats(5, 40) | st.just(NAN)), min_size=1, max_size=40), st.data())
def test_an_extended_run_keeps_its_labels(pairs: list[tuple[float, float]], data: st.DataObject) -> None:
    """Whatever is added, old frames keep their channels and no channel spans more than the tolerances."""
    cut = data.draw(st.integers(0, len(pairs)))
    old = labelled(radio(*pairs[:cut])) if cut else NONE
    new = labelled(radio(*pairs[cut:]), old) if cut < len(pairs) else old
    table = joined(old, new) if old and new is not old else new
    for label in set(table["channel"].tolist()):
        mine = table["channel"] == label
        frequency, beam = table["frequency_hz"][mine], table["beam_major"][mine]
        assert frequency.max() <= frequency.min() * 1.02 * (1 + 1e-12)
        assert np.isnan(beam).all() or beam.max() <= beam.min() * 1.5 * (1 + 1e-12)


def test_new_frames_join_the_channels_there_are() -> None:
    """A new frame joins a known channel that can be stretched to hold it, and else makes its own."""
    old = labelled(radio((1000, 10), (1005, 12)))
    label = old["channel"][0]
    new = assign(radio((995, 9), (1014, 13), (1016, 10), (1000, 15.5), (1000, NAN)), old, SETTINGS)
    assert new[:2].tolist() == [label, label]
    assert label not in new[2:].tolist()


def test_stretching_has_an_end() -> None:
    """Each frame that joins stretches the channel, so that those after it may find no more room."""
    old = labelled(radio((1000, 10)))
    labels = assign(radio((985, 10), (1015, 10)), old, SETTINGS)
    assert labels[0] == old["channel"][0]
    assert labels[1] != labels[0]


def test_nearest_of_two_channels() -> None:
    """A frame that two channels could hold joins the nearer."""
    old = labelled(radio((1000, 10), (1000, 18)))
    assert assign(radio((1000, 14.9)), old, SETTINGS)[0] == old["channel"][1]
    assert assign(radio((1000, 12.1)), old, SETTINGS)[0] == old["channel"][0]


def test_new_labels_avoid_known_ones() -> None:
    """A new channel never takes the label of a known one."""
    old = labelled(radio((1000, 10)))
    old["beam_major"] = old["beam_minor"] = np.array([40.0])  # as if its median had moved since
    assert assign(radio((1000, 10)), old, SETTINGS).tolist() == ["array|1000MHz|I|10as|Jy/beam|2"]


def test_channels_of_frames() -> None:
    """Channels by label with medians of their frames; none for no frames."""
    table = labelled(joined(radio((1000, 10), (1010, 12), (1004, 11)), frames(("cam", "r", "V", "adu", NAN, NAN))))
    found = channels_of(table)
    assert list(found) == sorted(set(table["channel"]))
    first = found["array|1000MHz|I|11as|Jy/beam"]
    assert (first.instrument, first.stokes, first.unit) == ("array", "I", "Jy/beam")
    assert (first.frequency_hz, first.beam_arcsec) == (1.004e9, pytest.approx(11.0))
    second = found["cam|r|V|adu"]
    assert (second.band, second.signed) == ("r", True)
    assert np.isnan(second.beam_arcsec)
    assert channels_of({"channel": np.empty(0, object)}) == {}


def test_apparent_and_corrected_fluxes_never_share_a_channel() -> None:
    """Frames that the primary beam still dims stay apart from those corrected by header, by gain file or by Gaussian."""
    columns = radio(*[(1000, 10)] * 5)
    columns["primary_beam"][:] = ("unknown", "uncorrected", "corrected", "uncorrected", "uncorrected")
    columns["primary_beam_file"][3] = "gain.fits"
    columns["primary_beam_fwhm_deg"][4] = 0.5
    apparent, corrected = "array|1000MHz|I|10as|Jy/beam", "array|1000MHz|I|10as|Jy/beam|corrected"
    old = labelled(columns)
    assert old["channel"].tolist() == [apparent, apparent, corrected, corrected, corrected]
    assert assign(columns, old, SETTINGS).tolist() == old["channel"].tolist()
