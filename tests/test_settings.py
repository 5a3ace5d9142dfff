"""Settings: read, refused with the name at fault, and written so that they can be read again."""

import pytest

from hindlight.errors import UsageError
from hindlight.settings import Settings, read_settings, render, settings_from


def test_defaults_survive_being_written_and_read(tmp_path):
    """The text that `hindlight settings` prints, read back, is the defaults."""
    path = tmp_path / "s.toml"
    path.write_text(render(Settings()), encoding="utf-8")
    assert read_settings(path) == Settings()


def test_values_sites_and_plugin_tables_survive(tmp_path):
    """Changed values, a site with a space in its name and a plugin's table come back as they were given."""
    given = {
        "controls": {"per_field": 64},
        "sites": {"north array": [5.2e6, 1.9e6, -3.1e6]},
        "photometry": {"fwhm_arcsec": {"cam 1": 2.5}},
    }
    first = settings_from(given, "test")
    path = tmp_path / "s.toml"
    path.write_text(render(first), encoding="utf-8")
    assert read_settings(path) == first
    assert first.controls.per_field == 64


@pytest.mark.parametrize(
    ("data", "words"),
    [
        ({"contols": {}}, "did you mean 'controls'"),
        ({"controls": {"per_feild": 3}}, "did you mean 'per_field'"),
        ({"controls": {"per_field": "many"}}, "expected int"),
        ({"controls": {"per_field": True}}, "expected int"),
        ({"controls": {"shared_frames": 1.5}}, "out of range"),
        ({"ranking": {"level": float("nan")}}, "out of range"),
        ({"controls": 3}, "must be a table"),
        ({"sites": {"a": [1, 2, 3]}}, "in metres from the Earth's centre"),
        ({"plugin": {"peak": 3}}, "must be a table"),
    ],
)
def test_mistakes_are_named(data, words):
    """A misspelt or ill-typed setting is refused with its name and what was expected."""
    with pytest.raises(UsageError, match=words):
        settings_from(data, "test")


def test_missing_and_broken_files(tmp_path):
    """A file that is not there or not TOML is one line, not a traceback."""
    with pytest.raises(UsageError, match="no such file"):
        read_settings(tmp_path / "none.toml")
    (tmp_path / "bad.toml").write_text("[controls\n", encoding="utf-8")
    with pytest.raises(UsageError, match="not readable as TOML"):
        read_settings(tmp_path / "bad.toml")


def test_whole_numbers_serve_as_reals():
    """A real-valued setting may be written without a point."""
    assert settings_from({"controls": {"separation": 3}}, "t").controls.separation == 3.0
