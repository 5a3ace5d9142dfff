"""The command line: one call per command. The only place that prints."""

from __future__ import annotations

import contextlib
import errno
import logging
import math
import os
import shutil
import signal
import sys
import traceback
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any, TypeVar

import click
import numpy as np
from rich.console import Console
from rich.progress import BarColumn, MofNCompleteColumn, Progress, TextColumn, TimeRemainingColumn
from rich.table import Table
from rich.text import Text

from hindlight import __version__
from hindlight.errors import HindlightError, NothingToDoError, ReaderGoneError, UsageError
from hindlight.facts import visible
from hindlight.outlet import PipedConsole, let_go, read_by_someone
from hindlight.wording import short as _short

BEST_ROWS = 10
LONGEST_CELL = 200
TABLE_ENDINGS = (".ecsv", ".fits", ".vot", ".csv", ".parquet")
BARS, PLAIN_SHADES = "▁▂▃▄▅▆▇█", ".:-=+*#%@"
LONGEST_LABEL = 30
PLAIN_WIDTH = 100
QUIET = "No progress and no closing summary; errors, and tables that the command is there to print, remain."
INTERRUPTED = 130
TERMINATED = 143

Command = TypeVar("Command", bound=Callable[..., Any])


def main() -> None:
    """Run the command line and leave with its exit status."""
    signal.signal(signal.SIGTERM, _terminate)
    logging.captureWarnings(True)  # libraries' warnings go to the log, not between the user's lines
    logging.getLogger("py.warnings").addHandler(logging.NullHandler())
    status = run_command(sys.argv[1:])
    let_go()
    sys.exit(status)


def run_command(arguments: list[str]) -> int:
    """Run one command line; returns its exit status. A user's own mistake is one line, never a traceback."""
    try:
        cli.main(args=arguments, prog_name="hindlight", standalone_mode=False)
    except click.exceptions.Exit as end:
        return int(end.exit_code)
    except (click.Abort, KeyboardInterrupt):
        return _say("interrupted; the same command continues", INTERRUPTED)
    except click.ClickException as error:
        return _say(f"{error.format_message()}; see `hindlight --help`", 2)
    except ReaderGoneError as gone:
        return gone.exit_status
    except HindlightError as error:
        return _say(str(error), error.exit_status)
    except OSError as error:
        if error.errno in (errno.ENOSPC, errno.EDQUOT):
            return _say("the disk is full; make room, the same command continues", 4)
        return _inside_error(error)
    except (Exception, SystemExit) as error:  # noqa: BLE001 - the last resort: one line, and the traceback where it can be found
        return _inside_error(error)
    return 0


def _terminate(_number: int, _frame: Any) -> None:
    sys.stderr.write("hindlight: terminated; the same command continues\n")
    os._exit(TERMINATED)


def _say(text: str, status: int) -> int:
    click.echo(f"hindlight: {visible(' '.join(text.split()))}", err=True)
    return status


def _inside_error(error: BaseException) -> int:
    """An error inside the program; a run has its traceback in its log, otherwise -v shows it."""
    if logging.getLogger("hindlight").level <= logging.DEBUG:
        click.echo("".join(traceback.format_exception(error)), err=True)
    hint = "the traceback is in the run's log.txt, or comes with -v; please report it, the same command continues"
    return _say(f"error inside the program: {type(error).__name__}: {error}; {hint}", 1)


def common_options(command: Command) -> Command:
    """-q and -v, which every command has."""
    command = click.option("-q", "--quiet", is_flag=True, help=QUIET)(command)
    return click.option("-v", "--verbose", is_flag=True, help="Say more, and show tracebacks.")(command)


class _Group(click.Group):
    """The commands, none of which minds when its output is read no further."""

    def make_context(self, *args: Any, **kwargs: Any) -> click.Context:
        """Reads the command line, and prints help."""
        with read_by_someone():
            return super().make_context(*args, **kwargs)

    def invoke(self, ctx: click.Context) -> Any:
        """Runs a command."""
        with read_by_someone():
            return super().invoke(ctx)


@click.group(cls=_Group, context_settings={"help_option_names": ["-h", "--help"]})
@click.version_option(__version__, prog_name="hindlight")
def cli() -> None:
    """Was this position ever bright before?

    Measures target positions in every image of an archive, seen or not, and ranks them against blank sky.
    """


