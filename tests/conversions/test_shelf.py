"""Lists and explanations follow from the records, and their numbers are the records' own."""

from __future__ import annotations

import re

import pytest
from typer.testing import CliRunner

from kspipe.cli.app import app
from kspipe.conversions.shelf import FAMILIES, explain, find, list_family
from kspipe.core.citations import cite
from kspipe.core.errors import InputError

EVERY = [record for family in FAMILIES.values() for record in family]


def test_families_and_their_records() -> None:
    assert [row[0] for row in list_family()] == list(FAMILIES)
    for name, family in FAMILIES.items():
        rows = list_family(name)
        assert [row[0] for row in rows] == family.keys()
        for key, formula, paper, certainty in rows:
            record = family.get(key)
            assert (formula, certainty) == (record.formula, record.certainty)
            assert paper == cite(record.cite).short


@pytest.mark.parametrize("record", EVERY, ids=lambda record: record.key)
def test_an_explanation_holds_what_the_record_states(record) -> None:
    rows = dict(explain(record.key))
    assert rows["formula"] == record.formula
    assert cite(record.cite).journal in rows["paper"]
    assert record.where in rows["paper"]
    assert ("from memory" in rows["certainty"]) == (record.certainty == "from memory")
    for allowed in record.ranges:
        assert str(allowed) in rows["range"]
    # A finite number, and none but finite ones.
    assert re.search(r"\d", rows["worked number"])
    assert not re.search(r"nan|inf", rows["worked number"])
    assert find(record.key)[1] is record


@pytest.mark.parametrize(
    ("key", "says"),
    [
        # C104, C405's magnitudes, C334, and Schinnerer & Leroy 2024: 0.65 (0.01 / 0.018)^0.125.
        ("leroy2008_thin", "1.9868 Msun/pc2"),
        ("bianchi2017", "A_FUV = 0.403 mag"),
        ("kroupa2001", "for Salpeter is 0.64509 for Kroupa"),
        ("schinnerer2024_r21", "= 0.60395"),
        ("bolatto2013_galactic", "alpha_CO = 4.35 Msun/pc2"),
        ("curti2020", "OH = 8.7199"),  # C513
        ("leroy2008_fuv_24um", "Sigma_SFR = 0.00725 Msun/yr/kpc2"),
    ],
)
def test_worked_numbers(key: str, says: str) -> None:
    assert says in dict(explain(key))["worked number"]


def test_on_the_command_line() -> None:
    runner = CliRunner()
    listed = runner.invoke(app, ["list", "line_ratio"])
    assert listed.exit_code == 0
    assert "leroy2022_r21: R21 = 0.65" in listed.output
    assert "star_formation: " in runner.invoke(app, ["list"]).output
    explained = runner.invoke(app, ["explain", "amorin2016"])
    assert explained.exit_code == 0
    assert "coefficients from memory of the paper" in explained.output
    for arguments, near in (
        (["explain", "amorin2017"], "amorin2016"),
        (["list", "alphaco"], "alpha_co"),
    ):
        result = runner.invoke(app, arguments)
        assert result.exit_code == 2
        assert near in result.output


def test_unknown_names_from_python() -> None:
    with pytest.raises(InputError, match="amorin2016"):
        explain("amorin")
    with pytest.raises(InputError, match="alpha_co"):
        list_family("alpha")
