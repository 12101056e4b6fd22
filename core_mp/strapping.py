"""Strapping table: level to volume and back, and the area of the liquid's surface.

In: level [m above tank datum]. Out: volume [m3], area [m2]. One number at a time; columns: companion/figures.
"""


class StrappingTable:
    """A tank's strapping table, straight lines between its rows.

    levels_m [m above tank datum], volumes_m3 [m3]: two rows or more, both rising. Any sequences; array('f') on a board.
    Outside the table the end row serves: nothing is guessed beyond the survey. Linear between rows, as in EPANET.
    Raises ValueError or IndexError where there are no two rows, or they do not rise.

    >>> north = StrappingTable([0.0, 1.0, 2.0], [0.0, 20.0, 42.0])
    >>> north.volume(1.5), north.level(31.0), north.area(1.5), north.volume(9.0)
    (31.0, 1.5, 22.0, 42.0)
    """

    def __init__(self, levels_m, volumes_m3):
        self.levels_m = levels_m
        self.volumes_m3 = volumes_m3
        self.piece = [1, 0, 0, 0, 0]  # the line last stood on: from level, to level, its lower row's level and volume, area
        for i in range(1, max(2, len(levels_m), len(volumes_m3))):
            if not (levels_m[i - 1] < levels_m[i] and volumes_m3[i - 1] < volumes_m3[i]):
                raise ValueError(i)

    def volume(self, level):
        """Volume [m3] at a level [m]."""
        return _line(level, self.levels_m, self.volumes_m3, self.piece)

    def level(self, volume):
        """Level [m] at a volume [m3]."""
        return _line(volume, self.volumes_m3, self.levels_m, [0] * 5)

    def area(self, level):
        """Surface area [m2] at a level [m]: the slope of the line it stands on."""
        _line(level, self.levels_m, self.volumes_m3, self.piece)
        return self.piece[4]


def _line(x, xs, ys, piece):
    """y at x; the line it stands on is left in piece. It is looked for where it would be in an even table, then by it, then by halves."""
    low = 0
    high = len(xs) - 1
    i = int((x - xs[0]) * high / (xs[high] - xs[0]))
    step = 1
    while high - low > 1:
        if not low < i < high:
            i = (low + high) >> 1
        if xs[i] <= x:
            low = i
            i += step
        else:
            high = i
            i -= step
        step = high
    piece[0] = piece[2] = i = xs[low]
    piece[1] = step = xs[high]
    piece[3] = ys[low]
    piece[4] = xs = (ys[high] - ys[low]) / (step - i)
    if x <= i:
        return ys[low]
    if x >= step:
        return ys[high]
    return ys[low] + (x - i) * xs
