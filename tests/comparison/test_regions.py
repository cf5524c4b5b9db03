"""Region files: DS9 text and STC-S."""

from __future__ import annotations

import numpy as np
import pytest

from kspipe.comparison.regions import parse_regions, pixels_inside
from kspipe.core.errors import InputError

DEC = 60.0


def inside(text, east_arcsec, north_arcsec):
    ra = 10.0 + np.atleast_1d(east_arcsec) / 3600 / np.cos(np.radians(DEC))
    dec = DEC + np.atleast_1d(north_arcsec) / 3600
    return pixels_inside(parse_regions(text, "test.reg"), ra, dec).tolist()


def test_circle_in_degrees_and_sexagesimal():
    for text in (
        'icrs\ncircle(10.0,60.0,5")',
        'fk5;circle(0:40:00.0,+60:00:00.0,5") # color=red',
        "Circle ICRS 10.0 60.0 0.00138889",
    ):
        assert inside(text, [0, 4.9, 5.1, 0], [0, 0, 0, 4.9]) == [True, True, False, True]


def test_ellipse_angle_counts_from_west_through_north():
    # Common practice: 0 is along the horizontal axis of a north-up map, 90 is north.
    text = 'icrs\nellipse(10,60,10",2",{})'
    assert inside(text.format(0), [9, 0], [0, 9]) == [True, False]
    assert inside(text.format(90), [9, 0], [0, 9]) == [False, True]
    # 45 degrees: from west towards north.
    assert inside(text.format(45), [-6, 6], [6, 6]) == [True, False]


def test_box_annulus_polygon_and_a_hole():
    assert inside('icrs\nbox(10,60,10",2",0)', [4.9, 5.1, 0], [0, 0, 1.1]) == [True, False, False]
    assert inside('icrs\nannulus(10,60,2",4")', [1, 3, 5], [0, 0, 0]) == [False, True, False]
    corner = 10 / 3600
    lean = corner / np.cos(np.radians(DEC))
    polygon = f"icrs\npolygon(10,60,{10 + lean},60,10,{60 + corner})"
    assert inside(polygon, [2, 8, -1], [2, 8, 1]) == [True, False, False]
    assert inside('icrs\ncircle(10,60,5")\n-circle(10,60,2")', [1, 3], [0, 0]) == [False, True]


@pytest.mark.parametrize(
    ("text", "says"),
    [
        ("", "holds no region"),
        ("image\ncircle(10,60,5)", "save the regions in ICRS"),
        ("circle(10,60,5)", "before any frame"),
        ("icrs\nsquiggle(1,2)", "line 2"),
        ("icrs\ncircle(10,60)", "expected 3"),
        ('icrs\ncircle(10,60,five")', "not a size"),
        ('icrs\ncircle(ten,60,5")', "not a coordinate"),
        ("icrs\npolygon(1,2,3,4)", "three corners"),
        ('icrs\ncircle(10,60,-5")', "negative"),
    ],
)
def test_what_cannot_be_read_is_named(text, says):
    with pytest.raises(InputError, match=r"test\.reg") as error:
        parse_regions(text, "test.reg")
    assert says in str(error.value)
