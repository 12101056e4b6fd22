"""Gravity, the standard atmosphere and the weight of air.

In: latitude [deg], elevation [m], air temperature [degC], air pressure [Pa, absolute].
Out: gravity [m/s2], pressure [Pa, absolute], air density [kg/m3]. Floats or numpy arrays alike.
"""

from math import cos, pi

_DEGREE = pi / 180.0
GAS_CONSTANT = 287.05287  # J/(kg K), dry air, ISO 2533
ICE_POINT = 273.15  # K


def normal_gravity(latitude_deg, elevation_m=0.0):
    """Gravity [m/s2] of the WGS84 ellipsoid at a latitude [deg] and an elevation [m].

    latitude_deg is one number; elevation_m may be an array. Good to 5e-7 m/s2 against the closed form up to
    3,000 m; the real field differs by up to some 1e-3 m/s2 (a survey's figure is better where there is one).
    Source: Somigliana's equation with the second-order height term, NIMA TR8350.2 (3rd ed.), 4-1 and 4-3.

    >>> round(normal_gravity(45.0), 5)
    9.8062
    >>> round(normal_gravity(45.0, 1000.0), 5)
    9.80311
    """
    s = 0.5 - 0.5 * cos(2.0 * latitude_deg * _DEGREE)  # sin^2 of the latitude
    at_sea = 9.7803253359 * (1.0 + 0.00193185265241 * s) / (1.0 - 0.00669437999014 * s) ** 0.5
    h = elevation_m / 6378137.0
    return at_sea * (1.0 - 2.0 * (1.00680259717 - 0.00670562133 * s) * h + 3.0 * h * h)


def standard_pressure(elevation_m):
    """Pressure [Pa, absolute] of the standard atmosphere at an elevation [m above sea level], to 11 km.

    Weather moves the real pressure by some 3,000 Pa either way. Source: ISO 2533:1975, 2.

    >>> round(standard_pressure(0.0))
    101325
    >>> round(standard_pressure(1000.0))
    89876
    """
    h = 6356766.0 * elevation_m / (6356766.0 + elevation_m)  # geopotential height
    return 101325.0 * (1.0 - 0.0065 * h / 288.15) ** 5.255876


def standard_temperature(elevation_m):
    """Air temperature [degC] of the standard atmosphere at an elevation [m]. Source: ISO 2533:1975, 2.

    >>> standard_temperature(1000.0)
    8.5
    """
    return 15.0 - 0.0065 * elevation_m


def air_density(pressure_pa, t_c):
    """Density [kg/m3] of dry air at a pressure [Pa, absolute] and temperature [degC].

    Humid air is up to 1 % lighter. Source: the gas law with ISO 2533:1975's constant.

    >>> round(air_density(101325.0, 15.0), 4)
    1.225
    """
    return pressure_pa / (GAS_CONSTANT * (t_c + ICE_POINT))
