"""The conformance kit for plugin authors: does a plugin behave as the core expects?

Use it from a test (`check_plugin(MyStatistic())` raises AssertionError with every problem found) or from the command
line (`hindlight plugins --check FILE.py`). The shipped plugins pass it. It tests behaviour and physics (units, time
origin, threads), not whether a statistic is a good idea.
"""

from __future__ import annotations

import dataclasses
import pickle
import time
import warnings
from collections.abc import Callable, Iterator, Mapping
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from hindlight.facts import Cards, FrameFacts, PlaneAxes
from hindlight.fence import WrongColumnError, checked
from hindlight.judge import oriented
from hindlight.lightcurve import Block, Channel, LightCurve, freeze
from hindlight.plugin import (
    BeamShape,
    Candidate,
    ConsistencyCheck,
    Cutout,
    Dialect,
    Estimator,
    Finding,
    PeriodResult,
    PeriodSearch,
    Plugin,
    Stamps,
    Statistic,
)
from hindlight.schema import ASSUMPTIONS

__all__ = ["Report", "awkward_curves", "check_plugin", "examine", "simulated_block", "simulated_curve"]

FLUX_FACTOR = 1000.0
TIME_SHIFT_S = 86400.0 * 1000
RELATIVE = 1e-6
TIMED_CURVES = 150
STEADY_CURVES = 40
STEADY_SNR = (10.0, 100.0)
SAMPLES = 200
SIMULATED_LEVEL = 5.0
THREADS = 4

CHANNEL = Channel("test|1.4GHz|I|30as|Jy/beam", "test", "", "I", 1.4e9, 30.0, "Jy/beam")


@dataclass(frozen=True)
class Report:
    """What was found: one line per problem, how many checks were made, and how long a thousand calls took.

    `remarks` are sentences about what is allowed and perhaps not meant.
    """

    problems: tuple[str, ...]
    n_checks: int
    timing: str
    remarks: tuple[str, ...] = ()


def check_plugin(plugin: Plugin) -> None:
    """Raise AssertionError naming every check the plugin fails."""
    report = examine(plugin)
    if report.problems:
        raise AssertionError(f"{plugin.kind} {plugin.name}:\n" + "\n".join(report.problems))


def examine(plugin: Plugin) -> Report:
    """Run every check that applies to the plugin's kind."""
    problems = []
    checks = dict(_checks(plugin))
    for name, check in checks.items():
        try:
            with warnings.catch_warnings():
                warnings.simplefilter("error")
                problem = check()
        except (Exception, SystemExit, GeneratorExit) as error:  # noqa: BLE001 - whatever the plugin raises is the finding
            problem = f"raised {type(error).__name__}: {error}"
        if problem:
            problems.append(f"{name}: {problem}")
    return Report(tuple(problems), len(checks), _timing(plugin), _remarks(plugin))


def _remarks(plugin: Plugin) -> tuple[str, ...]:
    """What to say of a statistic that takes no part in the ranking, or takes what is bright for what varies."""
    if not isinstance(plugin, Statistic):
        return ()
    if any(c.unusual and c.about == "variation" for c in plugin.columns):
        return _bright_remarks(plugin)
    if any(c.unusual for c in plugin.columns):
        return (
            "its ranked columns ask about presence, so none enters p_value: "
            "leave about out where a column asks whether the flux changes",
        )
    return (
        'no column is ranked, so none enters p_value: set unusual="high", "low" or "both" on one that is to be calibrated',
    )


