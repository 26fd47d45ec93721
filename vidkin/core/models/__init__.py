"""Sprint laws in closed form: position, speed and acceleration in time, each with its source and equation.

All parameters are per kilogram of body mass; t [s] runs from the first movement, x [m] from where it happens.
Before it (t < 0) the runner is at rest: x = v = a = 0. A law with `v0` > 0 is a rolling start and holds for t >= 0.
"""

from __future__ import annotations

from vidkin.core.models.force import ConstantAcceleration, ForceLinearQuadratic, ForceVelocity, MonoExponential
from vidkin.core.models.law import Law
from vidkin.core.models.power import ConstantPower, ConstantPowerDrag, LumpedDrag, lumped_drag_coefficient
from vidkin.core.models.profile import ForceVelocityProfile, force_velocity_profile, ratio_of_force

__all__ = [
    "ConstantAcceleration",
    "ConstantPower",
    "ConstantPowerDrag",
    "ForceLinearQuadratic",
    "ForceVelocity",
    "ForceVelocityProfile",
    "Law",
    "LumpedDrag",
    "MonoExponential",
    "force_velocity_profile",
    "lumped_drag_coefficient",
    "ratio_of_force",
]
