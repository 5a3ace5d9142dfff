"""The inventory of an archive, from headers alone: what `hindlight inventory` prints."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path
from typing import Any

from hindlight import archive, files, host
from hindlight.channels import assign
from hindlight.errors import NothingToDoError
from hindlight.plan import empty
from hindlight.positions import read_targets
from hindlight.schema import FRAMES
from hindlight.settings import read_settings
from hindlight.summary import Summary, summarise


def inventory(
    archives: Sequence[str], targets: Path | None, settings_file: Path | None, plugins: Sequence[Path], watcher: Any
) -> Summary:
    """Walk the archive and summarise it. Raises `NothingToDoError` where it holds no usable frame."""
    settings = read_settings(settings_file)
    loaded = host.load(host.spec_from(settings, plugins))
    listed = read_targets(targets) if targets is not None else None
    watcher.stage("reading headers", 0)
    found = archive.walk(
        [files.path_text(folder) for folder in archives], loaded.dialects, settings, None, watcher.step
    )
    if len(found.frames["path"]) == 0 and not found.rejects:
        raise NothingToDoError(
            f"archive {', '.join(archives)}: no FITS file found; give a folder that holds .fits, .fit or .fts files"
        )
    frames = {**found.frames, "channel": assign(found.frames, empty(FRAMES), settings.channels)}
    if listed is None:
        return summarise(frames, found.rejects)
    return summarise(frames, found.rejects, listed.names, listed.ra, listed.dec)
