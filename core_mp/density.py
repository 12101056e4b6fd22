"""Density of fresh water, as a reading needs it. water.py adds salt, other liquids and vapour pressure."""


def fresh_density(t_c, _, pressure_pa):
    """Density [kg/m3] of fresh water at a temperature [degC] and gauge pressure [Pa], to 1 MPa; the salinity has no part in it.

    Tanaka et al. 2001 (Metrologia 38:301), 0 to 40 degC, free of air, with its compressibility; above 40 degC two terms
    fitted here to IAPWS-95, within 0.003 kg/m3 up to 95 degC.

    >>> round(fresh_density(20.0, None, 0.0), 4)
    998.2067
    """
    a = t_c - 3.983035
    rho = 999.97495 - a * a / 522.542 * (t_c + 301.797) / (t_c + 69.34881)
    a = (t_c > 40) * (t_c - 40)  # 0 up to there
    rho = rho + a * a * (3.1e-5 + 5.7e-7 * a)
    return rho + rho * pressure_pa * (50.74e-11 + t_c * (0.00416e-11 * t_c - 0.326e-11))
