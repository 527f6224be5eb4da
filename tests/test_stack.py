"""The stack: heights, regions and the words bad input is refused with."""

from __future__ import annotations

import numpy as np
import pytest
from scanward.geometry.errors import InputError
from scanward.geometry.stack import Layer, SheetImpedance, Stack

STACK = Stack((Layer(1e-3, 2.2, 0.001, name="laminate"), Layer(5e-3, 1.05)), ground=True)


def test_heights_and_regions():
    assert np.allclose(STACK.interfaces, [0, 1e-3, 6e-3])
    z = [0.0, 0.5e-3, 1e-3, 3e-3, 6e-3, 7e-3]
    assert STACK.region_at(z).tolist() == [1, 1, 2, 2, 3, 3]
    assert STACK.region_at(z, "below").tolist() == [1, 1, 1, 2, 2, 3]
    assert Stack(STACK.layers).region_at([-1e-3, 0.0], "below").tolist() == [0, 0]
    assert STACK.layer_at(0.5e-3).name == "laminate"
    assert STACK.layer_at(7e-3) is None


def test_heights_within_rounding_lie_on_the_interface():
    assert STACK.snap(1e-3 + 1e-15) == STACK.interfaces[1]
    assert STACK.snap(1.01e-3) == 1.01e-3


def test_media():
    assert STACK.permittivity[1] == 2.2 * (1 - 0.001j)
    assert not STACK.is_air
    assert not STACK.is_lossless
    air = Stack((Layer(1e-2, 1.0),), ground=True)
    assert air.is_air
    assert not Stack(air.layers, True, (SheetImpedance(5e-3, 100.0),)).is_air
    assert Stack(air.layers, True, (SheetImpedance(5e-3, 100j),)).is_lossless
    assert Stack().top == 0
    assert "laminate 1 mm" in repr(STACK)


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        ({"thickness": -1e-3, "permittivity": 2}, r"thickness = -0\.001 is out of range"),
        ({"thickness": 0.0, "permittivity": 2}, r"thickness = 0\.0 is out of range"),
        ({"thickness": float("nan"), "permittivity": 2}, "thickness = nan"),
        ({"thickness": float("inf"), "permittivity": 2}, "thickness = inf"),
        ({"thickness": 1e-3, "permittivity": 0.9}, r"permittivity = 0\.9.*marked artificial"),
        ({"thickness": 1e-3, "permittivity": -2, "artificial": True}, "permittivity = -2.*above 0"),
        ({"thickness": 1e-3, "permittivity": 2, "loss_tangent": -0.1}, r"loss_tangent = -0\.1.*0 or more"),
        ({"thickness": 1e-3, "permittivity": 2, "permeability": 0.5}, r"permeability = 0\.5"),
    ],
)
def test_bad_layers_are_refused(arguments, message):
    with pytest.raises(InputError, match=message):
        Layer(**arguments)


def test_artificial_media_may_lie_below_one():
    assert Layer(1e-3, 0.5, artificial=True).permittivity == 0.5


@pytest.mark.parametrize("impedance", [0, -10, complex("nan"), float("inf")])
def test_sheets_that_are_no_passive_impedance_are_refused(impedance):
    with pytest.raises(InputError, match="not that of a passive sheet"):
        SheetImpedance(1e-3, impedance)


@pytest.mark.parametrize(
    ("heights", "message"),
    [
        ([7e-3], r"height = 0\.007 m lies outside the layers.*0 to 0\.006 m"),
        ([0.0], "lies on the ground"),
        ([2e-3, 2e-3], "carries two sheets"),
    ],
)
def test_sheets_in_impossible_places_are_refused(heights, message):
    with pytest.raises(InputError, match=message):
        Stack(STACK.layers, True, tuple(SheetImpedance(h, 50.0) for h in heights))


def test_unknown_sides_and_heights_in_the_ground_are_refused():
    with pytest.raises(InputError, match="side = left is unknown"):
        STACK.region_at(1e-3, "left")
    with pytest.raises(InputError, match="inside the ground"):
        STACK.region_at(-1e-3)
