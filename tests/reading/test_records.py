"""Small tables with known columns."""

from __future__ import annotations

import numpy as np
import pytest

from tieline.errors import InputError
from tieline.reading.input_file import InputFile
from tieline.reading.records import read_records

COLUMNS = {"material": "Material", "value": "Value", "sd": "SD"}
NUMBERS = frozenset({"value", "sd"})


def file(text: str) -> InputFile:
    return InputFile.from_bytes("r.csv", text.encode())


def test_texts_and_numbers_by_name():
    text = "Material;Value;SD;Else\nRG-1 ; 1,5;0,1;x\n;;;\nRG-2;2;;y\n"
    records = read_records(file(text), COLUMNS, NUMBERS, frozenset({"material", "value"}))
    assert records["material"] == ["RG-1", "RG-2"]
    np.testing.assert_array_equal(records["value"], [1.5, 2.0])
    np.testing.assert_array_equal(records["sd"], [0.1, np.nan])
    assert records["row"].tolist() == [2, 4]


def test_columns_that_may_be_missing():
    records = read_records(file("material,Value\nRG-1,1\n"), COLUMNS, NUMBERS, frozenset({"material"}))
    assert records["material"] == ["RG-1"]
    np.testing.assert_array_equal(records["sd"], [np.nan])


def test_every_problem_is_told_with_its_place():
    with pytest.raises(InputError) as caught:
        read_records(file("Material,Valeu\nRG-1,1\n"), COLUMNS, NUMBERS)
    assert [(problem.column, problem.remedy) for problem in caught.value.problems] == [
        ("Value", 'Did you mean "Valeu"?'),
        ("SD", ""),
    ]
    with pytest.raises(InputError) as caught:
        read_records(
            file("Material,Value,SD\n,1,<2\nRG-1,much,\n"), COLUMNS, NUMBERS, frozenset({"material", "value"})
        )
    found = [(problem.file, problem.row, problem.column) for problem in caught.value.problems]
    assert found == [("r.csv", 2, "Material"), ("r.csv", 2, "SD"), ("r.csv", 3, "Value")]


def test_rows_of_another_length():
    with pytest.raises(InputError, match="row 2: the row has 2 cells, the header 3"):
        read_records(file("Material,Value,SD\nRG-1,1\n"), COLUMNS, NUMBERS)
