"""A ratiometric sensor on a board's own converter: its output over its supply, so that neither supply nor reference matters."""

FULL = 65535  # what a ratio of 1 is in counts


class Ratio:
    """output, supply: converters with read_u16() (machine.ADC), behind dividers of the same ratio. times: readings averaged."""

    def __init__(self, output, supply, times=16):
        self._output, self._supply, self._times = output, supply, times

    def read(self):
        """Output over supply, 0 to 65535 for 0 to 1, in whole counts. OSError where the sensor has no supply."""
        output = supply = 0
        for _ in range(self._times):
            output += self._output.read_u16()
            supply += self._supply.read_u16()
        if supply < self._times * 6553:  # a tenth of the converter's range
            raise OSError("ratio: the sensor has no supply")
        return (output * FULL + supply // 2) // supply
