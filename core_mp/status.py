"""What may be wrong with a reading: status bits, and their words in the order of the bits.

transmitter.py and tank.py write the bits as plain numbers, since a name costs a 16 KB board memory; the words are the desk's.
"""

LOOP_LOW = 1  # loop current <= 3.6 mA: a fault, there is no level (NAMUR NE 43)
LOOP_HIGH = 2  # loop current >= 21 mA: a fault, there is no level (NAMUR NE 43)
UNDER_RANGE = 4  # loop current < 3.8 mA (NAMUR NE 43), or the converter at its lower end
OVER_RANGE = 8  # loop current > 20.5 mA (NAMUR NE 43), or the converter at its upper end
DRY = 16  # the liquid stands at the diaphragm or below it: the level shown is the sensor's height, at most
BELOW_TABLE = 32  # level below the strapping table's first row: that row's volume is shown
ABOVE_TABLE = 64  # level above the last row: that row's volume is shown
NO_TEMPERATURE = 128  # the default temperature served
NO_BAROMETER = 256  # an absolute or sealed sensor was read against the standard atmosphere
NO_READING = 512  # no number, or one that the converter cannot give: there is no level
FAULT = LOOP_LOW + LOOP_HIGH + NO_READING

WORDS = ("loop_low", "loop_high", "under_range", "over_range", "dry", "below_table", "above_table",
         "no_temperature", "no_barometer", "no_reading")  # fmt: skip


def words(status):
    """The words of a reading's status bits, a space between; "ok" where nothing is wrong.

    >>> words(LOOP_LOW + UNDER_RANGE), words(0)
    ('loop_low under_range', 'ok')
    """
    return " ".join([WORDS[i] for i in range(len(WORDS)) if status >> i & 1]) or "ok"
