"""Rows of a strapping table, as a reading needs them: level to volume. strapping.py adds what people need."""


class Rows:
    """levels_m [m above tank datum], volumes_m3 [m3]: two rows or more, both rising. Any sequences; array('f') on a board."""

    def __init__(self, levels_m, volumes_m3):
        self.levels_m = levels_m
        self.volumes_m3 = volumes_m3

    def volume(self, level, line=None):
        """Volume [m3] at a level [m]; what line it stands on is left in line, a list of five (see at)."""
        return at(level, self.levels_m, self.volumes_m3, line or [0] * 5)


def at(x, xs, ys, line):
    """y at x. The line is looked for where an even table would have it, then next to that, then by halves.

    Left in line: it holds from x, to x; its start's x, its start's y, its slope.
    """
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
    line[0] = line[2] = i = xs[low]
    line[1] = step = xs[high]
    line[3] = ys[low]
    line[4] = xs = (ys[high] - ys[low]) / (step - i)
    if x <= i:
        return ys[low]
    if x >= step:
        return ys[high]
    return ys[low] + (x - i) * xs
