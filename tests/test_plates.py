"""Photographic plates from header to candidate table: each answers light in its own way, and steady stars are steady."""

from __future__ import annotations

import shutil
from pathlib import Path

import numpy as np
import pyarrow.parquet as pq
import pytest
from astropy.io import fits
from astropy.table import Table

import skies
from hindlight import cli, host
from hindlight.archive import walk
from hindlight.channels import assign
from hindlight.facts import FrameFacts, PlaneAxes
from hindlight.settings import Channels, settings_from
from hindlight_plugins.plate_headers import PlateHeaders
from made import cards_of, header, write

PLATES = 24
POOR = 5  # plates that show few stars: their first
FLARE = 13
SKY = 0.6  # of the exposure at which the density is half of the highest
FWHM = 4.0
NOISE = 0.03
NORTH = skies.Sky(instrument="scanner", n_frames=PLATES, size=260, fwhm_pixels=FWHM, unit="density", noise="white",
                  extra={"EMULSION": "PX40 B", "FILTER": "Y 38", "PLATENUM": 7})  # fmt: skip


def densities(light: np.ndarray, rng: np.random.Generator, exposure: float) -> np.ndarray:
    """What a plate makes of light: an S-shaped curve of density, of a steepness, depth and speed of its own."""
    steepness, deepest, speed = rng.uniform(1.2, 1.8), rng.uniform(2.5, 4.0), np.exp(0.25 * rng.standard_normal())
    exposed = np.maximum(exposure * speed * (SKY + light), 0.0) ** steepness
    return deepest * exposed / (1.0 + exposed)


def stars() -> list[skies.Source]:
    """Stars that span a factor of 40, a target that is as bright as the middle ones and one that flares."""
    rng = np.random.default_rng(3)
    places = [s for s in skies.lattice(49, 340.0, "star") if np.hypot(s.east, s.north) > 1]
    fluxes = 10 ** rng.uniform(-0.6, 1.0, len(places))
    some = [
        skies.Source(s.name, s.east + 25 * rng.uniform(-1, 1), s.north, f) for s, f in zip(places, fluxes, strict=True)
    ]
    flaring = skies.Source("flaring", 0.0, 0.0, lambda number, *_: 2.5 if number == FLARE else 0.5)
    return [flaring, *some]


def write_plates(folder: Path, sky: skies.Sky, sources: list[skies.Source], seed: int) -> None:
    """Plates as FITS files; the first POOR ones were exposed so shortly that they show a few stars."""
    folder.mkdir(parents=True)
    rng = np.random.default_rng(seed)
    for number, day in enumerate(np.sort(rng.uniform(37500.0, 45000.0, sky.n_frames))):
        light = np.zeros((sky.size, sky.size))
        for source in sources:
            flux = source.flux(number, day, "I") if callable(source.flux) else source.flux
            place = (sky.size - 1) / 2 + np.array((-source.east, source.north)) / sky.pixel_arcsec
            skies.add_source(light, place, flux, FWHM)
        image = densities(light, rng, 0.02 if number < POOR else 1.0) + NOISE * rng.standard_normal(light.shape)
        cards = skies.header(sky, float(day), (0.0, 0.0))
        fits.PrimaryHDU(image.astype(np.float32), cards).writeto(folder / f"plate{number:03d}.fits")


