"""Finds, loads, checks and orders plugins; describes them so that a worker process can load the same ones.

A `PluginSpec` is plain data that travels with every piece of work; `load` turns it into objects, once per process, and
refuses when what it finds differs from what the run was begun with. Nothing here calls a plugin's own methods.
"""

from __future__ import annotations

import hashlib
import importlib.metadata
import json
import linecache
import sys
from collections.abc import Callable, Iterable, Mapping
from dataclasses import dataclass, fields, is_dataclass
from functools import lru_cache
from pathlib import Path
from types import ModuleType
from typing import Any

import pluggy

from hindlight import hookspecs
from hindlight.errors import HindlightError, UsageError
from hindlight.plugin import Column, ConsistencyCheck, Dialect, Estimator, PeriodSearch, Plugin, Statistic
from hindlight.schema import CANDIDATES
from hindlight.settings import Settings, as_plain, check_section

ENTRY_POINT_GROUP = "hindlight"
SHIPPED = "hindlight_plugins"
KINDS: dict[str, type[Plugin]] = {
    "register_dialects": Dialect,
    "register_estimators": Estimator,
    "register_statistics": Statistic,
    "register_period_searches": PeriodSearch,
    "register_consistency_checks": ConsistencyCheck,
}


@dataclass(frozen=True)
class PluginSpec:
    """Which plugins, as plain data: `files` holds (name, sha256, source text), `settings` JSON of the [plugin.*] tables.

    `expected` is the fingerprint of what the run was begun with, '' for no check.
    """

    files: tuple[tuple[str, str, str], ...] = ()
    without: tuple[str, ...] = ()
    settings: str = "{}"
    expected: str = ""


@dataclass(frozen=True)
class Loaded:
    """One plugin: its object, where it came from ('shipped', 'installed' or 'file') and the source's name and version."""

    plugin: Any
    origin: str
    source: str
    version: str


@dataclass(frozen=True)
class Plugins:
    """All plugins by kind, in the order in which they are used, each kind sorted by name (dialects by `order` first)."""

    loaded: tuple[Loaded, ...]

    def of_kind(self, kind: type[Plugin]) -> tuple[Any, ...]:
        """The objects of one kind."""
        return tuple(entry.plugin for entry in self.loaded if isinstance(entry.plugin, kind))

    @property
    def dialects(self) -> tuple[Dialect, ...]:
        """Dialects in the order they are asked."""
        return tuple(sorted(self.of_kind(Dialect), key=lambda plugin: (plugin.order, plugin.name)))

    @property
    def estimators(self) -> tuple[Estimator, ...]:
        """Estimators by name."""
        return self.of_kind(Estimator)

    @property
    def statistics(self) -> tuple[Statistic, ...]:
        """Statistics by name."""
        return self.of_kind(Statistic)

    @property
    def period_searches(self) -> tuple[PeriodSearch, ...]:
        """Period searches by name."""
        return self.of_kind(PeriodSearch)

    @property
    def checks(self) -> tuple[ConsistencyCheck, ...]:
        """Consistency checks by name."""
        return self.of_kind(ConsistencyCheck)

    def fingerprint(self) -> str:
        """A digest of names, sources, versions and settings: equal where the same plugins would do the same."""
        rows = [[entry.plugin.name, entry.source, entry.version, as_plain(entry.plugin)] for entry in self.loaded]
        return hashlib.sha256(json.dumps(rows, sort_keys=True, default=str).encode()).hexdigest()


def spec_from(settings: Settings, files: Iterable[Path] = (), without: Iterable[str] = ()) -> PluginSpec:
    """The spec for these settings, plugin files and names to leave out.

    Raises `UsageError` for a file that cannot be read.
    """
    sources = []
    for path in files:
        try:
            text = Path(path).read_text(encoding="utf-8")
        except (OSError, UnicodeDecodeError) as error:
            raise UsageError(f"plugin file {path}: cannot be read ({error}); give a Python file") from None
        sources.append((Path(path).stem, hashlib.sha256(text.encode()).hexdigest(), text))
    table = {name: dict(values) for name, values in settings.plugin.items()}
    return PluginSpec(tuple(sorted(sources)), tuple(sorted(set(without))), json.dumps(table, sort_keys=True))


