"""The pieces of work: plain functions of plain arguments, callable in a notebook as well as on a cluster.

Each reads what it needs from the run folder, and returns a small report, never pixels. Tables of the run are read once
per process and version.
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Mapping, Sequence
from contextlib import suppress
from dataclasses import dataclass, field
from functools import cached_property, lru_cache, partial
from pathlib import Path
from typing import Any

import numpy as np

from hindlight import clock, duplicates, ensemble, host, judge, lifted, photometry, store
from hindlight.background import MAD_TO_SIGMA
from hindlight.candidates import ChannelView, Described, Examined, SeenOnly, View, describe
from hindlight.channels import channels_of
from hindlight.comparisons import Located, among_alike, apart_from
from hindlight.ensemble import FLUX_COLUMNS
from hindlight.errors import HindlightError
from hindlight.facts import visible
from hindlight.fence import Fault, blank, call, checked, one_line
from hindlight.files import check_unchanged, local_path
from hindlight.headers import SetAsideError
from hindlight.lifted import Lift, originals
from hindlight.lightcurve import Block, Channel, FloatArray, IntArray, LightCurve
from hindlight.plan import BrightSources, owners
from hindlight.plugin import Candidate, Cutout, Finding, Images, PeriodResult
from hindlight.positions import moved
from hindlight.ranking import Thresholds
from hindlight.response import PHOTOGRAPHIC, SEEN_SNR
from hindlight.robust import median_of
from hindlight.schema import MEASUREMENTS, UNUSABLE
from hindlight.settings import COMPANION_KINDS, Settings
from hindlight.store import Columns, Piece, RunFolder
from hindlight.systems import BadWcsError, NoCelestialError, unit_vectors

JULIAN_YEAR_S = 31557600.0
MOST_ANCHORS = 100  # comparisons of a frame that tell its shift
SOURCE_SNR = 20.0  # whole frames are searched for sources once, down to this or what a check asks for
NEAREST_COMPARISONS = 30  # that a consistency check is given
UNREADABLE = (SetAsideError, OSError, ValueError, HindlightError)  # what reading a frame again may end in
FRAME_WIDE = ("shift_x", "shift_y", "fwhm")  # columns of measurements that are the same all over a frame
MEASURED = ("x", "y", "flux", "flux_err", "background", "rms", "gain", "flags", "shift_x", "shift_y", "fwhm", "held")


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


def frame_facts(frames: Columns, row: int) -> photometry.FrameToMeasure:
    """What photometry needs to know of a frame, from its row in the frame table."""
    value = {name: values[row] for name, values in frames.items()}
    sign = -1.0 if value["negative"] else 1.0
    named = {kind: value[f"{kind}_file"] for kind in COMPANION_KINDS if value[f"{kind}_file"]}
    companions = {kind: str(Path(value["archive"]) / path) for kind, path in named.items()}
    return photometry.FrameToMeasure(
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


def comparison(order: Order, frames: Columns, pairs: duplicates.Pairs, piece: IntArray) -> tuple[Any, ...]:
    """What `duplicates.compare` is to be given for some of the pairs."""
    rows, index = np.unique(np.concatenate([pairs.first[piece], pairs.second[piece]]), return_inverse=True)
    both = index.reshape(2, -1).T.tolist()
    return [frame_facts(frames, int(row)) for row in rows], both, pairs.strict[piece].tolist(), order.settings


def measure_piece(order: Order, piece: Piece) -> dict[str, int]:
    """Measure one batch of frames at one round of positions and write the part. Returns counts."""
    tables = book(order.run, order.version)
    rows = np.flatnonzero((tables.frames["batch"] == piece.batch) & (tables.frames["state"] == "current"))
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
    listed = int(frames["size"][row]), int(frames["modified_ns"][row])
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
    """What the measurements of one batch, in all rounds, tell of each frame's flux scale."""
    tables = book(order.run, order.version)
    who = tables.positions
    plan = [p for p in store.pieces(tables.frames, who) if p.batch == batch]
    rows = store.read_rows(tables.folder, plan, who["id"][np.isin(who["kind"], ("control", "comparison"))])
    kind = who["kind"][np.searchsorted(who["id"], rows["position"])]
    usable = np.isfinite(rows["flux"]) & (rows["flux_err"] > 0) & ((rows["flags"] & int(UNUSABLE)) == 0)
    steady = usable & (kind == "comparison")
    if not order.settings.comparisons.table:  # what the user calls steady serves, target or not
        assumed = order.settings.photometry.assumed_fwhm_pixels
        steady &= np.isin(rows["position"], apart_from(who, tables.frames, ("target",), assumed))
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
    """What calibration leaves in each channel whose comparisons tell it, those that may be a target left out."""
    return _residuals(order.run, order.version, order.settings.photometry.assumed_fwhm_pixels)


