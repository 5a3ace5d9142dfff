"""What the last lines say of a request itself: what was given and is of no use, and what holds though it was not given.

Sentences only; nothing here changes what is measured or judged.
"""

from __future__ import annotations

import difflib
import re
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import fields
from typing import Any

from hindlight.blocks import FrameBlock, block_lines
from hindlight.errors import UsageError
from hindlight.host import Plugins
from hindlight.positions import OPTIONAL_UNITS, Targets, within_deg
from hindlight.settings import Settings
from hindlight.store import RunFolder
from hindlight.systems import unit_vectors
from hindlight.tables import read_ecsv

LISTED = 8  # names in a sentence; of more the number is told
LIKE = 0.7  # likeness of two names, of difflib, above which one may be meant for the other
SAME_PLACE = 1 / 3600  # degrees
TARGET_COLUMNS = ("name", "ra", "dec", *OPTIONAL_UNITS)

_BLOCK = re.compile(r"\(block (\d+)\)")


def idle_blocks(blocks: Sequence[FrameBlock], assumptions: Iterable[str]) -> tuple[str, ...]:
    """A sentence for each `[[frames]]` block that gave no frame anything, by the frames' column `assumptions`.

    These name every block whose facts were used or had no place. A block of `where_missing`, or one whose facts all
    stand in later blocks, may fit frames nevertheless. A block without facts says nothing and is passed over.
    """
    used = {int(number) for text in set(assumptions) for number in _BLOCK.findall(text)}
    said = []
    for at, block in enumerate(blocks):
        if block.number in used or not block.facts:
            continue
        later = {key for other in blocks[at + 1 :] for key in other.facts}
        conditions = ", ".join(block_lines(FrameBlock(block.number, block.match).as_plain())[1:]) or "all frames"
        named = f"[[frames]] block {block.number} ({conditions})"
        if block.where_missing or set(block.facts) <= later:
            said.append(f"{named} is used for no frame: none fits it, or headers or later blocks say all that it says")
        else:
            said.append(f"{named} fits no usable frame; `hindlight inventory` lists the instruments' names")
    return tuple(said)


def unused_columns(what: str, listed: Targets | None) -> tuple[str, ...]:
    """A sentence about the columns of a table that nobody reads, with what may have been meant; () for none."""
    if listed is None or not listed.unused:
        return ()
    meant = {name: _meant(name) for name in listed.unused}
    near = [f"{name} (did you mean {known}?)" for name, known in meant.items() if known]
    names = [*near, *(name for name, known in meant.items() if not known)]
    return (f"{what}: columns not used: {shortened(names)}",)


def _meant(name: str) -> str:
    """The column that a name may stand for, '' for none."""
    plain = _plain(name)
    known = {_plain(column): column for column in TARGET_COLUMNS}
    close = difflib.get_close_matches(plain, known, n=1, cutoff=LIKE)
    begun = [column for text, column in known.items() if len(plain) >= 4 and text.startswith(plain)]
    return known[close[0]] if close else begun[0] if begun else ""


def _plain(name: str) -> str:
    return re.sub(r"[^a-z0-9]", "", name.lower())


def shortened(names: Sequence[str]) -> str:
    """Names in a sentence, of many the first few and how many more."""
    more = f" and {len(names) - LISTED} more" if len(names) > LISTED else ""
    return ", ".join(names[:LISTED]) + more


def of_lists(
    blocks: Sequence[FrameBlock], frames: Mapping[str, Any], targets: Targets | None, comparisons: Targets | None
) -> tuple[str, ...]:
    """What is of no use in settings, target list and list of comparisons, by the frame table."""
    return (
        *idle_blocks(blocks, frames["assumptions"].tolist()),
        *unused_columns("target list", targets),
        *unused_columns("[comparisons] table", comparisons),
        *same_places(targets),
    )


def same_places(targets: Targets | None) -> tuple[str, ...]:
    """A sentence that names targets which lie within an arcsecond of another one; () for none."""
    if targets is None or len(targets) < 2:
        return ()
    vectors = unit_vectors(targets.ra, targets.dec)
    twins = [
        name
        for name, near in zip(targets.names, within_deg(vectors, vectors, SAME_PLACE), strict=True)
        if len(near) > 1
    ]
    if not twins:
        return ()
    return (f"targets at one place (within 1 arcsec): {shortened(twins)}; each counts as a trial in every q-value",)


def borrowed_settings(run: RunFolder, chosen: Settings, plugins: Plugins) -> tuple[str, ...]:
    """That no settings were given and those of the run hold, where they are not the defaults anyway."""
    default = Settings()
    names = [
        f.name for f in fields(Settings) if f.name != "plugin" and getattr(chosen, f.name) != getattr(default, f.name)
    ]
    sections = ["[[frames]]" if name == "frames" else f"[{name}]" for name in names]
    sections += [f"[plugin.{e.plugin.name}]" for e in plugins.loaded if e.plugin != type(e.plugin)()]
    if not sections:
        return ()
    return (
        f"settings: none were given, so those of the run hold ({run.file('settings.toml')}: {', '.join(sections)})",
    )


def earlier_targets(positions: Mapping[str, Any], targets: Targets) -> tuple[str, ...]:
    """That targets of the run are not in the list of now; they stay, and make q-values larger."""
    known = positions["name"][positions["kind"] == "target"].tolist()
    gone = [str(name) for name in known if name not in set(targets.names)]
    if not gone:
        return ()
    verb = "targets of earlier lists are" if len(gone) > 1 else "target of an earlier list is"
    return (
        f"{len(gone)} {verb} not in this one ({shortened(gone)}): still in the tables, and counted in every q-value; "
        "another --out makes a run without",
    )


def outdated_completeness(run: RunFolder, state: str) -> tuple[str, ...]:
    """That the tables of completeness are of the run as it was; `state` is that of now, see `record.state`."""
    if not run.has("completeness.ecsv"):
        return ()
    try:
        made_of = read_ecsv(run.file("completeness.ecsv")).meta.get("run_state")
    except UsageError:
        made_of = None  # damaged: not the tables of this run either
    if made_of == state:
        return ()
    return (f"completeness tables are of the run as it was; `hindlight completeness {run.path}` makes them again",)
