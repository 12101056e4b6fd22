"""What salt does to the density of water; water.py comes here where there is some."""


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
