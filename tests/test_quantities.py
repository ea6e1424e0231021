"""Engineering text to SI numbers and back."""

from __future__ import annotations

import math

import pytest
from hypothesis import given
from hypothesis import strategies as st

from optisize.problem.schema import ProblemFile
from optisize.process.card import Process
from optisize.quantities import QuantityError, read, write, write_in, written
from optisize.stage.elements import UNITS
from optisize.stage.measures import CATALOGUE, FIGURES


@pytest.mark.parametrize(
    ("text", "unit", "value"),
    [
        ("250 nA", "A", 2.5e-07),
        ("250nA", "A", 2.5e-07),
        (" 250 nA ", "A", 2.5e-07),
        ("0.18 um", "m", 0.18e-6),
        ("0.18 µm", "m", 1.8e-07),  # micro sign
        ("0.18 μm", "m", 1.8e-07),  # Greek letter
        ("500 fF", "F", 5e-13),
        ("2 Mohm", "ohm", 2e6),
        ("2 MΩ", "ohm", 2e6),
        ("5 kΩ", "ohm", 5000.0),
        ("1 MHz", "Hz", 1e6),
        ("60 uW", "W", 6e-05),
        ("-40 mV", "V", -0.04),
        ("1e-3 V", "V", 0.001),
        (".5 V", "V", 0.5),
        ("5. V", "V", 5.0),
        ("40 dB", "dB", 40.0),
        ("1.2", "", 1.2),
        (1.2, "V", 1.2),
        (3, "V", 3.0),
    ],
)
def test_decimal_texts_are_read_to_the_last_digit(text: object, unit: str, value: float) -> None:
    assert read(text, unit) == value


@pytest.mark.parametrize(
    ("text", "unit", "value"),
    [
        ("6000 um^2", "m^2", 6000e-12),  # the prefix counts twice: micrometres squared, not micro of square metres
        ("6000 um²", "m^2", 6000e-12),
        ("1 mm^2", "m^2", 1e-6),
        ("8.5 fF/um^2", "F/m^2", 8.5e-3),
        ("0.36 fF/um", "F/m", 0.36e-9),
        ("310 uA/V^2", "A/V^2", 310e-6),
        ("4.5 mV*um", "V*m", 4.5e-9),
        ("4.5 mV·um", "V*m", 4.5e-9),
        ("1.0 %*um", "m", 1e-8),
        ("0.52 V^0.5", "V^0.5", 0.52),
        ("2 V/us", "V/s", 2e6),
        ("11 V/um", "V/m", 11e6),
        ("0.08 um/V", "m/V", 0.08e-6),
        ("0.28 1/V", "1/V", 0.28),
        ("-0.0008 1/K", "1/K", -0.0008),
        ("0.9 mV/K", "V/K", 0.9e-3),
        ("2e-24 V^2*F", "V^2*F", 2e-24),
        ("3 V/V", "", 3.0),
        ("20 nV/Hz^0.5", "V/Hz^0.5", 20e-9),
        ("20 nV/√Hz", "V/Hz^0.5", 20e-9),
        ("20nV/√Hz", "V/Hz^0.5", 20e-9),
        ("20 nV/√(Hz)", "V/Hz^0.5", 20e-9),
        ("20 nV/sqrt(Hz)", "V/Hz^0.5", 20e-9),
        ("20 nV/rtHz", "V/Hz^0.5", 20e-9),
        ("1 uV/√kHz", "V/Hz^0.5", 1e-6 / 1e3**0.5),
        ("3 pA/√Hz", "A/Hz^0.5", 3e-12),
        ("0.52 √V", "V^0.5", 0.52),  # the root of a volt, not a volt
        ("0.52 sqrt(V)", "V^0.5", 0.52),
        ("4 V^2/√Hz^2", "V^2/Hz", 4.0),
    ],
)
def test_powers_products_and_quotients_scale_each_factor(text: str, unit: str, value: float) -> None:
    assert read(text, unit) == pytest.approx(value, rel=1e-14)


def test_degrees_celsius_are_shifted_and_kelvin_is_not() -> None:
    assert read("27 degC", "K") == 300.15
    assert read("27 °C", "K") == 300.15
    assert read("-40 degC", "K") == pytest.approx(233.15, rel=1e-15)
    assert read("300 K", "K") == 300.0
    assert read("1 mV/degC", "V/K") == 1e-3  # a difference has no zero point


def test_degrees_of_angle_are_no_degrees_of_temperature() -> None:
    assert read("60 deg", "deg") == 60.0
    assert read("60°", "deg") == 60.0
    assert read(60, "deg") == 60.0
    assert write(60.0, "deg") == "60 deg"
    assert write(0.001, "deg") == "0.001 deg"


