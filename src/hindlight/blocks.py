"""What a user knows of frames and headers do not say: the `[[frames]]` blocks of the settings, checked and written back.

A block says which frames it speaks of and what is true of them. How frames are matched and facts changed is the
business of `knowledge`; nothing here has seen a header.
"""

from __future__ import annotations

import datetime
import math
import re
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

import tomli_w

from hindlight.errors import UsageError, nearest
from hindlight.facts import Moment

Vector = tuple[float, float, float]

EARTH_RADII_M = (6.2e6, 6.5e6)
WGS84_RADIUS_M, WGS84_FLATTENING = 6378137.0, 1.0 / 298.257223563
SITE_FORMS = "[x, y, z] in metres from the Earth's centre, or { lat = , lon = , height = } in degrees and metres"
TIME_SCALES = ("utc", "ut1", "tai", "tt", "tdb", "tcg", "tcb")
FREQUENCIES_HZ = (1e7, 1e12)  # those that headers are believed to state; another number is in another unit
FREQUENCY = "a frequency in Hz, 1e7 to 1e12"
POSITIVE, FRACTION = "a positive number", "a fraction above 0, at most 1"
STOKES = ("I", "Q", "U", "V", "RR", "LL", "RL", "LR", "XX", "YY", "XY", "YX")

_KEYWORD = re.compile(r"[A-Z0-9_-]{1,8}")


@dataclass(frozen=True)
class Key:
    """A key of a block: what it means, how a value is written, and what makes of it the one form used inside.

    `read` raises `ValueError` with what was expected.
    """

    doc: str
    example: str
    read: Callable[[Any], Any]


@dataclass(frozen=True)
class FrameBlock:
    """One block: `number` counts from 1 in the file, `match` and `facts` are the keys of `MATCH` and `FACTS` it has.

    `where_missing`: its facts count only for frames whose header does not give them.
    """

    number: int
    match: Mapping[str, Any] = field(default_factory=dict)
    facts: Mapping[str, Any] = field(default_factory=dict)
    where_missing: bool = False

    def as_plain(self) -> dict[str, Any]:
        """The block as TOML data."""
        always = {"where_missing": True} if self.where_missing else {}
        plain = {**self.match, **always, **self.facts}
        return {key: list(value) if isinstance(value, tuple) else value for key, value in plain.items()}


# --- values


def _text(value: Any) -> str:
    if not isinstance(value, str) or not value.strip():
        raise ValueError("text")
    return value.strip()


def _glob(value: Any) -> str:
    if not isinstance(value, str):
        raise ValueError("a pattern, with * and ? for what may differ")
    return value


def _header(value: Any) -> dict[str, Any]:
    good = isinstance(value, Mapping) and value and all(isinstance(v, str | int | float) for v in value.values())
    if not good:
        raise ValueError('a table of keywords, as { OBSERVER = "J*" }')
    keys = {key.upper(): entry for key, entry in value.items()}
    wrong = [key for key in keys if not _KEYWORD.fullmatch(key)]
    if wrong:
        raise ValueError(f"FITS keywords of at most 8 letters, digits, - or _, unlike {wrong[0]!r}")
    return keys


def _date(value: Any) -> str:
    text = value.isoformat() if isinstance(value, datetime.date) else value
    if not isinstance(text, str) or Moment.from_iso(text) is None:
        raise ValueError("a date such as 1994-07-01 or 1994-07-01T12:00:00")
    return text


def _number(what: str, low: float = -math.inf, high: float = math.inf, *, above: bool = True) -> Callable[[Any], float]:
    """A reader of finite numbers from `low` (excluded where `above`) to `high`."""

    def read(value: Any) -> float:
        good = isinstance(value, int | float) and not isinstance(value, bool) and math.isfinite(value)
        if not good or not (low < value if above else low <= value) or value > high:
            raise ValueError(what)
        return float(value)

    return read


def _one_of(*choices: str, fold: Callable[[str], str] = str.lower) -> Callable[[Any], str]:
    def read(value: Any) -> str:
        if not isinstance(value, str) or fold(value) not in choices:
            raise ValueError(f"one of {', '.join(choices)}")
        return fold(value)

    return read


def _truth(value: Any) -> bool:
    if not isinstance(value, bool):
        raise ValueError("true or false")
    return value


def _beam(value: Any) -> float | Vector:
    what = "a positive number, or [major, minor, angle] with major not below minor (arcsec, degrees east of north)"
    if not isinstance(value, list | tuple):
        return _number(what, 0.0)(value)
    if len(value) != 3:
        raise ValueError(what)
    major, minor = (_number(what, 0.0)(v) for v in value[:2])
    angle = _number(what)(value[2])
    if minor > major:
        raise ValueError(what)
    return major, minor, angle % 180.0


