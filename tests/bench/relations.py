"""Time each relation against the plain expression of its paper, and solved forms against closed.

``python tests/bench/relations.py [--pixels 1000000] [--runs 5]`` prints, for each closed form, the
seconds of the plain numpy expression and of `Law.predict` without and with slopes; for each solved
form its ratio to the closed form of McKee & Krumholz 2010 and the gain over a scalar root finder in
a loop. Differences are what is left of constants that are written here with five digits.
"""

from __future__ import annotations

import argparse
import time
from collections.abc import Callable
from typing import Any

import numpy as np
from scipy.optimize import brentq

from kspipe.relations import LAWS

LOOPED = 2000


def best(work: Callable[[], object], runs: int) -> float:
    """Seconds of the fastest run."""
    seconds = []
    for _ in range(runs):
        start = time.perf_counter()
        work()
        seconds.append(time.perf_counter() - start)
    return min(seconds)


def z_of(i: dict[str, Any]) -> Any:
    """Metallicity as a user would write it."""
    return 10 ** (i["oh"] - 8.69)


def krumholz2009(i: dict[str, Any]) -> Any:
    """Eqs. 2 and 10 of ApJ 699, 850."""
    z, sigma = z_of(i), i["sigma_gas"]
    chi = 0.77 * (1 + 3.1 * z**0.365)
    s = np.log(1 + 0.6 * chi) / (0.04 * 5 * sigma * z)
    d = 0.0712 * (0.1 / s + 0.675) ** -2.8
    f = 1 - (1 + (0.75 * s / (1 + d)) ** -5) ** -0.2
    return f * sigma / 2.6e3 * np.where(sigma < 85, (sigma / 85) ** -0.33, (sigma / 85) ** 0.33)


def mckee2010(i: dict[str, Any]) -> Any:
    """ApJ 709, 308."""
    z, sigma = z_of(i), i["sigma_gas"]
    chi = 0.756 * (1 + 3.1 * z**0.365)
    s = np.log(1 + 0.6 * chi + 0.01 * chi**2) / (0.6 * 0.066 * 5 * sigma * z)
    return np.where(s < 2, 1 - 0.75 * s / (1 + 0.25 * s), 0) * sigma / 2e3


def sternberg(i: dict[str, Any]) -> Any:
    """Two-phase form of ApJ 790, 10."""
    z, sigma = z_of(i), i["sigma_gas"] / 1.36 * 1.4
    alpha_g = 6.78 * (1 + 3.1 * z**0.365) / 4.1 / (1 + (2.64 * z) ** 0.5)
    atom = 9.5 / z * np.log(alpha_g / 3.2 + 1)
    return np.maximum(1 - atom / sigma, 0) * i["sigma_gas"] / 2e3


def gnedin2011(i: dict[str, Any]) -> Any:
    """Eqs. 10 and 14 of ApJ 728, 88."""
    d, u, sigma = z_of(i), i["g0"], i["sigma_gas"] / 1.36
    d_star = 1.5e-3 * np.log(1 + (3 * u) ** 1.7)
    a = 5 * (u / 2) / (1 + (u / 2) ** 2)
    s = 0.04 / (d_star + d)
    g = (1 + a * s + s**2) / (1 + s)
    el = np.log(1 + g * d ** (3 / 7) * (u / 15) ** (4 / 7))
    critical = 20 * el ** (4 / 7) / (d * np.sqrt(1 + u * d**2))
    return (1 + critical / sigma) ** -2 * i["sigma_gas"] / 2e3


def gnedin2014(i: dict[str, Any]) -> Any:
    """ApJ 795, 37 with its erratum."""
    d, u, sigma = z_of(i), i["g0"], i["sigma_gas"] / 1.36
    s = 1000.0 / 100
    d_star = 0.17 * (2 + s**5) / (1 + s**5)
    g = np.sqrt(d**2 + d_star**2)
    a = 0.5 + 1 / (1 + np.sqrt(u * d**2 / 600))
    s1 = 50 / g * np.sqrt(0.001 + 0.1 * u) / (1 + 1.69 * np.sqrt(0.001 + 0.1 * u))
    r = (sigma / s1) ** a
    return r / (1 + r) * i["sigma_gas"] / 2e3


