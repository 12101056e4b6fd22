"""What cannot be taken, kept aside in a file beside the book: topic, time, reason and the payload as it came."""

from __future__ import annotations

import base64
import json
import os
import time
from collections.abc import Callable
from pathlib import Path

LONGEST = 300  # letters of a line for people


class Quarantine:
    """A file of one JSON object a line. say: where a line for people goes. kept: payloads put here so far."""

    def __init__(self, path: Path, say: Callable[[str], None]) -> None:
        self.path = path
        self.kept = 0
        self._say = say

    def keep(self, topic: str, payload: bytes, reason: str) -> None:
        """Keep a payload, on the disk when this returns, and say so in one line. OSError."""
        line = {"time": time.strftime("%Y-%m-%dT%H:%M:%SZ", time.gmtime()), "topic": topic, "reason": reason} | _text(payload)
        with open(self.path, "a", encoding="ascii") as file:
            file.write(json.dumps(line) + "\n")
            file.flush()
            os.fsync(file.fileno())
        self.kept += 1
        self._say(one_line(f"{topic}: quarantined: {reason}"))


def one_line(text: str) -> str:
    """Text from outside as one line of a log, with what could act on a terminal escaped.

    >>> print(one_line("north\\n\\x1b[2J"))
    north\\n\\x1b[2J
    """
    plain = "".join(letter if letter.isprintable() else letter.encode("unicode_escape").decode() for letter in text[:LONGEST])
    return plain if len(text) <= LONGEST else plain + " ..."


def _text(payload: bytes) -> dict[str, str]:
    try:
        return {"payload": payload.decode("utf-8")}
    except UnicodeDecodeError:
        return {"payload_base64": base64.b64encode(payload).decode()}
