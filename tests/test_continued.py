"""Runs on one process or several, extended, killed and continued: the same bytes in the end."""

import shutil
import signal
import subprocess
import sys
import time
from pathlib import Path

import numpy as np
from astropy.table import Table
from distributed import LocalCluster

from hindlight import crew
from test_foreign_plugins import STRANGER
from test_mine import arguments, candidates, mine, small


def contents(run):
    """The bytes of every table that must not depend on how the work was done."""
    names = ["candidates.ecsv", "candidates.fits", "candidates.vot", "channels.ecsv", "rejects.ecsv", "controls.parquet",
             "statistics.parquet", "positions.parquet", "frames.parquet"]  # fmt: skip
    parts = sorted((run / "measurements").rglob("*.parquet"))
    return {str(p.relative_to(run)): p.read_bytes() for p in [*(run / n for n in names), *parts]}


def test_same_bytes_for_any_number_of_workers(tmp_path):
    """One process, two processes and four write the same bytes, with a second pass for the flare."""
    folder = small(tmp_path, per_field=50, most=8192)
    mine(*arguments(folder, tmp_path / "one"), "--workers", 1)
    expected = contents(tmp_path / "one")
    for workers in (2, 4):
        mine(*arguments(folder, tmp_path / f"w{workers}"), "--workers", workers)
        found = contents(tmp_path / f"w{workers}")
        assert found.keys() == expected.keys()
        for name, data in expected.items():
            assert found[name] == data, name
    flare = candidates(tmp_path / "one")["flare"]
    assert flare["standing"] == "single"
    assert flare["n_controls"] > 50


def test_a_scheduler_that_exists_is_used(tmp_path, monkeypatch):
    """--scheduler gives the same bytes, file plugins travel to its workers, and a wrong address is one line."""
    folder = small(tmp_path, n_frames=12, per_field=40)
    plugin = tmp_path / "longest_run.py"
    shutil.copy(STRANGER / "longest_run.py", plugin)
    mine(*arguments(folder, tmp_path / "one"), "--plugin", plugin)
    expected = contents(tmp_path / "one")
    with LocalCluster(n_workers=1, threads_per_worker=1, dashboard_address="127.0.0.1:0", silence_logs=50) as cluster:
        address = cluster.scheduler_address
        mine(*arguments(folder, tmp_path / "two"), "--plugin", plugin, "--scheduler", address)
    assert contents(tmp_path / "two") == expected
    monkeypatch.setattr(crew, "SCHEDULER_TIMEOUT_S", 1)
    mine(*arguments(folder, tmp_path / "three"), "--scheduler", "tcp://127.0.0.1:9", status=2)


def test_new_files_and_targets_extend_a_finished_run(tmp_path):
    """Frames added later are measured, and nothing else again; a target added later gets a row; a changed file is said.

    Controls of a second pass are measured in new frames as all others are.
    """
    folder = small(tmp_path, per_field=50, most=8192)
    late = sorted((folder / "frames").iterdir())[-6:]
    (tmp_path / "aside").mkdir()
    for path in late:
        shutil.move(path, tmp_path / "aside")
    run = tmp_path / "run"
    mine(*arguments(folder, run))
    assert candidates(run)["flare"]["n_frames"] == 18
    n_controls = candidates(run)["flare"]["n_controls"]
    assert n_controls > 50
    before = {p: (p.stat().st_ino, p.stat().st_mtime_ns) for p in (run / "measurements").rglob("*.parquet")}
    for path in late:
        shutil.move(tmp_path / "aside" / path.name, path)
    with (folder / "targets.csv").open("a", encoding="utf-8") as stream:
        stream.write("later,150.0,-30.05\n")
    mine(*arguments(folder, run))
    table = candidates(run)
    assert table["flare"]["n_frames"] == 24
    assert table["later"]["n_frames"] == 24
    assert table["flare"]["n_controls"] >= 0.9 * n_controls
    for path, stat in before.items():
        assert (path.stat().st_ino, path.stat().st_mtime_ns) == stat
    late[0].unlink()
    data = late[1].read_bytes()
    late[1].write_bytes(data + b"\0" * 2880)
    mine(*arguments(folder, run))
    reasons = sorted(str(row["reason"]) for row in Table.read(run / "rejects.ecsv"))
    assert reasons == ["changed", "vanished"]
    assert candidates(run)["flare"]["n_frames"] == 24