def _bright_remarks(plugin: Statistic) -> tuple[str, ...]:
    """A sentence for each column about variation that tells a bright steady source from blank sky.

    Among blank positions the source would be a variable. Told apart are light curves of the same noise about no flux and
    about one of S/N 10 or 100: most of the bright ones lie beyond nine tenths of the blank ones.
    """
    try:
        with np.errstate(all="ignore"):
            blank, *bright = (_of_steady(plugin, snr) for snr in (0.0, *STEADY_SNR))
    except (Exception, SystemExit, GeneratorExit):  # noqa: BLE001 - it is reported by the checks
        return ()
    said = []
    for column in plugin.columns:
        if not column.unusual or column.about != "variation":
            continue
        null = blank[column.name]
        usual = np.quantile(oriented(null, column, null), 0.9, method="lower")
        grown = [snr for snr, found in zip(STEADY_SNR, bright, strict=True)
                 if np.mean(oriented(found[column.name], column, null) > usual) > 0.5]  # fmt: skip
        if grown:
            said.append(
                f"column {column.name!r} tells a steady source of S/N {grown[0]:.0f} from blank sky, so that every bright "
                "steady source would be called variable: measure from the quiet level (curve.above_quiet, "
                'curve.quiet_level), or set about="presence"'
            )
    return tuple(said)


def _of_steady(plugin: Statistic, snr: float) -> dict[str, NDArray[Any]]:
    """The columns of a steady source so bright in a typical sample; the noise is the same whatever the brightness."""
    compute = _statistic_call(plugin)
    found = []
    for seed in range(STEADY_CURVES):
        curve = simulated_curve(seed=seed)
        flux, raw = (f - SIMULATED_LEVEL + snr for f in (curve.flux, curve.raw_flux))
        found.append(checked(plugin, compute(replace_arrays(curve, flux=flux, raw_flux=raw))))
    return {c.name: np.array([values[c.name] for values in found], float) for c in plugin.columns if c.unusual}


