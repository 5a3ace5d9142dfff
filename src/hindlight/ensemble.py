"""From the comparisons' raw fluxes to each frame's gain, error scale, extra scatter and verdict, and their use.

A channel's frames and comparisons make a graph: flux = gain of the frame x brightness of the source. Gains come from
robust least squares over the whole of it (R. K. Honeycutt 1992, PASP 104, 435), in linear form, since logarithms bias
faint sources. What reads light curves goes through `calibrated`, so a solution changes fluxes without a pixel being
read again. Nothing here reads files.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from functools import partial
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy import stats
from scipy.sparse.linalg import lsqr

from hindlight import losses
from hindlight.background import MAD_TO_SIGMA
from hindlight.lightcurve import FloatArray, IntArray
from hindlight.response import PHOTOGRAPHIC, Responses, curve_from, faintest_seen, solve_responses
from hindlight.robust import (
    HUBER,
    column_scatter,
    connected,
    excess_scatter,
    frame_scatter,
    median_of,
    most_variable,
)
from hindlight.schema import Flag
from hindlight.settings import Comparisons

ROUNDS = 12  # of reweighting and linearising
FEWEST_SNR = 3.0  # a comparison whose typical S/N in a channel is lower tells nothing of gains there
MAD_ERROR = 1.167  # relative error of a MAD's sigma, times sqrt(n)
SIGNIFICANT = 3.3  # sigma: one frame in a thousand by chance
FEWEST_CONTROLS = 30
BAD_P = 1e-6
BAD_SCATTER = 0.5
LEAST_LIGHT = 0.02  # less than this is within what neighbours and noise common to both sums do to the measurement
MEDIAN_ERROR = 1.253  # relative to that of the mean, for normal errors
FEWEST_GAINS = 5  # frames with a gain that tell how far those without may be off
FEWEST_HELD = 5  # frames that tell how much light the estimator counts
FLUX_COLUMNS = ("frame", "position", "x", "y", "flux", "flux_err")  # of comparisons
IMAGE_COLUMNS = ("shift_x", "shift_y", "fwhm", "held")  # what measuring found of the image itself

Columns = dict[str, Any]


@dataclass(frozen=True, eq=False)
class Gains:
    """A channel's solution: `gain`, its error, own scatter (fraction of flux) and number of comparisons, per frame.

    Shapes (n_frames,); gain is NaN where there are too few comparisons. `brightness` and `scatter` are per source, NaN
    for one that was left out; `common_scatter` is that of the channel; `spread` the scatter of the gains themselves
    (robust), `spread_limit` the 95 % upper limit of their standard deviation, NaN where fewer than five frames have a gain.
    """

    gain: FloatArray
    gain_err: FloatArray
    frame_scatter: FloatArray
    n_comparisons: IntArray
    brightness: FloatArray
    scatter: FloatArray
    common_scatter: float
    spread: float
    spread_limit: float


def solve_gains(flux: FloatArray, flux_err: FloatArray, fewest: int = 3) -> Gains:
    """Gains of frames and brightness of sources from raw fluxes of shape (n_frames, n_sources), NaN where there is none.

    In each connected part of the graph the logarithms of the gains add up to zero: its mean scale stays what it was.
    Sources that scatter far more than the others are left out.
    """
    n_frames, n_sources = flux.shape
    known = np.isfinite(flux) & np.isfinite(flux_err) & (flux_err > 0)
    with np.errstate(invalid="ignore"):
        snr = median_of(np.where(known, flux / np.where(known, flux_err, 1.0), np.nan), axis=0)
        known &= (snr >= FEWEST_SNR)[None, :]
    scatter = np.full(n_sources, np.nan)
    while True:
        known &= (known.sum(axis=1) >= fewest)[:, None]
        known &= (known.sum(axis=0) >= 2)[None, :]
        if not known.any():
            return _no_gains(n_frames, scatter)
        gain, brightness = _bilinear_fit(flux, flux_err, known)
        relative, error = _relative(flux, flux_err, known, gain, brightness)
        common = excess_scatter(relative[known], error[known])
        scatter = np.array([column_scatter(relative[:, s], error[:, s], known[:, s]) for s in range(n_sources)])
        worst = most_variable(relative, error, known, scatter, common)
        if worst is None:
            break
        known = known.copy()
        known[:, worst] = False
    of_frame = np.array([frame_scatter(relative[e], error[e], known[e], common) for e in range(n_frames)])
    weight = np.where(known, 1.0 / (error**2 + common**2), 0.0).sum(axis=1)
    n_used = known.sum(axis=1)
    enough = n_used >= fewest
    with np.errstate(divide="ignore"):
        gain_err = np.where(enough, gain / np.sqrt(weight), np.nan)
    logs = np.log(gain[enough])
    return Gains(
        gain=np.where(enough, gain, np.nan),
        gain_err=gain_err,
        frame_scatter=np.where(enough, of_frame, np.nan),
        n_comparisons=np.where(enough, n_used, 0).astype(np.int64),
        brightness=np.where(known.any(axis=0), brightness, np.nan),
        scatter=np.where(known.any(axis=0), scatter, np.nan),
        common_scatter=common,
        spread=float(MAD_TO_SIGMA * np.median(np.abs(logs - np.median(logs)))),
        spread_limit=_largest_scatter(logs),
    )


def _no_gains(n_frames: int, scatter: FloatArray) -> Gains:
    nothing, counts = np.full(n_frames, np.nan), np.zeros(n_frames, np.int64)
    return Gains(nothing, nothing, nothing, counts, np.full(len(scatter), np.nan), scatter, 0.0, 0.0, np.nan)


def _largest_scatter(values: FloatArray) -> float:
    """The 95 % upper limit of the standard deviation that values (n,) come from, if it is normal: (n - 1) s^2 / chi^2."""
    freedom = len(values) - 1
    if freedom + 1 < FEWEST_GAINS:
        return float("nan")
    return float(values.std(ddof=1) * np.sqrt(freedom / stats.chi2.ppf(0.05, freedom)))


def _bilinear_fit(flux: FloatArray, flux_err: FloatArray, known: NDArray[np.bool_]) -> tuple[FloatArray, FloatArray]:
    """Gains (1 where unknown) and brightnesses by Gauss-Newton steps with Huber's weights."""
    n_frames, n_sources = flux.shape
    frame, source = np.nonzero(known)
    value, error = flux[frame, source], flux_err[frame, source]
    brightness = np.nan_to_num(median_of(np.where(known, flux, np.nan), axis=0), nan=1.0)
    brightness = np.where(brightness > 0, brightness, 1.0)
    gain = np.nan_to_num(median_of(np.where(known, flux / brightness, np.nan), axis=1), nan=1.0)
    gain = np.where(gain > 0, gain, 1.0)
    part = connected(known)
    for _ in range(ROUNDS):
        model = gain[frame] * brightness[source]
        relative = value / model - 1.0
        sigma = error / model
        common = excess_scatter(relative, sigma)
        total = np.hypot(sigma, common)
        pull = relative / total
        weight = np.sqrt(np.minimum(1.0, HUBER / np.maximum(np.abs(pull), 1e-300))) / total
        matrix, size = losses.effects(weight, frame, source, (n_frames, n_sources))
        step = lsqr(matrix, weight * relative, atol=1e-12, btol=1e-12)[0] / size
        step = np.clip(step, -0.5, 0.5)
        gain, brightness = gain * np.exp(step[:n_frames]), brightness * np.exp(step[n_frames:])
        if np.abs(step).max() < 1e-9:
            break
    for number in np.unique(part):  # the gauge of each connected part
        mine = (part[:n_frames] == number) & known.any(axis=1)
        if mine.any():
            mean = np.exp(np.log(gain[mine]).mean())
            gain[mine] /= mean
            brightness[part[n_frames:] == number] *= mean
    return gain, brightness


