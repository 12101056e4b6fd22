"""The NTP question and its answers, good and bad, against a server of RFC 4330's layout; PyPI's ntplib asks the same server."""

from __future__ import annotations

import contextlib
import socket
import struct
import threading
from collections.abc import Callable, Iterator

import ntplib
import pytest
from ports import on_unix

from core_mp.ntp import ask

NOW = 1767225600


@contextlib.contextmanager
def server(change: Callable[[bytearray], None] = lambda answer: None, now: float = NOW) -> Iterator[int]:
    """An NTP server on loopback; its port. change: what it does to its answers."""
    with socket.socket(socket.AF_INET, socket.SOCK_DGRAM) as s:
        s.bind(("127.0.0.1", 0))
        s.settimeout(5)

        def serve() -> None:
            with contextlib.suppress(OSError):
                while True:
                    question, asker = s.recvfrom(512)
                    stamp = struct.pack(">Q", round((now + 2208988800) * 2**32) % 2**64)
                    answer = bytearray(
                        struct.pack(">BBbb3I", 0x24, 2, 6, -20, 0, 0, 0x7F000001) + stamp + question[40:48] + stamp + stamp
                    )
                    change(answer)
                    s.sendto(answer, asker)

        threading.Thread(target=serve, daemon=True).start()
        yield s.getsockname()[1]


def test_the_time_is_told_and_a_reference_client_hears_the_same() -> None:
    with server(now=NOW + 0.25) as port:
        assert ask("127.0.0.1", port) == NOW
        assert round(ntplib.NTPClient().request("127.0.0.1", version=4, port=port).tx_time, 2) == NOW + 0.25
        program = f"from core_mp.ntp import ask\nprint(ask('127.0.0.1', {port}))"
        assert on_unix("-c", program).strip() == str(NOW)
    with server(now=NOW + 0.75) as port:
        assert ask("127.0.0.1", port) == NOW + 1


def test_the_count_goes_on_after_2036() -> None:
    with server(now=2_500_000_000) as port:
        assert ask("127.0.0.1", port) == 2_500_000_000


@pytest.mark.parametrize(
    "change",
    [
        lambda answer: answer.__setitem__(0, 0xE4),  # leap 3: its clock is not set
        lambda answer: answer.__setitem__(0, 0x23),  # a client's packet
        lambda answer: answer.__setitem__(1, 0),  # a kiss of death
        lambda answer: answer.__setitem__(1, 16),  # not synchronized
        lambda answer: answer.__setitem__(24, answer[24] ^ 1),  # an answer to another question
        lambda answer: answer.__delitem__(slice(40, None)),  # cut short
    ],
)
def test_an_answer_that_may_not_be_believed_is_an_error(change: Callable[[bytearray], None]) -> None:
    with server(change) as port, pytest.raises(OSError, match="ntp"):
        ask("127.0.0.1", port)


def test_silence_is_an_error_within_the_time_stated() -> None:
    with socket.socket(socket.AF_INET, socket.SOCK_DGRAM) as silent:
        silent.bind(("127.0.0.1", 0))
        with pytest.raises(OSError):
            ask("127.0.0.1", silent.getsockname()[1], timeout_s=0.2)
