"""A logger's time: its own reckoning from a steady counter, put right by a clock it may ask, and not by one that jumps.

Until a clock has been heard there is only the reckoning: seconds that count on from the last reading in the spool, or from 0. The
true time is then no earlier than that; readings so marked get their time when a clock is heard, or go out in RFC 8428's
relative time.
"""

EARLIEST = 1735689600  # 2025-01-01, UTC: a time before this comes from a clock that has lost it
DRIFT = 2e-4  # by what part of a time span a board's oscillator may be wrong; common practice, no source
SLACK_S = 3  # and so much more
AGREED = 3  # so often in a row must a clock insist on another time until it is believed
ASK_S = 21600  # between questions; where there is doubt, DOUBT_S
DOUBT_S = 60


class Clock:
    """The time of one logger.

    ticks: counts milliseconds up, may begin again at 2**30 or a multiple of it (time.ticks_ms). ask: gives the time [s since 1970, UTC],
    OSError where it cannot; None where there is nobody to ask. start: the last time in the spool.
    Attributes: doubts (answers that were not believed, or did not come), jumps (times that insisted, and were believed).
    """

    def __init__(self, ticks, ask=None, start=0):
        self._ticks, self._ask = ticks, ask
        self._last, self._ms, self._s = ticks(), 0, 0
        self._start = start
        self._offset = self._claim = None
        self._heard_at = self._ask_at = self._times = 0
        self.doubts = self.jumps = 0

    def seconds(self):
        """Whole seconds since the logger began; never back. To be called at least every ten days."""
        ticks = self._ticks()
        self._ms += (ticks - self._last) & 0x3FFFFFFF
        self._last = ticks
        self._s += self._ms // 1000
        self._ms %= 1000
        return self._s

    def reckoned(self):
        """Seconds by the logger's own reckoning."""
        return self._start + self.seconds()

    def now(self):
        """The time [s since 1970, UTC]; None while no clock has been heard."""
        return None if self._offset is None else self.reckoned() + self._offset

    def update(self):
        """Ask, where it is time to. Returns how many answers there were that are not believed, or none."""
        if self._ask and self.seconds() >= self._ask_at:
            self._ask_at = self._s + DOUBT_S
            try:
                if self.hear(self._ask()):
                    self._ask_at = self._s + ASK_S
            except OSError:
                self.doubts += 1
        return self.doubts

    def hear(self, time_s):
        """A clock's time [s since 1970, UTC]. False where it is not believed: impossible, or a jump from what is reckoned."""
        offset = time_s - self.reckoned()
        if time_s < EARLIEST:
            self.doubts += 1
            return False
        allowed = SLACK_S + int((self._s - self._heard_at) * DRIFT)
        if self._offset is not None and abs(offset - self._offset) > allowed:
            self.doubts += 1
            self._times = self._times + 1 if self._claim is not None and abs(offset - self._claim) <= allowed else 1
            self._claim = offset
            if self._times < AGREED:
                return False
            self.jumps += 1
        self._offset, self._claim = offset, None
        self._heard_at = self._s
        return True
