"""Plugins found, loaded, refused and described."""

from pathlib import Path

import pytest

from hindlight import host
from hindlight.errors import HindlightError, UsageError
from hindlight.settings import Settings, settings_from

LONGEST_RUN = Path(__file__).parent / "third_party" / "stranger_plugin" / "longest_run.py"
START = "from dataclasses import dataclass\nfrom hindlight import *\n"


def load(tmp_path, text, settings=None, name="mine.py"):
    """The plugins with one file of this text."""
    path = tmp_path / name
    path.write_text(text, encoding="utf-8")
    return host.load(host.spec_from(settings or Settings(), [path]))


def statistic(body, decorator="@dataclass(frozen=True)", columns='(Column("a", "doc"),)'):
    """The text of a plugin file with one statistic."""
    return (
        f"{START}{decorator}\nclass Mine(Statistic):\n    columns = {columns}\n{body}\n"
        "@hookimpl\ndef register_statistics():\n    return [Mine]\n"
    )


def test_shipped_plugins_are_all_found():
    """Each of the five kinds is shipped with at least one plugin, found by entry point, sorted by name."""
    found = host.load(host.PluginSpec())
    names = [entry.plugin.name for entry in found.loaded if entry.origin == "shipped"]
    assert names == sorted(names)
    assert {"chi_square", "von_neumann", "stetson", "brightest", "lomb_scargle", "peak", "psf", "aperture"} <= set(
        names
    )
    assert {"bayesian_blocks", "distribution", "duty_cycle", "epoch_activity", "structure_function"} <= set(names)
    assert {e.plugin.kind for e in found.loaded} == {
        "dialect", "estimator", "statistic", "period_search", "consistency_check"
    }  # fmt: skip


def test_a_file_plugin_is_loaded_with_its_settings():
    """A file's plugin takes its [plugin.NAME] table, and its name is the class in snake case."""
    settings = settings_from({"plugin": {"longest_run": {"threshold": 4}}}, "t")
    found = host.load(host.spec_from(settings, [LONGEST_RUN]))
    mine = [e for e in found.loaded if e.origin == "file"]
    assert [(e.plugin.name, e.plugin.threshold) for e in mine] == [("longest_run", 4.0)]


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("import nothing_of_this_name\n", "fails: ModuleNotFoundError"),
        ("def broken(:\n", "fails: SyntaxError.*line 1"),
        (START + "@hookimpl\ndef register_statistic():\n    return []\n", "register_statistic.*the hooks are"),
        (
            statistic("    t: float = setting(1.0, 'x')", decorator=""),
            r"put @dataclass\(frozen=True\) above class Mine",
        ),
        (statistic("    t: float = setting(1.0, 'x')", decorator="@dataclass"), "frozen"),
        (statistic("    t: float = 1.0"), "must be made by setting"),
        (statistic("", columns="('a',)"), "must be Column"),
        (statistic("", columns="()"), "at least one column"),
        (statistic("", columns='(Column("a b", "doc"),)'), "is not a plain word"),
        (
            statistic("", columns='(Column("a", "doc", unusual="hi"),)'),
            "mine.py fails: .*'a': unusual must be one of 'high', 'low', 'both', None, got 'hi'",
        ),
        (statistic("", columns='(Column("a", "doc", unusual="Low"),)'), "got 'Low'"),
        (
            statistic("", columns='(Column("a", "doc", unusual="low", about="variatoin"),)'),
            "mine.py fails: .*'a': about must be one of 'variation', 'presence', got 'variatoin'",
        ),
        (statistic("    name = 'chi_square'"), "'chi_square' stands twice"),
        (statistic("    name = 'Big Name'"), "snake case"),
        (statistic("    name = 'quiet'", columns='(Column("BEFORE", "doc"),)'), "'quiet_before'.*is taken"),
        (
            START + "@hookimpl\ndef register_statistics():\n    return [3]\n",
            "must return classes derived from Statistic",
        ),
        (START + "@hookimpl\ndef register_statistics():\n    raise OSError('no')\n", "OSError: no"),
    ],
)
def test_mistakes_in_a_plugin_are_named(tmp_path, text, words):
    """What is wrong with a plugin file is said in one line before any frame is touched."""
    with pytest.raises(UsageError, match=words):
        load(tmp_path, text)


@pytest.mark.parametrize(
    ("table", "words"),
    [
        ({"longest_rum": {}}, "no plugin 'longest_rum'"),
        ({"longest_run": {"treshold": 3.0}}, "did you mean 'threshold'"),
        ({"longest_run": {"threshold": -1.0}}, "out of range"),
    ],
)
def test_mistakes_in_plugin_settings_are_named(table, words):
    """An unknown plugin, an unknown setting and one out of range are each refused by name."""
    settings = settings_from({"plugin": table}, "t")
    with pytest.raises(UsageError, match=words):
        host.load(host.spec_from(settings, [LONGEST_RUN]))


def test_without_leaves_out_and_names_what_is_unknown():
    """--without removes a plugin, and a misspelt name is refused."""
    found = host.load(host.spec_from(Settings(), [], ["stetson"]))
    assert "stetson" not in [e.plugin.name for e in found.loaded]
    with pytest.raises(UsageError, match="no plugin 'stetsom'"):
        host.load(host.spec_from(Settings(), [], ["stetsom"]))


def test_a_worker_with_other_plugins_is_refused():
    """A spec that expects another fingerprint does not load: a worker must have the same plugins."""
    with pytest.raises(HindlightError, match="other plugins"):
        host.load(host.PluginSpec(expected="0" * 64))


def test_fingerprint_follows_source_and_settings(tmp_path):
    """A changed source or setting changes the fingerprint; the same again does not."""
    text = LONGEST_RUN.read_text(encoding="utf-8")
    first = load(tmp_path, text).fingerprint()
    assert load(tmp_path, text).fingerprint() == first
    assert load(tmp_path, text + "# changed\n").fingerprint() != first
    settings = settings_from({"plugin": {"longest_run": {"threshold": 4}}}, "t")
    assert load(tmp_path, text, settings).fingerprint() != first
