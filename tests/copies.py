"""Archives with copies planted among frames that only look like copies, for tests and studies of duplicates.

A scene is a set of innocent frames; a plant writes a second version of a frame that is there.
"""

from __future__ import annotations

import gzip
import shutil
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass, replace
from pathlib import Path

import numpy as np
from astropy.io import fits
from scipy import ndimage

import skies
from hindlight import archive, duplicates, host, likeness, plan, tasks
from hindlight.channels import assign
from hindlight.order import Order, frame_label
from hindlight.schema import FRAMES
from hindlight.settings import Settings

SECOND = 1.0 / 86400.0
CAMERA = skies.Sky(instrument="east camera", size=48, unit="adu", rms=20.0)
ARRAY = skies.Sky(size=48)


def pixels(sky: skies.Sky, rng: np.random.Generator, level: float = 0.0) -> np.ndarray:
    """Noise, three sources that are the same in every frame of the field, and a level."""
    image = sky.rms * skies.noise_image(sky, rng) + level
    y, x = np.mgrid[: sky.size, : sky.size]
    for px, py, snr in ((0.3, 0.4, 50.0), (0.7, 0.2, 12.0), (0.55, 0.8, 8.0)):
        square = (x - px * sky.size) ** 2 + (y - py * sky.size) ** 2
        image += snr * sky.rms * np.exp(-4 * np.log(2) * square / sky.fwhm_pixels**2)
    return image


def write(path: Path, sky: skies.Sky, day: float, data: np.ndarray, **cards: object) -> Path:
    """One frame that begins at `day` (MJD); a card of None leaves one out, `__` in a name stands for `-`."""
    head = skies.header(sky, day, (0.0, 0.0))
    for key, value in cards.items():
        name = key.replace("__", "-")
        if value is None:
            head.remove(name, ignore_missing=True)
        else:
            head[name] = value
    path.parent.mkdir(parents=True, exist_ok=True)
    fits.PrimaryHDU(data.astype(np.float32), head).writeto(path)
    return path


def found(*folders: Path) -> tuple[dict[str, str], dict[str, str], dict[str, np.ndarray]]:
    """What the code finds in archives: copies with the frame kept, frames with their deep image, and the frame table."""
    settings, plugins = Settings(), host.load(host.PluginSpec())
    walked = archive.walk([str(folder) for folder in folders], plugins.dialects, settings)
    assert not walked.rejects
    labels = assign(walked.frames, plan.empty(FRAMES), settings.channels)
    frames = plan.merge_frames(plan.empty(FRAMES), {**walked.frames, "channel": labels}, walked.present)
    pairs = duplicates.candidates(frames)
    same = np.zeros(len(pairs), bool)
    order = Order("", settings, host.PluginSpec())
    for piece in duplicates.jobs(pairs):
        answers = likeness.compare(*tasks.comparison(order, frames, pairs, piece))
        same[piece] = [bool(answer.word) for answer in answers]
    frames["duplicate_of"] = duplicates.settled(frames, pairs.first[same], pairs.second[same])
    frames["related_to"] = duplicates.related(frames)
    frames = plan.batched(frames, 32)
    names = [frame_label(frames, row).removesuffix("[0,0]") for row in range(len(frames["id"]))]
    copies, parts = (
        {names[row]: names[frames[column][row]] for row in np.flatnonzero(frames[column] >= 0)}
        for column in ("duplicate_of", "related_to")
    )
    return copies, parts, frames


# --- second versions of a frame


def _read(path: Path) -> tuple[np.ndarray, fits.Header]:
    with fits.open(path) as hdus:
        return hdus[0].data.astype(float), hdus[0].header.copy()


def _same(path: Path, other: Path, _rng: np.random.Generator) -> Path:
    return Path(shutil.copy(path, other))


def _gzip(path: Path, other: Path, _rng: np.random.Generator) -> Path:
    packed = other.with_name(other.name + ".gz")
    packed.write_bytes(gzip.compress(path.read_bytes()))
    return packed


def _tiles(path: Path, other: Path, level: float, kind: str) -> Path:
    data, head = _read(path)
    packed = other.with_name(other.name + ".fz")
    hdu = fits.CompImageHDU(data.astype(np.float32), head, compression_type=kind, quantize_level=level)
    fits.HDUList([fits.PrimaryHDU(), hdu]).writeto(packed)
    return packed


def _lossless(path: Path, other: Path, _rng: np.random.Generator) -> Path:
    return _tiles(path, other, 0.0, "GZIP_2")


