"""The pieces of work: plain functions of plain arguments, callable in a notebook as well as on a cluster.

Each reads what it needs from the run folder, and returns a small report, never pixels.
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from functools import lru_cache
from typing import Any

import numpy as np

from hindlight import clock, duplicates, ensemble, host, judge, lifted, photometry, store
from hindlight.background import MAD_TO_SIGMA
from hindlight.candidates import ChannelView, Described, Examined, SeenOnly, View, describe
from hindlight.companions import as_listed
from hindlight.comparisons import Located, among_alike, at_positions, serving
from hindlight.ensemble import FLUX_COLUMNS
from hindlight.facts import visible
from hindlight.fence import one_line
from hindlight.files import check_unchanged
from hindlight.headers import SetAsideError
from hindlight.lifted import Lift, originals
from hindlight.lightcurve import FloatArray, IntArray, LightCurve
from hindlight.more_controls import asking
from hindlight.order import Book, Order, book, frame_facts, frame_label
from hindlight.plan import BrightSources, covered, owners
from hindlight.positions import first_controls, moved
from hindlight.ranking import Thresholds
from hindlight.response import PHOTOGRAPHIC, SEEN_SNR
from hindlight.robust import median_of
from hindlight.schema import MEASUREMENTS, UNUSABLE
from hindlight.settings import Comparisons, Settings
from hindlight.storage import StorageError
from hindlight.store import Columns, Piece
from hindlight.systems import BadWcsError, NoCelestialError, unit_vectors

JULIAN_YEAR_S = 31557600.0
MOST_ANCHORS = 100  # comparisons of a frame that tell its shift
MEASURED = ("x", "y", "flux", "flux_err", "background", "rms", "gain", "flags", "shift_x", "shift_y", "fwhm", "held")


def comparison(order: Order, frames: Columns, pairs: duplicates.Pairs, piece: IntArray) -> tuple[Any, ...]:
    """What `likeness.compare` is to be given for some of the pairs."""
    rows, index = np.unique(np.concatenate([pairs.first[piece], pairs.second[piece]]), return_inverse=True)
    both = index.reshape(2, -1).T.tolist()
    return [frame_facts(frames, int(row)) for row in rows], both, pairs.strict[piece].tolist(), order.settings


def measure_piece(order: Order, piece: Piece) -> dict[str, int]:
    """Measure one batch of frames at one round of positions and write the part. Returns counts."""
    tables = book(order.run, order.version)
    rows = np.flatnonzero((tables.frames["batch"] == piece.batch) & (tables.frames["state"] == "current"))
    asked_by = asking(tables.positions, piece.round)
    if len(asked_by):  # a second pass is over their frames only
        rows = rows[covered(tables.frames, rows, asked_by).any(axis=1)]
    who = {name: values[tables.positions["round"] == piece.round] for name, values in tables.positions.items()}
    vectors = unit_vectors(who["ra"], who["dec"])
    anchors = _anchors(tables.positions, piece.round)
    sites = np.stack([tables.frames[f"site_{axis}"][rows] for axis in "xyz"], axis=1)
    middles = np.where(tables.frames["barycentric"][rows], np.nan, tables.frames["middle_tdb_s"][rows])
    observatory = clock.observatory_vectors(middles, sites)
    estimators = host.load(order.plugins).estimators
    parts: list[Columns] = []
    rejects: list[dict[str, Any]] = []
    for row, vector in zip(rows, observatory, strict=True):
        try:
            parts.append(_measure_frame(order, tables.frames, int(row), who, vectors, anchors, vector, estimators))
        except (Exception, SystemExit) as error:  # noqa: BLE001 - a bad frame, or an estimator of anyone's, is said
            rejects.append(_reject(tables.frames, int(row), error))
    columns = _concatenated(parts)
    store.write_part(tables.folder, piece, columns, rejects)
    return {"frames": len(rows), "measurements": len(columns["flux"]), "rejects": len(rejects)}


def _reject(frames: Columns, row: int, error: BaseException) -> dict[str, Any]:
    """A row of the rejects for a frame that could not be measured."""
    if isinstance(error, SetAsideError):
        reason, detail = error.reason, error.detail
    elif isinstance(error, StorageError):
        reason, detail = "unreadable", str(error)
    elif isinstance(error, BadWcsError | NoCelestialError):
        reason, detail = "bad_wcs", str(error)
    else:
        known = isinstance(error, OSError | ValueError)
        reason, detail = "bad_pixels" if known else "not_measured", f"{type(error).__name__}: {error}"
    detail = visible(one_line(detail))
    place = {name: int(frames[name][row]) for name in ("hdu", "plane")}
    texts = {name: str(frames[name][row]) for name in ("path", "archive")}
    return {**texts, **place, "reason": reason, "detail": detail}


def _anchors(positions: Columns, round_number: int) -> Columns:
    """The comparisons of this round and those before: what was planned later cannot change what is measured now."""
    mine = (positions["kind"] == "comparison") & (positions["round"] <= round_number)
    ra, dec = positions["ra"][mine], positions["dec"][mine]
    return {"ra": ra, "dec": dec, "vectors": unit_vectors(ra, dec)}


def _anchors_near(frames: Columns, row: int, anchors: Columns) -> tuple[FloatArray, FloatArray]:
    """Those that tell how far a frame is off its header, ICRS degrees."""
    known = _near(frames, row, anchors["vectors"])[:MOST_ANCHORS]
    return anchors["ra"][known], anchors["dec"][known]


def anchors_of(tables: Book, row: int, round_number: int) -> tuple[FloatArray, FloatArray]:
    """The comparisons, ICRS degrees, that one frame was measured with in a round."""
    return _anchors_near(tables.frames, row, _anchors(tables.positions, round_number))


def _near(frames: Columns, row: int, vectors: FloatArray) -> IntArray:
    """Positions that may lie in a frame: within the circle around its corners."""
    centre = unit_vectors(frames["centre_ra"][row : row + 1], frames["centre_dec"][row : row + 1])[0]
    cosine = vectors[:, 0] * centre[0] + vectors[:, 1] * centre[1] + vectors[:, 2] * centre[2]
    return np.flatnonzero(cosine >= np.cos(np.radians(min(180.0, 1.001 * float(frames["radius"][row]) + 1e-4))))


def _measure_frame(
    order: Order, frames: Columns, row: int, who: Columns, vectors: FloatArray, anchors: Columns,
    observatory: FloatArray, estimators: Any,
) -> Columns:  # fmt: skip
    """The measurement columns of one frame."""
    near = _near(frames, row, vectors)
    middle = float(frames["middle_tdb_s"][row])
    year = 2000.0 + middle / JULIAN_YEAR_S
    ra, dec = moved(
        who["ra"][near], who["dec"][near], who["pm_ra_cosdec"][near], who["pm_dec"][near], who["ref_epoch"][near], year
    )
    facts = frame_facts(frames, row)
    wanted = order.settings.photometry.estimator
    estimator = photometry.choose_estimator(estimators, facts.unit, wanted, facts.beam_major > 0)
    sources = _anchors_near(frames, row, anchors)
    listed = as_listed(frames, row)
    check_unchanged(facts.path, *listed)
    found = photometry.measure_frame(facts, ra, dec, estimator, order.settings, sources)
    check_unchanged(facts.path, *listed)  # nor while it was read
    inside = near[found["index"]]
    n = len(inside)
    shift = 0.0 if frames["barycentric"][row] else clock.roemer(observatory, vectors[inside])
    columns = {name: found[name] for name in MEASURED}
    columns["position"] = who["id"][inside]
    columns["frame"] = np.full(n, frames["id"][row])
    columns["channel"] = np.full(n, frames["channel"][row], object)
    columns["t_tdb_s"] = middle + shift * np.ones(n)
    columns["bjd_tdb"] = clock.bjd(columns["t_tdb_s"])
    columns["exposure_s"] = np.full(n, frames["exposure_s"][row])
    return columns


def _concatenated(parts: Sequence[Columns]) -> Columns:
    types: dict[str, Any] = {"float64": np.float64, "int64": np.int64, "str": object}
    return {
        c.name: np.concatenate([np.empty(0, types[c.dtype]), *[part[c.name] for part in parts]]).astype(types[c.dtype])
        for c in MEASUREMENTS
    }


def find_bright(order: Order, frame: int) -> BrightSources:
    """Bright sources in one reference frame; none where its pixels cannot be read, which measuring it will say."""
    tables = book(order.run, order.version)
    row = tables.row_of_frame[frame]
    settings = order.settings
    try:
        ra, dec, snr, beam = photometry.bright_sources(
            frame_facts(tables.frames, row), settings.controls.bright_snr, settings
        )
    except Exception:  # noqa: BLE001 - whatever is wrong with a frame, the run goes on
        ra = dec = snr = np.empty(0)
        beam = 0.0
    return BrightSources(ra, dec, snr, np.full(len(ra), beam))


def locate_sources(order: Order, frame: int, ra: FloatArray, dec: FloatArray) -> Located:
    """Where candidates for comparisons, ICRS degrees of shape (n,), are in one frame; NaN where it cannot be read."""
    tables = book(order.run, order.version)
    try:
        facts = frame_facts(tables.frames, tables.row_of_frame[frame])
        found_ra, found_dec, snr, width, flat = photometry.locate(facts, ra, dec, order.settings)
        if tables.frames["response"][tables.row_of_frame[frame]] == PHOTOGRAPHIC:
            width = among_alike(snr, width)
    except (SetAsideError, OSError, ValueError):
        found_ra = found_dec = snr = width = np.full(len(ra), np.nan)
        flat = np.zeros(len(ra), bool)
    east = ((found_ra - ra + 180.0) % 360.0 - 180.0) * np.cos(np.radians(dec))
    return Located(east, found_dec - dec, snr, width, flat)


@dataclass(frozen=True, eq=False)
class FrameEvidence:
    """What one batch of frames tells of its flux scale.

    `comparisons` are columns ensemble.FLUX_COLUMNS of usable measurements; `frames` are columns frame, pull (MAD-sigma of
    flux over error at the controls), n_controls, and ensemble.IMAGE_COLUMNS, one row a frame.
    """

    comparisons: Columns
    frames: Columns


def frame_evidence(order: Order, batch: int) -> FrameEvidence:
    """What the measurements of one batch tell of each frame's flux scale, in all rounds but those of second passes:

    what has been judged stays as it is when controls are added.
    """
    tables = book(order.run, order.version)
    who = tables.positions
    plan = [p for p in store.pieces(tables.frames, who) if p.batch == batch]
    rows = store.read_rows(tables.folder, plan, who["id"][first_controls(who) | (who["kind"] == "comparison")])
    kind = who["kind"][np.searchsorted(who["id"], rows["position"])]
    usable = np.isfinite(rows["flux"]) & (rows["flux_err"] > 0) & ((rows["flags"] & int(UNUSABLE)) == 0)
    steady = usable & (kind == "comparison")
    if not order.settings.comparisons.table:  # what the user calls steady serves, target or not
        assumed = order.settings.photometry.assumed_fwhm_pixels
        chosen = serving(who, tables.frames, ("target",), assumed, order.settings.comparisons)
        steady &= np.isin(rows["position"], chosen)
    ids, row = np.unique(rows["frame"], return_inverse=True)
    first = np.unique(row, return_index=True)[1]
    frames: Columns = {"frame": ids, "pull": np.full(len(ids), np.nan), "n_controls": np.zeros(len(ids), np.int64)}
    frames |= {name: rows[name][first] for name in ensemble.IMAGE_COLUMNS}
    blank = np.flatnonzero(usable & (kind == "control"))
    for at in np.unique(row[blank]).tolist():
        mine = blank[row[blank] == at]
        pull = rows["flux"][mine] / rows["flux_err"][mine]
        frames["pull"][at] = MAD_TO_SIGMA * np.median(np.abs(pull - np.median(pull)))
        frames["n_controls"][at] = len(mine)
    return FrameEvidence({name: rows[name][steady] for name in FLUX_COLUMNS}, frames)


def position_label(positions: Columns, row: int) -> str:
    """The name of a target, also for a place tried for it, or what to call a control."""
    owner = int(owners(positions, positions["id"][row : row + 1])[0])
    return str(positions["name"][owner]) or f"{positions['kind'][row]} {positions['id'][row]}"


def position_blocks(
    order: Order, ids: IntArray, frames: IntArray | None = None, lift: Lift | None = None
) -> dict[str, Any]:
    """The blocks of these positions (ascending ids), one per channel, and the rows they were made from.

    With `lift`, ids may be those of copies of controls, see `lifted`. Deep images are kept apart from their own snapshots,
    whose noise they share: `deep` holds blocks of those that are in no deeper one.
    """
    tables = book(order.run, order.version)
    wanted, ids = ids, originals(ids)
    rows_of = np.searchsorted(tables.positions["id"], ids)
    rounds = set(tables.positions["round"][rows_of].tolist())
    plan = [p for p in store.pieces(tables.frames, tables.positions) if p.round in rounds]
    rows = store.read_rows(tables.folder, plan, ids, frames)
    rows["clock_error_s"] = tables.frames["clock_error_s"][np.searchsorted(tables.frames["id"], rows["frame"])]
    void = tables.frames["id"][tables.frames["state"] == "void"]
    related = tables.frames["related_to"]
    is_deep = np.isin(rows["frame"], related[related >= 0])
    topmost = is_deep & np.isin(rows["frame"], tables.frames["id"][related < 0])
    names = [position_label(tables.positions, int(row)) for row in rows_of]
    found = []
    for keep in (~np.isin(rows["frame"], void) & ~is_deep, topmost):
        mine = {name: values[keep] for name, values in rows.items()}
        found.append((mine, store.blocks(mine, ids, names, tables.solution, tables.channels)))
    (rows, blocks), (_, deep) = found
    if lift is not None:
        left = residuals(order)
        blocks = {
            label: lifted.lifted(block, ids, wanted, lift.levels.get(label, 0.0), left.get(label))
            for label, block in blocks.items()
        }
    return {"rows": rows, "blocks": blocks, "deep": deep}


def residuals(order: Order) -> Mapping[str, lifted.Residuals]:
    """What calibration leaves in each channel whose comparisons tell it.

    Those that may be a target are left out, but where they must serve: then the target is known whose residuals they are.
    """
    return _residuals(
        order.run, order.version, order.settings.photometry.assumed_fwhm_pixels, order.settings.comparisons
    )


@lru_cache(maxsize=2)
def _residuals(run: str, version: str, assumed: float, chosen: Comparisons) -> Mapping[str, lifted.Residuals]:
    tables = book(run, version)
    near = (tables.positions, tables.frames, ("target", "trial"), assumed)
    ids, own = serving(*near, chosen), at_positions(*near)
    if len(ids) == 0:
        return {}
    blocks = position_blocks(Order(run, Settings(), host.PluginSpec(), version), ids)["blocks"]
    nobody = np.empty(0, np.int64)
    whose = [own.get(source, nobody) for source in ids.tolist()]
    found = {label: lifted.residuals(block, tables.solution, whose) for label, block in blocks.items()}
    of_channel = {label: np.sort(tables.frames["id"][tables.frames["channel"] == label]) for label in found}
    return {
        label: lifted.over_all(
            left, of_channel[label][np.isin(of_channel[label], tables.solution["frame"])], tables.solution
        )
        for label, left in found.items()
        if left is not None
    }


def judge_positions(order: Order, ids: IntArray, lift: Lift | None = None) -> judge.Judgement:
    """Every statistic at these positions (ascending ids)."""
    return judge.judge(position_blocks(order, ids, lift=lift)["blocks"], host.load(order.plugins).statistics)


def judge_brightness(order: Order, ids: IntArray) -> judge.Judgement:
    """The core's own columns at these positions (ascending ids): what chooses among places that are tried."""
    return judge.judge(position_blocks(order, ids)["blocks"], ())