@cli.command()
@click.argument("archive", nargs=-1, required=True)
@click.option("--targets", type=click.Path(path_type=Path), help="Target list: count the frames that cover each.")
@click.option("--settings", "settings_file", type=click.Path(path_type=Path), help="Settings (TOML).")
@click.option("--plugin", "plugins", multiple=True, type=click.Path(path_type=Path), help="A plugin file; repeatable.")
@common_options
def inventory(
    archive: tuple[str, ...], targets: Path | None, settings_file: Path | None, plugins: tuple[Path, ...],
    quiet: bool, verbose: bool,
) -> None:  # fmt: skip
    """Headers only: what is there, when, where, in what state.

    ARCHIVE is a folder, searched with all below it, or the URL of one in any storage that fsspec reaches (s3://...).
    """
    from hindlight import survey

    with _watching(quiet, verbose) as watcher:
        found = survey.inventory(archive, targets, settings_file, plugins, watcher)
    _print_inventory(found)
    if found.n_frames == 0:
        raise NothingToDoError(
            f"archive {', '.join(archive)}: no usable FITS image found, all that is there was set aside; "
            "the words above say why"
        )


@cli.command()
@click.argument("archive", nargs=-1, required=True)
@click.option("--targets", required=True, type=click.Path(path_type=Path), help="Target list: name, ra, dec.")
@click.option("--out", required=True, type=click.Path(path_type=Path), help="Folder of the run, made when absent.")
@click.option("--settings", "settings_file", type=click.Path(path_type=Path), help="Settings (TOML).")
@click.option("--plugin", "plugins", multiple=True, type=click.Path(path_type=Path), help="A plugin file; repeatable.")
@click.option("--without", multiple=True, metavar="NAME", help="Leave a plugin out; repeatable.")
@click.option("--workers", type=click.IntRange(min=1), help="Processes; default: one for small work, else one a core.")
@click.option("--scheduler", metavar="ADDRESS", help="Address of a dask scheduler that exists.")
@common_options
def mine(
    archive: tuple[str, ...], targets: Path, out: Path, settings_file: Path | None, plugins: tuple[Path, ...],
    without: tuple[str, ...], workers: int | None, scheduler: str | None, quiet: bool, verbose: bool,
) -> None:  # fmt: skip
    """The whole job: measure every target in every frame, and rank them.

    ARCHIVE is a folder, searched with all below it, or the URL of one in any storage that fsspec reaches (s3://...).

    The same command again continues an interrupted run, or extends it with new files and targets.
    """
    from hindlight.record import Request
    from hindlight.runner import mine as run_mine

    if workers is not None and scheduler is not None:
        raise UsageError("give --workers or --scheduler, not both")
    request = Request(archive, targets, out, settings_file, plugins, without, workers, scheduler)
    with _watching(quiet, verbose) as watcher:
        result = run_mine(request, watcher)
    if not quiet:
        _print_result(result)


@cli.command()
@click.argument("run", type=click.Path(path_type=Path))
@click.argument("target")
@click.option("--out", type=click.Path(path_type=Path), help="File to write; the ending sets the format.")
@common_options
def lightcurve(run: Path, target: str, out: Path | None, quiet: bool, verbose: bool) -> None:
    """One target's light curves; to standard output as ECSV unless --out names a file."""
    from hindlight.export import light_curves
    from hindlight.store import RunFolder
    from hindlight.tables import write_table

    if out is not None and out.suffix.lower() not in TABLE_ENDINGS:
        raise UsageError(f"--out {out}: unknown ending {out.suffix!r}; use one of {', '.join(TABLE_ENDINGS)}")
    with _logging(verbose):
        table = light_curves(RunFolder(run), target)
        if len(table) == 0 and not quiet:
            click.echo(visible(f"hindlight: no frame of the run covers {target}: the table has no rows"), err=True)
        if out is None:
            table.write(sys.stdout, format="ascii.ecsv")
            return
        if not out.parent.is_dir():
            raise UsageError(f"--out {out}: no folder {out.parent}; make it first")
        write_table(out, table)
    if not quiet:
        click.echo(visible(f"{len(table)} measurements of {target} written to {out}"), err=True)


