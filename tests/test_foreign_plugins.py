"""Plugins of strangers in whole runs: used, fenced and named."""

import subprocess
import sys
from pathlib import Path

import pyarrow.parquet as pq
import pytest
from astropy.table import Table

from hindlight import host
from test_mine import DEMO, arguments, candidates, mine, small

STRANGER = Path(__file__).parent / "third_party" / "stranger_plugin"


def test_a_strangers_statistic_works_as_file_and_as_distribution(tmp_path):
    """The same statistic gives the same table as a file and installed from outside, in one process and in two."""
    folder = small(tmp_path, n_frames=10, per_field=40)
    site = tmp_path / "site"
    install = [sys.executable, "-m", "pip", "install", "--quiet", "--no-index", "--no-deps", "--no-build-isolation",
               "--target", str(site), str(STRANGER)]  # fmt: skip
    subprocess.run(install, check=True, capture_output=True)
    tables = []
    for workers in (1, 2):
        run = tmp_path / f"file{workers}"
        mine(*arguments(folder, run), "--plugin", STRANGER / "longest_run.py", "--workers", workers)
        tables.append((run / "candidates.ecsv").read_bytes())
        run = tmp_path / f"site{workers}"
        command = [sys.executable, "-m", "hindlight", "mine", "-q", *map(str, arguments(folder, run))]
        command += ["--workers", str(workers)]
        done = subprocess.run(command, capture_output=True, text=True, check=False, env=with_path(site))
        assert done.returncode == 0, done.stderr
        tables.append((run / "candidates.ecsv").read_bytes())
    assert len(set(tables)) == 1
    table = candidates(tmp_path / "site2")
    assert table["flare"]["longest_run_length"] == 1
    assert table["steady"]["longest_run_length"] == 0, "a steady source has no run of bright measurements"
    controls = pq.read_table(tmp_path / "site2" / "controls.parquet")
    assert "longest_run_length" in controls.column_names


def test_alone_on_the_demo_it_takes_no_steady_source_for_a_variable(tmp_path):
    """The README's statistic by itself: what varies comes first, steady sources of S/N 10 in hundreds of frames last."""
    loaded = host.load(host.PluginSpec())
    others = [part for p in (*loaded.statistics, *loaded.period_searches) for part in ("--without", p.name)]
    run = tmp_path / "run"
    mine(DEMO, "--targets", DEMO / "targets.ecsv", "--out", run, "--plugin", STRANGER / "longest_run.py", *others)
    table = candidates(run)
    truth = {str(row["name"]): str(row["kind"]) for row in Table.read(DEMO / "truth.ecsv")}
    steady = [table[name] for name, kind in truth.items() if kind.endswith("steady")]
    assert max(row["peak_snr"] for row in steady) > 10
    assert {str(row["standing"]) for row in steady} == {"steady"}
    assert min(row["p_value"] for row in steady) > 0.05
    varying = [table[name] for name, kind in truth.items() if kind in ("pulser", "sinusoid", "flare")]
    assert max(row["p_value"] for row in varying) < 0.02


def with_path(folder):
    """This process's environment with a folder put first on the module path, for worker processes too."""
    import os

    return {**os.environ, "PYTHONPATH": str(folder)}


BAD_PLUGINS = """
from dataclasses import dataclass
from hindlight import *


@dataclass(frozen=True)
class Raiser(Statistic):
    columns = (Column("a", "doc", unusual="high"),)

    def compute(self, curve):
        raise RuntimeError("no, thank you")


@dataclass(frozen=True)
class Misnamer(Statistic):
    columns = (Column("a", "doc", unusual="high"),)

    def compute(self, curve):
        return {"b": 1.0}


@dataclass(frozen=True)
class Scribbler(Statistic):
    columns = (Column("a", "doc", unusual="high"),)

    def compute(self, curve):
        curve.flux[:] = 0
        return {"a": 1.0}


@dataclass(frozen=True)
class Quitter(Statistic):
    columns = (Column("a", "doc", unusual="high"),)

    def compute(self, curve):
        raise SystemExit


@hookimpl
def register_statistics():
    return [Raiser, Misnamer, Scribbler, Quitter]
"""


@pytest.mark.parametrize("workers", [1, 2])
def test_bad_plugins_are_fenced(tmp_path, workers):
    """One that raises, one that misnames a column, one that writes into its input, one that quits: each is named."""
    folder = small(tmp_path)
    (tmp_path / "bad.py").write_text(BAD_PLUGINS, encoding="utf-8")
    mine(*arguments(folder, tmp_path / "run"), "--plugin", tmp_path / "bad.py", "--workers", workers)
    faults = {str(row["plugin"]): row for row in Table.read(tmp_path / "run" / "plugin_faults.ecsv")}
    assert set(faults) == {"raiser", "misnamer", "scribbler", "quitter"}
    assert str(faults["raiser"]["fault"]) == "RuntimeError"
    assert str(faults["raiser"]["line"]) == "bad.py:11"
    assert "undeclared 'b'" in str(faults["misnamer"]["detail"])
    assert "read-only" in str(faults["scribbler"]["detail"])
    mine(*arguments(folder, tmp_path / "plain"))
    good, plain = candidates(tmp_path / "run"), candidates(tmp_path / "plain")
    assert {n: r["p_value"] for n, r in good.items()} == {n: r["p_value"] for n, r in plain.items()}


def test_an_estimator_that_fails_sets_frames_aside(tmp_path):
    """What an estimator raises is said for each frame, and the run ends as a run without usable frames does."""
    folder = small(tmp_path, n_frames=10, per_field=20)
    text = (
        "from dataclasses import dataclass\nfrom hindlight import *\n@dataclass(frozen=True)\nclass Bad(Estimator):\n"
    )
    text += (
        "    def radius(self, beam):\n        return 3.0\n    def measure(self, stamps):\n        raise KeyError('x')\n"
    )
    text += "@hookimpl\ndef register_estimators():\n    return [Bad]\n"
    (tmp_path / "bad.py").write_text(text, encoding="utf-8")
    (tmp_path / "s.toml").write_text('[photometry]\nestimator = "bad"\n', encoding="utf-8")
    mine(*arguments(folder, tmp_path / "run"), "--plugin", tmp_path / "bad.py", status=3)
    rejects = Table.read(tmp_path / "run" / "rejects.ecsv")
    assert len(rejects) == 10
    assert set(rejects["reason"]) == {"not_measured"}
    assert "KeyError" in str(rejects["detail"][0])