def _relative(
    flux: FloatArray, flux_err: FloatArray, known: NDArray[np.bool_], gain: FloatArray, brightness: FloatArray
) -> tuple[FloatArray, FloatArray]:
    """Residual and error as fractions of the model, shape (n_frames, n_sources), NaN where unknown."""
    model = np.where(known, gain[:, None] * brightness, np.nan)
    return flux / model - 1.0, flux_err / model


def error_scales(pulls: FloatArray, n_controls: IntArray) -> FloatArray:
    """Factors on the errors of a channel's frames, shape (n,), from the scatter of blank sky in units of its errors.

    `pulls` is the MAD-sigma of flux / error over a frame's controls, `n_controls` their number. A factor for the whole
    channel is taken where its frames together differ from 1 beyond chance, a frame's own where it differs from that.
    """
    scale = np.ones(len(pulls))
    usable = np.isfinite(pulls) & (pulls > 0) & (n_controls >= FEWEST_CONTROLS)
    if not usable.any():
        return scale
    logs, error = np.log(pulls[usable]), MAD_ERROR / np.sqrt(n_controls[usable])
    weight = error**-2.0
    order = np.argsort(logs)
    middle = np.searchsorted(np.cumsum(weight[order]), weight.sum() / 2)
    typical = float(logs[order][min(middle, len(order) - 1)])  # a weighted median: some frames may be far off
    alike = np.abs(logs - typical) <= SIGNIFICANT * error
    common = float(np.log(np.average(pulls[usable][alike], weights=weight[alike])))  # a mean of logs would be biased
    if abs(common) <= SIGNIFICANT * weight[alike].sum() ** -0.5:
        common = 0.0
    scale[:] = np.exp(common)
    own = np.abs(logs - common) > SIGNIFICANT * error
    scale[np.flatnonzero(usable)[own]] = np.exp(logs[own])
    return scale


