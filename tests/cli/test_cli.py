"""The command line as a user types it."""

from __future__ import annotations

import json
import shutil
import subprocess
import sys
from pathlib import Path

import pytest
from astropy.io import fits
from astropy.table import Table

ROOT = Path(__file__).resolve().parents[2]
SHORT = ROOT / "recipes" / "orrinda_short.toml"
HEAVY = ("numpy", "astropy", "matplotlib", "pydantic", "scipy")


def kspipe(*arguments: object, cwd: Path | None = None) -> subprocess.CompletedProcess[str]:
    command = [sys.executable, "-m", "kspipe", *map(str, arguments)]
    return subprocess.run(command, capture_output=True, text=True, cwd=cwd, check=False)


COMMANDS = (
    "reduce",
    "compare",
    "figures",
    "run",
    "alternatives",
    "chain",
    "fit-alpha",
    "budget",
    "ladder",
    "closure",
    "tracks",
    "list",
    "explain",
)


@pytest.fixture(scope="module")
def made(tmp_path_factory):
    out = tmp_path_factory.mktemp("run with spaces") / "out"
    result = kspipe("run", SHORT, "--out", out)
    assert result.returncode == 0, result.stderr
    return out, result


@pytest.mark.parametrize("command", [[], *([name] for name in COMMANDS)])
def test_help_fits_a_screen_and_is_light(command):
    code = (
        f"import sys; sys.argv = ['kspipe', *{command!r}, '--help']\n"
        "try:\n from kspipe.cli import main; main()\n"
        "except SystemExit as stop: assert not stop.code\n"
        f"heavy = [name for name in {HEAVY!r} if name in sys.modules]; assert not heavy, heavy"
    )
    result = subprocess.run(
        [sys.executable, "-c", code], capture_output=True, text=True, check=False
    )
    assert result.returncode == 0, result.stderr
    lines = result.stdout.splitlines()
    assert len(lines) <= 24
    assert max(map(len, lines)) <= 100
    if command:
        assert "Example: kspipe" in result.stdout


def test_results_on_stdout_and_progress_on_stderr(made):
    out, result = made
    assert "independent" in result.stdout
    for words in ("molecular fraction", "depletion time", "shielding_kpc", "flagged"):
        assert words in result.stdout
    assert "matching hi" in result.stderr
    assert "matching" not in result.stdout
    assert str(out) in result.stdout.replace("\n", "")


def test_outputs_are_the_contract(made):
    out, _ = made
    names = [
        "sigma_atom",
        "sigma_mol",
        "sigma_gas",
        "sigma_sfr",
        "f_mol",
        "t_dep",
        "metallicity",
        "radius",
    ]
    units = ["solMass pc-2"] * 3 + ["solMass yr-1 kpc-2", "", "Gyr", "", "kpc"]
    for name, unit in zip(names, units, strict=True):
        with fits.open(out / "maps" / f"{name}.fits") as hdus:
            random = [] if name in ("metallicity", "radius") else ["ERROR"]
            interval = ["LOWER", "UPPER"] if name in ("f_mol", "t_dep") else []
            assert [h.name for h in hdus[1:]] == [*random, "COVERAGE", "FLAGS", *interval]
            header = hdus[0].header
            assert header["BUNIT"] == unit
            assert header["CTYPE1"] == "RA---TAN"
            assert header["BMAJ"] == pytest.approx(15 / 3600)
            assert "HISTORY" in header
            assert not any("DATE" in card for card in header)
    for name in ("hi", "co", "fuv", "ir"):
        assert (out / "matched" / f"{name}.fits").is_file()
    with fits.open(out / "residuals" / "shielding_kpc.fits") as hdus:
        extensions = ["PREDICTED", "PREDICTED_ERROR", "DIFFERENCE", "NORMALISED", "FLAGS"]
        assert [h.name for h in hdus[1:]] == extensions
    for name in ("summary.json", "recipe.toml", "manifest.json"):
        assert (out / name).is_file()
    figures = {p.name for p in (out / "figures").iterdir()}
    for stem in ("star_formation_law", "surface_densities", "residual_shielding_kpc"):
        assert {f"{stem}.pdf", f"{stem}.png"} <= figures


