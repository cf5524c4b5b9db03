"""Fits as lines of text for the terminal."""

from __future__ import annotations

from kspipe.core.report import fit_lines

LINE = {
    "sample": "all pixels",
    "x": "sigma_gas",
    "slope": 1.234,
    "slope_error": 0.056,
    "scatter_dex": 0.123,
    "scatter_error": 0.01,
    "is_limit": False,
    "is_fitted": True,
    "n": 40,
    "n_pixels": 4000,
    "message": "",
}


def test_slope_scatter_and_both_counts_stand_in_one_line():
    (line,) = fit_lines({"fits": {"lines": [LINE]}})
    assert "slope 1.234 +- 0.056, scatter 0.123 +- 0.010 dex" in line
    assert "40 independent samples of 4000 pixels" in line


def test_limits_and_failures_are_not_given_as_numbers():
    limit = {**LINE, "is_limit": True, "scatter_dex": 0.05, "scatter_error": None}
    failed = {**LINE, "slope": None, "is_fitted": False, "message": "gas is not detected"}
    lines = fit_lines({"fits": {"lines": [limit, failed]}})
    assert "scatter below 0.05 (95 %) dex" in lines[0]
    assert lines[1].endswith("gas is not detected")


def test_ranking_prints_its_footing_and_what_is_left_out():
    difference = {"sentence": "a and b are not separated"}
    ranking = {"footing": "random only", "differences": [difference], "left_out": {"c": "no value"}}
    assert fit_lines({"ranking": [ranking]}) == [
        "random only: a and b are not separated",
        "c is not ranked: no value",
    ]
    assert fit_lines({}) == []
