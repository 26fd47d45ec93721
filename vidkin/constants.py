"""Physical constants and conventions, each with its unit and source."""

from typing import Final

#: Standard acceleration of free fall [m/s^2] (ISO 80000-3; CGPM 1901).
G_MPS2: Final = 9.80665

#: Mechanical horsepower [W] (550 ft lbf/s; ISO 80000 companion value, rounded to 1e-4).
HORSEPOWER_W: Final = 745.6999

#: Zero of the Celsius scale [K] (SI Brochure).
ZERO_CELSIUS_K: Final = 273.15

#: One standard atmosphere [Pa] (CGPM 1954).
STANDARD_ATMOSPHERE_PA: Final = 101325.0

#: Coverage of every printed interval unless the user asks for another [-].
LEVEL: Final = 0.95

#: Lane pitch, line centre to line centre [m] (World-wide rule book value 1.22 m +- 0.01 m; READ-2).
LANE_PITCH_M: Final = 1.22

#: Width of a lane line [m] (rule page, READ).
LINE_WIDTH_M: Final = 0.05
