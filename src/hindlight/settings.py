"""Settings: TOML in, one frozen `Settings` out, and the same back as commented TOML.

A setting is declared once, as a field made by `setting()`, with its default, meaning, unit and bounds; plugins declare
theirs with the same function. Unknown names are refused with the nearest valid one. Nothing here reads an archive.
"""

from __future__ import annotations

import dataclasses
import inspect
import math
import tomllib
from collections.abc import Mapping
from dataclasses import dataclass, field, fields
from pathlib import Path
from typing import Any

import tomli_w

from hindlight.blocks import SITE_FORMS, FrameBlock, Vector, read_blocks, read_place, render_blocks
from hindlight.errors import UsageError, nearest


def setting(
    default: Any,
    doc: str,
    *,
    unit: str = "",
    minimum: float | None = None,
    maximum: float | None = None,
    choices: tuple[Any, ...] | None = None,
) -> Any:
    """A dataclass field that is a setting: its default, one sentence of meaning, unit, bounds or choices."""
    metadata = {"doc": doc, "unit": unit, "minimum": minimum, "maximum": maximum, "choices": choices}
    if isinstance(default, dict | list):
        return field(default_factory=lambda: type(default)(default), metadata=metadata)
    return field(default=default, metadata=metadata)


@dataclass(frozen=True)
class Inventory:
    """Finding frames."""

    unpacked_limit_mb: int = setting(4096, "largest size a compressed file may unpack to", unit="MB", minimum=1)
    dialect: str = setting("auto", "name of the header dialect that reads every header; auto asks each whether it can")
    bmaj_in_arcsec: bool = setting(
        False, "whether BMAJ and BMIN that are too wide in degrees but not in arcsec are read as arcsec"
    )
    planes_limit: int = setting(100_000, "a cube of more planes than this is set aside", minimum=1)
    verify_checksums: bool = setting(
        False, "whether CHECKSUM and DATASUM are verified where a header has them, which reads whole files"
    )


@dataclass(frozen=True)
class Channels:
    """What counts as the same channel."""

    frequency_tolerance: float = setting(
        0.02, "frames of one instrument share a channel when their frequencies span at most this fraction", minimum=0
    )
    beam_tolerance: float = setting(
        1.5, "and their beams (or seeing) span at most this factor: the resolution class", minimum=1
    )


@dataclass(frozen=True)
class Photometry:
    """Forced photometry."""

    estimator: str = setting("auto", "name of the estimator for every frame; auto chooses by the frame's unit")
    annulus_inner: float = setting(3.0, "inner radius of the background annulus", unit="FWHM", minimum=1)
    annulus_outer: float = setting(
        9.1, "outer radius; with the default inner radius it holds 200 independent beams", unit="FWHM", minimum=2
    )
    annulus_pixels: int = setting(
        4000,
        "where the annulus holds more pixels than this, every second, third... row and column is used",
        minimum=200,
    )
    assumed_fwhm_pixels: float = setting(
        3.0, "width of the beam or seeing where the header gives none", unit="pixel", minimum=1, maximum=50
    )
    primary_beam_floor: float = setting(
        0.15, "positions where the primary beam's gain is below this are not used", minimum=0, maximum=1
    )
    fwhm_arcsec: dict[str, float] = setting({}, "instrument = width: used where the header gives none", unit="arcsec")


@dataclass(frozen=True)
class Companions:
    """Files that belong to an image, by the names they have beside it: patterns with {name} for the image's file name,

    {stem} for the same without its ending; relative to the image's folder. Empty for none.
    """

    weight: str = setting("", "weights (inverse variances up to a factor); zero or no number: the pixel is blank")
    rms: str = setting("", "noise per pixel: taken for the error in place of the local noise")
    mask: str = setting("", "anything but zero: the pixel is blank")
    primary_beam: str = setting("", "gain of the primary beam: fluxes and errors are divided by it")
    good_time: str = setting("", "table of good-time intervals (EXTNAME GTI, columns START and STOP) of the exposure")


COMPANION_KINDS = tuple(f.name for f in fields(Companions))
PIXEL_COMPANIONS = tuple(kind for kind in COMPANION_KINDS if kind != "good_time")  # images like their image


