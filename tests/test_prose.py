"""What README.md and DEVELOPERS.md say is what the code does."""

import re
from pathlib import Path

from hindlight import cli, hookspecs, host
from hindlight.schema import CANDIDATES, STANDINGS, Flag
from hindlight.settings import Settings

TOP = Path(__file__).parents[1]
README = (TOP / "README.md").read_text(encoding="utf-8")
DEVELOPERS = (TOP / "DEVELOPERS.md").read_text(encoding="utf-8")


def test_the_plugin_shown_is_the_one_tested():
    """The README's plugin is, to the letter, the file that the tests use as a file and as a distribution."""
    (shown,) = re.findall(r"```python\n(.*?)```", README, re.S)
    tested = (TOP / "tests" / "third_party" / "stranger_plugin" / "longest_run.py").read_text(encoding="utf-8")
    assert shown == tested
    assert sum(1 for line in shown.splitlines() if line.strip()) <= 20


def test_every_core_column_is_explained():
    """The README's column table names every column of the candidate table's core, in order."""
    section = README.split("### The columns of the candidate table")[1].split("| standing |")[0]
    named = re.findall(r"`([a-z_]+)`", section)
    wanted = [c.name for c in CANDIDATES]
    assert [n for n in dict.fromkeys(named) if n in wanted] == wanted


def test_times_for_arithmetic_are_named():
    """Each column of a shipped plugin that is an instant says its zero and unit, and the README names it among those."""
    found = host.load(host.spec_from(Settings())).loaded
    times = [(e.plugin.name, c) for e in found for c in e.plugin.columns if getattr(c, "is_time", False)]
    assert len(times) >= 3
    sentence = README.split("Columns with dates for people")[1].split("Each column says")[0]
    for name, column in times:
        assert f"`{name}_{column.name}`" in sentence
        assert column.unit == "s"
        assert "seconds from J2000.0 TDB at the barycentre" in column.doc
    assert "2451545 + t / 86400" in sentence


def test_every_standing_flag_and_command_is_explained():
    """Each standing, flag bit and command is in the README, and no command that does not exist."""
    for word in STANDINGS:
        assert f"| `{word}` |" in README
    for flag in Flag:
        assert re.search(rf"\b{flag.value} \w", README)
    shown = set(re.findall(r"`hindlight (\w+)", README))
    assert shown == set(cli.cli.commands)


def test_every_hook_is_named_for_contributors():
    """DEVELOPERS.md lists the hooks there are."""
    hooks = [name for name in vars(hookspecs) if name.startswith("register_")]
    assert len(hooks) == 5
    assert set(re.findall(r"`(register_\w+)`", DEVELOPERS)) == set(hooks)


def test_every_module_is_on_the_map():
    """DEVELOPERS.md's map names every module."""
    for path in (TOP / "src" / "hindlight").glob("*.py"):
        if not path.stem.startswith("__"):
            assert f"`{path.stem}`" in DEVELOPERS, path.stem


def test_ci_runs_the_two_commands_as_printed():
    """The first two shell blocks of the README are the commands that CI runs."""
    first, second = re.findall(r"```sh\n(.*?)```", README, re.S)[:2]
    assert "hindlight mine demo_archive" in first
    assert "pytest" in second
    assert "README.md" in (TOP / ".ci" / "run").read_text(encoding="utf-8")
