"""Time the temperature of the gas and its whole state over many pixels.

``python tests/bench/gas_state.py [--pixels 1000000] [--runs 5]`` prints seconds (best of the
runs): the plain numpy expression of one regime, the closed form with its derivatives, the full
balance at a density and at a pressure with theirs, and their ratios to a closed form; the largest
residual of the balance at a pressure; the gain over a scalar root-finder in a loop; and the whole
state with every turbulence model.
"""

from __future__ import annotations

import argparse
import math
import time
from collections.abc import Callable

import numpy as np
from scipy.optimize import brentq

from kspipe.relations.state import TURBULENCE, Conditions, gas_state
from kspipe.relations.state.thermal import (
    cosmic_ray_temperature,
    gas_temperature,
    isobaric_temperature,
)

COOLING = 8e-10 * 1.1e-4 * 91 * 1.380649e-16


def best(work: Callable[[], object], runs: int) -> float:
    """Seconds of the fastest run."""
    seconds = []
    for _ in range(runs):
        start = time.perf_counter()
        work()
        seconds.append(time.perf_counter() - start)
    return min(seconds)


def loop_over(pressure: np.ndarray, chi: np.ndarray, z: np.ndarray, depth: np.ndarray) -> None:
    """Solve pixel by pixel."""
    for p, x, metals, tau in zip(pressure, chi, z, depth, strict=True):
        heating = 4e-26 * x * metals * math.exp(-tau) + 2e-27

        def excess(t: float, p: float = p, metals: float = metals, heat: float = heating) -> float:
            return COOLING * metals * p / t * math.exp(-91 / t) - heat

        if excess(91.0) > 0:
            brentq(excess, 2.0, 91.0, xtol=1e-10)


def main() -> None:
    """Print the table."""
    parser = argparse.ArgumentParser()
    parser.add_argument("--pixels", type=int, default=1_000_000)
    parser.add_argument("--runs", type=int, default=5)
    options = parser.parse_args()
    rng = np.random.default_rng(1)
    n = options.pixels
    density = rng.lognormal(math.log(200.0), 0.7, n)
    chi, z, depth = rng.lognormal(0.0, 0.5, n), rng.uniform(0.2, 1.5, n), rng.uniform(0.0, 8.0, n)
    zeta, pressure = np.ones(n), 60.0 * density

    plain = best(lambda: 91.0 / np.log(COOLING * z * density / (2e-27 * zeta)), options.runs)
    closed = best(lambda: cosmic_ray_temperature(density, zeta, z), options.runs)
    full = best(lambda: gas_temperature(density, chi, zeta, z, depth), options.runs)
    solved = best(lambda: isobaric_temperature(pressure, chi, zeta, z, depth), options.runs)
    balance = best(
        lambda: 91.0 / np.log(
            COOLING * z * density / (4e-26 * chi * z * np.exp(-depth) + 2e-27 * zeta)
        ),
        options.runs,
    )  # fmt: skip
    values = best(lambda: gas_temperature(density, chi, zeta, z, depth, slopes=False), options.runs)
    print(f"{n} pixels, values and derivatives unless said")
    print(f"one regime, plain numpy, value only:      {plain:.3f} s")
    print(f"both heating terms, plain numpy, value:   {balance:.3f} s")
    print(f"one regime, closed form:                  {closed:.3f} s")
    print(
        f"full balance at a density, value only:    {values:.3f} s, {values / balance:.2f} x plain"
    )
    print(f"full balance at a density:                {full:.3f} s, {full / closed:.1f} x closed")
    print(
        f"full balance at a pressure, solved:       {solved:.3f} s, {solved / closed:.1f} x closed"
    )

    found = isobaric_temperature(pressure, chi, zeta, z, depth).kelvin
    heating = 4e-26 * chi * z * np.exp(-depth) + 2e-27 * zeta
    residual = np.abs(COOLING * z * pressure / found * np.exp(-91.0 / found) / heating - 1.0)
    print(f"largest residual of the solved balance:   {np.nanmax(residual):.1e}")

    few = slice(0, max(1, min(n, 20_000)))
    start = time.perf_counter()
    loop_over(pressure[few], chi[few], z[few], depth[few])
    loop = (time.perf_counter() - start) * n / len(pressure[few])
    print(f"scalar root-finder in a loop:             {loop:.1f} s, {loop / solved:.0f} x slower")

    conditions = Conditions(
        density="two-phase", chi="star formation", zeta_prime="field", clumping=5.0,
        density_clumping=5.0, linewidth_size="solomon1987", cloud_radius_pc=30.0,
        turbulence=tuple(TURBULENCE.keys()),
    )  # fmt: skip
    maps = {
        "sigma_gas": rng.lognormal(2.5, 1.0, n),
        "sigma_sfr": rng.lognormal(-6.0, 1.0, n),
        "z_prime": z,
    }
    whole = best(lambda: gas_state(maps, conditions), min(options.runs, 2))
    print(f"the whole state, {len(gas_state(maps, conditions))} quantities:          {whole:.2f} s")


if __name__ == "__main__":
    main()
