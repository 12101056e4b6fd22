"""Density and vapour pressure of water, salt or fresh, and density of other liquids: what desks and larger boards take.

In: temperature [degC, ITS-90], salinity [g/kg], pressure [Pa, gauge]. Out: density [kg/m3], pressure [Pa, absolute].
Floats or numpy arrays alike.
"""

try:
    from core_mp.density import fresh_density
    from core_mp.salt import salted
except ImportError:  # a board whose file system has no folders
    from density import fresh_density
    from salt import salted


def water_density(t_c, salinity=None, pressure_pa=0.0):
    """Density [kg/m3] of water at a temperature [degC], salinity [g/kg] and gauge pressure [Pa], to 1 MPa.

    Fresh water: density.py. Salt: salt.py; None is 0.

    >>> round(water_density(20.0), 4)
    998.2067
    >>> round(water_density(10.0, 35.0), 3)
    1026.952
    >>> round(water_density(4.0, 0.0, 400e3), 3)
    1000.173
    """
    if salinity is None:
        return fresh_density(t_c, None, pressure_pa)
    fresh = fresh_density(t_c, None, 0.0)
    return salted(fresh, t_c, salinity, fresh_density(t_c, None, pressure_pa) / fresh - 1.0)


def liquid_density(density_kg_m3, expansion_per_k=0.0, at_c=15.0):
    """The density function of a liquid, as Tank takes it: of temperature [degC], salinity (no part) and pressure (no part).

    density_kg_m3 at the temperature at_c; expansion_per_k: its volume's expansion [1/K].

    >>> oil = liquid_density(880.0, 7e-4)
    >>> round(oil(25.0, None, 0.0), 2)
    873.88
    """

    def density(t_c, salinity=None, pressure_pa=0.0):
        return density_kg_m3 / (1.0 + expansion_per_k * (t_c - at_c))

    return density


def vapour_pressure(t_c):
    """Vapour pressure [Pa, absolute] of water at a temperature [degC], 0 to 370 degC. Floats or numpy arrays alike.

    Source: Wagner & Pruss 1993 (J. Phys. Chem. Ref. Data 22:783), IAPWS SR1-86(1992).

    >>> round(vapour_pressure(20.0), 1)
    2339.2
    """
    k = t_c + 273.15
    x = 1.0 - k / 647.096
    y = -7.85951783 * x + 1.84408259 * x**1.5 - 11.7866497 * x**3 + 22.6807411 * x**3.5 - 15.9618719 * x**4
    return 22.064e6 * 2.718281828459045 ** ((y + 1.80122502 * x**7.5) * 647.096 / k)
