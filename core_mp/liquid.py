"""Density of another liquid than water, by its expansion."""


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