def solved(
    frames: IntArray, channels: NDArray[np.object_], evidence: Sequence[Columns], fluxes: Sequence[Columns],
    settings: Comparisons, images: Columns, given: Mapping[int, float] | None = None,
) -> tuple[Columns, tuple[str, ...]]:  # fmt: skip
    """The solution for frames of shape (n,) in order of frame, and sentences on each channel's flux scale.

    `evidence` and `fluxes` are those of `tasks.FrameEvidence`, batch by batch; `images` are the frames' columns width,
    height, pixel_scale and response; `given` are known fluxes of comparisons by position.
    """
    centres = losses.centres(images)
    known = {
        name: np.concatenate([part[name] for part in evidence])
        for name in ("frame", "pull", "n_controls", *IMAGE_COLUMNS)
    }
    rows = {name: np.concatenate([part[name] for part in fluxes]) for name in FLUX_COLUMNS}
    at = {int(frame): i for i, frame in enumerate(known["frame"])}
    parts, said = [], []
    for label in sorted(set(channels.tolist())):
        mine = frames[channels == label]
        index = np.array([at.get(int(frame), -1) for frame in mine])
        own = {name: np.append(values, np.nan)[index] for name, values in known.items()}  # NaN for a frame not there
        scale = error_scales(own["pull"], np.nan_to_num(own["n_controls"]).astype(np.int64))
        centre = {name: values[channels == label] for name, values in centres.items()}
        image = {name: own[name] for name in IMAGE_COLUMNS}
        (x, y, flux, flux_err), sources = _matrices(rows, mine)
        # Scatter beyond the errors is a fraction of the flux: what blank sky shows as well must not count as that.
        sigma = flux_err * scale[:, None]
        if (images["response"][channels == label] == PHOTOGRAPHIC).all():
            known_flux = np.array([(given or {}).get(int(source), np.nan) for source in sources])
            found = solve_responses(flux, sigma, known_flux, settings.fewest_for_curve)
            part = _of_plates(mine, label, found, faintest_seen(flux, sigma, found.brightness), scale, image)
            loss = losses.Loss(np.zeros(len(mine)))
            said += [*_said_of_errors(label, scale), *_said_of_plates(label, part, found, settings)]
        else:
            degrees = losses.distance(x, y, {name: values[:, None] for name, values in centre.items()})
            gains, loss = losses.fitted(flux, sigma, degrees, partial(solve_gains, fewest=settings.fewest))
            part = solution(mine, label, gains, scale, image, settings)
            part["extra_scatter"] = np.hypot(part["extra_scatter"], loss.scatter)
            said += [*_said(label, part, gains), *loss.said(label)]
        parts.append(part | losses.columns(loss, centre))
    joined = {name: np.concatenate([part[name] for part in parts]) for name in parts[0]}
    order = np.argsort(joined["frame"], kind="stable")
    return {name: values[order] for name, values in joined.items()}, tuple(said)


def _matrices(rows: Columns, frames: IntArray) -> tuple[FloatArray, IntArray]:
    """x, y, flux and error of the comparisons in some frames (ascending), shape (4, n_frames, n_sources), NaN for none, and

    which positions they are, shape (n_sources,).
    """
    mine = np.isin(rows["frame"], frames)
    sources, column = np.unique(rows["position"][mine], return_inverse=True)
    row = np.searchsorted(frames, rows["frame"][mine])
    found = np.full((4, len(frames), len(sources)), np.nan)
    for matrix, name in zip(found, FLUX_COLUMNS[2:], strict=True):
        matrix[row, column] = rows[name][mine]
    return found, sources


