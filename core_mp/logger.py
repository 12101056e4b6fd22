"""The loop of a logger: sample, convert, spool, publish, let go on the desk's receipt. Call step() for ever; it says how long to rest.

What can go wrong is counted in troubles, told in the next pack, and never ends the loop: a sensor that does not answer, a flash
that fails, a link that is down, a clock that jumps, settings that are refused. A reading is in the spool before anything is sent;
what has no receipt is sent again with the same identity. The hardware is handed in, each a small object:

    sensor    read() gives (raw, temperature [degC], barometer [Pa], headspace [Pa], battery [V]); each but raw may be None
    network   up() connects, within a time of its own, or raises OSError; down() disconnects. None where nothing is to do
    watchdog  feed() keeps it quiet. None where there is none
"""

import json

from core_mp.senml import Pack

PING_S = 25  # while there is nothing to say: well within the client's keepalive
RETRY_S = (1, 2, 5, 10, 30, 60)  # between attempts to connect
AHEAD = 300  # readings under way without a receipt
HELD = 30  # readings in memory while the flash takes none


class Logger:
    """A tank's logger.

    settings: a Settings. spool: a Spool. clock: a Clock that began at spool.last_time. client: an mqtt.Client whose will is
    ("levelbook/<tank>/presence", "offline"). size: bytes a pack may have.
    Attributes: troubles (how often, by name), figures (of the last reading: status bits, pressure_pa, level_m, volume_m3, grade_m).
    """

    def __init__(self, settings, spool, clock, client, sensor, network=None, watchdog=None, size=2048):
        self.settings, self.spool, self.clock, self.client = settings, spool, clock, client
        self.sensor, self.network, self.watchdog = sensor, network, watchdog
        self.troubles = {"sensor": 0, "clock": 0, "flash": 0, "link": 0, "settings": 0}
        self.figures = [0, 0.0, 0.0, 0.0, 0.0]
        self.connected = False
        self._pack = Pack(settings.tank, settings.signal, size)
        self._topic = "levelbook/" + settings.tank + "/"
        self._held = []
        self._sample_at = self._report_at = self._connect_at = self._ping_at = self._again_at = clock.seconds()
        self._sent = -1  # the last seq under way
        self._relative = spool.next_seq  # readings before it are of an earlier run, or went out in relative time already
        self._ahead, self._again_s = AHEAD, 0
        self._failed = 0
        self._said = None  # status and level of the reading that was reported
        self._news = True  # of troubles and settings

    def step(self):
        """One turn: take a reading if it is due, send what is due, hear the desk. Returns seconds in which there is nothing to do."""
        self._feed()
        now = self.clock.seconds()
        if now >= self._sample_at:
            self._sample_at = now + self.settings.values["every_s"]
            self._sample(now)
        try:
            self._link(now)
        except Exception:  # whatever a broken broker may bring about
            self._trouble("link")
            self._leave()
            self._connect_at = now + RETRY_S[min(self._failed, len(RETRY_S) - 1)]
            self._failed += 1
        due = self._ping_at if self.connected else max(self._connect_at, self._report_at)
        if self.connected and self._report_at <= now:
            due = now + (self._sent >= self.spool.oldest)
        return max(0, min(due, self._sample_at) - self.clock.seconds())

    def _feed(self):
        if self.watchdog:
            self.watchdog.feed()

    def _trouble(self, name):
        self.troubles[name] += 1
        self._news = True

    def _sample(self, now):
        values = self.settings.values
        reads = []
        for _ in range(values["samples"]):
            try:
                read = self.sensor.read()
                if read[0] - read[0] == 0:
                    reads.append(read)
            except Exception:  # no answer, no number, a driver's own trouble
                pass
        status, level = 512, None  # NO_READING
        if reads:
            reads.sort(key=lambda read: read[0])
            reading = reads[len(reads) // 2]
            known = self.clock.now()
            self._keep((self.clock.reckoned() if known is None else known,) + tuple(reading) + (known is not None,))
            status, level = self._convert(*reading[:4])
        else:
            self._trouble("sensor")
        said = self._said
        if said is None or status != said[0] or level is not None and abs(level - said[1]) >= values["fast_m"]:
            self._report_at = now
            self._said = status, level

    def _convert(self, raw, temperature_c, barometer_pa, headspace_pa):
        """Status and level of a reading, None where there is none; figures are set."""
        figures = self.figures
        figures[0], figures[2] = 0, raw
        if self.settings.core:
            self.settings.core.measure(raw, temperature_c, barometer_pa, headspace_pa, figures)
        return figures[0], figures[2] if figures[2] == figures[2] else None

    def _keep(self, reading):
        """Into the spool; where the flash takes none, readings wait in memory, and the oldest go first."""
        held = self._held
        held.append(reading)
        tries = 3
        while held and tries:
            try:
                self.spool.add(*held[0])
                held.pop(0)
            except OSError:
                self._trouble("flash")
                tries -= 1
        if len(held) > HELD:
            held.pop(0)
            self.spool.dropped += 1

    def _link(self, now):
        """What there is to do for the connection."""
        if self._report_at <= now and now >= self._connect_at and not self.connected:
            self._connect()
        if not self.connected:
            return
        for topic, payload in self.client.messages():
            self._hear(topic, payload, now)
        if self._report_at <= now:
            self._report(now)
        if now >= self._ping_at:
            self.client.ping()
            self._ping_at = now + PING_S
        self._ask()
        if self._report_at > now and not self.settings.values["stay"]:
            self._leave()

    def _ask(self):
        """The time, where it is time to ask."""
        doubts = self.clock.update()
        if doubts != self.troubles["clock"]:
            self.troubles["clock"] = doubts
            self._news = True

    def _connect(self):
        if self.network:
            self.network.up()
        self._feed()
        self._ask()  # first: by the time a broker's certificate is judged, and readings are told
        self.client.connect()
        self._feed()
        self.client.subscribe(self._topic + "kept")
        self.client.subscribe(self._topic + "settings")
        self.client.publish(self._topic + "presence", "online", True)
        self.connected = self._news = True
        self._failed = 0
        self._sent = -1

    def _leave(self):
        self.connected = False
        try:
            self.client.leave()
            if self.network and not self.settings.values["stay"]:
                self.network.down()
        except OSError:
            pass

    def _hear(self, topic, payload, now):
        """The desk's receipt or settings."""
        if topic.endswith("s"):
            refused = self.settings.refused
            if self.settings.take(payload):
                self._sample_at = self._report_at = now
                self._news = True
            elif self.settings.refused != refused:
                self._trouble("settings")
                self._report_at = now
            return
        oldest = self.spool.oldest
        try:
            kept = json.loads(payload)
            self.spool.receipt(kept["life"], kept["seq"])
        except (ValueError, KeyError, TypeError):
            self._trouble("link")
        if self.spool.oldest > oldest:
            self._ahead, self._again_s = AHEAD, 0
            self._again_at = now + self.settings.values["again_s"]

    def _report(self, now):
        """Send what is not under way yet, as far ahead of the receipts as AHEAD. Without a receipt for long, the oldest again."""
        spool, values = self.spool, self.settings.values
        after = max(self._sent, spool.oldest - 1)
        if after >= spool.oldest and now >= self._again_at:
            after = spool.oldest - 1
            self._ahead = 0
            if not values["stay"]:
                self._report_at = now + values["report_s"]
                return
        if after + 1 < spool.next_seq:
            if after - spool.oldest < self._ahead:
                self._publish(now, spool.waiting(after), after)
        elif self._news:
            self._publish(now, (), after)
        elif after < spool.oldest:
            self._report_at = now + values["report_s"]

    def _publish(self, now, readings, after):
        """A pack of as many readings as it has room for."""
        values = self.settings.values
        start = None
        for reading in readings:
            time = self._time(reading)
            if start is None:
                start = time
                self._begin(time)
            if (time > 0) != (start > 0) or not self._pack.add(reading, time):
                break
            after = reading[0]
            if time <= 0:
                self._relative = max(self._relative, after + 1)
        if start is None:
            self._begin(0)
        self.client.publish(self._topic + "readings", self._pack.end())
        self._news = False
        self._ping_at = now + PING_S
        if self._sent < self.spool.oldest or not self._ahead:  # the first under way, or once more: ever more rarely
            self._again_s = min(max(2 * self._again_s, values["again_s"]), max(values["report_s"], values["again_s"]))
            self._again_at = now + self._again_s
        self._sent = after
        if not values["receipts"]:
            self.spool.receipt(self.spool.life, after)

    def _begin(self, start):
        """The head of a pack, and what the logger says of itself where that is news."""
        pack = self._pack
        pack.begin(start, self.spool.life, self.spool.oldest)
        if self._news:
            pack.say("dropped", self.spool.dropped)
            pack.say("settings", self.settings.version)
            for name in self.troubles:
                pack.say("faults:" + name, self.troubles[name])
            if self.settings.refused:
                pack.say("refused", self.settings.refused)

    def _time(self, reading):
        """A reading's time [s since 1970, UTC]; where it is not known, seconds since now, 0 or less (RFC 8428, 4.5.3)."""
        clock = self.clock
        if reading[7]:
            return reading[1]
        if clock.now() and reading[0] >= self._relative:
            return reading[1] + clock.now() - clock.reckoned()
        age = clock.reckoned() - reading[1]
        return -(age if 0 <= age < 1 << 28 else clock.seconds())