@lru_cache(maxsize=2)
def _residuals(run: str, version: str, assumed: float) -> Mapping[str, lifted.Residuals]:
    tables = book(run, version)
    ids = apart_from(tables.positions, tables.frames, ("target", "trial"), assumed)
    if len(ids) == 0:
        return {}
    blocks = position_blocks(Order(run, Settings(), host.PluginSpec(), version), ids)["blocks"]
    found = {label: lifted.residuals(block, tables.solution) for label, block in blocks.items()}
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


def examine_target(order: Order, target: int, field_controls: IntArray, above_quiet: dict[str, float]) -> Examined:
    """Periods examined and consistency checked for one target that varies beyond chance.

    `above_quiet` maps channel labels to what counts as bright.
    """
    plugins = host.load(order.plugins)
    curves, rows = target_data(order, target)
    cells: dict[str, Any] = {}
    faults: list[Fault] = []
    chosen: PeriodResult | None = None
    name = curves[0].name if curves else ""
    for plugin in plugins.period_searches:
        given = judge.timed_curves(curves, plugin.min_points)
        if not given:
            continue
        result = call(plugin, partial(_examined, plugin, given), name)
        if isinstance(result, Fault):
            faults.append(result)
            continue
        cells |= {f"{plugin.name}_{key}": value for key, value in result.values.items()}
        if chosen is None or (result.established and not chosen.established):
            chosen = result
    candidate = _candidate(order, target, field_controls, curves, rows, above_quiet, chosen)
    concerns = []
    for check in plugins.checks:
        answer = call(check, partial(_found, check, candidate), name)
        if isinstance(answer, Fault):
            faults.append(answer)
            continue
        cells |= {f"{check.name}_{key}": value for key, value in answer.values.items()}
        cells |= {f"{check.name}_verdict": answer.verdict, f"{check.name}_evidence": answer.evidence}
        if answer.verdict == "fail":
            concerns.append(f"{check.name}: {answer.evidence}")
    return Examined(cells, chosen, tuple(concerns), tuple(faults))


def _examined(plugin: Any, curves: Sequence[LightCurve]) -> PeriodResult:
    result = plugin.examine(curves)
    if not isinstance(result, PeriodResult):
        raise TypeError(f"examine() returned {type(result).__name__}, expected a PeriodResult")
    return PeriodResult(checked(plugin, result.values), tuple(result.ephemerides), bool(result.established))


def _found(check: Any, candidate: Candidate) -> Finding:
    finding = check.check(candidate)
    if not isinstance(finding, Finding) or finding.verdict not in ("pass", "fail", "uninformative"):
        raise TypeError(f"check() returned {finding!r:.80}, expected a Finding with a verdict of the three")
    declared = {column.name: blank(column) for column in check.columns}
    return Finding(finding.verdict, finding.evidence, checked(check, {**declared, **finding.values}))