def test_pixel_table_is_the_contract(made):
    out, _ = made
    table = Table.read(out / "pixels.ecsv")
    profiles = Table.read(out / "profiles.ecsv")
    assert profiles["region"][-1] == "all"
    assert all(profiles[name].description for name in profiles.colnames)
    expected = (
        "x y ra dec radius_kpc sigma_atom sigma_atom_err sigma_mol sigma_mol_err sigma_gas "
        "sigma_gas_err sigma_sfr sigma_sfr_err z_prime flags independent predicted_shielding_kpc "
        "residual_shielding_kpc predicted_f_mol_shielding_kpc"
    )
    assert table.colnames == expected.split()
    assert all(table[name].description for name in table.colnames)
    summary = json.loads((out / "summary.json").read_text())
    assert len(table) == summary["n_pixels"]
    # Non-positive values are rows too.
    assert (table["sigma_mol"] <= 0).sum() > 100
    assert table["independent"].sum() == summary["n_samples"]
    assert table.meta["flags"]["low_snr"] == 4


def test_second_run_reuses_and_third_refuses(made, tmp_path):
    out, _ = made
    again = kspipe("run", SHORT, "--out", out)
    assert again.returncode == 0
    changed = tmp_path / "changed.toml"
    text = SHORT.read_text().replace("../demo_maps", str(ROOT / "demo_maps"))
    changed.write_text(text.replace("line_ratio = 0.65", "line_ratio = 0.8"))
    refused = kspipe("run", changed, "--out", out)
    assert refused.returncode == 2
    assert "--overwrite" in refused.stderr
    assert "Traceback" not in refused.stderr


@pytest.mark.slow
def test_resolved_recipe_gives_identical_numbers(made, tmp_path):
    out, _ = made
    copy = tmp_path / "again"
    result = kspipe("run", out / "recipe.toml", "--out", copy, "--quiet")
    assert result.returncode == 0, result.stderr
    assert result.stderr == ""
    ours = sorted(p.relative_to(out) for p in out.rglob("*") if p.is_file())
    assert ours == sorted(p.relative_to(copy) for p in copy.rglob("*") if p.is_file())
    differing = [p for p in ours if (out / p).read_bytes() != (copy / p).read_bytes()]
    # The manifest holds the clock; the resolved recipe marks what was typed and what was not.
    assert {p.name for p in differing} <= {"manifest.json", "recipe.toml"}


@pytest.mark.slow
def test_changing_alpha_co_does_not_smooth_again(made, tmp_path):
    out, _ = made
    folder = tmp_path / "copy"
    shutil.copytree(out, folder)
    changed = tmp_path / "changed.toml"
    text = SHORT.read_text().replace("../demo_maps", str(ROOT / "demo_maps"))
    changed.write_text(text.replace("bolatto2013_galactic", "sun2020"))
    before = {p.name: p.stat().st_mtime_ns for p in (folder / "matched").iterdir()}
    result = kspipe("reduce", changed, "--out", folder, "--overwrite")
    assert result.returncode == 0, result.stderr
    assert "matching" not in result.stderr
    assert {p.name: p.stat().st_mtime_ns for p in (folder / "matched").iterdir()} == before
    # The comparison was made from the old gas: it is gone, not stale.
    assert not (folder / "summary.json").exists()
    assert kspipe("compare", folder).returncode == 0


def test_compare_refuses_a_touched_reduction(made, tmp_path):
    out, _ = made
    folder = tmp_path / "copy"
    shutil.copytree(out, folder)
    with fits.open(folder / "matched" / "co.fits", mode="update") as hdus:
        hdus[0].data[50, 50] += 1
    result = kspipe("compare", folder, "--overwrite")
    assert result.returncode == 2
    assert "co" in result.stderr


@pytest.mark.slow
def test_editing_relations_needs_no_new_reduction(made, tmp_path):
    out, _ = made
    folder = tmp_path / "copy"
    shutil.copytree(out, folder)
    recipe = folder / "recipe.toml"
    recipe.write_text(
        recipe.read_text() + '[relations.smooth]\nlaw = "krumholz2009"\nclumping = 1\n'
    )
    assert kspipe("compare", folder).returncode == 2
    result = kspipe("compare", folder, "--overwrite")
    assert result.returncode == 0, result.stderr
    assert (folder / "residuals" / "smooth.fits").is_file()
    assert kspipe("figures", folder).returncode == 0