@pytest.mark.parametrize(
    ("value", "unit", "words"),
    [
        ("2,5 um", "m", "decimal point"),
        ("1,000 V", "V", "decimal point"),
        ("2 V", "m", 'is in "V"'),
        ("6000 um", "m^2", 'is in "um", but a quantity in "m^2" is needed (such as "6000 um^2")'),
        ("2", "m", "has no unit"),
        ("2 m", "", "a plain number is needed"),
        ("1 mhz", "Hz", '"mhz" is not a unit'),
        ("5 K", "ohm", 'is in "K"'),
        ("5 Meg", "ohm", '"Meg" is not a unit'),
        ("40 mdB", "dB", '"mdB" is not a unit'),
        ("27 C", "K", 'such as "27 degC"'),
        ("27 deg", "K", 'is in "deg", but a quantity in "K"'),
        ("60 degC", "deg", 'is in "degC", but a quantity in "deg" is needed (such as "60 deg")'),
        ("60 mdeg", "deg", '"mdeg" is not a unit'),
        ("20 nV/Hz", "V/Hz^0.5", 'is in "nV/Hz", but a quantity in "V/Hz^0.5" is needed (such as "20 nV/√Hz")'),
        ("20 nV", "V/Hz^0.5", 'is in "nV"'),
        ("20 nV/√Hz", "V/Hz", 'is in "nV/√Hz"'),
        ("1 √V", "V", 'is in "√V"'),
        ("20 nV/√", "V/Hz^0.5", "is not a unit"),
        ("20 nV/√√Hz", "V/Hz^0.5", "is not a unit"),
        ("20 nV/sqrt()", "V/Hz^0.5", "is not a unit"),
        ("20 nV/sqrt(Hz", "V/Hz^0.5", "is not a unit"),
        ("1 rt", "V", "is not a unit"),
        ("0x10 V", "V", "is not a unit"),
        ("V", "V", "is not a number"),
        ("", "V", "is not a number"),
        ("nan V", "V", "is not a number"),
        ("1e400 V", "V", "finite"),
        ("1e99999999999999999999 V", "V", "finite"),
        ("1 um^99999", "m", "is not a unit"),
        ("1 um^9*um^9*um^9*um^9*um^9*um^9*um^9", "m", "is not a unit"),
        ("1 um*/", "m", "is not a unit"),
        ("1 a\nb", "m", "a?b"),
        (math.nan, "V", "finite"),
        (math.inf, "V", "finite"),
        (10**400, "V", "finite"),
        (True, "V", "a quantity"),
        (None, "V", "a quantity"),
        ([1], "V", "a quantity"),
    ],
)
def test_what_is_no_quantity_of_the_unit_is_refused(value: object, unit: str, words: str) -> None:
    with pytest.raises(QuantityError) as caught:
        read(value, unit)
    assert words in str(caught.value)
    assert str(caught.value).isprintable()


SHOWN = sorted(
    {m.unit for m in (*CATALOGUE.values(), *FIGURES.values())} | set(UNITS.values()) | {"V/Hz^0.5", "A/Hz^0.5", "deg"}
)


@given(value=st.floats(1e-17, 1e14), unit=st.sampled_from(SHOWN))
def test_what_is_written_is_read_back_to_the_digits_shown(value: float, unit: str) -> None:
    assert read(write(value, unit, 6), unit) == pytest.approx(value, rel=1e-5)


@given(value=st.floats(allow_nan=False, allow_infinity=False))
def test_a_number_is_taken_as_it_is(value: float) -> None:
    assert read(value, "V") == value


@given(figure=st.decimals("0.001", "999.999", places=3), prefix=st.sampled_from(["f", "p", "n", "u", "m", "", "k"]))
def test_a_prefix_is_a_power_of_ten_in_the_text(figure: object, prefix: str) -> None:
    power = {"f": -15, "p": -12, "n": -9, "u": -6, "m": -3, "": 0, "k": 3}[prefix]
    assert read(f"{figure} {prefix}V", "V") == float(f"{figure}e{power}")


def test_infinite_and_undefined_figures_have_words() -> None:
    assert write(math.inf, "dB") == "unlimited"
    assert write(-math.inf, "dB") == "-unlimited"
    assert write(math.nan, "A") == "undefined"


def test_areas_and_slopes_are_written_in_their_usual_units() -> None:
    assert write(6000e-12, "m^2") == "6000 um^2"
    assert write(2.5e6, "V/s") == "2.5 V/us"
    assert write(2.5e-7, "A") == "250 nA"
    assert write(0.0, "V") == "0 V"
    assert write_in(8.5e-3, "fF/um^2") == "8.5 fF/um^2"
    assert read("1 um^2", "m^2") == pytest.approx(1e-12, rel=1e-14)
    assert write(2e-8, "V/Hz^0.5") == "20 nV/√Hz"
    assert write_in(2e-8, "nV/√Hz") == "20 nV/√Hz"
    assert written("V/Hz^0.5") == "V/√Hz"
    assert written("V^0.5") == "V^0.5"


def _units_of(schema: object) -> set[str]:
    """Collect every `x-unit` of a JSON Schema."""
    if isinstance(schema, dict):
        own = {schema["x-unit"]} if "x-unit" in schema else set()
        return own.union(*(_units_of(part) for part in schema.values()))
    return set().union(*(_units_of(part) for part in schema)) if isinstance(schema, list) else set()


@pytest.mark.parametrize("unit", sorted(_units_of([m.model_json_schema() for m in (ProblemFile, Process)])))
def test_every_unit_of_the_schemas_can_be_written_in_a_file(unit: str) -> None:
    assert read(f"2 {'' if unit == '1' else unit}", "" if unit == "1" else unit) > 0.0


def test_a_large_area_is_written_without_an_exponent() -> None:
    assert write(4e-8, "m^2") == "40000 um^2"
    assert write(1.23456e-7, "m^2") == "123500 um^2"
    assert write(9.9996e-9, "m^2") == "10000 um^2"
