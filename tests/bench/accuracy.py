"""Recovered over true, kspipe and the hand-written chain side by side, on the noise-free demo.

``python tests/bench/accuracy.py``: for each tracer the 1st, 16th, 50th, 84th and 99th percentile
of recovered/true - 1 [%], where coverage is complete, and where it is 0.5 to 0.95 (structured
edges); truth above 5 %, at edges 0.2 %, of its maximum. By hand is a kernel sampled on pixels
through ``convolve_fft``, then ``reproject_interp``; the painter tells it beam, unit and pixel.
"""

import sys
import warnings
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).resolve().parents[1]))

from astropy.convolution import Gaussian2DKernel, convolve_fft
from astropy.wcs import WCS
from closure import STEMS, matched_painted
from demo import load_demo
from reproject import reproject_interp

SIGMA_PER_FWHM = 1 / np.sqrt(8 * np.log(2))


def by_hand(name, target_fwhm, grid):
    """What an observer writes on general-purpose libraries."""
    demo = load_demo()
    hdu = demo.paint(1, noise=False)[STEMS[name][0]]
    instrument = demo.INSTRUMENTS[STEMS[name][0]]
    wcs = WCS(hdu.header).celestial
    pixel = np.sqrt(abs(np.linalg.det(wcs.pixel_scale_matrix))) * 3600
    major, minor, angle = instrument.beam
    widths = [np.sqrt(target_fwhm**2 - b**2) * SIGMA_PER_FWHM / pixel for b in (major, minor)]
    turn = np.degrees(np.arctan2(wcs.pixel_scale_matrix[0, 1], wcs.pixel_scale_matrix[1, 1]))
    kernel = Gaussian2DKernel(*widths, theta=np.radians(angle + turn + 90))
    data = hdu.data.squeeze().astype(float) / instrument.per_intensity
    smooth = convolve_fft(data, kernel, allow_huge=True, preserve_nan=True)
    return reproject_interp((smooth, wcs), grid.wcs, shape_out=grid.shape, return_footprint=False)


def main() -> None:
    """Print the table."""
    warnings.simplefilter("ignore")
    demo = load_demo()
    for recipe in ("orrinda_short.toml", "orrinda_full.toml"):
        plan, matched = matched_painted(1, noise=False, recipe_name=recipe)
        lon, lat = plan.grid.sky()
        for name, sky in matched.items():
            truth = demo.true_intensity(sky.tracer, lon, lat, plan.target_arcsec2)
            factor = demo.FILTER_OVER_HALPHA if sky.tracer == "Halpha" else 1.0
            bright, faint = truth > 0.05 * truth.max(), truth > 0.002 * truth.max()
            hand = by_hand(name, plan.fwhm_arcsec, plan.grid)
            for label, where in (
                ("complete", bright & (sky.coverage > 0.9999)),
                ("edges", faint & (sky.coverage >= 0.5) & (sky.coverage < 0.95)),
            ):
                for who, value in (("kspipe", sky.value / factor), ("by hand", hand)):
                    ratio = (value / truth)[where & np.isfinite(value)] - 1
                    if ratio.size:
                        shown = " ".join(
                            f"{v:8.3f}" for v in 100 * np.percentile(ratio, [1, 16, 50, 84, 99])
                        )
                        print(f"{sky.tracer:8s} {label:9s} {ratio.size:5d} {who:8s} {shown}")


if __name__ == "__main__":
    main()
