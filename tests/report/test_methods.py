"""Does `methods` write every formula out with its source?"""

import pytest

from firnlight.core.errors import InputProblem
from firnlight.core.tables import load_table
from firnlight.report.methods import WIDTH, methods_data, methods_text


def test_every_conversion_sensor_and_fraction_is_listed_within_the_width():
    text = methods_text(None)
    for table in ("broadband", "sensors"):
        for name in load_table(table).rows:
            assert f"\n{name}\n" in text
    assert max(map(len, text.splitlines())) <= WIDTH


def test_a_formula_is_written_out():
    text = methods_text("liang2001")
    assert "0.356 blue + 0.13 red + 0.373 nir + 0.085 swir16 + 0.072 swir22 - 0.0018" in text
    assert "0.726 green - 0.015 nir - 0.322 green^2 + 0.581 nir^2" in methods_text("knap1999")


def test_everything_has_a_source():
    assert all(entry["source"] for entry in methods_data(None)["methods"].values())


def test_a_wrong_name_gets_the_nearest():
    with pytest.raises(InputProblem, match="tasumi2008"):
        methods_text("tasumi208")