@cli.command()
@click.argument("run", type=click.Path(path_type=Path))
@click.option("--settings", "settings_file", type=click.Path(path_type=Path), help="Settings (TOML): [completeness].")
@click.option("--targets", type=click.Path(path_type=Path), help="Target list: ephemerides make looks cycles.")
@click.option("--plugin", "plugins", multiple=True, type=click.Path(path_type=Path), help="A plugin file of the run.")
@click.option("--workers", type=click.IntRange(min=1), help="Processes; default: one for small work, else one a core.")
@common_options
def completeness(
    run: Path, settings_file: Path | None, targets: Path | None, plugins: tuple[Path, ...], workers: int | None,
    quiet: bool, verbose: bool,
) -> None:  # fmt: skip
    """What a finished run could have shown: made-up sources hidden in its light curves, and how many are found."""
    from hindlight.recovery import recover
    from hindlight.study import Asked

    with _watching(quiet, verbose) as watcher:
        report = recover(Asked(run, settings_file, targets, plugins, workers), watcher)
    if not quiet:
        _print_completeness(run, report)


@cli.command()
@click.option("--check", type=click.Path(path_type=Path), metavar="FILE.py", help="Check that a plugin behaves.")
@click.option("--plugin", "files", multiple=True, type=click.Path(path_type=Path), help="List this file's plugins too.")
@click.option("--power", type=click.Path(path_type=Path), metavar="RUN", help="Which sources each statistic finds.")
@common_options
def plugins(check: Path | None, files: tuple[Path, ...], power: Path | None, quiet: bool, verbose: bool) -> None:
    """What is installed, its columns; with --check whether a plugin behaves, with --power what statistics are worth."""
    from hindlight import host
    from hindlight.settings import Settings

    if check is not None and power is not None:
        raise UsageError("give --check or --power, not both")
    if power is not None:
        _print_power(power, files, quiet, verbose)
        return
    with _logging(verbose):
        if check is not None:
            _check_plugin(check)
            return
        loaded = host.load(host.spec_from(Settings(), files))
        _print_plugins(loaded)


@cli.command("settings")
@click.option(
    "--plugin", "files", multiple=True, type=click.Path(path_type=Path), help="With this file's settings too."
)
@common_options
def show_settings(files: tuple[Path, ...], quiet: bool, verbose: bool) -> None:
    """A commented settings file with every default."""
    from hindlight import host
    from hindlight.settings import Settings, render

    with _logging(verbose):
        loaded = host.load(host.spec_from(Settings(), files))
        click.echo(render(Settings(), {e.plugin.name: e.plugin for e in loaded.loaded}), nl=False)


@cli.command()
@click.argument("folder", type=click.Path(path_type=Path))
@common_options
def demo(folder: Path, quiet: bool, verbose: bool) -> None:
    """Write the demonstration archive and its target list."""
    from hindlight.demo import write_demo

    with _logging(verbose):
        if folder.exists() and (not folder.is_dir() or any(folder.iterdir())):
            raise UsageError(f"{folder}: is not an empty folder; give a new one")
        write_demo(folder)
    if not quiet:
        click.echo(
            f"written; now: hindlight mine {folder} --targets {folder / 'targets.ecsv'} --out {folder}-run", err=True
        )


@contextlib.contextmanager
def _logging(verbose: bool) -> Iterator[None]:
    logging.getLogger("hindlight").setLevel(logging.DEBUG if verbose else logging.INFO)
    yield


class _Silent:
    """A watcher that says nothing."""

    def stage(self, name: str, total: int) -> None:
        """Nothing to say."""

    def step(self, n: int = 1) -> None:
        """Nothing to say."""


class _Lines:
    """A watcher for an output that is no terminal: one line when a stage begins."""

    def stage(self, name: str, total: int) -> None:
        """Say the stage."""
        with read_by_someone():
            click.echo(f"hindlight: {name}" + (f", {total} steps" if total else ""), err=True)

    def step(self, n: int = 1) -> None:
        """Nothing to say between stages."""


class _Bar:
    """A watcher for a terminal: one progress bar a stage."""

    def __init__(self, progress: Progress) -> None:
        self.progress = progress
        self.task: Any = None

    def stage(self, name: str, total: int) -> None:
        """Begin a bar."""
        if self.task is not None:
            self.progress.remove_task(self.task)
        self.task = self.progress.add_task(name, total=total or None)

    def step(self, n: int = 1) -> None:
        """Move the bar."""
        if self.task is not None:
            self.progress.advance(self.task, n)


@contextlib.contextmanager
def _watching(quiet: bool, verbose: bool) -> Iterator[Any]:
    """Whoever shows how far a run is, on standard error."""
    with _logging(verbose):
        if quiet:
            yield _Silent()
        elif not sys.stderr.isatty():
            yield _Lines()
        else:
            columns = (TextColumn("{task.description}"), BarColumn(), MofNCompleteColumn(), TimeRemainingColumn())
            with Progress(*columns, console=Console(stderr=True), transient=True) as progress:
                yield _Bar(progress)