def _said(label: str, part: Columns, gains: Gains) -> list[str]:
    """What the last lines of a run say of a channel's flux scale."""
    n, tied = len(part["frame"]), int((part["verdict"] != "uncalibrated").sum())
    bad = int((part["verdict"] == "bad").sum())
    scales = _said_of_errors(label, part["error_scale"])
    held = float(part["held"][0])
    if held != 1.0:
        scales.append(
            f"{label}: {100 * held:.1f} % of a point source's light is counted; fluxes are corrected to all of it within "
            "the inner radius of the annulus"
        )
    if not tied:
        return [
            *scales,
            f"the flux scale of {label} is not tied to comparisons: fluxes are raw, and their errors are widened by "
            f"{100 * part['extra_scatter'][0]:.3g} % of the flux",
        ]
    said = (
        f"the flux scale of {label}: {tied} of {n} frames tied by up to {int(part['n_comparisons'].max())} comparisons"
    )
    said += (
        f", gains scatter by {100 * gains.spread:.1f} %, comparisons by {100 * gains.common_scatter:.1f} % more than"
    )
    said += " their errors"
    if tied < n:
        widened = float(part["extra_scatter"][part["verdict"] == "uncalibrated"][0])
        said += f"; the other {n - tied} keep raw fluxes, with errors widened by {100 * widened:.3g} % of the flux"
    return [*scales, said + (f"; {bad} frames scatter so much that they are not used" if bad else "")]


def _said_of_errors(label: str, scale: FloatArray) -> list[str]:
    scaled = scale[scale != 1.0]
    if len(scaled) == 0:
        return []
    return [
        f"errors of {label} were scaled to the scatter of blank sky in {len(scaled)} of {len(scale)} frames, by "
        f"{scaled.min():.2f} to {scaled.max():.2f}"
    ]


def _said_of_plates(label: str, part: Columns, found: Responses, settings: Comparisons) -> list[str]:
    """What the last lines of a run say of a photographic channel."""
    n, curved = len(part["frame"]), np.array([curve is not None for curve in found.curves])
    lines = []
    if curved.any():
        scale = "fluxes of the table of comparisons" if found.by_table[curved].all() else "the plates' median curve"
        if found.by_table.any() and not found.by_table[curved].all():
            scale = "fluxes of the table of comparisons where plates show enough of these, elsewhere the median curve"
        lines.append(
            f"the flux scale of {label}: {int(curved.sum())} of {n} plates have a response curve from up to "
            f"{int(found.n_comparisons.max())} comparisons, which scatter by "
            f"{100 * float(np.median(found.scatter[curved])):.1f} % more than their errors; it is that of {scale}"
        )
        bad = int((part["verdict"] == "bad").sum())
        lines += [f"{bad} plates of {label} scatter so much that they are not used"] if bad else []
    if not curved.all():
        lines.append(
            f"{int((~curved).sum())} of {n} plates of {label} have fewer than {settings.fewest_for_curve} comparisons that "
            "other plates or the table know: they tell only whether a source is seen, and no statistic uses them"
        )
    return lines


def _of_plates(
    frames: IntArray, channel: str, found: Responses, limit: FloatArray, scale: FloatArray, image: Columns
) -> Columns:
    """Rows of `schema.FRAME_SOLUTION` for photographic frames, shape (n,)."""
    curved = np.array([curve is not None for curve in found.curves], bool)
    with np.errstate(invalid="ignore"):
        bad = curved & (found.scatter > BAD_SCATTER)
    return {
        "frame": frames,
        "channel": np.full(len(frames), channel, object),
        "gain": np.where(curved, 1.0, np.nan),
        "gain_err": np.full(len(frames), np.nan),
        **image,
        "held": np.ones(len(frames)),  # what an aperture leaves out is in the curve
        "error_scale": scale,
        "extra_scatter": found.scatter,
        "n_comparisons": found.n_comparisons,
        "verdict": np.where(bad, "bad", np.where(curved, "good", "seen_only")).astype(object),
        "curve": np.array(["" if curve is None else curve.text for curve in found.curves], object),
        "seen_limit": limit,
    }


