"""Print cost and accuracy of the trials on the demo: ``python tests/bench/trials.py [MOCKS]``."""

import sys
import tempfile
import time
from pathlib import Path

import numpy as np

from kspipe.recipe import load_recipe
from kspipe.stages.reduce import reduce_maps
from kspipe.trials.budget import make_budget
from kspipe.trials.closure import run_closure
from kspipe.trials.draws import convert_draws, inputs_of
from kspipe.trials.ladder import climb
from kspipe.trials.painted import Paint
from kspipe.trials.priors import priors_of
from kspipe.trials.reduced import line_samples, open_reduced
from kspipe.trials.response import line_response, refit

RECIPES = Path(__file__).resolve().parents[2] / "recipes"
CHECKED_DRAWS = 12


def costs(name: str) -> None:
    """Budget and ladder of one recipe, and the response against full fits."""
    with tempfile.TemporaryDirectory() as folder:
        out = Path(folder) / "out"
        reduce_maps(load_recipe(RECIPES / name), out)
        reduced = open_reduced(out)
        for what, work in (
            ("budget, 2000 draws, checks and choices", lambda: make_budget(reduced)),
            ("ladder of 4", lambda: climb(reduced)),
        ):
            wall, cpu = time.perf_counter(), time.process_time()
            work()
            wall, cpu = time.perf_counter() - wall, time.process_time() - cpu
            print(f"{name}: {what}: {wall:.1f} s, {cpu:.1f} s of processor", flush=True)
        responses(name, reduced)


def responses(name, reduced) -> None:
    """How far the response is from full fits, beside how far the draws move the line."""
    lattice = reduced.lattice()
    inputs = inputs_of(reduced, lattice)
    priors, _ = priors_of(reduced.recipe, reduced.matched, set(inputs.intensity))
    fit, response = line_response(line_samples(reduced.disc, lattice))
    normal = np.random.default_rng(7).standard_normal((CHECKED_DRAWS, len(priors)))
    _, drawn = next(convert_draws(inputs, priors, normal))
    moved = response(drawn.gas, drawn.sfr, drawn.var_gas, drawn.var_sfr, drawn.cov)
    full = [refit(response, drawn.samples(k)) for k in range(CHECKED_DRAWS)]
    for key, own in (
        ("slope", fit.slope),
        ("level", fit.intercept),
        ("scatter_dex", fit.scatter_dex),
    ):
        refitted = np.array([getattr(one, key)[0] for one in full])
        off = getattr(moved, key) - refitted
        spread = np.nanstd(refitted - own)
        print(
            f"{name}: response less full fit, {key}: rms {np.nanstd(off):.4f}, mean "
            f"{np.nanmean(off):+.4f}; the draws move it by {spread:.4f} (rms)",
            flush=True,
        )


def main() -> None:
    """Print all."""
    mocks = int(sys.argv[1]) if len(sys.argv) > 1 else 20
    for name in ("orrinda_short.toml", "orrinda_full.toml"):
        costs(name)
    for slope in (1.0, 1.4):
        start = time.process_time()
        closure = run_closure(
            load_recipe(RECIPES / "orrinda_short.toml"), Paint(slope=slope), n_mocks=mocks
        )
        print(f"closure, slope {slope}, {mocks} skies: {time.process_time() - start:.0f} s")
        for f in closure.found:
            print(
                f"  {f.name:22s} truth {f.truth:8.4f}  bias {f.bias:+.4f} +- {f.bias_error:.4f}  "
                f"stated {f.stated_error:.4f}  in 68 %: {100 * f.within_68:.0f} %  in 95 %: "
                f"{100 * f.within_95:.0f} %",
                flush=True,
            )
        print("  beam:", closure.law_shift, " failures:", closure.failures)


if __name__ == "__main__":
    main()