@pytest.fixture(scope="module")
def plates(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A run over plates with one flare; five plates show too few stars for a curve."""
    folder = tmp_path_factory.mktemp("plates")
    sources = stars()
    write_plates(folder / "frames", NORTH, sources, 5)
    (folder / "targets.csv").write_text(skies.target_text([sources[0], *sources[1::4]], NORTH), encoding="utf-8")
    (folder / "s.toml").write_text("[controls]\nper_field = 150\n", encoding="utf-8")
    arguments = ["mine", folder / "frames", "--targets", folder / "targets.csv", "--out", folder / "run",
                 "--settings", folder / "s.toml", "-q", "--without", "lomb_scargle"]  # fmt: skip
    assert cli.run_command([str(a) for a in arguments]) == 0
    return folder


def test_a_flare_is_found_and_steady_stars_are_steady(plates: Path) -> None:
    """Plates of unlike curves and speeds: only the star that flares varies."""
    found = {str(row["name"]): row for row in Table.read(plates / "run" / "candidates.ecsv")}
    assert found["flaring"]["standing"] == "single"
    assert found["flaring"]["q_value"] < 0.05
    assert found["flaring"]["beyond_controls"] > 100
    others = [row["standing"] for name, row in found.items() if name != "flaring"]
    assert others.count("steady") >= len(others) - 1  # one of twelve beyond every one of 139 controls is chance
    assert found["flaring"]["point_likeness_verdict"] == "pass"


def test_plates_that_show_few_stars_tell_only_what_is_seen(plates: Path, tmp_path: Path) -> None:
    """They are counted apart, with the faintest comparison seen as the limit; no flux of theirs is used."""
    solution = pq.read_table(plates / "run" / "frame_solution.parquet").to_pydict()
    assert solution["verdict"] == ["seen_only"] * POOR + ["good"] * (PLATES - POOR)
    assert [bool(text) for text in solution["curve"]] == [False] * POOR + [True] * (PLATES - POOR)
    assert max(solution["n_comparisons"][:POOR]) < 8 < min(solution["n_comparisons"][POOR:])
    row = {str(row["name"]): row for row in Table.read(plates / "run" / "channels.ecsv")}["flaring"]
    assert (row["n_frames"], row["n_used"], row["n_seen_only"], row["n_seen"]) == (PLATES, PLATES - POOR, POOR, 0)
    assert row["seen_limit"] > 10 * min(solution["seen_limit"][POOR:]) / 2
    assert cli.run_command(["lightcurve", str(plates / "run"), "flaring", "--out", str(tmp_path / "c.ecsv"), "-q"]) == 0
    curve = Table.read(tmp_path / "c.ecsv")
    assert np.flatnonzero(np.isnan(curve["flux"])).tolist() == list(range(POOR))
    assert np.isfinite(curve["raw_flux"]).all()
    assert not curve["detected"][:POOR].any()
    np.testing.assert_allclose(curve["limit_sigma"][:POOR], solution["seen_limit"][:POOR])
    said = (plates / "run" / "summary.txt").read_text(encoding="utf-8")
    assert "19 of 24 plates have a response curve" in said
    assert "5 of 24 plates" in said
    assert "tell only whether a source is seen" in said


def test_given_fluxes_fix_the_scale(plates: Path, tmp_path: Path) -> None:
    """With fluxes in the table of comparisons a steady star has its true flux, in the unit of the table."""
    sources = stars()
    listed = [s for k, s in enumerate(sources) if k % 4 != 1 and s.name != "flaring"]
    rows = skies.target_text(listed, NORTH).splitlines()
    lines = [f"{rows[0]},flux", *(f"{row},{100 * s.flux}" for row, s in zip(rows[1:], listed, strict=True))]
    (tmp_path / "own.csv").write_text("\n".join(lines) + "\n", encoding="utf-8")
    (tmp_path / "s.toml").write_text(
        f'[controls]\nper_field = 30\n[comparisons]\ntable = "{tmp_path / "own.csv"}"\n', encoding="utf-8"
    )
    arguments = ["mine", plates / "frames", "--targets", plates / "targets.csv", "--out", tmp_path / "run",
                 "--settings", tmp_path / "s.toml", "-q", "--without", "lomb_scargle"]  # fmt: skip
    assert cli.run_command([str(a) for a in arguments]) == 0
    true = {s.name: s.flux for s in sources}
    for row in Table.read(tmp_path / "run" / "channels.ecsv"):
        if row["name"] != "flaring":
            assert row["flux_mean"] == pytest.approx(100 * true[str(row["name"])], rel=0.04)
    assert "fluxes of the table" in (tmp_path / "run" / "summary.txt").read_text(encoding="utf-8")


def test_negatives_are_measured_like_positives(plates: Path, tmp_path: Path) -> None:
    """Plates of which the scanner gives the light that comes through: the same fluxes, once the settings say so."""
    shutil.copytree(plates / "frames", tmp_path / "frames")
    for path in (tmp_path / "frames").iterdir():
        with fits.open(path, mode="update") as hdus:
            hdus[0].data = 5.0 - hdus[0].data
    (tmp_path / "s.toml").write_text("[controls]\nper_field = 30\n[[frames]]\nnegative = true\n", encoding="utf-8")
    arguments = ["mine", tmp_path / "frames", "--targets", plates / "targets.csv", "--out", tmp_path / "run",
                 "--settings", tmp_path / "s.toml", "-q", "--without", "lomb_scargle"]  # fmt: skip
    assert cli.run_command([str(a) for a in arguments]) == 0
    first, second = (
        {str(row["name"]): float(row["flux_mean"]) for row in Table.read(folder / "run" / "channels.ecsv")}
        for folder in (plates, tmp_path)
    )
    assert second == pytest.approx(first, rel=0.01)


# --- headers


def facts_of(**cards: object) -> FrameFacts:
    """What the dialect makes of a header with these cards."""
    plain = {"BMAJ": None, "BMIN": None, "BPA": None, "FREQ": None, "STOKES": None, "BUNIT": "adu"}
    return PlateHeaders().read(cards_of(header(**(plain | cards))), PlaneAxes())


@pytest.mark.parametrize(
    ("cards", "band", "response", "assumed"),
    [
        ({"EMULSION": "PX40 B", "FILTER": "Y 38"}, "PX40B+Y38", "photographic", False),
        ({"EMULSION": "OLD9", "FILTER": "none"}, "OLD9", "photographic", False),
        ({"PLATENUM": 1234, "FILTER": "R63"}, "R63", "photographic", True),
        ({"PLATEID": "06S3", "BANDPASS": 8}, "bandpass 8", "photographic", True),
        ({"PLATE": "A 17"}, "", "photographic", True),
        ({"PLTSCALE": 67.2, "FILTER": "R"}, "R", "linear", False),
        ({"PLATEID": 7, "RDNOISE": 4.0, "FILTER": "R"}, "R", "linear", False),
    ],
)
def test_emulsion_and_filter_make_the_band(cards: dict[str, object], band: str, response: str, assumed: bool) -> None:
    """An emulsion is a plate for certain, a plate's number by assumption; a plate scale or read-out noise is none."""
    found = facts_of(**cards)
    assert (found.band, found.response) == (band, response)
    assert ("photographic_assumed" in found.assumptions) == assumed


def test_unlike_plates_never_share_a_channel(tmp_path: Path) -> None:
    """Nor does a plate share one with a frame of a linear detector; a block of the settings may say what a frame is."""
    same = {"BMAJ": None, "BMIN": None, "BPA": None, "FREQ": None, "STOKES": None, "BUNIT": "adu", "FILTER": "Y38"}
    for name, cards in (
        ("a", {"EMULSION": "PX40B"}), ("b", {"EMULSION": "PX40R"}), ("c", {"EMULSION": "PX40B", "FILTER": "Y39"}),
        ("d", {}), ("e", {"EMULSION": "PX40B"}), ("f", {}),
    ):  # fmt: skip
        write(tmp_path / f"{name}.fits", **(same | cards | {"DATE__OBS": f"1988-03-1{ord(name) - 96}T06:00:00"}))
    blocks = [{"path": "f.fits", "response": "photographic", "negative": True}]
    settings = settings_from({"frames": blocks}, "test")
    found = walk([str(tmp_path)], host.load(host.PluginSpec()).dialects, settings, {})
    labels = assign(found.frames, {}, Channels())
    a, b, c, d, e, f = labels[np.argsort(found.frames["path"].astype(str))].tolist()
    assert a == e == "north array|PX40B+Y38|I|adu|photographic"
    assert d == "north array|Y38|I|adu"
    assert f == "north array|Y38|I|adu|photographic"
    assert len({a, b, c, d, f}) == 5
    assert found.frames["negative"].tolist().count(True) == 1
