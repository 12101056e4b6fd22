"""A digital pressure sensor on I2C with a 24-bit converter and six coefficients in its memory, as barometer or for immersion.

The part class's commands (from the data sheet, by memory):

    0x1E         reset, then 3 ms
    0xA0 + 2 n   16-bit word n of the memory: 1 to 6 are the coefficients C1 to C6; a 4-bit CRC over all stands at the end
                 of word 7 (BAROMETER) or the beginning of word 0 (IMMERSION, which has no word 7)
    0x48, 0x58   begin to convert pressure (D1), temperature (D2) at the finest resolution, 10 ms; 0x00 reads the 24 bits

The compensation is whole-numbered, first order, and second order below 20 degC where the data sheet gives it. Two kinds differ
in the places of their coefficients' points: BAROMETER (to 1.2 bar, 0.01 mbar a count) and IMMERSION (to 30 bar, 0.1 mbar a count).
"""

import time

# shifts of: OFF's C2 and C4, SENS's C1 and C3, P; Pa a count; second order below 20 degC: T2, OFF2 and SENS2 as factor, shift
BAROMETER = (16, 7, 15, 8, 15, 1, (1, 31), (5, 1), (5, 2))
IMMERSION = (16, 7, 15, 8, 13, 10, (3, 33), (3, 1), (5, 3))


class Pressure24:
    """i2c: with writeto and readfrom_into. kind: BAROMETER or IMMERSION. OSError where it does not answer or its memory is damaged."""

    def __init__(self, i2c, kind, address=0x76):
        self._i2c, self._kind, self._address = i2c, kind, address
        self._command = bytearray(1)
        self._send(0x1E, 3)
        words = [self._read(0xA0 + 2 * n, 2) for n in range(8 if kind is BAROMETER else 7)]
        if kind is BAROMETER:
            told, words[7] = words[7] & 15, words[7] & 0xFF00
        else:
            told, words[0] = words[0] >> 12, words[0] & 0x0FFF
        if crc4(words) != told:
            raise OSError("pressure24: the coefficients' CRC does not fit")
        self._c = words

    def read(self):
        """(pressure [Pa, absolute], temperature [degC]). OSError where it does not answer."""
        self._send(0x48, 10)
        d1 = self._read(0, 3)
        self._send(0x58, 10)
        d2 = self._read(0, 3)
        if not d1 or not d2:  # read before it was ready
            raise OSError("pressure24: no conversion")
        return compensated(self._c, d1, d2, self._kind)

    def _send(self, command, wait_ms):
        self._command[0] = command
        self._i2c.writeto(self._address, self._command)
        time.sleep_ms(wait_ms)

    def _read(self, command, n):
        self._send(command, 0)
        value = 0
        for byte in self._i2c.readfrom(self._address, n):
            value = value << 8 | byte
        return value


def compensated(c, d1, d2, kind):
    """(pressure [Pa, absolute], temperature [degC]) from the coefficients c[1] to c[6] and the converter's words."""
    off_c, off_t, sens_c, sens_t, p_shift, pa, t2, off2, sens2 = kind
    dt = d2 - (c[5] << 8)
    temp = 2000 + (dt * c[6] >> 23)
    off = (c[2] << off_c) + (c[4] * dt >> off_t)
    sens = (c[1] << sens_c) + (c[3] * dt >> sens_t)
    if temp < 2000:
        low = (temp - 2000) ** 2
        off -= off2[0] * low >> off2[1]
        sens -= sens2[0] * low >> sens2[1]
        temp -= t2[0] * dt * dt >> t2[1]
    return ((d1 * sens >> 21) - off >> p_shift) * pa, temp / 100


def crc4(words):
    """The 4-bit CRC over seven or eight words of the memory, its own place set to 0 (polynomial x^4 + x + 1).

    >>> hex(crc4([0x3132, 0x3334, 0x3536, 0x3738, 0x3940, 0x4142, 0x4344, 0x4500]))
    '0xb'
    """
    rest = 0
    for n in range(16):
        word = words[n >> 1] if n >> 1 < len(words) else 0
        rest ^= word & 255 if n & 1 else word >> 8
        for _ in range(8):
            rest = (rest << 1 ^ 0x3000 if rest & 0x8000 else rest << 1) & 0xFFFF
    return rest >> 12 & 15