def read_place(value: Any) -> Vector:
    """ITRF metres from either form of a site; raises `ValueError` with what was expected."""
    number = _number(SITE_FORMS)
    if isinstance(value, Mapping):
        if not {"lat", "lon"} <= set(value) <= {"lat", "lon", "height"}:
            raise ValueError(SITE_FORMS)
        latitude, longitude = _number(SITE_FORMS, -90, 90, above=False)(value["lat"]), number(value["lon"])
        height = _number(SITE_FORMS, -500, 10_000, above=False)(value.get("height", 0.0))
        if abs(longitude) > 360:
            raise ValueError(SITE_FORMS)
        return from_geodetic(latitude, longitude, height)
    if not isinstance(value, list | tuple) or len(value) != 3:
        raise ValueError(SITE_FORMS)
    x, y, z = (number(v) for v in value)
    if not EARTH_RADII_M[0] < math.sqrt(x * x + y * y + z * z) < EARTH_RADII_M[1]:
        raise ValueError(SITE_FORMS)
    return x, y, z


def from_geodetic(latitude: float, longitude: float, height: float) -> Vector:
    """ITRF metres of degrees north and east and metres above the WGS 84 ellipsoid."""
    lat, lon = math.radians(latitude), math.radians(longitude)
    squared = WGS84_FLATTENING * (2.0 - WGS84_FLATTENING)  # the eccentricity's square
    curve = WGS84_RADIUS_M / math.sqrt(1.0 - squared * math.sin(lat) ** 2)
    across = (curve + height) * math.cos(lat)
    return across * math.cos(lon), across * math.sin(lon), (curve * (1.0 - squared) + height) * math.sin(lat)


def _site(value: Any) -> str | Vector:
    if isinstance(value, str) and not value.strip():
        raise ValueError(f"the name of a site of [sites], or {SITE_FORMS}")
    return value.strip() if isinstance(value, str) else read_place(value)


MATCH = {
    "path": Key("pattern of the file's path in the archive; * crosses folders", '"plates/*"', _glob),
    "instrument": Key("pattern of the instrument's name, capitals or not", '"north*"', _glob),
    "header": Key("cards: a number, true or false, or a pattern of text", '{ OBSERVER = "J*" }', _header),
    "from": Key("the header's date is this or later", "1990-01-01", _date),
    "to": Key("the header's date is before this", "1995-01-01", _date),
}
FACTS = {
    "instrument_name": Key("what the instrument is to be called", '"north array"', _text),
    "site": Key("a name of [sites], or the place itself in one of its forms", '"north hill"', _site),
    "time_scale": Key("of the header's times", '"utc"', _one_of(*TIME_SCALES)),
    "clock_offset_s": Key("seconds to add to the header's times", "-3.5", _number("a number")),
    "clock_error_s": Key("1-sigma error of the header's clock, seconds", "0.5", _number(POSITIVE, 0.0)),
    "date_means": Key("what the header's one date is of the exposure", '"middle"', _one_of("start", "middle", "end")),
    "exposure_s": Key("good time, seconds", "120.0", _number(POSITIVE, 0.0)),
    "good_time_fraction": Key("good time over the time from start to end", "0.8", _number(FRACTION, 0.0, 1.0)),
    "unit": Key("of the pixels", '"Jy/beam"', _text),
    "beam_arcsec": Key("FWHM of beam or seeing, or [major, minor, angle]", "45.0", _beam),
    "band": Key("filter or band", '"R"', _text),
    "frequency_hz": Key("frequency, Hz", "1.4e9", _number(FREQUENCY, *FREQUENCIES_HZ, above=False)),
    "stokes": Key("Stokes parameter or correlation", '"I"', _one_of(*STOKES, fold=str.upper)),
    "saturation": Key("saturation level in the pixels' unit", "60000.0", _number("a number")),
    "electrons_per_unit": Key("electrons for one unit of the pixels", "2.0", _number(POSITIVE, 0.0)),
    "response": Key("of the detector", '"photographic"', _one_of("linear", "photographic")),
    "negative": Key("whether stars are darker than the sky", "true", _truth),
    "primary_beam": Key(
        "whether the primary beam has been divided out", '"uncorrected"', _one_of("corrected", "uncorrected")
    ),
    "primary_beam_fwhm_deg": Key(
        "FWHM of a Gaussian primary beam about the reference pixel, degrees", "0.5", _number(POSITIVE, 0.0)
    ),
    "primary_beam_at_hz": Key(
        "frequency of that width, which goes with 1 / frequency; else it is that of every frame",
        "1.4e9",
        _number(FREQUENCY, *FREQUENCIES_HZ, above=False),
    ),
}
KEYS = {**MATCH, **FACTS}
WHERE_MISSING = "where_missing"


