"""The demonstration galaxy, reduced in memory once for all trials."""

from __future__ import annotations

from pathlib import Path

import pytest
from closure import matched_painted

from kspipe.stages.folder import ProductFolder
from kspipe.stages.surface import surfaces_of
from kspipe.trials.reduced import Reduced, covered_by_all


def as_reduced(plan, matched) -> Reduced:
    disc = surfaces_of(plan.recipe, matched, plan.grid)
    return Reduced(
        folder=ProductFolder(Path("nowhere")),
        recipe=plan.recipe,
        matched=matched,
        grid=plan.grid,
        disc=disc,
        used=covered_by_all(disc, Path("nowhere")),
        print_="",
    )


@pytest.fixture(scope="session")
def demo() -> Reduced:
    return as_reduced(*matched_painted(1, noise=True))


@pytest.fixture(scope="session")
def noise_free() -> Reduced:
    return as_reduced(*matched_painted(1, noise=False))