def _candidate(
    order: Order, target: int, controls: IntArray, curves: Sequence[LightCurve], rows: Columns,
    above_quiet: dict[str, float], period: PeriodResult | None,
) -> Candidate:  # fmt: skip
    tables = book(order.run, order.version)
    at = int(np.searchsorted(tables.positions["id"], target))
    bright, xs, ys, widths = [], [], [], []
    for curve in curves:
        excess = np.abs(curve.above_quiet) if curve.channel.signed else curve.above_quiet
        bright.append(np.asarray(excess > above_quiet.get(curve.channel.label, np.inf)))
        where = {int(frame): i for i, frame in enumerate(rows["frame"])}
        index = np.array([where[int(frame)] for frame in curve.frame], np.int64)
        xs.append(rows["x"][index])
        ys.append(rows["y"][index])
        widths.append(rows["fwhm"][index])

    def blank_sky(channel: str, frames: IntArray) -> Any:
        found = position_blocks(order, controls, np.asarray(frames))["blocks"]
        return found[channel]

    def comparisons(channel: str, frames: IntArray) -> Block | None:
        near = _nearest_comparisons(tables.positions, at)
        blocks: dict[str, Block] = position_blocks(order, near, np.asarray(frames))["blocks"] if len(near) else {}
        return blocks.get(channel)

    def cutouts(frames: IntArray, half_width: float) -> list[Cutout]:
        return [made for frame in frames if (made := _cutout(order, rows, int(frame), half_width)) is not None]

    ephemeris = period.ephemerides[0] if period and period.established and period.ephemerides else None
    return Candidate(
        name=position_label(tables.positions, at), ra=float(tables.positions["ra"][at]),
        dec=float(tables.positions["dec"][at]), curves=tuple(curves), bright=tuple(bright), x=tuple(xs), y=tuple(ys),
        ephemeris=ephemeris, controls=blank_sky, cutouts=cutouts, place_err=float(tables.positions["place_err"][at]),
        fwhm=tuple(widths), images=FrameImages(order, rows), comparisons=comparisons,
    )  # fmt: skip


def _nearest_comparisons(positions: Columns, row: int) -> IntArray:
    """Ids of the comparisons nearest to a position, ascending."""
    steady = np.flatnonzero(positions["kind"] == "comparison")
    vectors = unit_vectors(positions["ra"][steady], positions["dec"][steady])
    here = unit_vectors(positions["ra"][row : row + 1], positions["dec"][row : row + 1])[0]
    nearest = np.argsort(-(vectors @ here), kind="stable")[:NEAREST_COMPARISONS]
    return np.sort(positions["id"][steady[nearest]])


