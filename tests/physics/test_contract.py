"""What every function of the physics promises: shapes, types, and NaN in, NaN out."""

from __future__ import annotations

import importlib
import inspect
import pkgutil
import subprocess
import sys
from collections.abc import Callable, Iterator
from typing import Any

import numpy as np
import pytest

import qa.physics

# Sensible values by parameter name, so that every function can be called without being listed.
VALUES: dict[str, float] = {
    "frequency": 100e3,
    "sound_speed": 1500.0,
    "wavelength": 0.015,
    "pulse_length": 1e-4,
    "bandwidth": 15e3,
    "receiver_bandwidth": 20e3,
    "slant_range": 60.0,
    "height": 30.0,
    "depth": 30.0,
    "pressure": 30.0,
    "latitude": 50.0,
    "longitude": 5.0,
    "temperature": 12.0,
    "salinity": 34.0,
    "acidity": 8.0,
    "target_size": 1.0,
    "target_length": 1.0,
    "target_width": 1.0,
    "two_way_time": 0.1,
    "two_way_travel_time": 0.1,
    "listening_time": 0.1,
    "ping_interval": 0.2,
    "ping_span": 0.2,
    "pings_in_water": 1.0,
    "beam_angle": 40.0,
    "next_beam_angle": 42.0,
    "array_angle": 40.0,
    "angle": 40.0,
    "launch_angle": 40.0,
    "incidence_angle": 40.0,
    "steering_angle": 40.0,
    "port_angle": -40.0,
    "starboard_angle": 40.0,
    "swath_angle": 120.0,
    "angle_step": 1.0,
    "mount_angle": 10.0,
    "roll": 3.0,
    "pitch": 2.0,
    "slope": 5.0,
    "beamwidth": 2.0,
    "beamwidth_along": 1.5,
    "beamwidth_across": 2.0,
    "range_resolution": 0.1,
    "array_length": 0.5,
    "array_height": 0.1,
    "diameter": 0.1,
    "elements": 64.0,
    "spacing": 0.01,
    "beams": 200.0,
    "effective_range": 100.0,
    "range_scale": 150.0,
    "line_spacing": 125.0,
    "cross_line_spacing": 1000.0,
    "footprint_along": 0.6,
    "footprint_across": 0.6,
    "ping_spacing": 0.45,
    "beam_spacing": 0.45,
    "hits": 3.0,
    "detections_needed": 2.0,
    "chance_per_hit": 0.8,
    "speed": 2.0,
    "across_distance": 100.0,
    "across": 20.0,
    "along": 10.0,
    "heading_change": 0.5,
    "heading": 30.0,
    "absorption": 0.04,
    "wind_speed": 5.0,
    "noise_spectrum": 40.0,
    "noise_level": 80.0,
    "directivity_index": 28.0,
    "detection_threshold": 12.0,
    "processing_gain": 10.0,
    "source_level": 215.0,
    "transmission_loss": 40.0,
    "echo_strength": -30.0,
    "target_strength": -20.0,
    "bottom_strength": -40.0,
    "backscatter": -30.0,
    "backscatter_normal": -15.0,
    "backscatter_oblique": -30.0,
    "oblique_from": 25.0,
    "area": 2.0,
    "radius": 1.0,
    "first": 40.0,
    "second": 42.0,
    "noise_limited_excess": 20.0,
    "chance_of_detection": 0.9,
    "chance_of_false_alarm": 1e-4,
    "speed_used": 1500.0,
    "speed_true": 1495.0,
    "sigma": 0.1,
    "uncertainty": 0.2,
    "a": 0.5,
    "b": 0.013,
    "arm_along": 5.0,
    "arm_across": 2.0,
    "arm_down": 1.0,
    "sigma_along": 0.5,
    "sigma_across": 0.6,
    "from_latitude": 50.0,
    "from_longitude": 5.0,
    "to_latitude": 50.1,
    "to_longitude": 5.1,
    "distance": 20.0,
    "duration": 10.0,
}
# Called in their own tests: whole casts, whole tracks, other functions, or flags.
OTHERWISE = {
    "arrays.floats",
    "arrays.chosen",
    "water.choose_sound_speed",
    "water.harmonic_mean_sound_speed",
    "water.profile_covers",
    "echoes.greatest_range",
    "rays.speed_at_depth",
    "rays.trace_ray",
    "rays.ray_to_depth",
    "rays.sounding_error",
    "uncertainty.combined",
    "uncertainty.vertical_terms",
    "uncertainty.horizontal_terms",
    "uncertainty.s44_tvu",
    "uncertainty.s44_thu",
    "uncertainty.s44_feature_size",
    "ground.distance_along",
    "ground.speed_from_fixes",
    "ground.leg",
    "ground.place",
    "ground.place_beams",
    "ground.offsets_to_ground",
    "beams.vertical_angle_from_horizontal",
}


def _all_functions() -> Iterator[tuple[str, Callable[..., Any]]]:
    for module in pkgutil.iter_modules(qa.physics.__path__):
        loaded = importlib.import_module(f"qa.physics.{module.name}")
        for name, function in inspect.getmembers(loaded, inspect.isfunction):
            if function.__module__ == loaded.__name__ and not name.startswith("_"):
                yield f"{module.name}.{name}", function


