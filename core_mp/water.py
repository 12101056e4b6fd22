"""Density and vapour pressure of water, fresh or salt, and density of other liquids.

In: temperature [degC, ITS-90], salinity [g/kg], pressure [Pa, gauge]. Out: density [kg/m3], pressure [Pa, absolute].
Floats or numpy arrays alike.
"""

try:
    from core_mp.density import water_density
except ImportError:  # a board whose file system has no folders
    from density import water_density

__all__ = ["liquid_density", "salted", "vapour_pressure", "water_density"]


def salted(fresh, t_c, salinity, squeeze):
    """Density [kg/m3] of salt water, from fresh water's [kg/m3] at the same temperature [degC] and no gauge pressure.

    salinity is the number of the practical scale (PSS-78), which is g/kg to 0.5 %. squeeze: by what part of itself fresh
    water grows denser under the pressure; salt takes from it in proportion, within 1 % of EOS-80's compressibility.
    Source: Millero & Poisson 1981 (EOS-80, UNESCO Tech. Papers in Marine Science 44), 0 to 40 degC, 0.5 to 43; it stands on
    pure water of its own, exchanged here for fresh.

    >>> round(salted(999.9668, 5.0 / 1.00024, 35.0, 0.0), 4)
    1027.6755
    """
    t = t_c * 1.00024  # IPTS-68
    pure = 999.842594 + t * (6.793952e-2 + t * (-9.09529e-3 + t * (1.001685e-4 + t * (6.536332e-9 * t - 1.120083e-6))))
    a = 0.824493 + t * (-4.0899e-3 + t * (7.6438e-5 + t * (5.3875e-9 * t - 8.2467e-7)))
    b = -5.72466e-3 + t * (1.0227e-4 - 1.6546e-6 * t)
    s = salinity
    rho = fresh + (s > 0) * (pure - fresh) + s * (a + b * s**0.5 + 4.8314e-4 * s)
    return rho + rho * squeeze * (1 - 0.0022 * s)


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
