"""One tank: a raw reading in; level, volume, hydraulic grade and status out.

    head  = (p - p_top + rho_a * g * (z_s - z_ref)) / ((rho - rho_a) * g)
    level = sensor height + head
    grade = floor elevation + level + p_top / (rho * g)

p: the sensor's pressure over its reference (vent opening or barometer, at elevation z_ref), z_s: the diaphragm's
elevation, rho: mean density of the liquid's column, rho_a: density of the air, p_top: gauge pressure in a closed tank's
headspace. measure() takes one reading through them; companion/figures/convert.py takes columns through the same methods.
The numbers of status bits are those of status.py, whose names would cost a small board memory.
"""


class Tank:
    """A tank with its sensor: where they stand, what they hold.

    transmitter, table: a Transmitter (or its Line) and a StrappingTable (or its Rows). density: the liquid's, a function of
    temperature [degC], salinity [g/kg] and gauge pressure [Pa], as density.water_density. inside: pressure [Pa, absolute]
    inside the sensor's reference: None for a gauge sensor, 101325 for a sealed, 0 for an absolute one. height_m: of the
    diaphragm above tank datum. floor_m: elevation of tank datum. gravity: [m/s2]. t_c: temperature [degC] where none is
    measured. The reference (vent opening, or barometer): rise_m is the diaphragm's elevation less the reference's,
    standard_pa the standard atmosphere there, air_per_pa the air's density [kg/m3] for each pascal (earth.py); 0 leaves the
    air column out.
    """

    def __init__(self, transmitter, table, density, inside=None, height_m=0.0, floor_m=0.0, gravity=9.80665, t_c=15.0,
                 salinity=None, rise_m=0.0, standard_pa=101325.0, air_per_pa=0.0):  # fmt: skip
        self.transmitter = transmitter
        self.table = table
        self.inside = inside
        self.height_m = height_m
        self.floor_m = floor_m
        self.t_c = t_c
        self.standard_pa = standard_pa
        low, high = transmitter.clear if transmitter.straight else (1, 0)
        self._quick = (low, high, inside) + transmitter.line
        self._line = [1, 0, 0, 0, 0]  # of the table, that the last level stood on: water moves slowly
        self.filling = density, salinity, gravity
        self.air = air_per_pa * gravity, rise_m
        self._warmth = None
        self.weight = [0.0, 0.0]  # of the liquid [N/m3] at the last temperature, and what twice its mean pressure [Pa] adds

    def measure(self, raw, temperature_c=None, barometer_pa=None, headspace_pa=None, out=None):
        """One reading's figures: [status bits, pressure_pa, level_m, volume_m3, grade_m], in out where it is given.

        raw: what the transmitter takes. headspace_pa: gauge. None or an impossible number is missing: temperature outside
        -5 to 95 degC, barometer outside 30 to 120 kPa. Without a level (a fault) the figures are NaN. No heap is
        needed but for out on a board whose floats need none: it works with the heap locked.
        """
        if out is None:
            out = [0] * 5
        out[0] = 0
        low, high, inside, x, p, slope = self._quick
        if low <= raw <= high:
            p += (raw - x) * slope
        else:
            out[0] = self.transmitter.status(raw)
            if out[0] & 515:  # LOOP_LOW, LOOP_HIGH, NO_READING
                out[1] = out[2] = out[3] = out[4] = float("nan")
                return out
            p = self.transmitter.pressure(raw)
        if temperature_c is None or temperature_c != self._warmth:
            if temperature_c is None or not -5 <= temperature_c <= 95:
                temperature_c = self.t_c
                out[0] |= 128  # NO_TEMPERATURE
            if temperature_c != self._warmth:
                self._warmth = temperature_c
                density, salinity, gravity = self.filling
                self.weight[0] = gravity * density(temperature_c, salinity, 0)
                self.weight[1] = (gravity * density(temperature_c, salinity, 1e6) - self.weight[0]) * 0.5e-6
        if barometer_pa is None or not 30e3 <= barometer_pa <= 120e3:
            barometer_pa = self.standard_pa
            if inside is not None:
                out[0] |= 256  # NO_BAROMETER
        if inside is not None:
            p += inside - barometer_pa
        out[1] = p
        level = self.level(p, barometer_pa, headspace_pa)
        low, high, x, y, slope = self._line
        if low < level < high:
            out[3] = y + (level - x) * slope
        else:
            level = self._place(level, out)
        out[2] = level
        level += self.floor_m
        out[4] = (
            level if headspace_pa is None else level + headspace_pa / (self.weight[0] + self.weight[1] * (p + headspace_pa))
        )
        return out

    def _place(self, level, out):
        """The level and its volume and status bits, where it stands on another line of the table than the last."""
        if level <= self.height_m:
            level = self.height_m
            out[0] |= 16  # DRY
        if level < self.table.levels_m[0]:
            out[0] |= 32  # BELOW_TABLE
        elif level > self.table.levels_m[-1]:
            out[0] |= 64  # ABOVE_TABLE
        out[3] = self.table.volume(level, self._line)
        self._line[0] = max(self._line[0], self.height_m)
        return level

    def level(self, p, barometer_pa, p_top=None):
        """Level [m above tank datum] from pressures [Pa] over the reference; at height_m or below it the tank is dry."""
        weight, more = self.weight
        weight = weight + more * p
        if p_top is None:
            air, rise = self.air
            air = air * barometer_pa
            p = (p + air * rise) / (weight - air)
        else:
            weight = weight + more * p_top
            p = (p - p_top) / weight
        return p + self.height_m