@lru_cache(maxsize=8)
def load(spec: PluginSpec) -> Plugins:
    """The plugins of a spec. Raises `UsageError`, by name, for anything wrong with one."""
    manager = pluggy.PluginManager("hindlight")
    manager.add_hookspecs(hookspecs)
    origins: dict[str, tuple[str, str, str]] = {}
    for name, module, origin in [*_entry_points(), *_file_modules(spec)]:
        if name in origins:
            raise UsageError(f"plugin {origin[1]} is given twice; give it once")
        try:
            manager.register(module, name)
        except pluggy.PluginValidationError as error:
            raise UsageError(f"plugin {origin[1]}: {' '.join(str(error).split())}; hooks take no arguments") from None
        origins[name] = origin
    _refuse_unknown_hooks(manager)
    loaded = [
        Loaded(_make(cls, name, spec), *origins[name])
        for name in sorted(origins)
        for cls in _classes(manager, name, origins[name][1])
    ]
    plugins = Plugins(_chosen(loaded, spec))
    if spec.expected and plugins.fingerprint() != spec.expected:
        raise HindlightError(
            "a worker has other plugins, or other versions of them, than the process that began this run; "
            "install the same ones there"
        )
    return plugins


def _entry_points() -> list[tuple[str, ModuleType, tuple[str, str, str]]]:
    """Installed plugin modules, sorted by name, each with its origin."""
    found = []
    for entry in sorted(importlib.metadata.entry_points(group=ENTRY_POINT_GROUP), key=lambda e: (e.value, e.name)):
        distribution = entry.dist.name if entry.dist else "unknown"
        module = _imported(entry.load, f"installed plugin {entry.name} (of {distribution})")
        kind = "shipped" if entry.value.split(".")[0] == SHIPPED else "installed"
        version = entry.dist.version if entry.dist else ""
        found.append((entry.value, module, (kind, f"{distribution}:{entry.value}", version)))
    return found


def _file_modules(spec: PluginSpec) -> list[tuple[str, ModuleType, tuple[str, str, str]]]:
    """Modules made from the source texts of a spec, under names made from their digests."""
    found = []
    for stem, digest, source in spec.files:
        name = f"hindlight_file_{digest[:16]}"
        module = sys.modules.get(name) or _imported(
            lambda stem=stem, name=name, source=source: _execute(stem, name, source),  # type: ignore[misc]
            f"plugin file {stem}.py",
        )
        found.append((name, module, ("file", f"{stem}.py", digest[:16])))
    return found


def _execute(stem: str, name: str, source: str) -> ModuleType:
    """Run a plugin's source as a module that can be pickled by name and shows its lines in a traceback."""
    module = ModuleType(name)
    filename = f"{stem}.py"
    module.__file__ = filename
    linecache.cache[filename] = (len(source), None, source.splitlines(keepends=True), filename)
    sys.modules[name] = module
    try:
        exec(compile(source, filename, "exec"), module.__dict__)
    except BaseException:
        del sys.modules[name]
        raise
    return module


def _imported(load_module: Callable[[], ModuleType], what: str) -> ModuleType:
    """What `load_module` returns; whatever it raises becomes one line that names the plugin."""
    try:
        return load_module()
    except (Exception, SystemExit, GeneratorExit) as error:  # noqa: BLE001 - a plugin may raise anything
        where = f" at line {error.lineno}" if isinstance(error, SyntaxError) else ""
        raise UsageError(f"{what} fails: {type(error).__name__}: {error}{where}; mend or leave it out") from None


def _refuse_unknown_hooks(manager: pluggy.PluginManager) -> None:
    try:
        manager.check_pending()
    except pluggy.PluginValidationError as error:
        text = str(error).splitlines()[0]
        raise UsageError(f"plugin {text}; the hooks are {', '.join(sorted(KINDS))}") from None


