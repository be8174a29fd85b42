"""Compiled loops: the same as plain Python, compiled once, ready after the warm-up."""

import importlib

import numba
import numpy as np
import pytest
from perception_helpers import HEADS, baseband_ping, head_model, noise, objects

from ros_echo_perception.core.perception import (
    compiled,
    kernels,
    kernels_delay,
    kernels_ear,
    kernels_search,
)
from ros_echo_perception.core.perception.joint import Priors, excerpt, refine, signals, values
from ros_echo_perception.core.perception.pipeline import EchoPipeline, warm_up
from ros_echo_perception.sources.bench import bench_source, poles

MODULES = (kernels, kernels_delay, kernels_ear, kernels_search)


def compiled_functions():
    return {
        f"{module.__name__}.{name}": item
        for module in MODULES
        for name, item in vars(module).items()
        if hasattr(item, "signatures") and item.__module__ == module.__name__
    }


@pytest.mark.parametrize("name", sorted(HEADS))
def test_after_the_warm_up_no_ping_has_to_wait_for_a_compilation(name):
    """A kernel compiles anew for every other type or layout of its arguments."""
    warm_up(HEADS[name])
    before = {key: len(item.signatures) for key, item in compiled_functions().items()}
    # Kernels that only others call have signatures where they were compiled in this process.
    public = {key for key in before if not key.rpartition(".")[2].startswith("_")}
    assert {key for key in public if before[key] != 1} == set()
    world = poles((0.8, 0.0), (1.2, 0.2), (1.203, -0.25), (1.9, 0.1))
    pipeline = EchoPipeline(HEADS[name])
    source = bench_source(HEADS[name], world, n_pings=2)
    assert all(pipeline.process(source.echo(k)).detections for k in range(2))
    assert {key: len(item.signatures) for key, item in compiled_functions().items()} == before


def test_a_compiled_model_gives_what_its_formula_gives_in_python():
    model = head_model()
    places = np.array([0.7, 1.9]), np.array([-0.3, 0.5])
    time_s = 1e-5 * np.arange(2000.0)
    for kernel in (kernels.geometry, kernels_delay.delays):
        expected = kernel.py_func(model.arrays, *places)
        np.testing.assert_allclose(kernel(model.arrays, *places), expected, rtol=1e-12)
    expected = kernels.values.py_func(model.arrays, *places, time_s)
    np.testing.assert_allclose(kernels.values(model.arrays, *places, time_s), expected, atol=1e-12)


def test_values_are_those_of_the_signals_with_derivatives():
    model = head_model()
    found = objects((0.7, -0.3, 1.0), (1.9, 0.5, 1.0))
    time_s = 1e-5 * np.arange(2000.0)
    full = signals(model, found, time_s).value
    np.testing.assert_allclose(values(model, found, time_s), full.transpose(1, 0, 2), atol=1e-12)
    assert np.abs(full).max() > 0.1


def test_rivals_do_not_change_each_other():
    model, rng = head_model(), np.random.default_rng(3)
    true = objects((1.2, 0.1, 30.0 + 9.0j))
    ping = baseband_ping(model, true, rng)
    starts = [objects((1.2, b, 20.0 + 0.0j)) for b in (0.08, 0.12, -0.4)]
    priors, window = Priors(0.7, 1.22), slice(0, ping.time_s.size)
    together = refine(model, excerpt(ping, ping.samples, window, 3), starts, priors)
    for start, found in zip(starts, together, strict=True):
        [alone] = refine(model, excerpt(ping, ping.samples, window), [start], priors)
        assert alone.cost == found.cost
        np.testing.assert_array_equal(alone.covariance, found.covariance)


def test_matched_filter_is_the_sum_that_it_says():
    rng = np.random.default_rng(4)
    samples, template = noise(rng, 60), noise(rng, 9)
    weight = rng.uniform(0.5, 1.5, 60)
    weight[20:24] = 0.0
    lead, found = 3, kernels_ear.matched(samples, weight, template, 3)
    for j in range(60):
        at = j - lead + np.arange(9)
        inside = (at >= 0) & (at < 60)
        w2 = weight[at[inside]] ** 2
        match = np.sum(template[inside].conj() * w2 * samples[at[inside]])
        energy = np.sum(np.abs(template[inside]) ** 2 * w2)
        assert found[j] == pytest.approx(abs(match) / np.sqrt(energy))


def test_without_a_folder_for_compiled_code_it_is_compiled_in_memory(monkeypatch):
    plain = numba.njit

    def njit(**options):
        if options.pop("cache", False):
            raise RuntimeError("cannot cache function: no locator available")
        return plain(**options)

    monkeypatch.setattr(compiled.numba, "njit", njit)
    assert compiled.compiled(lambda x: x + 1.0)(2.0) == 3.0


def test_kernels_do_not_call_kernels_of_other_modules():
    """Compiled code is renewed when its own file changes, not when that of a callee does."""
    for module in MODULES:
        fresh = importlib.import_module(module.__name__)
        names = {n for n, item in vars(fresh).items() if hasattr(item, "py_func")}
        assert all(vars(fresh)[n].py_func.__module__ == module.__name__ for n in names)
