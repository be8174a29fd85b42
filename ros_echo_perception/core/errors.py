"""The one tree of exceptions of this package.

Every message names what was wrong, the value received, what is allowed and what to do.
"""

from __future__ import annotations


class EchoPerceptionError(Exception):
    """Anything this package refuses to do."""


class SettingError(EchoPerceptionError, ValueError):
    """A configuration value outside its allowed range, or an unknown name."""


class FileFormatError(EchoPerceptionError, ValueError):
    """A recording, head, world or configuration file that cannot be used."""


class InvalidEchoError(EchoPerceptionError, ValueError):
    """A raw echo whose contents contradict each other or the physics."""


class OdometryGapError(EchoPerceptionError, LookupError):
    """No odometry near enough to the asked time: skip, never guess a pose."""


class SourceError(EchoPerceptionError, RuntimeError):
    """A source of echoes that cannot be opened or has broken down."""


class CalibrationError(EchoPerceptionError, ValueError):
    """Data that cannot determine what calibration asks of it."""


def refuse(name: str, value: object, allowed: str, remedy: str = "", file: str = "") -> str:
    """The standard sentence for a refused value.

    Examples
    --------
    >>> refuse("sample_rate_hz", 0.0, "more than 0", "check the driver", "head.yaml")
    'head.yaml: sample_rate_hz is 0.0; allowed: more than 0. Check the driver.'
    """
    text = f"{file}: " if file else ""
    text += f"{name} is {value!r}; allowed: {allowed}."
    if remedy:
        text += f" {remedy[0].upper()}{remedy[1:]}."
    return text
