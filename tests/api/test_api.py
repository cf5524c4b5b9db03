"""The library as a script uses it."""

from __future__ import annotations

import subprocess
import sys
from pathlib import Path

import astropy.units as u
import numpy as np
import pytest
from demo import load_demo

import kspipe

ROOT = Path(__file__).resolve().parents[2]
SHORT = ROOT / "recipes" / "orrinda_short.toml"


@pytest.fixture(scope="module")
def comparison(tmp_path_factory):
    return kspipe.run(SHORT, tmp_path_factory.mktemp("api") / "out")


def test_quantities_at_the_border(comparison):
    gas, error = comparison["sigma_gas"], comparison.error("sigma_gas")
    assert gas.unit == u.Msun / u.pc**2
    assert error.unit == gas.unit
    assert comparison["sigma_sfr"].unit == u.Msun / u.yr / u.kpc**2
    assert comparison["t_dep"].unit == u.Gyr
    assert comparison["radius"].unit == u.kpc
    assert comparison.residual("shielding_kpc").unit == u.dex
    assert gas.shape == comparison.residual("shielding_kpc").shape


def test_map_and_table_hold_the_same_numbers(comparison):
    pixels = comparison.pixels
    gas = comparison["sigma_gas"].value[pixels["y"], pixels["x"]]
    np.testing.assert_allclose(pixels["sigma_gas"], gas, rtol=1e-6)
    lon, lat = comparison.wcs.all_pix2world(pixels["x"], pixels["y"], 0)
    np.testing.assert_allclose(pixels["ra"], lon, rtol=0, atol=1e-9)
    np.testing.assert_allclose(pixels["dec"], lat, rtol=0, atol=1e-9)


def test_reprs_are_useful(comparison):
    assert "shielding_kpc" in repr(comparison)
    html = comparison._repr_html_()
    for words in ("sigma_gas", "molecular fraction", "shielding_kpc (krumholz2009)"):
        assert words in html


def test_wrong_names_say_what_there_is(comparison):
    with pytest.raises(KeyError, match="sigma_gas"):
        comparison["sigma_dust"]
    with pytest.raises(KeyError, match="no random error"):
        comparison.error("radius")
    with pytest.raises(KeyError, match="shielding_kpc"):
        comparison.residual("pressure")
    with pytest.raises(AttributeError):
        _ = kspipe.reduse


@pytest.mark.slow
def test_maps_in_memory_equal_files(comparison, tmp_path):
    painted = load_demo().paint(1)
    maps = {
        "hi": (painted["hi"], painted["hi_noise"]),
        "co": painted["co"],
        "fuv": painted["fuv"],
        "ir": (painted["mir24"], painted["mir24_noise"]),
    }
    reduction = kspipe.reduce(SHORT, tmp_path / "memory", maps=maps)
    np.testing.assert_array_equal(reduction["sigma_gas"], comparison["sigma_gas"])
    again = kspipe.compare(tmp_path / "memory", maps=maps)
    assert again.summary["totals"] == comparison.summary["totals"]


def test_empty_folder_is_refused(tmp_path):
    with pytest.raises(kspipe.KspipeError, match="holds no reduction"):
        kspipe.api.Reduction(tmp_path)
    with pytest.raises(kspipe.KspipeError, match="holds no reduction"):
        kspipe.compare(tmp_path / "nothing")


def test_import_is_light_and_the_face_complete():
    code = (
        "import sys, kspipe; assert 'numpy' not in sys.modules;"
        "assert all(hasattr(kspipe, name) for name in kspipe.__all__);"
        "assert sorted(kspipe.__all__, key=str.lower) == sorted(dir(kspipe), key=str.lower)"
    )
    subprocess.run([sys.executable, "-c", code], check=True, capture_output=True)
