"""A small MQTT 3.1.1 client for loggers: QoS 1 out, receipts in, and no wait without an end.

Whatever goes wrong, a stalled broker included, is an OSError within timeout_s; the connection is closed then, and connect() makes
a new one. Nothing is sent again here: the spool does that, with the same identity. Source: OASIS MQTT 3.1.1.
"""

import select
import socket
import struct

MOST = 4096  # bytes of a packet that are kept


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
        self._topic = self._head = None  # the last one published on, and as it is sent
        self._out, self._one = bytearray(256), bytearray(1)

    def connect(self):
        """Connect anew. OSError where the broker cannot be reached, refuses or does not answer."""
        self.close()
        s = socket.socket()
        try:
            s.settimeout(self._timeout_s)
            s.connect(socket.getaddrinfo(*self._address)[0][-1])
            if self._tls:
                s = self._tls.wrap_socket(s, server_hostname=self._address[0])
            # MicroPython's sockets are streams, its TLS sockets nothing else; CPython's plain ones are none
            self._read, self._write = (s.readinto, s.write) if hasattr(s, "readinto") else (s.recv_into, s.send)
            flags = 2
            body = _text(self._name)
            if self._will:
                flags |= 4 | 8 | 32  # will, QoS 1, retained
                body += _text(self._will[0]) + _text(self._will[1])
            for bit, word in ((128, self._user), (64, self._password)):
                if word is not None:
                    flags |= bit
                    body += _text(word)
            self._send(0x10, b"\0\4MQTT\4" + bytes([flags]) + struct.pack(">H", self._keepalive_s), body)
            kind, answer = self._packet()
            if kind != 0x20 or answer[1:] != b"\0":
                raise OSError("broker refused the connection: %s" % answer[1:])
            self._socket = s
        except OSError:
            s.close()
            raise

    def close(self):
        """Close the connection, if there is one; without a word, so that the broker publishes the will."""
        s, self._socket = self._socket, None
        self._came = []
        if s:
            s.close()

    def leave(self):
        """End the connection in order, so that the broker does not publish the will."""
        if self._socket:
            try:
                self._send(0xE0, b"")
            except OSError:
                pass
        self.close()

    def subscribe(self, topic):
        """Subscribe to a topic; what comes is handed out by messages()."""
        self._ask(0x82, 0x90, bytearray(2), _text(topic) + b"\x01")

    def publish(self, topic, payload, retain=False):
        """Publish text or bytes at QoS 1, and wait for the broker's word that it came."""
        if topic != self._topic:
            self._topic, self._head = topic, bytearray(_text(topic) + b"\0\0")
        self._ask(0x33 if retain else 0x32, 0x40, self._head, payload.encode() if isinstance(payload, str) else payload)

    def ping(self):
        """Say that the logger is there, and hear that the broker is."""
        self._ask(0xC0, 0xD0)

    def messages(self, wait_ms=0):
        """(topic, payload) pairs that came, after waiting for the first of them so long at most."""
        if not self._socket:
            raise OSError("not connected")
        poll = select.poll()
        poll.register(self._socket, select.POLLIN)
        try:
            while poll.poll(wait_ms):
                self._packet()
                wait_ms = 0
        except OSError:
            self.close()
            raise
        came, self._came = self._came, []
        return came

    def _ask(self, kind, answer, head=b"", tail=b""):
        """Send a packet, and take in what comes until its answer. At the end of a head stands the packet's id, and in the answer."""
        if not self._socket:
            raise OSError("not connected")
        if head:
            self._id = self._id % 65535 + 1  # never 0
            head[-2], head[-1] = self._id >> 8, self._id & 255
        try:
            self._send(kind, head, tail)
            for _ in range(100):  # what else may come before the answer
                kind, body = self._packet()
                if kind & 0xF0 == answer and body[:2] == head[-2:]:
                    return
            raise OSError("no answer from the broker")
        except OSError:
            self.close()
            raise

    def _send(self, kind, start, rest=b""):
        """Write a packet whose body is start and rest."""
        out, n, i = self._out, len(start) + len(rest), 1
        out[0] = kind
        while n > 127:
            out[i] = n & 127 | 128
            n >>= 7
            i += 1
        out[i] = n
        n = i + 1 + len(start)
        out[i + 1 : n] = start
        self._all(memoryview(out)[:n])
        self._all(rest)

    def _all(self, data):
        while data:
            n = self._write(data)
            if not n:
                raise OSError("connection closed")
            data = memoryview(data)[n:] if n < len(data) else b""

    def _packet(self):
        """The next packet: (kind, body). A message is acknowledged and put aside."""
        one = self._one
        self._fill(one)
        kind = one[0]
        size = shift = 0
        one[0] = 128
        while one[0] & 128:
            self._fill(one)
            size |= (one[0] & 127) << shift
            shift += 7
            if shift > 28:
                raise OSError("malformed packet")
        body = bytearray(min(size, MOST))
        self._fill(body)
        for _ in range(size - len(body)):  # too long for this memory: what it says is cut off, and who reads it sees that
            self._fill(one)
        if kind & 0xF0 == 0x30:
            n = 2 + struct.unpack(">H", body[:2])[0]
            topic = bytes(body[2:n]).decode()
            if kind & 6:
                self._send(0x40, body[n : n + 2])
                n += 2
            self._came.append((topic, bytes(body[n:])))
        return kind, body

    def _fill(self, data):
        while data:
            n = self._read(data)
            if not n:
                raise OSError("connection closed")
            data = memoryview(data)[n:] if n < len(data) else b""


def _text(word):
    data = word.encode() if isinstance(word, str) else word
    return struct.pack(">H", len(data)) + data
