"""Simulated fields for the consistency checks: frames in memory with sources, defects, ghosts and lobes, and a target.

Fluxes are in sigma of a frame of ordinary depth. Radio frames have noise correlated as the beam and are read at the
peak; those of a camera have white noise and are read with the point-spread function.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass, field

import numpy as np
from scipy import ndimage

from hindlight import Block, Candidate, Channel, Cutout, Images, LightCurve
from test_checks import make_block

RADIO = Channel("radio", unit="Jy/beam", frequency_hz=1.4e9)
CAMERA = Channel("camera", unit="adu")
SIDE = 140
FWHM = 3.0
SCALE = 2.0  # arcsec per pixel
HOUR = 3600.0
EXPOSURE = 120.0
BRIGHT = 5.0  # sigma above the quiet level
FIRST_FRAME = 100
GAUSS = 4 * math.log(2) / FWHM**2


@dataclass(eq=False)
class Field(Images):
    """Frames that point at `pointing` (n, 2): the target lies that far from the middle of the image, in pixels.

    `things` are (x, y, flux) per frame, shape (3, n), in pixels; `lobes` are added to frames as whole images.
    """

    seed: int
    times: np.ndarray
    pointing: np.ndarray
    radio: bool = True
    heavy: bool = False
    target: tuple[float, float] = (0.0, 0.0)  # of the sky position from the pointing centre, pixels
    things: list[np.ndarray] = field(default_factory=list)
    controls_raised: np.ndarray | None = None

    def __post_init__(self) -> None:
        self.rng = np.random.default_rng(self.seed)
        self.n = len(self.times)
        self.depth = np.exp(0.15 * self.rng.normal(size=self.n))
        self.images: dict[int, np.ndarray] = {}
        self.x = (SIDE - 1) / 2 + self.pointing[:, 0] + self.target[0]
        self.y = (SIDE - 1) / 2 + self.pointing[:, 1] + self.target[1]

    def source(self, east: float, north: float, flux: np.ndarray | float) -> None:
        """A source of the sky, by its distance from the target in pixels of the first image axes."""
        self.things.append(np.stack((self.x + east, self.y + north, flux * np.ones(self.n))))

    def fixed(self, x: np.ndarray | float, y: np.ndarray | float, flux: np.ndarray | float) -> None:
        """Something by its pixels."""
        self.things.append(np.stack([value * np.ones(self.n) for value in (x, y, flux)]))

    def image(self, k: int) -> np.ndarray:
        """Pixels of frame number k, made once."""
        if k not in self.images:
            rng = np.random.default_rng((self.seed, k))
            shape = (SIDE, SIDE)
            noise = rng.standard_t(4, shape) / 2**0.5 if self.heavy else rng.standard_normal(shape)
            unit = 1.0
            if self.radio:
                sigma = FWHM / 2.354820045 / 2**0.5
                noise = ndimage.gaussian_filter(noise, sigma, mode="wrap") * 2 * math.pi**0.5 * sigma
            else:
                unit = 1 / optimal()
            image = self.depth[k] * noise
            for x, y, flux in (thing[:, k] for thing in self.things):
                add(image, x, y, unit * flux)
            self.images[k] = image
        return self.images[k]

    def at(self, k: int, x: float, y: float) -> float:
        """Flux in frame number k at a pixel, NaN near the edge."""
        half = math.ceil(2 * FWHM)
        if not (half <= x < SIDE - half - 1 and half <= y < SIDE - half - 1):
            return math.nan
        ix, iy = round(x), round(y)
        stamp = self.image(k)[iy - half : iy + half + 1, ix - half : ix + half + 1]
        off = np.arange(-half, half + 1)
        if self.radio:
            return float(ndimage.map_coordinates(stamp, [[y - iy + half], [x - ix + half]], order=3)[0])
        shape = np.exp(-GAUSS * (off - (x - ix)) ** 2) * np.exp(-GAUSS * (off - (y - iy)) ** 2)[:, None]
        return float((stamp * shape).sum() / (shape**2).sum() * optimal())

    def size(self, frames):
        """All alike."""
        return np.full(len(frames), float(SIDE)), np.full(len(frames), float(SIDE))

    def sidereal(self, frames):
        """At longitude zero, from an arbitrary zero."""
        return self.times[np.asarray(frames) - FIRST_FRAME] / 86164.0905 * 360.0 % 360.0

    def measure(self, frames, x, y):
        """Flux and the frame's depth."""
        rows = np.asarray(frames, int) - FIRST_FRAME
        flux = np.array([self.at(k, a, b) for k, a, b in zip(rows, x, y, strict=True)]).reshape(len(rows))
        return flux, np.where(np.isfinite(flux), self.depth[rows], np.nan)

    def carried(self, frames, x, y, others):
        """Images only shift."""
        one, two = np.asarray(frames, int) - FIRST_FRAME, np.asarray(others, int) - FIRST_FRAME
        return x + self.x[two] - self.x[one], y + self.y[two] - self.y[one]

    def sources(self, frame, snr):
        """Local maxima over the noise of a pixel."""
        image = self.image(frame - FIRST_FRAME) / self.depth[frame - FIRST_FRAME]
        y, x = np.nonzero((image == ndimage.maximum_filter(image, 3)) & (image > snr))
        return x.astype(float), y.astype(float), image[y, x]

    def cutouts(self, frames, half_width: float) -> Sequence[Cutout]:
        """Pixels around the target."""
        made = []
        half = math.ceil(half_width * FWHM)
        for frame in frames:
            k = int(frame) - FIRST_FRAME
            ix, iy = round(self.x[k]), round(self.y[k])
            whole = np.pad(self.image(k), half, constant_values=np.nan)
            pixels = whole[iy : iy + 2 * half + 1, ix : ix + 2 * half + 1]
            x, y = self.x[k] - ix + half, self.y[k] - iy + half
            label = RADIO.label if self.radio else CAMERA.label
            made.append(
                Cutout(int(frame), label, pixels, x, y, np.diag([-SCALE, SCALE]), FWHM, 0.0, float(self.depth[k]))
            )
        return made

    def controls(self, label: str, frames) -> Block:
        """Sixty blank positions."""
        rng = np.random.default_rng((self.seed, 7))
        z = rng.standard_t(4, (60, self.n)) / 2**0.5 if self.heavy else rng.normal(size=(60, self.n))
        if self.controls_raised is not None:
            z = z + self.controls_raised
        return make_block(z[:, np.asarray(frames) - FIRST_FRAME], np.asarray(frames))

    def candidate(self) -> Candidate:
        """The target as a check is given it."""
        frames = FIRST_FRAME + np.arange(self.n)
        flux, error = self.measure(frames, self.x, self.y)
        curve = LightCurve.from_arrays(
            self.times,
            flux,
            error,
            exposure_s=np.full(self.n, EXPOSURE),
            channel=RADIO if self.radio else CAMERA,
            frame=frames,
        )
        rows = curve.frame - FIRST_FRAME
        bright = curve.above_quiet > BRIGHT
        return Candidate(
            "target", 10.0, 20.0, (curve,), (bright,), (self.x[rows],), (self.y[rows],), None, self.controls,
            self.cutouts, fwhm=(np.full(len(curve), FWHM),), images=self,
        )  # fmt: skip


