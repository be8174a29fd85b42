"""Settings: types, ranges, messages; and all settings classes of the package keep the rules."""

import dataclasses
import importlib
import math
import pkgutil

import pytest
from hypothesis import given
from hypothesis import settings as hypothesis_settings
from hypothesis import strategies as st

import ros_echo_perception
from ros_echo_perception.core.errors import EchoPerceptionError, SettingError
from ros_echo_perception.core.settings import Settings, describe, from_mapping, setting


@dataclasses.dataclass(frozen=True)
class Sample(Settings):
    cutoff_hz: float = setting(100.0, "Corner frequency", "Hz", 1.0, 1000.0)
    count: int = setting(3, "How many", "", 0, 10)
    active: bool = setting(True, "Whether it runs")
    mode: str = setting("slow", "How it runs", choices=("slow", "fast"))
    weights: tuple[float, ...] = setting((1.0, 0.5), "Shares", "", 0.0, 1.0)
    open_end: float = setting(0.0, "No upper limit", "m", 0.0)
    fixed: str = setting("a", "Set at the start", read_only=True)

    def check_together(self) -> None:
        if self.mode == "fast" and self.count == 0:
            raise SettingError("count is 0; allowed: 1 or more with mode fast.")


def core_settings_classes():
    """All settings classes of core and sources (nodes need ROS)."""
    for folder in ("core", "sources"):
        package = importlib.import_module(f"ros_echo_perception.{folder}")
        for module in pkgutil.walk_packages(package.__path__, f"{package.__name__}."):
            importlib.import_module(module.name)

    def below(cls):
        for child in cls.__subclasses__():
            yield child
            yield from below(child)

    found = {c for c in below(Settings) if c.__module__.startswith(ros_echo_perception.__name__)}
    return sorted(found, key=lambda c: c.__name__)


CLASSES = core_settings_classes()
UNITS = {
    "_db_per_s": "dB/s", "_rad_s": "rad/s", "_m_s": "m/s", "_rad": "rad", "_hz": "Hz", "_m": "m",
    "_s": "s",
}  # fmt: skip


def test_defaults_and_descriptions():
    info = {i.name: i for i in describe(Sample)}
    assert [i.kind for i in info.values()] == [float, int, bool, str, list, float, str]
    assert info["cutoff_hz"].allowed() == "1 to 1000 Hz"
    assert info["open_end"].allowed() == "0 or more m"
    assert info["mode"].allowed() == "one of slow, fast"
    assert info["active"].allowed() == "any bool"
    assert info["fixed"].read_only
    assert Sample().weights == (1.0, 0.5)


@pytest.mark.parametrize(
    ("name", "value", "words"),
    [
        ("cutoff_hz", 0.5, "1 to 1000 Hz"),
        ("cutoff_hz", math.nan, "1 to 1000 Hz"),
        ("cutoff_hz", math.inf, "1 to 1000 Hz"),
        ("cutoff_hz", "100", "type float"),
        ("cutoff_hz", None, "type float"),
        ("cutoff_hz", True, "type float"),
        ("count", 11, "0 to 10"),
        ("count", 2.0, "type int"),
        ("count", True, "type int"),
        ("active", 1, "type bool"),
        ("mode", "medium", "one of slow, fast"),
        ("weights", 0.5, "a list"),
        ("weights", "0.5", "a list"),
        ("weights", [0.5, 2.0], "0 to 1"),
        ("weights", [math.nan], "0 to 1"),
        ("open_end", -1.0, "0 or more m"),
    ],
)
def test_bad_values_name_field_value_and_range(name, value, words):
    with pytest.raises(SettingError) as caught:
        Sample(**{name: value})
    text = str(caught.value)
    assert text.startswith(f"{name} is ")
    assert words in text


def test_whole_numbers_serve_as_floats():
    assert Sample(cutoff_hz=50).cutoff_hz == 50.0
    assert type(Sample(cutoff_hz=50).cutoff_hz) is float
    assert Sample(weights=[0, 1]).weights == (0, 1)


@hypothesis_settings(max_examples=80, deadline=None)
@given(value=st.floats(allow_nan=True, allow_infinity=True))
def test_a_float_is_taken_exactly_when_it_is_within(value):
    if 1.0 <= value <= 1000.0:
        assert Sample(cutoff_hz=value).cutoff_hz == value
    else:
        with pytest.raises(SettingError):
            Sample(cutoff_hz=value)


def test_checks_that_span_settings_run_last():
    with pytest.raises(SettingError, match="with mode fast"):
        Sample(mode="fast", count=0)
    with pytest.raises(SettingError, match="0 to 10"):
        Sample(mode="fast", count=-1)


def test_frozen():
    with pytest.raises(dataclasses.FrozenInstanceError):
        Sample().count = 4  # type: ignore[misc]


def test_mapping_names_file_and_the_known_settings():
    assert from_mapping(Sample, {"count": 5}) == Sample(count=5)
    with pytest.raises(SettingError) as caught:
        from_mapping(Sample, {"cuont": 5}, "my.yaml")
    assert str(caught.value).startswith("my.yaml: setting is 'cuont'")
    assert "cutoff_hz" in str(caught.value)
    with pytest.raises(SettingError, match=r"^my\.yaml: count is 50; allowed: 0 to 10"):
        from_mapping(Sample, {"count": 50}, "my.yaml")


def test_every_field_must_be_declared():
    @dataclasses.dataclass(frozen=True)
    class Careless(Settings):
        size_m: float = 1.0

    with pytest.raises(TypeError, match="setting"):
        Careless()


def test_the_package_has_settings():
    assert {"ProcessingConfig", "ScanConfig", "SimulatorConfig"} <= {c.__name__ for c in CLASSES}


@pytest.mark.parametrize("cls", CLASSES, ids=lambda c: c.__name__)
def test_settings_of_the_package_are_described_and_defaults_are_allowed(cls):
    assert cls.__doc__
    assert cls() == cls()
    for info in describe(cls):
        assert info.description, info.name
        assert not info.description.endswith(".")
        if info.kind in (float, int):
            assert info.minimum is not None or info.maximum is not None, info.name
        # The longest ending that fits says the unit.
        for suffix, unit in UNITS.items():
            if info.name.endswith(suffix):
                assert info.unit == unit, info.name
                break


@pytest.mark.parametrize("cls", CLASSES, ids=lambda c: c.__name__)
def test_values_beyond_the_stated_limits_are_refused(cls):
    for info in describe(cls):
        for limit, step in ((info.minimum, -1), (info.maximum, 1)):
            if limit is None or info.kind is list:
                continue
            beyond = info.kind(limit) + step
            with pytest.raises(EchoPerceptionError, match=info.name):
                cls(**{info.name: beyond})
        if info.choices:
            with pytest.raises(SettingError, match="one of"):
                cls(**{info.name: "no such choice"})
