"""Vapour pressure of water: what a pump's suction must stay above."""


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
