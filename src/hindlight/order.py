"""What every piece of work is told, and the tables of the run that pieces share, read once per process and version."""

from __future__ import annotations

from dataclasses import dataclass, field
from functools import cached_property, lru_cache
from pathlib import Path

from hindlight import duplicates, host
from hindlight.channels import channels_of
from hindlight.files import local_path
from hindlight.lightcurve import Channel, IntArray
from hindlight.opening import FrameToMeasure
from hindlight.settings import PIXEL_COMPANIONS, Settings
from hindlight.store import Columns, RunFolder


@dataclass(frozen=True)
class Order:
    """What every piece of work is told: the run, its settings, its plugins, and which version of its tables."""

    run: str
    settings: Settings
    plugins: host.PluginSpec
    version: str = ""


@dataclass(frozen=True)
class Book:
    """The tables of a run that pieces of work share."""

    folder: RunFolder
    frames: Columns
    positions: Columns
    solution: Columns
    channels: dict[str, Channel]
    row_of_frame: dict[int, int] = field(default_factory=dict)

    @cached_property
    def deepest(self) -> IntArray:
        """For each frame the id of the deepest image that holds it, -1 for none."""
        return duplicates.deepest(self.frames)


@lru_cache(maxsize=4)
def book(run: str, version: str) -> Book:
    """The tables of a run, read once per process; `version` changes whenever one of them does."""
    folder = RunFolder(Path(run))
    frames = folder.frames()
    positions = folder.positions() if folder.has("positions.parquet") else {}
    solution = folder.solution() if folder.has("frame_solution.parquet") else {}
    rows = {int(frame): row for row, frame in enumerate(frames["id"])}
    return Book(folder, frames, positions, solution, channels_of(frames), rows)


def frame_facts(frames: Columns, row: int) -> FrameToMeasure:
    """What photometry needs to know of a frame, from its row in the frame table."""
    value = {name: values[row] for name, values in frames.items()}
    sign = -1.0 if value["negative"] else 1.0
    named = {kind: value[f"{kind}_file"] for kind in PIXEL_COMPANIONS if value[f"{kind}_file"]}
    companions = {kind: local_path(str(value["archive"]), str(path)) for kind, path in named.items()}
    return FrameToMeasure(
        path=local_path(str(value["archive"]), str(value["path"])), hdu=int(value["hdu"]), plane=int(value["plane"]),
        mjd=float(value["middle_mjd_tdb"]), beam_major=float(value["beam_major"]),
        beam_minor=float(value["beam_minor"]), beam_angle=float(value["beam_angle"]), unit=str(value["unit"]),
        electrons_per_unit=float(value["electrons_per_unit"]), saturation=sign * float(value["saturation"]),
        primary_beam=str(value["primary_beam"]), primary_beam_fwhm_deg=float(value["primary_beam_fwhm_deg"]),
        negative=bool(value["negative"]), companions=companions,
    )  # fmt: skip


def frame_label(frames: Columns, row: int) -> str:
    """File, HDU and plane of a frame as one word."""
    return f"{frames['path'][row]}[{frames['hdu'][row]},{frames['plane'][row]}]"
