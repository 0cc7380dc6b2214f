"""Targets against published periods and against constants written out here."""

import math
from typing import Any

import pytest

from emu.errors import UserError
from emu.units import Target

# Periods in minutes 2 pi (r^1.5 + a) GM/c^3 for 4.0e6 solar masses (formula: Bardeen, Press & Teukolsky
# 1972; numbers derived for this project at 25 digits, given to 1e-4 minutes).
PERIODS = [
    (6.0, 0.0, 30.3225),
    (8.0, 0.0, 46.6845),
    (10.0, 0.0, 65.2436),
    (10.0, 0.9, 67.1005),
    (10.0, -0.9, 63.3868),
]


@pytest.mark.parametrize(("radius", "spin", "minutes"), PERIODS)
def test_orbital_periods(radius: float, spin: float, minutes: float) -> None:
    target = Target("an example", 4.0e6, 8.0)
    period = 2.0 * math.pi * (radius**1.5 + spin) * target.time_unit / 60.0
    assert period == pytest.approx(minutes, abs=1e-4)


def test_length_unit_from_constants_written_out() -> None:
    # GM of the sun 1.3271244e20 m^3/s^2 and c 299792458 m/s (IAU 2015 resolution B3; SI definition);
    # parsec 648000/pi astronomical units of 149597870700 m (IAU 2015 B2, 2012 B2). From memory.
    metres = 5.0e6 * 1.3271244e20 / 299792458.0**2
    parsec = 648000.0 / math.pi * 149597870700.0
    microarcseconds = math.degrees(metres / (9.0e3 * parsec)) * 3.6e9
    assert Target("an example", 5.0e6, 9.0).length_unit == pytest.approx(microarcseconds, rel=1e-9)


def test_light_crosses_a_length_unit_in_a_time_unit() -> None:
    target = Target("an example", 7.0e6, 3.0)
    radians = math.radians(target.length_unit / 3.6e9)
    kiloparsec_in_light_seconds = 648000.0 / math.pi * 149597870700.0 * 1e3 / 299792458.0
    assert radians * 3.0 * kiloparsec_in_light_seconds == pytest.approx(target.time_unit, rel=1e-9)


def test_table_round_trip() -> None:
    target = Target("an example", 5.0e6, 9.0)
    assert Target.from_table(target.to_table(), "here") == target


BAD_TABLES: list[tuple[dict[str, Any], str]] = [
    ({"name": "x", "mass": 1e6}, "t.toml: key 'distance' is missing"),
    ({"name": "x", "mass": 1e6, "distance": 8, "spin": 0}, "t.toml: unknown key 'spin'"),
    ({"name": "x", "mass": "1e6", "distance": 8}, "t.toml: mass is '1e6'; give a finite number"),
    ({"name": "x", "mass": True, "distance": 8}, "t.toml: mass is True; give a finite number"),
    ({"name": "x", "mass": 0.0, "distance": 8}, "t.toml: target 'x': mass is 0.0; give a positive number"),
    ({"name": "x", "mass": 1e6, "distance": -8}, "t.toml: target 'x': distance is -8.0; give a positive"),
    ({"name": "x", "mass": math.nan, "distance": 8}, "t.toml: mass is nan; give a finite number"),
    ({"name": 3, "mass": 1e6, "distance": 8}, "t.toml: name is 3; give a text"),
]


@pytest.mark.parametrize(("table", "message"), BAD_TABLES)
def test_bad_tables_are_refused(table: dict[str, Any], message: str) -> None:
    with pytest.raises(UserError) as caught:
        Target.from_table(table, "t.toml")
    assert str(caught.value).startswith(message)
