"""Numbers as they stand on figures."""

import pytest

from kspipe.products.words import measured, parameter_text


@pytest.mark.parametrize(
    ("value", "error", "unit", "sign", "text"),
    [
        (0.86974, 0.00778, "", False, "0.8697 ± 0.0078"),
        (0.171, 0.0418, "dex", True, "+0.171 ± 0.042 dex"),
        (-0.446, 0.040, "dex", True, "−0.446 ± 0.040 dex"),
        (3.2, 12.0, "", False, "3 ± 12"),
        (1.0205, None, "dex", True, "+1.02 dex"),
        (None, None, "dex", True, "not defined"),
    ],
)
def test_measured(value, error, unit, sign, text):
    assert measured(value, error, unit, sign=sign) == text


def test_parameters():
    assert parameter_text({"clumping": 5.0, "anchor_oh": 8.69}) == "clumping = 5, anchor_oh = 8.69"