def _classes(manager: pluggy.PluginManager, name: str, source: str) -> list[type[Plugin]]:
    """The classes one module registers, each checked for its kind."""
    module = manager.get_plugin(name)
    found: list[type[Plugin]] = []
    for caller in manager.get_hookcallers(module) or []:
        offered: Any = _imported(getattr(module, caller.name), f"plugin {source}: {caller.name}()")
        kind = KINDS[caller.name]
        if not isinstance(offered, list | tuple):
            raise UsageError(f"plugin {source}: {caller.name}() must return a list of classes, got {offered!r:.60}")
        for cls in offered:
            if not (isinstance(cls, type) and issubclass(cls, kind)):
                raise UsageError(f"plugin {cls!r}: {caller.name}() must return classes derived from {kind.__name__}")
            found.append(cls)
    return found


def _make(cls: type[Plugin], module: str, spec: PluginSpec) -> Plugin:
    """The object of a class with its settings from the spec, after the checks that need no light curve."""
    declared = getattr(cls, "__annotations__", {})
    own_fields = [name for name in declared if not str(cls.__annotations__[name]).startswith(("ClassVar", "typing.Cl"))]
    if not is_dataclass(cls) or (own_fields and "__dataclass_fields__" not in vars(cls)):
        raise UsageError(f"plugin {cls.name}: put @dataclass(frozen=True) above class {cls.__name__}")
    if not getattr(cls, "__dataclass_params__").frozen:  # noqa: B009 - not a declared attribute
        raise UsageError(f"plugin {cls.name}: class {cls.__name__} must be a frozen dataclass")
    if not cls.name.isidentifier() or cls.name != cls.name.lower():
        raise UsageError(f"plugin {cls.name!r}: a plugin's name is snake case, such as longest_run")
    _check_columns(cls)
    bare = [f.name for f in fields(cls) if "doc" not in f.metadata]
    if bare:
        raise UsageError(f"plugin {cls.name}: field {bare[0]!r} must be made by setting(default, doc)")
    given = json.loads(spec.settings).get(cls.name, {})
    made: Plugin = check_section(cls(), given, f"[plugin.{cls.name}]")
    return made


def _check_columns(cls: type[Plugin]) -> None:
    for column in cls.columns:
        if not isinstance(column, Column):
            raise UsageError(f"plugin {cls.name}: columns must be Column(...) objects, got {column!r}")
        if not column.name.isidentifier():
            raise UsageError(f"plugin {cls.name}: column name {column.name!r} is not a plain word")
    if issubclass(cls, Statistic) and not cls.columns:
        raise UsageError(f"plugin {cls.name}: a statistic declares at least one column")


def _chosen(loaded: list[Loaded], spec: PluginSpec) -> tuple[Loaded, ...]:
    """Sorted by name, without those left out; refused where a name, a column or a [plugin.X] table does not fit."""
    by_name: dict[str, Loaded] = {}
    for entry in loaded:
        if entry.plugin.name in by_name:
            other = by_name[entry.plugin.name].source
            raise UsageError(f"plugin name {entry.plugin.name!r} stands twice: in {other} and in {entry.source}")
        by_name[entry.plugin.name] = entry
    for what, names in (("--without", spec.without), ("[plugin] settings", tuple(json.loads(spec.settings)))):
        for name in names:
            if name not in by_name:
                raise UsageError(f"{what}: no plugin {name!r}; there are {', '.join(sorted(by_name))}")
    taken = {column.name.lower(): "the candidate table" for column in CANDIDATES}
    kept = [by_name[name] for name in sorted(by_name) if name not in spec.without]
    for entry in kept:
        for column in entry.plugin.columns:
            full = f"{entry.plugin.name}_{column.name}".lower()
            if full in taken:
                raise UsageError(f"column {full!r} of plugin {entry.plugin.name} is taken by {taken[full]}")
            taken[full] = f"plugin {entry.plugin.name}"
    return tuple(kept)


def installed_versions(packages: Iterable[str]) -> Mapping[str, str]:
    """Versions of the named packages, for the record of a run."""
    return {name: importlib.metadata.version(name) for name in packages}
