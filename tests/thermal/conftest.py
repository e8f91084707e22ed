"""Invented fleets for the thermal tests."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
import pytest
from numpy.typing import NDArray

from tracker.thermal import ThermalParameters


@dataclass(frozen=True)
class Fleet:
    """Units, their loads and the air around them."""

    load_kva: NDArray[np.float32]
    air_temp_c: NDArray[np.float32]
    station_index: NDArray[np.int64]
    parameters: ThermalParameters

    @property
    def air_at_unit_c(self) -> NDArray[np.float32]:
        return self.air_temp_c[self.station_index]

    def take(self, index: NDArray[np.int64]) -> Fleet:
        """Some of the units."""
        return Fleet(
            np.ascontiguousarray(self.load_kva[index]),
            self.air_temp_c,
            self.station_index[index],
            self.parameters.take(index),
        )

    def between(self, first: int, last: int) -> Fleet:
        """Some of the time."""
        return Fleet(
            np.ascontiguousarray(self.load_kva[:, first:last]),
            np.ascontiguousarray(self.air_temp_c[:, first:last]),
            self.station_index,
            self.parameters,
        )


def _parameters(n_unit: int, rng: np.random.Generator) -> ThermalParameters:
    return ThermalParameters(
        rated_kva=rng.choice([10.0, 15.0, 25.0, 37.5, 50.0, 75.0, 100.0, 167.0], n_unit),
        top_oil_rise_k=rng.uniform(40.0, 60.0, n_unit),
        hot_spot_gradient_k=rng.uniform(15.0, 30.0, n_unit),
        loss_ratio=rng.uniform(2.0, 8.0, n_unit),
        oil_exponent=rng.choice([0.8, 0.9, 1.0], n_unit),
        winding_exponent=rng.choice([0.8, 1.0], n_unit),
        top_oil_time_constant_h=rng.uniform(1.5, 8.0, n_unit),
        winding_time_constant_h=rng.uniform(0.04, 0.2, n_unit),
        reference_hot_spot_c=rng.choice([95.0, 110.0], n_unit),
    )


def _fleet(
    n_unit: int, n_time: int, step_h: float, seed: int, gaps: bool = True, peak_pu: float = 1.3
) -> Fleet:
    rng = np.random.default_rng(seed)
    parameters = _parameters(n_unit, rng)
    hour = step_h * np.arange(n_time)
    cycle = 0.55 + 0.45 * np.sin(2 * np.pi * (hour - 9.0) / 24.0)
    height = parameters.rated_kva * rng.uniform(0.3, peak_pu, n_unit)
    load = height[:, np.newaxis] * cycle * rng.lognormal(0.0, 0.2, (n_unit, n_time))
    air = 25.0 + 8.0 * np.sin(2 * np.pi * (hour - 10.0) / 24.0) + rng.normal(0, 1, (3, n_time))
    if gaps:
        load[rng.random(load.shape) < 0.01] = np.nan
        for unit in range(0, n_unit, 2):  # holes from an hour to three days
            first = rng.integers(n_time)
            load[unit, first : first + int(rng.integers(1, 72) / step_h)] = np.nan
        for unit in range(1, n_unit, 5):  # series that begin late, some never
            load[unit, : rng.integers(n_time + 1)] = np.nan
        load[rng.random(load.shape) < 0.002] = np.inf
        load[rng.random(load.shape) < 0.01] = 0.0
        first = rng.integers(n_time)
        air[1, first : first + int(rng.integers(1, 40) / step_h)] = np.nan
        air[rng.random(air.shape) < 0.002] = np.nan
    return Fleet(
        load.astype(np.float32),
        air.astype(np.float32),
        rng.integers(0, 3, n_unit),
        parameters,
    )


@pytest.fixture(scope="session")
def make_fleet() -> Callable[..., Fleet]:
    """A function that invents a fleet: (n_unit, n_time, step_h, seed, gaps=True, peak_pu=1.3)."""
    return _fleet


@pytest.fixture(scope="session")
def pole_unit() -> ThermalParameters:
    """The unit of the steady-state and step tables: R 5, 53 K, 27 K, exponents 0.8, 6 h, 5 min."""
    return ThermalParameters(
        rated_kva=np.array([50.0]),
        top_oil_rise_k=np.array([53.0]),
        hot_spot_gradient_k=np.array([27.0]),
        loss_ratio=np.array([5.0]),
        oil_exponent=np.array([0.8]),
        winding_exponent=np.array([0.8]),
        top_oil_time_constant_h=np.array([6.0]),
        winding_time_constant_h=np.array([1.0 / 12.0]),
        reference_hot_spot_c=np.array([110.0]),
    )
