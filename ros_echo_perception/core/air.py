"""Air: speed of sound and absorption of sound.

References
----------
.. [1] O. Cramer, "The variation of the specific heat ratio and the speed of sound in air with
   temperature, pressure, humidity, and CO2 concentration", J. Acoust. Soc. Am. 93(5), 1993,
   2510-2516, table III and eqs. (15) and (A1)-(A3).
.. [2] ISO 9613-1:1993, Attenuation of sound during propagation outdoors, part 1, eqs. (3)-(5)
   and annex B.
"""

from __future__ import annotations

import math

import numpy as np

from .errors import SettingError, refuse
from .types import FloatArray

STANDARD_PRESSURE_PA = 101_325.0
_ZERO_CELSIUS_K = 273.15
_CO2_MOLE_FRACTION = 0.0004  # [1] allows up to 0.01; outdoor air of this century
TEMPERATURE_RANGE_C = (-40.0, 60.0)


def speed_of_sound(
    temperature_c: float,
    relative_humidity: float = 0.5,
    pressure_pa: float = STANDARD_PRESSURE_PA,
) -> float:
    """Speed of sound in humid air, m/s [1]_ (fitted there for 0 to 30 degrees Celsius).

    Parameters
    ----------
    temperature_c : -40 to 60.
    relative_humidity : 0 to 1.
    pressure_pa : about 60 000 to 110 000.

    Raises
    ------
    SettingError
        When the temperature or the humidity is out of range.

    Examples
    --------
    >>> round(speed_of_sound(20.0, 0.5), 2)
    343.99
    """
    _check_air(temperature_c, relative_humidity)
    t, p, xc = temperature_c, pressure_pa, _CO2_MOLE_FRACTION
    xw = _water_mole_fraction_cramer(t, relative_humidity, p)
    return (
        331.5024 + 0.603055 * t - 0.000528 * t**2
        + (51.471935 + 0.1495874 * t - 0.000782 * t**2) * xw
        + (-1.82e-7 + 3.73e-8 * t - 2.93e-10 * t**2) * p
        + (-85.20931 - 0.228525 * t + 5.91e-5 * t**2) * xc
        - 2.835149 * xw**2 - 2.15e-13 * p**2 + 29.179762 * xc**2 + 0.000486 * xw * p * xc
    )  # fmt: skip


def _water_mole_fraction_cramer(t: float, humidity: float, p: float) -> float:
    kelvin = t + _ZERO_CELSIUS_K
    enhancement = 1.00062 + 3.14e-8 * p + 5.6e-7 * t**2
    saturation_pa = math.exp(
        1.2811805e-5 * kelvin**2 - 1.9509874e-2 * kelvin + 34.04926034 - 6.3536311e3 / kelvin
    )
    return humidity * enhancement * saturation_pa / p


def absorption_db_per_m(
    frequency_hz: FloatArray | float,
    temperature_c: float,
    relative_humidity: float = 0.5,
    pressure_pa: float = STANDARD_PRESSURE_PA,
) -> FloatArray:
    """Absorption of sound by air, dB/m, at each frequency [2]_.

    Raises
    ------
    SettingError
        When the temperature or the humidity is out of range.

    Examples
    --------
    >>> round(float(absorption_db_per_m(40e3, 20.0, 0.5)), 3)
    1.318
    """
    _check_air(temperature_c, relative_humidity)
    f2 = np.square(np.asarray(frequency_hz, float))
    t_rel = (temperature_c + _ZERO_CELSIUS_K) / 293.15
    p_rel = pressure_pa / STANDARD_PRESSURE_PA
    h = _water_percent_iso(temperature_c, relative_humidity, p_rel)
    oxygen_hz = p_rel * (24.0 + 4.04e4 * h * (0.02 + h) / (0.391 + h))
    nitrogen_hz = (
        p_rel * t_rel**-0.5 * (9.0 + 280.0 * h * math.exp(-4.170 * (t_rel ** (-1 / 3) - 1.0)))
    )
    kelvin = temperature_c + _ZERO_CELSIUS_K
    relaxation = t_rel**-2.5 * (
        0.01275 * math.exp(-2239.1 / kelvin) / (oxygen_hz + f2 / oxygen_hz)
        + 0.1068 * math.exp(-3352.0 / kelvin) / (nitrogen_hz + f2 / nitrogen_hz)
    )
    return np.asarray(8.686 * f2 * (1.84e-11 / p_rel * math.sqrt(t_rel) + relaxation))


def _water_percent_iso(temperature_c: float, humidity: float, p_rel: float) -> float:
    kelvin = temperature_c + _ZERO_CELSIUS_K
    exponent = -6.8346 * (273.16 / kelvin) ** 1.261 + 4.6151
    return float(100.0 * humidity * 10.0**exponent / p_rel)


def _check_air(temperature_c: float, relative_humidity: float) -> None:
    low, high = TEMPERATURE_RANGE_C
    if not low <= temperature_c <= high:
        raise SettingError(
            refuse("temperature_c", temperature_c, f"{low:g} to {high:g} degrees Celsius")
        )
    if not 0.0 <= relative_humidity <= 1.0:
        raise SettingError(refuse("relative_humidity", relative_humidity, "0 to 1"))