def solution(
    frames: IntArray, channel: str, gains: Gains, scale: FloatArray, image: Columns, settings: Comparisons
) -> Columns:
    """Rows of `schema.FRAME_SOLUTION` for a channel's frames, shape (n,).

    `image` are the columns IMAGE_COLUMNS, NaN where nothing was found; what is `held` is taken for the channel as a whole,
    since gains make up for its changes. A frame without enough comparisons keeps its raw scale,
    with the error widened by the scatter that the channel's gains may have (a few of them tell it badly), or by
    `uncalibrated_scatter` where that is not known.
    """
    tied = np.isfinite(gains.gain)
    held = _held(image["held"])
    unknown = gains.spread_limit if np.isfinite(gains.spread_limit) else settings.uncalibrated_scatter
    with np.errstate(invalid="ignore"):
        own = np.hypot(gains.frame_scatter, gains.gain_err / gains.gain)
        bad = tied & (gains.frame_scatter > BAD_SCATTER)
    verdict = np.where(bad, "bad", np.where(tied, "good", "uncalibrated")).astype(object)
    return {
        "frame": frames,
        "channel": np.full(len(frames), channel, object),
        "gain": held * np.where(tied, gains.gain, 1.0),
        "gain_err": held * gains.gain_err,
        **image,
        "held": np.full(len(frames), held),
        "error_scale": scale,
        "extra_scatter": np.where(tied, own, unknown),
        "n_comparisons": gains.n_comparisons,
        "verdict": verdict,
        "curve": np.full(len(frames), "", object),
        "seen_limit": np.full(len(frames), np.nan),
    }


def _held(told: FloatArray) -> float:
    """What part of a point's light is counted in a channel whose frames tell it, shape (n,) with NaN: 1 if that may be all."""
    told = told[np.isfinite(told)]
    if len(told) < FEWEST_HELD:
        return 1.0
    held = float(np.median(told))
    error = MEDIAN_ERROR * MAD_TO_SIGMA * float(np.median(np.abs(told - held))) / len(told) ** 0.5
    return held if abs(held - 1.0) > max(SIGNIFICANT * error, LEAST_LIGHT) else 1.0


def calibrated(rows: Columns, solution: Columns) -> tuple[FloatArray, FloatArray, NDArray[np.bool_]]:
    """Calibrated flux and error, and whether the frame is bad, for raw rows of shape (n,).

    flux / gain and hypot(flux_err * error_scale, extra_scatter * flux) / gain, where what sources lose is given back to
    flux and error first (`losses.undone`); by the response curve where there is one. NaN where the frame tells only whether
    a source is seen. `solution` is sorted by frame.
    """
    at = np.asarray(np.searchsorted(solution["frame"], rows["frame"]))
    own = {name: solution[name][at] for name in losses.COLUMNS}
    flux, sigma = losses.undone(rows, rows["flux_err"] * solution["error_scale"][at], own)
    gain, error = solution["gain"][at], np.hypot(sigma, solution["extra_scatter"][at] * flux)
    flux, error = _by_curves(flux, error, at, solution["curve"])
    return flux / gain, error / gain, np.asarray(solution["verdict"][at] == "bad")


def flags(rows: Columns, solution: Columns) -> IntArray:
    """The flags of raw rows of shape (n,), with the bit that only the solution can tell."""
    at = np.asarray(np.searchsorted(solution["frame"], rows["frame"]))
    mine, row = np.unique(at, return_inverse=True)
    highest = np.array([curve_from(text).measured[-1] if text else np.inf for text in solution["curve"][mine]])
    with np.errstate(invalid="ignore"):
        beyond = rows["flux"] > highest[row]
    return np.asarray(rows["flags"] | np.where(beyond, int(Flag.EXTRAPOLATED), 0))


def _by_curves(
    flux: FloatArray, error: FloatArray, at: IntArray, curves: NDArray[np.object_]
) -> tuple[FloatArray, FloatArray]:
    """Fluxes and errors after the response curves, of which `at` tells the row of each."""
    curved = np.flatnonzero((curves != "")[at])
    if len(curved) == 0:
        return flux, error
    flux, error = flux.copy(), error.copy()
    curved = curved[np.argsort(at[curved], kind="stable")]
    for mine in np.split(curved, np.flatnonzero(np.diff(at[curved])) + 1):
        flux[mine], error[mine] = curve_from(curves[at[mine[0]]]).applied(flux[mine], error[mine])
    return flux, error
