# Run by MicroPython's unix port (see test_spool.py): the spool on the real file systems of boards, over a block device in memory
# that dies after a given number of operations, for every such number; or only falters once; or counts what a reading wears.
# Prints a line of totals; raises where a promise is broken.
import sys

import vfs

from core_mp.spool import Spool

BLOCKS = {"VfsLfs2": (512, 64), "VfsFat": (512, 128)}  # size, how many
RECORDS = 5
STEPS = 34  # readings in a session: several turns, with receipts and without


class Flash:
    """A block device in memory. left: writes and erasures it will still do; torn: the last one gets half way; once: it goes on after."""

    def __init__(self, image, size, left=1 << 30, torn=False, once=False):
        self.image, self.size, self.left, self.torn, self.once = memoryview(image), size, left, torn, once
        self.done = self.erased = 0

    def readblocks(self, n, buf, off=0):
        at = n * self.size + off
        buf[:] = self.image[at : at + len(buf)]

    def writeblocks(self, n, buf, off=None):
        if off is None:
            off = 0
        at = n * self.size + off
        self._spend(at, buf)
        self.image[at : at + len(buf)] = buf

    def _spend(self, at, buf):
        if self.left <= 0:
            if self.left == 0 and self.torn:
                half = len(buf) // 2
                self.image[at : at + half] = memoryview(buf)[:half]
            self.left = 1 << 30 if self.once else -1
            raise OSError(5)
        self.left -= 1
        self.done += 1

    def ioctl(self, op, arg):
        if op == 4:
            return len(self.image) // self.size
        if op == 5:
            return self.size
        if op == 6:
            self._spend(0, b"")
            self.erased += 1
        return 0


def reading(n):
    return (1767225600 + 60 * n, 7000 + n if n % 3 else 0.25 * n, 9.5 if n % 2 else None, None, None, 3.61)


def session(flash, kind, life, acked, receipted):
    """Adds readings with receipts now and then, until the flash dies or the session ends."""
    vfs.mount(getattr(vfs, kind)(flash), "/f")
    spool = Spool("/f", RECORDS, life)
    for n in range(len(acked), STEPS):
        seq = spool.add(*reading(n))
        acked.append((seq,) + reading(n))
        if n in (8, 9, 24):
            spool.receipt(spool.life, seq - 2)
            receipted[0] = max(receipted[0], seq - 2)


def unmounted():
    try:
        vfs.umount("/f")
    except OSError:
        pass


def check(flash, kind, acked, receipted, tried):
    """After a cut: mount again, and hold what stands there against what add() returned."""
    vfs.mount(getattr(vfs, kind)(flash), "/f")
    spool = Spool("/f", RECORDS)
    held = list(spool.waiting())
    seqs = [r[0] for r in held]
    assert seqs == sorted(set(seqs)), seqs
    known = {r[0]: r for r in acked}
    extra = [r for r in held if r[0] not in known]
    assert len(extra) <= 1 and all(r[1:3] == reading(tried)[:2] for r in extra), extra
    for r in held:
        if r[0] in known:
            assert r[:7] == known[r[0]], (r, known[r[0]])
    if acked:
        assert spool.life == "test", spool.life
        assert spool.next_seq > acked[-1][0], (spool.next_seq, acked[-1])
        newest = [r[0] for r in acked[-RECORDS:]]
        assert all(seq in seqs for seq in newest), (newest, seqs)  # a file's length of readings is always there
        gone = [r[0] for r in acked if r[0] not in seqs]
        assert all(seq < min(newest) for seq in gone), (gone, newest)
        unreceipted = [seq for seq in gone if seq > receipted]
        assert len(unreceipted) == spool.dropped or (receipted >= 0 and len(unreceipted) <= spool.dropped), (
            unreceipted,
            spool.dropped,
            receipted,
            seqs,
            acked[-1][0],
        )
    seq = spool.add(*reading(99))
    assert seq not in known and (not extra or seq > extra[0][0])
    assert list(spool.waiting())[-1][:3] == (seq,) + reading(99)[:2], (
        seq,
        list(spool.waiting())[-1],
        held,
        spool._turns,
        spool._firsts,
        spool._file,
        spool._from,
    )
    return len(unreceipted) if acked else 0


def main(kind, torn):
    size, blocks = BLOCKS[kind]
    blank = bytearray(size * blocks)
    getattr(vfs, kind).mkfs(Flash(blank, size))
    counter = Flash(bytearray(blank), size)
    session(counter, kind, "test", [], [-1])
    vfs.umount("/f")
    cuts = counter.done
    for left in range(cuts):
        image = bytearray(blank)
        acked, receipted = [], [-1]
        try:
            session(Flash(image, size, left, torn), kind, "test", acked, receipted)
            raise RuntimeError("the cut did not come")
        except OSError:
            pass
        unmounted()
        check(Flash(image, size), kind, acked, receipted[0], len(acked))
        vfs.umount("/f")
    print(kind, "torn" if torn else "clean", cuts, "cuts,", STEPS, "readings")


def falter(kind):
    """The device fails once, at every possible operation, and works again: the same reading is added again until it is kept."""
    size, blocks = BLOCKS[kind]
    blank = bytearray(size * blocks)
    getattr(vfs, kind).mkfs(Flash(blank, size))
    retries = left = 0
    while True:
        flash = Flash(bytearray(blank), size, left, once=True)
        try:
            vfs.mount(getattr(vfs, kind)(flash), "/f")
            spool = Spool("/f", RECORDS * 10, "test")
        except OSError:  # not even begun
            left += 1
            unmounted()
            continue
        seqs = []
        for n in range(STEPS):
            for _ in range(3):
                try:
                    seqs.append(spool.add(*reading(n)))
                    break
                except OSError:
                    retries += 1
        assert seqs == sorted(set(seqs)) and len(seqs) == STEPS, seqs
        held = [(r[0],) + r[1:3] for r in list(spool.waiting())]
        assert held == [(seq,) + reading(n)[:2] for n, seq in enumerate(seqs)], (left, held)
        vfs.umount("/f")
        if flash.left < 1 << 29 and flash.left > 0:
            break  # the session ended before the fault came
        left += 1
    print(kind, "faltered at", left, "operations,", retries, "readings added again")


def wear(kind):
    """What a reading costs the flash, over many turns of files of 200."""
    size, blocks = BLOCKS[kind]
    image = bytearray(size * blocks * 4)
    getattr(vfs, kind).mkfs(Flash(image, size))
    flash = Flash(image, size)
    vfs.mount(getattr(vfs, kind)(flash), "/f")
    spool = Spool("/f", 200, "test")
    before, erased = flash.done, flash.erased
    for n in range(2000):
        spool.receipt("test", spool.add(*reading(n)))
    print(
        kind,
        "writes and erasures a reading: %.2f, of them erasures: %.3f"
        % ((flash.done - before) / 2000, (flash.erased - erased) / 2000),
    )


if sys.argv[2] == "falter":
    falter(sys.argv[1])
elif sys.argv[2] == "wear":
    wear(sys.argv[1])
else:
    main(sys.argv[1], sys.argv[2] == "torn")
