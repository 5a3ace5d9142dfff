"""What a run will do, pinned: frames into batches, targets and controls into fields and rounds.

A plan is only ever added to: batches and rounds once given stay, so that a continued, an extended or a differently
parallel run does the same pieces. Pure: tables in, tables out.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from hindlight.duplicates import counts, waiting
from hindlight.errors import UsageError
from hindlight.footprints import coverage_matrix
from hindlight.lightcurve import FloatArray, IntArray
from hindlight.positions import (
    ARCSEC_DEG,
    BlankSky,
    Targets,
    control_grid,
    field_of,
    field_size,
    first_controls,
    from_tangent,
    nearest_deg,
    separation_deg,
    serves,
)
from hindlight.schema import FRAMES, POSITIONS
from hindlight.search import CENTRE, Places, places_within
from hindlight.settings import Controls, Search
from hindlight.systems import unit_vectors

AS_WELL = 0.9  # a neighbour's controls do where they are this fraction of what a field could have of its own
SAMPLED_FRAMES = 4000  # coverage is judged on at most this many frames of a field, evenly spaced
WIDE_BEAM = 0.9  # controls stand apart by the beam that this fraction of the frames does not exceed
SAME_PLACE_DEG = 1e-6
ROUND_PLACES = 20_000  # places tried that are measured in one piece of work
LATTICE_ERROR = (5 / 72) ** 0.5  # rms distance per axis from the nearest node of a hexagonal lattice of unit spacing
RIM = np.radians(np.arange(0, 360, 45))

MOTION = ("pm_ra_cosdec", "pm_dec", "ref_epoch")
PLACE = ("archive", "path", "modified_ns")  # of a file that is moved, all that changes

Columns = dict[str, Any]


def empty(columns: Sequence[Any]) -> Columns:
    """A table without rows."""
    types = {"float64": np.float64, "int64": np.int64, "bool": bool, "str": object}
    return {c.name: np.empty(0, types[c.dtype]) for c in columns}


def append(table: Columns, rows: Mapping[str, Any]) -> Columns:
    """The rows of two tables with the same columns, one after the other."""
    return {name: np.concatenate([values, np.asarray(rows[name], values.dtype)]) for name, values in table.items()}


def file_keys(frames: Mapping[str, Any]) -> NDArray[np.object_]:
    """What tells files apart: archive folder and path, one entry a frame."""
    keys = np.empty(len(frames["path"]), object)
    keys[:] = list(zip(frames["archive"], frames["path"], strict=True))
    return keys


def merge_frames(pinned: Columns, found: Mapping[str, Any], present: set[tuple[str, str]]) -> Columns:
    """The frame table with what a new walk found.

    `found` holds the frames of new and changed files, channel given; `present` every file still there. Frames of a
    changed file become void and its new frames are added; those of a file that is gone stay, marked; those of one that
    was moved, or of which a copy is left, keep their row. New frames, and copies of a frame that is void now, wait to be
    compared: see `batched`.
    """
    frames = {name: values.copy() for name, values in pinned.items()}
    changed = set(file_keys(found).tolist())
    for index, key in enumerate(file_keys(frames)):
        if frames["state"][index] != "void":
            frames["state"][index] = "void" if key in changed else "current" if key in present else "vanished"
    found = _moved(frames, found)
    _stand_in(frames)
    gone = frames["id"][frames["state"] == "void"]
    frames["duplicate_of"][np.isin(frames["duplicate_of"], gone)] = -1
    n = len(found["path"])
    if n == 0:
        return frames
    first_id = int(frames["id"].max()) + 1 if len(frames["id"]) else 0
    added = dict(found)
    added["id"] = first_id + np.arange(n)
    added["state"] = np.full(n, "current", object)
    for name in ("batch", "duplicate_of", "related_to"):
        added[name] = np.full(n, -1)
    return append(frames if len(frames["id"]) else empty(FRAMES), added)


def _moved(frames: Columns, found: Mapping[str, Any]) -> Mapping[str, Any]:
    """What was found but for frames whose file was only moved: those that vanished take their new places in `frames`."""
    places: dict[tuple[Any, ...], list[int]] = {}
    lost = _lost(frames)
    for row in range(len(found["path"])) if lost else ():
        places.setdefault(_identity(found, row), []).append(row)
    taken = []
    for row in lost:
        if again := places.get(_identity(frames, row)):
            taken.append(again.pop(0))
            for name in PLACE:
                frames[name][row] = found[name][taken[-1]]
            frames["state"][row] = "current"
    return {name: np.delete(np.asarray(values), taken) for name, values in found.items()} if taken else found


def _stand_in(frames: Columns) -> None:
    """Let an exact copy that is there change places with the frame kept where that has vanished."""
    lost = {int(frames["id"][row]): row for row in _lost(frames)}
    for copy in np.flatnonzero((frames["duplicate_of"] >= 0) & (frames["state"] == "current")).tolist() if lost else ():
        kept = lost.get(int(frames["duplicate_of"][copy]))
        if kept is not None and _identity(frames, kept) == _identity(frames, copy):
            for name in (*PLACE, "state"):
                frames[name][[kept, copy]] = frames[name][[copy, kept]]
            del lost[int(frames["id"][kept])]


def _lost(frames: Columns) -> list[int]:
    """The vanished frames whose header is known, copies of others last."""
    rows = np.flatnonzero((frames["state"] == "vanished") & (frames["digest"] != ""))
    return sorted(rows.tolist(), key=lambda row: (bool(frames["duplicate_of"][row] >= 0), row))


def _identity(frames: Mapping[str, Any], row: int) -> tuple[Any, ...]:
    """What a frame keeps when its file is moved: the digest of header and size, HDU and plane."""
    return tuple(frames[name][row] for name in ("digest", "hdu", "plane"))


def batched(frames: Columns, batch_frames: int) -> Columns:
    """The frame table with every frame that waits for a batch, and is no copy of another, in one."""
    rows = np.flatnonzero(waiting(frames))
    first_batch = int(frames["batch"].max()) + 1 if len(frames["batch"]) else 0
    batch = frames["batch"].copy()
    batch[rows] = first_batch + np.arange(len(rows)) // batch_frames
    return {**frames, "batch": batch}


@dataclass(frozen=True, eq=False)
class BrightSources:
    """Sources found in reference frames: ICRS degrees, S/N and beam (arcsec), shapes (n,)."""

    ra: FloatArray
    dec: FloatArray
    snr: FloatArray
    beam: FloatArray

    def blank_sky(self, least_deg: float) -> BlankSky:
        """What to keep clear of: where a Gaussian of that S/N has fallen below a tenth of the noise, and a beam more."""
        beam_deg = self.beam / 3600.0
        reach = beam_deg * (np.sqrt(np.log2(np.maximum(10 * self.snr, 2.0))) / 2 + 1.0)
        return BlankSky(unit_vectors(self.ra, self.dec), np.maximum(reach, least_deg))


def new_targets(positions: Columns, targets: Targets) -> NDArray[np.int64]:
    """Rows of the target list that the run does not have yet; raises `UsageError` for a name that has moved."""
    old = {name: i for i, name in enumerate(positions["name"]) if name}
    rows = []
    for row, name in enumerate(targets.names):
        if name not in old:
            rows.append(row)
            continue
        i = old[name]
        offset = np.hypot(
            (positions["ra"][i] - targets.ra[row] + 180) % 360 - 180, positions["dec"][i] - targets.dec[row]
        )
        moves = [name for name in MOTION if positions[name][i] != targets.column(name)[row]]
        if moves:
            raise UsageError(
                f"target {name!r}: this run has {moves[0]} {positions[moves[0]][i]:g}, the list "
                f"{targets.column(moves[0])[row]:g}; give it another name, or another --out"
            )
        if offset > SAME_PLACE_DEG:
            raise UsageError(
                f"target {name!r}: this run has it at {positions['ra'][i]:.6f} {positions['dec'][i]:.6f}, the list at "
                f"{targets.ra[row]:.6f} {targets.dec[row]:.6f}; give it another name, or another --out"
            )
    return np.array(rows, np.int64)


def add_targets(positions: Columns, targets: Targets, rows: NDArray[np.int64], size_deg: float) -> Columns:
    """The position table with these rows of the target list in a round of their own."""
    n = len(rows)
    if n == 0:
        return positions
    ra, dec = targets.ra[rows], targets.dec[rows]
    motion = {name: targets.column(name)[rows] for name in MOTION}
    return _added(
        positions, "target", ra, dec, field_of(ra, dec, size_deg), next_round(positions),
        name=[targets.names[row] for row in rows], **motion,
    )  # fmt: skip


def _added(
    positions: Columns, kind: str, ra: FloatArray, dec: FloatArray, field: Any, round_: Any, **more: Any
) -> Columns:
    """The position table with more rows: what is not given of them has no name, does not move and was not searched."""
    n = len(ra)
    usual = {
        "id": _next_id(positions) + np.arange(n), "name": "", "kind": kind, "ra": ra, "dec": dec, "pm_ra_cosdec": 0.0,
        "pm_dec": 0.0, "ref_epoch": 2000.0, "field": field, "round": round_, "clear_radius": 0.0, "search": -1,
        "parent": -1, "place_err": 0.0, "node": -1, "added_for": -1,
    }  # fmt: skip
    rows = {**usual, **more}
    return append(positions, {
        name: np.full(n, value, object if isinstance(value, str) else None) if np.ndim(value) == 0 else value
        for name, value in rows.items()
    })  # fmt: skip


def _next_id(positions: Columns) -> int:
    return int(positions["id"].max()) + 1 if len(positions["id"]) else 0


def next_round(positions: Columns) -> int:
    """The first round that has no position yet."""
    return int(positions["round"].max()) + 1 if len(positions["round"]) else 0


def fields_without_controls(positions: Columns) -> list[int]:
    """Fields that hold a target and no control, ascending."""
    have = set(positions["field"][positions["kind"] == "control"].tolist())
    return sorted(set(positions["field"][positions["kind"] == "target"].tolist()) - have)


def round_for_controls(known: Columns, positions: Columns) -> int:
    """The round of controls planned now: with the new targets if there are any, else one of their own."""
    return int(positions["round"].max()) if len(positions["id"]) > len(known["id"]) else next_round(positions)


def lost_frames(frames: Columns) -> list[dict[str, Any]]:
    """Rows of `schema.REJECTS` for frames whose file has changed or is gone."""
    said = {"vanished": ("vanished", "the file is gone; its measurements are kept"),
            "void": ("changed", "the file has changed; it is measured anew")}  # fmt: skip
    rows = []
    for row in np.flatnonzero(np.isin(frames["state"], list(said)) & (frames["duplicate_of"] < 0)):
        reason, detail = said[frames["state"][row]]
        place = {"path": str(frames["path"][row]), "hdu": int(frames["hdu"][row]), "plane": int(frames["plane"][row])}
        rows.append({**place, "reason": reason, "detail": detail, "archive": str(frames["archive"][row])})
    return rows


def persistent(parts: Sequence[BrightSources]) -> BrightSources:
    """The sources that several frames of one channel agree on: seen in at least two of them, within a beam.

    A peak of the noise is in one frame only; to keep controls away from it would leave them quieter than blank sky is.
    With a single frame every source counts.
    """
    if len(parts) < 2:
        return joined(parts)
    kept = []
    for index, part in enumerate(parts):
        others = joined([*parts[:index], *parts[index + 1 :]])
        places = BlankSky(unit_vectors(others.ra, others.dec), others.beam / 3600.0)
        again = ~places.clear(unit_vectors(part.ra, part.dec))
        kept.append(BrightSources(part.ra[again], part.dec[again], part.snr[again], part.beam[again]))
    return joined(kept)


def joined(parts: Sequence[BrightSources]) -> BrightSources:
    """The sources of several frames together."""
    names = ("ra", "dec", "snr", "beam")
    return BrightSources(*(np.concatenate([np.empty(0), *[getattr(p, name) for p in parts]]) for name in names))


def chosen_field_size(frames: Columns, settings: Controls) -> float:
    """The side of a field in degrees: as set, or half the median footprint."""
    return settings.field_size_deg or field_size(frames["radius"][counts(frames)])


@dataclass(frozen=True, eq=False)
class FieldFrames:
    """Frames that cover a target of one field: their rows in the frame table and who is in which.

    `covered` has shape (n_frames, n_targets).
    """

    rows: IntArray
    covered: NDArray[np.bool_]

    def rows_there(self, frames: Columns) -> NDArray[np.bool_]:
        """Which of the frames can be measured now, shape (n_frames,)."""
        return np.asarray(frames["state"][self.rows] == "current")


def covered(frames: Columns, rows: IntArray, vectors: FloatArray) -> NDArray[np.bool_]:
    """Which of these frames cover which positions (n, 3) by their footprints; shape (n_rows, n)."""
    outline = ("footprint", "centre_ra", "centre_dec", "radius")
    return coverage_matrix({name: frames[name][rows] for name in outline}, vectors)


def field_frames(frames: Columns, vectors: FloatArray) -> FieldFrames:
    """The frames (at most some thousands, evenly spaced) that cover any of the positions (n, 3)."""
    usable = np.flatnonzero(counts(frames))
    inside = covered(frames, usable, vectors)
    hit = np.flatnonzero(inside.any(axis=1))
    if len(hit) > SAMPLED_FRAMES:
        hit = hit[np.linspace(0, len(hit) - 1, SAMPLED_FRAMES).astype(int)]
    return FieldFrames(usable[hit], inside[hit])


def reference_frames(frames: Columns, rows: IntArray, per_channel: int) -> IntArray:
    """The frames in which to look for bright sources: per channel the longest exposures, spread over time.

    Frames that are not there any more show none, and are taken only where a channel has no other.
    """
    chosen: list[int] = []
    for label in sorted(set(frames["channel"][rows].tolist())):
        mine = rows[frames["channel"][rows] == label]
        there = mine[frames["state"][mine] == "current"]
        mine = there if len(there) else mine
        exposure = np.nan_to_num(frames["exposure_s"][mine])
        longest = mine[exposure >= 0.99 * exposure.max()]
        spread = np.linspace(0, len(longest) - 1, min(per_channel, len(longest))).round().astype(int)
        chosen += longest[np.unique(spread)].tolist()
    return np.array(sorted(chosen), np.int64)


def field_spacing(frames: Columns, rows: IntArray, settings: Controls, assumed_fwhm_pixels: float) -> float:
    """The least distance between blank positions in degrees: so many of the wide beams among these frames."""
    return settings.separation * float(
        np.quantile(beams(frames, rows, assumed_fwhm_pixels), WIDE_BEAM, method="higher")
    )


def beams(frames: Columns, rows: IntArray, assumed_fwhm_pixels: float) -> FloatArray:
    """Width in degrees of the beam or seeing of these frames, the assumed one where a header gives none."""
    beam = frames["beam_major"][rows]
    return np.asarray(np.where(np.isfinite(beam), beam, assumed_fwhm_pixels * frames["pixel_scale"][rows]) / 3600.0)


def add_controls(
    positions: Columns, field: int, round_number: int, frames: Columns, within: FieldFrames, spacing_deg: float,
    bright: BrightSources, settings: Controls,
) -> Columns:  # fmt: skip
    """The position table with controls for one field, in the given round; its targets join a field that has theirs."""
    mine = (positions["kind"] == "target") & (positions["field"] == field)
    ra, dec = clear_of_targets(positions, mine, spacing_deg, spacing_deg, settings.per_field, field, frames, within)
    vectors = unit_vectors(ra, dec)
    free = np.ones(len(ra), bool)
    if len(bright.ra):
        free &= bright.blank_sky(spacing_deg / 2).clear(vectors)
    ra, dec, vectors = ra[free], dec[free], vectors[free]
    serving = serves(within.covered, covered(frames, within.rows, vectors), settings.shared_frames)
    useful = np.flatnonzero(serving.any(axis=0))[: settings.per_field]
    if len(useful):
        middle = _middle(positions, mine)
        reach = float(separation_deg(middle[None, :], vectors[useful]).max()) + spacing_deg
        neighbour = _neighbour(positions, middle, reach, frames, within, serving[:, useful].sum(axis=1), settings)
        if neighbour is not None:
            return {**positions, "field": np.where(mine, neighbour, positions["field"])}
    return _added(positions, "control", ra[useful], dec[useful], field, round_number, clear_radius=spacing_deg)


def _neighbour(
    positions: Columns, middle: FloatArray, reach_deg: float, frames: Columns, within: FieldFrames, own: IntArray,
    settings: Controls,
) -> int | None:  # fmt: skip
    """The field whose controls would serve some targets about as well as their own, `own` for each; None for none.

    Only controls within `reach_deg` of the targets' middle count, so that a field whose own would be nearer has its own.
    """
    near = first_controls(positions)
    vectors = unit_vectors(positions["ra"], positions["dec"])
    near[near] = separation_deg(vectors[near], middle[None, :])[:, 0] <= reach_deg
    in_frames = serves(within.covered, covered(frames, within.rows, vectors[near]), settings.shared_frames)
    serving = serving_controls(positions, positions["id"][near], in_frames)
    shares = {}
    for number in np.unique(positions["field"][near]).tolist():
        theirs = serving[:, positions["field"][near] == number].sum(axis=1)
        shares[number] = float((theirs[own > 0] / own[own > 0]).min())
    best = max(shares, key=lambda number: shares[number], default=None)
    return best if best is not None and shares[best] >= AS_WELL else None


def serving_controls(
    positions: Mapping[str, Any], controls: IntArray, in_frames: NDArray[np.bool_]
) -> NDArray[np.bool_]:
    """Which controls may serve which targets: in enough of the same frames, and clear of every target of the run."""
    rows = np.searchsorted(positions["id"], controls)
    everyone = of_targets(positions)
    vectors = unit_vectors(positions["ra"][rows], positions["dec"][rows])
    occupied = unit_vectors(positions["ra"][everyone], positions["dec"][everyone])
    free = nearest_deg(vectors, occupied) >= 0.999 * positions["clear_radius"][rows]
    return np.asarray(in_frames & free[None, :])


def of_targets(positions: Mapping[str, Any]) -> NDArray[np.bool_]:
    """Which positions a target may be at: the stated ones, and places tried for it."""
    return np.isin(positions["kind"], ("target", "trial"))


def owners(positions: Mapping[str, Any], ids: IntArray) -> IntArray:
    """Rows of the targets that positions belong to: their own, but those of a place tried are its target's."""
    rows = np.searchsorted(positions["id"], ids)
    tried = positions["kind"][rows] == "trial"
    return np.where(tried, np.searchsorted(positions["id"], positions["parent"][rows]), rows)


