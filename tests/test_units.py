"""Pressure units against their definitions and published factors."""

from __future__ import annotations

import pytest
from scipy import constants

from caval.errors import CavalError, InputError
from caval.units import PRESSURE_UNITS, is_pressure_unit, mmhg_per_unit


@pytest.mark.parametrize(
    ("unit", "mmhg", "tolerance"),
    [
        ("cmH2O", 0.735559, 5e-7),  # table of the trade, six decimals
        ("cmH2O", 1 / 1.35951, 5e-6),  # the same the other way, 1 mmHg = 1.35951 cmH2O
        ("Pa", 1 / 133.322, 3e-8),  # 1 mmHg = 133.322 Pa (BIPM SI brochure, 8th edition, table 8)
        ("kPa", 7.50062, 5e-6),  # NIST SP 811, appendix B.8, turned round
        ("mbar", 0.750062, 5e-7),
        ("hPa", 0.750062, 5e-7),
        ("mmHg", 1.0, 0.0),
    ],
)
def test_factors_agree_with_published_ones(unit: str, mmhg: float, tolerance: float) -> None:
    assert abs(mmhg_per_unit(unit) - mmhg) <= tolerance


def test_factors_agree_with_scipy() -> None:
    """SciPy's mmHg is a 760th of an atmosphere (the torr), which is 1.4e-7 less than the conventional millimetre of mercury."""
    assert mmhg_per_unit("Pa") == pytest.approx(1 / constants.mmHg, rel=2e-7)
    assert mmhg_per_unit("mbar") == pytest.approx(constants.bar / 1000 / constants.mmHg, rel=2e-7)
    # Conventional water, 1 g/cm³: a centimetre of it under standard gravity.
    assert mmhg_per_unit("cmH2O") == pytest.approx(constants.g * 1000 * 0.01 / constants.mmHg, rel=2e-7)


def test_one_kilopascal_is_a_thousand_pascals_and_ten_hectopascals() -> None:
    assert mmhg_per_unit("kPa") == pytest.approx(1000 * mmhg_per_unit("Pa")) == pytest.approx(10 * mmhg_per_unit("hPa"))


@pytest.mark.parametrize(
    ("spelling", "unit"),
    [
        ("mm Hg", "mmHg"), ("MMHG", "mmHg"), ("mm[Hg]", "mmHg"), ("mmHg ", "mmHg"), ("Torr", "mmHg"),
        ("cmH₂O", "cmH2O"), ("cm H2O", "cmH2O"), ("cm[H2O]", "cmH2O"), ("KPA", "kPa"), ("mBar", "mbar"),
    ],
)
def test_spellings_in_use(spelling: str, unit: str) -> None:
    assert is_pressure_unit(spelling)
    assert mmhg_per_unit(spelling) == PRESSURE_UNITS[unit]


@pytest.mark.parametrize("unit", ["", " ", "mV", "uV", "%", "V", "psi?", "1/min"])
def test_an_unknown_unit_is_an_error_that_names_channel_and_option(unit: str) -> None:
    assert not is_pressure_unit(unit)
    with pytest.raises(InputError) as caught:
        mmhg_per_unit(unit, channel="P2")
    said = str(caught.value)
    assert "P2" in said
    assert "--unit P2=mmHg" in said
    assert all(name in said for name in PRESSURE_UNITS)
    assert isinstance(caught.value, CavalError)
    assert isinstance(caught.value, ValueError)


def test_millimetres_alone_are_not_taken_for_a_pressure():
    with pytest.raises(InputError, match="'mm'"):
        mmhg_per_unit("mm", channel="CVP")
