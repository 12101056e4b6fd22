"""A board's radio as the logger's network: up within a stated time, or an OSError."""

import time


class Wifi:
    """wlan: a network.WLAN as station. watchdog: fed while waiting, or None. timeout_s: to connect."""

    def __init__(self, wlan, name, password, watchdog=None, timeout_s=20):
        self._wlan, self._name, self._password = wlan, name, password
        self._watchdog, self._timeout_s = watchdog, timeout_s

    def up(self):
        """Connect, where that is not so yet. OSError where it takes too long."""
        self._wlan.active(True)
        if self._wlan.isconnected():
            return
        self._wlan.connect(self._name, self._password)
        for _ in range(4 * self._timeout_s):
            if self._wlan.isconnected():
                return
            if self._watchdog:
                self._watchdog.feed()
            time.sleep_ms(250)
        raise OSError("wifi: %s does not answer" % self._name)

    def down(self):
        """Disconnect, and turn the radio off."""
        self._wlan.disconnect()
        self._wlan.active(False)
