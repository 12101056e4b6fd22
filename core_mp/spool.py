"""The spool: readings on a board's flash until the desk has them. A power cut at any moment loses none that add() returned.

Two files take turns. Each begins with a header and goes on with records of 32 bytes, each with its CRC; a record is appended
and flushed, and nothing is ever rewritten in place, truncated or renamed. When the file in use is full the other is begun anew:
what of it has no receipt is dropped, and counted. After a cut the newest file whose header is whole is in use; a record that did
not get there whole is passed over.

A reading's identity is (life, seq): life is drawn when the spool is created, seq counts up for ever.
"""

import binascii
import os
import struct

SIZE = 32
_HEADER = "<4s8sIII4xI"  # mark, life, turn (counts up), first seq, dropped so far, CRC
_RECORD = "<IIifffHH"  # seq, time [s], raw, temperature [degC], barometer [Pa], headspace [Pa], battery [mV], kind; then CRC
_MARK = b"LVB1"
_MISSING = 0xFFFF  # mV
_WHOLE = 0x2144DF1C  # the CRC-32 of anything with its own CRC-32 behind it
_FLOAT, _NOTE, _RECKONED = 1, 2, 4  # kinds: raw is a float's bits; no reading, but how many are dropped once the other file is
#   begun anew; the time is the logger's own reckoning
_NAN = float("nan")