def optimal() -> float:
    """Square root of the sum of squares of the point-spread function."""
    return math.sqrt(math.pi / (2 * GAUSS))


def add(image: np.ndarray, x: float, y: float, peak: float) -> None:
    """Add a round Gaussian at 0-based (x, y)."""
    if peak == 0.0 or not (-9 < x < SIDE + 9 and -9 < y < SIDE + 9):
        return
    reach = 12
    left, top = max(0, int(x) - reach), max(0, int(y) - reach)
    patch = image[top : max(0, int(y) + reach + 1), left : max(0, int(x) + reach + 1)]
    across = np.exp(-GAUSS * (np.arange(patch.shape[1]) + left - x) ** 2)
    down = np.exp(-GAUSS * (np.arange(patch.shape[0]) + top - y) ** 2)
    patch += peak * down[:, None] * across


def nights(rng: np.random.Generator, n_nights: int, each: int) -> np.ndarray:
    """Times in seconds: so many nights over ten years with frames half an hour apart."""
    starts = np.sort(rng.choice(3650, n_nights, replace=False)) * 86400.0 + rng.uniform(0, 5 * HOUR, n_nights)
    return (starts[:, None] + 0.5 * HOUR * np.arange(each)).ravel()


def blank_field(seed: int, *, dithered: bool = True, radio: bool | None = None, heavy: bool = False) -> Field:
    """A field of steady sources and one variable, without anything at the target, in three or one pointings."""
    rng = np.random.default_rng((seed, 1))
    times = nights(rng, 12, 4)
    n = len(times)
    steps = np.array([(0.0, 0.0), (15.0, 4.0), (-9.0, 13.0)])
    pointing = 0.5 * rng.normal(size=(n, 2)) + (steps[rng.integers(0, 3, n)] if dithered else 0.0)
    made = Field(
        seed, times, pointing, bool(rng.integers(2)) if radio is None else radio, heavy, tuple(rng.uniform(-18, 18, 2))
    )
    for _ in range(12):
        place = rng.uniform(-60, 60, 2)
        if math.hypot(*place) > 3 * FWHM:
            made.source(*place, 10 ** rng.uniform(0.7, 2.3))
    place = rng.uniform(-50, 50, 2)
    made.source(*(place if math.hypot(*place) > 4 * FWHM else (30.0, 30.0)), np.where(rng.random(n) < 0.2, 20.0, 0.0))
    return made


