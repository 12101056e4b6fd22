"""Density of water, as a reading needs it. water.py adds other liquids and vapour pressure."""


def water_density(t_c, salinity=None, pressure_pa=0.0):
    """Density [kg/m3] of water at a temperature [degC], salinity [g/kg] and gauge pressure [Pa], to 1 MPa.

    Fresh water: Tanaka et al. 2001 (Metrologia 38:301), 0 to 40 degC, free of air, with its compressibility; above 40 degC
    two terms fitted here to IAPWS-95, within 0.003 kg/m3 up to 95 degC. Salt: salt.py; None is 0.

    >>> round(water_density(20.0), 4)
    998.2067
    >>> round(water_density(10.0, 35.0), 3)
    1026.952
    >>> round(water_density(4.0, 0.0, 400e3), 3)
    1000.173
    """
    a = t_c - 3.983035
    rho = 999.97495 - a * a / 522.542 * (t_c + 301.797) / (t_c + 69.34881)
    a = t_c > 40
    if a is not False:  # a hot reading, or a column
        a = a * (t_c - 40)
        rho = rho + a * a * (3.1e-5 + 5.7e-7 * a)
    pressure_pa = pressure_pa * (50.74e-11 + t_c * (0.00416e-11 * t_c - 0.326e-11))
    if salinity is not None:
        from core_mp.salt import salted  # only where there is some: a small board has no room to spare

        return salted(rho, t_c, salinity, pressure_pa)
    return rho + rho * pressure_pa