@dataclass(frozen=True)
class Controls:
    """Blank positions that set the null."""

    per_field: int = setting(512, "blank positions wanted for each field of sky", minimum=0)
    most_per_field: int = setting(
        8192,
        "and at most so many, four times as many at a time, where a target lies beyond all of them and their number cannot "
        "decide; per_field or less: none are added",
        minimum=0,
    )
    separation: float = setting(2.0, "least distance between controls and to targets", unit="FWHM", minimum=1)
    shared_frames: float = setting(
        0.9, "a control serves a target when it is in at least this fraction of its frames", minimum=0, maximum=1
    )
    alike: float = setting(
        1.1, "controls whose typical error is within this factor of a target's serve it, in every channel", minimum=1
    )
    fewest_alike: int = setting(100, "or so many of those most alike, where fewer are", minimum=1)
    most_unlike: float = setting(
        3.0,
        "but none whose typical error is further from the target's than by this factor, however few are left",
        minimum=1,
    )
    field_size_deg: float = setting(0.0, "side of a field; 0 takes half the median footprint", unit="deg", minimum=0)
    reference_frames: int = setting(
        3, "frames per channel and field in which bright sources to stay clear of are looked for", minimum=1
    )
    bright_snr: float = setting(5.0, "what counts as a bright source there", unit="sigma", minimum=3)
    bright_target_snr: float = setting(
        3.0,
        "a target this bright in a typical frame is ranked among controls made as bright as it is",
        unit="sigma",
        minimum=1,
    )
    bright_pool: int = setting(400, "of which there are at most so many, if the run's level needs them", minimum=50)


@dataclass(frozen=True)
class Search:
    """Targets whose position error is larger than a beam."""

    sigmas: float = setting(
        2.0, "the brightest place within so many position errors is searched; 0 measures the stated one only", minimum=0
    )
    spacing: float = setting(
        0.5, "distance of the places tried, in median beams; at 0.5 a source may lose 21 % of its flux", minimum=0.1
    )
    most_places: int = setting(3000, "a target has no more places than this: the innermost ones", minimum=7)
    controls: int = setting(
        100, "ellipses of the same places elsewhere in the frames that are searched alike", minimum=0
    )


@dataclass(frozen=True)
class Comparisons:
    """Steady sources that put frames on one flux scale and show where they point."""

    wanted: int = setting(40, "comparison sources wanted for each field of sky; 0 leaves fluxes raw", minimum=0)
    table: str = setting(
        "", "table of comparison sources (ra, dec; flux if known), used instead of searching the archive"
    )
    min_snr: float = setting(15.0, "S/N in a reference frame from which a source may serve", unit="sigma", minimum=5)
    isolation: float = setting(4.0, "no other bright source or target is nearer than this", unit="FWHM", minimum=1)
    located_in: int = setting(60, "frames per channel and field in which their exact places are measured", minimum=2)
    fewest: int = setting(3, "fewer comparisons than this leave a frame on its raw scale", minimum=2)
    enough: int = setting(5, "where a field has fewer comparisons, bright targets serve too", minimum=2)
    fewest_for_curve: int = setting(
        8, "a photographic frame with fewer comparisons than this tells only whether a source is seen", minimum=3
    )
    uncalibrated_scatter: float = setting(
        0.05,
        "error of the flux scale, as a fraction, where comparisons cannot tell; 5 % is usual, common practice, no source",
        minimum=0,
        maximum=1,
    )


@dataclass(frozen=True)
class Flow:
    """How the work is cut up; fixed once a run has begun."""

    batch_frames: int = setting(32, "frames per piece of work", minimum=1, maximum=4096)


@dataclass(frozen=True)
class Detection:
    """What counts as seen."""

    false_alarms: float = setting(
        0.01, "chance that a blank position has any detection, in any of its channels", minimum=1e-6, maximum=0.5
    )
    min_frames: int = setting(8, "fewer usable frames than this in every channel leave a target undecided", minimum=2)
    epoch_gap_days: float = setting(0.5, "frames further apart than this are separate epochs", unit="day", minimum=0)


