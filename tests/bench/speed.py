"""Time a reduction of large maps against the hand-written chain and against bare arithmetic.

``python tests/bench/speed.py [--size 4096] [--runs 3]`` paints four maps with error maps, then
runs, each as a process of its own and in turn: ``kspipe reduce``; what an observer writes by hand
on general-purpose libraries (a sampled kernel through ``convolve_fft``, then
``reproject_interp``, for value and variance); and the bare arithmetic (read, one real FFT pair
per value and per variance, interpolation, write). Prints seconds, peak memory and ratios.
"""

from __future__ import annotations

import argparse
import os
import subprocess
import sys
import tempfile
import time
from pathlib import Path

import numpy as np
from astropy.io import fits

CENTRE = (150.0, 20.0)
BEAM_ARCSEC = 15.0
# Pixel and round beam [arcsec] of each map, and its share of --size.
MAPS = {
    "hi": ("HI", "K km/s", 4.0, 12.0, 0.375),
    "co": ("CO(2-1)", "K km/s", 2.0, 8.0, 0.75),
    "fuv": ("FUV", "MJy/sr", 1.5, 4.6, 1.0),
    "ir": ("24um", "MJy/sr", 2.5, 6.4, 0.6),
}

BY_HAND = """
import sys, numpy as np
from astropy.io import fits
from astropy.wcs import WCS
from astropy.convolution import convolve_fft, Gaussian2DKernel
from reproject import reproject_interp
folder, target = sys.argv[1], fits.Header.fromtextfile(sys.argv[2])
for name, beam in {beams}.items():
    hdu = fits.open(f"{{folder}}/{{name}}.fits")[0]
    sigma = fits.getdata(f"{{folder}}/{{name}}_noise.fits").astype(float)
    wcs = WCS(hdu.header); pixel = abs(hdu.header["CDELT1"]) * 3600
    kernel = Gaussian2DKernel(np.sqrt({target_beam}**2 - beam**2) / 2.3548 / pixel)
    image = convolve_fft(hdu.data.astype(float), kernel, allow_huge=True, preserve_nan=True)
    k2 = (kernel.array / kernel.array.sum()) ** 2
    variance = convolve_fft(sigma**2, k2, normalize_kernel=False, allow_huge=True)
    for kind, array in (("value", image), ("error", variance)):
        out = reproject_interp((array, wcs), target, return_footprint=False)
        fits.PrimaryHDU(out.astype("f4"), target).writeto(f"{{folder}}/{{name}}_{{kind}}_hand.fits",
                                                          overwrite=True)
"""

BARE = """
import os, sys, numpy as np, scipy.fft
from astropy.io import fits
from scipy import ndimage
folder, target = sys.argv[1], fits.Header.fromtextfile(sys.argv[2])
shape = target["NAXIS2"], target["NAXIS1"]
for name in {names}:
    for kind in ("", "_noise"):
        data = fits.getdata(f"{{folder}}/{{name}}{{kind}}.fits").astype(float)
        n = [scipy.fft.next_fast_len(s, real=True) for s in data.shape]
        smooth = scipy.fft.irfft2(scipy.fft.rfft2(data, n, workers=os.cpu_count()), n,
                                  workers=os.cpu_count())
        y, x = np.indices(shape) * ((np.array(data.shape) - 1) / shape)[:, None, None]
        out = ndimage.map_coordinates(smooth, [y, x], order=3)
        fits.PrimaryHDU(out.astype("f4"), target).writeto(f"{{folder}}/{{name}}{{kind}}_bare.fits",
                                                          overwrite=True)
"""


def header(pixel_arcsec: float, n: int) -> fits.Header:
    """A TAN header of n x n pixels around the centre."""
    cards = fits.Header()
    for axis, (kind, value, sign) in enumerate(
        (("RA---TAN", CENTRE[0], -1), ("DEC--TAN", CENTRE[1], 1)), 1
    ):
        cards[f"CTYPE{axis}"], cards[f"CUNIT{axis}"] = kind, "deg"
        cards[f"CRVAL{axis}"], cards[f"CRPIX{axis}"] = value, (n + 1) / 2
        cards[f"CDELT{axis}"] = sign * pixel_arcsec / 3600
    return cards