EVERY = dict(_all_functions())
PLAIN = {name: f for name, f in EVERY.items() if name not in OTHERWISE}


def _value(parameter: str) -> float:
    if parameter.endswith("_sigma"):
        return 0.05
    return VALUES[parameter]


def _inputs(function: Callable[..., Any]) -> dict[str, float]:
    return {name: _value(name) for name in inspect.signature(function).parameters}


def test_every_exception_is_a_function_that_exists() -> None:
    assert set(EVERY) >= OTHERWISE


@pytest.mark.parametrize("name", PLAIN)
def test_any_shapes_broadcast_and_values_do_not_depend_on_the_shape(name: str) -> None:
    function = PLAIN[name]
    inputs = _inputs(function)
    alone = function(**inputs)
    assert np.ndim(alone) == 0
    shapes = [(3, 1, 1), (1, 4, 1), (1, 1, 2), (4, 1), (2,), ()]
    shaped = {
        key: np.full(shapes[number % len(shapes)], value)
        for number, (key, value) in enumerate(inputs.items())
    }
    together = function(**shaped)
    assert together.shape == np.broadcast_shapes(*(a.shape for a in shaped.values()))
    np.testing.assert_allclose(together, np.full(together.shape, alone), rtol=1e-14)
    assert np.isfinite(np.asarray(alone, dtype=float))


@pytest.mark.parametrize("name", PLAIN)
def test_lists_and_empty_arrays_are_taken(name: str) -> None:
    function = PLAIN[name]
    inputs = _inputs(function)
    assert np.shape(function(**{key: [value] * 2 for key, value in inputs.items()})) == (2,)
    assert np.shape(function(**{key: np.empty(0) for key in inputs})) == (0,)


@pytest.mark.parametrize("name", PLAIN)
def test_nan_in_is_nan_out_and_nowhere_else(name: str) -> None:
    function = PLAIN[name]
    inputs = _inputs(function)
    for key in inputs:
        unknown = {**inputs, key: np.array([inputs[key], np.nan, inputs[key]])}
        result = function(**unknown)
        if result.dtype == bool:
            assert not result[1]
            continue
        assert np.isnan(result[1]), f"{name}: NaN in {key} came out as {result[1]}"
        np.testing.assert_allclose(result[[0, 2]], np.full(2, function(**inputs)), rtol=1e-12)


@pytest.mark.parametrize(
    "name", [n for n in PLAIN if n.split(".")[0] in ("pulse", "beams", "hits")]
)
def test_float32_stays_float32_and_close(name: str) -> None:
    function = PLAIN[name]
    inputs = _inputs(function)
    single = function(**{k: np.full(3, v, dtype=np.float32) for k, v in inputs.items()})
    if single.dtype == bool:
        assert (single == function(**inputs)).all()
        return
    assert single.dtype == np.float32
    rounded = {k: float(np.float32(v)) for k, v in inputs.items()}
    np.testing.assert_allclose(single, np.full(3, function(**rounded)), rtol=2e-5)


# What a parameter is when it is left out; all others add nothing.
LEFT_OUT = {
    "latitude": 45.0,
    "acidity": 8.0,
    "pings_in_water": 1.0,
    "cross_line_spacing": np.inf,
    "backscatter_normal": -15.0,
    "backscatter_oblique": -30.0,
    "oblique_from": 25.0,
}


def _optional(function: Callable[..., Any]) -> list[str]:
    parameters = inspect.signature(function).parameters.values()
    return [p.name for p in parameters if isinstance(p.default, (int, float))]


@pytest.mark.parametrize("name", [n for n, f in PLAIN.items() if _optional(f)])
def test_input_left_out_is_what_the_docstring_says(name: str) -> None:
    function = PLAIN[name]
    inputs = _inputs(function)
    for left_out in _optional(function):
        given = function(**{**inputs, left_out: LEFT_OUT.get(left_out, 0.0)})
        assert function(**{k: v for k, v in inputs.items() if k != left_out}) == given


@pytest.mark.parametrize("name", EVERY)
def test_docstring_says_units_returns_and_an_example(name: str) -> None:
    text = inspect.getdoc(EVERY[name]) or ""
    for heading in ("Parameters\n---", "Returns\n---", "Examples\n---"):
        assert heading in text, f"{name} lacks {heading.splitlines()[0]}"
    for parameter in inspect.signature(EVERY[name]).parameters:
        assert parameter in text, f"{name} does not describe {parameter}"


def test_physics_loads_neither_scipy_nor_pyproj_nor_the_model() -> None:
    modules = ", ".join(f"qa.physics.{m.name}" for m in pkgutil.iter_modules(qa.physics.__path__))
    program = (
        f"import sys, {modules}; "
        "print([m for m in sys.modules if m.split('.')[0] in ('scipy', 'pyproj', 'pandas')"
        " or m.startswith(('qa.model', 'qa.engine'))])"
    )
    done = subprocess.run(
        [sys.executable, "-c", program], capture_output=True, text=True, check=True
    )
    assert done.stdout.strip() == "[]"