def polzin2024(i: dict[str, Any]) -> Any:
    """ApJ 966, 172, the fit in projection."""
    z, u, size = z_of(i), i["g0"], 1000.0
    n = i["sigma_gas"] / 1.36 * 1.2487e20
    lz = np.log10(z)
    w = 0.27 - 0.01 * (9.25 * lz**2 + 9.64 * lz)
    y = (21.96 - 0.19 * np.log10(size)) * np.exp(-0.5 * ((lz + 1.5) / 6.84) ** 2)
    foot = u**w * 10**y * (1 + 0.13 * np.log10(0.1 / z) * np.log10(size / 10))
    x = np.log(n / foot)
    m = 1 - np.exp(-9.467e13 * 3.5e-17 * (z / 0.1) ** 1.3 * n / 4.6285e20)
    fm = 1 / (1 + 2 * (1 - m) / m)
    a = 1 + 1.35 * (0.01 / z) ** 0.25 * (size / 10) ** 0.6 + 3.4 * (z / 0.6) ** 0.02
    return fm / (1 + np.exp(-a * x + np.log(fm / 1.65e-4))) * i["sigma_gas"] / 2e3


def leroy2008_pressure(i: dict[str, Any]) -> Any:
    """AJ 136, 2782."""
    gas, star, g = i["sigma_gas"], i["sigma_star"], 4.30092e-3
    dispersion = np.sqrt(2 * np.pi * g * 3000 / 7.3) * star**0.5
    pressure = np.pi / 2 * g * gas * (gas + 11 / dispersion * star) * 4902.0
    r = (pressure / 1.7e4) ** 0.8
    return r / (1 + r) * gas / 2e3


def kim2011(i: dict[str, Any]) -> Any:
    """ApJ 743, 25."""
    gas, g = i["sigma_gas"], 4.30092e-3
    pressure = (np.pi * g * gas**2 / 2 + gas * np.sqrt(2 * g * i["rho_sd"]) * 7) * 4902.0
    return 2.1e-3 * (pressure / 1e4) ** 1.18


def leroy2013(i: dict[str, Any]) -> Any:
    """AJ 146, 19."""
    return i["sigma_mol"] / 2.2e3


def kennicutt1998(i: dict[str, Any]) -> Any:
    """ApJ 498, 541."""
    return 2.5e-4 * (i["sigma_gas"] / 1.36) ** 1.4 * 0.64509


CLOSED: dict[str, tuple[Callable[[dict[str, Any]], Any], dict[str, float]]] = {
    "krumholz2009": (krumholz2009, {"clumping": 5}),
    "mckee2010": (mckee2010, {"clumping": 5, "depletion_time": 2}),
    "sternberg2014_two_phase": (sternberg, {"depletion_time": 2}),
    "gnedin2011": (gnedin2011, {"depletion_time": 2}),
    "gnedin2014": (gnedin2014, {"depletion_time": 2, "scale": 1000}),
    "polzin2024": (polzin2024, {"depletion_time": 2, "scale": 1000}),
    "leroy2008_pressure": (leroy2008_pressure, {"depletion_time": 2, "scale_length": 3}),
    "kim2011": (kim2011, {}),
    "leroy2013_depletion": (leroy2013, {}),
    "kennicutt1998_law": (kennicutt1998, {}),
}
SOLVED: dict[str, dict[str, float]] = {
    "krumholz2013": {"clumping": 5},
    "krumholz2013_own_field": {"clumping": 5},
    "ostriker2010": {},
}


