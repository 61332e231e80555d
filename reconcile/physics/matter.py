"""What the reduced model needs to know of a metal and of a liquid. SI."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TypeAlias

import numpy as np
from numpy.typing import NDArray

# Functions of the reduced model work element by element, broadcast, and return an array (numpy's float for floats).
Array: TypeAlias = NDArray[np.float64]
Values: TypeAlias = float | Array


@dataclass(frozen=True, slots=True)
class Metal:
    """The target."""

    density: float  # [kg/m³] solid, at rest
    sound_speed: float  # [m/s] bulk, intercept of the shock-velocity line
    hugoniot_slope: float  # [1] shock velocity = sound_speed + hugoniot_slope × particle velocity
    melt_density: float  # [kg/m³] of the hot liquid metal at the contact

    @property
    def impedance(self) -> float:
        """Acoustic impedance [Pa s/m]."""
        return self.density * self.sound_speed


@dataclass(frozen=True, slots=True)
class Fluid:
    """The liquid above the target, at its temperature and ambient pressure."""

    density: float  # [kg/m³]
    sound_speed: float  # [m/s]
    hugoniot_slope: float  # [1] shock velocity = sound_speed + hugoniot_slope × particle velocity
    nonlinearity: float  # [1] 1 + B/2A
    sound_absorption: float  # [s²/m] amplitude falls as exp(-sound_absorption × frequency² × distance)
    vapour_pressure: float  # [Pa]
    surface_tension: float  # [N/m] of the liquid against its vapour
    viscosity: float  # [Pa s]
    contact_density: float  # [kg/m³] compressed, next to the hot metal
    contact_viscosity: float  # [Pa s] next to the hot metal

    @property
    def impedance(self) -> float:
        """Acoustic impedance [Pa s/m]."""
        return self.density * self.sound_speed
