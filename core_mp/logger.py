"""The loop of a logger: sample, spool, publish, let go on the desk's receipt. Call step() for ever.

What can go wrong is counted in troubles and never ends the loop: a sensor that does not answer, a flash that fails, a link that is
down. A reading is in the spool before anything is sent; what has no receipt is sent again with the same identity.

board, the hardware, is handed in: read() gives (raw, temperature [degC], barometer [Pa], headspace [Pa], battery [V]), each
but raw may be None; seconds() counts up steadily; clock() is the time [s since 1970, UTC], None while it is not known; feed()
keeps the watchdog quiet.
"""

import json

from core_mp import senml

SAMPLES = 5  # of which the median is the reading
PING_S = 25  # while there is nothing to report: well within the client's keepalive
RETRY_S = (1, 2, 5, 10, 30, 60)  # between attempts to connect


class Logger:
    """A tank's logger.

    tank: its name. signal: what raw is, as senml.UNITS names it. spool: a Spool. client: an mqtt.Client whose will is
    (presence topic, "offline"). every_s: between readings. report_s: between reports; a change of raw by fast or more is reported
    at once. batch: readings a pack. again_s: without a receipt for so long, a pack is sent again.
    """

    def __init__(self, tank, signal, spool, board, client, every_s=60, report_s=300, fast=None, batch=30, again_s=20):
        self.tank, self.signal, self.spool, self.board, self.client = tank, signal, spool, board, client
        self.every_s, self.report_s, self.fast, self.batch, self.again_s = every_s, report_s, fast, batch, again_s
        self.troubles = {"sensor": 0, "clock": 0, "flash": 0, "link": 0}
        self.connected = False
        self._topic = "levelbook/" + tank + "/"
        self._sample_at = self._report_at = self._connect_at = board.seconds()
        self._sent_to, self._sent_at = -1, 0
        self._ping_at = 0
        self._failed = 0
        self._said = None

    def step(self):
        """One turn: take a reading if it is due, send what is due, hear receipts."""
        self.board.feed()
        now = self.board.seconds()
        if now >= self._sample_at:
            self._sample_at = now + self.every_s
            self._sample(now)
        try:
            if not self.connected and now >= self._connect_at and self._report_at <= now:
                self._connect()
            if self.connected:
                self._hear()
                if self._report_at <= now:
                    self._report(now)
                elif now >= self._ping_at:
                    self.client.ping()
                    self._ping_at = now + PING_S
        except OSError:
            self.troubles["link"] += 1
            self.connected = False
            self.client.close()
            self._connect_at = now + RETRY_S[min(self._failed, len(RETRY_S) - 1)]
            self._failed += 1

    def _sample(self, now):
        reads = []
        for _ in range(SAMPLES):
            try:
                read = self.board.read()
                if read[0] is not None and read[0] == read[0]:
                    reads.append(read)
            except OSError:
                pass
        at = self.board.clock()
        if not reads or at is None:
            self.troubles["clock" if reads else "sensor"] += 1
            return
        reads.sort(key=lambda read: read[0])
        reading = reads[len(reads) // 2]
        for _ in range(3):
            try:
                self.spool.add(at, *reading)
                break
            except OSError:
                self.troubles["flash"] += 1
        if self._said is None or (self.fast is not None and abs(reading[0] - self._said) >= self.fast):
            self._report_at = now
            self._said = reading[0]

    def _connect(self):
        self.client.connect()
        self.client.subscribe(self._topic + "kept")
        self.client.publish(self._topic + "presence", "online", True)
        self.connected = True
        self._failed = 0
        self._sent_to = -1

    def _hear(self):
        for _, payload in self.client.messages():
            try:
                kept = json.loads(payload)
                self.spool.receipt(kept["life"], kept["seq"])
            except (ValueError, KeyError, TypeError):
                self.troubles["link"] += 1

    def _report(self, now):
        """Send the oldest pack; the next one when its receipt is there, so that the broker holds little that it could forget."""
        waiting = self.spool.waiting(self.batch)
        if not waiting:
            self._report_at = now + self.report_s
            return
        if waiting[0][0] <= self._sent_to and now < self._sent_at + self.again_s:
            return
        self._sent_to, self._sent_at = waiting[-1][0], now
        self._said = waiting[-1][2]
        self.client.publish(
            self._topic + "readings", senml.pack(self.tank, self.signal, self.spool.life, self.spool.oldest, waiting)
        )
