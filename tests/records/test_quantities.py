"""The controlled list agrees with the units that are kept, and with what the methods give."""

from __future__ import annotations

import re

import pytest

from registry.physics.catalogue import FACTS
from registry.records.quantities import QUANTITIES, VALID_UNTIL
from registry.records.units import canonical


@pytest.mark.parametrize("name", QUANTITIES)
def test_a_quantity_is_kept_in_its_canonical_unit(name: str) -> None:
    quantity = QUANTITIES[name]
    assert canonical(quantity.unit) == (1.0, 0.0, quantity.unit)


@pytest.mark.parametrize("name", QUANTITIES)
def test_a_quantity_says_what_it_is_and_how_long_it_holds(name: str) -> None:
    quantity = QUANTITIES[name]
    assert quantity.name == name
    assert re.fullmatch("[a-z_]+", name)
    assert quantity.meaning
    assert quantity.valid_until in VALID_UNTIL


@pytest.mark.parametrize("method", FACTS)
def test_a_method_gives_listed_quantities_in_listed_units(method: str) -> None:
    for name, unit in FACTS[method].quantities.items():
        assert QUANTITIES[name].unit == unit


def test_the_list_cannot_be_changed_by_mistake() -> None:
    with pytest.raises(TypeError):
        QUANTITIES["x"] = QUANTITIES["lever_arm"]  # type: ignore[index]
