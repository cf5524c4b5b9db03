"""Turbulence-regulated efficiencies: published values, limits, derivatives, types."""

import math
import subprocess
import sys

import numpy as np
import pytest
from scipy.integrate import quad

from kspipe.relations.state import TURBULENCE, Forcing, Mach1D, Mach3D
from kspipe.relations.state.turbulence import (
    hennebelle_chabrier,
    krumholz2005,
    krumholz2005_fit,
    krumholz_mckee,
    multi_free_fall,
    padoan2012,
    padoan_nordlund,
    single_free_fall,
)

FIVE_DIGITS = 5e-5
every = pytest.mark.parametrize("model", list(TURBULENCE), ids=lambda model: model.key)
ONE = np.array(1.0)
MACH = Mach3D(np.array(10.0))
# b = 0.4, no field, eps / phi_t = 0.5.
FORCING = Forcing()


@pytest.mark.parametrize(
    ("alpha", "mach", "expected"),
    [(1.3, 100, 0.013961), (1.3, 10, 0.029807), (2, 25, 0.015626)],
)
def test_krumholz_mckee_2005(alpha: float, mach: float, expected: float) -> None:
    # ApJ 630, 250, its full expression with phi_x = 1.12, phi_t = 1.91, core efficiency 0.5.
    got = krumholz2005(np.array(alpha), Mach1D(np.array(float(mach)))).value
    assert float(got) == pytest.approx(expected, rel=FIVE_DIGITS)


def test_the_fit_of_krumholz_mckee_2005() -> None:
    got = krumholz2005_fit(np.array(1.3), Mach1D(np.array(10.0))).value
    assert float(got) == pytest.approx(0.029250, rel=FIVE_DIGITS)
    # Published as a fit: within 6 % of the full expression for alpha 0.5 to 2, and 18 % high at
    # most to alpha 3, for Mach 10 to 1000.
    alpha, mach = np.meshgrid(np.linspace(0.5, 3, 26), np.geomspace(10, 1000, 41))
    ratio = krumholz2005_fit(alpha, Mach1D(mach)).value / krumholz2005(alpha, Mach1D(mach)).value
    assert np.abs(ratio[alpha <= 2.0] - 1).max() < 0.065
    assert ratio.max() - 1 == pytest.approx(0.18, abs=0.01)


@pytest.mark.parametrize(
    ("threshold", "s_c", "efficiency"),
    [
        # Federrath & Klessen 2012, Table 1, multi free-fall: alpha = 1, M = 10.
        (krumholz_mckee, 5.5118, 0.080673),
        (padoan_nordlund, 4.0018, 0.35267),
        (lambda *a: hennebelle_chabrier(*a, turbulent=True), 2.1464, 0.95251),
        (lambda *a: hennebelle_chabrier(*a, turbulent=False), 0.68002, None),
    ],
    ids=["KM", "PN", "HC", "HC thermal"],
)
def test_federrath_klessen_2012(threshold, s_c: float, efficiency: float | None) -> None:
    got = threshold(ONE, MACH, FORCING)
    assert float(got.value) == pytest.approx(s_c, rel=FIVE_DIGITS)
    if efficiency is not None:
        multi = multi_free_fall(ONE, MACH, got, FORCING).value
        assert float(multi) == pytest.approx(efficiency, rel=FIVE_DIGITS)


def test_magnetic_field_of_padoan_nordlund() -> None:
    got = padoan_nordlund(ONE, MACH, Forcing(beta=1.0)).value
    assert float(got) == pytest.approx(3.0521, rel=FIVE_DIGITS)


def test_padoan_haugbolle_nordlund_2012() -> None:
    # ApJ 759, L27: 0.5 exp(-1.6) at t_ff = t_dyn.
    assert float(padoan2012(ONE)[0]) == pytest.approx(0.10095, rel=FIVE_DIGITS)
    # t_ff / t_dyn of a sphere by hand: 20 pc, 1e5 Msun, 2 km/s.
    g, r, m, s = 4.30092e-3, 20.0, 1e5, 2.0
    t_ff = math.sqrt(3 * math.pi / (32 * g * m / (4 / 3 * math.pi * r**3)))
    by_hand = 0.5 * math.exp(-1.6 * t_ff * math.sqrt(3) * s / r)
    model = TURBULENCE.get("padoan2012")
    got = model.efficiency(np.array(5 * s**2 * r / (g * m)), Mach1D(ONE), FORCING).value
    assert float(got) == pytest.approx(by_hand, rel=1e-9)


