"""Compiled inner loops: they run on arrays so small that calling NumPy costs more than the work.

A module of kernels must not call kernels of another one: the compiled code is kept on disk and is
renewed only when its own file changes.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any, NamedTuple, TypeVar

import numba

from ..types import ComplexArray, FloatArray

Function = TypeVar("Function", bound=Callable[..., Any])

_OPTIONS = {"fastmath": False, "nogil": True}


def compiled(function: Function) -> Function:
    """The function as machine code, made at its first call and kept on disk for later starts.

    The code is kept beside the sources or, where these are read-only, in the user's cache folder;
    where neither can be written it is made anew by every process.
    """
    try:
        kernel: Function = numba.njit(cache=True, **_OPTIONS)(function)
    except RuntimeError:  # no folder to keep it in
        kernel = numba.njit(**_OPTIONS)(function)
    return kernel


class HeadArrays(NamedTuple):
    """A `HeadModel` as the kernels read it.

    Attributes
    ----------
    places : (3, 3), x, y and z of transmitter, left and right ear, m.
    beams : (3, n, 3), gain, slope by angle, relative slope by relative frequency, from -pi on.
    ear_gain, ear_phase : (2,), mismatch.
    pulse : (2, n, 4), value, slope, turning time and its slope, from ``start_s`` on.
    """

    places: FloatArray
    beams: FloatArray
    beam_step_rad: float
    ear_gain: FloatArray
    ear_phase: FloatArray
    pulse: ComplexArray
    start_s: float
    fine_step_s: float
    latency_s: float
    speed_m_s: float
    carrier_hz: float
    omega: float
    doppler: float
