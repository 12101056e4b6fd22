"""A small MQTT 3.1.1 client for loggers: QoS 1 out, receipts in, and no wait without an end.

Whatever goes wrong, a stalled broker included, is an OSError within timeout_s; the connection is closed then, and connect() makes
a new one. Nothing is sent again here: the spool does that, with the same identity. Source: OASIS MQTT 3.1.1.
"""

import select
import socket
import struct


class Client:
    """One connection to a broker.

    will: (topic, payload) that the broker publishes, retained, when the connection is lost. tls: an ssl.SSLContext that knows the
    broker's CA; None for a plain connection. user, password: text, or None.
    """

    def __init__(self, host, port, name, user=None, password=None, will=None, tls=None, timeout_s=10, keepalive_s=60):
        self._address = (host, port)
        self._name, self._user, self._password, self._will = name, user, password, will
        self._tls = tls
        self._timeout_s, self._keepalive_s = timeout_s, keepalive_s
        self._socket = None
        self._id = 0
        self._came = []

    def connect(self):
        """Connect anew. OSError where the broker cannot be reached, refuses or does not answer."""
        self.close()
        s = socket.socket()
        try:
            s.settimeout(self._timeout_s)
            s.connect(socket.getaddrinfo(*self._address)[0][-1])
            if self._tls:
                s = self._tls.wrap_socket(s, server_hostname=self._address[0])
            self._socket = s
            flags = 2
            body = _text(self._name)
            if self._will:
                flags |= 4 | 8 | 32  # will, QoS 1, retained
                body += _text(self._will[0]) + _text(self._will[1])
            for bit, word in ((128, self._user), (64, self._password)):
                if word is not None:
                    flags |= bit
                    body += _text(word)
            self._send(0x10, _text("MQTT") + bytes([4, flags]) + struct.pack(">H", self._keepalive_s) + body)
            kind, answer = self._packet()
        except OSError:
            self.close()
            raise
        if kind != 0x20 or len(answer) != 2 or answer[1]:
            self.close()
            raise OSError("broker refused the connection, code %d" % answer[-1])

    def close(self):
        """Close the connection, if there is one; without a word, so that the broker publishes the will."""
        s, self._socket = self._socket, None
        self._came = []
        if s:
            s.close()

    def subscribe(self, topic):
        """Subscribe to a topic; what comes is handed out by messages()."""
        self._await(0x82, 0x90, _text(topic) + b"\x01")

    def publish(self, topic, payload, retain=False):
        """Publish at QoS 1, and wait for the broker's word that it came."""
        self._await(0x33 if retain else 0x32, 0x40, payload.encode(), _text(topic))

    def ping(self):
        """Say that the logger is there, and hear that the broker is."""
        self._turn(lambda: self._send(0xC0, b""), lambda kind, body: kind == 0xD0)

    def messages(self, wait_ms=0):
        """(topic, payload) pairs that came, after waiting for the first of them so long at most."""
        self._guard(self._collect, wait_ms)
        came, self._came = self._came, []
        return came

    def _await(self, kind, answer, tail, head=b""):
        self._id = self._id % 65535 + 1  # never 0
        number = struct.pack(">H", self._id)
        self._turn(lambda: self._send(kind, head + number + tail), lambda k, body: k & 0xF0 == answer and body[:2] == number)

    def _turn(self, send, done):
        self._guard(self._exchange, send, done)

    def _exchange(self, send, done):
        send()
        for _ in range(100):  # what else may come before the answer
            kind, body = self._packet()
            if done(kind, body):
                return
        raise OSError("no answer from the broker")

    def _collect(self, wait_ms):
        poll = select.poll()
        poll.register(self._socket, select.POLLIN)
        while poll.poll(wait_ms):
            self._packet()
            wait_ms = 0

    def _guard(self, work, *what):
        if not self._socket:
            raise OSError("not connected")
        try:
            work(*what)
        except OSError:
            self.close()
            raise

    def _send(self, kind, body):
        n = len(body)
        head = bytearray([kind])
        while True:
            head.append(n & 127 | (128 if n > 127 else 0))
            n >>= 7
            if not n:
                break
        data = memoryview(bytes(head) + body)
        while data:
            n = self._socket.send(data)
            if not n:
                raise OSError("connection closed")
            data = data[n:]

    def _packet(self):
        """The next packet: (kind, body). A message is acknowledged and put aside."""
        kind = self._take(1)[0]
        size = shift = 0
        while True:
            byte = self._take(1)[0]
            size |= (byte & 127) << shift
            shift += 7
            if byte < 128:
                break
            if shift > 21:
                raise OSError("malformed packet")
        if size > 4096:
            raise OSError("packet of %d bytes" % size)
        body = self._take(size)
        if kind & 0xF0 == 0x30:
            n = 2 + struct.unpack(">H", body[:2])[0]
            topic = body[2:n].decode()
            if kind & 6:
                self._send(0x40, body[n : n + 2])
                n += 2
            self._came.append((topic, body[n:]))
        return kind, body

    def _take(self, n):
        data = b""
        while len(data) < n:
            more = self._socket.recv(n - len(data))
            if not more:
                raise OSError("connection closed")
            data += more
        return data


def _text(word):
    data = word.encode() if isinstance(word, str) else word
    return struct.pack(">H", len(data)) + data