def clean(seed: int) -> Field:
    """A true variable: lone, many or pulsed flares or slow changes; in any noise, pointing and neighbourhood."""
    rng = np.random.default_rng((seed, 2))
    made = blank_field(seed, dithered=rng.random() < 0.7, heavy=rng.random() < 0.3)
    n, height = made.n, rng.uniform(7, 30)
    kind = rng.integers(4)
    if kind == 0:
        flux = np.where(np.arange(n) == rng.integers(n), height, 0.0)
    elif kind == 1:
        flux = np.where(rng.random(n) < rng.uniform(0.05, 0.3), height * rng.uniform(0.5, 1.5, n), 0.0)
    elif kind == 2:
        phase = made.times / (rng.uniform(0.02, 40) * 86400.0)
        flux = 10.0 + height * 0.5 * (1 + np.sin(2 * np.pi * phase))
    else:
        flux = np.where(made.times // (rng.uniform(50, 900) * 86400.0) % 4 == 1, height, 0.0)
    made.source(0.0, 0.0, flux)
    if rng.random() < 0.3:  # a steady neighbour
        angle, away = rng.uniform(0, 2 * np.pi), FWHM * rng.uniform(1.2, 3)
        made.source(away * math.cos(angle), away * math.sin(angle), 10 ** rng.uniform(0.7, 2.0))
    return made


def defect(seed: int) -> Field:
    """A warm pixel, on for some years, where the target falls in one of three pointings."""
    rng = np.random.default_rng((seed, 3))
    made = blank_field(seed, radio=False)
    on = np.abs(made.times - rng.choice(made.times)) < 800 * 86400.0
    made.fixed(SIDE / 2 + made.target[0], SIDE / 2 + made.target[1], np.where(on, rng.uniform(9, 20), 0.0))
    return made


def ghost(seed: int) -> Field:
    """The reflection of a bright star about a point near the middle, over the target in one of three pointings."""
    rng = np.random.default_rng((seed, 4))
    made = blank_field(seed, radio=False)
    middle = (SIDE - 1) / 2 + rng.uniform(-2, 2, 2)
    star = 2 * (middle - (SIDE - 1) / 2 - np.array(made.target))  # from the target, where that is the ghost's place
    flux = rng.uniform(400, 900)
    if math.hypot(*star) < 4 * FWHM:
        return ghost(seed + 100_000)
    made.source(*star, flux)
    made.fixed(2 * middle[0] - made.x - star[0], 2 * middle[1] - made.y - star[1], rng.uniform(10, 20))
    return made


def moving(seed: int) -> Field:
    """A body that crosses the target in one frame and moves by one and a half to six beams between frames."""
    rng = np.random.default_rng((seed, 5))
    made = blank_field(seed)
    at, angle = int(rng.integers(made.n)), rng.uniform(0, 2 * np.pi)
    lag = (made.times - made.times[at]) / (0.5 * HOUR)
    step = FWHM * rng.uniform(1.5, 6)
    far = np.clip(step * lag, -1e3, 1e3)
    x, y = made.x + far * math.cos(angle), made.y + far * math.sin(angle)
    made.fixed(x, y, rng.uniform(9, 20))
    return made


def frame_wide(seed: int) -> Field:
    """A frame in which everything brightens."""
    rng = np.random.default_rng((seed, 6))
    made = blank_field(seed, heavy=bool(rng.integers(2)))
    in_one = np.arange(made.n) == rng.integers(made.n)
    made.source(0.0, 0.0, np.where(in_one, 9.0, 0.0))
    made.controls_raised = np.where(in_one, 5.0, 0.0)
    return made


def sidelobe(seed: int) -> Field:
    """A pair of sidelobes of the brightest source, which sweeps over the target in some frames."""
    rng = np.random.default_rng((seed, 8))
    made = blank_field(seed, radio=True)
    offset = rng.uniform(8, 22) * np.array([math.cos(a := rng.uniform(0, 2 * np.pi)), math.sin(a)])
    made.source(*offset, rng.uniform(300, 600))
    on = rng.random(made.n) < 0.15
    on[rng.integers(made.n)] = True
    height = rng.uniform(9, 20) * np.where(on, 1.0, 0.0)
    sign = rng.choice([-1.0, 1.0])
    made.source(0.0, 0.0, height)
    made.source(*(2 * offset), sign * height)
    return made


def neighbour(seed: int) -> Field:
    """A variable source a beam away, of which the target shows the wing."""
    rng = np.random.default_rng((seed, 9))
    made = blank_field(seed)
    angle, away = rng.uniform(0, 2 * np.pi), FWHM * rng.uniform(0.8, 1.3)
    wing = math.exp(-GAUSS * away**2)
    flux = 30.0 + np.where(rng.random(made.n) < 0.2, rng.uniform(9, 20) / wing, 0.0)
    if flux.max() == 30.0:
        return neighbour(seed + 100_000)
    made.source(away * math.cos(angle), away * math.sin(angle), flux)
    return made


def wave(rng: np.random.Generator, times: np.ndarray) -> np.ndarray:
    """A sinusoid of amplitude one and a period of half a day to six years."""
    period = 86400.0 * 10 ** rng.uniform(-0.3, 3.3)
    return np.sin(2 * np.pi * times / period + rng.uniform(0, 2 * np.pi))


def smooth(seed: int) -> Field:
    """A true variable that is never dark: 5 to 25 sigma of a sinusoid on a steady mean, with or without a steady neighbour."""
    rng = np.random.default_rng((seed, 11))
    made = blank_field(seed, dithered=rng.random() < 0.7, heavy=rng.random() < 0.3)
    height = rng.uniform(5, 25)
    made.source(0.0, 0.0, height + rng.uniform(0, 30) + height * wave(rng, made.times))
    if rng.random() < 0.5:
        angle, away = rng.uniform(0, 2 * np.pi), FWHM * rng.uniform(0.5, 3)
        made.source(away * math.cos(angle), away * math.sin(angle), 10 ** rng.uniform(0.7, 2.0))
    return made


def smooth_neighbour(seed: int) -> Field:
    """A source 0.4 to 1.5 beams away that varies smoothly: by 5 to 25 sigma at the target, about a mean."""
    rng = np.random.default_rng((seed, 12))
    made = blank_field(seed)
    angle, away = rng.uniform(0, 2 * np.pi), FWHM * rng.uniform(0.4, 1.5)
    height, wing = rng.uniform(5, 25), math.exp(-GAUSS * away**2)
    flux = (height + rng.uniform(0, 10) + height * wave(rng, made.times)) / wing
    made.source(away * math.cos(angle), away * math.sin(angle), flux)
    return made


def wandering(seed: int) -> Field:
    """A steady source 0.4 to 1 beams away in frames that are off their headers by a tenth of a beam on each axis."""
    rng = np.random.default_rng((seed, 13))
    made = blank_field(seed)
    angle, away = rng.uniform(0, 2 * np.pi), FWHM * rng.uniform(0.4, 1.0)
    off = 0.1 * FWHM * rng.normal(size=(2, made.n))
    flux = 10 ** rng.uniform(1.5, 2.3) / math.exp(-GAUSS * away**2)
    made.fixed(made.x + away * math.cos(angle) + off[0], made.y + away * math.sin(angle) + off[1], flux)
    return made


def short_pulse(seed: int) -> Field:
    """A 30 s pulse in a synthesised image of 2 min: a quarter of the coverage of the beam that is taken off.

    What CLEAN leaves of it are rings of the difference of both beams, up to 15 % of the pulse.
    """
    rng = np.random.default_rng((seed, 10))
    made = blank_field(seed, radio=True)
    at = int(rng.integers(made.n))
    height = rng.uniform(9, 25)
    made.source(0.0, 0.0, np.where(np.arange(made.n) == at, height, 0.0))
    y, x = np.indices((SIDE, SIDE), dtype=float)
    x, y = x - made.x[at], y - made.y[at]
    rings = np.zeros_like(x)
    for _ in range(20):
        angle, wave = rng.uniform(0, np.pi), FWHM * rng.uniform(1.2, 4)
        rings += np.cos(2 * np.pi * (x * math.cos(angle) + y * math.sin(angle)) / wave)
    made.images[at] = made.image(at) + 0.15 * height * (rings / 20) * np.exp(-np.hypot(x, y) / (8 * FWHM))
    return made


PLANTED: dict[str, tuple[Callable[[int], Field], str]] = {
    "detector defect": (defect, "detector_fixed"),
    "ghost": (ghost, "ghost"),
    "moving object": (moving, "moving"),
    "frame-wide flare": (frame_wide, "frame_wide"),
    "sidelobe": (sidelobe, "sidelobe"),
    "variable neighbour": (neighbour, "neighbour"),
}
# Varies smoothly, and is bright in few single frames or in none.
SMOOTH: dict[str, tuple[Callable[[int], Field], str]] = {
    "smooth neighbour": (smooth_neighbour, "position"),
    "wandering source": (wandering, "position"),
}