def paint(folder: Path, size: int) -> Path:
    """Write the maps, a recipe and the target header."""
    rng = np.random.default_rng(5)
    tables = []
    for name, (tracer, unit, pixel, beam, share) in MAPS.items():
        n = round(size * share)
        cards = header(pixel, n)
        cards["BUNIT"], cards["BMAJ"], cards["BMIN"], cards["BPA"] = (
            unit,
            beam / 3600,
            beam / 3600,
            0.0,
        )
        r2 = ((np.indices((n, n)) - (n - 1) / 2) ** 2).sum(axis=0) * pixel**2
        data = 100 * np.exp(-r2 / 2 / 400**2) + rng.normal(size=(n, n))
        fits.PrimaryHDU(data.astype("f4"), cards).writeto(folder / f"{name}.fits")
        fits.PrimaryHDU(np.ones((n, n), "f4"), cards).writeto(folder / f"{name}_noise.fits")
        tables.append(
            f'[maps.{name}]\ntracer = "{tracer}"\nfile = "{name}.fits"\naverages_pixels = false\n'
            f'noise = {{file = "{name}_noise.fits", is = "sigma"}}\n'
        )
    (folder / "recipe.toml").write_text(
        'seed = 1\n[galaxy]\nname = "large"\n'
        f'centre = "{CENTRE[0]} {CENTRE[1]} deg"\ndistance = "5 Mpc"\ninclination = "30 deg"\n'
        f'position_angle = "0 deg"\n[grid]\nbeam = "{BEAM_ARCSEC} arcsec"\n'
        "[metallicity]\noh = 8.69\n[foreground]\nebv = 0\n"
        '[gas]\nalpha_co = "bolatto2013_galactic"\nline_ratio = 0.65\n'
        '[star_formation]\ncalibration = "leroy2008_fuv_24um"\nmaps = ["fuv", "ir"]\n'
        + "".join(tables)
    )
    pixel = BEAM_ARCSEC / 3
    n = int(min(size * share * m for _, _, m, _, share in MAPS.values()) / pixel)
    target = header(pixel, n)
    target["NAXIS"], target["NAXIS1"], target["NAXIS2"] = 2, n, n
    target.totextfile(folder / "target.txt")
    return folder


def measure(command: list[str]) -> tuple[float, float]:
    """Seconds and peak memory [MB] of a process."""
    begin = time.perf_counter()
    process = subprocess.Popen(command, stdout=subprocess.DEVNULL, stderr=subprocess.PIPE)
    _, status, usage = os.wait4(process.pid, 0)
    seconds = time.perf_counter() - begin
    if status:
        sys.exit(f"{command[:4]} failed: {process.stderr.read().decode()[-2000:]}")
    return seconds, usage.ru_maxrss / 1024


def main() -> None:
    """Paint, run in turn, print."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--size", type=int, default=4096)
    parser.add_argument("--runs", type=int, default=3)
    options = parser.parse_args()
    with tempfile.TemporaryDirectory() as name:
        folder = paint(Path(name), options.size)
        beams = {name: beam for name, (_, _, _, beam, _) in MAPS.items()}
        hand = BY_HAND.format(beams=beams, target_beam=BEAM_ARCSEC)
        bare = BARE.format(names=list(MAPS))
        files = [str(folder), str(folder / "target.txt")]
        commands = {
            "kspipe": [
                *(sys.executable, "-m", "kspipe", "reduce", str(folder / "recipe.toml")),
                *("--out", str(folder / "out"), "--quiet"),
            ],
            "by hand": [sys.executable, "-c", hand, *files],
            "bare": [sys.executable, "-c", bare, *files],
        }
        taken: dict[str, list[tuple[float, float]]] = {key: [] for key in commands}
        for _ in range(options.runs):
            for key, command in commands.items():
                subprocess.run(["rm", "-rf", str(folder / "out")], check=True)
                taken[key].append(measure(command))
        medians = {key: np.median(np.array(values), axis=0) for key, values in taken.items()}
        for key, (seconds, memory) in medians.items():
            print(f"{key:8s} {seconds:7.2f} s {memory:8.0f} MB")
        for key in ("by hand", "bare"):
            ratio = medians[key] / medians["kspipe"]
            print(f"{key} / kspipe: time {ratio[0]:.2f}, memory {ratio[1]:.2f}")


if __name__ == "__main__":
    main()