@dataclass(frozen=True)
class Ranking:
    """What counts as beyond chance."""

    level: float = setting(0.05, "false-discovery rate of the run", minimum=1e-6, maximum=0.5)
    any_dependence: bool = setting(
        False, "make it hold whatever targets have in common (Benjamini and Yekutieli): q is several times larger"
    )
    gate: float = setting(
        0.1, "a period is searched where some statistic is among this fraction of the controls", minimum=0, maximum=1
    )
    tail_exceedances: int = setting(50, "controls to which a tail is fitted when they cannot decide", minimum=20)
    gather_curves: int = setting(256, "positions judged in one piece of work", minimum=1)


@dataclass(frozen=True)
class Completeness:
    """Made-up sources that `hindlight completeness` hides in light curves of blank sky.

    Fluxes are peak fluxes in units of each channel's median frame error; channels of Stokes Q, U, V get none.
    """

    per_cell: int = setting(40, "sources for each cell of the grid", minimum=1)
    fluxes: tuple[float, ...] = setting(
        (2.0, 3.4, 5.9, 10.2, 17.5, 30.0), "peak fluxes", unit="median frame errors", minimum=0
    )
    pulse_periods: tuple[float, ...] = setting((1200.0, 18000.0), "periods of pulse trains", unit="s", minimum=1e-3)
    duty_cycles: tuple[float, ...] = setting(
        (0.03, 0.1, 0.3), "how much of a period a pulse fills", minimum=1e-9, maximum=1
    )
    windows: tuple[float, ...] = setting(
        (2.0,), "windows that a pulse lies anywhere in, in pulse durations; 1 is strictly periodic", minimum=1
    )
    missing: tuple[float, ...] = setting((0.2,), "fraction of pulses that are not there", minimum=0, maximum=1)
    smooth_periods: tuple[float, ...] = setting(
        (86400.0, 8640000.0),
        "periods of smooth variables (sinusoids from zero to the peak flux)",
        unit="s",
        minimum=1e-3,
    )
    period_search: bool = setting(
        False, "whether periods are searched for as in the run; it takes a hundred times as long, and misses little"
    )
    pixels: int = setting(24, "sources added to pixels, to prove those added to light curves; 0 for none", minimum=0)
    seed: int = setting(1, "what all draws are made from", minimum=0, maximum=2**31 - 1)


@dataclass(frozen=True)
class Settings:
    """Every setting in force.

    `sites` and `plugin` are free-form tables: instrument or place -> ITRF metres, plugin -> settings. `frames` are the
    blocks of what headers do not say, see `hindlight.blocks`.
    """

    inventory: Inventory = field(default_factory=Inventory)
    channels: Channels = field(default_factory=Channels)
    photometry: Photometry = field(default_factory=Photometry)
    controls: Controls = field(default_factory=Controls)
    search: Search = field(default_factory=Search)
    comparisons: Comparisons = field(default_factory=Comparisons)
    flow: Flow = field(default_factory=Flow)
    detection: Detection = field(default_factory=Detection)
    ranking: Ranking = field(default_factory=Ranking)
    completeness: Completeness = field(default_factory=Completeness)
    sites: dict[str, Vector] = field(default_factory=dict)
    companions: Companions = field(default_factory=Companions)
    frames: tuple[FrameBlock, ...] = ()
    plugin: dict[str, dict[str, Any]] = field(default_factory=dict)

    def measuring(self) -> dict[str, Any]:
        """The sections that touch measured values, as plain data: a run cannot change them once it has begun."""
        names = (
            "inventory",
            "channels",
            "photometry",
            "controls",
            "search",
            "comparisons",
            "flow",
            "sites",
            "companions",
        )
        sections = {name: as_plain(getattr(self, name)) for name in names}
        del sections["controls"]["most_per_field"]  # it only says how many more are measured
        return sections | {"frames": {f"block {block.number}": block.as_plain() for block in self.frames}}


RECORD_SECTIONS = ("run", "versions")  # written into a run's settings.toml beside the settings, ignored when read


