"""A reader that goes away ends a command quietly, and nothing else does."""

import os
import subprocess
import sys
from contextlib import contextmanager

import pytest

import skies
from hindlight import cli, outlet


@contextmanager
def unread(monkeypatch):
    """Within, standard output is a pipe that nobody reads any more."""
    reading, writing = os.pipe()
    os.close(reading)
    with os.fdopen(writing, "w", encoding="utf-8") as stream, monkeypatch.context() as patch:
        patch.setattr(sys, "stdout", stream)
        yield
        outlet.let_go()


@pytest.fixture(scope="module")
def archive(tmp_path_factory):
    """Three frames."""
    folder = tmp_path_factory.mktemp("outlet")
    skies.write_sky(folder, skies.Sky(n_frames=3, size=60), [], seed=1)
    return folder


@pytest.mark.parametrize(
    "arguments", [["settings"], ["plugins"], ["inventory", "ARCHIVE", "-q"], ["--help"], ["mine", "--help"]]
)
def test_a_reader_that_has_gone_ends_a_command_quietly(archive, monkeypatch, capsys, arguments):
    """Whatever prints ends with the status of SIGPIPE (128 + 13, POSIX shells) and without a word."""
    with unread(monkeypatch):
        status = cli.run_command([str(archive) if a == "ARCHIVE" else a for a in arguments])
    assert status == 141
    assert capsys.readouterr().err == ""


def test_a_process_ends_quietly_too(archive):
    """Nor does the interpreter complain of what is left in its buffer when it ends."""
    reading, writing = os.pipe()
    os.close(reading)
    with os.fdopen(writing, "wb") as output:
        done = subprocess.run(
            [sys.executable, "-m", "hindlight", "settings"], stdout=output, stderr=subprocess.PIPE, check=False
        )
    assert (done.returncode, done.stderr) == (141, b"")


def test_another_broken_pipe_is_an_error(monkeypatch, capsys):
    """A pipe that breaks while the output is read is an error inside the program, not a quiet end."""

    def broken(*_args):
        raise BrokenPipeError(32, "Broken pipe")

    monkeypatch.setattr(cli, "_print_plugins", broken)
    assert cli.run_command(["plugins"]) == 1
    assert "a pipe that is not the output broke" in capsys.readouterr().err
