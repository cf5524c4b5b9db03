"""The built wheel, installed outside the checkout, does the main job."""

from __future__ import annotations

import os
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parents[1]


@pytest.mark.wheel
def test_wheel_runs_the_demo(tmp_path):
    import kspipe

    site = Path(os.environ["KSPIPE_WHEEL"]).resolve()
    assert site in Path(kspipe.__file__).resolve().parents
    assert (site / "kspipe" / "py.typed").is_file()
    comparison = kspipe.run(ROOT / "recipes" / "orrinda_short.toml", tmp_path / "out")
    assert comparison.relations == ["shielding_kpc"]
    assert len(kspipe.figures(tmp_path / "out")) >= 6