def as_plain(section: Any) -> dict[str, Any]:
    """A section (dataclass or mapping) as plain TOML data."""
    if dataclasses.is_dataclass(section) and not isinstance(section, type):
        return dataclasses.asdict(section)
    return {key: list(value) if isinstance(value, tuple) else value for key, value in section.items()}


def read_settings(path: Path | None) -> Settings:
    """Settings from a TOML file, defaults for what it leaves out; `None` gives the defaults."""
    if path is None:
        return Settings()
    try:
        data = tomllib.loads(path.read_text(encoding="utf-8"))
    except FileNotFoundError:
        raise UsageError(f"settings file {path}: no such file; `hindlight settings` prints one to start from") from None
    except (OSError, UnicodeDecodeError, tomllib.TOMLDecodeError) as error:
        raise UsageError(f"settings file {path}: not readable as TOML ({error}); mend that line") from None
    return settings_from(data, str(path))


def settings_from(data: Mapping[str, Any], where: str) -> Settings:
    """Settings from plain data; `where` names the source in messages."""
    sections = {f.name: f for f in fields(Settings)}
    values: dict[str, Any] = {}
    for name, content in data.items():
        if name in RECORD_SECTIONS:
            continue
        if name not in sections:
            raise UsageError(f"{where}: no section [{name}]{nearest(name, sections)}")
        if name == "frames":
            continue  # they may speak of sites
        if not isinstance(content, Mapping):
            raise UsageError(f"{where}: [{name}] must be a table of settings, got {content!r}")
        if name == "sites":
            values[name] = {key: _site(key, value, where) for key, value in content.items()}
        elif name == "plugin":
            values[name] = {key: _table(f"plugin.{key}", value, where) for key, value in content.items()}
        else:
            values[name] = check_section(getattr(Settings(), name), content, f"{where}: [{name}]")
    values["frames"] = read_blocks(data.get("frames", ()), values.get("sites", {}), where)
    settings = Settings(**values)
    _companions(settings.companions, where)
    if settings.photometry.annulus_outer <= settings.photometry.annulus_inner:
        raise UsageError(f"{where}: [photometry] annulus_outer must be larger than annulus_inner")
    return settings


def check_section(defaults: Any, content: Mapping[str, Any], where: str) -> Any:
    """The dataclass instance `defaults` with the values of `content`, each checked against its declaration."""
    declared = {f.name: f for f in fields(defaults) if "doc" in f.metadata}
    values = {}
    for key, value in content.items():
        if key not in declared:
            raise UsageError(f"{where}: no setting {key!r}{nearest(key, declared)}")
        values[key] = _checked(declared[key], getattr(defaults, key), value, f"{where} {key}")
    return dataclasses.replace(defaults, **values)


def _checked(declared: dataclasses.Field[Any], default: Any, value: Any, where: str) -> Any:
    """`value` if it has the default's type and lies within the declared bounds."""
    expected = type(default)
    if expected is float and isinstance(value, int) and not isinstance(value, bool):
        value = float(value)
    if expected is tuple and isinstance(value, list):
        value = tuple(value)
    if type(value) is not expected:
        raise UsageError(f"{where}: expected {expected.__name__} (default {default!r}), got {value!r}")
    meta = declared.metadata
    if isinstance(value, dict):
        bad = [k for k, v in value.items() if isinstance(v, bool) or not isinstance(v, int | float) or not v > 0]
        if bad:
            raise UsageError(f"{where}: {bad[0]!r} must be a positive number, got {value[bad[0]]!r}")
    if isinstance(value, tuple):
        value = tuple(_within(meta, _number(item, where), where) for item in value)
    if isinstance(value, int | float) and not isinstance(value, bool):
        _within(meta, value, where)
    if meta["choices"] is not None and value not in meta["choices"]:
        raise UsageError(f"{where}: {value!r} is none of {', '.join(map(repr, meta['choices']))}")
    return value


def _number(value: Any, where: str) -> float:
    if isinstance(value, bool) or not isinstance(value, int | float):
        raise UsageError(f"{where}: expected a list of numbers, got {value!r} in it")
    return float(value)


