"""A 16-bit delta-sigma converter on I2C with four inputs and a gain: single shots.

The part class's registers, 16 bits each, high byte first (from the data sheet, by memory):

    0  conversion   two's complement; full scale is 32,768 counts
    1  config       15 OS: write 1 to begin a conversion, reads 1 when it is done
                    14-12 MUX: 100 to 111 is input 0 to 3 against ground; 000 input 0 against 1, 011 input 2 against 3
                    11-9 PGA: full scale 000 6.144 V, 001 4.096, 010 2.048, 011 1.024, 100 0.512, 101 0.256
                    8 MODE: 1 single shot    7-5 DR: 000 is 8 samples a second, 100 is 128    1-0 COMP_QUE: 11 comparator off
"""

import time

FULL_SCALE_V = (6.144, 4.096, 2.048, 1.024, 0.512, 0.256)
_WAIT_MS = 20  # at 128 samples a second a conversion takes 8 ms


class Adc16:
    """i2c: with writeto_mem and readfrom_mem. full_scale_v: one of FULL_SCALE_V, above what comes in; the supply is the limit."""

    def __init__(self, i2c, full_scale_v=4.096, address=0x48):
        if full_scale_v not in FULL_SCALE_V:
            raise ValueError("full scale must be one of %s V" % (FULL_SCALE_V,))
        self._i2c, self._address = i2c, address
        self._config = 0x8183 | FULL_SCALE_V.index(full_scale_v) << 9
        self._word = bytearray(2)

    def read(self, channel):
        """Counts of an input against ground, -32768 to 32767. OSError where the converter does not answer or does not finish."""
        return self._convert(4 + channel)

    def difference(self, pair=0):
        """Counts of input 0 against 1 (pair 0), or 2 against 3 (pair 1), as over a shunt. OSError as read()."""
        return self._convert(3 * pair)

    def _convert(self, mux):
        config = self._config | 0x80 | mux << 12
        self._word[0], self._word[1] = config >> 8, config & 255
        self._i2c.writeto_mem(self._address, 1, self._word)
        for _ in range(_WAIT_MS):
            time.sleep_ms(1)
            self._i2c.readfrom_mem_into(self._address, 1, self._word)
            if self._word[0] & 0x80:
                self._i2c.readfrom_mem_into(self._address, 0, self._word)
                counts = self._word[0] << 8 | self._word[1]
                return counts - 65536 if counts > 32767 else counts
        raise OSError("adc16: no conversion within %d ms" % _WAIT_MS)