def search_positions(order: Order, ids: IntArray, lift: Lift | None = None) -> judge.Judgement:
    """Every period search at these positions (ascending ids)."""
    found = position_blocks(order, ids, lift=lift)["blocks"]
    curves = [[block.curve(row) for block in found.values()] for row in range(len(ids))]
    return judge.search(curves, host.load(order.plugins).period_searches)


def target_data(order: Order, target: int) -> tuple[list[LightCurve], Columns]:
    """One position's light curves in all channels, and its raw rows."""
    found = position_blocks(order, np.array([target]))
    return [block.curve(0) for block in found["blocks"].values()], found["rows"]


def describe_targets(
    order: Order, ids: IntArray, thresholds: Mapping[str, Thresholds], given: Sequence[Mapping[str, float]],
    decided: Sequence[tuple[bool, bool]], examined: Sequence[Examined | None],
) -> list[Described]:  # fmt: skip
    """What the tables say of these targets (ascending ids) of one field."""
    tables = book(order.run, order.version)
    found = position_blocks(order, ids)
    utc = tables.frames["middle_utc"]
    covering = Counter(zip(found["rows"]["position"].tolist(), found["rows"]["channel"].tolist(), strict=True))

    only = _seen_only(tables, found["rows"], thresholds)

    def channel_view(row: int, target: int, label: str) -> ChannelView:
        alone = only.get((target, label), SeenOnly())
        curve = found["blocks"][label].curve(row)
        verdict = tables.solution["verdict"][np.searchsorted(tables.solution["frame"], curve.frame)]
        n_calibrated = int((verdict == "good").sum())
        if label not in found["deep"]:
            return ChannelView(curve, covering[target, label], n_calibrated, thresholds[label], seen_only=alone)
        within = tables.deepest[[tables.row_of_frame[frame] for frame in curve.frame.tolist()]]
        deep = found["deep"][label].curve(row)
        return ChannelView(curve, covering[target, label], n_calibrated, thresholds[label], deep, within, alone)

    described = []
    for row, target in enumerate(ids.tolist()):
        channels = tuple(channel_view(row, target, label) for label in found["blocks"] if covering[target, label])
        name = position_label(tables.positions, int(np.searchsorted(tables.positions["id"], target)))
        view = View(
            name, channels,
            utc=lambda frame: str(utc[tables.row_of_frame[frame]]),
            label=lambda frame: frame_label(tables.frames, tables.row_of_frame[frame]),
        )  # fmt: skip
        described.append(describe(view, given[row], decided[row], examined[row], order.settings.detection))
    return described


def _seen_only(
    tables: Book, rows: Columns, thresholds: Mapping[str, Thresholds]
) -> dict[tuple[int, str], SeenOnly]:  # fmt: skip
    """What photographic frames without a response curve tell of positions, by position and channel."""
    at = np.asarray(np.searchsorted(tables.solution["frame"], rows["frame"]))
    mine = tables.solution["verdict"][at] == "seen_only"
    mine &= np.isfinite(rows["flux"]) & (rows["flux_err"] > 0) & ((rows["flags"] & int(UNUSABLE)) == 0)
    found: dict[tuple[int, str], list[int]] = {}
    for row in np.flatnonzero(mine).tolist():
        found.setdefault((int(rows["position"][row]), str(rows["channel"][row])), []).append(row)
    told = {}
    for (position, label), some in found.items():
        least = max(SEEN_SNR, thresholds[label].detected)
        snr = rows["flux"][some] / (rows["flux_err"][some] * tables.solution["error_scale"][at[some]])
        limit = median_of(tables.solution["seen_limit"][at[some]])
        told[position, label] = SeenOnly(len(some), int(np.count_nonzero(snr > least)), float(limit))
    return told