class FrameImages(Images):
    """The frames of a run, for checks; what cannot be read is not known. `rows` are those of the target."""

    def __init__(self, order: Order, rows: Columns) -> None:
        self.order = order
        self.tables = book(order.run, order.version)
        found, first = np.unique(rows["frame"], return_index=True)
        self.own = {int(frame): {n: rows[n][i] for n in FRAME_WIDE} for frame, i in zip(found, first, strict=True)}
        self.found: dict[int, tuple[float, FloatArray]] = {}  # sources of frames, and down to which S/N

    def size(self, frames: IntArray) -> tuple[FloatArray, FloatArray]:
        """Pixels along x and y."""
        at = self._rows(frames)
        return self.tables.frames["width"][at].astype(float), self.tables.frames["height"][at].astype(float)

    def sidereal(self, frames: IntArray) -> FloatArray:
        """Local sidereal time in degrees."""
        table, at = self.tables.frames, self._rows(frames)
        middle = np.where(table["barycentric"][at], np.nan, table["middle_tdb_s"][at])
        return clock.sidereal_deg(middle, np.stack([table[f"site_{axis}"][at] for axis in "xyz"], axis=1))

    def measure(self, frames: IntArray, x: FloatArray, y: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Calibrated flux and error at one pixel of each frame."""
        flux, error = np.full(len(frames), np.nan), np.full(len(frames), np.nan)
        for frame, mine in _by_frame(frames):
            with suppress(*UNREADABLE):
                flux[mine], error[mine] = self._measured(frame, x[mine], y[mine])
        return flux, error

    def carried(
        self, frames: IntArray, x: FloatArray, y: FloatArray, others: IntArray
    ) -> tuple[FloatArray, FloatArray]:
        """The pixel of `others` with the same sky, by the headers and each frame's shift at its middle."""
        ra, dec, to_x, to_y = np.full((4, len(frames)), np.nan)
        for frame, mine in _by_frame(frames):
            with suppress(*UNREADABLE):
                dx, dy = self._shift(frame)
                ra[mine], dec[mine] = photometry.to_sky(
                    self._facts(frame), x[mine] - dx, y[mine] - dy, self.order.settings
                )
        for frame, mine in _by_frame(others):
            with suppress(*UNREADABLE):
                dx, dy = self._shift(frame)
                there = photometry.to_pixels(self._facts(frame), ra[mine], dec[mine], self.order.settings)
                to_x[mine], to_y[mine] = there[0] + dx, there[1] + dy
        return to_x, to_y

    def sources(self, frame: int, snr: float) -> tuple[FloatArray, FloatArray, FloatArray]:
        """x, y and S/N of the sources of one frame."""
        if frame not in self.found or self.found[frame][0] > snr:
            least = min(snr, SOURCE_SNR)
            self.found[frame] = least, np.empty((3, 0))
            with suppress(*UNREADABLE):
                found = photometry.bright_pixels(self._facts(frame), least, self.order.settings)
                self.found[frame] = least, np.stack(found)
        x, y, height = self.found[frame][1]
        above = height > snr
        return x[above], y[above], height[above]

    def _rows(self, frames: IntArray) -> IntArray:
        return np.array([self.tables.row_of_frame[int(frame)] for frame in frames], np.int64)

    def _facts(self, frame: int) -> photometry.FrameToMeasure:
        return frame_facts(self.tables.frames, self.tables.row_of_frame[frame])

    def _shift(self, frame: int) -> FloatArray:
        own = self.own.get(frame)
        return np.zeros(2) if own is None else np.nan_to_num([float(own["shift_x"]), float(own["shift_y"])])

    def _measured(self, frame: int, x: FloatArray, y: FloatArray) -> tuple[FloatArray, FloatArray]:
        facts, own, settings = self._facts(frame), self.own.get(frame), self.order.settings
        estimators = host.load(self.order.plugins).estimators
        estimator = photometry.choose_estimator(
            estimators, facts.unit, settings.photometry.estimator, facts.beam_major > 0
        )
        fwhm = float("nan") if own is None else float(own["fwhm"])
        found = photometry.measure_pixels(facts, x, y, estimator, settings, fwhm)
        found["frame"] = np.full(len(x), frame)
        flux, error, bad = ensemble.calibrated(found, self.tables.solution)
        lost = bad | ((found["flags"] & int(UNUSABLE)) != 0)
        return np.where(lost, np.nan, flux), np.where(lost, np.nan, error)


def _by_frame(frames: IntArray) -> list[tuple[int, IntArray]]:
    """Each frame with the places it stands at."""
    return [(int(frame), np.flatnonzero(frames == frame)) for frame in np.unique(frames)]


def _cutout(order: Order, rows: Columns, frame: int, half_width: float) -> Cutout | None:
    """Raw pixels around a measured position; None where the file is no longer readable."""
    tables = book(order.run, order.version)
    row = tables.row_of_frame[frame]
    at = int(np.flatnonzero(rows["frame"] == frame)[0])
    try:
        made = photometry.cutout(
            frame_facts(tables.frames, row), float(rows["x"][at]), float(rows["y"][at]), half_width, order.settings
        )
    except UNREADABLE:
        return None
    fwhm = float(rows["fwhm"][at])  # that of the comparisons where the header gives none
    known = float(tables.frames["beam_major"][row]) > 0 or fwhm != order.settings.photometry.assumed_fwhm_pixels
    return Cutout(
        frame=frame, channel=str(tables.frames["channel"][row]), pixels=made.pixels, x=made.x, y=made.y,
        to_sky=made.to_sky, fwhm=fwhm, background=float(rows["background"][at]), rms=float(rows["rms"][at]),
        fwhm_known=known,
    )  # fmt: skip
