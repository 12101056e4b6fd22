"""Run a program that ends with whoever started it, however that ends: python leash.py FOLDER PROGRAM ARGUMENT...

Standard input is the leash: it closes when the starter lets go of it, or dies. Then the program is ended, and the folder
removed. Imports nothing of levelbook, so that it starts at once.
"""

import os
import shutil
import subprocess
import sys
import threading
import time

PATIENCE_S = 5.0


def main() -> None:
    """Start the program, wait for its end or the leash's, and pass its status on."""
    child = subprocess.Popen(sys.argv[2:], stdin=subprocess.DEVNULL)
    threading.Thread(target=_watch, args=(child,), daemon=True).start()
    status = child.wait()
    shutil.rmtree(sys.argv[1], ignore_errors=True)
    os._exit(abs(status))  # not held up by the thread that waits at standard input


def _watch(child: "subprocess.Popen[bytes]") -> None:
    os.read(0, 1)
    child.terminate()
    time.sleep(PATIENCE_S)
    child.kill()


if __name__ == "__main__":
    main()
