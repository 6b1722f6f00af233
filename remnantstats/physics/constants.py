"""Constants of nature and astronomical units as plain numbers, from astropy (CODATA 2018, IAU 2015).

Kept apart because importing astropy takes a quarter of a second: only modules that need a constant import this one.
"""

from __future__ import annotations

from astropy import constants as _constants
from astropy import units as _units

__all__ = ["K_B", "L_SUN", "M_SUN", "PARSEC", "R_SUN", "SIGMA_SB", "SPEED_OF_LIGHT", "YEAR", "G", "H"]

#: constant of gravity, m³ kg⁻¹ s⁻²
G = float(_constants.G.si.value)
#: Planck constant, J s
H = float(_constants.h.si.value)
#: Boltzmann constant, J K⁻¹
K_B = float(_constants.k_B.si.value)
#: speed of light, m s⁻¹
SPEED_OF_LIGHT = float(_constants.c.si.value)
#: Stefan–Boltzmann constant, W m⁻² K⁻⁴
SIGMA_SB = float(_constants.sigma_sb.si.value)
#: mass of the Sun, kg
M_SUN = float(_constants.M_sun.si.value)
#: radius of the Sun, m
R_SUN = float(_constants.R_sun.si.value)
#: luminosity of the Sun, W
L_SUN = float(_constants.L_sun.si.value)
#: parsec, m
PARSEC = float(_constants.pc.si.value)
#: Julian year, s
YEAR = float(_units.yr.to(_units.s))
