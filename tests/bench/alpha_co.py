"""Time the self-consistent alpha_CO against a plain evaluation of its formula.

``python tests/bench/alpha_co.py [--pixels 1000000] [--runs 5]`` prints, for each record that
depends on the total surface density, the seconds of both (best of the runs), their ratio, and the
largest relative residual of the equation that was solved; then the cost of 1000 draws of 1000
pixels through the one conversion against one call of a million pixels.
"""

from __future__ import annotations

import argparse
import time
from collections.abc import Callable

import numpy as np

from kspipe.conversions import ALPHA_CO, Choices, Parameters, convert
from kspipe.conversions.molecular import molecular_gas


def best(work: Callable[[], object], runs: int) -> float:
    """Seconds of the fastest run."""
    seconds = []
    for _ in range(runs):
        start = time.perf_counter()
        work()
        seconds.append(time.perf_counter() - start)
    return min(seconds)


def main() -> None:
    """Print the table."""
    parser = argparse.ArgumentParser()
    parser.add_argument("--pixels", type=int, default=1_000_000)
    parser.add_argument("--runs", type=int, default=5)
    options = parser.parse_args()
    rng = np.random.default_rng(1)
    n = options.pixels
    line = rng.lognormal(1.0, 1.5, n) * np.where(rng.random(n) < 0.2, -1.0, 1.0)
    atom = rng.normal(8.0, 3.0, n)
    given = {"oh": rng.uniform(8.3, 8.9, n), "sigma_star": rng.lognormal(4.5, 1.5, n)}
    for record in ALPHA_CO:
        if not record.is_self_consistent:
            continue
        inputs = {**given, "sigma_total": given["sigma_star"] + atom}
        plain = best(lambda r=record, i=inputs: r(i), options.runs)
        solved = best(lambda r=record: molecular_gas(r, line, atom, given), options.runs)
        gas = molecular_gas(record, line, atom, given).alpha_co * line
        total = given["sigma_star"] + atom + np.maximum(gas, 0.0)
        again = record({**given, "sigma_total": total}) * line
        residual = np.abs(again / gas - 1.0).max()
        print(
            f"{record.key}: plain {plain:.3f} s, solved with derivatives {solved:.3f} s, "
            f"ratio {solved / plain:.1f}, residual {residual:.1e} ({n} pixels)"
        )
        choices = Choices("leroy2008_fuv_24um", alpha_co=record.key)
        maps = {"HI": atom / 0.02, "CO(1-0)": line, "FUV": np.ones(n), "24um": np.ones(n)}
        flat = Parameters(1.0, oh=given["oh"], sigma_star=given["sigma_star"])
        one = best(lambda m=maps, c=choices, p=flat: convert(m, c, p), options.runs)
        drawn = {tracer: m[: 1000 * (n // 1000)].reshape(1000, -1) for tracer, m in maps.items()}
        many = Parameters(
            1.0, oh=given["oh"][: drawn["HI"].shape[1]], sigma_star=given["sigma_star"][:1]
        )
        draws = best(lambda m=drawn, c=choices, p=many: convert(m, c, p), options.runs)
        print(f"convert: one call {one:.3f} s, 1000 draws {draws:.3f} s, ratio {draws / one:.2f}")


if __name__ == "__main__":
    main()