def _console() -> Console:
    """Standard output; wide enough for its tables where it is no terminal."""
    return PipedConsole(width=None if sys.stdout.isatty() else 160, highlight=False, soft_wrap=not sys.stdout.isatty())


def _simple_table(title: str, *names: str) -> Table:
    table = Table(title=title, title_justify="left", box=None, pad_edge=False)
    for name in names:
        table.add_column(name, no_wrap=name in ("name", "target", "channel"))
    return table


def _add(table: Table, *cells: object) -> None:
    """A row of plain text: what stands in a header or a target list is never taken for markup, and is one line."""
    table.add_row(*(Text(visible(str(cell))[:LONGEST_CELL]) for cell in cells))


def _print_result(result: Any) -> None:
    console = _console()
    table = result.table
    best = [row for row in table if not row["concerns"]][:BEST_ROWS]
    doubtful = [row for row in table if row["concerns"]]
    console.print(_candidates("best rows", best))
    if doubtful:
        console.print(_candidates("beyond chance, but a check failed", doubtful[:BEST_ROWS]))
        for row in doubtful[:BEST_ROWS]:
            console.print(f"  {visible(str(row['name']))}: {visible(str(row['concerns']))}", markup=False)
    for line in (result.run / "summary.txt").read_text(encoding="utf-8").splitlines():
        console.print(visible(line), markup=False)
    console.print(f"written to {result.run}: candidates.ecsv (.fits, .vot), channels.ecsv, rejects.ecsv", markup=False)


def _candidates(title: str, rows: list[Any]) -> Table:
    from hindlight.outcome import shown

    names, cells = shown(rows)
    table = _simple_table(title, *names)
    for row in cells:
        _add(table, *row)
    return table


def _print_inventory(found: Any) -> None:
    from hindlight.summary import settings_to_fill_in

    console = _console()
    names = ("channel", "frames", "first", "last", "exposure (s)", "beam (arcsec)", "depth")
    table = _simple_table("frames by instrument and channel", *names)
    for row in found.channels:
        _add(
            table,
            row.channel, str(row.n_frames), row.first[:10], row.last[:10], _short(row.exposure_s),
            f"{_short(row.beam_min)} to {_short(row.beam_max)}" if np.isfinite(row.beam_min) else "not stated",
            f"{_short(row.depth)} {row.unit}" if np.isfinite(row.depth) else "not stated",
        )  # fmt: skip
    console.print(table)
    _print_timeline(found.coverage)
    if found.targets:
        cover = _simple_table("frames that cover each target", "target", "frames", "channels")
        for target in found.targets:
            _add(cover, target.name, str(target.n_frames), str(target.n_channels))
        console.print(cover)
    for title, counted in (("set aside", found.rejects), ("taken for granted", found.assumptions)):
        table = _simple_table(title, "count", "word", "meaning")
        for entry in counted:
            _add(table, str(entry.count), entry.word, entry.meaning)
        console.print(table if counted else f"{title}: nothing")
    console.print(f"possible duplicates: {found.possible_duplicates} pairs, compared when mined")
    if found.deep_images:
        console.print(f"deep images that hold other frames: {found.deep_images}, kept apart from those when mined")
    for line in found.remarks:
        console.print(visible(line), markup=False)
    text = settings_to_fill_in(found.missing)
    if text:
        click.echo(
            "# what headers do not say: fill in what you know, take its # away, and give the file with --settings"
        )
        click.echo(text, nl=False)


def _print_timeline(coverage: Any) -> None:
    """A row of characters for each instrument, one character for each year or few years."""
    from hindlight.summary import timeline

    if not any(row.years for row in coverage):
        return
    on_terminal = sys.stdout.isatty()
    shades = BARS if on_terminal and "utf" in (sys.stdout.encoding or "").lower() else PLAIN_SHADES
    names = {row.instrument: _label(row.instrument, on_terminal) for row in coverage}
    margin = max(len(name) for name in names.values()) + 2
    lines = timeline(coverage, (shutil.get_terminal_size().columns if on_terminal else PLAIN_WIDTH) - margin)
    most = max(max(counts) for _, counts in lines.rows)
    columns = len(lines.rows[0][1])
    each = "a year" if lines.step == 1 else f"in {lines.step} years"
    click.echo(f"frames {each}, from 1 ({shades[0]}) to {most} ({_shade(most, most, shades)})")
    axis = "".join(f"{lines.first + i * lines.step:<10}" for i in range(0, columns, 10))
    click.echo(f"{'':{margin}}{axis.rstrip()}")
    undated = {row.instrument: f"  and {row.undated} without a date" if row.undated else "" for row in coverage}
    for instrument, counts in lines.rows:
        row = "".join(_shade(n, most, shades) for n in counts)
        click.echo(f"{names[instrument]:{margin}}{row}{undated[instrument]}".rstrip())