def clear_of_targets(
    positions: Mapping[str, Any], middle_of: NDArray[np.bool_], spacing_deg: float, clear_deg: float, wanted: int, seed: int,
    frames: Columns, within: FieldFrames,
) -> tuple[FloatArray, FloatArray]:  # fmt: skip
    """Places around the middle of some targets, `spacing_deg` apart and `clear_deg` from where any target may be.

    The lattice grows where targets take up so much of it that less than `wanted` places are left.
    """
    centre = _middle(positions, middle_of)
    ra0 = float(np.degrees(np.arctan2(centre[1], centre[0])) % 360)
    dec0 = float(np.degrees(np.arctan2(centre[2], np.hypot(centre[0], centre[1]))))
    extent = 2 * float(np.median(frames["radius"][within.rows]))
    near = of_targets(positions)
    occupied = unit_vectors(positions["ra"][near], positions["dec"][near])
    size, n_before = wanted, 0
    while True:
        ra, dec = control_grid(ra0, dec0, extent, spacing_deg, size, seed)
        free = nearest_deg(unit_vectors(ra, dec), occupied) > clear_deg
        if free.sum() >= wanted or len(ra) == n_before:  # it reaches as far as there are frames
            return ra[free], dec[free]
        size, n_before = 4 * size, len(ra)


