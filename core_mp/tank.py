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
    temperature [degC], salinity [g/kg] and gauge pressure [Pa], as water.water_density. inside: pressure [Pa, absolute]
    inside the sensor's reference: None for a gauge sensor, 101325 for a sealed, 0 for an absolute one. height_m: of the
    diaphragm above tank datum. floor_m: elevation of tank datum. gravity: [m/s2]. t_c: temperature [degC] where none is
    measured. The reference (vent opening, or barometer): rise_m is the diaphragm's elevation less the reference's,
    standard_pa the standard atmosphere there, air_per_pa the air's density [kg/m3] for each pascal (earth.py); 0 leaves the
    air column out.
    """

    def __init__(self, transmitter, table, density, inside=None, height_m=0, floor_m=0, gravity=9.80665, t_c=15,
                 salinity=None, rise_m=0, standard_pa=101325, air_per_pa=0):  # fmt: skip
        self.transmitter = transmitter
        self.table = table
        self.inside = inside
        self.height_m = height_m
        self.floor_m = floor_m
        self.t_c = t_c
        self.standard_pa = standard_pa
        self.density = density
        self.gravity = gravity
        self.salinity = salinity
        self.air = air_per_pa * gravity, rise_m
        self.weight = [0] * 4  # see level()
        self._t = self._b = None  # temperature and barometer that weight is of
        self._line = [1, 0, 0, 0]  # of the table, that the last level stood on: water moves slowly

    def measure(self, raw, temperature_c=None, barometer_pa=None, headspace_pa=None, out=None):
        """One reading's figures: [status bits, pressure_pa, level_m, volume_m3, grade_m], in out where it is given.

        raw: what the transmitter takes. headspace_pa: gauge. None or an impossible number is missing: temperature outside
        -5 to 95 degC, barometer outside 30 to 120 kPa. Without a level (a fault) the figures are NaN. No heap is
        needed but for out on a board whose floats need none: it works with the heap locked.
        """
        if out is None:
            out = [0] * 5
        status = 0
        low, high, x, p, slope = self.transmitter.line
        if low <= raw <= high:
            p += (raw - x) * slope
        else:
            status = self.transmitter.status(raw)
            if status & 515:  # LOOP_LOW, LOOP_HIGH, NO_READING
                out[0] = status
                out[1] = out[2] = out[3] = out[4] = float("nan")
                return out
            p = self.transmitter.pressure(raw)
        weight = self.weight
        if temperature_c is None or not -5 <= temperature_c <= 95:
            temperature_c = self.t_c
            status |= 128  # NO_TEMPERATURE
        if temperature_c != self._t:
            self._t = temperature_c
            self._b = None
            weight[0] = self.gravity * self.density(temperature_c, self.salinity, 0)
            weight[1] = (self.gravity * self.density(temperature_c, self.salinity, 1000000) - weight[0]) * 5e-7
        if barometer_pa is None or not 30000 <= barometer_pa <= 120000:
            barometer_pa = self.standard_pa
            if self.inside is not None:
                status |= 256  # NO_BAROMETER
        if self.inside is not None:
            p += self.inside - barometer_pa
        if barometer_pa != self._b:
            self._b = barometer_pa
            air, rise = self.air
            air *= barometer_pa
            weight[2] = weight[0] - air
            weight[3] = air * rise
        out[1] = p
        level = self.level(p, headspace_pa)
        if level <= self.height_m:
            level = self.height_m
            status |= 16  # DRY
        line = self._line
        low, high, x, slope = line
        if not low < level < high:
            status |= self.table.find(level, line)
            low, high, x, slope = line
        out[2] = level
        out[3] = x + level * slope
        level += self.floor_m
        if headspace_pa is not None:
            level += headspace_pa / (weight[0] + weight[1] * (p + headspace_pa))
        out[4] = level
        out[0] = status
        return out

    def level(self, p, p_top=None):
        """Level [m above tank datum] from pressures [Pa] over the reference; at height_m or below it the tank is dry.

        weight: of the liquid [N/m3] under no pressure, what a pascal of p adds; less the air's; the air column's [Pa].
        """
        weight, more, less_air, air = self.weight
        if p_top is None:
            p = (p + air) / (less_air + more * p)
        else:
            weight = weight + more * (p + p_top)
            p = (p - p_top) / weight
        return p + self.height_m
