"""Strapping table: level to volume and back, and the area of the liquid's surface.

In: level [m above tank datum]. Out: volume [m3], area [m2]. One number at a time; columns: companion/figures.
"""

try:
    from core_mp.lines import Rows
except ImportError:  # a board whose file system has no folders
    from lines import Rows


class StrappingTable(Rows):
    """A tank's strapping table, straight lines between its rows.

    levels_m [m above tank datum], volumes_m3 [m3]: two rows or more, both rising. Any sequences; array('f') on a board.
    Outside the table the end row serves: nothing is guessed beyond the survey. Linear between rows, as in EPANET.
    Raises ValueError or IndexError where there are no two rows, or they do not rise.

    >>> north = StrappingTable([0.0, 1.0, 2.0], [0.0, 20.0, 42.0])
    >>> north.volume(1.5), north.level(31.0), north.area(1.5), north.volume(9.0)
    (31.0, 1.5, 22.0, 42.0)
    """

    def __init__(self, levels_m, volumes_m3):
        for i in range(1, max(2, len(levels_m), len(volumes_m3))):
            if not (levels_m[i - 1] < levels_m[i] and volumes_m3[i - 1] < volumes_m3[i]):
                raise ValueError("strapping table: row %d must be above row %d in level and in volume" % (i + 1, i))
        Rows.__init__(self, levels_m, volumes_m3)

    def volume(self, level):
        """Volume [m3] at a level [m]."""
        line = [0] * 4
        self.find(level, line)
        return line[2] + level * line[3]

    def level(self, volume):
        """Level [m] at a volume [m3]."""
        return StrappingTable(self.volumes_m3, self.levels_m).volume(volume)

    def area(self, level):
        """Surface area [m2] at a level [m]: the slope of the line it stands on; outside the table, of the end row's."""
        line = [0] * 4
        self.find(min(max(level, self.levels_m[0]), self.levels_m[-1]), line)
        return line[3]