def scalar_root(key: str, s: float, z: float, rho: float, g0: float) -> float:
    """Solve one pixel with a general bracketing root finder, the equations written out."""
    g = 4.30092e-3

    def pressure(diffuse: float, bound: float) -> float:
        weight = diffuse * (diffuse + 2 * bound)
        outer = 32 * 0.33 * 5 * 0.5 * 64 * rho / (np.pi * g) * diffuse**2
        return float(np.pi * g / 20 * (weight + np.sqrt(weight**2 + outer)) * 4902.0)

    def residual(f: float) -> float:
        p = pressure((1 - f) * s, f * s)
        if key == "ostriker2010":
            return p - 12000 * f * s / 2e3 / 2.5e-3 / (1 + 3 * (z * s / 10) ** 0.4)
        field = g0 if key == "krumholz2013" else f * s * 0.01 / (31 * s**-0.25) / 2.5e-3
        two = 23 * field * 4.1 / (1 + 3.1 * z**0.365)
        chi = 72 * field / max(two, p / (1.1 * 243), 1e-300)
        depth = np.log(1 + 0.6 * chi + 0.01 * chi**2) / (0.6 * 0.066 * 5 * s * z)
        return float((1 - 0.75 * depth / (1 + 0.25 * depth) if depth < 2 else 0.0) - f)

    return float(brentq(residual, 0, 1, xtol=1e-12)) if residual(0.0) > 0 else 0.0


def main() -> None:
    """Print the tables."""
    parser = argparse.ArgumentParser()
    parser.add_argument("--pixels", type=int, default=1_000_000)
    parser.add_argument("--runs", type=int, default=5)
    options = parser.parse_args()
    rng, n = np.random.default_rng(1), options.pixels
    inputs = {
        "sigma_gas": rng.lognormal(3.0, 1.0, n),
        "sigma_mol": rng.lognormal(2.0, 1.0, n),
        "oh": rng.uniform(8.0, 8.9, n),
        "sigma_star": rng.lognormal(4.5, 1.0, n),
        "rho_sd": rng.lognormal(-3.0, 0.8, n),
        "g0": rng.lognormal(0.0, 1.0, n),
    }
    for key, (expression, given) in CLOSED.items():
        law = LAWS.get(key)
        plain = best(lambda e=expression: e(inputs), options.runs)
        lean = best(lambda w=law, g=given: w.predict(inputs, g, slopes=False), options.runs)
        full = best(lambda w=law, g=given: w.predict(inputs, g), options.runs)
        off = np.abs(law.predict(inputs, given, slopes=False).sigma_sfr - expression(inputs)).max()
        print(
            f"{key}: plain {plain:.4f} s, predict {lean:.4f} s, ratio {lean / plain:.2f}; "
            f"with slopes {full / plain:.1f}; largest difference {off:.1e}"
        )
    closed = best(
        lambda: LAWS.get("mckee2010").predict(inputs, CLOSED["mckee2010"][1], slopes=False),
        options.runs,
    )
    for key, given in SOLVED.items():
        law = LAWS.get(key)
        solved = best(lambda w=law, g=given: w.predict(inputs, g, slopes=False), options.runs)
        full = best(lambda w=law, g=given: w.predict(inputs, g), options.runs)
        f = law.predict(inputs, given, slopes=False).f_mol
        few = range(min(LOOPED, n))
        z = z_of(inputs)
        pixels = [
            (float(inputs["sigma_gas"][i]), float(z[i]), float(inputs["rho_sd"][i]),
             float(inputs["g0"][i])) for i in few
        ]  # fmt: skip
        start = time.perf_counter()
        looped = np.array([scalar_root(key, *pixel) for pixel in pixels])
        per_pixel = (time.perf_counter() - start) / len(pixels)
        off = np.abs(looped - f[: len(pixels)]).max()
        print(
            f"{key}: {solved:.3f} s, {solved / closed:.1f} times the closed mckee2010 "
            f"({full / closed:.1f} with slopes); a loop of brentq takes "
            f"{per_pixel * n / solved:.0f} times as long; largest difference in f_H2 {off:.1e}"
        )


if __name__ == "__main__":
    main()
