"""Physical constants with their source and edition.

Fundamental constants come from :mod:`scipy.constants`; `CODATA_EDITION` names the edition the
installed SciPy carries. Geomagnetic coefficients are the degree-1 rows of IGRF-14.
"""

from __future__ import annotations

import math

from scipy import constants as codata

#: Edition of the fundamental constants in the installed SciPy (1.15 and later: CODATA 2022).
CODATA_EDITION = "CODATA 2022" if codata.m_e == 9.1093837139e-31 else "CODATA 2018"

#: Speed of light in vacuum, m/s (exact).
SPEED_OF_LIGHT_M_S: float = codata.c

#: Squared plasma frequency of one electron per cubic metre, Hz^2 m^3: e^2 / (4 pi^2 eps0 m_e).
PLASMA_HZ2_M3: float = codata.e**2 / (4.0 * math.pi**2 * codata.epsilon_0 * codata.m_e)

#: Electron gyrofrequency in a field of one tesla, Hz/T: e / (2 pi m_e).
GYRO_HZ_PER_T: float = codata.e / (2.0 * math.pi * codata.m_e)

#: Mass of the electron over that of H+ (the proton).
ELECTRON_PROTON_MASS_RATIO: float = codata.m_e / codata.m_p

#: Standard atomic weight of oxygen, kg (15.999 u, IUPAC abridged value).
OXYGEN_MASS_KG: float = 15.999 * codata.atomic_mass

#: Mass of the electron over that of O+ (atom less one electron).
ELECTRON_OXYGEN_MASS_RATIO: float = codata.m_e / (OXYGEN_MASS_KG - codata.m_e)

#: Geomagnetic reference radius of the IGRF, m.
EARTH_RADIUS_M = 6371.2e3

#: Source of `IGRF14_DEGREE_ONE_NT`.
IGRF_EDITION = "IGRF-14 (IAGA 2024, doi 10.5281/zenodo.14012302), degree 1"

#: Epoch (decimal year): Gauss coefficients g10, g11, h11 in nT. 2030 is the forecast column.
IGRF14_DEGREE_ONE_NT: dict[float, tuple[float, float, float]] = {
    1900.0: (-31543.0, -2298.0, 5922.0),
    1905.0: (-31464.0, -2298.0, 5909.0),
    1910.0: (-31354.0, -2297.0, 5898.0),
    1915.0: (-31212.0, -2306.0, 5875.0),
    1920.0: (-31060.0, -2317.0, 5845.0),
    1925.0: (-30926.0, -2318.0, 5817.0),
    1930.0: (-30805.0, -2316.0, 5808.0),
    1935.0: (-30715.0, -2306.0, 5812.0),
    1940.0: (-30654.0, -2292.0, 5821.0),
    1945.0: (-30594.0, -2285.0, 5810.0),
    1950.0: (-30554.0, -2250.0, 5815.0),
    1955.0: (-30500.0, -2215.0, 5820.0),
    1960.0: (-30421.0, -2169.0, 5791.0),
    1965.0: (-30334.0, -2119.0, 5776.0),
    1970.0: (-30220.0, -2068.0, 5737.0),
    1975.0: (-30100.0, -2013.0, 5675.0),
    1980.0: (-29992.0, -1956.0, 5604.0),
    1985.0: (-29873.0, -1905.0, 5500.0),
    1990.0: (-29775.0, -1848.0, 5406.0),
    1995.0: (-29692.0, -1784.0, 5306.0),
    2000.0: (-29619.4, -1728.2, 5186.1),
    2005.0: (-29554.63, -1669.05, 5077.99),
    2010.0: (-29496.57, -1586.42, 4944.26),
    2015.0: (-29441.46, -1501.77, 4795.99),
    2020.0: (-29403.41, -1451.37, 4653.35),
    2025.0: (-29350.0, -1410.3, 4545.5),
    2030.0: (-29287.0, -1360.3, 4438.0),
}

#: Smallest L for which a path has its usual shape: apex above every fixed break altitude.
MINIMUM_L = 1.2

#: Largest L: beyond it the centred dipole is no longer a fair picture of the field.
MAXIMUM_L = 8.0

#: Highest altitude at which a path may be cut off, m (below the apex of `MINIMUM_L`).
HIGHEST_FOOT_M = 1100e3

#: Carpenter and Anderson (1992) saturated plasmasphere, log10 of cm^-3: slope per L, intercept.
#: Read second-hand (two public codes that agree), not in the paper.
SATURATED_DENSITY_SLOPE = -0.3145
SATURATED_DENSITY_INTERCEPT = 3.9043
