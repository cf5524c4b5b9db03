"""Time the errors of draws, and measure first-order and drawn errors against 100,000 draws.

``python tests/bench/drawn_errors.py [--pixels 20000]`` prints, for each record of alpha_CO and of
star formation that bends, the largest deviation of the first-order error and of the stated error
from 100,000 draws at signal-to-noise ratios of 20 and 3; then the seconds that drawing takes for
many pixels of S/N 3.
"""

from __future__ import annotations

import argparse
import sys
import time
from pathlib import Path

import numpy as np

from kspipe.conversions import convert, make_surface
from kspipe.kernels.noise import NoiseTerm

sys.path.insert(0, str(Path(__file__).resolve().parents[1]))
from conversions.test_drawn_errors import (
    CASES,
    GIVEN,
    TYPICAL,
    stated_and_drawn,
)


def main() -> None:
    """Print the tables."""
    parser = argparse.ArgumentParser()
    parser.add_argument("--pixels", type=int, default=20_000)
    options = parser.parse_args()
    for name in CASES:
        line = []
        for ratio in (20.0, 3.0):
            stated, drawn, linear = stated_and_drawn(name, ratio)
            first = max(abs(linear[p] / drawn[p] - 1) for p in drawn)
            got = max(abs(stated[p] / drawn[p] - 1) for p in drawn)
            line.append(f"S/N {ratio:g}: first order {first:.1%}, stated {got:.1%}")
        print(f"{name}: {'; '.join(line)}")
    choices, tracers = CASES["alpha bolatto2013_eq31"]
    rng = np.random.default_rng(1)
    maps = {t: TYPICAL[t] * rng.lognormal(0.0, 0.5, options.pixels) for t in tracers}
    noise = {t: (NoiseTerm(t, m / 3.0, np.zeros((2, 2))),) for t, m in maps.items()}
    start = time.perf_counter()
    convert(maps, choices, GIVEN)
    middle = time.perf_counter()
    make_surface(maps, noise, choices, GIVEN)
    end = time.perf_counter()
    print(
        f"{options.pixels} pixels of S/N 3: convert {middle - start:.3f} s, with drawn errors "
        f"{end - middle:.2f} s"
    )


if __name__ == "__main__":
    main()