def _within(meta: Mapping[str, Any], value: float, where: str) -> float:
    """`value` if it lies within the declared bounds."""
    low, high = meta["minimum"], meta["maximum"]
    if not math.isfinite(value) or (low is not None and value < low) or (high is not None and value > high):
        bounds = f"from {'any' if low is None else low} to {'any' if high is None else high}"
        raise UsageError(f"{where}: {value!r} is out of range, expected {bounds}")
    return value


def _site(name: str, value: Any, where: str) -> Vector:
    try:
        return read_place(value)
    except ValueError as expected:
        raise UsageError(f"{where}: [sites] {name}: expected {expected}, got {value!r}") from None


def _companions(companions: Companions, where: str) -> None:
    """Raise `UsageError` for a pattern that cannot name a file beside the image's own."""
    for kind in COMPANION_KINDS:
        pattern = getattr(companions, kind)
        if pattern and not is_companion_pattern(pattern):
            raise UsageError(
                f"{where}: [companions] {kind}: expected a file name in which {{name}} or {{stem}} stands once for that of "
                f'the image, and more, such as "{{stem}}.{kind}.fits" or "{kind}/{{name}}", got {pattern!r}'
            )


def is_companion_pattern(pattern: str) -> bool:
    """Whether a pattern names FITS files that are not the image itself."""
    places = pattern.count("{stem}") + pattern.count("{name}")
    bare = pattern.replace("{stem}", "").replace("{name}", "")
    ends = pattern.endswith("{name}") or pattern.lower().endswith((".fits", ".fit", ".fts"))
    more = bare.lower().removesuffix(".fits").removesuffix(".fit").removesuffix(".fts").strip("./")
    return places == 1 and ends and bool(more) and not pattern.startswith("/") and "{" not in bare


def _table(name: str, value: Any, where: str) -> dict[str, Any]:
    if not isinstance(value, Mapping):
        raise UsageError(f"{where}: [{name}] must be a table of settings, got {value!r}")
    return dict(value)


def render(settings: Settings, plugin_defaults: Mapping[str, Any] | None = None) -> str:
    """The settings as commented TOML. `plugin_defaults` maps plugin names to instances whose settings are listed too."""
    lines = ["# Settings of hindlight. Every line is optional; what is left out has the value shown here."]
    for entry in fields(settings):
        section = getattr(settings, entry.name)
        if entry.name == "sites":
            lines += [
                "",
                "# Places of instruments whose headers give none, or to be named in [[frames]] blocks.",
                "[sites]",
            ]
            lines += [f"# north = {SITE_FORMS}"] if not section else []
            lines += [f"{_key(name)} = {list(value)}" for name, value in sorted(section.items())]
        elif entry.name == "frames":
            lines += render_blocks(section)
        elif entry.name != "plugin":
            lines += ["", *_doc_lines(section), f"[{entry.name}]", *_setting_lines(section)]
    for name, instance in sorted((plugin_defaults or {}).items()):
        declared = _setting_lines(instance)
        if declared:
            lines += ["", f"[plugin.{name}]", *declared]
    return "\n".join(lines) + "\n"


def _doc_lines(section: Any) -> list[str]:
    """The docstring of a section as comments."""
    return [f"# {line}" for line in inspect.cleandoc(type(section).__doc__ or "").splitlines() if line.strip()]


def _setting_lines(section: Any) -> list[str]:
    lines = []
    for declared in fields(section):
        meta = declared.metadata
        if "doc" not in meta:
            continue
        unit = f" ({meta['unit']})" if meta["unit"] else ""
        choices = f"; one of {', '.join(map(str, meta['choices']))}" if meta["choices"] else ""
        value = getattr(section, declared.name)
        value = list(value) if isinstance(value, tuple) else value
        if isinstance(value, dict):
            inner = ", ".join(f"{_key(k)} = {v}" for k, v in sorted(value.items()))
            text = f"{declared.name} = {{ {inner} }}" if inner else f"{declared.name} = {{}}"
        else:
            text = tomli_w.dumps({declared.name: value}).strip()
        lines += [f"# {meta['doc']}{unit}{choices}", text]
    return lines


def _key(name: str) -> str:
    """A TOML key, quoted where it must be."""
    return tomli_w.dumps({name: 0}).split(" = ")[0]
