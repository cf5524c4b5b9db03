"""Rows of text of totals and trials."""

from __future__ import annotations

from kspipe.core.report import total_rows
from kspipe.core.trial_report import closure_lines, flip_lines, ladder_rows


def test_faint_total_comes_with_its_limit():
    entry = {"value": -1e7, "random_error": 1e8, "unit": "Msun", "upper_limit": 3.1e8}
    ((_, text, _),) = total_rows({"totals": {"mass_mol": entry}})
    assert "below 3.1e+08 (3 sigma)" in text


def test_flip_names_assumption_size_and_sigma():
    turned = {
        "conclusion": "x predicts too many stars",
        "assumption": "alpha_CO",
        "n_sigma": -0.9,
        "change": "by -0.1 dex",
        "becomes": "it predicts too few",
    }
    firm = {**turned, "assumption": "", "n_sigma": None}
    lines = flip_lines({"flips": [turned, firm]})
    assert lines[0] == (
        "x predicts too many stars: alpha_CO by -0.1 dex (0.9 sigma) and it predicts too few"
    )
    assert "no single assumption" in lines[1]


def test_rung_without_a_fit_says_why():
    rung = {
        "factor": 8,
        "beam_pc": 5003.0,
        "n_independent": 7.4,
        "line": {"is_fitted": False, "n": 7, "message": "7 independent samples"},
        "ages_myr": {"FUV": "0-10-100"},
        "stars_per_beam": None,
        "share_of_few": 0.2,
        "relations": {"one": {"sum_ratio": None}},
        "limits": ["beam of 100 pc, below 500 pc"],
    }
    (row,) = ladder_rows({"rungs": [rung]})
    assert row[4:6] == ("none", "7 independent samples")
    assert row[6] == "one none"
    assert row[7].startswith("sampling-limited: beam of 100 pc")


def test_closure_says_what_the_beam_does():
    closure = {
        "paint": {"relation": "", "slope": 1.4},
        "law_shift": {"slope": 0.0164},
        "power": [],
        "wrong": {
            "inclination_off_deg": 5.0,
            "alpha_co_off": 1.5,
            "ratios": {"sigma_mol": (0.724, 0.732)},
            "slope_found": None,
            "slope_error": None,
            "slope_true": 1.39,
        },
        "failures": {"line: no peak": 2},
    }
    lines = closure_lines(closure)
    assert lines[0] == "averaging in the beam moves a line of slope 1.4 by +0.016 in slope"
    assert "mol 0.732 (0.724 expected)" in lines[1]
    assert lines[-1] == "2 fits without a result: line: no peak"
