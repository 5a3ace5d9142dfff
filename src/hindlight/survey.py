"""The inventory of an archive, from headers alone: what `hindlight inventory` prints."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

from hindlight import archive, asides, duplicates, files, host
from hindlight.channels import assign
from hindlight.errors import NothingToDoError
from hindlight.plan import empty, merge_frames
from hindlight.positions import read_targets
from hindlight.schema import FRAMES
from hindlight.settings import read_settings
from hindlight.summary import Summary, summarise


@dataclass(frozen=True)
class Inventory(Summary):
    """What an archive holds, and what is to be said of settings and target list beside."""

    remarks: tuple[str, ...] = ()


def inventory(
    archives: Sequence[str], targets: Path | None, settings_file: Path | None, plugins: Sequence[Path], watcher: Any
) -> Inventory:
    """Walk the archive and summarise it. Raises `NothingToDoError` where it holds no FITS file."""
    settings = read_settings(settings_file)
    loaded = host.load(host.spec_from(settings, plugins))
    listed = read_targets(targets) if targets is not None else None
    watcher.stage("reading headers", 0)
    found = archive.walk(
        [files.archive_text(folder) for folder in archives], loaded.dialects, settings, None, watcher.step
    )
    if len(found.frames["path"]) == 0 and not found.rejects:
        raise NothingToDoError(
            f"archive {', '.join(archives)}: no FITS file found; give a folder that holds .fits, .fit or .fts files"
        )
    labels = assign(found.frames, empty(FRAMES), settings.channels)
    frames = merge_frames(empty(FRAMES), {**found.frames, "channel": labels}, found.present)
    where = () if listed is None else (listed.names, listed.ra, listed.dec)
    deep = np.unique(duplicates.related(frames))
    found_out = {
        **vars(summarise(frames, found.rejects, *where)),
        "possible_duplicates": len(duplicates.candidates(frames)),
        "deep_images": int(np.count_nonzero(deep >= 0)),
        "remarks": asides.of_lists(settings.frames, frames, listed, None),
    }
    return Inventory(**found_out)
