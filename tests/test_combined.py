"""Parts of the program that meet in one run: what holds for each by itself holds for them together."""

from pathlib import Path

import numpy as np
import pytest
from astropy.table import Table

import skies
from hindlight import cli

BEAM = 40.0
FRAMES = 16
SKY = skies.Sky(n_frames=FRAMES, size=160, fwhm_pixels=4.0, gain_scatter=0.05)
SETTINGS = "[controls]\nper_field = 60\n[search]\ncontrols = 40\nsigmas = 1.6\n"


def command(*words: object) -> int:
    """The exit status of a command in this process."""
    return cli.run_command([str(word) for word in words])


def wild(name: str, east: float, north: float, flux: float, seed: int, varies: float = 0.0) -> skies.Source:
    """A source with 2 % of its own in every frame, which calibration cannot take off."""
    own = 0.02 * np.random.default_rng(seed).standard_normal(FRAMES) + varies * np.sin(1.7 * np.arange(FRAMES))
    return skies.Source(name, east, north, lambda number, _day, _stokes: flux * (1.0 + own[number]))


def write(folder: Path, sources: list[skies.Source], lists: dict[str, list[tuple[skies.Source, float]]]) -> None:
    """Frames of these sources among steady ones, settings, and lists of targets with their errors in arcsec."""
    around = [12.5 * BEAM * np.array((np.cos(0.9 * k), np.sin(0.9 * k))) for k in range(7)]
    steady = [wild("", *place, 150.0 + 10 * k, k) for k, place in enumerate(around)]
    skies.write_sky(folder / "frames", SKY, [*sources, *steady], 1)
    (folder / "s.toml").write_text(SETTINGS, encoding="utf-8")
    for name, listed in lists.items():
        head, *rows = skies.target_text([source for source, _ in listed], SKY).splitlines()
        lines = [f"{head},pos_err", *[f"{row},{error}" for row, (_, error) in zip(rows, listed, strict=True)]]
        (folder / name).write_text("\n".join(lines) + "\n", encoding="utf-8")


def mine(folder: Path, run: str, targets: str) -> dict[str, dict[str, object]]:
    """The rows of a run's candidate table by name."""
    words = ["mine", folder / "frames", "--targets", folder / targets, "--out", folder / run, "--settings",
             folder / "s.toml", "--workers", 1, "-q", "--without", "lomb_scargle"]  # fmt: skip
    assert command(*words) == 0
    return {str(row["name"]): dict(row) for row in Table.read(folder / run / "candidates.ecsv")}


@pytest.fixture(scope="module")
def extended(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A run to which one of its comparisons, which varies by 7 %, was added as a target; and one of both at once."""
    folder = tmp_path_factory.mktemp("extended")
    blank, star = skies.Source("blank", 0.0, 0.0), wild("star", 0.0, 5 * BEAM, 200.0, 20, 0.07)
    write(folder, [star], {"first.csv": [(blank, 0.0)], "both.csv": [(blank, 0.0), (star, 0.0)]})
    mine(folder, "run", "first.csv")
    return folder


def test_a_comparison_that_becomes_a_target_serves_no_more(extended: Path) -> None:
    """As in a run of its own: other comparisons alone tell the gains of its frames, and how steady a source can be."""
    before = (extended / "run" / "summary.txt").read_text(encoding="utf-8")
    assert "tied by up to 8 comparisons" in before
    later, own = (mine(extended, run, "both.csv")["star"] for run in ("run", "own"))
    assert "tied by up to 7 comparisons" in (extended / "run" / "summary.txt").read_text(encoding="utf-8")
    for column in ("peak_snr", "chi_square_reduced", "p_empirical"):
        assert later[column] == pytest.approx(own[column], rel=0.1), column
    assert later["n_effective"] < 8 < later["n_controls"]
    assert "that count as 7" in str(later["notes"])


GRID = """[completeness]
per_cell = 4
fluxes = [30.0]
pulse_periods = [1200.0]
duty_cycles = [0.3]
smooth_periods = [864000.0]
pixels = 1
"""


def test_completeness_of_searched_targets_alone_says_why_there_is_none(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    """Not that controls are wanting; with a target at its place beside them, that is served and they are left out."""
    searched = [(skies.Source("a", 0.0, 0.0), 1.02 * BEAM), (skies.Source("b", 6 * BEAM, 0.0), 1.02 * BEAM)]
    placed = skies.Source("placed", 0.0, 4 * BEAM, 60.0)
    write(tmp_path, [placed], {"searched.csv": searched, "more.csv": [*searched, (placed, 0.0)]})
    (tmp_path / "s.toml").write_text(SETTINGS.replace("60", "60\nfield_size_deg = 0.1"), encoding="utf-8")
    (tmp_path / "grid.toml").write_text(GRID, encoding="utf-8")
    mine(tmp_path, "run", "searched.csv")
    assert command("completeness", tmp_path / "run", "-q") == 3
    assert "all 2 targets were searched within their position errors" in capsys.readouterr().err
    mine(tmp_path, "run", "more.csv")
    assert command("completeness", tmp_path / "run", "--settings", tmp_path / "grid.toml", "-q") == 0
    said = (tmp_path / "run" / "completeness.txt").read_text(encoding="utf-8")
    assert "2 targets that were searched" in said
    assert "controls are left out" not in said


def test_a_target_among_sidelobes_says_which_controls_it_lacks(tmp_path: Path) -> None:
    """In noise seven times that of all controls there is none for it: no p-value, undecided, and the reason is said."""
    y, x = np.mgrid[:160, :160] - 79.5
    rng = np.random.default_rng(4)
    near = 1.0 + 6.0 * (np.hypot(x, y) < 38)
    noisy = skies.Sky(
        n_frames=12, size=160, noise="white", rms=1.0, backdrop=lambda _k: near * rng.standard_normal(x.shape)
    )
    spots = [skies.Source("middle", 0.0, 0.0), skies.Source("aside", 550.0, 0.0)]
    skies.write_sky(tmp_path / "frames", noisy, [], 2)
    (tmp_path / "t.csv").write_text(skies.target_text(spots, noisy), encoding="utf-8")
    (tmp_path / "s.toml").write_text("[controls]\nper_field = 40\nseparation = 13.0\n", encoding="utf-8")
    rows = mine(tmp_path, "run", "t.csv")
    assert rows["middle"]["standing"] == "undecided"
    assert rows["middle"]["n_controls"] == 0
    assert "no control serves this target" in str(rows["middle"]["notes"])
    assert "more controls were left out, whose noise is unlike its own by more than a factor 3" in str(
        rows["middle"]["notes"]
    )
    assert rows["aside"]["n_controls"] >= 8
    assert "left out" not in str(rows["aside"]["notes"])


@pytest.mark.parametrize("wanted", [0, 1])
def test_a_search_with_no_control_or_one_is_undecided_and_says_so(tmp_path: Path, wanted: int) -> None:
    """Nothing is said of such a target but that there was nothing to hold it against."""
    write(tmp_path, [], {"t.csv": [(skies.Source("a", 0.0, 0.0), 1.02 * BEAM)]})
    (tmp_path / "s.toml").write_text(SETTINGS.replace("controls = 40", f"controls = {wanted}"), encoding="utf-8")
    row = mine(tmp_path, "run", "t.csv")["a"]
    assert (row["n_controls"], row["standing"]) == (wanted, "undecided")
    said = (tmp_path / "run" / "summary.txt").read_text(encoding="utf-8")
    assert f"with {wanted} control{'' if wanted else 's'} searched alike" in said
    assert "1 control cannot decide at this level" in str(row["notes"]) or not wanted