@pytest.mark.parametrize("kind", ["multi", "single", "at threshold"])
def test_the_integrals_behind_the_error_functions(kind: str) -> None:
    # Hennebelle & Chabrier 2011, Federrath & Klessen 2012: integral of (rho/rho_0) times
    # (t_ff0 / t_ff) times the log-normal of volume over densities above the threshold.
    s_c = krumholz_mckee(ONE, MACH, FORCING)
    s2 = math.log1p(0.16 * 100)
    threshold = float(s_c.value)

    def integrand(s: float) -> float:
        pdf = math.exp(-((s + s2 / 2) ** 2) / (2 * s2)) / math.sqrt(2 * math.pi * s2)
        own = {"multi": s / 2, "single": 0.0, "at threshold": threshold / 2}[kind]
        return math.exp(s + own) * pdf

    expected = 0.5 * quad(integrand, threshold, 60, epsabs=0, epsrel=1e-11)[0]
    got = (
        multi_free_fall(ONE, MACH, s_c, FORCING)
        if kind == "multi"
        else single_free_fall(ONE, MACH, s_c, FORCING, at_threshold=kind == "at threshold")
    )
    assert float(got.value) == pytest.approx(expected, rel=1e-8)


@every
def test_derivatives(model) -> None:
    forcing = Forcing(b=0.5, beta=2.0, efficiency=0.4)
    alpha, mach, h = 1.7, 6.0, 1e-5

    def at(a: float, m: float):
        return model.efficiency(np.array(a), Mach1D(np.array(m)), forcing)

    got = at(alpha, mach)
    da = (at(alpha * (1 + h), mach).value - at(alpha * (1 - h), mach).value) / (2 * h * alpha)
    dm = (at(alpha, mach * (1 + h)).value - at(alpha, mach * (1 - h)).value) / (2 * h * mach)
    assert float(got.by_alpha) == pytest.approx(float(da), rel=1e-6)
    assert float(got.by_mach) == pytest.approx(float(dm), rel=1e-6, abs=1e-12)


@every
def test_shapes_and_blanks(model) -> None:
    alpha = np.array([[0.5, 1.0, np.nan], [2.0, 3.0, 4.0]])
    mach = Mach1D(np.full((2, 3), 8.0))
    got = model.efficiency(alpha, mach, FORCING)
    for array in (got.value, got.by_alpha, got.by_mach):
        assert array.shape == (2, 3)
        np.testing.assert_array_equal(np.isnan(array), np.isnan(alpha))
    assert np.all(got.value[~np.isnan(alpha)] > 0)
    # A cloud that is bound more tightly forms stars faster, in every model.
    assert np.all(np.diff(got.value[1]) < 0)


# --- one and three dimensions --------------------------------------------------------------------


def test_conversion_is_the_root_of_three() -> None:
    assert float(Mach1D(ONE).to_3d().value) == pytest.approx(math.sqrt(3), rel=1e-15)
    assert float(Mach1D(np.array(7.0)).to_3d().to_1d().value) == pytest.approx(7.0, rel=1e-15)


def test_mixing_fails_at_run_time() -> None:
    with pytest.raises(TypeError, match=r"expected Mach1D, not Mach3D; Mach3D has to_1d\(\)"):
        krumholz2005(ONE, MACH)  # type: ignore[arg-type]
    with pytest.raises(TypeError, match=r"expected Mach3D, not Mach1D; Mach1D has to_3d\(\)"):
        krumholz_mckee(ONE, Mach1D(ONE), FORCING)  # type: ignore[arg-type]
    for wrong in (MACH, ONE, 10.0):
        with pytest.raises(TypeError, match="expected Mach1D"):
            TURBULENCE.get("padoan2011").efficiency(ONE, wrong, FORCING)  # type: ignore[arg-type]


@pytest.mark.slow
def test_mixing_fails_in_mypy(tmp_path) -> None:
    probe = tmp_path / "probe.py"
    probe.write_text(
        "import numpy as np\n"
        "from kspipe.relations.state.mach import Mach1D, Mach3D\n"
        "from kspipe.relations.state.turbulence import Forcing, krumholz2005, krumholz_mckee\n"
        "one = np.ones(1)\n"
        "krumholz2005(one, Mach1D(one))\n"
        "krumholz2005(one, Mach3D(one))\n"
        "krumholz_mckee(one, Mach1D(one), Forcing())\n"
    )
    done = subprocess.run(
        [sys.executable, "-m", "mypy", "--no-incremental", "--follow-imports=silent", str(probe)],
        capture_output=True, text=True, check=False, cwd=tmp_path,
    )  # fmt: skip
    assert 'probe.py:6: error: Argument 2 to "krumholz2005"' in done.stdout
    assert 'probe.py:7: error: Argument 2 to "krumholz_mckee"' in done.stdout
    assert "probe.py:5:" not in done.stdout


def test_the_mix_up_that_the_types_prevent() -> None:
    # With one cloud M_3D = 3^0.5 M_1D, and the critical density of the form in three dimensions
    # (pi^2/5 M_3D^2) is 9 times that of Krumholz & McKee 2005 (pi^2/15 M_1D^2).
    mach = Mach1D(np.array(5.0))
    three = math.exp(float(krumholz_mckee(ONE, mach.to_3d(), FORCING).value))
    one = math.pi**2 / 15 * 1.12**2 * 25.0
    assert three / one == pytest.approx(9.0, rel=1e-12)
