"""One function between the units of the radiation field."""

import numpy as np
import pytest

from kspipe.core.radiation import FIELD_UNITS, field_in


@pytest.mark.parametrize("unit", FIELD_UNITS)
def test_there_and_back(unit) -> None:
    field = np.array([0.1, 3.0])
    for other in FIELD_UNITS:
        np.testing.assert_allclose(field_in(field_in(field, unit, other), other, unit), field)


def test_habing_where_draine_is_meant_is_a_factor_1_7() -> None:
    # Draine 1978 over Habing 1968 (common practice).
    assert field_in(1.0, "Draine", "Habing") == pytest.approx(1.7)
    assert field_in(1.0, "solar neighbourhood", "Draine") == 1.0
