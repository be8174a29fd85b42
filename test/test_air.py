"""Speed of sound and absorption against published values."""

import math

import numpy as np
import pytest

from ros_echo_perception.core.air import absorption_db_per_m, speed_of_sound
from ros_echo_perception.core.errors import SettingError


def test_speed_of_sound_at_20_degrees():
    # 343.99 m/s at 20 degC, 50 % humidity; 343.36 dry: O. Cramer, JASA 93 (1993) 2510.
    assert speed_of_sound(20.0, 0.5) == pytest.approx(343.99, abs=0.01)
    assert speed_of_sound(20.0, 0.0) == pytest.approx(343.36, abs=0.01)


def test_speed_of_sound_at_0_degrees():
    # 331.45 m/s (dry, 0 degC): G. S. K. Wong, JASA 79 (1986) 1359: 331.29; the older handbook
    # value is 331.45 (CRC Handbook of Chemistry and Physics). Cramer lies at the latter.
    assert speed_of_sound(0.0, 0.0) == pytest.approx(331.45, abs=0.05)


@pytest.mark.parametrize("temperature_c", [0.0, 10.0, 20.0, 30.0])
def test_speed_of_sound_against_ideal_gas(temperature_c):
    # Dry air as an ideal gas, c = sqrt(gamma R T / M) with gamma = 1.4, M = 28.965 g/mol and
    # R = 8.314 J/(mol K) (any textbook of thermodynamics): real air differs by under 0.1 %.
    ideal = math.sqrt(1.4 * 8.314462 / 0.0289647 * (temperature_c + 273.15))
    assert speed_of_sound(temperature_c, 0.0) == pytest.approx(ideal, rel=1e-3)


def test_speed_of_sound_rises_with_temperature_and_humidity():
    # 0.62 m/s per kelvin near 20 degC, from Cramer's polynomial; 0.6 is the textbook slope.
    slope = (speed_of_sound(21.0, 0.5) - speed_of_sound(19.0, 0.5)) / 2.0
    assert slope == pytest.approx(0.62, abs=0.01)
    assert speed_of_sound(25.0, 0.9) > speed_of_sound(25.0, 0.1)


@pytest.mark.parametrize(
    ("frequency_hz", "temperature_c", "humidity", "db_per_km", "tolerance"),
    [
        # ISO 9613-1:1993, table 1, at exact midband frequencies 1000 * 10^(k/10).
        (1000.0 * 10**0.3, 20.0, 0.5, 9.86, 0.005),
        (1000.0 * 10**1.0, 15.0, 1.0, 105.0, 0.5),
        # 1.318 dB/m at 40 kHz from the formulae of the same standard, computed elsewhere.
        (40e3, 20.0, 0.5, 1318.0, 0.5),
    ],
)
def test_absorption_iso_9613(frequency_hz, temperature_c, humidity, db_per_km, tolerance):
    value = 1000.0 * float(absorption_db_per_m(frequency_hz, temperature_c, humidity))
    assert value == pytest.approx(db_per_km, abs=tolerance)


def test_absorption_by_frequency_and_air():
    frequency_hz = np.linspace(30e3, 50e3, 21)
    values = absorption_db_per_m(frequency_hz, 20.0, 0.5)
    assert values.shape == frequency_hz.shape
    assert np.all(np.diff(values) > 0.0)
    # Near 40 kHz moist air absorbs more than dry air (ISO 9613-1, oxygen relaxation).
    assert absorption_db_per_m(40e3, 20.0, 0.6) > absorption_db_per_m(40e3, 20.0, 0.1)


@pytest.mark.parametrize("function", [speed_of_sound, lambda t, h: absorption_db_per_m(4e4, t, h)])
@pytest.mark.parametrize(
    ("temperature_c", "humidity", "name"),
    [
        (-41.0, 0.5, "temperature_c is -41"),
        (61.0, 0.5, "temperature_c is 61"),
        (math.nan, 0.5, "temperature_c is nan"),
        (20.0, -0.1, "relative_humidity is -0.1"),
        (20.0, 50.0, "relative_humidity is 50"),
        (20.0, math.nan, "relative_humidity is nan"),
    ],
)
def test_impossible_air_is_refused(function, temperature_c, humidity, name):
    with pytest.raises(SettingError, match=name):
        function(temperature_c, humidity)
