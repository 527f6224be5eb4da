"""The written vocabulary names every key, and its examples and defaults are ones the reader takes."""

import pytest
from scanward.cases.fields import read_value
from scanward.cases.quantity import KINDS, Quantities
from scanward.cases.reference import case_reference
from scanward.cases.schema import CONDUCTORS, REPEATED, SINGLE, TOP, Table

TABLES = [
    TOP,
    *SINGLE.values(),
    *CONDUCTORS.values(),
    *(t for t in REPEATED.values() if isinstance(t, Table)),
]
PLAIN = Quantities({})


def test_every_key_is_in_the_text():
    text = case_reference()
    for table in TABLES:
        for name, key in table.keys.items():
            assert f"| `{name}` |" in text and key.text in text


@pytest.mark.parametrize("table", TABLES, ids=lambda table: table.text)
def test_defaults_are_legal_values(table):
    for name, key in table.keys.items():
        assert not (key.required and key.default is not None)
        if key.default is not None:
            read_value(key.default, key, name, PLAIN)


def test_examples_are_quantities_of_their_kind():
    for kind, (_, example) in KINDS.items():
        PLAIN.value(example, kind, "here")