def simulated_curve(n: int = SAMPLES, seed: int = 0, channel: Channel = CHANNEL, brighter: float = 0.0) -> LightCurve:
    """A light curve of white noise about 5 with errors of about 1, over some years; one sample brighter if asked."""
    rng = np.random.default_rng([seed, n])
    t = np.sort(rng.uniform(0.0, 3e8, n))
    err = rng.uniform(0.8, 1.2, n)
    flux = SIMULATED_LEVEL + err * rng.standard_normal(n)
    if n:
        flux[n // 3] += brighter
    return LightCurve.from_arrays(t, flux, err, exposure_s=np.full(n, 60.0), name=f"curve {seed}", channel=channel)


def simulated_block(n_positions: int = 6, n_frames: int = 40, seed: int = 0) -> Block:
    """A block of white noise with some gaps."""
    rng = np.random.default_rng([seed, 7])
    t = np.sort(rng.uniform(0.0, 3e8, n_frames))[None, :] + rng.uniform(0, 5, (n_positions, 1))
    err = rng.uniform(0.8, 1.2, (n_positions, n_frames))
    flux = 5.0 + err * rng.standard_normal((n_positions, n_frames))
    gaps = rng.random((n_positions, n_frames)) < 0.1
    matrices = [np.where(gaps, np.nan, m) for m in (t, np.full_like(t, 60.0), flux, err, flux, err)]
    t, exposure, flux, err, raw, raw_err = (freeze(m) for m in matrices)
    names = tuple(f"curve {k}" for k in range(n_positions))
    flags = freeze(np.zeros((n_positions, n_frames)), np.int64)
    frame = freeze(np.arange(n_frames), np.int64)
    return Block(names, CHANNEL, frame, t, exposure, flux, err, raw, raw_err, flags, np.full_like(frame, np.nan, float))


def awkward_curves(n_least: int) -> dict[str, LightCurve]:
    """Light curves that a statistic meets sooner or later: name -> curve."""
    base = simulated_curve(max(30, n_least))
    n = len(base)
    outlier = np.array(base.flux)
    outlier[n // 2] = 1e6
    errors = np.geomspace(0.1, 10.0, n)
    ties = np.repeat(base.t_tdb_s[::2], 2)[:n]
    return {
        "the fewest samples allowed": base.select(np.arange(n) < n_least),
        "all fluxes equal": replace_arrays(base, flux=np.full(n, 5.0)),
        "all fluxes zero": replace_arrays(base, flux=np.zeros(n)),
        "one huge outlier": replace_arrays(base, flux=outlier),
        "all fluxes negative": replace_arrays(base, flux=-np.abs(base.flux)),
        "a hundredfold range of errors": replace_arrays(base, flux_err=errors),
        "ties in time": replace_arrays(base, t_tdb_s=ties),
        "all at one time": replace_arrays(base, t_tdb_s=np.full(n, 1e8)),
        "unknown exposures": replace_arrays(base, exposure_s=np.full(n, np.nan)),
    }


def replace_arrays(curve: LightCurve, **arrays: NDArray[Any]) -> LightCurve:
    """The curve with some arrays replaced by read-only copies."""
    frozen: dict[str, Any] = {name: freeze(values) for name, values in arrays.items()}
    return replace(curve, **frozen)


def _checks(plugin: Plugin) -> Iterator[tuple[str, Callable[[], str]]]:
    yield "settings are declared by setting(default, doc)", lambda: _settings_problem(plugin)
    yield (
        "pickling keeps it equal",
        lambda: "" if pickle.loads(pickle.dumps(plugin)) == plugin else "it comes back changed",
    )
    if isinstance(plugin, Statistic):
        yield from _curve_checks(plugin, _statistic_call(plugin), plugin.min_points)
        if not plugin.all_channels:
            yield "compute_block equals compute", lambda: _block_problem(plugin)
    elif isinstance(plugin, PeriodSearch):
        yield from _curve_checks(plugin, lambda curve: plugin.search((curve,)), plugin.min_points)
        yield "examine returns a PeriodResult", lambda: _examine_problem(plugin)
    elif isinstance(plugin, Estimator):
        yield from _estimator_checks(plugin)
    elif isinstance(plugin, ConsistencyCheck):
        yield "check returns a Finding with its columns", lambda: _finding_problem(plugin)
    elif isinstance(plugin, Dialect):
        yield "read returns FrameFacts with known words", lambda: _dialect_problem(plugin)


def _settings_problem(plugin: Plugin) -> str:
    bare = [f.name for f in dataclasses.fields(plugin) if not f.metadata.get("doc")]
    return f"field {bare[0]!r} has no doc" if bare else ""


def _statistic_call(plugin: Statistic) -> Callable[[LightCurve], Mapping[str, Any]]:
    return lambda curve: plugin.compute((curve,) if plugin.all_channels else curve)


def _curve_checks(
    plugin: Plugin, compute: Callable[[LightCurve], Mapping[str, Any]], n_least: int
) -> Iterator[tuple[str, Callable[[], str]]]:
    curve = simulated_curve(brighter=20.0)

    def values(of: LightCurve = curve) -> dict[str, Any]:
        return checked(plugin, compute(of))

    yield "returns the columns it declares", lambda: _columns_problem(plugin, values)
    yield "gives the same answer twice", lambda: _differences(plugin, values(), values(), exact=True)
    yield "gives the same answer in four threads", lambda: _threads_problem(plugin, values)
    yield "leaves its input alone", lambda: _input_problem(values, curve)
    yield "scales with the flux as declared", lambda: _scaling_problem(plugin, values, curve)
    yield "does not depend on the time origin", lambda: _origin_problem(plugin, values, curve)
    for name, awkward in awkward_curves(n_least).items():
        yield f"bears {name}", lambda awkward=awkward: "" if values(awkward) else "returned nothing"  # type: ignore[misc]


def _columns_problem(plugin: Plugin, values: Callable[[], dict[str, Any]]) -> str:
    try:
        found = values()
    except WrongColumnError as error:
        return str(error)
    lost = [c.name for c in plugin.columns if c.unusual and not np.isfinite(found[c.name])]
    return f"calibrated column {lost[0]!r} is not finite on an ordinary light curve" if lost else ""


def _threads_problem(plugin: Plugin, values: Callable[[], dict[str, Any]]) -> str:
    with ThreadPoolExecutor(THREADS) as pool:
        results = list(pool.map(lambda _n: values(), range(THREADS)))
    return next((p for r in results if (p := _differences(plugin, results[0], r, exact=True))), "")


def _input_problem(values: Callable[[LightCurve], dict[str, Any]], curve: LightCurve) -> str:
    before = pickle.dumps([curve.t_tdb_s, curve.flux, curve.flux_err])
    values(curve)
    return (
        ""
        if pickle.dumps([curve.t_tdb_s, curve.flux, curve.flux_err]) == before
        else "it changed an array it was given"
    )


def _scaling_problem(plugin: Plugin, values: Callable[[LightCurve], dict[str, Any]], curve: LightCurve) -> str:
    brighter = replace_arrays(
        curve, flux=curve.flux * FLUX_FACTOR, flux_err=curve.flux_err * FLUX_FACTOR,
        raw_flux=curve.raw_flux * FLUX_FACTOR, raw_flux_err=curve.raw_flux_err * FLUX_FACTOR,
    )  # fmt: skip
    expected = {
        c.name: v * FLUX_FACTOR**c.flux_power if isinstance(v := values(curve)[c.name], float) else v
        for c in plugin.columns
    }
    problem = _differences(plugin, expected, values(brighter))
    return f"{problem}; set flux_power of that column" if problem else ""


def _origin_problem(plugin: Plugin, values: Callable[[LightCurve], dict[str, Any]], curve: LightCurve) -> str:
    later = replace_arrays(curve, t_tdb_s=curve.t_tdb_s + TIME_SHIFT_S)
    before = values(curve)
    expected = {c.name: before[c.name] + TIME_SHIFT_S if c.is_time else before[c.name] for c in plugin.columns}
    problem = _differences(plugin, expected, values(later))
    return f"{problem}; a column that is a time sets is_time" if problem else ""


def _differences(plugin: Plugin, a: Mapping[str, Any], b: Mapping[str, Any], exact: bool = False) -> str:
    for column in plugin.columns:
        x, y = a[column.name], b[column.name]
        same = x == y or (isinstance(x, float) and isinstance(y, float) and np.isnan(x) and np.isnan(y))
        if not same and not exact and isinstance(x, float) and isinstance(y, float):
            same = bool(np.isclose(x, y, rtol=RELATIVE, atol=1e-9))
        if not same:
            return f"column {column.name!r} is {y!r}, expected {x!r}"
    return ""


def _block_problem(plugin: Statistic) -> str:
    block = simulated_block()
    together = plugin.compute_block(block)
    if together is None:
        return ""
    for row, curve in enumerate(block.curves()):
        alone = checked(plugin, plugin.compute(curve))
        shared = checked(plugin, {name: np.asarray(values)[row] for name, values in together.items()})
        if problem := _differences(plugin, alone, shared):
            return problem
    return ""


def _examine_problem(plugin: PeriodSearch) -> str:
    result = plugin.examine((simulated_curve(),))
    if not isinstance(result, PeriodResult):
        return f"returned {type(result).__name__}"
    checked(plugin, result.values)
    return "an established period needs an ephemeris" if result.established and not result.ephemerides else ""


def _estimator_checks(plugin: Estimator) -> Iterator[tuple[str, Callable[[], str]]]:
    beam = BeamShape(4.0, 3.5, 0.3)
    half = int(np.ceil(plugin.radius(beam))) + 2
    rng = np.random.default_rng(5)
    size = 2 * half + 1

    def stamps(pixels: NDArray[Any]) -> Stamps:
        n = len(pixels)
        return Stamps(pixels, np.linspace(-0.4, 0.4, n), np.linspace(0.4, -0.4, n), np.ones(n), np.full(n, 0.05), beam)

    a, b = (rng.standard_normal((5, size, size)) for _ in range(2))

    def flux(pixels: NDArray[Any]) -> NDArray[Any]:
        return np.asarray(plugin.measure(stamps(pixels))[0])

    def linear() -> str:
        return "" if np.allclose(flux(2 * a + b), 2 * flux(a) + flux(b), rtol=1e-9, atol=1e-9) else "flux is not linear"

    def errors() -> str:
        error = np.asarray(plugin.measure(stamps(a))[1])
        return "" if error.shape == (5,) and np.all(error > 0) else f"errors are {error}"

    def blanks() -> str:
        holed = a.copy()
        holed[2, half, half] = np.nan
        found = flux(holed)
        return (
            "" if np.isnan(found[2]) and np.isfinite(np.delete(found, 2)).all() else "a blank pixel does not give NaN"
        )

    yield "is linear in the pixels", linear
    yield "gives positive errors", errors
    yield "gives NaN where a central pixel is blank", blanks


def _finding_problem(plugin: ConsistencyCheck) -> str:
    finding = plugin.check(_candidate())
    if not isinstance(finding, Finding):
        return f"returned {type(finding).__name__}"
    if finding.verdict not in ("pass", "fail", "uninformative") or not finding.evidence:
        return "a verdict is pass, fail or uninformative, with a sentence of evidence"
    declared = {c.name for c in plugin.columns}
    return f"undeclared column {extra[0]!r}" if (extra := sorted(set(finding.values) - declared)) else ""


def _candidate() -> Candidate:
    curve = simulated_curve(40, brighter=30.0)
    bright = curve.above_quiet > 6
    block = simulated_block(30, 40)

    def controls(_channel: str, frames: NDArray[Any]) -> Block:
        keep = np.isin(block.frame, frames)
        matrices: dict[str, Any] = {
            f.name: freeze(v[:, keep], v.dtype.type)
            for f in dataclasses.fields(block)
            if isinstance(v := getattr(block, f.name), np.ndarray) and v.ndim == 2
        }
        return replace(block, frame=freeze(block.frame[keep], np.int64), **matrices)

    def cutouts(frames: NDArray[Any], half_width: float) -> list[Cutout]:
        half = int(np.ceil(3 * half_width))
        y, x = np.mgrid[: 2 * half + 1, : 2 * half + 1]
        source = 30.0 * np.exp(-4 * np.log(2) * ((x - half) ** 2 + (y - half) ** 2) / 9.0)
        return [
            Cutout(int(f), CHANNEL.label, source, half, half, np.diag([-10.0, 10.0]), 3.0, 0.0, 1.0) for f in frames
        ]

    x = np.full(len(curve), 50.0)
    return Candidate("test", 10.0, -20.0, (curve,), (bright,), (x,), (x,), None, controls, cutouts)


def _dialect_problem(plugin: Dialect) -> str:
    text = "".join(
        f"{card:<80}"
        for card in ("DATE-OBS= '2001-02-03T04:05:06'", "EXPTIME =                120.0", "BUNIT   = 'JY/BEAM'")
    )
    cards = Cards(text.encode("ascii"))
    if not plugin.recognises(cards):
        return ""
    facts = plugin.read(cards, PlaneAxes())
    if not isinstance(facts, FrameFacts):
        return f"returned {type(facts).__name__}"
    unknown = sorted(set(facts.assumptions) - set(ASSUMPTIONS))
    return f"unknown word {unknown[0]!r} among the assumptions" if unknown else ""


def _timing(plugin: Plugin) -> str:
    """How long a thousand light curves take, for plugins that are given light curves."""
    if isinstance(plugin, Statistic):
        compute: Callable[[LightCurve], Any] = _statistic_call(plugin)
        n = TIMED_CURVES
    elif isinstance(plugin, PeriodSearch):
        compute, n = (lambda curve: plugin.search((curve,))), 10
    else:
        return "not timed"
    curves = [simulated_curve(seed=seed) for seed in range(n)]
    start = time.perf_counter()
    try:
        with np.errstate(all="ignore"):
            for curve in curves:
                compute(curve)
    except (Exception, SystemExit, GeneratorExit):  # noqa: BLE001 - it is reported by the checks
        return "not timed, it fails"
    taken = (time.perf_counter() - start) * 1000 / n
    return f"a thousand light curves of {SAMPLES} samples take {taken:.2f} s"
