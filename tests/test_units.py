"""Quantities as people write them, against NIST SP 811 B.8; what could mean two things is refused."""

from __future__ import annotations

import pytest
from hypothesis import given
from hypothesis import strategies as st
from published import rows

from companion.units import QuantityError, read, unit_factor

SPELT = {  # the file's unit: as it is written in a site file
    "psi": "psi", "bar": "bar", "mbar = hPa": "mbar", "kPa": "kPa", "atm (standard)": "atm", "dbar": "dbar", "kgf/cm2 (at)": "kgf/cm2",
    "mmHg conventional": "mmHg", "torr": "torr", "inHg conventional (32F)": "inHg_0C", "inHg 60F": "inHg_60F",
    "mH2O conventional": "mH2O_conventional", "mH2O 4C": "mH2O_4C", "mH2O 60F": "mH2O_60F", "mH2O 20C (68F)": "mH2O_20C",
    "ftH2O conventional": "ftH2O_conventional", "ftH2O 39.2F": "ftH2O_39F", "ftH2O 60F": "ftH2O_60F", "ftH2O 68F": "ftH2O_68F",
    "inH2O conventional": "inH2O_conventional", "inH2O 39.2F": "inH2O_39F", "inH2O 60F": "inH2O_60F", "inH2O 68F": "inH2O_68F",
    "US gallon": "US_gallon", "imperial gallon": "imperial_gallon", "US oil barrel (42 gal)": "oil_barrel",
    "US liquid barrel (31.5 gal)": "liquid_barrel", "acre-foot (international)": "acre_ft", "ML (megalitre)": "ML", "kL": "kL",
    "ft3": "ft3", "million US gallons (MG)": "US_Mgal", "foot (international)": "ft", "inch": "in",
}  # fmt: skip


@pytest.mark.parametrize("row", rows("units", lambda row: row["unit"] in SPELT), ids=lambda row: row["unit"])
def test_units_are_what_nist_says(row: dict[str, str]) -> None:
    rel = 3e-5 if row["kind"] == "measured" else 1e-10
    assert unit_factor(SPELT[row["unit"]], row["quantity"]) == pytest.approx(float(row["SI_value"]), rel=rel)


@pytest.mark.parametrize(
    ("text", "dimension", "si"),
    [
        ("0.12 m", "length", 0.12), ("-3ft", "length", -0.9144), ("1.2e3 mm", "length", 1.2), ("50 degF", "temperature", 10.0),
        ("10 °C", "temperature", 10.0), ("283.15 K", "temperature", 10.0), ("0.1 %", "share", 0.001), ("0.1 % / year", "drift", 0.001),
        ("7e-4 / K", "expansion", 7e-4), ("1.2e-5 / degC", "expansion", 1.2e-5), ("6.2e-6 / degF", "expansion", 1.116e-5),
        ("0.3 g/kg", "salinity", 0.3), ("880 kg/m^3", "density", 880.0), ("0.88 g/cm3", "density", 880.0), ("15 psig", "pressure", 103421.3594),
        ("4 mA", "current", 0.004), ("500 mV", "voltage", 0.5),
    ],
)  # fmt: skip
def test_quantities_are_read(text: str, dimension: str, si: float) -> None:
    assert read(text, dimension) == pytest.approx(si, rel=1e-9)


@pytest.mark.parametrize(
    ("text", "dimension", "says"),
    [
        (0.12, "length", 'write it with one, like "0.12 m"'),
        ("0.12", "length", 'write it with one, like "0.12 m"'),
        ("2 kg", "length", 'is no unit of length; write one like "m"'),
        ("2 foo", "length", "is no unit known here"),
        ("3 inH2O", "pressure", "inH2O_20C"),
        ("3 mwc", "pressure", "can mean more than one unit"),
        ("3 gal", "volume", "US_gallon or imperial_gallon"),
        ("3 bbl", "volume", "oil_barrel (42 US gallons) or liquid_barrel"),
        ("3 MG", "volume", "US_Mgal or imperial_Mgal"),
        ("29 inHg", "pressure", "inHg_0C or inHg_60F"),
        ("15 C", "temperature", 'write one like "degC"'),
        ("300 mg/L", "salinity", 'write one like "g/kg"'),
        ("many m", "length", "write a number and its unit"),
        ("", "length", "write a number and its unit"),
        ("1e999 m", "length", "is not finite"),
        (True, "length", "is no length"),
        (["1 m"], "length", "is no length"),
        ("1 __import__('os')", "length", "is no unit known here"),
        ("1 m; rm", "length", "is no unit known here"),
    ],
)
def test_what_is_no_quantity_is_refused_with_the_remedy(text: object, dimension: str, says: str) -> None:
    with pytest.raises(QuantityError) as told:
        read(text, dimension)
    assert says in str(told.value) and "\n" not in str(told.value)


@given(st.floats(-1e6, 1e6), st.sampled_from(["m", "mm", "ft", "in", "km"]))
def test_a_length_in_any_unit_is_the_same_length(metres: float, unit: str) -> None:
    assert read(f"{metres / unit_factor(unit, 'length')!r} {unit}", "length") == pytest.approx(metres, rel=1e-12, abs=1e-300)


@given(st.text(max_size=20))
def test_no_text_breaks_the_reader(text: str) -> None:
    try:
        read(text, "length")
    except QuantityError as error:
        assert str(error)