def _lossy(path: Path, other: Path, _rng: np.random.Generator) -> Path:
    return _tiles(path, other, 4.0, "RICE_1")


def _scaled(path: Path, other: Path, _rng: np.random.Generator) -> Path:
    data, head = _read(path)
    step = float(np.ptp(data)) / 60000
    hdu = fits.PrimaryHDU(np.rint((data - data.mean()) / step).astype(np.int16), head)
    hdu.header["BSCALE"], hdu.header["BZERO"] = step, float(data.mean())
    hdu.writeto(other)
    return other


def _edited(path: Path, other: Path, _rng: np.random.Generator) -> Path:
    data, head = _read(path)
    head["OBJECT"], head["INSTRUME"], head["DATE"] = "another name", "renamed camera", "2020-02-02T02:02:02"
    fits.PrimaryHDU(data.astype(np.float32), head).writeto(other)
    return other


def _cropped(path: Path, other: Path, _rng: np.random.Generator) -> Path:
    data, head = _read(path)
    cut = len(data) // 3
    head["CRPIX1"] -= cut
    fits.PrimaryHDU(data[:-cut, cut:].astype(np.float32), head).writeto(other)
    return other


def _again(path: Path, other: Path, rng: np.random.Generator) -> Path:
    """The same data reduced again: other scale and level, some more noise."""
    data, head = _read(path)
    sky = replace(CAMERA, size=len(data))
    more = 0.3 * 1.48 * np.median(np.abs(data - np.median(data))) * skies.noise_image(sky, rng)
    fits.PrimaryHDU((1.07 * (data + more) + 5).astype(np.float32), head).writeto(other)
    return other


def _regridded(path: Path, other: Path, _rng: np.random.Generator) -> Path:
    data, head = _read(path)
    shift = 0.37
    head["CRPIX1"] += shift
    fits.PrimaryHDU(ndimage.shift(data, (0, shift), mode="nearest").astype(np.float32), head).writeto(other)
    return other


def _extension(path: Path, other: Path, _rng: np.random.Generator) -> Path:
    """A second HDU of the same file."""
    data, head = _read(path)
    fits.append(path, data.astype(np.float32), head)
    return path


PLANTS: dict[str, Callable[[Path, Path, np.random.Generator], Path]] = {
    "same": _same, "gzip": _gzip, "lossless": _lossless, "lossy": _lossy, "scaled": _scaled, "edited": _edited,
    "cropped": _cropped, "again": _again, "regridded": _regridded, "extension": _extension,
}  # fmt: skip
NEED_A_CLOCK = ("again", "regridded")  # where pixels are not equal


# --- frames that are not copies of each other, however alike


@dataclass(frozen=True)
class Scene:
    """Where a scene is written, when, and with which random numbers."""

    folder: Path
    name: str
    day: float
    rng: np.random.Generator
    size: int

    def frame(self, sky: skies.Sky, label: str, after_s: float = 0.0, **cards: object) -> Path:
        """One frame of new noise, some seconds after the scene's beginning."""
        sky = replace(sky, size=self.size)
        data = pixels(sky, self.rng, 100.0 if sky.unit == "adu" else 0.0)
        return write(self.folder / f"{self.name}{label}.fits", sky, self.day + after_s * SECOND, data, **cards)


def _nights(scene: Scene) -> list[Path]:
    return [scene.frame(CAMERA, f"_night{k}", 86400.0 * k) for k in range(3)]


def _consecutive(scene: Scene) -> list[Path]:
    return [scene.frame(CAMERA, f"_after{k}", 121.0 * k) for k in range(5)]


def _bands(scene: Scene) -> list[Path]:
    return [scene.frame(CAMERA, f"_{band}", FILTER=band) for band in "VRI"]


def _frequencies(scene: Scene) -> list[Path]:
    return [scene.frame(ARRAY, f"_band{k}", FREQ=1.4e9 * (1 + 0.005 * k)) for k in range(3)]


def _stokes(scene: Scene) -> list[Path]:
    return [scene.frame(replace(ARRAY, stokes=stokes), f"_{stokes}") for stokes in "IQUV"]


def _mosaic(scene: Scene) -> list[Path]:
    step = 0.3 * scene.size * ARRAY.pixel_arcsec / 3600
    return [scene.frame(replace(ARRAY, dec=ARRAY.dec + k * step), f"_pointing{k}") for k in range(4)]


def _twins(scene: Scene) -> list[Path]:
    """Two cameras of one name side by side: same instant, independent noise."""
    return [scene.frame(CAMERA, f"_twin{k}") for k in range(2)]