class Spool:
    """A spool in a folder. records: how many one of its two files holds; so many readings at least are kept, twice as many at most.

    life: up to 8 letters and digits for a new spool; drawn by chance where not given.
    Attributes: life, next_seq, oldest (the lowest seq without receipt; next_seq where there is none), dropped (readings that
    had to go unreceipted, ever), last_time (of the last reading that stood here when it began; 0 where there is none).
    """

    def __init__(self, folder, records=4096, life=None):
        self._paths = (folder + "/spool.0", folder + "/spool.1")
        self._records = records
        self._buffer = bytearray(SIZE)
        self._tried = None
        self._mount(life)

    def add(self, time_s, raw, temperature_c=None, barometer_pa=None, headspace_pa=None, battery_v=None, known=True):
        """Keep a reading; returns its seq when it is on the flash. OSError where it is not: add it again, or go on without it.

        time_s: whole seconds since 1970, UTC; where that is not known, by the logger's own reckoning. raw: a whole number to 32
        bits, or a float, kept to 32 bits. The others may be None.
        """
        if self._doubt:
            self._mount()
            if self._last and self._tried == self._last[:3]:
                return self._last[0]  # what failed the last time had got there after all
        if self._used >= self._records:
            self._turn()
        seq = self.next_seq
        bits = raw if isinstance(raw, int) else struct.unpack("<i", struct.pack("<f", raw))[0]
        t, b, h = [_NAN if value is None else value for value in (temperature_c, barometer_pa, headspace_pa)]
        battery = _MISSING if battery_v is None or battery_v != battery_v else min(_MISSING - 1, int(battery_v * 1000 + 0.5))
        struct.pack_into(
            _RECORD,
            self._buffer,
            0,
            seq,
            time_s,
            bits,
            t,
            b,
            h,
            battery,
            (0 if bits is raw else _FLOAT) | (0 if known else _RECKONED),
        )
        self._tried = (seq, time_s, raw)
        self._append(self._file, "ab")
        self._used += 1
        self.next_seq = seq + 1
        return seq

    def receipt(self, life, seq):
        """Let go what the desk has: readings of this life up to seq. A receipt of another life changes nothing."""
        if life == self.life and seq >= self.oldest:
            self.oldest = min(seq + 1, self.next_seq)

    def waiting(self, after=-1):
        """The readings without receipt, and after a seq, in order: what senml takes, and whether the time is known.

        Where it goes on after what it handed out last, it does not look for the place.
        """
        after = max(after, self.oldest - 1)
        place = self._place
        for file in (1 - self._file, self._file):
            if self._turns[file] and (file == self._file or after + 1 < self._firsts[self._file]):
                start = self._from[file]
                if place[1] == self._turns[file] and place[0] <= after:
                    start = max(start, place[2])
                for seq in self._seqs(file, start):
                    if seq < self.oldest:
                        self._from[file] = self._here
                    elif seq > after:
                        place[0], place[1], place[2] = seq, self._turns[file], self._here
                        yield self._reading()

    def _mount(self, life=None):
        """Find out from the files what stands in them; without any, begin."""
        self._turns, self._firsts, self._from = [0, 0], [0, 0], [SIZE, SIZE]
        self._place = [0, 0, 0]  # after what was handed out last: its seq, its file's turn, the place in it
        self._note = None
        self._damaged = 0
        self.life = None
        self.dropped = 0
        for file in (0, 1):
            self._look(file)
        for file in (0, 1):
            if not self._turns[file]:
                self._mend(file)
        if self.life is None:
            self.life = life or "".join(["%02x" % byte for byte in os.urandom(4)])
            self.next_seq = 0
            self._begin(0, 2)
        self._file = 0 if self._turns[0] > self._turns[1] else 1
        self._used = self._slots(self._file)
        self._last = self._note = None
        self.last_time = 0
        self.oldest = self.next_seq = self._firsts[self._file]
        for seq in self._seqs(self._file):
            self._last = self._reading()
            self.next_seq = seq + 1
            self.last_time = self._last[1]
        # readings that were sent may have stood in slots that are no longer whole: their seqs are not given again
        self.next_seq += self._damaged + (self._here - self._end) // SIZE
        if self._note is not None:  # the cut came between the note and the other file's beginning
            self.dropped, self._turns[1 - self._file] = self._note, 0
        elif self._turns[1 - self._file]:
            for seq in self._seqs(1 - self._file):
                self.oldest = min(self.oldest, seq)
                self.last_time = max(self.last_time, self._reading()[1])
        self._doubt = False

    def _look(self, file):
        """Take a file's header, if it is whole."""
        try:
            with open(self._paths[file], "rb") as f:
                whole = f.readinto(self._buffer) == SIZE and self._whole()
        except OSError:
            return
        mark, life, turn, first, dropped, _ = struct.unpack_from(_HEADER, self._buffer)
        if whole and mark == _MARK:
            self._turns[file], self._firsts[file] = turn, first
            if turn == max(self._turns):
                self.life = life.rstrip(b"\0").decode()
                self.dropped = dropped

    def _mend(self, file):
        """A file without a whole header: by the other's, its records say where it stands; without either, they are dropped."""
        first = None
        count = 0
        try:
            for seq in self._seqs(file):
                first = seq if first is None else first
                count += 1
        except OSError:
            return
        other = 1 - file
        if self.life is None:
            self.dropped += count
        elif not count:
            self._damaged = (self._here - SIZE) // SIZE
        else:
            self._firsts[file] = first
            self._turns[file] = self._turns[other] + (1 if first > self._firsts[other] else -1)

    def _slots(self, file):
        """How many slots a file has after its header; a part of one is filled up."""
        with open(self._paths[file], "rb") as f:
            size = f.seek(0, 2)
        if size % SIZE:
            with open(self._paths[file], "ab") as f:
                f.write(b"\xff" * (SIZE - size % SIZE))
        return (size + SIZE - 1) // SIZE - 1

    def _seqs(self, file, start=SIZE):
        """The seqs of a file's whole records, in order, from a place on; the record is in the buffer. _here is how far it came, _end
        the place after the last whole record.
        """
        record = self._buffer
        with open(self._paths[file], "rb") as f:
            f.seek(start)
            self._here = self._end = start
            while f.readinto(record) == SIZE:
                self._here += SIZE
                if self._whole():
                    self._end = self._here
                    if record[26] & _NOTE:
                        self._note = struct.unpack_from("<I", record, 4)[0]
                    else:
                        yield record[0] | record[1] << 8 | record[2] << 16 | record[3] << 24

    def _reading(self):
        """The reading in the buffer."""
        seq, time_s, raw, t, b, h, battery, kind = struct.unpack_from(_RECORD, self._buffer)
        if kind & _FLOAT:
            raw = struct.unpack_from("<f", self._buffer, 8)[0]
        t = t if t == t else None
        b = b if b == b else None
        h = h if h == h else None
        return seq, time_s, raw, t, b, h, None if battery == _MISSING else battery / 1000, not kind & _RECKONED

    def _turn(self):
        """Begin the other file anew, and go on in it."""
        other = 1 - self._file
        lost = 0
        if self._turns[other] and self.oldest < self._firsts[self._file]:
            for seq in self._seqs(other):
                lost += seq >= self.oldest
        if lost:
            struct.pack_into(_RECORD, self._buffer, 0, self.next_seq, self.dropped + lost, 0, 0, 0, 0, 0, _NOTE)
            self._append(self._file, "ab")
            self.dropped += lost
            self._turns[other] = 0
        self._begin(other, self._turns[self._file] + 1)
        self.oldest = max(self.oldest, self._firsts[self._file])
        self._file = other
        self._used = 0

    def _begin(self, file, turn):
        struct.pack_into(_HEADER, self._buffer, 0, _MARK, self.life.encode(), turn, self.next_seq, self.dropped, 0)
        self._append(file, "wb")
        self._turns[file], self._firsts[file], self._from[file] = turn, self.next_seq, SIZE

    def _append(self, file, mode):
        """Put the buffer on the flash. Until that has ended well, what stands there is in doubt."""
        self._doubt = True
        struct.pack_into("<I", self._buffer, SIZE - 4, binascii.crc32(memoryview(self._buffer)[: SIZE - 4]) & 0xFFFFFFFF)
        with open(self._paths[file], mode) as f:
            f.write(self._buffer)
            f.flush()
        self._doubt = False

    def _whole(self):
        return binascii.crc32(self._buffer) & 0xFFFFFFFF == _WHOLE
