"""Relations as curves, tables and figures without any map, from Python and the command line."""

from __future__ import annotations

import astropy.units as u
import numpy as np
import pytest
from astropy.table import Table
from typer.testing import CliRunner

import kspipe
from kspipe.cli.app import app
from kspipe.core.errors import InputError, OutputError
from kspipe.products.tracks import draw_tracks_figure, in_and_out
from kspipe.relations import LAWS, tracks

GAS = np.geomspace(1, 1000, 50)
AT = {"oh": [8.0, 8.69], "rho_sd": [0.01], "g0": [0.5, 1.0, 2.0]}


def test_all_combinations_are_the_relation() -> None:
    found = tracks("krumholz2013", GAS, AT, {"clumping": 5.0})
    assert [(t.at["oh"], t.at["g0"]) for t in found] == [
        (oh, g0) for oh in AT["oh"] for g0 in AT["g0"]
    ]
    for track in found:
        inputs = {n: np.array(v) for n, v in track.at.items()} | {"sigma_gas": GAS}
        expected = LAWS.get("krumholz2013").predict(inputs, {"clumping": 5.0})
        np.testing.assert_array_equal(track.prediction.sigma_sfr, expected.sigma_sfr)
        assert track.parameters["efficiency"] == 0.01


@pytest.mark.parametrize(
    ("key", "at", "given", "says"),
    [
        ("krumholz2012", {}, {}, "krumholz2013"),
        ("krumholz2013", {"oh": [8.7]}, {"clumping": 5}, "rho_sd .*Msun/pc3.*g0"),
        ("krumholz2009", {"oh": [8.7], "g0": [1.0]}, {"clumping": 5}, "does not take g0"),
        ("krumholz2009", {"oh": [8.7]}, {}, "needs the parameter 'clumping'"),
        ("mckee2010", {"oh": [8.7]}, {"clumping": 5}, "one of depletion_time and efficiency"),
    ],
)
def test_what_is_missing_or_too_much_is_told(key, at, given, says) -> None:
    with pytest.raises(InputError, match=says):
        tracks(key, GAS, at, given)


def test_a_table_from_python(tmp_path) -> None:
    table = kspipe.tracks(
        "krumholz2009", at={"oh": [7.2, 8.69]}, parameters={"clumping": 5.0}, n=20
    )
    assert len(table) == 40
    assert table["sigma_sfr"].unit == u.Msun / u.yr / u.kpc**2
    # Z' = 0.03 is below the 0.05 of the range; predictions are written and marked.
    assert np.all(table["outside_range"] == (table["oh"] < 8))
    assert np.isfinite(table["sigma_sfr"]).all()
    assert not (tmp_path / "tracks.ecsv").exists()
    with pytest.raises(InputError, match="no curve"):
        kspipe.tracks("krumholz2009", low=10, high=1, at={"oh": [8]}, parameters={"clumping": 5.0})


def test_the_command_writes_table_and_figure(tmp_path) -> None:
    runner = CliRunner()
    arguments = ["tracks", "krumholz2013", "--metallicity", "8.69", "--metallicity", "8.0",
                 "--g0", "1", "--rho-sd", "0.05", "--parameter", "clumping=5",
                 "--out", str(tmp_path / "t")]  # fmt: skip
    result = runner.invoke(app, arguments)
    assert result.exit_code == 0, result.output
    assert {p.name for p in (tmp_path / "t").iterdir()} == {
        "tracks.ecsv",
        "tracks.pdf",
        "tracks.png",
    }
    table = Table.read(tmp_path / "t" / "tracks.ecsv")
    assert table.meta["relation"] == "krumholz2013"
    assert table.meta["parameters"]["clumping"] == 5.0
    assert "MNRAS 436, 2747" in table.meta["source"]
    # Krumholz 2013 at 10 Msun/pc2, Z' = 1 in two-phase balance: 0.63687 (see test_values).
    first = table[table["oh"] == 8.69]
    assert np.interp(1.0, np.log10(first["sigma_gas"]), first["f_mol"]) == pytest.approx(
        0.63687, abs=2e-3
    )
    again = runner.invoke(app, arguments)
    assert again.exit_code == 2
    assert "--overwrite" in again.output
    assert runner.invoke(app, [*arguments, "--overwrite"]).exit_code == 0
    for wrong, says in (("clumping", "NAME=VALUE"), ("clump=5", "clumping")):
        arguments[arguments.index("clumping=5") if "clumping=5" in arguments else -3] = wrong
        result = runner.invoke(app, arguments)
        assert result.exit_code == 2
        assert says in result.output
        arguments[arguments.index(wrong)] = "clumping=5"


def test_curves_are_dashed_outside_the_range() -> None:
    inside, outside = in_and_out(np.arange(5.0), np.array([True, True, False, False, True]))
    np.testing.assert_array_equal(np.isnan(inside), [True, True, False, False, True])
    # They meet, so that no gap is left.
    np.testing.assert_array_equal(np.isnan(outside), [False, False, False, False, False])
    figure = draw_tracks_figure(tracks("krumholz2009", GAS, {"oh": [7.2, 8.69]}, {"clumping": 5.0}))
    lines = [line for line in figure.axes[0].get_lines() if len(line.get_xdata())]
    drawn = [int(np.isfinite(line.get_ydata()).sum()) for line in lines]
    assert drawn == [0, 50, 50, 0]
    assert lines[1].get_linestyle() != "-"
    assert "outside the range" in [t.get_text() for t in figure.axes[0].get_legend().get_texts()]


def test_an_output_that_cannot_be_written(tmp_path) -> None:
    (tmp_path / "file").write_text("")
    with pytest.raises(OutputError, match="cannot be written"):
        kspipe.tracks("leroy2013_depletion", out=tmp_path / "file" / "t")