def _middle(positions: Mapping[str, Any], of: NDArray[np.bool_]) -> FloatArray:
    """The direction halfway between some positions, shape (3,)."""
    total = unit_vectors(positions["ra"][of], positions["dec"][of]).sum(axis=0)
    return np.asarray(total / np.linalg.norm(total))


@dataclass(frozen=True, eq=False)
class Sought:
    """Targets of one field that are searched with the same controls: their ids and the places tried for each."""

    targets: IntArray
    places: tuple[Places, ...]
    spacing_deg: float

    @property
    def reach(self) -> float:
        """Degrees from a middle to the place furthest out."""
        return max(places.reach for places in self.places)


def sought(
    positions: Columns, targets: Targets, new: IntArray, beam_deg: float, settings: Search
) -> list[Sought]:  # fmt: skip
    """Which of these targets (ids of one field) are to be searched; alike in size those that share their controls."""
    row_of = {name: row for row, name in enumerate(targets.names)}
    major, minor, angle = targets.error_ellipses
    spacing = settings.spacing * beam_deg
    found: dict[int, list[tuple[int, Places]]] = {}
    for target in new.tolist():
        row = row_of[str(positions["name"][np.searchsorted(positions["id"], target)])]
        if settings.sigmas == 0 or major[row] * ARCSEC_DEG <= beam_deg:
            continue
        axes = major[row] * ARCSEC_DEG, minor[row] * ARCSEC_DEG
        places = places_within(*axes, angle[row], spacing, settings.sigmas, settings.most_places)
        found.setdefault(round(np.log2(places.reach / spacing)), []).append((target, places))
    return [
        Sought(np.array([t for t, _ in mine]), tuple(places for _, places in mine), spacing)
        for _, mine in sorted(found.items())
    ]