def test_changed_plugins_only_judge_again(tmp_path):
    """Leaving out a statistic changes the table without a pixel being read."""
    folder = small(tmp_path)
    run = tmp_path / "run"
    mine(*arguments(folder, run))
    before = {p: p.stat().st_mtime_ns for p in (run / "measurements").rglob("*.parquet")}
    mine(*arguments(folder, run), "--without", "stetson", "--plugin", STRANGER / "longest_run.py")
    table = Table.read(run / "candidates.ecsv")
    assert "longest_run_length" in table.colnames
    assert "stetson_j" not in table.colnames
    mine(*arguments(folder, run)[:-2])
    table = Table.read(run / "candidates.ecsv")
    assert "longest_run_length" not in table.colnames
    assert "stetson_j" in table.colnames
    assert before == {p: p.stat().st_mtime_ns for p in (run / "measurements").rglob("*.parquet")}


def test_a_damaged_part_is_named_and_made_anew(tmp_path, capsys):
    """A flipped byte in a part is found by its checksum and named; deleted, the same command gives the same table."""
    folder = small(tmp_path)
    run = tmp_path / "run"
    mine(*arguments(folder, run))
    before = (run / "candidates.ecsv").read_bytes()
    part = sorted((run / "measurements").rglob("*.parquet"))[1]
    data = bytearray(part.read_bytes())
    data[len(data) // 3] ^= 0x10
    part.write_bytes(data)
    mine(*arguments(folder, run), status=2)
    assert f"{part.name}: is damaged" in capsys.readouterr().err
    part.unlink()
    mine(*arguments(folder, run))
    assert (run / "candidates.ecsv").read_bytes() == before


def test_killed_ten_times_and_continued(tmp_path):
    """SIGKILL at ten random moments, continued each time: the same table, and no finished part written again."""
    folder = small(tmp_path, n_frames=20, size=80, per_field=40, batch=1, most=8192)
    mine(*arguments(folder, tmp_path / "quiet"))
    assert (tmp_path / "quiet" / "measurements" / "round-001").is_dir()  # of a second pass
    run = tmp_path / "run"
    command = [sys.executable, "-m", "hindlight", "mine", "-q", *map(str, arguments(folder, run))]
    rng = np.random.default_rng(17)
    start = time.perf_counter()
    assert subprocess.run([*command[:-3], str(tmp_path / "timed"), *command[-2:]], check=False).returncode == 0
    whole = time.perf_counter() - start
    finished: dict[Path, tuple[int, int]] = {}
    killed = 0
    for _ in range(10):
        process = subprocess.Popen(command)
        try:
            process.wait(timeout=whole * rng.uniform(0.2, 1.0))
        except subprocess.TimeoutExpired:
            process.send_signal(signal.SIGKILL)
            process.wait()
            killed += 1
        parts = {p: (p.stat().st_ino, p.stat().st_mtime_ns) for p in (run / "measurements").rglob("batch-*.parquet")}
        assert finished.items() <= parts.items()
        finished = parts
    assert killed >= 5
    assert subprocess.run(command, check=False).returncode == 0
    assert all((p.stat().st_ino, p.stat().st_mtime_ns) == stat for p, stat in finished.items())
    assert (run / "candidates.ecsv").read_bytes() == (tmp_path / "quiet" / "candidates.ecsv").read_bytes()
    assert not list(run.rglob(".*.part"))