@pytest.mark.slow
def test_trials_print_tables_and_write_files(made, tmp_path):
    out, _ = made
    folder = tmp_path / "copy"
    shutil.copytree(out, folder)
    budget = kspipe("budget", folder, "--draws", "200")
    assert budget.returncode == 0, budget.stderr
    for words in ("slope", "alpha_CO", "turns a conclusion", "choices", "fitted in full"):
        assert words in budget.stdout
    assert "fitting the line" in budget.stderr
    ladder = kspipe("ladder", folder)
    assert ladder.returncode == 0, ladder.stderr
    assert "massive stars" in ladder.stdout
    for trial in ("budget", "ladder"):
        json.loads((folder / f"{trial}.json").read_text())
        assert len(Table.read(folder / f"{trial}.ecsv")) > 3
        assert (folder / "figures" / f"{trial}.png").is_file()
    # A second time all is reused; another setting asks for a word.
    assert kspipe("budget", folder, "--draws", "200").returncode == 0
    refused = kspipe("budget", folder, "--draws", "300")
    assert refused.returncode == 2
    assert "--overwrite" in refused.stderr
    # Another reduction takes them away.
    changed = tmp_path / "changed.toml"
    text = SHORT.read_text().replace("../demo_maps", str(ROOT / "demo_maps"))
    changed.write_text(text.replace("line_ratio = 0.65", "line_ratio = 0.8"))
    assert kspipe("reduce", changed, "--out", folder, "--overwrite").returncode == 0
    assert not (folder / "budget.json").exists()
    assert not (folder / "figures" / "ladder.png").exists()


@pytest.mark.slow
def test_closure_prints_bias_and_coverage(tmp_path):
    out = tmp_path / "test"
    done = kspipe("closure", SHORT, "--out", out, "--mocks", "2", "--noise", "co=0.5")
    assert done.returncode == 0, done.stderr
    for words in ("slope", "in 68 %", "co x 0.5", "averaging in the beam", "true inclination"):
        assert words in done.stdout
    assert (out / "closure.json").is_file()
    assert len(Table.read(out / "closure.ecsv")) >= 6


def slow(*values):
    """Seconds of imports each: one of a kind is enough by default."""
    return pytest.param(*values, marks=pytest.mark.slow)


@pytest.mark.parametrize(
    ("arguments", "words"),
    [
        slow(["budget", "nowhere"], "holds no reduction"),
        slow(["closure", SHORT, "--out", "x", "--noise", "co"], "--noise co=0.5"),
        (["reduce", "nowhere.toml", "--out", "x"], "does not exist"),
        (["compare", "nowhere"], "holds no reduction"),
        slow(["figures", "nowhere"], "comparison"),
        (["reduce", SHORT], "--out"),
        (["polish"], "polish"),
    ],
)
def test_usage_faults_exit_with_2(arguments, words, tmp_path):
    result = kspipe(*arguments, cwd=tmp_path)
    assert result.returncode == 2
    assert words in result.stderr
    assert "Traceback" not in result.stderr
    assert list(tmp_path.iterdir()) == []


def test_faulty_recipe_is_told_at_once(tmp_path):
    recipe = tmp_path / "faulty.toml"
    text = SHORT.read_text().replace("../demo_maps", str(ROOT / "demo_maps"))
    text = text.replace("inclination =", "inclnation =").replace("ebv = 0.0", "")
    recipe.write_text(text.replace("krumholz2009", "krumholz2008"))
    result = kspipe("run", recipe, "--out", tmp_path / "out")
    assert result.returncode == 2
    for key in ("galaxy.inclnation", "galaxy.inclination", "foreground.ebv", "shielding_kpc.law"):
        assert key in result.stderr
    assert 'did you mean "krumholz2009"' in result.stderr
    assert not (tmp_path / "out").exists()


def test_version():
    import kspipe as package

    assert kspipe("--version").stdout.strip() == f"kspipe {package.__version__}"
