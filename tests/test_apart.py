"""Calls in a process of their own: results, errors, and a process that dies."""

from __future__ import annotations

import os
from pathlib import Path

import numpy as np
import pytest
from astropy.io import fits

from hindlight import apart
from hindlight.headers import SetAsideError
from hindlight.pixels import FRAGILE, PlanePlace, find_image, read_plane

LIMIT = 10**9


def test_results_and_errors_come_back() -> None:
    """The result is that of the function, and the process is another one; an error is raised with its name."""
    assert apart.call(divmod, 17, 5) == (3, 2)
    assert apart.call(os.getpid) == apart.call(os.getpid) != os.getpid()
    with pytest.raises(RuntimeError, match="ZeroDivisionError: "):
        apart.call(divmod, 1, 0)


def test_a_process_that_dies_is_an_error_and_the_next_call_works() -> None:
    """What kills the other process is said here, and the next call is answered."""
    for deadly in (os.abort, os._exit):
        with pytest.raises(apart.BrokeDownError, match="broke down"):
            apart.call(deadly, *([3] if deadly is os._exit else []))
        assert apart.call(abs, -1) == 1


def test_what_is_printed_there_does_no_harm() -> None:
    """A function that prints does not spoil its answer."""
    assert apart.call(print, "anything") is None


@pytest.mark.parametrize("method", FRAGILE)
def test_fragile_tiles(tmp_path: Path, method: str, monkeypatch: pytest.MonkeyPatch) -> None:
    """Tiles of these methods are unpacked apart, to the same pixels; a breakdown there sets the frame aside."""
    image = np.random.default_rng(1).integers(0, 99, (40, 60)).astype(np.int16)
    tile = (20, 30) if method == "HCOMPRESS_1" else None
    path = tmp_path / "a.fits.fz"
    fits.HDUList([fits.PrimaryHDU(), fits.CompImageHDU(image, compression_type=method, tile_shape=tile)]).writeto(path)
    place = PlanePlace(find_image(str(path), 1, LIMIT), (1, 2))
    np.testing.assert_array_equal(read_plane(place, LIMIT).whole(), image)
    monkeypatch.setattr("hindlight.pixels._decoded", os._exit)  # which takes no such arguments, and says so
    with pytest.raises(SetAsideError, match="TypeError") as caught:
        read_plane(place, LIMIT)
    assert caught.value.reason == "bad_compression"
    monkeypatch.setattr("hindlight.pixels.apart.call", lambda *_: apart._process.call(b"nonsense"))
    with pytest.raises(SetAsideError, match="broke down"):
        read_plane(place, LIMIT)
