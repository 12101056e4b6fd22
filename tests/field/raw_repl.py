# Run by MicroPython's unix port (see test_flash.py): a board's serial port. Its file system is LittleFS over an image file; it speaks
# the raw REPL on standard input and output, as boards do, so that mpremote finds a board. Argument: the image.
import os
import sys

import vfs

SIZE = 4096


class Flash:
    def __init__(self, path):
        self.f = open(path, "r+b")
        self.blocks = self.f.seek(0, 2) // SIZE

    def readblocks(self, n, buf, off=0):
        self.f.seek(n * SIZE + off)
        self.f.readinto(buf)

    def writeblocks(self, n, buf, off=0):
        self.f.seek(n * SIZE + off)
        self.f.write(buf)
        self.f.flush()

    def ioctl(self, op, arg):
        return {4: self.blocks, 5: SIZE}.get(op, 0)


def say(data):
    out.write(data)


inp, out = sys.stdin.buffer, sys.stdout.buffer
flash = Flash(sys.argv[1])
try:
    board = vfs.VfsLfs2(flash)
except OSError:
    vfs.VfsLfs2.mkfs(flash)
    board = vfs.VfsLfs2(flash)
vfs.umount("/")
vfs.mount(board, "/")
os.chdir("/")
names = {}
raw, code = False, b""
while True:
    c = inp.read(1)
    if not c or c == b"\x18":
        break
    if c == b"\x01":
        raw, code = True, b""
        say(b"raw REPL; CTRL-B to exit\r\n>")
    elif c == b"\x02":
        raw = False
        say(b"\r\nMicroPython\r\n>>> ")
    elif c == b"\x03" or not raw:
        code = b""
    elif c == b"\x05" and not code:
        inp.read(2)
        say(b"R\x00")  # no raw paste
    elif c != b"\x04":
        code += c
    elif not code:
        names = {}
        say(b"OK\r\nMPY: soft reboot\r\nraw REPL; CTRL-B to exit\r\n>")
    else:
        say(b"OK")
        wrong = b""
        try:
            exec(code.decode(), names)
        except BaseException as error:
            wrong = repr(error).encode()
            if isinstance(error, OSError):
                wrong = b"OSError: %d" % error.errno
        code = b""
        say(b"\x04" + wrong + b"\x04>")