def _label(instrument: str, on_terminal: bool) -> str:
    """The name of an instrument, shortened, in one line; in plain letters where it is not for a terminal."""
    name = " ".join(instrument.split())[:LONGEST_LABEL] or "(no name)"
    return name if on_terminal else name.encode("ascii", "replace").decode()


def _shade(count: int, most: int, shades: str) -> str:
    """A blank for none, then the darker the more frames, by the logarithm."""
    if count == 0:
        return " "
    return shades[round((len(shades) - 1) * math.log(count) / math.log(most))] if most > 1 else shades[0]


def _print_completeness(run: Path, report: Any) -> None:
    """Completeness by kind and flux, the flux found in half of the cases by instrument; then what is to be said."""
    from hindlight import layout

    console = _console()
    for title, (names, rows) in (
        ("completeness in all frames in %, its 95 % interval below, by peak flux in median frame errors",
         layout.by_kind(report.table)),
        ("peak flux in median frame errors found in half of the cases", layout.half_found(report.table)),
    ):  # fmt: skip
        table = _simple_table(title, *names)
        for row in rows:
            _add(table, *row)
        console.print(table)
    console.print(layout.false_alarms(report.table), markup=False)
    for line in report.remarks:
        console.print(visible(line), markup=False)
    files = "completeness.ecsv, completeness_targets, _limits, _channels.ecsv (each .fits, .vot too)"
    console.print(f"written to {run}: {files}, completeness.txt", markup=False)


def _print_power(run: Path, files: tuple[Path, ...], quiet: bool, verbose: bool) -> None:
    """A statistic's report card, for each."""
    from hindlight.layout import half_text
    from hindlight.powers import report_cards
    from hindlight.study import Asked

    with _watching(quiet, verbose) as watcher:
        cards, remarks = report_cards(Asked(run, plugins=files), watcher)
    console = _console()
    kinds = list(cards[0].half) if cards else []
    heads = [name for kind in kinds for name in (kind, "half at")]
    table = _simple_table(
        "what each statistic finds by itself", "name", *heads, "nothing", "only it finds", "s per 1000"
    )
    for card in cards:
        found = [cell for kind in kinds for cell in (_short(card.power[kind]), half_text(card.half[kind], card.fluxes))]
        only = "" if card.only_here is None else card.only_here
        _add(table, card.plugin, *found, _short(card.power["nothing"]), only, _short(card.cost_s))
    for line in remarks:
        console.print(visible(line), markup=False)
    console.print(table)


def _print_plugins(loaded: Any) -> None:
    console = _console()
    table = _simple_table("plugins", "name", "kind", "origin", "columns and settings")
    for entry in loaded.loaded:
        columns = ", ".join(f"{c.name} ({c.about}, {c.unusual})" if c.unusual else c.name for c in entry.plugin.columns)
        _add(table, entry.plugin.name, entry.plugin.kind, f"{entry.origin}: {entry.source}", columns)
    console.print(table)


def _check_plugin(path: Path) -> None:
    """Run the conformance kit on a file's plugins; status 2 where one fails."""
    from hindlight import host, testing
    from hindlight.settings import Settings

    loaded = host.load(host.spec_from(Settings(), [path]))
    mine = [entry.plugin for entry in loaded.loaded if entry.origin == "file"]
    if not mine:
        raise UsageError(f"plugin file {path}: registers nothing; mark a register_... function with @hookimpl")
    problems = 0
    for plugin in mine:
        report = testing.examine(plugin)
        click.echo(f"{plugin.kind} {plugin.name}: {report.timing}")
        for problem in report.problems:
            problems += 1
            click.echo(f"  {problem}")
        if not report.problems:
            click.echo(f"  passes {report.n_checks} checks")
        for remark in report.remarks:
            click.echo(f"  note: {remark}")
    if problems:
        raise UsageError(
            f"plugin file {path}: {problems} checks failed; the lines above say which and how to mend them"
        )
