"""The conformance kit passes the shipped plugins and catches plugins that misbehave."""

from dataclasses import dataclass

import numpy as np
import pytest

from hindlight import Column, Statistic, cli, host, setting, testing

SHIPPED = [e.plugin for e in host.load(host.PluginSpec()).loaded if e.origin == "shipped"]


@pytest.mark.parametrize("plugin", SHIPPED, ids=lambda plugin: plugin.name)
def test_shipped_plugins_pass(plugin):
    """Every shipped plugin passes the kit that authors are asked to run."""
    testing.check_plugin(plugin)


@dataclass(frozen=True)
class Mean(Statistic):
    """A plugin that behaves."""

    columns = (Column("level", "mean flux", unusual="high", flux_power=1.0),)
    floor: float = setting(0.0, "least value", minimum=0)

    def compute(self, curve):
        return {"level": max(self.floor, float(np.mean(curve.flux)))}


@dataclass(frozen=True)
class WrongPower(Mean):
    """Its column is a flux and it does not say so."""

    columns = (Column("level", "mean flux", unusual="high"),)


@dataclass(frozen=True)
class ClockBound(Mean):
    """Its column moves with the time origin."""

    columns = (Column("level", "when", unusual="high"),)

    def compute(self, curve):
        return {"level": float(np.mean(curve.t_tdb_s))}


@dataclass(frozen=True)
class Random(Mean):
    """It never answers the same twice."""

    def compute(self, curve):
        return {"level": float(np.random.default_rng().normal())}


@dataclass(frozen=True)
class Scribbler(Mean):
    """It sorts its input in place."""

    def compute(self, curve):
        curve.flux.sort()
        return {"level": float(curve.flux[0])}


@dataclass(frozen=True)
class Fragile(Mean):
    """It divides by the scatter."""

    columns = (Column("level", "mean over scatter", unusual="high"),)

    def compute(self, curve):
        return {"level": float(np.mean(curve.flux) / np.std(curve.flux))}


@dataclass(frozen=True)
class TwoMinds(Mean):
    """Its fast path differs from its slow one."""

    def compute_block(self, block):
        return {"level": np.nanmean(block.flux, axis=1) + 0.1}


@dataclass(frozen=True)
class Undeclared(Mean):
    """It returns a column it does not declare."""

    def compute(self, curve):
        return {"level": 1.0, "extra": 2.0}


def test_a_good_plugin_passes():
    """A plugin that behaves has no problems, and its cost is told."""
    report = testing.examine(Mean())
    assert report.problems == ()
    assert "a thousand light curves" in report.timing
    assert report.n_checks > 10


@pytest.mark.parametrize(
    ("plugin", "words"),
    [
        (WrongPower(), "scales with the flux"),
        (ClockBound(), "time origin"),
        (Random(), "same answer twice"),
        (Scribbler(), "read-only"),
        (Fragile(), "bears all fluxes equal"),
        (TwoMinds(), "compute_block equals compute"),
        (Undeclared(), "undeclared 'extra'"),
    ],
    ids=lambda value: getattr(value, "name", ""),
)
def test_misbehaviour_is_caught(plugin, words):
    """Each way of misbehaving is found and named."""
    with pytest.raises(AssertionError, match=words):
        testing.check_plugin(plugin)


def test_check_from_the_command_line(tmp_path, capsys):
    """--check passes a good file with status 0 and fails a bad one with status 2, naming what is wrong."""
    good = "from dataclasses import dataclass\nimport numpy as np\nfrom hindlight import *\n\n@dataclass(frozen=True)\n"
    good += "class Spread(Statistic):\n    columns = (Column('sd', 'scatter', unusual='high', flux_power=1),)\n"
    good += "    def compute(self, curve):\n        return {'sd': float(np.std(curve.flux))}\n"
    good += "@hookimpl\ndef register_statistics():\n    return [Spread]\n"
    path = tmp_path / "spread.py"
    path.write_text(good, encoding="utf-8")
    assert cli.run_command(["plugins", "--check", str(path)]) == 0
    said = capsys.readouterr().out
    assert "passes" in said
    assert "note:" not in said
    path.write_text(good.replace(", flux_power=1", ""), encoding="utf-8")
    assert cli.run_command(["plugins", "--check", str(path)]) == 2
    said = capsys.readouterr()
    assert "scales with the flux" in said.out
    assert "1 checks failed" in said.err


@pytest.mark.parametrize(
    ("column", "words"),
    [
        ("Column('sd', 'scatter', flux_power=1)", "no column is ranked, so none enters p_value"),
        (
            "Column('sd', 'scatter', unusual='high', about='presence', flux_power=1)",
            "ask about presence, so none enters",
        ),
    ],
)
def test_a_statistic_that_never_enters_the_p_value_is_said(tmp_path, capsys, column, words):
    """It passes, since a column may be there to inform, but its author is told."""
    text = "from dataclasses import dataclass\nimport numpy as np\nfrom hindlight import *\n\n@dataclass(frozen=True)\n"
    text += f"class Spread(Statistic):\n    columns = ({column},)\n"
    text += "    def compute(self, curve):\n        return {'sd': float(np.std(curve.flux))}\n"
    text += "@hookimpl\ndef register_statistics():\n    return [Spread]\n"
    (tmp_path / "spread.py").write_text(text, encoding="utf-8")
    assert cli.run_command(["plugins", "--check", str(tmp_path / "spread.py")]) == 0
    assert words in capsys.readouterr().out


@dataclass(frozen=True)
class Detections(Statistic):
    """It counts from zero, not from the quiet level."""

    columns = (Column("n", "samples above 5 sigma", unusual="high"),)

    def compute(self, curve):
        return {"n": int((curve.flux > 5 * curve.flux_err).sum())}


class SpreadOfRatios(Detections):
    """The scatter of S/N grows with the flux where errors differ."""

    def compute(self, curve):
        return {"n": float(np.std(curve.flux / curve.flux_err))}


class RatioToMean(Detections):
    """Blank where there is no mean, so that a value alone tells a source from blank sky."""

    def compute(self, curve):
        mean = curve.flux.mean()
        return {"n": float(curve.flux.std() / mean) if mean > 1 else float("nan")}


class FaintIsUnusual(Detections):
    """The same the other way round."""

    columns = (Column("n", "median, sign turned", unusual="low", flux_power=1),)

    def compute(self, curve):
        return {"n": -float(np.median(curve.flux))}


class Bright(Detections):
    """It says that it asks about presence, beside a column that asks about variation."""

    columns = (
        Column("n", "samples above 5 sigma", unusual="high", about="presence"),
        Column("above", "highest above the quiet level", unusual="high"),
    )

    def compute(self, curve):
        return {"n": int((curve.flux > 5 * curve.flux_err).sum()), "above": float(curve.above_quiet.max())}


@pytest.mark.parametrize("kind", [Detections, SpreadOfRatios, RatioToMean, FaintIsUnusual])
def test_a_column_that_grows_with_steady_light_is_told(kind):
    """Bright steady sources would be variable: the author is told which column does it and how to mend it."""
    (said,) = testing.examine(kind()).remarks
    assert said.startswith("column 'n' tells a steady source of S/N 10")
    assert 'curve.above_quiet, curve.quiet_level), or set about="presence"' in said


@pytest.mark.parametrize("plugin", [*(p for p in SHIPPED if isinstance(p, Statistic)), Bright()], ids=lambda p: p.name)
def test_nothing_is_said_of_columns_that_do_not(plugin):
    """Shipped statistics, whose columns about variation start from the quiet level or from the mean, get no such note."""
    assert not [said for said in testing.examine(plugin).remarks if "steady" in said]
