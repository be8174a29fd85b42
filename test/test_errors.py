"""One tree of exceptions, whose messages name what was wrong."""

import ast
import inspect
import math
import re
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from ros_echo_perception.core import errors
from ros_echo_perception.core.errors import EchoPerceptionError, InvalidEchoError, refuse
from ros_echo_perception.core.types import GainCurve, RawEcho

PACKAGE = Path(__file__).resolve().parents[1] / "ros_echo_perception"
CLASSES = [c for _, c in inspect.getmembers(errors, inspect.isclass)]


@pytest.mark.parametrize("cls", CLASSES, ids=lambda c: c.__name__)
def test_every_error_is_of_the_tree_and_explains_itself(cls):
    assert issubclass(cls, EchoPerceptionError)
    assert cls.__doc__
    assert str(cls("text")) == "text"


def test_refusals_of_values_are_also_the_builtin_kind():
    assert issubclass(errors.SettingError, ValueError)
    assert issubclass(errors.FileFormatError, ValueError)
    assert issubclass(errors.InvalidEchoError, ValueError)
    assert issubclass(errors.OdometryGapError, LookupError)
    assert not issubclass(errors.SettingError, errors.FileFormatError)


@settings(max_examples=60, deadline=None)
@given(
    name=st.text(min_size=1, max_size=20),
    value=st.one_of(st.none(), st.integers(), st.floats(), st.text(max_size=10)),
    allowed=st.text(min_size=1, max_size=20),
    remedy=st.text(max_size=20),
    file=st.text(max_size=10),
)
def test_the_sentence_holds_every_part(name, value, allowed, remedy, file):
    text = refuse(name, value, allowed, remedy, file)
    assert text.startswith(f"{file}: {name} is " if file else f"{name} is ")
    assert repr(value) in text
    assert f"allowed: {allowed}." in text
    assert text.endswith(".")
    if remedy:
        assert text.endswith(remedy[0].upper() + remedy[1:] + ".")


def echo(**changes):
    good = {
        "samples": np.zeros((2, 256), np.int16), "sample_rate_hz": 200e3, "carrier_hz": 40e3,
        "burst_cycles": 3.0, "emission_time_s": 0.0,
    }  # fmt: skip
    return RawEcho(**(good | changes))


@pytest.mark.parametrize(
    ("field", "value", "allowed"),
    [
        ("samples", np.zeros((2, 10), np.int16), "(2, 64 or more)"),
        ("samples", np.zeros((3, 256), np.int16), "left ear first"),
        ("samples", np.zeros(256, np.int16), "left ear first"),
        ("sample_rate_hz", 0.0, "above 0"),
        ("sample_rate_hz", math.nan, "above 0"),
        ("sample_rate_hz", -1.0, "above 0"),
        ("sample_rate_hz", math.inf, "above 0"),
        ("carrier_hz", 0.0, "above 0"),
        ("carrier_hz", 100e3, "below 100000 Hz"),
        ("burst_cycles", -3.0, "above 0"),
        ("full_scale", 0.0, "above 0"),
        ("emission_time_s", math.nan, "finite"),
        ("first_sample_offset_s", math.inf, "finite"),
    ],
)
def test_impossible_echoes_are_refused_by_name(field, value, allowed):
    with pytest.raises(InvalidEchoError) as caught:
        echo(**{field: value})
    assert str(caught.value).startswith(field)
    assert allowed in str(caught.value)


@pytest.mark.parametrize(
    ("times", "gains", "words"),
    [
        ([0.0, 0.01], [0.0], "lengths"),
        ([], [], "lengths"),
        ([0.0, math.nan], [0.0, 1.0], "not finite"),
        ([0.0, 0.01], [0.0, math.inf], "not finite"),
        ([0.0, 0.0], [0.0, 1.0], "increasing"),
        ([0.01, 0.0], [0.0, 1.0], "increasing"),
    ],
)
def test_impossible_gain_curves_are_refused(times, gains, words):
    with pytest.raises(InvalidEchoError, match=words):
        GainCurve(np.array(times), np.array(gains))


def test_gain_is_linear_in_decibels_and_constant_outside():
    curve = GainCurve(np.array([0.001, 0.003]), np.array([0.0, 20.0]))
    found = curve.amplitude(np.array([-1.0, 0.001, 0.002, 0.003, 9.0]))
    np.testing.assert_allclose(found, [1.0, 1.0, math.sqrt(10.0), 10.0, 10.0])


def test_core_and_sources_raise_the_tree_only():
    """A bare ValueError would slip past those who catch this package's refusals."""
    allowed = {c.__name__ for c in CLASSES} | {"TypeError", "NotImplementedError", "StopIteration"}
    for folder in ("core", "sources"):
        for path in (PACKAGE / folder).rglob("*.py"):
            for node in ast.walk(ast.parse(path.read_text())):
                if isinstance(node, ast.Raise) and isinstance(node.exc, ast.Call):
                    called = node.exc.func
                    name = called.id if isinstance(called, ast.Name) else called.attr
                    assert name in allowed or name == "refuse", f"{path}:{node.lineno} {name}"


def test_no_error_is_swallowed_whole():
    pattern = re.compile(r"except(\s+(Base)?Exception)?\s*:\s*\n\s*pass")
    for path in PACKAGE.rglob("*.py"):
        assert not pattern.search(path.read_text()), path
