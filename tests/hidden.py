"""Simulated light curves with and without sources, for completeness: no pixels, Gaussian noise, one channel."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

import numpy as np

from hindlight import bright, brighter, completeness, conclude, host, injection, judge, lifted, ranking
from hindlight.completeness import Bars, Cell, Injection
from hindlight.conclude import Field
from hindlight.lifted import Residuals
from hindlight.lightcurve import Block, Channel
from hindlight.settings import Settings

EXPOSURE_S = 120.0
N_BLANK = 4  # targets of each archive without a source
STATISTICS = host.load(host.spec_from(Settings())).statistics
COLUMNS = judge.full_columns(STATISTICS)


def times(rng: np.random.Generator, n_frames: int) -> np.ndarray:
    """Middles of exposures over ten years, in seconds."""
    return np.sort(rng.uniform(0, 3.15e8, n_frames))


def block(flux: np.ndarray, t_s: np.ndarray, kind: str = "control") -> Block:
    """Fluxes of shape (n, n_frames) with errors of 1 as a block."""
    n, n_frames = flux.shape
    one = np.ones(flux.shape)
    return Block(
        tuple(f"{kind} {k}" for k in range(n)), Channel("north"), np.arange(n_frames), one * t_s, one * EXPOSURE_S, flux, one,
        flux, one, np.zeros(flux.shape, np.int64), np.full(n_frames, np.nan),
    )  # fmt: skip


def solution(n_frames: int) -> dict[str, np.ndarray]:
    """A frame solution that changes nothing."""
    one = np.ones(n_frames)
    return {
        "frame": np.arange(n_frames), "gain": one, "error_scale": one, "extra_scatter": 0 * one,
        "verdict": np.array(["good"] * n_frames, object),
    }  # fmt: skip


def settings_of(level: float) -> Settings:
    """Default settings at another level."""
    return replace(Settings(), ranking=replace(Settings().ranking, level=level))


def judged(flux: np.ndarray, t_s: np.ndarray, kind: str = "control") -> judge.Judgement:
    """What the shipped statistics say of such fluxes."""
    return judge.judge({"north": block(flux, t_s, kind)}, STATISTICS)


def ranks(controls: judge.Judgement, targets: judge.Judgement) -> ranking.FieldRanks:
    """Targets among controls, all of which serve."""
    both = judge.joined([controls, targets], [controls.n, targets.n], COLUMNS)
    serving = np.ones((targets.n, controls.n), bool)
    return ranking.rank_field(both, COLUMNS, controls.n + np.arange(targets.n), np.arange(controls.n), serving)


def by_injection(
    seed: int, cells: Sequence[Cell], n_controls: int, n_frames: int, level: float, each: int = 1
) -> np.ndarray:
    """Whether sources hidden at controls of one archive would have been found, shape (n_cells, each)."""
    rng, settings = np.random.default_rng([1, seed]), settings_of(level)
    t_s = times(rng, n_frames)
    flux = rng.standard_normal((n_controls, n_frames))
    null = completeness.null_of(
        np.arange(n_controls), np.ones((n_controls, n_controls), bool), judged(flux, t_s), settings
    )
    blanks = ranks(null.judgement, judged(rng.standard_normal((N_BLANK, n_frames)), t_s, "target")).ranks
    p = conclude.p_values(blanks, settings)
    bars = Bars(completeness.bar(p.empirical, level), completeness.bar(p.p, level))
    chosen = replace(settings.completeness, per_cell=each, seed=seed)
    wanted = completeness.drawn(cells, null.ids, np.ones(n_controls), chosen)
    hosts = np.array([one.host for one in wanted])
    made = injected(block(flux, t_s), hosts, wanted, cells)
    found = completeness.found(judge.judge({"north": made}, STATISTICS), hosts, null, COLUMNS, bars, settings)
    return found.recovered.reshape(len(cells), each)


def injected(plain: Block, rows: np.ndarray, wanted: Sequence[Injection], cells: Sequence[Cell]) -> Block:
    """Sources at rows of a block, one of each."""
    added = np.stack([
        cells[one.cell].flux * injection.brightness(one.source, plain.t_tdb_s[row], plain.exposure_s[row], plain.frame)
        for row, one in zip(rows, wanted, strict=True)
    ])  # fmt: skip
    n_frames = len(plain.frame)
    keys = np.array([one.source.key for one in wanted])
    return injection.injected(plain, rows, added, keys, solution(n_frames), np.full(n_frames, np.nan))


def by_simulation(seed: int, cells: Sequence[Cell], n_controls: int, n_frames: int, level: float) -> np.ndarray:
    """Whether a target with a source, one for each cell, is a candidate of an archive with blank targets beside it."""
    rng, settings = np.random.default_rng([2, seed]), settings_of(level)
    t_s = times(rng, n_frames)
    controls = judged(rng.standard_normal((n_controls, n_frames)), t_s)
    targets = rng.standard_normal((N_BLANK + len(cells), n_frames))
    for row, cell in enumerate(cells):
        targets[N_BLANK + row] += cell.flux * brute(rng, cell, t_s)
    found = ranks(controls, judged(targets, t_s, "target")).ranks
    beside = list(found[:N_BLANK])
    return np.array([conclude.p_values([*beside, one], settings).q[-1] < level for one in found[N_BLANK:]])


def brute(rng: np.random.Generator, cell: Cell, t_s: np.ndarray, steps: int = 300) -> np.ndarray:
    """Mean brightness over exposures by adding up instants; every pulse is drawn when it is met, none is met twice."""
    instants = t_s[:, None] + EXPOSURE_S * ((np.arange(steps) + 0.5) / steps - 0.5)
    phase = (instants - rng.uniform(0, cell.period_s)) / cell.period_s
    if cell.kind == injection.SMOOTH:
        return (0.5 + 0.5 * np.cos(2 * np.pi * phase)).mean(axis=1)
    number, place = np.unique(np.rint(phase), return_inverse=True)
    place = place.reshape(phase.shape)
    play = (cell.window - 1) * cell.duty_cycle
    offset = play * (rng.uniform(size=len(number)) - 0.5)
    there = rng.uniform(size=len(number)) >= cell.missing
    away = phase - np.rint(phase) - offset[place]
    return ((np.abs(away) < cell.duty_cycle / 2) & there[place]).mean(axis=1)


def residuals(rng: np.random.Generator, scatter: float, n_sources: int, n_frames: int) -> dict[str, Residuals]:
    """What calibration leaves of so many comparisons: normal, in every frame alike."""
    left = scatter * rng.standard_normal((n_sources, n_frames))
    return {"north": Residuals(np.arange(n_frames), left, np.full(n_frames, scatter), np.ones(n_frames))}


def by_injection_of_bright(
    seed: int, cell: Cell, n_controls: int, n_frames: int, level: float, scatter: float, n_sources: int, each: int
) -> tuple[np.ndarray, np.ndarray]:
    """As `by_injection` for one cell, where calibration leaves a scatter; then the same with blank sky as the only null."""
    rng, settings = np.random.default_rng([3, seed]), settings_of(level)
    t_s = times(rng, n_frames)
    plain, left = block(rng.standard_normal((n_controls, n_frames)), t_s), residuals(rng, scatter, n_sources, n_frames)
    ids, all_of_them = np.arange(n_controls), np.ones((n_controls, n_controls), bool)
    null = completeness.null_of(ids, all_of_them, judge.judge({"north": plain}, STATISTICS), settings)
    on = {}
    for rung in brighter.rungs([cell], {"north": 1.0}, left, settings):
        copies = lifted.copies(ids, brighter.copied_times(rung, n_controls, N_BLANK + 1, settings))
        made = lifted.lifted(plain, ids, copies, rung.lift.levels["north"], left["north"])
        on[rung.step] = brighter.null_on(rung, null, judge.judge({"north": made}, STATISTICS))
    full = replace(null, brighter=on, units={"north": 1.0}, scatter={"north": scatter})
    blanks = ranks(null.judgement, judged(rng.standard_normal((N_BLANK, n_frames)), t_s, "target")).ranks
    p = conclude.p_values(blanks, settings)
    bars = Bars(completeness.bar(p.empirical, level), completeness.bar(p.p, level))
    wanted = completeness.drawn(
        [cell], ids, np.ones(n_controls), replace(settings.completeness, per_cell=each, seed=seed)
    )
    rows, keys = np.array([one.host for one in wanted]), np.array([one.source.key for one in wanted])
    shape = np.stack([injection.brightness(one.source, t_s, EXPOSURE_S + 0 * t_s, plain.frame) for one in wanted])
    flux = cell.flux * shape * (1.0 + left["north"].values[keys % n_sources])
    solved = solution(n_frames) | {"extra_scatter": np.full(n_frames, scatter)}
    carried = injection.injected(plain, rows, flux, keys, solved, np.full(n_frames, np.nan))
    found = judge.judge({"north": carried}, STATISTICS)
    full_null, blank_only = (
        completeness.found(found, rows, one, COLUMNS, bars, settings).recovered for one in (full, null)
    )
    return full_null, blank_only


def by_simulation_of_bright(
    seed: int, cell: Cell, n_controls: int, n_frames: int, level: float, scatter: float, n_sources: int
) -> bool:
    """As `by_simulation` for one cell, where calibration leaves a scatter: the target is judged as a run does it."""
    rng, settings = np.random.default_rng([4, seed]), settings_of(level)
    t_s = times(rng, n_frames)
    left = residuals(rng, scatter, n_sources, n_frames)
    controls, blanks = (rng.standard_normal((n, n_frames)) for n in (n_controls, N_BLANK))
    own = cell.flux * brute(rng, cell, t_s) * (1.0 + scatter * rng.standard_normal(n_frames))
    target = own + rng.standard_normal(n_frames)
    flux = np.concatenate([blanks, target[None, :], controls])
    error = np.ones(flux.shape)
    error[N_BLANK] = np.hypot(1.0, scatter * target)
    ids = np.arange(len(flux))
    found = Field(0, ids[: N_BLANK + 1], ids[N_BLANK + 1 :], np.ones((N_BLANK + 1, n_controls), bool))
    found.judgement = judge.judge({"north": replace(block(flux, t_s), flux_err=error)}, STATISTICS)
    plugins = host.load(host.spec_from(settings, without=("lomb_scargle",)))
    conclude.rank(found, plugins, settings)
    rest, apart = bright.apart(found, left, N_BLANK + 1, settings)
    fields = [rest, *(targets.apart for targets in apart)]
    for targets in apart:
        level_of = targets.apart.lift.levels["north"] if targets.apart.lift else 0.0
        made = lifted.lifted(block(controls, t_s), rest.controls, targets.apart.controls, level_of, left["north"])
        targets.judged(judge.judge({"north": made}, STATISTICS), COLUMNS)
        targets.ranked(plugins, settings)
    conclude.rank(rest, plugins, settings)
    p = conclude.p_values(
        [rank for one in fields for rank in one.ranked.ranks], settings,
        [one.group_size for one in fields for _ in one.targets],
    )  # fmt: skip
    where = [int(target) for one in fields for target in one.targets].index(N_BLANK)
    return bool(p.q[where] < level)