def add_trials(positions: Columns, group: Sought) -> Columns:
    """The position table with the places tried for some targets; the stated place of each is the first of them."""
    positions = {name: values.copy() for name, values in positions.items()}
    rows = np.searchsorted(positions["id"], group.targets)
    error = LATTICE_ERROR * group.spacing_deg / ARCSEC_DEG
    for name, value in (
        ("search", group.targets[0]),
        ("parent", group.targets),
        ("place_err", error),
        ("node", CENTRE),
    ):
        positions[name][rows] = value
    owner = np.repeat(rows, [len(places) - 1 for places in group.places])
    east = np.concatenate([places.east[1:] for places in group.places])
    north = np.concatenate([places.north[1:] for places in group.places])
    ra, dec = from_tangent(positions["ra"][owner], positions["dec"][owner], east, north)
    motion = {name: positions[name][owner] for name in MOTION}
    return _added(
        positions, "trial", ra, dec, positions["field"][owner], _rounds(positions, len(ra)), search=group.targets[0],
        parent=positions["id"][owner], place_err=error,
        node=np.concatenate([places.node[1:] for places in group.places]), **motion,
    )  # fmt: skip


def _rounds(positions: Columns, n: int) -> IntArray:
    """New rounds for `n` places."""
    return np.asarray(next_round(positions) + np.arange(n) // ROUND_PLACES)


def add_blanks(
    positions: Columns, group: Sought, frames: Columns, within: FieldFrames, spacing_deg: float, controls: Controls,
    wanted: int,
) -> Columns:  # fmt: skip
    """The position table with the control ellipses of a search: every place tried for any of its targets, around each.

    They overlap neither each other nor a place where a target may be, and lie whole in the frames. Sources in them are
    left where they are, since nothing keeps a target's ellipse clear of sources either.
    """
    node, first = np.unique(np.concatenate([places.node for places in group.places]), return_index=True)
    east = np.concatenate([places.east for places in group.places])[first]
    north = np.concatenate([places.north for places in group.places])[first]
    clear = group.reach + spacing_deg
    mine = np.isin(positions["id"], group.targets)
    field, search = int(positions["field"][mine][0]), int(group.targets[0])
    ra0, dec0 = clear_of_targets(positions, mine, clear + group.reach, clear, wanted, search, frames, within)
    whole = np.ones(len(ra0), bool)
    for angle in RIM:
        rim = from_tangent(
            ra0, dec0, np.full(len(ra0), group.reach * np.sin(angle)), np.array(group.reach * np.cos(angle))
        )
        inside = covered(frames, within.rows, unit_vectors(*rim))
        whole &= serves(within.covered, inside, controls.shared_frames).any(axis=0)
    middles = np.flatnonzero(whole)[:wanted]
    ra, dec = (axis.ravel() for axis in from_tangent(ra0[middles, None], dec0[middles, None], east, north))
    ids = _next_id(positions) + np.arange(len(ra))
    parent = np.repeat(ids.reshape(len(middles), len(node))[:, node == CENTRE], len(node))
    return _added(
        positions, "blank", ra, dec, field, _rounds(positions, len(ra)), clear_radius=clear, search=search, parent=parent,
        place_err=LATTICE_ERROR * group.spacing_deg / ARCSEC_DEG, node=np.tile(node, len(middles)),
    )  # fmt: skip


def add_comparisons(positions: Columns, field: int, round_number: int, ra: FloatArray, dec: FloatArray) -> Columns:
    """The position table with comparisons of one field in the given round."""
    return _added(positions, "comparison", ra, dec, field, round_number)


def add_more_controls(
    positions: Columns, field: int, round_number: int, ra: FloatArray, dec: FloatArray, clear_deg: float, targets: IntArray
) -> Columns:  # fmt: skip
    """The position table with controls of a second pass, each for one of the targets that asked for it (ids, shape (n,))."""
    return _added(positions, "control", ra, dec, field, round_number, clear_radius=clear_deg, added_for=targets)


def no_positions() -> Columns:
    """A position table without rows."""
    return empty(POSITIONS)
