"""What a run is asked for, and what it records of itself in settings.toml so that it can be continued or refused."""

from __future__ import annotations

import hashlib
import json
import logging
import platform
import tomllib
from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import tomli_w

from hindlight import host, settings
from hindlight.errors import HindlightError, UsageError
from hindlight.files import archive_text
from hindlight.settings import Settings, as_plain
from hindlight.store import RunFolder
from hindlight.tables import damaged

RECORDED_PACKAGES = (
    "hindlight", "numpy", "scipy", "astropy", "photutils", "pyarrow", "dask", "distributed", "nifty-ls",
)  # fmt: skip

log = logging.getLogger("hindlight")


@dataclass(frozen=True)
class Request:
    """What `mine` is asked for."""

    archives: tuple[str, ...]
    targets: Path
    out: Path
    settings: Path | None = None
    plugins: tuple[Path, ...] = ()
    without: tuple[str, ...] = ()
    workers: int | None = None
    scheduler: str | None = None

    @property
    def folders(self) -> tuple[str, ...]:
        """The archives: folders as absolute paths, and URLs, as `archive_text` writes them."""
        return tuple(archive_text(archive, absolute=True) for archive in self.archives)


def settings_in_force(run: RunFolder, request: Request) -> Settings:
    """The settings given, else those of the run, else the defaults.

    A run's own settings may speak of plugins that are not asked for now; those tables are left out.
    """
    if request.settings is not None or not run.has("settings.toml"):
        return settings.read_settings(request.settings)
    try:
        recorded = settings.read_settings(run.file("settings.toml"))
    except UsageError as error:
        raise damaged(run.file("settings.toml"), error) from None
    loaded = host.load(host.spec_from(Settings(), request.plugins, request.without)).loaded
    names = {entry.plugin.name for entry in loaded}
    return replace(recorded, plugin={name: table for name, table in recorded.plugin.items() if name in names})


def text_of(request: Request, chosen: Settings, plugins: host.Plugins, field_size_deg: float) -> str:
    """The text of settings.toml: every setting in force, and what the run was made from and with."""
    instances = {entry.plugin.name: entry.plugin for entry in plugins.loaded}
    record = {
        "run": {
            "archives": list(request.folders),
            "field_size_deg": field_size_deg,
            "measuring_plugins": _measuring_plugins(plugins),
        },
        "versions": {
            "python": platform.python_version(),
            "packages": dict(host.installed_versions(RECORDED_PACKAGES)),
            "plugins": {e.plugin.name: f"{e.source} {e.version}".strip() for e in plugins.loaded},
        },
    }
    return settings.render(chosen, instances) + "\n" + tomli_w.dumps(record)


def compare(run: RunFolder, request: Request, chosen: Settings, plugins: host.Plugins) -> Mapping[str, Any]:
    """What the run recorded of itself, {} for a new one; raises `UsageError` where this request does not fit it."""
    if not run.has("settings.toml"):
        return {}
    path = run.file("settings.toml")
    try:
        data = tomllib.loads(path.read_text(encoding="utf-8"))
        recorded: Mapping[str, Any] = data["run"]
    except (tomllib.TOMLDecodeError, UnicodeDecodeError, KeyError) as error:
        raise damaged(path, error) from None
    missing = [archive for archive in recorded.get("archives", []) if archive not in request.folders]
    if missing:
        raise UsageError(f"run {run.path}: was made from archive {missing[0]}; give that too, or another --out")
    before = settings.settings_from(data, f"{run.path}/settings.toml").measuring()
    for section, values in chosen.measuring().items():
        for key in sorted({*values, *before[section]}):
            was, now = before[section].get(key), values.get(key)
            if was != now:
                raise UsageError(
                    f"run {run.path}: [{section}] {key} was {was!r} and is now {now!r}; "
                    "it touches what has been measured: keep it, or give another --out"
                )
    if recorded.get("measuring_plugins") != _measuring_plugins(plugins):
        raise UsageError(
            f"run {run.path}: its dialects or estimators differ from those now; use the same, or give another --out"
        )
    return recorded


def state(run: RunFolder, chosen: Settings, plugins: host.Plugins) -> str:
    """A digest of what the p-values of a run follow from: frames, positions, flux scale, rules and plugins.

    Tables made of a run carry it, so that they can be told from those of the run as it is.
    """
    digest = hashlib.sha256()
    for name in ("frames.parquet", "positions.parquet", "frame_solution.parquet"):
        digest.update(hashlib.sha256(run.file(name).read_bytes()).digest())
    rules = [as_plain(chosen.detection), as_plain(chosen.ranking), plugins.fingerprint()]
    digest.update(json.dumps(rules, sort_keys=True).encode())
    return f"sha256:{digest.hexdigest()[:32]}"


@contextmanager
def logged(run: RunFolder) -> Iterator[None]:
    """Write the log to the run's log.txt while a command works; what goes wrong stays there with its traceback."""
    handler = logging.FileHandler(run.file("log.txt"), encoding="utf-8", delay=True)
    handler.setFormatter(logging.Formatter("%(asctime)s %(levelname)s %(message)s"))
    log.addHandler(handler)
    try:
        yield
    except HindlightError as error:
        log.error("%s", error)
        raise
    except Exception:
        log.exception("error inside the program")
        raise
    finally:
        log.removeHandler(handler)
        handler.close()


def _measuring_plugins(plugins: host.Plugins) -> str:
    """A word for the plugins that touch measured values, with their versions and settings."""
    touching = tuple(entry for entry in plugins.loaded if entry.plugin.kind in ("dialect", "estimator"))
    return host.Plugins(touching).fingerprint()[:16]
