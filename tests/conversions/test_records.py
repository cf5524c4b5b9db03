"""What every published record, of any family, must be."""

import pickle
import re
from typing import get_args

import numpy as np
import pytest

from kspipe.conversions import ALPHA_CO, ATOMIC, EXTINCTION, STAR_FORMATION
from kspipe.conversions.record import Certainty, Range, Record
from kspipe.core.citations import cite
from kspipe.core.constants import HELIUM_FACTOR
from kspipe.core.tracers import TRACERS
from kspipe.relations import LAWS

FAMILIES = {
    "atomic": ATOMIC,
    "alpha_co": ALPHA_CO,
    "extinction": EXTINCTION,
    "star_formation": STAR_FORMATION,
    "relations": LAWS,
}
SHELVED = [(name, record) for name, family in FAMILIES.items() for record in family]

every = pytest.mark.parametrize(
    "record", [record for _, record in SHELVED], ids=[f"{name}:{r.key}" for name, r in SHELVED]
)
every_conversion = pytest.mark.parametrize(
    "record",
    [record for name, record in SHELVED if name != "relations"],
    ids=[record.key for name, record in SHELVED if name != "relations"],
)


def test_no_key_means_two_things() -> None:
    keys = [record.key for _, record in SHELVED]
    assert len(set(keys)) == len(keys)


@pytest.mark.parametrize("name", FAMILIES)
def test_every_record_lies_under_its_key(name: str) -> None:
    family = FAMILIES[name]
    assert family.keys()
    assert all(family.get(record.key) is record for record in family)


@every
def test_a_record_says_what_it_is(record) -> None:
    for text in (record.label, record.where, record.formula):
        assert text.strip() == text != ""
    assert record.certainty in get_args(Certainty)
    # author2012 or author2012_tracer, and the year and author of its paper.
    assert re.fullmatch(r"[a-z]+\d{4}(_[a-z0-9_]+)?", record.key)
    assert record.key.split("_")[0] == record.cite.split("_")[0]
    assert cite(record.cite).key == record.cite


@every
def test_a_record_travels(record) -> None:
    back = pickle.loads(pickle.dumps(record))
    assert back.key == record.key
    assert back == record


@every
def test_a_record_cannot_be_changed(record) -> None:
    with pytest.raises(AttributeError):
        record.key = "other2000"


@every_conversion
def test_conventions_are_stated(record: Record) -> None:
    assert record.helium_factor in (None, HELIUM_FACTOR)
    assert (record.helium_factor is None) == (record in [*EXTINCTION, *STAR_FORMATION])
    assert (record.imf is None) == (record not in list(STAR_FORMATION))
    assert record.scatter_dex is None or 0 < record.scatter_dex < 1
    for limits in record.ranges:
        assert limits.low < limits.high
        assert limits.quantity


def numbers(text: str) -> list[float]:
    return [float(n) for n in re.findall(r"(?<![\w.])\d+\.?\d*(?:e[+-]?\d+)?", text)]


@pytest.mark.parametrize("record", [*EXTINCTION, *STAR_FORMATION], ids=lambda record: record.key)
def test_the_printed_formula_holds_the_coefficients(record) -> None:
    printed = numbers(record.formula)
    assert set(record.coefficients.values()) <= set(printed)
    assert set(record.coefficients) <= set(TRACERS)
    with pytest.raises(TypeError):
        record.coefficients["FUV"] = 0.0


@pytest.mark.parametrize("record", list(ALPHA_CO), ids=lambda record: record.key)
def test_the_printed_formula_of_alpha_holds_at_solar_metallicity(record) -> None:
    assert float(record(np.array(1.0))) in numbers(record.formula)


@pytest.mark.parametrize("record", list(ATOMIC), ids=lambda record: record.key)
def test_the_printed_formula_of_atomic_gas_holds_its_coefficient(record) -> None:
    printed = numbers(record.formula)
    assert record.column_per_k_kms in printed
    assert any(record.msun_pc2_per_k_kms == pytest.approx(n, rel=5e-5) for n in printed)


@pytest.mark.parametrize("record", list(ALPHA_CO), ids=lambda record: record.key)
def test_alpha_over_its_range(record) -> None:
    z_prime = np.geomspace(0.2, 2.0, 40)
    z_prime.flags.writeable = False
    alpha = record(z_prime)
    assert alpha.shape == z_prime.shape
    assert np.all(np.isfinite(alpha))
    assert np.all(alpha > 0)
    # Less dust, less CO for the same H2: no published form rises with metallicity.
    assert np.all(np.diff(alpha) <= 0)
    assert (np.ptp(alpha) > 0) == record.depends_on_z
    np.testing.assert_allclose(alpha, [float(record(np.array(z))) for z in z_prime], rtol=1e-12)
    assert np.isnan(record(np.array(np.nan))) == record.depends_on_z


def test_a_range_in_words() -> None:
    assert str(Range("Z'", 0.2, 2.0)) == "0.2 <= Z' <= 2"
