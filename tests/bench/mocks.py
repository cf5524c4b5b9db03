"""What a fit recovers from 500 painted galaxies of each kind, and what older estimators do.

``python tests/bench/mocks.py [number] [phases]`` (500 and 1). Seeds are fixed by number and kind;
every mock is counted. Half the pixels are below S/N 3 in star formation and half in CO, a third
has no CO, 6 pixels span a beam; the law is painted at the final beam. For slope, intercept at the
pivot, and scatter: mean of fitted - true, and how many per cent of the 68 and 95 % intervals hold
the truth; then the mean bias in slope of each classical estimator. A true scatter of zero must
come back as a limit. Last, a law at the scale of clouds: by how much the beam moves it.
"""

from __future__ import annotations

import sys
import time
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).resolve().parents[1]))

from mock_galaxy import CENTRE, LEVEL, N_PIXELS, PIVOT, PIXELS_PER_BEAM, clouds, paint, phase_of

from kspipe.comparison.estimators import classical_fits
from kspipe.comparison.line import fit_line_phases
from kspipe.comparison.phases import beam_correlation_length
from kspipe.comparison.samples import lattice_phases
from kspipe.kernels.statistics import beam_averaging_dex

SEED = 20260
KINDS = ((1.0, 0.1), (1.0, 0.3), (1.4, 0.1), (1.4, 0.3))


def generator(number: int, slope: float, scatter: float) -> np.random.Generator:
    return np.random.default_rng([SEED, number, round(100 * slope), round(100 * scatter)])


def one_kind(slope: float, scatter: float, number: int, phases: int) -> None:
    masks = lattice_phases((N_PIXELS, N_PIXELS), CENTRE, PIXELS_PER_BEAM, phases)
    rows, classical, failed, limits = [], [], 0, 0
    begin = time.process_time()
    for k in range(number):
        galaxy = paint(generator(k, slope, scatter), slope, scatter)
        samples = [phase_of(galaxy, mask) for mask in masks]
        fit = fit_line_phases(samples, beam_correlation_length(PIXELS_PER_BEAM)).mean
        if not fit.is_fitted:
            failed += 1
            continue
        limits += fit.is_limit
        level = LEVEL + slope * (fit.pivot - PIVOT)
        # A limit is not a value: it is counted above and enters no mean.
        scatter_off = np.nan if fit.is_limit else fit.scatter_dex - scatter
        off = np.array([fit.slope - slope, fit.intercept - level, scatter_off])
        rows.append([off, [fit.slope_error, fit.intercept_error, fit.scatter_error]])
        older = classical_fits(samples[0].samples, PIVOT)
        classical.append([fit.slope - slope for fit in older])
    off, error = np.moveaxis(np.array(rows), 1, 0)
    pulls = off / error
    print(
        f"N = {slope}, scatter = {scatter}: {number} mocks, {samples[0].samples.n} samples, "
        f"{failed} without a fit, scatter a limit in {limits}, "
        f"{(time.process_time() - begin) / number:.2f} s each"
    )
    for i, name in enumerate(("slope", "intercept", "scatter")):
        good = np.isfinite(pulls[:, i])
        if not good.any():
            continue
        held = [100 * np.mean(np.abs(pulls[good, i]) < z) for z in (1.0, 1.96)]
        one = off[good, i]
        print(
            f"  {name:9s} bias {one.mean():+.4f} +- {one.std() / len(one) ** 0.5:.4f}, "
            f"error {error[good, i].mean():.4f}, 68 % holds {held[0]:.1f} %, "
            f"95 % holds {held[1]:.1f} %"
        )
    names = [fit.method for fit in older]
    means = np.nanmean(classical, axis=0)
    print(
        "  slope - true: " + ", ".join(f"{n} {m:+.2f}" for n, m in zip(names, means, strict=True)),
        flush=True,
    )


def law_of_clouds(slope: float = 1.4, width_dex: float = 0.35) -> None:
    """Truth is the law after averaging in the beam."""
    gas, sfr = clouds(np.random.default_rng(SEED), slope, width_dex)
    moved = np.log10(sfr.mean() / gas.mean() ** slope)
    print(
        f"N = {slope} painted on clouds of {width_dex} dex: the beam raises it by {moved:+.4f} dex;"
        f" kspipe says {beam_averaging_dex(slope, width_dex):+.4f} dex"
    )


if __name__ == "__main__":
    wanted = int(sys.argv[1]) if len(sys.argv) > 1 else 500
    n_phases = int(sys.argv[2]) if len(sys.argv) > 2 else 1
    for kind in KINDS:
        one_kind(*kind, wanted, n_phases)
    one_kind(1.0, 0.0, max(wanted // 10, 5), n_phases)
    law_of_clouds()
