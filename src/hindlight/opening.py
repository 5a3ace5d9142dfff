"""A frame opened to be measured: its header read, its projection and beam in pixels, its pixels and companions at hand.

Nothing here measures anything.
"""

from __future__ import annotations

import math
import os
from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from dataclasses import dataclass, field, replace

from hindlight.archive import MEGABYTE
from hindlight.facts import NAN
from hindlight.headers import SetAsideError
from hindlight.pixels import ImagePlace, Mask, Pixels, PlanePlace, Windows, find_image, images_of, read_plane
from hindlight.plugin import BeamShape
from hindlight.settings import Photometry, Settings
from hindlight.sky import Projection, beam_shape, projection


@dataclass(frozen=True)
class FrameToMeasure:
    """What photometry needs to know of a frame.

    Beam in arcsec and degrees east of north, NaN where unknown; `mjd` NaN where there is no date; `electrons_per_unit`
    and `saturation` in the unit of the pixels, NaN where unknown. `companions` are files by kind, see
    `settings.Companions`; one with gains, or else a Gaussian of `primary_beam_fwhm_deg` about the reference pixel, is
    applied where `primary_beam` is "uncorrected". With `negative` stars are darker than the sky: pixels, and with them
    `saturation`, are meant with the other sign.
    """

    path: str
    hdu: int = 0
    plane: int = 0
    mjd: float = NAN
    beam_major: float = NAN
    beam_minor: float = NAN
    beam_angle: float = NAN
    unit: str = ""
    electrons_per_unit: float = NAN
    saturation: float = NAN
    primary_beam: str = "unknown"
    primary_beam_fwhm_deg: float = NAN
    negative: bool = False
    companions: Mapping[str, str] = field(default_factory=dict)


@dataclass(frozen=True, eq=False)
class OpenFrame:
    """A frame whose header has been read: where its pixels and those of its companions are, its projection, its beam in

    pixels. Where it is a `negative` its pixels have the other sign, so that stars are brighter than the sky.
    """

    place: PlanePlace
    sky: Projection
    beam: BeamShape
    unpacked_limit: int
    companions: Mapping[str, PlanePlace] = field(default_factory=dict)
    negative: bool = False
    unpacked: Pixels | None = None

    def unpacked_once(self) -> OpenFrame:
        """The same for being read several times: its pixels in memory if they are packed or compressed, and what is read

        kept if it is remote.
        """
        if self.place.image.packed or self.place.image.hdu.compressed:
            return replace(self, unpacked=read_plane(self.place, self.unpacked_limit))
        kept = {kind: place.keeping() for kind, place in self.companions.items()}
        return replace(self, place=self.place.keeping(), companions=kept)

    def pixels(self, windows: Windows | None = None) -> Pixels:
        """Its pixels, blank where a companion says so; see `pixels.read_plane`."""
        own = self.unpacked or read_plane(self.place, self.unpacked_limit, windows)
        if self.negative:
            own = replace(own, scale=-own.scale, zero=-own.zero)
        read = {kind: self.companion(kind, windows) for kind in ("mask", "weight")}
        masks = tuple(Mask(found, kind == "weight") for kind, found in read.items() if found is not None)
        return replace(own, masks=masks) if masks else own

    def companion(self, kind: str, windows: Windows | None = None) -> Pixels | None:
        """The pixels of a companion, None where there is none."""
        place = self.companions.get(kind)
        if place is None:
            return None
        with _blamed_on(place.image.path, kind):
            return read_plane(place, self.unpacked_limit, windows)


def open_frame(frame: FrameToMeasure, settings: Settings) -> OpenFrame:
    """Read a frame's header. Raises as `measure_frame` does."""
    limit = settings.inventory.unpacked_limit_mb * MEGABYTE
    image = find_image(frame.path, frame.hdu, limit)
    sky = projection(image.hdu.cards, frame.path)
    place = PlanePlace(image, sky.axes, frame.plane)
    companions = {kind: companion_place(place, path, kind, limit) for kind, path in frame.companions.items()}
    return OpenFrame(place, sky, _beam(frame, sky, settings.photometry), limit, companions, frame.negative)


def companion_place(image: PlanePlace, path: str, kind: str, unpacked_limit: int) -> PlanePlace:
    """Where the pixels of a companion are that belong to a plane of an image.

    They are in the HDU of the same number, or in the only image of the file; the companion has the same planes, or one
    for all of them. Raises `SetAsideError` where its shape is another, and as `find_image`.
    """
    with _blamed_on(path, kind):
        found = _companion_image(path, image.image.hdu.index, unpacked_limit)
    axes, size = found.hdu.axes, (image.width, image.height)
    if axes == image.image.hdu.axes:
        return PlanePlace(found, image.axes, image.index)
    flat = [(number, length) for number, length in enumerate(axes, 1) if length > 1]
    if tuple(length for _, length in flat) != size:
        shown, wanted = (" x ".join(map(str, lengths)) or "no" for lengths in (axes, size))
        name = os.path.basename(path)
        raise image.fault("bad_companion", f"its {kind} companion {name} has {shown} pixels, expected {wanted}")
    return PlanePlace(found, (flat[0][0], flat[1][0]))


def _companion_image(path: str, hdu: int, unpacked_limit: int) -> ImagePlace:
    images = images_of(path, unpacked_limit)
    same = [found for found in images if found.hdu.index == hdu]
    if not same and len(images) != 1:
        raise SetAsideError("bad_companion", f"it has {len(images)} images, none of them in HDU {hdu}", hdu)
    return (same or images)[0]


@contextmanager
def _blamed_on(path: str, kind: str) -> Iterator[None]:
    """What cannot be read here is the companion's fault."""
    try:
        yield
    except (SetAsideError, OSError) as error:
        detail = (error.strerror if isinstance(error, OSError) else None) or str(error)
        name = os.path.basename(path)
        raise SetAsideError("bad_companion", f"its {kind} companion {name} cannot be used: {detail}") from error


def _beam(frame: FrameToMeasure, sky: Projection, settings: Photometry) -> BeamShape:
    """The frame's beam in pixels; a round one of the assumed width where it is unknown."""
    if not frame.beam_major > 0.0:
        return BeamShape(settings.assumed_fwhm_pixels, settings.assumed_fwhm_pixels, 0.0)
    minor = frame.beam_minor if frame.beam_minor > 0.0 else frame.beam_major
    angle = frame.beam_angle if math.isfinite(frame.beam_angle) else 0.0
    return beam_shape(frame.beam_major, minor, angle, sky.reference_jacobian)
