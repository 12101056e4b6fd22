"""An emulated 16 KB microcontroller board that runs core_mp: Debian's QEMU with the board's own MicroPython firmware.

run({"t.py": source, "table.bin": bytes}) -> what the script printed. Nothing is typed into its console: the files are laid
into the image of its flash, and the firmware starts the stored script, which imports t.py. `-icount` makes 64 ns of the
board's microsecond clock one instruction, so that ticks count instructions, whatever else the machine does.
"""

import ast
import io
import struct
import subprocess
import tempfile
import tokenize
from pathlib import Path

FIRMWARE = Path("/usr/share/firmware-microbit-micropython/firmware.hex")
CORE = Path(__file__).parent.parent / "core_mp"
FILES_AT, SCRIPT_AT = 0x3BC00, 0x3E000
CHUNK, CHUNKS = 128, 56
NS_PER_INSTRUCTION = 64
END = "\x04"
WORDS = (tokenize.NAME, tokenize.NUMBER, tokenize.STRING)
SCRIPT = """try:
%s
 print('\\x04')
except BaseException as error:
 import sys
 sys.print_exception(error)
import microbit
microbit.reset()
"""


def lean(source):
    """The same program without docstrings and comments: its 16 KB board compiles from source and has no room for them."""
    tree = ast.parse(source)
    for node in ast.walk(tree):
        body = getattr(node, "body", None)
        if isinstance(body, list) and body and isinstance(body[0], ast.Expr) and isinstance(body[0].value, ast.Constant):
            body[:] = body[1:] or [ast.Pass()]
    out = []
    last = tokenize.NEWLINE
    for token in tokenize.generate_tokens(io.StringIO(ast.unparse(tree)).readline):
        if token.type == tokenize.INDENT or token.type == tokenize.NL:
            continue
        if last == tokenize.NEWLINE and token.type != tokenize.DEDENT:
            out.append(" " * (token.start[1] // 4))
        elif last in WORDS and token.type in WORDS:
            out.append(" ")
        out.append(token.string)
        last = tokenize.NEWLINE if token.type == tokenize.DEDENT else token.type
    return "".join(out)


def core(*names):
    """core_mp's modules as the board's files."""
    return {name + ".py": lean((CORE / (name + ".py")).read_text()).encode() for name in names}


def run(script, files, timeout_s=60):
    """What the script printed on the board. RuntimeError with its traceback if it raised."""
    with tempfile.TemporaryDirectory() as folder:
        script = (SCRIPT % "\n".join(" " + line for line in lean(script).splitlines())).encode()
        images = {FILES_AT: _file_system(files), SCRIPT_AT: b"MP" + struct.pack("<H", len(script)) + script}
        command = ["qemu-system-arm", "-M", "microbit", "-display", "none", "-monitor", "none", "-serial", "stdio", "-no-reboot",
                   "-icount", "shift=6,sleep=off", "-device", "loader,file=%s" % FIRMWARE]  # fmt: skip
        for address, image in images.items():
            path = Path(folder, "%x" % address)
            path.write_bytes(image)
            command += ["-device", "loader,file=%s,addr=%#x,force-raw=on" % (path, address)]
        done = subprocess.run(command, stdin=subprocess.DEVNULL, capture_output=True, timeout=timeout_s)
    printed = done.stdout.decode("ascii", "replace").replace("\r", "")
    if END not in printed:
        raise RuntimeError("the board's script failed:\n" + printed + done.stderr.decode())
    return printed[: printed.index(END)]


def _file_system(files):
    image = bytearray(b"\xff" * (SCRIPT_AT - FILES_AT))
    image[-0x400] = 0xFD
    chunk = 1
    for name, data in files.items():
        name = name.encode()
        data = bytes([0, len(name)]) + name + data
        if len(data) % 126 == 0:
            data += b"\n"
        data = bytes([len(data) % 126]) + data[1:]
        for start in range(0, len(data), 126):
            at = (chunk - 1) * CHUNK
            piece = data[start : start + 126]
            image[at] = chunk - 1 if start else 0xFE
            image[at + 1 : at + 1 + len(piece)] = piece
            image[at + 127] = chunk + 1 if start + 126 < len(data) else 0xFF
            chunk += 1
    if chunk - 1 > CHUNKS:
        raise RuntimeError("the board's flash holds %d chunks of 126 bytes, these files need %d" % (CHUNKS, chunk - 1))
    return bytes(image)