# --- blocks


def read_blocks(content: Any, sites: Mapping[str, Vector], where: str) -> tuple[FrameBlock, ...]:
    """The blocks of `[[frames]]`; raises `UsageError` naming block and key. `sites` are the places known by name."""
    if not isinstance(content, list | tuple) or not all(isinstance(entry, Mapping) for entry in content):
        raise UsageError(f"{where}: [frames] must be blocks, each headed [[frames]], got {content!r:.80}")
    return tuple(
        _block(number, entry, sites, f"{where}: [[frames]] block {number}") for number, entry in enumerate(content, 1)
    )


def _block(number: int, entry: Mapping[str, Any], sites: Mapping[str, Vector], where: str) -> FrameBlock:
    values: dict[str, Any] = {}
    for key, value in entry.items():
        if key == WHERE_MISSING:
            values[key] = _checked(where, key, value, _truth)
        elif key in KEYS:
            values[key] = _checked(where, key, value, KEYS[key].read)
        else:
            raise UsageError(f"{where}: no key {key!r}{nearest(key, [*KEYS, WHERE_MISSING])}")
    site = values.get("site")
    if isinstance(site, str) and site not in sites:
        hint = nearest(site, sites) if sites else "; there are none"
        raise UsageError(f"{where} site: no place {site!r} in [sites]{hint}")
    if "from" in values and "to" in values and not _later(values["from"], values["to"]):
        raise UsageError(f"{where} to: expected a date after from = {values['from']!r}, got {values['to']!r}")
    if "primary_beam_fwhm_deg" in values and values.get("primary_beam") == "corrected":
        raise UsageError(f'{where} primary_beam_fwhm_deg: not used where primary_beam = "corrected"; leave one out')
    if "primary_beam_at_hz" in values and "primary_beam_fwhm_deg" not in values:
        raise UsageError(
            f"{where} primary_beam_at_hz: it says where a width holds; give primary_beam_fwhm_deg in the block"
        )
    return FrameBlock(
        number,
        {key: value for key, value in values.items() if key in MATCH},
        {key: value for key, value in values.items() if key in FACTS},
        bool(values.get(WHERE_MISSING, False)),
    )


def _checked(where: str, key: str, value: Any, read: Callable[[Any], Any]) -> Any:
    try:
        return read(value)
    except ValueError as expected:
        empty = f"; fill it in, as {key} = {KEYS[key].example}" if value == "" and key in KEYS else ""
        raise UsageError(f"{where} {key}: expected {expected}, got {value!r}{empty}") from None


def _later(first: str, second: str) -> bool:
    a, b = Moment.from_iso(first), Moment.from_iso(second)
    return a is not None and b is not None and (a.mjd, a.seconds) < (b.mjd, b.seconds)


def render_blocks(blocks: Sequence[FrameBlock]) -> list[str]:
    """The blocks as lines of TOML, or what may stand in one as comments where there is none."""
    if blocks:
        return ["", "# What headers do not say.", *(line for block in blocks for line in block_lines(block.as_plain()))]
    lines = ["", "# What headers do not say; later blocks win. Which frames it is about (all, where nothing is said):"]
    lines += ["# [[frames]]", *(f"# {name} = {key.example}  # {key.doc}" for name, key in MATCH.items())]
    lines += ["# What is true of them:"]
    lines += [f"# {WHERE_MISSING} = true  # only where the header does not say; else this counts before the header"]
    return lines + [f"# {name} = {key.example}  # {key.doc}" for name, key in FACTS.items()]


def block_lines(block: Mapping[str, Any]) -> list[str]:
    """One block as lines of TOML; an inner table is written inline, so that keys may follow it."""
    lines = ["[[frames]]"]
    for key, value in block.items():
        if isinstance(value, Mapping):
            inner = ", ".join(tomli_w.dumps({name: entry}).strip() for name, entry in value.items())
            lines.append(f"{key} = {{ {inner} }}")
        elif isinstance(value, list):
            lines.append(f"{key} = {value}")
        else:
            lines.append(tomli_w.dumps({key: value}).strip())
    return lines