def _undated(scene: Scene) -> list[Path]:
    day = fits.Card("DATE-OBS", f"{1990 + int(scene.day) % 9}-01-{1 + int(scene.day) % 28:02d}").value
    return [scene.frame(CAMERA, f"_noclock{k}", DATE__OBS=day) for k in range(3)]


def _blank(scene: Scene) -> list[Path]:
    sky = replace(CAMERA, size=scene.size)
    shape = (scene.size, scene.size)
    spots = np.zeros(shape)
    spots[scene.rng.integers(0, scene.size, 9), scene.rng.integers(0, scene.size, 9)] = 65535.0
    images = {"zeros": np.zeros(shape), "zeros2": np.zeros(shape), "seven": np.full(shape, 7.0), "spots": spots}
    return [write(scene.folder / f"{scene.name}_{k}.fits", sky, scene.day, v) for k, v in images.items()]


def _deep(scene: Scene) -> list[Path]:
    """Snapshots and the deep image made of them."""
    parts = [scene.frame(ARRAY, f"_snap{k}", 130.0 * k) for k in range(3)]
    mean = np.mean([_read(path)[0] for path in parts], axis=0)
    sky = replace(ARRAY, size=scene.size, exposure_s=360.0)
    end = skies.Time(scene.day + 380 * SECOND, format="mjd", scale="utc").isot
    return [*parts, write(scene.folder / f"{scene.name}_deep.fits", sky, scene.day, mean, DATE__END=end)]


SCENES: dict[str, Callable[[Scene], list[Path]]] = {
    "nights": _nights, "consecutive": _consecutive, "bands": _bands, "frequencies": _frequencies, "stokes": _stokes,
    "mosaic": _mosaic, "twins": _twins, "undated": _undated, "blank": _blank, "deep": _deep,
}  # fmt: skip


@dataclass(frozen=True)
class Population:
    """An archive of innocent frames and plants: each frame's name with the name of the exposure it is of."""

    exposure: dict[str, str]
    plants: dict[str, str]
    n_deep_parts: int

    def missed(self, copies: dict[str, str]) -> list[str]:
        """Plants that were not found: neither they nor what they are copies of gave way to the other."""
        families = {self.exposure[name] for name, kept in copies.items() if self.exposure[kept] == self.exposure[name]}
        return [f"{kind}: {name}" for name, kind in self.plants.items() if self.exposure[name] not in families]

    def false(self, copies: dict[str, str]) -> list[str]:
        """Frames that gave way to another exposure."""
        return [f"{name}: {kept}" for name, kept in copies.items() if self.exposure[kept] != self.exposure[name]]


def populate(folder: Path, n_frames: int, n_plants: int, seed: int, size: int = 24) -> Population:
    """Write about `n_frames` innocent frames, scene by scene, and copies of some of them, of each kind in turn."""
    rng = np.random.default_rng(seed)
    written = list(_scenes(folder, n_frames, rng, size))
    paths = [path for _, paths in written for path in paths]
    exposure = {str(path.relative_to(folder)): str(path.relative_to(folder)) for path in paths}
    fit = [path for kind, paths in written if kind != "blank" for path in paths]
    plants: dict[str, str] = {}
    chosen = rng.choice(len(fit), n_plants, replace=False)
    for number, index in enumerate(chosen.tolist()):
        path = fit[index]
        kind = list(PLANTS)[number % len(PLANTS)]
        if kind in NEED_A_CLOCK and "noclock" in path.name:
            kind = "same"
        copy = PLANTS[kind](path, folder / "copies" / f"{kind}_{number}.fits", rng)
        name = str(copy.relative_to(folder)) + {"lossless": "[1,0]", "lossy": "[1,0]", "extension": "[1,0]"}.get(
            kind, ""
        )
        exposure[name], plants[name] = str(path.relative_to(folder)), kind
    return Population(exposure, plants, 3 * sum(kind == "deep" for kind, _ in written))


def _scenes(folder: Path, n_frames: int, rng: np.random.Generator, size: int) -> Iterator[tuple[str, Sequence[Path]]]:
    (folder / "copies").mkdir(parents=True)
    n, number = 0, 0
    while n < n_frames:
        kind = list(SCENES)[number % len(SCENES)]
        scene = Scene(folder / f"{number // 100:03d}", f"{number:05d}", 45000.0 + 4.0 * number + 0.3, rng, size)
        paths = SCENES[kind](scene)
        yield kind, paths
        n, number = n + len(paths), number + 1
